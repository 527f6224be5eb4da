"""Layers from the case file to the report: the stack, element sizes, surface waves, drawings and losses."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from bad_case_layers import PRINTED
from scanward.cases.command import main
from scanward.cases.drawing import lattice_diagram
from scanward.cases.layers import layer_rows
from scanward.cases.read import parse_case
from scanward.cases.report import report_text
from scanward.cases.surface_waves import surface_waves, wave_rows
from scanward.geometry.stack import Layer, Stack
from synthetic import sheet_result

PROBE = """[[conductor]]
kind = "wire"
name = "probe"
points = [[0, "8 mm", 0], [0, "8 mm", "6 mm"]]
radius = "0.2 mm"
"""


@pytest.fixture(scope="module")
def job():
    return parse_case(PRINTED.replace('thickness = "4 mm"', 'thickness = "8 mm"') + PROBE)  # film clear of the probe


def test_stack_is_what_the_file_says(job):
    stack = job.cell.stack
    assert stack.ground and job.cell.ground
    np.testing.assert_allclose(stack.interfaces, [0, 3.2e-3, 11.2e-3])
    assert [layer.name for layer in stack.layers] == ["base", "foam"]
    assert stack.permittivity[1] == pytest.approx(2.2 * (1 - 0.001j))
    (film,) = stack.sheets
    assert (film.height, film.impedance) == (pytest.approx(11.2e-3), -200j)


def test_stack_goes_with_every_mesh_and_the_resolved_text(job):
    assert job.remesh(1.5).stack == job.cell.stack
    again = parse_case(job.text)
    assert again.text == job.text
    assert again.cell.stack == job.cell.stack
    np.testing.assert_array_equal(again.cell.mesh.points, job.cell.mesh.points)


def test_without_layers_there_is_no_stack():
    text = PRINTED[: PRINTED.index("[[layer]]")] + PRINTED[PRINTED.index("[[conductor]]") :]
    assert parse_case(text).cell.stack is None


def test_wires_are_cut_at_interfaces(job):
    mesh = job.cell.mesh
    ends = mesh.points[mesh.segments[mesh.segment_conductor == mesh.names.index("probe")]][:, :, 2]
    assert np.isclose(ends, 3.2e-3).any()
    assert not ((ends.min(axis=1) < 3.2e-3 - 1e-9) & (ends.max(axis=1) > 3.2e-3 + 1e-9)).any()


def test_elements_are_shorter_in_dense_layers(job):
    """By the root of the mean permittivity beside the dipole (2.2 below, 1.06 above); not if a size is given."""
    thick = parse_case(PRINTED.replace("permittivity = 2.2", "permittivity = 9.0"))
    assert len(thick.cell.mesh.triangles) > 1.3 * (job.cell.mesh.triangle_conductor == 0).sum()
    size = '[mesh]\nelement_size = "2 mm"\n'
    given = [parse_case(text + size) for text in (PRINTED, PRINTED.replace("= 2.2", "= 9.0"))]
    assert len(given[0].cell.mesh.triangles) == len(given[1].cell.mesh.triangles)


def slab(permittivity: float, thickness: float, period: float):
    """A case whose stack and lattice are given in wavelengths at its top frequency, 5.8 GHz."""
    job = parse_case(PRINTED)
    wavelength = 299792458.0 / job.frequency[-1]
    stack = Stack((Layer(thickness * wavelength, permittivity),), True)
    lattice = dataclasses.replace(
        job.cell.lattice, a=np.array([period * wavelength, 0.0]), b=np.array([0.0, period * wavelength])
    )
    return dataclasses.replace(job, cell=dataclasses.replace(job.cell, stack=stack, lattice=lattice))


@pytest.mark.parametrize(
    ("permittivity", "thickness", "beta", "half", "wide"),
    [(2.55, 0.19, 1.28249, 45.85, 32.39), (12.8, 0.05, 1.11081, 62.77, 45.02), (2.2, 0.05, 1.01499, 80.07, 53.44)],
)
def test_surface_waves_and_first_angles(permittivity, thickness, beta, half, wide):
    """CLOSED (checks.md section 2): TM0 of grounded slabs, E-plane angles for periods of 0.50 and 0.55."""
    for period, angle in ((0.5, half), (0.55, wide)):
        (wave,) = [w for w in surface_waves(slab(permittivity, thickness, period)) if w.frequency == 5.8e9]
        assert wave.wave.name == "TM0"
        assert wave.wave.beta.real == pytest.approx(beta, abs=1e-5)
        assert np.degrees(wave.by_plane[0]) == pytest.approx(angle, abs=0.01)
        assert np.degrees(wave.nearest) == pytest.approx(angle, abs=0.01)


def test_surface_wave_that_reaches_no_direction():
    job = slab(2.55, 0.05, 0.4)
    assert all(np.isinf(w.nearest) for w in surface_waves(job))
    assert all(row[-1] == "never" for row in wave_rows(job))


def test_air_has_no_surface_wave():
    assert surface_waves(slab(1.0, 0.1, 0.5)) == []


def test_check_tells_the_stack_and_its_waves(tmp_path, capsys, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("COLUMNS", "200")
    path = tmp_path / "printed.toml"
    path.write_text(PRINTED)
    assert main(["check", str(path)]) == 0
    told = capsys.readouterr().out
    for part in ("Stack, top to bottom", "base", "permittivity 2.2", "film", "Surface waves of the bare stack", "TM0"):
        assert part in told


def test_diagram_names_the_circles():
    words = lattice_diagram(slab(2.55, 0.19, 0.5))
    assert b"TM0" in words.data or b"stroke-dasharray" in words.data
    assert "surface wave" in words.caption
    assert "surface wave" not in lattice_diagram(slab(1.0, 0.1, 0.5)).caption


def test_report_shows_layers_waves_and_losses():
    result = sheet_result(loss=2.0)
    stack = Stack((Layer(3.2e-3, 2.55, 0.002, name="laminate"),), True)
    cell = dataclasses.replace(result.job.cell, ground=True, stack=stack)
    result = dataclasses.replace(result, job=dataclasses.replace(result.job, cell=cell))
    text = report_text(result, ())
    for part in (
        "Layer or sheet, top to bottom",
        "laminate",
        "tan δ = 0.002",
        "Surface waves of the bare stack",
        "TM0",
    ):
        assert part in text
    assert "Where power is lost" in text
    assert layer_rows(stack)[0][1] == "0 to 3.2 mm"
