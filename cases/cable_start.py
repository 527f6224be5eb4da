"""First guess of the delay of each port's cable, good to a fraction of a carrier period, from phase slope and phase."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .frequency_grid import mean_delay

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
ROUNDS = 4


def start_delays(
    frequency: Floats, measured: Complexes, predicted: Complexes, weight: Floats, hint: Floats | None = None
) -> Floats:
    """Delays t (n,) s for which predicted_ij exp(-j w (t_i + t_j)) best fits measured (n_freq, n, n).

    The slope of the phase over frequency gives t_i + t_j within half the inverse frequency spacing; carrier periods,
    which hardly change the slope, are then told apart by the phase itself: port by port, and for shifts of all ports
    together or of one port against all others, which single moves cannot reach. With one frequency only the phase
    counts. `hint` (n, n) s is a delay known from elsewhere, where the frequency spacing alone leaves a choice.
    """
    product = np.where(weight > 0, np.nan_to_num(measured) * np.conj(predicted) * weight, 0.0)
    n = product.shape[1]
    total = mean_delay(frequency, product.reshape(len(frequency), -1)).reshape(n, n)
    if hint is not None and len(frequency) > 1:
        alias = 1 / float(np.median(np.diff(frequency)))
        total = total + alias * np.round(np.where(np.isfinite(hint), hint - total, 0.0) / alias)
    strength = np.abs(np.sum(product[1:] * np.conj(product[:-1]), axis=0)) ** 0.5 if len(frequency) > 1 else 0 * total
    if len(frequency) < 2 or not np.any(strength):
        delay = np.zeros(n)
    else:
        both = strength + strength.T
        matrix = np.diag(both.sum(axis=1)) + both
        right = (strength * total).sum(axis=1) + (strength * total).sum(axis=0)
        delay = np.linalg.lstsq(matrix, right, rcond=1e-9)[0]
    carrier = 2 / (frequency[0] + frequency[-1])
    width = frequency[-1] - frequency[0]
    reach = min(1.5 / width, 40 * carrier) if width > 0 else carrier
    fine = np.arange(-reach, reach, carrier / 24)
    measuring = np.any(weight > 0, axis=(0, 2)) | np.any(weight > 0, axis=(0, 1))
    for _ in range(ROUNDS):
        before = delay.copy()
        for i in np.flatnonzero(measuring):
            delay[i] += fine[np.argmax(_score_of_port(frequency, product, delay, int(i), fine))]
        delay = _shift_together(frequency, product, delay, carrier, reach)
        if np.max(np.abs(delay - before)) < carrier / 48:
            break
    return delay


def _score_of_port(frequency: Floats, product: Complexes, delay: Floats, i: int, moves: Floats) -> Floats:
    """Agreement for each move of port i alone, (n_moves,)."""
    omega = 2 * np.pi * frequency
    turn = np.exp(1j * omega[:, None] * delay)
    single = (product[:, i, :] + product[:, :, i]) * turn * turn[:, i : i + 1]
    own = single[:, i] / 2
    rest = single.sum(axis=1) - single[:, i]
    phase = np.exp(1j * omega[:, None] * moves)
    return np.real(rest @ phase + own @ phase**2)


def _shift_together(frequency: Floats, product: Complexes, delay: Floats, carrier: float, reach: float) -> Floats:
    """Move all ports together, then the best-measured port against all others, where that agrees better."""
    n = len(delay)
    omega = 2 * np.pi * frequency
    moves = np.arange(-reach, reach, carrier / 24)
    busiest = int(np.argmax(np.sum(np.abs(product), axis=(0, 2)) + np.sum(np.abs(product), axis=(0, 1))))
    against = -np.ones(n)
    against[busiest] = 1.0
    for direction in (np.ones(n), against):
        turn = np.exp(1j * omega[:, None] * delay)
        turned = product * turn[:, :, None] * turn[:, None, :]
        kinds = direction[:, None] + direction[None, :]
        score = np.zeros(len(moves))
        for kind in np.unique(kinds):
            part = np.sum(turned[:, kinds == kind], axis=1)
            score += np.real(part @ np.exp(1j * omega[:, None] * kind * moves))
        best = int(np.argmax(score))
        here = int(np.argmin(np.abs(moves)))
        if score[best] > score[here] + 1e-9 * abs(score[here]):
            delay = delay + direction * moves[best]
    return delay
