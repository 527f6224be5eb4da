"""The near part of the operator: real matrices by cell and power of k, filled once per mesh."""

from __future__ import annotations

from collections import defaultdict
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from ..geometry.lattice import Lattice
from .basis import Basis
from .cloud import Cloud
from .columns import ColumnSums
from .corrections import Cell, build_corrections
from .ewald import Split, near_kernels
from .logarithmic import log_nodes, log_profile
from .pairs import half_cells
from .radial import RadialTable
from .rays import CrossRay, Ray, at_heights, log_powers, real_if_real
from .threads import thread_count
from .zones import Zoning

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

TILE = 128  # observers handled at a time, chosen close together


@dataclass(frozen=True)
class NearBlock:
    """Matrices coupling the cell to cell `cell`: dense on the rows and columns that couple at all.

    `current` and `charge` : (powers, n_rows, n_columns), coefficients of k^(2p).
    """

    cell: Cell
    rows: Ints
    columns: Ints
    current: NDArray
    charge: NDArray


def build_near(
    basis: Basis,
    cloud: Cloud,
    lattice: Lattice,
    split: Split,
    rays: list[Ray],
    zoning: Zoning,
    cross: list[CrossRay] | None = None,
) -> list[NearBlock]:
    """Fill the near part. Cells of one half-plane only; the matrix at -m is the transpose of that at m.

    `cross`: rays between charges and vertical currents of a layered stack, counted with the currents'.
    """
    extent = float(np.linalg.norm(np.ptp(cloud.points[:, :2], axis=0)))
    cells = [(int(p), int(q)) for p, q in half_cells(lattice, split.near_radius + extent)]
    zone = zoning.of_element[cloud.element]
    tiles = _tiles_by_zone(cloud.points, zone)
    upright = cross is not None and not all(z.is_level for z in zoning.zones)
    by_columns = ColumnSums(cloud, zoning, split, rays, cross or []) if upright else None
    kind = np.result_type(real_if_real(np.array([x for ray in rays for x in ray.numbers])))
    by_points = _PointKernels(zoning, split, rays if by_columns is None else by_columns.left, kind)
    with ThreadPoolExecutor(thread_count()) as pool:  # the array operations inside release the interpreter lock
        corrections = pool.submit(build_corrections, basis, lattice, rays, zoning)

        def fill(cell: Cell) -> NearBlock | None:
            shift = np.append(lattice.positions(np.array([cell]))[0], 0.0)
            current, charge = _point_sums(cloud, tiles, zone, shift, split, by_points)
            if by_columns is not None:
                by_columns.add_to(current, charge, shift)
            missed = corrections.result().get(cell, ([], []))
            for part, matrices in ((current, missed[0]), (charge, missed[1])):
                for p, matrix in enumerate(matrices):
                    rows, columns = matrix.nonzero()
                    part[p][rows, columns] += np.asarray(matrix[rows, columns]).ravel()
            return _compressed(cell, current, charge)

        blocks = list(pool.map(fill, cells))
        blocks += [fill(cell) for cell in corrections.result() if cell not in cells]
    return [block for block in blocks if block is not None]


def _compressed(cell: Cell, current: NDArray, charge: NDArray) -> NearBlock | None:
    """Keep the rows and columns that are not zero, or nothing."""
    rows = np.flatnonzero((current[0] != 0).any(axis=1) | (charge[0] != 0).any(axis=1))
    columns = np.flatnonzero((current[0] != 0).any(axis=0) | (charge[0] != 0).any(axis=0))
    if not len(rows):
        return None
    if len(rows) * len(columns) < 0.8 * current[0].size:
        pick = np.ix_(np.arange(len(current)), rows, columns)
        current, charge = current[pick], charge[pick]
    else:
        rows = columns = np.arange(current.shape[1])
    return NearBlock(cell, rows, columns, current, charge)


def _tiles(points: Floats, index: Ints) -> list[Ints]:
    """Split points into compact groups of at most TILE by halving the longest side."""
    if len(index) <= TILE:
        return [index]
    axis = int(np.argmax(np.ptp(points[index], axis=0)))
    order = index[np.argsort(points[index, axis], kind="stable")]
    half = len(order) // 2
    return _tiles(points, order[:half]) + _tiles(points, order[half:])


def _tiles_by_zone(points: Floats, zone: Ints) -> list[Ints]:
    """Tiles of points in one zone each."""
    return [tile for z in np.unique(zone) for tile in _tiles(points, np.flatnonzero(zone == z))]


