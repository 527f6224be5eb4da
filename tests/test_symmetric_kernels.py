"""The solver's form of the layered kernels against the mixed-potential form it comes from."""

from __future__ import annotations

import numpy as np
import pytest
from scanward.geometry.stack import Layer, Stack
from scanward.solver.layered_kernel import layered_kernels, symmetric_kernels

K = 2 * np.pi
KT = np.array([0.0, 0.3, 0.9, 1.7, 12.0]) * K
STACK = Stack((Layer(0.07, 2.55, 0.01), Layer(0.05, 6.0, 0, 2.0), Layer(0.04, 1.5)), True)


def test_air_and_its_ground_image():
    """CLOSED: direct and image, and nothing between charges and vertical currents."""
    z = np.array([0.04, 0.11])
    kernels = symmetric_kernels(Stack((Layer(0.2, 1.0),), True), K, KT[1:], z)
    g = 1j * np.sqrt((K * K - KT[1:] ** 2).astype(complex))
    g = np.where(g.real < 0, -g, g)[:, None, None]
    direct, image = (np.exp(-g * d) / (2 * g) for d in (np.abs(z[:, None] - z), z[:, None] + z))
    np.testing.assert_allclose(kernels.a, direct - image, rtol=1e-10)
    np.testing.assert_allclose(kernels.q, direct - image, rtol=1e-10)
    np.testing.assert_allclose(kernels.v, direct + image, rtol=1e-10)
    assert np.abs(kernels.c).max() < 1e-14


@pytest.mark.parametrize("pair", [(0.03, 0.05), (0.05, 0.02), (0.03, 0.1), (0.14, 0.04), (0.2, 0.09)])
def test_both_forms_differ_by_an_integration_by_parts(pair):
    """``K_v = K_zz + dK_c/dz + dK_c^T/dz'`` and ``K_tz = j K_c``; differences of step 1e-6 m."""
    z, source = pair
    step = 1e-6
    old = layered_kernels(STACK, K, KT, [z], [source])
    heights = np.array([z, source])

    def cross(dz: float, ds: float):
        return symmetric_kernels(STACK, K, KT, heights + [dz, ds])

    new = cross(0, 0)
    np.testing.assert_allclose(new.a[:, 0, 1], old.a[:, 0, 0], rtol=1e-10)
    np.testing.assert_allclose(new.q[:, 0, 1], old.q[:, 0, 0], rtol=1e-10)
    np.testing.assert_allclose(old.tz[:, 0, 0], 1j * new.c[:, 0, 1], rtol=1e-9, atol=1e-15)
    rise = (cross(step, 0).c[:, 0, 1] - cross(-step, 0).c[:, 0, 1]) / (2 * step)
    rise = rise + (cross(0, step).c[:, 1, 0] - cross(0, -step).c[:, 1, 0]) / (2 * step)
    np.testing.assert_allclose(new.v[:, 0, 1], old.zz[:, 0, 0] + rise, rtol=1e-6, atol=1e-9)


def test_symmetric_and_continuous_through_interfaces():
    stack = Stack((Layer(0.07, 2.55, 0.01), Layer(0.05, 6.0)), True)
    z = np.array([0.03, 0.07 - 1e-12, 0.07 + 1e-12, 0.2])
    kernels = symmetric_kernels(stack, K, KT, z)
    for kernel in (kernels.a, kernels.q, kernels.v):
        np.testing.assert_allclose(kernel, kernel.transpose(0, 2, 1), rtol=1e-9)
        np.testing.assert_allclose(kernel[:, 1], kernel[:, 2], rtol=1e-8, atol=1e-10)
    np.testing.assert_allclose(kernels.c[:, 1], kernels.c[:, 2], rtol=1e-8, atol=1e-10)
    np.testing.assert_allclose(kernels.c[:, :, 1], kernels.c[:, :, 2], rtol=1e-8, atol=1e-10)
