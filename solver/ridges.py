"""The crest of strong reflection over directions: at every azimuth the scan angle where most comes back.

Where a Floquet wave meets a surface wave, reflection is total all along a curve. Its point nearest to broadside is what
a designer needs to know.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .active import ActiveModel

Floats = NDArray[np.float64]

SPACING = np.radians(5.0)  # of azimuths along a crest
WIDEST = np.radians(25.0)  # gap of azimuth that is still bridged
MARGIN = np.radians(3.0)  # searched beyond both ends
OFFSETS = np.concatenate([-(1e-4 * 2.4 ** np.arange(8))[::-1], [0.0], 1e-4 * 2.4 ** np.arange(8)])
EXACT = 1e-5
MOST_STEPS = 40
RIM = 0.9999
ALIKE = 0.05  # of power below the crest's highest point that still counts as its height


def trace_crest(active: ActiveModel, frequency: float, column: int, members: Floats, planes: Floats) -> Floats:
    """Crest through maxima of one driven port at one frequency (Hz).

    Parameters
    ----------
    members : (n, 2) direction cosines of maxima on it
    planes : azimuths (rad) of the case's cuts, visited where the crest passes them

    Returns
    -------
    (m, 3) of u, v, power; without azimuths along which the power rises to the horizon, so it may be empty
    """
    azimuth, size = np.arctan2(members[:, 1], members[:, 0]), np.hypot(members[:, 0], members[:, 1])
    turn = np.concatenate([azimuth, _azimuths(azimuth, planes)])
    guess = _interpolated(turn, azimuth, size)
    radius, power = _radial_maxima(active, frequency, column, turn, guess)
    crest = np.column_stack([radius * np.cos(turn), radius * np.sin(turn), power])
    return crest[radius < RIM - 10 * EXACT]


def nearest_to_broadside(crest: Floats) -> int:
    """Row of the crest's point of least scan angle among those about as high as its highest."""
    high = crest[:, 2] >= crest[:, 2].max() - ALIKE
    return int(np.flatnonzero(high)[np.argmin(np.hypot(crest[high, 0], crest[high, 1]))])


def _azimuths(azimuth: Floats, planes: Floats) -> Floats:
    """Azimuths to visit: between neighbouring members, a little beyond, and planes on the way; none twice."""
    order = np.sort(azimuth % (2 * np.pi))
    gaps = np.diff(np.append(order, order[0] + 2 * np.pi))
    found: list[float] = []
    for start, gap in zip(order, gaps, strict=True):
        if gap <= WIDEST:
            found += list(start + np.arange(SPACING, gap, SPACING))
        else:
            found += [start + MARGIN / 2, start + MARGIN, start + gap - MARGIN / 2, start + gap - MARGIN]
    for plane in np.concatenate([planes, planes + np.pi]) % (2 * np.pi):
        away = np.abs((order - plane + np.pi) % (2 * np.pi) - np.pi)
        if away.min() < max(MARGIN, WIDEST / 2):
            found.append(float(plane))
    return np.unique(np.round(np.array(found) % (2 * np.pi), 9))


def _interpolated(turn: Floats, azimuth: Floats, size: Floats) -> Floats:
    order = np.argsort(azimuth % (2 * np.pi))
    at, value = (azimuth % (2 * np.pi))[order], size[order]
    return np.interp(turn, np.concatenate([at - 2 * np.pi, at, at + 2 * np.pi]), np.tile(value, 3))


def _radial_maxima(
    active: ActiveModel, frequency: float, column: int, turn: Floats, guess: Floats
) -> tuple[Floats, Floats]:
    """Radius (n,) and power (n,) of the maximum along every azimuth near its guess."""
    outwards = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    rows = np.arange(len(turn))

    def power(radius: Floats) -> Floats:
        """(n, m) -> (n, m)."""
        radius = np.abs(radius)
        values = np.full(radius.shape, -1.0)
        ok = radius < RIM
        uv = (radius[..., None] * outwards[:, None])[ok]
        if len(uv):
            values[ok] = np.nan_to_num(active.power(frequency, uv)[:, column], nan=-1.0)
        return values

    radius = guess[:, None] + OFFSETS
    values = power(radius)
    pick = np.argmax(values, axis=1)
    best, high = np.abs(radius[rows, pick]), values[rows, pick]
    step = np.maximum(0.7 * np.abs(OFFSETS[pick]), 1e-4)
    for _ in range(MOST_STEPS):
        if not (step > EXACT).any():
            break
        around = best[:, None] + step[:, None] * np.array([-1.0, 1.0])
        values = power(around)
        pick = np.argmax(values, axis=1)
        up = values[rows, pick] > high + 1e-12
        best, high = np.where(up, np.abs(around[rows, pick]), best), np.where(up, values[rows, pick], high)
        step = np.where(up, np.minimum(1.5 * step, 0.02), 0.35 * step)
    return best, high
