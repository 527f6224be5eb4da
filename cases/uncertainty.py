"""The stated uncertainty of measured scattering coefficients, as standard deviations along and across each phasor."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
DECIBEL = 20 / np.log(10)
"""dB per unit of relative change of an amplitude, 8.686."""


@dataclass(frozen=True)
class Uncertainty:
    """Standard (one sigma) uncertainties of a measured coefficient.

    Errors of different coefficients and frequencies are taken as independent.

    Parameters
    ----------
    magnitude : relative, from `from_decibel` or directly; 0.0115 is 0.1 dB
    phase : rad
    floor : r.m.s. magnitude of the complex noise, absolute
    """

    magnitude: float
    phase: float
    floor: float

    def __post_init__(self) -> None:
        for name, value, most in (
            ("magnitude", self.magnitude, 1.0),
            ("phase", self.phase, np.pi),
            ("floor", self.floor, 1.0),
        ):
            if not (np.isfinite(value) and 0 <= value < most):
                raise InputError(
                    f"the stated {name} uncertainty of {value:g} makes no sense.",
                    where="stated uncertainty",
                    allowed=f"0 to below {most:.3g} ({'rad' if name == 'phase' else 'amplitude ratio'})",
                )
        if self.floor == 0 and (self.magnitude == 0 or self.phase == 0):
            raise InputError(
                "the stated uncertainty is zero, so that no measurement could agree with anything.",
                where="stated uncertainty",
                allowed="a noise floor, or both a magnitude and a phase uncertainty",
            )

    @classmethod
    def from_decibel(cls, magnitude: float, phase: float, floor: float) -> Uncertainty:
        """Magnitude in dB, phase in rad, noise floor in dB relative to full transmission."""
        if not np.isfinite(magnitude) or magnitude < 0:
            raise InputError(
                f"a magnitude uncertainty of {magnitude:g} dB makes no sense.",
                where="stated uncertainty",
                allowed="a positive number of decibels",
            )
        if not floor < 0:
            raise InputError(
                f"a noise floor of {floor:g} dB makes no sense.",
                where="stated uncertainty",
                allowed='a level below full transmission such as "-70 dB"',
            )
        return cls(magnitude / DECIBEL, phase, 10 ** (floor / 20))

    def deviations(self, size: Floats, extra: float = 0.0) -> tuple[Floats, Floats]:
        """Standard deviations along and across phasors of magnitude `size`, with `extra` (r.m.s. of a complex error).

        sigma_r^2 = (size magnitude)^2 + (floor^2 + extra^2) / 2 and likewise across with the phase.
        """
        ground = (self.floor**2 + extra**2) / 2
        return np.sqrt((size * self.magnitude) ** 2 + ground), np.sqrt((size * self.phase) ** 2 + ground)


def whiten(residual: Complexes, about: Complexes, sigma: tuple[Floats, Floats]) -> Floats:
    """Residuals along and across the phasors `about`, each over its standard deviation: real, shape (..., 2)."""
    size = np.abs(about)
    turn = np.where(size > 0, np.conj(about) / np.where(size > 0, size, 1), 1)
    turned = residual * turn
    return np.stack([turned.real / sigma[0], turned.imag / sigma[1]], axis=-1)
