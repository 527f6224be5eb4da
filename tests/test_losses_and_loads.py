"""Conductor loss, lumped loads, gaps: limits in closed form and the power balance with loss."""

from __future__ import annotations

import numpy as np
import pytest
from cells import (
    FREQUENCY,
    K,
    Y,
    make,
    point,
    probe_fed_plate,
    sheet_gap,
    strip_dipole,
    wire_dipole,
    wire_gap,
)
from scanward.geometry.conductor import Material, Strip, Wire
from scanward.geometry.errors import InputError
from scanward.geometry.port import Load
from scanward.solver.gaps import GapFunctional
from scanward.solver.losses import MU0, skin_depth, surface_impedance, wire_impedance
from scanward.solver.operator import PeriodicOperator
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import solve_sweep

SCAN = ScanPoints.from_angles(np.radians([0, 30, 50]), np.radians([0, 20, 90]))
COPPER = 5.8e7


def test_skin_effect_limits():
    """CLOSED: DC resistance of sheet and wire; thick sheet 1/(sigma delta)(1 + j); thick wire = its surface."""
    assert surface_impedance(Material(conductivity=COPPER, thickness=1e-9), 1e3) == pytest.approx(
        1 / (COPPER * 1e-9), rel=1e-6
    )
    depth = skin_depth(COPPER, 5.4e9)
    assert depth == pytest.approx(np.sqrt(2 / (2 * np.pi * 5.4e9 * MU0 * COPPER)))
    thick = surface_impedance(Material(conductivity=COPPER, thickness=1e-3), 5.4e9)
    assert thick == pytest.approx((1 + 1j) / (COPPER * depth), rel=1e-9)
    dc = wire_impedance(Material(conductivity=COPPER), 1e-4, 1.0)
    assert dc.real == pytest.approx(1 / (np.pi * 1e-8 * COPPER), rel=1e-6)
    skin = wire_impedance(Material(conductivity=COPPER), 2e-3, 5.4e9)
    assert skin == pytest.approx((1 + 1j) / (COPPER * depth * 2 * np.pi * 2e-3), rel=2e-3)
    assert wire_impedance(Material(wire_resistance=3.0), 1e-3, 1e9) == 3.0


def balance(sweep):
    accepted = 1 - np.abs(sweep.scattering[..., 0, 0]) ** 2
    radiated = (np.abs(sweep.waves[..., 0]) ** 2).sum(axis=2)
    lost = sweep.loss[..., 0, 0].real.sum(axis=2)
    return accepted, radiated, lost


@pytest.mark.parametrize(
    "cell",
    [
        lambda: strip_dipole(material=Material(sheet_resistance=2.0)),
        lambda: strip_dipole(height=0.0, material=Material(conductivity=1e4, thickness=1e-4)),
        lambda: wire_dipole(material=Material(wire_resistance=300.0)),
        lambda: wire_dipole(material=Material(conductivity=3e3), size=0.03),
    ],
    ids=["resistive strip", "thin poor metal", "resistive wire", "poor wire"],
)
def test_power_balance_with_loss(cell):
    """Two routes: what the ports accept = what is radiated + what the conductors absorb, 1e-6."""
    accepted, radiated, lost = balance(solve_sweep(cell(), [0.9 * FREQUENCY, FREQUENCY], SCAN))
    assert np.abs(accepted - radiated - lost).max() < 1e-6
    assert lost.min() > 1e-4


def test_loss_on_a_conductor_that_crosses_the_border():
    bar = Strip(
        name="bar",
        start=point(-0.25, 0, 0.2),
        end=point(0.25, 0, 0.2),
        width=0.03,
        material=Material(sheet_resistance=5.0),
    )
    cell = make([bar], [sheet_gap((0, 0, 0.2), 0.02, 0.03)], ground=True)
    accepted, radiated, lost = balance(solve_sweep(cell, [FREQUENCY], SCAN))
    assert np.abs(accepted - radiated - lost).max() < 1e-6
    assert lost.min() > 0.01


def test_uniform_current_loses_length_times_resistance():
    """A strip that joins its copies at broadside and low frequency carries uniform current: R_dc = R_s L / w. CLOSED"""
    bar = Strip(
        name="bar",
        start=point(-0.25, 0, 0),
        end=point(0.25, 0, 0),
        width=0.1,
        material=Material(sheet_resistance=50.0),
    )
    lossless = Strip(name="bar", start=bar.start, end=bar.end, width=0.1)
    gap = sheet_gap((0, 0, 0), 0.05, 0.1)
    z = [
        solve_sweep(make([b], [gap], size=0.1), [0.02 * FREQUENCY], ScanPoints.from_angles(0.0, 0.0)).impedance[
            0, 0, 0, 0
        ]
        for b in (bar, lossless)
    ]
    assert (z[0] - z[1]).real == pytest.approx(50 * 0.5 / 0.1, rel=0.01)


