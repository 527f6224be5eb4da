"""The unit cell the solver solves: lattice, ground, mesh, ports and loads."""

from __future__ import annotations

from dataclasses import dataclass

from .errors import InputError
from .lattice import Lattice
from .mesh import Mesh
from .port import Load, Port
from .stack import Stack


@dataclass(frozen=True)
class UnitCell:
    """One cell of the infinite array.

    `ground`: a perfectly conducting plane at z = 0 below everything. `stack`: dielectric layers from z = 0 upwards; its
    own ground flag must agree with `ground`. None: air.
    """

    lattice: Lattice
    mesh: Mesh
    ports: tuple[Port, ...]
    loads: tuple[Load, ...] = ()
    ground: bool = False
    stack: Stack | None = None

    def __post_init__(self) -> None:
        if self.stack is not None and self.stack.ground != self.ground:
            raise InputError(
                f"ground = {self.ground} for the cell and {self.stack.ground} for its stack.",
                where="[[layer]]",
                allowed="the same for both",
            )
