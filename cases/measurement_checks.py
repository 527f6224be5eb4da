"""What measured data say against themselves, without any prediction: reciprocity, passivity, noise, repeatability."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .uncertainty import Uncertainty

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
FALSE_ALARM = 1e-3
"""Chance that sound data fail one of these checks."""
ALLOWANCE = 1.21
"""Squares may be larger by this, since a stated uncertainty is itself known to some ten per cent."""
ABOVE_NOISE = 3.0
"""A coefficient below this many times the noise floor tells nothing but an upper bound."""


@dataclass(frozen=True)
class Finding:
    """One check: whether it failed, whether it could be made, and its evidence in words."""

    name: str
    failed: bool
    possible: bool
    words: str


@dataclass(frozen=True)
class SelfChecks:
    """`reciprocity`, `passivity`, `noise`, `repeats`; `antisymmetric` is the share of squared whitened residual that no
    reciprocal prediction can explain, in units of chi-squared with `pairs` complex numbers; `worst_pair` ports."""

    reciprocity: Finding
    passivity: Finding
    noise: Finding
    repeats: Finding
    antisymmetric: float = 0.0
    pairs: int = 0
    worst_pair: tuple[int, int] | None = None

    @property
    def findings(self) -> tuple[Finding, ...]:
        return self.reciprocity, self.passivity, self.noise, self.repeats

    @property
    def failed(self) -> tuple[Finding, ...]:
        return tuple(f for f in self.findings if f.failed)


def self_checks(measured: Complexes, uncertainty: Uncertainty, spread: float, labels: list[str]) -> SelfChecks:
    """Hold measured coefficients (n_freq, n, n), nan where not measured, against themselves."""
    reciprocity, chi, pairs, worst = _reciprocity(measured, uncertainty, labels)
    return SelfChecks(
        reciprocity,
        _passivity(measured, uncertainty),
        _noise(measured, uncertainty),
        _repeats(spread),
        chi,
        pairs,
        worst,
    )


def _reciprocity(
    measured: Complexes, uncertainty: Uncertainty, labels: list[str]
) -> tuple[Finding, float, int, tuple[int, int] | None]:
    """S_ij = S_ji for any array without magnetised ferrites or amplifiers; |difference|^2 over its variance."""
    from scipy.stats import chi2

    n = measured.shape[1]
    upper = np.triu_indices(n, 1)
    one, two = measured[:, upper[0], upper[1]], measured[:, upper[1], upper[0]]
    both = np.isfinite(one) & np.isfinite(two)
    pairs = int(np.count_nonzero(both))
    if not pairs:
        return Finding("reciprocity", False, False, "No pair of coefficients was measured both ways."), 0.0, 0, None
    size = np.abs(one + two) / 2
    along, across = uncertainty.deviations(np.where(both, size, 0.0))
    mean = np.where(both, one + two, 1)
    turned = np.where(both, one - two, 0) * np.conj(mean) / np.maximum(np.abs(mean), 1e-300)
    each = (turned.real / along) ** 2 / 2 + (turned.imag / across) ** 2 / 2
    total, limit = float(each.sum()), ALLOWANCE * float(chi2.isf(FALSE_ALARM, 2 * pairs))
    k = int(np.argmax(each.sum(axis=0)))
    worst = (int(upper[0][k]), int(upper[1][k]))
    level = np.sqrt(total / (2 * pairs))
    words = f"S_ij and S_ji differ by {level:.2f} times what the stated uncertainty lets expect, over {pairs} values"
    if total > limit:
        words += f"; most between {labels[worst[0]]} and {labels[worst[1]]}"
    return Finding("reciprocity", total > limit, True, words + "."), total, pairs, worst


def _passivity(measured: Complexes, uncertainty: Uncertainty) -> Finding:
    """Eigenvalues of 1 - S^H S where the matrix is complete, else the power into each completely measured column.

    Noise pushes the smallest eigenvalue down by up to 2 |S| |dS| + |dS|^2, and the norm of a matrix of independent
    errors of variances u_ij^2 rarely exceeds max_i sqrt(sum_j u_ij^2) + max_j sqrt(sum_i u_ij^2) + 3 max u_ij (form of
    the bound: A. Bandeira, R. van Handel, Ann. Probab. 44, 2479, 2016; from memory). Only what lies below that counts.
    """
    whole = np.all(np.isfinite(measured), axis=(1, 2))
    name = "passivity"
    if not np.any(whole):
        power = np.where(np.isfinite(measured), np.abs(measured) ** 2, 0).sum(axis=1)
        row = np.where(np.isfinite(measured), np.abs(measured) ** 2, 0).sum(axis=2)
        most = float(max(power.max(), row.max()))
        slack = 2 * (uncertainty.magnitude + 3 * uncertainty.floor * np.sqrt(measured.shape[1]))
        words = f"The matrix is not complete; the largest power found in a row or column is {most:.3f} of that sent in."
        return Finding(name, most > 1 + slack, True, words)
    s = measured[whole]
    lowest = 1 - np.linalg.norm(s, 2, axis=(1, 2)) ** 2
    along, across = uncertainty.deviations(np.abs(s))
    u2 = along**2 + across**2
    shake = np.sqrt(u2.sum(axis=2)).max(axis=1) + np.sqrt(u2.sum(axis=1)).max(axis=1) + 3 * np.sqrt(u2.max(axis=(1, 2)))
    slack = 2 * np.sqrt(np.maximum(1 - lowest, 0)) * shake + shake**2
    bad = lowest < -slack
    words = f"The smallest eigenvalue of 1 - S^H S is {lowest.min():.3f}; noise alone could reach {-slack.max():.3f}."
    if np.any(bad):
        words += f" {np.count_nonzero(bad)} of {len(s)} frequencies hold more power than was sent in."
    return Finding(name, bool(np.any(bad)), True, words)


def _noise(measured: Complexes, uncertainty: Uncertainty) -> Finding:
    known = np.isfinite(measured)
    low = known & (np.abs(np.where(known, measured, 1)) < ABOVE_NOISE * uncertainty.floor)
    share = np.count_nonzero(low) / max(np.count_nonzero(known), 1)
    level = 20 * np.log10(ABOVE_NOISE * uncertainty.floor) if uncertainty.floor > 0 else -np.inf
    words = f"{100 * share:.0f} % of the values lie below {level:.0f} dB, {ABOVE_NOISE:g} times the stated noise floor."
    return Finding("noise", bool(share > 0.5), True, words)


def _repeats(spread: float) -> Finding:
    if not np.isfinite(spread):
        return Finding("repeatability", False, False, "No coefficient was measured more than once.")
    words = f"Repeated values scatter by {spread:.2f} times the stated uncertainty."
    return Finding("repeatability", spread > 1.5, True, words)
