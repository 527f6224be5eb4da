"""The unit cell the solver solves: lattice, ground, mesh, ports and loads."""

from __future__ import annotations

from dataclasses import dataclass

from .lattice import Lattice
from .mesh import Mesh
from .port import Load, Port


@dataclass(frozen=True)
class UnitCell:
    """One cell of the infinite array. `ground`: a perfectly conducting plane at z = 0 below everything."""

    lattice: Lattice
    mesh: Mesh
    ports: tuple[Port, ...]
    loads: tuple[Load, ...] = ()
    ground: bool = False
