"""Green's functions of the TE and TM transmission lines across a stack of layers.

Every plane wave of transverse wavenumber k_t splits into a TM wave (E_u along k_t, H_v across it) and a TE
wave (E_v, -H_u), each of which is voltage and current on a line along z (K. A. Michalski, J. R. Mosig, IEEE
TAP 45, 508, 1997; formulas derived anew, see below):

    dV/dz = -series I + v,   dI/dz = -shunt V + i,   V = E_u (TM), E_v (TE);   I = H_v (TM), -H_u (TE)
    TM: series = j eta (k mu - k_t^2/(k eps)),  shunt = j k eps / eta
        i = -J_u,  v = eta k_t J_z / (k eps)
    TE: series = j eta k mu,  shunt = j (k eps - k_t^2/(k mu)) / eta
        i = -J_v

With ``(V_<, I_<)`` the solution that meets the condition below and ``(V_>, I_>)`` the one that meets the
condition above, ``W = V_< I_> - V_> I_<`` is constant and every Green's function is one product over W, such
as ``V_i(z, z') = V_<(min) V_>(max) / W``. Both solutions are carried in their own growing direction with the
factor ``exp(j kz d)`` left out (this is ``1 + Gamma exp(-2 j kz d)`` with the generalised reflection
coefficient, without its 0/0 at kz = 0); what is left is the decaying ``exp(-j kz |z - z'|)``. Thick, thin
and evanescent layers are all safe.

TM minus TE over k_t^2 is carried beside the two lines by the product rule of divided differences,
``[xy] = [x] y_TM + x_TE [y]``; it is exact down to k_t = 0.

exp(+jwt), Im kz <= 0 in the half-spaces. Poles and the light circle on the real k_t axis are the caller's
matter; on the circle itself |kz| of air is held at 1e-7 k.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..geometry.stack import Stack

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]
Polarisation = Literal["TE", "TM", "difference"]
Tie = Literal["mean", "above", "below"]

ETA = 376.730313668  # free-space wave impedance, ohm (CODATA 2018)


@dataclass(frozen=True)
class Trio:
    """A quantity on the TE line, on the TM line, and ``(TM - TE) / k_t^2``; arrays of one shape."""

    te: Complexes
    tm: Complexes
    difference: Complexes

    def __add__(self, other: Trio) -> Trio:
        return Trio(self.te + other.te, self.tm + other.tm, self.difference + other.difference)

    def __sub__(self, other: Trio) -> Trio:
        return Trio(self.te - other.te, self.tm - other.tm, self.difference - other.difference)

    def __mul__(self, other: Trio) -> Trio:
        return Trio(self.te * other.te, self.tm * other.tm, self.difference * other.tm + self.te * other.difference)

    def __truediv__(self, other: Trio) -> Trio:
        te = self.te / other.te
        return Trio(te, self.tm / other.tm, (self.difference - te * other.difference) / other.tm)

    def __neg__(self) -> Trio:
        return Trio(-self.te, -self.tm, -self.difference)

    def scaled(self, factor: NDArray[Any] | complex) -> Trio:
        """Times a factor that is the same on both lines."""
        return Trio(factor * self.te, factor * self.tm, factor * self.difference)

    def __getitem__(self, index) -> Trio:
        return Trio(self.te[index], self.tm[index], self.difference[index])


Wave = tuple[Trio, Trio]  # voltage / eta and current


@dataclass(frozen=True)
class _Section:
    """A stretch of line between two nodes: ends, medium, and the admittance (eta / ohm) across its lower end."""

    low: float
    high: float
    permittivity: complex
    permeability: float
    shunt: complex


def sections(stack: Stack) -> list[_Section]:
    """Half-space below (none over a ground), layers cut at the sheets, half-space above; bottom to top."""
    sheets = {float(stack.snap(sheet.height)): ETA / complex(sheet.impedance) for sheet in stack.sheets}
    nodes = np.unique(np.concatenate([stack.interfaces, list(sheets)]))
    edges = np.concatenate([[] if stack.ground else [-np.inf], nodes, [np.inf]])
    result = []
    for low, high in pairwise(edges):
        inside = high - 1.0 if not np.isfinite(low) else low
        region = int(stack.region_at(inside))
        medium = complex(stack.permittivity[region]), float(stack.permeability[region])
        result.append(_Section(float(low), float(high), *medium, sheets.get(float(low), 0.0)))
    return result


def propagation(k: float, kt: NDArray[Any], index: complex, *, open_space: bool = False) -> Complexes:
    """``gamma = j kz`` in a medium, real part zero or positive (Im kz <= 0), kz > 0 where it is real.

    `index` squared is eps mu. With `open_space`, |kz| is held at 1e-7 k or more (the light circle).
    """
    n = float(np.real(index)) if np.imag(index) == 0 else index
    kz = np.asarray(np.sqrt(((k * n - kt) * (k * n + kt)).astype(complex)))
    kz = np.where(np.imag(kz) > 0, -kz, kz)
    if open_space:
        kz = np.where(np.abs(kz) < 1e-7 * abs(k), 1e-7 * k, kz)
    return 1j * kz


class _Medium:
    """Line constants of one section for all k_t: gamma, and series and shunt as trios, normalised to eta."""

    def __init__(self, section: _Section, k: float, kt: Complexes | Floats, open_space: bool):
        eps, mu = section.permittivity, section.permeability
        self.gamma = propagation(k, kt, np.sqrt(complex(eps * mu)), open_space=open_space)
        square, one = -(self.gamma**2), np.ones(len(kt), dtype=complex)
        self.series = Trio(1j * k * mu * one, 1j * square / (k * eps), -1j / (k * eps) * one)
        self.shunt = Trio(1j * square / (k * mu), 1j * k * eps * one, 1j / (k * mu) * one)

    def carry(self, wave: Wave, distance: Floats, sign: float) -> Wave:
        """The wave `distance` further in its growing direction, ``exp(gamma distance)`` left out.

        `sign` is +1 towards higher z. `distance` broadcasts behind k_t: (n,) with waves (n_kt, 1)
        -> (n_kt, n).
        """
        x = 2 * self.gamma[:, None] * distance
        small = x == 0
        decay = np.where(small, 1.0, -np.expm1(-x) / np.where(small, 1.0, x)) * distance
        cosh = 0.5 * (1 + np.exp(-x))
        voltage, current = wave
        v = voltage.scaled(cosh) - (self.series[:, None] * current).scaled(sign * decay)
        i = current.scaled(cosh) - (self.shunt[:, None] * voltage).scaled(sign * decay)
        return v, i


class Lines:
    """The two lines of a stack at one frequency, with sources and observers at given heights.

    Parameters
    ----------
    stack : Stack
    k : free-space wavenumber, rad/m, above zero
    kt : (n_kt,) transverse wavenumbers, real or complex, rad/m
    z, source : (n_z,), (n_source,) heights of observers and sources, m
    tie : what ``ii`` and ``vv`` mean where observer and source share a height: the mean of both limits, or
        the limit with the observer "above" or "below" the source. On a sheet currents are the mean of both
        of its faces.

    The methods return (n_kt, n_z, n_source) for "TE", "TM" or "difference" = (TM - TE) / k_t^2. Reciprocity:
    ``vi`` and ``iv`` are symmetric in z and z', and ``vv(z, z') = -ii(z', z)``.
    """

    def __init__(
        self,
        stack: Stack,
        k: float,
        kt: ArrayLike,
        z: ArrayLike,
        source: ArrayLike | None = None,
        tie: Tie = "mean",
    ):
        if not k > 0:
            raise ValueError(f"k = {k:g} rad/m is not above zero")
        if tie not in ("mean", "above", "below"):
            raise ValueError(f"tie = {tie!r} is none of 'mean', 'above', 'below'")
        self.stack, self.k = stack, float(k)
        self.kt = np.atleast_1d(np.asarray(kt))
        self.z = np.atleast_1d(stack.snap(z))
        self.source = self.z if source is None else np.atleast_1d(stack.snap(source))
        stack.region_at(np.concatenate([self.z, self.source]))  # refuses heights inside the ground
        self.sections = sections(stack)
        ends = {len(self.sections) - 1} | (set() if stack.ground else {0})
        self.media = [_Medium(s, self.k, self.kt, i in ends) for i, s in enumerate(self.sections)]
        self._rising, self._falling = self._solutions()
        gap = self.z[:, None] - self.source
        self._upper = np.where(gap == 0, {"mean": 0.5, "above": 1.0, "below": 0.0}[tie], gap > 0)

    def _solutions(self) -> tuple[list[Wave], list[Wave]]:
        """The lower solution just above every section's lower end, and the upper one just below its upper
        end."""
        n = len(self.sections)
        zero, one = np.zeros((len(self.kt), 1), dtype=complex), np.ones((len(self.kt), 1), dtype=complex)
        down = self.media[0]
        start = (Trio(zero, zero, zero), Trio(-one, -one, zero)) if self.stack.ground else _half_space(down, -1.0)
        rising = [start]
        for i in range(1, n):
            wave = rising[-1]
            if np.isfinite(self.sections[i - 1].low):
                wave = self.media[i - 1].carry(wave, self._length(i - 1), 1.0)
            rising.append(_across(wave, self.sections[i].shunt))
        falling = [_half_space(self.media[-1], 1.0)]
        for i in range(n - 1, 0, -1):
            wave = falling[0]
            if i < n - 1:
                wave = self.media[i].carry(wave, self._length(i), -1.0)
            falling.insert(0, _across(wave, -self.sections[i].shunt))
        return rising, falling

    def _length(self, i: int) -> Floats:
        return np.array([self.sections[i].high - self.sections[i].low])

    def _at(self, heights: Floats) -> tuple[Wave, Wave]:
        """Lower and upper solution (scaled) at heights, trios of shape (n_kt, n_height)."""
        shape = (len(self.kt), len(heights))
        waves = [Trio(*(np.empty(shape, dtype=complex) for _ in range(3))) for _ in range(4)]
        lows = np.array([s.low for s in self.sections])
        which = np.searchsorted(lows, heights, side="right") - 1
        for i in np.unique(which):
            section, medium, pick = self.sections[i], self.media[i], which == i
            up, down = heights[pick] - section.low, section.high - heights[pick]
            # inside a half-space the outgoing wave keeps its impedance: nothing to carry
            lower = self._rising[i] if np.isinf(section.low) else medium.carry(self._rising[i], up, 1.0)
            upper = self._falling[i] if np.isinf(section.high) else medium.carry(self._falling[i], down, -1.0)
            half = 0.5 * section.shunt * (heights[pick] == section.low)
            for store, wave in zip((waves[:2], waves[2:]), (lower, upper), strict=True):
                voltage, current = wave
                current = current + voltage.scaled(half)
                for target, part in zip(store, (voltage, current), strict=True):
                    for name in ("te", "tm", "difference"):
                        getattr(target, name)[:, pick] = getattr(part, name)
        return (waves[0], waves[1]), (waves[2], waves[3])

    @cached_property
    def decay(self) -> Complexes:
        """``exp(-sum gamma |path|)`` between every observer and source, (n_kt, n_z, n_source)."""
        exponent = np.zeros((len(self.kt), len(self.z), len(self.source)), dtype=complex)
        high, low = np.maximum(self.z[:, None], self.source), np.minimum(self.z[:, None], self.source)
        for section, medium in zip(self.sections, self.media, strict=True):
            path = np.clip(high, section.low, section.high) - np.clip(low, section.low, section.high)
            if path.any():
                exponent += medium.gamma[:, None, None] * path
        return np.exp(-exponent)

    @cached_property
    def _ends(self) -> tuple[tuple[Wave, Wave], tuple[Wave, Wave]]:
        """Solutions at the observers, and at the sources divided by W."""
        (vl, il), (vu, iu) = self._at(self.source)
        w = vl * iu - vu * il
        return self._at(self.z), ((vl / w, il / w), (vu / w, iu / w))

    def _green(self, observed: int, from_voltage: bool, p: Polarisation) -> Complexes:
        """Product of the solutions; `observed` 0 voltage, 1 current. Sources: i weighs with V, v with -I."""
        (lower_z, upper_z), (lower_s, upper_s) = self._ends
        which = 1 if from_voltage else 0
        total = self._upper * _outer(upper_z[observed], lower_s[which], p)
        total = total + (1 - self._upper) * _outer(lower_z[observed], upper_s[which], p)
        return (-total if from_voltage else total) * self.decay

    def vi(self, p: Polarisation) -> Complexes:
        """Voltage per unit shunt current, ohm (difference: ohm m^2)."""
        return ETA * self._green(0, False, p)

    def ii(self, p: Polarisation) -> Complexes:
        """Current per unit shunt current."""
        return self._green(1, False, p)

    def vv(self, p: Polarisation) -> Complexes:
        """Voltage per unit series voltage."""
        return self._green(0, True, p)

    def iv(self, p: Polarisation) -> Complexes:
        """Current per unit series voltage, siemens (difference: siemens m^2)."""
        return self._green(1, True, p) / ETA

    @cached_property
    def dispersion(self) -> Trio:
        """W / eta of the scaled solutions just above z = 0, trios (n_kt,): zero at the poles of the stack."""
        (vl, il), (vu, iu) = self._at(np.zeros(1))
        return (vl * iu - vu * il)[:, 0]


def _half_space(medium: _Medium, sign: float) -> Wave:
    """Outgoing wave with ``V : I = series : +-gamma`` (regular also where kz = 0)."""
    gamma = sign * medium.gamma[:, None]
    return medium.series[:, None], Trio(gamma, gamma, np.zeros_like(gamma))


def _across(wave: Wave, shunt: complex) -> Wave:
    """Past a sheet of that admittance, from below to above (negative: from above to below)."""
    voltage, current = wave
    return (voltage, current - voltage.scaled(shunt)) if shunt else wave


def _outer(at_z: Trio, at_source: Trio, p: Polarisation) -> Complexes:
    z, s = at_z[:, :, None], at_source[:, None, :]
    if p == "TE":
        return z.te * s.te
    if p == "TM":
        return z.tm * s.tm
    if p == "difference":
        return z.difference * s.tm + z.te * s.difference
    raise ValueError(f"polarisation {p!r} is none of 'TE', 'TM', 'difference'")


def wave_impedance(k: float, kt: ArrayLike, p: Literal["TE", "TM"]) -> Complexes:
    """Line impedance of air, ohm: ``eta kz / k`` (TM), ``eta k / kz`` (TE); shape of `kt`."""
    kz = propagation(k, np.asarray(kt), 1.0 + 0j, open_space=True) / 1j
    return ETA * (kz / k if p == "TM" else k / kz)


def reflection(stack: Stack, k: float, kt: ArrayLike, p: Literal["TE", "TM"], *, from_above: bool = True) -> Complexes:
    """Reflection coefficient of tangential E of the bare stack at its outer face (top, or z = 0 from below),
    (n_kt,).

    Raises
    ------
    ValueError
        From below when the stack stands on a ground.
    """
    if not from_above and stack.ground:
        raise ValueError("no wave reaches a grounded stack from below")
    kt = np.atleast_1d(np.asarray(kt))
    face = stack.top if from_above else 0.0
    # a unit wave is what the source 2/Z radiates; the reflected wave is the rest of the total voltage
    total = Lines(stack, k, kt, [face]).vi(p)[:, 0, 0] * 2 / wave_impedance(k, kt, p)
    return total - 1


def transmission(stack: Stack, k: float, kt: ArrayLike, p: Literal["TE", "TM"]) -> Complexes:
    """Tangential E at z = 0 per unit tangential E of a wave incident at the top of an open stack, (n_kt,)."""
    if stack.ground:
        raise ValueError("nothing passes a grounded stack")
    kt = np.atleast_1d(np.asarray(kt))
    return Lines(stack, k, kt, [0.0], [stack.top]).vi(p)[:, 0, 0] * 2 / wave_impedance(k, kt, p)
