"""What the solver hands over: plain arrays over (frequency, scan, port, port_in)."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class ScanPoints:
    """Scan directions, each shape (n_scan,), by direction cosines; ``kt = k (u, v)``.

    ``u^2 + v^2 > 1`` is invisible space: legal input to the solver. `phi` (rad) fixes the polarisation basis
    where theta = 0 leaves it open.
    """

    u: Floats
    v: Floats
    phi: Floats

    @classmethod
    def from_angles(cls, theta: Floats, phi: Floats) -> ScanPoints:
        """From theta (from broadside) and phi (from x), radians, broadcast to (n_scan,)."""
        theta, phi = np.broadcast_arrays(np.atleast_1d(theta).astype(float), np.atleast_1d(phi).astype(float))
        return cls(np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), phi.copy())

    @classmethod
    def from_cosines(cls, u: Floats, v: Floats) -> ScanPoints:
        """From direction cosines, broadcast to (n_scan,); phi = atan2(v, u)."""
        u, v = np.broadcast_arrays(np.atleast_1d(u).astype(float), np.atleast_1d(v).astype(float))
        return cls(u.copy(), v.copy(), np.arctan2(v, u))

    @property
    def theta(self) -> Floats:
        """Angle from broadside, rad; NaN in invisible space."""
        s = np.hypot(self.u, self.v)
        return np.where(s <= 1 + 1e-12, np.arcsin(np.minimum(s, 1.0)), np.nan)

    def __len__(self) -> int:
        return len(self.u)


@dataclass(frozen=True)
class FloquetWaves:
    """The outgoing Floquet waves tracked in a sweep; every array has shape (n_wave,).

    order : (n_wave, 2) integers (p, q), side : +1 up (z > 0) or -1 down, polarisation : 0 theta (TM), 1 phi (TE),
    both in the wave's own direction; for order (0, 0) that is the scan direction.
    """

    order: NDArray[np.int64]
    side: NDArray[np.int64]
    polarisation: NDArray[np.int64]

    def index(self, order: tuple[int, int] = (0, 0), side: int = 1, polarisation: int = 0) -> int:
        """Position of one wave, or ValueError if the sweep does not track it."""
        hit = (self.order == np.asarray(order)).all(1) & (self.side == side) & (self.polarisation == polarisation)
        if not hit.any():
            raise ValueError(f"Floquet wave order {order}, side {side}, polarisation {polarisation} is not tracked")
        return int(np.flatnonzero(hit)[0])


@dataclass(frozen=True)
class Sweep:
    """Multiport active solution of a cell over frequency and scan.

    All complex arrays refer to r.m.s. phasors: power = |wave|^2. Columns (port_in) are the response to a unit
    incident power wave at that port with every other port terminated in its reference resistance.

    Attributes
    ----------
    frequency : (n_freq,) Hz
    scan : ScanPoints of n_scan directions
    reference : (n_port,) ohm, real reference resistances of the power waves
    impedance, scattering : (n_freq, n_scan, n_port, n_port); active matrices (impedance in ohm)
    waves : (n_freq, n_scan, n_wave, n_port); amplitude of each Floquet wave, |.|^2 its power; 0 where evanescent
    wave_table : FloquetWaves
    loss : (n_freq, n_scan, n_conductor + n_load, n_port, n_port) Hermitian: power absorbed in each conductor and
        load for incident waves a is ``a^H loss a`` summed with `loss_names`
    loss_names : names along that axis
    residual : (n_freq, n_scan) relative residual of the linear solves
    currents : (n_freq, n_scan, n_basis, n_port) A per sqrt(W), or None unless asked for
    """

    frequency: Floats
    scan: ScanPoints
    reference: Floats
    impedance: Complexes
    scattering: Complexes
    waves: Complexes
    wave_table: FloquetWaves
    loss: Complexes
    loss_names: tuple[str, ...]
    residual: Floats
    currents: Complexes | None = None
    notes: tuple[str, ...] = field(default_factory=tuple)
