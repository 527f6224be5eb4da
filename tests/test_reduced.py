"""The reduced model against the direct solver, point by point, and its exact properties."""

from __future__ import annotations

import dataclasses
from functools import cache

import numpy as np
import pytest
from cells import FREQUENCY, K, make, point, probe_fed_plate, sheet_gap, strip_dipole, wire_dipole, wire_gap
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Material, Strip, Wire
from scanward.geometry.lattice import Lattice
from scanward.geometry.port import Load
from scanward.geometry.stack import Layer, Stack
from scanward.solver import operator, operator_view
from scanward.solver.greedy import build_reduced
from scanward.solver.network import port_response
from scanward.solver.reduced import ReducedModel
from scanward.solver.reduced_build import ReducedBuilder
from scanward.solver.reduced_sweep import reduced_sweep
from scanward.solver.result import ScanPoints
from scanward.solver.snapshots import take_snapshot
from scanward.solver.sweep import CellSolver, solve_sweep
from scanward.solver.training import random_points
from test_invariance import doubled

WIDE = (0.7 * FREQUENCY, 1.1 * FREQUENCY)
NARROW = (0.96 * FREQUENCY, 1.04 * FREQUENCY)
X, Y, Z = np.eye(3)
LARGE = Lattice(np.array([0.9, 0.0]), np.array([0.2, 0.7]))


def printed(*layers: Layer, height: float | None = None, ground: bool = True) -> UnitCell:
    stack = Stack(layers, ground)
    cell = strip_dipole(0.39, 0.02, stack.top if height is None else height, 0.02, ground=ground, size=0.08)
    return dataclasses.replace(cell, stack=stack)


def two_ports() -> UnitCell:
    """Two crossing strips at two heights, the second lossy and loaded."""
    a = Strip(name="a", start=point(-0.2, 0, 0.2), end=point(0.2, 0, 0.2), width=0.02)
    lossy = Material(conductivity=1e5, thickness=1e-3)
    b = Strip(name="b", start=point(0.1, -0.2, 0.25), end=point(0.1, 0.2, 0.25), width=0.02, material=lossy)
    load = Load("load", sheet_gap((0.1, 0.1, 0.25), 0.02, 0.02, Y, X), resistance=20.0, inductance=1e-9)
    gaps = [sheet_gap((0, 0, 0.2), 0.02, 0.02), sheet_gap((0.1, 0, 0.25), 0.02, 0.02, Y, X)]
    return make([a, b], gaps, ground=True, size=0.08, loads=[load])


def bent_wire() -> UnitCell:
    """Upwards from the ground, where it is fed, then along x."""
    bend = np.stack([point(0, 0, 0), point(0, 0, 0.15), point(0.2, 0, 0.15)])
    return make([Wire(name="bend", points=bend, radius=0.004)], [wire_gap((0, 0, 0.01), 0.02, 0.004, Z)], ground=True)


CELLS = {
    "strip": lambda: strip_dipole(size=0.08),
    "oblique lattice with grating lobes": lambda: strip_dipole(size=0.08, lattice=LARGE),
    "connected, lossy": lambda: strip_dipole(0.5, 0.03, 0.2, size=0.08, material=Material(sheet_resistance=5.0)),
    "free space": lambda: wire_dipole(height=0, material=Material(conductivity=1e3)),
    "vertical wire": bent_wire,
    "two ports": two_ports,
    "slab": lambda: printed(Layer(0.19, 2.55)),
    "two lossy layers": lambda: printed(Layer(0.1, 2.55, 0.01), Layer(0.05, 6.0, 0.005), height=0.1),
    "no ground": lambda: printed(Layer(0.05, 9.8), ground=False),
}


def band_of(name: str) -> tuple[float, float]:
    """Narrow where every frequency takes its time."""
    return NARROW if name in ("vertical wire", "two ports", "two lossy layers", "no ground") else WIDE


