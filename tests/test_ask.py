"""What may be asked of a result, what error its answers state, and what is refused."""

from __future__ import annotations

import csv
import dataclasses
import io
from pathlib import Path

import numpy as np
import pytest
import scanward
from scanward.cases import command
from scanward.cases.ask import active_error, answer_text, answers, ask
from scanward.cases.read import read_case
from scanward.cases.reduced_engine import certificate_note, drive_ratios
from scanward.cases.result import Accuracy, Provenance, Result
from scanward.cases.store import load_result, save_result
from scanward.geometry.errors import InputError
from scanward.solver.greedy import build_reduced
from scanward.solver.reduced_sweep import reduced_sweep
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver, solve_sweep

DRIVES = (1.0 + 0j, -0.05j)
PLACE = "5.31 GHz, 30 deg, 20 deg"
SOMEWHERE = ScanPoints.from_cosines(np.array([0.3]), np.array([0.2]))


@pytest.fixture(scope="module")
def path(tmp_path_factory) -> Path:
    """Result file of crossed dipoles of which one is driven weakly, with lossy rods, and without a survey."""
    job = read_case(scanward.find_case("crossed_dipoles_circular"))
    mesh = job.cell.mesh
    lossy = tuple(dataclasses.replace(one, conductivity=2e5) for one in mesh.materials)
    ports = tuple(dataclasses.replace(p, drive=a) for p, a in zip(job.cell.ports, DRIVES, strict=True))
    cell = dataclasses.replace(job.cell, ports=ports, mesh=dataclasses.replace(mesh, materials=lossy))
    job = dataclasses.replace(job, cell=cell)
    band = (float(job.frequency[0]), float(job.frequency[-1]))
    model, certificate = build_reduced(CellSolver(cell, band[1], job.tolerance), band, error=1e-3)
    sweep = reduced_sweep(model, job.frequency, job.scan.points)
    result = Result(job, sweep, Accuracy(), Provenance({}), certificate=certificate, stored=model)
    file = tmp_path_factory.mktemp("asked") / "result.nc"
    save_result(file, result)
    return file


@pytest.fixture(scope="module")
def result(path) -> Result:
    return load_result(path)


def test_every_driven_port_is_answered_as_the_direct_solver_does(result):
    """SECOND METHOD: full solution of the same mesh; power is accounted for."""
    theta, phi = np.radians([30.0, 20.0])
    rows = answers(result, [(5.31e9, theta, phi)])
    cell = result.job.cell
    scan = ScanPoints.from_angles(np.array([theta]), np.array([phi]))
    true = solve_sweep(cell, 5.31e9, scan).scattering[0, 0] @ np.array(DRIVES) / np.array(DRIVES)
    assert [row["port"] for row in rows] == ["x", "y"]
    for row, gamma, error in zip(rows, true, active_error(result), strict=True):
        assert abs(row["reflection"] - gamma) < row["error"] == error
        assert row["impedance"] == pytest.approx(130 * (1 + row["reflection"]) / (1 - row["reflection"]))
        lost = row["absorbed"]
        assert set(lost) == {"along x", "along y"} and min(lost.values()) > 0
        total = row["returned"] + row["radiated"] + row["lobes"] + sum(lost.values())
        assert total == pytest.approx(1.0, abs=1e-5)
        assert "along x" in answer_text(row)
    (only,) = answers(result, [(5.31e9, theta, phi)], "y")
    assert only == rows[1]


