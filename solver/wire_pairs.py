"""Accurate static integrals that involve wire segments.

Thin-wire model: the current flows along the axis and is uniform round the wire. Between segments that share a node
or lie on one axis the kernel is averaged round the tube, ``R^2 = d^2 + (a - a')^2 + 4 a a' sin^2(phi/2)`` with d the
distance of the axes' points: exact on straight runs (the tube kernel, complete elliptic integrals), with a
logarithmic singularity, so the current converges under refinement. Between a wire and the sheet it is attached to,
``R^2 = d^2 + a^2``. Everywhere else the wire is a filament: by Gauss's mean-value property that is what a parallel
wire sees. Only the static terms 1/R and R carry the radius; higher ones differ by (ka)^4.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import ellipe, ellipkm1

from . import quadrature
from .ewald import singular_kernel
from .pairs import end_distances, on_one_axis
from .potentials import triangle_potentials

Floats = NDArray[np.float64]
POWERS = 2
MAX_PANELS = 32


def tube_kernel(distance: Floats, a: Floats, b: Floats, p: int) -> Floats:
    """Mean of the singular kernel p round two tubes of radii a and b whose axes' points are `distance` apart."""
    small = distance**2 + (a - b) ** 2
    large = small + 4 * a * b
    if p == 0:
        return ellipkm1(small / large) / (2 * np.pi**2 * np.sqrt(large))
    return -ellipe(1 - small / large) * np.sqrt(large) / (4 * np.pi**2)


def _moments(a: Floats, b: Floats, rule_a: tuple, rule_b: tuple, kernel) -> Floats:
    """``int int lambda_c lambda_d K`` over paired segments for one rule each -> (POWERS, n, 2, 2)."""
    (x, wx), (y, wy) = rule_a, rule_b
    pa = a[:, None, 0] + x[:, None] * (a[:, 1] - a[:, 0])[:, None]
    pb = b[:, None, 0] + y[:, None] * (b[:, 1] - b[:, 0])[:, None]
    distance = end_distances(pa, pb)
    ua, ub = np.stack([1 - x, x], 1) * wx[:, None], np.stack([1 - y, y], 1) * wy[:, None]
    scale = np.linalg.norm(a[:, 1] - a[:, 0], axis=1) * np.linalg.norm(b[:, 1] - b[:, 0], axis=1)
    return np.stack(
        [np.einsum("qc,nqr,rd,n->ncd", ua, kernel(distance, p), ub, scale, optimize=True) for p in range(POWERS)]
    )


def _flip(rule: tuple[Floats, Floats], end: int) -> tuple[Floats, Floats]:
    """Turn a rule graded toward 0 so that it is graded toward `end`."""
    return rule if end == 0 else (1 - rule[0], rule[1])


def _grading(ratio: float) -> int:
    """Panels that reach below an eighth of `ratio`."""
    return int(np.clip(np.ceil(np.log(max(ratio, 1e-6) / 8) / np.log(0.4)), 2, 18)) + 2


def segment_moments(a: Floats, b: Floats, radius_a: Floats, radius_b: Floats) -> Floats:
    """``int int lambda_c lambda_d K`` of the singular kernels, (n, 2, 3) each -> (POWERS, n, 2, 2)."""
    moments = np.empty((POWERS, len(a), 2, 2))
    size = np.linalg.norm(a[:, 1] - a[:, 0], axis=1)
    shared = end_distances(a, b) < 1e-6 * size[:, None, None]
    coaxial = on_one_axis(a, b, np.maximum(radius_a, radius_b))
    for i in range(len(a)):
        one, two = a[i : i + 1], b[i : i + 1]
        if shared[i].sum() == 2:
            moments[:, i] = _self_moments(size[i], radius_a[i], flipped=bool(shared[i, 0, 1]))
            continue

        def tube(distance: Floats, p: int, i: int = i) -> Floats:
            return tube_kernel(distance, radius_a[i], radius_b[i], p)

        if shared[i].any():
            end_a, end_b = (int(e[0]) for e in np.nonzero(shared[i]))
            ratio = min(radius_a[i], radius_b[i]) / size[i]
            rule = quadrature.graded(_grading(ratio), 4)
            moments[:, i] = _moments(one, two, _flip(rule, end_a), _flip(rule, end_b), tube)[:, 0]
        else:
            rule = quadrature.uniform(_panels(one, two), 5)
            kernel = tube if coaxial[i] else singular_kernel
            moments[:, i] = _moments(one, two, rule, rule, kernel)[:, 0]
    return moments


def _self_moments(length: float, radius: float, flipped: bool) -> Floats:
    """A segment with itself: one integral over the separation t of the exact overlap of the shapes."""
    t, w = quadrature.graded(_grading(radius / length) + 3, 8)
    u, wu = quadrature.gauss(4)
    s = u[:, None] * (1 - t)
    left, right = np.stack([1 - s, s]), np.stack([1 - s - t, s + t])
    overlap = np.einsum("q,cqt,dqt->cdt", wu, left, right) * (1 - t)
    overlap = overlap + overlap.transpose(1, 0, 2)
    result = np.stack(
        [overlap @ (w * tube_kernel(length * t, np.asarray(radius), np.asarray(radius), p)) for p in range(POWERS)]
    )
    result *= length**2
    return result[:, :, ::-1] if flipped else result


