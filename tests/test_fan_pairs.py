"""Attachment fans: the shape itself, and their pair integrals against dense products of Gauss rules."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from cells import FREQUENCY, probe_fed_plate
from scanward.solver import quadrature
from scanward.solver.cloud import fan_weights, segment_weights, triangle_weights
from scanward.solver.ewald import singular_kernel
from scanward.solver.fan_pairs import fan_fan_products, fan_segment_products, fan_triangle_products
from scanward.solver.pairs import end_distances
from scanward.solver.plane_wave import plane_wave_response
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver, solve_sweep

FAN = np.array([[0.1, 0.2, 0.0], [0.9, 0.1, 0.0], [0.3, 0.8, 0.0]])
NEXT = np.array([FAN[0], FAN[2], [-0.6, 0.4, 0.0]])
OTHER = np.array([[1.4, 0.2, 0.3], [2.0, 0.4, 0.1], [1.5, 0.9, 0.4]])
SEGMENT = np.array([[-0.7, 0.1, 0.2], [-0.6, 0.5, 0.6]])
DENSE = quadrature.gauss(14)


def test_unit_flux_from_the_corner_and_none_elsewhere():
    """Divergence theorem with the weights 1 and x, y: int (phi div f + f . grad phi) = -phi(corner). CLOSED"""
    points, vector, charge = fan_weights(FAN[None], DENSE, DENSE)
    assert charge.sum() == pytest.approx(-1.0, rel=1e-12)
    for axis in (0, 1):
        moment = (points[0, :, axis] * charge[0, :, 0]).sum() + vector[0, :, 0, axis].sum()
        assert moment == pytest.approx(-FAN[0, axis], rel=1e-12)


def dense(first, second):
    """Current and charge products (power, shape, shape) of two weighted clouds."""
    (pa, va, ca), (pb, vb, cb) = first, second
    distance = end_distances(pa, pb)[0]
    kernels = [singular_kernel(distance, p) for p in (0, 1)]
    current = [np.einsum("qsc,rtc,qr->st", va[0], vb[0], k, optimize=True) for k in kernels]
    charge = [np.einsum("qs,rt,qr->st", ca[0], cb[0], k, optimize=True) for k in kernels]
    return np.stack(current), np.stack(charge)


@pytest.mark.parametrize("kind", ["fan", "triangle", "segment"])
def test_pairs_apart_equal_dense_quadrature(kind):
    """1/(4 pi R) and -R/(8 pi) between a fan and every other element kind; 1e-4 of the largest entry."""
    fan = fan_weights(FAN[None], DENSE, DENSE)
    if kind == "fan":
        made, exact = fan_fan_products(FAN[None], OTHER[None]), dense(fan, fan_weights(OTHER[None], DENSE, DENSE))
    elif kind == "triangle":
        made, exact = fan_triangle_products(FAN[None], OTHER[None]), dense(fan, triangle_weights(OTHER[None], 14))
    else:
        made = fan_segment_products(FAN[None], SEGMENT[None], np.array([0.01]))
        exact = dense(fan, segment_weights(SEGMENT[None], DENSE))
    for got, wanted in zip(made, exact, strict=True):
        for p in (0, 1):
            assert np.abs(got[p, 0] - wanted[p]).max() < 1e-4 * np.abs(wanted[p]).max()


@pytest.mark.parametrize(("neighbour", "value", "error"), [(FAN, 0.10727, 0.005), (NEXT, 0.00626, 0.015)])
def test_fans_round_one_corner(neighbour, value, error):
    """The same fan, and its neighbour across an edge. OWN RUN: Monte Carlo, 6e7 samples of both fans, 0.10727(12) and
    0.006260(18); product rules do not converge here."""
    assert fan_fan_products(FAN[None], neighbour[None])[0][0, 0, 0, 0] == pytest.approx(value, rel=error)


def test_a_plate_receives_what_it_sends():
    """Reciprocity in air: the wave sent to (u, v) and the power wave received from there are equal in size. CLOSED"""
    cell = dataclasses.replace(probe_fed_plate(0.06))
    solver = CellSolver(cell, FREQUENCY)
    scan = ScanPoints.from_cosines([0.0, 0.4], [0.2, -0.3])
    sent = solve_sweep(cell, [FREQUENCY], scan, solver=solver).waves[0, :, :2, 0]
    back = plane_wave_response(solver, [FREQUENCY], ScanPoints.from_cosines(-scan.u, -scan.v))
    np.testing.assert_allclose(np.abs(back.received[0, :, 0]), np.abs(sent), rtol=1e-8)
