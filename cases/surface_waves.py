"""Surface waves of a case's bare stack: which there are, and from which scan directions a Floquet wave meets them."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from ..solver.guided_waves import GuidedWave, circles_hit, guided_waves
from ..solver.pattern import LIGHT_SPEED
from .job import Job
from .judge import degrees

Floats = NDArray[np.float64]
Rows = list[tuple[str, ...]]

WHY = (
    "Where a Floquet wave runs along a surface wave of the bare stack the array may go blind: nearly all power comes "
    "back. Conductors shift the direction (about 1 degree for narrow dipoles, 2 to 3 for patches; common practice), "
    "and whether it happens depends on how the element couples to the wave: horizontal currents across its path do not "
    "excite a TM wave, those along its path no TE wave."
)


@dataclass(frozen=True)
class SurfaceWave:
    """One surface wave at one frequency (Hz), with the scan angles (rad) at which a Floquet wave first meets it.

    `by_plane` : one per cut of the case, infinite where none does; `nearest` : over all azimuths, at `azimuth` (rad,
    from 0 to pi: either side of that cut)
    """

    frequency: float
    wave: GuidedWave
    by_plane: tuple[float, ...]
    nearest: float
    azimuth: float

    @property
    def loss(self) -> float:
        """Attenuation in dB per wavelength in air."""
        return float(-self.wave.beta.imag * 2 * np.pi * 20 / np.log(10))


def planes_of(job: Job) -> list[float]:
    """Azimuths of the cuts of a case, rad; principal ones where it has none."""
    return [phi for phi, _ in job.scan.planes] or list(np.radians([0.0, 45.0, 90.0]))


def surface_waves(job: Job) -> list[SurfaceWave]:
    """Those at the two ends of the band; none in air, nor where they could not be found (see `trouble`)."""
    found = []
    for frequency, waves, _ in _at_band_ends(job):
        lattice, k = job.cell.lattice, 2 * np.pi * frequency / LIGHT_SPEED
        for wave in waves:
            by_plane = tuple(_first(wave, lattice, k, phi) for phi in planes_of(job))
            found.append(SurfaceWave(frequency, wave, by_plane, *_nearest(wave, lattice, k)))
    return found


def trouble(job: Job) -> str:
    """Why the list is empty or not to be trusted; empty text when it is complete, or the cell in air."""
    told = [f"{frequency / 1e9:.6g} GHz: {text}" for frequency, _, text in _at_band_ends(job) if text]
    if told:
        return f"The surface waves could not be found ({'; '.join(told)}). This does not touch the other numbers."
    if job.cell.stack is not None and not job.cell.stack.is_air and not surface_waves(job):
        return "The bare stack carries no surface wave."
    return ""


def _at_band_ends(job: Job) -> list[tuple[float, tuple[GuidedWave, ...], str]]:
    stack = job.cell.stack
    if stack is None or stack.is_air:
        return []
    ends = dict.fromkeys((float(job.frequency[0]), float(job.frequency[-1])))
    return [(frequency, *_waves(stack, 2 * np.pi * frequency / LIGHT_SPEED)) for frequency in ends]


@lru_cache(maxsize=32)
def _waves(stack: Stack, k: float) -> tuple[tuple[GuidedWave, ...], str]:
    """The waves, and why there are none: a report must not be lost because a count of roots did not come out."""
    try:
        return tuple(guided_waves(stack, k)), ""
    except RuntimeError as fault:
        return (), str(fault)


def _first(wave: GuidedWave, lattice: Lattice, k: float, phi: float) -> float:
    """Least scan angle on either side of a cut, rad."""
    hits = [hit.theta for side in (0.0, np.pi) for hit in circles_hit([wave], lattice, k, phi + side)]
    return min(hits, default=np.inf)


def _nearest(wave: GuidedWave, lattice: Lattice, k: float) -> tuple[float, float]:
    """Least scan angle over all azimuths and the azimuth, rad: the circle of radius beta about a lobe at -g comes as
    near to broadside as ``||g| - beta|``, along g."""
    beta = wave.beta.real
    lobes = -near_orders(lattice, k, beta) @ lattice.reciprocal / k
    size = np.hypot(lobes[:, 0], lobes[:, 1])
    away = np.round(np.abs(size - beta), 9)  # equals among equals by symmetry: the smallest azimuth is told
    azimuth = np.round(np.arctan2(lobes[:, 1], lobes[:, 0]) % np.pi, 9) % round(np.pi, 9)
    if not len(lobes) or away.min() > 1:
        return np.inf, np.nan
    i = np.lexsort((azimuth, away))[0]
    return float(np.arcsin(away[i])), float(azimuth[i])


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
            _nearest_text(item, job.scan.cone),
        )
        for item in surface_waves(job)
    ]


def wave_header(job: Job) -> tuple[str, ...]:
    """Headings of `wave_rows`."""
    cuts = (f"theta at phi {degrees(phi)}" for phi in planes_of(job))
    return ("wave", "frequency", "beta/k", "attenuation", *cuts, "first met over all phi")


def wave_summary(job: Job) -> str:
    """One sentence: which there are, and whether the scan cone meets one; empty in air."""
    items = surface_waves(job)
    if not items:
        return trouble(job)
    names = ", ".join(dict.fromkeys(item.wave.name for item in items))
    first = min(items, key=lambda item: item.nearest)
    if not np.isfinite(first.nearest):
        return f"{names}: met in no scan direction"
    place = f"{_nearest_text(first, job.scan.cone)} at {first.frequency / 1e9:.6g} GHz"
    return f"{names}: first met by a Floquet wave at theta {place}, where the array may go blind"


def _nearest_text(item: SurfaceWave, cone: float) -> str:
    if not np.isfinite(item.nearest):
        return "never"
    inside = " (inside the scan cone)" if item.nearest < cone else ""
    return f"{degrees(item.nearest)}, phi {degrees(item.azimuth)}{inside}"


def _angle(theta: float) -> str:
    return degrees(theta) if np.isfinite(theta) else "never"


def surface_waves_at(job: Job, frequency: float) -> dict[str, float]:
    """beta/k by name at a frequency in Hz; empty in air, and where they could not be found."""
    stack = job.cell.stack
    if stack is None or stack.is_air:
        return {}
    waves, _ = _waves(stack, 2 * np.pi * frequency / LIGHT_SPEED)
    return {wave.name: float(wave.beta.real) for wave in waves}
