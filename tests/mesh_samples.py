"""Shared by the meshing tests: invented 5.4 GHz avalanche-watch cells, and ways to look at a mesh."""

from __future__ import annotations

import numpy as np
from scanward.geometry.conductor import Plate, Polygon, Strip, Wire
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesh import Mesh
from scanward.geometry.mesher import mesh_conductors
from scanward.geometry.port import Gap

MM = 1e-3
SKEW = Lattice(np.array([27 * MM, 0]), np.array([13.5 * MM, 23.4 * MM]))
SQUARE = Lattice(np.array([27 * MM, 0]), np.array([0, 27 * MM]))
VERTICAL = {"axis": np.array([1.0, 0, 0]), "normal": np.array([0, 1.0, 0])}


def mm(*values):
    return np.array(values, dtype=float) * MM


def wire(name, *points, radius=0.2, **more):
    return Wire(name=name, points=mm(*points), radius=radius * MM, **more)


def strip(name, start, end, width, **more):
    return Strip(name=name, start=mm(*start), end=mm(*end), width=width * MM, **more)


def plate(name, centre, size, **more):
    return Plate(name=name, centre=mm(*centre), size=mm(*size), **more)


def polygon(name, *points, **more):
    return Polygon(name=name, points=mm(*points), **more)


def sheet_gap(centre, direction=(1, 0, 0), across=(0, 1, 0), width=0.4, span=1.0):
    return Gap(
        "sheet", mm(*centre), np.array(direction, float), width * MM, np.array(across, float), span * MM
    )


def wire_gap(centre, direction=(0, 0, 1), width=1.0):
    return Gap("wire", mm(*centre), np.array(direction, float), width * MM, np.array([0, 1.0, 0]), 0.4 * MM)


def build(*conductors, lattice=SKEW, ground=True, size=2.0, gaps=(), method="structured", **more):
    return mesh_conductors(
        conductors, lattice, ground=ground, element_size=size * MM, gaps=gaps, method=method, **more
    )


def has_point(mesh: Mesh, *point) -> bool:
    return bool(np.linalg.norm(mesh.points - mm(*point), axis=1).min() < 1e-6 * MM)


def edge_counts(mesh: Mesh) -> np.ndarray:
    """How many triangles share each edge."""
    edges = np.sort(mesh.triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1)
    return np.unique(edges, axis=0, return_counts=True)[1]


def sheet_parts(mesh: Mesh) -> int:
    """Number of parts of the sheets that do not hang together."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    t = mesh.triangles
    rows, columns = t[:, [0, 1]].ravel(), t[:, [1, 2]].ravel()
    n = len(mesh.points)
    label = connected_components(coo_array((np.ones(rows.size), (rows, columns)), shape=(n, n)), False)[1]
    return len(np.unique(label[t]))


def mirrored_elements_match(mesh: Mesh, axis: int) -> bool:
    """Whether the set of triangles is its own mirror image about zero along `axis`."""

    def keys(points):
        rounded = np.round(points[mesh.triangles] / MM, 6) + 0.0
        return {tuple(sorted(map(tuple, t))) for t in rounded.tolist()}

    image = mesh.points.copy()
    image[:, axis] *= -1
    return keys(mesh.points) == keys(image)


def border_points(mesh: Mesh, axis: int, value: float) -> np.ndarray:
    """Points with one coordinate at `value` mm, sorted, (n, 3)."""
    on = np.abs(mesh.points[:, axis] - value * MM) < 1e-9
    found = mesh.points[on]
    return found[np.lexsort(found.T)]
