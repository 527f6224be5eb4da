"""Couplings of the infinite array: what they add up to, and the centre of a large finite array."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from array_cells import array, model
from cells import FREQUENCY, K
from scanward.solver.array_sites import rectangle
from scanward.solver.infinite_coupling import infinite_couplings
from scipy.special import erfc


def grid(reach: int) -> np.ndarray:
    step = np.arange(-reach, reach + 1)
    return np.stack(np.meshgrid(step, step, indexing="ij"), -1).reshape(-1, 2)


@pytest.mark.parametrize(
    ("name", "side", "near"),
    [
        ("strip", 17, 1.5e-4),
        pytest.param("triangular", 21, 2.5e-4, marks=pytest.mark.slow),
        pytest.param("slab", 25, 2e-3, marks=pytest.mark.slow),
    ],
)
def test_centre_column_of_a_large_array(name, side, near):
    """SECOND METHOD: the middle element driven, all others matched; edges are far away (surface waves reach them)."""
    offsets = grid(2)
    found = infinite_couplings(model(name)[0], FREQUENCY, offsets, error=1e-3 if name == "slab" else 1e-5)
    one = array(name, rectangle(side, side), direct_limit=0, tolerance=1e-8)
    middle = side * side // 2
    column = one.scattering_column(middle)
    places = [int(np.flatnonzero((one.sites == one.sites[middle] + m).all(axis=1))[0]) for m in offsets]
    assert np.abs(column[places] - found.scattering[:, 0, 0]).max() < near


@pytest.mark.parametrize("name", ["strip", pytest.param("triangular", marks=pytest.mark.slow)])
def test_stated_error(name):
    """OWN RUN: rough rules against a fine one."""
    offsets = grid(4)
    fine = infinite_couplings(model(name)[0], FREQUENCY, offsets, error=1e-7)
    for error in (1e-3, 1e-4):
        rough = infinite_couplings(model(name)[0], FREQUENCY, offsets, error=error)
        assert rough.error <= error
        assert np.abs(rough.scattering - fine.scattering).max() <= rough.error


def test_reciprocal_with_two_ports():
    """CLOSED: S_-m = S_m^T."""
    found = infinite_couplings(model("loaded pair")[0], FREQUENCY, [[1, 0], [-1, 0], [2, 3], [-2, -3]], error=1e-3)
    np.testing.assert_allclose(found.scattering[1::2], found.scattering[::2].swapaxes(1, 2), atol=1e-12)
    assert np.abs(found.scattering[0] - found.scattering[0].T).max() > 1e-3


def test_power_and_active_reflection_add_up():
    """CLOSED (checks.md section 9): sum |S_m|^2 = mean |Gamma|^2 over the zone, Gamma = sum S_m exp(-j kt . rho_m), but
    for what lies beyond 12 cells."""
    m = model("strip")[0]
    found = infinite_couplings(m, FREQUENCY, grid(12), error=3e-4)
    step = (np.arange(40) + 0.5) / 40 - 0.5
    kt = np.stack(np.meshgrid(step, step), -1).reshape(-1, 2) @ m.cell.lattice.reciprocal
    gamma = m.solve(K, kt).scattering[:, 0, 0]
    assert np.sum(np.abs(found.scattering) ** 2) == pytest.approx(np.mean(np.abs(gamma) ** 2), abs=1e-3)
    inside = K * np.array([[0.0, 0.0], [0.1, 0.0]])
    true = m.solve(K, inside).scattering
    assert np.abs(found.active(inside) - true).max() < 1e-2  # cut off sharply
    bell = 0.5 * erfc((found.distance - 3.4) / 1.0)
    tapered = dataclasses.replace(found, scattering=found.scattering * bell[:, None, None])
    assert np.abs(tapered.active(inside) - true).max() < 5e-4
    assert found.distance.max() == pytest.approx(6 * np.sqrt(2))
