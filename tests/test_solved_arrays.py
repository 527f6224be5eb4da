"""Solved arrays against independent methods (checks.md sections 2 to 5), and convergence under refinement."""

from __future__ import annotations

import numpy as np
import pytest
from cells import (
    FREQUENCY,
    SQUARE,
    X,
    Z,
    make,
    point,
    probe_fed_plate,
    sheet_gap,
    strip_dipole,
    wire_dipole,
    wire_gap,
)
from reference_fem import solve_strip_over_ground
from reference_spectral import TABLE
from scanward.geometry.conductor import Plate, Strip, Wire
from scanward.geometry.lattice import Lattice
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import solve_sweep


def impedance(cell, theta, phi, frequency=FREQUENCY):
    """Active impedance of one-port cells over angles in degrees, (n_scan,)."""
    scan = ScanPoints.from_angles(np.radians(theta), np.radians(phi))
    return solve_sweep(cell, [frequency], scan).impedance[0, :, 0, 0]


@pytest.mark.slow
@pytest.mark.parametrize("medium", ["ground", "free"])
def test_strip_dipole_against_the_spectral_method(medium):
    """SECOND METHOD, tests/reference_spectral.py converged: strip .47 by .01, gap .01; 2 % of |Z|."""
    rows = [row for row in TABLE if row.medium == medium]
    cell = strip_dipole(0.47, 0.01, 0.25 if medium == "ground" else 0.0, size=0.005)
    z = impedance(cell, [row.theta for row in rows], [row.phi for row in rows])
    exact = np.array([row.converged for row in rows])
    assert np.abs(z / exact - 1).max() < 0.02


WIRE = [
    (
        0.25,
        [0, 40, 40, 40],
        [0, 0, 90, 45],
        [147.08 - 38.35j, 86.10 - 12.15j, 208.83 + 40.86j, 136.65 + 7.56j],
    ),
    (0.0, [0, 40, 40], [0, 0, 90], [75.67 - 16.85j, 45.50 - 37.94j, 105.47 + 6.16j]),
]


@pytest.mark.parametrize(("height", "theta", "phi", "given"), WIRE)
def test_wire_dipole_against_a_second_method(height, theta, phi, given):
    """SECOND METHOD (checks.md section 3): L .47, radius .0025, gap .01; 2 % in R, 3 ohm in X."""
    z = impedance(wire_dipole(height=height, size=0.006), theta, phi)
    np.testing.assert_allclose(z.real, np.real(given), rtol=0.02)
    np.testing.assert_allclose(z.imag, np.imag(given), atol=3.0)


@pytest.mark.slow
def test_strip_dipole_against_finite_elements():
    """SECOND METHOD: scikit-fem, second-order edge elements, broadside TEM cell; 3 % of |Z|."""
    exact = solve_strip_over_ground(0.45, 0.02, 0.5, 0.5, 0.25, 0.02)
    z = impedance(strip_dipole(0.45, 0.02, 0.25, 0.02, size=0.008), 0, 0)[0]
    assert abs(z / exact - 1) < 0.03


def test_strip_behaves_like_a_wire_of_a_quarter_of_its_width():
    """PRACTICE: strip of width w against wire of radius w/4, 3 % of |Z|."""
    strip = impedance(strip_dipole(0.47, 0.01, 0.25, size=0.01), [0, 30, 30], [0, 0, 90])
    wire = impedance(wire_dipole(0.47, 0.0025, 0.25, size=0.006), [0, 30, 30], [0, 0, 90])
    assert np.abs(strip / wire - 1).max() < 0.03


def test_probe_as_a_wire_and_as_a_strip():
    """The wire-to-plate attachment against a strip probe that shares an edge with the plate; PRACTICE, 6 %."""
    wire = impedance(probe_fed_plate(0.04), [0, 40], [0, 30])
    plate = Plate(name="plate", centre=point(0, 0, 0.1), size=np.array([0.36, 0.36]))
    probe = Strip(name="probe", start=point(0.1, 0, 0), end=point(0.1, 0, 0.1), width=0.016, normal=X)
    gap = sheet_gap((0.1, 0, 0.005), 0.01, 0.016, Z, np.array([0.0, 1.0, 0.0]))
    strip = impedance(make([plate, probe], [gap], ground=True, size=0.04), [0, 40], [0, 30])
    assert np.abs(wire / strip - 1).max() < 0.06


