"""Surface waves as a user is told of them: directions, words, circles in the figures; and the stack in section."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import scanward.cases
from bad_case_layers import PRINTED
from scanward.cases import cuts, drawing, stack_drawing, surface_waves
from scanward.cases.figures import draw_all
from scanward.cases.read import parse_case, read_case
from scanward.cases.report import report_text
from scanward.geometry.lattice import Lattice
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from scanward.solver.guided_waves import circles_hit
from scanward.solver.pattern import LIGHT_SPEED
from synthetic import sheet_result

FOLDER = Path(scanward.cases.__file__).parent
SLAB = Stack((Layer(14e-3, 2.55, 1e-3, name="slab"),), True)  # under the synthetic strip


def at_design_frequency(name):
    job = read_case(FOLDER / f"{name}.toml")
    return replace(job, frequency=np.array([5.4e9]))


def with_stack(stack, **changes):
    result = sheet_result(**changes)
    return replace(result, job=replace(result.job, cell=replace(result.job.cell, stack=stack)))


def test_the_blind_case_is_told_where():
    """CLOSED (checks.md section 2): beta/k = 1.28249, met at 45.85 deg in both principal cuts, not in the diagonal."""
    (item,) = surface_waves.surface_waves(at_design_frequency("printed_dipole_blind"))
    assert item.wave.name == "TM0" and item.wave.beta.real == pytest.approx(1.28249, abs=5e-6)
    assert np.degrees(item.by_plane) == pytest.approx([45.85, np.inf, 45.85], abs=0.005)
    assert np.degrees(item.nearest) == pytest.approx(45.85, abs=0.005)
    assert item.azimuth == 0 and item.loss == 0
    told = surface_waves.wave_summary(at_design_frequency("printed_dipole_blind"))
    assert "TM0: first met by a Floquet wave at theta 45.85 deg, phi 0 deg (inside the scan cone)" in told


@pytest.mark.parametrize("name", ["printed_dipole_cured", "printed_dipole_cover"])
def test_the_remedies_keep_the_surface_wave_out_of_visible_space(name):
    job = read_case(FOLDER / f"{name}.toml")
    assert all(np.isinf(item.nearest) for item in surface_waves.surface_waves(job))
    assert surface_waves.wave_summary(job) == "TM0: met in no scan direction"
    assert all(row[-1] == "never" for row in surface_waves.wave_rows(job))


def test_the_nearest_direction_is_the_least_over_azimuth():
    job = with_stack(SLAB).job
    lattice = Lattice(np.array([29e-3, 3e-3]), np.array([11e-3, 27e-3]))
    job = replace(job, cell=replace(job.cell, lattice=lattice))
    items = surface_waves.surface_waves(job)
    assert sum(np.isfinite(item.nearest) for item in items) >= 2
    for item in items:
        k = 2 * np.pi * item.frequency / LIGHT_SPEED
        phi = np.radians(np.arange(0, 360, 0.5))
        hits = [[hit.theta for hit in circles_hit([item.wave], lattice, k, p)] for p in phi]
        least = np.array([min(h, default=np.inf) for h in hits])
        assert item.nearest <= least.min() + 1e-9
        assert item.nearest == pytest.approx(least.min(), abs=1e-4)
        if np.isfinite(item.nearest):
            away = np.abs((phi[least.argmin()] - item.azimuth + np.pi / 2) % np.pi - np.pi / 2)
            assert away < np.radians(0.5)


def test_attenuation_is_that_of_the_lossy_slab():
    """CLOSED: the lossy root satisfies er sqrt(b^2-1) cos(kd q) = q sin(kd q), q = sqrt(er - b^2)."""
    for item in surface_waves.surface_waves(with_stack(SLAB).job):
        if item.wave.name != "TM0":
            continue
        b, er = item.wave.beta, 2.55 * (1 - 1e-3j)
        q, kd = np.sqrt(er - b * b), 2 * np.pi * item.frequency / LIGHT_SPEED * 14e-3
        assert abs(er * np.sqrt(b * b - 1) * np.cos(kd * q) - q * np.sin(kd * q)) < 1e-9
        assert item.loss == pytest.approx(-20 * np.log10(np.exp(2 * np.pi * b.imag)), rel=1e-9) and item.loss > 0


def test_air_has_none_and_an_artificial_layer_binds_none():
    assert surface_waves.surface_waves(sheet_result().job) == [] and surface_waves.trouble(sheet_result().job) == ""
    job = with_stack(Stack((Layer(14e-3, 0.5, artificial=True),), True)).job
    assert surface_waves.wave_summary(job) == "The bare stack carries no surface wave."


def test_a_search_that_fails_costs_neither_check_nor_report(monkeypatch):
    def lost(*_):
        raise RuntimeError("2 TM surface waves were found, but 3 are counted")

    monkeypatch.setattr(surface_waves, "guided_waves", lost)
    result = with_stack(Stack((Layer(14e-3, 3.21),), True))
    text = report_text(result, draw_all(result))
    assert "surface waves could not be found (5.2 GHz: 2 TM surface waves were found, but 3 are counted" in text


def test_the_report_tells_of_layers_and_surface_waves():
    result = with_stack(SLAB)
    text = report_text(result, draw_all(result))
    for words in ("ground | slab 14 mm (permittivity 2.55) | air", "Surface waves of the bare stack", "TM0",
                  "Layer or sheet, top to bottom", "First met over all phi", "dB per wavelength"):  # fmt: skip
        assert words in text
    assert text.count("data:image/") == 10
    bare = report_text(sheet_result(), ())
    assert "Surface waves" not in bare and "Layer or sheet" not in bare and "expected to fail" not in bare
    assert "takes it for granted" in text and "takes it for granted" not in bare
    failing = replace(result, job=replace(result.job, expected_to_fail=True))
    assert "its limits are expected to fail" in report_text(failing, ())


class Paper:
    """Stands for the axes of a figure and keeps what is drawn."""

    def __init__(self):
        self.lines, self.notes = [], []

    def plot(self, x, y, *_, **style):
        self.lines.append((np.asarray(x), np.asarray(y), style))

    def annotate(self, text, spot, **_):
        self.notes.append((text, spot))


def test_circles_are_those_of_the_directions_told():
    job = at_design_frequency("printed_dipole_blind")
    paper, k = Paper(), 2 * np.pi * 5.4e9 / LIGHT_SPEED
    drawing._surface_circles(paper, job, k, 2.3)
    least = [np.hypot(x, y).min() for x, y, _ in paper.lines]
    seen = [style["linewidth"] > 1 for _, _, style in paper.lines]
    assert sum(seen) == 4 and len(seen) == 8  # the lobes beside, and those on the diagonals
    assert min(least) == pytest.approx(np.sin(np.radians(45.85)), abs=1e-4)
    assert [(value < 1) for value in least] == seen
    assert [text for text, _ in paper.notes] == ["TM0"] * 4


def test_the_section_keeps_the_order_of_heights_and_thickens_thin_layers():
    thin = Stack((Layer(0.1e-3, 3.0, name="glue"), Layer(10e-3, 1.05, name="foam")), True)
    z = np.array([0.1e-3, 5e-3])
    scale = stack_drawing._Heights(thin, z)
    heights = np.array([-1e-3, 0, 0.05e-3, 0.1e-3, 5e-3, 10.1e-3, 11e-3])
    drawn = scale(heights)
    assert np.all(np.diff(drawn[1:]) > 0) and drawn[1] == 0 and drawn[-1] <= 1
    assert scale.is_bent and drawn[3] > 0.04
    assert not stack_drawing._Heights(SLAB, z).is_bent


def test_the_section_is_drawn_where_there_are_layers():
    assert stack_drawing.stack_drawing(sheet_result().job.cell) is None
    film = SheetImpedance(20e-3, 30 - 200j, "film")
    stack = Stack((Layer(14e-3, 2.55, name="slab"), Layer(0.05e-3, 4.0), Layer(9e-3, 1.05, 0.01)), True, (film,))
    drawn = stack_drawing.stack_drawing(with_stack(stack).job.cell)
    assert b"<?xml" in drawn.data[:100] and "slab, layer 2, layer 3" in drawn.words and "thicker" in drawn.caption
    below = parse_case(PRINTED.replace("ground = true", "").replace('"3.2 mm"]', '"-4 mm"]'))
    assert stack_drawing.stack_drawing(below.cell).data == stack_drawing.stack_drawing(below.cell).data


def test_power_lost_is_told_by_absorber():
    result = sheet_result(loss=3.0)
    sweep = result.sweep
    share = np.array([0.1, 0.4, 0.2, 0.05, 0.25])[:, None, None]
    names = ("arm", "base", "foam", "film", "cover")
    result = replace(result, sweep=replace(sweep, loss=sweep.loss * share, loss_names=names))
    parts = cuts._absorbed(result)
    assert [name for name, _, _ in parts] == [
        "absorbed in base", "absorbed in cover", "absorbed in foam", "absorbed elsewhere",
    ]  # fmt: skip
    np.testing.assert_allclose(sum(values for _, values, _ in parts), result.response.absorbed.sum(-1), rtol=1e-12)
    assert cuts._absorbed(replace(result, sweep=replace(sweep, loss=sweep.loss[:, :, :0], loss_names=()))) == []
