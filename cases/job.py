"""A job: everything a run needs, in SI units, as read from one case file."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..geometry.cell import UnitCell
from ..solver.result import ScanPoints

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class ScanPlan:
    """The scan directions of a job: cuts and a u-v map, one list of points without repeats.

    Attributes
    ----------
    points : ScanPoints, all directions (n_scan)
    planes : one (phi, indices) per cut; phi in rad, indices into `points` by rising signed theta
    plane_theta : one array per cut, signed theta in rad matching the indices (negative: phi + pi side)
    map_u, map_v : axes of the square u-v map (n,), empty when no map is asked for
    map_index : (n, n) index into `points` for (u, v) = (map_u[i], map_v[j]), -1 outside the cone
    cone : half-angle (rad) of the volume the limits are judged in
    """

    points: ScanPoints
    planes: tuple[tuple[float, Ints], ...]
    plane_theta: tuple[Floats, ...]
    map_u: Floats
    map_v: Floats
    map_index: Ints
    cone: float


@dataclass(frozen=True)
class Limit:
    """One requirement. `quantity`: "reflection" (dB, active, per port under the case's drive, at most), "gain_drop"
    (dB below the broadside realised gain, at most), "cross_polar" (dB relative to co-polar, at most), "axial_ratio"
    (dB, at most), "efficiency" (fraction, at least), "grating_lobe" (dB relative to the main wave's power, at most).
    `cone` (rad) restricts where it must hold; `port` restricts "reflection" to one port."""

    quantity: str
    value: float
    cone: float
    port: str | None = None


@dataclass(frozen=True)
class Expectation:
    """A number of the `[expect]` table: what, value, tolerance (same unit), and where the value comes from.

    `quantity` is one of "resistance", "reactance" (ohm), "reflection" (dB), "gain" (dBi, realised co-polar),
    "cross_polar" (dB), "axial_ratio" (dB), "efficiency"; at `frequency` (Hz), `theta`, `phi` (rad), `port` (name;
    None: the first; active quantities under the case's drive)."""

    quantity: str
    value: float
    tolerance: float
    origin: str
    frequency: float
    theta: float
    phi: float
    port: str | None = None


@dataclass(frozen=True)
class Breadboard:
    """The finite array that will be built.

    Attributes
    ----------
    cells : (n, 2) integer cells m, n at ``m a + n b`` that carry an element
    dummy : (n,) whether its ports are terminated and not led out
    termination : "matched", "open" or "short", or a resistance in ohm, of the dummies
    frequency : (n_freq,) Hz
    taper : (n,) amplitudes of the excitation
    alike : largest |difference| of the centre's active reflection with which the array counts as large enough
    largest : side of the largest square array tried for that
    error : wanted error of every scattering parameter
    """

    cells: Ints
    dummy: NDArray[np.bool_]
    termination: str | float
    frequency: Floats
    taper: Floats
    alike: float
    largest: int
    error: float


@dataclass(frozen=True)
class Tolerance:
    """A parameter of the case and how far it may be off: `kind` is one of `quantity.UNITS`, both numbers in its SI
    unit."""

    name: str
    kind: str
    nominal: float
    value: float


@dataclass(frozen=True)
class Job:
    """One case, resolved.

    Attributes
    ----------
    title : str
    path : the case file, None when made in Python
    text : the resolved case as TOML text: parameters substituted, SI units written out
    cell : UnitCell
    frequency : (n_freq,) Hz, ascending
    scan : ScanPlan
    limits : requirements to judge
    tolerance : requested relative accuracy of the operator (splitting, sums), e.g. 1e-6
    co_polar : "x" or "y" (Ludwig 3 reference axis at `co_polar_angle` from x), "right" or "left" (circular, IEEE)
    co_polar_angle : rad, direction of the co-polar reference axis from x for linear polarisation
    expect : numbers of the `[expect]` table
    reduced_error : wanted error of a reduced model's active reflection; None: direct solution of every point
    expected_to_fail : whether the case is a ready-made one that shows a failure
    breadboard : the finite array to predict; None for none
    tolerances : of named parameters
    vary : callable(overrides) -> Job, the case with parameters replaced by text; None where it was read from a file
    element_size : target edge length of the mesh, m
    remesh : callable(factor) -> UnitCell with element size multiplied by `factor` (for the error estimate)
    """

    title: str
    path: Path | None
    text: str
    cell: UnitCell
    frequency: Floats
    scan: ScanPlan
    limits: tuple[Limit, ...]
    tolerance: float
    co_polar: str
    co_polar_angle: float
    element_size: float
    remesh: object
    expect: tuple[Expectation, ...] = field(default_factory=tuple)
    expected_to_fail: bool = False
    reduced_error: float | None = None
    breadboard: Breadboard | None = None
    tolerances: tuple[Tolerance, ...] = ()
    vary: object = None
