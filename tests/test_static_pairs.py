"""Static potentials and pair integrals against brute-force quadrature."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.solver import quadrature
from scanward.solver.potentials import triangle_potentials
from scanward.solver.triangle_pairs import shape_products, triangle_moments
from scanward.solver.wire_pairs import segment_moments, segment_triangle_moments, tube_kernel
from scipy.integrate import quad

RNG = np.random.default_rng(20261201)
BASE = np.array([[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.2, 0.7, 0.0]])


def area(t):
    return 0.5 * np.linalg.norm(np.cross(t[1] - t[0], t[2] - t[0]))


def brute_potential(triangle, point, softening=0.0, n=70):
    nodes, weights = quadrature.triangle(n)
    distance = np.sqrt(((nodes @ triangle - point) ** 2).sum(axis=1) + softening**2)
    return area(triangle) * (nodes * (weights / distance)[:, None]).sum(axis=0)


@pytest.mark.parametrize("softening", [0.0, 0.3])
def test_potentials_off_the_triangle(softening):
    triangles, points = RNG.normal(size=(5, 3, 3)), RNG.normal(size=(5, 4, 3)) * 2
    moments, total = triangle_potentials(triangles, points, softening)
    for n in range(5):
        for m in range(4):
            np.testing.assert_allclose(
                moments[n, m], brute_potential(triangles[n], points[n, m], softening), rtol=2e-6, atol=1e-9
            )
    np.testing.assert_allclose(moments.sum(axis=2), total, rtol=1e-12)


def test_potentials_on_corner_edge_inside_and_on_an_edge_line():
    """Split at the observation point: each part then has its singularity at the collapsed corner of the rule."""
    points = np.array([BASE[0], 0.5 * (BASE[0] + BASE[1]), BASE.mean(axis=0), 2 * BASE[1] - BASE[0]])
    _, total = triangle_potentials(BASE[None], points[None])
    for point, value in zip(points, total[0], strict=True):
        brute = 0.0
        for a in range(3):
            part = np.stack([point, BASE[a], BASE[(a + 1) % 3]])
            side = np.sign(np.cross(part[1] - part[0], part[2] - part[0])[2])
            if area(part) > 0:
                brute += side * brute_potential(part, point).sum()
        assert value == pytest.approx(brute, rel=1e-9)


def reference_moments(a, b, n=60):
    nodes, weights = quadrature.triangle(n)
    potential, _ = triangle_potentials(b[None], (nodes @ a)[None])
    return area(a) * np.einsum("q,qc,qd->cd", weights, nodes, potential[0]) / (4 * np.pi)


@pytest.mark.parametrize(
    ("other", "error"),
    [
        (BASE, 1e-4),
        (np.array([BASE[1], BASE[0], [0.5, -0.6, 0.4]]), 1e-4),
        (np.array([[-0.6, -0.2, 0.5], BASE[0], [-0.5, 0.5, 0.0]]), 1e-4),
        (BASE + [0.05, 0.02, 0.1], 3e-4),
        (BASE + [1.2, 0.5, 0.2], 3e-4),
        (BASE + [0.0, 0.0, 3.0], 1e-6),
    ],
    ids=["same", "edge", "corner", "parallel and close", "near", "far"],
)
def test_triangle_pairs(other, error):
    moments = triangle_moments(BASE[None], other[None])[0, 0]
    exact = reference_moments(BASE, other)
    assert np.abs(moments - exact).max() < error * exact.max()
    swapped = triangle_moments(other[None], BASE[None])[0, 0]
    assert np.abs(swapped.T - exact).max() < error * exact.max()


@pytest.mark.parametrize("squeeze", [0.4, 0.2, 0.07, 0.02])
def test_stretched_triangles_keep_their_accuracy(squeeze):
    flat = BASE * [1.0, squeeze, 1.0]
    other = np.array([flat[1], flat[0], [0.4, -0.6 * squeeze, 0.0]])
    for pair in (flat, other):
        exact = reference_moments(flat, pair, 120)
        assert np.abs(triangle_moments(flat[None], pair[None])[0, 0] - exact).max() < 3e-4 * exact.max()


def test_shape_products_against_direct_quadrature():
    """Current and charge products from barycentric moments = sums over points of f . f' K and div f div f' K."""
    other = BASE + [0.3, 1.1, 2.0]
    moments = triangle_moments(BASE[None], other[None])
    current, charge = shape_products(BASE[None], other[None], moments)
    nodes, weights = quadrature.triangle(20)
    ra, rb = nodes @ BASE, nodes @ other
    kernel = 1 / (4 * np.pi * np.linalg.norm(ra[:, None] - rb, axis=2)) * weights[:, None] * weights
    fa, fb = (ra[:, None] - BASE) / 2, (rb[:, None] - other) / 2
    np.testing.assert_allclose(current[0, 0], np.einsum("qac,rbc,qr->ab", fa, fb, kernel), rtol=1e-5)
    assert charge[0, 0] == pytest.approx(kernel.sum(), rel=1e-6)


def test_tube_kernel_is_the_mean_round_the_tube():
    """Against numerical averaging of 1/(4 pi R) and -R/(8 pi). CLOSED"""
    phi = (np.arange(4000) + 0.5) * 2 * np.pi / 4000
    for d, a, b in ((0.1, 0.02, 0.02), (0.01, 0.02, 0.03), (1.0, 0.1, 0.1)):
        r = np.sqrt(d**2 + (a - b) ** 2 + 4 * a * b * np.sin(phi / 2) ** 2)
        args = np.asarray(d), np.asarray(a), np.asarray(b)
        assert tube_kernel(*args, 0) == pytest.approx((1 / (4 * np.pi * r)).mean(), rel=1e-6)
        assert tube_kernel(*args, 1) == pytest.approx((-r / (8 * np.pi)).mean(), rel=1e-9)


def tube_reference(a, b, radius):
    """Moment of shapes 0 and 0 on one axis by nested adaptive quadrature; a, b = (start, stop) on the axis."""

    def kernel(d):
        return float(tube_kernel(np.asarray(abs(d)), np.asarray(radius), np.asarray(radius), 0))

    def inner(x):
        shape = 1 - (x - a[0]) / (a[1] - a[0])
        breaks = [x] if b[0] < x < b[1] else None
        value = quad(
            lambda y: (1 - (y - b[0]) / (b[1] - b[0])) * kernel(x - y), *b, points=breaks, limit=200
        )[0]
        return shape * value

    return quad(inner, *a, limit=200, epsrel=1e-8)[0]


@pytest.mark.parametrize("other", [(0.0, 0.1), (0.1, 0.22), (0.3, 0.4)], ids=["same", "next", "apart"])
def test_segments_on_one_axis(other):
    radius = 0.004
    a, b = (np.array([[[s, 0, 0], [t, 0, 0]]]) for s, t in ((0.0, 0.1), other))
    moments = segment_moments(a, b, np.array([radius]), np.array([radius]))
    assert moments[0, 0, 0, 0] == pytest.approx(tube_reference((0.0, 0.1), other, radius), rel=2e-4)


def test_wire_attached_to_a_sheet():
    """Softened potential of the triangle under a dense rule along the wire."""
    segment = np.array([[0.0, 0.0, 0.0], [0.0, 0.0, 0.4]])
    moments = segment_triangle_moments(segment[None], BASE[None], np.array([0.01]))[0, 0]
    x, w = quadrature.graded(16, 10)
    potential, _ = triangle_potentials(
        BASE[None], (segment[0] + x[:, None] * (segment[1] - segment[0]))[None], 0.01
    )
    exact = 0.4 * np.einsum("q,qs,qc->sc", w, np.stack([1 - x, x], 1), potential[0]) / (4 * np.pi)
    np.testing.assert_allclose(moments, exact, rtol=1e-4)
