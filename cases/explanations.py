"""What each explanation of a disagreement is worth, and which one may be named.

The currency is the excess: the sum of squared whitened residuals over what the stated uncertainty lets expect. Faults
of the bench (exchanged ports, cables) are established when the data ask for them even after the model's parameters have
had their say; the rest of the excess is then shared out between the model, the finite size and non-reciprocal data.
Each is worth what it removes alone and what it removes last. What only one can remove is its own; what two can remove
equally well is not told apart, and is said to be so.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .bench_fit import Fit, cheapest, residuals
from .measured_scattering import MeasuredScattering
from .measurement_checks import SelfChecks
from .prediction import Prediction
from .swaps import Swap

Complexes = NDArray[np.complex128]
MEASUREMENT, SIZE, MODEL = "the measurement", "the finite size", "the model"
FALSE_ALARM, BY_CHANCE = 0.01, 1e-3
LEAD = 0.5
"""An explanation is named when it removes at least this share of the excess alone, and no other can do the same."""
ALLOWANCE = 1.21
"""Chi-squared may be larger by this, since a stated uncertainty is itself known to some ten per cent."""


@dataclass(frozen=True)
class Share:
    """What one explanation of class `kind` removes of the excess, `alone` and `last`, with its evidence in words.

    `bench` faults are counted of the whole excess, others of what bench faults leave.
    """

    kind: str
    name: str
    alone: float
    last: float
    significant: bool
    bench: bool
    words: str


@dataclass(frozen=True)
class Fits:
    """Data as measured without explanation; then, exchanged ports undone: nothing, cables, parameters, both fitted."""

    plain: Fit
    raw: Fit
    cables: Fit
    parameters: Fit
    both: Fit

    @property
    def chosen(self) -> Fit:
        pair = (self.cables, self.both) if self.cabled else (self.raw, self.parameters)
        return pair[cheapest(pair)]

    @property
    def cabled(self) -> bool:
        """Whether the data ask for cables after the parameters have had their say: a gain that is no chance, and at
        least half of what the parameters leave unexplained."""
        left = self.parameters.chi_squared - self.parameters.count
        gained = self.parameters.chi_squared - self.both.chi_squared
        return better(self.parameters, self.both) and gained >= LEAD * left

    @property
    def base(self) -> Fit:
        """What is left to the other explanations."""
        return self.cables if self.cabled else self.raw


def better(poor: Fit, rich: Fit) -> bool:
    """Whether the richer fit is better than chance, by the likelihood ratio scaled to the misfit that remains.

    Chance has `BY_CHANCE` here, far below `FALSE_ALARM`, since several explanations are tried on the same data.
    """
    from scipy.stats import chi2

    extra = rich.freedom - poor.freedom
    if extra <= 0:
        return False
    gained = (poor.chi_squared - rich.chi_squared) / max(ALLOWANCE, rich.reduced)
    return bool(gained > chi2.isf(BY_CHANCE, extra))


def accepted(fit: Fit) -> bool:
    """Whether the stated uncertainty explains what this fit leaves."""
    from scipy.stats import chi2

    free = max(fit.count - fit.freedom, 1)
    return bool(fit.chi_squared <= ALLOWANCE * chi2.isf(FALSE_ALARM, free))


def split_by_edge(undone: Complexes, fit: Fit, prediction: Prediction, data: MeasuredScattering) -> tuple[float, ...]:
    """Sum of squares and count of real numbers with an edge element in them, and of those between inner elements."""
    z = np.sum(residuals(undone, fit.model, data.uncertainty, prediction.error) ** 2, axis=-1)
    known, depth = np.isfinite(undone), prediction.depth
    outer = ((depth[:, None] == 0) | (depth[None, :] == 0))[None] & known
    inner = known & ~outer
    a, b = 2 * int(np.count_nonzero(outer)), 2 * int(np.count_nonzero(inner))
    return float(z[outer].sum()), a, float(z[inner].sum()), b


def weigh(
    fits: Fits,
    undone: Complexes,
    data: MeasuredScattering,
    prediction: Prediction,
    parameters: tuple[int, ...],
    checks: SelfChecks,
    swaps: tuple[Swap, ...],
) -> tuple[Share, ...]:
    """All explanations, bench faults first, then the greatest share first; none where nothing is to be explained."""
    if accepted(fits.plain):
        return ()
    whole = max(fits.plain.chi_squared - fits.plain.count, 1e-9)
    found = _bench_shares(fits, whole, prediction, swaps)
    base = fits.base
    rest = max(base.chi_squared - (base.count - base.freedom), 1e-9)
    rich = fits.both if fits.cabled else fits.parameters

    def share(gone: float) -> float:
        return float(np.clip(gone / rest, 0, 1))

    out, n_out, inside, n_in = split_by_edge(undone, base, prediction, data)
    out_rich, _, inside_rich, _ = split_by_edge(undone, rich, prediction, data)
    if parameters:
        names = ", ".join(prediction.sensitivities[k].name for k in parameters)
        last = share(inside - inside_rich) if n_in >= 10 else share(base.chi_squared - rich.chi_squared)
        words = f"{names} moved within tolerance"
        alone = share(base.chi_squared - rich.chi_squared)
        found.append(Share(MODEL, "parameters", alone, last, better(base, rich), False, words))
    if min(n_out, n_in) >= 10:
        found.append(_edge_share((out, n_out, inside, n_in), (out_rich, inside_rich), share))
    if checks.reciprocity.failed:
        # errors that know nothing of reciprocity put as much into the reciprocal half, where they cannot be told
        odd = share(2 * (checks.antisymmetric - 2 * checks.pairs))
        words = f"{checks.reciprocity.words[:-1]} (counted twice: as much hides in the reciprocal half)"
        found.append(Share(MEASUREMENT, "non-reciprocal data", odd, odd, True, False, words))
    return tuple(sorted(found, key=lambda s: (not s.bench, -s.alone)))


def _bench_shares(fits: Fits, whole: float, prediction: Prediction, swaps: tuple[Swap, ...]) -> list[Share]:
    found = []
    if swaps:
        listed = "; ".join(f"{prediction.port_label(s.one)} with {prediction.port_label(s.two)}" for s in swaps)
        # against the same explanations without the exchange the gain was tested in `swaps.find_swaps`
        gone = float(np.clip(1 - (fits.both.chi_squared - fits.both.count) / whole, 0, 1))
        found.append(Share(MEASUREMENT, "exchanged ports", gone, gone, True, True, f"fits with {listed} exchanged"))
    alone = float(np.clip((fits.raw.chi_squared - fits.cables.chi_squared) / whole, 0, 1))
    last = float(np.clip((fits.parameters.chi_squared - fits.both.chi_squared) / whole, 0, 1))
    words = "a delay and a loss at each port"
    found.append(Share(MEASUREMENT, "cables", alone, last, fits.cabled, True, words))
    return found


def _edge_share(base: tuple[float, ...], rich: tuple[float, float], share: Callable[[float], float]) -> Share:
    """How much would go if coefficients of edge elements fitted as well as inner ones."""
    from scipy.stats import f as fisher

    out, n_out, inside, n_in = base
    level = max(inside / n_in, 1.0)
    ratio = (out / n_out) / max(inside / n_in, 1e-12)
    significant = bool(ratio > 2 and float(fisher.sf(ratio, n_out, n_in)) < FALSE_ALARM)
    alone = share(out - level * n_out)
    last = share(rich[0] - max(rich[1] / n_in, 1.0) * n_out)
    words = f"mean squared residual of edge elements {ratio:.2g} times that of inner ones"
    return Share(SIZE, "edge of the array", alone, last, significant, False, words)


def answer(fits: Fits, shares: tuple[Share, ...], checks: SelfChecks) -> tuple[str, str]:
    """The explanation that may be named, "" where none may, and the sentence that says so."""
    failed = [f.name for f in checks.failed if f.name != "noise"]
    if accepted(fits.plain):
        if failed:
            return MEASUREMENT, f"Residuals stay within the stated uncertainty, but the data fail: {', '.join(failed)}."
        return "", "There is no disagreement to explain: residuals stay within the stated uncertainty."
    if checks.passivity.failed:
        return MEASUREMENT, f"The measurement cannot be right: {checks.passivity.words}"
    bench = [s for s in shares if s.bench and s.significant]
    named = " and ".join(s.name for s in bench)
    if bench and accepted(fits.base):
        if not any(s.name == "exchanged ports" for s in bench) and accepted(fits.parameters):
            return "", "Cannot tell cables from the model: either alone explains the data."
        return MEASUREMENT, f"Best explained by the measurement: {named}; what is left is within the uncertainty."
    best, words = _of_the_rest([s for s in shares if not s.bench and s.significant])
    if not bench:
        return best, words
    return best, f"{named[0].upper()}{named[1:]} explain part of it; for the rest: {words[0].lower()}{words[1:]}"


def _of_the_rest(strong: list[Share]) -> tuple[str, str]:
    able = sorted((s for s in strong if s.alone >= LEAD), key=lambda s: -s.alone)
    if not able:
        top = max(strong, key=lambda s: s.alone, default=None)
        said = f" The most any removes is {100 * top.alone:.0f} % ({top.name})." if top else ""
        return "", f"Cannot tell: no explanation looked at removes half of the excess.{said}"
    own = [s for s in able if s.last >= 0.25]
    if len(able) > 1 and (len(own) != 1 or max(s.last for s in able if s is not own[0]) > 0.1):
        names = " from ".join(f"{s.kind} ({s.name}, {100 * s.alone:.0f} % of the excess)" for s in able)
        return "", f"Cannot tell {names}."
    s = own[0] if len(able) > 1 else able[0]
    return s.kind, f"Best explained by {s.kind}: {s.words}, which removes {100 * s.alone:.0f} % of the excess."
