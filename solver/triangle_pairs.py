"""Accurate static integrals between two triangles.

Everything reduces to the 3 x 3 barycentric moments ``S_cd = int int lambda_c(r) lambda_d(r') K(R)``. Touching pairs
use the singularity-cancelling rules of `quadrature.pair_rule` (relative error below 1e-4), which fail for stretched
triangles; those and close pairs use the closed-form inner potential with Gauss outside (1e-4 at order 12 whatever the
aspect ratio), moderately near ones Gauss on both.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from . import quadrature
from .ewald import singular_kernel
from .pairs import end_distances
from .potentials import triangle_potentials

Floats = NDArray[np.float64]
Kernel = Callable[[Floats], Floats]

CHUNK = 200_000  # kernel evaluations at a time
ORDERS = (
    (2.5, 4),
    (4.0, 6),
)  # Gauss order of touching pairs by aspect ratio up to; beyond: closed inner potential
CLOSED_ORDER = 12
POWERS = 2  # static powers that are singular enough to need correcting: 1/R and R


def triangle_moments(a: Floats, b: Floats) -> Floats:
    """Barycentric moments of the singular kernels for paired triangles, (n, 3, 3) each -> (POWERS, n, 3, 3)."""
    moments = np.zeros((POWERS, len(a), 3, 3))
    shared = _shared_corners(a, b)
    count = shared.any(axis=2).sum(axis=1)
    aspect = np.maximum(_aspect(a), _aspect(b))
    low = 0.0
    for high, order in ORDERS:
        for number in (3, 2, 1):
            pick = np.flatnonzero((count == number) & (aspect >= low) & (aspect < high))
            if len(pick):
                moments[:, pick] = _touching(a[pick], b[pick], shared[pick], number, order)
        low = high
    rest = np.flatnonzero((count == 0) | (aspect >= low))
    if len(rest):
        moments[:, rest] = product_moments(a[rest], b[rest], 7)
        gap, size = _gap(a[rest], b[rest])
        for low, high, order in ((0.0, 0.2, CLOSED_ORDER), (0.2, 0.6, 6)):
            pick = rest[(gap >= low * size) & (gap < high * size)]
            if len(pick):
                there, back = _inner_closed(a[pick], b[pick], order), _inner_closed(b[pick], a[pick], order)
                moments[0, pick] = 0.5 * (there + back.swapaxes(-1, -2))  # whichever is called first
    return moments


def product_moments(a: Floats, b: Floats, n: int, m: int | None = None) -> Floats:
    """The same by plain products of `quadrature.triangle` rules n and m; used for the cloud's share too."""
    nodes_a, weights_a = quadrature.triangle(n)
    nodes_b, weights_b = quadrature.triangle(m or n)
    first = np.repeat(nodes_a, len(nodes_b), axis=0)
    second = np.tile(nodes_b, (len(nodes_a), 1))
    return _summed(a, b, first, second, np.outer(weights_a, weights_b).ravel())


