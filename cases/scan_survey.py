"""The survey of a job's whole scan volume: maps, blindness, the cone that is free of it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..solver.active import ActiveModel
from ..solver.blindness import find_blindness
from ..solver.free_cone import free_cone
from ..solver.reduced import ReducedModel
from ..solver.scan_map import scan_map
from ..solver.survey import HALF, Survey
from .job import Job
from .progress import Progress

Floats = NDArray[np.float64]

MOST_FREQUENCIES = 9


def survey_job(job: Job, model: ReducedModel, error: float, told: Progress) -> Survey:
    """Survey under the case's own drive.

    Parameters
    ----------
    model : reduced model of the job's cell and band
    error : of the active reflection, to be counted with
    told : progress

    The free cone is judged at the strictest reflection limit of the case; without one, at half of the power.
    """
    active = ActiveModel(model, [port.drive for port in job.cell.ports])
    frequency = map_frequencies(job)
    planes = np.array([phi for phi, _ in job.scan.planes])
    told.start("mapping the scan volume", len(frequency))
    maps = scan_map(active, frequency, lambda done, _: told.advance(done))
    told.start("looking for blindness", len(frequency))
    found = find_blindness(active, maps, job.scan.cone, planes, lambda done, _: told.advance(done))
    told.say("measuring the cone that is free of it")
    level, wanted = wanted_cone(job)
    cone = free_cone(
        active, maps, found, level=level, wanted=wanted, planes=list(planes),
        polarisation=(job.co_polar, job.co_polar_angle),
    )  # fmt: skip
    return Survey(maps, found, cone, error)


def map_frequencies(job: Job) -> Floats:
    """Frequencies of the maps: the case's own, thinned to a few with both ends among them."""
    count = len(job.frequency)
    pick = np.unique(np.round(np.linspace(0, count - 1, min(count, MOST_FREQUENCIES))).astype(int))
    return job.frequency[pick]


def wanted_cone(job: Job) -> tuple[float, float]:
    """Level (share of power) and cone (rad) at which the free cone is judged."""
    limits = [limit for limit in job.limits if limit.quantity == "reflection"]
    if not limits:
        return HALF, job.scan.cone
    strictest = min(limits, key=lambda limit: limit.value)
    return 10 ** (strictest.value / 10), strictest.cone