@cache
def built(name: str):
    """Direct solver, reduced model and certificate of one cell."""
    band = band_of(name)
    solver = CellSolver(CELLS[name](), band[1])
    return solver, *build_reduced(solver, band, error=1e-3 if band is NARROW else 1e-4)


@pytest.mark.parametrize("name", CELLS)
def test_reduced_operator_is_the_projection_of_the_full_one(name):
    """SECOND METHOD: V^T Z V from the assembled matrix, at directions in and out of visible space."""
    solver, model, _ = built(name)
    random = np.random.default_rng(3)
    for k in random.uniform(model.band[0], model.band[1], 3):
        kt = k * random.uniform(-2.5, 2.5, (2, 2))
        for at, reduced in zip(kt, model.matrix(k, kt), strict=True):
            full, _ = solver.system(k / K * FREQUENCY, at)
            projected = model.vectors.T @ full @ model.vectors
            assert np.abs(reduced - projected).max() < 2e-6 * np.abs(projected).max()


@pytest.mark.parametrize("name", CELLS)
def test_sweep_is_that_of_the_direct_solver(name):
    """SECOND METHOD: every answer at random points; amplitudes and losses err by the first power of the residual."""
    solver, model, certificate = built(name)
    assert certificate.reached
    for frequency, u, v in random_points(band_of(name), 1.0, 6, np.random.default_rng(11)):
        scan = ScanPoints.from_cosines(u, v)
        direct, reduced = (
            solve_sweep(solver.cell, frequency, scan, solver=solver),
            reduced_sweep(model, frequency, scan),
        )
        assert np.abs(reduced.scattering - direct.scattering).sum(axis=-1).max() <= certificate.stated
        np.testing.assert_allclose(reduced.impedance, direct.impedance, rtol=1e-3, atol=0.05)
        assert reduced.loss_names == direct.loss_names
        assert np.abs(reduced.waves - direct.waves).max() < 20 * certificate.stated
        if direct.loss.size:
            assert np.abs(reduced.loss - direct.loss).max() < 20 * certificate.stated
        assert np.array_equal(reduced.waves == 0, direct.waves == 0)


@pytest.mark.slow
def test_probe_fed_plate_over_a_wide_band():
    """SECOND METHOD: stated error at 200 random points of a resonant cell with Chebyshev levels."""
    solver = CellSolver(probe_fed_plate(), WIDE[1])
    model, certificate = build_reduced(solver, WIDE)
    assert certificate.reached
    for frequency, u, v in random_points(WIDE, 1.0, 200, np.random.default_rng(5)):
        one = take_snapshot(solver, frequency, u, v)
        true = port_response(one.admittance[0], solver.reference).scattering
        k = K * frequency / FREQUENCY
        assert np.abs(model.solve(k, k * np.array([[u, v]])).scattering[0] - true).max() <= certificate.stated


def test_currents_are_those_of_the_direct_solver():
    solver, model, _ = built("strip")
    scan = ScanPoints.from_cosines([0.3, -0.5], [0.1, 0.6])
    direct = solve_sweep(solver.cell, [0.9 * FREQUENCY], scan, solver=solver, keep_currents=True)
    reduced = reduced_sweep(model, [0.9 * FREQUENCY], scan, keep_currents=True)
    assert direct.currents is not None and reduced.currents is not None
    assert np.abs(direct.currents - reduced.currents).max() < 2e-3 * np.abs(direct.currents).max()


def test_light_circle_is_exact_on_both_sides():
    """SECOND METHOD: within 1e-5 of a grating lobe's onset, where the slope of Gamma is infinite."""
    solver, model, certificate = built("oblique lattice with grating lobes")
    theta, order = solver.cell.lattice.grating_lobe_onset(K, 0.3)
    assert order is not None
    s = np.sin(theta) + np.array([-1e-3, -1e-5, 1e-5, 1e-3])
    scan = ScanPoints.from_cosines(s * np.cos(0.3), s * np.sin(0.3))
    direct, reduced = solve_sweep(solver.cell, FREQUENCY, scan, solver=solver), reduced_sweep(model, FREQUENCY, scan)
    assert np.abs(np.diff(direct.scattering.ravel())).max() > 10 * certificate.stated
    assert np.abs(reduced.scattering - direct.scattering).max() <= certificate.stated


