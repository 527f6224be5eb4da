"""Local maxima of the active reflection over directions at one frequency.

Searches start from the maxima of the map, from points close beside the circles where a Floquet wave grazes or meets a
surface wave, and from nearly real roots of the reduced operator: between them a peak narrower than any grid is met.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .active import ActiveModel
from .roots import roots_between
from .surface_circles import Circle, circles
from .sweep import wavenumber

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

RIM = 0.9998  # directions beyond are not searched: at the horizon everything comes back
STARTS = 0.35  # least share of power at a start: below, no maximum worth telling is near
MOST_STARTS = 60
BESIDE = np.concatenate([[0.0], 1e-4 * 2.0 ** np.arange(10)])  # distances from a circle, direction cosines
AZIMUTHS = 48  # points along a circle
ROOT_SPACING = 0.125  # of the directions between which roots are sought
ROOT_WIDTH = 0.03  # imaginary part (direction cosine) up to which a root is a start
EXACT = 1e-5  # step (direction cosine) at which a search ends, 0.0006 deg at broadside,
ROUGH = 0.1  # or this share of its first step, where it only has to tell one maximum from another
SAME = 2e-3  # peaks of the same port nearer than this are one
STENCIL = np.array([[i, j] for i in (-1, 0, 1) for j in (-1, 0, 1)], dtype=float)


@dataclass(frozen=True)
class Starts:
    """Where searches begin: directions (n, 2), first steps (n,), columns (n,) of the driven ports looked at."""

    uv: Floats
    step: Floats
    column: Ints

    @classmethod
    def join(cls, *parts: Starts) -> Starts:
        return cls(*(np.concatenate([getattr(p, name) for p in parts]) for name in ("uv", "step", "column")))


@dataclass(frozen=True)
class Maxima:
    """Maxima found: directions (n, 2), columns (n,) of the driven ports, shares of power (n,); highest first."""

    uv: Floats
    column: Ints
    power: Floats


def find_peaks(
    active: ActiveModel, frequency: float, axis: Floats, power: Floats, least: float, more: Starts | None = None
) -> Maxima:
    """Maxima of at least `least` at one frequency (Hz), inside visible space, not yet exact.

    Along a ridge of constant height there are many. With one port, where opposite directions are alike, only one of
    each pair is given.

    Parameters
    ----------
    axis, power : (n,), (n, n, n_driven) map of the driven ports' returned share, NaN outside visible space
    more : further starts, such as the peaks of a neighbouring frequency
    """
    parts = [
        _from_map(axis, power), _from_circles(active, frequency), _from_roots(active, frequency),
        *([] if more is None else [more]),
    ]  # fmt: skip
    starts = _inside(Starts.join(*parts), half=len(active.drive) == 1)
    if not len(starts.uv):
        return Maxima(np.zeros((0, 2)), np.zeros(0, dtype=np.int64), np.zeros(0))
    uv, found = climb(active, frequency, starts, np.maximum(ROUGH * starts.step, EXACT))
    return _distinct(uv, starts.column, found, least)


def climb(active: ActiveModel, frequency: float, starts: Starts, last: Floats | float = EXACT) -> tuple[Floats, Floats]:
    """Drive every start to its local maximum: directions (n, 2) and shares of power (n,).

    last : step at which each search ends

    A stencil of nine points around each, moved to its best point or to the maximum of the quadratic through it, and
    shrunk when its middle stays best.
    """
    uv, step = starts.uv.copy(), starts.step.copy()
    best = active.power(frequency, uv)[np.arange(len(uv)), starts.column]
    for _ in range(80):
        alive = np.flatnonzero(step > last)
        if not len(alive):
            break
        points = uv[alive, None] + step[alive, None, None] * STENCIL
        values = _values(active, frequency, points, starts.column[alive])
        jump = uv[alive] + step[alive, None] * _quadratic_peak(values)
        extra = _values(active, frequency, jump[:, None], starts.column[alive])
        points, values = np.concatenate([points, jump[:, None]], axis=1), np.concatenate([values, extra], axis=1)
        pick = np.argmax(values, axis=1)
        rows = np.arange(len(alive))
        better = values[rows, pick] > best[alive] + 1e-15
        moved = np.linalg.norm(points[rows, pick] - uv[alive], axis=1)
        uv[alive[better]], best[alive[better]] = points[rows, pick][better], values[rows, pick][better]
        shrink = np.where(better & (pick < 9), 1.0, np.where(better, np.clip(moved / step[alive], 0.1, 0.5), 0.25))
        step[alive] *= shrink
    return uv, best


def _values(active: ActiveModel, frequency: float, points: Floats, column: Ints) -> Floats:
    """Share of power at points (n, m, 2) for each row's own port, (n, m); -1 beyond the rim."""
    n, m, _ = points.shape
    flat = points.reshape(-1, 2)
    inside = np.hypot(flat[:, 0], flat[:, 1]) < RIM
    values = np.full(n * m, -1.0)
    if inside.any():
        values[inside] = active.power(frequency, flat[inside])[np.arange(inside.sum()), np.repeat(column, m)[inside]]
    return np.nan_to_num(values.reshape(n, m), nan=-1.0)


