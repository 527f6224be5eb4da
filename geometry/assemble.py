"""Pieces of mesh put together: points that coincide become one, so that what touches is connected."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import KDTree

from .conductor import Conductor
from .mesh import Mesh

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def _no_elements(width: int) -> Ints:
    return np.zeros((0, width), dtype=np.int64)


@dataclass(frozen=True)
class Piece:
    """Mesh of one conductor on its own points: triangles (n, 3), or segments (n, 2) of a wire of `radius`."""

    conductor: int
    points: Floats
    triangles: Ints = field(default_factory=lambda: _no_elements(3))
    segments: Ints = field(default_factory=lambda: _no_elements(2))
    radius: float = 0.0


def merge_points(points: Floats, tolerance: float) -> tuple[Floats, Ints]:
    """Points with those closer than `tolerance` made one (the first of them), and where each one went.

    Parameters
    ----------
    points : (n, 3) m
    tolerance : m

    Returns
    -------
    (m, 3) points in order of first appearance, and (n,) indices into them.
    """
    n = len(points)
    pairs = KDTree(points).query_pairs(tolerance, output_type="ndarray") if n else np.zeros((0, 2), dtype=int)
    graph = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    _, group = connected_components(graph, directed=False) if n else (0, np.zeros(0, dtype=int))
    _, first, inverse = np.unique(group, return_index=True, return_inverse=True)
    order = np.argsort(first)
    rank = np.empty_like(order)
    rank[order] = np.arange(len(order))
    return points[first[order]], rank[inverse].astype(np.int64)


def split_quads(points: Floats, quads: Ints) -> Ints:
    """Two triangles for each quadrilateral (n, 4), cut along its shorter diagonal, (2 n, 3)."""
    p = points[quads]
    first = np.linalg.norm(p[:, 2] - p[:, 0], axis=1) <= np.linalg.norm(p[:, 3] - p[:, 1], axis=1)
    a = np.where(first[:, None], quads[:, [0, 1, 2]], quads[:, [0, 1, 3]])
    b = np.where(first[:, None], quads[:, [0, 2, 3]], quads[:, [1, 2, 3]])
    return np.concatenate([a, b])


def join_pieces(pieces: Sequence[Piece], conductors: Sequence[Conductor], tolerance: float) -> Mesh:
    """One mesh of all pieces, connected wherever their points coincide within `tolerance` (m)."""
    offsets = np.cumsum([0] + [len(p.points) for p in pieces])
    every = np.concatenate([p.points for p in pieces]) if pieces else np.zeros((0, 3))
    points, where = merge_points(every, tolerance)
    triangles = [where[p.triangles + start] for p, start in zip(pieces, offsets, strict=False)]
    segments = [where[p.segments + start] for p, start in zip(pieces, offsets, strict=False)]
    return Mesh(
        points=points,
        triangles=np.concatenate([_no_elements(3), *triangles]),
        triangle_conductor=np.repeat(
            [p.conductor for p in pieces], [len(p.triangles) for p in pieces]
        ).astype(int),
        segments=np.concatenate([_no_elements(2), *segments]),
        segment_radius=np.repeat([p.radius for p in pieces], [len(p.segments) for p in pieces]).astype(float),
        segment_conductor=np.repeat([p.conductor for p in pieces], [len(p.segments) for p in pieces]).astype(
            int
        ),
        names=tuple(c.name for c in conductors),
        materials=tuple(c.material for c in conductors),
    )
