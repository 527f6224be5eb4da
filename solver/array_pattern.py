"""Far fields and surface waves of finite sets of currents in the reduced basis."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from .guided_waves import guided_waves
from .lag_coupling import transforms_at
from .operator import ETA
from .operator_view import couplings
from .reduced import ReducedModel
from .reduced_waves import wave_amplitudes
from .result import FloquetWaves, ScanPoints

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

CIRCLE = 16  # points about a pole for its residue


def element_factors(model: ReducedModel, k: float, directions: ScanPoints, side: int = 1) -> Complexes:
    """Far field of every basis current alone, (n_direction, 2, r): theta and phi parts, phase reference at the cell.

    Normalised like the realised gain of a cell: a current of coefficients c driven by one watt has
    ``|factors @ c|^2 = 4 pi x intensity``, for the Floquet wave's power ``P`` per cell belongs to the intensity
    ``P S k^2 cos(theta) / 4 pi^2``. Zero from the horizon on.

    Parameters
    ----------
    directions : n_direction visible directions; side : 1 above, -1 below (theta is then measured from -z)
    """
    table = FloquetWaves(np.zeros((2, 2), dtype=np.int64), np.array([side, side]), np.array([0, 1]))
    result = np.zeros((len(directions), 2, model.size), dtype=complex)
    for batch in model.batches(k, k * np.column_stack([directions.u, directions.v])):
        each = np.broadcast_to(np.eye(model.size, dtype=complex), (len(batch.index), model.size, model.size))
        unit = replace(batch, answer=replace(batch.answer, coefficients=each))
        result[batch.index] = wave_amplitudes(model, unit, k, directions.phi[batch.index], table)
    cosine = np.sqrt(np.clip(1 - directions.u**2 - directions.v**2, 0.0, None))
    return result * np.sqrt(model.cell.lattice.area * k * k * cosine / np.pi)[:, None, None]


def surface_wave_power(model: ReducedModel, k: float, positions: Floats, coefficients: Complexes) -> float:
    """Power that runs away along a lossless stack in its surface waves, W; 0 in air and for lossy stacks.

    The residues of the kernels at their poles k_p: passing above a pole leaves ``-j pi Res`` beside the principal
    value, so that ``P = (eta S k_p / 4 pi k) int J^H Res J dphi`` with J the transforms of all currents at ``k_p (cos
    phi, sin phi)``.

    Parameters
    ----------
    positions : (n_site, 2) m; coefficients : (n_site, r)
    """
    view = model.view
    if view.stack is None or not view.stack.is_lossless:
        return 0.0
    transforms, total = model.exact.transforms, 0.0
    poles = [k * wave.beta.real for wave in guided_waves(view.stack, k)]
    for i, pole in enumerate(poles):
        radius = 0.4 * min(abs(pole - other) for other in [k, *poles[:i], *poles[i + 1 :]])
        turn = radius * np.exp(2j * np.pi * (np.arange(CIRCLE) + 0.5) / CIRCLE)
        span = float(np.linalg.norm(np.ptp(positions, axis=0)) + 2 * np.sqrt(view.lattice.area))
        count = 2 * int(np.ceil(pole * span)) + 32
        phi = 2 * np.pi * np.arange(count) / count
        points = pole * np.column_stack([np.cos(phi), np.sin(phi)])
        driven = np.exp(1j * points @ positions.T) @ coefficients  # (n_angle, r)
        fields = [np.einsum("aclr,ar->acl", field, driven) for field in transforms_at(transforms, points)]
        form = 0.0
        for (a, b), entries in couplings(view.exact, k, (pole + turn) ** 2).items():  # type: ignore[arg-type]
            for row, column, kernel, factor in entries:
                rows, columns = transforms.components[a], transforms.components[b]
                if row in rows and column in columns:
                    residue = factor * np.tensordot(turn, kernel, 1) / CIRCLE
                    left, right = fields[a][:, rows.index(row)], fields[b][:, columns.index(column)]
                    form += np.einsum("al,lm,am->", left.conj(), residue, right).real.item()
        total += ETA * view.lattice.area * pole / (4 * np.pi * k) * form * (2 * np.pi / count)
    return total
