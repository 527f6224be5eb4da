"""Radiation, plane waves and absorption in a stack: air's own formulas, reciprocity and the balance of power."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from scanward.solver.layered_waves import absorbed_power, incident_field, radiated_field
from scanward.solver.lines import ETA, Lines, reflection, transmission, wave_impedance

K = 2 * np.pi
KT = np.array([0.0, 0.4, 0.8]) * K
LAYERS = (Layer(0.1, 2.5, 0.02), Layer(0.2, 6.0, 0.03, 1.5), Layer(0.05, 1.0))
SHEETS = (SheetImpedance(0.1, 200 + 50j), SheetImpedance(0.2, 300), SheetImpedance(0.35, 500j))


@pytest.mark.parametrize("ground", [True, False])
def test_air_radiates_as_current_and_image(ground):
    stack = Stack((Layer(0.3, 1.0),), ground)
    z = np.array([0.1, 0.3, 0.45])
    field, kz = radiated_field(stack, K, KT, z), np.sqrt(K**2 - KT**2)[:, None]
    direct, image = np.exp(1j * kz * (z - 0.3)), np.exp(-1j * kz * (z + 0.3)) * ground
    assert np.allclose(field.te, -ETA * K / (2 * kz) * (direct - image), rtol=1e-12)
    assert np.allclose(field.tm, -ETA * kz / (2 * K) * (direct - image), rtol=1e-12)
    assert np.allclose(
        field.tm_vertical, ETA * KT[:, None] / (2 * K) * (direct + image), rtol=1e-12, atol=1e-12
    )


def test_looking_down_mirrors_looking_up():
    stack = Stack((Layer(0.1, 2.5, 0.01), Layer(0.2, 6.0)))
    mirrored = Stack(tuple(reversed(stack.layers)))
    z = np.array([-0.2, 0.05, 0.15, 0.4])
    down, up = radiated_field(stack, K, KT, z, upwards=False), radiated_field(mirrored, K, KT, 0.3 - z)
    assert np.allclose(down.te, up.te, rtol=1e-12)
    assert np.allclose(down.tm, up.tm, rtol=1e-12)
    assert np.allclose(down.tm_vertical, -up.tm_vertical, rtol=1e-12)


def test_incident_wave_is_incident_plus_reflected_above_and_transmitted_below():
    stack = Stack(LAYERS, False, SHEETS)
    z, kz = np.array([0.4, -0.05]), np.sqrt(K**2 - KT**2)
    field = incident_field(stack, K, KT, z)
    for p, value in (("TE", field.te), ("TM", field.tm)):
        down, up = np.exp(1j * kz * (0.4 - stack.top)), np.exp(-1j * kz * (0.4 - stack.top))
        assert np.allclose(value[:, 0], down + reflection(stack, K, KT, p) * up, rtol=1e-11)
        assert np.allclose(value[:, 1], transmission(stack, K, KT, p) * np.exp(-1j * kz * 0.05), rtol=1e-11)
    # a transmitted wave going down along +k_t: E_z kz = E_u k_t (div E = 0)
    assert np.allclose(field.tm_vertical[:, 1] * kz, field.tm[:, 1] * KT, rtol=1e-11)


def test_vertical_field_of_the_incident_wave_obeys_gauss_inside_a_layer():
    """``-j k_t E_u + dE_z/dz = 0``."""
    stack, step = Stack(LAYERS, True), 1e-4
    field = incident_field(stack, K, KT, np.array([0.2 - step, 0.2, 0.2 + step]))
    slope = (field.tm_vertical[:, 2] - field.tm_vertical[:, 0]) / (2 * step)
    assert np.allclose(slope, 1j * KT * field.tm[:, 1], rtol=1e-5, atol=1e-9)


def _balance(stack, source, kt, vertical):
    """Power delivered by random currents, and what radiates and is absorbed, each (n_kt,)."""
    rng = np.random.default_rng(20)
    current = rng.normal(size=(len(kt), len(source), 3)) + 1j * rng.normal(size=(len(kt), len(source), 3))
    current[..., 2] *= vertical
    lines = Lines(stack, K, kt, source)
    series = ETA * kt[:, None] / (K * stack.permittivity[stack.region_at(source)])
    j_u, j_v, j_z = np.moveaxis(current, -1, 0)

    def total(green, weight):
        return np.einsum("kst,kt->ks", green, weight)

    e_u = -total(lines.vi("TM"), j_u) + total(lines.vv("TM"), series * j_z)
    e_v = -total(lines.vi("TE"), j_v)
    e_z = series * (total(lines.ii("TM"), j_u) - total(lines.iv("TM"), series * j_z))
    given = -(e_u * j_u.conj() + e_v * j_v.conj() + e_z * j_z.conj()).sum(axis=1).real
    radiated = np.zeros(len(kt))
    for upwards in (True,) if stack.ground else (True, False):
        out = radiated_field(stack, K, kt, source, upwards=upwards)
        u, v = (out.tm * j_u + out.tm_vertical * j_z).sum(axis=1), (out.te * j_v).sum(axis=1)
        radiated += (
            np.abs(u) ** 2 / wave_impedance(K, kt, "TM") + np.abs(v) ** 2 / wave_impedance(K, kt, "TE")
        ).real
    return given, radiated, absorbed_power(stack, K, kt, source, current)


@pytest.mark.parametrize("ground", [True, False])
@pytest.mark.parametrize("vertical", [0.0, 1.0])
def test_delivered_power_is_radiated_or_absorbed(ground, vertical):
    source = np.array([0.05, 0.1, 0.15, 0.2, 0.33, 0.35, 0.4])
    kt = np.array([0.0, 0.4, 0.8, 1.7, 3.0]) * K
    given, radiated, absorbed = _balance(Stack(LAYERS, ground, SHEETS), source, kt, vertical)
    assert np.allclose(
        given, radiated + absorbed.layers.sum(axis=1) + absorbed.sheets.sum(axis=1), rtol=1e-10
    )
    assert np.allclose(radiated[3:], 0, atol=1e-20)
    if not vertical:  # the field of a vertical current at its own height interferes either way
        assert np.all(absorbed.layers[:, :2] > 0)
    assert np.allclose(absorbed.layers[:, 2] / given, 0, atol=1e-12)  # air takes nothing
    assert np.all(absorbed.sheets[:, :2] > 0)
    assert np.all(absorbed.sheets[:, 2] == 0)


def test_share_of_each_layer_is_its_field_integrated():
    """``(k/eta) int eps'' |E|^2 dz`` of a TE field in a layer without sources."""
    stack, kt = Stack(LAYERS, True), np.array([0.5, 1.6]) * K
    current = np.zeros((2, 1, 3), dtype=complex)
    current[:, 0, 1] = 1.0
    absorbed = absorbed_power(stack, K, kt, [0.38], current)
    x, w = np.polynomial.legendre.leggauss(20)
    for n, layer in enumerate(LAYERS[:2]):
        z, weight = stack.interfaces[n] + layer.thickness * (x + 1) / 2, w * layer.thickness / 2
        field = np.abs(Lines(stack, K, kt, z, [0.38]).vi("TE")[..., 0]) ** 2 @ weight
        assert np.allclose(
            absorbed.layers[:, n], K / ETA * layer.permittivity * layer.loss_tangent * field, rtol=1e-9
        )


def test_wrong_arguments_are_refused():
    stack = Stack(LAYERS, True)
    with pytest.raises(ValueError, match="through the ground"):
        radiated_field(stack, K, KT, [0.1], upwards=False)
    with pytest.raises(ValueError, match=r"current has shape \(1, 1, 3\)"):
        absorbed_power(stack, K, KT, [0.1], np.zeros((1, 1, 3)))


@pytest.mark.parametrize("height", [0.1, 0.05, 0.35])
def test_lossless_layers_leave_all_loss_to_the_sheet(height):
    stack = Stack(
        (Layer(0.1, 2.5), Layer(0.2, 6.0), Layer(0.05, 1.0)), True, (SheetImpedance(height, 120.0),)
    )
    kt, source = np.array([0.3, 0.8, 1.8]) * K, np.array([0.05, 0.1, 0.2, 0.4])
    given, radiated, absorbed = _balance(stack, source, kt, 1.0)
    assert np.all(np.abs(absorbed.layers) < 1e-11 * given[:, None])
    assert np.allclose(absorbed.sheets[:, 0], given - radiated, rtol=1e-10)
