"""How far the mesh lets the numbers be trusted: a few sample points solved again on another mesh.

If a quantity converges as (element size)^p, the error left on the finer of two meshes is the change
between them times 1 / (r^p - 1), and on the coarser one times 1 / (1 - r^-p), r the ratio of their element
sizes (Richardson's extrapolation). Impedances of strips and plates converge between first and second
order, because edge currents are singular; first order is assumed throughout: 3 times the change for a mesh
finer by 1.5, 2 times for one coarser by 1.5; at second order this overstates the error 1.7 times. r is the
ratio that the meshes really show. A finer mesh is preferred; where there is none (wires already at the
thin-wire limit of their segments, or too little memory), a coarser one serves. The result is an estimate
at samples, not a bound.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np

from ..geometry.cell import UnitCell
from ..geometry.errors import InputError
from ..solver.pattern import respond
from ..solver.result import ScanPoints, Sweep
from .job import Job
from .judge import AMPLITUDES, judge, level
from .partial import join_frequencies
from .result import Accuracy, Result

RATIOS = (1.5, 2.0, 3.0)
"""Tried in turn: on a mesh of few elements a small change may do nothing."""
LEAST_RATIO = 1.3
ORDER = 1.0
MOST_FREQUENCIES = 4

Solve = Callable[[float, ScanPoints], Sweep]


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
            f, point = np.unravel_index(np.argmax(np.nan_to_num(size[:, inside, port])), (last + 1, len(inside)))
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


@dataclass(frozen=True)
class Comparison:
    """Another mesh of the cell; `factor` turns the change between the two into the error of the run's own."""

    cell: UnitCell
    kind: str
    factor: float


def comparisons(job: Job) -> Iterator[Comparison]:
    """Meshes to compare the job's own with, best first: a finer one, then a coarser one; none if fixed."""
    if not callable(job.remesh):
        return
    for kind, direction in (("finer", -1), ("coarser", 1)):
        for wanted in RATIOS:
            try:
                cell: UnitCell = job.remesh(wanted**direction)  # type: ignore[assignment]
            except InputError:
                continue  # too coarse for a gap, or too fine for a wire
            reached = (element_size(cell) / element_size(job.cell)) ** direction
            if reached >= LEAST_RATIO:
                yield Comparison(cell, kind, richardson(reached, kind))
                break


def richardson(ratio: float, kind: str) -> float:
    """Factor from the change between meshes of `ratio` to the error of the own mesh, at order `ORDER`."""
    return 1.0 / (1.0 - ratio**-ORDER) if kind == "finer" else 1.0 / (ratio**ORDER - 1.0)


def element_size(cell: UnitCell) -> float:
    """Mean size (m) of the elements, each weighted by its size: longest edge of a triangle, length of a
    segment."""
    corners = cell.mesh.points[cell.mesh.triangles.reshape(-1, 3)]
    longest = np.linalg.norm(corners - np.roll(corners, 1, axis=1), axis=2).max(axis=1)
    sizes = np.concatenate([longest, cell.mesh.segment_lengths])
    return float(np.sum(sizes**2) / np.sum(sizes))


def estimate(result: Result, other: Comparison, solve: Solve, unknowns: tuple[int, int]) -> Accuracy:
    """Compare `result` at sample points with solutions on the `other` mesh.

    `solve` gives the single-frequency sweep at scan points there; `unknowns`: of the run and of the other
    mesh.
    """
    gamma, impedance, count = 0.0, 0.0, 0
    errors: dict[str, float] = {}
    for f, points in choose_samples(result).items():
        own = pick(result.sweep, f, points)
        g, z, change = _compare(result.job, own, solve(float(result.job.frequency[f]), own.scan))
        gamma, impedance, count = max(gamma, g), max(impedance, z), count + len(points)
        errors = {name: max(value, errors.get(name, 0.0)) for name, value in change.items()}
    return Accuracy(
        factor=other.factor,
        samples=count,
        reflection=other.factor * gamma,
        impedance=other.factor * impedance,
        errors={name: other.factor * value for name, value in errors.items()},
        unknowns=unknowns[0],
        compared_unknowns=unknowns[1],
        compared=other.kind,
    )


def pick(sweep: Sweep, f: int, points: list[int]) -> Sweep:
    """The part of a sweep at one frequency and some scan points."""
    scan = ScanPoints(sweep.scan.u[points], sweep.scan.v[points], sweep.scan.phi[points])
    part = {
        name: getattr(sweep, name)[f : f + 1, points]
        for name in ("impedance", "scattering", "waves", "loss", "residual")
    }
    return replace(sweep, frequency=sweep.frequency[f : f + 1], scan=scan, currents=None, **part)


def _compare(job: Job, own: Sweep, other: Sweep) -> tuple[float, float, dict[str, float]]:
    """Largest |change of active Gamma|, relative change of the impedance matrix, and change per quantity."""
    wide = join_frequencies([own, other])  # the same wave table for both
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