def test_surface_wave_pole_is_exact():
    """SECOND METHOD: across the blind direction of a dipole on a slab, from both sides."""
    solver, model, certificate = built("slab")
    scan = ScanPoints.from_cosines(np.linspace(0.6, 0.95, 12), 0.0)
    direct, reduced = solve_sweep(solver.cell, FREQUENCY, scan, solver=solver), reduced_sweep(model, FREQUENCY, scan)
    assert np.abs(direct.scattering).max() > 0.99
    assert np.abs(reduced.scattering - direct.scattering).max() <= certificate.stated


def test_blindness_narrower_than_any_grid_is_found():
    """SECOND METHOD: a thin slab binds its wave so weakly that total reflection is 0.1 deg wide near the horizon."""
    cell = strip_dipole(0.42, 0.02, 0.15, 0.02, ground=True, size=0.08)
    solver = CellSolver(dataclasses.replace(cell, stack=Stack((Layer(0.01, 3.0),), True)), FREQUENCY)
    model, certificate = build_reduced(solver, (0.95 * FREQUENCY, FREQUENCY))
    theta = np.radians(np.linspace(86.5, 89.0, 500))
    found = np.abs(reduced_sweep(model, FREQUENCY, ScanPoints.from_angles(theta, 0.0)).scattering.ravel())
    peak = theta[np.argmax(found)]
    near = ScanPoints.from_angles(peak + np.radians([-0.1, -0.02, 0.0, 0.02, 0.1]), 0.0)
    direct, reduced = solve_sweep(solver.cell, FREQUENCY, near, solver=solver), reduced_sweep(model, FREQUENCY, near)
    lost = 1 - np.abs(direct.scattering.ravel()) ** 2
    assert lost[2] < 1e-3 and lost[0] > 0.02 and lost[4] > 0.005
    assert np.abs(reduced.scattering - direct.scattering).max() <= certificate.stated


@cache
def over_the_zone():
    cell = wire_dipole()
    solver = CellSolver(cell, FREQUENCY)
    return cell, *build_reduced(solver, (FREQUENCY, FREQUENCY), scan_radius=1.45)


def test_no_power_is_lost_in_invisible_space():
    """CLOSED: without a propagating wave a lossless cell reflects everything."""
    _, model, certificate = over_the_zone()
    edge = np.linspace(-1, 1, 21)
    u, v = (g.ravel() for g in np.meshgrid(edge, edge))
    dark = np.hypot(u, v) > 1.001
    gamma = reduced_sweep(model, FREQUENCY, ScanPoints.from_cosines(u[dark], v[dark])).scattering
    np.testing.assert_allclose(np.abs(gamma), 1.0, atol=certificate.stated)


def test_couplings_are_those_of_a_doubled_cell():
    """CLOSED (checks.md section 9): Gamma(kt) = sum_m S_m exp(-j kt . rho_m), so a cell of two elements at broadside
    has the mean of Gamma(0) and Gamma(b1/2) on its diagonal and half their difference beside it."""
    cell, model, certificate = over_the_zone()
    one = model.solve(K, np.stack([np.zeros(2), 0.5 * cell.lattice.reciprocal[0]])).scattering[:, 0, 0]
    two = solve_sweep(doubled(cell), FREQUENCY, ScanPoints.from_cosines(0.0, 0.0)).scattering[0, 0]
    assert abs(two[0, 0] - 0.5 * (one[0] + one[1])) < certificate.stated
    assert abs(two[0, 1] - 0.5 * (one[0] - one[1])) < certificate.stated


