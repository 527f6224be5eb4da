"""Cells and macro bases that the tests of finite arrays share."""

from __future__ import annotations

import dataclasses
from functools import cache

import numpy as np
from cells import FREQUENCY, make, point, probe_fed_plate, sheet_gap, strip_dipole, wire_dipole
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Material, Strip
from scanward.geometry.lattice import Lattice
from scanward.geometry.port import Load
from scanward.geometry.stack import Layer, Stack
from scanward.solver.array_basis import ArrayCertificate, build_array_model
from scanward.solver.finite_array import FiniteArray
from scanward.solver.reduced import ReducedModel
from scanward.solver.sweep import CellSolver

X, Y, _ = np.eye(3)
TRIANGULAR = Lattice(np.array([0.55, 0.0]), np.array([0.275, 0.5]))


def printed(*layers: Layer, height: float | None = None, ground: bool = True) -> UnitCell:
    """Strip dipole on or in a stack."""
    stack = Stack(layers, ground)
    cell = strip_dipole(0.39, 0.02, stack.top if height is None else height, 0.02, ground=ground, size=0.08)
    return dataclasses.replace(cell, stack=stack)


def loaded_pair() -> UnitCell:
    """Two crossing strips at two heights with two ports, the second lossy and loaded; no symmetry left."""
    a = Strip(name="a", start=point(-0.2, 0, 0.2), end=point(0.2, 0, 0.2), width=0.02)
    lossy = Material(conductivity=1e5, thickness=1e-3)
    b = Strip(name="b", start=point(0.1, -0.2, 0.25), end=point(0.1, 0.2, 0.25), width=0.02, material=lossy)
    load = Load("load", sheet_gap((0.1, 0.1, 0.25), 0.02, 0.02, Y, X), resistance=20.0, inductance=1e-9)
    gaps = [sheet_gap((0, 0, 0.2), 0.02, 0.02), sheet_gap((0.1, 0, 0.25), 0.02, 0.02, Y, X)]
    return make([a, b], gaps, ground=True, size=0.08, loads=[load])


CELLS = {
    "strip": lambda: strip_dipole(size=0.08),
    "triangular": lambda: strip_dipole(size=0.08, lattice=TRIANGULAR),
    "free space": lambda: wire_dipole(height=0),
    "lossy": lambda: strip_dipole(size=0.08, material=Material(sheet_resistance=3.0)),
    "loaded pair": loaded_pair,
    "patch": lambda: probe_fed_plate(size=0.09),
    "slab": lambda: printed(Layer(0.19, 2.55)),
    "lossy slab": lambda: printed(Layer(0.19, 2.55, 0.02)),
    "no ground": lambda: printed(Layer(0.05, 9.8), ground=False),
}


@cache
def model(name: str, error: float = 1e-4) -> tuple[ReducedModel, ArrayCertificate]:
    """Macro basis of one cell at FREQUENCY, and its certificate."""
    solver = CellSolver(CELLS[name](), FREQUENCY)
    return build_array_model(solver, (FREQUENCY, FREQUENCY), error=error)


def array(name: str, sites, terminations=None, **options) -> FiniteArray:
    """Finite array of one of the cells."""
    return FiniteArray(model(name)[0], FREQUENCY, sites, terminations, **options)
