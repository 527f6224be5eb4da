"""Every ready-made case runs to a report and agrees with its `[expect]` table; the stated error covers what a finer
mesh really changes."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scanward.cases.expect import compare
from scanward.cases.read import read_case
from scanward.cases.run import run_case
from scanward.solver.greedy import build_reduced
from scanward.solver.network import port_response
from scanward.solver.result import ScanPoints
from scanward.solver.snapshots import take_snapshot
from scanward.solver.sweep import CellSolver, solve_sweep, wavenumber
from scanward.solver.training import random_points

CASES = sorted((Path(__file__).parents[1] / "cases").glob("*.toml"))


@pytest.mark.slow
@pytest.mark.timeout(1800)
@pytest.mark.parametrize("path", CASES, ids=lambda p: p.stem)
def test_case_runs_to_its_report_and_expectations(path, tmp_path):
    job = read_case(path)
    outcome = run_case(job, tmp_path)
    assert outcome.code == (1 if job.expected_to_fail else 0), outcome.message
    assert outcome.result is not None
    comparisons = compare(outcome.result)
    assert comparisons, "a ready-made case states at least one number"
    for comparison in comparisons:
        wanted = comparison.expectation
        assert comparison.agrees, f"{wanted.quantity}: {comparison.computed} for {wanted.value} +- {wanted.tolerance}"
    report = (tmp_path / "report.html").read_text(encoding="utf-8")
    assert "Cautions" in report
    assert report.count("<svg") + report.count("data:image") >= 6


@pytest.mark.slow
@pytest.mark.timeout(1800)
@pytest.mark.parametrize("name", ["strip_dipole", "wire_dipole_free_space"])
def test_stated_error_covers_a_much_finer_mesh(name, tmp_path):
    """Reflection on a mesh three times finer, at broadside and the cone's edge: within the report's estimate."""
    job = read_case(next(p for p in CASES if p.stem == name))
    outcome = run_case(job, tmp_path)
    assert outcome.result is not None
    accuracy = outcome.result.accuracy
    assert accuracy is not None
    frequency = job.frequency[[0, -1]]
    scan = ScanPoints.from_angles(np.array([0.0, job.scan.cone, job.scan.cone]), np.array([0.0, 0.0, np.pi / 2]))
    coarse = solve_sweep(job.cell, frequency, scan).scattering[..., 0, 0]
    fine = solve_sweep(job.remesh(1 / 3), frequency, scan).scattering[..., 0, 0]
    assert np.abs(fine - coarse).max() < accuracy.reflection


@pytest.mark.slow
@pytest.mark.timeout(1800)
@pytest.mark.parametrize("path", CASES, ids=lambda p: p.stem)
def test_reduced_model_keeps_its_stated_error(path):
    """SECOND METHOD: full solutions at 200 random points of the band and of all visible space."""
    job = read_case(path)
    band = (float(job.frequency[0]), float(job.frequency[-1]))
    solver = CellSolver(job.cell, band[1], job.tolerance)
    model, certificate = build_reduced(solver, band, error=job.reduced_error or 1e-4)
    assert certificate.reached
    for frequency, u, v in random_points(band, 1.0, 200, np.random.default_rng(23)):
        true = port_response(take_snapshot(solver, frequency, u, v).admittance[0], solver.reference).scattering
        k = wavenumber(frequency)
        found = model.solve(k, k * np.array([[u, v]])).scattering[0]
        assert np.abs(found - true).sum(axis=1).max() <= certificate.stated
