"""A path for integrals over k_t = 0..top of functions singular on the real axis, times Bessel functions J_n(k_t rho).

With exp(+j w t) and a little loss everywhere branch points and surface-wave poles lie just below the positive real
axis, so the path passes above them. It is lifted by about 1 / rho at most, where the Bessel functions have not grown
yet; panels shrink towards the singularities until Gauss's rule sees them far away.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.special import jv

from .quadrature import gauss

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

POINTS = 16  # Gauss nodes of a panel
TURN = 6.0  # rad; half of a panel's change of phase that POINTS nodes integrate to 1e-11
LIFT = 1.5  # of the path times the largest distance: the Bessel functions grow to exp(LIFT)
HIGHEST = 0.25  # lift over the first singularity, at most
GROWTH = 0.6  # size of a panel over its distance from the nearest singularity


def radial_contour(top: float, singular: Sequence[float], longest: float, extent: float) -> tuple[Complexes, Complexes]:
    """Nodes and weights (n,) for ``int_0^top dk_t``, rad/m.

    Parameters
    ----------
    top : end of the path, where the integrand has died, rad/m
    singular : real parts of the singularities, rad/m, all below `top`
    longest : largest distance rho, m
    extent : length that the integrand turns with besides (twice the size of the sources), m
    """
    lift = HIGHEST * min(singular)
    if longest > 0:
        lift = min(lift, LIFT / longest)
    largest = 2 * TURN / (longest + extent)
    places, edges = np.array(sorted(singular)), [0.5 * min(singular)]
    while edges[-1] < top:
        distance = np.abs(places - edges[-1]).min()
        step = min(largest, max(2 * lift, GROWTH * distance))
        edges.append(min(top, edges[-1] + step))
    start = edges[0] + 1j * lift
    count = max(1, int(np.ceil(abs(start) / largest)))
    corners = np.concatenate([start * np.arange(count) / count, np.array(edges) + 1j * lift])
    x, w = gauss(POINTS)
    width = np.diff(corners)[:, None]
    nodes, weights = corners[:-1, None] + width * x, width * w
    return nodes.ravel().astype(complex), weights.ravel().astype(complex)


def bessel_table(highest: int, z: Complexes) -> Complexes:
    """``J_n(z)``, n = 0..highest, for complex z of any shape close to the positive real axis, (highest + 1, *z.shape).

    Upwards recurrence where |z| exceeds the order, downwards (Miller's) from far above elsewhere (Abramowitz and
    Stegun, 9.1.27 and 9.12).
    """
    flat = np.asarray(z, dtype=complex).ravel()
    result = np.empty((highest + 1, flat.size), dtype=complex)
    large = np.abs(flat) > highest + 1
    up = flat[large]
    rising = [jv(0, up), jv(1, up)]
    for n in range(1, highest):
        rising.append(2 * n / up * rising[-1] - rising[-2])
    result[:, large] = np.array(rising[: highest + 1]).reshape(highest + 1, up.size)
    result[:, ~large] = _miller(highest, flat[~large])
    return result.reshape(highest + 1, *np.shape(z))


def _miller(highest: int, z: Complexes) -> Complexes:
    """Downward recurrence, normalised by ``J_0 + 2 sum J_2n = 1``."""
    small = np.abs(z) < 1e-12
    safe = np.where(small, 1.0, z)
    result = np.zeros((highest + 1, z.size), dtype=complex)
    start = highest + 1 + int(20 + 2.5 * np.sqrt(highest + 20))
    above, here = np.zeros(z.size, dtype=complex), np.full(z.size, 1e-30, dtype=complex)
    total = np.zeros(z.size, dtype=complex)
    for n in range(start, 0, -1):
        above, here = here, 2 * n / safe * here - above
        if n - 1 <= highest:
            result[n - 1] = here
        if n - 1 > 0 and (n - 1) % 2 == 0:
            total += 2 * here
        large = np.abs(here) > 1e100
        if large.any():
            above[large], here[large], total[large] = above[large] * 1e-100, here[large] * 1e-100, total[large] * 1e-100
            result[:, large] *= 1e-100
    result /= total + here
    result[:, small] = 0.0
    result[0, small] = 1.0
    return result
