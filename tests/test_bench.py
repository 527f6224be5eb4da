"""The breadboard of a case: plan, prediction, file, report, Touchstone, comparison; refusals."""

from __future__ import annotations

import dataclasses
import re
import warnings
from pathlib import Path

import numpy as np
import pytest
from scanward.cases import command
from scanward.cases.bench_plan import build_breadboard
from scanward.cases.bench_store import to_prediction
from scanward.cases.bench_text import bench_facts, coupling_rows, guide_rows
from scanward.cases.guide_plan import guide_plan
from scanward.cases.read import parse_case
from scanward.cases.run import BAD_INPUT, run_case
from scanward.cases.store import load_result, save_result
from scanward.geometry.errors import InputError
from scanward.solver.active import ActiveModel
from scanward.solver.array_basis import build_array_model
from scanward.solver.finite_array import FiniteArray
from scanward.solver.sweep import CellSolver
from test_reduced_run import CASE
from test_store import same

BOARD = """
[breadboard]
rows = 3
columns = 4
missing = [[0, 0]]
edge_taper = "-6 dB"
points = 2
largest = 5
alike = 0.2
[[tolerance]]
parameter = "height"
value = "0.3 mm"
"""


def case_text() -> str:
    text = CASE.replace("points = 3", "points = 2").replace("grid = 5", "grid = 0")
    text = text.replace("[parameters]", '[parameters]\nheight = "wavelength / 4"').replace(
        ', "wavelength / 4"]', ', "height"]'
    )
    return text + BOARD


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("board")
    text = case_text()
    assert run_case(parse_case(text), out, refine=False).code == 0
    return out


@pytest.fixture(scope="module")
def result(folder):
    return load_result(folder / "result.nc")


def plan(**values):
    defaults = {
        "rows": None, "columns": None, "missing": None, "cells": None, "rim": 0, "termination": "matched",
        "points": None, "edge_taper": 0.0, "alike": 0.05, "largest": 9, "error": 1e-4, "dummies": None, "load": None,
    }  # fmt: skip
    return build_breadboard({**defaults, **values}, np.linspace(5e9, 6e9, 11))


def test_cells_dummies_and_taper_of_a_plan():
    """CLOSED: counts, the rim of a square, a cosine on a pedestal."""
    board = plan(rows=5, columns=5, rim=1, edge_taper=-20.0)
    assert len(board.cells) == 25 and board.dummy.sum() == 16 and len(board.frequency) == 5
    middle = int(np.flatnonzero((board.cells == 2).all(axis=1))[0])
    assert board.taper[middle] == pytest.approx(1.0) and not board.dummy[middle]
    corner = int(np.flatnonzero((board.cells == 0).all(axis=1))[0])
    assert board.taper[corner] == pytest.approx(0.01)
    hexagon = plan(cells=np.array([[0, 0], [1, 0], [0, 1], [-1, 0], [0, -1], [1, -1], [-1, 1]]))
    assert len(hexagon.cells) == 7 and np.all(hexagon.taper == 1)
    loaded = plan(rows=2, columns=3, dummies=np.array([[1, 2]]), termination="loaded", load=75.0)
    assert loaded.termination == 75.0 and loaded.cells[loaded.dummy].tolist() == [[2, 1]]


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({}, "nothing"),
        ({"rows": 3}, "rows and columns"),
        ({"rows": 3, "columns": 3, "cells": np.zeros((1, 2))}, "rows and columns; or cells"),
        ({"rows": 2, "columns": 2, "rim": 1}, "no element is left"),
        ({"rows": 2, "columns": 2, "missing": np.array([[2, 0]])}, "is not of the array"),
        ({"rows": 1, "columns": 1, "missing": np.array([[0, 0]])}, "every element is missing"),
        ({"cells": np.array([[0, 0], [0, 0]])}, "listed twice"),
        ({"cells": np.array([[0, 0]]), "missing": np.array([[0, 0]])}, "goes with rows"),
        ({"rows": 64, "columns": 64}, "at most 1600"),
        ({"rows": 2, "columns": 2, "dummies": np.array([[2, 0]])}, "no element [2, 0]"),
        ({"rows": 2, "columns": 2, "termination": "loaded"}, "load together with"),
        ({"rows": 2, "columns": 2, "load": 75.0}, "load together with"),
    ],
)
def test_broken_plans_are_refused(values, words):
    with pytest.raises(InputError) as fault:
        plan(**values)
    assert words in str(fault.value) and "[breadboard]" in str(fault.value)


def test_connected_arrays_are_refused_before_anything_is_solved(tmp_path):
    text = case_text().replace("-0.23 wavelength", "-wavelength/4").replace("0.23 wavelength", "wavelength/4")
    with pytest.raises(InputError, match="conductors of neighbouring cells touch"):
        run_case(parse_case(text), tmp_path)
    (tmp_path / "case.toml").write_text(text, encoding="utf-8")
    assert command.main(["run", str(tmp_path / "case.toml"), "--out", str(tmp_path / "out"), "--quiet"]) == BAD_INPUT


