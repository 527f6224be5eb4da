"""Structured meshes: exact areas and lengths, connections, symmetry, matched borders, and what is refused."""

import numpy as np
import pytest
from mesh_samples import (
    MM,
    SKEW,
    SQUARE,
    VERTICAL,
    border_points,
    build,
    edge_counts,
    has_point,
    mirrored_elements_match,
    mm,
    plate,
    polygon,
    sheet_gap,
    sheet_parts,
    strip,
    wire,
    wire_gap,
)
from scanward.geometry.conductor import Disc, Material
from scanward.geometry.errors import InputError
from scanward.geometry.structured import disc_mesh, quadrilateral_mesh, rectangle_mesh, triangle_mesh


def signed_areas(points, triangles):
    a, b, c = np.moveaxis(points[triangles], 1, 0)
    return 0.5 * ((b - a)[:, 0] * (c - a)[:, 1] - (b - a)[:, 1] * (c - a)[:, 0])


def disc(name, centre, radius, inner=0.0, **more):
    return Disc(name=name, centre=mm(*centre), radius=radius * MM, inner_radius=inner * MM, **more)


SHAPES = {
    "rectangle": (rectangle_mesh(np.linspace(0, 3, 6), np.linspace(0, 2, 5)), 6.0, 1),
    "triangle": (triangle_mesh(np.array([[0, 0], [1.0, 0], [0, 1]]), 0.13), 0.5, 1),
    "trapezoid": (quadrilateral_mesh(np.array([[0, 0], [1, 0], [0.8, 0.5], [0.2, 0.5]]), 0.1), 0.4, 1),
    "disc": (disc_mesh(1.0, 0.0, 0.2), np.pi, 1),
    "coarse disc": (disc_mesh(1.0, 0.0, 3.0), np.pi, 1),
    "ring": (disc_mesh(1.0, 0.3, 0.2), np.pi * 0.91, 0),
    "thin ring": (disc_mesh(1.0, 0.97, 0.3), np.pi * (1 - 0.97**2), 0),
}


@pytest.mark.parametrize("name", SHAPES)
def test_canonical_shapes_have_exact_area_one_orientation_and_no_holes(name):
    (points, triangles), area, euler = SHAPES[name]
    areas = signed_areas(points, triangles)
    assert areas.min() > 0
    assert areas.sum() == pytest.approx(area, rel=1e-12)
    edges = np.unique(np.sort(triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1), axis=0)
    assert len(points) - len(edges) + len(triangles) == euler


def test_disc_points_are_well_shaped():
    points, triangles = disc_mesh(1.0, 0.0, 0.1)
    p = points[triangles]
    sides = np.linalg.norm(np.roll(p, -1, axis=1) - p, axis=2)
    assert sides.max() < 0.16
    assert (sides.max(1) / sides.min(1)).max() < 2.2


# ---- sheets ----


def test_strip_area_and_gap_on_a_line_of_nodes():
    mesh = build(strip("arm", (-12, 0, 12), (12, 0, 12), 2.5), gaps=[sheet_gap((3, 0, 12))])
    assert mesh.triangle_areas.sum() == pytest.approx(60 * MM**2, rel=1e-12)
    line = border_points(mesh, 0, 3.0)
    assert len(line) == 5
    np.testing.assert_allclose([line[0, 1], line[-1, 1]], [-1.25 * MM, 1.25 * MM])


def test_narrow_strip_is_one_cell_across_or_three_graded_ones():
    mesh = build(strip("arm", (-12, 0, 12), (12, 0, 12), 0.5), grading=False)
    assert len(mesh.triangles) == 24
    assert sheet_parts(mesh) == 1
    mesh = build(strip("arm", (-12, 0, 12), (12, 0, 12), 0.5))
    assert len(border_points(mesh, 0, -12)) == 4
    assert sheet_parts(mesh) == 1


def test_plate_is_its_own_mirror_image():
    mesh = build(plate("patch", (0, 0, 3), (17, 13)))
    assert mirrored_elements_match(mesh, 0) and mirrored_elements_match(mesh, 1)


