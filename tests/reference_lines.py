"""Slow reference: fields of the TE and TM lines by plain 2 x 2 chain matrices, one point at a time.

No Green's function formula: the outgoing solutions above and below are joined across the source by a linear solve.
Good for moderate electrical thickness only (cosh and sinh as they come).
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scanward.geometry.stack import Stack

ETA = 376.730313668


def _medium(stack: Stack, z: float, k: float, kt: complex, p: str) -> tuple[complex, complex]:
    """kz and line impedance at a height inside a region."""
    n = int(np.searchsorted(stack.interfaces, z))
    eps, mu = complex(stack.permittivity[n]), float(stack.permeability[n])
    kz = np.sqrt(complex(eps * mu * k**2 - kt**2))
    kz = -kz if kz.imag > 0 else kz
    return kz, ETA * (kz / (k * eps) if p == "TM" else k * mu / kz)


def chain(stack: Stack, k: float, kt: complex, p: str, low: float, high: float) -> NDArray[np.complex128]:
    """Matrix that turns (V, I) at `low` into (V, I) at `high`, the sheets in between (ends excluded) included."""
    inner = [*stack.interfaces, *(s.height for s in stack.sheets)]
    cuts = sorted({low, high, *(float(h) for h in inner if low < h < high)})
    matrix = np.eye(2, dtype=complex)
    for a, b in pairwise(cuts):
        kz, z = _medium(stack, 0.5 * (a + b), k, kt, p)
        c, s = np.cos(kz * (b - a)), 1j * np.sin(kz * (b - a))
        matrix = np.array([[c, -z * s], [-s / z, c]]) @ matrix
        for sheet in stack.sheets:
            if sheet.height == b < high:
                matrix = np.array([[1, 0], [-1 / complex(sheet.impedance), 1]]) @ matrix
    return matrix


def fields(stack: Stack, k: float, kt: complex, p: str, z: float, source: float) -> dict[str, complex]:
    """vi, ii, vv, iv at z for unit sources at another height."""
    bottom, top = min(0.0 if stack.ground else -0.1, z, source), max(stack.top + 0.1, z, source)
    if stack.ground:
        down = np.array([0, 1], dtype=complex)
    else:
        down = np.array([_medium(stack, bottom - 1, k, kt, p)[1], -1])
    up = np.array([_medium(stack, top + 1, k, kt, p)[1], 1])

    def lower(h: float) -> NDArray[np.complex128]:
        return chain(stack, k, kt, p, bottom, h) @ down

    def upper(h: float) -> NDArray[np.complex128]:
        return np.linalg.solve(chain(stack, k, kt, p, h, top), up)

    result = {}
    for name, jump in (("v", [1, 0]), ("i", [0, 1])):
        above, below = np.linalg.solve(
            np.stack([upper(source), -lower(source)], axis=1), np.array(jump, dtype=complex)
        )
        voltage, current = above * upper(z) if z > source else below * lower(z)
        result["v" + name], result["i" + name] = complex(voltage), complex(current)
    return result
