"""A sweep over frequency and scan from the reduced model, of the same kind as `sweep.solve_sweep` gives."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .reduced import ReducedModel
from .reduced_losses import loss_matrices
from .reduced_waves import wave_amplitudes
from .result import FloquetWaves, ScanPoints, Sweep
from .sweep import Progress, wavenumber
from .waves import wave_table

Floats = NDArray[np.float64]


def reduced_sweep(
    model: ReducedModel,
    frequency: Floats,
    scan: ScanPoints,
    *,
    table: FloquetWaves | None = None,
    keep_currents: bool = False,
    progress: Progress | None = None,
) -> Sweep:
    """Active multiport solution of a cell at every frequency and scan point.

    Parameters
    ----------
    model : ReducedModel whose band holds all frequencies
    frequency : (n_freq,) Hz
    scan : ScanPoints, n_scan directions; ``kt = k (u, v)``
    table : Floquet waves to track; default: every one that propagates somewhere in the sweep
    keep_currents : store the basis coefficients of every point (memory: 16 bytes each)
    progress : called with (points done, points in all)

    Returns
    -------
    Sweep; `residual` is that of the reduced equations

    Raises
    ------
    ValueError
        If a frequency lies outside the model's band.
    """
    frequency = np.atleast_1d(np.asarray(frequency, dtype=float))
    cell, n_port = model.cell, len(model.reference)
    table = table or wave_table(cell.lattice, wavenumber(float(frequency.max())), scan, cell.ground)
    shape = (len(frequency), len(scan))
    impedance = np.empty((*shape, n_port, n_port), dtype=complex)
    scattering = np.empty_like(impedance)
    waves = np.zeros((*shape, len(table.side), n_port), dtype=complex)
    loss = np.zeros((*shape, len(model.view.loss_names), n_port, n_port), dtype=complex)
    residual = np.zeros(shape)
    kept = np.empty((*shape, model.view.basis.n, n_port), dtype=complex) if keep_currents else None
    done = 0
    for f, hertz in enumerate(frequency):
        k = wavenumber(float(hertz))
        for batch in model.batches(k, k * np.stack([scan.u, scan.v], axis=1)):
            index, answer = batch.index, batch.answer
            impedance[f, index], scattering[f, index] = answer.impedance, answer.scattering
            residual[f, index] = answer.residual
            waves[f, index] = wave_amplitudes(model, batch, k, scan.phi[index], table)
            loss[f, index] = loss_matrices(model, batch, k, waves[f, index])
            if kept is not None:
                kept[f, index] = model.vectors @ answer.coefficients
            done += len(index)
            if progress:
                progress(done, shape[0] * shape[1])
    return Sweep(
        frequency, scan, model.reference, impedance, scattering, waves, table, loss, model.view.loss_names, residual,
        kept,
    )  # fmt: skip
