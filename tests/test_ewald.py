"""Ewald's split between points: the tabulated periodic Green's function, and what each part must be."""

from __future__ import annotations

import numpy as np
import pytest
from reference_green import TABLE, green_ewald
from scanward.geometry.lattice import Lattice
from scanward.solver.ewald import choose_split, far_kernel, near_kernels, singular_kernel, smooth_static

K = 2 * np.pi


def green(point, cell, angles, *, splitting=None, tolerance=1e-13):
    """The periodic Green's function from the solver's own kernels."""
    lattice = Lattice(*(np.asarray(v, dtype=float) for v in cell))
    theta, phi = np.radians(angles)
    kt = K * np.sin(theta) * np.array([np.cos(phi), np.sin(phi)])
    split = choose_split(lattice.area, K, tolerance, splitting)
    rho = lattice.positions(lattice.cells_within(split.near_radius + np.hypot(*point[:2])))
    distance = np.sqrt(((np.asarray(point[:2]) - rho) ** 2).sum(axis=1) + point[2] ** 2)
    near = sum(K ** (2 * p) * kernel for p, kernel in enumerate(near_kernels(distance, split)))
    orders = lattice.orders_within(float(np.hypot(split.far_radius, K)), kt)
    waves = lattice.harmonics(orders, kt)
    far = far_kernel(K, (waves**2).sum(axis=1), np.asarray(point[2]), split, lattice.area)
    return np.sum(np.exp(-1j * rho @ kt) * near) + np.sum(far * np.exp(-1j * waves @ point[:2]))


@pytest.mark.parametrize("splitting", [None, 5.0, 9.0])
@pytest.mark.parametrize("row", TABLE)
def test_tabulated_values(row, splitting):
    """CLOSED, 1e-11 (checks.md section 8)."""
    point, (a, b), angles, value = row
    assert abs(green(point, ((a, 0), (0, b)), angles, splitting=splitting) - value) < 1e-11


def test_cell_large_against_the_wavelength():
    """Periods of 4.1 and 3.7 wavelengths: a fixed splitting would cancel catastrophically (Capolino et al. 2007)."""
    point, cell = (0.3, -0.2, 0.15), ((4.1, 0.0), (1.0, 3.7))
    theta, phi = np.radians([35.0, 20.0])
    kt = K * np.sin(theta) * np.array([np.cos(phi), np.sin(phi)])
    assert abs(green(point, cell, (35, 20)) - green_ewald(point, cell, kt, split=4.5)) < 1e-10


@pytest.mark.parametrize("tolerance", [1e-4, 1e-6, 1e-8])
def test_tolerance_is_met(tolerance):
    exact = green((0.1, 0.05, 0.0), ((0.5, 0), (0, 0.5)), (30, 0))
    assert (
        abs(green((0.1, 0.05, 0.0), ((0.5, 0), (0, 0.5)), (30, 0), tolerance=tolerance) / exact - 1)
        < tolerance
    )


def test_near_kernel_is_singular_part_plus_a_smooth_rest():
    """K_p - (-1)^p R^(2p-1)/(4 pi (2p)!) is even in R: its values at 0 and nearby agree to second order."""
    split = choose_split(0.25, K, 1e-8)
    small = np.array([0.0, 1e-4, 2e-4]) / split.splitting
    for p, kernel in enumerate(near_kernels(small, split)):
        rest = kernel - singular_kernel(small, p)
        assert abs(rest[1] - rest[0]) < 1e-6 * abs(rest[0])
        assert rest[2] - rest[0] == pytest.approx(4 * (rest[1] - rest[0]), rel=0.05, abs=1e-11 * abs(rest[0]))


def test_static_parts_add_up():
    """erfc + erf = 1: K_0 + erf(RE)/(4 pi R) = 1/(4 pi R). CLOSED"""
    split = choose_split(0.25, K, 1e-8)
    distance = np.array([0.01, 0.1, 0.3])
    total = near_kernels(distance, split)[0] + smooth_static(distance, split.splitting)
    np.testing.assert_allclose(total, 1 / (4 * np.pi * distance), rtol=1e-13)


def test_far_kernel_becomes_the_plain_wave_for_large_splitting():
    """D -> exp(-j kz z) / (2 j kz S) when everything is left to the far part. CLOSED"""
    split = choose_split(0.25, K, 1e-8, 400.0)
    square = np.array([0.0, 20.0, 39.0, 60.0, 300.0])
    kz = np.where(
        square < K * K,
        np.sqrt(np.maximum(K * K - square, 0)) + 0j,
        -1j * np.sqrt(np.maximum(square - K * K, 0)),
    )
    exact = np.exp(-1j * kz * 0.1) / (2j * kz * 0.25)
    np.testing.assert_allclose(far_kernel(K, square, np.asarray(0.1), split, 0.25), exact, rtol=1e-10)
