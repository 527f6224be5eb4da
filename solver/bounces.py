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
    second : (b, c) of the next order, ``exp(-k_t distance) / (2 k_t) k^2 (b / k_t^2 + c / k_t)``; zero unless asked for
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
    second: tuple[complex, complex] = (0j, 0j)


@dataclass(frozen=True)
class SecondOrder:
    """How a line departs from its static limit, to the order k^2 / k_t^2 (or k^2 d / k_t along a path d).

    Attributes
    ----------
    source : of the source's own impedance, relative, by section
    reflection : (n_section, n_section) added to the reflection from one section into the next
    permittivity : (n_section,) eps mu, which bends the decay along a path: ``eps d / 2``
    """

    source: Complexes
    reflection: Complexes
    permittivity: Complexes


Order = tuple[complex, complex, complex]  # amplitude, b, c


def _times(order: Order, factor: complex, bend: complex = 0.0) -> Order:
    """The order after a factor ``factor + bend k^2 / k_t^2``."""
    a, b, c = order
    return a * factor, b * factor + a * bend, c * factor


def _carried(order: Order, curvature: complex, distance: float) -> Order:
    """The order after a path in a medium."""
    a, b, c = order
    return a, b, c + 0.5 * curvature * distance * a


@dataclass
class _Walk:
    """Rays still under way, nearest first; rays that meet again (same place, distance, directions) are added."""

    impedance: Complexes
    mirror: float
    sheets: NDArray[np.bool_]
    reach: float
    grain: float
    second: SecondOrder | None = None
    pending: dict[tuple[int, int, int, int], Order] = field(default_factory=dict)
    queue: list[tuple[int, int, int, int]] = field(default_factory=list)
    path: dict[tuple[int, int, int, int], float] = field(default_factory=dict)
    story: dict[tuple[int, int, int, int], tuple[Event, ...] | None] = field(default_factory=dict)

    def launch(self, order: Order, distance: float, section: int, direction: int, launched: int, story) -> None:
        if not any(order) or distance > self.reach:
            return
        key = (round(distance / self.grain), section, direction, launched)
        if key not in self.pending:
            heapq.heappush(self.queue, key)
            self.pending[key], self.path[key], self.story[key] = (0j, 0j, 0j), distance, story
        elif self.story[key] != story:
            self.story[key] = None
        a, b, c = self.pending[key]
        self.pending[key] = (a + order[0], b + order[1], c + order[2])

    def arrive(self, order: Order, direction: int, section: int, distance: float, launched: int, story) -> None:
        """Reflect and transmit a ray at the end of its section."""
        beyond = section + direction
        if not np.isfinite(distance):
            return

        def told(event: Event):
            return None if story is None else (*story, event)

        if beyond < 0:
            self.launch(_times(order, self.mirror), distance, section, -direction, launched, told((-1, section)))
            return
        if self.sheets[section + 1 if direction > 0 else section]:
            self.launch(_times(order, self.mirror), distance, section, -direction, launched, told((section, section)))
            return
        one, other = self.impedance[section], self.impedance[beyond]
        reflected = (other - one) / (other + one)
        bend = 0.0 if self.second is None else self.second.reflection[section, beyond]
        back, on = _times(order, reflected, bend), _times(order, 1 + reflected, bend)
        self.launch(back, distance, section, -direction, launched, told((section, section)))
        self.launch(on, distance, beyond, direction, launched, told((section, beyond)))

    def curvature(self, section: int) -> complex:
        return 0.0 if self.second is None else complex(self.second.permittivity[section])


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
    second: SecondOrder | None = None,
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
    second : carry the next order in k / k_t too

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
    walk = _Walk(impedance, mirror, sheets, reach, 1e-9 * max(stack.top, abs(z - source), 1e-300), second)
    unit = 1.0 + 0j if antisymmetric else complex(impedance[start])
    first: Order = (unit, 0j if second is None else unit * complex(second.source[start]), 0j)
    found = []
    if receiver == start and not antisymmetric:
        a, b, c = _carried(first, walk.curvature(start), abs(z - source))
        found.append(Bounce(a, abs(z - source), 0, 0, (), (b, c)))
    for direction in (1, -1):
        away = abs((highs if direction > 0 else lows)[start] - source)
        begin = _times(first, direction) if antisymmetric else first
        if np.isfinite(away):
            walk.arrive(_carried(begin, walk.curvature(start), away), direction, start, away, direction, ())
    count = 0
    while walk.queue:
        key = heapq.heappop(walk.queue)
        order, distance, story = walk.pending.pop(key), walk.path.pop(key), walk.story.pop(key)
        _, section, direction, launched = key
        if max(abs(order[0]), abs(order[1])) < smallest * abs(unit):
            continue
        count += 1
        if count > MAX_RAYS:
            raise ValueError(f"more than {MAX_RAYS} images within {reach:g} m; lower d_max or raise smallest")
        origin = lows[section] if direction > 0 else highs[section]
        if section == receiver and distance + abs(z - origin) <= reach:
            a, b, c = _carried(order, walk.curvature(section), abs(z - origin))
            found.append(Bounce(complex(a), distance + abs(z - origin), launched, direction, story, (b, c)))
        length = highs[section] - lows[section]
        if np.isfinite(length):
            order = _carried(order, walk.curvature(section), length)
            walk.arrive(order, direction, section, distance + length, launched, story)
    return found
