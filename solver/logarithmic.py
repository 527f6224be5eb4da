"""The near share of ``exp(-g d) / (2 g^2)`` in space, ``g^2 = k_t^2 - kappa k^2``: a line of images.

It is the integral of ``exp(-g s) / (2 g)`` over s from d upwards, and with Ewald's integral

    (1 / 4 pi) int (dt / t) erfc(t d) exp(-rho^2 t^2 + kappa k^2 / 4 t^2),   t from the splitting parameter E upwards

(derived anew from P. P. Ewald, Ann. Phys. 369, 253, 1921; the plane of k_t: `shares`). On fixed nodes t it is a sum of
factors of the heights times factors of the lateral distance.
"""

from __future__ import annotations

from math import factorial

import numpy as np
from numpy.typing import NDArray
from scipy.special import erfc

from . import quadrature

Floats = NDArray[np.float64]

NODES = 10  # Gauss nodes for every factor e^2 of t
BEYOND = 14.0  # t ends at this over the least distance


def log_nodes(splitting: float, least: float) -> tuple[Floats, Floats]:
    """Nodes t and weights dt from E to where nothing is left at the distance `least`, m."""
    low, high = np.log(splitting), np.log(max(BEYOND / least, 20 * splitting))
    x, w = quadrature.gauss(NODES)
    edges = np.linspace(low, high, int(np.ceil((high - low) / 2)) + 1)
    width = np.diff(edges)[:, None]
    t = np.exp(edges[:-1, None] + width * x).ravel()
    return t, (width * w).ravel() * t


def log_profile(t: Floats, weights: Floats, distance: Floats, powers: int) -> Floats:
    """Factors of the vertical distance (any shape), (powers - 1 + 1, *shape, n_node): entry p is that of
    ``kappa^(p-1) k^(2p)``; entry 0 vanishes. To be multiplied by ``exp(-rho^2 t^2)`` and summed over the nodes."""
    bell = erfc(np.multiply.outer(distance, t)) * (weights / (4 * np.pi * t))
    result = np.zeros((powers, *bell.shape))
    for p in range(1, powers):
        result[p] = bell / (factorial(p - 1) * (4 * t * t) ** (p - 1))
    return result
