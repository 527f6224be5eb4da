"""Wires as chains of segments: where they meet each other and sheets, and how each leg is divided."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from .conductor import Wire
from .contact import half_of, parallel_overlap, segment_distance
from .errors import InputError
from .grading import EDGE_OF_GAP, EDGE_OF_SIZE, Interval
from .port import Gap
from .shapes import Region, place_of, wire_points
from .structured import cell_count

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

STEEPEST_FOLD = np.cos(np.radians(15.0))


@dataclass
class Leg:
    """One straight leg of a wire; `nodes` and `wishes`: where on it (m) nodes must and should be.

    Each wish comes with the width of its gap. Ends without a node of the list, off the ground, are open.
    """

    wire: Wire
    index: int
    conductor: int
    start: Floats
    end: Floats
    size: float
    nodes: list[float] = field(default_factory=list)
    wishes: list[tuple[float, float]] = field(default_factory=list)
    grounded: bool = False

    @property
    def length(self) -> float:
        return float(np.linalg.norm(self.end - self.start))

    @property
    def direction(self) -> Floats:
        return (self.end - self.start) / self.length

    @property
    def label(self) -> str:
        return f"leg {self.index} of wire '{self.wire.name}'"

    def at(self, distance: float | Floats) -> Floats:
        return self.start + np.multiply.outer(distance, self.direction)


def legs_of(wires: Sequence[tuple[int, Wire, float]], ground: bool, tolerance: float) -> list[Leg]:
    """Straight legs of (conductor index, wire, element size), checked against the ground at z = 0."""
    legs = []
    for conductor, wire, size in wires:
        points = wire_points(wire).copy()
        if ground:
            points[np.abs(points[:, 2]) <= tolerance, 2] = 0.0
            _check_over_ground(wire, points)
        for k in range(len(points) - 1):
            legs.append(Leg(wire, k + 1, conductor, points[k], points[k + 1], size, grounded=ground))
    return legs


def _check_over_ground(wire: Wire, points: Floats) -> None:
    z = points[:, 2]
    if z.min() < 0:
        raise InputError(
            f"the conductor reaches z = {z.min():.4g} m, below the ground at z = 0.",
            where=place_of(wire, "points"),
        )
    floating = (z > 0) & (z < wire.radius)
    if floating.any():
        raise InputError(
            f"a point at z = {z[floating][0]:.4g} m is less than a radius ({wire.radius:.4g} m) above it.",
            where=place_of(wire, "points"),
            allowed="z = 0 (connected to the ground) or at least one radius",
        )
    length = np.linalg.norm(np.diff(points, axis=0), axis=1)
    rise = np.abs(np.diff(z)) / length
    touches = (z[:-1] == 0) | (z[1:] == 0)
    if (touches & (rise < 0.5)).any():
        raise InputError(
            "a leg lies on the ground, or leaves it at less than 30 degrees and overlaps it.",
            where=place_of(wire, "points"),
        )


def meet_wires(legs: Sequence[Leg], shifts: Floats, tolerance: float) -> None:
    """Put a node wherever legs touch (also a periodic copy); raises InputError where they overlap."""
    if not legs:
        return
    start, end = np.array([leg.start for leg in legs]), np.array([leg.end for leg in legs])
    radius = np.array([leg.wire.radius for leg in legs])
    for shift in half_of(shifts):
        moved = bool(np.any(shift != 0))
        i, j = np.meshgrid(np.arange(len(legs)), np.arange(len(legs)), indexing="ij")
        keep = np.ones_like(i, dtype=bool) if moved else i < j
        i, j = i[keep], j[keep]
        p, q, r, s = start[i], end[i], start[j] + shift, end[j] + shift
        apart, t1, t2 = segment_distance(p, q, r, s)
        limit = radius[i] + radius[j]
        along = parallel_overlap(p, q, r, s)
        for n in np.flatnonzero(apart < np.maximum(limit * (1 - 1e-9), tolerance)):
            one, two = legs[i[n]], legs[j[n]]
            if apart[n] > tolerance or along[n] > tolerance:
                _refuse_overlap(one, two, float(apart[n]), float(limit[n]), moved)
            _refuse_fold(one, two, float(t1[n]), float(t2[n]), moved)
            one.nodes.append(float(t1[n]) * one.length)
            two.nodes.append(float(t2[n]) * two.length)


def _refuse_overlap(one: Leg, two: Leg, apart: float, limit: float, moved: bool) -> None:
    copy = " of the next cell" if moved else ""
    raise InputError(
        f"{one.label} and {two.label}{copy} are {apart:.4g} m apart, axis to axis, "
        f"{'lying on each other' if apart < 1e-3 * limit else 'and overlap without being connected'}.",
        where=place_of(one.wire, "points"),
        allowed=f"at least {limit:.4g} m (the sum of the radii), or axes that meet in a point",
    )


def _refuse_fold(one: Leg, two: Leg, t1: float, t2: float, moved: bool) -> None:
    """Two legs that meet in ends at an angle below 15 degrees overlap along much of their run."""
    ends = [t for t in (t1, t2) if min(t, 1 - t) < 1e-6]
    cosine = float(one.direction @ two.direction)
    if len(ends) == 2:
        cosine *= 1 if (t1 < 0.5) == (t2 < 0.5) else -1
    else:
        cosine = abs(cosine)
    if cosine > STEEPEST_FOLD:
        raise InputError(
            f"{one.label} and {two.label}{' of the next cell' if moved else ''} meet at "
            f"{np.degrees(np.arccos(min(cosine, 1.0))):.3g} degrees and overlap.",
            where=place_of(one.wire, "points"),
            allowed="at least 15 degrees between wires that meet",
        )


def attach_to_sheets(
    legs: Sequence[Leg], regions: Sequence[Region], shifts: Floats, tolerance: float
) -> list[list[Floats]]:
    """Put a node wherever a leg ends on or pierces a sheet (or its copy); returns these points by sheet."""
    found: list[list[Floats]] = [[] for _ in regions]
    if not legs:
        return found
    ends = np.array([[leg.start, leg.end] for leg in legs])
    for region, points in zip(regions, found, strict=True):
        for shift in shifts:
            height = region.local((ends - shift).reshape(-1, 3))[:, 2].reshape(-1, 2)
            for n in np.flatnonzero((height.min(1) <= tolerance) & (height.max(1) >= -tolerance)).tolist():
                leg = legs[n]
                for t in _plane_crossings(height[n], tolerance):
                    here = leg.start + t * (leg.end - leg.start)
                    if region.contains((here - shift)[None], tolerance)[0]:
                        leg.nodes.append(t * leg.length)
                        points.append(here - shift)
    return found


def _plane_crossings(height: Floats, tolerance: float) -> list[float]:
    """Fractions of a leg at which it meets a plane, given the heights of its two ends over the plane."""
    hits = [float(k) for k in (0, 1) if abs(height[k]) <= tolerance]
    if not hits and height[0] * height[1] < 0:
        hits.append(float(height[0] / (height[0] - height[1])))
    return hits


def place_gaps(legs: Sequence[Leg], gaps: Sequence[Gap], tolerance: float) -> None:
    """Wish for a node at the centre of each wire gap; InputError unless its box lies within one leg."""
    for gap in (g for g in gaps if g.kind == "wire"):
        where = f"gap at {np.asarray(gap.centre).tolist()} m"
        if not legs:
            raise InputError("the gap is of kind 'wire', but the cell has no wire.", where=where)
        centre = np.asarray(gap.centre, dtype=float)
        along = np.array([(centre - leg.start) @ leg.direction for leg in legs])
        lengths = np.array([leg.length for leg in legs])
        foot = np.clip(along, 0, lengths)
        miss = np.array([np.linalg.norm(centre - leg.at(x)) for leg, x in zip(legs, foot, strict=True)])
        near = int(np.argmin(miss))
        if miss[near] > max(0.5 * legs[near].wire.radius, tolerance):
            raise InputError(
                f"the gap's centre lies on no wire, but {miss[near]:.4g} m off {legs[near].label}.",
                where=where,
            )
        on_axis = np.flatnonzero(miss <= max(0.5 * legs[near].wire.radius, tolerance)).tolist()
        aligned = [
            n
            for n in on_axis
            if abs(legs[n].direction @ gap.direction) > (1 - 1e-6) * np.linalg.norm(gap.direction)
        ]
        if not aligned:
            raise InputError(
                f"the gap's direction {np.asarray(gap.direction).tolist()} is not along {legs[near].label}.",
                where=where,
                allowed=f"plus or minus {legs[near].direction.round(6).tolist()}",
            )
        inside = [
            n
            for n in aligned
            if tolerance > gap.width / 2 - min(along[n], lengths[n] - along[n]) and gap.width > 0
        ]
        if not inside:
            n = aligned[0]
            room = 2 * min(along[n], lengths[n] - along[n])
            raise InputError(
                f"the gap of width {gap.width:.4g} m reaches beyond {legs[n].label}.",
                where=where,
                allowed=f"a width above 0 and up to {max(room, 0.0):.4g} m about this centre",
                hint="Move the centre away from the end or bend by half the gap's width."
                if room < gap.width
                else "",
            )
        legs[inside[0]].wishes.append((float(along[inside[0]]), gap.width))


def open_ends(leg: Leg, tolerance: float) -> list[float]:
    """Where on the leg (0, its length or both) the wire ends in the open."""
    ends = []
    for here, point in ((0.0, leg.start), (leg.length, leg.end)):
        joined = any(abs(node - here) <= tolerance for node in leg.nodes)
        if not joined and not (leg.grounded and point[2] == 0):
            ends.append(here)
    return ends


def divide_leg(leg: Leg, tolerance: float, *, graded: bool = True) -> Floats:
    """Distances of all nodes along a leg, 0 to its length: segments of about `size`, none below two radii.

    `graded`: shorter segments at open ends and beside gaps, where the charge of the wire gathers.
    """
    shortest = 2 * leg.wire.radius
    fixed = np.unique(np.clip([0.0, leg.length, *leg.nodes], 0, leg.length))
    fixed = fixed[np.concatenate([[True], np.diff(fixed) > tolerance])]
    fixed[-1] = leg.length
    if np.diff(fixed).min() < shortest * (1 - 1e-9):
        raise InputError(
            f"two connections on {leg.label} are {np.diff(fixed).min():.4g} m apart, less than two radii.",
            where=place_of(leg.wire, "points"),
            allowed=f"at least {shortest:.4g} m (thin-wire model), or one common point",
        )
    crowded = [(end, EDGE_OF_SIZE * leg.size) for end in open_ends(leg, tolerance)] if graded else []
    for wish, width in sorted(leg.wishes):
        if np.abs(fixed - wish).min() >= shortest:
            fixed = np.sort(np.append(fixed, wish))
        crowded += [(wish, EDGE_OF_GAP * width)] if graded else []  # at the node nearest to it
    first = {
        float(fixed[np.argmin(np.abs(fixed - x))]): max(cell, shortest * (1 + 1e-9)) for x, cell in crowded
    }
    parts = [
        low + _divide(high - low, leg.size, shortest, first.get(low, np.inf), first.get(high, np.inf))[:-1]
        for low, high in pairwise(fixed.tolist())
    ]
    nodes = np.concatenate([*parts, fixed[-1:]])
    return nodes if len(nodes) > 2 else leg.length * np.array([0.0, 0.5, 1.0])


def _divide(length: float, size: float, shortest: float, low: float, high: float) -> Floats:
    """Nodes of a piece of wire, graded if that leaves no segment too short; both ends included."""
    lines = Interval(length, size, low, high).lines()
    if np.diff(lines).min() >= shortest * (1 - 1e-9):
        return lines
    most = max(1, int(np.floor(length / shortest * (1 + 1e-9))))
    return np.linspace(0.0, length, min(cell_count(length, size), most) + 1)


def meet_interfaces(legs: Sequence[Leg], heights: Sequence[float], tolerance: float) -> None:
    """Put a node wherever a leg crosses one of the heights (m); ends that touch one stay what they are."""
    for leg in legs:
        rise = float(leg.end[2] - leg.start[2])
        for height in heights:
            away = np.sort([(height - leg.start[2]) * np.sign(rise), (leg.end[2] - height) * np.sign(rise)])
            if rise and away[0] > tolerance:
                leg.nodes.append(float((height - leg.start[2]) / rise * leg.length))


def meet_points(legs: Sequence[Leg], points: Sequence[Floats], shifts: Floats, tolerance: float) -> None:
    """Put a node wherever a leg runs through a point of an imported mesh (n, 3), or of its periodic copy."""
    if not points:
        return
    every = np.concatenate(points)
    for leg in legs:
        for shift in shifts:
            rel = every + shift - leg.start
            along = np.clip(rel @ leg.direction, 0, leg.length)
            miss = np.linalg.norm(rel - along[:, None] * leg.direction, axis=1)
            leg.nodes.extend(along[miss <= tolerance].tolist())
