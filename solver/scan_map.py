"""A dense map of the active response over direction cosines, solved only where it changes fast.

Squares of the grid are quartered while linear interpolation misses their middles, or while a circle on which a Floquet
wave grazes or meets a surface wave, or the rim of visible space, crosses them; elsewhere it is interpolated linearly.
Peaks narrower than the finest square are the business of `peaks`.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .active import ActiveModel
from .surface_circles import Circle, circles
from .survey import ScanMap

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

POINTS = 97  # of the finest grid along each axis, 2^m times an even number plus 1
COARSE = 8  # step of the coarsest grid in steps of the finest
MISSED = 0.01  # error of linear interpolation, of reflection or of the main wave's amplitude (1: all available power)
RIM = 1.0 - 1e-9  # beyond, directions count as outside visible space
CORNERS = np.array([[0, 0], [1, 0], [0, 1], [1, 1]])
NINE = np.array([[i, j] for i in range(3) for j in range(3)])
LINE = np.array([[1, 0, 0], [0.5, 0, 0.5], [0, 0, 1]])
MEANS = np.kron(LINE, LINE)  # values at NINE by linear interpolation between the corners


def scan_map(active: ActiveModel, frequency: Floats, progress: Callable[[int, int], None] | None = None) -> ScanMap:
    """Map at every frequency (n_freq,) Hz, over all visible space.

    progress : called with (frequencies done, frequencies in all)
    """
    axis = np.linspace(-1, 1, POINTS)
    reflection, field, solved = [], [], []
    for f, hertz in enumerate(frequency):
        values, known = _one(active, float(hertz), axis)
        n_port = len(active.drive)
        reflection.append(values[..., :n_port])
        field.append(values[..., n_port:])
        solved.append(known)
        if progress:
            progress(f + 1, len(frequency))
    return ScanMap(np.asarray(frequency, dtype=float), axis, np.array(reflection), np.array(field), np.array(solved))


def _one(active: ActiveModel, frequency: float, axis: Floats) -> tuple[Complexes, Bools]:
    """Values (n, n, n_port + 2) and the mask of solved points at one frequency."""
    area_gain = 4 * np.pi * active.model.cell.lattice.area * (frequency / 299792458.0) ** 2

    def solve(uv: Floats) -> Complexes:
        reflection, field = active.reflection_and_field(frequency, uv)
        return np.concatenate([reflection, field], axis=1)

    grid = _Grid(axis, solve, len(active.drive) + 2)
    scale = np.ones(len(active.drive) + 2)
    scale[-2:] = 1 / np.sqrt(area_gain)
    grid.refine(scale, circles(active.model.view, frequency))
    return grid.filled(), grid.known


@dataclass
class _Grid:
    """Values on an adaptive grid."""

    axis: Floats
    solve: Callable[[Floats], Complexes]
    columns: int

    def __post_init__(self) -> None:
        n = len(self.axis)
        u, v = np.meshgrid(self.axis, self.axis, indexing="ij")
        self.square = u**2 + v**2
        self.inside = self.square < RIM
        self.known = np.zeros((n, n), dtype=bool)
        self.values = np.full((n, n, self.columns), complex(np.nan, np.nan))

    def refine(self, scale: Floats, lines: Sequence[Circle]) -> None:
        """Solve from the coarsest to the finest squares; `scale` weighs the columns in the criterion."""
        step = COARSE
        ticks = np.arange(0, len(self.axis) - 1, step)
        cells = np.stack(np.meshgrid(ticks, ticks, indexing="ij"), -1).reshape(-1, 2)
        self._solve_at((cells[:, None] + step * CORNERS).reshape(-1, 2))
        while step > 1:
            half = step // 2
            self._solve_at((cells[:, None] + half * NINE).reshape(-1, 2))
            cells = self._rough(cells, half, scale, lines)
            cells = (cells[:, None] + half * CORNERS).reshape(-1, 2)
            step = half

    def _solve_at(self, nodes: Ints) -> None:
        wanted = np.zeros_like(self.known)
        wanted[nodes[:, 0], nodes[:, 1]] = True
        i, j = np.nonzero(wanted & self.inside & ~self.known)
        if len(i):
            self.values[i, j] = self.solve(np.stack([self.axis[i], self.axis[j]], axis=1))
            self.known[i, j] = True

    def _rough(self, cells: Ints, half: int, scale: Floats, lines: Sequence[Circle]) -> Ints:
        """Squares whose quarters need a closer look: linear interpolation missed their solved middles by so much that
        it would still miss those of the quarters, or a circle or the rim crosses them."""
        nodes = cells[:, None] + half * NINE
        i, j = nodes[..., 0], nodes[..., 1]
        inside, values = self.inside[i, j], self.values[i, j] * scale
        missed = np.nanmax(np.abs(values - MEANS @ np.nan_to_num(values)), axis=(1, 2), initial=0.0)
        rough = (missed > 4 * MISSED) | ~inside.all(axis=1)
        uv = np.stack([self.axis[i], self.axis[j]], axis=-1)
        for line in lines:
            beyond = np.hypot(*np.moveaxis(uv - line.centre, -1, 0)) > line.radius
            rough |= beyond.any(axis=1) & ~beyond.all(axis=1)
        return cells[rough & inside.any(axis=1)]

    def filled(self) -> Complexes:
        """Values everywhere inside; points between are means of their neighbours, level by level."""
        values, known = self.values.copy(), self.known.copy()
        step = COARSE
        while step > 1:
            half = step // 2
            for di, dj, around in (
                (half, 0, ((-half, 0), (half, 0))),
                (0, half, ((0, -half), (0, half))),
                (half, half, ((-half, -half), (-half, half), (half, -half), (half, half))),
            ):
                i, j = (g.ravel() for g in np.meshgrid(
                    np.arange(di, len(self.axis), step), np.arange(dj, len(self.axis), step), indexing="ij"
                ))  # fmt: skip
                open_ = ~known[i, j] & self.inside[i, j]
                i, j = i[open_], j[open_]
                if len(i):
                    values[i, j] = np.mean([values[i + a, j + b] for a, b in around], axis=0)
            step = half
        return values
