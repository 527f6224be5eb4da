"""Gaps: the places where a port drives, or a lumped load sits in, a conductor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Gap:
    """A box on a conductor in which the impressed field is uniform, E = V / width along `direction`.

    The current flowing through the gap is the mean of the conductor's current over the box, so that the port
    functional is the same in both roles and the impedance is reciprocal. At fixed width the impedance converges
    under mesh refinement; a gap of zero width has no limit.

    Parameters
    ----------
    kind
        "wire": acts on wire segments only; "sheet": acts on triangles only.
    centre
        Middle of the box, shape (3,), m.
    direction
        Unit vector from the negative to the positive terminal's side, shape (3,): the sense of positive current.
    width
        Extent along `direction`, m.
    across
        Unit vector of the gap line in the sheet, shape (3,) (sheet gaps; ignored on wires).
    span
        Length of the gap line along `across`, m (sheet gaps). On wires: the distance from the axis within which
        segments count as this wire's, normally twice its radius.
    """

    kind: str
    centre: Floats
    direction: Floats
    width: float
    across: Floats
    span: float


@dataclass(frozen=True)
class Port:
    """A gap with a generator: name, real reference resistance (ohm), drive (complex power-wave amplitude)."""

    name: str
    gap: Gap
    resistance: float = 50.0
    drive: complex = 1.0 + 0.0j


@dataclass(frozen=True)
class Load:
    """Lumped R (ohm), L (H), C (F) in series, sitting in a gap. C = None means no capacitor (a through connection)."""

    name: str
    gap: Gap
    resistance: float = 0.0
    inductance: float = 0.0
    capacitance: float | None = None

    def impedance(self, frequency: float) -> complex:
        """``R + j w L + 1/(j w C)`` in ohm at `frequency` in Hz."""
        omega = 2 * np.pi * frequency
        z = complex(self.resistance, omega * self.inductance)
        return z if self.capacitance is None else z + 1 / (1j * omega * self.capacitance)