def test_scattering_is_reciprocal_and_passive(result):
    """CLOSED: S = S^T, and no excitation returns more than it brings."""
    bench = result.bench
    assert bench.scattering.shape == (2, 11, 11) and bench.certificate.reached
    for s in bench.scattering:
        np.testing.assert_allclose(s, s.T, atol=1e-9)
        assert np.linalg.norm(s, 2) < 1 + 1e-6


def test_power_of_the_array_is_accounted_for(result):
    """CLOSED: power balance with the pattern integrated over the half sphere (issue: 1e-3)."""
    budget = result.bench.budget
    assert budget.sum() == pytest.approx(1.0, abs=1e-9) and abs(budget[-1]) < 1e-3
    assert budget[1] > 0.5 and budget[2] == budget[3] == 0


def test_growing_arrays_tend_to_the_infinite_one(result):
    sizes = result.bench.sizes
    assert [row.side for row in sizes] == [3, 5]
    assert sizes[1].reflection < sizes[0].reflection < 1


def test_active_reflection_follows_from_the_scattering_matrix(result):
    """CLOSED: Gamma_i = sum_j S_ij a_j / a_i at broadside with the taper of the plan."""
    bench, board = result.bench, result.job.breadboard
    a = board.taper[bench.ports[:, 0]]
    np.testing.assert_allclose(bench.active[0, 0], bench.scattering[0] @ a / a, atol=1e-9)


def test_couplings_of_the_infinite_array_add_up_to_its_reflection(result):
    """CLOSED: Gamma = sum_m S_m at broadside (checks.md section 9), but for the far couplings left out."""
    bench = result.bench
    assert abs(bench.coupling[0].sum(axis=0)[0, 0] - bench.infinite[0, 0, 0]) < 0.1
    mirrored = {tuple(m): s for m, s in zip(bench.coupling_cells.tolist(), bench.coupling[0], strict=True)}
    for (m, n), s in mirrored.items():
        np.testing.assert_allclose(mirrored[-m, -n], s.T, atol=1e-6)


def test_everything_survives_the_file(result, tmp_path):
    save_result(tmp_path / "again.nc", result)
    again = load_result(tmp_path / "again.nc")
    same(again.bench, result.bench)
    same(again.job.breadboard, result.job.breadboard)


def test_touchstone_file_is_the_matrix(folder, result):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import skrf
    network = skrf.Network(str(folder / "breadboard.s11p"))
    np.testing.assert_allclose(network.s, result.bench.scattering, atol=1e-10)
    rows = (folder / "breadboard-ports.csv").read_text(encoding="utf-8").split()
    assert len(rows) == 1 + 1 + 11 or len(rows) >= 12


def test_report_has_the_breadboard(folder, result):
    text = (folder / "report.html").read_text(encoding="utf-8")
    assert "The breadboard" in text and "Rows that are enough" in text
    facts = dict(bench_facts(result))
    assert facts["Array"] == "11 elements, 11 ports led out"
    first = coupling_rows(result)[0]
    assert first[0] in ("(1, 0)", "(0, 1)") and first[-1] == "yes"
    figures = {path.stem for path in (folder / "figures").iterdir()}
    assert {f"breadboard-{name}" for name in ("coupling", "edges", "pattern", "array-pattern", "sizes")} < figures


def test_waveguide_simulators_show_the_angle_of_their_width(result):
    """CLOSED: sin(theta) = lambda / 2W in the H plane (Hannan and Balfour 1965, from memory); the reflection expected
    is that of the infinite array there."""
    guides, note = guide_plan(result.job, ActiveModel(result.model, [1.0]), result.bench.frequency)
    assert guides and "symmetric about both walls" in note and len(guide_rows(result)) == len(guides)
    for guide in guides:
        assert np.sin(guide.theta) == pytest.approx(299792458.0 / guide.frequency / (2 * guide.width))
        assert guide.phi == pytest.approx(np.pi / 2)
    skewed = dataclasses.replace(result.job, co_polar_angle=np.radians(30))
    assert guide_plan(skewed, ActiveModel(result.model, [1.0]), result.bench.frequency)[0] == ()


