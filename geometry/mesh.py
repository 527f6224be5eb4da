"""The meshed conductors of one cell: triangles and wire segments on shared points."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .conductor import Material

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Mesh:
    """Points, triangles and segments. Elements that share a point index are connected.

    A wire whose end has the index of a triangle's corner is attached to that sheet there. Points that coincide
    modulo the lattice are NOT merged: conductors may reach out of the cell, and the solver joins them to their
    periodic copies.

    Attributes
    ----------
    points : (n, 3) m
    triangles : (n_triangles, 3) indices into `points`
    triangle_conductor : (n_triangles,) index into `names` and `materials`
    segments : (n_segments, 2) indices into `points`
    segment_radius : (n_segments,) m
    segment_conductor : (n_segments,) index into `names` and `materials`
    names, materials : one per conductor
    """

    points: Floats
    triangles: Ints
    triangle_conductor: Ints
    segments: Ints
    segment_radius: Floats
    segment_conductor: Ints
    names: tuple[str, ...]
    materials: tuple[Material, ...]

    @property
    def triangle_areas(self) -> Floats:
        """Shape (n_triangles,), square metres."""
        p = self.points[self.triangles]
        return 0.5 * np.linalg.norm(np.cross(p[:, 1] - p[:, 0], p[:, 2] - p[:, 0]), axis=1)

    @property
    def segment_lengths(self) -> Floats:
        """Shape (n_segments,), metres."""
        p = self.points[self.segments]
        return np.linalg.norm(p[:, 1] - p[:, 0], axis=1)

    def moved(self, offset: Floats) -> Mesh:
        """The same mesh displaced by `offset`, shape (3,), m."""
        return Mesh(
            self.points + np.asarray(offset), self.triangles, self.triangle_conductor, self.segments,
            self.segment_radius, self.segment_conductor, self.names, self.materials,
        )  # fmt: skip

    def __repr__(self) -> str:
        return (
            f"Mesh({len(self.points)} points, {len(self.triangles)} triangles, {len(self.segments)} segments, "
            f"conductors {', '.join(self.names)})"
        )
