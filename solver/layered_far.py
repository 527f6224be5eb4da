"""The far part in a layered stack: the exact spectral kernels less what the near part's rays carry.

Conductors are horizontal, on a few heights; for every pair of heights

    D_A = K_A / S - sum over rays of a_n W(kappa_n, d_n),   D_Q likewise,
    W(kappa, d) = exp(-g d)/(2 g S) - far share,   g = j sqrt(kappa k^2 - k_t^2)

(design: the central equation for any layered stack; K_A and K_Q: `layered_kernel`). W is the spectrum of what Ewald's
near kernels hold, so the sum of both parts does not depend on the rays chosen nor on the splitting parameter.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from .cloud import Cloud
from .ewald import Split, far_kernel, longitudinal
from .far import FarPart, Layer
from .layered_kernel import horizontal_kernels
from .rays import Ray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


class LayeredFarPart(FarPart):
    """`far.FarPart` with the kernels of a stack; every layer of the cloud is one exact height."""

    def __init__(
        self, cloud: Cloud, lattice: Lattice, split: Split, stack: Stack, rays: list[Ray], layers: list[Layer]
    ):
        super().__init__(cloud, lattice, split, layers, ground=False)
        self.stack = stack
        self.rays: dict[tuple[float, float], list[Ray]] = {}
        for ray in rays:
            assert ray.heights is not None
            self.rays.setdefault(ray.heights, []).append(ray)
        self._kappa = max(1.0, *(abs(e * m) for e, m in zip(stack.permittivity, stack.permeability, strict=True)))
        self._heights = np.array([layer.heights[0] for layer in layers])

    def orders(self, k: float, kt: Floats) -> NDArray[np.int64]:
        """Floquet orders that matter at (k, kt), shape (n_mode, 2)."""
        reach = float(np.hypot(self.split.far_radius, k * np.sqrt(self._kappa)))
        return self.lattice.orders_within(reach, kt)

    def component_kernels(self, k: float, square: Floats) -> dict[tuple[int, int], list[Complexes]]:
        """D_A (thrice) and D_Q between all heights, by pair of layers, each (n_mode, 1, 1)."""
        root = np.sqrt(square)
        a, q = horizontal_kernels(self.stack, k, root, self._heights)
        area = self.lattice.area
        result = {}
        for i, z in enumerate(self._heights):
            for j, source in enumerate(self._heights):
                da, dq = a[:, i, j] / area, q[:, i, j] / area
                for ray in self.rays[(float(z), float(source))]:
                    d = abs(source + ray.lift - z)
                    da = da - ray.current * self._share(k, ray.kappa_current, square, d)
                    dq = dq - ray.charge * self._share(k, ray.kappa_charge, square, d)
                da, dq = da[:, None, None], dq[:, None, None]
                result[i, j] = [da, da, da, dq]
        return result

    def _share(self, k: float, kappa: complex, square: Floats, d: float) -> Complexes:
        """W(kappa, d): the spectrum of the near part's share of one ray, (n_mode,)."""
        root = np.sqrt(complex(kappa)) * k
        effective = root.real if root.imag == 0 else root
        g = 1j * longitudinal(effective, square)
        whole = np.exp(-g * d) / (2 * g * self.lattice.area)
        return whole - far_kernel(effective, square, np.asarray(d), self.split, self.lattice.area)
