"""Where ports and loads sit: the gap that a stated place means, checked against its conductor."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from .conductor import Conductor, Disc, MeshFile, Plate, Polygon, Strip, Wire
from .errors import InputError, nearest
from .meshed_gap import meshed_gap
from .place import WIRE_GAP, Placement, in_mm, measure_line, sideways, the_line
from .port import Gap
from .shapes import Region, region_of, wire_points

Floats = NDArray[np.float64]


def place_gap(
    placement: Placement,
    conductors: Sequence[Conductor],
    *,
    ground: bool,
    where: str,
    meshed: Mapping[str, tuple[Floats, Floats]] | None = None,
) -> Gap:
    """The gap meant by `placement`.

    Positive current flows from the start to the end of a wire or strip, up from the ground at a base, and
    across a gap line p1 -> p2 in the direction normal x (p2 - p1).

    Parameters
    ----------
    meshed
        For conductors from mesh files, by name: triangles (n, 3, 3) and lines (n, 2, 3), m.

    Raises
    ------
    InputError
        At `where`, for a conductor that does not exist, a place off it (with its nearest point), a gap wider
        than its leg, across a bend or past an end, a gap line off the metal, or a base without ground.
    """
    names = [conductor.name for conductor in conductors]
    if placement.conductor not in names:
        raise InputError(
            f"there is no conductor '{placement.conductor}'.",
            where=f"{where}, key 'conductor'",
            allowed=", ".join(names),
            hint=nearest(placement.conductor, names),
        )
    _one_place(placement, where)
    conductor = conductors[names.index(placement.conductor)]
    if isinstance(conductor, Wire):
        gap = _wire_gap(placement, conductor, ground, where)
    elif isinstance(conductor, Strip):
        gap = _strip_gap(placement, conductor, where)
    elif isinstance(conductor, Plate | Disc | Polygon):
        gap = _line_gap(placement, conductor.name, region_of(conductor), where)
    elif isinstance(conductor, MeshFile) and meshed and conductor.name in meshed:
        gap = meshed_gap(placement, conductor, *meshed[conductor.name], where)
    else:
        raise InputError(f"'{conductor.name}' cannot carry a gap.", where=where)
    if placement.reverse:
        return Gap(gap.kind, gap.centre, -gap.direction, gap.width, gap.across, gap.span)
    return gap


def _one_place(placement: Placement, where: str) -> None:
    given = [name for name in ("at", "along", "line") if getattr(placement, name) is not None]
    given += ["base"] if placement.base else []
    if len(given) != 1:
        told = "no place is given" if not given else f"{' and '.join(given)} are given together"
        raise InputError(f"{told}.", where=where, allowed="exactly one of at, along, line, base = true")


def _wire_gap(placement: Placement, wire: Wire, ground: bool, where: str) -> Gap:
    if placement.line is not None:
        _refuse_key(placement, "wire", "line", "at, along, or base = true", where)
    points = wire_points(wire)
    width = WIRE_GAP * wire.radius if placement.width is None else placement.width
    if placement.base:
        points, leg, middle = _foot(points, width, ground, where, wire.name), 0, 0.5 * width
    else:
        leg, middle = _on_polyline(placement, points, 1e-3 * wire.radius, where)
    centre, direction = _fit_in_leg(points, leg, middle, width, where, wire.name)
    return Gap("wire", centre, direction, width, sideways(direction), 2 * wire.radius)


def _strip_gap(placement: Placement, strip: Strip, where: str) -> Gap:
    if placement.line is not None or placement.base:
        _refuse_key(placement, "strip", "base" if placement.base else "line", "at or along", where)
    region = region_of(strip)
    points = np.stack([strip.start, strip.end]).astype(float)
    width = strip.width if placement.width is None else placement.width
    leg, middle = _on_polyline(placement, points, 1e-3 * strip.width, where)
    centre, direction = _fit_in_leg(points, leg, middle, width, where, strip.name)
    return Gap("sheet", centre, direction, width, region.frame[1], strip.width)


def _refuse_key(placement: Placement, what: str, key: str, allowed: str, where: str) -> None:
    raise InputError(
        f"'{key}' does not place a gap on the {what} '{placement.conductor}'.",
        where=f"{where}, key '{key}'",
        allowed=allowed,
    )


def _foot(points: Floats, width: float, ground: bool, where: str, name: str) -> Floats:
    """The polyline of a wire turned so that it starts at its foot on the ground."""
    if not ground:
        raise InputError(
            f"'{name}' has no base: the cell has no ground.",
            where=f"{where}, key 'base'",
            hint="Write ground = true at the top of the file, or place the gap with `at`.",
        )
    near = 1e-6 * float(np.ptp(points, axis=0).max())
    feet = [end for end in (0, -1) if abs(points[end, 2]) <= near]
    if len(feet) != 1:
        told = "no end" if not feet else "both ends"
        raise InputError(
            f"'{name}' has {told} on the ground: its ends are at {in_mm(points[0])} and {in_mm(points[-1])}.",
            where=f"{where}, key 'base'",
            allowed="a wire with one end at z = 0",
        )
    return points if feet[0] == 0 else points[::-1]


def _on_polyline(placement: Placement, points: Floats, tolerance: float, where: str) -> tuple[int, float]:
    """Leg number and length along that leg of the stated place."""
    lengths = np.linalg.norm(np.diff(points, axis=0), axis=1)
    ends = np.cumsum(lengths)
    if placement.along is not None:
        kind, value = placement.along
        s = value * ends[-1] if kind == "ratio" else value
        if s > ends[-1] * (1 + 1e-12):
            raise InputError(
                f"{1e3 * s:.6g} mm is past the end of '{placement.conductor}'.",
                where=f"{where}, key 'along'",
                allowed=f"up to its length, {1e3 * ends[-1]:.6g} mm",
            )
        leg = min(int(np.searchsorted(ends, s)), len(lengths) - 1)
        return leg, float(s - ends[leg] + lengths[leg])
    at = np.asarray(placement.at, dtype=float)
    axes = np.diff(points, axis=0) / lengths[:, None]
    s = np.clip(((at - points[:-1]) * axes).sum(1), 0, lengths)
    feet = points[:-1] + s[:, None] * axes
    distance = np.linalg.norm(feet - at, axis=1)
    leg = int(np.argmin(distance))
    if distance[leg] > tolerance:
        raise InputError(
            f"{in_mm(at)} is not on '{placement.conductor}': it lies {1e3 * distance[leg]:.4g} mm off.",
            where=f"{where}, key 'at'",
            hint=f"The nearest point of its centre line is {in_mm(feet[leg])}.",
        )
    return leg, float(s[leg])


def _fit_in_leg(
    points: Floats, leg: int, middle: float, width: float, where: str, name: str
) -> tuple[Floats, Floats]:
    """Centre and direction of a gap that lies wholly in one straight leg."""
    start, end = points[leg], points[leg + 1]
    length = float(np.linalg.norm(end - start))
    direction, slack = (end - start) / length, 1e-9 * length
    place = f"{where}, key 'width'"
    if width > length + slack:
        raise InputError(
            f"the gap of {1e3 * width:.4g} mm is wider than the leg of '{name}' it sits in "
            f"({1e3 * length:.4g} mm).",
            where=place,
            allowed=f"up to {1e3 * length:.4g} mm",
        )
    room = min(middle, length - middle)
    if width / 2 > room + slack:
        at_end = leg == 0 if middle < length / 2 else leg == len(points) - 2
        told = f"reaches past the end of '{name}'" if at_end else f"reaches across a bend of '{name}'"
        raise InputError(
            f"the gap of {1e3 * width:.4g} mm {told}: its middle is {1e3 * room:.4g} mm from there.",
            where=place,
            allowed=f"up to {2e3 * room:.4g} mm at this place, or a place inside the straight leg",
            hint="Start a conductor that runs on into the next cell elsewhere." if at_end else "",
        )
    return start + middle * direction, direction


def _line_gap(placement: Placement, name: str, region: Region, where: str) -> Gap:
    """Gap across a flat sheet along a stated line from rim to rim."""
    line = the_line(placement, where)
    across, span, centre = measure_line(line, where)
    direction = np.cross(region.frame[2], across)
    width = span if placement.width is None else placement.width
    near = 1e-4 * span
    steps = np.linspace(-0.5, 0.5, 33)[:, None] * span * across
    for points, key in (
        (centre + steps, "line"),
        (centre + np.array([[-0.5], [0.5]]) * width * direction, "width"),
    ):
        off = ~region.contains(points, near)
        if off.any():
            told = (
                "the gap line leaves" if key == "line" else f"the gap of {1e3 * width:.4g} mm reaches out of"
            )
            raise InputError(
                f"{told} '{name}' at {in_mm(points[off][0])}.",
                where=f"{where}, key '{key}'",
                allowed="a gap on the metal",
                hint=f"The nearest point of its rim is {in_mm(_nearest_on_rim(region, points[off][0]))}.",
            )
    beyond = centre + np.array([[-0.5], [0.5]]) * (1 + 1e-2) * span * across
    inside = region.contains(beyond, near)
    if inside.any():
        raise InputError(
            f"the gap line ends inside '{name}', at {in_mm(line[int(np.argmax(inside))])}: the metal beside "
            "it short-circuits the gap.",
            where=f"{where}, key 'line'",
            allowed="a line from rim to rim",
        )
    return Gap("sheet", centre, direction / np.linalg.norm(direction), width, across, span)


def _nearest_on_rim(region: Region, point: Floats) -> Floats:
    corners = region.corners
    step = np.roll(corners, -1, axis=0) - corners
    t = np.clip(((point - corners) * step).sum(1) / (step * step).sum(1), 0, 1)
    feet = corners + t[:, None] * step
    return feet[int(np.argmin(np.linalg.norm(feet - point, axis=1)))]
