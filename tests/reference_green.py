"""Slow reference: the periodic Green's function of a planar lattice in free space.

    G(r) = SUM_m exp(-j kt.rho_m) exp(-jkR_m) / (4 pi R_m),   R_m = |r - rho_m|      (1/length)

Three routes: the plain sum over Floquet modes (z != 0); Kummer's transformation with screened (Yukawa)
images at z = 0, sharing no formula with Ewald's; and Ewald's sum (P. P. Ewald, 1921; K. E. Jordan et al.,
J. Comp. Phys. 63, 222, 1986; both from memory) with the split kept from overflowing (F. Capolino, D. R.
Wilton, W. A. Johnson, J. Comp. Phys. 223, 250, 2007). Time factor exp(+j w t); lengths in one unit, `k` in
its inverse.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from reference_sinusoid import K0, Vector, reciprocal, vertical_wavenumber
from scipy.special import wofz

Floats = NDArray[np.float64]

TABLE = (
    ((0.1, 0.05, 0.1), (0.5, 0.5), (30, 0), -0.100548861141 - 0.154397848363j),
    ((0.1, 0.05, 0.0), (0.5, 0.5), (30, 0), 0.104204992014 - 0.208408194038j),
    ((0.25, 0.25, 0.0), (0.5, 0.5), (0, 0), -0.325708374163 - 0.318309886184j),
    ((0.1, 0.05, 0.0), (0.6, 0.5), (60, 90), 0.375496055684 - 0.350639576334j),
)
"""(x, y, z), (a, b), (theta, phi) in degrees, G; lengths in wavelengths, G in 1/wavelength (CLOSED, 1e-11).

