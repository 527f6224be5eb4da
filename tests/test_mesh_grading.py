"""Graded structured meshes: free edges and gaps alone, symmetric, exact in area, refined as a whole, accurate."""

from __future__ import annotations

import numpy as np
import pytest
from cells import FREQUENCY, make, point, sheet_gap, strip_dipole, wire_dipole
from mesh_samples import (
    MM,
    SQUARE,
    border_points,
    build,
    mirrored_elements_match,
    mm,
    plate,
    polygon,
    sheet_parts,
    strip,
    wire,
    wire_gap,
)
from mesh_samples import sheet_gap as gap_mm
from reference_slab import SheetStack
from reference_spectral import TABLE, Size, solve_strip
from reference_spectral import Strip as ReferenceStrip
from scanward.cases.accuracy import element_size
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Plate
from scanward.geometry.errors import InputError
from scanward.geometry.grading import EDGE_OF_GAP, EDGE_OF_SIZE, Interval
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import solve_sweep


def steps(mesh, axis):
    """Distances (mm) between the different coordinates of all points along an axis."""
    values = np.unique(np.round(mesh.points[:, axis] / MM, 6))
    return np.diff(values)


def test_free_edges_of_a_plate_get_narrow_cells():
    mesh = build(plate("patch", (0, 0, 3), (17, 13)))
    for axis in (0, 1):
        cells = steps(mesh, axis)
        assert cells[0] == pytest.approx(EDGE_OF_SIZE * 2.0) and cells[-1] == pytest.approx(cells[0])
        np.testing.assert_allclose(cells, cells[::-1], atol=1e-5)
        assert len(cells) % 2 == 0 and 1.6 < cells.max() < 2.6
    assert mesh.triangle_areas.sum() == pytest.approx(17 * 13 * MM**2, rel=1e-12)
    assert mirrored_elements_match(mesh, 0) and mirrored_elements_match(mesh, 1)


def test_strip_through_the_cell_is_graded_at_its_sides_alone():
    mesh = build(strip("bar", (-13.5, 1, 9), (13.5, 1, 9), 5), lattice=SQUARE)
    np.testing.assert_allclose(steps(mesh, 0), 27 / 14, atol=1e-5)
    across = steps(mesh, 1)
    assert across[0] == pytest.approx(EDGE_OF_SIZE * 2.0) and across[-1] == pytest.approx(across[0])


def test_sheet_over_the_whole_cell_is_uniform():
    mesh = build(plate("roof", (0, 0, 9), (27, 27)), lattice=SQUARE)
    for axis in (0, 1):
        np.testing.assert_allclose(steps(mesh, axis), 27 / 14, atol=1e-5)


def test_edge_on_the_ground_is_not_free():
    fin = plate("fin", (0, 0, 6), (8, 12), axis=mm(0, 1, 0), normal=mm(1, 0, 0))
    over, free = (steps(build(fin, ground=g), 2) for g in (True, False))
    assert over[0] > 1.2 and over[-1] == pytest.approx(EDGE_OF_SIZE * 2.0)
    assert free[0] == pytest.approx(EDGE_OF_SIZE * 2.0)


def test_feed_strip_joins_the_plate_which_stays_graded_there():
    """The strip's end is no free edge, the plate's edge (shared along a tenth) is; lines match."""
    mesh = build(plate("patch", (0, 0, 3), (14, 14)), strip("feed", (7, 1, 3), (12.5, 1, 3), 1.4))
    assert sheet_parts(mesh) == 1
    assert mesh.triangle_areas.sum() == pytest.approx((14 * 14 + 5.5 * 1.4) * MM**2, rel=1e-12)
    along = np.unique(np.round(mesh.points[:, 0] / MM, 6))
    edge = int(np.flatnonzero(np.abs(along - 7) < 1e-6)[0])
    assert along[edge] - along[edge - 1] == pytest.approx(EDGE_OF_SIZE * 2.0)
    assert along[edge + 1] - along[edge] > 1.0
    assert along[-1] - along[-2] < 0.11


