"""Direct solution over frequency and scan: one dense solve per point."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve

from ..geometry.cell import UnitCell
from .gaps import GapFunctional
from .layered_radiation import layer_losses
from .losses import ConductorLoss
from .network import port_response
from .operator import SPEED_OF_LIGHT, PeriodicOperator
from .result import FloquetWaves, ScanPoints, Sweep
from .waves import radiation, wave_table

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Progress = Callable[[int, int], None]


class CellSolver:
    """Operator, ports, loads and losses of one cell, ready to be solved at any frequency and scan point."""

    def __init__(self, cell: UnitCell, frequency_max: float, tolerance: float = 1e-6, **overrides: float):
        self.cell = cell
        self.operator = PeriodicOperator(
            cell, wavenumber(frequency_max), tolerance, splitting=overrides.get("splitting")
        )
        basis, lattice = self.operator.basis, self.operator.lattice
        self.ports = [GapFunctional(port.name, port.gap, basis, lattice) for port in cell.ports]
        self.loads = [GapFunctional(load.name, load.gap, basis, lattice) for load in cell.loads]
        self.losses = ConductorLoss(basis)
        self.reference = np.array([port.resistance for port in cell.ports], dtype=float)
        self.stack = self.operator.stack
        self.lossy_stack = self.stack if self.stack is not None and not self.stack.is_lossless else None
        self.loss_names = self.losses.names + tuple(load.name for load in cell.loads) + self._stack_names()

    def _stack_names(self) -> tuple[str, ...]:
        if self.lossy_stack is None:
            return ()
        layers = [layer.name or f"layer {i + 1}" for i, layer in enumerate(self.lossy_stack.layers)]
        sheets = [sheet.name or f"sheet {i + 1}" for i, sheet in enumerate(self.lossy_stack.sheets)]
        return (*layers, *sheets)

    def loss_matrices(
        self, k: float, kt: Floats, absorbing: list, currents: Complexes, driving: Complexes, waves: Complexes
    ) -> Complexes:
        """Hermitian loss matrices (n_loss, m, m) of currents (n, m), in the order of `loss_names`.

        What lossy layers absorb in all is what the currents receive (``driving`` = Z I, (n, m)) less what conductors
        and loads absorb and what leaves in the outgoing waves (n_wave, m): the fields close to sharp edges, which no
        finite number of Floquet waves resolves, are counted. The waves at hand share it out between layers.
        """
        lost = absorbed(absorbing, currents)
        if self.lossy_stack is None:
            return lost
        received = currents.conj().T @ driving
        total = 0.5 * (received + received.conj().T) - lost.sum(axis=0) - waves.conj().T @ waves
        operator = self.operator
        modes = operator.lattice.harmonics(operator.far.orders(k, kt), kt)
        parts = layer_losses(operator.cloud, operator.lattice, self.lossy_stack, k, modes, currents)
        share = np.einsum("lpp->l", parts).real
        return np.concatenate([lost, (share / share.sum())[:, None, None] * total])

    def excitations(self, kt: Floats) -> Complexes:
        """One volt at every port, (n, n_port)."""
        columns = [port.excitation(kt) for port in self.ports]
        return np.stack(columns, axis=1) if columns else np.zeros((self.operator.n, 0), dtype=complex)

    def system(self, frequency: float, kt: Floats) -> tuple[Complexes, list[Complexes]]:
        """The loaded matrix (n, n) and the absorbing parts of it, in the order of `loss_names`."""
        z = self.operator.matrix(wavenumber(frequency), kt)
        absorbing: list = []
        for matrix in self.losses.matrices(kt, frequency):
            rows, columns = matrix.nonzero()
            z[rows, columns] += np.asarray(matrix[rows, columns]).ravel()
            absorbing.append(matrix)
        for load, functional in zip(self.cell.loads, self.loads, strict=True):
            u = functional.excitation(kt)
            impedance = load.impedance(frequency)
            touched = np.flatnonzero(u)
            z[np.ix_(touched, touched)] += impedance * np.outer(u[touched], u[touched].conj())
            absorbing.append((impedance, u))
        return z, absorbing

    def solve(self, frequency: float, kt: Floats, right: Complexes) -> tuple[Complexes, list, float]:
        """Currents for right-hand sides (n, m), the absorbing parts, and the relative residual."""
        z, absorbing = self.system(frequency, kt)
        currents = lu_solve(lu_factor(z, check_finite=False), right, check_finite=False)
        scale = np.linalg.norm(right)
        residual = float(np.linalg.norm(z @ currents - right) / scale) if scale > 0 else 0.0
        return currents, absorbing, residual


def wavenumber(frequency: float) -> float:
    """k = 2 pi f / c, rad/m."""
    return 2 * np.pi * frequency / SPEED_OF_LIGHT


def absorbed(absorbing: list, currents: Complexes) -> Complexes:
    """Hermitian loss matrices (n_loss, m, m) of currents (n, m): power absorbed for weights a is ``a^H L a``."""
    m = currents.shape[1]
    result = np.zeros((len(absorbing), m, m), dtype=complex)
    for i, part in enumerate(absorbing):
        if isinstance(part, tuple):
            impedance, u = part
            through = u.conj() @ currents
            result[i] = impedance.real * np.outer(through.conj(), through)
        else:
            form = currents.conj().T @ (part @ currents)
            result[i] = 0.5 * (form + form.conj().T)
    return result


def solve_sweep(
    cell: UnitCell,
    frequency: Floats,
    scan: ScanPoints,
    *,
    tolerance: float = 1e-6,
    keep_currents: bool = False,
    progress: Progress | None = None,
    solver: CellSolver | None = None,
    table: FloquetWaves | None = None,
) -> Sweep:
    """Active multiport solution of a cell.

    Parameters
    ----------
    cell : UnitCell with at least one port
    frequency : (n_freq,) Hz
    scan : ScanPoints, n_scan directions; ``kt = k (u, v)``
    tolerance : relative truncation error of the lattice sums
    keep_currents : store the basis coefficients of every point (memory: 16 bytes each)
    progress : called with (points done, points in all)
    solver : a CellSolver of the same cell filled for at least the highest frequency, to save its filling
    table : Floquet waves to track; default: every one that propagates somewhere in the sweep

    Returns
    -------
    Sweep
    """
    frequency = np.atleast_1d(np.asarray(frequency, dtype=float))
    solver = solver or CellSolver(cell, float(frequency.max()), tolerance)
    table = table or wave_table(cell.lattice, wavenumber(float(frequency.max())), scan, cell.ground)
    shape, n_port = (len(frequency), len(scan)), len(cell.ports)
    impedance = np.empty((*shape, n_port, n_port), dtype=complex)
    scattering = np.empty_like(impedance)
    waves = np.zeros((*shape, len(table.side), n_port), dtype=complex)
    loss = np.zeros((*shape, len(solver.loss_names), n_port, n_port), dtype=complex)
    residual = np.zeros(shape)
    kept = np.empty((*shape, solver.operator.n, n_port), dtype=complex) if keep_currents else None
    for f, hertz in enumerate(frequency):
        k = wavenumber(hertz)
        for s in range(len(scan)):
            kt = k * np.array([scan.u[s], scan.v[s]])
            right = solver.excitations(kt)
            currents, absorbing, residual[f, s] = solver.solve(hertz, kt, right)
            response = port_response(right.conj().T @ currents, solver.reference)
            currents = currents @ response.voltage
            impedance[f, s], scattering[f, s] = response.impedance, response.scattering
            amplitude, _ = radiation(
                solver.operator.cloud, cell.lattice, cell.ground, k, kt, float(scan.phi[s]), table, solver.stack
            )
            waves[f, s] = amplitude @ currents
            driving = right @ response.voltage
            loss[f, s] = solver.loss_matrices(k, kt, absorbing, currents, driving, waves[f, s])
            if kept is not None:
                kept[f, s] = currents
            if progress:
                progress(f * len(scan) + s + 1, shape[0] * shape[1])
    return Sweep(
        frequency,
        scan,
        solver.reference,
        impedance,
        scattering,
        waves,
        table,
        loss,
        solver.loss_names,
        residual,
        kept,
    )