def test_disc_is_its_own_mirror_image_and_exchanges_x_and_y():
    mesh = build(disc("patch", (0, 0, 3), 9))
    assert mirrored_elements_match(mesh, 0) and mirrored_elements_match(mesh, 1)
    swapped = np.round(mesh.points[:, [1, 0, 2]] / MM, 6) + 0.0
    assert set(map(tuple, swapped.tolist())) == set(
        map(tuple, (np.round(mesh.points / MM, 6) + 0.0).tolist())
    )


def test_element_size_of_one_conductor_and_materials_are_carried_through():
    copper = Material(conductivity=5.8e7)
    mesh = build(
        plate("fine", (0, 0, 3), (8, 8), element_size=0.9 * MM, material=copper),
        wire("post", (9, 0, 0), (9, 0, 8)),
    )
    assert mesh.names == ("fine", "post")
    assert mesh.materials[0] is copper and mesh.materials[1] == Material()
    assert len(mesh.triangles) == 2 * 12 * 12
    assert set(mesh.triangle_conductor) == {0} and set(mesh.segment_conductor) == {1}
    np.testing.assert_allclose(mesh.segment_radius, 0.2 * MM)


def test_strip_ending_on_a_plate_edge_shares_its_points():
    mesh = build(plate("patch", (0, 0, 3), (10, 10)), strip("feed", (5, 1, 3), (12, 1, 3), 1.3))
    assert sheet_parts(mesh) == 1
    assert mesh.triangle_areas.sum() == pytest.approx((100 + 7 * 1.3) * MM**2, rel=1e-12)
    assert has_point(mesh, 5, 1.65, 3) and has_point(mesh, 5, 0.35, 3)


def test_fin_standing_in_a_plate_makes_edges_of_three_triangles():
    fin = plate("fin", (1, 0, 6), (6, 12), axis=np.array([0, 1.0, 0]), normal=np.array([1.0, 0, 0]))
    mesh = build(plate("roof", (0, 0, 12), (10, 10)), fin)
    assert sheet_parts(mesh) == 1
    assert edge_counts(mesh).max() == 3
    assert mesh.points[:, 2].min() == pytest.approx(0, abs=1e-12)


@pytest.mark.parametrize("lattice", [SKEW, SQUARE], ids=["skew", "square"])
def test_plate_over_the_whole_cell_matches_its_copies(lattice):
    height = lattice.b[1] / MM
    mesh = build(plate("roof", (0, 0, 9), (27, height)), lattice=lattice)
    bottom, top = (border_points(mesh, 1, s * height / 2)[:, 0] for s in (-1, 1))
    moved = (bottom + lattice.b[0] + 13.5 * MM) % (27 * MM)
    on_top = (top + 13.5 * MM) % (27 * MM)
    gap = np.abs(moved[:, None] - on_top)
    assert np.minimum(gap, 27 * MM - gap).min(1).max() < 1e-9
    left, right = (border_points(mesh, 0, s * 13.5) for s in (-1, 1))
    np.testing.assert_allclose(left[:, 1:], right[:, 1:], atol=1e-12)


def test_parallelogram_over_the_skew_cell_matches_its_copies():
    mesh = build(polygon("roof", (0, 0, 9), (27, 0, 9), (40.5, 23.4, 9), (13.5, 23.4, 9)))
    assert mesh.triangle_areas.sum() == pytest.approx(SKEW.area, rel=1e-12)
    bottom, top = border_points(mesh, 1, 0), border_points(mesh, 1, 23.4)
    np.testing.assert_allclose(np.sort(bottom[:, 0]) + SKEW.b[0], np.sort(top[:, 0]), atol=1e-12)


def test_strips_joined_across_the_cell_border_get_the_same_lines():
    parts = [plate("p", (-8, 0, 9), (11, 9)), strip("s", (-2.5, 1, 9), (13.5, 1, 9), 1.5)]
    mesh = build(*parts)
    assert has_point(mesh, -13.5, 1.75, 9) and has_point(mesh, -13.5, 0.25, 9)
    assert sheet_parts(mesh) == 1


