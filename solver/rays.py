"""Rays: the ways in which a source reaches an observer in the quasi-static limit.

In air there is the direct ray and, over ground, the one from the mirror image. In a layered stack there are the
direct ray and reflections at interfaces, with other amplitudes for currents (K_A, K_v) and charges (K_Q) and another
effective wavenumber ``kappa k^2``. The near part sums Ewald's kernels over rays; whatever the rays leave out is in the
far part, which knows the exact kernel, so their choice changes the number of Floquet waves needed and nothing else.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from ..geometry.stack import Stack
from .bounces import Bounce, SecondOrder, trace
from .layered_kernel import interface_terms
from .lines import sections
from .static_images import quasi_static_images
from .zones import Zone, Zoning

Floats = NDArray[np.float64]
MIRROR = np.array([1.0, 1.0, -1.0])
SMALLEST = 1e-6  # weaker rays are left to the far part
SHEET_DECAY = 7.4  # nepers
LARGEST_KAPPA = 20.0  # a ray that would need a larger one is written as two


Linear = tuple[complex, complex, complex]  # c0 + c1 z + c2 z'
NOTHING: Linear = (0.0, 0.0, 0.0)


@dataclass(frozen=True)
class Ray:
    """One ray, for all elements or for those of one pair of zones.

    Attributes
    ----------
    mirrored : the source is mirrored in z = 0 first, geometry and direction of the current
    lift : then displaced vertically, m
    pair : (observer, source) zones it belongs to; None: all
    current, charge : amplitudes of 1/(4 pi R) for currents and charges
    kappa_current, kappa_charge : effective ``k^2`` in units of the free-space one
    vertical, kappa_vertical : the same for vertical currents of stacks, whose sign in the mirror is counted here
    current_log, vertical_log, charge_log : further amplitudes of ``k^2 exp(-g d) / (2 g^2)``, 1/m: (c0, c1, c2) of
        ``c0 + c1 z + c2 z'`` with the heights of observer and source
    """

    mirrored: bool = False
    lift: float = 0.0
    pair: tuple[int, int] | None = None
    current: complex = 1.0
    charge: complex = 1.0
    kappa_current: complex = 1.0
    kappa_charge: complex = 1.0
    vertical: complex = 0.0
    kappa_vertical: complex = 1.0
    current_log: Linear = NOTHING
    vertical_log: Linear = NOTHING
    charge_log: Linear = NOTHING

    def place(self, points: Floats, shift: Floats) -> Floats:
        """Source points (..., 3) as the observer sees them, displaced by a lattice vector (3,)."""
        return (points * MIRROR if self.mirrored else points) + shift + np.array([0.0, 0.0, self.lift])

    def powers(self, count: int) -> tuple[NDArray, NDArray]:
        """Amplitude times kappa^p, p = 0..count-1, for currents and charges; real where they are."""
        p = np.arange(count)
        return real_if_real(self.current * self.kappa_current**p), real_if_real(self.charge * self.kappa_charge**p)

    def vertical_powers(self, count: int) -> NDArray:
        """The same for vertical currents of a stack."""
        return real_if_real(self.vertical * self.kappa_vertical ** np.arange(count))

    def height(self, source: NDArray) -> NDArray:
        """Apparent height of sources at the given heights, m."""
        return (-source if self.mirrored else source) + self.lift

    def terms(self) -> tuple[tuple[complex, complex, Linear], ...]:
        """(amplitude, kappa, logarithmic amplitudes) of horizontal currents, vertical currents and charges."""
        return (
            (self.current, self.kappa_current, self.current_log),
            (self.vertical, self.kappa_vertical, self.vertical_log),
            (self.charge, self.kappa_charge, self.charge_log),
        )

    @property
    def has_logs(self) -> bool:
        """Whether any of the logarithmic amplitudes is there."""
        return any(any(log) for _, _, log in self.terms())

    @property
    def numbers(self) -> list[complex]:
        """Everything that may be complex."""
        return [x for amplitude, kappa, log in self.terms() for x in (amplitude, kappa, *log)]


def log_powers(kappa: complex, count: int) -> NDArray:
    """kappa^(p-1) for p = 0..count-1, 0 at p = 0: a logarithmic ray starts at k^2."""
    p = np.arange(count)
    return real_if_real(np.where(p > 0, np.asarray(kappa, dtype=complex) ** np.maximum(p - 1, 0), 0.0))


def at_heights(log: Linear, z: NDArray | float, source: NDArray) -> NDArray:
    """``c0 + c1 z + c2 z'``, real where it is."""
    return real_if_real(np.asarray(log[0] + log[1] * z + log[2] * source))


