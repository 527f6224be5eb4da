"""Coupling matrices between two cells of the lattice, nothing but these two radiating: ``Z_m`` with
``Z(k_t) = sum_m exp(-j k_t . rho_m) Z_m``, in the reduced basis.

Near part and smooth rest of the reduced operator are lag by lag as they stand. The exact Floquet waves of all points of
the Brillouin zone together are one integral over the plane of k_t,

    X_m = (S / 4 pi^2) int T(-k)^T D(k) T(k) exp(j k . rho_m) d^2k,

singular on circles only: the light circle and those of the surface waves. In polar coordinates the angle is done in
closed form, harmonic by harmonic, and the radius on a path above the singularities (`radial_contour`):

    X_m = (S / 2 pi) sum_n j^n exp(j n phi_m) int G_n(k) J_n(k rho_m) k dk,   G_n the harmonics of T(-k)^T D T(k).

In layered stacks the window of the exact waves is not analytic; another one that is takes its place, and the
difference, smooth all over the zone, goes to the lags by samples on a grid like the rest. The singular part, whose
samples on a lattice would alias the surface waves of distant copies, is never sampled.
"""

from __future__ import annotations

from collections.abc import Iterator
from copy import copy
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import erfc

from .guided_waves import guided_waves
from .lag_sums import half_plane, lags_from_samples
from .mode_transforms import ModeTransforms
from .operator import ETA, SPEED_OF_LIGHT
from .operator_view import CellView, Window, couplings
from .radial_contour import bessel_table, radial_contour
from .reduced import ReducedModel
from .reduced_far import node_weights

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

EDGE = 3.9  # argument of erfc at the ends of the analytic window: 2e-8 is left there
DIFFERENCE_REACH = 7.0  # cells between which the difference of the windows couples, distance over sqrt(S)
CHUNK_BYTES = 1.5e8
NEGLIGIBLE = 1e-9  # harmonics below this share of the largest are left out


@dataclass(frozen=True)
class AnalyticWindow:
    """``erfc((k_t^2 - c) / d) / 2``: 1 up to `low`, 0 from `high` on but for 2e-8, entire in k_t^2; rad/m."""

    low: float
    high: float

    def __call__(self, square: NDArray) -> NDArray:
        """Weights for real or complex k_t^2."""
        centre, width = 0.5 * (self.high**2 + self.low**2), 0.5 * (self.high**2 - self.low**2) / EDGE
        return 0.5 * erfc((square - centre) / width)


@dataclass(frozen=True)
class _WindowDifference(Window):
    """Window of the exact waves less the analytic one, for `reduced_far.ExactWaves`."""

    def __call__(self, square: Floats) -> Floats:
        return Window(self.low, self.high)(square) - AnalyticWindow(self.low, self.high)(square)


def lag_couplings(model: ReducedModel, frequency: float, offsets: Ints) -> Complexes:
    """``Z_m`` of the loaded cells in the reduced basis, ohm, (n, r, r).

    Parameters
    ----------
    model : ReducedModel of any cell whose conductors do not join those of the next
    frequency : Hz, within the model's band
    offsets : (n, 2) cells of the source as seen from the observer, in the cell's own lattice; any order, (0, 0) too

    Conductor losses and loads are counted at (0, 0). ``Z_-m`` is the transpose of ``Z_m`` to rounding.

    Raises
    ------
    ValueError
        For a frequency outside the model's band.
    """
    k = 2 * np.pi * frequency / SPEED_OF_LIGHT
    low, high = model.band
    if not low * (1 - 1e-9) <= k <= high * (1 + 1e-9):
        raise ValueError(f"k = {k:g} rad/m lies outside the reduced model's band {low:g} to {high:g} rad/m")
    offsets = np.asarray(offsets, dtype=np.int64).reshape(-1, 2)
    unique, sign, place = _half(offsets)
    rho = model.cell.lattice.positions(unique)
    x = exact_lags(model, k, rho)
    _add_short(x, model, k, np.round(rho @ np.linalg.inv(model.view.lattice.vectors)).astype(np.int64))
    z = (1j * ETA / k) * x
    home = np.flatnonzero((unique == 0).all(axis=1))
    z[home] = 0.5 * (z[home] + z[home].swapaxes(1, 2)) + _loading(model, k)
    return np.where((sign > 0)[:, None, None], z[place], z[place].swapaxes(1, 2))


def _half(offsets: Ints) -> tuple[Ints, Ints, Ints]:
    """Distinct offsets up to sign (n_distinct, 2), the sign that leads to each offset, and its place among them."""
    negative = (offsets[:, 0] < 0) | ((offsets[:, 0] == 0) & (offsets[:, 1] < 0))
    sign = np.where(negative, -1, 1)
    unique, place = np.unique(offsets * sign[:, None], axis=0, return_inverse=True)
    return unique, sign, place.ravel()


