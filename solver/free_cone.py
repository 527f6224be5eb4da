"""How far the beam may be scanned before too much power comes back: by frequency, azimuth, plane and as a whole."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator

from .active import ActiveModel
from .blindness import peak_edge
from .pattern import co_cross, decibel
from .surface_circles import circles
from .survey import Blindness, FreeCone, ScanMap

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

AZIMUTH_STEP = np.radians(5.0)
THETA_STEP = np.radians(2.0)
DOUBTFUL = 0.6  # share of the level from which on a rough value is replaced by a solution
FINE_STEP = np.radians(0.5)  # where the level is nearly reached
NEARLY = 0.85  # share of the level from which on a closer look is taken
HORIZON = np.radians(89.5)
HALVINGS = 7  # of the frequency step, to find the edges of the usable band
BESIDE = np.concatenate(
    [-(2e-4 * 3.0 ** np.arange(5))[::-1], 2e-4 * 3.0 ** np.arange(5)]
)  # of a circle, direction cosines
ANGLE = np.radians(0.005)  # to which the first scan angle beyond the level is found


def free_cone(
    active: ActiveModel,
    scan_map: ScanMap,
    blindnesses: Sequence[Blindness],
    *,
    level: float,
    wanted: float,
    planes: Sequence[float],
    polarisation: tuple[str, float],
) -> FreeCone:
    """The cone in which every driven port returns at most `level` of its available power, over the map's frequencies.

    Parameters
    ----------
    level : share of power, |Gamma|^2
    wanted : the case's own cone, rad
    planes : azimuths of the case's cuts, rad
    polarisation : co-polar kind and angle as for `pattern.co_cross`
    """
    planes = list(planes)
    grid = np.arange(0.0, 2 * np.pi, AZIMUTH_STEP)
    both = np.concatenate([np.array(planes), np.array(planes) + np.pi]) % (2 * np.pi)
    azimuth = np.unique(np.round(np.concatenate([grid, both]), 9))
    theta = np.array([
        first_angles(active, float(f), azimuth, level, map_power(active, scan_map, i))
        for i, f in enumerate(scan_map.frequency)
    ])  # fmt: skip
    theta = _with_peaks(active, theta, scan_map.frequency, azimuth, blindnesses, level)
    cone = float(theta.min())
    by_plane = []
    for phi in planes:
        rows = [int(np.argmin(np.abs(azimuth - (phi + side) % (2 * np.pi)))) for side in (0.0, np.pi)]
        by_plane.append((float(phi), float(theta[:, rows].min())))
    usable = _usable(active, scan_map.frequency, theta, azimuth, level, wanted)
    drop = [_drop(active, scan_map, azimuth, blindnesses, edge, polarisation) for edge in (cone, wanted)]
    return FreeCone(level, scan_map.frequency, azimuth, theta, cone, tuple(by_plane), wanted, usable, drop[0], drop[1])


Rough = Callable[[Floats], Floats]
"""Share of power at direction cosines (n, 2), highest over the driven ports, good to a few per cent."""


def map_power(active: ActiveModel, scan_map: ScanMap, f: int) -> Rough:
    """`Rough` from the map at its frequency number f, by linear interpolation of the reflection."""
    axis, reflection = scan_map.axis, np.nan_to_num(scan_map.reflection[f][..., active.driven], nan=1.0)
    interpolate = RegularGridInterpolator((axis, axis), reflection)
    return lambda uv: (np.abs(interpolate(uv)) ** 2).max(axis=1)


def first_angles(
    active: ActiveModel, frequency: float, azimuth: Floats, level: float, rough: Rough | None = None,
    reach: float = HORIZON,
) -> Floats:  # fmt: skip
    """First scan angle (n,) along every azimuth (n,) at which the level is passed; pi/2 where it never is.

    Looked at in steps of THETA_STEP (by `rough` if given, which is then solved where the level is near), in steps of
    FINE_STEP where the level is nearly reached, and closely about every circle on which a Floquet wave grazes or meets
    a surface wave.

    reach : angles beyond are not looked at
    """
    if len(active.drive) == 1:  # opposite directions are alike
        half = np.unique(np.round(azimuth % np.pi, 9))
        angles = _first_angles(active, frequency, half, level, rough, reach)
        return angles[np.searchsorted(half, np.round(azimuth % np.pi, 9))]
    return _first_angles(active, frequency, azimuth, level, rough, reach)


def _first_angles(
    active: ActiveModel, frequency: float, azimuth: Floats, level: float, rough: Rough | None, reach: float
) -> Floats:
    theta = np.tile(np.append(np.arange(0.0, reach - 1e-9, THETA_STEP), reach), (len(azimuth), 1))
    if rough is None:
        worst = _worst(active, frequency, azimuth, theta)
    else:
        worst = rough(_directions(azimuth, theta)).reshape(theta.shape)
        doubtful = worst > DOUBTFUL * level
        doubtful &= np.cumsum(worst > level / DOUBTFUL, axis=1) <= 1  # beyond a clear passing nothing matters
        row, place = np.nonzero(doubtful)
        exact = active.power(frequency, _directions(azimuth[row], theta[row, place][:, None]))
        worst[row, place] = exact.max(axis=1)
    for more in (_beside_circles, _closer):
        added = _padded(more(active, frequency, azimuth, theta, worst, level), reach)
        theta = np.concatenate([theta, added], axis=1)
        worst = np.concatenate([worst, _worst(active, frequency, azimuth, added)], axis=1)
        order = np.argsort(theta, axis=1, kind="stable")
        theta, worst = np.take_along_axis(theta, order, 1), np.take_along_axis(worst, order, 1)
    over = worst > level
    first = np.argmax(over, axis=1)
    passed, at_once = over.any(axis=1), over[:, 0]
    rows = np.flatnonzero(passed & ~at_once)
    result = np.where(at_once, 0.0, 0.5 * np.pi)
    if len(rows):
        low, high = theta[rows, first[rows] - 1], theta[rows, first[rows]]
        result[rows] = _bisected(active, frequency, azimuth[rows], low, high, level)
    return result


def _bisected(
    active: ActiveModel, frequency: float, azimuth: Floats, low: Floats, high: Floats, level: float
) -> Floats:
    """Where the level is passed between clear angles `low` and passed ones `high`, each (n,)."""
    parts = np.linspace(0, 1, 6)
    rows = np.arange(len(low))
    while (high - low).max() > ANGLE:
        between = low[:, None] + (high - low)[:, None] * parts
        passed = _worst(active, frequency, azimuth, between) > level
        passed[:, 0], passed[:, -1] = False, True
        first = np.argmax(passed, axis=1)
        low, high = between[rows, first - 1], between[rows, first]
    return low


def _closer(
    active: ActiveModel, frequency: float, azimuth: Floats, theta: Floats, worst: Floats, level: float
) -> list[Floats]:
    """Further angles along every ray where the level is nearly reached, up to where it is first passed."""
    before = np.cumsum(worst > level, axis=1)[:, :-1] == 0
    near = (np.maximum(worst[:, :-1], worst[:, 1:]) > NEARLY * level) & before & (np.diff(theta, axis=1) > FINE_STEP)
    return [
        np.concatenate([
            np.zeros(0),
            *(np.arange(theta[n, i], theta[n, i + 1], FINE_STEP)[1:] for i in np.flatnonzero(near[n])),
        ])
        for n in range(len(theta))
    ]  # fmt: skip


def _beside_circles(
    active: ActiveModel, frequency: float, azimuth: Floats, theta: Floats, worst: Floats, level: float
) -> list[Floats]:
    """Angles close to where every ray crosses a circle, up to where the level is first passed."""
    outwards = np.stack([np.cos(azimuth), np.sin(azimuth)], axis=1)
    over = worst > level
    last = np.where(over.any(axis=1), theta[np.arange(len(theta)), np.argmax(over, axis=1)], theta[:, -1])
    crossings: list[list[float]] = [[] for _ in azimuth]
    for line in circles(active.model.view, frequency):
        along = outwards @ line.centre
        rest = along**2 - line.centre @ line.centre + line.radius**2
        for n in np.flatnonzero(rest >= 0):
            for root in (along[n] - np.sqrt(rest[n]), along[n] + np.sqrt(rest[n])):
                s = root + BESIDE
                crossings[n] += list(s[(s > 0) & (s < np.sin(last[n]))])
    return [np.arcsin(np.array(found)) for found in crossings]


def _padded(lists: list[Floats], end: float) -> Floats:
    width = max((len(one) for one in lists), default=0)
    return np.array([np.append(one, np.full(width - len(one), end)) for one in lists]).reshape(len(lists), width)


def _directions(azimuth: Floats, theta: Floats) -> Floats:
    """Direction cosines (n m, 2) at angles theta (n, m) along azimuths (n,)."""
    s = np.sin(theta)
    return np.stack([s * np.cos(azimuth)[:, None], s * np.sin(azimuth)[:, None]], axis=-1).reshape(-1, 2)


def _worst(active: ActiveModel, frequency: float, azimuth: Floats, theta: Floats) -> Floats:
    """Highest share of power over the driven ports at angles theta (n, m) along azimuths (n,), (n, m)."""
    uv = _directions(azimuth, theta)
    distinct, back = np.unique(np.round(uv, 9).astype(float), axis=0, return_inverse=True)
    return active.power(frequency, distinct).max(axis=1)[back.ravel()].reshape(theta.shape)


def _with_peaks(
    active: ActiveModel, theta: Floats, frequency: Floats, azimuth: Floats, blindnesses: Sequence[Blindness],
    level: float,
) -> Floats:  # fmt: skip
    """The same with every listed peak above the level taken into account at the azimuth nearest to it."""
    theta = theta.copy()
    for one in blindnesses:
        for peak in (*one.peaks, one.worst):
            if peak.power <= level:
                continue
            f = int(np.argmin(np.abs(frequency - peak.frequency)))
            column = int(np.flatnonzero(active.driven == peak.port)[0])
            uv = np.array([peak.u, peak.v])
            edge = peak_edge(active, peak.frequency, peak.theta, peak.phi, column, -1, level)
            for direction in (uv, -uv) if one.mirrored else (uv,):
                turn = np.arctan2(direction[1], direction[0])
                n = int(np.argmin(np.abs((azimuth - turn + np.pi) % (2 * np.pi) - np.pi)))
                theta[f, n] = min(theta[f, n], max(edge, 0.0))
    return theta


def _usable(
    active: ActiveModel, frequency: Floats, theta: Floats, azimuth: Floats, level: float, wanted: float
) -> tuple[float, float] | None:
    """Lowest and highest frequency of the widest band in which the cone `wanted` is clear; None where there is none.

    Its ends are found by halving between a clear and a passed frequency, from the rays alone.
    """
    clear = theta.min(axis=1) >= wanted - ANGLE
    best: tuple[float, float] | None = None
    f = 0
    while f < len(frequency):
        if not clear[f]:
            f += 1
            continue
        last = f
        while last + 1 < len(frequency) and clear[last + 1]:
            last += 1
        ends = [float(frequency[f]), float(frequency[last])]
        for side, (inner, outer) in enumerate(((f, f - 1), (last, last + 1))):
            if 0 <= outer < len(frequency):
                ends[side] = _edge_of_band(active, frequency[inner], frequency[outer], azimuth, level, wanted)
        if best is None or ends[1] - ends[0] > best[1] - best[0]:
            best = ends[0], ends[1]
        f = last + 1
    return best


def _edge_of_band(
    active: ActiveModel, clear: float, passed: float, azimuth: Floats, level: float, wanted: float
) -> float:
    clear, passed = float(clear), float(passed)
    for _ in range(HALVINGS):
        middle = 0.5 * (clear + passed)
        if first_angles(active, middle, azimuth, level, reach=wanted).min() >= wanted - ANGLE:
            clear = middle
        else:
            passed = middle
    return clear


def _drop(
    active: ActiveModel,
    scan_map: ScanMap,
    azimuth: Floats,
    blindnesses: Sequence[Blindness],
    edge: float,
    polarisation: tuple[str, float],
) -> float:
    """Largest drop (dB) of co-polar gain from broadside inside `edge` (rad): over the map, on the rim, at the listed
    peaks; NaN for an empty cone."""
    if edge <= 0:
        return np.nan

    def co(field: Complexes, phi: Floats) -> Floats:
        return decibel(np.abs(co_cross(field, phi, *polarisation)[0]) ** 2)

    u, v = np.meshgrid(scan_map.axis, scan_map.axis, indexing="ij")
    inside = np.hypot(u, v) <= np.sin(edge) + 1e-12
    middle = len(scan_map.axis) // 2
    rim = np.sin(min(edge, HORIZON)) * np.stack([np.cos(azimuth), np.sin(azimuth)], axis=1)
    drops = [0.0]
    for frequency, field in zip(scan_map.frequency, scan_map.field, strict=True):
        broadside = co(field[[middle], [middle]], np.zeros(1))[0]
        on_rim = co(active.reflection_and_field(float(frequency), rim)[1], azimuth)
        drops.append(float(broadside - min(np.nanmin(co(field[inside], np.arctan2(v, u)[inside])), on_rim.min())))
    for peak in (peak for one in blindnesses for peak in (*one.peaks, one.worst) if peak.theta <= edge):
        both = np.array([[peak.u, peak.v], [0.0, 0.0]])
        level = co(active.reflection_and_field(peak.frequency, both)[1], np.array([peak.phi, 0.0]))
        drops.append(float(level[1] - level[0]))
    return max(drops)
