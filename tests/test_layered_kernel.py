"""Mixed-potential kernels: the field they give against the lines' own, air, and the two-term expansion."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from scanward.solver.ewald import choose_split, far_kernel
from scanward.solver.layered_kernel import (
    horizontal_kernels,
    interface_far_kernels,
    interface_terms,
    layered_kernels,
    smooth_share,
    vertical_correction,
)
from scanward.solver.lines import ETA, Lines, propagation

K = 2 * np.pi
STACK = Stack((Layer(0.11, 2.55, 0.01), Layer(0.06, 6.15, 0.002, 1.7), Layer(0.2, 1.0)), True)
KT = np.array([1e-6, 0.6, 1.8, 4.0]) * K


@pytest.mark.parametrize("ground", [True, False])
def test_air_gives_free_space_and_images(ground):
    stack = Stack((Layer(0.1, 1.0), Layer(0.2, 1.0), Layer(0.05, 1.0)), ground)
    kt, z = np.array([0, 1e-9, 0.5, 0.999, 1.2, 5, 100]) * K, np.array([0.0, 0.05, 0.1, 0.3, 0.5])
    kernels, gamma = layered_kernels(stack, K, kt, z), propagation(K, kt, 1.0)[:, None, None]
    direct = np.exp(-gamma * np.abs(z[:, None] - z)) / (2 * gamma)
    image = np.exp(-gamma * (z[:, None] + z)) / (2 * gamma) * ground
    for kernel, sign in ((kernels.a, -1), (kernels.q, -1), (kernels.zz, 1)):
        assert np.all(np.abs(kernel - direct - sign * image) < 1e-12 * np.abs(direct))
    for kernel in (kernels.tz, kernels.zt):  # against 1/k^2, their size between unlike media
        assert np.all(np.abs(kernel) < 1e-13)
    potential, zz = vertical_correction(stack, K, kt, z, z)
    assert np.all(np.abs(zz - direct - image) < 1e-12 * np.abs(direct))
    assert np.all(np.abs(potential) < 1e-11)


def test_kernels_are_those_of_the_design():
    lines = Lines(STACK, K, KT[1:], [0.05, 0.17])
    a, q = horizontal_kernels(STACK, K, KT[1:], [0.05, 0.17])
    assert np.allclose(a, lines.vi("TE") / (1j * K * ETA), rtol=1e-14)
    plain = (1j * K / ETA) * (lines.vi("TM") - lines.vi("TE")) / KT[1:, None, None] ** 2
    assert np.allclose(q, plain, rtol=1e-11)


def test_kernels_are_stable_at_broadside():
    zero, tiny = (layered_kernels(STACK, K, kt, [0.05, 0.11, 0.2]) for kt in (0.0, 1e-9 * K))
    for name in ("a", "q", "zz", "tz", "zt"):
        one, other = getattr(zero, name), getattr(tiny, name)
        assert np.all(np.isfinite(one))
        assert np.all(np.abs(one - other) < 1e-13 * np.abs(one).max())


def test_symmetry():
    kernels = layered_kernels(STACK, K, KT, [0.03, 0.14, 0.2, 0.4])
    for name in ("a", "q", "zz"):
        kernel = getattr(kernels, name)
        assert np.allclose(kernel, kernel.transpose(0, 2, 1), rtol=1e-11, atol=1e-15 * np.abs(kernel).max())
    assert np.allclose(
        kernels.zt, -kernels.tz.transpose(0, 2, 1), rtol=1e-10, atol=1e-14 * np.abs(kernels.tz).max()
    )


def _panels(breaks, n=24):
    """Gauss-Legendre points and weights on every stretch between sorted break points."""
    x, w = np.polynomial.legendre.leggauss(n)
    low, high = np.array(breaks[:-1])[:, None], np.array(breaks[1:])[:, None]
    return (0.5 * (low + high) + 0.5 * (high - low) * x).ravel(), (0.5 * (high - low) * w).ravel()


class _Vertical:
    """A smooth vertical current J_z(z) that crosses both interfaces, and its two descriptions of the field."""

    low, high = 0.02, 0.33

    def __init__(self, *observers):
        inside = (z for z in observers if self.low < z < self.high)
        self.z, self.w = _panels(sorted({self.low, 0.11, 0.17, self.high, *inside}))
        t = (self.z - self.low) / (self.high - self.low)
        self.current = t**2 * (1 - t) ** 2 * (1 + t)
        self.charge = np.polyval(
            np.polyder(np.poly1d([1, 0, 0]) * np.poly1d([-1, 1]) ** 2 * np.poly1d([1, 1])), t
        )
        self.charge = self.charge / (self.high - self.low)
        self.eps = STACK.permittivity[STACK.region_at(self.z)]


@pytest.mark.parametrize("height", [0.07, 0.11, 0.15, 0.5])
def test_horizontal_field_of_a_vertical_current_through_interfaces(height):
    """-E_u by K_tz and K_Q against the line's series voltage source."""
    j = _Vertical(height)
    lines, kernels = Lines(STACK, K, KT, [height], j.z), layered_kernels(STACK, K, KT, [height], j.z)
    series = ETA * KT[:, None] / (K * j.eps) * j.current * j.w
    direct = -np.einsum("ks,ks->k", lines.vv("TM")[:, 0], series)
    potential = kernels.q[:, 0] @ (j.charge * j.w)
    mixed = (
        1j * K * ETA * KT * (kernels.tz[:, 0] @ (j.current * j.w)) - ETA / (1j * K) * (-1j * KT) * potential
    )
    assert np.allclose(mixed, direct, rtol=1e-9)


