"""Runs with ``solver = "reduced"``: the same answers, the certificate told, finished snapshots kept."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.cases import reduced_engine
from scanward.cases import run as runs
from scanward.cases.progress import Silent
from scanward.cases.read import parse_case
from scanward.cases.run import run_case
from scanward.geometry.errors import InputError
from scanward.solver import greedy, sweep
from test_store import same

CASE = """title = "Invented strip dipoles, a trial element of an avalanche-watch radar"
ground = true
[parameters]
wavelength = "c0 / 5.4 GHz"
[band]
start = "5.2 GHz"
stop = "5.6 GHz"
points = 3
[lattice]
a = ["wavelength / 2", 0]
b = [0, "wavelength / 2"]
[[conductor]]
kind = "strip"
name = "dipole"
start = ["-0.23 wavelength", 0, "wavelength / 4"]
end = ["0.23 wavelength", 0, "wavelength / 4"]
width = "0.02 wavelength"
[[port]]
name = "feed"
conductor = "dipole"
at = [0, 0, "wavelength / 4"]
width = "0.01 wavelength"
[scan]
cone = "60 deg"
step = "15 deg"
grid = 5
[mesh]
element_size = "4 mm"
[limits]
reflection = "-1 dB"
[accuracy]
"""


@pytest.fixture(scope="module")
def reduced_job():
    return parse_case(CASE + 'solver = "reduced"\n')


def test_reduced_and_direct_runs_agree_within_the_stated_error(reduced_job, tmp_path):
    reduced = run_case(reduced_job, tmp_path / "reduced", refine=False)
    direct = run_case(parse_case(CASE + 'solver = "direct"\n'), tmp_path / "direct", refine=False)
    assert reduced.code == direct.code == 0
    assert reduced.result is not None and direct.result is not None
    change = np.abs(reduced.result.sweep.scattering - direct.result.sweep.scattering).max()
    assert change < 1e-4
    (note,) = reduced.result.sweep.notes
    assert "wanted 1.0e-04" in note and "confirmed" in note
    assert "reduced model of" in (tmp_path / "reduced" / "report.html").read_text(encoding="utf-8")
    assert not (tmp_path / "reduced" / "partial").exists()
    assert direct.result.sweep.notes == ()


def test_interrupted_choice_of_snapshots_is_taken_up_again(reduced_job, tmp_path, monkeypatch):
    without_survey(monkeypatch)
    taken = []
    original = greedy.take_snapshot

    def counted(solver, frequency, u, v):
        if len(taken) == 5:
            raise KeyboardInterrupt
        taken.append((frequency, u, v))
        return original(solver, frequency, u, v)

    monkeypatch.setattr(greedy, "take_snapshot", counted)
    outcome = run_case(reduced_job, tmp_path, refine=False)
    assert outcome.code == runs.INTERRUPTED
    assert list((tmp_path / "partial").glob("*-snapshots.npz"))
    before = list(taken)
    again = []

    def watched(solver, frequency, u, v):
        again.append((frequency, u, v))
        return original(solver, frequency, u, v)

    monkeypatch.setattr(greedy, "take_snapshot", watched)
    assert run_case(reduced_job, tmp_path, refine=False).code == 0
    assert again
    assert not set(before) & set(again)


def without_survey(monkeypatch):
    """Survey and figures take most of the time of a run and have tests of their own."""
    monkeypatch.setattr(runs, "survey_job", lambda *_: None)
    monkeypatch.setattr(runs, "draw_all", lambda _result: ())


class Stopper(Silent):
    """Ctrl-C at the `at`-th sign of life of one stage: "snapshots", or points done while "solving"."""

    def __init__(self, where: str, at: int):
        self.where, self.left, self.stage = where, at, ""

    def _count(self) -> None:
        self.left -= 1
        if self.left == 0:
            raise KeyboardInterrupt

    def start(self, stage: str, total: int) -> None:
        self.stage = stage

    def advance(self, done: int) -> None:
        if self.where == self.stage:
            self._count()

    def say(self, text: str) -> None:
        if self.where == "snapshots" and "snapshots, estimated error" in text:
            self._count()


def test_a_run_interrupted_twice_solves_nothing_twice(reduced_job, tmp_path, monkeypatch):
    """Stopped while choosing snapshots and again in the sweep: each point is solved in full once, as in a run that no
    one stopped; the third run makes the model anew without any full solution and takes up the finished frequency."""
    full, swept = [], []
    take, system, reduced = greedy.take_snapshot, sweep.CellSolver.system, reduced_engine.reduced_sweep

    def counted_sweep(model, frequency, *args, **options):
        swept.append(float(frequency[0]))
        return reduced(model, frequency, *args, **options)

    monkeypatch.setattr(greedy, "take_snapshot", lambda *a: (full.append(a[1:]), take(*a))[1])
    matrices = []
    monkeypatch.setattr(sweep.CellSolver, "system", lambda self, *a: (matrices.append(1), system(self, *a))[1])
    monkeypatch.setattr(reduced_engine, "reduced_sweep", counted_sweep)
    without_survey(monkeypatch)

    def go(folder, told=None):
        before = len(full), len(swept)
        outcome = run_case(reduced_job, folder, refine=False, progress=told)
        assert len(matrices) == len(full)  # no full matrix but for snapshots and held-back points
        return outcome, full[before[0] :], swept[before[1] :]

    whole, all_at_once, _ = go(tmp_path / "whole")
    first, taken, _ = go(tmp_path / "stopped", Stopper("snapshots", 2))
    assert first.code == runs.INTERRUPTED and 6 < len(taken) < len(all_at_once)
    assert f"0 of 3 frequencies and {len(taken)} full solutions for the reduced model" in first.message
    second, taken_then, swept_then = go(tmp_path / "stopped", Stopper("solving", 3))
    assert second.code == runs.INTERRUPTED and swept_then == [5.2e9, 5.4e9]
    assert "1 of 3 frequencies" in second.message
    assert sorted(taken + taken_then) == sorted(all_at_once) and len(set(all_at_once)) == len(all_at_once)
    third, taken_last, swept_last = go(tmp_path / "stopped")
    assert third.code == 0 and taken_last == [] and swept_last == [5.4e9, 5.6e9]
    assert third.result is not None and whole.result is not None
    same(third.result.certificate, whole.result.certificate)
    np.testing.assert_allclose(third.result.sweep.scattering, whole.result.sweep.scattering, rtol=1e-9)
    assert not (tmp_path / "stopped" / "partial").exists()


def test_accuracy_out_of_reach_is_told(tmp_path, monkeypatch):
    """With room for eight full solutions 1e-8 cannot be reached: exit code 3, and the numbers are kept."""
    original = greedy.build_reduced
    monkeypatch.setattr(
        "scanward.cases.reduced_engine.build_reduced", lambda *a, **k: original(*a, **{**k, "limit": 8})
    )
    job = parse_case(CASE + 'solver = "reduced"\nreduced_error = 1e-8\n')
    outcome = run_case(job, tmp_path, refine=False)
    assert outcome.code == runs.NOT_REACHED
    assert "did not reach its accuracy" in outcome.message
    assert (tmp_path / "result.nc").exists()


def test_unknown_solver_is_refused():
    with pytest.raises(InputError, match=r"reduced.*direct"):
        parse_case(CASE + 'solver = "fast"\n')
