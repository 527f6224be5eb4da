"""Choosing the snapshots of the reduced model, and certifying its error.

The estimate is the dual-weighted residual of the smaller of two nested models with the larger one's adjoint: for
Galerkin models on nested spaces ``Y_large - Y_small`` equals the residual of the small model weighed with the large
model's adjoint solution. It costs one small solve per candidate and no full assembly. Each step adds snapshots where
the newest ones still changed the answer most; the model is accepted when full solutions at held-back points, random
ones and those predicted worst, agree.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .network import port_response
from .reduced import ReducedModel
from .reduced_build import ReducedBuilder
from .reduced_far import KernelMemory
from .snapshots import Snapshots, take_snapshot
from .sweep import CellSolver, wavenumber
from .training import random_points, training_points

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

FIRST = 6  # snapshots before the first estimate
AT_ONCE = 2  # snapshots added in one step,
AT_ONCE_TALL = 4  # or with conductors that need levels, whose projection costs more than their solution
HELD_BACK = 4  # random points, and
WORST = 2  # points predicted worst, solved in full to confirm
SAFETY = 2.0  # the estimate must fall below the wanted error over this
OPERATOR_SHARE = 3e-3  # of the wanted error, for the sampling of the operator itself


@dataclass(frozen=True)
class Certificate:
    """What is known about a reduced model's error: largest row sum of |S - S direct|, hence of the active reflection
    for drives of equal amplitude.

    Attributes
    ----------
    wanted : requested error
    estimated : largest estimate over the training points
    confirmed : largest error at `points` (n, 3) of (frequency in Hz, u, v), solved in full and not in the basis
    errors : (n,) the errors there
    snapshots : number of snapshots in the basis; `full_solutions` : matrices solved in all
    operator : relative error of the reduced operator between its samples
    reached : whether both estimated and confirmed error meet the wanted one
    """

    wanted: float
    estimated: float
    confirmed: float
    points: Floats
    errors: Floats
    snapshots: int
    full_solutions: int
    operator: float
    reached: bool

    @property
    def stated(self) -> float:
        """The error to state: the wanted one where it was reached, else the largest known."""
        return max(self.wanted, self.estimated, self.confirmed)

    def __str__(self) -> str:
        verdict = "reached" if self.reached else "NOT reached"
        return (
            f"wanted |d Gamma| {self.wanted:.1e} {verdict}: estimated {self.estimated:.1e}, confirmed "
            f"{self.confirmed:.1e} at {len(self.errors)} full solutions, {self.snapshots} snapshots"
        )


def build_reduced(
    solver: CellSolver,
    band: tuple[float, float],
    *,
    error: float = 1e-4,
    scan_radius: float = 1.0,
    limit: int = 60,
    start: Snapshots | None = None,
    on_snapshot: Callable[[Snapshots], None] | None = None,
    progress: Callable[[Certificate], None] | None = None,
    seed: int = 1,
) -> tuple[ReducedModel, Certificate]:
    """Reduced model of a cell with at least one port over a band and all scan directions.

    Parameters
    ----------
    solver : CellSolver filled for at least the highest frequency
    band : lowest and highest frequency, Hz
    error : wanted largest error of the active reflection
    scan_radius : largest ``sqrt(u^2 + v^2)``; above 1 invisible space is covered too
    limit : full solutions at most
    start : snapshots of an earlier, interrupted run: points asked for again are taken from it
    on_snapshot : called after every full solution with all snapshots so far, to be kept
    progress : called with the certificate so far after each step
    seed : of the held-back points

    Returns
    -------
    The model and its certificate; `Certificate.reached` is False where `limit` came first.
    """
    return _Greedy(solver, band, error, scan_radius, limit, start, on_snapshot, progress, seed).run()


class _Greedy:
    def __init__(
        self, solver: CellSolver, band: tuple[float, float], error: float, scan_radius: float, limit: int,
        start: Snapshots | None, on_snapshot: Callable[[Snapshots], None] | None,
        progress: Callable[[Certificate], None] | None, seed: int,
    ):  # fmt: skip
        self.solver, self.error, self.limit = solver, error, limit
        self.on_snapshot, self.progress = on_snapshot, progress
        self.builder = ReducedBuilder(solver, band)
        self.training = training_points(solver.cell, band, scan_radius)
        self.random = np.random.default_rng(seed)
        self.draw = lambda count: random_points(band, scan_radius, count, self.random)
        n_port = len(solver.cell.ports)
        self.kept = start if start is not None else Snapshots.none(solver.operator.n, n_port)
        self.used: list[Floats] = []
        self.basis_size = 0
        self.memory = KernelMemory()
        tall = any(len(layer.heights) > 1 for layer in solver.operator.far.layers)
        self.at_once = AT_ONCE_TALL if tall else AT_ONCE

    def run(self) -> tuple[ReducedModel, Certificate]:
        first = self.training.spread(FIRST)
        for group in (first[: FIRST - AT_ONCE], first[FIRST - AT_ONCE :]):
            self._add(group)
        model = self.builder.model(max(OPERATOR_SHARE * self.error, 0.3 * self.solver.operator.tolerance))
        checked: list[tuple[Floats, float]] = []
        while True:
            estimates = self.estimates(model)
            worst = self.training.separate_worst(estimates, self._taken(), max(self.at_once, WORST))
            room = self.limit - len(self.used)
            if estimates.max() > self.error / SAFETY and room > 0:
                self._add(worst[: min(self.at_once, room)])
                model = self.builder.model()
            else:
                checked = self._confirm(model, np.concatenate([self.draw(HELD_BACK), worst[:WORST]]))
                certificate = self._certificate(float(estimates.max()), checked)
                if certificate.reached or room <= 0:
                    return model, certificate
                self._add(np.array([point for point, error in checked if error > 0.1 * self.error]))
                model = self.builder.model()
            if self.progress:
                self.progress(self._certificate(float(estimates.max()), checked))

    def estimates(self, model: ReducedModel) -> Floats:
        """Estimated error at every training point."""
        model.exact.memory = self.memory
        found = np.empty(len(self.training.points))
        for frequency in np.unique(self.training.points[:, 0]):
            pick = np.flatnonzero(self.training.points[:, 0] == frequency)
            k = wavenumber(float(frequency))
            found[pick] = model.solve(k, k * self.training.points[pick, 1:], estimate=True).estimate
        model.exact.memory = None
        return found

    def _taken(self) -> Floats:
        return np.array(self.used).reshape(-1, 3)

    def _add(self, points: Floats) -> None:
        """Extend the basis by snapshots at these points, as one nested step."""
        self.builder.extend(self._solutions(points))
        self.basis_size += len(points)

    def _solutions(self, points: Floats) -> Snapshots:
        found = None
        for point in points:
            one = self._lookup(point)
            if one is None:
                one = take_snapshot(self.solver, *(float(x) for x in point))
                self.kept = self.kept.joined(one)
                if self.on_snapshot:
                    self.on_snapshot(self.kept)
            if not any(np.array_equal(point, other) for other in self.used):
                self.used.append(point)
            found = one if found is None else found.joined(one)
        assert found is not None
        return found

    def _lookup(self, point: Floats) -> Snapshots | None:
        """A snapshot already at hand."""
        kept = self.kept
        offset = np.abs(kept.frequency / point[0] - 1) + np.abs(kept.u - point[1]) + np.abs(kept.v - point[2])
        hit = np.flatnonzero(offset < 1e-9)
        return kept[int(hit[0])] if len(hit) else None

    def _confirm(self, model: ReducedModel, points: Floats) -> list[tuple[Floats, float]]:
        """Error of the reduced scattering matrix at points solved in full."""
        solved = self._solutions(points)
        found = []
        for i, point in enumerate(points):
            true = port_response(solved.admittance[i], self.solver.reference).scattering
            k = wavenumber(float(point[0]))
            reduced = model.solve(k, k * point[None, 1:]).scattering[0]
            found.append((point, float(np.abs(reduced - true).sum(axis=1).max())))
        return found

    def _certificate(self, estimated: float, checked: list[tuple[Floats, float]]) -> Certificate:
        errors = np.array([error for _, error in checked])
        points = np.array([point for point, _ in checked]).reshape(-1, 3)
        confirmed = float(errors.max()) if len(errors) else np.inf
        reached = bool(estimated <= self.error and confirmed <= self.error)
        return Certificate(
            self.error, estimated, confirmed, points, errors, self.basis_size, len(self.used),
            self.builder.operator_error, reached,
        )  # fmt: skip
