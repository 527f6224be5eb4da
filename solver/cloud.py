"""The basis functions as weights on a cloud of quadrature points.

Near and far part of the operator are both evaluated between the points of this one cloud. Ewald's identity holds
between any two points, so the sum of the two parts does not depend on the splitting parameter however coarse the
quadrature is; what the quadrature misses (the static singularity between close elements) is added by
`corrections`, which knows no splitting parameter either.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from . import quadrature
from .basis import Basis

Floats = NDArray[np.float64]

TRIANGLE_POINTS = 3
SEGMENT_POINTS = 3
FAN_POINTS = 3  # per direction


@dataclass(frozen=True)
class Cloud:
    """Quadrature points and what each function weighs there.

    Attributes
    ----------
    points : (n_q, 3) m
    element : (n_q,) element of each point: triangles first, then segments, then fans
    current : three sparse (n_q, n): x, y, z component of every function times the quadrature weight
    charge : sparse (n_q, n): surface divergence times the weight
    n : number of functions
    """

    points: Floats
    element: NDArray[np.int64]
    current: tuple[sparse.csr_matrix, ...]
    charge: sparse.csr_matrix
    n: int


def triangle_weights(triangles: Floats, n: int = TRIANGLE_POINTS) -> tuple[Floats, Floats, Floats]:
    """Points (n_t, q, 3), weighted shapes (n_t, q, 3 shapes, 3) and weighted divergences (n_t, q, 3 shapes)."""
    nodes, weights = quadrature.triangle(n)
    points = np.einsum("qa,tac->tqc", nodes, triangles)
    vector = 0.5 * (points[:, :, None, :] - triangles[:, None]) * weights[None, :, None, None]  # the area cancels
    return points, vector, np.broadcast_to(weights[None, :, None], (*points.shape[:2], 3))


def segment_weights(segments: Floats, rule: tuple[Floats, Floats] | None = None) -> tuple[Floats, Floats, Floats]:
    """Points (n_s, q, 3), weighted shapes (n_s, q, 2 shapes, 3) and weighted derivatives (n_s, q, 2 shapes)."""
    g, w = rule or quadrature.gauss(SEGMENT_POINTS)
    along = segments[:, 1] - segments[:, 0]
    points = segments[:, None, 0] + g[:, None] * along[:, None, :]
    rise = np.stack([1 - g, g], axis=1) * w[:, None]
    vector = rise[None, :, :, None] * along[:, None, None, :]
    return points, vector, np.broadcast_to(w[:, None] * np.array([-1.0, 1.0]), (*points.shape[:2], 2))


def fan_weights(
    fans: Floats, radial: tuple[Floats, Floats] | None = None, across: tuple[Floats, Floats] | None = None
) -> tuple[Floats, Floats, Floats]:
    """Points (n_f, q, 3), weighted shape (n_f, q, 1, 3) and weighted divergence (n_f, q, 1).

    Points sit at ``v_0 + x ((1 - s) e_1 + s e_2)``, where shape times area element is the smooth
    ``(1 - x^2) ((1 - s) e_1 + s e_2) dx ds``: the corner singularity is gone.
    """
    radial, across = radial or quadrature.gauss(FAN_POINTS), across or quadrature.gauss(FAN_POINTS)
    x, s = (g.ravel() for g in np.meshgrid(radial[0], across[0], indexing="ij"))
    w = np.outer(radial[1], across[1]).ravel()
    e1, e2 = fans[:, 1] - fans[:, 0], fans[:, 2] - fans[:, 0]
    ray = e1[:, None, :] * (1 - s)[:, None] + e2[:, None, :] * s[:, None]
    points = fans[:, None, 0] + x[:, None] * ray
    vector = ((1 - x**2) * w)[:, None] * ray
    return points, vector[:, :, None, :], np.broadcast_to((-2 * x * w)[:, None], (*points.shape[:2], 1))


def build_cloud(basis: Basis) -> Cloud:
    """Place quadrature points on every element and weigh the functions there."""
    parts = (triangle_weights(basis.triangles), segment_weights(basis.segments), fan_weights(basis.fans))
    rows, cols, elements = [], [], []
    point_start = shape_start = element_start = 0
    for _, _, charge in parts:
        n, q, shapes = charge.shape
        e, i, a = np.meshgrid(np.arange(n), np.arange(q), np.arange(shapes), indexing="ij")
        rows.append((point_start + e * q + i).ravel())
        cols.append((shape_start + e * shapes + a).ravel())
        elements.append(element_start + np.repeat(np.arange(n), q))
        point_start, shape_start, element_start = (
            point_start + n * q,
            shape_start + n * shapes,
            element_start + n,
        )
    index = (np.concatenate(rows), np.concatenate(cols))
    vector = np.concatenate([part[1].reshape(-1, 3) for part in parts])
    charge = np.concatenate([part[2].ravel() for part in parts])
    size = (point_start, shape_start)

    def by_function(values: Floats) -> sparse.csr_matrix:
        """Shapes to functions; a component that is nowhere (vertical currents on flat conductors) has no entries."""
        matrix = sparse.csr_matrix(sparse.csr_matrix((values, index), shape=size) @ basis.coefficients)
        largest = float(np.abs(matrix.data).max(initial=0.0))
        matrix.data[np.abs(matrix.data) < 1e-14 * max(largest, scale)] = 0.0
        matrix.eliminate_zeros()
        return matrix

    scale = float(np.abs(vector).max(initial=0.0))
    return Cloud(
        np.concatenate([part[0].reshape(-1, 3) for part in parts]),
        np.concatenate(elements),
        tuple(by_function(vector[:, c]) for c in range(3)),
        by_function(charge),
        basis.n,
    )
