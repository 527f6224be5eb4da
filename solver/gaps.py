"""Gap functionals: how strongly every basis function flows through a gap.

``g_i = (1/width) int_box f_i . direction`` is the mean current of function i in the gap; a voltage V across the gap
excites it with ``V g_i``. The integrals are exact for any mesh: triangles and segments are clipped by the box.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from ..geometry.errors import InputError
from ..geometry.lattice import Lattice
from ..geometry.port import Gap
from .basis import Basis
from .cloud import fan_weights
from .quadrature import uniform

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


class GapFunctional:
    """The functional of one gap, with the lattice copies of the box that functions reach into.

    Raises
    ------
    InputError
        If no current can flow through the gap.
    """

    def __init__(self, name: str, gap: Gap, basis: Basis, lattice: Lattice):
        corners = np.concatenate([c.reshape(-1, 3) for c in (basis.triangles, basis.segments, basis.fans)])
        reach = float(np.linalg.norm(np.ptp(corners[:, :2], axis=0))) + gap.width + gap.span
        self.shifts: list[Floats] = []
        self.parts: list[Floats] = []
        middle = corners[:, :2].mean(axis=0) - gap.centre[:2]
        for cell in lattice.cells_within(reach, middle):
            shift = lattice.positions(cell[None])[0]
            part = _flow(gap, basis, np.append(shift, 0.0))
            if np.any(part != 0):
                self.shifts.append(shift)
                self.parts.append(part)
        if not self.parts:
            raise InputError(
                f"no current can flow through the gap at {np.round(gap.centre * 1e3, 4).tolist()} mm.",
                where=f"port or load '{name}'",
                allowed=f"a position on a {'wire' if gap.kind == 'wire' else 'sheet'} away from its open ends",
            )

    def excitation(self, kt: Floats) -> Complexes:
        """``int f_i . E`` for one volt in every cell with phase ``exp(-j kt . rho)``; shape (n,).

        The current through the gap of the home cell is ``excitation(kt).conj() @ currents``.
        """
        return sum(np.exp(-1j * (kt @ s)) * part for s, part in zip(self.shifts, self.parts, strict=True))  # type: ignore[return-value]


def _flow(gap: Gap, basis: Basis, shift: Floats) -> Floats:
    """Functional of the box displaced by `shift`, (n,)."""
    shapes = np.zeros(basis.coefficients.shape[0])
    start_s, start_f = basis.shape_offsets[1:]
    centre = gap.centre + shift
    if gap.kind == "wire":
        for i, ends in enumerate(basis.segments):
            shapes[start_s + 2 * i : start_s + 2 * i + 2] = _segment_flow(gap, centre, ends)
    else:
        planes = _planes(gap, centre)
        for i in _candidates(basis.triangles, centre, gap):
            shapes[3 * i : 3 * i + 3] = _triangle_flow(gap, planes, basis.triangles[i])
        for i in _candidates(basis.fans, centre, gap):
            shapes[start_f + i] = _fan_flow(gap, planes, basis.fans[i])
    return sparse.csr_matrix(basis.coefficients).T @ shapes


def _segment_flow(gap: Gap, centre: Floats, ends: Floats) -> Floats:
    along = ends[1] - ends[0]
    offset = ends - centre
    s = offset @ gap.direction
    lateral = np.linalg.norm(offset - np.outer(s, gap.direction), axis=1)
    if lateral.max() > gap.span or s[1] == s[0]:
        return np.zeros(2)
    x = np.sort(np.clip((np.array([-0.5, 0.5]) * gap.width - s[0]) / (s[1] - s[0]), 0, 1))
    mean, extent = x.mean(), x[1] - x[0]
    return np.array([1 - mean, mean]) * extent * (along @ gap.direction) / gap.width


def _planes(gap: Gap, centre: Floats) -> list[tuple[Floats, float]]:
    """The box as half-spaces ``n . r <= d``; its depth off the sheet is half the smaller side."""
    normal = np.cross(gap.direction, gap.across)
    depth = 0.5 * min(gap.width, gap.span)
    planes = []
    for axis, half in ((gap.direction, gap.width / 2), (gap.across, gap.span / 2), (normal, depth)):
        half = half * (1 + 1e-9)
        planes += [(axis, float(axis @ centre) + half), (-axis, float(-axis @ centre) + half)]
    return planes


def _candidates(corners: Floats, centre: Floats, gap: Gap) -> NDArray[np.int64]:
    middle = corners.mean(axis=1)
    radius = np.linalg.norm(corners - middle[:, None], axis=2).max(axis=1, initial=0.0)
    return np.flatnonzero(np.linalg.norm(middle - centre, axis=1) < radius + 0.5 * np.hypot(gap.width, gap.span) * 1.01)


def _clip(polygon: Floats, planes: list[tuple[Floats, float]]) -> Floats:
    """Sutherland-Hodgman clipping of a convex polygon (n, 3) by half-spaces."""
    for normal, limit in planes:
        if len(polygon) < 3:
            return polygon[:0]
        depth = polygon @ normal - limit
        kept = []
        for i in range(len(polygon)):
            j = (i + 1) % len(polygon)
            if depth[i] <= 0:
                kept.append(polygon[i])
            if (depth[i] < 0 < depth[j]) or (depth[j] < 0 < depth[i]):
                kept.append(polygon[i] + (polygon[j] - polygon[i]) * depth[i] / (depth[i] - depth[j]))
        polygon = np.array(kept).reshape(-1, 3)
    return polygon


def _triangle_flow(gap: Gap, planes: list[tuple[Floats, float]], triangle: Floats) -> Floats:
    """Three shapes, linear over the clipped polygon: area times value at its centroid."""
    polygon = _clip(triangle, planes)
    if len(polygon) < 3:
        return np.zeros(3)
    normals = np.cross(polygon[1:-1] - polygon[0], polygon[2:] - polygon[0])
    areas = 0.5 * np.linalg.norm(normals, axis=1)
    if areas.sum() == 0:
        return np.zeros(3)
    centroid = (areas[:, None] * (polygon[0] + polygon[1:-1] + polygon[2:]) / 3).sum(axis=0) / areas.sum()
    double_area = np.linalg.norm(np.cross(triangle[1] - triangle[0], triangle[2] - triangle[0]))
    return areas.sum() * ((centroid - triangle) @ gap.direction) / double_area / gap.width


def _fan_flow(gap: Gap, planes: list[tuple[Floats, float]], fan: Floats) -> float:
    rule = uniform(8, 4)
    points, vector, _ = fan_weights(fan[None], rule, rule)
    inside = np.all([points[0] @ normal <= limit for normal, limit in planes], axis=0)
    return float((vector[0, inside, 0] @ gap.direction).sum() / gap.width)
