"""Conductors of the cell as the designer describes them; lengths in metres, points are (n, 3)."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Material:
    """How a conductor absorbs. All None: perfect electric conductor.

    Parameters
    ----------
    sheet_resistance
        Surface resistance of a sheet, ohm per square (strips, plates, discs, meshes), constant over frequency.
    wire_resistance
        Series resistance of a wire, ohm per metre, constant over frequency.
    conductivity
        Bulk conductivity, S/m: skin-effect surface impedance (sheets) or the exact internal impedance of a
        round wire.
    thickness
        Metal thickness, m, for sheets with `conductivity`; None means much thicker than the skin depth.
    """

    sheet_resistance: float | None = None
    wire_resistance: float | None = None
    conductivity: float | None = None
    thickness: float | None = None


@dataclass(frozen=True, kw_only=True)
class Conductor:
    """What every conductor has: a name, a material, and optionally its own element size."""

    name: str
    material: Material = field(default_factory=Material)
    element_size: float | None = None


@dataclass(frozen=True, kw_only=True)
class Wire(Conductor):
    """Round wire along a polyline, shape (n, 3). An end at z = 0 over ground is connected to the ground; an end on
    a plate is connected to the plate; ends of wires that coincide (modulo the lattice) meet in a node."""

    points: Floats
    radius: float


@dataclass(frozen=True, kw_only=True)
class Strip(Conductor):
    """Flat strip from `start` to `end` (centre line), `width` across, its face perpendicular to `normal`."""

    start: Floats
    end: Floats
    width: float
    normal: Floats = field(default_factory=lambda: np.array([0.0, 0.0, 1.0]))


@dataclass(frozen=True, kw_only=True)
class Plate(Conductor):
    """Flat rectangle: `size` = (along `axis`, across), face perpendicular to `normal`."""

    centre: Floats
    size: Floats
    axis: Floats = field(default_factory=lambda: np.array([1.0, 0.0, 0.0]))
    normal: Floats = field(default_factory=lambda: np.array([0.0, 0.0, 1.0]))


@dataclass(frozen=True, kw_only=True)
class Disc(Conductor):
    """Flat circular disc; with `inner_radius` > 0 a ring."""

    centre: Floats
    radius: float
    inner_radius: float = 0.0
    normal: Floats = field(default_factory=lambda: np.array([0.0, 0.0, 1.0]))


@dataclass(frozen=True, kw_only=True)
class Polygon(Conductor):
    """Flat simple polygon by its corners, shape (n, 3), all in one plane."""

    points: Floats


@dataclass(frozen=True, kw_only=True)
class MeshFile(Conductor):
    """Triangles and lines read from a mesh file; `scale` turns its unit into metres; lines become wires."""

    path: Path
    scale: float = 1.0
    offset: Floats = field(default_factory=lambda: np.zeros(3))
    wire_radius: float | None = None
