"""The far part in a layered stack: the exact spectral kernels less what the near part's rays carry.

For every pair of levels

    D_A = (K_A - sum over rays of a_n W(kappa_n, d_n)) / S,   D_Q and D_v (vertical currents) likewise,
    W(kappa, d) = near share of exp(-g d)/(2 g),   g = j sqrt(kappa k^2 - k_t^2)        (`shares`)

(design: the central equation for any layered stack; the kernels: `layered_kernel`; K_c: `columns`). W is the spectrum
of what Ewald's near kernels hold, so the sum of both parts does not depend on the rays chosen nor on the splitting
parameter.
"""

from __future__ import annotations

from collections import defaultdict

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from .cloud import Cloud
from .ewald import Split
from .far import Coupling, FarPart, Layer
from .layered_kernel import horizontal_kernels, symmetric_kernels
from .rays import CrossRay, Ray
from .shares import Nodes

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


class LayeredFarPart(FarPart):
    """`far.FarPart` with the kernels of a stack."""

    def __init__(
        self,
        cloud: Cloud,
        lattice: Lattice,
        split: Split,
        stack: Stack,
        rays: list[Ray],
        cross: list[CrossRay],
        layers: list[Layer],
    ):
        super().__init__(cloud, lattice, split, layers, ground=False)
        self.stack, self.nodes = stack, Nodes(split.splitting)
        self._kept: tuple[float, dict] | None = None
        self.rays: dict[tuple[int, int], list[Ray]] = defaultdict(list)
        self.cross: dict[tuple[int, int], list[CrossRay]] = defaultdict(list)
        for ray in rays:
            assert ray.pair is not None
            self.rays[ray.pair].append(ray)
        for ray in cross:
            self.cross[ray.pair].append(ray)
        self._kappa = max(1.0, *(abs(e * m) for e, m in zip(stack.permittivity, stack.permeability, strict=True)))
        self._starts = np.cumsum([0] + [len(layer.heights) for layer in layers])
        self._heights = np.concatenate([layer.heights for layer in layers])

    def orders(self, k: float, kt: Floats) -> NDArray[np.int64]:
        """Floquet orders that matter at (k, kt), shape (n_mode, 2)."""
        reach = float(np.hypot(self.split.far_radius, k * np.sqrt(self._kappa)))
        return self.lattice.orders_within(reach, kt)

    def component_kernels(self, k: float, square: Floats) -> dict[tuple[int, int], list[Coupling]]:
        """D between the components of every pair of layers, those of K_c where there are vertical currents."""
        root, area = np.sqrt(square), self.lattice.area
        upright = any(len(layer.heights) > 1 for layer in self.layers)
        if upright:
            exact = symmetric_kernels(self.stack, k, root, self._heights)
            a, v, q, c = exact.a, exact.v, exact.q, exact.c
        else:
            a, q = horizontal_kernels(self.stack, k, root, self._heights)
            v, c = a, None
        waves, factors = self.nodes.waves(square), self._factors(k)
        result = {}
        for (i, j), factor in factors.items():
            pick = np.s_[:, self._starts[i] : self._starts[i + 1], self._starts[j] : self._starts[j + 1]]
            flat = len(self.layers[i].heights) == len(self.layers[j].heights) == 1
            rest = [(kernel[pick] - _product(waves, f)) / area for kernel, f in zip((a, v, q), factor, strict=True)]
            result[i, j] = [Coupling(m, m, rest[n], m == 3) for m, n in enumerate((0, 0, 0 if flat else 1, 2))]
            if c is not None and len(self.layers[j].heights) > 1:
                rest = (c[pick] - _product(waves, self._crossed(k)[i, j])) / area
                result[i, j].append(Coupling(3, 2, rest))
            if c is not None and len(self.layers[i].heights) > 1:
                share = _product(waves, self._crossed(k)[j, i])
                result[i, j].append(Coupling(2, 3, (c.transpose(0, 2, 1)[pick] - share.transpose(0, 2, 1)) / area))
        return result

    def _at_frequency(self, k: float) -> dict:
        """Factors of the rays at k, kept for the next scan point."""
        if self._kept is None or self._kept[0] != k:
            pairs = [(i, j) for i in range(len(self.layers)) for j in range(len(self.layers))]
            heights = [layer.heights for layer in self.layers]
            factors = {(i, j): self.nodes.currents(k, heights[i], heights[j], self.rays[i, j]) for i, j in pairs}
            crossed = {
                (i, j): self.nodes.crossed(k, heights[i], heights[j], self.cross[i, j])
                for i, j in pairs
                if len(heights[j]) > 1
            }
            self._kept = (k, {"currents": factors, "crossed": crossed})
        return self._kept[1]

    def _factors(self, k: float) -> dict[tuple[int, int], tuple[NDArray, NDArray, NDArray]]:
        return self._at_frequency(k)["currents"]

    def _crossed(self, k: float) -> dict[tuple[int, int], NDArray]:
        return self._at_frequency(k)["crossed"]


def _product(waves: Floats, factor: NDArray) -> NDArray:
    """(n_mode, n_node) times (n_node, n_z, n_source)."""
    return (waves @ factor.reshape(factor.shape[0], -1)).reshape(-1, *factor.shape[1:])