def _summed(a: Floats, b: Floats, first: Floats, second: Floats, weights: Floats) -> Floats:
    """Sum kernel samples at paired barycentric nodes into moments, in chunks."""
    scale = _areas(a) * _areas(b)
    moments = np.empty((POWERS, len(a), 9))
    products = (first[:, :, None] * second[:, None, :]).reshape(len(weights), 9) * weights[:, None]
    step = max(1, CHUNK // len(weights))
    for start in range(0, len(a), step):
        part = slice(start, start + step)
        difference = np.tensordot(a[part], first, (1, 1)) - np.tensordot(b[part], second, (1, 1))
        distance = np.sqrt(np.einsum("ncq,ncq->nq", difference, difference))
        distance[distance < 1e-9 * distance.max(initial=0.0)] = 0.0
        for p in range(POWERS):
            moments[p, part] = singular_kernel(distance, p) @ products
    return (moments * scale[:, None]).reshape(POWERS, len(a), 3, 3)


def _areas(t: Floats) -> Floats:
    return 0.5 * np.linalg.norm(np.cross(t[:, 1] - t[:, 0], t[:, 2] - t[:, 0]), axis=1)


def _aspect(t: Floats) -> Floats:
    """Longest edge squared over twice the area: 1.15 for an equilateral triangle, 2 for half a square."""
    edges = t - np.roll(t, 1, axis=1)
    return (edges**2).sum(axis=2).max(axis=1) / (2 * _areas(t))


def _shared_corners(a: Floats, b: Floats) -> NDArray[np.bool_]:
    size = np.linalg.norm(a[:, 1] - a[:, 0], axis=1)
    return end_distances(a, b) < 1e-6 * size[:, None, None]


def _touching(a: Floats, b: Floats, shared: NDArray[np.bool_], number: int, order: int) -> Floats:
    """Order the shared corners first and alike, integrate, and put the moments back in order."""
    order_a = np.argsort(~shared.any(axis=2), axis=1, kind="stable")
    partner = np.argmax(shared, axis=2)  # corner of b that meets each corner of a
    order_b = np.take_along_axis(partner, order_a, axis=1)
    if number < 3:
        order_b[:, number:] = np.argsort(~shared.any(axis=1), axis=1, kind="stable")[:, number:]
    rows = np.arange(len(a))[:, None]
    sorted_moments = _summed(a[rows, order_a], b[rows, order_b], *quadrature.pair_rule(number, order))
    moments = np.empty_like(sorted_moments)
    moments[:, rows[:, :, None], order_a[:, :, None], order_b[:, None, :]] = sorted_moments
    return moments


def _gap(a: Floats, b: Floats) -> tuple[Floats, Floats]:
    """Smallest distance between sample points of both triangles, and the longest edge."""
    samples = np.array(
        [[1, 0, 0], [0, 1, 0], [0, 0, 1], [0.5, 0.5, 0], [0, 0.5, 0.5], [0.5, 0, 0.5], [1 / 3, 1 / 3, 1 / 3]]
    )
    gap = end_distances(np.einsum("qa,nac->nqc", samples, a), np.einsum("qa,nac->nqc", samples, b))
    size = [np.linalg.norm(t - np.roll(t, 1, axis=1), axis=2).max(axis=1) for t in (a, b)]
    return gap.min(axis=(1, 2)), np.maximum(*size)


def _inner_closed(a: Floats, b: Floats, n: int) -> Floats:
    """1/(4 pi R): closed-form potential of b under a Gauss rule on a."""
    nodes, weights = quadrature.triangle(n)
    moments = np.empty((len(a), 3, 3))
    step = max(1, CHUNK // (4 * len(weights)))
    for start in range(0, len(a), step):
        part = slice(start, start + step)
        potential, _ = triangle_potentials(b[part], np.einsum("qa,nac->nqc", nodes, a[part]))
        moments[part] = np.einsum("q,qc,nqd->ncd", weights, nodes, potential)
    return moments * (_areas(a) / (4 * np.pi))[:, None, None]


def shape_products(a: Floats, b: Floats, moments: Floats) -> tuple[Floats, Floats]:
    """From barycentric moments (..., n, 3, 3) to the current and charge products of the triangle shapes.

    Returns ``int int f_a . f_b K`` (..., n, 3, 3) and ``int int div f_a div f_b K`` (..., n), for
    ``f_a = (r - v_a)/(2 A)``.
    """
    both = 1 / (_areas(a) * _areas(b))
    dots = np.einsum("nac,nbc->nab", a, b)
    total = moments.sum(axis=(-1, -2))
    rows, columns = moments.sum(axis=-1), moments.sum(axis=-2)
    current = (
        np.einsum("...ncd,ncd->...n", moments, dots)[..., None, None]
        - np.einsum("...nd,nad->...na", columns, dots)[..., :, None]
        - np.einsum("...nc,ncb->...nb", rows, dots)[..., None, :]
        + total[..., None, None] * dots
    )
    return 0.25 * current * both[:, None, None], total * both
