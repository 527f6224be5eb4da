"""The system of a finite array: blocks that depend on the offset of two sites only, and one block more at each site.

Dense and factorised where it is small; larger ones by products through the fast Fourier transform on the sites'
bounding box (the sites need not fill it) and GMRES, preconditioned by the infinite array cut to size: the inverse of
the block-circulant matrix on the padded box (T. F. Chan, SIAM J. Sci. Stat. Comput. 9, 766, 1988; from memory). There
the couplings are tapered towards the box's size: surface waves cut off would ring (13 iterations instead of 290 for
31 x 31 dipoles on a slab).
"""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve
from scipy.sparse.linalg import LinearOperator, gmres

Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

RESTART = 60
MOST_CYCLES = 20


class BlockToeplitz:
    """``(A x)_s = sum_t Z[t - s] x_t + own_s x_s``.

    Parameters
    ----------
    sites : (n, 2) integers, all distinct
    lags : (2 p - 1, 2 q - 1, r, r), Z by offset with offset (0, 0) in the middle; p, q sides of the sites' bounding box
    own : (n, r, r)
    direct_limit : unknowns up to which the system is factorised
    tolerance : relative residual of the iterative solver
    """

    def __init__(self, sites: Ints, lags: Complexes, own: Complexes, direct_limit: int, tolerance: float):
        self.sites, self.lags, self.own = sites - sites.min(axis=0), lags, own
        self.n, self.r, self.tolerance = len(sites), lags.shape[2], tolerance
        self.is_direct = self.n * self.r <= direct_limit
        self.box = self.sites.max(axis=0) + 1
        self.iterations = 0

    def dense(self) -> Complexes:
        """The whole matrix, (n r, n r)."""
        first, second = (self.sites[None] - self.sites[:, None] + self.box - 1).transpose(2, 0, 1)
        matrix = np.empty((self.n, self.r, self.n, self.r), dtype=complex)
        for s in range(self.n):
            matrix[s] = self.lags[first[s], second[s]].transpose(1, 0, 2)
            matrix[s, :, s] += self.own[s]
        return matrix.reshape(self.n * self.r, -1)

    @cached_property
    def _factors(self) -> tuple:
        return lu_factor(self.dense(), check_finite=False, overwrite_a=True)

    def solve(self, right: Complexes) -> tuple[Complexes, float]:
        """Solutions (n, r, m) for right-hand sides (n, r, m), and the largest relative residual.

        Raises
        ------
        RuntimeError
            If the iterative solver does not reach its tolerance.
        """
        flat = right.reshape(self.n * self.r, -1)
        if self.is_direct:
            found = lu_solve(self._factors, flat, check_finite=False)
        else:
            found = np.stack([self._iterate(column) for column in flat.T], axis=1)
        error = self.apply(found) - flat
        scale = np.linalg.norm(flat, axis=0)
        residual = float((np.linalg.norm(error, axis=0) / np.where(scale > 0, scale, 1.0)).max(initial=0.0))
        return found.reshape(right.shape), residual

    def apply(self, vectors: Complexes) -> Complexes:
        """A times vectors (n r, m), through the fast Fourier transform."""
        m = vectors.shape[1]
        x = vectors.reshape(self.n, self.r, m)
        result = self._through_box(self._spectrum, x) + self.own @ x
        return result.reshape(vectors.shape)

    @cached_property
    def _spectrum(self) -> Complexes:
        return self._transformed(self.lags)

    def _transformed(self, lags: Complexes) -> Complexes:
        """``sum_d Z[d] exp(2 pi j d . f / N)`` on the box padded to twice its sides, (f1, f2, r, r)."""
        padded = np.zeros((*(2 * self.box), self.r, self.r), dtype=complex)
        first, second = ((-step) % (2 * side) for step, side in zip(self._steps, self.box, strict=True))
        padded[np.ix_(first, second)] = lags
        return np.fft.fft2(padded, axes=(0, 1)).astype(complex)

    @property
    def _steps(self) -> list[Ints]:
        return [np.arange(1 - side, side) for side in self.box]

    def _through_box(self, spectrum: Complexes, x: Complexes) -> Complexes:
        """Multiply vectors (n, r, m) by a block-circulant matrix on the padded box."""
        grid = np.zeros((*spectrum.shape[:2], self.r, x.shape[2]), dtype=complex)
        first, second = self.sites.T
        grid[first, second] = x
        product = np.fft.ifft2(spectrum @ np.fft.fft2(grid, axes=(0, 1)), axes=(0, 1))
        return product[first, second].astype(complex)

    @cached_property
    def _preconditioner(self) -> Complexes:
        """Inverse of the infinite array with the commonest block of its own, on the padded box."""
        _, which, count = np.unique(self.own.reshape(self.n, -1), axis=0, return_index=True, return_counts=True)
        taper = [np.cos(0.5 * np.pi * step / side) ** 2 for step, side in zip(self._steps, self.box, strict=True)]
        spectrum = self._transformed(self.lags * np.outer(*taper)[:, :, None, None])
        return np.asarray(np.linalg.inv(spectrum + self.own[which[np.argmax(count)]]), dtype=complex)

    def _iterate(self, column: Complexes) -> Complexes:
        if not column.any():
            return column.copy()
        shape = (self.n * self.r, self.n * self.r)

        def product(x: Complexes) -> Complexes:
            self.iterations += 1
            return self.apply(x.reshape(-1, 1)).ravel()

        def precondition(x: Complexes) -> Complexes:
            return self._through_box(self._preconditioner, x.reshape(self.n, self.r, 1)).ravel()

        operator = LinearOperator(shape, matvec=product, dtype=complex)
        inverse = LinearOperator(shape, matvec=precondition, dtype=complex)
        options: dict[str, Any] = {"rtol": self.tolerance, "atol": 0.0, "restart": RESTART, "maxiter": MOST_CYCLES}
        found, flag = gmres(operator, column, **options, M=inverse)  # type: ignore[call-overload]
        if flag:
            residual = np.linalg.norm(product(found) - column) / np.linalg.norm(column)
            raise RuntimeError(f"GMRES reached a relative residual of {residual:.1e} only, {self.tolerance:.1e} wanted")
        return found
