"""Periodic Green's function: the table (CLOSED, 1e-11) by two unlike routes, and their invariances."""

import numpy as np
import pytest
from reference_green import TABLE, green_ewald, green_kummer, green_plain
from reference_sinusoid import wave_vector


def cell(row):
    point, (a, b), (theta, phi), value = row
    return point, ((a, 0.0), (0.0, b)), wave_vector(np.radians(theta), np.radians(phi)), value


@pytest.mark.parametrize("row", TABLE)
def test_ewald_reproduces_the_table(row):
    point, lattice, kt, value = cell(row)
    assert abs(green_ewald(point, lattice, kt) - value) < 2e-12  # CLOSED, twelve decimals printed


@pytest.mark.parametrize("row", TABLE)
def test_the_route_without_ewald_reproduces_the_table(row):
    point, lattice, kt, value = cell(row)
    route = green_plain if point[2] else green_kummer
    assert abs(route(point, lattice, kt) - value) < 1e-11  # CLOSED


@pytest.mark.parametrize(
    "lattice", [((0.7, 0.0), (0.35, 0.6)), ((0.5, 0.1), (-0.2, 0.9)), ((3.1, 0), (0, 2.7))]
)
def test_kummer_equals_ewald_on_any_lattice(lattice):
    kt, point = wave_vector(0.8, 0.5), (0.13, -0.21, 0.0)
    assert abs(green_kummer(point, lattice, kt) - green_ewald(point, lattice, kt)) < 1e-10


def test_plain_sum_equals_ewald_off_the_plane():
    kt, lattice = wave_vector(0.8, 2.5), ((0.7, 0.0), (0.35, 0.6))
    for point in ((0.1, 0.2, 0.3), (0.1, 0.2, -0.05)):
        assert abs(green_plain(point, lattice, kt) - green_ewald(point, lattice, kt)) < 1e-12


def test_results_do_not_depend_on_the_split():
    kt, lattice, point = wave_vector(0.5, 0.4), ((0.6, 0.0), (0.2, 0.5)), (0.1, 0.05, 0.0)
    ewald = [green_ewald(point, lattice, kt, split=e) for e in (2.5, 3.5, 5.0)]
    kummer = [green_kummer(point, lattice, kt, u=u) for u in (9.0, 14.0)]
    assert np.ptp(np.real(ewald)) + np.ptp(np.imag(ewald)) < 1e-12
    assert abs(kummer[0] - kummer[1]) < 1e-11
    assert abs(kummer[0] - ewald[0]) < 1e-11


def test_floquet_phase_of_a_shifted_point():
    kt, lattice = wave_vector(0.5, 0.4), np.array(((0.6, 0.0), (0.2, 0.5)))
    here = green_ewald((0.1, 0.05, 0.2), lattice, kt)
    there = green_ewald((0.1 + 0.2, 0.05 + 0.5, 0.2), lattice, kt)
    assert abs(there - here * np.exp(-1j * kt @ lattice[1])) < 1e-13
