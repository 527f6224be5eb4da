"""Sums over lattice cells ``C_0 + sum_m exp(-j kt . rho_m) C_m + exp(j kt . rho_m) C_m^T`` at many k_t at once.

Every periodic matrix with ``Z(kt)^T = Z(-kt)`` that is smooth in k_t is such a sum over one half-plane of cells.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]


def half_plane(first_reach: int, second_reach: int) -> Ints:
    """Cells (n, 2) with |m1| and |m2| up to the reaches, one of each pair m and -m, the home cell first."""
    first, second = (np.arange(-r, r + 1) for r in (first_reach, second_reach))
    cells = np.stack(np.meshgrid(first, second, indexing="ij"), -1).reshape(-1, 2)
    kept = (cells[:, 0] > 0) | ((cells[:, 0] == 0) & (cells[:, 1] > 0))
    return np.concatenate([np.zeros((1, 2), dtype=np.int64), cells[kept]])


def merge(cells: list[Ints], matrices: list[Complexes]) -> tuple[Ints, Complexes]:
    """Add lag matrices (n, r, r) given for several half-plane sets of cells (n, 2), the home cell first."""
    index: dict[tuple[int, int], int] = {(0, 0): 0}
    for group in cells:
        for p, q in group.tolist():
            index.setdefault((p, q), len(index))
    total = np.zeros((len(index), *matrices[0].shape[1:]), dtype=complex)
    for group, block in zip(cells, matrices, strict=True):
        np.add.at(total, [index[p, q] for p, q in group.tolist()], block)
    return np.array(list(index)), total


class LagSum:
    """The sum for fixed matrices C (n, r, r), C[0] that of the home cell, ready for many k_t."""

    def __init__(self, lattice: Lattice, cells: Ints, matrices: Complexes):
        self.rho = lattice.positions(cells[1:])
        self.shape = matrices.shape[1:]
        transposed = matrices[1:].transpose(0, 2, 1)
        even, odd = matrices[1:] + transposed, -1j * (matrices[1:] - transposed)
        stacked = np.concatenate([matrices[:1], even, odd]).reshape(2 * len(cells) - 1, -1)
        self._stacked = np.ascontiguousarray(stacked).view(float)

    def __call__(self, kt: Floats) -> Complexes:
        """Matrices at k_t (n, 2), (n, r, r)."""
        angle = kt @ self.rho.T
        weights = np.concatenate([np.ones((len(kt), 1)), np.cos(angle), np.sin(angle)], axis=1)
        return (weights @ self._stacked).view(complex).reshape(len(kt), *self.shape)


def lags_from_samples(samples: Complexes, phases: Complexes, total: int) -> Complexes:
    """C_m from samples at k_t = 0 and one of each pair of the other grid points.

    Parameters
    ----------
    samples : (n_half, ..., r, r), the first at k_t = 0
    phases : (n_half, n_lag) ``exp(j kt . rho_m)``
    total : points of the whole grid

    Returns
    -------
    (n_lag, ..., r, r)
    """
    flat = samples.reshape(len(samples), -1)
    swapped = samples.swapaxes(-1, -2).reshape(len(samples), -1)
    others = phases.copy()
    others[0] = 0.0
    result = (phases.T @ flat + others.conj().T @ swapped) / total
    return result.reshape(phases.shape[1], *samples.shape[1:])
