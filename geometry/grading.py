"""Grid lines that crowd towards free edges and gaps, where current and charge of sheets are singular."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .structured import cell_count, even

Floats = NDArray[np.float64]

GROWTH = 6.0
"""Ratio of neighbouring cells on the way from a free edge into the sheet."""
EDGE_OF_SIZE, EDGE_OF_SIDE = 0.05, 1 / 24
"""Largest first cell at a free edge, relative to the element size and to both sides of the rectangle."""
EDGE_OF_GAP = 0.25
"""First cell beside the middle of a gap, relative to its width: the impressed field jumps at its borders."""
FULL_CELL = 0.7
"""Part of the element size from which a cell on the way in counts as an ordinary one."""
STRETCH = 0.5
"""Cells by which the even rest between graded ends may exceed the whole number it is divided into."""


def first_cell(size: float, length: float, edge: float) -> float:
    """Length of the first cell at a free edge of length `edge`, along a grid axis of `length`, m.

    At distance d from the edge the current along it goes as 1/sqrt(d), that towards it as sqrt(d) and the
    charge as 1/sqrt(d) (J. Meixner, IEEE TAP 20, 442, 1972; from memory), within the smaller side or so.
    """
    return min(EDGE_OF_SIZE * size, EDGE_OF_SIDE * length, EDGE_OF_SIDE * edge)


@dataclass(frozen=True)
class Interval:
    """Part of a grid axis between two fixed lines, and how finely it is to be divided.

    Attributes
    ----------
    length, size
        Its length and the element size, m.
    low, high
        Length of the first cell at either end, m; infinite where nothing is singular.
    least
        Least number of cells.
    centred
        It holds the middle of its rectangle: with an even number of cells the mesh is its own mirror image.
    """

    length: float
    size: float
    low: float = np.inf
    high: float = np.inf
    least: int = 1
    centred: bool = False

    def mirrored(self) -> Interval:
        """The same interval seen from its other end."""
        return replace(self, low=self.high, high=self.low)

    def merged(self, other: Interval) -> Interval:
        """What serves two intervals that must have the same lines."""
        return Interval(
            self.length,
            min(self.size, other.size),
            min(self.low, other.low),
            min(self.high, other.high),
            max(self.least, other.least),
            self.centred or other.centred,
        )

    def lines(self, refinement: float = 1.0) -> Floats:
        """Distances of all lines from the low end, both ends included.

        From a graded end the cells grow by `GROWTH` until they reach the element size or half of what is
        left; the rest is divided evenly. `refinement` multiplies the number of cells and keeps the shape of
        the grading, so that every cell shrinks by it, as nearly as whole numbers allow.
        """
        low, high, rest = self._graded_cells()
        graded = len(low) + len(high)
        wanted = rest / self.size
        if graded:  # round to the nearest number of cells of the right parity
            step = 2 if self._mirror else 1
            count = step * max(1, int(np.ceil(wanted / step - STRETCH - 1e-6)))
        else:
            count = cell_count(rest, self.size)
        count = max(count, self.least - graded)
        if self._mirror:
            count += (count + graded) % 2 if count + graded > 1 else 0
        start, end = np.cumsum([0.0, *low]), self.length - np.cumsum([0.0, *high])
        lines = np.concatenate([start[:-1], np.linspace(start[-1], end[-1], count + 1), end[-2::-1]])
        return self._resampled(lines, refinement)

    @property
    def _mirror(self) -> bool:
        """Whether the number of cells must be even; narrow graded strips make do with three."""
        graded = np.isfinite([self.low, self.high]).any()
        return self.centred and (not graded or (self.low == self.high and self.length > self.size))

    def _graded_cells(self) -> tuple[list[float], list[float], float]:
        """Growing cells from the low end and from the high end, and the length left between them."""
        cells: tuple[list[float], list[float]] = ([], [])
        following, rest = [self.low, self.high], self.length
        while True:
            cell = min(following)
            ends = [k for k in (0, 1) if following[k] <= cell * (1 + 1e-9)]
            if cell >= FULL_CELL * self.size or len(ends) * cell > 0.5 * rest:
                return *cells, rest
            for k in ends:
                cells[k].append(cell)
                following[k] *= GROWTH
                rest -= cell

    def _resampled(self, lines: Floats, refinement: float) -> Floats:
        n = len(lines) - 1
        wanted = max(self.least, cell_count(n * refinement, 1.0))
        wanted = even(wanted) if self._mirror else wanted
        if wanted == n:
            return lines
        return np.interp(np.arange(wanted + 1) * (n / wanted), np.arange(n + 1), lines)