def _quadratic_peak(values: Floats) -> Floats:
    """Where the quadratic through nine values (n, 9) has its maximum, in steps from the middle, at most 1.5 away;
    the middle itself where it has none."""
    x, y = STENCIL.T
    design = np.stack([np.ones(9), x, y, x * x, x * y, y * y], axis=1)
    _, gx, gy, hxx, hxy, hyy = np.linalg.pinv(design) @ values.T
    determinant = 4 * hxx * hyy - hxy**2
    good = (determinant > 0) & (hxx < 0)
    safe = np.where(good, determinant, 1.0)
    move = np.stack([(hxy * gy - 2 * hyy * gx) / safe, (hxy * gx - 2 * hxx * gy) / safe], axis=1)
    return np.where(good[:, None], np.clip(move, -1.5, 1.5), 0.0)


def _from_map(axis: Floats, power: Floats) -> Starts:
    parts = []
    for column in range(power.shape[2]):
        values = np.pad(np.nan_to_num(power[..., column], nan=-1.0), 1, constant_values=-1.0)
        middle = values[1:-1, 1:-1]
        around = [np.roll(values, (i, j), (0, 1))[1:-1, 1:-1] for i in (-1, 0, 1) for j in (-1, 0, 1) if i or j]
        i, j = np.nonzero((middle >= np.max(around, axis=0)) & (middle > STARTS))
        order = np.argsort(-middle[i, j])[:MOST_STARTS]
        uv = np.stack([axis[i], axis[j]], axis=1)[order]
        parts.append(_starts(uv, axis[1] - axis[0], column))
    return Starts.join(*parts)


def _from_circles(active: ActiveModel, frequency: float) -> Starts:
    """Maxima along lines across every circle, of those the ones that stand out along the circle."""
    turn = np.linspace(0, 2 * np.pi, AZIMUTHS, endpoint=False)
    outwards = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    offsets = np.concatenate([-BESIDE[:0:-1], BESIDE])
    parts = [_none()]
    for line in circles(active.model.view, frequency):
        parts += _across(active, frequency, line, outwards, offsets)
    return Starts.join(*parts)


def _across(active: ActiveModel, frequency: float, line: Circle, outwards: Floats, offsets: Floats) -> list[Starts]:
    rim = line.centre + line.radius * outwards
    seen = np.hypot(rim[:, 0], rim[:, 1]) < RIM
    if not seen.any():
        return []
    points = rim[seen, None] + offsets[:, None] * outwards[seen, None]
    columns, parts = range(len(active.driven)), []
    for column in columns:
        values = _values(active, frequency, points, np.full(len(points), column))
        inner = values[:, 1:-1]
        n, m = np.nonzero((inner >= values[:, :-2]) & (inner > values[:, 2:]) & (inner > STARTS))
        if not len(n):
            continue
        order = np.argsort(-inner[n, m])[:8]
        n, m = n[order], m[order] + 1
        step = np.maximum(0.5 * np.abs(offsets[m]), 5e-5)
        parts.append(Starts(points[n, m], step, np.full(len(n), column)))
    return parts


def _from_roots(active: ActiveModel, frequency: float) -> Starts:
    """Nearly real roots of the reduced operator along lines of a grid over half the disc and its opposite points."""
    ticks = np.arange(-1, 1 + 1e-9, ROOT_SPACING)
    u, v = (g.ravel() for g in np.meshgrid(ticks, ticks, indexing="ij"))
    parts = [_none()]
    for step in (np.array([ROOT_SPACING, 0.0]), np.array([0.0, ROOT_SPACING])):
        first = np.stack([u, v], axis=1)
        second = first + step
        kept = (np.hypot(*first.T) < RIM) & (np.hypot(*second.T) < RIM) & (v > -1e-9)
        k = wavenumber(frequency)
        row, place = roots_between(active.model, k, k, k * first[kept], k * second[kept])
        near = (np.abs(place.imag) * ROOT_SPACING < ROOT_WIDTH) & (place.real > -0.05) & (place.real < 1.05)
        uv = first[kept][row[near]] + place.real[near, None] * step
        size = np.clip(0.5 * np.abs(place.imag[near]) * ROOT_SPACING, 1e-4, 0.01)
        for sign in (1, -1):
            for column in range(len(active.driven)):
                parts.append(Starts(sign * uv, size, np.full(len(uv), column)))
    return Starts.join(*parts)


def _starts(uv: Floats, step: float, column: int) -> Starts:
    return Starts(uv, np.full(len(uv), step), np.full(len(uv), column))


def _none() -> Starts:
    return Starts(np.zeros((0, 2)), np.zeros(0), np.zeros(0, dtype=np.int64))


def _inside(starts: Starts, half: bool) -> Starts:
    u, v = starts.uv.T
    kept = np.hypot(u, v) < RIM
    if half:
        kept &= (v > 1e-9) | ((np.abs(v) <= 1e-9) & (u >= 0))
    return Starts(starts.uv[kept], starts.step[kept], starts.column[kept])


def _distinct(uv: Floats, column: Ints, power: Floats, least: float) -> Maxima:
    """Highest first, each once, without those that ran to the rim."""
    kept: list[int] = []
    for i in np.argsort(-power):
        if power[i] < least or np.hypot(*uv[i]) > RIM - 20 * EXACT:
            continue
        if all(column[i] != column[j] or np.hypot(*(uv[i] - uv[j])) > SAME for j in kept):
            kept.append(int(i))
    return Maxima(uv[kept], column[kept], power[kept])
