"""Grid lines of rectangles (strips and plates) that touch each other, chosen so that their edges match."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .port import Gap
from .shapes import Region
from .structured import cell_count, even, fill_intervals

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class EdgeContact:
    """An edge of rectangle `one` along its axis `d1` that lies on rectangle `two` along its axis `d2`.

    A point at x on the edge is at ``sign * x + offset`` on the other; they share low <= x <= high.
    """

    one: int
    d1: int
    two: int
    d2: int
    sign: float
    offset: float
    low: float
    high: float


class _Cuts:
    """Sorted coordinates along one axis of a rectangle, merged within a tolerance."""

    def __init__(self, length: float, tolerance: float):
        self.values, self.tolerance = [0.0, length], tolerance

    def add(self, x: float, clearance: float = 0.0) -> bool:
        """Add x unless it is outside, there already, or closer than `clearance` to another."""
        if not 0 < x < self.values[-1] or min(abs(x - v) for v in self.values) <= max(
            self.tolerance, clearance
        ):
            return False
        self.values = sorted([*self.values, x])
        return True

    def between(self, low: float, high: float) -> list[float]:
        return [v for v in self.values if low - self.tolerance <= v <= high + self.tolerance]

    def position(self, x: float) -> int:
        return int(np.argmin(np.abs(np.array(self.values) - x)))


def rectangle_lines(
    regions: Sequence[Region],
    sizes: Sequence[float],
    points: Sequence[Sequence[Floats]],
    gaps: Sequence[Gap],
    shifts: Floats,
    tolerance: float,
) -> list[tuple[Floats, Floats]]:
    """Grid lines (u, v) of each rectangle, starting at 0.

    Lines run through the `points` (n, 3) where wires attach, through the centres of sheet gaps, and through
    the ends of every edge that touches another rectangle or a periodic copy (displaced by `shifts` (k, 3));
    both sides of a contact get the same lines. Raises InputError when that would need ever finer cells.
    """
    cuts = [[_Cuts(side, tolerance) for side in r.sides] for r in regions]
    for region, mine, attached in zip(regions, cuts, points, strict=True):
        for point in attached:
            for axis, x in enumerate(region.local(point[None])[0, :2]):
                mine[axis].add(float(x))
    contacts = _edge_contacts(regions, cuts, shifts, tolerance)
    _share_cuts(cuts, contacts, sizes)
    for region, mine, size in zip(regions, cuts, sizes, strict=True):
        _cut_at_gaps(region, mine, gaps, 0.1 * size, tolerance)
    _share_cuts(cuts, contacts, sizes)
    counts = _matched_counts(cuts, contacts, sizes)
    return [
        (fill_intervals(np.array(c[0].values), n[0]), fill_intervals(np.array(c[1].values), n[1]))
        for c, n in zip(cuts, counts, strict=True)
    ]


def _cut_at_gaps(
    region: Region, cuts: list[_Cuts], gaps: Sequence[Gap], clearance: float, tolerance: float
) -> None:
    for gap in gaps:
        centre = np.asarray(gap.centre, dtype=float)
        if gap.kind != "sheet" or not region.contains(centre[None], tolerance)[0]:
            continue
        along = region.frame[:2] @ np.asarray(gap.direction, dtype=float)
        for axis in (0, 1):
            if abs(along[axis]) > 1 - 1e-6:
                cuts[axis].add(float(region.local(centre[None])[0, axis]), clearance)


def _edge_contacts(
    regions: Sequence[Region], cuts: list[list[_Cuts]], shifts: Floats, tolerance: float
) -> list[EdgeContact]:
    """All edges that lie along a grid direction on another rectangle; adds their line to its cuts."""
    found = []
    for i, one in enumerate(regions):
        corners = one.corners
        for j, two in enumerate(regions):
            for shift in shifts:
                if i == j and not shift.any():
                    continue
                local = two.local(corners - shift)
                if (local.min(0) > np.append(two.sides, 0.0) + tolerance).any() or (
                    local.max(0) < -tolerance
                ).any():
                    continue
                for k in range(4):
                    p, q = local[k], local[(k + 1) % 4]
                    found += _edge_on(i, k, p, q, j, two, cuts, one, tolerance)
    return found


def _edge_on(
    i: int,
    k: int,
    p: Floats,
    q: Floats,
    j: int,
    two: Region,
    cuts: list[list[_Cuts]],
    one: Region,
    tolerance: float,
) -> list[EdgeContact]:
    """Contact of edge k (from p to q in the frame of `two`), or nothing."""
    if max(abs(p[2]), abs(q[2])) > tolerance:
        return []
    for d2 in (0, 1):
        other = 1 - d2
        if abs(p[other] - q[other]) > tolerance:
            continue
        line = float(p[other])
        low, high = max(min(p[d2], q[d2]), 0.0), min(max(p[d2], q[d2]), float(two.sides[d2]))
        if not -tolerance <= line <= two.sides[other] + tolerance or high - low <= tolerance:
            return []
        d1 = k % 2
        if k >= 2:  # edges 2 and 3 run against the axis
            p, q = q, p
        sign = 1.0 if q[d2] > p[d2] else -1.0
        offset = float(p[d2])
        a, b = sorted([sign * (low - offset), sign * (high - offset)])
        cuts[j][other].add(line)
        return [EdgeContact(i, d1, j, d2, sign, offset, a, b)]
    return []


def _share_cuts(cuts: list[list[_Cuts]], contacts: Sequence[EdgeContact], sizes: Sequence[float]) -> None:
    """Copy cuts across all contacts until both sides of each have the same."""
    changed = True
    while changed:
        changed = False
        for c in contacts:
            one, two = cuts[c.one][c.d1], cuts[c.two][c.d2]
            for x in [c.low, c.high, *one.between(c.low, c.high)]:
                changed |= one.add(x) | two.add(c.sign * x + c.offset)
            ends = sorted([c.sign * c.low + c.offset, c.sign * c.high + c.offset])
            for y in two.between(*ends):
                changed |= one.add(c.sign * (y - c.offset))
        for mine, size in zip(cuts, sizes, strict=True):
            for axis in mine:
                if len(axis.values) > 20 + 8 * axis.values[-1] / size:
                    raise InputError(
                        "strips or plates touch (in the cell or across its border) at places that no "
                        "structured grid of this element size can match.",
                        where="[mesh]",
                        hint="Set the mesh method to 'unstructured'.",
                    )


def _matched_counts(
    cuts: list[list[_Cuts]], contacts: Sequence[EdgeContact], sizes: Sequence[float]
) -> list[list[NDArray[np.int64]]]:
    """Cells per interval, the same on both sides of every contact, and even about the middle."""
    parent: dict[tuple[int, int, int], tuple[int, int, int]] = {}

    def root(key: tuple[int, int, int]) -> tuple[int, int, int]:
        while parent.get(key, key) != key:
            key = parent[key]
        return key

    for c in contacts:
        one, two = cuts[c.one][c.d1], cuts[c.two][c.d2]
        shared = one.between(c.low, c.high)
        for x, y in pairwise(shared):
            a = (c.one, c.d1, one.position(x))
            b = (c.two, c.d2, min(two.position(c.sign * x + c.offset), two.position(c.sign * y + c.offset)))
            parent[root(a)] = root(b)
    need: dict[tuple[int, int, int], int] = defaultdict(int)
    for n, mine in enumerate(cuts):
        for axis, line in enumerate(mine):
            for k, count in enumerate(_own_counts(line.values, sizes[n], mine[1 - axis].values[-1])):
                key = root((n, axis, k))
                need[key] = max(need[key], count)
    return [
        [
            np.array([need[root((n, axis, k))] for k in range(len(line.values) - 1)])
            for axis, line in enumerate(mine)
        ]
        for n, mine in enumerate(cuts)
    ]


def _own_counts(values: list[float], size: float, other_side: float) -> list[int]:
    """Cells per interval of one axis by size alone; at least two along the long side; mirror symmetric."""
    steps = np.diff(values)
    counts = [cell_count(float(step), size) for step in steps]
    if sum(counts) == 1 and values[-1] >= other_side:
        counts[0] = 2
    middle = 0.5 * values[-1]
    for k, step in enumerate(steps):
        if values[k] + 1e-6 * step < middle < values[k + 1] - 1e-6 * step:
            counts[k] = even(counts[k])
    return counts