def test_mean_power_over_the_zone_is_the_sum_of_the_couplings():
    """CLOSED (checks.md section 9): mean |Gamma|^2 = sum |S_m|^2. Couplings from one grid, the mean from another; both
    grids see the light circle's square root, hence 2e-3."""
    cell, model, _ = over_the_zone()
    n = 40
    step = np.arange(n)
    grid = np.stack(np.meshgrid(step, step, indexing="ij"), -1).reshape(-1, 2)
    gamma = model.solve(K, (grid / n) @ cell.lattice.reciprocal).scattering[:, 0, 0].reshape(n, n)
    coupling = np.fft.ifft2(gamma)
    other = model.solve(K, ((grid + 0.5) / n) @ cell.lattice.reciprocal).scattering[:, 0, 0]
    assert np.mean(np.abs(other) ** 2) == pytest.approx(np.sum(np.abs(coupling) ** 2), abs=2e-3)
    assert 0.3 < np.mean(np.abs(other) ** 2) < 0.99


def test_answers_do_not_depend_on_how_points_are_asked_for():
    """CLOSED: one by one, in batches, displaced by a reciprocal vector, and reversed by reciprocity."""
    _, model, _ = built("two ports")
    kt = K * np.random.default_rng(2).uniform(-1, 1, (300, 2))
    together = model.solve(K, kt).scattering
    some = np.stack([model.solve(K, at[None]).scattering[0] for at in kt[::60]])
    np.testing.assert_allclose(some, together[::60], atol=1e-9)
    np.testing.assert_allclose(model.solve(K, kt + [4 * np.pi, -8 * np.pi]).scattering, together, atol=1e-9)
    np.testing.assert_allclose(model.solve(K, -kt).scattering, together.swapaxes(1, 2), atol=1e-6)


def test_one_snapshot_model_is_exact_at_its_snapshot():
    """CLOSED: Galerkin's method returns what lies in its space."""
    solver, _, _ = built("strip")
    builder = ReducedBuilder(solver, WIDE)
    snapshot = take_snapshot(solver, FREQUENCY, 0.4, 0.2)
    builder.extend(snapshot)
    impedance = builder.model(1e-7).solve(K, K * np.array([[0.4, 0.2]])).impedance[0]
    np.testing.assert_allclose(impedance, np.linalg.inv(snapshot.admittance[0]), rtol=1e-6)


def test_stored_model_answers_alike_without_filling(monkeypatch):
    for name in ("two ports", "vertical wire", "two lossy layers"):
        solver, model, _ = built(name)
        monkeypatch.setattr(operator, "build_near", None)
        read = ReducedModel.from_arrays(solver.cell, model.arrays())
        scan = ScanPoints.from_cosines([0.1, 0.6], [0.3, -0.4])
        a, b = (reduced_sweep(m, [0.97 * FREQUENCY, FREQUENCY], scan) for m in (model, read))
        for key in ("impedance", "scattering", "waves", "loss"):
            np.testing.assert_allclose(getattr(a, key), getattr(b, key), rtol=1e-9, atol=1e-12)
    with pytest.raises(ValueError, match="the model was made for"):
        ReducedModel.from_arrays(CELLS["free space"](), model.arrays())


def test_frequencies_outside_the_band_are_refused():
    _, model, _ = built("strip")
    with pytest.raises(ValueError, match="outside the reduced model's band"):
        reduced_sweep(model, 1.2 * FREQUENCY, ScanPoints.from_cosines(0.0, 0.0))


def test_window_is_one_and_zero_outside_its_edge():
    window = operator_view.Window(2.0, 5.0)
    k = np.array([0.0, 1.9, 2.0, 3.5, 5.0, 9.0])
    np.testing.assert_allclose(window(k**2), [1, 1, 1, 0.5, 0, 0], atol=1e-15)
