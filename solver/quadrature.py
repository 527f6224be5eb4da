"""Quadrature: Gauss rules on the unit interval and triangle, graded rules, singularity-cancelling pair rules.

The pair rules are those of Sauter and Schwab, *Boundary Element Methods* (2011), section 5.2 (relative coordinates):
the four-dimensional integral over two triangles that coincide, share an edge or share a vertex becomes a sum of
integrals over the unit cube in which the Jacobian cancels a 1/R singularity, so plain Gauss converges
exponentially.
"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@cache
def gauss(n: int) -> tuple[Floats, Floats]:
    """Gauss-Legendre nodes and weights on [0, 1], each shape (n,)."""
    x, w = np.polynomial.legendre.leggauss(n)
    return 0.5 * (x + 1), 0.5 * w


@cache
def graded(panels: int, n: int, ratio: float = 0.4) -> tuple[Floats, Floats]:
    """Composite Gauss rule on [0, 1] with panels shrinking geometrically toward 0, for end-point singularities."""
    edges = np.concatenate([[0.0], ratio ** np.arange(panels - 1, -1, -1.0)])
    x, w = gauss(n)
    size = np.diff(edges)
    return (edges[:-1, None] + size[:, None] * x).ravel(), (size[:, None] * w).ravel()


@cache
def uniform(panels: int, n: int) -> tuple[Floats, Floats]:
    """Composite Gauss rule on [0, 1] with equal panels."""
    x, w = gauss(n)
    return ((np.arange(panels)[:, None] + x) / panels).ravel(), np.tile(w / panels, panels)


@cache
def triangle(n: int) -> tuple[Floats, Floats]:
    """Barycentric nodes (n_points, 3) and weights (n_points,) summing to 1.

    n = 1: centroid, degree 1. n = 3: three interior points, degree 2 (Strang and Fix 1973). n = 7: degree 5
    (Radon 1948). Other n: collapsed tensor Gauss rule of n x n points, degree 2 n - 2.
    """
    if n == 1:
        return np.full((1, 3), 1 / 3), np.ones(1)
    if n == 3:
        return (np.full((3, 3), 1 / 6) + 0.5 * np.eye(3)), np.full(3, 1 / 3)
    if n == 7:
        root = np.sqrt(15.0)
        nodes, weights = [np.full(3, 1 / 3)], [9 / 40]
        for near, weight in (((6 - root) / 21, (155 - root) / 1200), ((6 + root) / 21, (155 + root) / 1200)):
            for corner in range(3):
                node = np.full(3, near)
                node[corner] = 1 - 2 * near
                nodes.append(node)
                weights.append(weight)
        return np.array(nodes), np.array(weights)
    x, w = gauss(n)
    radial, across = (grid.ravel() for grid in np.meshgrid(x, x, indexing="ij"))
    weights = (2 * np.outer(x * w, w)).ravel()
    return np.stack([1 - radial, radial * (1 - across), radial * across], axis=1), weights


@cache
def pair_rule(shared: int, n: int) -> tuple[Floats, Floats, Floats]:
    """Rule for two triangles that share `shared` corners (3: same triangle, 2: an edge, 1: a vertex).

    The shared corners come first and in the same order in both triangles. Returns barycentric nodes on the first
    and second triangle, each (n_points, 3), and weights (n_points,) that sum to 1 (multiply by both areas).
    """
    x, w = gauss(n)
    radial, radial_weight = gauss(max(3, n // 2))
    xi, e1, e2, e3 = (g.ravel() for g in np.meshgrid(radial, x, x, x, indexing="ij"))
    base = np.einsum("i,j,k,l->ijkl", radial_weight, w, w, w).ravel() * xi**3
    regions = {3: _coincident, 2: _common_edge, 1: _common_vertex}[shared](xi, e1, e2, e3)
    first = np.concatenate([_barycentric(*region[0]) for region in regions])
    second = np.concatenate([_barycentric(*region[1]) for region in regions])
    weights = np.concatenate([4 * base * region[2] for region in regions])
    return first, second, weights


def _barycentric(x1: Floats, x2: Floats) -> Floats:
    """Reference triangle 0 <= x2 <= x1 <= 1, point = v0 + x1 (v1 - v0) + x2 (v2 - v1)."""
    return np.stack([1 - x1, x1 - x2, x2], axis=1)


def _coincident(xi: Floats, e1: Floats, e2: Floats, e3: Floats) -> list:
    jacobian = e1**2 * e2
    half = [
        ((xi, xi * (1 - e1 + e1 * e2)), (xi * (1 - e1 * e2 * e3), xi * (1 - e1))),
        ((xi, xi * e1 * (1 - e2 + e2 * e3)), (xi * (1 - e1 * e2), xi * e1 * (1 - e2))),
        ((xi * (1 - e1 * e2 * e3), xi * e1 * (1 - e2 * e3)), (xi, xi * e1 * (1 - e2))),
    ]
    return [(p, q, jacobian) for p, q in half] + [(q, p, jacobian) for p, q in half]


def _common_edge(xi: Floats, e1: Floats, e2: Floats, e3: Floats) -> list:
    j1, j2 = e1**2, e1**2 * e2
    return [
        ((xi, xi * e1 * e3), (xi * (1 - e1 * e2), xi * e1 * (1 - e2)), j1),
        ((xi, xi * e1), (xi * (1 - e1 * e2 * e3), xi * e1 * e2 * (1 - e3)), j2),
        ((xi * (1 - e1 * e2), xi * e1 * (1 - e2)), (xi, xi * e1 * e2 * e3), j2),
        ((xi * (1 - e1 * e2 * e3), xi * e1 * e2 * (1 - e3)), (xi, xi * e1), j2),
        ((xi * (1 - e1 * e2 * e3), xi * e1 * (1 - e2 * e3)), (xi, xi * e1 * e2), j2),
    ]


def _common_vertex(xi: Floats, e1: Floats, e2: Floats, e3: Floats) -> list:
    return [
        ((xi, xi * e1), (xi * e2, xi * e2 * e3), e2),
        ((xi * e2, xi * e2 * e3), (xi, xi * e1), e2),
    ]
