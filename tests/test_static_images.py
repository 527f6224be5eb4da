"""Quasi-static images: closed forms, and how fast the kernels' remainder dies away."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from scanward.solver.layered_kernel import interface_terms, layered_kernels
from scanward.solver.static_images import quasi_static_images

K = 2 * np.pi
STACK = Stack((Layer(0.02, 2.55, 0.01), Layer(0.03, 6.0, 0, 2.0), Layer(0.01, 1.5)), True)


def test_air_over_ground_has_one_image():
    images = quasi_static_images(Stack((Layer(0.3, 1.0),), True), 0.1, 0.25, d_max=9.0)
    for part, sign in ((images.a, -1), (images.q, -1), (images.zz, 1)):
        assert np.allclose(part.amplitude, [1, sign])
        assert np.allclose(part.distance, [0.15, 0.35])


def test_dielectric_half_space_is_the_textbook_image():
    """CLOSED: image charge (eps1 - eps2)/(eps1 + eps2) seen from eps1; transmitted 2 eps1/(eps1 + eps2)."""
    stack = Stack((Layer(50.0, 4.0),), False)
    above = quasi_static_images(stack, 50.2, 50.3, d_max=1.0).q
    assert np.allclose(above.amplitude, [1, -3 / 5])
    assert np.allclose(above.distance, [0.1, 0.5])
    through = quasi_static_images(stack, 49.9, 50.3, d_max=1.0).q
    assert np.allclose(through.amplitude, [2 / 5])
    assert np.allclose(through.distance, [0.4])


def test_microstrip_series():
    """CLOSED: charge on a grounded slab, images at 2 n h reflected n - 1 times within.

    Silvester, Proc. IEE 115, 1968 (MEMORY).
    """
    eps, h = 2.55, 0.02
    images = quasi_static_images(Stack((Layer(h, eps),), True), h, h, d_max=0.2).q
    n = np.arange(1, 6)
    inside = (eps - 1) / (eps + 1)  # reflection of the slab's face seen from within
    expected = (2 / (1 + eps)) * (-1.0) ** n * inside ** (n - 1) * (1 + inside)
    assert images.amplitude[0] == pytest.approx(2 / (1 + eps))
    assert np.allclose(images.amplitude[1:6], expected)
    assert np.allclose(images.distance[1:6], 2 * h * n)


@pytest.mark.parametrize("height", [0.02, 0.05, 0.06])
def test_direct_amplitude_on_an_interface(height):
    images, terms = quasi_static_images(STACK, height, height), interface_terms(STACK, height)
    assert images.a.amplitude[0] == pytest.approx(terms.c_a)
    assert images.q.amplitude[0] == pytest.approx(terms.c_q)
    assert images.a.distance[0] == 0


@pytest.mark.parametrize("pair", [(0.02, 0.02), (0.05, 0.05), (0.03, 0.035), (0.06, 0.06), (0.045, 0.045)])
def test_remainder_decays_two_powers_faster(pair):
    z, source = pair
    images = quasi_static_images(STACK, z, source, d_max=0.4)
    kt = np.array([80.0, 160.0]) * K
    kernels = layered_kernels(STACK, K, kt, [z], [source])
    undamped = np.exp(kt * abs(z - source))
    for name in ("a", "q", "zz"):
        kernel = getattr(kernels, name)[:, 0, 0]
        rest = np.abs(kernel - getattr(images, name).spectral(kt)) * undamped
        whole = np.abs(kernel) * undamped
        assert np.all(rest < 0.1 * whole)
        # K falls as 1/k_t; at distance d the remainder starts with d k_t^-2, on one height with k_t^-3
        power = np.log(rest[0] / rest[1]) / np.log(2)
        assert power > (1.7 if z != source else 2.6), (name, power)


def test_default_reaches_the_first_reflections():
    images = quasi_static_images(STACK, 0.045, 0.03).q
    assert np.allclose(images.distance, [0.015, 0.025, 0.035])


def test_sheets_screen_charges_and_not_currents():
    stack = Stack((Layer(0.1, 1.0),), False, (SheetImpedance(0.1, 50.0),))
    images = quasi_static_images(stack, 0.15, 0.15, d_max=1.0)
    assert np.allclose(images.q.amplitude, [1, -1])
    assert np.allclose(images.a.amplitude, [1])
    kt = np.array([300.0, 600.0]) * K
    kernels = layered_kernels(stack, K, kt, [0.1005], [0.1005])
    near = quasi_static_images(stack, 0.1005, 0.1005)
    rest = kernels.q[:, 0, 0] - near.q.spectral(kt)
    assert np.all(np.abs(rest) < 0.01 * np.abs(near.q.spectral(kt)))


def test_too_many_rays_are_refused(monkeypatch):
    monkeypatch.setattr("scanward.solver.bounces.MAX_RAYS", 50)
    with pytest.raises(ValueError, match="more than 50 images"):
        quasi_static_images(STACK, 0.02, 0.02, d_max=5.0, smallest=0.0)
