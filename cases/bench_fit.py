"""What may stand between a prediction and its measurement, fitted: cable length and loss per port, model parameters.

Model of the measured coefficient at frequency f, with w = 2 pi f and f_c the middle of the band:

    M_ij = (S_ij + sum_k p_k dS_ij/dp_k) g_i g_j,    g_i = 10^(-L_i sqrt(f / f_c) / 20) exp(-j w t_i)

Skin-effect loss of a cable grows with sqrt(f). Weighted least squares by Gauss-Newton steps; along and across a phasor
the loss and the delay decouple, and each coefficient knows two ports only, so that the normal matrix is assembled from
(n, n) weights without a Jacobian in memory. Nothing here changes the data: the fit is reported.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .cable_start import start_delays
from .prediction import Prediction
from .uncertainty import DECIBEL, Uncertainty, whiten

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Booleans = NDArray[np.bool_]
MOST_STEPS = 30
UNDETERMINED = 1e-10
"""Share of the largest curvature below which a combination of unknowns is not determined by the data."""


@dataclass(frozen=True)
class Fit:
    """A fitted explanation.

    Parameters
    ----------
    model : (n_freq, n, n) what the prediction becomes with it
    chi_squared : sum of squared whitened residuals over `count` real numbers, `freedom` unknowns fitted
    delay, loss : (n,) s and dB (at the middle of the band, one way) at each port; zero without cables. Standard errors
        beside them; inf where the data do not determine the value on its own
    moves : (n_parameters,) how far each parameter moved, in its unit, within +- tolerance; with standard errors
    free_moves : the same without bounds
    """

    model: Complexes
    chi_squared: float
    count: int
    freedom: int
    delay: Floats
    delay_error: Floats
    loss: Floats
    loss_error: Floats
    moves: Floats = field(default_factory=lambda: np.zeros(0))
    moves_error: Floats = field(default_factory=lambda: np.zeros(0))
    free_moves: Floats = field(default_factory=lambda: np.zeros(0))
    cables: bool = False

    @property
    def reduced(self) -> float:
        """Chi-squared per degree of freedom: 1 when the stated uncertainty explains the residuals."""
        return self.chi_squared / max(self.count - self.freedom, 1)

    def gain(self, prediction: Prediction) -> Complexes:
        """(n_freq, n) what the cables do to a wave at each port."""
        return port_gain(prediction.frequency, self.delay, self.loss)


def cheapest(fits: tuple[Fit, ...]) -> int:
    """Which fit has the least Bayesian information criterion, the misfit scaled to that of the last, richest model."""
    over = max(1.0, fits[-1].reduced)
    return int(np.argmin([f.chi_squared / over + np.log(max(f.count, 2)) * f.freedom for f in fits]))


def middle(frequency: Floats) -> float:
    """Middle of the band, Hz: where losses are stated."""
    return float((frequency[0] + frequency[-1]) / 2)


def port_gain(frequency: Floats, delay: Floats, loss: Floats) -> Complexes:
    """(n_freq, n) amplitude factor of each cable, delay (n,) s and loss (n,) dB at the middle of the band."""
    root = np.sqrt(frequency / middle(frequency))
    return np.exp(-root[:, None] * loss / DECIBEL - 2j * np.pi * frequency[:, None] * delay)


def residuals(measured: Complexes, model: Complexes, uncertainty: Uncertainty, error: float) -> Floats:
    """Whitened residuals (n_freq, n, n, 2); zero where nothing was measured."""
    known = np.isfinite(measured)
    difference = np.where(known, measured, model) - model
    return whiten(difference, model, uncertainty.deviations(np.abs(model), error))


def fit_bench(
    measured: Complexes,
    prediction: Prediction,
    uncertainty: Uncertainty,
    *,
    cables: bool,
    parameters: Sequence[int] = (),
    start: Floats | None = None,
    hint: Floats | None = None,
) -> Fit:
    """Fit cables, parameters, both or nothing to measured coefficients (n_freq, n, n), nan where not measured.

    Parameters
    ----------
    parameters : indices of `prediction.sensitivities` to fit, each held within its tolerance
    start : (n,) s, delays to begin with; searched for when not given
    hint : (n, n) s, delay of each coefficient beyond the predicted one, if known from a finer frequency grid
    """
    n, frequency = len(prediction.ports), prediction.frequency
    delay, loss = np.zeros(n), np.zeros(n)
    slopes = [prediction.sensitivities[k].derivative for k in parameters]
    bound = np.array([prediction.sensitivities[k].tolerance for k in parameters])
    moves = np.zeros(len(slopes))
    if cables:
        weight = _weight(measured, prediction.scattering, uncertainty, prediction.error)
        delay = (
            start_delays(frequency, measured, prediction.scattering, weight, hint) if start is None else start.copy()
        )
    best, system = None, None
    for _ in range(MOST_STEPS):
        model = _model(prediction, slopes, moves, delay, loss)
        z = residuals(measured, model, uncertainty, prediction.error)
        best = float(np.sum(z**2))
        if not cables and not slopes:
            break
        system = _System(measured, model, prediction, uncertainty, slopes, (delay, loss), cables)
        step = system.step(z, bound, moves)
        if cables:
            delay, loss = delay + step[:n], loss + step[n : 2 * n]
        moves = moves + step[2 * n * cables :]
        if system.size(step) < 1e-3:
            break
    model = _model(prediction, slopes, moves, delay, loss)
    z = residuals(measured, model, uncertainty, prediction.error)
    best = float(np.sum(z**2))
    count = 2 * int(np.count_nonzero(np.isfinite(measured)))
    errors, free, rank = np.zeros(2 * n * cables + len(slopes)), moves, 0
    if system is not None:
        errors, free, rank = system.errors(), moves + system.free_step(z), system.rank
    split = 2 * n * cables
    return Fit(
        model,
        best,
        count,
        rank,
        delay,
        errors[:n] if cables else np.zeros(n),
        loss,
        errors[n:split] if cables else np.zeros(n),
        moves,
        errors[split:],
        free,
        cables,
    )


def _model(prediction: Prediction, slopes: list[Complexes], moves: Floats, delay: Floats, loss: Floats) -> Complexes:
    moved = prediction.scattering + sum(m * d for m, d in zip(moves, slopes, strict=True))
    g = port_gain(prediction.frequency, delay, loss)
    return moved * g[:, :, None] * g[:, None, :]


def _weight(measured: Complexes, predicted: Complexes, uncertainty: Uncertainty, error: float) -> Floats:
    """1 / variance of each coefficient's phasor error, zero where not measured."""
    along, across = uncertainty.deviations(np.abs(predicted), error)
    return np.where(np.isfinite(measured), 1 / (along**2 + across**2), 0.0)


