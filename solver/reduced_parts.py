"""The parts of the reduced model that are short sums over lattice cells as they stand: near part, losses, gaps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from .basis import Basis
from .gaps import GapFunctional
from .losses import ConductorLoss
from .near import NearBlock
from .operator_view import near_terms
from .reduced_far import chebyshev_nodes, node_weights

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class NearForms:
    """``V^T X V`` of the near part: cells (n_cell, 2), home cell first; powers of k^2 (n_power, n_cell, r, r)."""

    cells: Ints
    powers: Complexes

    @classmethod
    def empty(cls, near: list[NearBlock]) -> NearForms:
        """No basis vectors yet."""
        cells = sorted({block.cell for block in near} | {(0, 0)}, key=lambda cell: (cell != (0, 0), cell))
        count = max(first + len(matrices) for block in near for first, _, matrices in near_terms(block))
        return cls(np.array(cells), np.zeros((count, len(cells), 0, 0), dtype=complex))

    def extended(self, near: list[NearBlock], old: Floats | Complexes, added: Complexes) -> NearForms:
        """With further basis vectors `added` (n, m) beside the old ones (n, r): only products with the new ones."""
        count, n_cell, r, _ = self.powers.shape
        both = np.concatenate([old, added], axis=1)
        result = np.zeros((count, n_cell, both.shape[1], both.shape[1]), dtype=complex)
        result[:, :, :r, :r] = self.powers
        place = {tuple(cell): i for i, cell in enumerate(self.cells.tolist())}
        for block in near:
            target = result[:, place[block.cell]]
            left, right = both[block.rows], added[block.columns]
            back_left, back_right = old[block.columns], added[block.rows]
            for first, sign, matrices in near_terms(block):
                for p, matrix in enumerate(matrices):
                    target[first + p, :, r:] += sign * (left.T @ _times(matrix, right))
                    if r:
                        target[first + p, r:, :r] += sign * (back_left.T @ _times(matrix.T, back_right)).T
        return NearForms(self.cells, result)

    def at(self, k: float) -> Complexes:
        """X by cell at k, (n_cell, r, r)."""
        return np.tensordot(k ** (2.0 * np.arange(len(self.powers))), self.powers, 1)


def _times(matrix: NDArray, vectors: Complexes) -> Complexes:
    if np.iscomplexobj(matrix):
        return matrix @ vectors
    return (matrix @ np.ascontiguousarray(vectors).view(float)).view(complex)


class LossForms:
    """Conductor losses: ``V^T L V`` for the operator and ``V^H L V`` for the power, by conductor.

    Both are sums over the cells between an element and its displaced copies, and smooth in frequency: Chebyshev nodes.
    """

    def __init__(self, losses: ConductorLoss, basis: Basis, lattice: Lattice, k_min: float, k_max: float, nodes: int):
        self.losses, self.k_min, self.k_max, self.nodes = losses, k_min, k_max, nodes
        shifts = np.concatenate([basis.triangle_shift, basis.segment_shift, basis.fan_shift]).reshape(-1, 2)
        steps = np.abs(np.round(lattice.coordinates(shifts)).astype(int))
        span = 2 * steps.max(axis=0, initial=0)
        first, second = (np.arange(-s, s + 1) for s in span)
        self.cells = np.stack(np.meshgrid(first, second, indexing="ij"), -1).reshape(-1, 2)
        self._kt = (self.cells / (2 * span + 1)) @ lattice.reciprocal
        self._phases = np.exp(2j * np.pi * (self.cells / (2 * span + 1)) @ self.cells.T) / len(self.cells)
        self.rho = lattice.positions(self.cells)
        self.operator, self.power = (
            np.zeros((nodes, len(losses.names), len(self.cells), 0, 0), dtype=complex) for _ in range(2)
        )

    def rebuild(self, vectors: Complexes, speed: float) -> None:
        """For basis vectors (n, r); `speed`: of light, m/s."""
        count, r = len(self.losses.names), vectors.shape[1]
        shape = (self.nodes, count, len(self.cells), r, r)
        self.operator, self.power = np.zeros(shape, dtype=complex), np.zeros(shape, dtype=complex)
        if not count:
            return
        nodes = chebyshev_nodes(self.k_min, self.k_max, self.nodes)
        for s, kt in enumerate(self._kt):
            for i, k in enumerate(nodes):
                for c, matrix in enumerate(self.losses.matrices(kt, k * speed / (2 * np.pi))):
                    product = matrix @ vectors
                    plain, conjugate = vectors.T @ product, vectors.conj().T @ product
                    self.operator[i, c] += self._phases[s, :, None, None] * plain
                    self.power[i, c] += self._phases[s, :, None, None] * conjugate

    def operator_at(self, k: float, kt: Floats) -> Complexes:
        """``V^T L V`` of all conductors together at kt (n, 2), ohm, (n, r, r)."""
        weights = node_weights(self.k_min, self.k_max, self.nodes, k)
        lags = np.tensordot(weights, self.operator.sum(axis=1), 1)
        return np.tensordot(np.exp(-1j * kt @ self.rho.T), lags, 1)

    def power_lags(self, k: float) -> Complexes:
        """``V^H L V`` by conductor and cell, ohm, (n_conductor, n_cell, r, r)."""
        return np.asarray(
            np.tensordot(node_weights(self.k_min, self.k_max, self.nodes, k), self.power, 1), dtype=complex
        )


class GapForms:
    """``V^T V_i(kt)`` of several gaps."""

    def __init__(self, gaps: list[GapFunctional], vectors: Complexes):
        self.gaps = [(np.array(gap.shifts), np.array(gap.parts) @ vectors) for gap in gaps]
        self._r = vectors.shape[1]

    def excitation(self, kt: Floats) -> Complexes:
        """Projected excitations of one volt, (n, r, n_gap), for kt (n, 2). That of -kt reads the gap's current."""
        result = np.zeros((len(kt), self._r, len(self.gaps)), dtype=complex)
        for g, (shifts, parts) in enumerate(self.gaps):
            result[:, :, g] = np.exp(-1j * kt @ shifts.T) @ parts
        return result
