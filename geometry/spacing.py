"""What touches, crosses or crowds what in a mesh: in the cell and against its periodic copies."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import dijkstra
from scipy.spatial import KDTree

from .contact import (
    clip_to_triangle,
    half_of,
    overlap_depth,
    point_triangle_distance,
    segment_distance,
    segment_triangle_distance,
)
from .errors import InputError
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


def boundary_edges(mesh: Mesh) -> tuple[Ints, Ints]:
    """Edges with one triangle as (n, 3) [point, point, triangle], and all edges (m, 2) once each."""
    edges = np.sort(mesh.triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1)
    kinds, first, count = np.unique(edges, axis=0, return_index=True, return_counts=True)
    single = count == 1
    return np.column_stack([kinds[single], first[single] // 3]), kinds


def _name(mesh: Mesh, triangle: int | np.integer) -> str:
    return f"'{mesh.names[mesh.triangle_conductor[triangle]]}'"


def place(mesh: Mesh, conductor: int) -> str:
    """Where an error about a conductor of the mesh sits in the case file."""
    return f"[[conductor]] '{mesh.names[conductor]}'"


def spot(point: Floats) -> str:
    """A point for people to read."""
    return f"({', '.join(f'{x:.5g}' for x in point)}) m"


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
    tree = KDTree(moved)
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


def check_sheet_contacts(mesh: Mesh, shifts: Floats) -> None:
    """Sheets neither overlap nor cross; where they touch they share edges. `shifts` (k, 3): of the copies."""
    corners = mesh.points[mesh.triangles]
    centre, radius = _balls(corners)
    _, height = triangle_heights(mesh)
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
                    f"{spot(centre[i[n]])}.",
                    where=place(mesh, int(mesh.triangle_conductor[i[n]])),
                    hint=REMEDY if not shift.any() else "Make the conductor smaller than the lattice allows.",
                )
    border, _ = boundary_edges(mesh)
    ends = mesh.points[border[:, :2]]
    edge_centre, edge_radius = _balls(ends)
    for shift in shifts:
        for e, t in _near_pairs(edge_centre, edge_radius, centre, radius, shift):
            _refuse_unmatched(mesh, border[e], ends[e], t, corners[t] + shift, height, shift)


def _copy(shift: Floats) -> str:
    return f" of the neighbour cell at ({shift[0]:.5g}, {shift[1]:.5g}) m" if shift.any() else ""


def _refuse_unmatched(
    mesh: Mesh, edge: Ints, ends: Floats, other: Ints, corners: Floats, height: Floats, shift: Floats
) -> None:
    """Border edges (n, 3) that run along triangles `other` (displaced) without being one of their edges."""
    least = np.minimum(height[edge[:, 2]], height[other])
    length, middle = clip_to_triangle(ends[:, 0], ends[:, 1], corners, NEAR * least)
    suspect = (length > 3 * NEAR * np.linalg.norm(ends[:, 1] - ends[:, 0], axis=1)) & (
        length > 3 * NEAR * least
    )
    if not shift.any():
        suspect &= edge[:, 2] != other
    for n in np.flatnonzero(suspect):
        miss = np.linalg.norm(corners[n][:, None] - ends[n], axis=2).min(0)
        if (miss <= SAME * 10 * least[n]).all():
            continue
        gap = float(point_triangle_distance(middle[n : n + 1], corners[n : n + 1])[0])
        if gap > NEAR * least[n]:
            continue  # past the sharp corner of a flat triangle, where its margin reaches far
        almost = gap > SAME * 10 * least[n]
        if almost and miss.min() <= SAME * 10 * least[n]:
            continue  # a sharp corner that ends on the edge's own end
        raise InputError(
            f"unmatched boundary: an edge of sheet {_name(mesh, edge[n, 2])} at {spot(middle[n])} "
            f"{'all but touches' if almost else 'lies on'} {_name(mesh, other[n])}{_copy(shift)} without "
            f"sharing its mesh points{f' (gap {gap:.2g} m)' if almost else ''}: no current could pass.",
            where=place(mesh, int(mesh.triangle_conductor[edge[n, 2]])),
            allowed="edges that coincide point by point, or stay clearly apart",
            hint="Close the gap or widen it." if almost else REMEDY,
        )


def _share_point(
    mesh_points: Floats, a: Ints, b: Ints, shift: Floats, tolerance: Floats
) -> NDArray[np.bool_]:
    """Whether elements a (n, k) and b (n, l), the second displaced, have a point in common."""
    gap = np.linalg.norm(mesh_points[a][:, :, None] - (mesh_points[b] + shift)[:, None], axis=3)
    return gap.min(axis=(1, 2)) <= tolerance


def check_wire_spacing(mesh: Mesh, shifts: Floats) -> None:
    """Wire segments keep the sum of their radii apart, except within one bend or junction."""
    p = mesh.points[mesh.segments]
    centre, half = _balls(p)
    radius, length = mesh.segment_radius, mesh.segment_lengths
    for shift in half_of(shifts):
        for i, j in _near_pairs(centre, half + radius, centre, half + radius, shift):
            if not shift.any():
                i, j = i[i < j], j[i < j]
            apart, _, _ = segment_distance(p[i, 0], p[i, 1], p[j, 0] + shift, p[j, 1] + shift)
            limit = radius[i] + radius[j]
            joined = _share_point(mesh.points, mesh.segments[i], mesh.segments[j], shift, SAME * length[i])
            for n in np.flatnonzero((apart < limit * (1 - 1e-6)) & ~joined):
                one, two = int(i[n]), int(j[n])
                if not shift.any() and _path_between(mesh, one, two) <= 2 * limit[n]:
                    continue
                raise InputError(
                    f"wires overlap: segments of '{mesh.names[mesh.segment_conductor[one]]}' and "
                    f"'{mesh.names[mesh.segment_conductor[two]]}'{_copy(shift)} near {spot(centre[one])} "
                    f"are {apart[n]:.4g} m apart, axis to axis, without being connected.",
                    where=place(mesh, int(mesh.segment_conductor[one])),
                    allowed=f"at least {limit[n]:.4g} m (the sum of the radii)",
                )


def _path_between(mesh: Mesh, one: int, two: int) -> float:
    """Length of wire between the nearest ends of two segments, m; infinite where they are not connected."""
    a, b = mesh.segments.T
    n = len(mesh.points)
    graph = coo_array((mesh.segment_lengths, (a, b)), shape=(n, n)).tocsr()
    paths = dijkstra(graph, directed=False, indices=mesh.segments[one])
    return float(np.min(np.asarray(paths)[:, mesh.segments[two]]))


def check_wires_at_sheets(mesh: Mesh, shifts: Floats) -> None:
    """Segments keep a radius away from sheets; one that ends on a sheet is judged from two radii on."""
    p = mesh.points[mesh.segments]
    t = mesh.points[mesh.triangles]
    radius = mesh.segment_radius
    centre, half = _balls(p)
    t_centre, t_radius = _balls(t)
    on_sheet = _on_sheet(mesh, shifts)
    back = np.minimum(2 * radius / np.maximum(mesh.segment_lengths, 1e-300), 1.0)[:, None]
    a = np.where(on_sheet[:, :1], p[:, 0] + back * (p[:, 1] - p[:, 0]), p[:, 0])
    b = np.where(on_sheet[:, 1:], p[:, 1] + back * (p[:, 0] - p[:, 1]), p[:, 1])
    both = np.all(on_sheet, axis=1, keepdims=True) & np.greater(back, 0.5)
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
                    f"{_name(mesh, j[n])}{_copy(shift)} near {spot(centre[i[n]])}.",
                    where=place(mesh, int(mesh.segment_conductor[i[n]])),
                    allowed=f"its radius, {radius[i[n]]:.4g} m, or more; or an end on a point of the sheet, "
                    "rising at 30 degrees or more",
                )


def _on_sheet(mesh: Mesh, shifts: Floats) -> NDArray[np.bool_]:
    """Which segment ends (n, 2) sit on a triangle's corner, here or in a periodic copy."""
    corners = np.unique(mesh.triangles)
    attached = np.isin(mesh.segments, corners)
    if len(corners) and len(mesh.segments):
        tree = KDTree(mesh.points[corners])
        for shift in shifts[shifts.any(axis=1)]:
            gap, _ = tree.query((mesh.points[mesh.segments] - shift).reshape(-1, 3))
            attached |= np.reshape(gap, (-1, 2)) <= SAME * mesh.segment_lengths[:, None]
    return attached
