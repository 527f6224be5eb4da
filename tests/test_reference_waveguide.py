"""Waveguide simulator: the table, and the probe as an infinite array of dipoles twice as long (CLOSED)."""

import numpy as np
import pytest
from reference_sinusoid import array_impedance_by_rows
from reference_waveguide import (
    FREQUENCY,
    GUIDE_WAVELENGTH,
    HEIGHT,
    PROBE_RESISTANCE,
    SCAN_ANGLE_DEG,
    SPEED_OF_LIGHT,
    WIDTH,
    guide_wavelength,
    probe_resistance,
    scan_angle,
)


def test_scan_angle_and_guide_wavelength():
    assert abs(np.degrees(scan_angle(WIDTH, FREQUENCY)) - SCAN_ANGLE_DEG) < 0.0051  # CLOSED
    assert abs(guide_wavelength(WIDTH, FREQUENCY) - GUIDE_WAVELENGTH) < 1e-6  # CLOSED


@pytest.mark.parametrize("probe", PROBE_RESISTANCE)
def test_probe_resistance(probe):
    r = probe_resistance(probe, GUIDE_WAVELENGTH / 4, WIDTH, HEIGHT, FREQUENCY)
    assert abs(r / PROBE_RESISTANCE[probe] - 1) < 2e-4  # MEMORY, four digits printed


@pytest.mark.parametrize("probe", PROBE_RESISTANCE)
def test_probe_is_half_a_dipole_of_the_infinite_array(probe):
    # lattice 22.86 by 20.32 mm, phase pi per element along the broad wall, ground at the shorting wall
    k = 2 * np.pi * FREQUENCY / SPEED_OF_LIGHT
    lattice = ((2 * HEIGHT, 0.0), (0.0, WIDTH))
    z = array_impedance_by_rows(
        lattice, 2 * probe, (0.0, np.pi / WIDTH), offset=0.05e-3, height=GUIDE_WAVELENGTH / 4, k=k
    )
    assert abs(z.real / 2 / PROBE_RESISTANCE[probe] - 1) < 2e-4  # CLOSED
