"""Near kernels between two levels of a stack as tables in the lateral distance.

Between horizontal conductors at two heights every ray keeps its vertical distance, so that the sum over all of them
is one function of the lateral distance: a thin substrate with dozens of images costs what a thick one does.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from .ewald import Split, near_kernels
from .logarithmic import log_nodes, log_profile
from .rays import Ray, at_heights, log_powers, real_if_real

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
        kind = np.result_type(real_if_real(np.array([x for ray in rays for x in ray.numbers])))
        values = [np.zeros((split.powers, SIZE), kind) for _ in range(2)]
        for ray, d in zip(rays, distances, strict=True):
            kernel = near_kernels(np.hypot(rho, d), split)
            for target, w in zip(values, ray.powers(split.powers), strict=True):
                target += w[:, None] * kernel
        if any(ray.has_logs for ray in rays):
            self._add_logs(values, rays, distances, rho, split)
        values = [real_if_real(value) for value in values]
        self.values = values
        self.rises = [np.diff(v, axis=1, append=v[:, -1:]) for v in values]
        self.is_zero = [not v.any() for v in values]

    @staticmethod
    def _add_logs(values: list[NDArray], rays: Sequence[Ray], distances: Floats, rho: Floats, split: Split) -> None:
        """The logarithmic parts, all rays at once on common nodes t."""
        t, weights = log_nodes(split.splitting, float(distances.min()))
        factors = [np.zeros((split.powers, len(t)), values[0].dtype) for _ in range(2)]
        for ray, d in zip(rays, distances, strict=True):
            profile = log_profile(t, weights, np.array(d), split.powers)
            for factor, (_, kappa, log) in zip(factors, (ray.terms()[0], ray.terms()[2]), strict=True):
                if any(log):
                    factor += at_heights(log, 0.0, np.array(0.0)) * log_powers(kappa, split.powers)[:, None] * profile
        bells = np.exp(-np.multiply.outer(rho**2, t**2))
        for value, factor in zip(values, factors, strict=True):
            value += factor @ bells.T

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
