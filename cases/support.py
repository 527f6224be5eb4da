"""Whether a measurement supports a prediction within its uncertainty: per frequency and per direction.

Two statistics with thresholds that sound data exceed with a stated probability, `FALSE_ALARM` in all:

- per frequency, the sum of squared whitened residuals, chi-squared with two degrees of freedom per coefficient;
- per direction and frequency, the distance between the active reflection summed from measured coefficients and the
  one predicted over the same coefficients, squared and whitened, chi-squared with two degrees of freedom.

Half of the false-alarm probability goes to each kind, divided evenly between its tests (Bonferroni). A stated
uncertainty is itself known to some ten per cent, so that thresholds rise by (1 + ALLOWANCE)^2.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .bench_fit import Fit, residuals
from .prediction import Prediction
from .scan_synthesis import ScanReflection, mahalanobis, reach95
from .uncertainty import Uncertainty

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]
FALSE_ALARM = 0.01
ALLOWANCE = 0.1
SUPPORTED, REFUTED, UNTESTED = 1, -1, 0


@dataclass(frozen=True)
class Support:
    """The outcome of the tests.

    Parameters
    ----------
    statistic, threshold : (n_freq,) chi-squared per degree of freedom, and what it may be; nan where not measured
    frequency_state : (n_freq,) 1 supported, -1 not supported, 0 untested
    distance, limit : (n_freq, n_dir) whitened distance of the active reflection, and (scalar) what it may be
    direction_state : (n_freq, n_dir) likewise; 0 also where uncertainty and missing coefficients exceed `wanted`
    reach : (n_freq, n_dir) 95 % uncertainty of the measured active reflection plus the bound of what is missing
    wanted : largest `reach` with which a direction counts as tested
    """

    statistic: Floats
    threshold: Floats
    frequency_state: Ints
    distance: Floats
    limit: float
    direction_state: Ints
    reach: Floats
    wanted: float

    @property
    def holds(self) -> bool:
        """No test failed, and at least one could be made."""
        states = np.concatenate([self.frequency_state, self.direction_state.ravel()])
        return bool(np.all(states >= 0) and np.any(states > 0))

    @property
    def contradicted(self) -> bool:
        return bool(np.any(self.frequency_state < 0) or np.any(self.direction_state < 0))


def judge_support(
    measured: Complexes,
    model: Complexes,
    prediction: Prediction,
    uncertainty: Uncertainty,
    scan: ScanReflection,
    fit: Fit | None = None,
    wanted: float = 0.1,
) -> Support:
    """Test measured coefficients (n_freq, n, n) against `model` of the same shape and the scan made from both.

    `fit` is the explanation already taken out, whose unknowns cost degrees of freedom.
    """
    from scipy.stats import chi2

    f, d = scan.measured.shape
    known = np.isfinite(measured)
    z = np.sum(residuals(measured, model, uncertainty, prediction.error) ** 2, axis=(1, 2, 3))
    count = 2 * known.sum(axis=(1, 2)).astype(float)
    if fit is not None and count.sum() > 0:
        count = count * max(1 - fit.freedom / count.sum(), 0.0)
    tested = np.maximum(np.count_nonzero(count >= 1), 1)
    with np.errstate(invalid="ignore", divide="ignore"):
        statistic = np.where(count >= 1, z / count, np.nan)
        threshold = (
            chi2.isf(FALSE_ALARM / 2 / tested, np.maximum(count, 1)) / np.maximum(count, 1) * (1 + ALLOWANCE) ** 2
        )
    state = np.where(np.isnan(statistic), UNTESTED, np.where(statistic > threshold, REFUTED, SUPPORTED))
    limit = float(chi2.isf(FALSE_ALARM / 2 / max(f * d, 1), 2)) * (1 + ALLOWANCE) ** 2
    distance = mahalanobis(scan.measured - scan.same, scan.covariance)
    reach = reach95(scan.covariance) + scan.bound[:, None]
    seen = np.isfinite(distance)
    direction = np.where(
        ~seen, UNTESTED, np.where(distance > limit, REFUTED, np.where(reach > wanted, UNTESTED, SUPPORTED))
    )
    return Support(
        statistic,
        np.where(count >= 1, threshold, np.nan),
        state,
        np.sqrt(distance),
        float(np.sqrt(limit)),
        direction,
        np.where(seen, reach, np.nan),
        wanted,
    )


def runs(mask: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """Stretches of True as (first, last) indices."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], mask.astype(int), [0]])))
    return [(int(a), int(b) - 1) for a, b in zip(edges[::2], edges[1::2], strict=True)]
