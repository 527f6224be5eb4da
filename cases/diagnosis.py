"""Why measurement and prediction differ: fits, checks and exchanges brought together, and what the data cannot show."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .bench_fit import Fit, fit_bench, residuals
from .explanations import Fits, Share, answer, split_by_edge, weigh
from .frequency_grid import mean_delay
from .measured_scattering import MeasuredScattering
from .measurement_checks import SelfChecks, self_checks
from .prediction import Prediction
from .swaps import Swap, exchanged, find_swaps

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class Diagnosis:
    """Why measurement and prediction differ.

    Parameters
    ----------
    best : `explanations.MEASUREMENT`, `SIZE` or `MODEL`; "" where there is no disagreement or the data cannot tell
    sentence : the answer in words
    shares : the evidence, bench faults first
    checks : of the measurement against itself
    swaps : exchanged ports found, reported and never applied to what is shown as measured
    fits : of the explanations
    undone : (n_freq, n, n) measured coefficients with swaps undone
    corrected : (n_freq, n, n) and fitted cables taken out
    gain : (n_freq, n) of the fitted cables, 1 without any
    edge_ratio : mean squared residual where an edge element takes part over that between inner ones, best fit
    infinite_level, finite_level : r.m.s. whitened residual of the same against the infinite and the finite array
        over the same coefficients; nan when the infinite coupling is not given
    notes : what the data cannot show
    """

    best: str
    sentence: str
    shares: tuple[Share, ...]
    checks: SelfChecks
    swaps: tuple[Swap, ...]
    fits: Fits
    undone: Complexes
    corrected: Complexes
    gain: Complexes
    edge_ratio: float
    infinite_level: float
    finite_level: float
    notes: tuple[str, ...] = ()

    @property
    def cabled(self) -> bool:
        """Whether cables are part of the best explanation."""
        return self.fits.chosen.cables


def diagnose(data: MeasuredScattering, prediction: Prediction, parameters: tuple[int, ...]) -> Diagnosis:
    """Weigh the explanations for measured coefficients; `parameters` are indices of the sensitivities to be fitted."""
    measured = data.scattering
    labels = [prediction.port_label(i) for i in range(len(prediction.ports))]
    checks = self_checks(measured, data.uncertainty, data.spread, labels)
    plain = fit_bench(measured, prediction, data.uncertainty, cables=False)
    swaps, notes = find_swaps(
        measured,
        prediction,
        data.uncertainty,
        lambda values, made: _four(values, data, prediction, parameters, made),
    )
    undone = exchanged(measured, swaps)
    fits = Fits(plain, *_four(undone, data, prediction, parameters, swaps))
    chosen = fits.chosen
    gain = chosen.gain(prediction)
    both_ways = gain[:, :, None] * gain[:, None, :]
    shares = weigh(fits, undone, data, prediction, parameters, checks, swaps)
    best, sentence = answer(fits, shares, checks)
    out, n_out, inside, n_in = split_by_edge(undone, chosen, prediction, data)
    ratio = (out / n_out) / max(inside / n_in, 1e-12) if min(n_out, n_in) >= 10 else float("nan")
    levels = _levels(undone, both_ways, prediction, data)
    all_notes = (*notes, *_cable_notes(chosen, prediction, measured))
    return Diagnosis(
        best, sentence, shares, checks, swaps, fits, undone, undone / both_ways, gain, ratio, *levels, all_notes
    )


def _four(
    values: Complexes,
    data: MeasuredScattering,
    prediction: Prediction,
    parameters: tuple[int, ...],
    swaps: tuple[Swap, ...],
) -> tuple[Fit, Fit, Fit, Fit]:
    """Nothing, cables, parameters, both."""
    hint, use = None, data.uncertainty
    if data.delay is not None:
        hint = exchanged(data.delay[None].astype(complex), swaps)[0].real - _predicted_delay(prediction)
    raw = fit_bench(values, prediction, use, cables=False)
    cables = fit_bench(values, prediction, use, cables=True, hint=hint)
    if not parameters:
        return raw, cables, raw, cables
    moved = fit_bench(values, prediction, use, cables=False, parameters=parameters)
    both = fit_bench(values, prediction, use, cables=True, parameters=parameters, start=cables.delay)
    return raw, cables, moved, both


def _predicted_delay(prediction: Prediction) -> Floats:
    n = len(prediction.ports)
    return mean_delay(prediction.frequency, prediction.scattering.reshape(-1, n * n)).reshape(n, n)


def _levels(
    undone: Complexes, both_ways: Complexes, prediction: Prediction, data: MeasuredScattering
) -> tuple[float, float]:
    infinite = prediction.infinite_coupling()
    if infinite is None:
        return float("nan"), float("nan")
    values = np.where(np.isfinite(infinite), undone, np.nan)
    count = 2 * max(np.count_nonzero(np.isfinite(values)), 1)
    levels = []
    for model in (np.where(np.isfinite(infinite), infinite, 0), prediction.scattering):
        z = residuals(values, model * both_ways, data.uncertainty, prediction.error)
        levels.append(float(np.sqrt(np.sum(z**2) / count)))
    return levels[0], levels[1]


def _cable_notes(fit: Fit, prediction: Prediction, measured: Complexes) -> tuple[str, ...]:
    """What the fitted cables mean and do not mean."""
    if not fit.cables:
        return ()
    known = np.any(np.isfinite(measured), axis=0)
    seen = np.any(known, axis=0) | np.any(known, axis=1)
    notes = []
    if len(prediction.frequency) == 1:
        notes.append("With one frequency a cable's delay is known only up to half periods of the carrier.")
    else:
        alias = 0.5 / float(np.median(np.diff(prediction.frequency)))
        if np.any(np.abs(2 * fit.delay) > 0.8 * alias):
            notes.append(
                f"Delays of two cables together beyond {1e9 * alias:.3g} ns are ambiguous at this frequency spacing, "
                "unless the measurement is finer than the prediction."
            )
    if np.count_nonzero(known) <= 2 * np.count_nonzero(seen):
        notes.append(
            "One row was measured: each port's cable rests on one coefficient, so that a cable cannot be told from an "
            "error of the prediction with the same phase slope, nor from an exchange of ports."
        )
    if np.any(np.isinf(fit.delay_error[seen])):
        notes.append("Some cables are determined in sums only: no reflection was measured at the driven port.")
    if np.any(fit.loss < -3 * np.where(np.isfinite(fit.loss_error), fit.loss_error, np.inf) - 0.05):
        notes.append("Some fitted losses are negative: more came back than predicted, or the calibration overcorrects.")
    notes.append("Cables were fitted with the prediction taken as true; what it gets wrong may hide in them.")
    return tuple(notes)
