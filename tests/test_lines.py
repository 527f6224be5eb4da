"""Green's functions of the lines: chain matrices, closed forms, invariances and extremes."""

from __future__ import annotations

import numpy as np
import pytest
from reference_lines import fields
from reference_pair import ETA as ROUNDED_ETA
from reference_slab import CURRENT_SHEETS, SLAB_REFLECTION, current_sheet_impedance, slab_reflection
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from scanward.solver.lines import ETA, Lines, propagation, reflection, transmission, wave_impedance

K = 2 * np.pi
LAYERS = (Layer(0.11, 2.55, 0.01), Layer(0.06, 6.15, 0.002, 1.7), Layer(0.2, 1.0), Layer(0.04, 3.4))
SHEETS = (SheetImpedance(0.17, 220 - 40j), SheetImpedance(0.25, 150j))
KT = np.array([0.3, 0.9, 1.3, 2.7, 0.8 + 0.3j]) * K
HEIGHTS = np.array([0.03, 0.11, 0.15, 0.3, 0.37, 0.5])


@pytest.mark.parametrize("ground", [True, False])
@pytest.mark.parametrize("sheets", [(), SHEETS])
def test_chain_matrices_agree(ground, sheets):
    stack = Stack(LAYERS, ground, sheets)
    lines = Lines(stack, K, KT, HEIGHTS)
    for p in ("TE", "TM"):
        ours = {name: getattr(lines, name)(p) for name in ("vi", "ii", "vv", "iv")}
        for t, kt in enumerate(KT):
            for a, b in ((0, 3), (3, 0), (1, 4), (5, 2), (2, 1)):
                expected = fields(stack, K, kt, p, HEIGHTS[a], HEIGHTS[b])
                for name, value in expected.items():
                    assert abs(ours[name][t, a, b] - value) < 1e-9 * abs(value), (p, name, kt, a, b)


@pytest.mark.parametrize("ground", [True, False])
def test_difference_is_tm_less_te_over_kt_squared(ground):
    lines = Lines(Stack(LAYERS, ground, SHEETS), K, KT, HEIGHTS)
    for name in ("vi", "ii", "vv", "iv"):
        green = getattr(lines, name)
        plain = (green("TM") - green("TE")) / KT[:, None, None] ** 2
        scale = (np.abs(green("TM")) + np.abs(green("TE"))) / np.abs(KT[:, None, None]) ** 2
        assert np.all(np.abs(green("difference") - plain) < 1e-12 * scale)


def test_difference_stays_exact_down_to_broadside():
    stack = Stack(LAYERS, True, SHEETS)
    small = Lines(stack, K, np.array([0, 1e-9, 0.01, 0.02]) * K, HEIGHTS)
    for name in ("vi", "ii", "vv", "iv"):
        zero, tiny, *_ = getattr(small, name)("difference")
        assert np.all(np.abs(tiny - zero) <= 1e-12 * np.abs(zero).max())
        # Richardson's extrapolation in k_t^2 of the plain difference
        plain = (getattr(small, name)("TM") - getattr(small, name)("TE"))[2:] / small.kt[2:, None, None] ** 2
        limit = (4 * plain[0] - plain[1]) / 3
        assert np.all(np.abs(zero - limit) < 1e-5 * np.abs(zero).max())


@pytest.mark.parametrize("ground", [True, False])
def test_layers_of_air_are_free_space_and_image(ground):
    stack = Stack((Layer(0.1, 1.0), Layer(0.25, 1.0)), ground)
    kt, z = np.array([0, 1e-9, 0.5, 0.999, 1.2, 5, 100]) * K, np.array([0.0, 0.05, 0.1, 0.35, 0.6])
    lines, gamma = Lines(stack, K, kt, z), propagation(K, kt, 1.0)[:, None, None]
    impedance = {"TE": 1j * K * ETA / gamma, "TM": gamma * ETA / (1j * K)}
    direct = np.exp(-gamma * np.abs(z[:, None] - z))
    image = np.exp(-gamma * (z[:, None] + z)) * ground
    for p in ("TE", "TM"):
        error = np.abs(lines.vi(p) - impedance[p] / 2 * (direct - image))
        assert np.all(error < 1e-12 * np.abs(impedance[p] * direct))
        error = np.abs(lines.iv(p) - (direct + image) / (2 * impedance[p]))
        assert np.all(error < 1e-12 * np.abs(direct / impedance[p]))


