"""The solver as a run sees it, and what a solution costs in memory."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

import numpy as np

from ..geometry.cell import UnitCell
from ..solver.result import FloquetWaves, ScanPoints, Sweep
from ..solver.sweep import CellSolver, solve_sweep, wavenumber
from ..solver.waves import wave_table

Advance = Callable[[int, int], None]


class Engine(Protocol):
    """One cell made ready once, then solved at any frequency and scan points."""

    @property
    def unknowns(self) -> int: ...

    @property
    def stored_bytes(self) -> float: ...

    def solve(
        self,
        frequency: float,
        scan: ScanPoints,
        *,
        advance: Advance | None = None,
        keep_currents: bool = False,
    ) -> Sweep: ...


EngineFactory = Callable[[UnitCell, float, ScanPoints, float], Engine]


class DirectEngine:
    """Dense solution of every point by `solver.sweep`; the same Floquet waves are tracked at every
    frequency."""

    def __init__(self, cell: UnitCell, frequency_max: float, scan: ScanPoints, tolerance: float):
        self.cell, self.tolerance = cell, tolerance
        self.solver = CellSolver(cell, frequency_max, tolerance)
        self.table: FloquetWaves = wave_table(cell.lattice, wavenumber(frequency_max), scan, cell.ground)

    @property
    def unknowns(self) -> int:
        return self.solver.operator.n

    @property
    def stored_bytes(self) -> float:
        """Memory held between solutions, bytes."""
        return float(self.solver.operator.near_bytes)

    def solve(
        self,
        frequency: float,
        scan: ScanPoints,
        *,
        advance: Advance | None = None,
        keep_currents: bool = False,
    ) -> Sweep:
        return solve_sweep(
            self.cell,
            np.array([frequency]),
            scan,
            tolerance=self.tolerance,
            keep_currents=keep_currents,
            progress=advance,
            solver=self.solver,
            table=self.table,
        )


WORKING_MATRICES = 6
"""Complex matrices alive at the peak of one solution: the sum over waves, the matrix, its factors,
scratch."""


def memory_needed(unknowns: int, stored_bytes: float) -> float:
    """Bytes needed while solving."""
    return stored_bytes + WORKING_MATRICES * 16.0 * unknowns**2


def memory_free() -> float:
    """Memory the system can give now, bytes; infinite where it does not tell."""
    try:
        with open("/proc/meminfo", encoding="ascii") as stream:
            for line in stream:
                if line.startswith("MemAvailable:"):
                    return float(line.split()[1]) * 1024
    except (OSError, ValueError, IndexError):
        pass
    return float("inf")