def test_two_plates_side_by_side_are_not_graded_at_their_common_edge():
    mesh = build(plate("a", (-5, 0, 3), (10, 8)), plate("b", (5, 0, 3), (10, 8), element_size=1.5 * MM))
    cells = steps(mesh, 0)
    middle = len(border_points(mesh, 1, -4.0)[border_points(mesh, 1, -4.0)[:, 0] < -1e-9])
    assert sheet_parts(mesh) == 1
    assert min(cells[middle - 1], cells[middle]) > 1.2
    assert max(cells[0], cells[-1]) < 0.11


def test_two_strips_with_opposite_frames_share_their_lines():
    """The second strip runs the other way, so that its grid runs against the first one's."""
    mesh = build(
        strip("a", (-8, 0, 3), (0, 0, 3), 4),
        strip("b", (8, 0, 3), (0, 0, 3), 4),
        plate("c", (0, 4, 3), (2, 4)),
    )
    assert sheet_parts(mesh) == 1
    assert mesh.triangle_areas.sum() == pytest.approx((64 + 8) * MM**2, rel=1e-12)


def test_a_seam_with_itself_reversed_gets_symmetric_lines():
    """Merged from both ends: what one side asks at its low end the other asks at its high end."""
    one = Interval(10.0, 2.0, low=0.1)
    both = one.merged(one.mirrored()).lines()
    np.testing.assert_allclose(both, 10 - both[::-1], atol=1e-12)
    assert one.lines()[1] == pytest.approx(0.1) and 10 - one.lines()[-2] > 1.0


def test_gap_has_narrow_cells_on_both_sides():
    mesh = build(strip("arm", (-12, 0, 12), (12, 0, 12), 2.5), gaps=[gap_mm((3, 0, 12))])
    x = np.unique(np.round(mesh.points[:, 0] / MM, 6))
    middle = int(np.flatnonzero(np.abs(x - 3) < 1e-6)[0])
    assert np.diff(x)[middle - 1 : middle + 1] == pytest.approx(EDGE_OF_GAP * 0.4)


def test_strip_with_a_gap_in_its_middle_is_its_own_mirror_image():
    mesh = build(strip("arm", (-12, 0, 12), (12, 0, 12), 2.5), gaps=[gap_mm((0, 0, 12))])
    assert mirrored_elements_match(mesh, 0) and mirrored_elements_match(mesh, 1)


def test_probe_on_the_edge_of_a_graded_plate():
    mesh = build(plate("patch", (0, 0, 3), (10, 10)), wire("probe", (5, 1.7, 0), (5, 1.7, 3)))
    assert len(np.intersect1d(mesh.triangles, mesh.segments)) == 1


def test_plate_on_a_polygon_keeps_even_lines_that_match_it():
    mesh = build(
        plate("p", (0, 0, 3), (8, 6)), polygon("q", (4, -3, 3), (10, -3, 3), (10, 3, 3), (4, 3, 3)), size=1.5
    )
    assert sheet_parts(mesh) == 1


def test_grading_can_be_switched_off():
    mesh = build(plate("patch", (0, 0, 3), (16, 12)), grading=False)
    assert steps(mesh, 0) == pytest.approx(np.full(8, 2.0))


def test_refinement_that_is_none_is_refused():
    with pytest.raises(InputError, match="refinement = 0"):
        build(plate("patch", (0, 0, 3), (16, 12)), refinement=0)


@pytest.mark.parametrize("factor", [2.0, 1.5, 1 / 1.5, 0.5])
def test_refinement_changes_every_cell(factor):
    parts = [plate("patch", (0, 0, 3), (16, 12)), strip("arm", (-12, 0, 12), (12, 0, 12), 0.6)]

    def cell(refinement):
        mesh = build(*parts, gaps=[gap_mm((0, 0, 12), span=0.6)], refinement=refinement)
        return UnitCell(SQUARE, mesh, (), (), True)

    base, other = cell(1.0), cell(factor)
    assert element_size(base) / element_size(other) == pytest.approx(factor, rel=0.3)
    small, middle, large = (
        np.quantile(np.sqrt(base.mesh.triangle_areas), q) / np.quantile(np.sqrt(other.mesh.triangle_areas), q)
        for q in (0.0, 0.5, 0.98)
    )
    assert [middle, large] == pytest.approx([factor, factor], rel=0.25)
    if factor > 1:
        assert small == pytest.approx(factor, rel=0.25)
    else:  # a coarse cell at an edge takes in part of the next, longer one
        assert small < factor
    assert other.mesh.triangle_areas.sum() == pytest.approx(base.mesh.triangle_areas.sum(), rel=1e-12)


