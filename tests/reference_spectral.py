"""Slow reference: a strip dipole in an infinite array by the spectral-domain moment method.

The strip lies along x in the plane between two stacks of layers; its surface current has both components,
expanded over the whole strip in Chebyshev functions that carry the edge conditions:

    Jx = SUM a_nm U_n(2x/L) sqrt(1-(2x/L)^2) T_m(2y/W) / sqrt(1-(2y/W)^2)
    Jy = SUM b_nm T_n(2x/L) / sqrt(1-(2x/L)^2) U_m(2y/W) sqrt(1-(2y/W)^2)

Their transforms are Bessel functions, and the Galerkin matrix is a plain sum over Floquet modes,
``Z_ij = (1/S) SUM_pq conj(f_i) . [Z_TM kk + Z_TE tt] . f_j`` with k along and t across k_pq (T. Itoh, R.
Mittra, IEEE MTT 21, 496, 1973; D. M. Pozar, D. H. Schaubert, IEEE TAP 32, 602, 1984; from memory). The gap
impresses a uniform field over `gap` and the full width; the port current is the mean over that box. Lengths
in one unit, time factor exp(+j w t).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from reference_sinusoid import Vector, reciprocal
from reference_slab import SheetStack
from scipy.special import jv

Floats = NDArray[np.float64]
Complexes = NDArray[np.complexfloating]


@dataclass(frozen=True)
class Size:
    """How far each expansion goes: Chebyshev orders along and across, Floquet orders along x and along y."""

    along: int = 80
    across: int = 2
    transverse: int = 2
    p: int = 100
    q: int = 400


@dataclass(frozen=True)
class Strip:
    """A flat strip along x, centred in its cell, with a feed gap in the middle."""

    length: float
    width: float
    gap: float


@dataclass(frozen=True)
class Row:
    """One tabulated impedance of a strip, width = gap = 0.01, square half-wave lattice; lengths in
    wavelengths."""

    medium: str
    length: float
    theta: float
    phi: float
    given: complex
    converged: complex


SLAB = SheetStack(((2.55, 0.19),), ground=True)
"""Printed dipoles: the strip on a grounded slab."""
OVER_GROUND = SheetStack(((1.0, 0.25),), ground=True)
FREE = SheetStack()
MEDIA = {"slab": SLAB, "ground": OVER_GROUND, "free": FREE}
TABLE = (
    Row("slab", 0.39, 0, 0, 77.16 - 6.59j, 77.14 - 6.70j),
    Row("slab", 0.39, 30, 0, 78.57 + 29.30j, 78.66 + 29.20j),
    Row("slab", 0.39, 50, 0, 49.39 - 77.27j, 49.24 - 77.20j),
    Row("slab", 0.39, 40, 45, 98.62 + 21.01j, 98.74 + 20.80j),
    Row("slab", 0.39, 30, 90, 102.93 + 0.18j, 102.98 - 0.07j),
    Row("slab", 0.39, 60, 90, 266.6 + 15.3j, 267.11 + 13.52j),
    Row("ground", 0.47, 0, 0, 146.06 - 39.29j, 145.96 - 39.50j),
    Row("ground", 0.47, 60, 0, 26.93 - 9.48j, 26.93 - 9.49j),
    Row("ground", 0.47, 60, 90, 261.2 + 208.1j, 262.42 + 208.01j),
    Row("free", 0.47, 0, 0, 75.02 - 18.61j, 75.00 - 18.65j),
    Row("free", 0.47, 60, 0, 24.77 - 38.77j, 24.75 - 38.76j),
    Row("free", 0.47, 60, 90, 181.6 + 46.7j, 182.09 + 46.21j),
)
"""Angles in degrees; `given`: SECOND METHOD, an independent code (R +-.1-.25, X +-.2 ohm stated);
`converged`: this file with FINE, settled to 0.04 % of |Z|. They differ by up to 0.7 % at H60 alone; there a
separate expansion in rooftops graded towards gap and ends (Jx only, 111 unknowns) came within 0.1 % of this
file's Jx-only values, 266.36 + j14.00 on the slab and 261.80 + j207.25 over ground, so `converged` is the
value to compare with."""
FINE = Size(along=110, across=3, transverse=2, p=200, q=600)


class Spectrum:
    """Wave numbers along one axis of the strip: the Floquet orders up to a limit, and a few that stand for
    the rest.

    Beyond the last order the products of two Bessel functions are replaced by their mean over the
    oscillation and the sum by Gauss quadrature in ``s = sqrt(limit/kappa)``. Two samples a quarter period
    apart carry that mean, with the slow part of the phase kept (Debye's form), so that a far sample works
    like any other order:

        J_n(x) ~ sqrt(2/(pi r)) cos(r - n arccos(n/x) - pi/4),   r = sqrt(x^2 - n^2),  x > n.

    Treating every entry of the matrix alike matters: cut or completed unevenly, Jy could carry charge at no
    cost. What is left is the boundary term of the oscillation, about the size of one order's share.
    """

    def __init__(self, extent: float, start: float, spacing: float, orders: int) -> None:
        near = start + np.arange(-orders, orders + 1) * spacing
        s, weight = np.polynomial.legendre.leggauss(30)
        s, weight = (s + 1) / 2, weight / 2
        limit = (orders + 0.5) * spacing
        far = limit / s**2
        self.near, self.extent = near.size, extent
        self.kappa = np.concatenate([near, np.tile(far, 2), np.tile(-far, 2)])
        self._quarter = np.repeat([0, 1, 0, 1], s.size)
        self._weight = np.tile(2 * limit / s**3 * weight / spacing, 4)

    def bessel(self, orders: NDArray[np.int64]) -> Floats:
        """``J_n(kappa extent/2)``, far ones with the root of their weight; (n, 1) -> (n, kappa)."""
        x = self.kappa * self.extent / 2
        far = np.abs(x[self.near :])
        r = np.sqrt(np.maximum(far**2 - orders**2, 1e-3))
        phase = r - far - orders * np.arccos(np.minimum(orders / far, 1)) - self._quarter * np.pi / 2
        sign = np.sign(self.kappa[self.near :]) ** orders
        return np.hstack(
            [jv(orders, x[: self.near]), sign * np.sqrt(self._weight / (np.pi * r)) * np.cos(phase)]
        )

    def regular(self, count: int) -> Complexes:
        """Transforms ``INT U_n sqrt(1-t^2) exp(+j kappa x) dx``, t = 2x/extent; shape (count, kappa)."""
        n, x = np.arange(count)[:, None], self.kappa * self.extent / 2
        safe = np.where(x == 0, 1.0, x)
        ratio = np.where(x == 0, np.where(n == 0, 0.5, 0.0), self.bessel(n + 1) / safe)
        return np.pi * self.extent / 2 * 1j**n * (n + 1) * ratio

    def singular(self, count: int) -> Complexes:
        """Transforms ``INT T_n / sqrt(1-t^2) exp(+j kappa x) dx``; shape (count, kappa)."""
        n = np.arange(count)[:, None]
        return np.pi * self.extent / 2 * 1j**n * self.bessel(n)


def _across(
    stack: SheetStack, kx: float, ky: Floats, wide: Complexes, flat: Complexes
) -> tuple[Complexes, Complexes, Complexes, Complexes]:
    """Sums over ky of kernel times width functions at one kx: xx (M, M), xy (M, My), yx (My, M), yy (My,
    My)."""
    kt2 = kx**2 + ky**2
    safe = np.where(kt2 == 0, 1.0, kt2)  # at kt = 0 both polarisations are alike and any direction will do
    along = np.where(kt2 == 0, 1.0, kx**2 / safe)
    tm, te = stack.z_tm(kt2), stack.z_te(kt2)
    xx, yy, xy = along * tm + (1 - along) * te, along * te + (1 - along) * tm, kx * ky / safe * (tm - te)
    return (
        (wide.conj() * xx) @ wide.T,
        (wide.conj() * xy) @ flat.T,
        (flat.conj() * xy) @ wide.T,
        (flat.conj() * yy) @ flat.T,
    )


def excitation(strip: Strip, size: Size) -> Floats:
    """Mean current through the gap of each basis function; Jx first. Only m = 0 carries a net current."""
    n = np.arange(size.along)
    edge = np.arccos(strip.gap / strip.length)  # INT sin((n+1)t) sin t dt from here to pi - edge, closed form
    inner = np.pi - edge

    def primitive(t: float) -> Floats:
        same = np.where(n == 0, t, np.sin(n * t) / np.maximum(n, 1))
        return (same - np.sin((n + 2) * t) / (n + 2)) / 2

    mean = strip.length / 2 * (primitive(inner) - primitive(edge)) / strip.gap
    v = np.zeros((size.along, size.across))
    v[:, 0] = mean * np.pi * strip.width / 2
    return np.concatenate([v.ravel(), np.zeros(size.along * size.transverse)])


def matrix(strip: Strip, lattice: ArrayLike, kt: Vector, stack: SheetStack, size: Size) -> Complexes:
    """Galerkin matrix, (N M + N My) squared, index n M + m, Jx first; lattice vector a must lie along x."""
    vectors, area = reciprocal(lattice)
    if vectors[1, 0] != 0:
        raise ValueError(f"lattice vector a = {np.asarray(lattice)[0]} must lie along x")
    if size.p * vectors[0, 0] * strip.length < 3 * size.along:
        raise ValueError(f"p = {size.p} orders are too few for {size.along} functions along the strip")
    lengthwise = Spectrum(strip.length, kt[0], vectors[0, 0], size.p)
    spacing, kx = vectors[1, 1], lengthwise.kappa
    start = np.zeros(
        kx.size
    )  # the orders of row p are shifted along ky; for the far ones that is of no account
    start[: lengthwise.near] = kt[1] + np.arange(-size.p, size.p + 1) * vectors[0, 1]
    start = np.round(start - np.round(start / spacing) * spacing, 10)
    rows = {}
    for c in np.unique(start):
        crosswise = Spectrum(strip.width, c, spacing, size.q)
        rows[c] = crosswise.kappa, crosswise.singular(size.across), crosswise.regular(size.transverse)
    sums = [_across(stack, x, *rows[c]) for x, c in zip(kx, start, strict=True)]
    xx, xy, yx, yy = (np.array([s[i] for s in sums]) for i in range(4))
    longitudinal, transverse = lengthwise.regular(size.along), lengthwise.singular(size.along)

    def block(left: Complexes, middle: Complexes, right: Complexes) -> Complexes:
        full = np.einsum("np,pab,kp->nakb", left.conj(), middle, right, optimize=True)
        return full.reshape(left.shape[0] * middle.shape[1], right.shape[0] * middle.shape[2]) / area

    return np.block(
        [
            [block(longitudinal, xx, longitudinal), block(longitudinal, xy, transverse)],
            [block(transverse, yx, longitudinal), block(transverse, yy, transverse)],
        ]
    )


def solve_strip(
    strip: Strip, lattice: ArrayLike, kt: Vector, stack: SheetStack | None = None, size: Size | None = None
) -> complex:
    """Active impedance at the gap, ohm.

    Parameters
    ----------
    strip
        Length, width and gap, in the unit of 1/k.
    lattice
        Rows a, b, shape (2, 2), a along x.
    kt
        Floquet wave vector, shape (2,).
    stack
        What lies below and above the strip's plane; None: free space.
    """
    size = size or Size()
    z = matrix(strip, lattice, kt, stack or SheetStack(), size)
    v = excitation(strip, size)
    return complex(1 / (v @ np.linalg.solve(z, v)))
