"""What must not change: the splitting parameter, the lattice basis, the cell's origin, the supercell; reciprocity.

No numbers from outside are needed here; these hold for any correct solver (design.md, accuracy).
"""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from cells import (
    FREQUENCY,
    PEC,
    SQUARE,
    K,
    X,
    Y,
    make,
    point,
    probe_fed_plate,
    sheet_gap,
    strip_dipole,
    wire_gap,
)
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Plate, Strip, Wire
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesh import Mesh
from scanward.geometry.port import Port
from scanward.solver.operator import PeriodicOperator
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import solve_sweep

SCAN = ScanPoints.from_cosines([0.0, 0.31, -0.2, 0.7], [0.0, 0.27, 0.55, 1.2])
SKEW = Lattice(np.array([0.6, 0.0]), np.array([0.3, 0.5]))


def tilted_cell(ground: bool) -> UnitCell:
    """Tilted plate, wire bent in space, and a vertical strip: nothing is aligned with anything."""
    plate = Plate(
        name="plate", centre=point(0.05, 0.02, 0.3), size=np.array([0.2, 0.1]), axis=point(0.8, 0.2, 0.4),
        normal=point(-0.4, 0.0, 0.8),
    )  # fmt: skip
    wire = Wire(
        name="wire",
        points=np.array([[-0.2, -0.15, 0.1], [-0.05, -0.12, 0.2], [0.12, -0.16, 0.12]]),
        radius=0.004,
    )
    centre = np.mean([[-0.2, -0.15, 0.1], [-0.05, -0.12, 0.2]], axis=0)
    along = np.array([0.15, 0.03, 0.1]) / np.linalg.norm([0.15, 0.03, 0.1])
    return make(
        [plate, wire], [wire_gap(centre, 0.02, 0.004, along)], ground=ground, size=0.045, lattice=SKEW
    )


def connected_strip(offset: float = 0.0, lattice: Lattice = SQUARE) -> UnitCell:
    """Strip that spans the cell along x and joins its own copies."""
    start, end = point(offset - 0.25, 0.05, 0.2), point(offset + 0.25, 0.05, 0.2)
    strip = Strip(name="arm", start=start, end=end, width=0.03)
    return make([strip], [sheet_gap((offset, 0.05, 0.2), 0.02, 0.03)], lattice=lattice, ground=True)


CELLS = {
    "strip over ground": lambda: strip_dipole(),
    "strip in free space": lambda: strip_dipole(height=0.0),
    "tilted in free space": lambda: tilted_cell(False),
    "tilted over ground": lambda: tilted_cell(True),
    "probe and plate": lambda: probe_fed_plate(0.06),
    "connected": lambda: connected_strip(),
}


@pytest.mark.parametrize("name", CELLS)
def test_splitting_parameter_does_not_matter(name):
    cell = CELLS[name]()
    kt = K * np.array([0.31, 0.27])
    reference = PeriodicOperator(cell, K, 1e-9).matrix(K, kt)
    for splitting in (6.0, 13.0):
        other = PeriodicOperator(cell, K, 1e-9, splitting=splitting).matrix(K, kt)
        assert np.abs(other - reference).max() < 1e-7 * np.abs(reference).max()


@pytest.mark.parametrize("name", CELLS)
def test_default_tolerance_is_met(name):
    """The truncation that 1e-6 sets, against 1e-10."""
    cell, kt = CELLS[name](), K * np.array([-0.2, 0.55])
    coarse, fine = (PeriodicOperator(cell, K, tolerance).matrix(K, kt) for tolerance in (1e-6, 1e-10))
    assert np.abs(coarse - fine).max() < 2e-6 * np.abs(fine).max()


@pytest.mark.parametrize("name", CELLS)
def test_opposite_scan_transposes_the_matrix(name):
    operator = PeriodicOperator(CELLS[name](), K)
    kt = K * np.array([0.4, -0.3])
    there, back = operator.matrix(K, kt), operator.matrix(K, -kt)
    assert np.abs(there - back.T).max() < 1e-12 * np.abs(there).max()


@pytest.mark.parametrize("name", CELLS)
def test_port_power_equals_floquet_power(name):
    """Two routes: port currents against radiated waves. What is left is the cloud's three-point rule, which makes the
    charge and the current of one function disagree by about (k h / 4)^4 (elements here: up to 0.06 wavelength)."""
    sweep = solve_sweep(CELLS[name](), [0.8 * FREQUENCY, FREQUENCY], SCAN)
    accepted = 1 - np.abs(sweep.scattering[..., 0, 0]) ** 2
    radiated = (np.abs(sweep.waves[..., 0]) ** 2).sum(axis=2)
    assert np.abs(accepted - radiated).max() < 1e-6


def test_lattice_basis_does_not_matter():
    cell = CELLS["tilted over ground"]()
    a, b = cell.lattice.a, cell.lattice.b
    other = dataclasses.replace(cell, lattice=Lattice(2 * a + b, a + b))
    reference, result = (solve_sweep(c, [FREQUENCY], SCAN, tolerance=1e-9) for c in (cell, other))
    np.testing.assert_allclose(result.impedance, reference.impedance, rtol=1e-8)


