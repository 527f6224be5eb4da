"""Finite arrays against brute force: time, memory, and how both grow. All timed in this run.

    python tests/benchmarks/finite.py [unknowns]

Element: a strip dipole .42 x .12 wavelengths, .2 above ground, half-wave square lattice, about 1000 unknowns unless
told otherwise; one frequency, wanted error of S 1e-4. Brute force, one matrix of all unknowns of the array, is
counted by its LU factorisation alone (filling is left out, in its favour), timed at a size that fits and scaled with
the cube; the largest array where it fits is that whose matrix takes MEMORY. On a machine shared with others set
OPENBLAS_NUM_THREADS=1.
"""

from __future__ import annotations

import resource
import sys
import time

import numpy as np
from reduced import FREQUENCY, dipole_cell
from scanward.solver.array_basis import build_array_model
from scanward.solver.array_sites import rectangle
from scanward.solver.finite_array import FiniteArray
from scanward.solver.reduced import ReducedModel
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import CellSolver
from scipy.linalg import lu_factor

MEMORY = 16e9  # bytes of brute force's matrix
TIMED = 2500  # unknowns of the factorisation timed


def factorisation_seconds(unknowns: int) -> float:
    """LU of a complex matrix, scaled from one that fits."""
    random = np.random.default_rng(1)
    matrix = random.normal(size=(TIMED, TIMED)) + 1j * random.normal(size=(TIMED, TIMED))
    start = time.perf_counter()
    lu_factor(matrix, overwrite_a=True, check_finite=False)
    return (time.perf_counter() - start) * (unknowns / TIMED) ** 3


def full_matrix(model: ReducedModel, rows: int, columns: int) -> tuple[float, FiniteArray]:
    """Seconds from the model to the whole S-matrix, and the array."""
    start = time.perf_counter()
    array = FiniteArray(model, FREQUENCY, rectangle(rows, columns))
    s = array.scattering()
    seconds = time.perf_counter() - start
    assert np.linalg.norm(s, 2) < 1 and np.abs(s - s.T).max() < 1e-9
    return seconds, array


def peak() -> float:
    """Peak memory so far, GB."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6


def small_arrays(model: ReducedModel, unknowns: int, building: float) -> None:
    """12 x 12, and the largest array that brute force can hold."""
    seconds, array = full_matrix(model, 12, 12)
    start = time.perf_counter()
    budget = array.power_budget(array.scan_excitation(0.3, 0.2))
    balance = time.perf_counter() - start
    start = time.perf_counter()
    theta = np.radians(np.linspace(-90, 90, 181))
    array.embedded_patterns(ScanPoints.from_angles(np.tile(theta, 2), np.repeat([0.0, 0.5 * np.pi], len(theta))))
    patterns = time.perf_counter() - start
    print(
        f"12 x 12: full S-matrix in {seconds:.1f} s (wanted < 30) of {array.system.n * array.system.r} unknowns; "
        f"144 embedded patterns at 362 directions {patterns:.1f} s; "
        f"power balance {budget.rest:.0e} in {balance:.1f} s; peak memory {peak():.2f} GB",
        flush=True,
    )
    count = int(np.sqrt(MEMORY / 16) / unknowns)
    rows = int(np.sqrt(count))
    seconds, _ = full_matrix(model, rows, count // rows)
    brute = factorisation_seconds(rows * (count // rows) * unknowns)
    print(
        f"{rows} x {count // rows}, the largest whose matrix fits in {MEMORY / 1e9:.0f} GB: full S-matrix in "
        f"{seconds:.2f} s, brute force's factorisation {brute:.0f} s: {brute / seconds:.0f} times faster, "
        f"{brute / (seconds + building):.0f} times with the model's building counted",
        flush=True,
    )


def growth(model: ReducedModel) -> None:
    """One excitation and the centre element's row."""
    for side in (10, 20, 40):
        start = time.perf_counter()
        array = FiniteArray(model, FREQUENCY, rectangle(side, side), direct_limit=0)
        setup = time.perf_counter() - start
        start = time.perf_counter()
        array.solve(array.scan_excitation(0.3, 0.2))
        first, iterations = time.perf_counter() - start, array.system.iterations
        start = time.perf_counter()
        array.scattering_column(side * side // 2 + side // 2)
        row = time.perf_counter() - start
        print(
            f"{side} x {side}: couplings {setup:.1f} s, one excitation {first:.2f} s in {iterations} iterations, "
            f"the centre element's row {row:.2f} s; peak memory {peak():.2f} GB",
            flush=True,
        )


def main() -> None:
    """Measure."""
    cell = dipole_cell(int(sys.argv[1]) if len(sys.argv) > 1 else 900)
    start = time.perf_counter()
    solver = CellSolver(cell, FREQUENCY)
    fill = time.perf_counter() - start
    start = time.perf_counter()
    model, certificate = build_array_model(solver, (FREQUENCY, FREQUENCY), error=1e-4)
    build = time.perf_counter() - start
    print(f"{solver.operator.n} unknowns an element, filled in {fill:.1f} s; {certificate}, built in {build:.1f} s")
    small_arrays(model, solver.operator.n, fill + build)
    growth(model)


if __name__ == "__main__":
    main()
