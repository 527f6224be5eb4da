"""Coupling between two cells: closed forms, the lattice sum, reciprocity, and freedom from the path of integration."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from array_cells import CELLS, printed
from cells import FREQUENCY, K, point
from reference_pair import mutual_impedance, mutual_over_ground
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Wire
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesher import mesh_conductors
from scanward.geometry.stack import Layer
from scanward.solver import lag_coupling, radial_contour
from scanward.solver.lag_coupling import exact_lags, lag_couplings
from scanward.solver.reduced_build import ReducedBuilder
from scanward.solver.snapshots import Snapshots, take_snapshot
from scanward.solver.sweep import CellSolver
from scipy.special import erfc, jv
from test_imposed_current import Sinusoid

SKEW = Lattice(np.array([0.75, 0.0]), np.array([0.25, 0.25]))
OFFSETS = np.array([[0, 1], [0, 2], [-1, 3], [-2, 6], [1, 0], [0, 4], [1, 1], [-3, 5]])  # at .25 multiples both ways


def small_model(cell: UnitCell):
    """Two snapshots: enough to test the operator, which is exact for any basis."""
    builder = ReducedBuilder(CellSolver(cell, FREQUENCY), (FREQUENCY, FREQUENCY))
    for direction in ((0.3, 0.2), (1.2, 0.4)):
        builder.extend(take_snapshot(builder.solver, FREQUENCY, *direction))
    return builder.model(1e-6)


@pytest.mark.parametrize("height", [None, 0.25])
def test_mutual_impedance_of_two_dipoles(height):
    """CLOSED (checks.md section 3, Carter 1932): side by side, collinear and in echelon, imposed sinusoid, alone in
    air and over ground. The lattice serves as a grid of places only."""
    sinusoid = Sinusoid((SKEW.a, SKEW.b), 0.5, 0.001, height)
    z = 0.0 if height is None else height
    wire = Wire(name="w", points=np.stack([point(-0.25, 0, z), point(0.25, 0, z)]), radius=0.001)
    mesh = mesh_conductors([wire], SKEW, ground=height is not None, element_size=0.5 / 63.9, grading=False)
    builder = ReducedBuilder(CellSolver(UnitCell(SKEW, mesh, (), (), height is not None), FREQUENCY), (FREQUENCY,) * 2)
    currents = np.broadcast_to(sinusoid.current[:, None].astype(complex), (1, 2, len(sinusoid.current), 1))
    one = np.ones(1)
    builder.extend(Snapshots(one, one, one, currents, np.ones((1, 1, 1), dtype=complex)))
    model = builder.model(1e-7)
    scale = (model.vectors.conj().T @ sinusoid.current)[0] ** 2
    z = lag_couplings(model, FREQUENCY, OFFSETS)[:, 0, 0] * scale
    axial, side = np.abs(SKEW.positions(OFFSETS)).T
    true = mutual_impedance(0.5, side, axial) if height is None else mutual_over_ground(0.5, side, axial, height)
    assert np.abs(z - true).max() < 0.003 * 73


@pytest.mark.parametrize(
    "name",
    ["strip", "slab", *(pytest.param(n, marks=pytest.mark.slow) for n in ("triangular", "free space", "lossy slab"))],
)
def test_lattice_sum_gives_back_the_periodic_operator(name):
    """CLOSED: sum_m g(rho_m) Z_m exp(-j kt . rho_m) with a bell g, flat at 0, is Z about kt wherever that is smooth."""
    cell = CELLS[name]()
    model, n = small_model(cell), 34
    cells = np.stack(np.meshgrid(np.arange(-n, n + 1), np.arange(-n, n + 1), indexing="ij"), -1).reshape(-1, 2)
    rho = cell.lattice.positions(cells)
    distance = np.linalg.norm(rho, axis=1)
    cells, rho, bell = (x[distance < 17] for x in (cells, rho, 0.5 * erfc((distance - 8.7) / 2.3)))
    z = lag_couplings(model, FREQUENCY, cells)
    for kt in K * np.array([[0.1, 0.0], [-0.05, 0.1]]):
        direct = model.matrix(K, kt[None])[0]
        summed = np.tensordot(bell * np.exp(-1j * rho @ kt), z, 1)
        assert np.abs(summed - direct).max() < 2e-6 * np.abs(direct).max()


@pytest.mark.parametrize("name", ["loaded pair", "lossy slab"])
def test_exact_part_is_reciprocal(name):
    """CLOSED: X at -rho is the transpose of X at rho, worked out for both."""
    model = small_model(CELLS[name]())
    rho = np.array([[0.5, 0.0], [1.0, -0.5], [3.5, 2.0]])
    there, back = exact_lags(model, K, np.concatenate([rho, -rho])).reshape(2, 3, model.size, model.size)
    assert np.abs(there - there.swapaxes(1, 2)).max() > 1e-4 * np.abs(there).max()
    np.testing.assert_allclose(back, there.swapaxes(1, 2), atol=1e-12 * np.abs(there).max())


@pytest.mark.parametrize("name", ["patch", "slab"])
def test_nothing_depends_on_the_path(name, monkeypatch):
    """CLOSED: another lift, other panels, another analytic window."""
    model = small_model(CELLS[name]())
    offsets = np.array([[0, 0], [1, 0], [2, 3], [0, 9]])
    first = lag_couplings(model, FREQUENCY, offsets)
    monkeypatch.setattr(radial_contour, "LIFT", 0.7)
    monkeypatch.setattr(radial_contour, "TURN", 4.5)
    monkeypatch.setattr(lag_coupling, "EDGE", 3.6)
    second = lag_couplings(model, FREQUENCY, offsets)
    assert np.abs(second - first).max() < 1e-6 * np.abs(first).max()


def test_vanishing_loss_changes_nothing():
    """CLOSED: the lossless pole is the limit of the lossy one."""
    offsets = np.array([[0, 0], [1, 0], [5, 2]])
    cell = printed(Layer(0.19, 2.55))
    model = small_model(cell)
    lossy_cell = dataclasses.replace(cell, stack=printed(Layer(0.19, 2.55, 1e-7)).stack)
    builder = ReducedBuilder(CellSolver(lossy_cell, FREQUENCY), (FREQUENCY, FREQUENCY))
    columns = model.vectors.T[None, :, :, None].repeat(1, axis=0)
    one = np.ones(1)
    builder.extend(Snapshots(one, one, one, columns, np.ones((1, 1, 1), dtype=complex)))
    lossy = builder.model(1e-6)
    turn = lossy.vectors.conj().T @ model.vectors
    found = turn.T @ lag_couplings(lossy, FREQUENCY, offsets) @ turn
    true = lag_couplings(model, FREQUENCY, offsets)
    assert np.abs(found - true).max() < 2e-6 * np.abs(true).max()


def test_bessel_functions():
    """SECOND METHOD: scipy's, near the real axis, below and above the order."""
    random = np.random.default_rng(4)
    z = np.concatenate([[0, 1e-3], random.uniform(0, 300, 300)]) + 1j * np.concatenate(
        [[0, 0], random.uniform(0, 2, 300)]
    )
    true = np.array([jv(n, z) for n in range(46)])
    np.testing.assert_allclose(radial_contour.bessel_table(45, z), true, atol=1e-12)


def test_path_integrates_across_a_pole():
    """CLOSED: int_0^10 dk / (k - p) above the pole is ln((10 - p) / p) - j pi."""
    nodes, weights = radial_contour.radial_contour(10.0, [1.0, 1.3], 30.0, 1.0)
    end = nodes[-1].imag  # the path ends lifted
    true = np.log((10 + 1j * end - 1.3) / -1.3 + 0j)
    found = np.sum(weights / (nodes - 1.3))
    assert abs(found.real - true.real) < 1e-9 and abs(found.imag + np.pi - np.angle(10 + 1j * end - 1.3)) < 1e-9
