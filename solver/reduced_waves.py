"""Amplitudes of the propagating Floquet waves of the reduced basis, for many scan points at once.

As `waves.radiation` and `layered_radiation`, with the transforms of the exact waves instead of the cloud: between a
layer's levels phases along z are interpolated like the kernels.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .layered_waves import radiated_field
from .lines import wave_impedance
from .operator import ETA
from .operator_view import CellView
from .reduced import Batch, ReducedModel
from .result import FloquetWaves
from .waves import polarisation_vectors, wave_azimuth

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]


def wave_amplitudes(model: ReducedModel, batch: Batch, k: float, phi: Floats, table: FloquetWaves) -> Complexes:
    """Amplitude of every tracked wave per unit incident wave, (n, n_wave, n_port); 0 where evanescent.

    phi : (n,) azimuth of the scan points, rad, which fixes the polarisation where a wave leaves at broadside.
    """
    view, transforms = model.view, model.exact.transforms
    to_reduced = model.cell.lattice.reciprocal @ np.linalg.inv(view.lattice.reciprocal)
    coefficients = batch.answer.coefficients
    result = np.zeros((len(phi), len(table.side), coefficients.shape[2]), dtype=complex)
    for order in np.unique(table.order, axis=0):
        shifted = batch.orders + np.round(order @ to_reduced).astype(np.int64)
        waves = batch.reduced + shifted @ view.lattice.reciprocal
        leaves = np.flatnonzero((waves**2).sum(axis=1) < k * k * (1 - 1e-12))
        if not len(leaves):
            continue
        place = np.searchsorted(batch.pick, transforms.find(shifted[leaves]))
        fields = _by_level(model, batch, leaves, place)
        fields = fields * np.exp(1j * waves[leaves] @ transforms.centre)[:, None, None, None]
        for w in np.flatnonzero((table.order == order).all(axis=1)):
            side, polarisation = int(table.side[w]), int(table.polarisation[w])
            radiate = _radiate if view.stack is None else _radiate_layered
            result[leaves, w] = radiate(view, fields, k, waves[leaves], phi[leaves], side, polarisation)
    return result


def level_heights(view: CellView) -> Floats:
    """Heights of all levels of the exact waves, m."""
    return np.concatenate([layer.heights for layer in view.exact.layers])


def _by_level(model: ReducedModel, batch: Batch, leaves: Ints, place: Ints) -> Complexes:
    """x, y, z transforms of the currents by level, (n_leaves, 3, n_level, n_port)."""
    coefficients = batch.answer.coefficients[leaves]
    parts = []
    for field, kept in zip(batch.plus, model.exact.transforms.components, strict=True):
        whole = np.zeros((len(leaves), 3, field.shape[3], coefficients.shape[2]), dtype=complex)
        for i, component in enumerate(kept):
            if component < 3:
                whole[:, component] = field[leaves, place, i] @ coefficients
        parts.append(whole)
    return np.concatenate(parts, axis=2)


def _radiate(
    view: CellView, fields: Complexes, k: float, waves: Floats, phi: Floats, side: int, polarisation: int
) -> Complexes:
    """In air, (n, n_port)."""
    n = len(waves)
    kz = np.sqrt(k * k - (waves**2).sum(axis=1))
    rise = np.exp(1j * side * kz[:, None] * level_heights(view))
    vectors = polarisation_vectors(waves, k, phi, np.full(n, side), np.full(n, polarisation))  # type: ignore[arg-type]
    direct = np.einsum("nl,nclp->ncp", rise, fields)
    if view.cell.ground:
        image = np.einsum("nl,nclp->ncp", rise.conj(), fields)
        direct += np.array([-1.0, -1.0, 1.0])[:, None] * image
    scale = -0.5 * np.sqrt(ETA * k / (view.lattice.area * kz))
    return scale[:, None] * np.einsum("nc,ncp->np", vectors, direct)


def _radiate_layered(
    view: CellView, fields: Complexes, k: float, waves: Floats, phi: Floats, side: int, polarisation: int
) -> Complexes:
    """In a stack, (n, n_port); x and y currents along and across the wave, z currents with the TM wave."""
    stack = view.stack
    assert stack is not None
    kt, angle = np.linalg.norm(waves, axis=1), wave_azimuth(waves, k, phi)  # type: ignore[arg-type]
    outer = radiated_field(stack, k, kt, level_heights(view), upwards=side == 1)
    cosine, sine = np.cos(angle)[:, None, None], np.sin(angle)[:, None, None]
    if polarisation == 0:
        current = cosine * fields[:, 0] + sine * fields[:, 1]
        total = np.einsum("nl,nlp->np", outer.tm, current) + np.einsum("nl,nlp->np", outer.tm_vertical, fields[:, 2])
    else:
        total = np.einsum("nl,nlp->np", outer.te, cosine * fields[:, 1] - sine * fields[:, 0])
    impedance = wave_impedance(k, kt, "TM" if polarisation == 0 else "TE")
    scale = np.sqrt(1 / (view.lattice.area * impedance))
    if side == 1:
        scale = scale * np.exp(1j * np.sqrt(k * k - kt * kt) * stack.top)
    return scale[:, None] * total
