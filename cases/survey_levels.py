"""The worst value of a limit's quantity over what a survey solved beyond the case's own scan points."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..solver.pattern import axial_ratio, co_cross, decibel
from ..solver.survey import Survey
from .job import Job, Limit

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

FROM_MAP = ("reflection", "gain_drop", "cross_polar", "axial_ratio")
"""Quantities a map holds; efficiency and grating lobes are judged at the case's own points."""


@dataclass(frozen=True)
class Spot:
    """A value in the limit's unit and where it is; `port` is an index, None where it does not matter."""

    value: float
    frequency: float
    u: float
    v: float
    port: int | None


@dataclass(frozen=True)
class Surveyed:
    """The highest value found (one that is not a number counts as highest), and at how many points; a peak is one."""

    worst: Spot
    points: int


def worst_surveyed(limit: Limit, job: Job, survey: Survey | None, ports: list[int]) -> Surveyed | None:
    """Highest value of `limit` over the solved points of the map and, for reflection, the peaks driven to their maxima;
    None where the survey cannot tell.

    ports : indices of the ports the limit speaks of
    """
    if survey is None or limit.quantity not in FROM_MAP:
        return None
    spots, points = [], 0
    maps = survey.scan_map
    u, v = np.meshgrid(maps.axis, maps.axis, indexing="ij")
    inside = np.hypot(u, v) <= np.sin(limit.cone) * (1 + 1e-9)
    for f, frequency in enumerate(maps.frequency):
        pick = inside & maps.solved[f]
        values = _values(limit.quantity, job, survey, f, pick, ports)  # (n, n_port or 1)
        if not values.size:
            continue
        n, p = np.unravel_index(np.argmax(values), values.shape)
        port = ports[int(p)] if limit.quantity == "reflection" else None
        spots.append(Spot(float(values[n, p]), float(frequency), float(u[pick][n]), float(v[pick][n]), port))
        points += len(values)
    if limit.quantity == "reflection":
        for peak in (peak for one in survey.blindnesses for peak in (*one.peaks, one.worst)):
            if peak.theta <= limit.cone + 1e-9 and peak.port in ports:
                spots.append(Spot(float(decibel(peak.power)), peak.frequency, peak.u, peak.v, peak.port))
                points += 1
    if not spots:
        return None
    return Surveyed(max(spots, key=lambda spot: (np.isnan(spot.value), spot.value)), points)


def _values(quantity: str, job: Job, survey: Survey, f: int, pick: NDArray[np.bool_], ports: list[int]) -> Floats:
    maps = survey.scan_map
    if quantity == "reflection":
        return decibel(np.abs(maps.reflection[f][pick][:, ports]) ** 2)
    field = maps.field[f][pick]
    if quantity == "axial_ratio":
        return 2 * decibel(axial_ratio(field))[:, None]
    u, v = np.meshgrid(maps.axis, maps.axis, indexing="ij")
    co, cross = _co_cross(job, field, np.arctan2(v, u)[pick])
    with np.errstate(invalid="ignore", divide="ignore"):
        if quantity == "cross_polar":
            return decibel(np.divide(cross, co, out=np.where(np.isnan(co), np.nan, np.inf), where=co > 0))[:, None]
        middle = len(maps.axis) // 2
        broadside = _co_cross(job, maps.field[f][[middle], [middle]], np.zeros(1))[0]
        return (decibel(broadside) - decibel(co))[:, None]


def _co_cross(job: Job, field: Complexes, phi: Floats) -> tuple[Floats, Floats]:
    co, cross = co_cross(field, phi, job.co_polar, job.co_polar_angle)
    return np.abs(co) ** 2, np.abs(cross) ** 2
