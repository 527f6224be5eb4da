"""Ewald's split of the periodic Green's function, with k and k_t explicit.

``exp(-jkR)/(4 pi R)`` summed over the lattice with phases ``exp(-j kt . rho_m)`` equals

    sum_m exp(-j kt . rho_m) sum_p k^(2p) K_p(|r - rho_m|)  +  sum_pq D(k, k_pq, z) exp(-j k_pq . rho)

(Ewald 1921; Jordan, Richter, Sheng, J. Comp. Phys. 63, 222, 1986; the expansion in k^2 is design.md section 1).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf, erfc, wofz

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class Split:
    """Cut-offs of both sums, all derived from one relative tolerance.

    Attributes
    ----------
    splitting : E, 1/m
    powers : number of powers of k^2 kept in the near part
    near_radius : m; pairs of points further apart are dropped from the near part
    far_radius : rad/m beyond k; Floquet waves with ``k_t^2 > far_radius^2 + k^2`` are dropped from the far part
    """

    splitting: float
    powers: int
    near_radius: float
    far_radius: float


def choose_split(
    area: float, k_max: float, tolerance: float, splitting: float | None = None, *, tall: float = 0.0
) -> Split:
    """Cut-offs from the tolerance.

    With ``x^2 = ln(1/tolerance)``: near pairs end where ``exp(-R^2 E^2)`` and Floquet waves where
    ``exp(-(k_t^2 - k^2)/(4 E^2))`` reach the tolerance, so ``R = x/E`` and ``k_t = 2 E x``; the powers end
    where ``(k/2E)^(2p) / (p! (2p-1))`` does. E defaults to c / sqrt(S), c = 4.7 for horizontal conductors and 3.5
    where the share `tall` of vertical ones is large (measured: balances the cost of filling against that of each
    scan point; the waves needed grow with E^2, the levels of tall cells with E), raised to k_max/1.4 for cells large
    against the wavelength, where a smaller
    E would cancel catastrophically (Capolino, Wilton, Johnson, J. Comp. Phys. 223, 250, 2007).
    """
    e = splitting if splitting is not None else max((4.7 - 1.2 * min(1.0, 4 * tall)) / np.sqrt(area), k_max / 1.4)
    x = np.sqrt(np.log(1 / tolerance))
    ratio, powers = (k_max / (2 * e)) ** 2, 2
    while ratio**powers / factorial(powers) / (2 * powers - 1) > 0.1 * tolerance:
        powers += 1
    return Split(e, powers, x / e, 2 * e * x)


def near_kernels(distance: Floats, split: Split, out: Floats | None = None) -> Floats:
    """K_p(R), p = 0..powers-1, shape (powers, *distance.shape), or written into `out` of that shape.

    At R = 0 the static singularity ``1/(4 pi R)`` is left out, so the value is the limit of the smooth rest.
    """
    e = split.splitting
    scale = 1 / (2 * np.pi**1.5)
    kernels = np.empty((split.powers, *distance.shape)) if out is None else out
    zero = distance == 0
    x = np.where(zero, 1.0, distance * e)
    square = x * x
    bell = np.exp(-square)
    integral = erfc(x)
    integral *= np.sqrt(np.pi) / 2
    integral /= x  # I_0 / E
    if zero.any():
        integral[zero], square[zero], bell[zero] = -1.0, 0.0, 1.0
    square *= 2
    np.multiply(integral, scale * e, out=kernels[0])
    for p in range(1, split.powers):
        integral *= square
        np.subtract(bell, integral, out=integral)
        integral /= 2 * p - 1  # I_p E^(2p-1)
        np.multiply(integral, scale * e ** (1 - 2 * p) / (4**p * factorial(p)), out=kernels[p])
    return kernels


def singular_kernel(distance: Floats, p: int) -> Floats:
    """The part of K_p odd in R: ``(-1)^p R^(2p-1) / (4 pi (2p)!)``, independent of E; 0 at R = 0."""
    scale = (-1) ** p / (4 * np.pi * factorial(2 * p))
    if p == 0:
        with np.errstate(divide="ignore"):
            return np.where(distance > 0, scale / distance, 0.0)
    return scale * distance ** (2 * p - 1)


def far_kernel(k: complex, kt_squared: Floats, z: Floats, split: Split, area: float) -> Complexes:
    """D(k, k_t, z): coefficient of ``exp(-j k_t . rho)`` of the smooth part, for height differences z.

    ``kt_squared`` and ``z`` broadcast; returns their common shape, complex. With ``g = j kz``:
    ``[e^(g z) erfc(g/2E + z E) + e^(-g z) erfc(g/2E - z E)] / (4 g S)``.
    """
    e = split.splitting
    g = 1j * longitudinal(k, kt_squared)
    z = np.abs(z)
    damping = np.exp(-((g / (2 * e)) ** 2) - (z * e) ** 2)
    upper = damping * _erfcx(g / (2 * e) + z * e)
    argument = g / (2 * e) - z * e
    forward = argument.real >= 0
    lower = damping * _erfcx(np.where(forward, argument, -argument))
    lower = np.where(forward, lower, 2 * np.exp(-g * z) - lower)
    return (upper + lower) / (4 * g * area)


def longitudinal(k: complex, kt_squared: Floats) -> Complexes:
    """kz = sqrt(k^2 - k_t^2) with Im kz <= 0 (waves decay away from the currents).

    On the light circle itself, where the operator is infinite and the solution finite, |kz| is held at 1e-7 k.
    """
    kz = np.sqrt(np.asarray(k * k - kt_squared, dtype=complex))
    kz = np.where(np.imag(kz) > 0, -kz, kz)
    return np.where(np.abs(kz) < 1e-7 * abs(k), 1e-7 * abs(k), kz)


def _erfcx(x: Complexes) -> Complexes:
    """Scaled complementary error function exp(x^2) erfc(x) of complex argument."""
    return wofz(1j * x)


def smooth_static(distance: Floats, e: float) -> Floats:
    """erf(R E)/(4 pi R), the far part's share of the static kernel; used by the tests."""
    safe = np.where(distance > 0, distance, 1.0)
    return np.where(distance > 0, erf(safe * e) / safe, 2 * e / np.sqrt(np.pi)) / (4 * np.pi)
