"""Points over (frequency, u, v) at which the reduced model is trained and checked."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.cell import UnitCell
from .guided_waves import guided_waves
from .sweep import wavenumber

Floats = NDArray[np.float64]

FREQUENCIES = 9
DIRECTIONS = 100  # in one half of the visible disc
NEAR_CIRCLES = (-0.01, 0.01)  # training points beside light and surface-wave circles, share of k
MOST_NEAR_CIRCLES = 60


@dataclass(frozen=True)
class Training:
    """Training points (n, 3): frequency in Hz, u, v."""

    points: Floats

    @property
    def _scaled(self) -> Floats:
        """Points with every coordinate over its range."""
        low, span = self.points.min(axis=0), np.ptp(self.points, axis=0)
        return (self.points - low) / np.where(span > 0, span, 1.0)

    def spread(self, count: int) -> Floats:
        """Points far from each other, (count, 3): each the farthest from those before it, first the middle one."""
        scaled = self._scaled
        chosen = [int(np.argmin(((scaled - scaled.mean(axis=0)) ** 2).sum(axis=1)))]
        distance = ((scaled - scaled[chosen[0]]) ** 2).sum(axis=1)
        while len(chosen) < min(count, len(scaled)):
            chosen.append(int(np.argmax(distance)))
            distance = np.minimum(distance, ((scaled - scaled[chosen[-1]]) ** 2).sum(axis=1))
        return self.points[chosen]

    def separate_worst(self, estimates: Floats, taken: Floats, count: int, apart: float = 0.15) -> Floats:
        """Points of largest estimates, apart from each other and none of those already taken (n, 3)."""
        scaled = self._scaled
        free = ~(self.points[:, None] == taken).all(axis=2).any(axis=1)
        score = np.where(free, estimates, -1.0)
        chosen: list[int] = []
        while len(chosen) < count and score.max() >= 0:
            best = int(np.argmax(score))
            chosen.append(best)
            score = np.where(((scaled - scaled[best]) ** 2).sum(axis=1) < apart**2, -1.0, score)
        return self.points[chosen]


def training_points(cell: UnitCell, band: tuple[float, float], scan_radius: float) -> Training:
    """Frequencies dense at the band's edges, directions over one half of the disc (the other follows by reciprocity),
    and points beside the circles where Floquet waves graze or meet a surface wave."""
    count = FREQUENCIES if band[1] > band[0] * (1 + 1e-12) else 1
    frequency = 0.5 * (band[0] + band[1]) - 0.5 * (band[1] - band[0]) * np.cos(np.pi * np.linspace(0, 1, count))
    frequency = np.clip(frequency, *band)
    disc = _half_disc(max(DIRECTIONS, int(DIRECTIONS * scan_radius**2)), scan_radius)
    groups = []
    for hertz in frequency:
        extra = _beside_circles(cell, float(hertz), scan_radius)
        uv = np.concatenate([disc, extra])
        groups.append(np.column_stack([np.full(len(uv), hertz), uv]))
    return Training(np.concatenate(groups))


def random_points(band: tuple[float, float], scan_radius: float, count: int, random: np.random.Generator) -> Floats:
    """Points (count, 3) uniform over the band and the disc."""
    radius, angle = scan_radius * np.sqrt(random.uniform(size=count)), random.uniform(0, 2 * np.pi, count)
    frequency = random.uniform(band[0], band[1], count)
    return np.column_stack([frequency, radius * np.cos(angle), radius * np.sin(angle)])


def _half_disc(count: int, radius: float) -> Floats:
    """Evenly spread points of the half disc v >= 0, rim included, (n, 2)."""
    n = np.arange(2 * count)
    r, angle = np.sqrt((n + 0.5) / (2 * count)), n * np.pi * (3 - np.sqrt(5))
    points = np.column_stack([r * np.cos(angle), r * np.sin(angle)])
    rim = np.linspace(0, np.pi, 16, endpoint=False)
    points = np.concatenate([points[points[:, 1] >= 0], np.column_stack([np.cos(rim), np.sin(rim)]) * 0.9999])
    return radius * np.concatenate([[[0.0, 0.0]], points])


def _beside_circles(cell: UnitCell, frequency: float, scan_radius: float) -> Floats:
    """Points on either side of the circles ``|k_t + G| = beta`` inside the half disc, at most MOST_NEAR_CIRCLES."""
    k = wavenumber(frequency)
    stack = cell.stack if cell.stack is not None and not cell.stack.is_air else None
    radii = [1.0] + ([] if stack is None else [float(np.real(wave.beta)) for wave in guided_waves(stack, k)])
    angle = np.linspace(0, 2 * np.pi, 48, endpoint=False)
    rim = np.column_stack([np.cos(angle), np.sin(angle)])
    found = [np.zeros((0, 2))]
    for beta in radii:
        for order in cell.lattice.orders_within((beta + scan_radius) * k, np.zeros(2)):
            centre = -order @ cell.lattice.reciprocal / k
            found += [centre + (beta + step) * rim for step in NEAR_CIRCLES]
    points = np.concatenate(found)
    points = points[(np.linalg.norm(points, axis=1) <= scan_radius) & (points[:, 1] >= 0)]
    step = max(1, int(np.ceil(len(points) / MOST_NEAR_CIRCLES)))
    return points[::step]
