"""The far part of the operator: a sum over Floquet waves of transforms of the basis functions.

The smooth far kernel depends on the heights of source and observer. Points are carried by *layers*: one exact level
for all horizontal conductors at one height, and one layer of Chebyshev levels with barycentric interpolation for
everything else (vertical and tilted conductors). The matrix is the sum over pairs of layers of ``G^H D G``, G the
transforms by level, D small matrices between levels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.linalg.blas import zgemm, zherk

from ..geometry.lattice import Lattice
from .cloud import Cloud
from .ewald import Split, far_kernel
from .zones import Zoning

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

BLOCK = 128
IMAGE_SIGN = (-1.0, -1.0, 1.0, -1.0)  # x, y, z current and charge in the ground's mirror


@dataclass(frozen=True)
class Layer:
    """Heights (n_level,) that carry some of the cloud's points; the weight of each on every point (n_q, n_level)."""

    heights: Floats
    weights: sparse.csr_matrix


@dataclass(frozen=True)
class Coupling:
    """A kernel between two components: 0, 1, 2 the x, y, z currents, 3 the charge.

    `kernel` : (n_mode, n_level, n_level); `of_charges` : whether it goes with ``eta / j k`` instead of ``j k eta``
    """

    row: int
    column: int
    kernel: Complexes
    of_charges: bool = False


def choose_layers(cloud: Cloud, zoning: Zoning, split: Split, tolerance: float) -> list[Layer]:
    """One exact level for a zone of one height, Chebyshev levels for the others.

    The kernel varies with z like ``exp(-z^2 E^2)``; the number of Chebyshev levels is the first at which interpolating
    ``exp(-(z - z')^2 E^2)`` between all heights meets the tolerance (tested on a fine grid).
    """
    z, zone = cloud.points[:, 2], zoning.of_element[cloud.element]
    layers = []
    for i, one in enumerate(zoning.zones):
        mine = zone == i
        levels = np.array([one.low])
        weights = mine.astype(float)[:, None]
        if not one.is_level:
            levels = _chebyshev_levels(np.array([one.low, one.high]), split, tolerance)
            weights = np.zeros((len(z), len(levels)))
            weights[mine] = _barycentric_weights(levels, z[mine])
        layers.append(Layer(levels, sparse.csr_matrix(weights)))
    return layers


def tall_fraction(cloud: Cloud, zoning: Zoning) -> float:
    """Share of the points on vertical or tilted conductors, which need Chebyshev levels."""
    flat = np.array([zone.is_level for zone in zoning.zones])
    return 1.0 - float(flat[zoning.of_element[cloud.element]].mean())


def _chebyshev_levels(z: Floats, split: Split, tolerance: float) -> Floats:
    low, high = float(z.min()), float(z.max())
    fine = np.linspace(low, high, 101)
    exact = np.exp(-(((fine[:, None] - fine) * split.splitting) ** 2))
    n = 3
    while True:
        levels = _chebyshev(low, high, n)
        weights = _barycentric_weights(levels, fine)
        nodes = np.exp(-(((levels[:, None] - levels) * split.splitting) ** 2))
        if np.abs(weights @ nodes @ weights.T - exact).max() < 0.1 * tolerance or n >= 80:
            return levels
        n += 1


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


class _Transform:
    """One component of one layer: which functions it has, and their weights on the points."""

    def __init__(self, component: sparse.csr_matrix, layer: Layer):
        self.columns = np.flatnonzero(np.asarray(abs(layer.weights).sum(axis=1).T @ abs(component)).ravel())
        n_level = len(layer.heights)
        picked = component[:, self.columns]
        self.stacked = sparse.csr_matrix(
            sparse.vstack([picked.multiply(layer.weights[:, [level]]).T for level in range(n_level)])
        )
        self.n_level = n_level

    def __call__(self, phase: Complexes) -> NDArray:
        """(n_mode, n_level, n_columns) from the phases (n_q, n_mode)."""
        result = (self.stacked @ phase).reshape(self.n_level, len(self.columns), -1)
        return np.ascontiguousarray(result.transpose(2, 0, 1))