def test_error_grows_with_the_inequality_of_the_drives(result):
    """CLOSED: Gamma_i = sum_j S_ij a_j / a_i, so that row sums of |dS| bound it times max |a| / |a_i|; the bound is
    reached by the worst possible dS."""
    np.testing.assert_allclose(active_error(result) / result.certificate.stated, [1.0, 20.0])
    change = np.array([[0.0, 1e-4], [1e-4, 0.0]])  # row sums 1e-4
    drive = np.array(DRIVES)
    worst = np.abs(change @ drive / drive)
    assert worst[1] == pytest.approx(1e-4 * drive_ratios(DRIVES)[1])
    assert worst[0] <= 1e-4 * drive_ratios(DRIVES)[0]
    idle = drive_ratios((2.0 + 0j, 0j))
    assert idle[0] == 1.0 and np.isnan(idle[1])
    assert f"counted with, times 20 for the largest drive over the smallest, {20 * result.certificate.stated:.1e}" in (
        certificate_note(result.certificate, 20.0)
    )
    assert f"counted with {result.certificate.stated:.1e}." in certificate_note(result.certificate)


@pytest.mark.parametrize(
    ("frequency", "u", "words"),
    [
        (5.3e9, 1.01, r"u = 1\.01, v = 0 lies outside .* up to 1"),
        (5.3e9, np.nan, "u = nan"),
        (5.7e9, 0.1, r"5\.7 GHz lies outside .* 5\.2 to 5\.6 GHz"),
        (np.nan, 0.1, "nan GHz lies outside"),
        ([], 0.1, "no frequency"),
        (5.3e9, [], "no direction"),
    ],
)
def test_what_was_not_certified_is_refused(result, frequency, u, words):
    with pytest.raises(InputError, match=words):
        ask(result, frequency, ScanPoints.from_cosines(u, 0.0))


def test_ends_of_band_and_horizon_are_inside(result):
    scan = ScanPoints.from_cosines(np.array([0.0, np.cos(0.3)]), np.array([0.0, np.sin(0.3)]))
    assert np.isfinite(ask(result, result.job.frequency[[0, -1]], scan).scattering).all()


def test_a_model_of_another_mesh_is_refused(result):
    """As after an update of the program that meshes or counts otherwise."""
    other = {**result.stored, "vectors": result.stored["vectors"][:-1]}
    with pytest.raises(InputError, match=r"cannot be used here.*run the case again"):
        ask(dataclasses.replace(result, stored=other), 5.3e9, SOMEWHERE)
    short = {name: array for name, array in result.stored.items() if name != "ends"}
    with pytest.raises(InputError, match="cannot be used here"):
        ask(dataclasses.replace(result, stored=short), 5.3e9, SOMEWHERE)


def test_a_table_has_a_row_per_place_and_port(path, capsys):
    assert command.main(["ask", str(path), "--at", PLACE, "--at", "5.6 GHz, 0 deg, 0 deg", "--csv", "-"]) == 0
    rows = list(csv.DictReader(io.StringIO(capsys.readouterr().out)))
    assert [row["port"] for row in rows] == ["x", "y", "x", "y"]
    assert float(rows[1]["error_gamma"]) == pytest.approx(20 * float(rows[0]["error_gamma"]))
    assert float(rows[0]["absorbed_along x"]) > 0


def test_a_direct_result_says_what_to_run(result, tmp_path, capsys):
    save_result(tmp_path / "result.nc", dataclasses.replace(result, stored=None, certificate=None))
    assert command.main(["ask", str(tmp_path), "--at", PLACE]) == 2
    shown = capsys.readouterr()
    assert not shown.out and "no reduced model" in shown.err and 'without solver = "direct"' in shown.err
    assert shown.err.count("\n") == 1


def test_numbers_of_a_failed_run_carry_its_warning(result, tmp_path, capsys):
    save_result(tmp_path / "result.nc", dataclasses.replace(result, failure="the power balance is off"))
    assert command.main(["ask", str(tmp_path), "--at", PLACE]) == 3
    shown = capsys.readouterr()
    assert "do not use these numbers: the power balance is off" in shown.err and "active impedance" in shown.out


@pytest.mark.parametrize("name", ["nowhere", "nowhere.nc"])
def test_a_missing_result_is_bad_input(tmp_path, capsys, name):
    assert command.main(["ask", str(tmp_path / name), "--at", PLACE]) == 2
    shown = capsys.readouterr()
    assert name in shown.err and "Traceback" not in shown.err and not shown.out