def _add_short(x: Complexes, model: ReducedModel, k: float, cells: Ints) -> None:
    """Near part, smooth rest and, in stacks, the difference of the windows; `cells` in the reduced lattice."""
    groups = [(model.near.cells, model.near.at(k)), (model.rest[0], _rest(model, k))]
    if model.view.stack is not None:
        groups.append(_window_difference(model, k))
    index = {tuple(cell): i for i, cell in enumerate(cells.tolist())}
    for group, matrices in groups:
        for (p, q), matrix in zip(group.tolist(), matrices, strict=True):
            if (p, q) in index:
                x[index[p, q]] += matrix
            elif (-p, -q) in index:
                x[index[-p, -q]] += matrix.T


def _loading(model: ReducedModel, k: float) -> Complexes:
    """Conductor losses and loads in the home cell, ohm, (r, r)."""
    at = np.zeros((1, 2))
    total = np.zeros((model.size, model.size), dtype=complex)
    if model.losses.losses.names:
        total += model.losses.operator_at(k, at)[0]
    if model.cell.loads:
        through = model.loads.excitation(at)[0]
        impedance = [load.impedance(k * SPEED_OF_LIGHT / (2 * np.pi)) for load in model.cell.loads]
        total += (through * np.array(impedance)) @ through.T
    return total


def _rest(model: ReducedModel, k: float) -> Complexes:
    nodes = model.rest[1]
    return np.tensordot(node_weights(*model.band, len(nodes), k), nodes, 1)


