"""Layers: surface waves, current sheets and slab reflection against their tables (CLOSED)."""

import numpy as np
import pytest
from reference_pair import ETA, K0
from reference_slab import (
    CURRENT_SHEETS,
    SLAB_REFLECTION,
    SURFACE_WAVES,
    SheetStack,
    current_sheet_impedance,
    line_impedance,
    pole_angle,
    slab_reflection,
    surface_wave_index,
    te1_cutoff,
)


@pytest.mark.parametrize("row", SURFACE_WAVES)
def test_surface_waves_and_pole_angles(row):
    permittivity, thickness, index, at_50, at_55, cutoff = row
    b = surface_wave_index(permittivity, thickness)
    assert abs(b - index) < 5.1e-6
    assert abs(np.degrees(pole_angle(b, 0.50)) - at_50) < 0.0051
    assert abs(np.degrees(pole_angle(b, 0.55)) - at_55) < 0.0051
    assert abs(te1_cutoff(permittivity) - cutoff) < 5.1e-5


@pytest.mark.parametrize("row", SURFACE_WAVES)
def test_the_surface_wave_is_a_pole_of_the_spectral_impedance(row):
    stack = SheetStack(((row[0], row[1]),), ground=True)
    kt2 = (K0 * surface_wave_index(row[0], row[1])) ** 2 * (1 + 1e-10)
    assert abs(stack.z_tm(kt2)) > 1e6 * abs(stack.z_tm(1.1 * kt2))


@pytest.mark.parametrize("row", CURRENT_SHEETS)
def test_current_sheet_on_a_grounded_slab(row):
    permittivity, thickness, polarisation, theta, expected = row
    z = current_sheet_impedance(permittivity, thickness, np.radians(theta), polarisation)
    assert abs(z - expected) < 0.0072
    kt2 = (K0 * np.sin(np.radians(theta))) ** 2
    spectral = SheetStack(((permittivity, thickness),), ground=True).impedance(kt2, polarisation)
    assert abs(spectral - z) < 1e-10 * abs(z)


@pytest.mark.parametrize("row", SLAB_REFLECTION)
def test_slab_reflection(row):
    permittivity, thickness, polarisation, theta, expected = row
    assert abs(slab_reflection(permittivity, thickness, np.radians(theta), polarisation) - expected) < 7.2e-6


def test_free_space_sheet_and_image_over_ground():
    kt2 = np.array([0.0, 0.3, 0.9, 2.0, 50.0]) * K0**2
    kz = np.sqrt(K0**2 - kt2 + 0j)
    kz = np.where(kz.imag > 0, -kz, kz)
    free = SheetStack()
    assert np.allclose(free.z_te(kt2), ETA * K0 / (2 * kz), rtol=1e-14)
    assert np.allclose(free.z_tm(kt2), ETA * kz / (2 * K0), rtol=1e-14)
    over_ground = SheetStack(((1.0, 0.3),), ground=True)
    assert np.allclose(over_ground.z_te(kt2), ETA * K0 / (2 * kz) * (1 - np.exp(-0.6j * kz)), rtol=1e-12)


def test_shortcut_for_deeply_evanescent_waves():
    stack = SheetStack(((2.55 - 0.01j, 0.19), (4.0, 0.1)), ((1.7, 0.08), (1.0, 0.2)), ground=True)
    for kt2 in np.array([150.0, 252.0]) ** 2:
        for polarisation in ("TE", "TM"):
            down = line_impedance(kt2, stack.below, polarisation, end="ground")
            up = line_impedance(kt2, stack.above, polarisation)
            z = stack.impedance(kt2, polarisation)
            assert abs(z - up * down / (up + down)) < 1e-12 * abs(z)


def test_cutting_a_layer_in_two_changes_nothing():
    kt2 = np.array([0.0, 0.5, 1.5, 9.0]) * K0**2
    whole = line_impedance(kt2, [(4.0 - 0.1j, 0.2), (2.0, 0.1)], "TM", end="ground")
    cut = line_impedance(kt2, [(4.0 - 0.1j, 0.15), (4.0 - 0.1j, 0.05), (2.0, 0.1)], "TM", end="ground")
    assert np.allclose(whole, cut, rtol=1e-12)


def test_unknown_names_are_refused():
    with pytest.raises(ValueError, match="end 'vacuum' is 'air' or 'ground'"):
        line_impedance(0.0, [], "TE", end="vacuum")
