"""Slow reference: where grating lobes appear, by closed forms and by looking for them (CLOSED unless
said)."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

LARGEST_SQUARE = {30: 0.6667, 45: 0.5858, 60: 0.5359}
"""Scan cone half-angle (deg) -> largest period of a square lattice without grating lobes, wavelengths
(CLOSED)."""
LARGEST_EQUILATERAL = {60: 0.6188}
"""The same for the side of an equilateral triangular lattice (CLOSED)."""
EQUILATERAL_SAVING = 0.134
"""Elements saved by the equilateral lattice: E. D. Sharp, IRE TAP 9, 126, 1961 (PUBLISHED, abstract)."""


def largest_square_period(cone: float) -> float:
    """``1/(1 + sin t)`` wavelengths; cone half-angle in rad."""
    return 1 / (1 + np.sin(cone))


def largest_equilateral_side(cone: float) -> float:
    """``2/sqrt(3)`` times the square lattice's, wavelengths; cone half-angle in rad."""
    return 2 / np.sqrt(3) * largest_square_period(cone)


def visible_lobes(lattice: ArrayLike, theta: float, phi: float, k: float = 2 * np.pi, reach: int = 6) -> int:
    """Number of propagating Floquet waves besides the main beam, by trying every order up to `reach`."""
    vectors = 2 * np.pi * np.linalg.inv(np.asarray(lattice, float)).T
    kt = k * np.sin(theta) * np.array([np.cos(phi), np.sin(phi)])
    orders = np.stack(np.meshgrid(*[np.arange(-reach, reach + 1)] * 2, indexing="ij"), -1).reshape(-1, 2)
    waves = kt + orders[np.any(orders != 0, axis=1)] @ vectors
    return int(np.sum(np.linalg.norm(waves, axis=1) < k))


def lobe_free_cone(lattice: ArrayLike, k: float = 2 * np.pi, azimuths: int = 720) -> float:
    """Half-angle (rad) of the largest lobe-free cone, by bisection over a circle of `azimuths` directions."""
    directions = np.linspace(0, 2 * np.pi, azimuths, endpoint=False)
    low, high = 0.0, np.pi / 2
    while high - low > 1e-5:
        middle = (low + high) / 2
        clean = all(visible_lobes(lattice, middle, phi, k) == 0 for phi in directions)
        low, high = (middle, high) if clean else (low, middle)
    return low
