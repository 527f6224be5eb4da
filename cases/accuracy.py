"""How far the mesh lets the numbers be trusted: a few sample points solved again on a finer mesh.

The elements are made smaller by `REFINEMENT`. If a quantity converges as (element size)^p, its remaining
error is the observed change times 1 / (1 - REFINEMENT^-p) (Richardson's extrapolation). Impedances of
strips and plates converge between first and second order, because edge currents are singular; the
first-order factor, 3, is used throughout: at second order it overstates the error 1.7 times. It is an
estimate at samples, not a bound.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from ..geometry.cell import UnitCell
from ..solver.pattern import respond
from ..solver.result import ScanPoints, Sweep
from .job import Job
from .judge import AMPLITUDES, judge, level
from .partial import join_frequencies
from .result import Accuracy, Result

REFINEMENT = 1.5
ORDER = 1.0
FACTOR = 1.0 / (1.0 - REFINEMENT**-ORDER)
MOST_FREQUENCIES = 4

Solve = Callable[[UnitCell, float, ScanPoints], Sweep]


def choose_samples(result: Result) -> dict[int, list[int]]:
    """Scan indices to solve again, by frequency index; the point nearest to broadside comes first in each.

    Taken are broadside and the ends of the cuts at both ends and the middle of the band, the worst
    reflection of every driven port, and the worst point of every limit.
    """
    job, scan = result.job, result.job.scan.points
    s = np.where(np.isfinite(scan.theta), np.hypot(scan.u, scan.v), np.inf)
    middle, last = int(np.argmin(s)), len(job.frequency) - 1
    samples: dict[int, list[int]] = {}

    def add(f: int, point: int) -> None:
        if f in samples or len(samples) < MOST_FREQUENCIES:
            samples.setdefault(f, [middle])
            if point not in samples[f]:
                samples[f].append(point)

    inside = np.flatnonzero(scan.theta <= job.scan.cone + 1e-9)
    size = np.abs(result.response.reflection)
    for port in np.flatnonzero(result.response.drive):
        if len(inside):
            f, point = np.unravel_index(
                np.argmax(np.nan_to_num(size[:, inside, port])), (last + 1, len(inside))
            )
            add(int(f), int(inside[point]))
    for verdict in judge(result):
        if np.isfinite(verdict.theta):
            f = int(np.argmin(np.abs(job.frequency - verdict.frequency)))
            away = np.hypot(
                scan.u - np.sin(verdict.theta) * np.cos(verdict.phi),
                scan.v - np.sin(verdict.theta) * np.sin(verdict.phi),
            )
            add(f, int(np.argmin(away)))
    for f in dict.fromkeys((last // 2, 0, last)):
        add(f, middle)
    for _, index in job.scan.planes[:2]:
        add(last // 2, int(index[-1])) if len(index) else None
    return samples


def refined_cell(job: Job) -> tuple[UnitCell | None, str]:
    """The cell on a mesh finer by `REFINEMENT`, or None and the reason why there is none."""
    if not callable(job.remesh):
        return None, "the job cannot be meshed anew"
    cell: UnitCell = job.remesh(1 / REFINEMENT)  # type: ignore[assignment]
    before, after = (len(c.mesh.triangles) + len(c.mesh.segments) for c in (job.cell, cell))
    if after <= before:
        return None, "the mesh cannot be refined (a mesh file is used as it is)"
    return cell, ""


def estimate(result: Result, cell: UnitCell, solve: Solve, unknowns: tuple[int, int]) -> Accuracy:
    """Compare `result` at sample points with solutions on the finer `cell`.

    `solve` gives the single-frequency sweep of a cell at scan points; `unknowns`: of the run and the finer
    mesh.
    """
    gamma, impedance, count = 0.0, 0.0, 0
    errors: dict[str, float] = {}
    for f, points in choose_samples(result).items():
        coarse = pick(result.sweep, f, points)
        fine = solve(cell, float(result.job.frequency[f]), coarse.scan)
        g, z, own = _compare(result.job, coarse, fine)
        gamma, impedance, count = max(gamma, g), max(impedance, z), count + len(points)
        errors = {name: max(value, errors.get(name, 0.0)) for name, value in own.items()}
    return Accuracy(
        factor=FACTOR,
        samples=count,
        reflection=FACTOR * gamma,
        impedance=FACTOR * impedance,
        errors={name: FACTOR * value for name, value in errors.items()},
        unknowns=unknowns[0],
        finer_unknowns=unknowns[1],
    )


def pick(sweep: Sweep, f: int, points: list[int]) -> Sweep:
    """The part of a sweep at one frequency and some scan points."""
    scan = ScanPoints(sweep.scan.u[points], sweep.scan.v[points], sweep.scan.phi[points])
    part = {
        name: getattr(sweep, name)[f : f + 1, points]
        for name in ("impedance", "scattering", "waves", "loss", "residual")
    }
    return replace(sweep, frequency=sweep.frequency[f : f + 1], scan=scan, currents=None, **part)


def _compare(job: Job, coarse: Sweep, fine: Sweep) -> tuple[float, float, dict[str, float]]:
    """Largest |change of active Gamma|, relative change of the impedance matrix, and change per quantity."""
    wide = join_frequencies([coarse, fine])  # the same wave table for both
    drive = [port.drive for port in job.cell.ports]
    response = respond(wide, drive, job.cell.lattice.area)
    driven = np.flatnonzero(response.drive)
    gamma = np.abs(np.diff(response.reflection[..., driven], axis=0)).max()
    change = np.linalg.norm(np.diff(wide.impedance, axis=0)[0], axis=(-2, -1))
    impedance = (change / np.linalg.norm(wide.impedance[0], axis=(-2, -1))).max()
    errors = {}
    for quantity in {"reflection", *(limit.quantity for limit in job.limits)}:
        values = level(quantity, response, wide.scan, job.co_polar, job.co_polar_angle)
        if quantity == "reflection":
            values = values[..., driven]
        if quantity in AMPLITUDES:
            values = 10 ** (values / 20)
        with np.errstate(invalid="ignore"):
            step = np.abs(values[1] - values[0])
        errors[quantity] = float(np.max(step[np.isfinite(step)], initial=0.0))
    errors["reflection"] = float(gamma)
    return float(gamma), float(impedance), errors
