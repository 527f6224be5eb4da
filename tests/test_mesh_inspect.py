"""Checks of a finished mesh, on small meshes spoilt on purpose, and of the geometric tests behind them."""

from dataclasses import replace

import numpy as np
import pytest
from mesh_samples import MM, SQUARE, build, mm, plate, wire
from scanward.geometry.conductor import Material
from scanward.geometry.contact import overlap_depth, point_triangle_distance, segment_distance
from scanward.geometry.contact import segment_triangle_distance as wire_distance
from scanward.geometry.errors import InputError
from scanward.geometry.inspect import describe_mesh, inspect_mesh
from scanward.geometry.mesh import Mesh


def raw(points, triangles=(), segments=(), radius=0.1):
    """A mesh of conductors 'one' and 'two' from lists, in mm; element k belongs to conductor k % 2."""
    t = np.array(triangles, dtype=int).reshape(-1, 3)
    s = np.array(segments, dtype=int).reshape(-1, 2)
    return Mesh(
        mm(*points), t, np.arange(len(t)) % 2, s, np.full(len(s), radius * MM), np.arange(len(s)) % 2,
        ("one", "two"), (Material(), Material()),
    )  # fmt: skip


def refused(mesh, message, ground=False):
    with pytest.raises(InputError, match=message):
        inspect_mesh(mesh, SQUARE, ground)


FLAT = [(0, 0, 5), (4, 0, 5), (4, 4, 5), (0, 4, 5)]


def test_sound_meshes_pass():
    inspect_mesh(raw(FLAT, [(0, 1, 2), (0, 2, 3)]), SQUARE, True)
    inspect_mesh(raw([(0, 0, 0), (0, 0, 2), (0, 0, 4)], (), [(0, 1), (1, 2)]), SQUARE, True)


def test_numbers():
    refused(raw([*FLAT[:3], (0, np.nan, 5)], [(0, 1, 2), (0, 2, 3)]), "NaN")
    refused(raw(FLAT, [(0, 1, 4)]), "uses point 4.*0 to 3")
    refused(raw(FLAT), "neither triangles nor segments")


def test_degenerate_and_double_triangles():
    refused(raw([(0, 0, 5), (4, 0, 5), (2, 1e-4, 5)], [(0, 1, 2)]), "'one': a triangle .* is degenerate")
    refused(raw([(0, 0, 5), (4, 0, 5), (2, 0, 5)], [(0, 1, 2)]), "degenerate")
    refused(raw(FLAT, [(0, 1, 2), (2, 0, 1)]), "2 triangles lie on each other")


def test_segments():
    refused(raw([(0, 0, 1), (0, 0, 1.15)], (), [(0, 1)]), "1.5 times its radius.*two radii")
    refused(raw([(0, 0, 1), (0, 0, 2)], (), [(0, 1), (1, 0)]), "2 wire segments lie on each other")
    refused(raw([(0, 0, 1), (0, 0, 2)], (), [(0, 1)], radius=0), "radius 0")


def test_ground():
    refused(raw([(0, 0, -1), (4, 0, 5), (4, 4, 5)], [(0, 1, 2)]), "below the ground", ground=True)
    refused(raw([(0, 0, 0), (4, 0, 0), (4, 4, 0)], [(0, 1, 2)]), "lies on the ground", ground=True)
    refused(raw([(0, 0, 0.05), (4, 0, 0.05)], (), [(0, 1)]), "lies on the ground", ground=True)


def test_edges_side_by_side_that_do_not_match():
    points = [*FLAT, (2, 0, 5), (2, -3, 5), (6, 0, 5)]
    refused(raw(points, [(0, 1, 2), (0, 2, 3), (4, 5, 6)]), "unmatched boundary.*lies on")


def test_edge_standing_on_the_middle_of_a_triangle():
    points = [*FLAT, (1, 0.5, 5), (3, 1, 5), (2, 1, 9)]
    refused(raw(points, [(0, 1, 2), (0, 2, 3), (4, 5, 6)]), "unmatched boundary")


def test_points_not_merged_are_found():
    points = [*FLAT, FLAT[0], FLAT[2]]
    mesh = raw(points, [(0, 1, 2), (4, 5, 3)])
    refused(mesh, "2 pairs of mesh points coincide")


def test_crossing_and_overlapping_triangles():
    refused(
        raw([*FLAT, (3, 1, 4), (3, 1, 6), (3, 0.5, 5.3)], [(0, 1, 2), (0, 2, 3), (4, 5, 6)]),
        "overlaps or crosses",
    )
    refused(
        raw([*FLAT, (3, 1, 5), (9, 1, 5), (9, 3, 5)], [(0, 1, 2), (0, 2, 3), (4, 5, 6)]),
        "overlaps or crosses",
    )


def test_contacts_across_the_border():
    wide = build(plate("p", (0, 0, 5), (27, 10)), lattice=SQUARE)
    inspect_mesh(wide, SQUARE, False)
    moved = wide.points.copy()
    on_edge = np.flatnonzero((np.abs(moved[:, 0] - 13.5 * MM) < 1e-9) & (np.abs(moved[:, 1]) < 4 * MM))
    moved[on_edge, 1] += 0.3 * MM
    refused(
        replace(wide, points=moved),
        r"unmatched boundary.*neighbour cell at \(0.027, 0\)|neighbour cell at \(-0.027",
    )
    refused(
        replace(wide, points=wide.points * [1.01, 1, 1]),
        "overlaps or crosses 'p' of the neighbour cell",
    )


