"""Figures: drawn for what the data allow, the same bytes each time, without pyplot."""

import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scanward.cases import charts, plot
from scanward.cases.figures import draw_all
from scanward.cases.judge import broadside_index
from synthetic import sheet_result


@pytest.fixture(scope="module")
def drawings():
    return {drawing.name: drawing for drawing in draw_all(sheet_result(ports=2, loss=3.0))}


def test_every_figure_is_drawn_with_words(drawings):
    assert set(drawings) == {
        "reflection-cuts", "scan-maps", "band", "reflection-chart", "gain-cuts", "cross-polar-cuts",
        "power-cuts", "lattice", "cell",
    }  # fmt: skip
    for drawing in drawings.values():
        head = drawing.data[:200]
        assert head.startswith(b"\x89PNG") if drawing.suffix == ".png" else b"<?xml" in head
        assert drawing.caption and drawing.words


def test_figures_are_reproducible(drawings):
    again = charts.reflection_chart(sheet_result(ports=2, loss=3.0))
    assert again.data == drawings["reflection-chart"].data


def test_without_cuts_map_or_band_the_rest_is_still_drawn():
    result = sheet_result(frequencies=1)
    empty = np.zeros(0)
    scan = replace(
        result.job.scan,
        planes=(),
        plane_theta=(),
        map_u=empty,
        map_v=empty,
        map_index=np.zeros((0, 0), dtype=int),
    )
    bare = replace(result, job=replace(result.job, scan=scan))
    assert [drawing.name for drawing in draw_all(bare)] == ["reflection-chart", "lattice", "cell"]


def test_pyplot_is_never_imported():
    script = (
        "import sys\n"
        f"sys.path.insert(0, {str(Path(__file__).parent)!r})\n"
        "from synthetic import sheet_result\n"
        "import scanward.cases.figures\n"
        "from scanward.cases.drawing import cell_drawing\n"
        "assert cell_drawing(sheet_result(frequencies=1).job.cell).data\n"
        "sys.exit('matplotlib.pyplot' in sys.modules)\n"
    )
    assert subprocess.run([sys.executable, "-c", script]).returncode == 0


def test_labels_are_moved_apart_and_stay_near():
    placed = plot.spread(np.array([0.1, 0.11, 0.12, 0.8]), 0.05)
    assert np.all(np.diff(placed) >= 0.05 - 1e-12)
    assert placed[1] == pytest.approx(0.11) and placed[3] == pytest.approx(0.8)


def test_chosen_frequencies_hold_the_ends_and_the_worst():
    result = sheet_result(frequencies=31)
    result.sweep.scattering[17, 5] = 0.999
    chosen = plot.chosen_frequencies(result)
    assert {0, 17, 30} <= set(chosen.tolist()) and len(chosen) <= 6


@pytest.mark.parametrize("z", [0.5, 1 + 1j, 0.2 - 2j, 5j])
def test_chart_transform_is_the_reflection_coefficient(z):
    gamma = charts._gamma(z)
    assert (1 + gamma) / (1 - gamma) == pytest.approx(z)


def test_angle_ticks_are_round():
    assert plot.angle_ticks(-60, 60, 4).tolist() == [-60, -30, 0, 30, 60]


def test_broadside_is_found():
    result = sheet_result()
    assert broadside_index(result.sweep.scan) == 0
