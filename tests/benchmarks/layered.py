"""Cost of layered stacks beside air over ground: the same mesh, all timed in this run.

    python tests/benchmarks/layered.py [unknowns]

Cell: the plate of `direct`, 0.1 wavelengths above ground. Stacks: three layers (substrate, substrate, cover) without
and with loss; a substrate of 0.005 wavelengths under two more layers; the three layers with a probe to the plate.
"""

from __future__ import annotations

import dataclasses
import sys
import time

import numpy as np
from direct import LATTICE, K, least, plate_cell
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Plate, Wire
from scanward.geometry.mesher import mesh_conductors
from scanward.geometry.stack import Layer, Stack
from scanward.solver.operator import PeriodicOperator
from scipy.linalg import lu_factor

THREE = (Layer(0.06, 2.2), Layer(0.04, 4.0), Layer(0.03, 2.94))
LOSSY = tuple(dataclasses.replace(layer, loss_tangent=0.002) for layer in THREE)
THIN = (Layer(0.005, 4.0), Layer(0.04, 1.1), Layer(0.055, 2.2))


def lowered(cell: UnitCell, height: float) -> UnitCell:
    """The plate moved to another height."""
    points = cell.mesh.points.copy()
    points[:, 2] = height
    return dataclasses.replace(cell, mesh=dataclasses.replace(cell.mesh, points=points))


def probe_cell(unknowns: int) -> UnitCell:
    """The plate with a probe from the ground, in air."""
    plate = Plate(name="plate", centre=np.array([0.0, 0.0, 0.1]), size=np.array([0.35, 0.3]))
    probe = Wire(name="probe", points=np.array([[0.08, 0.02, 0.0], [0.08, 0.02, 0.1]]), radius=0.002)
    size = float(np.sqrt(0.35 * 0.3 * 3 / unknowns))
    mesh = mesh_conductors(
        [plate, probe], LATTICE, ground=True, element_size=size, grading=False, interfaces=[0.06, 0.1]
    )
    return UnitCell(LATTICE, mesh, (), (), True)


def measure(cell: UnitCell, repetitions: int = 2) -> tuple[int, float, float, float]:
    """Unknowns, near fill, one point with its factorisation, and the factorisation, s."""
    fill = least(lambda: PeriodicOperator(cell, 1.1 * K), repetitions)
    operator = PeriodicOperator(cell, 1.1 * K)
    scans = iter(np.linspace(0.0, 0.6, 50))

    def point() -> None:
        lu_factor(operator.matrix(K, K * np.array([next(scans), 0.2])), check_finite=False)

    point()
    each = least(point, 5)
    matrix = operator.matrix(K, K * np.array([0.3, 0.2]))
    return operator.n, fill, each, least(lambda: lu_factor(matrix, check_finite=False), 6)


def main() -> None:
    """Print fill and point of every stack against those in air."""
    unknowns = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    flat, probe = plate_cell(unknowns), probe_cell(unknowns)
    cases = {
        "air over ground": (flat, None, None),
        "three layers": (flat, THREE, "air over ground"),
        "three lossy layers": (flat, LOSSY, "air over ground"),
        "0.005 thin, in air": (lowered(flat, 0.005), None, None),
        "0.005 thin substrate": (lowered(flat, 0.005), THIN, "0.005 thin, in air"),
        "probe in air": (probe, None, None),
        "probe in three layers": (probe, THREE, "probe in air"),
    }
    print(f"{'':24} {'unknowns':>8} {'fill s':>8} {'fill/air':>9} {'fill/LU':>8} {'point/LU':>9}")
    fills: dict[str, float] = {}
    for name, (cell, layers, base) in cases.items():
        stack = None if layers is None else Stack(layers, True)
        n, fill, each, lu = measure(dataclasses.replace(cell, stack=stack))
        fills[name] = fill
        ratio = f"{fill / fills[base]:9.2f}" if base else " " * 9
        print(f"{name:24} {n:8d} {fill:8.2f} {ratio} {fill / lu:8.1f} {each / lu:9.2f}", flush=True)
        time.sleep(0.1)


if __name__ == "__main__":
    main()