def test_cutting_a_layer_in_three_changes_nothing():
    whole = Stack((Layer(0.3, 3.0, 0.02, 1.4), Layer(0.1, 1.5)), True)
    pieces = (Layer(d, 3.0, 0.02, 1.4) for d in (0.05, 0.2, 0.05))
    cut = Stack((*pieces, Layer(0.1, 1.5)), True)
    kt, z = np.array([0, 0.7, 1.5, 3, 40]) * K, np.array([0.05, 0.2, 0.25, 0.3, 0.45])
    one, other = Lines(whole, K, kt, z), Lines(cut, K, kt, z)
    for name in ("vi", "ii", "vv", "iv"):
        for p in ("TE", "TM", "difference"):
            a, b = getattr(one, name)(p), getattr(other, name)(p)
            scale = np.sqrt(np.abs(np.einsum("kii,kjj->kij", a, a))) if name in ("vi", "iv") else np.abs(a)
            assert np.all(np.abs(a - b) <= 1e-10 * np.maximum(np.abs(a), 1e-3 * scale) + 1e-15)


def test_reciprocity():
    lines = Lines(Stack(LAYERS, False, SHEETS), K, KT, HEIGHTS)
    for p in ("TE", "TM", "difference"):
        for name in ("vi", "iv"):
            green = getattr(lines, name)(p)
            assert np.allclose(green, green.transpose(0, 2, 1), rtol=1e-11, atol=0)
        vv, ii = lines.vv(p), lines.ii(p)
        assert np.allclose(vv, -ii.transpose(0, 2, 1), rtol=1e-11, atol=1e-14 * np.abs(vv).max())


def test_jump_across_the_source_is_the_source():
    stack = Stack(LAYERS, True, SHEETS)
    for name in ("ii", "vv"):
        for p, unit in (("TE", 1), ("TM", 1), ("difference", 0)):
            above, mean, below = (
                np.einsum("kii->ki", getattr(Lines(stack, K, KT, HEIGHTS, tie=tie), name)(p))
                for tie in ("above", "mean", "below")
            )
            assert np.allclose(above - below, unit, atol=1e-11)
            assert np.allclose(above + below, 2 * mean, atol=1e-12)


def test_voltage_and_current_are_continuous_through_interfaces():
    stack, step = Stack(LAYERS, True), 1e-7
    for height in stack.interfaces[1:]:
        lines = Lines(stack, K, KT, [height - step, height, height + step], [0.02, 0.45])
        for name in ("vi", "ii", "vv", "iv"):
            for p in ("TE", "TM", "difference"):
                green = getattr(lines, name)(p)
                assert np.all(
                    np.abs(green - green[:, 1:2]) < 1e-4 * np.abs(green).max(axis=(1, 2), keepdims=True)
                )


def test_current_drops_by_what_a_sheet_takes():
    stack, step = Stack(LAYERS, True, SHEETS), 1e-7
    for sheet in SHEETS:
        lines = Lines(stack, K, KT, [sheet.height - step, sheet.height, sheet.height + step], [0.02])
        for p in ("TE", "TM"):
            below, middle, above = np.moveaxis(lines.ii(p)[..., 0], 1, 0)
            taken = lines.vi(p)[:, 1, 0] / sheet.impedance
            assert np.allclose(below - above, taken, rtol=1e-5)
            assert np.allclose(2 * middle, above + below, rtol=1e-5)


@pytest.mark.parametrize("row", CURRENT_SHEETS)
def test_current_sheet_on_a_grounded_slab(row):
    """CLOSED: Z0 in parallel with j Z1 tan(k1z d)."""
    permittivity, thickness, p, theta, printed = row
    stack = Stack((Layer(thickness, permittivity),), True)
    z = Lines(stack, K, K * np.sin(np.radians(theta)), [thickness]).vi(p)[0, 0, 0]
    closed = current_sheet_impedance(permittivity, thickness, np.radians(theta), p) * ETA / ROUNDED_ETA
    assert abs(z - closed) < 1e-10 * abs(closed)
    assert abs(z - printed) < 0.0072


@pytest.mark.parametrize("row", SLAB_REFLECTION)
def test_wide_angle_matching_sheet(row):
    """CLOSED, all digits; Magill and Wheeler, IEEE TAP 14, 49, 1966 (MEMORY)."""
    permittivity, thickness, p, theta, printed = row
    stack, kt = Stack((Layer(thickness, permittivity),)), K * np.sin(np.radians(theta))
    value = reflection(stack, K, kt, p)[0]
    assert abs(value - printed) < 7.2e-6
    assert abs(value - slab_reflection(permittivity, thickness, np.radians(theta), p)) < 1e-13
    assert abs(value - reflection(stack, K, kt, p, from_above=False)[0]) < 1e-13
    assert abs(abs(value) ** 2 + abs(transmission(stack, K, kt, p)[0]) ** 2 - 1) < 1e-13


