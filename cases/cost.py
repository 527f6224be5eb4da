"""What a run will take, before it is started: unknowns, time, memory.

Time is scaled from two quick measurements on this machine: one factorisation (grows as unknowns cubed) and
one pass over a complex matrix (everything else grows as unknowns squared). How many passes filling and
assembling take was measured on flat strips of 1300 to 4400 unknowns; other shapes differ by a factor of
two or three.
"""

from __future__ import annotations

import time
from dataclasses import dataclass

import numpy as np

from ..solver.basis import build_basis
from .accuracy import RATIOS
from .engine import WORKING_MATRICES
from .job import Job

PROBE = 500
PASSES_ASSEMBLY = 40.0
PASSES_FILL = 500.0
STORED_BYTES = 130.0
"""Bytes kept per pair of unknowns: powers of k^2 of two real matrices, and the near neighbours."""
POINT_OVERHEAD = 0.012
"""Seconds per solution that do not depend on the number of unknowns."""
SAMPLES = 10


@dataclass(frozen=True)
class Cost:
    """Unknowns, number of solutions, seconds for the solutions and for the error estimate, bytes at the
    peak."""

    unknowns: int
    solutions: int
    seconds: float
    estimate_seconds: float
    memory: float
    estimate_memory: float


def estimate_cost(job: Job) -> Cost:
    """Expected cost of `run_case` for `job`; takes a fraction of a second."""
    n = build_basis(job.cell.mesh, job.cell.lattice, ground=job.cell.ground).n
    finer = round(n * _growth(job))
    factor, one_pass = _probe()
    solutions = len(job.frequency) * len(job.scan.points)
    return Cost(
        unknowns=n,
        solutions=solutions,
        seconds=_fill(n, one_pass) + solutions * _point(n, factor, one_pass),
        estimate_seconds=_fill(finer, one_pass) + SAMPLES * _point(finer, factor, one_pass),
        memory=_memory(n),
        estimate_memory=_memory(finer),
    )


def _growth(job: Job) -> float:
    """How many times more unknowns the finer mesh has: once per dimension of the elements."""
    triangles, segments = len(job.cell.mesh.triangles), len(job.cell.mesh.segments)
    total = max(triangles + segments, 1)
    return (triangles * RATIOS[0] ** 2 + segments * RATIOS[0]) / total if total else 1.0


def _memory(n: int) -> float:
    return (STORED_BYTES + 16.0 * WORKING_MATRICES) * n**2


def _fill(n: int, one_pass: float) -> float:
    return PASSES_FILL * one_pass * n**2


def _point(n: int, factor: float, one_pass: float) -> float:
    return POINT_OVERHEAD + factor * n**3 + PASSES_ASSEMBLY * one_pass * n**2


def _probe() -> tuple[float, float]:
    """Seconds per unknown cubed of a factorisation, and per matrix element of one complex pass."""
    from scipy.linalg import lu_factor

    random = np.random.default_rng(1)
    matrix = random.normal(size=(PROBE, PROBE)) + 1j * random.normal(size=(PROBE, PROBE))
    factor = min(_timed(lambda: lu_factor(matrix, check_finite=False)) for _ in range(3))
    one_pass = min(_timed(lambda: matrix * 1.5j + matrix) for _ in range(3))
    return factor / PROBE**3, one_pass / PROBE**2


def _timed(call: object) -> float:
    begun = time.perf_counter()
    call()  # type: ignore[operator]
    return time.perf_counter() - begun
