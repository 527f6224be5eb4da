"""The receive view: a plane wave from above falls on the array whose ports are terminated.

By image theory and reciprocity the excitation of function i by a unit-power wave of unit vector e, bare ground
included, is ``sqrt(eta / (S cos theta)) conj(e . J_i)`` with the transforms (waves.radiation) of its radiation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .layered_radiation import bare_response, layered_radiation
from .result import FloquetWaves, ScanPoints
from .sweep import CellSolver, absorbed, wavenumber
from .waves import radiation, wave_azimuth, wave_table

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class PlaneWaveResponse:
    """Outgoing power waves per incident unit power wave, over (frequency, scan).

    Attributes
    ----------
    frequency : (n_freq,) Hz; scan : n_scan directions of the incident wave's transverse wave vector ``k (u, v)``
    waves : (n_freq, n_scan, n_wave, 2) outgoing Floquet waves for incident TM (0) and TE (1), phase reference z = 0,
        the bare ground's reflection (or, without ground, the undisturbed wave below) included
    table : FloquetWaves; transverse fields along k_t (TM) or phi (TE) count as positive on both sides, so that a
        bare ground reflects -1 in both
    received : (n_freq, n_scan, n_port, 2) power wave delivered to the terminations
    loss : (n_freq, n_scan, n_loss, 2) power absorbed in conductors and loads; what lossy layers absorb is missing
    """

    frequency: Floats
    scan: ScanPoints
    waves: Complexes
    table: FloquetWaves
    received: Complexes
    loss: Floats


def plane_wave_response(solver: CellSolver, frequency: Floats, scan: ScanPoints) -> PlaneWaveResponse:
    """Reflection, transmission and reception of the cell; its ports end in their reference resistances.

    Parameters
    ----------
    solver : CellSolver filled for at least the highest frequency; cells without ports are welcome
    frequency : (n_freq,) Hz
    scan : incident directions, inside visible space

    Raises
    ------
    ValueError
        If a direction is invisible (no plane wave can come from there).
    """
    if np.any(np.hypot(scan.u, scan.v) >= 1):
        raise ValueError("plane waves come from visible directions only: u^2 + v^2 < 1")
    frequency = np.atleast_1d(np.asarray(frequency, dtype=float))
    cell = solver.cell
    table = wave_table(cell.lattice, wavenumber(float(frequency.max())), scan, cell.ground)
    shape, n_port = (len(frequency), len(scan)), len(cell.ports)
    waves = np.zeros((*shape, len(table.side), 2), dtype=complex)
    received = np.zeros((*shape, n_port, 2), dtype=complex)
    loss = np.zeros((*shape, len(solver.losses.names) + len(cell.loads), 2))
    for f, hertz in enumerate(frequency):
        for s in range(len(scan)):
            point = _respond(solver, float(hertz), scan, s, table)
            waves[f, s], received[f, s], loss[f, s] = point
    return PlaneWaveResponse(frequency, scan, waves, table, received, loss)


def _respond(
    solver: CellSolver, hertz: float, scan: ScanPoints, s: int, table: FloquetWaves
) -> tuple[Complexes, Complexes, Floats]:
    cell, operator = solver.cell, solver.operator
    k = wavenumber(hertz)
    kt = k * np.array([scan.u[s], scan.v[s]])
    phi = float(scan.phi[s])
    incident = _excitation(solver, k, kt, phi)
    ports = solver.excitations(kt)
    currents, absorbing, _ = solver.solve(hertz, kt, np.concatenate([ports, incident], axis=1))
    n_port = len(cell.ports)
    driven, scattered = currents[:, :n_port], currents[:, n_port:]
    # terminate the ports: the gap voltage is -R I, I the current there
    admittance, short_circuit = ports.conj().T @ driven, ports.conj().T @ scattered
    loaded = np.eye(n_port) + admittance * solver.reference
    current = np.asarray(np.linalg.solve(loaded, short_circuit), dtype=complex)
    scattered = scattered - driven @ (solver.reference[:, None] * current)
    amplitude, propagating = radiation(operator.cloud, cell.lattice, cell.ground, k, kt, phi, table, solver.stack)
    out = amplitude @ scattered
    _add_bare(out, solver, k, float(np.linalg.norm(kt)), table)
    lost = np.array([np.real(np.diagonal(m)) for m in absorbed(absorbing, scattered)]).reshape(-1, 2)
    return out * propagating[:, None], np.sqrt(solver.reference)[:, None] * current, lost


def _add_bare(out: Complexes, solver: CellSolver, k: float, kt: float, table: FloquetWaves) -> None:
    """What is there without the conductors: the reflection of the ground or stack, and the wave that passes."""
    ground = solver.cell.ground
    bare = np.array([[-1.0, -1.0], [0.0, 0.0]]) if ground else np.array([[0.0, 0.0], [1.0, 1.0]])
    if solver.stack is not None:
        bare = bare_response(solver.stack, k, kt)
    for polarisation in (0, 1):
        out[table.index((0, 0), 1, polarisation), polarisation] += bare[0, polarisation]
        if not ground:
            out[table.index((0, 0), -1, polarisation), polarisation] += bare[1, polarisation]


def _excitation(solver: CellSolver, k: float, kt: Floats, phi: float) -> Complexes:
    """``int f_i . E`` of unit-power TM and TE waves from above, (n, 2)."""
    cell, cloud = solver.cell, solver.operator.cloud
    both = np.zeros((2, 2), dtype=np.int64), np.array([0, 1])
    if solver.stack is not None:
        waves = np.stack([kt, kt])
        up = FloquetWaves(both[0], np.full(2, 1), both[1])
        azimuth = wave_azimuth(waves, k, phi)
        return -2 * layered_radiation(cloud, cell.lattice, solver.stack, k, waves, azimuth, up, arriving=True).T
    down = FloquetWaves(both[0], np.full(2, -1), both[1])
    amplitude, _ = radiation(cloud, cell.lattice, cell.ground, k, kt, phi, down)
    # an incident wave exp(-j (kt . rho - kz z)) is the conjugate of the phase of radiation towards -kz at real kt
    return -2 * amplitude.conj().T
