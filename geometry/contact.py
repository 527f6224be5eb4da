"""Distances and overlaps of segments and triangles, many pairs at a time; all points are (n, 3) in metres."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .lattice import Lattice

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


def _dot(a: Floats, b: Floats) -> Floats:
    return np.einsum("ij,ij->i", a, b)


def lattice_shifts(lattice: Lattice, points: Floats, margin: float) -> Floats:
    """Displacements ``rho_m`` that can bring the cell's conductors near themselves, (k, 3), zero first."""
    extent = float(np.linalg.norm(np.ptp(points[:, :2], axis=0)))
    rho = lattice.positions(lattice.cells_within(extent + margin))
    return np.column_stack([rho, np.zeros(len(rho))])


def half_of(shifts: Floats) -> Floats:
    """One of each pair +rho, -rho, and zero."""
    up = (shifts[:, 1] > 0) | ((shifts[:, 1] == 0) & (shifts[:, 0] >= 0))
    return shifts[up]


def segment_distance(p: Floats, q: Floats, r: Floats, s: Floats) -> tuple[Floats, Floats, Floats]:
    """Shortest distance between segments p-q and r-s, and where it is on each (fractions 0..1), each (n,).

    Of parallel segments one of the closest pairs is given. Method: clamped closest points of two lines, as in
    Ericson, Real-Time Collision Detection (2005), section 5.1.9 (from memory).
    """
    d1, d2, w = q - p, s - r, p - r
    a, e, f = _dot(d1, d1), _dot(d2, d2), _dot(d2, w)
    b, c = _dot(d1, d2), _dot(d1, w)
    a, e = np.maximum(a, 1e-300), np.maximum(e, 1e-300)
    denominator = a * e - b * b
    skew = denominator > 1e-12 * a * e
    t1 = np.where(skew, np.clip((b * f - c * e) / np.where(skew, denominator, 1.0), 0, 1), 0.0)
    t2 = (b * t1 + f) / e
    t1 = np.where(t2 < 0, np.clip(-c / a, 0, 1), np.where(t2 > 1, np.clip((b - c) / a, 0, 1), t1))
    t2 = np.clip(t2, 0, 1)
    gap = w + t1[:, None] * d1 - t2[:, None] * d2
    return np.linalg.norm(gap, axis=1), t1, t2


def parallel_overlap(p: Floats, q: Floats, r: Floats, s: Floats) -> Floats:
    """Length that two nearly parallel segments share in projection (0 above 1 mrad between them), (n,)."""
    d1, d2 = q - p, s - r
    l1, l2 = np.linalg.norm(d1, axis=1), np.linalg.norm(d2, axis=1)
    parallel = np.linalg.norm(np.cross(d1, d2), axis=1) < 1e-3 * l1 * l2
    unit = d1 / l1[:, None]
    a, b = _dot(r - p, unit), _dot(s - p, unit)
    shared = np.minimum(np.maximum(a, b), l1) - np.maximum(np.minimum(a, b), 0)
    return np.where(parallel, np.maximum(shared, 0), 0)


def triangle_normals(t: Floats) -> tuple[Floats, Floats]:
    """Unit normals (n, 3) and areas (n,) of triangles (n, 3, 3)."""
    cross = np.cross(t[:, 1] - t[:, 0], t[:, 2] - t[:, 0])
    length = np.linalg.norm(cross, axis=1)
    return cross / np.maximum(length, 1e-300)[:, None], 0.5 * length


