"""Slow reference: isolated thin dipoles with an imposed sinusoidal current, alone and in pairs.

Two routes to the same number, each without the other's arithmetic: the sine and cosine integrals (P. S.
Carter, Proc. IRE 20, 1004, 1932; C. A. Balanis, Antenna Theory, ch. 8; citations from memory) and plain
quadrature of the closed-form near field of a sinusoidal current. Lengths in any one unit, `k` in its
inverse; with the default k = 2 pi lengths are wavelengths. Time factor exp(+j w t).
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.integrate import quad
from scipy.special import sici

ETA = 376.730313412
K0 = 2 * np.pi

SELF_HALF_WAVE = 73.079 + 42.515j
"""Thin half-wave dipole, ohm (CLOSED; books print 73.13 + j42.54 with eta = 120 pi)."""
MONOPOLE = 36.54 + 21.26j
"""Quarter-wave monopole over ground, ohm (CLOSED)."""
SIDE_BY_SIDE = {
    0.1: 67.29 + 7.53j,
    0.25: 40.76 - 28.33j,
    0.5: -12.52 - 29.91j,
    0.75: -22.48 + 6.63j,
    1.0: 4.01 + 17.73j,
    1.5: -1.89 - 12.30j,
    2.0: 1.08 + 9.36j,
}
"""Spacing in wavelengths -> mutual impedance of parallel half-wave dipoles, ohm (CLOSED)."""
COLLINEAR = {
    0.0: 26.40 + 20.15j,
    0.1: 14.66 - 4.01j,
    0.25: 2.04 - 7.97j,
    0.5: -4.12 - 0.72j,
    1.0: 1.73 + 0.19j,
}
"""Gap between the facing ends in wavelengths -> mutual impedance of collinear half-wave dipoles, ohm
(CLOSED)."""
ECHELON = {
    (0.25, 0.25): 30.88 - 18.39j,
    (0.5, 0.25): -12.89 - 22.13j,
    (0.5, 0.5): -11.88 - 7.84j,
    (1.0, 0.5): 9.03 + 8.90j,
}
"""(side distance, axial centre offset) in wavelengths -> mutual impedance of half-wave dipoles, ohm
(CLOSED)."""


def _exponential_integral(x: NDArray[np.float64]) -> NDArray[np.complexfloating]:
    """``E1(jx) = -Ci(x) + j (Si(x) - pi/2)`` for x > 0."""
    si, ci = sici(x)
    return -ci + 1j * (si - np.pi / 2)


def _wave_integrals(
    start: NDArray[np.float64], stop: NDArray[np.float64], side: NDArray[np.float64], k: float
):
    """Integrals of ``exp(+-jk x) exp(-jkR)/R`` over x from start to stop, with R^2 = x^2 + side^2."""

    def up_and_down(x: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        large = np.hypot(x, side) + np.abs(x)
        small = side**2 / large  # the cancelling difference, without cancellation
        return np.where(x > 0, small, large), np.where(x > 0, large, small)

    (minus_0, plus_0), (minus_1, plus_1) = up_and_down(start), up_and_down(stop)
    forward = _exponential_integral(k * minus_1) - _exponential_integral(k * minus_0)
    backward = _exponential_integral(k * plus_0) - _exponential_integral(k * plus_1)
    return forward, backward


def mutual_impedance(
    length: float, side: ArrayLike, axial: ArrayLike = 0.0, k: float = K0
) -> NDArray[np.complexfloating]:
    """Mutual impedance of two equal parallel dipoles by sine and cosine integrals, referred to the centre
    currents.

    Parameters
    ----------
    length
        Dipole length L; sin(kL/2) must not vanish.
    side, axial
        Centre-to-centre offsets across and along the axes; they broadcast. ``side = axial = 0`` is the self
        impedance of a filament, finite for odd multiples of half a wavelength only; otherwise let `side` be
        the radius.
    k
        Wavenumber.

    Returns
    -------
    Impedance in ohm, of the broadcast shape. Source: Carter 1932 (from memory), worked out again here.
    """
    side, axial = np.broadcast_arrays(np.asarray(side, float), np.asarray(axial, float))
    side = np.maximum(np.abs(side), 1e-14 * length)  # logarithms of a zero distance cancel in the sum
    half = length / 2
    total = np.zeros(side.shape, complex)
    for centre, weight in ((half, 1.0), (-half, 1.0), (0.0, -2 * np.cos(k * half))):
        shift = axial - centre  # x = s + shift is the axial distance from this radiating point
        for sign, start, stop in ((1.0, -half, 0.0), (-1.0, 0.0, half)):
            forward, backward = _wave_integrals(start + shift, stop + shift, side, k)
            rising, falling = (forward, backward) if sign > 0 else (backward, forward)
            phase = np.exp(1j * k * (half - sign * shift))
            total += weight * (phase * rising - falling / phase) / 2j
    return 1j * ETA / (4 * np.pi * np.sin(k * half) ** 2) * total


def mutual_impedance_quadrature(length: float, side: float, axial: float = 0.0, k: float = K0) -> complex:
    """The same by adaptive quadrature of the exact field of a sinusoidal current along the other dipole,
    ohm."""
    half = length / 2

    def field(s: float) -> complex:
        ends = [np.hypot(side, axial + s - half), np.hypot(side, axial + s + half), np.hypot(side, axial + s)]
        weights = [1.0, 1.0, -2 * np.cos(k * half)]
        waves = sum(w * np.exp(-1j * k * r) / r for w, r in zip(weights, ends, strict=True) if abs(w) > 1e-15)
        return np.sin(k * (half - abs(s))) * waves

    breaks = sorted({-half, 0.0, half, *(p for p in (half - axial, -half - axial, -axial) if abs(p) < half)})
    total = 0j
    for start, stop in pairwise(breaks):
        options = {"epsabs": 1e-13, "epsrel": 1e-13, "limit": 400}
        total += quad(lambda s: field(s).real, start, stop, **options)[0]
        total += 1j * quad(lambda s: field(s).imag, start, stop, **options)[0]
    return complex(1j * ETA / (4 * np.pi * np.sin(k * half) ** 2) * total)


def mutual_over_ground(
    length: float, side: ArrayLike, axial: ArrayLike, height: float, k: float = K0
) -> NDArray[np.complexfloating]:
    """Mutual impedance of two dipoles parallel to a perfect ground at `height`, ohm (image of opposite
    sign)."""
    side = np.asarray(side, float)
    image = mutual_impedance(length, np.hypot(side, 2 * height), axial, k)
    return mutual_impedance(length, side, axial, k) - image
