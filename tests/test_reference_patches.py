"""The reference for patches: its ladder of admittances, its functions and sums, without the solver."""

import numpy as np
import pytest
from reference_pair import ETA, K0
from reference_patches import Box, Ladder, PatchArray, Rectangle, wave_admittance
from reference_sinusoid import wave_vector
from reference_slab import CURRENT_SHEETS, SLAB_REFLECTION, SheetStack
from reference_spectral import SLAB, Size, Strip, solve_strip

KT = wave_vector(0.7, 0.5)
PATCH = Rectangle(0, 0.3, 0.2, along=16, across=4)
THIN = Ladder(((2.2, 0.03),))
ORDERS = (50, 50)


@pytest.mark.parametrize("row", CURRENT_SHEETS)
def test_top_of_the_ladder_is_a_current_sheet(row):
    """CLOSED (checks.md section 2)."""
    permittivity, thickness, polarisation, theta, expected = row
    z = Ladder(((permittivity, thickness),)).impedance(np.array((K0 * np.sin(np.radians(theta))) ** 2), polarisation)
    assert abs(z[0, 0] - expected) < 0.0072


@pytest.mark.parametrize("row", SLAB_REFLECTION)
def test_slab_in_air_reflects_as_tabulated(row):
    """CLOSED, all digits (checks.md section 7)."""
    permittivity, thickness, polarisation, theta, expected = row
    kt2 = np.array((K0 * np.sin(np.radians(theta))) ** 2)
    z = Ladder(((permittivity, thickness),), ground=False).impedance(kt2, polarisation)[-1, -1]
    assert abs(2 * wave_admittance(kt2, polarisation, 1.0) * z - 1 - expected) < 7.2e-6


def test_ladder_is_the_other_reference_seen_from_a_buried_plane():
    """Three lossy layers over ground, currents between the first and the second; evanescent waves included."""
    layers = ((2.55 - 0.03j, 0.1), (6.0, 0.05), (1.5 - 0.1j, 0.07))
    plane = SheetStack(layers[:1], layers[1:], ground=True)
    kt2 = (K0 * np.array([0.0, 0.4, 1.3, 3.0, 40.0])) ** 2
    for polarisation in ("TM", "TE"):
        own = Ladder(layers).impedance(kt2, polarisation)[:, 0, 0]
        np.testing.assert_allclose(own, plane.impedance(kt2, polarisation), rtol=1e-10)


def test_narrow_patch_is_the_strip_of_the_other_reference():
    patch = PatchArray(
        Ladder(((2.55, 0.19),)),
        (Rectangle(0, 0.39, 0.01, along=20, across=2),),
        (Box(0, 0.01, 0.01),),
        orders=(40, 150),
    )
    strip = solve_strip(Strip(0.39, 0.01, 0.01), 0.5 * np.eye(2), KT, SLAB, Size(20, 2, 2, 40, 150))
    assert abs(patch.impedance(KT)[0, 0] - strip) < 1e-7 * abs(strip)


def test_current_through_a_gap_off_the_middle():
    """The closed forms against quadrature over the box."""
    patch = PatchArray(THIN, (PATCH,), (Box(0, 0.04, 0.06, (0.07, -0.05)),), orders=ORDERS)
    t, w = np.polynomial.legendre.leggauss(60)
    angle_x, angle_y = np.arccos(2 * (0.07 + 0.02 * t) / 0.3), np.arccos(2 * (-0.05 + 0.03 * t) / 0.2)
    x = np.sin(np.outer(np.arange(1, 17), angle_x)) @ w * 0.02  # U_n(cos t) sin t
    y = np.cos(np.outer(np.arange(4), angle_y)) / np.sin(angle_y) @ w * 0.03
    np.testing.assert_allclose(patch.gap_vector(patch.boxes[0])[:64], np.outer(x, y).ravel() / 0.04, atol=1e-12)


def test_place_in_the_cell_and_split_layers_do_not_matter():
    gap = Box(0, 0.03, 0.2, (0.05, 0.0))
    z = PatchArray(THIN, (PATCH,), (gap,), orders=ORDERS).impedance(KT)[0, 0]
    moved = Rectangle(1, 0.3, 0.2, (0.11, -0.04), along=16, across=4)
    split = PatchArray(Ladder(((2.2, 0.01), (2.2, 0.02))), (moved,), (gap,), orders=ORDERS)
    assert abs(split.impedance(KT)[0, 0] - z) < 1e-9 * abs(z)


def test_two_fed_patches_are_reciprocal_and_reflect_everything():
    """``Z(kt)^T = Z(-kt)``; over ground without loss every reflection is unitary. CLOSED"""
    ladder = Ladder(((2.2, 0.04), (1.1, 0.05)))
    upper = Rectangle(1, 0.32, 0.24, (0.02, 0.01), along=12, across=4)
    stacked = PatchArray(ladder, (PATCH, upper), (Box(0, 0.03, 0.2), Box(1, 0.03, 0.24)), orders=ORDERS)
    there, back = stacked.impedance(KT), stacked.impedance(-KT)
    np.testing.assert_allclose(there, back.T, rtol=1e-9)
    for kt in (np.zeros(2), KT):
        gamma = stacked.reflection(kt, 0.3)
        assert np.abs(gamma.conj().T @ gamma - np.eye(2)).max() < 1e-12


def test_lossy_layers_take_power():
    gamma = PatchArray(Ladder(((2.2 - 0.02j, 0.03),)), (PATCH,), orders=ORDERS).reflection(KT)
    assert np.linalg.norm(gamma, 2) < 0.999


def test_every_cut_off_has_settled():
    gap = (Box(0, 0.03, 0.2, (0.09, 0.0)),)
    z = PatchArray(THIN, (Rectangle(0, 0.31, 0.2, along=30, across=6),), gap, orders=(80, 80)).impedance(KT)[0, 0]
    for along, across, orders in ((50, 6, (80, 80)), (30, 8, (80, 80)), (30, 6, (160, 80)), (30, 6, (80, 160))):
        finer = PatchArray(THIN, (Rectangle(0, 0.31, 0.2, along=along, across=across),), gap, orders=orders)
        assert abs(finer.impedance(KT)[0, 0] - z) < 1e-3 * abs(z)


def test_too_few_orders_are_refused():
    with pytest.raises(ValueError, match=r"\(10, 50\) orders are too few for 16 by 4"):
        PatchArray(THIN, (PATCH,), orders=(10, 50)).matrix(KT)


def test_free_space_is_eta_over_two():
    z = Ladder(((1.0, 0.1), (1.0, 0.2)), ground=False).impedance(np.array([0.0]), "TM")[0]
    np.testing.assert_allclose(np.diag(z), ETA / 2, rtol=1e-12)
