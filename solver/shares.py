"""What the near part's rays amount to in the plane of k_t, all rays of a pair of layers at once.

A ray of Ewald's kernel holds ``1/(2 sqrt(pi)) int (dt / t^2) exp(-d^2 t^2 - (k_t^2 - kappa k^2) / 4 t^2)`` over t from
the splitting parameter E upwards, one of the kernel K_c (`columns`) ``1/4 int (dt / t^3) erfc(t d) exp(...)``. On fixed
nodes t both are a factor of k_t alone times a factor of heights and kappa alone, which can be summed over rays: one
matrix product serves every Floquet wave, pair of levels and ray.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.special import erfc

from . import quadrature
from .rays import CrossRay, Ray, at_heights, real_if_real

Floats = NDArray[np.float64]

PANELS = 16  # in E/t, each half as wide as the one before
PANEL_NODES = 8


class Nodes:
    """Nodes t and weights of ``int dt / t^2`` from E to infinity.

    Gauss nodes in E/t on panels that halve towards 0; exact to 1e-10 for distances from 0 upwards (tested).
    """

    def __init__(self, splitting: float, panels: int = PANELS):
        x, w = quadrature.gauss(PANEL_NODES)
        edges = np.concatenate([0.5 ** np.arange(panels), [0.0]])
        width = edges[:-1] - edges[1:]
        inverse = (edges[1:, None] + width[:, None] * x).ravel() / splitting
        self.t = 1 / inverse
        self.weights = (width[:, None] * w).ravel() / splitting

    def waves(self, square: Floats) -> Floats:
        """``exp(-k_t^2 / 4 t^2)``, (n_mode, n_node)."""
        return np.exp(np.multiply.outer(square, -1 / (4 * self.t**2)))

    def _medium(self, k: float, kappa: complex) -> NDArray:
        return np.exp(real_if_real(np.asarray(kappa)) * k * k / (4 * self.t**2))

    def currents(self, k: float, z: Floats, source: Floats, rays: Sequence[Ray]) -> tuple[NDArray, NDArray, NDArray]:
        """Factors of horizontal currents, vertical currents and charges, each (n_node, n_z, n_source).

        Logarithmic amplitudes are counted.
        """
        kind = np.result_type(real_if_real(np.array([x for ray in rays for x in ray.numbers] or [0.0])))
        results = [np.zeros((len(self.t), len(z), len(source)), kind) for _ in range(3)]
        scale, log_scale = self.weights / (2 * np.sqrt(np.pi)), k * k * self.weights / (4 * self.t)
        for ray in rays:
            d = np.abs(z[:, None] - ray.height(source))
            bell = np.exp(-np.multiply.outer(self.t**2, d**2))
            tail = erfc(np.multiply.outer(self.t, d)) if ray.has_logs else np.zeros(0)
            for target, (amplitude, kappa, log) in zip(results, ray.terms(), strict=True):
                medium = self._medium(k, kappa)
                if amplitude:
                    target += (real_if_real(np.asarray(amplitude)) * scale * medium)[:, None, None] * bell
                if any(log):
                    target += at_heights(log, z[:, None], source) * ((log_scale * medium)[:, None, None] * tail)
        return results[0], results[1], results[2]

    def crossed(self, k: float, z: Floats, source: Floats, rays: Sequence[CrossRay]) -> NDArray:
        """Factors of K_c from vertical currents at `source` to charges at z, (n_node, n_z, n_source), m."""
        total = np.zeros((len(self.t), len(z), len(source)), dtype=complex)
        for ray in rays:
            d = np.abs(z[:, None] - ray.height(source))
            part = ray.amplitude * self._medium(k, ray.kappa) * self.weights / (4 * self.t)
            total += part[:, None, None] * erfc(np.multiply.outer(self.t, d))
        return real_if_real(total)