def _point_sums(
    cloud: Cloud, tiles: list[Ints], zone: Ints, shift: Floats, split: Split, kernels_of: _PointKernels
) -> tuple[NDArray, NDArray]:
    """``B^T K_p B`` of the currents and charges with the sources displaced, each (powers, n, n).

    Without displacement the kernel is symmetric: only tiles at or after the observers' own are visited.
    """
    n = cloud.n
    symmetric = not shift.any()
    # (observing function, power, source function) while summing: adding a tile then touches whole rows
    current, charge = (np.zeros((n, split.powers, n), kernels_of.kind) for _ in range(2))
    weights = [sparse.csr_matrix(m.T) for m in (*cloud.current, cloud.charge)]
    boxes = np.array([[cloud.points[t].min(axis=0), cloud.points[t].max(axis=0)] for t in tiles])
    for i, tile in enumerate(tiles):
        gap = np.maximum(boxes[:, 0] + shift - boxes[i, 1], boxes[i, 0] - boxes[:, 1] - shift).clip(min=0)
        if not kernels_of.direct_only:
            gap[:, 2] = 0.0
        near = [j for j in np.flatnonzero((gap**2).sum(axis=1) < split.near_radius**2) if j >= i or not symmetric]
        if not near:
            continue
        sources = np.concatenate([tiles[j] for j in near])
        own = len(tile) if symmetric else 0  # the tile with itself comes first and is halved
        zones = int(zone[tile[0]]), zone[sources]
        kernels = kernels_of(cloud.points[tile], cloud.points[sources], zones, shift)
        for kernel in {id(kernel): kernel for kernel in kernels}.values():
            kernel[:own] *= 0.5
        _add_tile(weights, tile, sources, kernels, current, charge)
    return _by_power(current, symmetric), _by_power(charge, symmetric)


def _by_power(sums: NDArray, symmetric: bool) -> NDArray:
    """(observer, power, source) -> (power, observer, source), completed by symmetry where only half was summed."""
    result = np.ascontiguousarray(sums.transpose(1, 0, 2))
    if symmetric:
        for matrix in result:
            matrix += matrix.T.copy()
    return result


