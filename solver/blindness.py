"""Blindness and strong mismatch over a band: found at every frequency, followed from one to the next, explained."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .active import ActiveModel
from .causes import find_cause, nearest_meeting
from .pattern import respond
from .peaks import Starts, climb, find_peaks
from .reduced_sweep import reduced_sweep
from .result import ScanPoints
from .ridges import ALIKE, nearest_to_broadside, trace_crest
from .roots import roots_between
from .survey import BLIND, HALF, Blindness, Cause, Peak, ScanMap
from .sweep import wavenumber

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

LINK = 0.2  # direction cosines by which a peak may move from one frequency to the next
NEIGHBOURS = 0.3  # maxima of a resonance within this distance are one crest
SAME_POWER = 2e-3
NEAR_HORIZON = 0.9
LOW_ELEVATION = 0.996  # beyond (85 deg) every element returns nearly all; only what meets a circle is looked at
AXIS = 1e-3  # v below which a direction counts as in the plane of u
FULL = 0.995  # share of a single port's power that is not driven higher over frequency
BROAD = np.radians(60.0)
STEEP = 0.9996  # directions beyond are the horizon's
NARROW = 0.05  # imaginary part of a root in frequency, over the step between frequencies, that starts a search
ROOT_DIRECTIONS = 0.25  # spacing of the directions (cosines) where roots in frequency are sought
OFFSETS = np.concatenate([1e-5 * 2.0 ** np.arange(16), [1.0]])  # rad, where a peak's width is bracketed


@dataclass(frozen=True)
class _Found:
    """A peak with its cause, before it is described in full."""

    frequency: float
    uv: Floats
    column: int
    power: float
    cause: Cause


def find_blindness(
    active: ActiveModel,
    scan_map: ScanMap,
    cone: float,
    planes: Floats,
    progress: Callable[[int, int], None] | None = None,
) -> tuple[Blindness, ...]:
    """All blindnesses in visible space and, inside `cone` (rad), strong mismatches too, the worst first.

    Of resonances so broad that the element is mismatched over most of space only the worst is given.

    Parameters
    ----------
    scan_map : of the same model and drive; its frequencies are those searched
    planes : azimuths (rad) of the case's cuts
    progress : called with (frequencies done, frequencies in all)
    """
    chains: list[list[_Found]] = []
    previous: list[_Found] = []
    count = len(scan_map.frequency)
    for f, hertz in enumerate(scan_map.frequency):
        power = np.abs(scan_map.reflection[f][..., active.driven]) ** 2
        found = _at_one(active, float(hertz), scan_map.axis, power, previous, cone, planes)
        _append(chains, previous, found)
        if f:
            chains += [[one] for one in _between(active, scan_map.frequency[f - 1 : f + 1], found + previous, cone)]
        previous = found
        if progress:
            progress(f + 1, count)
    described = [_describe(active, chain, scan_map.frequency) for chain in chains]
    ordered = sorted(described, key=lambda one: (-round(one.worst.power, 3), one.worst.theta))
    broad = [one for one in ordered if one.cause.kind == "resonance" and one.worst.width > BROAD]
    return tuple(one for one in ordered if not any(one is other for other in broad[1:]))


def _at_one(
    active: ActiveModel, frequency: float, axis: Floats, power: Floats, previous: list[_Found], cone: float,
    planes: Floats,
) -> list[_Found]:  # fmt: skip
    """Peaks at one frequency: one for every crest and driven port."""
    more = None
    if previous:
        uv = np.array([one.uv for one in previous])
        more = Starts(uv, np.full(len(uv), 0.01), np.array([one.column for one in previous]))
    maxima = find_peaks(active, frequency, axis, power, HALF, more)
    kept = ~_rises_to_horizon(active, frequency, maxima.uv, maxima.column, maxima.power)
    uv, column, high = maxima.uv[kept], maxima.column[kept], maxima.power[kept]
    if len(active.drive) == 1:  # opposite directions are alike
        uv, column, high = np.concatenate([uv, -uv]), np.tile(column, 2), np.tile(high, 2)
    listed = (high >= 0.9 * BLIND) | (np.hypot(*uv.T) <= np.sin(cone))
    meetings = [nearest_meeting(active, frequency, place) for place in uv]
    listed &= np.array([m[0] != "resonance" for m in meetings], dtype=bool) | (np.hypot(*uv.T) < LOW_ELEVATION)
    crests: list[tuple[int, tuple[str, str, tuple[int, int]], list[Floats]]] = []
    for i in np.flatnonzero(listed):
        place, port, met = uv[i], column[i], meetings[i]
        for own_port, own, members in crests:
            if own_port == port and own == met and (met[0] != "resonance" or _near(place, members)):
                members.append(place)
                break
        else:
            crests.append((int(port), met, [place]))
    found = []
    for port, _, members in crests:
        one = _crest_point(active, frequency, port, np.array(members), planes)
        radius = np.inf if one is None else float(np.hypot(*one.uv))
        if one and one.cause.kind == "resonance" and radius > LOW_ELEVATION:
            continue
        if one and radius < STEEP and (one.power >= BLIND or (one.power >= HALF and radius <= np.sin(cone))):
            found.append(one)
    return _without_opposites(active, _one_per_cause(found))


def _one_per_cause(found: list[_Found]) -> list[_Found]:
    """Of crests that turned out to have the same Floquet wave as their cause, the one nearest to broadside."""
    kept: list[_Found] = []
    for one in sorted(found, key=lambda p: (-round(p.power / ALIKE), float(np.hypot(*p.uv)))):
        same = (one.column == other.column and _alike(one.cause, other.cause) for other in kept)
        if one.cause.kind == "resonance" or not any(same):
            kept.append(one)
    return kept


def _crest_point(active: ActiveModel, frequency: float, column: int, members: Floats, planes: Floats) -> _Found | None:
    """The crest's representative, driven to the exact maximum where it is an isolated one; None where the power only
    rises to the horizon."""
    crest = trace_crest(active, frequency, column, members, planes)
    if not len(crest):
        return None
    uv = crest[nearest_to_broadside(crest), :2]
    if crest[:, 2].max() < 1 - SAME_POWER or len(active.drive) > 1:
        start = Starts(crest[[np.argmax(crest[:, 2])], :2], np.array([2e-3]), np.array([column]))
        uv = climb(active, frequency, start)[0][0]
    power = float(active.power(frequency, uv[None])[0, column])
    if _one_rises(active, frequency, uv, column, power):
        return None
    return _Found(frequency, uv, column, power, find_cause(active, frequency, uv))


def _rises_to_horizon(active: ActiveModel, frequency: float, uv: Floats, column: Ints, power: Floats) -> Bools:
    """Whether what looks like a maximum is but the rise of reflection towards the horizon, (n,)."""
    radius = np.hypot(uv[:, 0], uv[:, 1])
    result = np.zeros(len(uv), dtype=bool)
    near = np.flatnonzero(radius > NEAR_HORIZON)
    if len(near):
        beyond = uv[near] * ((radius[near] + 0.9 * (1 - radius[near])) / radius[near])[:, None]
        result[near] = active.power(frequency, beyond)[np.arange(len(near)), column[near]] > power[near]
    return result


def _one_rises(active: ActiveModel, frequency: float, uv: Floats, column: int, power: float) -> bool:
    return bool(_rises_to_horizon(active, frequency, uv[None], np.array([column]), np.array([power]))[0])


def _alike(a: Cause, b: Cause, *, opposite: bool = False) -> bool:
    """Whether two causes are the same, or, seen from opposite directions, would be."""
    orders = (b.order, (-b.order[0], -b.order[1])) if opposite else (b.order,)
    return (a.kind, a.wave) == (b.kind, b.wave) and a.order in orders


def _near(uv: Floats, members: list[Floats]) -> bool:
    """Whether a maximum belongs to the crest of a resonance."""
    return bool(np.min(np.linalg.norm(np.array(members) - uv, axis=1)) < NEIGHBOURS)


def _upper_half(uv: Floats) -> bool:
    """The half of the directions from which the one of two opposite peaks is told."""
    return bool(uv[1] > AXIS or (abs(uv[1]) <= AXIS and uv[0] > 0))


def _without_opposites(active: ActiveModel, found: list[_Found]) -> list[_Found]:
    """Of peaks in opposite directions and of equal height only one."""
    kept: list[_Found] = []
    for one in sorted(found, key=lambda p: not _upper_half(p.uv)):
        twin = any(
            one.column == other.column
            and np.hypot(*(one.uv + other.uv)) < 0.02
            and abs(one.power - other.power) < SAME_POWER
            for other in kept
        )
        if not twin:
            kept.append(one)
    return kept


def _append(chains: list[list[_Found]], previous: list[_Found], found: list[_Found]) -> None:
    """Join every peak to the chain whose end at the frequency before is nearest, of the same port and cause."""
    ends = {id(chain[-1]): chain for chain in chains}
    open_ = [one for one in previous if id(one) in ends]
    for one in sorted(found, key=lambda p: -p.power):
        fits = [
            other for other in open_
            if other.column == one.column and _alike(other.cause, one.cause)
            and (one.cause.kind != "resonance" or np.hypot(*(other.uv - one.uv)) < LINK)
        ]  # fmt: skip
        if fits:
            nearest = min(fits, key=lambda other: float(np.hypot(*(other.uv - one.uv))))
            open_ = [other for other in open_ if other is not nearest]
            ends[id(nearest)].append(one)
        else:
            chains.append([one])


def _between(active: ActiveModel, frequency: Floats, known: list[_Found], cone: float) -> list[_Found]:
    """Narrow resonances that cross directions between two frequencies, seen at neither."""
    low, high = (wavenumber(float(f)) for f in frequency)
    ticks = np.arange(-1, 1 + 1e-9, ROOT_DIRECTIONS)
    u, v = (g.ravel() for g in np.meshgrid(ticks, ticks, indexing="ij"))
    uv = np.stack([u, v], axis=1)[(np.hypot(u, v) < STEEP) & (v > -1e-9)]
    row, place = roots_between(active.model, low, high, low * uv, high * uv)  # at fixed direction, not fixed k_t
    narrow = (np.abs(place.imag) < NARROW) & (place.real > 0) & (place.real < 1)
    found = []
    for n, s in zip(row[narrow], place.real[narrow], strict=True):
        hertz = float(frequency[0] + s * (frequency[1] - frequency[0]))
        for column in range(len(active.driven)):
            start = Starts(uv[[n]], np.array([0.02]), np.array([column]))
            top, power = climb(active, hertz, start)
            inside = np.hypot(*top[0]) <= np.sin(cone)
            near = any(np.hypot(*(top[0] - other.uv)) < LINK for other in known + found)
            rising = _one_rises(active, hertz, top[0], column, float(power[0]))
            if not (near or rising) and np.hypot(*top[0]) < STEEP and power[0] >= (HALF if inside else BLIND):
                cause = find_cause(active, hertz, top[0])
                found.append(_Found(hertz, top[0], column, float(power[0]), cause))
    return found


def _describe(active: ActiveModel, chain: list[_Found], frequency: Floats) -> Blindness:
    worst = max(chain, key=lambda one: one.power)
    nearest = min((one for one in chain if one.power > worst.power - SAME_POWER), key=lambda one: np.hypot(*one.uv))
    top = _over_frequency(active, nearest, frequency)
    opposite = active.power(top.frequency, -top.uv[None])[0, top.column]
    return Blindness(
        tuple(_peak(active, one) for one in chain), _peak(active, top), top.cause,
        mirrored=bool(abs(opposite - top.power) < SAME_POWER),
    )  # fmt: skip


def _over_frequency(active: ActiveModel, found: _Found, frequency: Floats) -> _Found:
    """The peak driven to its maximum over frequency as well, between the neighbouring frequencies searched."""
    if len(frequency) == 1 or (found.power > FULL and len(active.drive) == 1):
        return found
    step = 0.5 * float(np.min(np.diff(frequency)))
    low, high = active.band
    best = found
    while step > 1e-5 * found.frequency:
        tried = []
        for hertz in (best.frequency - step, best.frequency + step):
            if low <= hertz <= high:
                start = Starts(best.uv[None], np.array([2e-3]), np.array([best.column]))
                uv, power = climb(active, hertz, start)
                tried.append((float(power[0]), hertz, uv[0]))
        power, hertz, uv = max(tried, key=lambda one: one[0])
        rising = _one_rises(active, hertz, uv, best.column, power)
        if power > best.power + 1e-9 and np.hypot(*uv) < STEEP and not rising:
            best = replace(best, frequency=hertz, uv=uv, power=power)
        else:
            step *= 0.4
    return replace(best, cause=find_cause(active, best.frequency, best.uv))


def _peak(active: ActiveModel, found: _Found) -> Peak:
    """Described in full: width and where the power goes."""
    scan = ScanPoints.from_cosines(found.uv[:1], found.uv[1:])
    sweep = reduced_sweep(active.model, np.array([found.frequency]), scan)
    response = respond(sweep, active.drive, active.model.cell.lattice.area)
    b = sweep.scattering[0, 0] @ active.drive
    main = (response.orders == np.array([0, 0, 1])).all(axis=1)
    return Peak(
        frequency=found.frequency,
        u=float(found.uv[0]),
        v=float(found.uv[1]),
        port=int(active.driven[found.column]),
        reflection=complex(response.reflection[0, 0, active.driven[found.column]]),
        width=peak_width(active, found.frequency, found.uv, found.column),
        returned=np.abs(b) ** 2 / float(np.sum(np.abs(active.drive) ** 2)),
        radiated=float(response.radiated[0, 0, main].sum()),
        lobes=float(response.radiated[0, 0, ~main].sum()),
        absorbed=response.absorbed[0, 0],
    )


def peak_width(active: ActiveModel, frequency: float, uv: Floats, column: int, level: float = HALF) -> float:
    """Angle (rad) about a peak over which more than `level` of the port's power comes back, in its scan plane."""
    theta, phi = float(np.arcsin(min(1.0, np.hypot(*uv)))), float(np.arctan2(uv[1], uv[0]))
    if active.power(frequency, uv[None])[0, column] < level:
        return np.nan
    return sum(abs(peak_edge(active, frequency, theta, phi, column, sign, level) - theta) for sign in (-1, 1))


def peak_edge(
    active: ActiveModel, frequency: float, theta: float, phi: float, column: int, sign: int, level: float
) -> float:
    """Scan angle where the power falls below `level` on one side of theta; the horizon where it does not."""

    def power(angle: Floats) -> Floats:
        s = np.sin(angle)
        return active.power(frequency, np.column_stack([s * np.cos(phi), s * np.sin(phi)]))[:, column]

    horizon = 0.5 * np.pi - 1e-4
    angle = np.clip(theta + sign * OFFSETS, -horizon, horizon)
    below = np.flatnonzero(power(angle) < level)
    if not len(below):
        return float(angle[-1])
    inner, outer = (theta if below[0] == 0 else angle[below[0] - 1]), angle[below[0]]
    for _ in range(5):
        between = np.linspace(inner, outer, 10)
        first = max(1, int(np.argmax(power(between) < level)))
        inner, outer = between[first - 1], between[first]
    return float(0.5 * (inner + outer))
