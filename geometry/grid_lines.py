"""Grid lines of rectangles (strips and plates) that touch each other, chosen so that their edges match."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .grading import EDGE_OF_GAP, Interval, first_cell
from .port import Gap
from .shapes import Region

Floats = NDArray[np.float64]
Key = tuple[int, int, int]


@dataclass(frozen=True)
class EdgeContact:
    """An edge of rectangle `one` along its axis `d1` that lies on rectangle `two` along its axis `d2`.

    A point at x on the edge is at ``sign * x + offset`` on the other; they share low <= x <= high. `edge`
    counts the edges of `one` from its origin: v = 0, u at its end, v at its end, u = 0.
    """

    one: int
    edge: int
    d1: int
    two: int
    d2: int
    sign: float
    offset: float
    low: float
    high: float


class _Cuts:
    """Sorted coordinates along one axis of a rectangle, merged within a tolerance.

    `first` holds the lengths of the cells that start at some of them, where these are to be graded.
    """

    def __init__(self, length: float, tolerance: float):
        self.values, self.tolerance = [0.0, length], tolerance
        self.first: dict[float, float] = {}

    def grade(self, x: float, first: float) -> None:
        """Ask for cells that start with length `first` on both sides of the cut nearest to x."""
        value = self.values[self.position(x)]
        self.first[value] = min(first, self.first.get(value, np.inf))

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
    *,
    ground: bool = False,
    graded: Sequence[bool] | None = None,
    refinement: float = 1.0,
) -> list[tuple[Floats, Floats]]:
    """Grid lines (u, v) of each rectangle, starting at 0.

    Lines run through the `points` (n, 3) where wires attach, through the centres of sheet gaps, and through
    the ends of every edge that touches another rectangle or a periodic copy (displaced by `shifts` (k, 3));
    both sides of a contact get the same lines. Lines of the rectangles marked in `graded` (default: all)
    crowd towards gaps and free edges, which are those that neither stand on a `ground` at z = 0 nor share
    half their length or more with another edge or sheet; `refinement` then multiplies the number of cells.
    Raises InputError when matching the lines would need ever finer cells.
    """
    cuts = [[_Cuts(side, tolerance) for side in r.sides] for r in regions]
    for region, mine, attached in zip(regions, cuts, points, strict=True):
        for point in attached:
            for axis, x in enumerate(region.local(point[None])[0, :2]):
                mine[axis].add(float(x))
    contacts = _edge_contacts(regions, cuts, shifts, tolerance)
    _share_cuts(cuts, contacts, sizes)
    marked = [True] * len(regions) if graded is None else graded
    for region, mine, size, mark in zip(regions, cuts, sizes, marked, strict=True):
        _cut_at_gaps(region, mine, gaps, 0.1 * size, tolerance, mark)
    _share_cuts(cuts, contacts, sizes)
    for n, (region, mine, size, mark) in enumerate(zip(regions, cuts, sizes, marked, strict=True)):
        if mark:
            joined = [c for c in contacts if c.one == n]
            _grade_free_edges(region, mine, size, joined, tolerance if ground else -np.inf)
    return _matched_lines(cuts, contacts, sizes, refinement)


def _grade_free_edges(
    region: Region, cuts: list[_Cuts], size: float, contacts: Sequence[EdgeContact], ground: float
) -> None:
    """Grade towards the edges that share less than half their length; edges up to z = `ground` are joined."""
    corners, sides = region.corners, region.sides
    for edge in range(4):
        along = edge % 2
        shared = sum(c.high - c.low for c in contacts if c.edge == edge)
        stands = max(corners[edge, 2], corners[(edge + 1) % 4, 2]) <= ground
        if not stands and shared < 0.5 * sides[along]:
            end = float(sides[1 - along]) if edge in (1, 2) else 0.0
            cuts[1 - along].grade(end, first_cell(size, float(sides[1 - along]), float(sides[along])))


def _cut_at_gaps(
    region: Region,
    cuts: list[_Cuts],
    gaps: Sequence[Gap],
    clearance: float,
    tolerance: float,
    graded: bool,
) -> None:
    for gap in gaps:
        centre = np.asarray(gap.centre, dtype=float)
        if gap.kind != "sheet" or not region.contains(centre[None], tolerance)[0]:
            continue
        along = region.frame[:2] @ np.asarray(gap.direction, dtype=float)
        for axis in (0, 1):
            if abs(along[axis]) > 1 - 1e-6:
                x = float(region.local(centre[None])[0, axis])
                cuts[axis].add(x, clearance)
                if graded:
                    cuts[axis].grade(x, EDGE_OF_GAP * gap.width)


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
        return [EdgeContact(i, k, d1, j, d2, sign, offset, a, b)]
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


class _Classes:
    """Intervals (rectangle, axis, index) that must have the same lines, some seen from opposite ends."""

    def __init__(self) -> None:
        self.parent: dict[Key, tuple[Key, bool]] = {}
        self.symmetric: set[Key] = set()

    def find(self, key: Key) -> tuple[Key, bool]:
        """The representative of a class, and whether it runs against `key`."""
        flip = False
        while key in self.parent:
            key, step = self.parent[key]
            flip ^= step
        return key, flip

    def join(self, a: Key, b: Key, flip: bool) -> None:
        (a, one), (b, two) = self.find(a), self.find(b)
        flip ^= one ^ two
        if a != b:
            self.parent[a] = (b, flip)
            if a in self.symmetric:
                self.symmetric.add(b)
        elif flip:
            self.symmetric.add(a)


def _matched_lines(
    cuts: list[list[_Cuts]], contacts: Sequence[EdgeContact], sizes: Sequence[float], refinement: float
) -> list[tuple[Floats, Floats]]:
    """Lines of all rectangles, the same on both sides of every contact."""
    classes = _Classes()
    for c in contacts:
        one, two = cuts[c.one][c.d1], cuts[c.two][c.d2]
        for x, y in pairwise(one.between(c.low, c.high)):
            k = min(two.position(c.sign * x + c.offset), two.position(c.sign * y + c.offset))
            classes.join((c.one, c.d1, one.position(x)), (c.two, c.d2, k), c.sign < 0)
    need: dict[Key, Interval] = {}
    for n, mine in enumerate(cuts):
        for axis, line in enumerate(mine):
            for k, interval in enumerate(_own_intervals(line, sizes[n], mine[1 - axis].values[-1])):
                root, flip = classes.find((n, axis, k))
                interval = interval.mirrored() if flip else interval
                need[root] = interval.merged(need.get(root, interval))
    for root in (root for root in classes.symmetric if root in need):
        need[root] = need[root].merged(need[root].mirrored())
    divided = {root: interval.lines(refinement) / interval.length for root, interval in need.items()}

    def lines_of(n: int, axis: int) -> Floats:
        parts, values = [], cuts[n][axis].values
        for k, (low, high) in enumerate(pairwise(values)):
            root, flip = classes.find((n, axis, k))
            fractions = 1 - divided[root][::-1] if flip else divided[root]
            parts.append(low + (high - low) * fractions[:-1])
        return np.concatenate([*parts, values[-1:]])

    return [(lines_of(n, 0), lines_of(n, 1)) for n in range(len(cuts))]


def _own_intervals(line: _Cuts, size: float, other_side: float) -> list[Interval]:
    """Intervals of one axis by themselves; at least two cells along the long side."""
    values, middle = line.values, 0.5 * line.values[-1]
    least = 2 if len(values) == 2 and values[-1] >= other_side else 1
    return [
        Interval(
            high - low,
            size,
            line.first.get(low, np.inf),
            line.first.get(high, np.inf),
            least,
            low + 1e-6 * (high - low) < middle < high - 1e-6 * (high - low),
        )
        for low, high in pairwise(values)
    ]
