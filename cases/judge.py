"""Verdicts: is each limit of the case met, where is the worst point, and is the margin larger than the
error?"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..solver.pattern import Response, axial_ratio, co_cross, decibel
from ..solver.result import ScanPoints
from .job import Job, Limit
from .result import Result
from .survey_levels import Spot, worst_surveyed

Floats = NDArray[np.float64]

MET, FAILED, CLOSE, OPEN = "met", "failed", "too close to call", "not judged"

UNITS = {
    "reflection": "dB",
    "gain_drop": "dB",
    "cross_polar": "dB",
    "axial_ratio": "dB",
    "efficiency": "",
    "grating_lobe": "dB",
}
TITLES = {
    "reflection": "Active reflection",
    "gain_drop": "Drop of co-polar realised gain from broadside",
    "cross_polar": "Cross-polar level relative to co-polar",
    "axial_ratio": "Axial ratio",
    "efficiency": "Radiation efficiency",
    "grating_lobe": "Strongest grating lobe relative to the main wave",
}
AMPLITUDES = ("reflection", "cross_polar", "grating_lobe")
"""Quantities whose error is carried as a linear amplitude, because a deep null in dB has no bounded error."""
AT_LEAST = ("efficiency",)
SAME_LEVEL = 1e-6
"""A survey's value must be worse by more than this to be told instead of that of a scan point."""
BROADSIDE = np.radians(0.1)


@dataclass(frozen=True)
class Verdict:
    """Outcome for one limit.

    `state`: "met", "failed", "too close to call" (the distance to the limit is smaller than the estimated
    error, on either side) or "not judged". `holds`: the computed worst value itself is within the limit;
    only this decides the exit code. `margin` is positive within the limit. `error`: estimated error of
    `worst` (same unit), NaN when no estimate was made. `theta`, `phi` (rad), `frequency` (Hz) and `port`
    say where the worst value is.
    """

    limit: Limit
    state: str
    holds: bool
    worst: float = np.nan
    margin: float = np.nan
    error: float = np.nan
    theta: float = np.nan
    phi: float = np.nan
    frequency: float = np.nan
    port: str | None = None
    points: int = 0
    reason: str = ""

    @property
    def unit(self) -> str:
        return UNITS[self.limit.quantity]

    @property
    def title(self) -> str:
        return TITLES[self.limit.quantity]

    @property
    def requirement(self) -> str:
        bound = "at least" if self.limit.quantity in AT_LEAST else "at most"
        port = f" of port {self.limit.port}" if self.limit.port else ""
        return f"{self.title}{port} {bound} {number(self.limit.value, self.unit)}"

    @property
    def place(self) -> str:
        """Where the worst value is, in degrees and GHz."""
        if not np.isfinite(self.theta) or np.isneginf(self.worst):
            return ""
        port = f", port {self.port}" if self.port else ""
        turn = np.radians(round(np.degrees(self.phi), 2) % 360.0)
        angles = f"theta {degrees(self.theta)}, phi {degrees(turn)}"
        return f"{angles}, {self.frequency / 1e9:.6g} GHz{port}"


def level(quantity: str, response: Response, scan: ScanPoints, co_polar: str, angle: float) -> Floats:
    """Values of a limit's quantity over (n_freq, n_scan, n) in its unit; n is the number of ports for
    "reflection" and 1 otherwise. "gain_drop" needs a broadside point in `scan` and is NaN without one."""
    if quantity == "reflection":
        return decibel(np.abs(response.reflection) ** 2)
    if quantity == "efficiency":
        return response.efficiency[..., None]
    if quantity == "grating_lobe":
        return decibel(response.grating)[..., None]
    if quantity == "axial_ratio":
        return 2 * decibel(axial_ratio(response.field))[..., None]
    co, cross = (np.abs(part) ** 2 for part in co_cross(response.field, scan.phi, co_polar, angle))
    if quantity == "cross_polar":
        ratio = np.where(np.isnan(co), np.nan, np.inf)
        return decibel(np.divide(cross, co, out=ratio, where=co > 0))[..., None]
    if quantity == "gain_drop":
        middle = broadside_index(scan)
        if middle is None:
            return np.full((*co.shape, 1), np.nan)
        with np.errstate(invalid="ignore"):
            return (decibel(co[:, [middle]]) - decibel(co))[..., None]
    raise ValueError(f"quantity {quantity!r} is none of {', '.join(UNITS)}")


