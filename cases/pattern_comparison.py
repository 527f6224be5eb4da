"""Measured pattern cuts beside predicted ones: level and pointing offset, and whether the rest fits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from .measured_pattern import MeasuredCut
from .prediction import CutPattern, Prediction

Floats = NDArray[np.float64]
FALSE_ALARM = 0.01
ALLOWANCE = 1.21


@dataclass(frozen=True)
class PatternUncertainty:
    """Standard uncertainties of a measured cut: `level` dB at each angle, and `stray` dB below its peak, the r.m.s.
    level of reflections in the range (and of noise)."""

    level: float
    stray: float

    def __post_init__(self) -> None:
        if not (0 < self.level < 20) or not self.stray < 0:
            raise InputError(
                f"a pattern uncertainty of {self.level:g} dB with stray level {self.stray:g} dB makes no sense.",
                where="stated uncertainty",
                allowed='above 0 dB, and a stray level below the peak such as "-40 dB"',
            )


@dataclass(frozen=True)
class CutComparison:
    """One measured cut against its prediction.

    Parameters
    ----------
    measured, predicted : the two cuts
    theta : (n,) rad, measured angles inside the predicted range; `outside` counts those beyond, which stay untested
    co, cross : (n,) predicted levels at `theta` (dB)
    difference : (n,) measured minus predicted co-polar level after `offset`, dB; `sigma` (n,) its standard uncertainty
    offset : dB added to the measured levels: fitted for relative levels, zero for dBi
    pointing : rad, turn of the measured cut that would fit best (reported, not applied); `pointing_error` beside it
    level : r.m.s. of difference / sigma, which may reach `threshold`
    """

    measured: MeasuredCut
    predicted: CutPattern
    theta: Floats
    outside: int
    co: Floats
    cross: Floats
    difference: Floats
    sigma: Floats
    offset: float
    pointing: float
    pointing_error: float
    level: float
    threshold: float

    @property
    def supported(self) -> bool:
        return self.level <= self.threshold


def match_cut(cut: MeasuredCut, prediction: Prediction) -> CutPattern | str:
    """The predicted cut of the same plane, element, port and frequency, or why there is none."""
    choice = list(prediction.patterns)
    for keep, why in (
        (lambda p: cut.cell is None or p.cell == cut.cell, f"element at column {cut.cell and cut.cell[0]}"),
        (lambda p: not cut.port or p.port == cut.port, f"port '{cut.port}'"),
        (lambda p: cut.frequency is None or abs(p.frequency - cut.frequency) <= 1e-4 * p.frequency, "frequency"),
        (lambda p: _same_plane(p.phi, cut.phi) != 0, f"cut plane {np.degrees(cut.phi):g} deg"),
    ):
        choice = [p for p in choice if keep(p)]
        if not choice:
            return f"no pattern is predicted for its {why}"
    if len({(p.cell, p.port, p.frequency) for p in choice}) > 1:
        return "it fits several predicted patterns: state frequency, row and column in the file"
    return choice[0]


def _same_plane(one: float, two: float) -> int:
    """1 for the same half-plane, -1 for the opposite one (angles change sign), 0 for another plane."""
    turn = (two - one) % (2 * np.pi)
    if min(turn, 2 * np.pi - turn) < 1e-4:
        return 1
    return -1 if abs(turn - np.pi) < 1e-4 else 0


def compare_cut(cut: MeasuredCut, predicted: CutPattern, uncertainty: PatternUncertainty) -> CutComparison:
    """Hold one measured cut against its prediction.

    A stray field of relative amplitude s disturbs a level L (dB below the peak) by 20 log10(1 + s / L): both
    uncertainties add as variances, in decibels. Levels below the stray level are left out of the test.

    Raises
    ------
    InputError
        If fewer than three angles lie inside the predicted range.
    """
    from scipy.stats import chi2

    sign = _same_plane(predicted.phi, cut.phi) or 1
    order = np.argsort(sign * cut.theta)
    angle, level, crossed = (sign * cut.theta)[order], cut.co[order], cut.cross[order]
    inside = (angle >= predicted.theta[0] - 1e-9) & (angle <= predicted.theta[-1] + 1e-9)
    if np.count_nonzero(inside) < 3:
        raise InputError(
            f"{np.count_nonzero(inside)} measured angles lie inside the predicted cut.",
            where=str(cut.path),
            allowed=f"{np.degrees(predicted.theta[0]):.4g} to {np.degrees(predicted.theta[-1]):.4g} deg",
        )
    angle = angle[inside]
    co, cross = (np.interp(angle, predicted.theta, values) for values in (predicted.co, predicted.cross))
    below = co - co.max()
    sigma = np.hypot(uncertainty.level, 20 * np.log10(1 + 10 ** ((uncertainty.stray - below) / 20)) / np.sqrt(2))
    use = (below > uncertainty.stray) & np.isfinite(level[inside])
    weight = np.where(use, 1 / sigma**2, 0.0)
    raw = np.where(use, level[inside] - co, 0.0)
    offset = 0.0 if cut.absolute else -float(np.sum(weight * raw) / np.sum(weight))
    difference = np.where(use, raw + offset, np.nan)
    slope = np.gradient(co, angle)
    pointing, error = _pointing(raw + offset, slope, weight, not cut.absolute)
    count = max(int(np.count_nonzero(use)) - (not cut.absolute), 1)
    rms = float(np.sqrt(np.nansum((difference / sigma) ** 2) / count))
    aligned = MeasuredCut(
        cut.path, cut.frequency, cut.cell, cut.port, predicted.phi, angle, level[inside], crossed[inside], cut.absolute
    )
    threshold = float(np.sqrt(ALLOWANCE * chi2.isf(FALSE_ALARM, count) / count))
    outside = int(np.count_nonzero(~inside))
    return CutComparison(
        aligned, predicted, angle, outside, co, cross, difference, sigma, offset, pointing, error, rms, threshold
    )


def _pointing(difference: Floats, slope: Floats, weight: Floats, free_level: bool) -> tuple[float, float]:
    """Turn t with measured(theta) = predicted(theta - t): difference = -t slope (+ level), weighted least squares."""
    columns = [-slope, np.ones_like(slope)] if free_level else [-slope]
    a = np.stack(columns, axis=1)
    normal = a.T @ (weight[:, None] * a)
    inverse = np.linalg.pinv(normal)
    return float((inverse @ (a.T @ (weight * difference)))[0]), float(np.sqrt(inverse[0, 0]))
