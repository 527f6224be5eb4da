"""Checks of a finished mesh: is it a conductor the solver can trust, in its cell and among its periodic copies?"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .contact import (
    clip_to_triangle,
    half_of,
    lattice_shifts,
    overlap_depth,
    segment_distance,
    segment_triangle_distance,
)
from .errors import InputError
from .lattice import Lattice
from .mesh import Mesh

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SAME = 1e-6  # points closer than this part of the smallest element are the same
NEAR = 1e-3  # edges closer than this part of an element's height, but not the same, are a mistake
DEEP = 1e-3  # triangles that reach into each other by this part of their height overlap
CHUNK = 20_000
REMEDY = (
    "Set the mesh method to 'unstructured', which makes touching and overlapping sheets share their edges."
)


def triangle_heights(mesh: Mesh) -> tuple[Floats, Floats]:
    """Longest edge and the height over it of every triangle, each (n_triangles,), m."""
    p = mesh.points[mesh.triangles]
    longest = np.linalg.norm(np.roll(p, -1, axis=1) - p, axis=2).max(1, initial=0)
    return longest, 2 * mesh.triangle_areas / np.maximum(longest, 1e-300)


def inspect_mesh(mesh: Mesh, lattice: Lattice, ground: bool) -> None:
    """Raise InputError, with place and remedy, unless the mesh is fit for the solver.

    Checked: indices and numbers, degenerate and double elements, everything above the ground (z = 0), thin-wire
    limits; and, in the cell and against its periodic copies: sheets that touch with unmatched edges, sheets that
    overlap or cross, wires closer than their radii allow to each other or to a sheet. Edges with more than two
    triangles are allowed (junctions of sheets).
    """
    _check_numbers(mesh)
    _check_triangles(mesh)
    _check_segments(mesh)
    if ground:
        _check_ground(mesh)
    used = mesh.points[np.unique(np.concatenate([mesh.triangles.ravel(), mesh.segments.ravel()]))]
    reach = 2 * max(triangle_heights(mesh)[0].max(initial=0), (2 * mesh.segment_radius).max(initial=0))
    shifts = lattice_shifts(lattice, used, reach)
    _check_sheet_contacts(mesh, shifts)
    _check_wire_spacing(mesh, shifts)
    _check_wires_at_sheets(mesh, shifts)


def describe_mesh(mesh: Mesh) -> dict[str, float | int]:
    """Summary of a mesh: counts, edge lengths (m), total area (m^2), wire length (m), least segment over radius."""
    edges = boundary_edges(mesh)[1]
    length = np.linalg.norm(mesh.points[edges[:, 1]] - mesh.points[edges[:, 0]], axis=1)
    length = np.concatenate([length, mesh.segment_lengths])
    ratio = mesh.segment_lengths / mesh.segment_radius
    return {
        "points": len(mesh.points),
        "triangles": len(mesh.triangles),
        "segments": len(mesh.segments),
        "edge_min": float(length.min()),
        "edge_median": float(np.median(length)),
        "edge_max": float(length.max()),
        "area": float(mesh.triangle_areas.sum()),
        "wire_length": float(mesh.segment_lengths.sum()),
        "least_segment_per_radius": float(ratio.min()) if len(ratio) else float("inf"),
    }


def boundary_edges(mesh: Mesh) -> tuple[Ints, Ints]:
    """Edges with one triangle as (n, 3) [point, point, triangle], and all edges (m, 2) once each."""
    edges = np.sort(mesh.triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1)
    kinds, first, count = np.unique(edges, axis=0, return_index=True, return_counts=True)
    single = count == 1
    return np.column_stack([kinds[single], first[single] // 3]), kinds


def _name(mesh: Mesh, triangle: int) -> str:
    return f"'{mesh.names[mesh.triangle_conductor[triangle]]}'"


def _where(mesh: Mesh, conductor: int) -> str:
    return f"[[conductor]] '{mesh.names[conductor]}'"


def _spot(point: Floats) -> str:
    return f"({', '.join(f'{x:.5g}' for x in point)}) m"


def _check_numbers(mesh: Mesh) -> None:
    if not np.isfinite(mesh.points).all() or not np.isfinite(mesh.segment_radius).all():
        raise InputError("the mesh has infinite or missing (NaN) coordinates or radii.", where="mesh")
    indices = np.concatenate([mesh.triangles.ravel(), mesh.segments.ravel()])
    if not len(indices):
        raise InputError("the mesh has neither triangles nor segments.", where="mesh")
    if indices.min() < 0 or indices.max() >= len(mesh.points):
        raise InputError(
            f"an element uses point {indices.min() if indices.min() < 0 else indices.max()}.",
            where="mesh", allowed=f"0 to {len(mesh.points) - 1}",
        )  # fmt: skip


def _check_triangles(mesh: Mesh) -> None:
    longest, height = triangle_heights(mesh)
    thin = longest > 1e4 * height
    if thin.any():
        n = int(np.argmax(thin))
        raise InputError(
            f"a triangle at {_spot(mesh.points[mesh.triangles[n]].mean(0))} is degenerate: {longest[n]:.4g} m long "
            f"and {height[n]:.4g} m high.",
            where=_where(mesh, mesh.triangle_conductor[n]),
            allowed="length over height up to 10000",
        )
    _, first, count = np.unique(
        np.sort(mesh.triangles, axis=1), axis=0, return_index=True, return_counts=True
    )
    if (count > 1).any():
        n = int(first[np.argmax(count)])
        raise InputError(
            f"{count.max()} triangles lie on each other at {_spot(mesh.points[mesh.triangles[n]].mean(0))}.",
            where=_where(mesh, mesh.triangle_conductor[n]), hint=REMEDY,
        )  # fmt: skip


def _check_segments(mesh: Mesh) -> None:
    if not (mesh.segment_radius > 0).all():
        n = int(np.argmin(mesh.segment_radius))
        raise InputError(
            f"a wire has radius {mesh.segment_radius[n]} m.", where=_where(mesh, mesh.segment_conductor[n]),
            allowed="a length above zero",
        )  # fmt: skip
    ratio = mesh.segment_lengths / mesh.segment_radius
    if (ratio < 2 * (1 - 1e-6)).any():
        n = int(np.argmin(ratio))
        raise InputError(
            f"a wire segment at {_spot(mesh.points[mesh.segments[n]].mean(0))} is {mesh.segment_lengths[n]:.4g} m "
            f"long, {ratio[n]:.3g} times its radius.",
            where=_where(mesh, mesh.segment_conductor[n]),
            allowed="segments of at least two radii (thin-wire model)",
        )
    _, first, count = np.unique(np.sort(mesh.segments, axis=1), axis=0, return_index=True, return_counts=True)
    if (count > 1).any():
        n = int(first[np.argmax(count)])
        raise InputError(
            f"{count.max()} wire segments lie on each other at {_spot(mesh.points[mesh.segments[n]].mean(0))}.",
            where=_where(mesh, mesh.segment_conductor[n]),
        )


def _check_ground(mesh: Mesh) -> None:
    scale = max(float(np.ptp(mesh.points, axis=0).max()), 1e-300)
    for elements, owner, thick in (
        (mesh.triangles, mesh.triangle_conductor, np.zeros(len(mesh.triangles))),
        (mesh.segments, mesh.segment_conductor, mesh.segment_radius),
    ):
        z = mesh.points[elements][:, :, 2]
        below = z.min(1, initial=np.inf) < -1e-9 * scale
        flat = z.max(1, initial=-np.inf) <= np.maximum(1e-9 * scale, thick * (1 - 1e-6))
        if below.any() or flat.any():
            n = int(np.argmax(below if below.any() else flat))
            problem = "reaches below the ground at z = 0" if below.any() else "lies on the ground at z = 0"
            raise InputError(
                f"the conductor {problem} at {_spot(mesh.points[elements[n]].mean(0))}.",
                where=_where(mesh, owner[n]),
            )


def _near_pairs(
    centres: Floats, radii: Floats, others: Floats, other_radii: Floats, shift: Floats
) -> Iterator[tuple[Ints, Ints]]:
    """Pairs (i, j) whose balls, the second ones displaced by `shift`, meet; in chunks."""
    if not len(centres) or not len(others):
        return
    moved = others + shift
    reach = radii.max() + other_radii.max()
    if (moved.min(0) > centres.max(0) + reach).any() or (moved.max(0) < centres.min(0) - reach).any():
        return
    tree = cKDTree(moved)
    for start in range(0, len(centres), 2000):
        part = slice(start, min(start + 2000, len(centres)))
        lists = tree.query_ball_point(centres[part], radii[part] + other_radii.max())
        i = np.repeat(np.arange(part.start, part.stop), [len(x) for x in lists])
        j = np.concatenate([np.asarray(x, dtype=np.int64) for x in lists])
        close = np.linalg.norm(centres[i] - moved[j], axis=1) <= radii[i] + other_radii[j]
        i, j = i[close], j[close]
        for k in range(0, len(i), CHUNK):
            yield i[k : k + CHUNK], j[k : k + CHUNK]


def _balls(points: Floats) -> tuple[Floats, Floats]:
    """Centre and radius of a ball around each element, (n, k, 3) -> (n, 3), (n,)."""
    centre = points.mean(1)
    return centre, np.linalg.norm(points - centre[:, None], axis=2).max(1, initial=0) * (1 + 1e-3)


def _check_sheet_contacts(mesh: Mesh, shifts: Floats) -> None:
    corners = mesh.points[mesh.triangles]
    centre, radius = _balls(corners)
    _, height = triangle_heights(mesh)
    border, _ = boundary_edges(mesh)
    ends = mesh.points[border[:, :2]]
    edge_centre, edge_radius = _balls(ends)
    for shift in shifts:
        for e, t in _near_pairs(edge_centre, edge_radius, centre, radius, shift):
            _refuse_unmatched(mesh, border[e], ends[e], t, corners[t] + shift, height, shift)
    for shift in half_of(shifts):
        for i, j in _near_pairs(centre, radius, centre, radius, shift):
            if not shift.any():
                i, j = i[i < j], j[i < j]
            depth = overlap_depth(corners[i], corners[j] + shift)
            bad = depth > DEEP * np.minimum(height[i], height[j])
            if bad.any():
                n = int(np.argmax(bad))
                raise InputError(
                    f"sheet {_name(mesh, i[n])} overlaps or crosses {_name(mesh, j[n])}{_copy(shift)} near "
                    f"{_spot(centre[i[n]])}.",
                    where=_where(mesh, mesh.triangle_conductor[i[n]]),
                    hint=REMEDY if not shift.any() else "Make the conductor smaller than the lattice allows.",
                )


def _copy(shift: Floats) -> str:
    return f" of the neighbour cell at ({shift[0]:.5g}, {shift[1]:.5g}) m" if shift.any() else ""


def _refuse_unmatched(
    mesh: Mesh, edge: Ints, ends: Floats, other: Ints, corners: Floats, height: Floats, shift: Floats
) -> None:
    """Border edges (n, 3) that run along triangles `other` (displaced) without being one of their edges."""
    least = np.minimum(height[edge[:, 2]], height[other])
    length, away = clip_to_triangle(ends[:, 0], ends[:, 1], corners, NEAR * least)
    suspect = (length > 3 * NEAR * np.linalg.norm(ends[:, 1] - ends[:, 0], axis=1)) & (
        length > 3 * NEAR * least
    )
    if not shift.any():
        suspect &= edge[:, 2] != other
    for n in np.flatnonzero(suspect):
        miss = np.linalg.norm(corners[n][:, None] - ends[n], axis=2).min(0)
        if (miss <= SAME * 10 * least[n]).all():
            continue
        apart = max(float(away[n]), 0.0)
        raise InputError(
            f"unmatched boundary: an edge of sheet {_name(mesh, edge[n, 2])} at {_spot(ends[n].mean(0))} lies on "
            f"{_name(mesh, other[n])}{_copy(shift)} (within {max(apart, miss.min()):.2g} m) without sharing its "
            "mesh points, so that no current could pass.",
            where=_where(mesh, mesh.triangle_conductor[edge[n, 2]]),
            allowed="edges that coincide point by point, or stay clearly apart",
            hint=REMEDY,
        )


def _share_point(
    mesh_points: Floats, a: Ints, b: Ints, shift: Floats, tolerance: Floats
) -> NDArray[np.bool_]:
    """Whether elements a (n, k) and b (n, l), the second displaced, have a point in common."""
    gap = np.linalg.norm(mesh_points[a][:, :, None] - (mesh_points[b] + shift)[:, None], axis=3)
    return gap.min(axis=(1, 2)) <= tolerance


def _check_wire_spacing(mesh: Mesh, shifts: Floats) -> None:
    """Segments that are neither joined nor next but one keep the sum of their radii apart."""
    p = mesh.points[mesh.segments]
    centre, half = _balls(p)
    radius, length = mesh.segment_radius, mesh.segment_lengths
    for shift in half_of(shifts):
        for i, j in _near_pairs(centre, half + radius, centre, half + radius, shift):
            if not shift.any():
                i, j = i[i < j], j[i < j]
            apart, _, _ = segment_distance(p[i, 0], p[i, 1], p[j, 0] + shift, p[j, 1] + shift)
            limit = radius[i] + radius[j]
            # ends within two radii by way of a common neighbour belong to one bend or junction
            joined = _share_point(mesh.points, mesh.segments[i], mesh.segments[j], shift, SAME * length[i])
            bend = _next_but_one(mesh, i, j) if not shift.any() else np.zeros(len(i), dtype=bool)
            bad = (apart < limit * (1 - 1e-6)) & ~joined & ~bend
            if bad.any():
                n = int(np.argmax(bad))
                raise InputError(
                    f"wires overlap: segments of '{mesh.names[mesh.segment_conductor[i[n]]]}' and "
                    f"'{mesh.names[mesh.segment_conductor[j[n]]]}'{_copy(shift)} near {_spot(centre[i[n]])} are "
                    f"{apart[n]:.4g} m apart, axis to axis, without being connected.",
                    where=_where(mesh, mesh.segment_conductor[i[n]]),
                    allowed=f"at least {limit[n]:.4g} m (the sum of the radii)",
                )


def _next_but_one(mesh: Mesh, i: Ints, j: Ints) -> NDArray[np.bool_]:
    """Whether some third segment joins an end of i to an end of j."""
    known = {(int(a), int(b)) for a, b in np.sort(mesh.segments, axis=1)}
    ends_i, ends_j = mesh.segments[i], mesh.segments[j]
    return np.array(
        [
            any((min(a, b), max(a, b)) in known for a in x for b in y)
            for x, y in zip(ends_i.tolist(), ends_j.tolist(), strict=True)
        ],
        dtype=bool,
    )


def _check_wires_at_sheets(mesh: Mesh, shifts: Floats) -> None:
    """Segments keep a radius away from sheets; one that ends on a sheet vertex is judged from two radii on."""
    p = mesh.points[mesh.segments]
    t = mesh.points[mesh.triangles]
    radius = mesh.segment_radius
    centre, half = _balls(p)
    t_centre, t_radius = _balls(t)
    on_sheet = _on_sheet(mesh, shifts)
    back = np.minimum(2 * radius / np.maximum(mesh.segment_lengths, 1e-300), 1.0)[:, None]
    a = np.where(on_sheet[:, :1], p[:, 0] + back * (p[:, 1] - p[:, 0]), p[:, 0])
    b = np.where(on_sheet[:, 1:], p[:, 1] + back * (p[:, 0] - p[:, 1]), p[:, 1])
    both = on_sheet.all(1)[:, None] & (back > 0.5)
    middle = p.mean(1)
    a, b = np.where(both, middle, a), np.where(both, middle, b)
    for shift in shifts:
        for i, j in _near_pairs(centre, half + radius, t_centre, t_radius, shift):
            apart = segment_triangle_distance(a[i], b[i], t[j] + shift)
            bad = apart < radius[i] * (1 - 1e-6)
            if bad.any():
                n = int(np.argmax(bad))
                raise InputError(
                    f"wire '{mesh.names[mesh.segment_conductor[i[n]]]}' runs {apart[n]:.4g} m from sheet "
                    f"{_name(mesh, j[n])}{_copy(shift)} near {_spot(centre[i[n]])}.",
                    where=_where(mesh, mesh.segment_conductor[i[n]]),
                    allowed=f"its radius, {radius[i[n]]:.4g} m, or more; or an end on a point of the sheet, "
                    "rising at 30 degrees or more",
                )


def _on_sheet(mesh: Mesh, shifts: Floats) -> NDArray[np.bool_]:
    """Which segment ends (n, 2) sit on a triangle's corner, here or in a periodic copy."""
    corners = np.unique(mesh.triangles)
    attached = np.isin(mesh.segments, corners)
    if len(corners) and len(mesh.segments):
        tree = cKDTree(mesh.points[corners])
        for shift in shifts[shifts.any(axis=1)]:
            gap, _ = tree.query((mesh.points[mesh.segments] - shift).reshape(-1, 3))
            attached |= gap.reshape(-1, 2) <= SAME * mesh.segment_lengths[:, None]
    return attached