def test_irrational_shear_is_refused_with_a_remedy():
    from scanward.geometry.lattice import Lattice

    shear = Lattice(mm(27, 0), mm(27 / np.pi, 20))
    with pytest.raises(InputError, match=r"no structured grid.*unstructured"):
        build(plate("roof", (0, 0, 9), (27, 20)), lattice=shear)


# ---- wires ----


def test_wire_length_and_segments_per_leg():
    mesh = build(wire("hook", (0, 0, 0), (0, 0, 9), (3, 4, 9), (3, 4, 10)))
    assert mesh.segment_lengths.sum() == pytest.approx(15 * MM)
    assert len(mesh.segments) == 5 + 3 + 2
    assert has_point(mesh, 0, 0, 9) and has_point(mesh, 3, 4, 9.6)


def test_gap_centre_becomes_a_node_and_segments_nearly_keep_their_size():
    mesh = build(wire("mast", (0, 0, 0), (0, 0, 12)), gaps=[wire_gap((0, 0, 4.3))])
    assert has_point(mesh, 0, 0, 4.3)
    assert mesh.segment_lengths.max() <= 1.25 * 2 * MM


def test_gap_close_to_an_end_keeps_segments_above_two_radii():
    mesh = build(wire("mast", (0, 0, 0), (0, 0, 12)), gaps=[wire_gap((0, 0, 0.25), width=0.5)])
    assert (mesh.segment_lengths / mesh.segment_radius).min() >= 2


def test_crossing_and_touching_wires_meet_in_nodes():
    mesh = build(
        wire("mast", (0, 0, 0), (0, 0, 12)),
        wire("bar", (-4, 0, 6.1), (4, 0, 6.1)),
        wire("arm", (0, 0, 9), (0, 5, 9)),
    )
    for point in ((0, 0, 6.1), (0, 0, 9)):
        n = np.flatnonzero(np.linalg.norm(mesh.points - mm(*point), axis=1) < 1e-9)
        assert len(n) == 1
        assert (mesh.segments == n[0]).sum() == (4 if point[2] == 6.1 else 3)


def test_wire_touching_the_copy_of_another_gets_a_node_there():
    mesh = build(wire("bar", (-5, 0, 9), (5, 0, 9)), wire("leg", (28.3, 0, 0), (28.3, 0, 9)))
    assert has_point(mesh, 1.3, 0, 9)


def test_coarser_segments_where_the_radius_demands_it():
    mesh = build(wire("rod", (0, 0, 5), (6, 0, 5), radius=1.0), size=0.5)
    assert len(mesh.segments) == 3


@pytest.mark.parametrize(
    "spot", [(3.1, 1.7), (5, 1.7), (5, 5), (0, 0)], ids=["inside", "edge", "corner", "middle"]
)
def test_probe_ends_on_a_plate_vertex(spot):
    mesh = build(plate("patch", (0, 0, 3), (10, 10)), wire("probe", (*spot, 0), (*spot, 3)))
    end = np.flatnonzero(np.linalg.norm(mesh.points - mm(*spot, 3), axis=1) < 1e-9)
    assert len(end) == 1 and end[0] in mesh.triangles and end[0] in mesh.segments
    assert mesh.triangle_areas.sum() == pytest.approx(100 * MM**2)


def test_wire_through_a_plate_is_connected_to_it():
    mesh = build(plate("roof", (0, 0, 6), (10, 10)), wire("mast", (1, 1, 0), (1, 1, 14)))
    crossing = np.flatnonzero(np.linalg.norm(mesh.points - mm(1, 1, 6), axis=1) < 1e-9)
    assert len(crossing) == 1 and crossing[0] in mesh.triangles and (mesh.segments == crossing[0]).sum() == 2


def test_probe_on_the_copy_of_a_plate_cuts_the_plate_there():
    mesh = build(plate("patch", (0, 0, 3), (10, 10)), wire("probe", (28.7, 2.2, 0), (28.7, 2.2, 3)))
    assert has_point(mesh, 1.7, 2.2, 3) and has_point(mesh, 28.7, 2.2, 3)


