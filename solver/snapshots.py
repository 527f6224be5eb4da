"""Snapshots: currents at a few (frequency, scan) points, and the basis they span.

Because ``Z(kt)^T = Z(-kt)`` one factorisation gives the currents at kt and, from its transpose, those at -kt, which
are the adjoint solutions: ``Y(kt) = V(-kt)^T Z(kt)^-1 V(kt)``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve

from .sweep import CellSolver, wavenumber

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

SMALLEST_PART = 1e-9  # of a snapshot outside the span of those before it, relative


@dataclass(frozen=True)
class Snapshots:
    """Currents for one volt at every port.

    Attributes
    ----------
    frequency : (n,) Hz; u, v : (n,) direction cosines
    currents : (n, 2, n_basis, n_port): at k (u, v) and at -k (u, v)
    admittance : (n, n_port, n_port) S, active, at k (u, v)
    """

    frequency: Floats
    u: Floats
    v: Floats
    currents: Complexes
    admittance: Complexes

    @classmethod
    def none(cls, n_basis: int, n_port: int) -> Snapshots:
        """Without any point yet."""
        empty = np.zeros(0)
        return cls(empty, empty, empty, np.zeros((0, 2, n_basis, n_port), dtype=complex),
                   np.zeros((0, n_port, n_port), dtype=complex))  # fmt: skip

    def __len__(self) -> int:
        return len(self.frequency)

    def __getitem__(self, i: int) -> Snapshots:
        """One point."""
        some = slice(i, i + 1)
        return Snapshots(
            self.frequency[some], self.u[some], self.v[some], self.currents[some], self.admittance[some]
        )  # fmt: skip

    def arrays(self) -> dict[str, NDArray]:
        """As named arrays, for storing."""
        names = ("frequency", "u", "v", "currents", "admittance")
        return {f"snapshot_{name}": getattr(self, name) for name in names}

    @classmethod
    def from_arrays(cls, arrays: dict[str, NDArray]) -> Snapshots:
        """The inverse of `arrays`."""
        names = ("frequency", "u", "v", "currents", "admittance")
        return cls(*(np.asarray(arrays[f"snapshot_{name}"]) for name in names))

    def joined(self, other: Snapshots) -> Snapshots:
        """These and others."""
        names = ("frequency", "u", "v", "currents", "admittance")
        return Snapshots(*(np.concatenate([getattr(self, name), getattr(other, name)]) for name in names))


def take_snapshot(solver: CellSolver, frequency: float, u: float, v: float) -> Snapshots:
    """One full matrix and one factorisation; lattice, losses and loads included."""
    kt = wavenumber(frequency) * np.array([u, v])
    z, _ = solver.system(frequency, kt)
    factors = lu_factor(z, check_finite=False, overwrite_a=True)
    right, opposite = solver.excitations(kt), solver.excitations(-kt)
    forward = lu_solve(factors, right, check_finite=False)
    backward = lu_solve(factors, opposite, trans=1, check_finite=False)
    currents = np.stack([forward, backward])[None]
    at_frequency, at_u, at_v = (np.array([x], dtype=float) for x in (frequency, u, v))
    return Snapshots(at_frequency, at_u, at_v, currents, (right.conj().T @ forward)[None])


def new_directions(vectors: Complexes, currents: Complexes) -> Complexes:
    """Orthonormal directions (n, m) that the columns of `currents` (n, c) add to orthonormal `vectors` (n, r)."""
    found = vectors[:, :0].astype(complex)
    for column in currents.T:
        rest, size = column, 1.0
        for _ in range(2):  # twice is enough
            rest = rest / np.linalg.norm(rest)
            rest = rest - vectors @ (vectors.conj().T @ rest)
            rest = rest - found @ (found.conj().T @ rest)
            size *= np.linalg.norm(rest)
        if size > SMALLEST_PART:
            found = np.concatenate([found, rest[:, None] / np.linalg.norm(rest)], axis=1)
    return found
