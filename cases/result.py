"""A finished run in memory: the job, its sweep, how accurate it is, and how it was made."""

from __future__ import annotations

import platform
import sys
from dataclasses import dataclass, field
from functools import cached_property
from importlib import metadata
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .. import __version__
from ..solver.pattern import Response, co_cross, decibel, respond
from ..solver.result import Sweep
from ..solver.survey import Survey
from .job import Job

if TYPE_CHECKING:
    from ..solver.greedy import Certificate
    from ..solver.reduced import ReducedModel
    from .bench import Bench

Floats = NDArray[np.float64]

CONVENTIONS = {
    "time_convention": "exp(+j w t)",
    "amplitudes": "r.m.s. phasors; power = |amplitude|^2",
    "complex_numbers": "last axis part = re, im",
    "scan_convention": "cell at rho excited with exp(-j k (u x + v y)): the beam points to (u, v)",
    "angles": "rad; theta from z (broadside), phi from x; u = sin(theta) cos(phi), v = sin(theta) sin(phi)",
    "wave_definition": "power waves with the real reference resistance of each port",
    "active": "every cell of the infinite array excited with the scan phase",
    "gain_convention": "realised gain of one cell, 4 pi S cos(theta) / lambda^2 x (power in the upward (0,0) "
    "wave / available power); pattern of one element with all others terminated",
    "polarisation": "theta and phi components; linear co and cross by Ludwig's third definition; circular in "
    "the IEEE sense",
    "array_axes": "(frequency, scan, port, port_in)",
}


@dataclass(frozen=True)
class Accuracy:
    """Estimated discretisation error of a run, from another mesh at a few sample points.

    The difference between the two meshes is multiplied by `factor`; `compared` is "finer" or "coarser".
    `errors` holds one number per quantity of a limit: for "reflection", "cross_polar" and "grating_lobe" a
    linear amplitude (field ratio), for the others the quantity's own unit. All NaN or empty when no
    estimate was made; then `note` says why.
    """

    factor: float = np.nan
    samples: int = 0
    reflection: float = np.nan
    impedance: float = np.nan
    errors: dict[str, float] = field(default_factory=dict)
    unknowns: int = 0
    compared_unknowns: int = 0
    compared: str = ""
    note: str = ""


@dataclass(frozen=True)
class Provenance:
    """How a result came about. Wall time in s, peak memory in bytes (NaN where the system does not tell)."""

    versions: dict[str, str]
    wall_time: float = np.nan
    peak_memory: float = np.nan
    created: str = ""


@dataclass(frozen=True)
class Result:
    """All that figures, report and exports need.

    Attributes
    ----------
    failure : why the computation cannot be trusted, or empty
    certificate : of the reduced model; None where every point was solved directly, as are
    survey : what was found over the whole scan volume, and
    stored : the reduced model, or its arrays as read from a file; `model` makes one of them
    bench : prediction of the finite breadboard; None where the case has none
    """

    job: Job
    sweep: Sweep
    accuracy: Accuracy
    provenance: Provenance
    failure: str = ""
    certificate: Certificate | None = None
    survey: Survey | None = None
    stored: ReducedModel | dict[str, NDArray] | None = None
    bench: Bench | None = None

    @cached_property
    def model(self) -> ReducedModel | None:
        """The reduced model, which answers any frequency of the band and any direction; None after a direct run."""
        if isinstance(self.stored, dict):
            from ..solver.reduced import ReducedModel

            return ReducedModel.from_arrays(self.job.cell, self.stored)
        return self.stored

    @cached_property
    def response(self) -> Response:
        """Response under the case's own drive."""
        return respond(self.sweep, [port.drive for port in self.job.cell.ports], self.job.cell.lattice.area)

    @property
    def port_names(self) -> tuple[str, ...]:
        return tuple(port.name for port in self.job.cell.ports)

    @cached_property
    def co_cross_gain(self) -> tuple[Floats, Floats]:
        """Co- and cross-polar realised gain in dBi, each (n_freq, n_scan)."""
        job = self.job
        parts = co_cross(self.response.field, job.scan.points.phi, job.co_polar, job.co_polar_angle)
        return decibel(np.abs(parts[0]) ** 2), decibel(np.abs(parts[1]) ** 2)

    @cached_property
    def active_impedance(self) -> NDArray[np.complex128]:
        """Active impedance R (1 + Gamma) / (1 - Gamma) in ohm, (n_freq, n_scan, n_port); NaN if not
        driven."""
        gamma = self.response.reflection
        with np.errstate(divide="ignore", invalid="ignore"):
            return self.sweep.reference * (1 + gamma) / (1 - gamma)


PACKAGES = (
    "numpy",
    "scipy",
    "xarray",
    "h5netcdf",
    "meshio",
    "gmsh",
    "matplotlib",
    "scikit-rf",
    "pint",
    "click",
)


def versions(packages: tuple[str, ...] = PACKAGES) -> dict[str, str]:
    """Versions of this program, Python, the system and the packages that bear on the numbers."""
    found = {"scanward": __version__, "python": sys.version.split()[0], "system": platform.platform()}
    for name in packages:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = "not installed"
    return found


def peak_memory() -> float:
    """Largest resident memory of this process so far, bytes; NaN where the system does not tell."""
    try:
        import resource
    except ImportError:
        return np.nan
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return float(peak if sys.platform == "darwin" else peak * 1024)
