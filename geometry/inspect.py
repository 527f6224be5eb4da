"""Checks of a finished mesh: can the solver trust it, in its cell and among its periodic copies?"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import KDTree

from .contact import lattice_shifts
from .errors import InputError
from .lattice import Lattice
from .mesh import Mesh
from .spacing import (
    REMEDY,
    boundary_edges,
    check_sheet_contacts,
    check_wire_spacing,
    check_wires_at_sheets,
    place,
    spot,
    triangle_heights,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def inspect_mesh(mesh: Mesh, lattice: Lattice, ground: bool) -> None:
    """Raise InputError, with place and remedy, unless the mesh is fit for the solver.

    Checked: indices and numbers, degenerate and double elements, points not joined, everything above the
    ground (z = 0), thin-wire limits; and, in the cell and against its periodic copies: sheets that touch with
    unmatched edges, that meet in a single point, that overlap or cross; wires closer than their radii allow
    to each other or to a sheet. Edges with more than two triangles are allowed (junctions of sheets).
    """
    _check_numbers(mesh)
    _check_triangles(mesh)
    _check_segments(mesh)
    _check_merged(mesh)
    if ground:
        _check_ground(mesh)
    used = mesh.points[np.unique(np.concatenate([mesh.triangles.ravel(), mesh.segments.ravel()]))]
    reach = 2 * max(triangle_heights(mesh)[0].max(initial=0), (2 * mesh.segment_radius).max(initial=0))
    shifts = lattice_shifts(lattice, used, reach)
    check_sheet_contacts(mesh, shifts)
    _check_point_contacts(mesh, lattice)
    check_wire_spacing(mesh, shifts)
    check_wires_at_sheets(mesh, shifts)


def describe_mesh(mesh: Mesh) -> dict[str, float | int]:
    """Summary of a mesh: counts, edge lengths (m), area (m^2), wire length (m), least segment over radius."""
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
            f"a triangle at {spot(mesh.points[mesh.triangles[n]].mean(0))} is degenerate: "
            f"{longest[n]:.4g} m long and {height[n]:.4g} m high.",
            where=place(mesh, mesh.triangle_conductor[n]),
            allowed="length over height up to 10000",
        )
    _, first, count = np.unique(
        np.sort(mesh.triangles, axis=1), axis=0, return_index=True, return_counts=True
    )
    if (count > 1).any():
        n = int(first[np.argmax(count)])
        raise InputError(
            f"{count.max()} triangles lie on each other at {spot(mesh.points[mesh.triangles[n]].mean(0))}.",
            where=place(mesh, mesh.triangle_conductor[n]), hint=REMEDY,
        )  # fmt: skip


def _check_segments(mesh: Mesh) -> None:
    if not (mesh.segment_radius > 0).all():
        n = int(np.argmin(mesh.segment_radius))
        raise InputError(
            f"a wire has radius {mesh.segment_radius[n]} m.", where=place(mesh, mesh.segment_conductor[n]),
            allowed="a length above zero",
        )  # fmt: skip
    ratio = mesh.segment_lengths / mesh.segment_radius
    if (ratio < 2 * (1 - 1e-6)).any():
        n = int(np.argmin(ratio))
        raise InputError(
            f"a wire segment at {spot(mesh.points[mesh.segments[n]].mean(0))} is "
            f"{mesh.segment_lengths[n]:.4g} m long, {ratio[n]:.3g} times its radius.",
            where=place(mesh, mesh.segment_conductor[n]),
            allowed="segments of at least two radii (thin-wire model)",
        )
    _, first, count = np.unique(np.sort(mesh.segments, axis=1), axis=0, return_index=True, return_counts=True)
    if (count > 1).any():
        n = int(first[np.argmax(count)])
        raise InputError(
            f"{count.max()} wire segments lie on each other at "
            f"{spot(mesh.points[mesh.segments[n]].mean(0))}.",
            where=place(mesh, mesh.segment_conductor[n]),
        )


def _smallest_element(mesh: Mesh) -> float:
    return float(min(mesh.segment_lengths.min(initial=np.inf), triangle_heights(mesh)[1].min(initial=np.inf)))


def _check_merged(mesh: Mesh) -> None:
    """Points of elements that coincide are one point, for elements are connected by index."""
    used = np.unique(np.concatenate([mesh.triangles.ravel(), mesh.segments.ravel()]))
    pairs = KDTree(mesh.points[used]).query_pairs(1e-5 * _smallest_element(mesh), output_type="ndarray")
    if len(pairs):
        raise InputError(
            f"{len(pairs)} pairs of mesh points coincide without being one point, the first at "
            f"{spot(mesh.points[used[pairs[0, 0]]])}: the conductors are cut there.",
            where="mesh",
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
                f"the conductor {problem} at {spot(mesh.points[elements[n]].mean(0))}.",
                where=place(mesh, owner[n]),
            )


def points_modulo_lattice(mesh: Mesh, lattice: Lattice) -> Ints:
    """A label for each point, the same for points that coincide modulo the lattice, (n_points,)."""
    side = np.sqrt(lattice.area)
    folded = np.column_stack([lattice.coordinates(mesh.points) % 1.0, mesh.points[:, 2] / side])
    folded[:, :2][folded[:, :2] >= 1.0] = 0.0
    folded[:, 2] -= folded[:, 2].min(initial=0)
    reach = float(1e-5 * _smallest_element(mesh) / np.sqrt((lattice.vectors**2).sum()))
    pairs = KDTree(folded, boxsize=np.array([1.0, 1.0, 0.0])).query_pairs(reach, output_type="ndarray")
    graph = coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(folded), len(folded)))
    return connected_components(graph, directed=False)[1].astype(np.int64)


def _check_point_contacts(mesh: Mesh, lattice: Lattice) -> None:
    """Triangles around a point hang together by edges: sheets never meet in a point alone."""
    if not len(mesh.triangles):
        return
    label = points_modulo_lattice(mesh, lattice)
    n = len(mesh.triangles)
    corner = np.arange(3 * n).reshape(n, 3)
    one = corner[:, [0, 1, 2]].ravel()
    two = corner[:, [1, 2, 0]].ravel()
    at = label[mesh.triangles].ravel()
    swap = at[one] > at[two]
    one, two = np.where(swap, two, one), np.where(swap, one, two)
    order = np.lexsort((at[two], at[one]))
    one, two = one[order], two[order]
    same = (at[one[1:]] == at[one[:-1]]) & (at[two[1:]] == at[two[:-1]])
    rows = np.concatenate([one[:-1][same], two[:-1][same]])
    columns = np.concatenate([one[1:][same], two[1:][same]])
    graph = coo_array((np.ones(len(rows)), (rows, columns)), shape=(3 * n, 3 * n))
    _, fan = connected_components(graph, directed=False)
    fans = np.unique(np.stack([at, fan], axis=1), axis=0)
    point, count = np.unique(fans[:, 0], return_counts=True)
    if (count > 1).any():
        k = int(np.flatnonzero(at == point[np.argmax(count)])[0])
        where = mesh.points[mesh.triangles.ravel()[k]]
        raise InputError(
            f"sheets meet in the single point {spot(where)} (or its copies): no current could pass.",
            where=place(mesh, mesh.triangle_conductor[k // 3]),
            allowed="sheets that share an edge, or stay apart",
        )
