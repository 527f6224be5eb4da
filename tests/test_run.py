"""Runs with a made-up solver: exit codes, resuming, interruption, error estimate, checks."""

import csv
from dataclasses import replace

import numpy as np
import pytest
from scanward.cases import accuracy, partial
from scanward.cases.drawing import cell_drawing
from scanward.cases.job import Limit
from scanward.cases.run import INTERRUPTED, MET, MISSED, NOT_REACHED, run_case
from scanward.cases.store import load_result
from scanward.geometry.stack import Layer, Stack
from scanward.solver.result import ScanPoints
from synthetic import sheet_job, sheet_sweep

CONE = np.radians(60)


class Sheets:
    """An engine that answers with current sheets; a finer mesh shifts the reactance by `shift` ohm."""

    stored_bytes = 0.0
    solved: list

    def __init__(
        self, cell, _frequency, _scan, _tolerance, *, stop_at=None, break_at=None, spoil=None, shift=0.0
    ):
        self.cell, self.unknowns = cell, len(cell.mesh.triangles)
        self.loss = 0.0 if self.unknowns <= 20 else shift
        self.solved, self.stop_at, self.spoil = [], stop_at, spoil

    def solve(self, frequency, scan, *, advance=None, keep_currents=False):
        if self.stop_at == len(self.solved):
            raise KeyboardInterrupt
        self.solved.append(frequency)
        if advance:
            advance(len(scan), len(scan))
        sweep = sheet_sweep(frequency, scan, loss=self.loss)
        return self.spoil(sweep) if self.spoil else sweep


@pytest.fixture(autouse=True)
def without_figures(monkeypatch):
    """Drawing takes most of the time of a run and has tests of its own."""
    monkeypatch.setattr("scanward.cases.run.draw_all", lambda _result: ())


def engine(made, **options):
    def make(*given):
        made.append(Sheets(*given, **options))
        return made[-1]

    return make


def go(tmp_path, job=None, **options):
    made = []
    refine = options.pop("refine", True)
    outcome = run_case(job or sheet_job(), tmp_path / "out", engine=engine(made, **options), refine=refine)
    return outcome, made


def test_a_run_writes_everything_and_meets_its_limits(tmp_path, monkeypatch):
    monkeypatch.setattr("scanward.cases.run.draw_all", lambda result: (cell_drawing(result.job.cell),))
    outcome, _ = go(tmp_path)
    assert outcome.code == MET and [v.state for v in outcome.verdicts] == ["met", "met"]
    names = {path.name for path in outcome.files}
    assert {"result.nc", "report.html", "reflection.csv", "pattern.csv", "limits.csv", "cell.png"} <= names
    assert all(path.stat().st_size > 0 for path in outcome.files)
    assert not (tmp_path / "out" / "partial").exists()
    loaded = load_result(tmp_path / "out" / "result.nc")
    np.testing.assert_array_equal(loaded.sweep.scattering, outcome.result.sweep.scattering)
    with (tmp_path / "out" / "reflection.csv").open(newline="") as stream:
        rows = list(csv.DictReader(stream))
    assert len(rows) == 3 * len(outcome.result.sweep.scan)
    assert float(rows[0]["resistance_ohm"]) == pytest.approx(120.0)


def test_a_missed_limit_is_code_1(tmp_path):
    outcome, _ = go(tmp_path, sheet_job(limits=(Limit("reflection", -20.0, CONE),)), refine=False)
    assert outcome.code == MISSED and outcome.result.accuracy.note == "not asked for"


def test_ctrl_c_keeps_finished_frequencies_and_the_next_run_takes_them_up(tmp_path):
    outcome, made = go(tmp_path, stop_at=2)
    assert outcome.code == INTERRUPTED and outcome.result is None
    assert "2 of 3 frequencies" in outcome.message
    assert len(list((tmp_path / "out" / "partial").glob("*.npz"))) == 2
    again, made = go(tmp_path, refine=False)
    assert again.code == MET
    assert made[0].solved == [5.6e9]
    fresh, _ = go(tmp_path / "fresh", refine=False)
    np.testing.assert_array_equal(again.result.sweep.waves, fresh.result.sweep.waves)
    assert not (tmp_path / "out" / "partial").exists()


def test_kept_frequencies_of_another_case_are_not_used(tmp_path):
    go(tmp_path, stop_at=2)
    job = sheet_job()
    other, made = go(tmp_path, replace(job, text=job.text + "# changed\n"), refine=False)
    assert other.code == MET and len(made[0].solved) == 3


def test_a_damaged_kept_file_is_solved_again(tmp_path):
    go(tmp_path, stop_at=2)
    next((tmp_path / "out" / "partial").glob("*-0001.npz")).write_bytes(b"half a file")
    _, made = go(tmp_path, refine=False)
    assert made[0].solved == [5.4e9, 5.6e9]


def test_fingerprint_depends_on_mesh_stack_tolerance_and_text():
    job = sheet_job()
    cells = [replace(job.cell, stack=Stack((Layer(14e-3, e),), ground=True)) for e in (2.2, 2.2000000001)]
    cells += [job.remesh(0.5), replace(job.cell, ground=False)]
    variants = [job, replace(job, tolerance=1e-5), replace(job, text="x"), *(replace(job, cell=c) for c in cells)]
    assert len({partial.fingerprint(variant) for variant in variants}) == len(variants)
    assert partial.fingerprint(job) == partial.fingerprint(sheet_job())