def test_the_prediction_supports_itself_and_not_another(folder, result, tmp_path, capsys):
    """CLOSED: the predicted matrix, invented noise added, is supported; with 20 % more coupling it is not."""
    prediction = to_prediction(result)
    random = np.random.default_rng(3)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import skrf
    noise = 1e-3 * random.normal(size=(2, *prediction.scattering.shape)) / np.sqrt(2)
    clean = prediction.scattering + noise[0] + 1j * noise[1]
    uncertainty = ["--magnitude-uncertainty", "0.1 dB", "--phase-uncertainty", "1 deg", "--noise-floor", "-60 dB"]
    for name, matrix, code in (("clean", clean, 0), ("off", clean * (1 + 0.2 * (1 - np.eye(11))), 1)):
        network = skrf.Network(f=prediction.frequency, f_unit="Hz", s=matrix, z0=50, comments="INVENTED")
        network.write_touchstone(name, str(tmp_path), form="ri")
        measured = ["--measured", str(tmp_path / f"{name}.s11p"), "--map", str(folder / "breadboard-ports.csv")]
        assert command.main(["compare", str(folder), *measured, *uncertainty, "--out", str(tmp_path / name)]) == code
        assert "INVENTED" in capsys.readouterr().out
        assert (tmp_path / name / "comparison.html").exists()


def test_results_without_a_breadboard_cannot_be_compared(result, tmp_path, capsys):
    save_result(tmp_path / "bare.nc", dataclasses.replace(result, bench=None))
    arguments = ["compare", str(tmp_path / "bare.nc"), "--measured", "x.s2p", "--map", "x.csv"]
    uncertainty = ["--magnitude-uncertainty", "0.1 dB", "--phase-uncertainty", "1 deg", "--noise-floor", "-60 dB"]
    assert command.main([*arguments, *uncertainty]) == BAD_INPUT
    assert "predicts no finite array" in capsys.readouterr().err


def test_slope_is_that_of_another_array(result):
    """SECOND METHOD: the array of a cell 0.15 mm higher, predicted by itself."""
    (slope,) = result.bench.slopes
    assert (slope.name, slope.unit, slope.tolerance) == ("height", "mm", pytest.approx(0.3))
    job = parse_case(case_text(), overrides={"height": "wavelength / 4 + 0.15 mm"})
    solver = CellSolver(job.cell, float(job.frequency[-1]))
    model, _ = build_array_model(solver, (float(job.frequency[0]), float(job.frequency[-1])))
    moved = FiniteArray(model, float(job.frequency[0]), job.breadboard.cells).scattering()
    change = moved - result.bench.scattering[0]
    assert np.abs(change - 0.15 * slope.derivative[0]).max() < 0.1 * np.abs(change).max()


def test_a_planted_height_is_found_from_invented_data(folder, result, tmp_path, capsys):
    """CLOSED: data of an array 0.2 mm higher, noise added, refute the nominal prediction; the fit moves the height by
    0.2 mm."""
    (slope,) = result.bench.slopes
    random = np.random.default_rng(8)
    noise = 1e-3 * random.normal(size=(2, *result.bench.scattering.shape)) / np.sqrt(2)
    measured = result.bench.scattering + 0.2 * slope.derivative + noise[0] + 1j * noise[1]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import skrf
    network = skrf.Network(f=result.bench.frequency, f_unit="Hz", s=measured, z0=50, comments="INVENTED")
    network.write_touchstone("moved", str(tmp_path), form="ri")
    files = ["--measured", str(tmp_path / "moved.s11p"), "--map", str(folder / "breadboard-ports.csv")]
    uncertainty = ["--magnitude-uncertainty", "0.05 dB", "--phase-uncertainty", "0.3 deg", "--noise-floor", "-60 dB"]
    command.main(["compare", str(folder), *files, *uncertainty, "--out", str(tmp_path / "out")])
    shown = capsys.readouterr().out
    move = re.search(r"height moves by ([-+0-9.]+)", shown)
    assert move, shown
    assert float(move.group(1)) == pytest.approx(0.2, abs=0.05)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ('parameter = "hight"\nvalue = "0.3 mm"', "no parameter 'hight'"),
        ('parameter = "height"\nvalue = "0.3 deg"', "value"),
        ('parameter = "height"\nvalue = "-1 mm"', "not above zero"),
        ('parameter = "height"', "value"),
    ],
)
def test_bad_tolerances_are_refused(text, words):
    case = case_text().split("[[tolerance]]")[0] + "[[tolerance]]\n" + text
    with pytest.raises(InputError) as fault:
        parse_case(case)
    assert words in str(fault.value) and "[[tolerance]]" in str(fault.value)


def test_the_invented_demonstration_is_seen_through(result, folder, tmp_path, capsys):
    """CLOSED: what the script plants (a parameter off, cables, an exchanged pair) is told; every file says INVENTED."""
    from invent_measurement import write_demo

    plant, arguments = write_demo(folder, tmp_path)
    for file in tmp_path.iterdir():
        assert "INVENTED" in file.read_text(encoding="ascii").splitlines()[0]
    command.main([*arguments, "--out", str(tmp_path / "out")])
    shown = capsys.readouterr().out
    assert "INVENTED" in shown and "cables fitted" in shown
    move = re.search(r"height moves by ([-+0-9.]+)", shown)
    assert move and float(move.group(1)) == pytest.approx(plant.moves["height"], abs=0.08), shown
    assert "exchange" in shown.lower(), shown
