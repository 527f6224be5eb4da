"""Building the reduced model step by step: every new basis vector is projected once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .operator import ETA
from .operator_view import view_of
from .reduced import ReducedModel
from .reduced_far import ExactWaves, SmoothRest
from .reduced_parts import NearForms
from .snapshots import Snapshots, new_directions
from .sweep import CellSolver, wavenumber

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

MOST_NODES = 24  # Chebyshev nodes in k^2
MOST_CELLS = 16  # reach of the rest's lag matrices


class ReducedBuilder:
    """Grows a basis by snapshots; `model` gives the reduced model so far.

    Parameters
    ----------
    solver : CellSolver filled for at least the highest frequency
    band : lowest and highest frequency, Hz
    """

    def __init__(self, solver: CellSolver, band: tuple[float, float]):
        self.solver, self.view = solver, view_of(solver)
        self.band = (wavenumber(band[0]), wavenumber(band[1]))
        self.exact = ExactWaves(self.view)
        self.rest = SmoothRest(self.view, self.exact, *self.band)
        assert self.view.near is not None
        self.near = NearForms.empty(self.view.near)
        self.vectors = np.zeros((solver.operator.n, 0), dtype=complex)
        self.ends: list[int] = []
        self.operator_error = np.inf

    def extend(self, snapshots: Snapshots) -> int:
        """Add all currents of these snapshots as one nested step; returns how many directions were new."""
        n = self.vectors.shape[0]
        columns = snapshots.currents.transpose(2, 0, 1, 3).reshape(n, -1)
        added = new_directions(self.vectors, columns)
        if added.shape[1]:
            assert self.view.near is not None
            self.near = self.near.extended(self.view.near, self.vectors, added)
            self.exact.transforms.extend(added)
            self.rest.extend(added)
            self.vectors = np.concatenate([self.vectors, added], axis=1)
            self.ends.append(self.vectors.shape[1])
        return added.shape[1]

    def model(self, wanted: float | None = None) -> ReducedModel:
        """The reduced model; with `wanted` the sampling of the rest is refined until its error at points between the
        samples, relative to the largest entry of X, meets it."""
        best = np.inf
        while True:
            lags = (self.rest.cells, self.rest.lags)
            ends, exact = list(self.ends), self.exact.copy()
            model = ReducedModel(self.view, self.band, self.vectors, ends, exact, self.near, lags)
            if wanted is None:
                return model
            self.operator_error, in_k = self._between(model)
            stalled = self.operator_error > 0.7 * best
            best = min(best, self.operator_error)
            if best <= wanted or stalled or not self._refine(in_k > 0.3 * self.operator_error):
                return model

    def _refine(self, frequency: bool) -> bool:
        """Take more samples in frequency or in k_t; False at the largest number."""
        nodes, reach = self.rest.nodes, self.rest.reach
        if frequency and nodes < MOST_NODES:
            self.rest.sample(nodes + 2, reach)
        elif max(reach) < MOST_CELLS:
            self.rest.sample(nodes, [r + 1 for r in reach])
        else:
            return False
        return True

    def _between(self, model: ReducedModel) -> tuple[float, float]:
        """Relative error of the rest at random points: in all, and at k_t = 0 (a sample) by frequency alone."""
        random = np.random.default_rng(7)
        low, high = self.band
        k = low + (high - low) * np.array([random.uniform(), 0.02, 0.98])
        kt = (random.uniform(-0.5, 0.5, (4, 2))) @ self.view.lattice.reciprocal
        kt[0] = 0.0
        true = self.rest.samples(k, kt)
        errors = np.empty(true.shape[:2])
        for i, wavenumber_ in enumerate(k):
            approximate = model.rest_at(float(wavenumber_), kt)
            scale = wavenumber_ / ETA * np.abs(model.matrix(float(wavenumber_), kt)).max()
            errors[:, i] = np.abs(approximate - true[:, i]).max(axis=(1, 2)) / scale
        return float(errors.max()), float(errors[0].max())
