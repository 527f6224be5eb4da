"""Triangles and lines out of mesh files, by meshio: the only file that knows it."""

from __future__ import annotations

import contextlib
import io
import warnings
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .assemble import merge_points, split_quads
from .conductor import MeshFile
from .errors import InputError
from .shapes import place_of

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def read_mesh_file(conductor: MeshFile, tolerance: float) -> tuple[Floats, Ints, Ints]:
    """Points (n, 3) in metres, triangles (m, 3) and lines (k, 2) of a mesh file (msh, vtk, vtu, stl, ...).

    Points closer than `tolerance` (m) are made one, quadrilaterals are cut along their shorter diagonal,
    points without elements are dropped, and so are lines along edges of triangles (many formats mark borders
    so). Raises InputError when the file cannot be read or holds elements of another kind, lines without
    `wire_radius`, or an edge with more than two triangles.
    """
    where = place_of(conductor, "path")
    raw = _read(conductor, where)
    points = np.asarray(raw.points, dtype=float)
    if not len(points):
        raise InputError(f"'{conductor.path}' has no points.", where=where)
    if points.shape[1:] == (2,):
        points = np.column_stack([points, np.zeros(len(points))])
    points = points * conductor.scale + np.asarray(conductor.offset, dtype=float)
    if not np.isfinite(points).all():
        raise InputError("the file has points with infinite or missing coordinates.", where=where)
    triangles, lines = [np.zeros((0, 3), int)], [np.zeros((0, 2), int)]
    for block in raw.cells:
        data = np.asarray(block.data, dtype=np.int64)
        if block.type == "triangle":
            triangles.append(data)
        elif block.type == "quad":
            triangles.append(split_quads(points, data))
        elif block.type == "line":
            lines.append(data)
        elif block.type != "vertex":
            raise InputError(
                f"the file has elements of type '{block.type}'.", where=where, allowed="triangle, quad, line"
            )
    return _clean(conductor, points, np.concatenate(triangles), np.concatenate(lines), tolerance)


def _read(conductor: MeshFile, where: str) -> Any:
    import meshio

    if not conductor.path.is_file():
        raise InputError(f"there is no file '{conductor.path}'.", where=where)
    said = io.StringIO()
    try:
        with contextlib.redirect_stdout(said), contextlib.redirect_stderr(said), warnings.catch_warnings():
            warnings.simplefilter("ignore")  # its guesses at the kind of an STL file overflow
            return meshio.read(conductor.path)
    except (SystemExit, Exception) as fault:  # meshio lets all kinds through, and may end the process
        reason = " ".join((said.getvalue() or str(fault)).split())[:200]
        raise InputError(
            f"'{conductor.path}' cannot be read as a mesh ({reason or type(fault).__name__}).",
            where=where,
            allowed="a mesh file whose extension tells its format, such as .msh, .vtk, .vtu, .stl",
        ) from fault


def _clean(
    conductor: MeshFile, points: Floats, triangles: Ints, lines: Ints, tolerance: float
) -> tuple[Floats, Ints, Ints]:
    where = place_of(conductor, "path")
    used, inverse = np.unique(np.concatenate([triangles.ravel(), lines.ravel()]), return_inverse=True)
    merged, group = merge_points(points[used], tolerance)
    triangles = group[inverse[: triangles.size]].reshape(-1, 3)
    lines = np.sort(group[inverse[triangles.size :]].reshape(-1, 2), axis=1)
    edges = np.sort(triangles[:, [0, 1, 1, 2, 2, 0]].reshape(-1, 2), axis=1)
    kinds, count = np.unique(edges @ [len(merged), 1], return_counts=True)
    lines = lines[~np.isin(lines @ [len(merged), 1], kinds)]
    if not len(triangles) and not len(lines):
        raise InputError(f"'{conductor.path}' has neither triangles nor lines.", where=where)
    if len(lines) and not (conductor.wire_radius and conductor.wire_radius > 0):
        raise InputError(
            f"{len(lines)} lines of the file become wires, but wire_radius is {conductor.wire_radius}.",
            where=place_of(conductor, "wire_radius"),
            allowed="a length above zero",
        )
    if (count > 2).any():
        a, b = merged[list(divmod(int(kinds[np.argmax(count)]), len(merged)))].tolist()
        raise InputError(
            f"{count.max()} triangles of the file share the edge from {a} to {b} m.",
            where=where,
            allowed="at most two triangles at an edge of an imported mesh",
        )
    return merged, triangles, lines
