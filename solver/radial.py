"""Near kernels between two levels of a stack as tables in the lateral distance.

Between horizontal conductors at two heights every ray keeps its vertical distance, so that the sum over all of them
is one function of the lateral distance: a thin substrate with dozens of images costs what a thick one does.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from .ewald import Split, near_kernels
from .rays import Ray

Floats = NDArray[np.float64]

SIZE = 16384  # entries; linear between them: 1e-8 of the kernel (tested)


class RadialTable:
    """Sum over rays with a vertical distance, for currents and charges, at any lateral distance.

    The tables are even in ``ln(rho^2 + d^2)``, d the least vertical distance, where the kernel changes fastest.
    """

    def __init__(self, rays: Sequence[Ray], distances: Floats, split: Split):
        self.least = float(distances.min()) ** 2
        reach = split.near_radius**2
        self.start = np.log(self.least)
        self.step = (np.log(self.least + 1.0001 * reach) - self.start) / (SIZE - 1)
        self.reach = reach
        rho = np.sqrt(np.maximum(np.exp(self.start + self.step * np.arange(SIZE)) - self.least, 0.0))
        weights = [ray.powers(split.powers) for ray in rays]
        kinds = [np.result_type(*(w[i] for w in weights)) for i in (0, 1)]
        values = [np.zeros((split.powers, SIZE), kind) for kind in kinds]
        for weight, d in zip(weights, distances, strict=True):
            kernel = near_kernels(np.hypot(rho, d), split)
            for target, w in zip(values, weight, strict=True):
                target += w[:, None] * kernel
        self.values = values
        self.rises = [np.diff(v, axis=1, append=v[:, -1:]) for v in values]
        self.is_zero = [not v.any() for v in values]

    def add(self, square: Floats, current: NDArray, charge: NDArray) -> None:
        """Add the sums at lateral distances^2 (n_source, n_observer) to (n_source, powers, n_observer) arrays."""
        place = np.minimum(square, self.reach)
        place += self.least
        np.log(place, out=place)
        place -= self.start
        place *= 1 / self.step
        index = place.astype(np.int32)
        np.clip(index, 0, SIZE - 2, out=index)
        place -= index
        for kind, target in enumerate((current, charge)):
            if self.is_zero[kind]:
                continue
            for p in range(target.shape[1]):
                rise = np.take(self.rises[kind][p], index)
                rise *= place
                rise += np.take(self.values[kind][p], index)
                target[:, p] += rise
