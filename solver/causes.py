"""Why power comes back in a direction: the Floquet wave that carries the reaction, and what it meets there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .active import ActiveModel
from .roots import quality
from .surface_circles import circles, stack_waves
from .survey import Cause
from .sweep import wavenumber

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

NEAR_SURFACE = 0.08  # k_t/k by which conductors may shift a surface wave (2 to 3 deg for patches: common practice)
NEAR_LIGHT = 0.01  # k_t/k about a light circle in which a grating lobe's onset is the cause
LEAST_SHARE = 0.1  # of the reaction that the Floquet wave must carry
LEAST_ALONG = 0.02  # share of its current along (TM) or across (TE) the wave


@dataclass(frozen=True)
class Reactions:
    """Floquet waves at one direction: orders (n, 2) in the case's own basis, transverse wavenumbers over k (n,),
    shares (n,) of the reaction ``sum_pq |I(-kt)^T Z_pq I(kt)|``, and of their currents the share along the wave,
    (n,), the rest being across it."""

    orders: Ints
    index: Floats
    share: Floats
    along: Floats


def find_cause(active: ActiveModel, frequency: float, uv: Floats) -> Cause:
    """Cause of strong reflection at direction cosines (2,) and a frequency in Hz."""
    k = wavenumber(frequency)
    found = reactions(active, k, k * uv)
    best: tuple[float, Cause] | None = None
    for i in np.flatnonzero((found.share > LEAST_SHARE) & found.orders.any(axis=1)):
        order = int(found.orders[i, 0]), int(found.orders[i, 1])
        index, share = float(found.index[i]), float(found.share[i])
        for wave in stack_waves(active.model.view.stack, k):
            beta, tm = float(np.real(wave.beta)), wave.polarisation == "TM"
            carried = found.along[i] if tm else 1 - found.along[i]
            gap = abs(index - beta) / NEAR_SURFACE
            if gap < 1 and carried > LEAST_ALONG and (best is None or gap < best[0]):
                best = gap, Cause("surface wave", wave.name, order, index, beta, share, np.nan)
        gap = abs(index - 1) / NEAR_LIGHT
        if gap < 1 and (best is None or gap < best[0]):
            best = gap, Cause("grating lobe", "", order, index, 1.0, share, np.nan)
    if best:
        return best[1]
    return Cause("resonance", "", (0, 0), np.nan, np.nan, np.nan, quality(active.model, k, k * uv))


def nearest_meeting(active: ActiveModel, frequency: float, uv: Floats) -> tuple[str, str, tuple[int, int]]:
    """What lies nearest by geometry alone: kind, surface wave and Floquet order as in `Cause`, without any solution.

    Two directions on one crest give the same.
    """
    best: tuple[float, tuple[str, str, tuple[int, int]]] = (1.0, ("resonance", "", (0, 0)))
    for line in circles(active.model.view, frequency):
        away = abs(float(np.hypot(*(uv - line.centre))) - line.radius)
        gap = away / (NEAR_LIGHT if line.wave is None else NEAR_SURFACE)
        if gap < best[0]:
            kind = "grating lobe" if line.wave is None else "surface wave"
            best = gap, (kind, "" if line.wave is None else line.wave.name, line.order)
    return best[1]


def reactions(active: ActiveModel, k: float, kt: Floats) -> Reactions:
    """Of the Floquet waves kept exact in the reduced model, at wavenumber k and kt (2,), rad/m."""
    model = active.model
    (batch,) = model.batches(k, kt[None])
    (opposite,) = model.batches(k, -kt[None])
    current = batch.answer.coefficients[0] @ active.drive
    adjoint = opposite.answer.coefficients[0] @ active.drive
    exact, table = model.exact, model.exact.transforms
    polynomials = table.polynomials(batch.reduced)
    weight, along = [], []
    for one in batch.pick:
        pick = np.array([one])
        plus, minus = table.at(polynomials, pick), table.reversed_at(polynomials, pick)
        form = exact.forms(np.array([k]), batch.reduced, plus, minus, pick)[0, 0]
        weight.append(abs(adjoint @ form @ current))
        wave = batch.reduced[0] + table.orders[one] @ model.view.lattice.reciprocal
        along.append(_along(plus, table.components, wave, current))
    share = np.array(weight) / max(sum(weight), 1e-300)
    shifted = table.orders[batch.pick] - batch.orders[0]  # off the asked k_t, in the reduced basis
    waves = kt + shifted @ model.view.lattice.reciprocal
    orders = np.round((waves - kt) @ np.linalg.inv(model.cell.lattice.reciprocal)).astype(np.int64)
    return Reactions(orders, np.hypot(*waves.T) / k, share, np.array(along))


def _along(fields: list[Complexes], components: list[list[int]], wave: Floats, current: Complexes) -> float:
    """Share of the current's transform along the wave and upright, which TM waves carry; the rest is TE's."""
    x, y, z = 0.0j, 0.0j, 0.0
    for field, kept in zip(fields, components, strict=True):
        for place, component in enumerate(kept):
            value = field[0, 0, place] @ current  # by level
            if component == 0:
                x += value.sum()
            elif component == 1:
                y += value.sum()
            elif component == 2:
                z += float(np.sum(np.abs(value) ** 2))
    length = max(float(np.hypot(*wave)), 1e-300)
    tm = abs(x * wave[0] + y * wave[1]) ** 2 / length**2 + z
    te = abs(y * wave[0] - x * wave[1]) ** 2 / length**2
    return float(tm / max(tm + te, 1e-300))
