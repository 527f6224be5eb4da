"""Vertical conductors in layered stacks: probes, vias and upright plates."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from cells import FREQUENCY, SQUARE, K, X, Z, make, point, sheet_gap, wire_gap
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Plate, Strip, Wire
from scanward.geometry.errors import InputError
from scanward.geometry.mesher import mesh_conductors
from scanward.geometry.port import Port
from scanward.geometry.stack import Layer, Stack
from scanward.solver.operator import ETA, PeriodicOperator
from scanward.solver.plane_wave import plane_wave_response
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver, solve_sweep
from scipy.special import j0
from test_invariance import doubled

SCAN = ScanPoints.from_cosines([0.0, 0.31, -0.2], [0.0, 0.27, 0.55])
KT = K * np.array([0.31, 0.27])


def probe_fed(*layers: Layer, height: float, top: float | None = None, side=0.3, radius=0.004, gap=0.01, size=0.05):
    """Square plate on a probe from the ground; the probe ends at the plate unless `top` says where."""
    stack = Stack(layers, True)
    plate = Plate(name="plate", centre=point(0, 0, height), size=np.array([side, side]))
    ends = np.stack([point(0.08, 0.02, 0), point(0.08, 0.02, height if top is None else top)])
    probe = Wire(name="probe", points=ends, radius=radius)
    port = wire_gap((0.08, 0.02, gap / 2 + 0.001), gap, radius, Z)
    mesh = mesh_conductors(
        [plate, probe], SQUARE, ground=True, element_size=size, gaps=[port], interfaces=stack.interfaces[1:]
    )
    return UnitCell(SQUARE, mesh, (Port("p", port, 50.0),), (), True, stack)


def shorted_patch() -> UnitCell:
    """A patch fed by a gap in it and shorted by a via that crosses two layers."""
    stack = Stack((Layer(0.03, 4.0), Layer(0.04, 2.2)), True)
    plate = Plate(name="plate", centre=point(0, 0, 0.07), size=np.array([0.28, 0.1]))
    via = Wire(name="via", points=np.stack([point(-0.1, 0, 0), point(-0.1, 0, 0.07)]), radius=0.003)
    gap = sheet_gap((0, 0, 0.07), 0.02, 0.1)
    mesh = mesh_conductors(
        [plate, via], SQUARE, ground=True, element_size=0.05, gaps=[gap], interfaces=stack.interfaces[1:]
    )
    return UnitCell(SQUARE, mesh, (Port("p", gap, 50.0),), (), True, stack)


def upright_strip(*layers: Layer, ground: bool = True) -> UnitCell:
    """A strip standing upright in the air above a layer, fed in its middle."""
    strip = Strip(
        name="post", start=point(0, 0, 0.12), end=point(0, 0, 0.4), width=0.03, normal=np.array([0.0, 1.0, 0.0])
    )
    cell = make([strip], [sheet_gap((0, 0, 0.26), 0.02, 0.03, Z, X)], ground=ground, size=0.05)
    return dataclasses.replace(cell, stack=Stack(layers, ground))


CELLS = {
    "under the plate": lambda: probe_fed(Layer(0.08, 2.55), height=0.08),
    "within one layer": lambda: probe_fed(Layer(0.12, 2.55), height=0.08),
    "through two layers": lambda: probe_fed(Layer(0.05, 2.55), Layer(0.03, 6.0), height=0.08),
    "through the plate into air": lambda: probe_fed(Layer(0.08, 2.55), height=0.08, top=0.12),
    "shorted patch": shorted_patch,
    "upright over a slab": lambda: upright_strip(Layer(0.1, 2.55)),
    "upright, no ground": lambda: upright_strip(Layer(0.1, 2.55), ground=False),
}


def test_stack_of_air_is_the_image_theory():
    """CLOSED: permittivity within 1e-9 of air, so that the layered route is taken."""
    cell = probe_fed(Layer(0.05, 1 + 1e-9), Layer(0.03, 1.0), height=0.08)
    layered = PeriodicOperator(cell, K, 1e-9).matrix(K, KT)
    air = PeriodicOperator(dataclasses.replace(cell, stack=None), K, 1e-9).matrix(K, KT)
    assert np.abs(layered - air).max() < 1e-7 * np.abs(air).max()


@pytest.mark.parametrize("name", CELLS)
def test_splitting_parameter_does_not_matter(name):
    """Beyond E = 2 / distance the image of a plate leaves the near part, and with it the correction of the point rule
    between elements and the image (measured 2e-5 here), hence 1e-4 and not 1e-6 with probes."""
    limit = 1e-6 if name.startswith("upright") else 1e-4
    cell = CELLS[name]()
    one, other = (
        solve_sweep(cell, [FREQUENCY], SCAN, solver=CellSolver(cell, FREQUENCY, 1e-8, splitting=e)).impedance
        for e in (20.0, 13.0)
    )
    assert np.abs(other / one - 1).max() < limit


@pytest.mark.parametrize("name", CELLS)
def test_lossless_power_balance(name):
    """Ports against outgoing waves above and below, 1e-6."""
    sweep = solve_sweep(CELLS[name](), [0.9 * FREQUENCY, FREQUENCY], SCAN)
    accepted = 1 - np.abs(sweep.scattering[..., 0, 0]) ** 2
    assert np.abs(accepted - (np.abs(sweep.waves[..., 0]) ** 2).sum(axis=2)).max() < 1e-6


@pytest.mark.parametrize("name", ["through two layers", "upright, no ground"])
def test_transpose_and_plane_waves(name):
    """``Z(kt)^T = Z(-kt)``; a lossless cell loses nothing of a plane wave; sending equals receiving. CLOSED"""
    cell = CELLS[name]()
    solver = CellSolver(cell, FREQUENCY)
    z, back = solver.operator.matrix(K, KT), solver.operator.matrix(K, -KT)
    assert np.abs(z - back.T).max() < 1e-13 * np.abs(z).max()
    passive = dataclasses.replace(cell, ports=())
    response = plane_wave_response(CellSolver(passive, FREQUENCY), [FREQUENCY], SCAN)
    np.testing.assert_allclose((np.abs(response.waves) ** 2).sum(axis=2), 1.0, atol=2e-6)
    sent = solve_sweep(cell, [FREQUENCY], SCAN, solver=solver).waves[0, :, :2, 0]
    opposite = ScanPoints.from_cosines(-SCAN.u, -SCAN.v)
    received = plane_wave_response(solver, [FREQUENCY], opposite).received[0, :, 0]
    np.testing.assert_allclose(np.abs(received), np.abs(sent), rtol=1e-6, atol=1e-9)


def test_one_layer_split_in_three_is_the_same():
    """The same mesh, so that only the route through the layers differs; interfaces without contrast change rays."""
    whole = probe_fed(Layer(0.03, 2.55), Layer(0.03, 2.55), Layer(0.02, 2.55), height=0.08)
    single = dataclasses.replace(whole, stack=Stack((Layer(0.08, 2.55),), True))
    a, b = (solve_sweep(c, [FREQUENCY], SCAN, tolerance=1e-8).impedance for c in (whole, single))
    np.testing.assert_allclose(a, b, rtol=2e-6)


def test_supercell_equals_the_unit_cell():
    cell = CELLS["under the plate"]()
    double = dataclasses.replace(doubled(cell), stack=cell.stack)
    single, twice = (solve_sweep(c, [FREQUENCY], SCAN, tolerance=1e-8).impedance[0] for c in (cell, double))
    drive = np.stack([np.ones(len(SCAN)), np.exp(-1j * K * SCAN.u * 0.5)], axis=1)
    seen = np.einsum("sij,sj->si", twice, drive) / drive
    np.testing.assert_allclose(seen, np.repeat(single[:, :, 0], 2, axis=1), rtol=3e-4)


@pytest.mark.parametrize("permittivity", [1.0, 2.55])
def test_probe_between_two_planes(permittivity):
    """CLOSED: a thin probe across a thin dielectric between the ground and a plate that fills the cell, uniform
    current on a tube: ``X = k eta h / S sum J0(k_t a)^2 / (k_t^2 - eps k^2)``.

    1.5 %: the attachment to the plates lets current flow inside the probe's
    footprint, like one a few per cent thinner (the radius is 1/40 of the height); gap over nine tenths of the probe.
    """
    h, a = 0.04, 0.001
    cell = probe_fed(Layer(h, permittivity), height=h, side=0.5, radius=a, gap=0.9 * h)
    port = cell.ports[0]
    assert port.gap.width == pytest.approx(0.036)
    z = solve_sweep(cell, [FREQUENCY], SCAN).impedance[0, :, 0, 0]
    order = 4 * np.pi * np.arange(-1500, 1501)
    for u, v, value in zip(SCAN.u, SCAN.v, z, strict=True):
        square = (K * u + order[:, None]) ** 2 + (K * v + order) ** 2
        exact = K * ETA * h / 0.25 * np.sum(j0(np.sqrt(square) * a) ** 2 / (square - permittivity * K**2))
        assert value.imag == pytest.approx(exact, rel=0.015)
        assert abs(value.real) < 1e-5 * exact  # nothing gets out


def test_lossy_layers_around_a_probe():
    """Loss tangents: what the ports take is what leaves and what the layers absorb, and each absorbs some."""
    cell = probe_fed(Layer(0.05, 2.55, 0.01, name="base"), Layer(0.05, 4.0, 0.02, name="cover"), height=0.08)
    sweep = solve_sweep(cell, [FREQUENCY], SCAN)
    assert sweep.loss_names == ("base", "cover")
    lost = sweep.loss[0, :, :, 0, 0].real
    assert np.all(lost > 1e-3)
    accepted = 1 - np.abs(sweep.scattering[0, :, 0, 0]) ** 2
    np.testing.assert_allclose(
        accepted, lost.sum(axis=1) + (np.abs(sweep.waves[0, :, :, 0]) ** 2).sum(axis=1), atol=1e-9
    )


def test_wires_get_a_node_where_they_cross_an_interface():
    cell = probe_fed(Layer(0.05, 2.55), Layer(0.03, 6.0), height=0.08)
    ends = cell.mesh.points[cell.mesh.segments][:, :, 2]
    assert np.any(np.isclose(ends, 0.05))


def test_elements_across_an_interface_are_refused():
    with pytest.raises(InputError, match=r"crosses the interface or sheet at 0\.27 m"):
        PeriodicOperator(upright_strip(Layer(0.27, 2.0)), K)