@pytest.mark.parametrize("offset", [0.11, 0.25])
def test_origin_of_the_cell_does_not_matter(offset):
    """The same strip cut by the cell border at another place: other edges cross, the same current flows."""
    reference = solve_sweep(connected_strip(), [FREQUENCY], SCAN, tolerance=1e-9)
    cell = connected_strip()
    points = cell.mesh.points.copy()
    moved = dataclasses.replace(cell.mesh, points=points + point(offset, -0.07, 0))
    gap = dataclasses.replace(cell.ports[0].gap, centre=cell.ports[0].gap.centre + point(offset, -0.07, 0))
    shifted = dataclasses.replace(cell, mesh=moved, ports=(Port("p", gap),))
    result = solve_sweep(shifted, [FREQUENCY], SCAN, tolerance=1e-9)
    np.testing.assert_allclose(result.impedance, reference.impedance, rtol=1e-8)


def test_where_a_crossing_conductor_is_cut_does_not_matter():
    """Cut the connected strip half a cell further along: the elements that cross the border are others."""
    cell = connected_strip()
    mesh = cell.mesh
    wrapped = mesh.points.copy()
    centres = wrapped[mesh.triangles].mean(axis=1)
    points, triangles = [], []
    for corners, centre in zip(mesh.triangles, centres, strict=True):
        shift = point(0.5, 0, 0) if centre[0] < 0 else point(0, 0, 0)
        triangles.append(np.arange(3) + len(points))
        points += list(wrapped[corners] + shift)
    merged, index = np.unique(np.round(points, 9), axis=0, return_inverse=True)
    recut = dataclasses.replace(mesh, points=merged, triangles=index.reshape(-1)[np.array(triangles)])
    assert len(recut.triangles) == len(mesh.triangles)
    reference, result = (
        solve_sweep(dataclasses.replace(cell, mesh=m), [FREQUENCY], SCAN, tolerance=1e-9)
        for m in (mesh, recut)
    )
    np.testing.assert_allclose(result.impedance, reference.impedance, rtol=1e-7)


def doubled(cell: UnitCell) -> UnitCell:
    """Two cells side by side along a, as one cell with twice the ports."""
    a = np.append(cell.lattice.a, 0.0)
    mesh, n = cell.mesh, len(cell.mesh.points)
    twice = Mesh(
        np.concatenate([mesh.points, mesh.points + a]),
        np.concatenate([mesh.triangles, mesh.triangles + n]), np.tile(mesh.triangle_conductor, 2),
        np.concatenate([mesh.segments, mesh.segments + n]), np.tile(mesh.segment_radius, 2),
        np.tile(mesh.segment_conductor, 2), mesh.names, mesh.materials,
    )  # fmt: skip
    ports = [Port("left", p.gap) for p in cell.ports] + [
        Port("right", dataclasses.replace(p.gap, centre=p.gap.centre + a)) for p in cell.ports
    ]
    return UnitCell(Lattice(2 * cell.lattice.a, cell.lattice.b), twice, tuple(ports), (), cell.ground)


@pytest.mark.parametrize("name", ["strip over ground", "tilted over ground", "connected", "probe and plate"])
def test_supercell_equals_the_unit_cell_port_by_port(name):
    """Ports (1, e^-j kt.a) of the 2 x 1 supercell see the unit cell's impedance."""
    cell = CELLS[name]()
    single = solve_sweep(cell, [FREQUENCY], SCAN, tolerance=1e-8)
    double = solve_sweep(doubled(cell), [FREQUENCY], SCAN, tolerance=1e-8)
    kt = K * np.stack([SCAN.u, SCAN.v], axis=1)
    drive = np.stack([np.ones(len(kt)), np.exp(-1j * kt @ cell.lattice.a)], axis=1)
    seen = np.einsum("sij,sj->si", double.impedance[0], drive) / drive
    np.testing.assert_allclose(seen[:, 0], single.impedance[0, :, 0, 0], rtol=1e-6)
    np.testing.assert_allclose(seen[:, 1], single.impedance[0, :, 0, 0], rtol=1e-6)


def test_two_ports_are_reciprocal_under_opposite_scan():
    """S(kt)^T = S(-kt) for every pair of ports."""
    bars = [
        Strip(name=n, start=point(-0.2, y, 0.2), end=point(0.2, y, 0.2), width=0.02)
        for n, y in (("a", -0.1), ("b", 0.13))
    ]
    gaps = [sheet_gap((x, y, 0.2), 0.02, 0.02, X, Y) for x, y in ((0.03, -0.1), (-0.05, 0.13))]
    cell = make(bars, gaps, ground=True)
    there = solve_sweep(cell, [FREQUENCY], ScanPoints.from_cosines(0.4, 0.3))
    back = solve_sweep(cell, [FREQUENCY], ScanPoints.from_cosines(-0.4, -0.3))
    np.testing.assert_allclose(there.scattering[0, 0], back.scattering[0, 0].T, atol=1e-10)
    assert cell.mesh.materials[0] == PEC
