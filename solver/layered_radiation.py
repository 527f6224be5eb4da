"""Radiation of currents in a layered stack into Floquet waves, and what the layers absorb.

Amplitudes follow `waves.radiation`: power waves per cell, phase reference z = 0.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from .cloud import Cloud
from .layered_waves import absorbed_power, radiated_field
from .lines import reflection, transmission, wave_impedance
from .result import FloquetWaves

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


def point_heights(cloud: Cloud) -> tuple[Floats, NDArray[np.int64]]:
    """Distinct heights (n_height,) of the cloud and the index of each point's."""
    z = cloud.points[:, 2]
    step = 1e-9 * max(float(np.ptp(cloud.points, axis=0).max()), 1e-30)
    heights = np.sort(z)
    heights = heights[np.concatenate([[True], np.diff(heights) > step])]
    return heights, np.abs(z[:, None] - heights).argmin(axis=1)


def directed_transforms(cloud: Cloud, waves: Floats, angle: Floats) -> Complexes:
    """``int f e^(+j k_t . rho)`` along k_t, across it, and vertical, by height, (n_mode, n_height, 3, n)."""
    heights, index = point_heights(cloud)
    phase = np.exp(1j * (cloud.points[:, :2] @ waves.T))
    result = np.zeros((len(waves), len(heights), 3, cloud.n), dtype=complex)
    cosine, sine = np.cos(angle)[:, None], np.sin(angle)[:, None]
    for h in range(len(heights)):
        pick = np.flatnonzero(index == h)
        x, y = ((cloud.current[c][pick].T @ phase[pick]).T for c in (0, 1))
        result[:, h, 0] = cosine * x + sine * y
        result[:, h, 1] = -sine * x + cosine * y
        if cloud.current[2].nnz:
            result[:, h, 2] = (cloud.current[2][pick].T @ phase[pick]).T
    return result


def layered_radiation(
    cloud: Cloud,
    lattice: Lattice,
    stack: Stack,
    k: float,
    waves: Floats,
    angle: Floats,
    table: FloquetWaves,
    *,
    arriving: bool = False,
) -> Complexes:
    """Amplitudes (n_wave, n) of the given propagating waves, transverse wave vectors (n_wave, 2), azimuths (n_wave,).

    `table` holds the side and polarisation of each. `arriving`: with the conjugate transforms, which by reciprocity
    give (times -2) the excitation by plane waves of these wave vectors.
    """
    heights, _ = point_heights(cloud)
    fields, upright = directed_transforms(cloud, waves, angle), cloud.current[2].nnz > 0
    if arriving:
        fields = fields.conj()
    kt = np.linalg.norm(waves, axis=1)
    kz = np.sqrt(k * k - kt * kt)
    result = np.empty((len(waves), cloud.n), dtype=complex)
    for side in (1, -1):
        for polarisation, name in ((0, "TM"), (1, "TE")):
            pick = np.flatnonzero((table.side == side) & (table.polarisation == polarisation))
            if not len(pick):
                continue
            outer = radiated_field(stack, k, kt[pick], heights, upwards=side == 1)
            per_current = outer.tm if polarisation == 0 else outer.te
            impedance = wave_impedance(k, kt[pick], name)  # type: ignore[arg-type]
            scale = np.sqrt(1 / (lattice.area * impedance))
            if side == 1:
                scale = scale * np.exp(1j * kz[pick] * stack.top)
            result[pick] = np.einsum("mh,mhn->mn", per_current, fields[pick, :, polarisation])
            if polarisation == 0 and upright:
                # a wave arrives with E_z of the other sign against E_u than one that leaves (`incident_field`)
                sign = -1.0 if arriving else 1.0
                result[pick] += sign * np.einsum("mh,mhn->mn", outer.tm_vertical, fields[pick, :, 2])
            result[pick] *= scale[:, None]
    return result


def bare_response(stack: Stack, k: float, kt: float) -> Complexes:
    """Power-wave reflection (row 0) and transmission (row 1; 0 over ground) of the bare stack for TM and TE from above.

    Phase reference z = 0; shape (2, 2).
    """
    kz = np.sqrt(k * k - kt * kt)
    result = np.zeros((2, 2), dtype=complex)
    for column, name in enumerate(("TM", "TE")):
        result[0, column] = reflection(stack, k, kt, name)[0] * np.exp(2j * kz * stack.top)  # type: ignore[arg-type]
        if not stack.ground:
            through = transmission(stack, k, kt, name)[0]  # type: ignore[arg-type]
            result[1, column] = through * np.exp(1j * kz * stack.top)
    return result


def layer_losses(
    cloud: Cloud, lattice: Lattice, stack: Stack, k: float, waves: Floats, currents: Complexes
) -> Complexes:
    """Hermitian loss matrices of every layer and sheet, (n_layer + n_sheet, m, m), for currents (n, m).

    Floquet waves (n_mode, 2) must reach to where the field in the layers has died. Off-diagonal terms by the
    polarisation identity.
    """
    heights, _ = point_heights(cloud)
    angle = np.arctan2(waves[:, 1], waves[:, 0])
    kt = np.linalg.norm(waves, axis=1)
    spectral = directed_transforms(cloud, waves, angle) @ currents / lattice.area  # (n_mode, n_height, 3, m)

    def power(current: Complexes) -> Floats:
        lost = absorbed_power(stack, k, kt, heights, current)
        return lattice.area * np.concatenate([lost.layers.sum(axis=0), lost.sheets.sum(axis=0)])

    m = currents.shape[1]
    own = [power(spectral[..., p]) for p in range(m)]
    result = np.zeros((len(stack.layers) + len(stack.sheets), m, m), dtype=complex)
    for p in range(m):
        result[:, p, p] = own[p]
        for q in range(p):
            real = power(spectral[..., p] + spectral[..., q]) - own[p] - own[q]
            imaginary = power(spectral[..., p] + 1j * spectral[..., q]) - own[p] - own[q]
            # a^H L a for a = (1, 1) and (1, j): 2 Re L_pq and -2 Im L_pq
            result[:, p, q] = 0.5 * (real - 1j * imaginary)
            result[:, q, p] = result[:, p, q].conj()
    return result
