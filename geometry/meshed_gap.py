"""Gaps on conductors that come from mesh files."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .conductor import MeshFile
from .contact import point_triangle_distance, triangle_normals
from .errors import InputError
from .place import WIRE_GAP, Placement, in_mm, measure_line, sideways, the_line
from .port import Gap

Floats = NDArray[np.float64]


def meshed_gap(placement: Placement, mesh: MeshFile, triangles: Floats, lines: Floats, where: str) -> Gap:
    """Gap on a conductor from a mesh file: `at` on one of its lines, or `line` across its triangles."""
    if placement.line is None:
        return _meshed_wire_gap(placement, mesh, lines, where)
    if not len(triangles):
        raise InputError(
            f"'{mesh.name}' has no triangles to draw a gap line on.", where=f"{where}, key 'line'"
        )
    across, span, centre = measure_line(the_line(placement, where), where)
    width = span if placement.width is None else placement.width
    normals, _ = triangle_normals(triangles)
    reach, hit = 1e-4 * span, 0
    for t in np.linspace(-0.5, 0.5, 17):
        point = centre + t * span * across
        distances = point_triangle_distance(np.broadcast_to(point, (len(triangles), 3)), triangles)
        which = int(np.argmin(distances))
        distance = float(distances[which])
        if distance > reach:
            raise InputError(
                f"the gap line leaves '{mesh.name}' at {in_mm(point)}: the nearest metal is "
                f"{1e3 * distance:.4g} mm away.",
                where=f"{where}, key 'line'",
                allowed="a line on the metal, from rim to rim",
            )
        hit = which if abs(t) < 1e-9 else hit
    normal = normals[hit]
    if abs(normal @ across) > 1e-3:
        raise InputError("the gap line is not in the plane of the metal.", where=f"{where}, key 'line'")
    direction = np.cross(normal, across)
    return Gap("sheet", centre, direction / np.linalg.norm(direction), width, across, span)


def _meshed_wire_gap(placement: Placement, mesh: MeshFile, lines: Floats, where: str) -> Gap:
    if placement.at is None or mesh.wire_radius is None or not len(lines):
        raise InputError(
            f"'{mesh.name}' is a mesh: its gaps are placed by `line` on triangles, or by `at` on lines with "
            f"wire_radius ({len(lines)} lines in the file).",
            where=where,
            allowed="line, or at",
        )
    width = WIRE_GAP * mesh.wire_radius if placement.width is None else placement.width
    near = [_on_segment(placement.at, line) for line in lines]
    best = int(np.argmin([distance for distance, _ in near]))
    distance, foot = near[best]
    if distance > 1e-3 * mesh.wire_radius:
        raise InputError(
            f"{in_mm(placement.at)} is not on a line of '{mesh.name}': it lies {1e3 * distance:.4g} mm off.",
            where=f"{where}, key 'at'",
            hint=f"The nearest point is {in_mm(foot)}.",
        )
    direction = lines[best, 1] - lines[best, 0]
    direction = direction / np.linalg.norm(direction)
    for end in (foot - 0.5 * width * direction, foot + 0.5 * width * direction):
        if min(_on_segment(end, line)[0] for line in lines) > 1e-3 * mesh.wire_radius:
            raise InputError(
                f"the gap of {1e3 * width:.4g} mm reaches out of the straight line it sits in.",
                where=f"{where}, key 'width'",
            )
    return Gap(
        "wire",
        np.asarray(placement.at, dtype=float),
        direction,
        width,
        sideways(direction),
        2 * mesh.wire_radius,
    )


def _on_segment(point: Floats, ends: Floats) -> tuple[float, Floats]:
    """Distance of a point from a segment (2, 3), and the nearest point."""
    step = ends[1] - ends[0]
    t = np.clip((point - ends[0]) @ step / max(step @ step, 1e-300), 0, 1)
    foot = ends[0] + t * step
    return float(np.linalg.norm(foot - point)), foot
