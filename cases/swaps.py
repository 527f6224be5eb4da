"""Cables connected to the wrong ports: which exchange of two measured ports would make the data fit the prediction."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .bench_fit import Fit, cheapest, residuals
from .prediction import Prediction
from .uncertainty import Uncertainty

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
MOST_SWAPS = 3
CANDIDATES = 4
CLEAR = 2.0
"""By how much the mean squared residual of the two ports' coefficients must fall for an exchange to be reported."""


@dataclass(frozen=True)
class Swap:
    """Measured data of ports `one` and `two` fit better exchanged: the mean squared residual of their coefficients
    falls from `before` to `after` (1 is what the stated uncertainty lets expect)."""

    one: int
    two: int
    before: float
    after: float


def exchanged(measured: Complexes, swaps: tuple[Swap, ...]) -> Complexes:
    """Measured (n_freq, n, n) with the ports of each swap exchanged."""
    for swap in swaps:
        measured = _exchange(measured, swap.one, swap.two)
    return measured


def find_swaps(
    measured: Complexes,
    prediction: Prediction,
    uncertainty: Uncertainty,
    fit: Callable[[Complexes, tuple[Swap, ...]], tuple[Fit, ...]],
) -> tuple[tuple[Swap, ...], tuple[str, ...]]:
    """Look for up to three exchanged pairs of ports, one after the other.

    Candidates come from the magnitudes, which cable lengths leave alone, and from the complex values. Each is judged by
    `fit`, which explains measured data (and is told which exchanges were made to them) by nothing, cables, parameters,
    or both; an exchange must beat the cheapest explanation without one by a margin that rises with the number of pairs
    looked at, and halve the misfit of the two ports against the same kind of explanation without it.

    Returns
    -------
    the swaps, and notes on exchanges the data could not show
    """
    n = measured.shape[1]
    found: list[Swap] = []
    pairs = n * (n - 1) / 2
    current = fit(measured, ())
    while len(found) < MOST_SWAPS:
        trials = []
        cheap = current[cheapest(current)]
        for i, j in _candidates(measured, prediction, uncertainty):
            other = _exchange(measured, i, j)
            again = fit(other, (*found, Swap(i, j, 0.0, 0.0)))
            kind = cheapest(again)
            new = again[kind]
            before = _misfit(measured, current[kind], prediction, uncertainty, i, j)
            after = _misfit(other, new, prediction, uncertainty, i, j)
            cost = np.log(max(new.count, 2))
            won = (cheap.chi_squared - new.chi_squared) / max(1.0, new.reduced) + cost * (cheap.freedom - new.freedom)
            if won > 2 * np.log(pairs) + 20 and before > CLEAR * after:
                trials.append((new.chi_squared + cost * new.freedom, Swap(i, j, before, after), other, again))
        if not trials:
            break
        _, swap, measured, current = min(trials, key=lambda t: t[0])
        found.append(swap)
    return tuple(found), _blind_spots(measured, prediction, uncertainty)


def _exchange(measured: Complexes, i: int, j: int) -> Complexes:
    order = np.arange(measured.shape[1])
    order[[i, j]] = j, i
    return measured[:, order[:, None], order[None, :]]


def _misfit(measured: Complexes, fit: Fit, prediction: Prediction, uncertainty: Uncertainty, i: int, j: int) -> float:
    """Mean squared whitened residual of all coefficients of ports i and j."""
    z = np.sum(residuals(measured, fit.model, uncertainty, prediction.error) ** 2, axis=-1)
    known = np.isfinite(measured)
    part = np.zeros(measured.shape[1:], dtype=bool)
    part[[i, j], :] = part[:, [i, j]] = True
    count = np.count_nonzero(known[:, part])
    return float(np.sum(z[:, part]) / max(2 * count, 1))


def _candidates(measured: Complexes, prediction: Prediction, uncertainty: Uncertainty) -> list[tuple[int, int]]:
    """The most promising pairs by log magnitude (losses of the ports taken out) and by complex values."""
    known = np.isfinite(measured)
    size = np.abs(np.where(known, measured, 1))
    along, across = uncertainty.deviations(size, prediction.error)
    use = known & (size > 3 * uncertainty.floor)
    weight = np.where(use, 1 / ((along / size) ** 2 + 1e-3), 0.0)
    log_m, log_p = np.log(size), np.log(np.maximum(np.abs(prediction.scattering), 1e-12))
    loss = _port_losses(np.where(use, log_m - log_p, 0.0), weight)
    even = log_m - loss[:, None] - loss[None, :]
    by_size = _gains(even.astype(complex), log_p.astype(complex), weight)
    strength = np.where(known, 1 / (along**2 + across**2), 0.0)
    by_phasor = _gains(np.where(known, measured, 0), prediction.scattering, strength)
    pairs: list[tuple[int, int]] = []
    for gain in (by_size, by_phasor):
        upper = np.triu(gain, 1)
        for flat in np.argsort(upper, axis=None)[::-1][:CANDIDATES]:
            i, j = np.unravel_index(flat, upper.shape)
            if upper[i, j] > 0 and (int(i), int(j)) not in pairs:
                pairs.append((int(i), int(j)))
    return pairs