def test_curved_sheet_passes():
    roof = build(plate("p", (0, 0, 5), (20, 20)), lattice=SQUARE)
    x, y, z = roof.points.T
    dome = np.stack([x, y, z - 20 * (x**2 + y**2) + 9 * x * y], axis=1)
    inspect_mesh(replace(roof, points=dome), SQUARE, True)


def test_wires_across_the_border():
    refused(raw([(0, 0, 5), (26.9, 0, 5)], (), [(0, 1)]), "wires overlap.*of the neighbour cell")


def test_wires_too_close_but_not_bends_and_junctions():
    refused(raw([(0, 0, 5), (4, 0, 5), (0, 0.15, 5), (4, 0.15, 5)], (), [(0, 1), (2, 3)]), "0.00015 m apart")
    hairpin = [(0, 0, 5), (4, 0, 5), (4, 0.15, 5), (0, 0.15, 5)]
    refused(raw(hairpin, (), [(0, 1), (1, 2), (2, 3)]), "times its radius|wires overlap")
    star = [(0, 0, 5), (0.25, 0, 5), (0.5, 0, 5), (0.1, 0.23, 5), (0.2, 0.46, 5)]
    inspect_mesh(raw(star, (), [(0, 1), (1, 2), (0, 3), (3, 4)]), SQUARE, False)


def test_wire_grazing_a_sheet_and_wire_standing_on_it():
    t = [(0, 1, 2), (0, 2, 3)]
    refused(raw([*FLAT, (1, 2, 5.05), (9, 2, 5.05)], t, [(4, 5)]), r"runs 5e-05 m from sheet")
    refused(raw([*FLAT, (3, 3, 5.3)], t, [(0, 4)]), "rising at 30 degrees")
    inspect_mesh(raw([*FLAT, (0, 0, 8)], t, [(0, 4)]), SQUARE, False)
    refused(raw([*FLAT, (1, 2, 4), (1, 2, 6)], t, [(4, 5)]), "runs 0 m from sheet")


def test_summary():
    mesh = build(plate("p", (0, 0, 3), (8, 4)), wire("w", (1, 0, 0), (1, 0, 3)), lattice=SQUARE)
    summary = describe_mesh(mesh)
    assert summary["area"] == pytest.approx(32 * MM**2) and summary["wire_length"] == pytest.approx(3 * MM)
    assert summary["least_segment_per_radius"] == pytest.approx(7.5)
    assert summary["edge_min"] <= summary["edge_median"] <= summary["edge_max"]
    assert (summary["triangles"], summary["segments"]) == (len(mesh.triangles), 2)


# ---- the geometric tests against sampling ----


def samples(n=61):
    s = np.linspace(0, 1, n)
    a, b = np.meshgrid(s, s, indexing="ij")
    inside = a + b <= 1 + 1e-12
    return s, np.stack([1 - a[inside] - b[inside], a[inside], b[inside]], axis=1)


def test_distances_against_dense_sampling():
    rng = np.random.default_rng(3)
    s, weights = samples()
    for _ in range(30):
        p, q, r, e = rng.uniform(-1, 1, (4, 1, 3))
        t = rng.uniform(-1, 1, (1, 3, 3))
        on_one, on_two = p + s[:, None] * (q - p), r + s[:, None] * (e - r)
        brute = np.linalg.norm(on_one[:, None] - on_two[None], axis=2).min()
        distance, t1, t2 = segment_distance(p, q, r, e)
        assert distance[0] <= brute + 1e-12 and distance[0] > brute - 0.06
        there = np.linalg.norm(p + t1[:, None] * (q - p) - r - t2[:, None] * (e - r))
        assert there == pytest.approx(distance[0])
        cloud = weights @ t[0]
        brute = np.linalg.norm(cloud - p, axis=1).min()
        exact = point_triangle_distance(p, t)[0]
        assert exact <= brute + 1e-12 and exact > brute - 0.06
        brute = np.linalg.norm(cloud[:, None] - on_one, axis=2).min()
        exact = wire_distance(p, q, t)[0]
        assert exact <= brute + 1e-12 and exact > brute - 0.06


def test_overlap_depth_against_sampling_in_a_plane():
    rng = np.random.default_rng(8)
    _, weights = samples(81)
    hits = 0
    for _ in range(60):
        t = rng.uniform(-1, 1, (2, 1, 3, 3))
        t[..., 2] = 0.3
        depth = overlap_depth(t[0], t[1])[0]
        miss = point_triangle_distance(weights @ t[0, 0], np.broadcast_to(t[1], (len(weights), 3, 3))).min()
        if abs(depth) > 0.08:
            assert (depth > 0) == (miss < 1e-12)
            hits += depth > 0
    assert hits > 10


def test_triangles_that_touch_have_no_depth():
    base = np.array([[[0, 0, 0], [1, 0, 0], [0, 1, 0.0]]])
    for other in (
        [[1, 0, 0], [0, 1, 0], [1, 1, 0]],
        [[0, 0, 0], [1, 0, 0], [0.5, 0, 1]],
        [[0.2, 0.2, 0], [0.4, 0.2, 0], [0.3, 0.3, 1]],
        [[0, 0, 0], [-1, 0, 0], [0, -1, 0]],
    ):
        assert abs(overlap_depth(base, np.array([other], float))[0]) < 1e-12
    assert overlap_depth(base, base + np.array([0, 0, 0.2]))[0] == pytest.approx(-0.2)
