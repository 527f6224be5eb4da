"""A stated place of a port or load, and what every kind of gap needs of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .errors import InputError

Floats = NDArray[np.float64]

WIRE_GAP = 4.0  # default width of a gap in a wire, radii: its terminals are then two diameters apart


@dataclass(frozen=True)
class Placement:
    """A place as the case file states it; exactly one of `at`, `along`, `base`, `line` is given.

    Attributes
    ----------
    conductor : name
    at : (3,) m, on the centre line of a wire or strip
    along : ("length", m) or ("ratio", 0 to 1) from the start of the centre line
    base : the foot of a wire on the ground
    line : (2, 3) m, ends of the gap line on a plate, disc, polygon or mesh
    width : m, extent of the gap along the current; None: 4 radii on a wire, else the length of the gap line
    reverse : positive current against the conductor's own sense
    """

    conductor: str
    at: Floats | None = None
    along: tuple[str, float] | None = None
    base: bool = False
    line: Floats | None = None
    width: float | None = None
    reverse: bool = False


def the_line(placement: Placement, where: str) -> Floats:
    """The gap line (2, 3) of a placement on what has no centre line; InputError where it is missing."""
    for key in ("at", "along", "base"):
        value = getattr(placement, key)
        if value is not None and value is not False:
            raise InputError(
                f"'{key}' does not place a gap on '{placement.conductor}', which has no centre line.",
                where=f"{where}, key '{key}'",
                allowed="line = [[x, y, z], [x, y, z]], the ends of the gap",
            )
    return np.asarray(placement.line, dtype=float)


def measure_line(line: Floats, where: str) -> tuple[Floats, float, Floats]:
    """Unit vector, length and middle of a gap line."""
    span = float(np.linalg.norm(line[1] - line[0]))
    if span <= 1e-12:
        raise InputError(f"both ends of the gap line are {in_mm(line[0])}.", where=f"{where}, key 'line'")
    return (line[1] - line[0]) / span, span, line.mean(0)


def sideways(direction: Floats) -> Floats:
    """Some unit vector perpendicular to `direction`."""
    other = np.eye(3)[int(np.argmin(np.abs(direction)))]
    across = np.cross(direction, other)
    return np.asarray(across / np.linalg.norm(across), dtype=float)


def in_mm(point: Floats) -> str:
    """A point for an error message: "(1.5, 0, 12) mm"."""
    return "(" + ", ".join(f"{1e3 * x + 0.0:.6g}" for x in np.asarray(point)) + ") mm"
