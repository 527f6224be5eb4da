"""Slow reference: plane-wave response of wire grids and strip grids at normal incidence.

Thin-screen formulas (G. G. MacFarlane, J. IEE 93 IIIA, 1946: first-order form; N. Marcuvitz, Waveguide
Handbook, 5-18 and 5-19: from memory) and a Galerkin solution for strips, exact in the limit, by Chebyshev
functions with the edge condition. A screen is a shunt reactance, ``Gamma = -1/(1 + j2X/eta)`` for the field
along the conductors. Lengths in wavelengths; `spacing` = a/lambda, `radius` and `width` relative to the
period a.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from reference_spectral import Spectrum

WIRE_GRID = {
    (0.1, 0.005): 0.82181,
    (0.1, 0.01): 0.87449,
    (0.1, 0.02): 0.92328,
    (0.3, 0.005): 0.42814,
    (0.3, 0.01): 0.50816,
    (0.3, 0.02): 0.61595,
}
"""(a/lambda, r/a) -> |Gamma|, E parallel to the wires (CLOSED; the formula itself good to 1 %)."""
INDUCTIVE_STRIPS = {0.1: 0.18551, 0.5: 0.03466}
"""w/a -> X/eta at a/lambda = 0.1, E along the strips (MEMORY + CLOSED, 2 %)."""
CAPACITIVE_STRIPS = {0.1: 0.74205, 0.5: 0.13863}
"""g/a (gap between strips) -> B eta at a/lambda = 0.1, E across the strips (MEMORY + CLOSED, 2 %)."""


def wire_grid_reactance(spacing: float, radius: float, terms: int = 20000) -> float:
    """``X/eta = (a/lambda) [ln(a/2 pi r) + SUM_n (1/sqrt(n^2 - (a/lambda)^2) - 1/n)]``; the sum falls as
    n^-3."""
    n = np.arange(1, terms + 1)
    return float(spacing * (-np.log(2 * np.pi * radius) + np.sum(1 / np.sqrt(n**2 - spacing**2) - 1 / n)))


def strip_grid_reactance(spacing: float, width: float) -> float:
    """Inductive strips, E along them: ``X/eta = (a/lambda) ln csc(pi w / 2a)``."""
    return float(-spacing * np.log(np.sin(np.pi * width / 2)))


def strip_grid_susceptance(spacing: float, gap: float) -> float:
    """Capacitive strips, E across them: ``B eta = 4 (a/lambda) ln csc(pi g / 2a)``."""
    return float(-4 * spacing * np.log(np.sin(np.pi * gap / 2)))


def reflection_of_reactance(reactance: complex) -> complex:
    """``Gamma = -1/(1 + j 2 X/eta)`` of a shunt reactance `reactance` = X/eta, normal incidence."""
    return -1 / (1 + 2j * reactance)


def reflection_of_susceptance(susceptance: complex) -> complex:
    """``Gamma`` of a shunt susceptance B eta (a series gap in the strips): ``-jb/(2 + jb)``."""
    return -1j * susceptance / (2 + 1j * susceptance)


def passivity_defect(reflection: complex) -> float:
    """``| |Gamma + 1/2| - 1/2 |``: zero for any lossless thin planar screen with one propagating wave
    (CLOSED)."""
    return abs(abs(reflection + 0.5) - 0.5)


def babinet_defect(reflection: complex, complement: complex) -> complex:
    """``T + T' - 1`` of a screen and its complement in the dual polarisation, with T = 1 + Gamma (CLOSED:
    zero)."""
    return 1 + reflection + complement


def strip_grid_reflection(
    spacing: float, width: float, field: str, functions: int = 8, orders: int = 400
) -> complex:
    """Reflection of perfectly conducting strips by Galerkin's method, normal incidence; exact in the limit.

    Parameters
    ----------
    spacing, width
        Period in wavelengths (< 1: one propagating wave) and strip width relative to it.
    field
        "along": E along the strips, ``Z = eta k / 2 kz`` (TE); "across": E across, ``Z = eta kz / 2k`` (TM).
    functions
        Chebyshev functions across the strip, symmetric ones among them counting.
    """
    k = 2 * np.pi
    lines = Spectrum(width * spacing, 0.0, 2 * np.pi / spacing, orders)
    kz = np.sqrt(k**2 - lines.kappa**2 + 0j)
    kz = np.where(kz.imag > 0, -kz, kz)
    profiles: NDArray[np.complex128]
    if field == "along":
        profiles, impedance = lines.singular(functions), k / (2 * kz)
    elif field == "across":
        profiles, impedance = lines.regular(functions), kz / (2 * k)
    else:
        raise ValueError(f"field {field!r} is neither 'along' nor 'across'")
    matrix = (profiles.conj() * impedance) @ profiles.T / spacing
    drive = profiles[:, orders]  # the plane wave is the order in the middle
    mean = drive.conj() @ np.linalg.solve(matrix, drive) / spacing
    return complex(-mean / 2)
