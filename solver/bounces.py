"""Following a static ray through a stack: where it turns, what is left of it, from which side it arrives.

In the quasi-static limit every wave decays like ``exp(-k_t |z|)`` whatever the medium, and a source is seen by rays
that bounce between interfaces (`static_images`). The tracer here serves every kernel: only the line impedances, the
reflection at the ground and the sign of the two first rays differ.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..geometry.stack import Stack
from .lines import sections

Complexes = NDArray[Any]
Event = tuple[int, int]

MAX_RAYS = 100_000


@dataclass(frozen=True)
class Bounce:
    """One way from the source to the observer.

    Attributes
    ----------
    amplitude : of ``exp(-k_t distance) / (2 k_t)``
    distance : vertical path, m, for the two heights that were traced
    launched, arriving : +1 upwards, -1 downwards; both 0 for the direct ray within one section. Moving the observer
        up by d makes the path ``arriving d`` longer, moving the source ``-launched d``.
    events : sections on both sides of every interface met, ``(from, to)``, `to` = `from` for a reflection, -1 in it
        for the ground; None where rays of several histories were added
    """

    amplitude: complex
    distance: float
    launched: int
    arriving: int
    events: tuple[Event, ...] | None


@dataclass
class _Walk:
    """Rays still under way, nearest first; rays that meet again (same place, distance, directions) are added."""

    impedance: Complexes
    mirror: float
    sheets: NDArray[np.bool_]
    reach: float
    grain: float
    pending: dict[tuple[int, int, int, int], complex] = field(default_factory=dict)
    queue: list[tuple[int, int, int, int]] = field(default_factory=list)
    path: dict[tuple[int, int, int, int], float] = field(default_factory=dict)
    story: dict[tuple[int, int, int, int], tuple[Event, ...] | None] = field(default_factory=dict)

    def launch(self, amplitude: complex, distance: float, section: int, direction: int, launched: int, story) -> None:
        if amplitude == 0 or distance > self.reach:
            return
        key = (round(distance / self.grain), section, direction, launched)
        if key not in self.pending:
            heapq.heappush(self.queue, key)
            self.pending[key], self.path[key], self.story[key] = 0j, distance, story
        elif self.story[key] != story:
            self.story[key] = None
        self.pending[key] += amplitude

    def arrive(self, amplitude: complex, direction: int, section: int, distance: float, launched: int, story) -> None:
        """Reflect and transmit a ray at the end of its section."""
        beyond = section + direction
        if not np.isfinite(distance):
            return

        def told(event: Event):
            return None if story is None else (*story, event)

        if beyond < 0:
            self.launch(self.mirror * amplitude, distance, section, -direction, launched, told((-1, section)))
            return
        if self.sheets[section + 1 if direction > 0 else section]:
            self.launch(self.mirror * amplitude, distance, section, -direction, launched, told((section, section)))
            return
        one, other = self.impedance[section], self.impedance[beyond]
        reflected = (other - one) / (other + one)
        self.launch(reflected * amplitude, distance, section, -direction, launched, told((section, section)))
        self.launch((1 + reflected) * amplitude, distance, beyond, direction, launched, told((section, beyond)))


def trace(
    stack: Stack,
    z: float,
    source: float,
    impedance: Complexes,
    mirror: float,
    sheets: NDArray[np.bool_],
    reach: float,
    smallest: float,
    *,
    antisymmetric: bool = False,
    where: tuple[int | None, int | None] = (None, None),
) -> list[Bounce]:
    """Every ray from a unit source to an observer, no longer than `reach`.

    Parameters
    ----------
    stack : Stack
    z, source : heights of observer and source, m
    impedance : (n_section,) static line impedance of every section, any common scale
    mirror : reflection at the ground and at opaque sheets
    sheets : (n_section,) whether the lower end of a section carries an opaque sheet
    reach, smallest : rays longer than `reach` (m) or weaker than `smallest` times the source are dropped
    antisymmetric : the source is a series voltage, whose waves are +1 upwards and -1 downwards; else both are
        the impedance of its section
    where : sections of observer and source; default the one above a height on an interface

    Raises
    ------
    ValueError
        If more than `MAX_RAYS` rays are needed.
    """
    parts = sections(stack)
    lows, highs = np.array([s.low for s in parts]), np.array([s.high for s in parts])
    receiver, start = (
        int(np.searchsorted(lows, height, side="right")) - 1 if given is None else given
        for height, given in zip((z, source), where, strict=True)
    )
    walk = _Walk(impedance, mirror, sheets, reach, 1e-9 * max(stack.top, abs(z - source), 1e-300))
    unit = 1.0 + 0j if antisymmetric else complex(impedance[start])
    found = []
    if receiver == start and not antisymmetric:
        found.append(Bounce(unit, abs(z - source), 0, 0, ()))
    for direction in (1, -1):
        first = unit * direction if antisymmetric else unit
        away = abs((highs if direction > 0 else lows)[start] - source)
        walk.arrive(first, direction, start, away, direction, ())
    count = 0
    while walk.queue:
        key = heapq.heappop(walk.queue)
        amplitude, distance, story = walk.pending.pop(key), walk.path.pop(key), walk.story.pop(key)
        _, section, direction, launched = key
        if abs(amplitude) < smallest * abs(unit):
            continue
        count += 1
        if count > MAX_RAYS:
            raise ValueError(f"more than {MAX_RAYS} images within {reach:g} m; lower d_max or raise smallest")
        origin = lows[section] if direction > 0 else highs[section]
        if section == receiver and distance + abs(z - origin) <= reach:
            found.append(Bounce(complex(amplitude), distance + abs(z - origin), launched, direction, story))
        onward = distance + highs[section] - lows[section]
        walk.arrive(complex(amplitude), direction, section, onward, launched, story)
    return found