@dataclass(frozen=True)
class CrossRay:
    """A ray of the kernel K_c between the charges of one zone and the vertical currents of another (`columns`)."""

    mirrored: bool
    lift: float
    pair: tuple[int, int]
    amplitude: complex
    kappa: complex

    def height(self, source: NDArray) -> NDArray:
        """Apparent height of sources at the given heights, m."""
        return (-source if self.mirrored else source) + self.lift


def real_if_real(values: NDArray) -> NDArray:
    """The real part where there is no other."""
    values = np.asarray(values)
    return np.real(values).copy() if not np.any(np.imag(values)) else values


def air_rays(ground: bool) -> list[Ray]:
    """Direct, and the ground's image: sources of opposite sign, mirrored geometry (also of vertical currents)."""
    return [Ray(), Ray(mirrored=True, current=-1.0, charge=-1.0)] if ground else [Ray()]


def layered_rays(stack: Stack, zoning: Zoning, reach: float) -> tuple[list[Ray], list[CrossRay]]:
    """Rays between the zones of a cell, none longer than `reach` vertically (m) for all heights in them.

    Without magnetic layers every ray is right to the second order in k / k_t (`_Pair`); otherwise kappa is the mean
    permittivity at both ends, and the one of `layered_kernel.interface_terms` along an interface.
    """
    rays: list[Ray] = []
    cross: list[CrossRay] = []
    for o, observer in enumerate(zoning.zones):
        for s, source in enumerate(zoning.zones):
            if observer.is_level and source.is_level and np.any(stack.permeability != 1):
                rays += _level_rays(stack, (o, s), observer.low, source.low, reach)
                continue
            rays += _Pair(stack, observer, source, reach).rays((o, s))
            if not source.is_level:
                cross += _Pair(stack, observer, source, reach).cross_rays((o, s))
    return rays, cross


def check_sheets(stack: Stack, zoning: Zoning, far_radius: float) -> None:
    """Refuse conductors too close to a sheet of finite impedance.

    Rays take a sheet for opaque, which it is only for waves of high k_t; the Floquet waves up to `far_radius` (rad/m)
    make up for it where the last of them falls by `SHEET_DECAY` on its way there and back (measured: 3e-4 of Z then).

    Raises
    ------
    InputError
    """
    least = SHEET_DECAY / (2 * far_radius)
    for sheet in stack.sheets:
        gap = min(max(zone.low - sheet.height, sheet.height - zone.high) for zone in zoning.zones)
        if gap < least:
            raise InputError(
                f"a conductor comes within {max(gap, 0.0):.4g} m of the sheet at z = {sheet.height:g} m.",
                where=f"[[sheet]] '{sheet.name}'" if sheet.name else "[[sheet]]",
                allowed=f"at least {least:.4g} m on this lattice",
            )


def _level_rays(stack: Stack, pair: tuple[int, int], z: float, source: float, reach: float) -> list[Ray]:
    """Rays between horizontal conductors at two heights."""
    images = quasi_static_images(stack, z, source, d_max=reach)
    regions = [int(stack.region_at(h, side)) for h in (z, source) for side in ("below", "above")]
    kappa = complex(np.mean(stack.permittivity[regions] * stack.permeability[regions]))
    rays = []
    for d in np.unique(np.concatenate([images.a.distance, images.q.distance])):
        current, charge = (
            complex(part.amplitude[np.abs(part.distance - d) < 1e-12 + 1e-9 * d].sum()) for part in (images.a, images.q)
        )
        kappas = (kappa, kappa)
        if z == source and d == 0:
            terms = interface_terms(stack, z)
            kappas = (complex(terms.kappa_a), complex(terms.kappa_q))
        rays.append(Ray(False, float(z + d - source), pair, current, charge, *kappas))
    return rays


@dataclass
class _Sum:
    """Rays from one place: ``exp(-k_t d)/(2 k_t) [a + k^2 (b / k_t^2 + (c0 + c1 (z - z0) + c2 (z' - z0')) / k_t)]``."""

    a: complex = 0j
    b: complex = 0j
    c0: complex = 0j
    c1: complex = 0j
    c2: complex = 0j

    @property
    def parts(self) -> list[tuple[complex, complex]]:
        """(amplitude, kappa) of the rays ``exp(-g d)/(2 g)`` with the same a and b: their kappas sum to 2 b."""
        if abs(self.a) < 1e-12 and abs(self.b) < 1e-12:
            return []
        if abs(self.b) <= LARGEST_KAPPA * abs(self.a):
            return [(self.a, 2 * self.b / self.a)]
        return [(2 * self.b - self.a, 2.0), (2 * self.a - 2 * self.b, 1.0)]