class FarPart:
    """Evaluates the far part at any (k, kt), with everything that depends on the mesh alone kept."""

    def __init__(self, cloud: Cloud, lattice: Lattice, split: Split, layers: list[Layer], ground: bool):
        self.lattice, self.split, self.ground = lattice, split, ground
        self.n = cloud.n
        self.points = cloud.points
        self.layers = layers
        components = [*cloud.current, cloud.charge]
        self.transforms = [[_Transform(component, layer) for component in components] for layer in self.layers]
        self._phases = _PhaseTable(cloud.points[:, :2], lattice)
        self._triangle: Complexes | None = None

    @property
    def n_level(self) -> int:
        """Levels in all layers."""
        return sum(len(layer.heights) for layer in self.layers)

    def orders(self, k: float, kt: Floats) -> Ints:
        """Floquet orders that matter at (k, kt), shape (n_mode, 2)."""
        return self.lattice.orders_within(float(np.hypot(self.split.far_radius, k)), kt)

    def matrix(self, k: float, kt: Floats, current_scale: complex, charge_scale: complex) -> Complexes:
        """``current_scale A_far + charge_scale Q_far``, (n, n)."""
        orders = self.orders(k, kt)
        phase = np.exp(1j * (self.points[:, :2] @ kt))[:, None] * self._phases(orders)
        fields = [[t(phase) if len(t.columns) else None for t in layer] for layer in self.transforms]
        square = (self.lattice.harmonics(orders, kt) ** 2).sum(axis=1)
        scales = (current_scale, charge_scale)
        matrix = np.zeros((self.n, self.n), dtype=complex)
        for (a, b), couplings in self.component_kernels(k, square).items():
            scaled = [(c.row, c.column, scales[c.of_charges] * c.kernel) for c in couplings]
            if a == b and len(self.layers[a].heights) == 1:
                self._add_flat(matrix, a, [kernel[:, 0, 0] for _, _, kernel in scaled], fields[a])
            else:
                self._add_pair(matrix, a, b, scaled, fields[a], fields[b])
        return matrix

    def component_kernels(self, k: float, square: Floats) -> dict[tuple[int, int], list[Coupling]]:
        """D between the components of every pair of layers; of one level with itself in the order x, y, z, charge."""
        result = {}
        for a, one in enumerate(self.layers):
            for b, other in enumerate(self.layers):
                direct, image = self.level_kernels(k, square, one.heights, other.heights)
                result[a, b] = [
                    Coupling(c, c, direct + sign * image if self.ground else direct, c == 3)
                    for c, sign in enumerate(IMAGE_SIGN)
                ]
        return result

    def _add_pair(self, matrix: Complexes, a: int, b: int, couplings: list, left: list, right: list) -> None:
        """``G_a^H D G_b`` for any two layers; components with the same functions in one product."""
        parts: dict[bytes, tuple[Ints, Ints, list, list]] = {}
        for row, column, kernel in couplings:
            if left[row] is None or right[column] is None:
                continue
            rows, columns = self.transforms[a][row].columns, self.transforms[b][column].columns
            part = parts.setdefault(rows.tobytes() + b"|" + columns.tobytes(), (rows, columns, [], []))
            part[2].append(left[row].reshape(-1, len(rows)))
            part[3].append((kernel @ right[column]).reshape(-1, len(columns)))
        for rows, columns, lefts, rights in parts.values():
            _add_at(matrix, rows, columns, np.concatenate(lefts).conj().T @ np.concatenate(rights))

    def _add_flat(self, matrix: Complexes, a: int, kernels: list[Complexes], fields: list) -> None:
        """One level with itself: waves whose kernel is imaginary (evanescent, no loss) give j times a Hermitian matrix,
        at half the cost of a general product; the others are few."""
        parts: dict[bytes, tuple[Ints, list, list]] = {}
        for c in range(4):
            if fields[c] is not None:
                columns = self.transforms[a][c].columns
                part = parts.setdefault(columns.tobytes(), (columns, [], []))
                part[1].append(fields[c][:, 0])
                part[2].append(kernels[c])
        for columns, field_list, kernel_list in parts.values():
            field, kernel = np.concatenate(field_list), np.concatenate(kernel_list)
            reactive = np.abs(np.real(kernel)) <= 1e-14 * np.abs(kernel)
            rest = ~reactive
            target = matrix if len(columns) == self.n else np.zeros((len(columns), len(columns)), dtype=complex)
            self._add_hermitian(target, field, np.where(reactive, np.imag(kernel), 0.0))
            if rest.any():  # target += field^H kernel field in place: the transpose is what BLAS calls a matrix
                few = field[rest]
                zgemm(1.0, (kernel[rest, None] * few).T, few.conj(), beta=1.0, c=target.T, overwrite_c=True)
            if target is not matrix:
                matrix[np.ix_(columns, columns)] += target

    def _add_hermitian(self, target: Complexes, field: Complexes, weight: Floats) -> None:
        """Add ``j field^H diag(weight) field`` with real weights, by rank-k updates of one triangle."""
        n = field.shape[1]
        if self._triangle is None or len(self._triangle) != n:
            self._triangle = np.zeros((n, n), dtype=complex, order="F")
        work = self._triangle
        work.fill(0.0)
        for sign, pick in ((1.0, weight > 0), (-1.0, weight < 0)):
            if pick.any():
                scaled = np.sqrt(np.abs(weight[pick]))[:, None] * field[pick]
                work = zherk(sign, scaled.T, beta=1.0, c=work, overwrite_c=True)
        lower = work.T  # the upper triangle of the transpose
        lower[np.arange(n), np.arange(n)] *= 0.5
        starts = range(0, n, BLOCK)  # block by block, since a whole transpose would miss the cache at every step
        for i in starts:
            rows = slice(i, i + BLOCK)
            for j in range(0, i + 1, BLOCK):
                columns = slice(j, j + BLOCK)
                block = 1j * lower[rows, columns]
                target[rows, columns] += block
                target[columns, rows] -= block.conj().T

    def level_kernels(self, k: float, square: Floats, z: Floats, other: Floats) -> tuple[Complexes, Complexes]:
        """D between levels, direct and through the ground, each (n_mode, n_level, n_level)."""
        square = square[:, None, None]
        direct = far_kernel(k, square, z[:, None] - other, self.split, self.lattice.area)
        if not self.ground:
            return direct, direct
        return direct, far_kernel(k, square, z[:, None] + other, self.split, self.lattice.area)


def _add_at(matrix: Complexes, rows: Ints, columns: Ints, product: Complexes) -> None:
    if product.shape == matrix.shape:
        matrix += product
    else:
        matrix[np.ix_(rows, columns)] += product


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
