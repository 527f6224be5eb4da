"""Waveguide simulators: which guides show, with a few elements, what the infinite array does at one scan angle.

Walls of a rectangular guide in its TE10 mode mirror the elements inside to an infinite array that is scanned in the H
plane to ``sin(theta) = lambda / 2W`` (P. W. Hannan, M. A. Balfour, IEEE Trans. Antennas Propag. 13, 342, 1965; from
memory). The walls must be planes of symmetry of the array: through the elements or half way between them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..solver.active import ActiveModel
from ..solver.pattern import LIGHT_SPEED, decibel
from .job import Job

Floats = NDArray[np.float64]

MOST_HALVES = 8  # half lattice constants across the guide
STEEPEST = np.radians(80.0)


@dataclass(frozen=True)
class GuideRow:
    """One guide at one frequency: walls `width` and `height` apart (m), the scan angle it shows (rad) in the plane
    `phi` (rad), the reflection expected of the infinite array there (dB), and whether only the TE10 mode propagates."""

    frequency: float
    width: float
    height: float
    across: float
    theta: float
    phi: float
    level: float
    single: bool


def guide_plan(job: Job, active: ActiveModel, frequency: Floats) -> tuple[tuple[GuideRow, ...], str]:
    """Guides for the lowest, middle and highest frequency (n,), Hz, and what is to be kept in mind, or why there are
    none."""
    if job.co_polar not in ("x", "y") or len(active.driven) != 1:
        return (), "None planned: a TE10 guide shows one linear polarisation of one driven port."
    a, b = job.cell.lattice.vectors
    if abs(a @ b) > 1e-6 * np.linalg.norm(a) * np.linalg.norm(b):
        return (), "None planned: the walls must be planes of symmetry, which needs a rectangular lattice."
    field = np.array([np.cos(job.co_polar_angle), np.sin(job.co_polar_angle)])
    along = [abs(v @ field) / np.linalg.norm(v) for v in (a, b)]
    if max(along) < 1 - 1e-6:
        return (), "None planned: the polarisation lies along neither lattice vector."
    height_vector, width_vector = (a, b) if along[0] > along[1] else (b, a)
    height, spacing = float(np.linalg.norm(height_vector)), float(np.linalg.norm(width_vector))
    phi = float(np.arctan2(width_vector[1], width_vector[0]))
    rows = []
    for hertz in np.unique([frequency[0], frequency[len(frequency) // 2], frequency[-1]]):
        wave = LIGHT_SPEED / float(hertz)
        for halves in range(1, MOST_HALVES + 1):
            width = 0.5 * halves * spacing
            if wave >= 2 * width * np.sin(STEEPEST):
                continue
            theta = float(np.arcsin(wave / (2 * width)))
            uv = np.sin(theta) * np.array([[np.cos(phi), np.sin(phi)]])
            gamma = active.reflection(float(hertz), uv)[0, active.driven[0]]
            single = bool(width < wave and height < wave / 2)
            rows.append(
                GuideRow(float(hertz), width, height, halves / 2, theta, phi, float(decibel(abs(gamma) ** 2)), single)
            )
    note = (
        "The cell must be symmetric about both walls, which the program does not check. Guides in which more modes "
        "than TE10 propagate show the angle only if those modes are kept from being excited, by symmetry or loads."
    )
    return tuple(rows), note if rows else "None planned: no guide of up to four elements carries TE10 over the band."