def _window_difference(model: ReducedModel, k: float) -> tuple[Ints, Complexes]:
    """Half-plane cells and lag matrices X of the exact waves weighed with the difference of the two windows."""
    view = model.view
    exact = copy(model.exact)
    exact.view, exact.memory = replace(view, window=_WindowDifference(view.window.low, view.window.high)), None
    spacing = 2 * np.pi / np.linalg.norm(view.lattice.reciprocal, axis=1)
    reach = [int(r) for r in np.ceil(DIFFERENCE_REACH * np.sqrt(view.lattice.area) / spacing)]
    cells, counts = half_plane(*reach), 2 * np.array(reach) + 1
    kt, _ = exact.zone.reduce((cells / counts) @ view.lattice.reciprocal)
    samples = np.concatenate(
        [exact.matrices(np.array([k]), some)[:, 0] for some in np.array_split(kt, len(kt) // 8 + 1)]
    )
    phases = np.exp(2j * np.pi * ((cells / counts) @ cells.T))
    return cells, lags_from_samples(samples, phases, int(counts.prod()))


def exact_lags(model: ReducedModel, k: float, rho: Floats) -> Complexes:
    """X of the exact waves, under the analytic window in stacks, between cells rho (n, 2) apart, m; (n, r, r)."""
    view, r = model.view, model.size
    distance, angle = np.linalg.norm(rho, axis=1), np.arctan2(rho[:, 1], rho[:, 0])
    _, first, ring = np.unique(
        np.round(distance / max(distance.max(), 1e-300), 10), return_index=True, return_inverse=True
    )
    radii, members = distance[first], np.split(np.argsort(ring, kind="stable"), np.cumsum(np.bincount(ring))[:-1])
    singular = [k, *(k * wave.beta.real for wave in (guided_waves(view.stack, k) if view.stack is not None else []))]
    table = _PolarTransforms(model.exact.transforms, view.cloud.points, view.window.high)
    nodes, weights = radial_contour(view.window.high, singular, float(distance.max()), 4 * table.size)
    upper = np.triu_indices(r)
    halves = np.zeros((2, len(rho), len(upper[0])), dtype=complex)  # even orders are symmetric, odd ones antisymmetric
    for some, harmonics in _harmonics(view, table, k, nodes, upper):
        bessel = bessel_table(table.angles // 2, radii[:, None] * nodes[some])
        bessel *= (view.lattice.area / (2 * np.pi)) * weights[some] * nodes[some]
        loudest = np.abs(harmonics).max(axis=(1, 2))
        for parity in (0, 1):
            n = table.orders[(table.orders % 2 == parity) & (loudest > NEGLIGIBLE * loudest.max())]
            turns = 1j ** np.abs(n) * np.exp(1j * np.outer(angle, n))
            step = max(1, int(CHUNK_BYTES / (16 * len(n) * len(upper[0]) + 1)))
            for start in range(0, len(radii), step):
                radial = bessel[np.abs(n), start : start + step] @ harmonics[n]  # J_-n j^-n = J_n j^n
                for i, mine in enumerate(members[start : start + step]):
                    halves[parity, mine] += turns[mine] @ radial[:, i]
    result = np.zeros((len(rho), r, r), dtype=complex)
    result[:, upper[1], upper[0]] = halves[0] - halves[1]
    result[:, upper[0], upper[1]] = halves[0] + halves[1]
    return result


def _harmonics(
    view: CellView, table: _PolarTransforms, k: float, nodes: Complexes, upper: tuple[Ints, Ints]
) -> Iterator[tuple[slice, Complexes]]:
    """G_n of some nodes at a time, its upper triangle (n_angle, n_node, n_upper), order n at index n modulo n_angle."""
    angles, r = table.angles, int(upper[0].max()) + 1
    step = max(1, int(CHUNK_BYTES / (16 * angles * (2 * r * r + 4 * table.width * r))))
    for start in range(0, len(nodes), step):
        some = slice(start, min(start + step, len(nodes)))
        square = nodes[some] ** 2
        weight = np.ones(len(square), dtype=complex)
        if view.stack is not None:
            weight = AnalyticWindow(view.window.low, view.window.high)(square)
        plus = table.at(nodes[some])
        forms = np.zeros((len(square), angles // 2, r, r), dtype=complex)
        for (a, b), entries in couplings(view.exact, k, square).items():  # type: ignore[arg-type]
            for row, column, kernel, factor in entries:
                rows, columns = table.components[a], table.components[b]
                if row in rows and column in columns:
                    right = plus[b][:, : angles // 2, columns.index(column)]
                    left = plus[a][:, angles // 2 :, rows.index(row)]  # at -k: the opposite angle
                    applied = (factor * weight)[:, None, None, None] * (kernel[:, None] @ right)
                    forms += left.swapaxes(2, 3) @ applied
        whole = np.concatenate([forms[:, :, *upper], forms[:, :, *upper[::-1]]], axis=1)  # -k transposes
        yield some, np.ascontiguousarray(np.fft.fft(whole.transpose(1, 0, 2), axis=0)) / angles


def transforms_at(transforms: ModeTransforms, points: Floats) -> list[Complexes]:
    """Transforms of the basis at any k_t (n, 2) up to the largest kept, by layer (n, n_component, n_level, r)."""
    reduced, orders = transforms.zone.reduce(points)
    places, polynomials = transforms.find(orders), transforms.polynomials(reduced)
    result = [np.empty((len(points), *c.shape[2:]), dtype=complex) for c in transforms.coefficients]
    for place in np.unique(places):
        mine = np.flatnonzero(places == place)
        for target, field in zip(result, transforms.at(polynomials[mine], np.array([place])), strict=True):
            target[mine] = field[:, 0]
    return result


class _PolarTransforms:
    """Transforms at complex radius and real angle: polynomials in the radius (a transform is entire in k_t).

    Attributes
    ----------
    angles : number of equidistant angles; `size` : largest distance of the conductors from their centre, m
    components : by layer, as in `ModeTransforms`; `width` : components times levels of all layers
    """

    def __init__(self, transforms: ModeTransforms, points: Floats, top: float):
        self.size = float(np.linalg.norm(points[:, :2] - transforms.centre, axis=1).max())
        turns = top * self.size
        band = int(np.ceil(turns + 5 * np.cbrt(turns) + 5))  # harmonics of a transform: J_n(turns) below 1e-8 beyond
        self.angles = 4 * band
        self.components = transforms.components
        count = 2 * (band // 2 + 6)
        self._spread = np.pi * (np.arange(count) + 0.5) / count
        self.radii = top * np.cos(self._spread)
        phi = 2 * np.pi * np.arange(self.angles) / self.angles
        half = self.radii[: count // 2]
        points = (half[:, None, None] * np.stack([np.cos(phi), np.sin(phi)], -1)).reshape(-1, 2)
        fields = transforms_at(transforms, points)
        self._tables = []
        for field in fields:
            positive = field.reshape(len(half), self.angles, *field.shape[1:])
            negative = np.roll(positive, -(self.angles // 2), axis=1)[::-1]
            self._tables.append(np.concatenate([positive, negative]))  # the radii fall from top to -top
        self.width = sum(field.shape[1] * field.shape[2] for field in fields)

    @property
    def orders(self) -> Ints:
        """Angular orders by index of a discrete Fourier transform over the angles."""
        return np.fft.fftfreq(self.angles, 1 / self.angles).round().astype(np.int64)

    def at(self, radius: Complexes) -> list[Complexes]:
        """By layer (n, n_angle, n_component, n_level, r)."""
        terms = (-1.0) ** np.arange(len(self.radii)) * np.sin(self._spread) / (radius[:, None] - self.radii)
        weights = terms / terms.sum(axis=1, keepdims=True)  # barycentric; the path is off the nodes' axis
        flat = [table.reshape(len(self.radii), -1) for table in self._tables]
        return [(weights @ f).reshape(len(radius), *t.shape[1:]) for f, t in zip(flat, self._tables, strict=True)]
