"""Passive screens lit by a plane wave (checks.md section 4), and sheets with a closed-form response."""

from __future__ import annotations

import numpy as np
import pytest
from cells import FREQUENCY, SQUARE, point
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Material, Plate, Strip, Wire
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesher import mesh_conductors
from scanward.solver.plane_wave import plane_wave_response
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver

ETA = 376.730313668
BROADSIDE = ScanPoints.from_angles(np.array([0.0]), np.array([0.0]))


def respond(conductor, lattice, size, scan=BROADSIDE, ground=False):
    mesh = mesh_conductors([conductor], lattice, ground=ground, element_size=size)
    return plane_wave_response(
        CellSolver(UnitCell(lattice, mesh, (), (), ground), FREQUENCY), [FREQUENCY], scan
    )


GRID = [
    (0.1, 0.005, 0.82181), (0.1, 0.01, 0.87449), (0.1, 0.02, 0.92328),
    (0.3, 0.005, 0.42814), (0.3, 0.01, 0.50816), (0.3, 0.02, 0.61595),
]  # fmt: skip


@pytest.mark.parametrize(("period", "ratio", "reflection"), GRID)
def test_wire_grid(period, ratio, reflection):
    """PUBLISHED/CLOSED (MacFarlane 1946, first-order form), 1 %: continuous wires through the cell's border."""
    lattice = Lattice(np.array([period / 2, 0]), np.array([0, period]))
    ends = np.stack([point(-period / 4, 0, 0), point(period / 4, 0, 0)])
    response = respond(Wire(name="w", points=ends, radius=ratio * period), lattice, period / 8)
    gamma = response.waves[0, 0, response.table.index((0, 0), 1, 0), 0]
    assert abs(gamma) == pytest.approx(reflection, rel=0.01)
    assert abs(gamma + 0.5) == pytest.approx(0.5, abs=1e-6)  # CLOSED: lossless thin screen, one wave


@pytest.mark.parametrize(("fill", "inductive"), [(0.1, 0.18551), (0.5, 0.03466)])
def test_strip_grid_inductive(fill, inductive):
    """MEMORY + CLOSED (Waveguide Handbook), a/lambda = .1, E along the strips; 2 %."""
    period = 0.1
    lattice = Lattice(np.array([0.005, 0]), np.array([0, period]))
    strip = Strip(name="s", start=point(-0.0025, 0, 0), end=point(0.0025, 0, 0), width=fill * period)
    response = respond(strip, lattice, fill * period / (16 if fill < 0.3 else 40))
    gamma = response.waves[0, 0, response.table.index((0, 0), 1, 0), 0]
    reactance = (-1 / gamma - 1) / 2j
    assert reactance.real == pytest.approx(inductive, rel=0.02)
    assert abs(gamma + 0.5) == pytest.approx(0.5, abs=1e-6)


@pytest.mark.parametrize(("gap", "capacitive"), [(0.1, 0.74205), (0.5, 0.13863)])
def test_strip_grid_capacitive(gap, capacitive):
    """MEMORY + CLOSED, a/lambda = .1, E across the strips; 2 %."""
    period, fill = 0.1, 1 - gap
    lattice = Lattice(np.array([0.02, 0]), np.array([0, period]))
    strip = Strip(name="s", start=point(-0.01, 0, 0), end=point(0.01, 0, 0), width=fill * period)
    response = respond(strip, lattice, period / 45)
    gamma = response.waves[0, 0, response.table.index((0, 0), 1, 1), 1]
    assert (-2 * gamma / (1 + gamma)).imag == pytest.approx(capacitive, rel=0.02)


def test_babinet():
    """CLOSED: T(screen) + T(complement, dual polarisation) = 1; mesh-limited, strips of half the period."""
    lattice = Lattice(np.array([0.02, 0]), np.array([0, 0.1]))
    strip = Strip(name="s", start=point(-0.01, 0, 0), end=point(0.01, 0, 0), width=0.05)
    response = respond(strip, lattice, 0.05 / 24)
    below = [response.table.index((0, 0), -1, p) for p in (0, 1)]
    along, across = (response.waves[0, 0, below[p], p] for p in (0, 1))
    assert abs(along + across - 1) < 0.01


@pytest.mark.parametrize("resistance", [ETA / 2, 60.0])
def test_uniform_resistive_sheet(resistance):
    """A sheet that fills the plane, meeting its copies on all sides: TM and TE reflection in closed form. CLOSED"""
    scan = ScanPoints.from_angles(np.radians([0, 50]), np.radians([20, 20]))
    plate = Plate(
        name="s",
        centre=point(0, 0, 0),
        size=np.array([0.5, 0.5]),
        material=Material(sheet_resistance=resistance),
    )
    response = respond(plate, SQUARE, 0.035, scan)
    for s, cosine in enumerate(np.cos(np.radians([0, 50]))):
        for polarisation, wave in ((0, ETA * cosine), (1, ETA / cosine)):
            up = response.table.index((0, 0), 1, polarisation)
            exact = -1 / (1 + 2 * resistance / wave)
            assert response.waves[0, s, up, polarisation] == pytest.approx(
                exact, abs=1e-4 if s == 0 else 1e-3
            )  # mesh-limited at 50 deg
            balance = (np.abs(response.waves[0, s, :, polarisation]) ** 2).sum() + response.loss[
                0, s, :, polarisation
            ].sum()
            assert balance == pytest.approx(1.0, abs=1e-6)


def test_perfect_sheet_over_ground_reflects_with_the_path():
    """PEC plane at height h seen from z = 0: -exp(2 j k h cos t). CLOSED"""
    scan = ScanPoints.from_angles(np.radians([30.0]), np.radians([0.0]))
    response = respond(
        Plate(name="s", centre=point(0, 0, 0.1), size=np.array([0.5, 0.5])), SQUARE, 0.05, scan, ground=True
    )
    exact = -np.exp(2j * 2 * np.pi * 0.1 * np.cos(np.radians(30)))
    for polarisation in (0, 1):
        up = response.table.index((0, 0), 1, polarisation)
        assert response.waves[0, 0, up, polarisation] == pytest.approx(exact, abs=2e-4)