def test_probe_in_the_middle_of_a_disc():
    mesh = build(disc("patch", (0, 0, 3), 9), wire("probe", (0, 0, 0), (0, 0, 3)))
    assert len(np.intersect1d(mesh.triangles, mesh.segments)) == 1


# ---- refusals ----

NAN = float("nan")
REFUSED = {
    "method": (lambda: build(plate("p", (0, 0, 3), (5, 5)), method="unstructred"), r"unknown.*Did you mean"),
    "no conductor": (lambda: build(), "no conductor"),
    "size": (lambda: build(plate("p", (0, 0, 3), (5, 5)), size=0), r"element_size = 0"),
    "name twice": (
        lambda: build(wire("a", (0, 0, 0), (0, 0, 9)), wire("a", (5, 0, 0), (5, 0, 9))),
        "used twice",
    ),
    "huge": (
        lambda: build(plate("p", (0, 0, 3), (20, 20)), size=0.05),
        r"unknowns: a matrix of .* GB.*20000",
    ),
    "zero width": (lambda: build(strip("s", (0, 0, 3), (5, 0, 3), 0)), r"width = 0.0 m is not a length"),
    "zero length": (lambda: build(strip("s", (5, 0, 3), (5, 0, 3), 1)), "start and end coincide"),
    "upright strip": (lambda: build(strip("s", (0, 0, 3), (0, 0, 9), 1)), "normal.*not perpendicular"),
    "nan": (lambda: build(plate("p", (0, NAN, 3), (5, 5))), "not three finite numbers"),
    "ring": (lambda: build(disc("d", (0, 0, 3), 5, 5)), "inner_radius = .* does not fit"),
    "bow": (lambda: build(polygon("q", (0, 0, 3), (5, 5, 3), (5, 0, 3), (1, 6, 3))), "side 1 and side 3"),
    "warped": (lambda: build(polygon("q", (0, 0, 3), (5, 0, 3), (5, 5, 4), (0, 5, 3))), "not in one plane"),
    "no area": (lambda: build(polygon("q", (0, 0, 3), (5, 0, 3), (9, 0, 3))), "enclose no area"),
    "on ground": (lambda: build(plate("p", (0, 0, 0), (5, 5))), "lies on the ground"),
    "below": (lambda: build(plate("p", (0, 0, 2), (5, 5), **VERTICAL)), "below the ground"),
    "wire below": (lambda: build(wire("w", (0, 0, -1), (0, 0, 9))), r"z = -0.001 m, below the ground"),
    "wire on ground": (lambda: build(wire("w", (0, 0, 0), (9, 0, 0))), "lies on the ground"),
    "wire low": (lambda: build(wire("w", (0, 0, 0.1), (9, 0, 3))), "less than a radius"),
    "short leg": (lambda: build(wire("w", (0, 0, 3), (0.7, 0, 3))), r"3.5 radii.*at least 4 radii"),
    "close nodes": (
        lambda: build(wire("w", (0, 0, 0), (0, 0, 9)), wire("b", (0, 0, 8.7), (5, 0, 8.7))),
        "two connections on leg 1",
    ),
    "wires close": (
        lambda: build(wire("w", (0, 0, 3), (9, 0, 3)), wire("v", (0, 0.3, 3), (9, 0.3, 3))),
        r"0.0003 m apart.*at least 0.0004 m",
    ),
    "wires on each other": (
        lambda: build(wire("w", (0, 0, 3), (9, 0, 3)), wire("v", (4, 0, 3), (13, 0, 3))),
        "lying on each other",
    ),
    "own copy": (lambda: build(wire("w", (-14, 0, 3), (14, 0, 3))), "of the next cell.*lying on each other"),
    "fold": (lambda: build(wire("w", (0, 0, 3), (9, 0, 3), (0, 1, 3))), "meet at 6.34 degrees"),
    "wire near plate": (
        lambda: build(plate("p", (0, 0, 6), (9, 9)), wire("w", (-7, 0, 6.1), (7, 0, 6.1))),
        r"runs 0.0001 m from sheet 'p'",
    ),
    "wire in plate": (
        lambda: build(plate("p", (0, 0, 6), (9, 9)), wire("w", (-7, 0, 6), (7, 0, 6))),
        "from sheet 'p'",
    ),
    "gap nowhere": (
        lambda: build(wire("w", (0, 0, 0), (0, 0, 9)), gaps=[wire_gap((3, 0, 4))]),
        "0.003 m off leg 1",
    ),
    "gap long": (
        lambda: build(wire("w", (0, 0, 0), (0, 0, 9)), gaps=[wire_gap((0, 0, 0))]),
        "reaches beyond leg 1",
    ),
    "gap askew": (
        lambda: build(wire("w", (0, 0, 0), (0, 0, 9)), gaps=[wire_gap((0, 0, 4), (0, 1, 0))]),
        "is not along leg 1",
    ),
    "gap no wire": (lambda: build(plate("p", (0, 0, 3), (5, 5)), gaps=[wire_gap((0, 0, 3))]), "no wire"),
    "gap off sheet": (
        lambda: build(strip("s", (0, 0, 3), (9, 0, 3), 1), gaps=[sheet_gap((0, 0, 3))]),
        "off the nearest sheet",
    ),
    "probe in disc": (
        lambda: build(disc("d", (0, 0, 3), 9), wire("w", (1.1, 0.3, 0), (1.1, 0.3, 3))),
        r"meets the disc.*unstructured",
    ),
    "overlap": (
        lambda: build(strip("x", (-9, 0, 9), (9, 0, 9), 1.5), strip("y", (0, -9, 9), (0, 9, 9), 1.5)),
        r"overlaps or crosses 'y'.*unstructured",
    ),
    "T contact": (
        lambda: build(polygon("q", (0, 0, 9), (9, 0, 9), (4, 7, 9)), strip("s", (3, 0, 9), (3, -5, 9), 1)),
        r"unmatched boundary.*unstructured",
    ),
    "wider than cell": (lambda: build(plate("p", (0, 0, 9), (28, 9))), "of the neighbour cell"),
    "hair crack": (lambda: build(plate("p", (0, 0, 9), (26.99995, 9))), r"all but touches.*gap 5e-08 m"),
    "point contact": (
        lambda: build(
            polygon("l", (0, 0, 9), (-9, 4, 9), (-9, -4, 9)), polygon("r", (0, 0, 9), (9, -4, 9), (9, 4, 9))
        ),
        "single point",
    ),
}


