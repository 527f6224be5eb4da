"""Rays: the ways in which a source reaches an observer in the quasi-static limit.

In air there is the direct ray and, over ground, the one from the mirror image. In a layered stack there are the
direct ray and reflections at interfaces, with other amplitudes for currents (K_A, K_v) and charges (K_Q) and another
effective wavenumber ``kappa k^2``. The near part sums Ewald's kernels over rays; whatever the rays leave out is in the
far part, which knows the exact kernel, so their choice changes the number of Floquet waves needed and nothing else.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.stack import Stack
from .bounces import Bounce, trace
from .layered_kernel import interface_terms
from .lines import sections
from .static_images import quasi_static_images
from .zones import Zone, Zoning

Floats = NDArray[np.float64]
MIRROR = np.array([1.0, 1.0, -1.0])
SMALLEST = 1e-6  # weaker rays are left to the far part


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
    """

    mirrored: bool = False
    lift: float = 0.0
    pair: tuple[int, int] | None = None
    current: complex = 1.0
    charge: complex = 1.0
    kappa_current: complex = 1.0
    kappa_charge: complex = 1.0

    def place(self, points: Floats, shift: Floats) -> Floats:
        """Source points (..., 3) as the observer sees them, displaced by a lattice vector (3,)."""
        return (points * MIRROR if self.mirrored else points) + shift + np.array([0.0, 0.0, self.lift])

    def powers(self, count: int) -> tuple[NDArray, NDArray]:
        """Amplitude times kappa^p, p = 0..count-1, for currents and charges; real where they are."""
        p = np.arange(count)
        return real_if_real(self.current * self.kappa_current**p), real_if_real(self.charge * self.kappa_charge**p)

    def height(self, source: NDArray) -> NDArray:
        """Apparent height of sources at the given heights, m."""
        return (-source if self.mirrored else source) + self.lift


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

    Close to an interface kappa is the one that cancels the second term of the large-k_t expansion
    (`layered_kernel.interface_terms`); elsewhere the mean permittivity at both ends does.
    """
    rays: list[Ray] = []
    cross: list[CrossRay] = []
    for o, observer in enumerate(zoning.zones):
        for s, source in enumerate(zoning.zones):
            if observer.is_level and source.is_level:
                rays += _level_rays(stack, (o, s), observer.low, source.low, reach)
                continue
            rays += _Pair(stack, observer, source, reach).rays((o, s))
            if not source.is_level:
                cross += _Pair(stack, observer, source, reach).cross_rays((o, s))
    return rays, cross


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


class _Pair:
    """Traces rays between two zones, at least one of which has an extent in z."""

    def __init__(self, stack: Stack, observer: Zone, source: Zone, reach: float):
        self.stack, self.observer, self.source, self.reach = stack, observer, source, reach
        self.parts = sections(stack)
        self.eps = np.array([complex(s.permittivity) for s in self.parts])
        self.mu = np.array([complex(s.permeability) for s in self.parts])
        self.shorts = np.array([s.shunt != 0 for s in self.parts])
        self.sections = self._side(observer, source), self._side(source, observer)
        self.z = 0.5 * (observer.low + observer.high)
        self.z_source = 0.5 * (source.low + source.high)

    def _side(self, zone: Zone, other: Zone) -> int:
        """Section of a zone: of a level on an interface the one on the side of the other zone."""
        below = zone.is_level and zone.low == self.parts[zone.section].low and other.section < zone.section
        return zone.section - 1 if below else zone.section

    def _trace(self, charges: bool, antisymmetric: bool = False) -> list[Bounce]:
        """Rays of the TM voltage (charges) or of the TE voltage (currents)."""
        impedance, sheets = (1 / self.eps, self.shorts) if charges else (self.mu, np.zeros_like(self.shorts))
        room = self.observer.high - self.observer.low + self.source.high - self.source.low
        return trace(
            self.stack, self.z, self.z_source, impedance, -1.0, sheets, self.reach + room, SMALLEST,
            antisymmetric=antisymmetric, where=self.sections,
        )  # fmt: skip

    def rays(self, pair: tuple[int, int]) -> list[Ray]:
        """Currents and charges; rays from one place are one."""
        currents = self._merged(self._trace(False), self._kappa_a)
        charges = self._merged(self._trace(True), self._kappa_q)
        none = (0.0, 1.0)
        found = []
        for key in {**charges, **currents}:
            (current, kappa_current), (charge, kappa_charge) = currents.get(key, none), charges.get(key, none)
            found.append(Ray(*key, pair, current, charge, kappa_current, kappa_charge))
        return found

    def cross_rays(self, pair: tuple[int, int]) -> list[CrossRay]:
        """K_c: the TM less the TE voltage of a series source."""
        tm = self._merged(self._trace(True, True), self._kappa_c)
        te = self._merged(self._trace(False, True), self._kappa_c)
        mu, found = complex(self.mu[self.sections[1]]), []
        for key in {**tm, **te}:
            amplitude = tm.get(key, (0.0, 1.0))[0] - te.get(key, (0.0, 1.0))[0]
            if abs(amplitude) > SMALLEST:
                kappa = tm.get(key) or te[key]
                found.append(CrossRay(*key, pair, mu * amplitude, kappa[1]))
        return found

    def _merged(
        self, bounces: list[Bounce], kappa: Callable[[Bounce], complex]
    ) -> dict[tuple[bool, float], tuple[complex, complex]]:
        """(mirrored, lift) -> (amplitude, kappa); kappa is weighted by the amplitudes."""
        sums: dict[tuple[bool, float], list[complex]] = {}
        for bounce in bounces:
            mirrored, lift = self._image(bounce)
            if self._nearest(mirrored, lift) > self.reach:
                continue
            total = sums.setdefault((mirrored, lift), [0j, 0j])
            total[0] += bounce.amplitude
            total[1] += bounce.amplitude * kappa(bounce)
        return {key: (a, ak / a) for key, (a, ak) in sums.items() if abs(a) > 1e-12}

    def _image(self, bounce: Bounce) -> tuple[bool, float]:
        """Where the source seems to be: mirrored or not, and how far displaced.

        With a level on either side the two directions there are the same; then the image is not mirrored.
        """
        launched, arriving, d = bounce.launched, bounce.arriving, bounce.distance
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

    def _kappa_a(self, bounce: Bounce) -> complex:
        media = self._media(bounce)
        return self._mean() if media is None else complex(0.5 * (media[0] + media[1]) if media[2] else media[0])

    def _kappa_q(self, bounce: Bounce) -> complex:
        media = self._media(bounce)
        if media is None:
            return self._mean()
        here, there, passed = media
        if here == there:
            return complex(here)
        return complex(2 * here * there / (here + there) - (0.0 if passed else here))

    def _kappa_c(self, bounce: Bounce) -> complex:
        """From ``(Gamma_TM - Gamma_TE) / k_t^2`` on an interface, to the second order in k / k_t."""
        media = self._media(bounce)
        if media is None:
            return self._mean()
        here, there, _ = media
        return complex(here * there / (here + there) + 0.25 * (here + there))
