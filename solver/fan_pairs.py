"""Accurate static integrals that involve attachment fans (few per cell, so accuracy goes before speed)."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from . import quadrature
from .cloud import fan_weights, segment_weights
from .ewald import singular_kernel
from .pairs import end_distances
from .potentials import triangle_potentials
from .triangle_pairs import POWERS, _areas, triangle_moments
from .wire_pairs import attached_softening, segment_rules, segment_triangle_moments

Floats = NDArray[np.float64]
ORDER = 8
APEX_ORDER = 12  # of pairs that share the corner: 0.2 % of their current product (Monte Carlo, tests)


def fan_triangle_products(fans: Floats, triangles: Floats) -> tuple[Floats, Floats]:
    """Current and charge products (POWERS, n, 1, 3) of fans with triangle shapes."""
    rule = quadrature.gauss(ORDER)
    points, vector, _ = fan_weights(fans, rule, rule)
    potential, _ = triangle_potentials(triangles, points)
    nodes, weights = quadrature.triangle(7)
    distance = end_distances(points, np.einsum("qa,nac->nqc", nodes, triangles))
    area = _areas(triangles)
    linear = singular_kernel(distance, 1) @ (nodes * weights[:, None]) * area[:, None, None]
    inner = np.stack([potential / (4 * np.pi), linear])  # (POWERS, n, q, 3)
    arms = triangles[:, None, :, :] - triangles[:, :, None, :]  # v_c - v_b at [b, c]
    current = np.einsum("nqc,pnqd,nbdc,n->pnb", vector[:, :, 0], inner, arms, 0.5 / area, optimize=True)
    moments = triangle_moments(fans, triangles)
    charge = -moments.sum(axis=(-1, -2)) / (_areas(fans) * area)
    return current[:, :, None, :], np.broadcast_to(charge[:, :, None, None], (POWERS, len(fans), 1, 3))


def fan_fan_products(a: Floats, b: Floats) -> tuple[Floats, Floats]:
    """Current and charge products (POWERS, n, 1, 1) of fans."""
    current = np.stack([_fan_fan_current(a[i], b[i]) for i in range(len(a))], axis=1)
    charge = triangle_moments(a, b).sum(axis=(-1, -2)) / (_areas(a) * _areas(b))
    return current[:, :, None, None], charge[:, :, None, None]


def _fan_fan_current(a: Floats, b: Floats) -> Floats:
    """Fans that share their apex: singularity-cancelling rule with the apex first; else Gauss on both."""
    shared = np.linalg.norm(a[:, None] - b[None], axis=2) < 1e-6 * np.linalg.norm(a[1] - a[0])
    if not shared[0, 0]:
        rule, other = quadrature.gauss(ORDER), quadrature.gauss(ORDER + 1)
        (pa, va, _), (pb, vb, _) = fan_weights(a[None], rule, rule), fan_weights(b[None], other, other)
        distance = end_distances(pa, pb)[0]
        dots = va[0, :, 0] @ vb[0, :, 0].T
        return np.array([(dots * singular_kernel(distance, p)).sum() for p in range(POWERS)])
    order_a = sorted(range(3), key=lambda i: (i != 0, not shared[i].any()))
    order_b = sorted(range(3), key=lambda i: (i != 0, not shared[:, i].any()))
    if shared[order_a[1]].any():  # the second corner, where shared, must be the same point
        partner = int(np.argmax(shared[order_a[1]]))
        order_b = [0, partner, 3 - partner]
    a, b = a[order_a], b[order_b]
    first, second, weights = quadrature.pair_rule(int(shared.any(axis=1).sum()), APEX_ORDER)
    (ra, fa), (rb, fb) = _fan_field(a, first), _fan_field(b, second)
    distance = np.linalg.norm(ra - rb, axis=1)
    scale = weights * np.einsum("qc,qc->q", fa, fb) / 4  # shapes carry 1/(2A) each, areas cancel
    return np.array([(scale * singular_kernel(distance, p)).sum() for p in range(POWERS)])


def _fan_field(fan: Floats, barycentric: Floats) -> tuple[Floats, Floats]:
    """Points and ``2 A f`` of one fan at barycentric nodes."""
    points = barycentric @ fan
    x = 1 - barycentric[:, :1]  # t / h
    return points, (1 / x**2 - 1) * (points - fan[0])


def fan_segment_products(fans: Floats, segments: Floats, radius: Floats) -> tuple[Floats, Floats]:
    """Current and charge products (POWERS, n, 1, 2) of fans with segment shapes."""
    soft, end = attached_softening(segments, fans, radius)
    current = np.empty((POWERS, len(fans), 1, 2))
    radial, across = quadrature.graded(8, 4), quadrature.gauss(6)
    for i, rule in enumerate(segment_rules(segments, fans, soft, end)):
        points, vector, _ = fan_weights(fans[i : i + 1], radial, across)
        line, shapes, _ = segment_weights(segments[i : i + 1], rule)
        distance = np.sqrt(end_distances(points, line)[0] ** 2 + soft[i] ** 2)
        for p in range(POWERS):
            current[p, i, 0] = np.einsum(
                "qc,qr,rsc->s", vector[0, :, 0], singular_kernel(distance, p), shapes[0], optimize=True
            )
    total = segment_triangle_moments(segments, fans, radius).sum(axis=(-1, -2))
    length = np.linalg.norm(segments[:, 1] - segments[:, 0], axis=1)
    charge = -(total / (_areas(fans) * length))[..., None, None] * np.array([[-1.0, 1.0]])
    return current, charge
