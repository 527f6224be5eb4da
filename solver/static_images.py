"""Quasi-static images: what the layered kernels become for large k_t.

Where k_t exceeds every wavenumber, all waves decay like ``exp(-k_t |z|)`` whatever the medium, and a layered
kernel is a sum of rays that bounce between interfaces: ``sum a_n exp(-k_t d_n) / (2 k_t)``, which in space
is ``sum a_n / (4 pi R_n)``, ``R_n^2 = rho^2 + d_n^2``. The line impedances become proportional to mu (TE)
and 1/eps (TM), so that from medium 1 to 2

    voltage reflection: TE (mu2 - mu1)/(mu2 + mu1),   TM (eps1 - eps2)/(eps1 + eps2),   ground -1

The remainder after subtraction is smaller by ``k^2/k_t^2`` times the neighbouring permittivity, plus the
images beyond the given distance. A sheet of finite impedance turns TM-opaque (reflection -1) as k_t grows,
but only as ``1/k_t``, from about ``k_t = 2 k |Z| / eta`` on; its images are counted here, its remainder is
smaller by ``k/k_t`` only.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..geometry.stack import Side, Stack
from .bounces import trace
from .lines import sections

Floats = NDArray[np.float64]
Complexes = NDArray[Any]


@dataclass(frozen=True)
class Images:
    """Images of one kernel between two heights: ``sum amplitude exp(-k_t distance) / (2 k_t)``; sorted by
    distance.

    Attributes
    ----------
    amplitude : (n,) complex, dimensionless
    distance : (n,) m
    """

    amplitude: Complexes
    distance: Floats

    def spectral(self, kt: ArrayLike) -> Complexes:
        """The sum at transverse wavenumbers (n_kt,), real, rad/m; (n_kt,), m."""
        kt = np.atleast_1d(np.asarray(kt, dtype=float))
        return np.exp(-kt[:, None] * self.distance) @ self.amplitude / (2 * kt)


@dataclass(frozen=True)
class StaticImages:
    """Images of K_A, K_Q and K_zz between one observing and one source height."""

    a: Images
    q: Images
    zz: Images


def quasi_static_images(
    stack: Stack,
    z: float,
    z_prime: float,
    *,
    d_max: float | None = None,
    smallest: float = 1e-6,
    side: Side = "above",
    source_side: Side = "above",
) -> StaticImages:
    """Leading large-k_t terms of the kernels between two heights.

    Parameters
    ----------
    stack : Stack
    z, z_prime : heights of observer and source, m; on interfaces welcome
    d_max : images further than this are left out, m. Default: only the direct ray and one reflection from
    the next
        interface (or ground, or sheet) on either side of the pair count, with everything nearer.
    smallest : amplitudes below this share of the direct one are left out
    side, source_side : for K_zz, to which side's medium a height on an interface belongs

    Returns
    -------
    StaticImages
        On an interface the direct amplitudes are ``2 mu1 mu2/(mu1 + mu2)`` and ``2/(eps1 + eps2)``, as in
        `layered_kernel.interface_terms`. K_zz is ``(mu'/eps + mu/eps') x (TM current images) - mu mu' x (TE
        current images)``; K_tz and K_zt have no terms of this form.

    Raises
    ------
    ValueError
        If more than `bounces.MAX_RAYS` rays are needed: lower `d_max` or raise `smallest`.
    """
    here, there = float(stack.snap(z)), float(stack.snap(z_prime))
    region, region_s = int(stack.region_at(here, side)), int(stack.region_at(there, source_side))
    reach = _first_reflections(stack, here, there) if d_max is None else d_max
    eps, mu = stack.permittivity, stack.permeability.astype(complex)
    parts = sections(stack)
    medium_eps = np.array([s.permittivity for s in parts])
    medium_mu = np.array([complex(s.permeability) for s in parts])
    shorts = np.array([s.shunt != 0 for s in parts])
    none = np.zeros_like(shorts)

    def rays(impedance: Complexes, mirror: float, sheets: NDArray[np.bool_]) -> Images:
        found = trace(stack, here, there, impedance, mirror, sheets, reach, smallest)
        return _merge(
            np.array([bounce.amplitude for bounce in found], dtype=complex),
            np.array([bounce.distance for bounce in found], dtype=float),
        )

    tm_current, te_current = rays(medium_eps, 1.0, shorts), rays(1 / medium_mu, 1.0, none)
    ratio = mu[region_s] / eps[region] + mu[region] / eps[region_s]
    zz = _merge(
        np.concatenate([ratio * tm_current.amplitude, -mu[region] * mu[region_s] * te_current.amplitude]),
        np.concatenate([tm_current.distance, te_current.distance]),
    )
    return StaticImages(rays(medium_mu, -1.0, none), rays(1 / medium_eps, -1.0, shorts), zz)


def _first_reflections(stack: Stack, z: float, z_prime: float) -> float:
    """Longest of the paths with one reflection at the nearest interface or sheet below and above both
    heights."""
    nodes = np.array([s.low for s in sections(stack) if np.isfinite(s.low)])
    low, high = min(z, z_prime), max(z, z_prime)
    paths = [high - low]
    if (below := nodes[nodes < low]).size:
        paths.append(high + low - 2 * below[-1])
    if (above := nodes[nodes > high]).size:
        paths.append(2 * above[0] - high - low)
    return max(paths) * (1 + 1e-12)


def _merge(amplitude: Complexes, distance: Floats) -> Images:
    """Add images at the same distance, sort by distance, drop what cancelled."""
    order = np.argsort(distance, kind="stable")
    amplitude, distance = amplitude[order], distance[order]
    if not len(distance):
        return Images(amplitude, distance)
    scale = max(float(distance[-1]), 1e-300)
    first = np.concatenate([[True], np.diff(distance) > 1e-9 * scale])
    total = np.add.reduceat(amplitude, np.flatnonzero(first))
    keep = np.abs(total) > 1e-12 * np.abs(amplitude).max()
    return Images(total[keep], distance[first][keep])