def _slope(function, z, step=2e-3):
    """Fourth-order central derivative."""
    values = [function(z + n * step) for n in (-2, -1, 1, 2)]
    return (values[0] - 8 * values[1] + 8 * values[2] - values[3]) / (12 * step)


@pytest.mark.parametrize("height", [0.07, 0.14, 0.25, 0.5])
def test_vertical_field_of_a_vertical_current_through_interfaces(height):
    """-E_z by K_zz and K_Q against ``(eta k_t)^2/(k^2 eps eps') I_v + delta/(j w eps)`` of the lines."""
    j = _Vertical(height)
    eps = STACK.permittivity[STACK.region_at(height)]
    lines, kernels = Lines(STACK, K, KT, [height], j.z), layered_kernels(STACK, K, KT, [height], j.z)
    factor = (ETA * KT / K) ** 2 / eps
    direct = factor * (lines.iv("TM")[:, 0] @ (j.current * j.w / j.eps))
    t = (height - j.low) / (j.high - j.low)
    direct = direct + ETA / (1j * K * eps) * (t**2 * (1 - t) ** 2 * (1 + t) if t < 1 else 0.0)

    def potential(z):
        # the break at the observer moves along: K_Q has a kink there
        moved = _Vertical(z)
        return horizontal_kernels(STACK, K, KT, [z], moved.z)[1][:, 0] @ (moved.charge * moved.w)

    mixed = 1j * K * ETA * (kernels.zz[:, 0] @ (j.current * j.w)) - ETA / (1j * K) * _slope(potential, height)
    assert np.allclose(mixed, direct, rtol=1e-6, atol=1e-6 * np.abs(direct).max())


def test_vertical_field_of_a_horizontal_current():
    """-E_z by K_zt and K_Q against the line's current."""
    source, height = 0.14, 0.06
    kernels = layered_kernels(STACK, K, KT, [height], [source])
    eps = STACK.permittivity[STACK.region_at(height)]
    direct = -(ETA * KT / (K * eps)) * Lines(STACK, K, KT, [height], [source]).ii("TM")[:, 0, 0]

    def potential(z):
        return horizontal_kernels(STACK, K, KT, [z], [source])[1][:, 0, 0] * (-1j * KT)

    mixed = 1j * K * ETA * KT * kernels.zt[:, 0, 0] - ETA / (1j * K) * _slope(potential, height)
    assert np.allclose(mixed, direct, rtol=1e-6)


