"""What point quadrature misses of the static kernels: accurate minus cloud, for every near pair, by cell.

The result is independent of the splitting parameter, of k and of the scan direction; it is filled once per mesh.
"""

from __future__ import annotations

from collections import defaultdict

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from ..geometry.lattice import Lattice
from .basis import Basis
from .cloud import TRIANGLE_POINTS, fan_weights, segment_weights, triangle_weights
from .ewald import singular_kernel
from .fan_pairs import fan_fan_products, fan_segment_products, fan_triangle_products
from .pairs import NearPairs, end_distances, find_near_pairs
from .rays import Ray
from .triangle_pairs import POWERS, product_moments, shape_products, triangle_moments
from .wire_pairs import segment_moments, segment_products, segment_triangle_moments, segment_triangle_products
from .zones import Zoning

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Cell = tuple[int, int]
SHAPES = (3, 2, 1)  # shapes on a triangle, a segment, a fan


def build_corrections(basis: Basis, lattice: Lattice, rays: list[Ray], zoning: Zoning) -> dict[Cell, tuple[list, list]]:
    """Corrections to the near matrices by cell: ``(current, charge)``, each POWERS sparse (n, n) matrices.

    Cells are those of `pairs.half_cells`; the matrix at (0, 0) is symmetric and complete, the one at -m is the
    transpose of that at m.
    """
    collected: dict[Cell, list] = defaultdict(list)
    for group in find_near_pairs(basis, lattice, rays, zoning):
        shift = np.append(lattice.positions(np.array([group.cell]))[0], 0.0)
        collected[group.cell] += _group_entries(basis, group, shift)
    return {cell: _assemble(basis, cell, entries) for cell, entries in collected.items()}


def _group_entries(basis: Basis, group: NearPairs, shift: Floats) -> list:
    """(rows, columns, current, charge, is off-diagonal) blocks in shape numbering for one cell and ray."""
    corners = (basis.triangles, basis.segments, basis.fans)
    starts = np.cumsum([0] + [len(c) for c in corners])
    kind_a = np.searchsorted(starts, group.first, side="right") - 1
    kind_b = np.searchsorted(starts, group.second, side="right") - 1
    current_weight, charge_weight = (w[:, None, None, None] for w in group.ray.powers(POWERS))
    entries = []
    for ka in range(3):
        for kb in range(3):
            pick = np.flatnonzero((kind_a == ka) & (kind_b == kb))
            if not len(pick):
                continue
            i, j = group.first[pick] - starts[ka], group.second[pick] - starts[kb]
            a, b = corners[ka][i], group.ray.place(corners[kb][j], shift)
            radii = tuple(basis.segment_radius[e] if kind == 1 else None for e, kind in ((i, ka), (j, kb)))
            current, charge = _difference(ka, kb, a, b, radii)
            rows = basis.shape_offsets[ka] + SHAPES[ka] * i[:, None] + np.arange(SHAPES[ka])
            columns = basis.shape_offsets[kb] + SHAPES[kb] * j[:, None] + np.arange(SHAPES[kb])
            off_diagonal = group.first[pick] != group.second[pick]
            if group.cell == (0, 0) and ka == kb:  # inner and outer integral differ in method: make them even
                own = ~off_diagonal
                current[:, own] = 0.5 * (current[:, own] + current[:, own].swapaxes(-1, -2))
            entries.append((rows, columns, current_weight * current, charge_weight * charge, off_diagonal))
    return entries


def _difference(ka: int, kb: int, a: Floats, b: Floats, radii: tuple) -> tuple[Floats, Floats]:
    """Accurate minus cloud products (POWERS, n, shapes, shapes) for one pair of element kinds."""
    if (ka, kb) == (0, 0):
        moments = triangle_moments(a, b) - product_moments(a, b, TRIANGLE_POINTS)
        current, charge = shape_products(a, b, moments)
        return current, np.broadcast_to(charge[..., None, None], current.shape)
    current, charge = _accurate(ka, kb, a, b, radii)
    rough_current, rough_charge = cloud_products(ka, kb, a, b)
    return current - rough_current, charge - rough_charge


def _accurate(ka: int, kb: int, a: Floats, b: Floats, radii: tuple) -> tuple[Floats, Floats]:
    if ka > kb:
        current, charge = _accurate(kb, ka, b, a, radii[::-1])
        return current.swapaxes(-1, -2), charge.swapaxes(-1, -2)
    if (ka, kb) == (0, 1):
        moments = segment_triangle_moments(b, a, radii[1])
        current, charge = segment_triangle_products(b, a, moments)
        return current.swapaxes(-1, -2), charge.swapaxes(-1, -2)
    if (ka, kb) == (0, 2):
        current, charge = fan_triangle_products(b, a)
        return current.swapaxes(-1, -2), charge.swapaxes(-1, -2)
    if (ka, kb) == (1, 1):
        return segment_products(a, b, segment_moments(a, b, radii[0], radii[1]))
    if (ka, kb) == (1, 2):
        current, charge = fan_segment_products(b, a, radii[0])
        return current.swapaxes(-1, -2), charge.swapaxes(-1, -2)
    return fan_fan_products(a, b)


def cloud_products(ka: int, kb: int, a: Floats, b: Floats) -> tuple[Floats, Floats]:
    """The same products by the cloud's own quadrature, which the point-to-point sums contain already."""
    weigh = (triangle_weights, segment_weights, fan_weights)
    (pa, va, ca), (pb, vb, cb) = weigh[ka](a), weigh[kb](b)
    distance = end_distances(pa, pb)
    distance[distance < 1e-9 * distance.max()] = 0.0
    kernels = [singular_kernel(distance, p) for p in range(POWERS)]
    current = [np.einsum("nqsc,nrtc,nqr->nst", va, vb, kernel, optimize=True) for kernel in kernels]
    charge = [np.einsum("nqs,nrt,nqr->nst", ca, cb, kernel, optimize=True) for kernel in kernels]
    return np.stack(current), np.stack(charge)


def _assemble(basis: Basis, cell: Cell, entries: list) -> tuple[list, list]:
    """Sum shape blocks and carry them over to functions: ``C^T X C``."""
    c = basis.coefficients
    n_shapes = c.shape[0]
    matrices: tuple[list, list] = ([], [])
    for which in (0, 1):
        for p in range(POWERS):
            total = sparse.csr_matrix((n_shapes, n_shapes))
            for rows, columns, current, charge, once in entries:
                block = (current, charge)[which][p]
                index = np.broadcast_arrays(rows[:, :, None], columns[:, None, :])
                total = total + sparse.csr_matrix(
                    (block.ravel(), (index[0].ravel(), index[1].ravel())), shape=total.shape
                )
                if cell == (0, 0):
                    total = total + sparse.csr_matrix(
                        (block[once].ravel(), (index[1][once].ravel(), index[0][once].ravel())),
                        shape=total.shape,
                    )
            matrices[which].append(sparse.csr_matrix(c.T @ total @ c))
    return matrices
