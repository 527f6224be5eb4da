"""What a run will take, before it is started: unknowns, time, memory.

A run by the reduced model takes some tens of full solutions and then many cheap points, of the case itself and of the
survey; their cost hangs on the cell's kind more than on its unknowns (constants measured on the ready-made cases).
Small cells are done so fast that figures and report count too.

One solution of the cell itself is timed when it is small, else one of a coarser mesh of it. Filling,
assembling and stored memory grow as the square of the unknowns, factorisation as the cube; factorisation
is timed apart.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..geometry.cell import UnitCell
from ..geometry.errors import InputError
from ..solver.basis import build_basis
from ..solver.result import ScanPoints
from .accuracy import RATIOS
from .engine import DirectEngine, EngineFactory, memory_needed
from .job import Job
from .scan_survey import map_frequencies

LARGEST_TRIAL = 600
"""Unknowns of the largest cell that is solved as a trial: a few seconds."""
SAMPLES = 10
FULL_SOLUTIONS = 22
"""Of a reduced model, held-back ones included; measured on the ready-made cases: 12 to 28."""
PROJECTION = 2.0
"""Times the full solutions themselves that making the model takes."""
SURVEY_POINTS = 9000
"""Points of the survey at each frequency of the maps and for each driven port, whose maxima are sought one by one: map,
peaks, clear cone; measured: 5000 to 16000."""
POINT_SECONDS = {"air": 1.2e-4, "layers": 2.5e-4, "upright conductors": 1.2e-3, "upright conductors in layers": 2e-3}
"""One point of the reduced model, by the cell's kind."""
WRITING_SECONDS = {"reduced": 8.0, "direct": 5.0}
"""Figures, tables and report; more to draw after a survey."""
PROGRAM_BYTES = 1.1e8
"""Of the program with its packages, before anything is filled."""
REDUCED_BYTES = 6e7
"""Scratch of the reduced model: one batch of points."""


@dataclass(frozen=True)
class Cost:
    """What a run takes.

    Attributes
    ----------
    unknowns : of the cell
    solutions : full ones; `cheap` : points answered by the reduced model, 0 for direct runs
    seconds : for all solutions and the survey; `estimate_seconds` : for the error estimate on another mesh;
        `writing_seconds` : for figures and report
    memory, estimate_memory : bytes at the peak of each, the program included
    trial : unknowns of the solution that was timed; the further below `unknowns`, the rougher the figures
    """

    unknowns: int
    solutions: int
    seconds: float
    estimate_seconds: float
    memory: float
    estimate_memory: float
    trial: int
    cheap: int = 0
    writing_seconds: float = 0.0


@dataclass(frozen=True)
class Trial:
    """One timed solution: seconds to fill, to assemble one point, to factorise; bytes stored; unknowns."""

    unknowns: int
    fill: float
    assemble: float
    factor: float
    stored: float

    def seconds(self, unknowns: int, solutions: int) -> float:
        """Expected time of `solutions` of a cell of so many unknowns."""
        r = unknowns / self.unknowns
        return self.fill * r**2 + solutions * (self.assemble * r**2 + self.factor * r**3)

    def memory(self, unknowns: int) -> float:
        """Expected peak in bytes."""
        return memory_needed(unknowns, self.stored * (unknowns / self.unknowns) ** 2)


def estimate_cost(job: Job, engine: EngineFactory = DirectEngine) -> Cost:
    """Expected cost of `run_case` for `job`; takes a few seconds."""
    n = count_unknowns(job.cell)
    trial = run_trial(job, _trial_cell(job, n), engine)
    finer, points = round(n * _growth(job)), len(job.frequency) * len(job.scan.points)
    base, writing = PROGRAM_BYTES, WRITING_SECONDS["direct"]
    if job.reduced_error is None:
        solutions, cheap, seconds = points, 0, trial.seconds(n, points)
    else:
        driven = sum(port.drive != 0 for port in job.cell.ports)
        solutions, cheap = FULL_SOLUTIONS, points + SURVEY_POINTS * driven * len(map_frequencies(job))
        base, writing = base + REDUCED_BYTES, WRITING_SECONDS["reduced"]
        seconds = trial.seconds(n, round(solutions * PROJECTION)) + cheap * POINT_SECONDS[cell_kind(job.cell)]
    return Cost(
        unknowns=n,
        solutions=solutions,
        seconds=seconds,
        cheap=cheap,
        estimate_seconds=trial.seconds(finer, SAMPLES),
        memory=base + trial.memory(n),
        estimate_memory=base + trial.memory(finer),
        trial=trial.unknowns,
        writing_seconds=writing,
    )


def cell_kind(cell: UnitCell) -> str:
    """Key of POINT_SECONDS."""
    layered = cell.stack is not None and not cell.stack.is_air
    mesh = cell.mesh
    edges = np.concatenate([mesh.segments.reshape(-1, 2), mesh.triangles.reshape(-1, 3)[:, :2]])
    edges = np.concatenate([edges, mesh.triangles.reshape(-1, 3)[:, 1:]])
    upright = bool(np.any(np.abs(np.diff(mesh.points[edges, 2], axis=1)) > 1e-9 * np.ptp(mesh.points)))
    if upright:
        return "upright conductors in layers" if layered else "upright conductors"
    return "layers" if layered else "air"


def count_unknowns(cell: UnitCell) -> int:
    """Number of current basis functions of a cell."""
    return build_basis(cell.mesh, cell.lattice, ground=cell.ground).n


def run_trial(job: Job, cell: UnitCell, engine: EngineFactory) -> Trial:
    """Time one solution of `cell` at the top frequency and the direction farthest from broadside."""
    frequency, scan = float(job.frequency.max()), job.scan.points
    begun = time.perf_counter()
    made = engine(cell, frequency, scan, job.tolerance)
    filled = time.perf_counter() - begun
    far = int(np.argmax(np.hypot(scan.u, scan.v)))
    points = [far, far, far]  # the first one also pays for what is kept between points
    begun = time.perf_counter()
    made.solve(frequency, ScanPoints(scan.u[points], scan.v[points], scan.phi[points]))
    point = (time.perf_counter() - begun) / len(points)
    factor = min(_factor_time(made.unknowns), point)
    return Trial(made.unknowns, filled, point - factor, factor, made.stored_bytes)


def _trial_cell(job: Job, unknowns: int) -> UnitCell:
    """The job's own cell when small, else the finest mesh of it that is; the coarsest if none is."""
    cell: UnitCell = job.cell
    if unknowns <= LARGEST_TRIAL or not callable(job.remesh):
        return cell
    for coarser in (1.5, 2.0, 3.0, 4.0, 6.0, 8.0):
        try:
            cell = job.remesh(coarser)  # type: ignore[assignment]
        except InputError:
            break
        if count_unknowns(cell) <= LARGEST_TRIAL:
            break
    return cell


def _growth(job: Job) -> float:
    """How many times more unknowns the finer mesh has: once per dimension of the elements."""
    triangles, segments = len(job.cell.mesh.triangles), len(job.cell.mesh.segments)
    return (triangles * RATIOS[0] ** 2 + segments * RATIOS[0]) / max(triangles + segments, 1)


def _factor_time(n: int) -> float:
    """Seconds of one factorisation, the best of three."""
    from scipy.linalg import lu_factor

    random = np.random.default_rng(1)
    matrix = random.normal(size=(n, n)) + 1j * random.normal(size=(n, n))
    return min(_timed(lambda: lu_factor(matrix, check_finite=False)) for _ in range(3))


def _timed(call: Callable[[], object]) -> float:
    begun = time.perf_counter()
    call()
    return time.perf_counter() - begun