def _port_losses(difference: Floats, weight: Floats) -> Floats:
    """(n,) least-squares x_i + x_j = mean difference over frequency."""
    w = weight.sum(axis=0)
    mean = np.sum(weight * difference, axis=0)
    matrix = np.diag(w.sum(axis=0) + w.sum(axis=1)) + w + w.T
    return np.linalg.lstsq(matrix, mean.sum(axis=0) + mean.sum(axis=1), rcond=1e-8)[0]


def _gains(measured: Complexes, predicted: Complexes, weight: Floats) -> Floats:
    """(n, n) fall of the weighted squares when the measured data of i and j are exchanged, other ports in place.

    With C_ij the misfit of measured row and column i against predicted row and column j, leaving out the entries among
    i and j themselves: gain = C_ii + C_jj - C_ij - C_ji, plus what the two reflections tell.
    """
    n = measured.shape[1]
    cost = np.zeros((n, n))
    for i in range(n):
        for m, p, w in ((measured[:, i, :], predicted, weight[:, i, :]),
                        (measured[:, :, i], predicted.transpose(0, 2, 1), weight[:, :, i])):  # fmt: skip
            each = np.sum(w[:, None, :] * np.abs(m[:, None, :] - p) ** 2, axis=0)  # (j, k)
            own = each.diagonal().copy()
            cost[i] += each.sum(axis=1) - each[:, i] - own
            cost[i, i] += own[i]
    gain = np.zeros((n, n))
    mutual = _mutual(measured, predicted, weight)
    for i in range(n):
        for j in range(i + 1, n):
            gain[i, j] = cost[i, i] - mutual[i, j] + cost[j, j] - mutual[j, i] - cost[i, j] - cost[j, i]
    own_m, own_p = np.diagonal(measured, axis1=1, axis2=2), np.diagonal(predicted, axis1=1, axis2=2)
    own_w = np.diagonal(weight, axis1=1, axis2=2)
    own = np.sum(own_w[:, :, None] * np.abs(own_m[:, :, None] - own_p[:, None, :]) ** 2, axis=0)
    return gain + own.diagonal()[:, None] + own.diagonal()[None, :] - own - own.T


def _mutual(measured: Complexes, predicted: Complexes, weight: Floats) -> Floats:
    """(n, n) misfit of the pair's own coupling, which an exchange hardly changes, as `_gains` counts it in row i."""
    each = np.sum(weight * np.abs(measured - predicted) ** 2, axis=0)
    return each + each.T


def _blind_spots(measured: Complexes, prediction: Prediction, uncertainty: Uncertainty) -> tuple[str, ...]:
    """Exchanges that would change nothing measured beyond its uncertainty: symmetric positions seen from one row."""
    known = np.isfinite(measured)
    strength, predicted = _strength(known, prediction, uncertainty), prediction.scattering
    hidden, n = 0, measured.shape[1]
    measuring = np.flatnonzero(np.any(known, axis=(0, 1)) | np.any(known, axis=(0, 2)))
    for a, i in enumerate(measuring):
        for j in measuring[a + 1 :]:
            order = np.arange(n)
            order[[i, j]] = j, i
            seen = 0.0
            for x, y in ((i, j), (j, i)):
                row, column = predicted[:, y, order] - predicted[:, x], predicted[:, order, y] - predicted[:, :, x]
                seen += np.sum(strength[:, x] * np.abs(row) ** 2) + np.sum(strength[:, :, x] * np.abs(column) ** 2)
            hidden += bool(seen < 20)
    if not hidden:
        return ()
    return (
        f"{hidden} pairs of measured ports could be exchanged without showing: what was measured at them is the same "
        "within its uncertainty.",
    )


def _strength(known: NDArray[np.bool_], prediction: Prediction, uncertainty: Uncertainty) -> Floats:
    along, across = uncertainty.deviations(np.abs(prediction.scattering), prediction.error)
    return np.where(known, 2 / (along**2 + across**2), 0.0)