def broadside_index(scan: ScanPoints) -> int | None:
    """Index of the scan point within 0.1 degree of broadside, None if there is none."""
    s = np.hypot(scan.u, scan.v)
    nearest = int(np.argmin(s))
    return nearest if s[nearest] <= np.sin(BROADSIDE) else None


def judge(result: Result) -> tuple[Verdict, ...]:
    """One verdict per limit of the case, in the case's order."""
    return tuple(_verdict(limit, result) for limit in result.job.limits)


def _verdict(limit: Limit, result: Result) -> Verdict:
    job, scan = result.job, result.job.scan.points
    inside = np.flatnonzero(scan.theta <= limit.cone + 1e-9)
    ports = _ports(limit, job)
    if not len(ports):
        return Verdict(limit, OPEN, False, reason=f"port {limit.port} is not driven or does not exist")
    if not len(inside):
        return Verdict(limit, OPEN, False, reason="no scan point lies in the cone")
    if limit.quantity == "gain_drop" and broadside_index(scan) is None:
        return Verdict(limit, OPEN, False, reason="the scan has no broadside point to refer the gain to")
    values = level(limit.quantity, result.response, scan, job.co_polar, job.co_polar_angle)[:, inside]
    if limit.quantity == "reflection":
        values = values[..., ports]
    if np.isnan(values).any():
        return Verdict(limit, OPEN, False, reason="the computed values are not all finite")
    at_least = limit.quantity in AT_LEAST
    place = np.argmin(values) if at_least else np.argmax(values)
    f, s, p = np.unravel_index(place, values.shape)
    i, port = inside[s], ports[p] if limit.quantity == "reflection" else None
    spot = Spot(float(values[f, s, p]), float(job.frequency[f]), float(scan.u[i]), float(scan.v[i]), port)
    points = len(inside) * len(job.frequency)
    theta, phi = float(scan.theta[i]), float(scan.phi[i])
    surveyed = worst_surveyed(limit, job, result.survey, ports)
    if surveyed is not None:
        if np.isnan(surveyed.worst.value):
            return Verdict(limit, OPEN, False, reason="the surveyed values are not all finite")
        points += surveyed.points
        if surveyed.worst.value > spot.value + SAME_LEVEL:
            spot = surveyed.worst
            theta, phi = float(np.arcsin(np.hypot(spot.u, spot.v))), float(np.arctan2(spot.v, spot.u))
    margin = spot.value - limit.value if at_least else limit.value - spot.value
    state, error = _state(limit, spot.value, margin, result.accuracy.errors.get(limit.quantity, np.nan))
    return Verdict(
        limit=limit,
        state=state,
        holds=bool(margin >= 0),
        worst=spot.value,
        margin=margin,
        error=error,
        theta=theta,
        phi=phi,
        frequency=spot.frequency,
        port=None if spot.port is None else job.cell.ports[spot.port].name,
        points=points,
    )


def _ports(limit: Limit, job: Job) -> list[int]:
    if limit.quantity != "reflection":
        return [0]
    return [i for i, port in enumerate(job.cell.ports) if port.drive != 0 and limit.port in (None, port.name)]


def _state(limit: Limit, worst: float, margin: float, error: float) -> tuple[str, float]:
    """State and the error in the quantity's unit at the worst value."""
    plain = MET if margin >= 0 else FAILED
    if not np.isfinite(error):
        return plain, np.nan
    distance = abs(margin)
    if limit.quantity in AMPLITUDES:
        amplitude = 10 ** (worst / 20)
        distance = abs(10 ** (limit.value / 20) - amplitude)
        own = 20 * np.log10(1 + error / amplitude) if amplitude > 0 else np.inf
    else:
        own = error
    return (CLOSE if distance < error else plain), float(own)


def number(value: float, unit: str) -> str:
    """A value with its unit as the report prints it."""
    if np.isneginf(value):
        return "none"
    digits = 2 if unit else 4
    text = f"{round(value, digits) + 0.0:.{digits}f}"
    return f"{text} {unit}" if unit else text


def degrees(angle: float) -> str:
    """An angle in rad as degrees, trailing zeros dropped, never "-0"."""
    return f"{round(np.degrees(angle), 2) + 0.0:g} deg"
