"""The dispersion function of a stack: zero at its surface waves; and the angle that counts them."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from ..geometry.stack import Stack
from .lines import sections

Floats = NDArray[np.float64]
Complexes = NDArray[Any]
Mode = Literal["TE", "TM"]


class Dispersion:
    """The lines of a stack as functions of x = sqrt(beta^2 - k^2) in units of k, its losses scaled by
    0..1."""

    def __init__(self, stack: Stack, k: float, mode: Mode):
        self.ground, self.mode = stack.ground, mode
        parts = [s for s in sections(stack) if np.isfinite(s.low)]  # the last one is the air above
        self.permittivity = np.array([s.permittivity for s in parts])
        self.permeability = np.array([s.permeability for s in parts])
        self.shunt = np.array([complex(s.shunt) for s in parts])  # at the lower end
        self.length = np.array([k * (s.high - s.low) for s in parts[:-1]])

    @property
    def reach(self) -> float:
        """|x| that no wave exceeds whose phase constant exceeds its attenuation.

        The slowest medium, and what the reactance of a sheet binds on its own (TM ``2 eps B/|Y|^2``, TE
        ``mu B/2``) or against a ground or another sheet close by; with room to spare.
        """
        slow = np.sqrt(np.abs(self.permittivity * self.permeability).max())
        sheets = self.shunt[self.shunt != 0]
        susceptance, size = np.abs(np.imag(sheets)), np.abs(sheets)
        alone = 2 * np.abs(self.permittivity).max() * susceptance / size**2 + susceptance * self.permeability.max()
        close = (
            np.sqrt(2 * np.abs(self.permittivity).max() / size / self.length.min()) if len(self.length) else 0 * size
        )
        return float(1.5 * (slow + 1) + (alone + close).sum())

    @property
    def last_multiple(self) -> int:
        """Lowest multiple of pi the angle passes: each inductive sheet turns TM half a turn back as x
        grows."""
        return -int(np.sum(np.imag(self.shunt) < 0)) if self.mode == "TM" else 0

    def angle(self, x: float) -> float:
        """Angle of the lower solution at the top less that of the decaying wave, rad, all turns counted."""
        te = self.mode == "TE"
        v, h = (0.0, 1.0) if self.ground else ((1.0, x) if te else (-x, 1.0))
        theta = float(np.arctan2(v, h))
        for n, length in enumerate(self.length):
            theta = self._sheet(theta, self.shunt[n].imag)
            square = self._square(x, n)
            a = self.permeability[n] if te else square / self.permittivity[n].real
            c = square / self.permeability[n] if te else self.permittivity[n].real
            theta = _turn(theta, float(a), float(c), square, float(length))
        theta = self._sheet(theta, self.shunt[-1].imag)
        end = np.arctan2(1.0, -x) if te else np.arctan2(x, 1.0)
        return theta - float(end)

    def _square(self, x: float, n: int) -> float:
        """(kz/k)^2 in section n, with n^2 - 1 - x^2 free of cancellation near cut-off."""
        return float((self.permittivity[n] * self.permeability[n]).real - 1 - x * x)

    @staticmethod
    def _sheet(theta: float, susceptance: float) -> float:
        """h falls by B V: a shear that leaves the sign of V, hence the half turn, as it is."""
        if susceptance == 0:
            return theta
        half = np.floor(theta / np.pi)
        rest = theta - half * np.pi
        v, h = np.sin(rest), np.cos(rest)
        return float(half * np.pi + (np.arctan2(v, h - susceptance * v) if v > 1e-300 else rest))

    def logarithm(self, x: Complexes, loss: float = 1.0) -> tuple[Complexes, Complexes]:
        """``(w, e)`` with ``W = w exp(e)``: w of moderate size, W entire in x; x any shape."""
        x = np.asarray(x, dtype=complex)
        te = self.mode == "TE"
        one = np.ones_like(x)
        v, h = (0 * one, one) if self.ground else ((one, x) if te else (-x, one))
        exponent = 0 * one
        for n, length in enumerate(self.length):
            h = h - self._susceptance(n, loss) * v
            eps = self.permittivity[n].real + 1j * loss * self.permittivity[n].imag
            square = eps * self.permeability[n] - 1 - x * x
            gamma = np.sqrt(-square)
            series = self.permeability[n] * one if te else square / eps
            shunt = square / self.permeability[n] if te else eps * one
            y = 2 * gamma * length
            small = np.abs(y) < 1e-150
            sinh = np.where(small, 1.0, -np.expm1(-y) / np.where(small, 1.0, y)) * length
            cosh = 0.5 * (1 + np.exp(-y))
            v, h = cosh * v + series * sinh * h, cosh * h - shunt * sinh * v
            exponent = exponent + gamma * length
        h = h - self._susceptance(-1, loss) * v
        return (v * x + h if te else v - x * h), exponent

    def turning(self, x: Complexes) -> Floats:
        """Bound on how far W may turn between neighbouring points of a path by its layers' thickness, (n -
        1,) rad."""
        total = np.zeros(len(x) - 1)
        for n, length in enumerate(self.length):
            gamma = np.sqrt(x * x + 1 - self.permittivity[n] * self.permeability[n])
            total += length * np.minimum(np.abs(np.diff(gamma)), np.abs(gamma[1:] + gamma[:-1]))  # either root serves
        return total

    def _susceptance(self, n: int, loss: float) -> complex:
        """Y = G + jB of a sheet as what h = I/j loses: ``Y/j``, with the conductance scaled."""
        return (loss * self.shunt[n].real + 1j * self.shunt[n].imag) / 1j


def _turn(theta: float, a: float, c: float, square: float, length: float) -> float:
    """Angle after a stretch of ``V' = a h, h' = -c V``; `square` = a c, `length` in units of 1/k."""
    half = np.floor(theta / np.pi + 0.5)
    rest = theta - half * np.pi  # in [-pi/2, pi/2)
    v, h = np.sin(rest), np.cos(rest)
    if square > 0:  # in the scaled angle tan(psi) = sqrt(c/a) V/h the motion is uniform
        ratio = np.sqrt(c / a)
        total = np.arctan2(ratio * v, h) + np.sqrt(square) * length
        turns = np.floor(total / np.pi + 0.5)
        total -= turns * np.pi
        return float((half + turns) * np.pi + np.arctan2(np.sin(total) / ratio, np.cos(total)))
    gamma = np.sqrt(-square)
    y = 2 * gamma * length
    sinh, cosh = (-np.expm1(-y) / y if y > 0 else 1.0) * length, 0.5 * (1 + np.exp(-y))
    v, h = cosh * v + a * sinh * h, cosh * h - c * sinh * v
    change = np.arctan2(v, h) - rest  # never a half turn: two directions stay fixed
    return float(theta + (change + np.pi) % (2 * np.pi) - np.pi)
