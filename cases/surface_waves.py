"""Surface waves of a case's bare stack: which there are, and from which scan directions a Floquet wave meets them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from ..solver.guided_waves import GuidedWave, circles_hit, guided_waves
from ..solver.pattern import LIGHT_SPEED
from .job import Job
from .judge import degrees

Floats = NDArray[np.float64]
Rows = list[tuple[str, ...]]

WHY = (
    "Where a Floquet wave runs along a surface wave of the bare stack the array may go blind: nearly all power comes "
    "back. Conductors shift the direction (about 1 degree for narrow dipoles, 2 to 3 for patches; common practice), "
    "and whether it happens depends on how the element couples to the wave."
)


@dataclass(frozen=True)
class SurfaceWave:
    """One surface wave at one frequency (Hz), with the scan angles (rad) at which a Floquet wave first meets it.

    `by_plane` : one per cut of the case, infinite where none does; `nearest` : over all azimuths
    """

    frequency: float
    wave: GuidedWave
    by_plane: tuple[float, ...]
    nearest: float

    @property
    def loss(self) -> float:
        """Attenuation in dB per wavelength in air."""
        return float(-self.wave.beta.imag * 2 * np.pi * 20 / np.log(10))


def planes_of(job: Job) -> list[float]:
    """Azimuths of the cuts of a case, rad; principal ones where it has none."""
    return [phi for phi, _ in job.scan.planes] or list(np.radians([0.0, 45.0, 90.0]))


def surface_waves(job: Job) -> list[SurfaceWave]:
    """Those at the two ends of the band; none in air."""
    stack = job.cell.stack
    if stack is None or stack.is_air:
        return []
    found = []
    for frequency in dict.fromkeys((float(job.frequency[0]), float(job.frequency[-1]))):
        k = 2 * np.pi * frequency / LIGHT_SPEED
        for wave in guided_waves(stack, k):
            by_plane = tuple(_first(wave, job.cell.lattice, k, phi) for phi in planes_of(job))
            found.append(SurfaceWave(frequency, wave, by_plane, _nearest(wave, job.cell.lattice, k)))
    return found


def _first(wave: GuidedWave, lattice: Lattice, k: float, phi: float) -> float:
    """Least scan angle on either side of a cut, rad."""
    hits = [hit.theta for side in (0.0, np.pi) for hit in circles_hit([wave], lattice, k, phi + side)]
    return min(hits, default=np.inf)


def _nearest(wave: GuidedWave, lattice: Lattice, k: float) -> float:
    """Least scan angle over all azimuths, rad: the circle of radius beta about a lobe at g comes as near as
    ``||g| - beta|``."""
    beta = wave.beta.real
    lobes = near_orders(lattice, k, beta) @ lattice.reciprocal / k
    least = min((abs(float(np.linalg.norm(g)) - beta) for g in lobes), default=np.inf)
    return float(np.arcsin(least)) if least <= 1 else np.inf


def near_orders(lattice: Lattice, k: float, beta: float) -> NDArray[np.int64]:
    """Orders (n, 2) but (0, 0) whose circle of radius beta touches visible space."""
    orders = lattice.orders_within((beta + 1.001) * k)
    return orders[orders.any(axis=1)]


def wave_rows(job: Job) -> Rows:
    """(wave, frequency, beta/k, attenuation, first met in every cut, nearest) as text."""
    return [
        (
            item.wave.name,
            f"{item.frequency / 1e9:.6g} GHz",
            f"{item.wave.beta.real:.4f}",
            f"{item.loss:.3g} dB per wavelength" if item.loss > 0 else "none",
            *(_angle(theta) for theta in item.by_plane),
            _angle(item.nearest) + (" (inside the scan cone)" if item.nearest < job.scan.cone else ""),
        )
        for item in surface_waves(job)
    ]


def wave_header(job: Job) -> tuple[str, ...]:
    """Headings of `wave_rows`."""
    cuts = (f"theta at phi {degrees(phi)}" for phi in planes_of(job))
    return ("wave", "frequency", "beta/k", "attenuation", *cuts, "nearest theta, any phi")


def _angle(theta: float) -> str:
    return degrees(theta) if np.isfinite(theta) else "never"