def _panels(a: Floats, b: Floats) -> int:
    """Equal panels as short as the smallest distance between sample points."""
    x = np.linspace(0, 1, 9)[:, None]
    gap = end_distances(
        a[:, None, 0] + x * (a[:, 1] - a[:, 0])[:, None], b[:, None, 0] + x * (b[:, 1] - b[:, 0])[:, None]
    )
    size = max(np.linalg.norm(s[:, 1] - s[:, 0], axis=1).max() for s in (a, b))
    return int(np.clip(np.ceil(size / max(gap.min(), 1e-9 * size)), 1, MAX_PANELS))


def segment_products(a: Floats, b: Floats, moments: Floats) -> tuple[Floats, Floats]:
    """Current (..., n, 2, 2) and charge (..., n, 2, 2) products of the segment shapes."""
    ta, tb = a[:, 1] - a[:, 0], b[:, 1] - b[:, 0]
    both = 1 / (np.linalg.norm(ta, axis=1) * np.linalg.norm(tb, axis=1))
    cosine = np.einsum("nc,nc->n", ta, tb) * both
    sign = np.array([[1.0, -1.0], [-1.0, 1.0]])
    charge = (moments.sum(axis=(-1, -2)) * both)[..., None, None] * sign
    return moments * cosine[:, None, None], charge


def attached_softening(segments: Floats, corners: Floats, radius: Floats) -> tuple[Floats, NDArray[np.int64]]:
    """Radius to soften the kernel with (0 where the wire does not touch), and the touching end (-1: none)."""
    size = np.linalg.norm(segments[:, 1] - segments[:, 0], axis=1)
    touch = (end_distances(segments, corners) < 1e-6 * size[:, None, None]).any(axis=2)
    end = np.where(touch.any(axis=1), np.argmax(touch, axis=1), -1)
    return np.where(end >= 0, radius, 0.0), end


def segment_rules(segments: Floats, corners: Floats, soft: Floats, end: NDArray[np.int64]) -> list:
    """For each pair a rule along the segment that resolves its approach to the triangle `corners`."""
    rules = []
    for i in range(len(segments)):
        size = np.linalg.norm(segments[i, 1] - segments[i, 0])
        if end[i] >= 0:
            rules.append(_flip(quadrature.graded(_grading(soft[i] / size), 6), int(end[i])))
            continue
        x = np.linspace(0, 1, 9)[:, None]
        line = segments[i, 0] + x * (segments[i, 1] - segments[i, 0])
        nodes, _ = quadrature.triangle(7)
        samples = np.concatenate([corners[i], nodes @ corners[i]])
        gap = end_distances(line[None], samples[None]).min()
        rules.append(quadrature.uniform(int(np.clip(np.ceil(size / max(gap, 1e-9 * size)), 1, MAX_PANELS)), 5))
    return rules


def segment_triangle_moments(segments: Floats, triangles: Floats, radius: Floats) -> Floats:
    """``int ds int dS lambda_c lambda_d K``, (n, 2, 3) and (n, 3, 3) -> (POWERS, n, 2, 3)."""
    moments = np.empty((POWERS, len(segments), 2, 3))
    soft, end = attached_softening(segments, triangles, radius)
    nodes, weights = quadrature.triangle(7)
    for i, (x, w) in enumerate(segment_rules(segments, triangles, soft, end)):
        s, t = segments[i], triangles[i]
        length, area = np.linalg.norm(s[1] - s[0]), 0.5 * np.linalg.norm(np.cross(t[1] - t[0], t[2] - t[0]))
        points = s[0] + x[:, None] * (s[1] - s[0])
        rise = np.stack([1 - x, x]) * w * length
        potential, _ = triangle_potentials(t[None], points[None], soft[i])
        moments[0, i] = rise @ potential[0] / (4 * np.pi)
        distance = np.sqrt(end_distances(points[None], (nodes @ t)[None])[0] ** 2 + soft[i] ** 2)
        moments[1, i] = rise @ singular_kernel(distance, 1) @ (nodes * weights[:, None] * area)
    return moments


def segment_triangle_products(segments: Floats, triangles: Floats, moments: Floats) -> tuple[Floats, Floats]:
    """Current and charge products (..., n, 2 segment shapes, 3 triangle shapes)."""
    along = segments[:, 1] - segments[:, 0]
    length = np.linalg.norm(along, axis=1)
    area = 0.5 * np.linalg.norm(np.cross(triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]), axis=1)
    unit = along / length[:, None]
    dots = np.einsum("nc,ndc->nd", unit, triangles)
    current = np.einsum("...nsd,nd->...ns", moments, dots)[..., None] - moments.sum(-1)[..., None] * dots[:, None, :]
    charge = (moments.sum(axis=(-1, -2)) / (length * area))[..., None, None] * np.array([[-1.0], [1.0]])
    return current / (2 * area)[:, None, None], np.broadcast_to(charge, current.shape)
