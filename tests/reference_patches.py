"""Slow reference: rectangles of metal at several heights of a layered stack, by entire-domain functions.

The layers are written as a ladder of admittances, one ladder per polarisation: every interface is a node, a layer of
thickness d joins two of them with ``Y coth(g d)`` to ground at either end and ``-Y csch(g d)`` between (the two-port of
a line, g its propagation constant), the air above loads the top node with its wave admittance Y0. With the sheet
currents J (A/m) drawn from the nodes, ``E = -Y^-1 J``; a plane wave E0 from above is the Norton source 2 Y0 E0 at the
top. No expansion, no image, no product with `reference_slab`, which writes the same physics as impedances seen from
one plane.

On each rectangle both components are expanded in the edge functions of `reference_spectral` and the Galerkin sums run
over plain Floquet modes, whose far ends are treated as there. Time factor exp(+j w t); lengths in wavelengths.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from reference_pair import ETA, K0
from reference_spectral import Spectrum

Floats = NDArray[np.float64]
Complexes = NDArray[np.complexfloating]


@dataclass(frozen=True)
class Rectangle:
    """Metal at a node: sides along x and y, centre, and the Chebyshev orders in either direction."""

    node: int
    length: float
    width: float
    centre: tuple[float, float] = (0.0, 0.0)
    along: int = 40
    across: int = 8


@dataclass(frozen=True)
class Box:
    """A gap with a uniform field along x over `width` (x) by `span` (y), its middle relative to its rectangle's."""

    rectangle: int
    width: float
    span: float
    middle: tuple[float, float] = (0.0, 0.0)


@dataclass(frozen=True)
class Ladder:
    """Layers (relative permittivity, thickness) from the bottom to the top, air above.

    Over ground node i is the top of layer i; without ground node 0 is the bottom face and air lies below too.
    """

    layers: tuple[tuple[complex, float], ...]
    ground: bool = True

    def impedance(self, kt2: Floats, polarisation: str, k: float = K0) -> Complexes:
        """``Y^-1`` of the ladder, (n_kt, n_node, n_node), ohm."""
        kt2 = np.asarray(kt2, float)
        count = len(self.layers) + (not self.ground)
        y = np.zeros((*kt2.shape, count, count), complex)
        y[..., -1, -1] += wave_admittance(kt2, polarisation, 1.0, k)
        if not self.ground:
            y[..., 0, 0] += wave_admittance(kt2, polarisation, 1.0, k)
        for i, (permittivity, thickness) in enumerate(self.layers):
            upper = i if self.ground else i + 1
            decay = np.exp(-np.sqrt(kt2 - permittivity * k**2 + 0j) * thickness)
            own = wave_admittance(kt2, polarisation, permittivity, k)
            y[..., upper, upper] += own * (1 + decay**2) / (1 - decay**2)
            if upper > 0:
                y[..., upper - 1, upper - 1] += own * (1 + decay**2) / (1 - decay**2)
                mutual = -own * 2 * decay / (1 - decay**2)
                y[..., upper, upper - 1] += mutual
                y[..., upper - 1, upper] += mutual
        return np.linalg.inv(y)

    @property
    def height(self) -> float:
        """Of the top node above the bottom."""
        return float(sum(thickness for _, thickness in self.layers))


def wave_admittance(kt2: Floats, polarisation: str, permittivity: complex, k: float = K0) -> Complexes:
    """``H/E`` of one wave, S: TM ``j k eps / (eta g)``, TE ``g / (j k eta)``, g = sqrt(kt^2 - eps k^2)."""
    g = np.sqrt(np.asarray(kt2, float) - permittivity * k**2 + 0j)
    return 1j * k * permittivity / (ETA * g) if polarisation == "TM" else g / (1j * k * ETA)