def test_the_other_way_to_write_vertical_currents_gives_the_same_field():
    height = 0.14
    j = _Vertical(height)
    kernels = layered_kernels(STACK, K, KT, [height], j.z)
    extra, zz = vertical_correction(STACK, K, KT, [height], j.z)
    assert np.allclose(
        1j * K * KT[:, None, None] * kernels.tz, 1 / (1j * K) * 1j * KT[:, None, None] * extra, rtol=1e-12
    )

    def potential(z):
        moved = _Vertical(z)
        return vertical_correction(STACK, K, KT, [z], moved.z)[0][:, 0] @ (moved.current * moved.w)

    one = 1j * K * (kernels.zz[:, 0] @ (j.current * j.w))
    other = 1j * K * (zz[:, 0] @ (j.current * j.w)) - 1 / (1j * K) * _slope(potential, height)
    assert np.allclose(one, other, rtol=1e-6)


def _decay(values, kt):
    """Exponent between successive points."""
    return np.diff(np.log(np.abs(values))) / np.diff(np.log(kt))


@pytest.mark.parametrize("loss", [0.0, 0.1])
@pytest.mark.parametrize("permeability", [1.0, 2.5])
def test_interface_remainder_falls_as_the_fifth_power(loss, permeability):
    """Design: kappa_A, kappa_Q, c_Q cancel two terms; the other interfaces are two wavelengths away."""
    stack = Stack((Layer(2.0, 3.0, loss, permeability), Layer(2.0, 6.0, loss)), True)
    terms, kt = interface_terms(stack, 2.0), np.geomspace(20, 80, 5) * K
    kernels = horizontal_kernels(stack, K, kt, [2.0])
    pairs = ((kernels[0], terms.c_a, terms.kappa_a), (kernels[1], terms.c_q, terms.kappa_q))
    for kernel, c, kappa in pairs:
        slope = _decay(kernel[:, 0, 0] - c / (2 * propagation(K, kt, np.sqrt(kappa))), kt)
        assert np.all(np.abs(slope + 5) < 0.2)
        wrong = _decay(kernel[:, 0, 0] - c / (2 * propagation(K, kt, np.sqrt(1.3 * kappa))), kt)
        assert np.all(np.abs(wrong + 3) < 0.2)


def test_interface_terms_without_magnetic_contrast_are_the_plain_ones():
    terms = interface_terms(Stack((Layer(0.2, 2.55),), True), 0.2)
    assert terms.c_a == 1
    assert np.allclose(
        [terms.kappa_a, terms.kappa_q, terms.c_q], [3.55 / 2, 5.1 / 3.55, 2 / 3.55], rtol=1e-14
    )


def test_a_ground_close_by_breaks_the_power_law_until_it_is_far_in_evanescent_depths():
    stack, terms = Stack((Layer(0.05, 2.55),), True), (1.0, 3.55 / 2)
    kt = np.array([4.0, 5.0, 60.0, 72.0]) * K
    rest = horizontal_kernels(stack, K, kt, [0.05])[0][:, 0, 0] - terms[0] / (
        2 * propagation(K, kt, np.sqrt(terms[1]))
    )
    near, _, far = _decay(rest, kt)
    assert abs(near + 5) > 0.5  # still the image, exp(-2 k_t h)
    assert abs(far + 5) < 0.1


def test_far_kernels_on_an_interface_in_air_are_ewalds():
    split = choose_split(0.25, K, 1e-6)
    kt = np.array([0.0, 0.7, 1.4, 3.0, 8.0]) * K
    stack = Stack((Layer(0.2, 1.0),), False)
    ewald = far_kernel(K, kt**2, np.zeros(5), split, 0.25)
    for kernel in interface_far_kernels(stack, K, kt, 0.2, split.splitting, 0.25):
        assert np.allclose(kernel, ewald, rtol=1e-9, atol=1e-15)


def test_near_share_passes_its_own_light_circle_smoothly():
    e, kappa = 7.0, 1.775
    kt = np.sqrt(kappa) * K * np.array([1 - 1e-9, 1.0, 1 + 1e-9])
    values = smooth_share(K, kt, kappa, e)
    assert np.allclose(values, 1 / (2 * np.sqrt(np.pi) * e), rtol=1e-7)


def test_places_without_the_expansion_are_refused():
    stack = Stack((Layer(0.2, 2.0),), True, (SheetImpedance(0.2, 100.0),))
    with pytest.raises(ValueError, match=r"a sheet lies at 0\.2 m"):
        interface_terms(stack, 0.2)
    with pytest.raises(ValueError, match="on the ground"):
        interface_terms(stack, 0.0)
