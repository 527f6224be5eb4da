"""Outgoing Floquet waves: which ones propagate, their polarisations, and how the currents radiate into them.

Waves are power waves of r.m.s. phasors: |amplitude|^2 is the power per cell. With ``J(k)`` the transform of the
current (image included), the wave (p, q) of unit vector e has ``E = -(eta k / 2 kz S) e . J(k) e``, so its power
amplitude is ``-(1/2) sqrt(eta / (S cos theta)) e . J(k)``.

Polarisation 0 is TM with the transverse electric field along the transverse wave vector (the theta unit vector above
the array), 1 is TE along the phi unit vector; the same on both sides.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from .cloud import Cloud
from .ewald import longitudinal
from .layered_radiation import layered_radiation
from .result import FloquetWaves, ScanPoints

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
ETA = 376.730313668


def wave_table(lattice: Lattice, k_max: float, scan: ScanPoints, ground: bool) -> FloquetWaves:
    """Every wave that propagates at some scan point at k_max (hence at any lower k with the same directions)."""
    found = {(0, 0)}
    for u, v in zip(scan.u, scan.v, strict=True):
        kt = k_max * np.array([u, v])
        found |= {(int(p), int(q)) for p, q in lattice.orders_within(k_max, kt)}
    orders = sorted(found, key=lambda o: (o != (0, 0), o))
    sides = (1,) if ground else (1, -1)
    rows = [(order, side, polarisation) for order in orders for side in sides for polarisation in (0, 1)]
    return FloquetWaves(np.array([r[0] for r in rows]), np.array([r[1] for r in rows]), np.array([r[2] for r in rows]))


def polarisation_vectors(waves: Floats, k: float, phi: float, side: NDArray, polarisation: NDArray) -> Floats:
    """Unit vectors e, (n_wave, 3), for transverse wave vectors (n_wave, 2); `phi` where k_t = 0."""
    kt = np.linalg.norm(waves, axis=1)
    angle = wave_azimuth(waves, k, phi)
    sine = np.minimum(kt / k, 1.0)
    cosine = np.sqrt(1 - sine**2)
    tm = np.stack([cosine * np.cos(angle), cosine * np.sin(angle), -side * sine], axis=1)
    te = np.stack([-np.sin(angle), np.cos(angle), 0 * angle], axis=1)
    return np.where(polarisation[:, None] == 0, tm, te)


def wave_azimuth(waves: Floats, k: float, phi: float) -> Floats:
    """Azimuth of transverse wave vectors (n, 2), rad; `phi` where they vanish."""
    return np.where(np.linalg.norm(waves, axis=1) > 1e-9 * k, np.arctan2(waves[:, 1], waves[:, 0]), phi)


def radiation(
    cloud: Cloud,
    lattice: Lattice,
    ground: bool,
    k: float,
    kt: Floats,
    phi: float,
    table: FloquetWaves,
    stack: Stack | None = None,
) -> tuple[Complexes, NDArray[np.bool_]]:
    """Power amplitude of every tracked wave per unit coefficient of every basis function.

    `stack`: layers, for horizontal currents. Returns (n_wave, n), zero for evanescent waves, and the mask (n_wave,)
    of propagating ones.
    """
    waves = lattice.harmonics(table.order, kt)
    kz = longitudinal(k, (waves**2).sum(axis=1))
    propagating = (waves**2).sum(axis=1) < k * k * (1 - 1e-12)
    result = np.zeros((len(kz), cloud.charge.shape[1]), dtype=complex)
    if not propagating.any():
        return result, propagating
    pick = np.flatnonzero(propagating)
    if stack is not None:
        angle = wave_azimuth(waves[pick], k, phi)
        picked = FloquetWaves(table.order[pick], table.side[pick], table.polarisation[pick])
        result[pick] = layered_radiation(cloud, lattice, stack, k, waves[pick], angle, picked)
        return result, propagating
    vectors = polarisation_vectors(waves, k, phi, table.side, table.polarisation)[pick]
    transverse = cloud.points[:, :2] @ waves[pick].T
    vertical = cloud.points[:, 2:] * (table.side * kz.real)[pick]
    phase = np.exp(1j * (transverse + vertical))
    mirrored = np.exp(1j * (transverse - vertical)) if ground else 0.0
    for c, sign in enumerate((-1.0, -1.0, 1.0)):
        if cloud.current[c].nnz:
            result[pick] += vectors[:, c : c + 1] * (cloud.current[c].T @ (phase + sign * mirrored)).T
    result[pick] *= (-0.5 * np.sqrt(ETA * k / (lattice.area * kz.real[pick])))[:, None]
    return result, propagating