class _System:
    """The normal equations of one Gauss-Newton step: unknowns delays, losses (with cables), parameters."""

    def __init__(
        self,
        measured: Complexes,
        model: Complexes,
        prediction: Prediction,
        uncertainty: Uncertainty,
        slopes: list[Complexes],
        at: tuple[Floats, Floats],
        cables: bool,
    ):
        self.n, self.cables = len(prediction.ports), cables
        known, size = np.isfinite(measured), np.abs(model)
        sigma = uncertainty.deviations(size, prediction.error)
        frequency = prediction.frequency
        omega = 2 * np.pi * frequency[:, None, None]
        root = np.sqrt(frequency / middle(frequency))[:, None, None]
        self.turn = np.where(known, -omega * size / sigma[1], 0.0)
        self.fade = np.where(known, -root / DECIBEL * size / sigma[0], 0.0)
        g = port_gain(frequency, *at)
        both = g[:, :, None] * g[:, None, :]
        self.slopes = [np.where(known[..., None], whiten(d * both, model, sigma), 0.0) for d in slopes]
        matrix = self._matrix()
        diagonal = np.diag(matrix)
        self.scale = np.where(diagonal > 0, 1 / np.sqrt(np.where(diagonal > 0, diagonal, 1)), 0.0)
        self.matrix = matrix * self.scale[:, None] * self.scale
        self.values, self.vectors = np.linalg.eigh(self.matrix)
        self.good = self.values > UNDETERMINED * max(float(self.values[-1]), 1e-300)

    def _matrix(self) -> Floats:
        blocks = []
        parts = [self.turn, self.fade] if self.cables else []
        for k, part in enumerate(parts):
            row: list[Floats] = [_pairs(part**2) if i == k else np.zeros((self.n, self.n)) for i in range(len(parts))]
            row += [_ports(np.sum(part * s[..., 1 - k], axis=0))[:, None] for s in self.slopes]
            blocks.append(row)
        for s in self.slopes:
            row = [_ports(np.sum(part * s[..., 1 - k], axis=0))[None, :] for k, part in enumerate(parts)]
            row += [np.array([[np.sum(s * other)]]) for other in self.slopes]
            blocks.append(row)
        return np.block(blocks)

    def _right(self, z: Floats) -> Floats:
        parts = [self.turn, self.fade] if self.cables else []
        right = [_ports(np.sum(part * z[..., 1 - k], axis=0)) for k, part in enumerate(parts)]
        right += [np.array([np.sum(s * z)]) for s in self.slopes]
        return np.concatenate(right) * self.scale

    @property
    def rank(self) -> int:
        return int(np.count_nonzero(self.good))

    def free_step(self, z: Floats) -> Floats:
        """Step of the parameters alone, without bounds."""
        return self._solve(self._right(z))[2 * self.n * self.cables :]

    def _solve(self, right: Floats) -> Floats:
        v = self.vectors[:, self.good]
        return self.scale * (v @ ((v.T @ right) / self.values[self.good]))

    def step(self, z: Floats, bound: Floats, moves: Floats) -> Floats:
        """The step that minimises the linearised sum of squares with the parameters inside their bounds."""
        right, split = self._right(z), 2 * self.n * self.cables
        step = self._solve(right)
        if not self.slopes or np.all(np.abs(moves + step[split:]) <= bound):
            return step
        from scipy.optimize import lsq_linear

        h = self.matrix
        inverse = np.linalg.pinv(h[:split, :split], rcond=UNDETERMINED, hermitian=True)
        reduced = h[split:, split:] - h[split:, :split] @ inverse @ h[:split, split:]
        values, vectors = np.linalg.eigh(reduced)
        keep = values > UNDETERMINED * max(float(values[-1]), 1e-300)
        root = np.sqrt(values[keep])[:, None] * vectors[:, keep].T
        rest = right[split:] - h[split:, :split] @ inverse @ right[:split]
        low, high = (-bound - moves) / self.scale[split:], (bound - moves) / self.scale[split:]
        inner = lsq_linear(
            root, (vectors[:, keep].T @ rest) / np.sqrt(values[keep]), bounds=(low - 1e-12, high + 1e-12)
        ).x
        outer = inverse @ (right[:split] - h[:split, split:] @ inner)
        return self.scale * np.concatenate([outer, inner])

    def size(self, step: Floats) -> float:
        """Largest step in standard deviations along the determined directions."""
        with np.errstate(divide="ignore", invalid="ignore"):
            unit = np.where(self.scale > 0, step / self.scale, 0.0)
        return float(np.max(np.abs(self.vectors[:, self.good].T @ unit) * np.sqrt(self.values[self.good]), initial=0.0))

    def errors(self) -> Floats:
        """Standard errors; inf for unknowns that have part in an undetermined combination."""
        v = self.vectors[:, self.good]
        variance = np.sum(v**2 / self.values[self.good], axis=1) * self.scale**2
        loose = np.sum(self.vectors[:, ~self.good] ** 2, axis=1) > 1e-6
        return np.where(loose | (self.scale == 0), np.inf, np.sqrt(variance))


def _pairs(weight: Floats) -> Floats:
    """Normal matrix (n, n) of unknowns x_i + x_j seen with `weight` (n_freq, n, n)."""
    total = np.sum(weight, axis=0)
    return np.diag(_ports(total)) + total + total.T


def _ports(values: Floats) -> Floats:
    """What (n, n) values give to each port by row and by column: (n,)."""
    return values.sum(axis=1) + values.sum(axis=0)