def not_finite(sweep):
    sweep.scattering[0, 7] = np.nan
    return sweep


def unbalanced(sweep):
    sweep.waves[0, 3] *= 1.05
    return sweep


def unsolved(sweep):
    sweep.residual[0, 2] = 1e-3
    return sweep


@pytest.mark.parametrize(
    ("spoil", "words"),
    [(not_finite, "not finite"), (unbalanced, "power balance"), (unsolved, "relative residual")],
)
def test_numbers_that_cannot_be_trusted_are_code_3(tmp_path, spoil, words):
    outcome, _ = go(tmp_path, sheet_job(frequencies=1), spoil=spoil)
    assert outcome.code == NOT_REACHED and words in outcome.message and "5.4 GHz" in outcome.message
    assert "do not use" in (tmp_path / "out" / "report.html").read_text("utf-8")
    assert load_result(tmp_path / "out" / "result.nc").failure == outcome.message


def test_error_estimate_is_the_extrapolated_change_on_the_finer_mesh(tmp_path):
    outcome, made = go(tmp_path, shift=2.0)
    estimate = outcome.result.accuracy
    assert made[1].unknowns > made[0].unknowns
    assert estimate.samples == sum(len(points) for points in accuracy.choose_samples(outcome.result).values())
    largest = 0.0
    for f, points in accuracy.choose_samples(outcome.result).items():
        scan = outcome.result.sweep.scan
        there = ScanPoints(scan.u[points], scan.v[points], scan.phi[points])
        fine = sheet_sweep(outcome.result.sweep.frequency[f], there, loss=2.0)
        change = np.abs(fine.scattering - outcome.result.sweep.scattering[f, points])
        largest = max(largest, change.max())
    ratio = accuracy.element_size(sheet_job().cell) / accuracy.element_size(made[1].cell)
    assert ratio >= 1.3 and estimate.factor == pytest.approx(1 / (1 - 1 / ratio))
    assert estimate.reflection == pytest.approx(estimate.factor * largest, rel=1e-9)
    assert estimate.errors["reflection"] == estimate.reflection and estimate.errors["gain_drop"] > 0


def test_samples_hold_broadside_and_the_worst_points():
    outcome_job = sheet_job()
    sweep = sheet_sweep(outcome_job.frequency, outcome_job.scan.points)
    from scanward.cases.result import Accuracy, Provenance, Result

    samples = accuracy.choose_samples(Result(outcome_job, sweep, Accuracy(), Provenance({})))
    assert all(points[0] == 0 for points in samples.values()) and set(samples) == {0, 1, 2}
    worst = np.unravel_index(np.argmax(np.abs(sweep.scattering[..., 0, 0])), (3, len(sweep.scan)))
    assert worst[1] in samples[worst[0]]


def test_a_mesh_that_cannot_be_changed_is_said(tmp_path):
    job = sheet_job(frequencies=1)
    outcome, _ = go(tmp_path, replace(job, remesh=lambda _factor: job.cell))
    assert "no other mesh" in outcome.result.accuracy.note and outcome.result.accuracy.unknowns == 20
    assert outcome.code == MET


def test_a_mesh_that_cannot_be_refined_is_compared_with_a_coarser_one(tmp_path):
    """Error of the finer of two first-order solutions is the change over (r - 1)."""
    job = sheet_job(frequencies=1)
    outcome, made = go(tmp_path, replace(job, remesh=lambda factor: job.remesh(max(factor, 1.0))))
    estimate = outcome.result.accuracy
    ratio = accuracy.element_size(made[1].cell) / accuracy.element_size(job.cell)
    assert estimate.compared == "coarser" and estimate.compared_unknowns < estimate.unknowns
    assert estimate.factor == pytest.approx(1 / (ratio - 1))


def test_another_mesh_that_does_not_fit_into_memory_is_skipped(tmp_path, monkeypatch):
    monkeypatch.setattr("scanward.cases.run.memory_free", lambda: 1.0)
    outcome, made = go(tmp_path, sheet_job(frequencies=1))
    assert "GB of memory" in outcome.result.accuracy.note and len(made) == 1


@pytest.mark.parametrize("kind", ["finer", "coarser"])
def test_extrapolation_is_exact_for_first_order_convergence(kind):
    """CLOSED: q(h) = q0 + c h."""
    h, ratio = 0.3, 1.6
    other = h / ratio if kind == "finer" else h * ratio
    assert accuracy.richardson(ratio, kind) * abs(h - other) == pytest.approx(h)


def test_joining_unites_the_wave_tables():
    scan = ScanPoints.from_angles(0.2, 0.0)
    first, second = sheet_sweep(5e9, scan), sheet_sweep(6e9, scan)
    table = replace(
        second.wave_table,
        order=second.wave_table.order * np.array([1, 0]) + np.array([[0, 0]] * 2 + [[1, 3]] * 2),
    )
    joined = partial.join_frequencies([first, replace(second, wave_table=table)])
    assert joined.waves.shape == (2, 1, 6, 1) and not joined.waves[1, 0, 2:4].any()
    np.testing.assert_array_equal(joined.waves[1, 0, [0, 1, 4, 5]], second.waves[0, 0])
