"""Conductors in, mesh out: the one door to meshing."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .assemble import Piece, join_pieces
from .conductor import Conductor, Disc, MeshFile, Plate, Polygon, Strip, Wire
from .contact import lattice_shifts, point_triangle_distance
from .errors import InputError, nearest
from .grid_lines import rectangle_lines
from .inspect import inspect_mesh
from .lattice import Lattice
from .mesh import Mesh
from .mesh_file import read_mesh_file
from .port import Gap
from .shapes import Region, Sheet, check_names, check_sheets_over_ground, place_of, region_of
from .structured import disc_mesh, quadrilateral_mesh, rectangle_mesh, triangle_mesh
from .wires import Leg, attach_to_sheets, divide_leg, legs_of, meet_interfaces, meet_points, meet_wires, place_gaps

Floats = NDArray[np.float64]
METHODS = ("structured", "unstructured")
MOST_UNKNOWNS = 20_000


@dataclass(frozen=True)
class _FlatSheet:
    """A sheet with its place in the list of conductors, its region and its element size."""

    conductor: int
    sheet: Sheet
    region: Region
    size: float


def mesh_conductors(
    conductors: Sequence[Conductor],
    lattice: Lattice,
    *,
    ground: bool,
    element_size: float,
    gaps: Sequence[Gap] = (),
    method: str = "structured",
    grading: bool = True,
    refinement: float = 1.0,
    interfaces: Sequence[float] = (),
) -> Mesh:
    """Mesh all conductors of a cell, connected where they touch.

    Parameters
    ----------
    conductors
        What the cell is made of. `Conductor.element_size` overrides `element_size` for one of them.
    lattice
        Touching periodic copies get matching edges; their points are not merged.
    ground
        A perfect conductor at z = 0: wires that end there are connected, nothing may lie below or on it.
    element_size
        Wanted length of segments and triangle edges, m.
    gaps
        Ports and loads: their centres become nodes or mesh lines where possible. A wire gap must lie within
        one straight leg, a sheet gap on a sheet.
    method
        "structured": canonical shapes by grids (polygons of more than four corners still need gmsh);
        "unstructured": all sheets together by gmsh, so that any contact and overlap becomes a common edge.
        Where sheets overlap, the one named first keeps the place.
    grading
        Narrower cells at the free edges and gaps of structured strips and plates, where their current is
        singular, and shorter segments at the open ends and gaps of wires: the accuracy of uniform meshes of
        many times as many unknowns.
    refinement
        Number by which all elements, graded ones too, are shortened: another mesh to compare with.
    interfaces
        Heights of the borders between layers, m: wires that cross them get a node there.

    Raises
    ------
    InputError
        For shapes that are none, wires too thick or too close, contacts that do not match, gaps off their
        conductor, and meshes of more than 20 000 unknowns.
    """
    if method not in METHODS:
        raise InputError(
            f"mesh method '{method}' is unknown.", where="[mesh], key 'method'", allowed=" or ".join(METHODS),
            hint=nearest(method, METHODS),
        )  # fmt: skip
    check_names(conductors)
    if not (np.isfinite(refinement) and refinement > 0):
        raise InputError(f"refinement = {refinement} is no ratio of sizes.", allowed="a number above zero")
    sizes = [_size_of(c, element_size) / refinement for c in conductors]
    element_size /= refinement
    tolerance = 1e-6 * min([element_size, *sizes])
    sheets = [
        _FlatSheet(k, c, region_of(c), size)
        for k, (c, size) in enumerate(zip(conductors, sizes, strict=True))
        if isinstance(c, Strip | Plate | Disc | Polygon)
    ]
    wires = [(k, c, sizes[k]) for k, c in enumerate(conductors) if isinstance(c, Wire)]
    files = _read_files(conductors, tolerance)
    if ground:
        check_sheets_over_ground([(s.sheet, s.region) for s in sheets], tolerance)
    legs = legs_of(wires, ground, tolerance)
    _refuse_huge(sheets, legs, files)

    corners = [s.region.corners for s in sheets] + [np.stack([leg.start, leg.end]) for leg in legs]
    corners += [piece.points for piece in files]
    if not corners:
        raise InputError("the cell has no conductor.", where="[[conductor]]", allowed="at least one")
    margin = 2 * max([s.size for s in sheets] + [2 * leg.wire.radius for leg in legs] + [element_size])
    shifts = lattice_shifts(lattice, np.concatenate(corners), margin)
    meet_wires(legs, shifts, tolerance)
    attached = attach_to_sheets(legs, [s.region for s in sheets], shifts, tolerance)
    meet_interfaces(legs, interfaces, tolerance)
    meet_points(legs, [p.points for p in files], shifts, tolerance)
    place_gaps(legs, gaps, tolerance)

    pieces = files + [_wire_piece(leg, tolerance, grading) for leg in legs]
    if method == "structured":
        fixed = [p.points for p in files]
        graded = [grading and not _touches_others(s, sheets, fixed, shifts, tolerance) for s in sheets]
        pieces += _structured_pieces(
            sheets, attached, gaps, shifts, tolerance, ground=ground, graded=graded, refinement=refinement
        )
    elif sheets:
        pieces += _unstructured_pieces(sheets, attached, gaps, shifts, tolerance)
    mesh = join_pieces(sorted(pieces, key=lambda p: p.conductor), conductors, tolerance)
    inspect_mesh(mesh, lattice, ground)
    _check_sheet_gaps(mesh, gaps)
    return mesh


def _size_of(conductor: Conductor, element_size: float) -> float:
    size = element_size if conductor.element_size is None else conductor.element_size
    if not (np.isfinite(size) and size > 0):
        raise InputError(
            f"element_size = {size} m is not a length.", where=place_of(conductor, "element_size"),
            allowed="a length above zero",
        )  # fmt: skip
    return float(size)


def _read_files(conductors: Sequence[Conductor], tolerance: float) -> list[Piece]:
    pieces = []
    for k, c in enumerate(conductors):
        if isinstance(c, MeshFile):
            points, triangles, segments = read_mesh_file(c, tolerance)
            pieces.append(Piece(k, points, triangles, segments, c.wire_radius or 0.0))
    return pieces


def _refuse_huge(sheets: Sequence[_FlatSheet], legs: Sequence[Leg], files: Sequence[Piece]) -> None:
    """Estimate the unknowns (1.5 per triangle, 1 per segment) before any work is done."""
    count = sum(1.5 * len(p.triangles) + len(p.segments) for p in files)
    count += sum(max(3 * s.region.area / s.size**2, 2 * s.region.sides.max() / s.size) for s in sheets)
    count += sum(leg.length / leg.size for leg in legs)
    if count > MOST_UNKNOWNS:
        raise InputError(
            f"the mesh would have about {count:.0f} unknowns: a matrix of {count**2 * 16 / 1e9:.3g} GB.",
            where="[mesh], key 'element_size'",
            allowed=f"up to {MOST_UNKNOWNS} unknowns ({MOST_UNKNOWNS**2 * 16 / 1e9:.3g} GB)",
            hint=f"An element size {np.sqrt(count / MOST_UNKNOWNS):.2g} times as large would do.",
        )


def _wire_piece(leg: Leg, tolerance: float, graded: bool) -> Piece:
    points = leg.at(divide_leg(leg, tolerance, graded=graded))
    points[-1] = leg.end
    n = np.arange(len(points) - 1)
    return Piece(leg.conductor, points, segments=np.stack([n, n + 1], axis=1), radius=leg.wire.radius)


def _touches_others(
    s: _FlatSheet, sheets: Sequence[_FlatSheet], fixed: Sequence[Floats], shifts: Floats, tolerance: float
) -> bool:
    """Whether a strip or plate meets a disc, a polygon or an imported mesh, whose edges are not graded."""
    others = [o.region for o in sheets if not isinstance(o.sheet, Strip | Plate)]
    clouds = [*fixed, *(o.corners for o in others)]
    for shift in shifts:
        if any(s.region.contains(points + shift, tolerance).any() for points in clouds):
            return True
        if any(o.contains(s.region.corners - shift, tolerance).any() for o in others):
            return True
    return False


def _structured_pieces(
    sheets: Sequence[_FlatSheet], attached: Sequence[Sequence[Floats]], gaps: Sequence[Gap], shifts: Floats,
    tolerance: float, *, ground: bool, graded: Sequence[bool], refinement: float,
) -> list[Piece]:  # fmt: skip
    """Grids of all strips and plates (matched to each other), then each disc and polygon on its own."""
    both = list(zip(sheets, attached, strict=True))
    grids = [(s, a, g) for (s, a), g in zip(both, graded, strict=True) if isinstance(s.sheet, Strip | Plate)]
    lines = rectangle_lines(
        [s.region for s, _, _ in grids],
        [s.size * refinement for s, _, _ in grids],
        [a for _, a, _ in grids],
        gaps,
        shifts,
        tolerance,
        ground=ground,
        graded=[g for _, _, g in grids],
        refinement=refinement,
    )
    pieces = []
    for (s, _, _), (u, v) in zip(grids, lines, strict=True):
        uv, triangles = rectangle_mesh(u, v)
        pieces.append(Piece(s.conductor, s.region.place(uv), triangles))
    for s, points in both:
        if isinstance(s.sheet, Disc):
            uv, triangles = disc_mesh(s.region.radius, s.region.inner_radius, s.size)
            _refuse_unmatched_ends(s, points, s.region.place(uv), tolerance)
            pieces.append(Piece(s.conductor, s.region.place(uv), triangles))
        elif isinstance(s.sheet, Polygon):
            pieces += _polygon_pieces(s, points, gaps, shifts, tolerance)
    return pieces


def _missed(points: Sequence[Floats], vertices: Floats, tolerance: float) -> list[Floats]:
    return [p for p in points if np.linalg.norm(vertices - p, axis=1).min() > tolerance]


def _refuse_unmatched_ends(
    s: _FlatSheet, points: Sequence[Floats], vertices: Floats, tolerance: float
) -> None:
    missed = _missed(points, vertices, tolerance)
    if missed:
        raise InputError(
            f"a wire meets the disc at {missed[0].tolist()} m, which is no point of its structured mesh "
            "(only the centre can be relied on).",
            where=place_of(s.sheet),
            hint="Set the mesh method to 'unstructured'.",
        )


def _polygon_pieces(
    s: _FlatSheet, points: Sequence[Floats], gaps: Sequence[Gap], shifts: Floats, tolerance: float
) -> list[Piece]:
    """Triangles and convex four-sided polygons by a mapped grid, all others by gmsh."""
    outline = s.region.outline
    if len(outline) in (3, 4) and _is_convex(outline):
        uv, triangles = (triangle_mesh if len(outline) == 3 else quadrilateral_mesh)(outline, s.size)
        if not _missed(points, s.region.place(uv), tolerance):
            return [Piece(s.conductor, s.region.place(uv), triangles)]
    return _unstructured_pieces([s], [points], gaps, shifts, tolerance)


def _is_convex(outline: Floats) -> bool:
    d = np.roll(outline, -1, axis=0) - outline
    e = np.roll(d, -1, axis=0)
    sine = (d[:, 0] * e[:, 1] - d[:, 1] * e[:, 0]) / np.linalg.norm(d, axis=1) / np.linalg.norm(e, axis=1)
    return bool((sine > 0.02).all())


def _unstructured_pieces(
    sheets: Sequence[_FlatSheet], attached: Sequence[Sequence[Floats]], gaps: Sequence[Gap], shifts: Floats,
    tolerance: float,
) -> list[Piece]:  # fmt: skip
    from .unstructured import mesh_regions

    points, triangles, owner = mesh_regions(
        [s.region for s in sheets], [s.size for s in sheets], attached, gaps, shifts, tolerance
    )
    return [Piece(s.conductor, points, triangles[owner == n]) for n, s in enumerate(sheets)]


def _check_sheet_gaps(mesh: Mesh, gaps: Sequence[Gap]) -> None:
    """The middle line of each sheet gap's box, from edge to edge along its direction, lies on a sheet."""
    corners = mesh.points[mesh.triangles]
    for gap in (g for g in gaps if g.kind == "sheet"):
        where = f"gap at {np.asarray(gap.centre).tolist()} m"
        if not len(corners):
            raise InputError("the gap is of kind 'sheet', but the cell has no sheet.", where=where)
        if not (gap.width > 0 and gap.span > 0):
            raise InputError(
                f"width {gap.width} m and span {gap.span} m make no gap.",
                where=where,
                allowed="lengths above zero",
            )
        half = 0.5 * gap.width * np.asarray(gap.direction, dtype=float) * (1 - 1e-6)
        for point in (gap.centre, gap.centre - half, gap.centre + half):
            miss = point_triangle_distance(np.broadcast_to(point, (len(corners), 3)), corners).min()
            if miss > 1e-4 * gap.width:
                raise InputError(
                    f"the gap reaches {np.asarray(point).tolist()} m, {miss:.4g} m off the nearest sheet.",
                    where=where,
                    allowed="a box that lies on a strip, plate, disc, polygon or mesh",
                )
