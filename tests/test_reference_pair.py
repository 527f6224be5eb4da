"""The pair reference against its table; CLOSED values, source: Carter 1932 and Balanis ch. 8 (from
memory)."""

import numpy as np
import pytest
from reference_pair import (
    COLLINEAR,
    ECHELON,
    MONOPOLE,
    SELF_HALF_WAVE,
    SIDE_BY_SIDE,
    mutual_impedance,
    mutual_impedance_quadrature,
    mutual_over_ground,
)

ROUNDING = 0.0072  # the table prints two decimals of R and of X


def test_self_impedance_of_a_half_wave_dipole_and_of_a_monopole():
    z = complex(mutual_impedance(0.5, 0.0))
    assert abs(z - SELF_HALF_WAVE) < 7.2e-4  # CLOSED, three decimals printed
    assert abs(z / 2 - MONOPOLE) < ROUNDING  # CLOSED


@pytest.mark.parametrize("spacing", SIDE_BY_SIDE)
def test_side_by_side(spacing):
    assert abs(mutual_impedance(0.5, spacing) - SIDE_BY_SIDE[spacing]) < ROUNDING  # CLOSED


@pytest.mark.parametrize("gap", COLLINEAR)
def test_collinear(gap):
    assert abs(mutual_impedance(0.5, 0.0, 0.5 + gap) - COLLINEAR[gap]) < ROUNDING  # CLOSED


@pytest.mark.parametrize("offsets", ECHELON)
def test_echelon(offsets):
    assert abs(mutual_impedance(0.5, *offsets) - ECHELON[offsets]) < ROUNDING  # CLOSED


@pytest.mark.parametrize(
    "length, side, axial",
    [
        (0.5, 0.25, 0.0),
        (0.5, 0.0, 0.6),
        (0.5, 0.5, 0.25),
        (0.42, 0.01, 0.0),
        (0.42, 0.3, -0.7),
        (0.7, 0.05, 0.1),
    ],
)
def test_closed_form_equals_quadrature(length, side, axial):
    closed = complex(mutual_impedance(length, side, axial))
    numeric = mutual_impedance_quadrature(length, side, axial)
    assert abs(closed - numeric) < 1e-10 * max(1.0, abs(closed))


def test_the_unit_of_length_does_not_matter():
    scale = 0.0555
    scaled = mutual_impedance(0.42 * scale, 0.3 * scale, 0.2 * scale, k=2 * np.pi / scale)
    assert abs(scaled - mutual_impedance(0.42, 0.3, 0.2)) < 1e-10


def test_ground_is_one_image_of_opposite_sign():
    expected = SIDE_BY_SIDE[0.25] - mutual_impedance(0.5, np.hypot(0.25, 0.5))
    assert abs(mutual_over_ground(0.5, 0.25, 0.0, height=0.25) - expected) < ROUNDING
