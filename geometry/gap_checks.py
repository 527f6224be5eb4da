"""Gaps that get in each other's way, or catch a conductor that is not theirs."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from .conductor import Conductor, Wire
from .errors import InputError
from .lattice import Lattice
from .place import in_mm
from .port import Gap
from .shapes import wire_points

Floats = NDArray[np.float64]


def check_gaps(gaps: Sequence[tuple[str, Gap]], conductors: Sequence[Conductor], lattice: Lattice) -> None:
    """Refuse gaps that overlap, and a gap in a wire that would also catch another wire; modulo the lattice.

    Parameters
    ----------
    gaps
        (place in the case file, gap) of every port and load.
    """
    for number, (where, gap) in enumerate(gaps):
        shifts = _shifts(lattice, gap.centre)
        for other_where, other in gaps[:number]:
            if any(_overlap(gap, other, shift) for shift in shifts):
                raise InputError(
                    f"the gap at {in_mm(gap.centre)} overlaps that of {other_where} at "
                    f"{in_mm(other.centre)}.",
                    where=where,
                    allowed="gaps at least their widths apart",
                )
        if gap.kind == "wire":
            _refuse_caught_wires(where, gap, conductors, shifts)


def _shifts(lattice: Lattice, centre: Floats) -> Floats:
    cells = np.stack(np.meshgrid([-1, 0, 1], [-1, 0, 1], indexing="ij"), axis=-1).reshape(-1, 2)
    rho = lattice.reduced.positions(cells)
    return np.column_stack([rho, np.zeros(len(rho))])


def _overlap(one: Gap, two: Gap, shift: Floats) -> bool:
    if one.kind != two.kind:
        return False
    return bool(_caught(one, _samples(two) + shift).any() or _caught(two, _samples(one) - shift).any())


def _samples(gap: Gap) -> Floats:
    """Points of the gap's middle plane: of a wire along the axis, of a sheet over the box."""
    s = np.linspace(-0.5, 0.5, 17) * (1 - 1e-6)
    along = gap.centre + s[:, None] * gap.width * gap.direction
    if gap.kind == "wire":
        return along
    return (along[:, None] + s[:, None] * gap.span * gap.across).reshape(-1, 3)


def _caught(gap: Gap, points: Floats) -> NDArray[np.bool_]:
    """Which points lie inside the gap's box."""
    rel = points - gap.centre
    s = rel @ gap.direction
    inside = np.abs(s) < 0.5 * gap.width * (1 - 1e-6)
    if gap.kind == "wire":
        return inside & (np.linalg.norm(rel - s[:, None] * gap.direction, axis=1) < gap.span)
    normal = np.cross(gap.direction, gap.across)
    return inside & (np.abs(rel @ gap.across) < 0.5 * gap.span) & (np.abs(rel @ normal) < 1e-3 * gap.span)


def _refuse_caught_wires(where: str, gap: Gap, conductors: Sequence[Conductor], shifts: Floats) -> None:
    for wire in (c for c in conductors if isinstance(c, Wire)):
        points = wire_points(wire)
        for start, end in pairwise(points):
            for shift in shifts:
                inside = _distance_in_slab(gap, start + shift, end + shift)
                along = abs((end - start) @ gap.direction) > (1 - 1e-9) * np.linalg.norm(end - start)
                if inside < gap.span * (1 - 1e-6) and not (along and inside < 1e-6 * gap.span):
                    raise InputError(
                        f"the gap at {in_mm(gap.centre)} also catches '{wire.name}', {1e3 * inside:.4g} mm "
                        "from its axis.",
                        where=where,
                        allowed=f"no other wire within {1e3 * gap.span:.4g} mm (two radii) of a gap",
                    )


def _distance_in_slab(gap: Gap, start: Floats, end: Floats) -> float:
    """Least distance from the gap's axis of a segment's part between the gap's end planes; inf if none."""
    s0, s1 = (start - gap.centre) @ gap.direction, (end - gap.centre) @ gap.direction
    half, low, high = 0.5 * gap.width * (1 - 1e-6), 0.0, 1.0
    if abs(s1 - s0) > 1e-12 * gap.width:
        t = np.sort(np.array([-half - s0, half - s0]) / (s1 - s0))
        low, high = max(low, t[0]), min(high, t[1])
    elif abs(s0) > half:
        return np.inf
    if low > high:
        return np.inf
    r0 = start - gap.centre - s0 * gap.direction
    step = end - gap.centre - s1 * gap.direction - r0
    t = np.clip(-(r0 @ step) / max(step @ step, 1e-300), low, high)
    return float(np.linalg.norm(r0 + t * step))