@pytest.mark.parametrize("case", REFUSED)
def test_refused(case):
    action, message = REFUSED[case]
    with pytest.raises(InputError, match=message):
        action()


def test_lines_close_together_make_thin_cells_but_no_false_alarm():
    mesh = build(
        plate("p", (0, 0, 4), (6.90386, 9.30387)),
        strip("s", (3.45193, 4.07449, 4), (7.16522, 4.07449, 4), 0.91394, element_size=0.7 * MM),
        wire("probe", (-3.03064, 4.07449, 0), (-3.03064, 4.07449, 4)),
        plate("fin", (-3.0301, 0, 2), (5, 4), axis=np.array([0, 1.0, 0]), normal=np.array([1.0, 0, 0])),
    )
    assert sheet_parts(mesh) == 1
    assert mesh.triangle_areas.sum() == pytest.approx((6.90386 * 9.30387 + 3.71329 * 0.91394 + 20) * MM**2)


@pytest.mark.parametrize("order", [1, -1])
def test_finer_strip_on_a_plate_edge_refines_the_plate_there(order):
    parts = [plate("p", (0, 0, 3), (10, 10)), strip("s", (5, 1, 3), (12, 1, 3), 1.5, element_size=0.4 * MM)]
    mesh = build(*parts[::order])
    assert sheet_parts(mesh) == 1
    on_edge = border_points(mesh, 0, 5.0)[:, 1]
    across = on_edge[(on_edge > 0.24 * MM) & (on_edge < 1.76 * MM)]
    np.testing.assert_allclose(across, border_points(mesh, 0, 12.0)[:, 1], atol=1e-12)
    assert np.diff(across).max() < 0.4 * MM
