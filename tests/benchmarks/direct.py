"""Cost of the direct solver in units of one dense LU factorisation of the same size, all timed in this run.

    python tests/benchmarks/direct.py [unknowns ...]

Cell: a plate 0.35 x 0.3 wavelengths (even mesh), 0.1 above ground, half-wave square lattice. Times are the least of
several repetitions; the machine may be noisy, the ratios less so.
"""

from __future__ import annotations

import gc
import resource
import sys
import time
from collections.abc import Callable

import numpy as np
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Plate
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesher import mesh_conductors
from scanward.solver.operator import PeriodicOperator
from scipy.linalg import lu_factor

K = 2 * np.pi
LATTICE = Lattice(np.array([0.5, 0.0]), np.array([0.0, 0.5]))


def least(call: Callable[[], object], repetitions: int) -> float:
    """Shortest of several timings, s."""
    best = np.inf
    for _ in range(repetitions):
        start = time.perf_counter()
        call()
        best = min(best, time.perf_counter() - start)
    return best


def plate_cell(unknowns: int) -> UnitCell:
    """The plate, meshed for about that many unknowns."""
    plate = Plate(name="plate", centre=np.array([0.0, 0.0, 0.1]), size=np.array([0.35, 0.3]))
    size = float(np.sqrt(0.35 * 0.3 * 3 / unknowns))
    mesh = mesh_conductors([plate], LATTICE, ground=True, element_size=size, grading=False)
    return UnitCell(LATTICE, mesh, (), (), True)


def measure(unknowns: int) -> dict[str, float]:
    """Times in seconds and memory in MB for one size."""
    cell = plate_cell(unknowns)
    start = time.perf_counter()
    operator = PeriodicOperator(cell, 1.1 * K)
    fill = time.perf_counter() - start
    if unknowns <= 1100:
        fill = min(fill, least(lambda: PeriodicOperator(cell, 1.1 * K), 2))
    scans = iter(np.linspace(0.0, 0.6, 50))

    def point() -> None:
        lu_factor(operator.matrix(K, K * np.array([next(scans), 0.2])), check_finite=False)

    point()
    each = least(point, 5)
    matrix = operator.matrix(K, K * np.array([0.3, 0.2]))
    lu = least(lambda: lu_factor(matrix, check_finite=False), 6)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3
    return {"n": operator.n, "lu": lu, "fill": fill, "each": each, "near": operator.near_bytes / 1e6, "peak": peak}


def main() -> None:
    """Print the table and the growth with the number of unknowns."""
    rows = []
    print(f"{'unknowns':>8} {'LU s':>8} {'fill s':>8} {'fill/LU':>8} {'point/LU':>9} {'near MB':>8} {'peak MB':>8}")
    for size in [int(a) for a in sys.argv[1:]] or [250, 500, 1000, 2000]:
        row = measure(size)
        rows.append(row)
        print(
            f"{row['n']:8.0f} {row['lu']:8.3f} {row['fill']:8.2f} {row['fill'] / row['lu']:8.1f} "
            f"{row['each'] / row['lu']:9.2f} {row['near']:8.0f} {row['peak']:8.0f}",
            flush=True,
        )
        gc.collect()
    if len(rows) > 1:
        n = np.log([row["n"] for row in rows])
        for key in ("lu", "fill", "each", "near"):
            slope = np.polyfit(n, np.log([row[key] for row in rows]), 1)[0]
            print(f"{key:>5} grows with the unknowns to the power {slope:.2f}")


if __name__ == "__main__":
    main()
