"""Dipole arrays with imposed current: the table (CLOSED), three routes, and the one-wave ratios (CLOSED)."""

import numpy as np
import pytest
from reference_sinusoid import (
    TABLE,
    array_impedance,
    array_impedance_by_rows,
    array_impedance_in_space,
    one_wave_ratio,
    wave_vector,
)


def name(row):
    return f"{'tri' if row.lattice[1][0] else 'rect'}-h{row.height}-{row.theta}-{row.phi}"


@pytest.mark.parametrize("row", TABLE, ids=name)
def test_rows_reproduce_the_table(row):
    z = array_impedance_by_rows(row.lattice, 0.5, row.kt, offset=row.offset, height=row.height)
    assert abs(z - row.impedance) < 0.72 * 10**-row.decimals


@pytest.mark.parametrize("row", TABLE[4:7], ids=name)
def test_plain_sum_reproduces_the_table(row):
    z = array_impedance(row.lattice, 0.5, row.kt, offset=row.offset, height=row.height)
    assert abs(z - row.impedance) < 0.72 * 10**-row.decimals


@pytest.mark.parametrize("height", [None, 0.2])
def test_plain_sum_equals_rows_on_a_skew_lattice_off_the_principal_planes(height):
    lattice, kt = ((0.62, 0.0), (0.21, 0.53)), wave_vector(0.7, 0.6)
    plain = array_impedance(lattice, 0.42, kt, offset=0.01, height=height, depth=25)
    rows = array_impedance_by_rows(lattice, 0.42, kt, offset=0.01, height=height)
    assert abs(plain - rows) < 1e-7 * abs(rows)


def test_plain_sum_error_follows_the_depth():
    kt = wave_vector(0.3, 0.2)
    exact = array_impedance_by_rows(((0.6, 0), (0, 0.6)), 0.5, kt, offset=0.02)
    errors = [
        abs(array_impedance(((0.6, 0), (0, 0.6)), 0.5, kt, offset=0.02, depth=d) - exact) for d in (3, 6, 12)
    ]
    assert errors[0] > 5 * errors[1] > 100 * errors[2]


def test_space_sum_reproduces_e30_over_ground():
    # CLOSED: 92.897 + j25.974 summed in space, equal to the sum over Floquet modes
    row = TABLE[6]
    z = array_impedance_in_space(row.lattice, 0.5, row.kt, offset=row.offset, height=row.height)
    assert abs(z - row.impedance) < 1e-3


@pytest.mark.parametrize("height", [None, 0.25])
@pytest.mark.parametrize("plane, phi", [("E", 0.0), ("H", np.pi / 2)])
def test_resistance_ratio_with_one_propagating_wave(plane, phi, height):
    # CLOSED; lattice 0.55: no grating lobe up to 54.9 degrees
    lattice = ((0.55, 0), (0, 0.55))
    broadside = array_impedance_by_rows(lattice, 0.5, (0.0, 0.0), offset=0.002, height=height).real
    for theta in np.radians([30, 50]):
        z = array_impedance_by_rows(lattice, 0.5, wave_vector(theta, phi), offset=0.002, height=height)
        assert abs(z.real / broadside / one_wave_ratio(theta, plane, height) - 1) < 1.2e-4
