"""Slow reference: infinite arrays of thin dipoles carrying an imposed sinusoidal current.

Dipoles of length L along x on any lattice, in free space or at height h over a perfect ground, tested at the
distance r0 from the filament (the thin-wire radius):

    Z = (eta/2S) SUM_pq (k^2-kx^2)/(k kz) F(kx)^2 [exp(-j kz r0) - exp(-2j kz h)]

Physics: H. A. Wheeler, Proc. IRE 36, 478, 1948 and IEEE TAP 13, 506, 1965; L. Stark, Radio Science 1, 361,
1966 (citations from memory). Three routes: the plain double sum; the same with the sum across the dipoles
turned into image rows (Poisson); and a sum in space over mutual impedances. Lengths in one unit, `k` in its
inverse.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from reference_pair import ETA, K0, mutual_impedance, mutual_over_ground
from scipy.special import k0 as bessel_k0

Floats = NDArray[np.float64]
Vector = Sequence[float] | Floats
RECTANGULAR = ((0.55, 0.0), (0.0, 0.55))
TRIANGULAR = ((0.6, 0.0), (0.3, 0.5))


@dataclass(frozen=True)
class Row:
    """One tabulated impedance; angles in degrees, lengths in wavelengths, dipoles half a wavelength long."""

    lattice: tuple[tuple[float, float], tuple[float, float]]
    height: float | None
    offset: float
    theta: float
    phi: float
    impedance: complex
    decimals: int = 2

    @property
    def kt(self) -> Floats:
        """Floquet wave vector, shape (2,), rad per wavelength."""
        return wave_vector(np.radians(self.theta), np.radians(self.phi))


TABLE = (
    Row(RECTANGULAR, None, 0.001, 0, 0, 63.09 + 15.07j),
    Row(RECTANGULAR, None, 0.001, 30, 0, 48.57 + 4.89j),
    Row(RECTANGULAR, None, 0.001, 45, 0, 35.18 + 5.81j),
    Row(RECTANGULAR, None, 0.001, 30, 90, 72.85 + 37.25j),
    Row(RECTANGULAR, None, 0.001, 45, 90, 89.22 + 92.65j),
    Row(RECTANGULAR, 0.25, 0.001, 0, 0, 126.18 + 14.67j),
    Row(RECTANGULAR, 0.25, 0.001, 30, 0, 92.897 + 25.974j, 3),
    Row(RECTANGULAR, 0.25, 0.001, 45, 0, 56.49 + 37.34j),
    Row(RECTANGULAR, 0.25, 0.001, 30, 90, 139.35 + 62.28j),
    Row(RECTANGULAR, 0.25, 0.001, 60, 0, 27.34 + 52.71j),
    Row(RECTANGULAR, 0.25, 0.001, 60, 90, 214.25 + 257.46j),
    Row(TRIANGULAR, 0.25, 0.002, 0, 0, 127.23 - 1.85j),
    Row(TRIANGULAR, 0.25, 0.002, 30, 0, 93.67 + 27.17j),
    Row(TRIANGULAR, 0.25, 0.002, 30, 90, 140.50 + 38.10j),
    Row(TRIANGULAR, 0.25, 0.002, 45, 90, 144.46 + 94.19j),
)
"""CLOSED: the sum above, computed once outside this project; a grating lobe is present at 60 degrees."""


def wave_vector(theta: float, phi: float, k: float = K0) -> Floats:
    """``kt = k sin(theta) (cos(phi), sin(phi))``, angles in rad, shape (2,)."""
    return k * np.sin(theta) * np.array([np.cos(phi), np.sin(phi)])


def reciprocal(lattice: ArrayLike) -> tuple[Floats, float]:
    """Reciprocal vectors as rows, shape (2, 2), and cell area of a lattice given by rows a, b."""
    vectors = np.asarray(lattice, float)
    return 2 * np.pi * np.linalg.inv(vectors).T, float(abs(np.linalg.det(vectors)))


def vertical_wavenumber(squared: ArrayLike) -> NDArray[np.complexfloating]:
    """Square root of kz^2 on the branch of exp(+j w t): positive, or ``-j |kz|`` when evanescent."""
    squared = np.asarray(squared, float)
    return np.where(squared >= 0, 1.0, -1j) * np.sqrt(np.abs(squared))


def sinusoid_transform(kx: ArrayLike, length: float, k: float = K0) -> Floats:
    """Fourier transform of ``sin(k(L/2-|x|)) / sin(kL/2)``, a length; the limit is taken at kx = +-k."""
    kx = np.asarray(kx, float)
    gap = k**2 - kx**2
    near = np.abs(gap) < 1e-7 * k**2
    regular = (np.cos(kx * length / 2) - np.cos(k * length / 2)) / np.where(near, 1.0, gap)
    value = np.where(near, length * np.sin(k * length / 2) / (4 * k), regular)
    return 2 * k * value / np.sin(k * length / 2)


def array_impedance(
    lattice: ArrayLike,
    length: float,
    kt: Vector,
    *,
    offset: float,
    height: float | None = None,
    k: float = K0,
    depth: float = 14.0,
) -> complex:
    """Active impedance by the plain double sum, ohm.

    Every Floquet mode with ``|kz| offset <= depth`` is taken: the terms left out are smaller than exp(-depth)
    of the largest, so `depth` 14 leaves about 1e-6 of the reactance and needs ``S (depth/offset)^2 / (4
    pi)`` modes.

    Parameters
    ----------
    lattice
        Rows a, b, shape (2, 2).
    length, offset, height
        Dipole length, test distance (> 0), distance to the ground (None: free space).
    kt
        Floquet wave vector, shape (2,). A mode exactly on the light circle makes Z infinite.
    """
    vectors, area = reciprocal(lattice)
    limit = np.hypot(depth / offset, k)
    reach = (limit + np.linalg.norm(kt)) * np.linalg.norm(np.asarray(lattice, float), axis=1) / (2 * np.pi)
    q = np.arange(-np.ceil(reach[1]), np.ceil(reach[1]) + 1)
    total = 0j
    for p in np.arange(-np.ceil(reach[0]), np.ceil(reach[0]) + 1):
        kx, ky = (kt[i] + p * vectors[0, i] + q * vectors[1, i] for i in range(2))
        inside = kx**2 + ky**2 <= limit**2
        kx, ky = kx[inside], ky[inside]
        kz = vertical_wavenumber(k**2 - kx**2 - ky**2)
        wave = np.exp(-1j * kz * offset) - (0 if height is None else np.exp(-2j * kz * height))
        total += np.sum((k**2 - kx**2) / (k * kz) * sinusoid_transform(kx, length, k) ** 2 * wave)
    return complex(ETA / (2 * area) * total)


def array_impedance_by_rows(
    lattice: ArrayLike,
    length: float,
    kt: Vector,
    *,
    offset: float,
    height: float | None = None,
    k: float = K0,
    depth: float = 30.0,
) -> complex:
    """The same impedance with the sum across x turned into a sum over rows of line sources; needs a parallel
    to x.

    For each kx beyond k the line sources decay as ``K0(kappa rho)``, kappa^2 = kx^2 - k^2, so only near rows
    count; the few kx inside keep the plain sum. Converges to 1e-9 with `depth` 30 at a small cost.
    """
    (ax, ay), (_, by) = np.asarray(lattice, float)
    if ay != 0:
        raise ValueError(f"lattice vector a = {(ax, ay)} must lie along x for the row sum")
    vectors, area = reciprocal(lattice)
    orders = int(np.ceil(depth / offset * abs(ax) / (2 * np.pi)))
    p = np.arange(-orders, orders + 1)
    kx = kt[0] + p * vectors[0, 0]
    ky = kt[1] + p * vectors[0, 1]
    total = 0j
    weights = (k**2 - kx**2) / k * sinusoid_transform(kx, length, k) ** 2
    for weight, x, y in zip(weights, kx, ky, strict=True):
        kappa2 = x**2 - k**2
        for distance, sign in ((offset, 1), (0 if height is None else 2 * height, -1)):
            if distance == 0:
                continue
            if kappa2 <= (0.3 * k) ** 2:
                q = np.arange(
                    -np.ceil(depth / distance * abs(by) / 6), np.ceil(depth / distance * abs(by) / 6) + 1
                )
                kz = vertical_wavenumber(-kappa2 - (y + q * vectors[1, 1]) ** 2)
                total += sign * weight * np.sum(np.exp(-1j * kz * distance) / kz)
            else:
                row = np.arange(1, 2 + int(depth / np.sqrt(kappa2) / abs(by)))
                waves = bessel_k0(np.sqrt(kappa2) * np.hypot(distance, row * by)) * np.cos(y * by * row)
                near = bessel_k0(np.sqrt(kappa2) * distance)
                total += sign * weight * 1j * abs(by) / np.pi * (near + 2 * np.sum(waves))
    return complex(ETA / (2 * area) * total)


def array_impedance_in_space(
    lattice: ArrayLike,
    length: float,
    kt: Vector,
    *,
    offset: float,
    height: float | None = None,
    k: float = K0,
    radius: float = 40.0,
) -> complex:
    """The same impedance summed in space, ``SUM_m Z_m exp(-j kt.rho_m)``, from mutual impedances.

    The sum converges only conditionally; a smooth window, one out to a quarter of `radius` and zero beyond
    it, makes it converge faster than any power of 1/radius as long as no Floquet mode is near the light
    circle.
    """
    vectors = np.asarray(lattice, float)
    reach = int(np.ceil(radius / np.min(np.abs(np.linalg.det(vectors)) / np.linalg.norm(vectors, axis=1))))
    grid = np.stack(np.meshgrid(*[np.arange(-reach, reach + 1)] * 2, indexing="ij"), -1).reshape(-1, 2)
    rho = grid @ vectors
    distance = np.linalg.norm(rho, axis=1)
    rho, distance = rho[distance < radius], distance[distance < radius]
    side = np.where(distance == 0, offset, np.hypot(rho[:, 1], offset))
    z = mutual_impedance(length, side, rho[:, 0], k)
    if height is not None:
        z = mutual_over_ground(length, rho[:, 1], rho[:, 0], height, k) + z
        z -= mutual_impedance(length, rho[:, 1], rho[:, 0], k)
    s = np.clip((distance / radius - 0.25) / 0.75, 1e-9, 1 - 1e-9)
    window = 1 / (1 + np.exp(np.clip(1 / (1 - s) - 1 / s, -700, 700)))
    return complex(np.sum(z * window * np.exp(-1j * rho @ np.asarray(kt))))


def one_wave_ratio(theta: float, plane: str, height: float | None = None, k: float = K0) -> float:
    """R(theta)/R(0) of half-wave dipoles while one wave propagates; plane "E" or "H", theta in rad
    (CLOSED)."""
    c, s = np.cos(theta), np.sin(theta)
    ground = 1.0 if height is None else np.sin(k * height * c) ** 2 / np.sin(k * height) ** 2
    if plane == "E":
        return float(c * (np.cos(np.pi / 2 * s) / c**2) ** 2 * ground)
    if plane == "H":
        return float(ground / c)
    raise ValueError(f"plane {plane!r} is neither 'E' nor 'H'")
