"""Transforms of the reduced basis at Floquet waves, as polynomials in k_t over the Brillouin zone.

For a point at (x, y) and |kx| <= Rx the phase is the Chebyshev series (Jacobi-Anger)

    exp(j kx x) = sum_n c_n j^n J_n(Rx x) T_n(kx / Rx),    c_0 = 1, c_n = 2

so the transform of any current at ``k_t + G`` has coefficients in closed form, and all of them are weighted sums over
the cloud, found once per basis vector and reciprocal vector G. A transform is entire in k_t: no singularity is crossed.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.special import jv

from ..geometry.lattice import Lattice
from .cloud import Cloud
from .far import Layer

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

CHUNK_BYTES = 1e8


class BrillouinZone:
    """The zone nearest to k_t = 0 and the box [-Rx, Rx] x [-Ry, Ry] around it."""

    def __init__(self, lattice: Lattice):
        self.lattice = lattice
        steps = np.stack(np.meshgrid([-1, 0, 1], [-1, 0, 1], indexing="ij"), -1).reshape(-1, 2)
        self._steps = steps[np.argsort(np.abs(steps).sum(axis=1), kind="stable")]
        self._neighbours = self._steps @ lattice.reciprocal
        self.box = self._extent()

    def _extent(self) -> Floats:
        """From the corners of the zone: circumcentres of 0 and two neighbours that no other is closer to."""
        found = []
        others = self._neighbours[1:]
        for i, g in enumerate(others):
            for h in others[:i]:
                if abs(g[0] * h[1] - g[1] * h[0]) > 1e-9 * self.lattice.area**-1:
                    corner = np.linalg.solve(np.stack([g, h]), 0.5 * np.array([g @ g, h @ h]))
                    if np.all(others @ corner <= 0.5 * (others**2).sum(axis=1) * (1 + 1e-9)):
                        found.append(corner)
        return np.abs(np.array(found)).max(axis=0) * (1 + 1e-6)

    def reduce(self, kt: Floats) -> tuple[Floats, Ints]:
        """k_t in the zone and the orders taken off: ``kt = reduced + orders . (b1, b2)``; (n, 2) each."""
        inverse = np.linalg.inv(self.lattice.reciprocal)
        orders = np.round(kt @ inverse).astype(np.int64)
        rest = kt - orders @ self.lattice.reciprocal
        distance = ((rest[:, None] - self._neighbours) ** 2).sum(axis=2)
        pick = np.argmin(distance * (1 + 1e-12 * (np.arange(len(self._steps)) > 0)), axis=1)
        return rest - self._neighbours[pick], orders + self._steps[pick]


class ModeTransforms:
    """Transforms ``int f exp(+j k . (rho - centre))`` of basis vectors by layer, component and level.

    Parameters
    ----------
    cloud, lattice (reduced), layers : of the far part
    radius : rad/m; reciprocal vectors up to this length are kept
    zone : BrillouinZone
    tolerance : truncation of the series, relative to the phases

    Attributes
    ----------
    orders : (n_order, 2), closed under negation; `negative` : (n_order,) index of each one's negative
    coefficients : by layer (n_poly, n_order, n_component, n_level, r) for the components in `components`
    """

    def __init__(
        self, cloud: Cloud, lattice: Lattice, layers: list[Layer], radius: float, zone: BrillouinZone, tolerance: float
    ):
        self.lattice, self.layers, self.zone = lattice, layers, zone
        self.orders = lattice.orders_within(radius, np.zeros(2))
        index = {tuple(order): i for i, order in enumerate(self.orders)}
        self.negative = np.array([index[-p, -q] for p, q in self.orders])
        self._index = index
        rho = cloud.points[:, :2]
        self.centre = 0.5 * (rho.min(axis=0) + rho.max(axis=0))
        self._rho = rho - self.centre
        self.degrees, self._series = _series(self._rho, zone.box, tolerance)
        self._parity = (-1.0) ** self.degrees.sum(axis=1)
        matrices = [*cloud.current, cloud.charge]
        self.components: list[list[int]] = []
        self._weights: list[tuple[Ints, list[list[sparse.csr_matrix]]]] = []
        for layer in layers:
            carried = np.flatnonzero(np.asarray(abs(layer.weights).sum(axis=1)).ravel())
            kept = [c for c in range(4) if matrices[c][carried].nnz]
            levels = [layer.weights[carried][:, [i]] for i in range(len(layer.heights))]
            parts = [[sparse.csr_matrix(matrices[c][carried].multiply(w)) for w in levels] for c in kept]
            self.components.append(kept)
            self._weights.append((carried, parts))
        shape = (len(self.degrees), len(self.orders))
        self.coefficients = [
            np.zeros((*shape, len(kept), len(layer.heights), 0), dtype=complex)
            for kept, layer in zip(self.components, layers, strict=True)
        ]

    def extend(self, vectors: Complexes) -> None:
        """Append basis vectors (n, m)."""
        harmonics = self.orders @ self.lattice.reciprocal
        for a, (carried, parts) in enumerate(self._weights):
            weighed = np.concatenate([w @ vectors for component in parts for w in component], axis=1)
            series, rho = self._series[:, carried], self._rho[carried]
            added = np.empty((len(self.degrees), len(self.orders), weighed.shape[1]), dtype=complex)
            step = max(1, int(CHUNK_BYTES / (16 * weighed.size + 1)))
            for start in range(0, len(harmonics), step):
                phases = np.exp(1j * (rho @ harmonics[start : start + step].T))
                columns = (phases[:, :, None] * weighed[:, None]).reshape(len(rho), -1)
                added[:, start : start + step] = (series @ columns).reshape(len(series), -1, weighed.shape[1])
            shape = (*added.shape[:2], len(parts), len(self.layers[a].heights), vectors.shape[1])
            self.coefficients[a] = np.concatenate([self.coefficients[a], added.reshape(shape)], axis=-1)

    def polynomials(self, kt: Floats) -> Floats:
        """T_n(kx/Rx) T_m(ky/Ry) at points (n, 2) of the zone, (n, n_poly)."""
        x = np.clip(kt / self.zone.box, -1, 1)
        count = self.degrees.max(axis=0) + 1
        tables = [np.cos(np.arccos(x[:, axis : axis + 1]) * np.arange(count[axis])) for axis in (0, 1)]
        return tables[0][:, self.degrees[:, 0]] * tables[1][:, self.degrees[:, 1]]

    def at(self, polynomials: Floats, pick: Ints | slice) -> list[Complexes]:
        """Transforms at ``kt + G`` of the picked orders, by layer (n, n_pick, n_component, n_level, r)."""
        return [_combine(polynomials, c[:, pick]) for c in self.coefficients]

    def reversed_at(self, polynomials: Floats, pick: Ints | slice) -> list[Complexes]:
        """Transforms at ``-(kt + G)`` of the picked orders, like `at`."""
        polynomials = polynomials * self._parity
        if isinstance(pick, slice):  # fewer points than polynomials: the result is less to move than the coefficients
            return [_combine(polynomials, c)[:, self.negative[pick]] for c in self.coefficients]
        return [_combine(polynomials, c[:, self.negative[pick]]) for c in self.coefficients]

    def find(self, orders: Ints) -> Ints:
        """Index of each order (n, 2); -1 where it is not kept."""
        return np.array([self._index.get((int(p), int(q)), -1) for p, q in orders])


def _combine(polynomials: Floats, coefficients: Complexes) -> Complexes:
    flat = np.ascontiguousarray(coefficients).reshape(len(coefficients), -1).view(float)
    return (polynomials @ flat).view(complex).reshape(len(polynomials), *coefficients.shape[1:])


def _series(rho: Floats, box: Floats, tolerance: float) -> tuple[Ints, Complexes]:
    """Degrees (n_poly, 2) kept and ``c_n c_m j^(n+m) J_n(Rx x) J_m(Ry y)`` at the points, (n_poly, n_q)."""
    tables, sizes = [], []
    for axis in (0, 1):
        argument = rho[:, axis] * box[axis]
        n = np.arange(8 + int(2 * np.abs(argument).max()) + 20)
        table = np.where(n == 0, 1.0, 2.0)[:, None] * jv(n[:, None], argument)
        tables.append(np.array([1, 1j, -1, -1j])[n % 4][:, None] * table)
        sizes.append(np.abs(table).max(axis=1))
    kept = np.argwhere(np.outer(*sizes) > 0.1 * tolerance)
    return kept, tables[0][kept[:, 0]] * tables[1][kept[:, 1]]
