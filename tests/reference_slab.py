"""Slow reference: transmission lines of plane layers, surface waves of a grounded slab, slab reflection.

Everything is the textbook equivalent line across the layers (TM: eta_0 kz/(eps_r k), TE: eta_0 k/kz),
written for one sheet of current between two stacks. Time factor exp(+j w t); lengths in one unit, `k` in its
inverse.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from reference_pair import ETA, K0
from scipy.optimize import brentq

Complexes = NDArray[np.complexfloating]
Layer = tuple[complex, float]

SURFACE_WAVES = (
    (2.55, 0.19, 1.28249, 45.85, 32.39, 0.2008),
    (2.55, 0.10, 1.08363, 66.40, 47.27, 0.2008),
    (12.8, 0.05, 1.11081, 62.77, 45.02, 0.0728),
    (2.2, 0.05, 1.01499, 80.07, 53.44, 0.2282),
)
"""er, d, TM0 index b, E-plane pole angle (deg) for a = 0.50 and 0.55, TE1 cut-off thickness; wavelengths
(CLOSED)."""
CURRENT_SHEETS = (
    (2.55, 0.19, "TM", 0, 287.55 - 160.14j),
    (2.55, 0.19, "TE", 0, 287.55 - 160.14j),
    (2.55, 0.19, "TM", 30, 289.58 - 103.06j),
    (2.55, 0.19, "TM", 60, 188.20 - 5.52j),
    (2.55, 0.19, "TE", 30, 367.67 - 157.36j),
    (2.55, 0.19, "TE", 60, 748.33 - 61.99j),
    (12.8, 0.06, "TM", 0, 228.00 + 184.15j),
    (12.8, 0.06, "TM", 60, 151.33 + 74.86j),
    (12.8, 0.06, "TE", 60, 168.56 + 313.99j),
)
"""er, d in wavelengths, polarisation, theta (deg), wave impedance of a current sheet on the slab, ohm
(CLOSED)."""
SLAB_REFLECTION = (
    (10.0, 0.02, "TE", 0, -0.28443 - 0.38963j),
    (10.0, 0.02, "TE", 60, -0.57966 - 0.46168j),
    (10.0, 0.02, "TM", 60, -0.07820 - 0.17276j),
)
"""er, thickness in wavelengths, polarisation, theta (deg), reflection of tangential E in air (CLOSED, all
digits)."""


def _line(kt2: ArrayLike, permittivity: complex, k: float, polarisation: str) -> tuple[Complexes, Complexes]:
    """kz and wave impedance of one medium; the square root decays or carries power away."""
    kz = np.sqrt(np.asarray(permittivity * k**2 - np.asarray(kt2, float), complex))
    kz = np.where((kz.imag > 0) | ((kz.imag == 0) & (kz.real < 0)), -kz, kz)
    return kz, ETA * (kz / (permittivity * k) if polarisation == "TM" else k / kz)


def line_impedance(
    kt2: ArrayLike, layers: Sequence[Layer], polarisation: str, k: float = K0, end: str = "air"
) -> Complexes:
    """Impedance looking into `layers` (permittivity, thickness), the nearest first; behind them ground or
    air.

    Parameters
    ----------
    kt2
        ``kx^2 + ky^2``, any shape.
    polarisation
        "TM" or "TE" to z.
    end
        "ground" (perfect conductor) or "air" (half-space).
    """
    if end not in ("air", "ground") or polarisation not in ("TE", "TM"):
        raise ValueError(f"end {end!r} is 'air' or 'ground', polarisation {polarisation!r} is 'TE' or 'TM'")
    load = np.zeros(np.shape(kt2), complex) if end == "ground" else _line(kt2, 1.0, k, polarisation)[1]
    for permittivity, thickness in reversed(layers):
        kz, z = _line(kt2, permittivity, k, polarisation)
        t = np.tanh(1j * kz * thickness)
        load = z * (load + z * t) / (z + load * t)
    return load


@dataclass(frozen=True)
class SheetStack:
    """A plane for currents between two stacks: `below` ends in ground or air, `above` always in air.

    Layers are (relative permittivity, thickness), counted away from the sheet. ``SheetStack()`` is free
    space, ``SheetStack(((1.0, h),), ground=True)`` a sheet at height h over ground.
    """

    below: tuple[Layer, ...] = ()
    above: tuple[Layer, ...] = ()
    ground: bool = False
    k: float = K0

    def impedance(self, kt2: ArrayLike, polarisation: str) -> Complexes:
        """``-E/J`` of the sheet for one plane wave, ohm; of the shape of `kt2`."""
        kt2 = np.asarray(kt2, float)
        deep = self._deep_from()
        if np.any(kt2 > deep):
            value = np.empty(kt2.shape, complex)
            value[kt2 <= deep] = self.impedance(kt2[kt2 <= deep], polarisation)
            value[kt2 > deep] = self._deep(kt2[kt2 > deep], polarisation)
            return value
        down = line_impedance(kt2, self.below, polarisation, self.k, "ground" if self.ground else "air")
        up = line_impedance(kt2, self.above, polarisation, self.k)
        return up * down / (up + down)

    @property
    def neighbours(self) -> tuple[complex, complex]:
        """Permittivities just below and just above the sheet."""
        return (self.below[0][0] if self.below else 1.0, self.above[0][0] if self.above else 1.0)

    def _deep_from(self) -> float:
        """kt^2 beyond which the waves die within the adjoining layers, to exp(-40): only those two media
        count."""
        thinnest = min([layers[0][1] for layers in (self.below, self.above) if layers], default=np.inf)
        return float(max(np.abs(self.neighbours))) * self.k**2 * 1.01 + (20 / thinnest) ** 2

    def _deep(self, kt2: NDArray[np.float64], polarisation: str) -> Complexes:
        lossless = not np.any(np.iscomplex(self.neighbours))
        down, up = (e.real if lossless else e for e in map(complex, self.neighbours))
        below, above = np.sqrt(kt2 - down * self.k**2), np.sqrt(kt2 - up * self.k**2)
        if polarisation == "TM":
            return -1j * ETA / self.k * (below * above / (down * above + up * below))
        return 1j * ETA * self.k / (below + above)

    def z_te(self, kt2: ArrayLike) -> Complexes:
        """Spectral impedance of TE waves, ohm."""
        return self.impedance(kt2, "TE")

    def z_tm(self, kt2: ArrayLike) -> Complexes:
        """Spectral impedance of TM waves, ohm."""
        return self.impedance(kt2, "TM")


def current_sheet_impedance(
    permittivity: float, thickness: float, theta: float, polarisation: str
) -> complex:
    """The same on a grounded slab by the printed formula, ``Z0`` in parallel with ``j Z1 tan(k1z d)``, ohm.

    Idea: D. M. Pozar, IEEE TAP 33(5), 498, 1985 (from memory). Thickness in wavelengths, theta in rad.
    """
    c, q = np.cos(theta), np.sqrt(permittivity - np.sin(theta) ** 2)
    z0, z1 = (ETA * c, ETA * q / permittivity) if polarisation == "TM" else (ETA / c, ETA / q)
    slab = 1j * z1 * np.tan(2 * np.pi * q * thickness)
    return complex(z0 * slab / (z0 + slab))


def surface_wave_index(permittivity: float, thickness: float) -> float:
    """beta/k of the TM0 wave: ``er sqrt(b^2-1) cos(kd q) = q sin(kd q)``, q = sqrt(er-b^2); thickness in
    wavelengths."""

    def residual(b: float) -> float:
        q = np.sqrt(permittivity - b**2)
        x = 2 * np.pi * thickness * q
        return permittivity * np.sqrt(b**2 - 1) * np.cos(x) - q * np.sin(x)

    # the lowest root has kd q < pi/2: b from the larger of 1 and that limit
    start = np.sqrt(max(1.0, permittivity - (0.25 / thickness) ** 2))
    return float(brentq(residual, start, np.sqrt(permittivity) * (1 - 1e-12), xtol=1e-14))


def te1_cutoff(permittivity: float) -> float:
    """Thickness in wavelengths at which TE1 starts to propagate, ``1 / (4 sqrt(er - 1))``."""
    return 0.25 / np.sqrt(permittivity - 1)


def pole_angle(index: float, period: float) -> float:
    """E-plane angle (rad) where the wave of order -1 falls on the surface wave, ``sin t = 1/a - b``, a in
    wavelengths."""
    return float(np.arcsin(1 / period - index))


def slab_reflection(permittivity: float, thickness: float, theta: float, polarisation: str) -> complex:
    """Reflection of tangential E from a slab in air, at its face; thickness in wavelengths, theta in rad."""
    kt2 = (K0 * np.sin(theta)) ** 2
    z = line_impedance(kt2, [(permittivity, thickness)], polarisation)
    z0 = line_impedance(kt2, [], polarisation)
    return complex((z - z0) / (z + z0))
