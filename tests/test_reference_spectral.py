"""Spectral-domain strip dipoles: the table (SECOND METHOD and our own converged values) and invariances."""

import numpy as np
import pytest
from reference_sinusoid import wave_vector
from reference_spectral import FINE, MEDIA, OVER_GROUND, SLAB, TABLE, Size, Strip, excitation, solve_strip

SQUARE = 0.5 * np.eye(2)
COARSE = Size(along=24, across=2, transverse=2, p=40, q=150)


def impedance(row, size):
    kt = wave_vector(np.radians(row.theta), np.radians(row.phi))
    return solve_strip(Strip(row.length, 0.01, 0.01), SQUARE, kt, MEDIA[row.medium], size)


def name(row):
    return f"{row.medium}-{row.theta}-{row.phi}"


@pytest.mark.parametrize("row", [TABLE[0], TABLE[3], TABLE[7], TABLE[9]], ids=name)
def test_default_size_reproduces_the_table(row):
    z = impedance(row, Size())
    assert abs(z - row.given) < 0.3  # SECOND METHOD, R +-.1-.25, X +-.2
    assert abs(z - row.converged) < 1.6e-3 * abs(row.converged)


@pytest.mark.slow
@pytest.mark.parametrize("row", TABLE, ids=name)
def test_fine_size_reproduces_the_whole_table(row):
    z = impedance(row, FINE)
    assert abs(z - row.converged) < 0.008
    assert abs(z - row.given) < max(0.33, 7.5e-3 * abs(z))


def test_every_cut_off_has_settled():
    kt, strip = wave_vector(0.6, 0.5), Strip(0.39, 0.02, 0.04)
    base = solve_strip(strip, SQUARE, kt, SLAB, COARSE)
    for finer in (Size(24, 2, 2, 80, 150), Size(24, 2, 2, 40, 500), Size(24, 3, 3, 40, 150)):
        assert abs(solve_strip(strip, SQUARE, kt, SLAB, finer) - base) < 5e-4 * abs(base)


def test_another_basis_of_the_same_lattice_and_the_opposite_scan():
    kt, strip = wave_vector(0.5, 0.7), Strip(0.39, 0.02, 0.04)
    z = solve_strip(strip, SQUARE, kt, SLAB, COARSE)
    skew = solve_strip(strip, [[0.5, 0.0], [0.5, 0.5]], kt, SLAB, COARSE)
    assert abs(z - skew) < 1e-4 * abs(z)
    assert abs(z - solve_strip(strip, SQUARE, -kt, SLAB, COARSE)) < 1e-9 * abs(z)


def test_unit_of_length_does_not_matter():
    scale, kt = 0.0555, wave_vector(0.5, 0.7)
    z = solve_strip(Strip(0.47, 0.02, 0.04), SQUARE, kt, OVER_GROUND, COARSE)
    stack = type(OVER_GROUND)(((1.0, 0.25 * scale),), ground=True, k=2 * np.pi / scale)
    scaled = Strip(0.47 * scale, 0.02 * scale, 0.04 * scale)
    assert abs(solve_strip(scaled, SQUARE * scale, kt / scale, stack, COARSE) - z) < 1e-9 * abs(z)


def test_excitation_is_the_mean_current_through_the_gap():
    strip, size = Strip(0.4, 0.02, 0.1), Size(along=5, across=2, transverse=1)
    t, w = np.polynomial.legendre.leggauss(40)
    angle = np.arccos(t * strip.gap / strip.length)
    profiles = np.sin(np.outer(np.arange(1, 6), angle))  # U_n(cos t) sin t
    expected = profiles @ w / 2 * np.pi * strip.width / 2
    assert np.allclose(excitation(strip, size)[:10:2], expected, atol=1e-14)


def test_too_few_orders_for_the_expansion_are_refused():
    with pytest.raises(ValueError, match="p = 10 orders are too few for 80"):
        solve_strip(Strip(0.39, 0.01, 0.01), SQUARE, (0.0, 0.0), SLAB, Size(along=80, p=10))
