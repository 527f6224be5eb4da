"""Circles over direction cosines on which a Floquet wave grazes, or runs along a surface wave of the bare stack."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from ..geometry.stack import Stack
from .guided_waves import GuidedWave, guided_waves
from .operator_view import CellView
from .sweep import wavenumber

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Circle:
    """``|(u, v) - centre| = radius``: the Floquet wave `order` has the transverse wavenumber ``radius k`` there.

    Attributes
    ----------
    order : (p, q) in the case's own reciprocal basis
    centre : (2,) direction cosines; `radius` : 1 where the wave grazes, beta/k of the surface wave otherwise
    wave : GuidedWave, None for grazing
    """

    order: tuple[int, int]
    centre: Floats
    radius: float
    wave: GuidedWave | None


def circles(view: CellView, frequency: float, reach: float = 1.0) -> list[Circle]:
    """All that come within `reach` of broadside but the visible rim itself (order (0, 0), grazing)."""
    k = wavenumber(frequency)
    lattice = view.cell.lattice
    found = []
    for radius, wave in [(1.0, None), *((float(np.real(w.beta)), w) for w in stack_waves(view.stack, k))]:
        for order in lattice.orders_within((radius + reach) * k):
            if order.any():
                centre = -(order @ lattice.reciprocal) / k
                found.append(Circle((int(order[0]), int(order[1])), centre, radius, wave))
    return found


@lru_cache(maxsize=64)
def stack_waves(stack: Stack | None, k: float) -> tuple[GuidedWave, ...]:
    """Surface waves of the bare stack; none in air."""
    return () if stack is None else tuple(guided_waves(stack, k))
