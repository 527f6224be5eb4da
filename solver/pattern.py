"""What a sweep means under a given drive: active reflection, embedded patterns, polarisation, power budget.

Conventions: exp(+j w t), r.m.s. amplitudes, array axes (frequency, scan, port). The realised gain of one
cell is that of the Floquet wave (0, 0) leaving upwards (P. W. Hannan, IEEE Trans. Antennas Propag. 12,
423, 1964):

    G = (4 pi S / lambda^2) cos(theta) x power in the wave / available power
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .result import FloquetWaves, ScanPoints, Sweep

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Complexes = NDArray[np.complex128]

LIGHT_SPEED = 299792458.0


@dataclass(frozen=True)
class Response:
    """One cell of the infinite array under one drive `a`; every fraction is of the available power |a|^2.

    Attributes
    ----------
    drive : (n_port,) incident power waves
    reflection : (n_freq, n_scan, n_port) active reflection b_i / a_i, NaN at ports that are not driven
    field : (n_freq, n_scan, 2) complex theta and phi parts of the upward (0, 0) wave, |field|^2 = realised
    gain
        (linear); NaN in invisible space
    ceiling : (n_freq, n_scan) ideal-cell realised gain 4 pi S cos(theta) / lambda^2 (linear)
    reflected : (n_freq, n_scan) fraction returned into the ports' generators
    orders : (n_order, 3) integers p, q, side of the tracked waves
    radiated : (n_freq, n_scan, n_order) fraction leaving in each order, both polarisations together
    absorbed : (n_freq, n_scan, n_absorber) fraction absorbed in each conductor and load
    balance : (n_freq, n_scan) power-balance error 1 - reflected - radiated - absorbed
    """

    drive: Complexes
    reflection: Complexes
    field: Complexes
    ceiling: Floats
    reflected: Floats
    orders: Ints
    radiated: Floats
    absorbed: Floats
    balance: Floats

    @property
    def gain(self) -> Floats:
        """Realised gain in both polarisations together (linear), (n_freq, n_scan)."""
        return np.sum(np.abs(self.field) ** 2, axis=-1)

    @property
    def efficiency(self) -> Floats:
        """Radiation efficiency (radiated over radiated plus absorbed power), (n_freq, n_scan)."""
        radiated, absorbed = self.radiated.sum(-1), self.absorbed.sum(-1)
        return np.divide(
            radiated, radiated + absorbed, out=np.full_like(radiated, np.nan), where=radiated + absorbed > 0
        )

    @property
    def grating(self) -> Floats:
        """Strongest order other than (0, 0) relative to the upward (0, 0) wave, as a power ratio (n_freq,
        n_scan).

        Zero where no grating lobe propagates; infinite where only grating lobes carry power.
        """
        other = np.any(self.orders[:, :2] != 0, axis=1)
        if not other.any():
            return np.zeros(self.balance.shape)
        main = self.radiated[..., _row(self.orders, (0, 0, 1))]
        strongest = self.radiated[..., other].max(axis=-1)
        ratio = np.full(strongest.shape, np.inf)
        np.divide(strongest, main, out=ratio, where=main > 0)
        return np.where(strongest > 0, ratio, 0.0)


def ideal_gain(area: float, frequency: ArrayLike, scan: ScanPoints) -> Floats:
    """Ceiling of the realised gain, 4 pi S cos(theta) / lambda^2 (linear), shape (n_freq, n_scan).

    A matched, lossless cell of area S (m^2) with one propagating wave reaches it (Hannan 1964). NaN in
    invisible space.
    """
    wavelength = LIGHT_SPEED / np.atleast_1d(np.asarray(frequency, dtype=float))
    return 4 * np.pi * area / wavelength[:, None] ** 2 * np.cos(scan.theta)[None, :]


def respond(sweep: Sweep, drive: ArrayLike, area: float) -> Response:
    """Response of a cell of `area` (m^2) to incident power waves `drive`, shape (n_port,).

    Raises
    ------
    ValueError
        If `drive` has the wrong length or no port is driven.
    """
    a = np.asarray(drive, dtype=complex)
    if a.shape != (sweep.scattering.shape[-1],):
        raise ValueError(f"drive has shape {a.shape}, the sweep has {sweep.scattering.shape[-1]} ports")
    available = float(np.sum(np.abs(a) ** 2))
    if not available > 0:
        raise ValueError("no port is driven: every drive amplitude is zero")
    b = sweep.scattering @ a
    reflection = np.divide(b, a, out=np.full(b.shape, complex(np.nan, np.nan)), where=a != 0)
    waves = sweep.waves @ a
    orders, radiated = _power_per_order(waves, sweep.wave_table)
    radiated /= available
    absorbed = np.einsum("p,fsapq,q->fsa", a.conj(), sweep.loss, a, optimize=True).real / available
    reflected = np.sum(np.abs(b) ** 2, axis=-1) / available
    ceiling = ideal_gain(area, sweep.frequency, sweep.scan)
    return Response(
        drive=a,
        reflection=reflection,
        field=main_wave(waves, sweep.wave_table) * np.sqrt(ceiling / available)[..., None],
        ceiling=ceiling,
        reflected=reflected,
        orders=orders,
        radiated=radiated,
        absorbed=absorbed,
        balance=1 - reflected - radiated.sum(-1) - absorbed.sum(-1),
    )


def embedded_patterns(sweep: Sweep, area: float) -> Complexes:
    """Embedded element pattern of every port, shape (n_freq, n_scan, n_port, 2): theta and phi amplitudes.

    One element driven at that port, every other port of the array terminated in its reference resistance
    (IEEE Std 145 sense); |.|^2 is the realised gain (linear) in the direction of the scan point.
    """
    fields = [main_wave(sweep.waves[..., port], sweep.wave_table) for port in range(sweep.waves.shape[-1])]
    amplitude = np.sqrt(ideal_gain(area, sweep.frequency, sweep.scan))
    return np.stack(fields, axis=-2) * amplitude[..., None, None]


def main_wave(waves: Complexes, table: FloquetWaves) -> Complexes:
    """Theta and phi amplitudes of the upward (0, 0) wave: (..., n_wave) -> (..., 2)."""
    return np.stack([waves[..., table.index((0, 0), 1, polarisation)] for polarisation in (0, 1)], axis=-1)


def ludwig3(field: Complexes, phi: Floats, reference: float = 0.0) -> tuple[Complexes, Complexes]:
    """Co- and cross-polar parts by Ludwig's third definition for a reference axis at `reference` rad from x.

    field (..., n_scan, 2) theta and phi parts, phi (n_scan,) rad -> two arrays (..., n_scan). Source: A.
    C. Ludwig, IEEE Trans. Antennas Propag. 21, 116, 1973, with the reference axis along x instead of y.
    """
    turn = phi - reference
    theta_part, phi_part = field[..., 0], field[..., 1]
    co = theta_part * np.cos(turn) - phi_part * np.sin(turn)
    cross = theta_part * np.sin(turn) + phi_part * np.cos(turn)
    return co, cross


def circular(field: Complexes) -> tuple[Complexes, Complexes]:
    """Right- and left-hand circular parts (IEEE Std 145 sense), (..., 2) -> two arrays (...).

    With exp(+j w t) a wave travelling along r turns right-handed when its phi part lags by 90 degrees, so
    that (theta, phi) = (1, -j) / sqrt 2 is purely right-hand.
    """
    theta_part, phi_part = field[..., 0], field[..., 1]
    return (theta_part + 1j * phi_part) / np.sqrt(2), (theta_part - 1j * phi_part) / np.sqrt(2)


def axial_ratio(field: Complexes) -> Floats:
    """Ratio of the axes of the polarisation ellipse, >= 1, infinite for linear polarisation: (..., 2) ->
    (...)."""
    right, left = (np.abs(part) for part in circular(field))
    major, minor = right + left, np.abs(right - left)
    ratio = np.full(major.shape, np.inf)
    np.divide(major, minor, out=ratio, where=minor > 1e-15 * major)
    return np.where(np.isfinite(major), ratio, np.nan)


def co_cross(field: Complexes, phi: Floats, kind: str, angle: float) -> tuple[Complexes, Complexes]:
    """Co- and cross-polar amplitudes (..., n_scan) of `field` (..., n_scan, 2) for a wanted polarisation.

    `kind` "x" or "y": linear, Ludwig 3 with its reference axis at `angle` rad from x. "right", "left":
    circular.
    """
    if kind in ("right", "left"):
        right, left = circular(field)
        return (right, left) if kind == "right" else (left, right)
    if kind not in ("x", "y"):
        raise ValueError(f"co-polarisation {kind!r} is none of 'x', 'y', 'right', 'left'")
    return ludwig3(field, phi, angle)


def decibel(power: ArrayLike) -> Floats:
    """10 log10 of a power ratio; zero gives -inf without a warning."""
    with np.errstate(divide="ignore"):
        return 10 * np.log10(np.asarray(power, dtype=float))


def _power_per_order(waves: Complexes, table: FloquetWaves) -> tuple[Ints, Floats]:
    """Orders (n_order, 3) in order of first appearance and the power in each, (..., n_order)."""
    keys = np.column_stack([table.order, table.side]).astype(np.int64)
    _, first, which = np.unique(keys, axis=0, return_index=True, return_inverse=True)
    rank = np.argsort(np.argsort(first))[which.ravel()]
    power = np.zeros((*waves.shape[:-1], len(first)))
    for wave, order in enumerate(rank):
        power[..., order] += np.abs(waves[..., wave]) ** 2
    return keys[np.sort(first)], power


def _row(table: Ints, key: tuple[int, int, int]) -> int:
    return int(np.flatnonzero((table == np.asarray(key)).all(axis=1))[0])
