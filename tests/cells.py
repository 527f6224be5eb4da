"""Unit cells the solver tests share; lengths in wavelengths at ``FREQUENCY`` (lambda = 1 m)."""

from __future__ import annotations

import numpy as np
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Material, Plate, Strip, Wire
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesher import mesh_conductors
from scanward.geometry.port import Gap, Port
from scanward.solver.operator import SPEED_OF_LIGHT

FREQUENCY = SPEED_OF_LIGHT  # lambda = 1 m
K = 2 * np.pi
X, Y, Z = np.eye(3)
SQUARE = Lattice(np.array([0.5, 0.0]), np.array([0.0, 0.5]))
PEC = Material()


def point(*xyz: float) -> np.ndarray:
    return np.array(xyz, dtype=float)


def sheet_gap(centre, width: float, span: float, direction=X, across=Y) -> Gap:
    return Gap("sheet", np.asarray(centre, dtype=float), direction, width, across, span)


def wire_gap(centre, width: float, radius: float, direction=X) -> Gap:
    return Gap("wire", np.asarray(centre, dtype=float), direction, width, np.roll(direction, 1), 2 * radius)


def make(conductors, gaps, *, lattice=SQUARE, ground=False, size=0.04, resistance=50.0, loads=()) -> UnitCell:
    """Mesh conductors and put a port on every gap."""
    mesh = mesh_conductors(
        conductors, lattice, ground=ground, element_size=size, gaps=[*gaps, *(load.gap for load in loads)]
    )
    ports = tuple(Port(f"p{i + 1}", gap, resistance) for i, gap in enumerate(gaps))
    return UnitCell(lattice, mesh, ports, tuple(loads), ground)


def strip_dipole(length=0.45, width=0.02, height=0.25, gap=0.01, *, offset=(0.0, 0.0), **options) -> UnitCell:
    """Strip along x at z = height (over ground unless told otherwise), fed in the middle."""
    options = {"ground": height > 0} | options
    x, y = offset
    strip = Strip(
        name="arm", start=point(x - length / 2, y, height), end=point(x + length / 2, y, height), width=width,
        material=options.pop("material", PEC),
    )  # fmt: skip
    return make([strip], [sheet_gap((x, y, height), gap, width)], **options)


def wire_dipole(length=0.47, radius=0.0025, height=0.25, gap=0.01, **options) -> UnitCell:
    """Wire along x at z = height, fed in the middle."""
    options = {"ground": height > 0} | options
    material = options.pop("material", PEC)
    wire = Wire(
        name="arm", points=np.stack([point(-length / 2, 0, height), point(length / 2, 0, height)]), radius=radius,
        material=material,
    )  # fmt: skip
    return make([wire], [wire_gap((0, 0, height), gap, radius)], **options)


def probe_fed_plate(size=0.05, *, offset=(0.0, 0.0), **options) -> UnitCell:
    """Square plate 0.36 wide, 0.1 above ground, on a vertical wire from the ground to an interior point."""
    x, y = offset
    plate = Plate(name="plate", centre=point(x, y, 0.1), size=np.array([0.36, 0.36]))
    probe = Wire(name="probe", points=np.stack([point(x + 0.1, y, 0), point(x + 0.1, y, 0.1)]), radius=0.004)
    gap = wire_gap((x + 0.1, y, 0.005), 0.01, 0.004, Z)
    return make([plate, probe], [gap], ground=True, size=size, **options)
