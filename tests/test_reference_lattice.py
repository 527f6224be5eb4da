"""Grating lobes: closed forms against a search, and the trade's rules."""

import numpy as np
import pytest
from reference_lattice import (
    EQUILATERAL_SAVING,
    LARGEST_EQUILATERAL,
    LARGEST_SQUARE,
    largest_equilateral_side,
    largest_square_period,
    lobe_free_cone,
    visible_lobes,
)


@pytest.mark.parametrize("cone", LARGEST_SQUARE)
def test_square_lattice(cone):
    d = largest_square_period(np.radians(cone))
    assert abs(d - LARGEST_SQUARE[cone]) < 5.1e-5  # CLOSED
    assert abs(np.degrees(lobe_free_cone(((d, 0), (0, d)), azimuths=16)) - cone) < 0.01


@pytest.mark.parametrize("cone", LARGEST_EQUILATERAL)
def test_equilateral_lattice(cone):
    side = largest_equilateral_side(np.radians(cone))
    assert abs(side - LARGEST_EQUILATERAL[cone]) < 5.1e-5  # CLOSED
    lattice = ((side, 0), (side / 2, side * np.sqrt(3) / 2))
    assert abs(np.degrees(lobe_free_cone(lattice, azimuths=12)) - cone) < 0.01


def test_equilateral_lattice_saves_elements():
    cone = np.radians(50)
    areas = largest_square_period(cone) ** 2, largest_equilateral_side(cone) ** 2 * np.sqrt(3) / 2
    assert abs(1 - areas[0] / areas[1] - EQUILATERAL_SAVING) < 5e-4  # PUBLISHED; 1 - sqrt(3)/2 CLOSED


def test_half_wave_lattice_never_shows_a_lobe_and_one_wave_lattice_always_does():
    # PRACTICE and CLOSED
    half, whole = 0.5 * np.eye(2) * (1 - 1e-12), np.eye(2)
    assert all(visible_lobes(half, np.radians(89.9), phi) == 0 for phi in np.linspace(0, 6.2, 25))
    assert visible_lobes(whole * 0.999, 0, 0) == 0
    assert visible_lobes(whole * 1.001, 0, 0) == 4