class _Pair:
    """Traces rays between two zones to the second order in k / k_t.

    With ``g_i = k_t - eps_i k^2 / 2 k_t`` a path gathers ``eps_i d_i / 2`` over its lengths, and every interface bends
    its reflection,

        Gamma_TM = Gamma (1 + eps1 eps2 / (eps1 + eps2) k^2 / k_t^2),   Gamma_TE = (eps2 - eps1) / 4  k^2 / k_t^2

    from 1 to 2 (voltages; currents -Gamma). K_Q has the TM voltage to both orders and the TE voltage in the second, K_v
    the TE and the TM current likewise.
    """

    def __init__(self, stack: Stack, observer: Zone, source: Zone, reach: float):
        self.stack, self.observer, self.source, self.reach = stack, observer, source, reach
        self.parts = sections(stack)
        self.eps = np.array([complex(s.permittivity) for s in self.parts])
        self.mu = np.array([complex(s.permeability) for s in self.parts])
        self.shorts = np.array([s.shunt != 0 for s in self.parts])
        self.exact = bool(np.all(self.mu == 1))
        self.sections = self._side(observer, source), self._side(source, observer)
        self.z = 0.5 * (observer.low + observer.high)
        self.z_source = 0.5 * (source.low + source.high)

    def _side(self, zone: Zone, other: Zone) -> int:
        """Section of a zone: of a level on an interface the one on the side of the other zone."""
        below = zone.is_level and zone.low == self.parts[zone.section].low and other.section < zone.section
        return zone.section - 1 if below else zone.section

    def _trace(self, line: str, second: SecondOrder | None = None, *, antisymmetric: bool = False) -> list[Bounce]:
        """Rays of a line: "TM voltage", "TE voltage", "TM current" or "TE current"."""
        impedance = {
            "TM voltage": 1 / self.eps,
            "TE voltage": self.mu,
            "TM current": self.eps,
            "TE current": 1 / self.mu,
        }
        mirror = -1.0 if line.endswith("voltage") else 1.0
        sheets = self.shorts if line.startswith("TM") else np.zeros_like(self.shorts)
        room = self.observer.high - self.observer.low + self.source.high - self.source.low
        return trace(
            self.stack, self.z, self.z_source, impedance[line], mirror, sheets, self.reach + room, SMALLEST,
            antisymmetric=antisymmetric, where=self.sections, second=second if self.exact else None,
        )  # fmt: skip

    def rays(self, pair: tuple[int, int]) -> list[Ray]:
        """Currents and charges; rays from one place are one (or two with different kappas)."""
        one, two = self.eps[:, None], self.eps
        with_te = 0.25 * (two - one)
        tm = SecondOrder(-0.5 * self.eps, (one - two) / (one + two) * one * two / (one + two), self.eps)
        te_voltage = SecondOrder(0.5 * self.eps, with_te, self.eps)
        te_current = SecondOrder(-0.5 * self.eps, -with_te, self.eps)
        a = self._summed(self._trace("TE voltage", te_voltage))
        v = self._summed(self._trace("TE current", te_current), self._trace("TM current"))
        q = self._summed(self._trace("TM voltage", tm), self._trace("TE voltage"))
        found = []
        for key in {**q, **a, **v}:
            sums = [kind.get(key, _Sum()) for kind in (a, v, q)]
            logs = [self._log(key, total) for total in sums]
            parts = [total.parts for total in sums]
            for n in range(max(len(part) for part in parts)):
                (c, kc), (w, kw), (d, kd) = (part[n] if n < len(part) else (0.0, 1.0) for part in parts)
                ray = Ray(*key, pair, c, d, kc, kd, w, kw)
                found.append(ray if n else replace(ray, current_log=logs[0], vertical_log=logs[1], charge_log=logs[2]))
        return found

    def cross_rays(self, pair: tuple[int, int]) -> list[CrossRay]:
        """K_c: the TM less the TE voltage of a series source."""
        sums: dict[tuple[bool, float], list[complex]] = {}
        mu = complex(self.mu[self.sections[1]])
        for line, sign in (("TM voltage", mu), ("TE voltage", -mu)):
            for bounce in self._trace(line, antisymmetric=True):
                key = self._image(bounce)
                if self._nearest(*key) <= self.reach:
                    total = sums.setdefault(key, [0j, 0j])
                    total[0] += sign * bounce.amplitude
                    total[1] += sign * bounce.amplitude * self._kappa_c(bounce)
        return [CrossRay(*key, pair, a, ak / a) for key, (a, ak) in sums.items() if abs(a) > SMALLEST]

    def _summed(self, first: list[Bounce], second: list[Bounce] | None = None) -> dict[tuple[bool, float], _Sum]:
        """(mirrored, lift) -> orders; `second` : rays whose amplitude belongs to the second order."""
        sums: dict[tuple[bool, float], _Sum] = {}
        for bounce in first:
            key = self._image(bounce)
            if self._nearest(*key) > self.reach:
                continue
            total = sums.setdefault(key, _Sum())
            total.a += bounce.amplitude
            b, c = bounce.second if self.exact else (0.5 * self._mean() * bounce.amplitude, 0j)
            total.b += b
            total.c0 += c if self.exact else total.b * bounce.distance
            upwards = float(np.sign(self.z - self.z_source) or 1.0) if bounce.launched == 0 else 0.0
            half = 0.5 * bounce.amplitude
            total.c1 += half * self.eps[self.sections[0]] * (bounce.arriving or upwards)
            total.c2 -= half * self.eps[self.sections[1]] * (bounce.launched or upwards)
        for bounce in second or []:
            key = self._image(bounce)
            if self.exact and self._nearest(*key) <= self.reach:
                sums.setdefault(key, _Sum()).b += bounce.amplitude
        return sums

    def _log(self, key: tuple[bool, float], total: _Sum) -> Linear:
        """Amplitudes of ``k^2 exp(-g d)/(2 g^2)``: what ``c - b d`` leaves, linear in both heights."""
        mirrored, lift = key
        if not self.exact:
            return NOTHING
        image = (-self.z_source if mirrored else self.z_source) + lift
        side = np.sign(self.z - image) or 1.0
        d = abs(self.z - image)
        c1 = 0.0 if self.observer.is_level else total.c1 - total.b * side
        c2 = 0.0 if self.source.is_level else total.c2 + total.b * side * (-1 if mirrored else 1)
        c0 = total.c0 - total.b * d - c1 * self.z - c2 * self.z_source
        scale = 1e-9 * max(abs(total.a), abs(total.b), 1e-30)
        extent = max(self.stack.top, self.observer.high, self.source.high)
        return NOTHING if max(abs(c0) / extent, abs(c1), abs(c2)) < scale else (c0, c1, c2)

    def _image(self, bounce: Bounce) -> tuple[bool, float]:
        """Where the source seems to be: mirrored or not, and how far displaced.

        With a level on either side the two directions there are the same; then the image is not mirrored. Between two
        levels only the distance counts: the image is then below.
        """
        launched, arriving, d = bounce.launched, bounce.arriving, bounce.distance
        if self.observer.is_level and self.source.is_level:
            launched = arriving = 1
        if launched == 0:
            return False, 0.0
        if self.observer.is_level:
            arriving = launched
        if self.source.is_level:
            launched = arriving
        mirrored = launched != arriving
        lift = self.z - arriving * d + (self.z_source if mirrored else -self.z_source)
        grain = 1e-9 * max(self.stack.top, abs(self.z), abs(self.z_source))
        return mirrored, round(lift / grain) * grain

    def _nearest(self, mirrored: bool, lift: float) -> float:
        """Least vertical distance between observers and image."""
        ends = np.array([self.source.low, self.source.high])
        image = (-ends if mirrored else ends) + lift
        return max(0.0, float(image.min()) - self.observer.high, self.observer.low - float(image.max()))

    def _media(self, bounce: Bounce) -> tuple[complex, complex, bool] | None:
        """(eps here, eps there, passed) where the ray met one dielectric interface; None where it met several.

        A ray that met nothing or the ground alone stays in its own medium: eps here twice.
        """
        start = self.sections[1]
        if bounce.events is None or np.any(self.mu != 1):
            return None
        contrasts = [e for e in bounce.events if e[0] >= 0 and (e[0] == e[1] or self.eps[e[0]] != self.eps[e[1]])]
        if not contrasts:
            return self.eps[start], self.eps[start], False
        if len(contrasts) > 1 or any(event[0] < 0 for event in bounce.events):
            return None
        one, other = contrasts[0]
        return self.eps[one], self.eps[one + bounce.launched if one == other else other], one != other

    def _mean(self) -> complex:
        regions = list(self.sections)
        return complex(np.mean(self.eps[regions] * self.mu[regions]))

    def _kappa_c(self, bounce: Bounce) -> complex:
        """From ``(Gamma_TM - Gamma_TE) / k_t^2`` on an interface, to the second order in k / k_t."""
        media = self._media(bounce)
        if media is None:
            return self._mean()
        here, there, _ = media
        return complex(here * there / (here + there) + 0.25 * (here + there))
