"""Scan blindness of printed dipoles: where it is, and that nothing at all is radiated there."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass

import numpy as np
import pytest
from cells import FREQUENCY, strip_dipole
from reference_patches import Box, Ladder, PatchArray, Rectangle
from reference_sinusoid import wave_vector
from reference_slab import pole_angle, surface_wave_index
from scanward.geometry.lattice import Lattice
from scanward.geometry.stack import Layer, Stack
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver, Sweep, solve_sweep
from scipy.optimize import minimize_scalar


@dataclass(frozen=True)
class Dipoles:
    """Strip dipoles, width = gap = 0.01, on a grounded slab in a square lattice of period a; wavelengths, degrees."""

    permittivity: float
    thickness: float
    period: float
    length: float
    blind: float

    @property
    def pole(self) -> float:
        """E-plane angle where order -1 falls on the TM0 wave of the bare slab, degrees. CLOSED"""
        return float(np.degrees(pole_angle(surface_wave_index(self.permittivity, self.thickness), self.period)))

    def solver(self, loss_tangent: float = 0.0) -> CellSolver:
        lattice = Lattice(np.array([self.period, 0.0]), np.array([0.0, self.period]))
        cell = strip_dipole(self.length, 0.01, self.thickness, 0.01, lattice=lattice)
        stack = Stack((Layer(self.thickness, self.permittivity, loss_tangent),), True)
        return CellSolver(dataclasses.replace(cell, stack=stack), FREQUENCY)

    def reference_resistance(self, theta: float) -> float:
        """Of `reference_patches` in the E plane, ohm."""
        array = PatchArray(
            Ladder(((self.permittivity, self.thickness),)),
            (Rectangle(0, self.length, 0.01, along=40, across=2),),
            (Box(0, 0.01, 0.01),),
            (self.period, self.period),
            (100, 300),
        )
        return float(array.impedance(wave_vector(np.radians(theta), 0.0))[0, 0].real)


CASES = {
    "2.55, .19, a .5": Dipoles(2.55, 0.19, 0.5, 0.39, 44.888),
    "2.55, .19, a .55": Dipoles(2.55, 0.19, 0.55, 0.39, 31.804),
    "2.55, .10, a .5": Dipoles(2.55, 0.10, 0.5, 0.39, 65.547),
    "12.8, .05, a .55": Dipoles(12.8, 0.05, 0.55, 0.2, 44.862),
    "12.8, .05, a .5": Dipoles(12.8, 0.05, 0.5, 0.2, 62.433),
}
"""Slabs of checks.md section 2; `blind`: SECOND METHOD, tests/reference_patches.py (test below)."""


def e_plane(solver: CellSolver, theta) -> Sweep:
    """Sweep over angles in degrees."""
    theta = np.atleast_1d(theta)
    return solve_sweep(
        solver.cell, [FREQUENCY], ScanPoints.from_angles(np.radians(theta), np.zeros(theta.size)), solver=solver
    )


def blind_angle(solver: CellSolver, near: float) -> float:
    """Angle of least resistance within 0.3 degrees of `near`, degrees."""
    found = minimize_scalar(
        lambda theta: e_plane(solver, theta).impedance[0, 0, 0, 0].real,
        bounds=(near - 0.3, near + 0.3), method="bounded", options={"xatol": 1e-6},
    )  # fmt: skip
    return float(found.x)


@pytest.mark.parametrize("name", CASES)
def test_resistance_falls_to_zero_and_everything_comes_back(name):
    """R = 0 and |Gamma| = 1 at one angle just short of the pole of the bare slab; passive on either side. The full
    current moves it off the pole, by up to 1 degree for narrow dipoles (checks.md section 2)."""
    case = CASES[name]
    solver = case.solver()
    theta = blind_angle(solver, case.blind)
    assert theta == pytest.approx(case.blind, abs=0.02)
    assert 0 < case.pole - theta < 1.05
    sweep = e_plane(solver, [theta, theta - 1.0, theta - 0.1, theta + 0.1])
    z, s = sweep.impedance[0, :, 0, 0], np.abs(sweep.scattering[0, :, 0, 0])
    assert abs(z[0].real) < 1e-3
    assert 1 - s[0] < 1e-6
    assert np.sum(np.abs(sweep.waves[0, 0]) ** 2) < 1e-6
    assert abs(z[0].imag) > 100  # a resistance of zero beside a large reactance, not a short circuit
    assert np.all(z[1:].real > 1e-3) and np.all(s[1:] < 1 - 1e-6)
    np.testing.assert_allclose(1 - s**2, (np.abs(sweep.waves[0, :, :, 0]) ** 2).sum(axis=1), atol=2e-7)


@pytest.mark.slow
@pytest.mark.parametrize("name", CASES)
def test_blind_angle_of_the_spectral_method(name):
    """SECOND METHOD: where its resistance vanishes; tabulated to 0.002 degrees, the solver comes within 0.012."""
    case = CASES[name]
    found = minimize_scalar(
        case.reference_resistance,
        bounds=(case.blind - 0.3, case.blind + 0.3), method="bounded", options={"xatol": 1e-4},
    )  # fmt: skip
    assert found.x == pytest.approx(case.blind, abs=2e-3)
    assert abs(found.fun) < 1e-5


def test_the_h_plane_has_no_blindness():
    """TM waves are not excited there; the half-wave lattice at the same slab, up to 80 degrees."""
    solver = CASES["2.55, .19, a .5"].solver()
    theta = np.radians(np.arange(0.0, 81.0, 5.0))
    scan = ScanPoints.from_angles(theta, np.full(theta.size, np.pi / 2))
    z = solve_sweep(solver.cell, [FREQUENCY], scan, solver=solver).impedance[0, :, 0, 0]
    assert np.all(z.real > 70)


def test_loss_turns_blindness_into_heat():
    """With a loss tangent the port accepts power at the blind angle and the laminate keeps nearly all of it."""
    case = CASES["2.55, .19, a .5"]
    sweep = e_plane(case.solver(0.01), case.blind)
    accepted = 1 - abs(sweep.scattering[0, 0, 0, 0]) ** 2
    assert accepted > 1e-4
    assert sweep.loss[0, 0, 0, 0, 0].real > 0.9 * accepted
