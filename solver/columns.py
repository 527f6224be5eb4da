"""Near part of vertical conductors in a stack: points above each other handled together, all rays at once.

Ewald's near kernel is an integral over t, from the splitting parameter upwards, of ``exp(-rho^2 t^2)`` times what
depends on the heights alone. So is the kernel K_c between charges and vertical currents: a ray of it has the spectrum
``a exp(-g D) / (2 g^2)``, ``g^2 = k_t^2 - kappa k^2``, which is the integral of ``exp(-g s) / (2 g)`` over s from D
upwards, a line of images from the image of the source to infinity, and

    (a / 4 pi) int (dt / t) erfc(t D) exp(-rho^2 t^2 + kappa k^2 / 4 t^2)            in space

(derived anew from P. P. Ewald, Ann. Phys. 369, 253, 1921; the plane of k_t: `shares`). On fixed nodes t the factor of
heights is summed over rays once; for a column of points the rest is one small matrix product. K_c is as mild as a
logarithm, and the cloud's own quadrature is enough for it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import factorial

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.spatial import cKDTree
from scipy.special import erfc

from .cloud import Cloud
from .ewald import Split
from .logarithmic import log_nodes, log_profile
from .rays import CrossRay, Ray, at_heights, log_powers, real_if_real
from .zones import Zoning

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

GROUP_COST = 2000  # handling a group costs what so many pairs of points cost, each with one ray


@dataclass(frozen=True)
class _Product:
    """``left kernel right^T`` on some rows and columns of the currents' or charges' sums."""

    rows: Ints
    columns: Ints
    left: sparse.csr_matrix
    right: sparse.csr_matrix
    profile: NDArray  # factors of heights (powers, n_source, n_node)
    of_charges: bool


@dataclass(frozen=True)
class _Group:
    """Observers at one height and a column of sources."""

    observers: Ints
    sources: Ints
    products: list[_Product]
    both_ways: bool


class ColumnSums:
    """Near sums of all pairs of zones with an extent in z, for one cloud.

    `left` : the rays that are not covered: those between levels, the direct ones within a zone (which have a
    singularity at the point itself), and those of zones whose points do not stand above each other. K_c is covered
    for all pairs.
    """

    def __init__(self, cloud: Cloud, zoning: Zoning, split: Split, rays: Sequence[Ray], cross: Sequence[CrossRay]):
        self.cloud, self.split = cloud, split
        self.zone = zoning.of_element[cloud.element]
        self.charge = sparse.csr_matrix(cloud.charge.T)
        self.current = [sparse.csr_matrix(m.T) for m in cloud.current]
        grain = 1e-9 * max(float(np.ptp(cloud.points, axis=0).max()), 1e-30)
        self.t, self.weights = log_nodes(split.splitting, _least_distance(cloud.points, 1e3 * grain))
        numbers = [x for ray in rays for x in ray.numbers]
        numbers += [x for ray in cross for x in (ray.amplitude, ray.kappa)]
        self.kind = np.result_type(real_if_real(np.array(numbers)))
        tall = [i for i, zone in enumerate(zoning.zones) if not zone.is_level]
        columns = {i: _groups(np.round(cloud.points[self.zone == i, :2] / grain)) for i in tall}
        self.columns = {i: [np.flatnonzero(self.zone == i)[c] for c in columns[i]] for i in tall}
        heights = [_groups(np.round(cloud.points[self.zone == i, 2:] / grain)) for i in range(len(zoning.zones))]
        self.levels = [[np.flatnonzero(self.zone == i)[c] for c in group] for i, group in enumerate(heights)]
        once = [(o, s) for s in tall for o in range(len(zoning.zones)) if o not in tall or o <= s]
        covered = [pair for pair in once if self._pays(pair, rays)]
        both = {*covered, *((s, o) for o, s in covered)}
        self.left = [ray for ray in rays if ray.pair not in both or _is_direct(ray)]
        self.groups: list[_Group] = []
        for pair in covered:
            self._gather(pair, [ray for ray in rays if ray.pair == pair and not _is_direct(ray)], None)
        for pair in dict.fromkeys(ray.pair for ray in cross):
            self._gather(pair, None, [ray for ray in cross if ray.pair == pair])

    def _pays(self, pair: tuple[int, int], rays: Sequence[Ray]) -> bool:
        """Whether groups cost less than every ray of a pair of zones between single points."""
        points = [int((self.zone == i).sum()) for i in pair]
        groups = len(self.levels[pair[0]]) * len(self.columns[pair[1]])
        return GROUP_COST * groups < sum(ray.pair == pair for ray in rays) * points[0] * points[1]

    def _gather(self, pair: tuple[int, int], rays: list[Ray] | None, cross: list[CrossRay] | None) -> None:
        z = self.cloud.points[:, 2]
        for observers in self.levels[pair[0]]:
            for sources in self.columns[pair[1]]:
                here, there = float(z[observers[0]]), z[sources]
                kernels = self._profiles(here, there, rays) if rays else {"c": self._crossed(here, there, cross or [])}
                products = [
                    product
                    for name, profile in kernels.items()
                    for product in self._products(name, observers, sources, profile)
                ]
                if products:
                    self.groups.append(_Group(observers, sources, products, rays is None or pair[0] != pair[1]))

    def _products(self, name: str, observers: Ints, sources: Ints, profile: NDArray) -> list[_Product]:
        x, y, z = self.current
        parts = {"a": [(x, x), (y, y)], "v": [(z, z)], "q": [(self.charge, self.charge)], "c": [(self.charge, z)]}
        found = []
        for one, other in parts[name]:
            left, right = one[:, observers], other[:, sources]
            rows, columns = (np.flatnonzero(np.diff(m.indptr)) for m in (left, right))
            if len(rows) and len(columns) and profile.any():
                found.append(_Product(rows, columns, left[rows], right[columns], profile, name == "q"))
        return found

    def _profiles(self, z: float, sources: Floats, rays: Sequence[Ray]) -> dict[str, NDArray]:
        """Height factors of horizontal currents, vertical currents (mirrored: the other sign) and charges."""
        shape, scale = (self.split.powers, len(sources), len(self.t)), 1 / (2 * np.pi**1.5)
        a, v, q = (np.zeros(shape, self.kind) for _ in range(3))
        p = np.arange(self.split.powers)
        fall = (
            np.array([1 / (4.0**i * factorial(i)) for i in p])[:, None] * self.t ** (-2.0 * p[:, None]) * self.weights
        )
        for ray in rays:
            d = z - ray.height(sources)
            bell = np.exp(-np.multiply.outer(d**2, self.t**2)) * scale
            logs = log_profile(self.t, self.weights, np.abs(d), self.split.powers) if ray.has_logs else None
            for target, (amplitude, kappa, log) in zip((a, v, q), ray.terms(), strict=True):
                if amplitude:
                    target += (real_if_real(amplitude * kappa**p)[:, None] * fall)[:, None, :] * bell
                if any(log) and logs is not None:
                    target += at_heights(log, z, sources)[:, None] * (
                        log_powers(kappa, self.split.powers)[:, None, None] * logs
                    )
        return {"a": a, "v": v, "q": q}

    def _crossed(self, z: float, sources: Floats, rays: Sequence[CrossRay]) -> NDArray:
        """Height factors of K_c."""
        total = np.zeros((self.split.powers, len(sources), len(self.t)), self.kind)
        p = np.arange(self.split.powers)
        fall = np.array([1 / factorial(i) for i in p])[:, None] * (4 * self.t**2) ** (-1.0 * p[:, None])
        for ray in rays:
            bell = erfc(np.multiply.outer(np.abs(z - ray.height(sources)), self.t)) * (
                self.weights / (4 * np.pi * self.t)
            )
            weight = real_if_real(ray.amplitude * ray.kappa**p)
            total += (weight[:, None] * fall)[:, None, :] * bell
        return total

    def add_to(self, current: NDArray, charge: NDArray, shift: Floats) -> None:
        """Add to currents' (K_c with them) and charges' sums (powers, n, n), the sources displaced by shift (3,)."""
        for group in self.groups:
            self._add_group(group, current, charge, shift, reverse=False)
            if group.both_ways:
                self._add_group(group, current, charge, -shift, reverse=True)

    def _add_group(self, group: _Group, current: NDArray, charge: NDArray, shift: Floats, *, reverse: bool) -> None:
        points = self.cloud.points
        away = points[group.observers, :2] - points[group.sources[0], :2] - shift[:2]
        square = (away**2).sum(axis=1)
        if square.min() > self.split.near_radius**2:
            return
        bells = np.exp(-np.multiply.outer(square, self.t**2))
        for part in group.products:
            powers, n_source, n_node = part.profile.shape
            weighed = (part.right @ part.profile.transpose(1, 0, 2).reshape(n_source, -1)).reshape(-1, n_node)
            product = part.left @ (bells @ weighed.T)  # (rows, columns x powers)
            product = product.reshape(len(part.rows), len(part.columns), powers).transpose(2, 0, 1)
            target = charge if part.of_charges else current
            if reverse:
                target[np.ix_(np.arange(powers), part.columns, part.rows)] += product.transpose(0, 2, 1)
            else:
                target[np.ix_(np.arange(powers), part.rows, part.columns)] += product


def _is_direct(ray: Ray) -> bool:
    """The direct ray within one zone."""
    return ray.pair is not None and ray.pair[0] == ray.pair[1] and not ray.mirrored and ray.lift == 0


def _least_distance(points: Floats, floor: float) -> float:
    """Shortest distance between two points of the cloud, m."""
    if len(points) < 2:
        return floor
    distance, _ = cKDTree(points).query(points, k=2)
    return max(float(np.asarray(distance)[:, 1].min()), floor)


def _groups(keys: Floats) -> list[Ints]:
    """Indices of equal rows of (n, m)."""
    _, inverse = np.unique(keys, axis=0, return_inverse=True)
    order = np.argsort(inverse.ravel(), kind="stable")
    return np.split(order, np.flatnonzero(np.diff(inverse.ravel()[order])) + 1) if len(order) else []
