"""The `[expect]` table of a case against what a run gave."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..solver.pattern import axial_ratio, decibel
from .job import Expectation
from .result import Result

UNITS = {
    "resistance": "ohm",
    "reactance": "ohm",
    "reflection": "dB",
    "gain": "dBi",
    "cross_polar": "dB",
    "axial_ratio": "dB",
    "efficiency": "",
}


@dataclass(frozen=True)
class Comparison:
    """One expectation and the computed value; NaN where the run has no such frequency, direction or port."""

    expectation: Expectation
    computed: float

    @property
    def unit(self) -> str:
        return UNITS[self.expectation.quantity]

    @property
    def agrees(self) -> bool:
        """Within the stated tolerance; a value that is missing does not agree."""
        return bool(abs(self.computed - self.expectation.value) <= self.expectation.tolerance)


def compare(result: Result) -> tuple[Comparison, ...]:
    """All expectations of the case, in order."""
    return tuple(Comparison(wanted, _computed(wanted, result)) for wanted in result.job.expect)


def _computed(wanted: Expectation, result: Result) -> float:
    sweep, names = result.sweep, result.port_names
    f = int(np.argmin(np.abs(sweep.frequency - wanted.frequency)))
    u, v = (np.sin(wanted.theta) * turn(wanted.phi) for turn in (np.cos, np.sin))
    away = np.hypot(sweep.scan.u - u, sweep.scan.v - v)
    s, port = int(np.argmin(away)), wanted.port or names[0]
    if abs(sweep.frequency[f] - wanted.frequency) > 1e-6 * wanted.frequency or away[s] > 1e-6:
        return np.nan
    if port not in names:
        return np.nan
    p = names.index(port)
    co, cross = result.co_cross_gain
    response = result.response
    if wanted.quantity in ("resistance", "reactance"):
        z = result.active_impedance[f, s, p]
        return float(z.real if wanted.quantity == "resistance" else z.imag)
    if wanted.quantity == "reflection":
        return float(decibel(np.abs(response.reflection[f, s, p]) ** 2))
    if wanted.quantity == "gain":
        return float(co[f, s])
    if wanted.quantity == "cross_polar":
        return float(cross[f, s] - co[f, s])
    if wanted.quantity == "axial_ratio":
        return float(2 * decibel(axial_ratio(response.field[f, s])))
    if wanted.quantity == "efficiency":
        return float(response.efficiency[f, s])
    raise ValueError(f"quantity {wanted.quantity!r} is none of {', '.join(UNITS)}")