@dataclass(frozen=True)
class PatchArray:
    """Rectangles in a rectangular lattice of periods a (x) by b (y), and how many Floquet orders count."""

    ladder: Ladder
    rectangles: tuple[Rectangle, ...]
    boxes: tuple[Box, ...] = ()
    periods: tuple[float, float] = (0.5, 0.5)
    orders: tuple[int, int] = (100, 100)
    k: float = K0

    @cached_property
    def starts(self) -> list[int]:
        """First unknown of every rectangle, and the number of all."""
        return [0, *np.cumsum([2 * r.along * r.across for r in self.rectangles]).tolist()]

    def _spectra(self, kt: Floats) -> list[tuple[Spectrum, Spectrum]]:
        step = 2 * np.pi / np.array(self.periods)
        for r in self.rectangles:
            if self.orders[0] * step[0] * r.length < 3 * r.along or self.orders[1] * step[1] * r.width < 3 * r.across:
                raise ValueError(f"{self.orders} orders are too few for {r.along} by {r.across} functions")
        return [
            (Spectrum(r.length, kt[0], step[0], self.orders[0]), Spectrum(r.width, kt[1], step[1], self.orders[1]))
            for r in self.rectangles
        ]

    def matrix(self, kt: Floats) -> Complexes:
        """Galerkin matrix; unknowns of each rectangle: Jx in (along, across), then Jy."""
        spectra = self._spectra(kt)
        lengthwise = [
            self._functions(x, r.along, r.centre[0]) for r, (x, _) in zip(self.rectangles, spectra, strict=True)
        ]
        crosswise = [
            self._functions(y, r.across, r.centre[1]) for r, (_, y) in zip(self.rectangles, spectra, strict=True)
        ]
        x, y = spectra[0]
        sums: dict = {}
        for index, kx in enumerate(x.kappa):
            for (i, j, c), kernel in self._kernels(kx, y.kappa).items():
                if i != j:  # samples of the far ends stand for one rectangle's own products only
                    kernel = np.where(np.arange(kernel.size) < y.near, kernel, 0) * (index < x.near)
                left, right = crosswise[i][1 - c[0]], crosswise[j][1 - c[1]]  # of Jx singular, of Jy regular
                sums.setdefault((i, j, c), []).append((left.conj() * kernel) @ right.T)
        z = np.zeros((self.starts[-1], self.starts[-1]), complex)
        for (i, j, c), rows in sums.items():
            left, right = lengthwise[i][c[0]], lengthwise[j][c[1]]
            full = np.einsum("np,pab,kp->nakb", left.conj(), np.array(rows), right, optimize=True)
            m, n = left.shape[0] * full.shape[1], right.shape[0] * full.shape[3]
            row, column = self.starts[i] + c[0] * m, self.starts[j] + c[1] * n
            z[row : row + m, column : column + n] = full.reshape(m, n) / np.prod(self.periods)
        return z

    @staticmethod
    def _functions(spectrum: Spectrum, count: int, centre: float) -> tuple[Complexes, Complexes]:
        """Transforms that vanish at the ends, and those that are infinite there."""
        phase = np.exp(1j * spectrum.kappa * centre)
        return spectrum.regular(count) * phase, spectrum.singular(count) * phase

    def _kernels(self, kx: float, ky: Floats) -> dict[tuple[int, int, tuple[int, int]], Complexes]:
        """``-E/J`` between rectangles i, j and components c = (field, current), each (n_ky,)."""
        kt2 = kx**2 + ky**2
        tm, te = self.ladder.impedance(kt2, "TM", self.k), self.ladder.impedance(kt2, "TE", self.k)
        safe = np.where(kt2 == 0, 1.0, kt2)  # at kt = 0 both polarisations are alike
        along, mixed = np.where(kt2 == 0, 1.0, kx**2 / safe), kx * ky / safe
        result = {}
        for i, one in enumerate(self.rectangles):
            for j, two in enumerate(self.rectangles):
                m, e = tm[:, one.node, two.node], te[:, one.node, two.node]
                result[i, j, (0, 0)] = along * m + (1 - along) * e
                result[i, j, (1, 1)] = along * e + (1 - along) * m
                result[i, j, (0, 1)] = result[i, j, (1, 0)] = mixed * (m - e)
        return result

    def gap_vector(self, box: Box) -> Floats:
        """Current through a gap of every unknown: its integral over the box by closed forms, over the box's width."""
        r = self.rectangles[box.rectangle]
        n, m = np.arange(r.along), np.arange(r.across)
        x = np.arccos(np.clip(2 * (box.middle[0] + np.array([1, -1]) * box.width / 2) / r.length, -1, 1))
        y = np.arccos(np.clip(2 * (box.middle[1] + np.array([1, -1]) * box.span / 2) / r.width, -1, 1))

        def cosine(order: NDArray, t: Floats) -> Floats:  # INT cos(order t) dt between both ends
            safe = np.where(order == 0, 1, order)
            return np.where(order == 0, t[1] - t[0], (np.sin(safe * t[1]) - np.sin(safe * t[0])) / safe)

        profile = r.length / 2 * (cosine(n, x) - cosine(n + 2, x)) / 2  # U_n(cos t) sin^2 t
        v = np.zeros(self.starts[-1])
        start = self.starts[box.rectangle]
        v[start : start + n.size * m.size] = np.outer(profile, r.width / 2 * cosine(m, y)).ravel() / box.width
        return v

    def impedance(self, kt: Floats) -> Complexes:
        """Active multiport impedance of the gaps, ohm."""
        v = np.stack([self.gap_vector(box) for box in self.boxes], axis=1)
        return np.linalg.inv(v.T @ np.linalg.solve(self.matrix(np.asarray(kt)), v))

    def reflection(self, kt: Floats, azimuth: float = 0.0) -> Complexes:
        """Power waves of order (0, 0) that leave upwards, (out, in), 0 TM and 1 TE; phase reference z = 0; gaps closed.

        `azimuth` (rad) gives the direction of TM fields where kt = 0.
        """
        kt = np.asarray(kt, float)
        kt2 = np.array([kt @ kt])
        phi = azimuth if kt2[0] == 0 else np.arctan2(kt[1], kt[0])
        axes = np.array([[np.cos(phi), np.sin(phi)], [-np.sin(phi), np.cos(phi)]])
        z = np.stack([self.ladder.impedance(kt2, p, self.k)[0] for p in ("TM", "TE")])
        y0 = np.array([wave_admittance(kt2, p, 1.0, self.k)[0].real for p in ("TM", "TE")])
        polar = axes @ self._plane_transforms(kt)
        node = np.repeat([r.node for r in self.rectangles], np.diff(self.starts))
        seen = polar * z[:, node, -1]  # by reciprocity also the field at the top of a current at the node
        tested = (polar.conj() * z[:, node, -1]).T * 2 * y0  # INT f . E of the waves without metal
        current = np.linalg.solve(self.matrix(kt), tested)
        field = 2 * np.diag(y0 * z[:, -1, -1]) - np.eye(2) - seen @ current / np.prod(self.periods)
        root = np.sqrt(y0)
        turn = np.exp(2j * np.sqrt(self.k**2 - kt2[0]) * self.ladder.height)
        return turn * root[:, None] * field / root

    def _plane_transforms(self, kt: Floats) -> Complexes:
        """Both components of ``INT f exp(+j kt . r)`` of every unknown, (2, n)."""
        result = np.zeros((2, self.starts[-1]), complex)
        for r, start in zip(self.rectangles, self.starts, strict=False):
            (x0, x1), (y0, y1) = (
                self._functions(Spectrum(side, q, 1.0, 0), count, centre)
                for side, q, count, centre in zip((r.length, r.width), kt, (r.along, r.across), r.centre, strict=True)
            )
            half = r.along * r.across
            result[0, start : start + half] = np.outer(x0[:, 0], y1[:, 0]).ravel()
            result[1, start + half : start + 2 * half] = np.outer(x1[:, 0], y0[:, 0]).ravel()
        return result
