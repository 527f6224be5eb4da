"""The lattice of the array: its vectors, its reciprocal lattice, and where grating lobes appear."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from .errors import InputError

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def _vector(name: str, value: object) -> Floats:
    vector = np.asarray(value, dtype=float)
    if vector.shape != (2,) or not np.all(np.isfinite(vector)):
        raise InputError(f"lattice vector {name} = {value} is not two finite lengths.", where="[lattice]")
    return vector


@dataclass(frozen=True)
class Lattice:
    """Planar lattice with cell m at ``rho_m = m[0] a + m[1] b`` in the plane z = const.

    Parameters
    ----------
    a, b
        Lattice vectors, shape (2,), metres. Any two that are not parallel.

    Raises
    ------
    InputError
        If a vector is not finite or the two are parallel (angle below 1 degree).
    """

    a: Floats
    b: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "a", _vector("a", self.a))
        object.__setattr__(self, "b", _vector("b", self.b))
        lengths = np.linalg.norm(self.vectors, axis=1)
        if not np.all(lengths > 0) or self.area < np.sin(np.radians(1.0)) * lengths.prod():
            raise InputError(
                f"lattice vectors a = {self.a.tolist()} m and b = {self.b.tolist()} m are parallel or zero.",
                where="[lattice]",
                allowed="two vectors at least 1 degree apart",
            )

    @cached_property
    def vectors(self) -> Floats:
        """Rows a and b, shape (2, 2), metres."""
        return np.stack([self.a, self.b])

    @cached_property
    def area(self) -> float:
        """Cell area S, square metres."""
        return float(abs(np.linalg.det(self.vectors)))

    @cached_property
    def reciprocal(self) -> Floats:
        """Rows b1 and b2 with ``b_i . a_j = 2 pi delta_ij``, shape (2, 2), rad/m."""
        return 2 * np.pi * np.asarray(np.linalg.inv(self.vectors), dtype=float).T

    @cached_property
    def reduced(self) -> Lattice:
        """The same lattice by its shortest basis (Lagrange-Gauss reduction)."""
        a, b = self.a.copy(), self.b.copy()
        while True:
            if np.dot(a, a) > np.dot(b, b):
                a, b = b, a
            step = np.round(np.dot(a, b) / np.dot(a, a))
            if step == 0:
                return Lattice(a, b)
            b = b - step * a

    def positions(self, cells: Ints) -> Floats:
        """``rho_m`` of integer cells, shape (n, 2) -> (n, 2), metres."""
        return np.asarray(cells) @ self.vectors

    def coordinates(self, points: Floats) -> Floats:
        """Fractional lattice coordinates of points, shape (n, >=2) -> (n, 2)."""
        return np.asarray(points)[:, :2] @ np.linalg.inv(self.vectors)

    def harmonics(self, orders: Ints, kt: Floats) -> Floats:
        """Floquet wave vectors ``k_pq = kt + p b1 + q b2``; orders (n, 2), kt (2,) -> (n, 2), rad/m."""
        return np.asarray(kt) + np.asarray(orders) @ self.reciprocal

    def cells_within(self, radius: float, centre: Floats | None = None) -> Ints:
        """Integer cells m with ``|rho_m - centre| <= radius``, shape (n, 2), sorted by distance."""
        return _points_within(self.vectors, radius, centre)

    def orders_within(self, radius: float, kt: Floats | None = None) -> Ints:
        """Integer orders (p, q) with ``|kt + p b1 + q b2| <= radius``, shape (n, 2), sorted by length."""
        return _points_within(self.reciprocal, radius, None if kt is None else -np.asarray(kt))

    def grating_lobe_free_cone(self, k: float) -> float:
        """Half-angle (rad) of the largest scan cone about broadside free of grating lobes at wavenumber k.

        A lobe (p, q) enters visible space when ``|k (u, v) + p b1 + q b2| = k``; over all azimuths this first
        happens at ``sin(theta) = |p b1 + q b2| / k - 1``. Returns pi/2 when none can enter and 0 when a lobe is
        visible at broadside already.
        """
        orders = _points_within(self.reciprocal, 2.001 * k, None)
        lengths = np.linalg.norm(orders @ self.reciprocal, axis=1)
        lengths = lengths[lengths > 0]
        if lengths.size == 0:
            return np.pi / 2
        return float(np.arcsin(np.clip(lengths.min() / k - 1.0, 0.0, 1.0)))

    def grating_lobe_onset(self, k: float, phi: float) -> tuple[float, tuple[int, int] | None]:
        """First scan angle (rad) in the half-plane `phi` at which a grating lobe enters, and its order.

        Solves ``|k s (cos phi, sin phi) + G| = k`` for the smallest s = sin(theta) >= 0 over all reciprocal
        vectors G. Returns ``(pi/2, None)`` when no lobe enters.
        """
        direction = np.array([np.cos(phi), np.sin(phi)])
        orders = _points_within(self.reciprocal, 2.001 * k, None)
        best, which = 1.0, None
        for order in orders[np.any(orders != 0, axis=1)]:
            g = (order @ self.reciprocal) / k
            along, rest = float(g @ direction), float(g @ g) - 1.0
            if rest <= 0:
                return 0.0, (int(order[0]), int(order[1]))
            if along < 0 and along**2 >= rest:
                s = -along - np.sqrt(along**2 - rest)
                if s < best - 1e-12:
                    best, which = s, (int(order[0]), int(order[1]))
        return float(np.arcsin(best)), which


def _points_within(vectors: Floats, radius: float, centre: Floats | None) -> Ints:
    """Integer combinations of two row vectors within `radius` of `centre`, nearest first."""
    centre = np.zeros(2) if centre is None else np.asarray(centre, dtype=float)
    inverse = np.linalg.inv(vectors)
    middle = centre @ inverse
    reach = radius * np.linalg.norm(inverse, axis=0)
    first = np.ceil(middle - reach - 1e-9).astype(int)
    last = np.floor(middle + reach + 1e-9).astype(int)
    grid = np.stack(
        np.meshgrid(np.arange(first[0], last[0] + 1), np.arange(first[1], last[1] + 1), indexing="ij"), axis=-1
    ).reshape(-1, 2)
    distance = np.linalg.norm(grid @ vectors - centre, axis=1)
    keep = distance <= radius * (1 + 1e-12)
    order = np.lexsort((grid[keep][:, 1], grid[keep][:, 0], np.round(distance[keep] / max(radius, 1e-300), 9)))
    return grid[keep][order].astype(np.int64)
