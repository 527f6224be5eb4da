"""Coupling coefficients of the infinite array: the inverse Brillouin-zone transform of the active scattering matrix,

    S_m = (S / 4 pi^2) int S(k_t) exp(j k_t . rho_m) d^2 k_t,      S(k_t) = sum_m S_m exp(-j k_t . rho_m),

so that S_m leads from the ports of cell m to those of the home cell, all ports terminated in their references.

S(k_t) has square roots on the light circles of all Floquet waves and varies fast beside the circles of surface waves; a
grid smears both. With ``k_t = s b1 + t b2`` every line of constant t is cut where it meets a circle, and t where a line
touches a circle or two circles cross; on each piece ``sin(pi x / 2)`` takes the place of the variable, which turns
square roots at either end into polynomials, and Gauss's rule follows. The rule is refined until two orders agree.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .guided_waves import guided_waves
from .operator import SPEED_OF_LIGHT
from .quadrature import gauss
from .reduced import ReducedModel

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

FIRST_ORDER = 6
GROWTH = 1.5
NODES_PER_PERIOD = 4.0  # further nodes for every period of exp(j k_t . rho) across a piece
LONGEST = 0.25  # of a piece, as a share of the zone
SAFETY = 3.0  # stated error over the change by the last refinement
SAME = 1e-7  # cuts closer than this are one


@dataclass(frozen=True)
class InfiniteCouplings:
    """Couplings between the cells of the infinite array.

    Attributes
    ----------
    offsets : (n, 2) cells m, in the case's own lattice; `positions` : (n, 2) m
    scattering : (n, n_port, n_port), from the ports of cell m (second index) to those of the home cell (first)
    error : stated error of every coefficient, SAFETY times the largest change by the last refinement
    points : directions at which the active scattering matrix was worked out, in all
    """

    offsets: Ints
    positions: Floats
    scattering: Complexes
    error: float
    points: int

    @property
    def distance(self) -> Floats:
        """From the home cell, (n,) m."""
        return np.linalg.norm(self.positions, axis=1)

    def active(self, kt: Floats) -> Complexes:
        """Active scattering matrices (n, n_port, n_port) at k_t (n, 2) from the coefficients at hand alone."""
        return np.tensordot(np.exp(-1j * np.asarray(kt) @ self.positions.T), self.scattering, 1)


def infinite_couplings(
    model: ReducedModel, frequency: float, offsets: ArrayLike, *, error: float = 1e-5, limit: int = 200_000
) -> InfiniteCouplings:
    """Coefficients S_m for offsets m (n, 2).

    Parameters
    ----------
    model : ReducedModel trained over the whole Brillouin zone (`array_basis.build_array_model`)
    frequency : Hz, within its band
    error : wanted error of every coefficient
    limit : directions at most; beyond, the error reached so far is stated
    """
    k = 2 * np.pi * frequency / SPEED_OF_LIGHT
    offsets = np.asarray(offsets, dtype=np.int64).reshape(-1, 2)
    rules = [_Refined(model, k, offsets, along) for along in (0, 1)]
    for _ in range(2):
        for rule in rules:
            rule.refine()
    best = min(rules, key=lambda rule: rule.change)
    total = sum(rule.points for rule in rules)
    while SAFETY * best.change > error and total + best.next_points() <= limit:
        total += best.refine()
    return InfiniteCouplings(offsets, model.cell.lattice.positions(offsets), best.value, SAFETY * best.change, total)


class _Refined:
    """The integral by rules of rising order; `change`: largest by the last refinement.

    Lines run along reciprocal vector `along`. They should cross the circles, not touch them, where a surface wave is
    hardly excited, hence narrow; which way is better depends on the element and is found by trying.
    """

    def __init__(self, model: ReducedModel, k: float, offsets: Ints, along: int):
        self.model, self.k, self.offsets = model, k, offsets
        self.circles = _Circles(model, k, along)
        self.order, self.points, self.change = FIRST_ORDER, 0, np.inf
        self.value = np.full((len(offsets), len(model.reference), len(model.reference)), np.nan, dtype=complex)

    def next_points(self) -> int:
        """Directions that the next refinement takes, about."""
        return int(GROWTH**2 * self.points)

    def refine(self) -> int:
        """One refinement; returns the number of directions it took."""
        coordinates, weights = self.circles.nodes(self.order, int(np.abs(self.offsets).max(initial=0)))
        values = self.model.solve(self.k, coordinates @ self.model.cell.lattice.reciprocal).scattering
        new = _transform(coordinates, weights, values, self.offsets)
        self.change = np.inf if np.isnan(self.value).any() else float(np.abs(new - self.value).max())
        self.value, self.order = new, int(np.ceil(GROWTH * self.order))
        self.points = len(weights)
        return self.points


def _transform(coordinates: Floats, weights: Floats, values: Complexes, offsets: Ints) -> Complexes:
    """From half of the zone; the other half by ``S(-k_t) = S(k_t)^T``."""
    flat = values.reshape(len(values), -1)
    phases = np.exp(2j * np.pi * (offsets @ coordinates.T))
    here, there = ((p * weights) @ flat for p in (phases, phases.conj()))
    shape = (len(offsets), *values.shape[1:])
    return here.reshape(shape) + there.reshape(shape).swapaxes(1, 2)


class _Circles:
    """The circles ``|k_t + G| = beta k`` where ``k_t = s b1 + t b2``, or with b1 and b2 exchanged."""

    def __init__(self, model: ReducedModel, k: float, along: int):
        lattice, stack = model.cell.lattice, model.view.stack
        self.along = along
        self.reciprocal = lattice.reciprocal[:: 1 if along == 0 else -1]
        waves = [] if stack is None else guided_waves(stack, k)
        radii = [k, *(k * float(np.real(wave.beta)) for wave in waves)]
        reach = max(radii) + float(np.abs(self.reciprocal).sum())
        orders = lattice.orders_within(reach)
        self.centres = np.concatenate([-orders @ lattice.reciprocal for _ in radii])
        self.radii = np.repeat(radii, len(orders))

    def nodes(self, order: int, longest: int) -> tuple[Floats, Floats]:
        """Coordinates (n, 2) and weights (n,) over the half 0 <= t <= 1/2 of the zone, for offsets up to `longest`."""
        points, weights = [], []
        for t, weight in zip(*_pieces(self.cuts_of_t(), order, longest), strict=True):
            s, inner = _pieces(self.cuts_of_s(t), order, longest)
            points.append(np.column_stack([s, np.full(len(s), t)]))
            weights.append(weight * inner)
        coordinates = np.concatenate(points)
        return coordinates if self.along == 0 else coordinates[:, ::-1], np.concatenate(weights)

    def cuts_of_s(self, t: float) -> Floats:
        """Where the line of constant t meets circles: cuts over one period, the first repeated at its end."""
        along = self.reciprocal[0]
        start = t * self.reciprocal[1] - self.centres
        middle, square = start @ along, along @ along
        under = middle**2 - square * ((start**2).sum(axis=1) - self.radii**2)
        root = np.sqrt(under[under > 0])
        met = np.concatenate([-middle[under > 0] - root, -middle[under > 0] + root]) / square
        cuts = _distinct(np.mod(met, 1.0))
        return np.append(cuts, cuts[0] + 1.0) if len(cuts) else np.array([0.0, 1.0])

    def cuts_of_t(self) -> Floats:
        """0, 1/2 and between them the t of lines that touch a circle, and of points where two circles cross."""
        inverse = np.linalg.inv(self.reciprocal)
        height = self.radii * np.linalg.norm(inverse[:, 1])
        centre = (self.centres @ inverse)[:, 1]
        found = [centre - height, centre + height, self._crossings() @ inverse[:, 1]]
        cuts = np.concatenate([np.mod(x, 1.0) for x in found])
        cuts = np.minimum(cuts, 1.0 - cuts)  # the other half by symmetry
        return _distinct(np.concatenate([[0.0, 0.5], cuts]))

    def _crossings(self) -> Floats:
        """Points (n, 2) where two circles cross, or nearly touch, one of them about 0."""
        found = [np.zeros((0, 2))]
        for radius in np.unique(self.radii):
            for centre, other in zip(self.centres, self.radii, strict=True):
                distance = float(np.linalg.norm(centre))
                if distance == 0 or not abs(radius - other) <= distance * 1.001 <= (radius + other) * 1.002:
                    continue
                along = 0.5 * (distance + (radius**2 - other**2) / distance)
                across = np.sqrt(max(radius**2 - along**2, 0.0))
                e = centre / distance
                found.append(along * e + np.outer([across, -across], [-e[1], e[0]]))
        return np.concatenate(found)


def _distinct(cuts: Floats) -> Floats:
    cuts = np.sort(cuts)
    return cuts[np.concatenate([[True], np.diff(cuts) > SAME])] if len(cuts) else cuts


def _pieces(cuts: Floats, order: int, longest: int) -> tuple[Floats, Floats]:
    """Nodes and weights of all pieces between cuts (n + 1,), square roots at their ends allowed."""
    nodes, weights = [], []
    for low, high in pairwise(cuts):
        x, w = gauss(order + int(np.ceil(NODES_PER_PERIOD * longest * (high - low))))
        angle = 0.5 * np.pi * (2 * x - 1)
        nodes.append(0.5 * (low + high) + 0.5 * (high - low) * np.sin(angle))
        weights.append(0.5 * np.pi * (high - low) * w * np.cos(angle))
    return np.concatenate(nodes), np.concatenate(weights)
