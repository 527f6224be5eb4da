"""Measured coefficients at the frequencies of the prediction: taken as they are or interpolated, never extrapolated."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Booleans = NDArray[np.bool_]
SAME = 1e-6
"""Relative distance at which two frequencies count as one."""
WIDEST = 3.0
"""A gap this many times the median spacing was left out by whoever measured; nothing is interpolated across it."""


def onto_grid(measured: Floats, values: Complexes, wanted: Floats) -> tuple[Complexes, Booleans, Booleans]:
    """Values (n_measured, ...) at `wanted` (n_wanted,) frequencies, Hz.

    Each coefficient's own mean delay is taken out first and put back after, so that long cables do not turn the phase
    by much from point to point; the remainder follows a cubic spline (a straight line with fewer than four points).

    Returns
    -------
    values (n_wanted, ...), nan where not covered; covered (n_wanted,); interpolated (n_wanted,), False where the
    frequency was measured itself
    """
    near = np.argmin(np.abs(measured[None, :] - wanted[:, None]), axis=1)
    exact = np.abs(measured[near] - wanted) <= SAME * wanted
    found = np.full((len(wanted), *values.shape[1:]), np.nan, dtype=complex)
    found[exact] = values[near[exact]]
    inside = ~exact & _between(measured, wanted)
    if np.any(inside):
        flat = values.reshape(len(measured), -1)
        delay = mean_delay(measured, flat)
        still = flat * np.exp(2j * np.pi * measured[:, None] * delay)
        new = _follow(measured, still, wanted[inside]) * np.exp(-2j * np.pi * wanted[inside][:, None] * delay)
        found[inside] = new.reshape(-1, *values.shape[1:])
    return found, exact | inside, inside


def mean_delay(frequency: Floats, values: Complexes) -> Floats:
    """Delay (s) of each column of `values` (n_freq, m): mean phase step between neighbours at the commonest spacing."""
    if len(frequency) < 2:
        return np.zeros(values.shape[1])
    step = np.diff(frequency)
    common = np.abs(step - np.median(step)) < 1e-3 * np.median(step)
    turn = np.sum((values[1:] * np.conj(values[:-1]))[common], axis=0)
    return -np.angle(turn) / (2 * np.pi * float(np.median(step)))


def _between(measured: Floats, wanted: Floats) -> Booleans:
    if len(measured) < 2:
        return np.zeros(len(wanted), dtype=bool)
    step = np.diff(measured)
    left = np.searchsorted(measured, wanted, side="right") - 1
    inside = (left >= 0) & (left < len(step))
    return inside & (step[np.clip(left, 0, len(step) - 1)] <= WIDEST * np.median(step))


def _follow(x: Floats, y: Complexes, new: Floats) -> Complexes:
    if len(x) < 4:
        return np.stack([np.interp(new, x, c.real) + 1j * np.interp(new, x, c.imag) for c in y.T], axis=1)
    from scipy.interpolate import CubicSpline

    unit = (x - x[0]) / (x[-1] - x[0])
    return np.asarray(CubicSpline(unit, y, axis=0)((new - x[0]) / (x[-1] - x[0])), dtype=complex)