def test_wire_monopole_on_ground_is_half_a_dipole():
    """Image theory: vertical wire on ground, gap at its base, against the full wire in free space. CLOSED"""
    foot = Wire(name="w", points=np.stack([point(0, 0, 0), point(0, 0, 0.23)]), radius=0.004)
    full = Wire(name="w", points=np.stack([point(0, 0, -0.23), point(0, 0, 0.23)]), radius=0.004)
    lattice = Lattice(np.array([0.6, 0.0]), np.array([0.1, 0.7]))
    mono = make([foot], [wire_gap((0, 0, 0.005), 0.01, 0.004, Z)], ground=True, size=0.02, lattice=lattice)
    dipole = make([full], [wire_gap((0, 0, 0.0), 0.02, 0.004, Z)], size=0.02, lattice=lattice)
    ratio = impedance(dipole, [20, 50], [10, 70]) / impedance(mono, [20, 50], [10, 70])
    np.testing.assert_allclose(ratio, 2.0, rtol=1e-5)


def test_horizontal_strip_over_ground_is_two_strips_in_antiphase():
    """Image theory for sheets: two strips at +-h driven by (1, -1) in free space. CLOSED"""
    over = strip_dipole(0.4, 0.03, 0.15, 0.02, size=0.05)
    bars = [
        Strip(name=n, start=point(-0.2, 0, z), end=point(0.2, 0, z), width=0.03)
        for n, z in (("u", 0.15), ("d", -0.15))
    ]
    pair = make(bars, [sheet_gap((0, 0, z), 0.02, 0.03) for z in (0.15, -0.15)], size=0.05)
    scan = ScanPoints.from_angles(np.radians([0, 35]), np.radians([0, 60]))
    z = solve_sweep(pair, [FREQUENCY], scan).impedance[0]
    np.testing.assert_allclose(z[:, 0, 0] - z[:, 0, 1], impedance(over, [0, 35], [0, 60]), rtol=1e-5)


@pytest.mark.slow
def test_refinement_converges_at_a_measured_rate():
    """Error of Z against the finest mesh falls with element size: slope of the fit within a window."""
    sizes = np.array([0.09, 0.06, 0.04, 0.0266])
    cell = {s: strip_dipole(0.45, 0.06, 0.2, 0.03, size=s) for s in (*sizes, 0.012)}
    z = {s: impedance(cell[s], [0, 40], [0, 30]) for s in cell}
    error = np.array([np.abs(z[s] / z[0.012] - 1).max() for s in sizes])
    slope = np.polyfit(np.log(sizes), np.log(error), 1)[0]
    assert 0.6 < slope < 2.5
    assert error[-1] < 0.03


def test_isolated_limit_of_a_large_cell():
    """Active impedance averaged over the scan phases of a two-wavelength cell tends to the isolated dipole's:
    SECOND METHOD 73.27+j3.25 (checks.md section 3), 5 ohm (neighbours two wavelengths off are averaged, not absent)."""
    lattice = Lattice(np.array([2.0, 0.0]), np.array([0.0, 2.0]))
    cell = wire_dipole(height=0.0, lattice=lattice, size=0.0118)
    phase = (np.arange(6) + 0.5) / 6 / 2.0
    u, v = (g.ravel() for g in np.meshgrid(phase, phase, indexing="ij"))
    y = 1 / solve_sweep(cell, [FREQUENCY], ScanPoints.from_cosines(u, v)).impedance[0, :, 0, 0]
    assert abs(1 / y.mean() - (73.27 + 3.25j)) < 5.0
    assert SQUARE.area == 0.25
