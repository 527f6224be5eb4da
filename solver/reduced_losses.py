"""Loss matrices of the reduced model, as `sweep.CellSolver.loss_matrices` for many scan points at once."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..geometry.stack import Stack
from .layered_waves import absorbed_power
from .operator import SPEED_OF_LIGHT
from .reduced import Answer, Batch, ReducedModel
from .reduced_waves import level_heights

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

SHARE_BYTES = 4e7  # memory of the transforms at points whose layers are handled together


def loss_matrices(model: ReducedModel, batch: Batch, k: float, waves: Complexes) -> Complexes:
    """Hermitian loss matrices (n, n_loss, n_port, n_port), in the order of `CellView.loss_names`.

    waves : (n, n_wave, n_port) amplitudes of the outgoing waves
    """
    lost = np.concatenate([_conductors(model, batch, k), _loads(model, batch, k)], axis=1)
    stack = model.view.stack
    if stack is None or stack.is_lossless:
        return lost
    received = batch.answer.received
    total = 0.5 * (received + received.conj().swapaxes(1, 2)) - lost.sum(axis=1)
    total -= waves.conj().swapaxes(1, 2) @ waves
    share = _shares(model, batch, k)
    return np.concatenate([lost, share[:, :, None, None] * total[:, None]], axis=1)


def _conductors(model: ReducedModel, batch: Batch, k: float) -> Complexes:
    c = batch.answer.coefficients
    n, _, ports = c.shape
    forms = model.losses
    count = len(forms.losses.names)
    result = np.zeros((n, count, ports, ports), dtype=complex)
    if count:
        lags = forms.power_lags(k)  # (n_conductor, n_cell, r, r)
        phases = np.exp(-1j * batch.reduced @ forms.rho.T)
        for i in range(count):
            for lag, phase in zip(lags[i], phases.T, strict=True):
                result[:, i] += phase[:, None, None] * (c.conj().swapaxes(1, 2) @ (lag @ c))
    return np.asarray(0.5 * (result + result.conj().swapaxes(2, 3)), dtype=complex)


def _loads(model: ReducedModel, batch: Batch, k: float) -> Complexes:
    answer: Answer = batch.answer
    impedance = [load.impedance(k * SPEED_OF_LIGHT / (2 * np.pi)).real for load in model.cell.loads]
    through = model.loads.excitation(-batch.reduced).swapaxes(1, 2) @ answer.coefficients  # (n, n_load, n_port)
    powers = np.array(impedance)[:, None, None] * through.conj()[:, :, :, None] * through[:, :, None, :]
    return np.asarray(powers, dtype=complex)


def _shares(model: ReducedModel, batch: Batch, k: float) -> Floats:
    """Share of each layer and sheet in what the stack absorbs, (n, n_layer + n_sheet)."""
    stack = model.view.stack
    assert stack is not None
    lossy = [abs(e.imag) > 0 for e in stack.permittivity[1:][: len(stack.layers)]]
    lossy += [(1 / complex(sheet.impedance)).real > 0 for sheet in stack.sheets]
    if sum(lossy) == 1:
        return np.broadcast_to(np.array(lossy, dtype=float), (len(batch.index), len(lossy)))
    table = model.all_transforms
    size = 16 * len(table.orders) * model.size * sum(c.shape[2] * c.shape[3] for c in table.coefficients)
    step = max(1, int(SHARE_BYTES / size))
    starts = range(0, len(batch.index), step)
    return np.concatenate([_some_shares(model, batch, k, slice(i, i + step), stack) for i in starts])


def _some_shares(model: ReducedModel, batch: Batch, k: float, some: slice, stack: Stack) -> Floats:
    """Of some points, with every Floquet wave the direct solver takes."""
    view, table, coefficients = model.view, model.all_transforms, batch.answer.coefficients[some]
    kt = batch.reduced[some]
    waves = kt[:, None] + table.orders @ view.lattice.reciprocal
    point, order = np.nonzero((waves**2).sum(axis=2) <= view.reach(k) ** 2)
    waves = waves[point, order]
    angle = np.arctan2(waves[:, 1], waves[:, 0])[:, None, None]
    parts = []
    for field, kept in zip(table.at(table.polynomials(kt), slice(None)), table.components, strict=True):
        xyz = np.zeros((len(waves), field.shape[3], 3, coefficients.shape[2]), dtype=complex)
        for place, component in enumerate(kept):
            if component < 3:
                flat = field[:, :, place].reshape(len(kt), -1, field.shape[4]) @ coefficients
                xyz[:, :, component] = flat.reshape(*field.shape[:2], field.shape[3], -1)[point, order]
        x, y = xyz[:, :, 0], xyz[:, :, 1]
        across = np.cos(angle) * y - np.sin(angle) * x
        parts.append(np.stack([np.cos(angle) * x + np.sin(angle) * y, across, xyz[:, :, 2]], axis=2))
    currents, heights = np.concatenate(parts, axis=1), level_heights(view)
    lost = np.zeros((len(kt), len(stack.layers) + len(stack.sheets)))
    for p in range(currents.shape[3]):
        found = absorbed_power(stack, k, np.linalg.norm(waves, axis=1), heights, currents[..., p])
        np.add.at(lost, point, np.concatenate([found.layers, found.sheets], axis=1))
    return lost / lost.sum(axis=1, keepdims=True)
