"""The far part of the reduced model: few exact Floquet waves, and a rest that is smooth in k and k_t.

The rest, ``sum over all waves of D less the exact ones``, is periodic over the Brillouin zone and has no singularity
there: a short sum over lattice cells, found from samples on a regular grid of k_t, with Chebyshev nodes in k^2. The
exact waves keep every branch point and pole (`operator_view.few_waves`).
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from copy import copy

import numpy as np
from numpy.typing import NDArray

from .far import FarPart
from .lag_sums import half_plane, lags_from_samples
from .mode_transforms import BrillouinZone, ModeTransforms
from .operator_view import CellView, couplings

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]
Kernels = dict[tuple[int, int], list[tuple[int, int, Complexes]]]

AIR_REACH = 2.6  # cells of the rest: first guess of their distance over sqrt(S)
LAYERED_REACH = 5.5
SAMPLE_BYTES = 2e8  # memory of the transforms at points sampled together
KEPT_BYTES = 4e8  # kernels at the samples are kept for the next basis vectors up to this size


class ExactWaves:
    """The sum over the Floquet waves kept exact, of transforms of r basis vectors.

    `memory` : of kernels that will be asked for again with a larger basis; None: none are kept
    """

    def __init__(self, view: CellView):
        self.view, self.zone = view, BrillouinZone(view.lattice)
        reach = view.window.high + float(np.linalg.norm(self.zone.box))
        self.transforms = ModeTransforms(view.cloud, view.lattice, view.exact.layers, reach, self.zone, view.tolerance)
        self.memory: KernelMemory | None = None

    def copy(self) -> ExactWaves:
        """As it is now, whatever is appended later."""
        other = copy(self)
        other.transforms = copy(self.transforms)
        other.transforms.coefficients = list(self.transforms.coefficients)
        return other

    def active(self, kt: Floats) -> Ints:
        """Indices of the orders with weight at any of the points (n, 2) of the zone."""
        waves = kt[:, None] + self.transforms.orders @ self.view.lattice.reciprocal
        return np.flatnonzero(((waves**2).sum(axis=2) < self.view.window.high**2).any(axis=0))

    def matrices(self, k: Floats, kt: Floats, first: int = 0) -> Complexes:
        """X of the exact waves at wavenumbers (n_k,) and points kt (n, 2) of the zone, (n, n_k, r, r).

        Rows and columns from `first` on; the others are zero.
        """
        pick = self.active(kt)
        polynomials = self.transforms.polynomials(kt)
        plus, minus = self.transforms.at(polynomials, pick), self.transforms.reversed_at(polynomials, pick)
        return self.forms(k, kt, plus, minus, pick, first)

    def forms(
        self, k: Floats, kt: Floats, plus: list[Complexes], minus: list[Complexes], pick: Ints, first: int = 0
    ) -> Complexes:
        """The same from the transforms of the picked orders at hand."""
        by_k = (self._kernels(float(one), kt, pick) for one in k)
        return _forms(by_k, self.transforms, plus, minus, first)

    def _kernels(self, k: float, kt: Floats, pick: Ints) -> Kernels:
        """Weighted kernels at points kt (n, 2), from memory if it holds them."""
        key = (k, kt.tobytes())
        kernels = self.memory.found.get(key) if self.memory else None
        if kernels is None:
            waves = kt[:, None] + self.transforms.orders[pick] @ self.view.lattice.reciprocal
            square = (waves**2).sum(axis=2)
            kernels = _kernels(self.view.exact, k, square, self.view.window(square))
            if self.memory:
                self.memory.keep(key, kernels)
        return kernels


class KernelMemory:
    """Kernels by wavenumber and points, up to KEPT_BYTES."""

    def __init__(self) -> None:
        self.found: dict[tuple[float, bytes], Kernels] = {}
        self.size = 0

    def keep(self, key: tuple[float, bytes], kernels: Kernels) -> None:
        """Remember one more, if there is room."""
        distinct = {id(d): d.nbytes for entries in kernels.values() for _, _, d in entries}
        if self.size + sum(distinct.values()) < KEPT_BYTES:
            self.size += sum(distinct.values())
            self.found[key] = kernels


class SmoothRest:
    """Lag matrices of the rest at Chebyshev nodes in k^2, growing with the basis.

    Parameters
    ----------
    view : CellView
    exact : its ExactWaves, always extended with the same basis vectors before this
    k_min, k_max : band, rad/m

    Attributes
    ----------
    cells : (n_lag, 2) half-plane cells; `lags` : X by node, (n_node, n_lag, r, r)
    """

    def __init__(self, view: CellView, exact: ExactWaves, k_min: float, k_max: float):
        self.view, self.exact, self.zone = view, exact, exact.zone
        self.k_min, self.k_max = k_min, k_max
        reach = view.reach(view.k_max) + float(np.linalg.norm(self.zone.box))
        self.transforms = ModeTransforms(view.cloud, view.lattice, view.far.layers, reach, self.zone, view.tolerance)
        length = (AIR_REACH if view.stack is None else LAYERED_REACH) * np.sqrt(view.lattice.area)
        spacing = 2 * np.pi / np.linalg.norm(view.lattice.reciprocal, axis=1)
        self.sample(node_count(k_min, k_max), [int(r) for r in np.ceil(length / spacing)])

    def sample(self, nodes: int, reach: list[int]) -> None:
        """Sample anew with so many nodes in k^2 and cells up to `reach`."""
        self.nodes, self.reach = nodes, reach
        self._kept: list[Kernels] | None = None
        self.cells = half_plane(*reach)  # one half of the grid's points are numbered like these cells
        self.lags = np.zeros((nodes, len(self.cells), 0, 0), dtype=complex)
        self._grow()

    def extend(self, vectors: Complexes) -> None:
        """Append basis vectors (n, m)."""
        self.transforms.extend(vectors)
        self._grow()

    def samples(self, k: Floats, kt: Floats, first: int = 0, kept: list[Kernels] | None = None) -> Complexes:
        """The rest at wavenumbers (n_k,) and points (n, 2) anywhere, (n, n_k, r, r), straight from its definition.

        Rows and columns from `first` on; the others are zero. `kept` : the kernels there, if at hand.
        """
        kt, _ = self.zone.reduce(kt)
        every = slice(None)
        size = 4 * sum(c[0].nbytes for c in self.transforms.coefficients)
        step = max(1, int(SAMPLE_BYTES / max(size, 1)))
        found = []
        for start in range(0, len(kt), step):
            some = kt[start : start + step]
            polynomials = self.transforms.polynomials(some)
            plus, minus = self.transforms.at(polynomials, every), self.transforms.reversed_at(polynomials, every)
            if kept is None:
                by_k: Iterable[Kernels] = self._kernels(k, some)
            else:
                by_k = (_part(kernels, start, start + step) for kernels in kept)
            rest = _forms(by_k, self.transforms, plus, minus, first)
            if self.view.exact is not self.view.far:
                rest -= self.exact.matrices(k, some, first)
            found.append(rest)
        return np.concatenate(found)

    def _kernels(self, k: Floats, kt: Floats) -> Iterator[Kernels]:
        """Kernels of all waves at points kt (n, 2) of the zone, for every wavenumber: within the window only their
        remainder, or in full where `ExactWaves` has kernels of its own."""
        square = ((kt[:, None] + self.transforms.orders @ self.view.lattice.reciprocal) ** 2).sum(axis=2)
        weight = 1.0 - self.view.window(square) if self.view.exact is self.view.far else np.ones_like(square)
        for one in k:
            yield _kernels(self.view.far, float(one), square, weight)

    def _grow(self) -> None:
        """Lag matrices of the vectors that have none yet."""
        done, r = self.lags.shape[-1], self.transforms.coefficients[0].shape[-1]
        if done == r:
            return
        counts = 2 * np.array(self.reach) + 1
        kt = (self.cells / counts) @ self.view.lattice.reciprocal
        nodes = chebyshev_nodes(self.k_min, self.k_max, self.nodes)
        levels = sum(len(layer.heights) for layer in self.view.far.layers)
        size = 48.0 * levels**2 * len(nodes) * len(kt) * len(self.transforms.orders)
        if self._kept is None and size < KEPT_BYTES:
            self._kept = list(self._kernels(nodes, self.zone.reduce(kt)[0]))
        samples = self.samples(nodes, kt, done, self._kept)
        phases = np.exp(2j * np.pi * ((self.cells / counts) @ self.cells.T))
        # `samples` holds both strips: transposed at -kt they are each other
        lags = lags_from_samples(samples, phases, int(counts.prod())).swapaxes(0, 1)
        lags[:, :, :done, :done] = self.lags
        self.lags = np.ascontiguousarray(lags)


def node_count(k_min: float, k_max: float, digits: float = 6.0) -> int:
    """Chebyshev nodes in k^2 for functions singular at k = 0 at worst: ``rho^-n = 10^-digits``, between 1 and 16."""
    if k_max <= k_min * (1 + 1e-12):
        return 1
    z = (k_max**2 + k_min**2) / (k_max**2 - k_min**2)
    return int(np.clip(np.ceil(digits * np.log(10) / np.log(z + np.sqrt(z * z - 1))), 3, 16))


def chebyshev_nodes(k_min: float, k_max: float, n: int) -> Floats:
    """Wavenumbers whose squares are Chebyshev nodes of the first kind over the band, (n,)."""
    x = np.cos(np.pi * (np.arange(n) + 0.5) / n)
    return np.sqrt(0.5 * (k_max**2 + k_min**2) + 0.5 * (k_max**2 - k_min**2) * x)


def node_weights(k_min: float, k_max: float, n: int, k: float) -> Floats:
    """Lagrange polynomials of the nodes at k, (n,)."""
    if n == 1:
        return np.ones(1)
    nodes = chebyshev_nodes(k_min, k_max, n) ** 2
    terms = (-1.0) ** np.arange(n) * np.sin(np.pi * (np.arange(n) + 0.5) / n)
    gap = k * k - nodes
    hit = np.abs(gap) < 1e-13 * k_max**2
    if hit.any():
        return hit.astype(float)
    return (terms / gap) / (terms / gap).sum()


def _forms(
    by_k: Iterable[Kernels], table: ModeTransforms, plus: list[Complexes], minus: list[Complexes], first: int = 0
) -> Complexes:
    """``sum over waves of T(-k)^T D T(k)`` in X, (n, n_k, r, r), for the kernels D of every wavenumber.

    Only rows and columns from `first` on; the others are zero.
    """
    n, r = len(plus[0]), plus[0].shape[-1]
    added_plus, added_minus = [t[..., first:] for t in plus], [t[..., first:] for t in minus]
    rights, lefts = [], []
    for kernels in by_k:
        rights.append(_applied(kernels, added_plus, table.components))
        if first:
            lefts.append(_applied(_transposed(kernels), added_minus, table.components))
    result = np.zeros((n, len(rights), r, r), dtype=complex)
    # all wavenumbers side by side: few long products instead of many short ones
    for whole, applied in zip(minus, zip(*rights, strict=True), strict=True):
        product = whole.reshape(n, -1, r).swapaxes(1, 2) @ _beside(applied)
        result[:, :, :, first:] += product.reshape(n, r, len(applied), -1).swapaxes(1, 2)
    if first:
        for whole, applied in zip(plus, zip(*lefts, strict=True), strict=True):
            product = _beside(applied).swapaxes(1, 2) @ whole.reshape(n, -1, r)
            result[:, :, first:, :first] += product.reshape(n, len(applied), r - first, r)[..., :first]
    return result


def _beside(applied: tuple[Complexes, ...]) -> Complexes:
    """Transforms (n, ..., m) of several wavenumbers as columns side by side, (n, rows, n_k m)."""
    n, m = len(applied[0]), applied[0].shape[-1]
    return np.stack([one.reshape(n, -1, m) for one in applied], axis=2).reshape(n, -1, len(applied) * m)


def _transposed(kernels: Kernels) -> Kernels:
    return {
        (b, a): [(column, row, d.swapaxes(2, 3)) for row, column, d in entries] for (a, b), entries in kernels.items()
    }


def _kernels(far: FarPart, k: float, square: Floats, weight: Floats) -> Kernels:
    """By pair of layers (row component, column component, weighted kernel (n, n_mode, n_level, n_level)).

    Equal k_t^2, common among the points of a regular grid, are worked out once.
    """
    scale = float(square.max()) or 1.0
    distinct, place = np.unique(np.round(square.ravel() / scale, 12), return_inverse=True)
    worth = len(distinct) < 0.7 * square.size
    found = couplings(far, k, distinct * scale if worth else square.ravel())
    result: Kernels = {}
    for pair, entries in found.items():
        known: dict[tuple[int, float], Complexes] = {}
        for row, column, kernel, factor in entries:
            key = (id(kernel), factor)
            if key not in known:
                spread = kernel[place] if worth else kernel
                known[key] = (factor * weight)[..., None, None] * spread.reshape(*square.shape, *kernel.shape[1:])
            result.setdefault(pair, []).append((row, column, known[key]))
    return result


def _part(kernels: Kernels, start: int, stop: int) -> Kernels:
    """The kernels of some of the points."""
    return {pair: [(row, col, d[start:stop]) for row, col, d in entries] for pair, entries in kernels.items()}


def _applied(kernels: Kernels, fields: list[Complexes], components: list[list[int]]) -> list[Complexes]:
    """Kernels times transforms, by layer, of the transforms' shape (n, n_mode, n_component, n_level, r)."""
    result = [np.zeros(field.shape, dtype=complex) for field in fields]
    for (a, b), entries in kernels.items():
        for row, column, kernel in entries:
            if row in components[a] and column in components[b]:
                field = fields[b][:, :, components[b].index(column)]
                product = kernel * field if kernel.shape[2:] == (1, 1) else kernel @ field
                result[a][:, :, components[a].index(row)] += product
    return result