class _PointKernels:
    """Near kernels (n_source, powers, n_observer) for horizontal currents, vertical currents and charges.

    In the mirror vertical currents keep their sign where horizontal ones and charges change it. Kernels that are the
    same are one array. Between two levels of a stack all rays but a direct one at the same height are in a table.
    """

    def __init__(self, zoning: Zoning, split: Split, rays: list[Ray], kind: np.dtype):
        self.split, self.rays, self.kind = split, rays, kind
        self.direct_only = rays == [Ray()]
        self.tables: dict[tuple[int, int], RadialTable] = {}
        self.single: dict[tuple[int, int], list[Ray]] = defaultdict(list)
        self.levels = {
            (o, s)
            for o, one in enumerate(zoning.zones)
            for s, other in enumerate(zoning.zones)
            if one.is_level and other.is_level
        }
        tabulated: dict[tuple[int, int], list[tuple[Ray, float]]] = defaultdict(list)
        for ray in rays:
            if ray.pair is None:
                continue
            observer, source = (zoning.zones[i] for i in ray.pair)
            distance = abs(float(ray.height(np.array(source.low))) - observer.low)
            if observer.is_level and source.is_level and distance > 0:
                tabulated[ray.pair].append((ray, distance))
            else:
                self.single[ray.pair].append(ray)
        for pair, found in tabulated.items():
            self.tables[pair] = RadialTable([ray for ray, _ in found], np.array([d for _, d in found]), split)

    def __call__(self, observers: Floats, sources: Floats, zones: tuple[int, Ints], shift: Floats) -> list[NDArray]:
        """`zones`: that of the observers and those of the sources."""
        if self.direct_only:
            return [_kernel(observers, sources + shift, self.split)] * 3
        if self.rays and self.rays[-1].pair is None:
            direct = _kernel(observers, sources + shift, self.split)
            image = _kernel(observers, self.rays[-1].place(sources, shift), self.split)
            added = direct + image
            direct -= image
            return [direct, added, direct]
        shape = (len(sources), self.split.powers, len(observers))
        current, charge = np.zeros(shape, self.kind), np.zeros(shape, self.kind)
        upright = any(
            r.mirrored and r.current for pair, rays in self.single.items() if pair[0] == zones[0] for r in rays
        )
        vertical = np.zeros(shape, self.kind) if upright else current
        ends = np.flatnonzero(np.diff(zones[1])) + 1  # the tiles are in the order of their zones
        for low, high in pairwise([0, *ends.tolist(), len(sources)]):
            pair, mine = (zones[0], int(zones[1][low])), slice(low, high)
            targets = tuple(kernel[mine] for kernel in (current, vertical, charge))
            for ray in self.single[pair]:
                self._add(ray, observers, ray.place(sources[mine], shift), targets)
            if pair in self.tables:
                square = np.zeros((high - low, len(observers)))
                for axis in (0, 1):
                    square += (sources[mine, axis, None] + shift[axis] - observers[:, axis]) ** 2
                self.tables[pair].add(square, targets[0], targets[2])
        return [current, vertical, charge]

    def _add(self, ray: Ray, observers: Floats, sources: Floats, targets: tuple[NDArray, ...]) -> None:
        current, vertical, charge = targets
        kernel = _kernel(observers, sources, self.split)
        of_current, of_charge = ray.powers(self.split.powers)
        if ray.current:
            current += of_current[:, None] * kernel
        if ray.vertical and vertical.base is not current.base:
            vertical += ray.vertical_powers(self.split.powers)[:, None] * kernel
        if ray.charge:
            charge += of_charge[:, None] * kernel
        if ray.has_logs:
            self._add_logs(ray, observers, sources, targets)

    def _add_logs(self, ray: Ray, observers: Floats, sources: Floats, targets: tuple[NDArray, ...]) -> None:
        """The logarithmic parts of a ray, node by node; `sources` as the observers see them."""
        square = ((sources[:, None, :2] - observers[:, :2]) ** 2).sum(axis=2)
        d = np.abs(sources[:, 2, None] - observers[:, 2])
        true = (ray.lift - sources[:, 2, None]) * (1.0 if ray.mirrored else -1.0)
        weights = [
            (target, at_heights(log, observers[:, 2], true), log_powers(kappa, self.split.powers))
            for target, (_, kappa, log) in zip(targets, ray.terms(), strict=True)
            if any(log)
        ]
        least = max(float(np.sqrt((square + d * d).min())), 1e-3 * self.split.near_radius)
        for t, weight in zip(*log_nodes(self.split.splitting, least), strict=True):
            share = log_profile(np.array([t]), np.array([weight]), d, self.split.powers)[..., 0] * np.exp(
                -square * t * t
            )
            for target, linear, powers in weights:
                target += (powers[:, None, None] * (linear * share)).transpose(1, 0, 2)


def _kernel(observers: Floats, sources: Floats, split: Split) -> Floats:
    square = np.zeros((len(sources), len(observers)))
    for axis in range(3):
        square += (sources[:, axis, None] - observers[:, axis]) ** 2
    distance = np.sqrt(square, out=square)
    distance[distance < 1e-9 * split.near_radius] = 0.0
    kernels = np.empty((len(sources), split.powers, len(observers)))
    near_kernels(distance, split, out=kernels.transpose(1, 0, 2))
    return kernels


def _add_tile(
    weights: list[sparse.csr_matrix],
    tile: Ints,
    sources: Ints,
    kernels: list[NDArray],
    current: NDArray,
    charge: NDArray,
) -> None:
    """Weigh the kernels of one tile with the functions on both sides and add them to the sums."""
    powers = current.shape[1]
    for component, weight in enumerate(weights):
        left, right = weight[:, tile], weight[:, sources]
        rows, columns = (np.flatnonzero(np.diff(m.indptr)) for m in (left, right))
        if not len(rows) or not len(columns):
            continue
        kernel = kernels[(0, 0, 1, 2)[component]].reshape(len(sources), -1)
        kind = kernel.dtype  # the weights are real: complex numbers go through as pairs
        inner = (right[columns] @ kernel.view(float)).view(kind).reshape(len(columns), powers, len(tile))
        inner = np.ascontiguousarray(inner.transpose(2, 1, 0)).reshape(len(tile), -1)
        outer = (left[rows] @ inner.view(float)).view(kind).reshape(len(rows), powers, len(columns))
        target = charge if component == 3 else current
        if len(columns) == target.shape[2]:
            target[rows] += outer
        else:
            target[np.ix_(rows, np.arange(powers), columns)] += outer
