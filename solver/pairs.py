"""Which element pairs lie too close for point quadrature of the static kernel."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from ..geometry.lattice import Lattice
from .basis import Basis
from .rays import Ray
from .zones import Zoning

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

NEAR_RATIO = 1.6  # pairs closer than this times the sum of their radii are integrated accurately
COAXIAL_REACH = 50.0  # radii: how far along its own axis a wire's thickness is felt


@dataclass(frozen=True)
class NearPairs:
    """Pairs (first, second) of elements, the second displaced by a cell and placed as the ray tells.

    Elements are numbered triangles first, then segments, then fans. Each unordered pair stands once: at cell
    (0, 0) with first <= second; otherwise at the cell of the half-plane of `half_cells`.
    """

    cell: tuple[int, int]
    ray: Ray
    first: Ints
    second: Ints


def half_cells(lattice: Lattice, radius: float) -> Ints:
    """Cells with ``|rho_m| <= radius``, one of each pair m, -m; (0, 0) first; shape (n, 2)."""
    cells = lattice.cells_within(radius)
    keep = (cells[:, 0] > 0) | ((cells[:, 0] == 0) & (cells[:, 1] >= 0))
    return cells[keep]


def element_spheres(basis: Basis) -> tuple[Floats, Floats]:
    """Centre (n, 3) and radius (n,) of a sphere round each element."""
    centres, radii = [], []
    for corners in (basis.triangles, basis.segments, basis.fans):
        centre = corners.mean(axis=1)
        centres.append(centre)
        radii.append(np.linalg.norm(corners - centre[:, None], axis=2).max(axis=1, initial=0.0))
    return np.concatenate(centres), np.concatenate(radii)


def find_near_pairs(basis: Basis, lattice: Lattice, rays: list[Ray], zoning: Zoning) -> list[NearPairs]:
    """All pairs to be corrected, by cell and ray."""
    centres, radii = element_spheres(basis)
    reach = 2 * NEAR_RATIO * radii.max()
    if len(basis.segments):
        reach = max(reach, COAXIAL_REACH * basis.segment_radius.max() + 2 * radii.max())
    extent = np.linalg.norm(np.ptp(centres[:, :2], axis=0))
    found, everything = [], np.arange(len(centres))
    members = [np.flatnonzero(zoning.of_element == i) for i in range(len(zoning.zones))]
    for cell in half_cells(lattice, extent + reach):
        shift = np.append(lattice.positions(cell[None])[0], 0.0)
        for ray in rays:
            observers, sources = (everything, everything) if ray.pair is None else (members[i] for i in ray.pair)
            first, second = _close(centres[observers], ray.place(centres[sources], shift), reach)
            first, second = observers[first], sources[second]
            if not cell.any():
                keep = first <= second
                first, second = first[keep], second[keep]
            if not len(first):
                continue
            distance = np.linalg.norm(centres[first] - ray.place(centres[second], shift), axis=1)
            near = distance <= NEAR_RATIO * (radii[first] + radii[second])
            near |= _coaxial(basis, first, second, shift, ray)
            if near.any():
                found.append(NearPairs((int(cell[0]), int(cell[1])), ray, first[near], second[near]))
    return found


def _close(points: Floats, others: Floats, reach: float) -> tuple[Ints, Ints]:
    """Indices of all pairs closer than `reach`."""
    if others[:, 2].min() - points[:, 2].max() > reach or points[:, 2].min() - others[:, 2].max() > reach:
        return np.zeros(0, np.int64), np.zeros(0, np.int64)
    pairs = cKDTree(points).sparse_distance_matrix(cKDTree(others), reach, output_type="coo_matrix")
    return pairs.row.astype(np.int64), pairs.col.astype(np.int64)


def _coaxial(basis: Basis, first: Ints, second: Ints, shift: Floats, ray: Ray) -> NDArray[np.bool_]:
    """Pairs of segments on one axis, within `COAXIAL_REACH` radii."""
    start, stop = len(basis.triangles), len(basis.triangles) + len(basis.segments)
    result = np.zeros(len(first), dtype=bool)
    wires = np.flatnonzero((first >= start) & (first < stop) & (second >= start) & (second < stop))
    if len(wires):
        a = basis.segments[first[wires] - start]
        b = ray.place(basis.segments[second[wires] - start], shift)
        radius = np.maximum(basis.segment_radius[first[wires] - start], basis.segment_radius[second[wires] - start])
        gap = end_distances(a, b).min(axis=(1, 2))
        result[wires] = on_one_axis(a, b, radius) & (gap < COAXIAL_REACH * radius)
    return result


def end_distances(a: Floats, b: Floats) -> Floats:
    """Distances between the corners of paired elements, (n, i, 3) and (n, j, 3) -> (n, i, j)."""
    return np.linalg.norm(a[:, :, None] - b[:, None], axis=3)


def on_one_axis(a: Floats, b: Floats, radius: Floats) -> NDArray[np.bool_]:
    """Whether both ends of segment b lie within half a radius of the axis line of segment a."""
    along = a[:, 1] - a[:, 0]
    along = along / np.linalg.norm(along, axis=1, keepdims=True)
    offset = b - a[:, :1]
    lateral = offset - np.einsum("nec,nc->ne", offset, along)[..., None] * along[:, None]
    return (np.linalg.norm(lateral, axis=2) < 0.5 * radius[:, None]).all(axis=1)
