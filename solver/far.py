"""The far part of the operator: a sum over Floquet waves of transforms of the basis functions.

The smooth far kernel depends on the heights of source and observer. It is carried by a few *levels*: the heights
themselves where the cloud has only a few (planar conductors), Chebyshev heights with barycentric interpolation
otherwise. The matrix is ``G^H D G`` with G the transforms by level and D small matrices between levels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from ..geometry.lattice import Lattice
from .cloud import Cloud
from .ewald import Split, far_kernel

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

MAX_EXACT_LEVELS = 5
IMAGE_SIGN = (-1.0, -1.0, 1.0, -1.0)  # x, y, z current and charge in the ground's mirror


@dataclass(frozen=True)
class Levels:
    """Heights (n_level,) and the weight of each on every cloud point, (n_q, n_level)."""

    heights: Floats
    weights: Floats

    @property
    def exact(self) -> bool:
        """Whether every point sits on a level."""
        return bool(((self.weights == 0) | (self.weights == 1)).all())


def choose_levels(z: Floats, split: Split, tolerance: float) -> Levels:
    """Levels that carry the far kernel between all points to the tolerance.

    The kernel varies with z like ``erfc(z E)`` and ``exp(-z^2 E^2)``; on an interval of half-width H the Chebyshev
    coefficients of ``exp(-z^2 E^2)`` fall like ``exp(-(H E)^2/2) I_(n/2)((H E)^2/2)``. n is the first order at which
    interpolating ``exp(-(z - z')^2 E^2)`` between all heights meets the tolerance (tested on a fine grid).
    """
    distinct = np.sort(z)
    distinct = distinct[np.concatenate([[True], np.diff(distinct) > 1e-9 / split.splitting])]
    if len(distinct) <= MAX_EXACT_LEVELS:
        index = np.abs(z[:, None] - distinct).argmin(axis=1)
        return Levels(distinct, np.eye(len(distinct))[index])
    low, high = float(z.min()), float(z.max())
    fine = np.linspace(low, high, 101)
    n = 4
    while True:
        heights = _chebyshev(low, high, n)
        weights = _barycentric_weights(heights, fine)
        exact = np.exp(-(((fine[:, None] - fine) * split.splitting) ** 2))
        nodes = np.exp(-(((heights[:, None] - heights) * split.splitting) ** 2))
        if np.abs(weights @ nodes @ weights.T - exact).max() < 0.1 * tolerance or n >= 60:
            return Levels(heights, _barycentric_weights(heights, z))
        n += 2


def _chebyshev(low: float, high: float, n: int) -> Floats:
    return 0.5 * (low + high) + 0.5 * (high - low) * np.cos(np.pi * (np.arange(n) + 0.5) / n)


def _barycentric_weights(nodes: Floats, z: Floats) -> Floats:
    """Lagrange polynomials of Chebyshev nodes of the first kind at z, (n_z, n_nodes)."""
    n = len(nodes)
    w = (-1.0) ** np.arange(n) * np.sin(np.pi * (np.arange(n) + 0.5) / n)
    gap = z[:, None] - nodes
    hit = np.abs(gap) < 1e-13 * np.ptp(nodes)
    terms = w / np.where(hit, 1.0, gap)
    weights = terms / terms.sum(axis=1, keepdims=True)
    rows = hit.any(axis=1)
    weights[rows] = hit[rows].astype(float)
    return weights


class FarPart:
    """Evaluates the far part at any (k, kt), with everything that depends on the mesh alone kept."""

    def __init__(self, cloud: Cloud, lattice: Lattice, split: Split, tolerance: float, ground: bool, k_max: float):
        self.lattice, self.split, self.ground = lattice, split, ground
        self.points = cloud.points
        self.levels = choose_levels(cloud.points[:, 2], split, tolerance)
        components = [*cloud.current, cloud.charge]
        self.used = [c for c in range(4) if components[c].nnz]
        n_level = len(self.levels.heights)
        self.weights = [
            sparse.csr_matrix(components[c].multiply(self.levels.weights[:, [level]]).T)
            for c in self.used
            for level in range(n_level)
        ]
        self.stacked = sparse.csr_matrix(sparse.vstack(self.weights))
        self._phases = _PhaseTable(cloud.points[:, :2], lattice)

    def orders(self, k: float, kt: Floats) -> Ints:
        """Floquet orders that matter at (k, kt), shape (n_mode, 2)."""
        return self.lattice.orders_within(float(np.hypot(self.split.far_radius, k)), kt)

    def transforms(self, orders: Ints, kt: Floats) -> Complexes:
        """``int f exp(+j k_pq . rho)`` by component and level, (n_component, n_level, n, n_mode)."""
        phase = np.exp(1j * (self.points[:, :2] @ kt))[:, None] * self._phases(orders)
        n_level = len(self.levels.heights)
        result = self.stacked @ phase
        return result.reshape(len(self.used), n_level, -1, len(orders))

    def matrix(self, k: float, kt: Floats, current_scale: complex, charge_scale: complex) -> Complexes:
        """``current_scale A_far + charge_scale Q_far``, (n, n)."""
        orders = self.orders(k, kt)
        transforms = self.transforms(orders, kt)
        direct, image = self.level_kernels(k, kt, orders)
        n_component, n_level, n, n_mode = transforms.shape
        weighted = np.empty_like(transforms)
        for i, c in enumerate(self.used):
            kernel = direct + IMAGE_SIGN[c] * image if self.ground else direct
            scale = charge_scale if c == 3 else current_scale
            if n_level == 1:
                np.multiply(transforms[i, 0], scale * kernel[:, 0, 0], out=weighted[i, 0])
            else:
                weighted[i] = np.einsum("mab,bnm->anm", scale * kernel, transforms[i], optimize=True)
        left = transforms.transpose(0, 1, 3, 2).reshape(-1, n)
        right = weighted.transpose(0, 1, 3, 2).reshape(-1, n)
        return left.conj().T @ right

    def level_kernels(self, k: float, kt: Floats, orders: Ints) -> tuple[Complexes, Complexes]:
        """D between levels, direct and through the ground, each (n_mode, n_level, n_level)."""
        waves = self.lattice.harmonics(orders, kt)
        square = (waves**2).sum(axis=1)[:, None, None]
        h = self.levels.heights
        direct = far_kernel(k, square, h[:, None] - h, self.split, self.lattice.area)
        if not self.ground:
            return direct, direct
        return direct, far_kernel(k, square, h[:, None] + h, self.split, self.lattice.area)


class _PhaseTable:
    """``exp(j G_pq . rho)`` at the cloud points, by powers of the two basic phases."""

    def __init__(self, rho: Floats, lattice: Lattice):
        self.basic = np.exp(1j * rho @ lattice.reciprocal.T)  # (n_q, 2)
        self.powers: dict[tuple[int, int], Complexes] = {}

    def _power(self, axis: int, order: int) -> Complexes:
        key = (axis, order)
        if key not in self.powers:
            self.powers[key] = self.basic[:, axis] ** order
        return self.powers[key]

    def __call__(self, orders: Ints) -> Complexes:
        p_low, q_low = orders.min(axis=0)
        p_all = np.stack([self._power(0, p) for p in range(p_low, orders[:, 0].max() + 1)], axis=1)
        q_all = np.stack([self._power(1, q) for q in range(q_low, orders[:, 1].max() + 1)], axis=1)
        return p_all[:, orders[:, 0] - p_low] * q_all[:, orders[:, 1] - q_low]
