"""Scan directions of a job: cuts, u-v map and single directions merged into one list without repeats."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from ..solver.result import ScanPoints
from .job import ScanPlan
from .schema import MOST_DIRECTIONS

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SAME = 1e-9  # directions whose cosines differ by less are one


class _Collector:
    """Directions in the order they come, each once, with the azimuth of the first asker; broadside gets 0."""

    def __init__(self) -> None:
        self.u: list[float] = []
        self.v: list[float] = []
        self.phi: list[float] = []
        self._seen: dict[tuple[int, int], int] = {}

    def add(self, u: float, v: float, phi: float) -> int:
        # a grid of SAME cells with its neighbours finds every earlier point within SAME
        home = (round(u / SAME), round(v / SAME))
        for du in (0, -1, 1):
            for dv in (0, -1, 1):
                hit = self._seen.get((home[0] + du, home[1] + dv))
                if hit is not None:
                    return hit
        if len(self.u) >= MOST_DIRECTIONS:
            raise InputError(
                f"the cuts, the map and the list together have more than {MOST_DIRECTIONS} directions.",
                where="[scan]",
                allowed=f"at most {MOST_DIRECTIONS}",
                hint="Take a larger step or a smaller grid.",
            )
        self._seen[home] = len(self.u)
        self.u.append(u)
        self.v.append(v)
        self.phi.append(phi if abs(u) > SAME or abs(v) > SAME else 0.0)
        return len(self.u) - 1

    def add_angles(self, theta: float, phi: float) -> int:
        return self.add(float(np.sin(theta) * np.cos(phi)), float(np.sin(theta) * np.sin(phi)), phi)


def build_scan_plan(
    *,
    cone: float,
    planes: Floats,
    step: float,
    grid: int,
    points: Floats | None = None,
    cosines: Floats | None = None,
) -> ScanPlan:
    """Merge the cuts, the map and single directions.

    Parameters
    ----------
    cone, step : rad
    planes : (n,) azimuths of the cuts, rad. Each runs from -cone to cone through 0 in multiples of `step`,
        the ends always included; negative theta is the half-plane phi + pi.
    grid : odd number of map points per axis, over -sin(cone) to sin(cone) in u and v; 0 for no map
    points : (n, 2) theta, phi in rad
    cosines : (n, 2) u, v

    Returns
    -------
    ScanPlan
        Cuts share their broadside point, and the map shares points with the cuts, so a point's own phi
        is that of the first to ask for it (0 at broadside): take a cut's azimuth from `planes`, not from
        its points.

    Raises
    ------
    InputError
        For an even grid, or when nothing or more than `MOST_DIRECTIONS` is asked for.
    """
    if grid and grid % 2 == 0:
        raise InputError(
            f"{grid} is even, so that broadside would not be on the map.",
            where="[scan], key 'grid'",
            allowed=f"an odd number such as {grid + 1}, or 0 for no map",
        )
    found = _Collector()
    thetas = _cut(cone, step)
    cuts = []
    for plane in planes:
        hits = [found.add_angles(abs(t), plane if t >= 0 else plane + np.pi) for t in thetas]
        cuts.append((float(plane), np.array(hits, dtype=np.int64)))
    axis = np.linspace(-1.0, 1.0, grid) * np.sin(cone) if grid > 1 else np.zeros(grid)
    index = np.full((grid, grid), -1, dtype=np.int64)
    for i, u in enumerate(axis):
        for j, v in enumerate(axis):
            if np.hypot(u, v) <= np.sin(cone) * (1 + 1e-12):
                index[i, j] = found.add(float(u), float(v), float(np.arctan2(v, u)))
    for theta, phi in np.zeros((0, 2)) if points is None else points:
        found.add_angles(float(theta), float(phi))
    for u, v in np.zeros((0, 2)) if cosines is None else cosines:
        found.add(float(u), float(v), float(np.arctan2(v, u)))
    if not found.u:
        raise InputError(
            "no scan direction is left.", where="[scan]", allowed="planes, grid, points or cosines"
        )
    directions = ScanPoints(np.array(found.u), np.array(found.v), np.array(found.phi))
    return ScanPlan(directions, tuple(cuts), tuple(thetas for _ in cuts), axis, axis.copy(), index, cone)


def _cut(cone: float, step: float) -> Floats:
    """Signed theta from -cone to cone through 0, rad."""
    half = step * np.arange(1, int(np.floor(cone / step * (1 + 1e-12))) + 1)
    if half.size and cone - half[-1] < 1e-9:
        half[-1] = cone
    elif not half.size or cone > half[-1]:
        half = np.append(half, cone)
    return np.concatenate([-half[::-1], [0.0], half])