def test_uniform_current_in_a_wire_loses_length_times_resistance():
    """The same for a wire that joins its copies: R = R' L. CLOSED"""
    ends = np.stack([point(-0.25, 0, 0), point(0.25, 0, 0)])
    wires = [
        Wire(name="bar", points=ends, radius=0.004, material=m) for m in (Material(wire_resistance=80.0), Material())
    ]
    broadside = ScanPoints.from_angles(0.0, 0.0)
    z = [
        solve_sweep(make([w], [wire_gap((0, 0, 0), 0.02, 0.004)], size=0.05), [0.02 * FREQUENCY], broadside).impedance[
            0, 0, 0, 0
        ]
        for w in wires
    ]
    assert (z[0] - z[1]).real == pytest.approx(80.0 * 0.5, rel=2e-3)


def test_lossy_probe_and_plate_balance():
    cell = probe_fed_plate(0.06)
    materials = tuple(
        Material(sheet_resistance=1.0) if n == "plate" else Material(wire_resistance=50.0) for n in cell.mesh.names
    )
    object.__setattr__(cell.mesh, "materials", materials)
    accepted, radiated, lost = balance(solve_sweep(cell, [FREQUENCY], SCAN))
    assert np.abs(accepted - radiated - lost).max() < 2e-6


@pytest.mark.parametrize(
    ("options", "frequency", "expected"),
    [
        ({"resistance": 30.0}, FREQUENCY, 30.0),
        ({"inductance": 5e-9}, FREQUENCY, 2j * np.pi * FREQUENCY * 5e-9),
        ({"capacitance": 1e-12, "resistance": 2.0}, FREQUENCY, 2.0 + 1 / (2j * np.pi * FREQUENCY * 1e-12)),
    ],
)
def test_load_in_the_port_s_own_gap_adds_in_series(options, frequency, expected):
    """CLOSED: with the load in the very same gap the port sees Z + Z_load."""
    gap = wire_gap((0, 0, 0.25), 0.01, 0.0025)
    bare, loaded = (
        solve_sweep(wire_dipole(size=0.03, loads=loads), [frequency], SCAN)
        for loads in ((), (Load("x", gap, **options),))
    )
    np.testing.assert_allclose(loaded.impedance - bare.impedance, expected, rtol=1e-8)
    accepted, radiated, lost = balance(loaded)
    assert np.abs(accepted - radiated - lost).max() < 1e-6


def test_port_terminated_elsewhere_equals_a_load_there():
    """Two ways to terminate a second gap with 50 ohm: as a port left alone, or as a lumped resistor. CLOSED"""
    bars = [
        Strip(name=n, start=point(-0.2, y, 0.2), end=point(0.2, y, 0.2), width=0.02)
        for n, y in (("a", -0.1), ("b", 0.1))
    ]
    gaps = [sheet_gap((0, y, 0.2), 0.02, 0.02) for y in (-0.1, 0.1)]
    two = solve_sweep(make(bars, gaps, ground=True), [FREQUENCY], SCAN)
    one = solve_sweep(make(bars, gaps[:1], ground=True, loads=(Load("r", gaps[1], 50.0),)), [FREQUENCY], SCAN)
    np.testing.assert_allclose(two.scattering[0, :, 0, 0], one.scattering[0, :, 0, 0], atol=1e-9)


def test_gap_functional_is_the_mean_current():
    """A gap over part of a strip: exact whatever the elements do; halves of a gap average to the whole. CLOSED"""
    cell = strip_dipole(size=0.03)
    operator = PeriodicOperator(cell, K)
    whole = GapFunctional("g", sheet_gap((0.013, 0, 0.25), 0.02, 0.02), operator.basis, operator.lattice)
    halves = [
        GapFunctional("g", sheet_gap((x, 0, 0.25), 0.01, 0.02), operator.basis, operator.lattice)
        for x in (0.008, 0.018)
    ]
    kt = np.zeros(2)
    mean = 0.5 * (halves[0].excitation(kt) + halves[1].excitation(kt))
    np.testing.assert_allclose(whole.excitation(kt), mean, atol=1e-12)
    with pytest.raises(InputError, match="no current can flow"):
        GapFunctional("g", sheet_gap((0.4, 0.3, 0.25), 0.01, 0.02, Y, Y), operator.basis, operator.lattice)


def test_impedance_converges_at_fixed_gap_width():
    """Fixed gap, refined mesh: changes shrink; narrower gap at fixed mesh: reactance keeps moving (stated model)."""
    z = [
        solve_sweep(
            strip_dipole(0.45, 0.04, 0.25, 0.04, size=size), [FREQUENCY], ScanPoints.from_angles(0.0, 0.0)
        ).impedance[0, 0, 0, 0]
        for size in (0.04, 0.02, 0.01)
    ]
    assert abs(z[2] - z[1]) < 0.8 * abs(z[1] - z[0])
    assert abs(z[2] - z[1]) < 0.02 * abs(z[2])
