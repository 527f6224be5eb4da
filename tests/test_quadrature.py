"""Quadrature rules against exact moments and the closed form of the static self term."""

from __future__ import annotations

from math import factorial

import numpy as np
import pytest
from scanward.solver import quadrature

TRIANGLE = np.array([[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.3, 0.8, 0.0]])


@pytest.mark.parametrize(("n", "degree"), [(1, 1), (3, 2), (7, 5), (4, 6), (8, 14)])
def test_triangle_rules_integrate_their_degree(n, degree):
    """``int lambda_0^i lambda_1^j`` over a triangle of unit area = 2 i! j! / (i + j + 2)!. CLOSED"""
    nodes, weights = quadrature.triangle(n)
    for i in range(degree + 1):
        for j in range(degree + 1 - i):
            exact = 2 * factorial(i) * factorial(j) / factorial(i + j + 2)
            assert weights @ (nodes[:, 0] ** i * nodes[:, 1] ** j) == pytest.approx(exact, rel=1e-13)


@pytest.mark.parametrize("shared", [1, 2, 3])
def test_pair_rules_measure_and_moments(shared):
    """A smooth integrand over both triangles: product of single integrals. CLOSED"""
    first, second, weights = quadrature.pair_rule(shared, 4)
    assert weights.sum() == pytest.approx(1.0, rel=1e-13)
    assert weights @ (first[:, 1] * second[:, 2]) == pytest.approx(1 / 9, rel=1e-12)
    assert min(first.min(), second.min()) > -1e-15


@pytest.mark.parametrize(("order", "error"), [(4, 1e-5), (6, 5e-7), (8, 2e-8)])
def test_self_term_converges_to_closed_form(order, error):
    """``int int 1/R = -(4 A^2/3) sum ln(1 - l/s)/l``, s half the perimeter (Eibert and Hansen, IEEE TAP 43, 1499, 1995;
    from memory). CLOSED"""
    lengths = np.linalg.norm(TRIANGLE - np.roll(TRIANGLE, 1, axis=0), axis=1)
    area, s = 0.4, lengths.sum() / 2
    exact = -4 * area**2 / 3 * np.sum(np.log(1 - lengths / s) / lengths)
    first, second, weights = quadrature.pair_rule(3, order)
    value = weights @ (1 / np.linalg.norm(first @ TRIANGLE - second @ TRIANGLE, axis=1)) * area**2
    assert abs(value / exact - 1) < error


def test_graded_rule_resolves_a_logarithm():
    """``int_0^1 ln x dx = -1``. CLOSED"""
    x, w = quadrature.graded(18, 6)
    assert w @ np.log(x) == pytest.approx(-1.0, abs=1e-7)
    assert quadrature.uniform(5, 3)[1].sum() == pytest.approx(1.0)