def test_wires_are_graded_at_open_ends_and_gaps_alone():
    """From the ground up: even; at the gap and the open top: two radii, the shortest segment allowed."""
    mesh = build(
        wire("mast", (0, 0, 0), (0, 0, 12)), wire("rod", (0, 0, 12), (9, 0, 12)), gaps=[wire_gap((0, 0, 5))]
    )
    z = np.sort(np.unique(np.round(mesh.points[:, 2] / MM, 6)))
    near = int(np.flatnonzero(z == 5)[0])
    assert z[1] > 1.2 and z[-1] - z[-2] > 1.2
    assert np.diff(z)[near - 1 : near + 1] == pytest.approx(0.4)
    x = np.sort(mesh.points[mesh.points[:, 2] > 11.999 * MM, 0]) / MM
    assert x[1] - x[0] > 1.2 and x[-1] - x[-2] == pytest.approx(0.4)
    even = build(wire("rod", (0, 0, 12), (9, 0, 12)), grading=False)
    assert even.segment_lengths == pytest.approx(np.full(5, 1.8 * MM))


def test_wire_through_the_cell_is_even():
    mesh = build(wire("bar", (-13.5, 0, 9), (13.5, 0, 9)), lattice=SQUARE)
    np.testing.assert_allclose(mesh.segment_lengths, 27 / 14 * MM)


def impedance(cell, theta, phi):
    scan = ScanPoints.from_angles(np.radians(theta), np.radians(phi))
    return solve_sweep(cell, [FREQUENCY], scan).impedance[0, :, 0, 0]


@pytest.mark.slow
@pytest.mark.parametrize("medium", ["ground", "free"])
def test_narrow_strip_at_the_default_size_is_accurate(medium):
    """SECOND METHOD (reference_spectral, converged): strip .47 by .01, elements of lambda/20; 1.5 % of |Z|."""
    rows = [row for row in TABLE if row.medium == medium]
    cell = strip_dipole(0.47, 0.01, 0.25 if medium == "ground" else 0.0, size=0.05)
    z = impedance(cell, [row.theta for row in rows], [row.phi for row in rows])
    assert np.abs(z / np.array([row.converged for row in rows]) - 1).max() < 0.015


@pytest.mark.slow
def test_plate_at_the_default_size_is_accurate():
    """SECOND METHOD, computed here: plate .3 by .3, .1 over ground, line gap .03; 2 % of |Z|, 9 to 17 % if uniform."""
    plate_cell = [Plate(name="p", centre=point(0, 0, 0.1), size=np.array([0.3, 0.3]))]
    gap = sheet_gap((0, 0, 0.1), 0.03, 0.3)
    z = impedance(make(plate_cell, [gap], ground=True, size=0.05), [0, 60, 40], [0, 90, 45])
    stack = SheetStack(((1.0, 0.1),), ground=True)
    size = Size(along=70, across=5, transverse=4, p=160, q=200)
    exact = [
        solve_strip(
            ReferenceStrip(0.3, 0.3, 0.03), 0.5 * np.eye(2), 2 * np.pi * np.array(direction), stack, size
        )
        for direction in (
            (0.0, 0.0),
            (0.0, np.sin(np.radians(60))),
            np.sin(np.radians(40)) * np.sqrt([0.5, 0.5]),
        )
    ]
    assert np.abs(z / np.array(exact) - 1).max() < 0.02


def test_wire_at_the_default_size_is_accurate():
    """SECOND METHOD (checks.md section 3): wire .47, radius .0025 over ground, elements of lambda/20; 3 % of |Z|
    (even segments of that size: 7 to 9 %, and 1.5 % at the thin-wire limit)."""
    z = impedance(wire_dipole(size=0.05), [0, 40, 40, 40], [0, 0, 90, 45])
    given = [147.08 - 38.35j, 86.10 - 12.15j, 208.83 + 40.86j, 136.65 + 7.56j]
    assert np.abs(z / np.array(given) - 1).max() < 0.03
