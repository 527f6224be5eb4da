"""Choice of snapshots: certificate, interruption, limits."""

from __future__ import annotations

import numpy as np
import pytest
from cells import FREQUENCY, strip_dipole, wire_dipole
from scanward.solver import greedy
from scanward.solver.greedy import build_reduced
from scanward.solver.network import port_response
from scanward.solver.snapshots import Snapshots, new_directions, take_snapshot
from scanward.solver.sweep import CellSolver, wavenumber
from scanward.solver.training import random_points, training_points

BAND = (0.7 * FREQUENCY, 1.1 * FREQUENCY)


@pytest.fixture(scope="module")
def solver() -> CellSolver:
    return CellSolver(strip_dipole(size=0.08), BAND[1])


@pytest.mark.parametrize("error", [1e-2, 1e-5])
def test_stated_error_holds_at_two_hundred_random_points(solver, error):
    """SECOND METHOD: full solutions (issue: reduced less direct is at most the stated error)."""
    model, certificate = build_reduced(solver, BAND, error=error)
    assert certificate.reached and certificate.stated == error
    for frequency, u, v in random_points(BAND, 1.0, 200, np.random.default_rng(5)):
        one = take_snapshot(solver, frequency, u, v)
        true = port_response(one.admittance[0], solver.reference).scattering
        k = wavenumber(frequency)
        assert np.abs(model.solve(k, k * np.array([[u, v]])).scattering[0] - true).max() <= error


def test_a_smaller_error_takes_more_snapshots(solver):
    coarse, fine = (build_reduced(solver, BAND, error=error)[1] for error in (1e-2, 1e-5))
    assert coarse.snapshots < fine.snapshots
    assert fine.confirmed < 1e-5 and fine.full_solutions == fine.snapshots + len(fine.errors)


def test_estimate_follows_the_true_error(solver):
    """SECOND METHOD: at the training points where the smaller model is worst, within a factor of ten."""
    build = greedy._Greedy(solver, BAND, 1e-4, 1.0, 60, None, None, None, 1)
    build._add(build.training.spread(6))
    smaller = build.builder.model()
    build._add(build.training.spread(9)[6:])
    model = build.builder.model()
    estimates = build.estimates(model)
    assert estimates.max() > 1e-4
    for point in build.training.points[np.argsort(estimates)[-8:]]:
        one = take_snapshot(solver, *(float(x) for x in point))
        true = port_response(one.admittance[0], solver.reference).scattering
        k = wavenumber(float(point[0]))
        error = np.abs(smaller.solve(k, k * point[None, 1:]).scattering[0] - true).max()
        at = estimates[np.all(build.training.points == point, axis=1)][0]
        assert 0.1 < at / error < 10


def test_what_is_not_reached_is_said(solver):
    model, certificate = build_reduced(solver, BAND, error=1e-9, limit=8)
    assert not certificate.reached and "NOT reached" in str(certificate)
    assert certificate.stated > 1e-9 and certificate.full_solutions <= 8 + greedy.HELD_BACK + greedy.WORST
    assert model.size > 0


def test_interrupted_choice_resumes_without_solving_again(solver, monkeypatch):
    saved: list[dict] = []

    def interrupt(snapshots: Snapshots) -> None:
        saved.append(snapshots.arrays())
        if len(snapshots) == 9:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        build_reduced(solver, BAND, on_snapshot=interrupt)
    solved: list[tuple] = []

    def counted(solver_, *point):
        solved.append(point)
        return take_snapshot(solver_, *point)

    monkeypatch.setattr(greedy, "take_snapshot", counted)
    kept = Snapshots.from_arrays(saved[-1])
    resumed, certificate = build_reduced(solver, BAND, start=kept)
    assert len(solved) == certificate.full_solutions - 9
    whole, _ = build_reduced(solver, BAND)
    k = wavenumber(FREQUENCY)
    kt = k * np.array([[0.2, 0.5]])
    np.testing.assert_allclose(resumed.solve(k, kt).scattering, whole.solve(k, kt).scattering, atol=1e-9)


def test_progress_tells_the_estimate(solver):
    steps: list[greedy.Certificate] = []
    build_reduced(solver, BAND, error=1e-5, progress=steps.append)
    assert len(steps) >= 1 and steps[0].estimated > steps[-1].estimated and not steps[0].reached


def test_adjoint_snapshot_is_the_solution_in_the_opposite_direction(solver):
    """CLOSED: Z(kt)^T = Z(-kt)."""
    there, back = take_snapshot(solver, FREQUENCY, 0.3, 0.5), take_snapshot(solver, FREQUENCY, -0.3, -0.5)
    scale = np.abs(there.currents).max()
    np.testing.assert_allclose(there.currents[0, 1], back.currents[0, 0], atol=1e-9 * scale)


def test_new_directions_are_orthonormal_and_drop_what_is_known():
    random = np.random.default_rng(1)
    columns = random.normal(size=(50, 4)) + 1j * random.normal(size=(50, 4))
    first = new_directions(np.zeros((50, 0), dtype=complex), columns)
    assert new_directions(first, columns @ random.normal(size=(4, 2))).shape == (50, 0)
    nearly = columns[:, :1] + 1e-7 * random.normal(size=(50, 1))
    both = np.concatenate([first, new_directions(first, nearly)], axis=1)
    np.testing.assert_allclose(both.conj().T @ both, np.eye(5), atol=1e-12)


def test_training_points_fill_one_half_of_the_disc():
    training = training_points(wire_dipole(), BAND, 1.0)
    points = training.points
    assert points[:, 0].min() == BAND[0] and points[:, 0].max() == pytest.approx(BAND[1])
    assert np.hypot(points[:, 1], points[:, 2]).max() <= 1 + 1e-12 and points[:, 2].min() >= 0
    chosen = training.spread(5)
    assert len(np.unique(chosen, axis=0)) == 5
    worst = training.separate_worst(np.arange(len(points), dtype=float), points[-1:], 2)
    assert not np.array_equal(worst[0], points[-1]) and not np.array_equal(worst[0], worst[1])