def overlap_depth(t1: Floats, t2: Floats) -> Floats:
    """How deep triangles (n, 3, 3) reach into each other: the least way to part them over all axes, (n,).

    Zero when they only touch (share a corner or an edge, or one stands on the other), negative when apart.
    """
    n1, n2 = triangle_normals(t1)[0], triangle_normals(t2)[0]
    e1, e2 = np.roll(t1, -1, axis=1) - t1, np.roll(t2, -1, axis=1) - t2
    coplanar = np.linalg.norm(np.cross(n1, n2), axis=1) < 1e-6
    in_plane = [np.cross(n1, e1[:, k]) for k in range(3)] + [np.cross(n2, e2[:, k]) for k in range(3)]
    across = [np.cross(e1[:, i], e2[:, j]) for i in range(3) for j in range(3)]
    depth = np.full(len(t1), np.inf)
    flat = np.zeros(len(t1))
    for axis, use in [(n1, None), (n2, None)] + [(x, True) for x in in_plane] + [(x, False) for x in across]:
        length = np.linalg.norm(axis, axis=1)
        scale = np.linalg.norm(e1, axis=2).max(1) * (
            np.linalg.norm(e2, axis=2).max(1) if use is False else 1.0
        )
        good = length > 1e-6 * scale if use is not None else length > 0.5
        unit = axis / np.where(good, length, 1.0)[:, None]
        a, b = np.einsum("nij,nj->ni", t1, unit), np.einsum("nij,nj->ni", t2, unit)
        shared = np.minimum(a.max(1) - b.min(1), b.max(1) - a.min(1))
        if use is None:
            flat = np.minimum(flat, shared)  # below zero: parallel planes apart
            depth = np.where(coplanar, depth, np.minimum(depth, shared))
        else:
            depth = np.where(good & (coplanar == use), np.minimum(depth, shared), depth)
    return np.where(coplanar & (flat < 0), np.minimum(depth, flat), depth)


def clip_to_triangle(p: Floats, q: Floats, t: Floats, margin: Floats) -> tuple[Floats, Floats]:
    """Part of the segments p-q that runs within `margin` (n,) of triangles t (n, 3, 3).

    Returns its length (n,), zero where no part does, and its middle (n, 3).
    """
    normal, _ = triangle_normals(t)
    lo, hi = np.zeros(len(p)), np.ones(len(p))
    edges = np.roll(t, -1, axis=1) - t
    constraints = []
    for k in range(3):
        inward = np.cross(normal, edges[:, k])
        inward /= np.maximum(np.linalg.norm(inward, axis=1), 1e-300)[:, None]
        constraints.append((_dot(p - t[:, k], inward) + margin, _dot(q - t[:, k], inward) + margin))
    h0, h1 = _dot(p - t[:, 0], normal), _dot(q - t[:, 0], normal)
    constraints += [(h0 + margin, h1 + margin), (margin - h0, margin - h1)]
    for f0, f1 in constraints:
        slope = f1 - f0
        root = -f0 / np.where(slope == 0, 1.0, slope)
        lo = np.where(slope > 0, np.maximum(lo, root), lo)
        hi = np.where(slope < 0, np.minimum(hi, root), hi)
        hi = np.where((slope == 0) & (f0 < 0), -1.0, hi)
    length = np.maximum(hi - lo, 0) * np.linalg.norm(q - p, axis=1)
    return length, p + 0.5 * (lo + hi)[:, None] * (q - p)


def point_triangle_distance(p: Floats, t: Floats) -> Floats:
    """Distance of points (n, 3) from triangles (n, 3, 3), (n,)."""
    normal, _ = triangle_normals(t)
    inside = np.ones(len(p), dtype=bool)
    rim = np.full(len(p), np.inf)
    for k in range(3):
        edge, w = t[:, (k + 1) % 3] - t[:, k], p - t[:, k]
        inside &= _dot(np.cross(normal, edge), w) >= 0
        along = np.clip(_dot(w, edge) / np.maximum(_dot(edge, edge), 1e-300), 0, 1)
        rim = np.minimum(rim, np.linalg.norm(w - along[:, None] * edge, axis=1))
    return np.where(inside, np.abs(_dot(p - t[:, 0], normal)), rim)


def segment_triangle_distance(p: Floats, q: Floats, t: Floats) -> Floats:
    """Shortest distance between segments p-q and triangles (n, 3, 3), (n,); zero where they cross."""
    normal, _ = triangle_normals(t)
    best = np.minimum(point_triangle_distance(p, t), point_triangle_distance(q, t))
    for k in range(3):
        best = np.minimum(best, segment_distance(p, q, t[:, k], t[:, (k + 1) % 3])[0])
    h0, h1 = _dot(p - t[:, 0], normal), _dot(q - t[:, 0], normal)
    crosses = h0 * h1 < 0
    where = p + np.where(crosses, h0 / np.where(crosses, h0 - h1, 1.0), 0.0)[:, None] * (q - p)
    return np.where(crosses, np.minimum(best, point_triangle_distance(where, t)), best)