The list the numbers come from names the last cell 0.6 by 0.6; all routes here agree that its value, to all
twelve digits, is that of 0.6 by 0.5 (a 0.6 by 0.6 cell gives 0.0751193187 - j0.7799726246).
"""


def _points(vectors: Floats, radius: float) -> tuple[Floats, NDArray[np.int64]]:
    """Lattice points within `radius` of the origin, (n, 2), and their integer coordinates."""
    reach = np.ceil(radius * np.linalg.norm(np.linalg.inv(vectors), axis=0)).astype(int)
    axes = [np.arange(-n, n + 1) for n in reach]
    grid = np.stack(np.meshgrid(*axes, indexing="ij"), -1).reshape(-1, 2)
    points = grid @ vectors
    keep = np.linalg.norm(points, axis=1) <= radius
    return points[keep], grid[keep]


def _modes(lattice: ArrayLike, kt: Vector, radius: float, k: float) -> tuple[Floats, NDArray, float]:
    """Floquet wave vectors near the origin, (n, 2), their kz, (n,), and the cell area."""
    vectors, area = reciprocal(lattice)
    waves = np.asarray(kt, float) + _points(vectors, radius + float(np.linalg.norm(kt)))[0]
    return waves, vertical_wavenumber(k**2 - np.sum(waves**2, axis=1)), area


def green_plain(
    point: ArrayLike, lattice: ArrayLike, kt: Vector, k: float = K0, depth: float = 32.0
) -> complex:
    """Plain spectral sum ``(1/S) SUM exp(-j k_pq.rho - j kz|z|) / (2j kz)``; modes down to exp(-depth).
    Needs z != 0."""
    x, y, z = np.asarray(point, float)
    if z == 0:
        raise ValueError("the plain spectral sum does not converge at z = 0")
    waves, kz, area = _modes(lattice, kt, np.hypot(depth / abs(z), k), k)
    return complex(np.sum(np.exp(-1j * (waves @ [x, y]) - 1j * kz * abs(z)) / (2j * kz)) / area)


def _screened(distance: Floats, u: float) -> list[Floats]:
    """Spatial partners of ``exp(-kappa|z|)/(2 kappa)`` and of its derivatives: at z = 0, of 1/(2
    kappa^(2p+1)).

    Each follows from the one before by ``-(1/((2p-1) u)) d/du``, starting at the Yukawa potential.
    """
    decay, ur = np.exp(-u * distance), u * distance
    return [
        decay / (4 * np.pi * distance),
        decay / (4 * np.pi * u),
        decay * (1 + ur) / (12 * np.pi * u**3),
        decay * (3 + 3 * ur + ur**2) / (60 * np.pi * u**5),
    ]


def green_kummer(
    point: ArrayLike,
    lattice: ArrayLike,
    kt: Vector,
    k: float = K0,
    radius: float = 600.0,
    u: float | None = None,
) -> complex:
    """Kummer's transformation in the plane z = 0, with four screened terms.

    With kappa^2 = k_pq^2 + u^2 and c = k^2 + u^2, ``1/(j kz) = 1/sqrt(kappa^2 - c)`` minus its first four
    terms in c/kappa^2 falls as k_pq^-9 and is summed over modes within `radius` (rad per length; the rest is
    below ``0.3 c^4 radius^-7``); the four terms are summed in space over screened images, which decay as
    exp(-u R). The result must not depend on `u`.
    """
    x, y, z = np.asarray(point, float)
    if z != 0:
        raise ValueError(f"z = {z}: this form holds at z = 0; use green_plain")
    lattice = np.asarray(lattice, float)
    u = u or max(2 * k, 6 / np.sqrt(abs(np.linalg.det(lattice))))
    c = k**2 + u**2
    series = np.array([1.0, 1 / 2, 3 / 8, 5 / 16]) * c ** np.arange(4)
    waves, kz, area = _modes(lattice, kt, radius, k)
    kappa = np.sqrt(np.sum(waves**2, axis=1) + u**2)
    smooth = 1 / (2j * kz) - sum(s / (2 * kappa ** (2 * p + 1)) for p, s in enumerate(series))
    far = np.sum(np.exp(-1j * (waves @ [x, y])) * smooth) / area
    rho = _points(lattice, 40 / u + float(np.hypot(x, y)))[0]
    distance = np.linalg.norm(np.array([x, y]) - rho, axis=1)
    images = sum(s * g for s, g in zip(series, _screened(distance, u), strict=True))
    return complex(far + np.sum(np.exp(-1j * (rho @ np.asarray(kt))) * images))


def _erfc_pair(a: NDArray[np.complex128], b: NDArray[np.complex128]) -> NDArray[np.complexfloating]:
    """``exp(2ab) erfc(a + b) + exp(-2ab) erfc(a - b)`` by the Faddeeva function w, so that nothing overflows.

    With erfc(t) = exp(-t^2) w(jt) each product is ``exp(-a^2-b^2) w(j(a +- b))``; where Re t < 0,
    erfc(t) = 2 - erfc(-t) first.
    """
    total = np.zeros(a.shape, complex)
    for sign in (1, -1):
        t = a + sign * b
        left = t.real < 0
        value = np.exp(-(a**2) - b**2) * wofz(1j * np.where(left, -t, t))
        total += np.where(left, 2 * np.exp(np.where(left, 2 * sign * a * b, 0)) - value, value)
    return total


def green_ewald(
    point: ArrayLike,
    lattice: ArrayLike,
    kt: Vector,
    k: float = K0,
    split: float | None = None,
    depth: float = 6.2,
) -> complex:
    """Ewald's sum at any point off the sources; the result must not depend on `split` (1/length).

    The default split is sqrt(pi/S), raised to k/5 for large cells, where the fixed choice loses digits as
    exp(k^2/(4 split^2)) and finally overflows (Capolino et al. 2007).
    """
    x, y, z = np.asarray(point, float)
    lattice = np.asarray(lattice, float)
    e = split or max(np.sqrt(np.pi / abs(np.linalg.det(lattice))), k / 5)
    waves, kz, area = _modes(lattice, kt, np.hypot(2 * e * depth, k), k)
    pair = _erfc_pair(
        1j * kz / (2 * e), np.full(kz.shape, z * e, complex)
    )  # exp(+-j kz z) erfc(j kz/2E +- z E)
    far = np.sum(np.exp(-1j * (waves @ [x, y])) * pair / (4j * kz)) / area
    rho = _points(lattice, depth / e + k / (2 * e * e) + float(np.hypot(x, y)))[0]
    r = np.sqrt(np.sum((np.array([x, y]) - rho) ** 2, axis=1) + z * z)
    pair = _erfc_pair(
        (r * e).astype(complex), np.full(r.shape, 0.5j * k / e)
    )  # exp(+-jkR) erfc(R E +- jk/2E)
    near = np.sum(np.exp(-1j * (rho @ np.asarray(kt))) * pair / r) / (8 * np.pi)
    return complex(far + near)
