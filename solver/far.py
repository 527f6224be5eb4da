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

from ..geometry.errors import InputError
from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from .cloud import Cloud
from .ewald import Split, far_kernel

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

MAX_EXACT_LEVELS = 6
BLOCK = 128
IMAGE_SIGN = (-1.0, -1.0, 1.0, -1.0)  # x, y, z current and charge in the ground's mirror


@dataclass(frozen=True)
class Layer:
    """Heights (n_level,) that carry some of the cloud's points; the weight of each on every point (n_q, n_level)."""

    heights: Floats
    weights: sparse.csr_matrix


def choose_layers(cloud: Cloud, split: Split, tolerance: float) -> list[Layer]:
    """Exact layers for horizontal elements, one Chebyshev layer for the rest.

    The kernel varies with z like ``exp(-z^2 E^2)``; the number of Chebyshev levels is the first at which interpolating
    ``exp(-(z - z')^2 E^2)`` between all heights meets the tolerance (tested on a fine grid).
    """
    z = cloud.points[:, 2]
    flat = _horizontal(cloud)
    heights = _distinct(z[flat], 1e-9 / split.splitting)
    if len(heights) > MAX_EXACT_LEVELS:
        flat, heights = np.zeros_like(flat), heights[:0]
    layers = [
        Layer(
            np.array([h]),
            sparse.csr_matrix((flat & (np.abs(z - h) <= 2e-9 / split.splitting)).astype(float)[:, None]),
        )
        for h in heights
    ]
    if not flat.all():
        levels = _chebyshev_levels(z[~flat], split, tolerance)
        weights = np.zeros((len(z), len(levels)))
        weights[~flat] = _barycentric_weights(levels, z[~flat])
        layers.append(Layer(levels, sparse.csr_matrix(weights)))
    return layers


def _horizontal(cloud: Cloud) -> NDArray[np.bool_]:
    """Points of elements that lie at one height."""
    n = int(cloud.element.max()) + 1
    low, high = np.full(n, np.inf), np.full(n, -np.inf)
    np.minimum.at(low, cloud.element, cloud.points[:, 2])
    np.maximum.at(high, cloud.element, cloud.points[:, 2])
    size = float(np.ptp(cloud.points, axis=0).max())
    return (high - low < 1e-10 * size)[cloud.element]


def layered_heights(layers: list[Layer], stack: Stack) -> Floats:
    """Heights of the conductors in a layered stack.

    Raises
    ------
    InputError
        If a conductor is not horizontal, stands at too many heights, or lies below the stack.
    """
    where = "[[conductor]]"
    if any(len(layer.heights) != 1 for layer in layers):
        raise InputError(
            "in a layered stack a conductor is vertical or tilted, or there are too many heights.",
            where=where,
            allowed=f"horizontal strips, plates and wires at up to {MAX_EXACT_LEVELS} heights in this version",
        )
    heights = np.array([layer.heights[0] for layer in layers])
    if stack.ground and heights.min() <= 0:
        lowest = f"a conductor lies at z = {heights.min():g} m."
        raise InputError(lowest, where=where, allowed="heights above the ground")
    return heights


def tall_fraction(cloud: Cloud) -> float:
    """Share of the points on vertical or tilted conductors, which need Chebyshev levels."""
    return 1.0 - float(_horizontal(cloud).mean())


def _distinct(z: Floats, tolerance: float) -> Floats:
    z = np.sort(z)
    return z[np.concatenate([[True], np.diff(z) > tolerance])] if len(z) else z


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
        scales = (current_scale, current_scale, current_scale, charge_scale)
        matrix = np.zeros((self.n, self.n), dtype=complex)
        for (a, b), components in self.component_kernels(k, square).items():
            kernels = [scale * kernel for scale, kernel in zip(scales, components, strict=True)]
            if a == b and len(self.layers[a].heights) == 1:
                self._add_flat(matrix, a, [kernel[:, 0, 0] for kernel in kernels], fields[a])
            else:
                self._add_pair(matrix, a, b, kernels, fields[a], fields[b])
        return matrix

    def component_kernels(self, k: float, square: Floats) -> dict[tuple[int, int], list[Complexes]]:
        """D for x, y, z currents and charges by pair of layers, each (n_mode, n_level, n_level)."""
        result = {}
        for a, one in enumerate(self.layers):
            for b, other in enumerate(self.layers):
                direct, image = self.level_kernels(k, square, one.heights, other.heights)
                result[a, b] = [direct + sign * image if self.ground else direct for sign in IMAGE_SIGN]
        return result

    def _add_pair(self, matrix: Complexes, a: int, b: int, kernels: list, left: list, right: list) -> None:
        """``G_a^H D G_b`` for any two layers; components with the same functions in one product."""
        parts: dict[bytes, tuple[Ints, Ints, list, list]] = {}
        for c in range(4):
            if left[c] is None or right[c] is None:
                continue
            rows, columns = self.transforms[a][c].columns, self.transforms[b][c].columns
            part = parts.setdefault(rows.tobytes() + b"|" + columns.tobytes(), (rows, columns, [], []))
            part[2].append(left[c].reshape(-1, len(rows)))
            part[3].append((kernels[c] @ right[c]).reshape(-1, len(columns)))
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