def test_a_resistive_sheet_in_air_reflects_as_a_shunt():
    """CLOSED: Gamma = -1/(1 + 2 R/Z)."""
    stack, kt = Stack((), False, (SheetImpedance(0.0, 200.0),)), np.array([0.0, 0.6]) * K
    for p in ("TE", "TM"):
        assert np.allclose(reflection(stack, K, kt, p), -1 / (1 + 400 / wave_impedance(K, kt, p)), rtol=1e-13)


def test_power_of_the_lines_is_conserved_without_loss():
    """Re V_i at the source leaves upwards and downwards, for waves that propagate."""
    stack = Stack((Layer(0.2, 4.0), Layer(0.1, 2.0, 0, 1.5)), False, (SheetImpedance(0.2, 90j),))
    kt, source = np.array([0.0, 0.4, 0.95]) * K, [0.07]
    lines = Lines(stack, K, kt, [0.0, 0.07, stack.top], source)
    for p in ("TE", "TM"):
        v = lines.vi(p)[..., 0]
        out = (np.abs(v[:, 0]) ** 2 + np.abs(v[:, 2]) ** 2) / wave_impedance(K, kt, p).real
        assert np.allclose(v[:, 1].real, out, rtol=1e-12)


def test_very_thin_layers_act_to_first_order():
    """A layer of thickness d changes V_i by its extra shunt j k (eps - 1) d / eta (TE), CLOSED to first order."""
    d, kt = 1e-6, np.array([0.0, 0.8, 3.0]) * K
    with_layer = Lines(Stack((Layer(0.2, 1.0), Layer(d, 9.0)), True), K, kt, [0.2]).vi("TE")[:, 0, 0]
    without = Lines(Stack((Layer(0.2, 1.0),), True), K, kt, [0.2]).vi("TE")[:, 0, 0]
    change = -(without**2) * 1j * K * 8 * d / ETA
    assert np.allclose(with_layer - without, change, rtol=1e-3, atol=0)


def test_thick_lossy_layers_hide_what_lies_behind():
    layer = Layer(50.0, 2.2, 0.2)
    kt, z = np.array([0, 0.9, 1.3, 30, 1e4]) * K, np.array([0.0, 25.0, 49.9, 50.0])
    over_ground, open_stack = Lines(Stack((layer,), True), K, kt, z), Lines(Stack((layer,), False), K, kt, z)
    for p in ("TE", "TM", "difference"):
        a, b = over_ground.vi(p), open_stack.vi(p)
        assert np.all(np.isfinite(a))
        assert np.all(a[:, 0] == 0)  # on the ground
        assert np.allclose(a[:, 1:, 1:], b[:, 1:, 1:], rtol=1e-9, atol=0)


def test_light_circle_of_a_layer_is_no_special_point():
    stack, n = Stack((Layer(0.19, 2.56, 0, 1.0), Layer(0.1, 1.0)), True), 1.6
    values = Lines(stack, K, np.array([n - 1e-6, n, n + 1e-6]) * K, [0.1, 0.19])
    for name in ("vi", "ii", "vv", "iv"):
        for p in ("TE", "TM", "difference"):
            left, here, right = getattr(values, name)(p)
            assert np.allclose(here, 0.5 * (left + right), rtol=1e-8, atol=1e-5 * np.abs(left).max())


def test_light_circle_of_air_is_finite_over_a_slab():
    values = Lines(Stack((Layer(0.1, 2.56),), True), K, np.array([1 - 1e-12, 1.0, 1 + 1e-12]) * K, [0.1])
    assert np.allclose(values.vi("TE"), values.vi("TE")[1], rtol=1e-5)  # loaded by the slab alone
    assert np.all(np.abs(values.vi("TM")) < 1e-5 * ETA)  # shorted by the grazing wave's vanishing impedance


def test_wrong_arguments_are_refused():
    stack = Stack((Layer(0.1, 2.0),), True)
    with pytest.raises(ValueError, match="k = -1 rad/m is not above zero"):
        Lines(stack, -1.0, 0.0, 0.1)
    with pytest.raises(ValueError, match=r"height = -0\.1 m lies inside the ground"):
        Lines(stack, 1.0, 0.0, -0.1)
    with pytest.raises(ValueError, match="tie = 'left'"):
        Lines(stack, 1.0, 0.0, 0.1, tie="left")
    with pytest.raises(ValueError, match="polarisation 'TEM'"):
        Lines(stack, 1.0, 0.0, 0.1).vi("TEM")
    with pytest.raises(ValueError, match="from below"):
        reflection(stack, 1.0, 0.0, "TE", from_above=False)
    with pytest.raises(ValueError, match="nothing passes"):
        transmission(stack, 1.0, 0.0, "TE")
