"""Rays: the ways in which a source reaches an observer in the quasi-static limit.

In air there is the direct ray and, over ground, the one from the mirror image. In a layered stack there are the
direct ray and reflections at interfaces, with other amplitudes for currents (K_A) and charges (K_Q) and another
effective wavenumber ``kappa k^2``. The near part sums Ewald's kernels over rays; whatever the rays leave out is in the
far part, which knows the exact kernel, so their choice changes the number of Floquet waves needed and nothing else.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.stack import Stack
from .layered_kernel import interface_terms
from .static_images import quasi_static_images

Floats = NDArray[np.float64]
MIRROR = np.array([1.0, 1.0, -1.0])


@dataclass(frozen=True)
class Ray:
    """One ray, for all elements or for those at one pair of heights.

    Attributes
    ----------
    mirrored : the source is mirrored in z = 0 first
    lift : then displaced vertically, m
    heights : (observer, source) heights it belongs to, m; None: all
    current, charge : amplitudes of 1/(4 pi R) for currents and charges
    kappa_current, kappa_charge : effective ``k^2`` in units of the free-space one
    """

    mirrored: bool = False
    lift: float = 0.0
    heights: tuple[float, float] | None = None
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
        return _real(self.current * self.kappa_current**p), _real(self.charge * self.kappa_charge**p)


def _real(values: NDArray) -> NDArray:
    values = np.asarray(values)
    return np.real(values).copy() if not np.any(np.imag(values)) else values


def air_rays(ground: bool) -> list[Ray]:
    """Direct, and the ground's image: sources of opposite sign, mirrored geometry (also of vertical currents)."""
    return [Ray(), Ray(mirrored=True, current=-1.0, charge=-1.0)] if ground else [Ray()]


def layered_rays(stack: Stack, heights: Floats, reach: float) -> list[Ray]:
    """Rays between horizontal conductors at the given heights, no longer than `reach` vertically (m).

    A direct ray along one interface has the kappa that cancels the second term of the large-k_t expansion
    (`layered_kernel.interface_terms`); for the others kappa is the mean permittivity beside the two heights.
    """
    rays = []
    for z in heights:
        for source in heights:
            images = quasi_static_images(stack, float(z), float(source), d_max=reach)
            regions = [int(stack.region_at(h, side)) for h in (z, source) for side in ("below", "above")]
            kappa = complex(np.mean(stack.permittivity[regions] * stack.permeability[regions]))
            distances = np.unique(np.concatenate([images.a.distance, images.q.distance]))
            for d in distances:
                current, charge = (
                    complex(part.amplitude[np.abs(part.distance - d) < 1e-12 + 1e-9 * d].sum())
                    for part in (images.a, images.q)
                )
                kappas = (kappa, kappa)
                if z == source and d == 0:
                    terms = interface_terms(stack, float(z))
                    kappas = (complex(terms.kappa_a), complex(terms.kappa_q))
                lift, pair = float(z + d - source), (float(z), float(source))
                rays.append(Ray(False, lift, pair, current, charge, *kappas))
    return rays
