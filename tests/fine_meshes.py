"""Meshes of rectangles whose cells crowd towards the edges far more than the mesher's own, to see where the solver
tends to."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from cells import PEC, SQUARE, sheet_gap
from numpy.typing import NDArray
from scanward.geometry.cell import UnitCell
from scanward.geometry.mesh import Mesh
from scanward.geometry.port import Port
from scanward.geometry.stack import Stack
from scanward.geometry.structured import rectangle_mesh

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Grading:
    """First cells at the ends along x, beside a gap and at the sides along y; growth; largest cells along x, y."""

    end: float = 0.00025
    gap: float = 0.004
    side: float = 0.0005
    growth: float = 4.0
    largest: tuple[float, float] = (0.03, 0.05)


FINE = Grading(0.00012, 0.004, 0.00025, 2.5)


@dataclass(frozen=True)
class Flat:
    """A rectangle with sides along x and y at a height; its gap (middle along x, width) goes all the way across."""

    length: float
    width: float
    height: float
    gap: tuple[float, float] | None = None
    centre: tuple[float, float] = (0.0, 0.0)


def growing(start: float, stop: float, first: float, last: float, growth: float, largest: float) -> Floats:
    """Grid lines from `start` to `stop` whose cells grow from `first` and from `last` up to `largest`."""
    left, right, steps = [start], [stop], [first, last]
    while right[-1] - left[-1] > 1.6 * min(steps):
        if steps[0] <= steps[1]:
            left.append(left[-1] + steps[0])
            steps[0] = min(steps[0] * growth, largest)
        else:
            right.append(right[-1] - steps[1])
            steps[1] = min(steps[1] * growth, largest)
    return np.array(left + right[::-1])


def _lines(flat: Flat, g: Grading) -> tuple[Floats, Floats]:
    x, y = flat.length / 2, flat.width / 2
    pieces = [(-x, 0.0, g.end, g.largest[0]), (0.0, x, g.largest[0], g.end)]
    if flat.gap is not None:
        low, high = (flat.gap[0] + s * flat.gap[1] / 2 for s in (-1, 1))
        pieces = [(-x, low, g.end, g.gap), (low, high, g.gap, g.gap), (high, x, g.gap, g.end)]
    along = [growing(*piece, g.growth, g.largest[0]) for piece in pieces]
    across = growing(0.0, y, g.largest[1], g.side, g.growth, g.largest[1])
    return np.unique(np.concatenate(along)), np.concatenate([-across[:0:-1], across])


def fine_cell(flats: Sequence[Flat], stack: Stack, grading: Grading = FINE) -> UnitCell:
    """The rectangles in the half-wave square lattice, one port for each gap."""
    points, triangles, owner, ports = [], [], [], []
    for i, flat in enumerate(flats):
        flat_points, flat_triangles = rectangle_mesh(*_lines(flat, grading))
        triangles.append(flat_triangles + sum(len(p) for p in points))
        points.append(np.column_stack([flat_points + flat.centre, np.full(len(flat_points), flat.height)]))
        owner.append(np.full(len(flat_triangles), i))
        if flat.gap is not None:
            middle = (flat.centre[0] + flat.gap[0], flat.centre[1], flat.height)
            ports.append(Port(f"p{i + 1}", sheet_gap(middle, flat.gap[1], flat.width)))
    none = np.zeros(0, dtype=np.int64)
    mesh = Mesh(
        np.concatenate(points), np.concatenate(triangles), np.concatenate(owner), none.reshape(0, 2), np.zeros(0), none,
        tuple(f"flat {i + 1}" for i in range(len(flats))), (PEC,) * len(flats),
    )  # fmt: skip
    return UnitCell(SQUARE, mesh, tuple(ports), (), stack.ground, stack)
