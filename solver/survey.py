"""What a survey of the whole scan volume finds: maps, blindnesses with their causes, the cone that is free of them.

Plain data; `scan_map`, `blindness` and `free_cone` make them from a reduced model.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

BLIND = 0.9  # share of a port's available power that comes back at a blindness,
HALF = 0.5  # and at a strong mismatch, which is listed too; also the level its width is taken at


@dataclass(frozen=True)
class ScanMap:
    """Active response under the case's drive on a square grid of direction cosines, by frequency.

    Attributes
    ----------
    frequency : (n_freq,) Hz
    axis : (n,) values of u and of v, from -1 to 1, n odd
    reflection : (n_freq, n, n, n_port) active reflection at u = axis[i], v = axis[j]; NaN outside visible space and
        at ports that are not driven
    field : (n_freq, n, n, 2) theta and phi parts of the upward main wave, |field|^2 = realised gain of the cell
        (linear); NaN outside visible space
    solved : (n_freq, n, n) whether the point was solved; the others are interpolated between solved neighbours
    """

    frequency: Floats
    axis: Floats
    reflection: Complexes
    field: Complexes
    solved: NDArray[np.bool_]


@dataclass(frozen=True)
class Cause:
    """Why power comes back.

    Attributes
    ----------
    kind : "surface wave" (of the bare stack, through a Floquet wave), "grating lobe" (onset of one), or "resonance"
        (of the element and its feed: a nearly real root of the reduced operator)
    wave : name of the surface wave, such as "TM0"; empty otherwise
    order : (p, q) of the Floquet wave; (0, 0) for a resonance
    index : transverse wavenumber of that Floquet wave over k at the peak; `expected` : that of the surface wave, or 1
        at a light circle; NaN for a resonance
    share : of the reaction of all Floquet waves kept exact, what this one carries at the peak
    quality : of a resonance, quality factor of the nearest root in frequency; NaN where none is near, and otherwise
    """

    kind: str
    wave: str
    order: tuple[int, int]
    index: float
    expected: float
    share: float
    quality: float


@dataclass(frozen=True)
class Peak:
    """A local maximum of the active reflection over directions at one frequency.

    Attributes
    ----------
    frequency : Hz; `u`, `v` : direction cosines; `port` : index of the port
    reflection : complex active reflection there
    width : angle (rad) over which more than half of the port's power comes back, along the scan plane through the
        peak; NaN where less comes back at the peak. Cut off at the horizon.
    returned : (n_port,) share of the cell's available power that leaves into each port's generator
    radiated : share radiated into the main wave; `lobes` : into all other propagating waves
    absorbed : (n_absorber,) share absorbed by each conductor, load, layer and sheet
    """

    frequency: float
    u: float
    v: float
    port: int
    reflection: complex
    width: float
    returned: Floats
    radiated: float
    lobes: float
    absorbed: Floats

    @property
    def theta(self) -> float:
        """Angle from broadside, rad."""
        return float(np.arcsin(min(1.0, np.hypot(self.u, self.v))))

    @property
    def phi(self) -> float:
        """Azimuth from x, rad, from 0 to 2 pi."""
        return float(np.arctan2(self.v, self.u) % (2 * np.pi))

    @property
    def power(self) -> float:
        """Share of the port's own available power that comes back."""
        return abs(self.reflection) ** 2


@dataclass(frozen=True)
class Blindness:
    """A peak followed over frequency.

    Attributes
    ----------
    peaks : by rising frequency, at least one
    worst : the highest of all, driven to its true maximum over frequency as well
    cause : at `worst`
    mirrored : whether the opposite direction (-u, -v) shows the same peak
    """

    peaks: tuple[Peak, ...]
    worst: Peak
    cause: Cause
    mirrored: bool

    @property
    def is_blind(self) -> bool:
        """Whether nearly all power comes back, not only more than half."""
        return self.worst.power >= BLIND


@dataclass(frozen=True)
class FreeCone:
    """How far the beam may be scanned with every driven port's active reflection below a level.

    Attributes
    ----------
    level : largest |Gamma|^2 allowed
    frequency : (n_freq,) Hz; `azimuth` : (n_azimuth,) rad, over the whole turn
    theta : (n_freq, n_azimuth) first scan angle at which the level is passed, rad; pi/2 where it never is, 0 where it
        is at broadside already
    cone : largest theta (rad) clear at all frequencies and azimuths
    by_plane : (phi, theta) of both half-planes of each cut together, over all frequencies
    wanted : the cone (rad) that the case asks for
    usable : lowest and highest frequency (Hz) of the widest band over which `wanted` is clear; None where there is none
    gain_drop : largest drop (dB) of co-polar realised gain from broadside inside `cone`, over all frequencies; NaN
        where the cone is empty
    wanted_drop : the same inside `wanted`
    """

    level: float
    frequency: Floats
    azimuth: Floats
    theta: Floats
    cone: float
    by_plane: tuple[tuple[float, float], ...]
    wanted: float
    usable: tuple[float, float] | None
    gain_drop: float
    wanted_drop: float


@dataclass(frozen=True)
class Survey:
    """Everything a survey found, and the error of the active reflection it is to be counted with."""

    scan_map: ScanMap
    blindnesses: tuple[Blindness, ...]
    free_cone: FreeCone
    error: float
