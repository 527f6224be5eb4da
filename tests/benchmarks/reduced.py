"""The reduced model against point-by-point direct solution: time, memory, and how both grow. All timed in this run.

    python tests/benchmarks/reduced.py [unknowns ...]

Cell: a strip dipole .42 x .12 wavelengths, .2 above ground, half-wave square lattice; 0.7 to 1.1 f0, the whole visible
space, wanted error of the active reflection 1e-4. Direct solution is timed on small sweeps before and after, and scaled
to all points. On a machine shared with others set OPENBLAS_NUM_THREADS=1: waiting threads spoil the ratios. Yardstick
(checks.md section 12, PUBLISHED: Tihon, Jha, Bodehou, Craeye 2023): 12 full matrices for an octave and all phases.
"""

from __future__ import annotations

import resource
import sys
import time

import numpy as np
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Strip
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesher import mesh_conductors
from scanward.geometry.port import Gap, Port
from scanward.solver.greedy import build_reduced
from scanward.solver.operator import SPEED_OF_LIGHT
from scanward.solver.reduced_sweep import reduced_sweep
from scanward.solver.result import ScanPoints, Sweep
from scanward.solver.sweep import CellSolver, solve_sweep

FREQUENCY = SPEED_OF_LIGHT  # wavelength 1 m
BAND = (0.7 * FREQUENCY, 1.1 * FREQUENCY)
LATTICE = Lattice(np.array([0.5, 0.0]), np.array([0.0, 0.5]))
X, Y, _ = np.eye(3)
DIRECT_DIRECTIONS = np.array([[0.07, -0.42, 0.55, 0.9, -0.2], [0.13, 0.31, -0.5, 0.2, -0.95]])


def dipole_cell(unknowns: int) -> UnitCell:
    """The dipole, meshed for about that many unknowns."""
    ends = np.array([[-0.21, 0.0, 0.2], [0.21, 0.0, 0.2]])
    strip = Strip(name="arm", start=ends[0], end=ends[1], width=0.12)
    gap = Gap("sheet", np.array([0.0, 0.0, 0.2]), X, 0.012, Y, 0.12)
    size = 0.0135 * np.sqrt(1248 / unknowns)
    mesh = mesh_conductors([strip], LATTICE, ground=True, element_size=size, gaps=[gap])
    return UnitCell(LATTICE, mesh, (Port("port", gap),), (), True)


def directions(count: int) -> ScanPoints:
    """Evenly spread over the visible disc."""
    n = np.arange(count)
    r, angle = np.sqrt((n + 0.5) / count), n * np.pi * (3 - np.sqrt(5))
    return ScanPoints.from_cosines(r * np.cos(angle), r * np.sin(angle))


def direct_sample(solver: CellSolver) -> tuple[float, Sweep]:
    """Time of one direct solution, s, and a small sweep of them."""
    scan, frequency = ScanPoints.from_cosines(*DIRECT_DIRECTIONS), np.array([0.83, 1.03]) * FREQUENCY
    begin = time.perf_counter()
    direct = solve_sweep(solver.cell, frequency, scan, solver=solver)
    return (time.perf_counter() - begin) / direct.residual.size, direct


def measure(unknowns: int) -> None:
    """Print one cell's numbers."""
    cell = dipole_cell(unknowns)
    start = time.perf_counter()
    solver = CellSolver(cell, BAND[1])
    fill = time.perf_counter() - start
    before, _ = direct_sample(solver)
    start = time.perf_counter()
    model, certificate = build_reduced(solver, BAND)
    build = time.perf_counter() - start
    maps = {}
    for frequencies, scans in ((17, 588), (41, 2439)):
        begin = time.perf_counter()
        reduced_sweep(model, np.linspace(*BAND, frequencies), directions(scans))
        maps[frequencies * scans] = time.perf_counter() - begin
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    after, direct = direct_sample(solver)
    one = 0.5 * (before + after)
    error = np.abs(direct.scattering - reduced_sweep(model, direct.frequency, direct.scan).scattering).max()
    print(f"{solver.operator.n} unknowns: {certificate}")
    print(f"  full matrices {certificate.full_solutions} (yardstick: 12 for an octave), basis of {model.size} currents")
    print(f"  largest error at {direct.residual.size} other points {error:.1e}; peak memory {peak:.2f} GB")
    print(f"  filling {fill:.1f} s, building {build:.1f} s, direct solution {one:.3f} s a point")
    for count, seconds in maps.items():
        total = fill + build + seconds
        direct_total = fill + count * one
        print(
            f"  {count:6d} points: {total:5.1f} s, {direct_total / total:5.0f} times faster than point by point; "
            f"a further point {1e3 * seconds / count:.3f} ms, {one * count / seconds:.0f} times cheaper",
            flush=True,
        )


def main() -> None:
    """Measure every size asked for."""
    for unknowns in [int(a) for a in sys.argv[1:]] or [500, 1000, 2000]:
        measure(unknowns)


if __name__ == "__main__":
    main()
