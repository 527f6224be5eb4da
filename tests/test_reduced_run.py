"""Runs with ``solver = "reduced"``: the same answers, the certificate told, finished snapshots kept."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.cases import run as runs
from scanward.cases.read import parse_case
from scanward.cases.run import run_case
from scanward.geometry.errors import InputError
from scanward.solver import greedy

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
