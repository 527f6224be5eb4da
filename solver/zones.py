"""Zones: which conductors share a set of heights, and hence rays in the near part and levels in the far part.

All horizontal elements at one height are one zone, with one exact level. Everything else, vertical and tilted, forms
one zone in air and one per layer in a stack (the kernels bend at interfaces), with Chebyshev levels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from ..geometry.stack import Stack
from .basis import Basis
from .lines import sections

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

MAX_EXACT_LEVELS = 6


@dataclass(frozen=True)
class Zone:
    """Heights from `low` to `high`, m, within one section (layer) of the stack.

    A level (`low` = `high`) on an interface belongs to either side; `section` is then the one above.
    """

    low: float
    high: float
    section: int = 0

    @property
    def is_level(self) -> bool:
        """Horizontal conductors at one height."""
        return self.low == self.high


@dataclass(frozen=True)
class Zoning:
    """All zones and the zone of every element, (n_element,) (triangles, then segments, then fans)."""

    zones: tuple[Zone, ...]
    of_element: Ints


def element_heights(basis: Basis) -> tuple[Floats, Floats]:
    """Lowest and highest corner of every element, (n_element,) each, m."""
    corners = [part[:, :, 2] for part in (basis.triangles, basis.segments, basis.fans) if len(part)]
    return np.concatenate([z.min(axis=1) for z in corners]), np.concatenate([z.max(axis=1) for z in corners])


def divide_zones(basis: Basis, stack: Stack | None) -> Zoning:
    """Sort the elements of a cell into zones, levels first, bottom to top.

    Raises
    ------
    InputError
        If an element crosses an interface, or lies on the ground or on a sheet.
    """
    low, high = element_heights(basis)
    grain = 1e-10 * max(float(np.ptp(basis.mesh.points, axis=0).max()), float(np.abs(basis.mesh.points[:, 2]).max()))
    if stack is not None:
        low, high = stack.snap(low), stack.snap(high)
    flat = high - low <= grain
    levels = _distinct(low[flat], 10 * grain)
    if len(levels) > MAX_EXACT_LEVELS:
        flat, levels = np.zeros_like(flat), levels[:0]
    section = np.zeros(len(low), dtype=np.int64) if stack is None else _sections_of(stack, low, high)
    of_element = np.full(len(low), -1, dtype=np.int64)
    zones: list[Zone] = []
    for z in levels:
        mine = flat & (np.abs(low - z) <= 20 * grain)
        of_element[mine] = len(zones)
        zones.append(Zone(float(z), float(z), int(section[mine][0])))
    for s in np.unique(section[~flat]):
        mine = ~flat & (section == s)
        of_element[mine] = len(zones)
        zones.append(Zone(float(low[mine].min()), float(high[mine].max()), int(s)))
    return Zoning(tuple(zones), of_element)


def _distinct(z: Floats, tolerance: float) -> Floats:
    z = np.sort(z)
    return z[np.concatenate([[True], np.diff(z) > tolerance])] if len(z) else z


def _sections_of(stack: Stack, low: Floats, high: Floats) -> Ints:
    """Section of every element; that above for what lies on an interface."""
    where = "[[conductor]]"
    ends = np.array([s.low for s in sections(stack)])
    section = np.searchsorted(ends, low, side="right") - 1
    if stack.ground and (section.min() < 0 or np.any(high <= 0)):
        lowest = f"a conductor lies at z = {low.min():g} m."
        raise InputError(lowest, where=where, allowed="heights above the ground")
    ceiling = np.append(ends[1:], np.inf)[section]
    if np.any(over := high > ceiling):
        i = int(np.argmax(over))
        raise InputError(
            f"a mesh element from z = {low[i]:g} to {high[i]:g} m crosses the interface or sheet at {ceiling[i]:g} m.",
            where=where,
            allowed="elements within one layer",
            hint="Split the conductor there; wires are split by themselves.",
        )
    sheets = [float(stack.snap(sheet.height)) for sheet in stack.sheets]
    on_sheet = (high == low) & np.isin(low, sheets)
    if on_sheet.any():
        raise InputError(
            f"a conductor lies on the sheet at z = {low[on_sheet][0]:g} m, which would short it.",
            where=where,
            allowed="other heights",
        )
    return section
