"""Roots of the reduced operator between two points: where the array resonates without a source.

Between two matrices Z_1 and Z_2 of neighbouring points the operator is taken as linear, ``Z_1 + s (Z_2 - Z_1)``; its
roots s are the eigenvalues of ``(Z_1 - Z_2)^-1 Z_1``. A root with a small imaginary part is a resonance passed on the
way from one point to the other.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .reduced import ReducedModel

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

STEP = 0.01  # of k between the two matrices from which a root in frequency is told
NEAR = 0.05  # of k from which roots are counted


def roots_between(model: ReducedModel, k1: float, k2: float, kt1: Floats, kt2: Floats) -> tuple[Ints, Complexes]:
    """All roots between pairs of points.

    Parameters
    ----------
    k1, k2 : wavenumbers of the first and the second point of every pair, rad/m
    kt1, kt2 : (n, 2) transverse wavenumbers, rad/m

    Returns
    -------
    (m,) number of the pair of each root, (m,) the complex share s of the way from the first to the second point;
    those with |s| > 10 are left out
    """
    if not len(kt1):
        return np.zeros(0, dtype=np.int64), np.zeros(0, dtype=complex)
    first, second = terminated(model, k1, kt1), terminated(model, k2, kt2)
    inverse = np.linalg.eigvals(np.linalg.solve(first, first - second))  # 1/s, free of infinite roots
    pair, root = np.nonzero(np.abs(inverse) > 0.1)
    return pair, np.asarray(1 / inverse[pair, root], dtype=complex)


def terminated(model: ReducedModel, k: float, kt: Floats) -> Complexes:
    """``V^T Z V`` of the array with its ports' reference resistances across their gaps, ohm, (n, r, r)."""
    kt0, _ = model.exact.zone.reduce(kt)
    into, out = model.ports.excitation(kt0), model.ports.excitation(-kt0)
    return model.matrix(k, kt) + (into * model.reference) @ out.swapaxes(1, 2)


def quality(model: ReducedModel, k: float, kt: Floats) -> float:
    """Quality factor of the root nearest in frequency at fixed kt (2,), rad/m: Re k_r / (2 |Im k_r|).

    NaN where none lies within NEAR of k, or where the model's band is a single frequency. Not to be trusted close to a
    surface wave or a grazing wave, where the operator is far from linear.
    """
    low, high = model.band
    step = min(STEP * k, high - low)
    if step < 1e-6 * k:
        return np.nan
    k1 = float(np.clip(k - 0.5 * step, low, high - step))
    _, place = roots_between(model, k1, k1 + step, kt[None], kt[None])
    found = k1 + step * place
    found = found[np.abs(found.real / k - 1) < NEAR]
    if not len(found):
        return np.nan
    nearest = found[np.argmin(np.abs(found - k))]
    return float(nearest.real / max(2 * abs(nearest.imag), 1e-12 * k))
