"""Printed conductors in layered stacks: invariances, closed forms and an independent spectral method."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from cells import FREQUENCY, SQUARE, K, make, point, sheet_gap, strip_dipole
from reference_spectral import TABLE
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Plate, Strip
from scanward.geometry.errors import InputError
from scanward.geometry.stack import Layer, Stack
from scanward.solver.layered_radiation import layer_losses
from scanward.solver.operator import PeriodicOperator
from scanward.solver.plane_wave import plane_wave_response
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver, solve_sweep
from scanward.solver.waves import radiation
from test_invariance import doubled

SCAN = ScanPoints.from_cosines([0.0, 0.31, -0.2], [0.0, 0.27, 0.55])
KT = K * np.array([0.31, 0.27])


def printed(*layers: Layer, height: float | None = None, ground: bool = True, **options) -> UnitCell:
    """Strip dipole .39 by .01 on top of the layers, or at a height inside them."""
    stack = Stack(layers, ground)
    cell = strip_dipole(0.39, 0.01, stack.top if height is None else height, 0.01, ground=ground, **options)
    return dataclasses.replace(cell, stack=stack)


def two_heights() -> UnitCell:
    """A fed strip inside a cover and a passive patch on top of it, over ground."""
    fed = Strip(name="fed", start=point(-0.15, 0, 0.06), end=point(0.15, 0, 0.06), width=0.03)
    top = Plate(name="top", centre=point(0.02, 0.01, 0.1), size=np.array([0.26, 0.14]))
    cell = make([fed, top], [sheet_gap((0, 0, 0.06), 0.02, 0.03)], ground=True, size=0.06)
    return dataclasses.replace(cell, stack=Stack((Layer(0.06, 2.2), Layer(0.04, 4.0, 0.002), Layer(0.05, 1.5)), True))


CELLS = {
    "dipole on a slab": lambda: printed(Layer(0.19, 2.55)),
    "lossy slab": lambda: printed(Layer(0.19, 2.55, 0.02)),
    "under a cover": lambda: printed(Layer(0.1, 2.55), Layer(0.05, 6.0), height=0.1),
    "inside a layer": lambda: printed(Layer(0.2, 3.0), height=0.13),
    "no ground": lambda: printed(Layer(0.05, 9.8), ground=False),
    "two heights": two_heights,
}


@pytest.mark.parametrize("name", CELLS)
def test_splitting_parameter_and_number_of_waves_do_not_matter(name):
    """From about 150 to 1000 Floquet waves; rays are right to the second order in k / k_t, so the far kernel falls as
    k_t^-5."""
    limit = 1e-6
    cell = CELLS[name]()
    reference = PeriodicOperator(cell, K, 1e-8, splitting=26.0).matrix(K, KT)
    for splitting in (None, 16.0):
        other = PeriodicOperator(cell, K, 1e-8, splitting=splitting).matrix(K, KT)
        assert np.abs(other - reference).max() < limit * np.abs(reference).max()


def test_stack_of_air_layers_is_free_space_and_the_image():
    """CLOSED: permittivity within 1e-9 of air, so that the layered route is taken."""
    almost = 1 + 1e-9
    for ground in (True, False):
        cell = printed(Layer(0.1, almost), Layer(0.09, 1.0), ground=ground)
        layered = PeriodicOperator(cell, K, 1e-9).matrix(K, KT)
        air = PeriodicOperator(dataclasses.replace(cell, stack=None), K, 1e-9).matrix(K, KT)
        assert np.abs(layered - air).max() < 1e-7 * np.abs(air).max()
        assert PeriodicOperator(dataclasses.replace(cell, stack=Stack((Layer(0.1, 1.0),), ground)), K).stack is None


def test_one_layer_split_in_three_is_the_same():
    whole, parts = printed(Layer(0.19, 2.55)), printed(Layer(0.05, 2.55), Layer(0.08, 2.55), Layer(0.06, 2.55))
    a, b = (solve_sweep(c, [FREQUENCY], SCAN, tolerance=1e-8) for c in (whole, parts))
    np.testing.assert_allclose(a.impedance, b.impedance, rtol=1e-7)
    np.testing.assert_allclose(a.waves, b.waves, rtol=1e-7, atol=1e-12)


def test_interface_without_contrast_is_not_seen():
    """A strip inside a layer, and on the border of two halves of it: same kernel by two routes."""
    inside, between = printed(Layer(0.2, 3.0), height=0.13), printed(Layer(0.13, 3.0), Layer(0.07, 3.0), height=0.13)
    a, b = (solve_sweep(c, [FREQUENCY], SCAN, tolerance=1e-8).impedance for c in (inside, between))
    np.testing.assert_allclose(a, b, rtol=1e-6)


def test_printed_dipole_against_the_spectral_method():
    """SECOND METHOD, tests/reference_spectral.py converged (ten entries with those over ground in air); 1 % of |Z|."""
    rows = [row for row in TABLE if row.medium == "slab"]
    scan = ScanPoints.from_angles(np.radians([r.theta for r in rows]), np.radians([r.phi for r in rows]))
    z = solve_sweep(printed(Layer(0.19, 2.55), size=0.02), [FREQUENCY], scan).impedance[0, :, 0, 0]
    assert np.abs(z / np.array([row.converged for row in rows]) - 1).max() < 0.012


def test_blindness_of_the_printed_dipole():
    """|Gamma| reaches 1 and R falls to zero near the TM0 circle (45.85 deg); with the full current at 44.89 deg
    (checks.md section 2)."""
    theta = np.radians(np.arange(44.0, 46.01, 0.05))
    sweep = solve_sweep(printed(Layer(0.19, 2.55)), [FREQUENCY], ScanPoints.from_angles(theta, np.zeros_like(theta)))
    reflection = np.abs(sweep.scattering[0, :, 0, 0])
    worst = int(np.argmax(reflection))
    assert reflection[worst] > 0.999
    assert np.degrees(theta[worst]) == pytest.approx(44.89, abs=0.15)
    assert sweep.impedance[0, worst, 0, 0].real < 5.0


@pytest.mark.parametrize("name", [n for n in CELLS if n not in ("lossy slab", "two heights")])
def test_lossless_power_balance(name):
    """Ports against outgoing waves above and below, 1e-6."""
    sweep = solve_sweep(CELLS[name](), [0.9 * FREQUENCY, FREQUENCY], SCAN)
    accepted = 1 - np.abs(sweep.scattering[..., 0, 0]) ** 2
    assert np.abs(accepted - (np.abs(sweep.waves[..., 0]) ** 2).sum(axis=2)).max() < 1e-6


def test_layer_loss_by_two_routes():
    """What the balance leaves for the layer, against the Poynting power that Floquet waves lose in it: their
    sum rises to it slowly (edge fields) and never passes it."""
    cell = printed(Layer(0.19, 2.55, 0.01), size=0.02)
    shares = []
    for splitting in (8.0, 16.0, 32.0):
        solver = CellSolver(cell, FREQUENCY, splitting=splitting)
        right = solver.excitations(KT)
        currents, _, _ = solver.solve(FREQUENCY, KT, right)
        modes = solver.operator.lattice.harmonics(solver.operator.far.orders(K, KT), KT)
        operator = solver.operator
        summed = layer_losses(operator.cloud, operator.lattice, cell.stack, K, modes, currents)[0, 0, 0].real
        table = solve_sweep(cell, [FREQUENCY], SCAN, solver=solver).wave_table
        amplitude, _ = radiation(operator.cloud, SQUARE, True, K, KT, 0.0, table, cell.stack)
        left = (currents.conj().T @ right).real[0, 0] - (np.abs(amplitude @ currents) ** 2).sum()
        shares.append(summed / left)
    assert shares == sorted(shares)
    assert 0.94 < shares[-1] < 1.0005


def test_loss_of_the_layer_is_told():
    sweep = solve_sweep(printed(Layer(0.19, 2.55, 0.01, name="laminate")), [FREQUENCY], SCAN)
    assert sweep.loss_names == ("laminate",)
    lost = sweep.loss[0, :, 0, 0, 0].real
    assert np.all((lost > 0.01) & (lost < 0.3))
    accepted = 1 - np.abs(sweep.scattering[0, :, 0, 0]) ** 2
    np.testing.assert_allclose(accepted, lost + (np.abs(sweep.waves[0, :, :, 0]) ** 2).sum(axis=1), atol=1e-9)


@pytest.mark.parametrize("name", ["dipole on a slab", "two heights"])
def test_supercell_equals_the_unit_cell(name):
    cell = CELLS[name]()
    double = dataclasses.replace(doubled(cell), stack=cell.stack)
    single, twice = (solve_sweep(c, [FREQUENCY], SCAN, tolerance=1e-8).impedance[0] for c in (cell, double))
    drive = np.stack([np.ones(len(SCAN)), np.exp(-1j * K * SCAN.u * 0.5)], axis=1)
    seen = np.einsum("sij,sj->si", twice, drive) / drive
    np.testing.assert_allclose(
        seen, np.repeat(single[:, :, 0], 2, axis=1), rtol=2e-6
    )


@pytest.mark.parametrize("ground", [True, False])
def test_plane_wave_loses_nothing_in_a_lossless_stack(ground):
    cell = dataclasses.replace(printed(Layer(0.1, 2.55), Layer(0.05, 6.0), height=0.1, ground=ground), ports=())
    response = plane_wave_response(CellSolver(cell, FREQUENCY), [FREQUENCY], SCAN)
    np.testing.assert_allclose((np.abs(response.waves) ** 2).sum(axis=2), 1.0, atol=2e-6)


def test_reciprocity_between_driving_and_receiving():
    """The wave a port sends to (u, v) and what it receives from there: equal magnitude. CLOSED"""
    cell = CELLS["two heights"]()
    solver = CellSolver(cell, FREQUENCY)
    sent = solve_sweep(cell, [FREQUENCY], SCAN, solver=solver).waves[0, :, :2, 0]
    back = ScanPoints.from_cosines(-SCAN.u, -SCAN.v)
    received = plane_wave_response(solver, [FREQUENCY], back).received[0, :, 0]
    np.testing.assert_allclose(np.abs(received), np.abs(sent), rtol=1e-6, atol=1e-9)


def test_stack_and_cell_agree_about_the_ground():
    with pytest.raises(InputError, match="the cell and False for its stack"):
        dataclasses.replace(printed(Layer(0.1, 2.2)), stack=Stack((Layer(0.1, 2.2),), False))
