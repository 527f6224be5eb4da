"""Flat shapes by their frames: where a strip, plate, disc or polygon lies, and whether it is one at all."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .conductor import Conductor, Disc, MeshFile, Plate, Polygon, Strip, Wire
from .contact import segment_distance
from .errors import InputError

Floats = NDArray[np.float64]
Sheet = Strip | Plate | Disc | Polygon


def place_of(conductor: Conductor, key: str = "") -> str:
    """``"[[conductor]] 'arm', key 'radius'"``: where an error about a conductor sits in the case file."""
    return f"[[conductor]] '{conductor.name}'" + (f", key '{key}'" if key else "")


def _triple(conductor: Conductor, key: str, value: object) -> Floats:
    vector = np.asarray(value, dtype=float)
    if vector.shape != (3,) or not np.isfinite(vector).all():
        raise InputError(f"{key} = {value} is not three finite numbers.", where=place_of(conductor, key))
    return vector


def _positive(conductor: Conductor, key: str, value: float) -> float:
    if not (np.isfinite(value) and value > 0):
        raise InputError(
            f"{key} = {value} m is not a length.",
            where=place_of(conductor, key),
            allowed="a length above zero",
        )
    return float(value)


def _polyline(conductor: Conductor, points: Floats, least: int) -> Floats:
    points = np.asarray(points, dtype=float)
    if points.ndim != 2 or points.shape[1] != 3 or len(points) < least or not np.isfinite(points).all():
        raise InputError(
            f"points of shape {points.shape} are not at least {least} points of three finite coordinates.",
            where=place_of(conductor, "points"),
        )
    return points


def _frame(conductor: Conductor, normal: Floats, axis: Floats) -> Floats:
    """Rows axis, normal x axis, normal (orthonormal); `axis` and `normal` must be perpendicular."""
    lengths = np.linalg.norm(normal), np.linalg.norm(axis)
    if min(lengths) == 0:
        raise InputError("the normal or axis is a zero vector.", where=place_of(conductor, "normal"))
    n, u = normal / lengths[0], axis / lengths[1]
    if abs(n @ u) > 1e-6:
        raise InputError(
            f"normal {normal.tolist()} is not perpendicular to the direction {axis.tolist()} in the sheet "
            f"(their angle is {np.degrees(np.arccos(np.clip(n @ u, -1, 1))):.3f} degrees).",
            where=place_of(conductor, "normal"),
            allowed="a normal perpendicular to the sheet's axis (for a strip: to the line from start to end)",
        )
    u = u - (u @ n) * n
    u /= np.linalg.norm(u)
    return np.stack([u, np.cross(n, u), n])


def any_axis(normal: Floats) -> Floats:
    """Some unit vector perpendicular to `normal`: x made so or, where x is close to the normal, y."""
    n = np.asarray(normal, dtype=float) / np.linalg.norm(normal)
    start = np.array([1.0, 0.0, 0.0]) if abs(n[0]) < 0.9 else np.array([0.0, 1.0, 0.0])
    u = start - (start @ n) * n
    return u / np.linalg.norm(u)


@dataclass(frozen=True)
class Region:
    """A flat region: `origin` (3,), `frame` rows u, v, normal (3, 3), and its outline in (u, v).

    `outline` is a closed polygon (n, 2), counterclockwise, without the repeated corner. Discs keep their two
    radii instead and have an empty outline; a `Rectangle` has its lower left corner at the origin.
    """

    origin: Floats
    frame: Floats
    outline: Floats
    radius: float = 0.0
    inner_radius: float = 0.0

    def local(self, points: Floats) -> Floats:
        """Coordinates along u, v and the normal, shape (n, 3) -> (n, 3)."""
        return (np.asarray(points) - self.origin) @ self.frame.T

    def place(self, uv: Floats) -> Floats:
        """Points of the plane, shape (n, 2) -> (n, 3)."""
        return self.origin + np.asarray(uv) @ self.frame[:2]

    def contains(self, points: Floats, tolerance: float) -> NDArray[np.bool_]:
        """Which points lie in the region or on its rim, within `tolerance`; (n, 3) -> (n,)."""
        local = self.local(points)
        near = np.abs(local[:, 2]) <= tolerance
        if self.radius > 0:
            r = np.linalg.norm(local[:, :2], axis=1)
            return near & (r <= self.radius + tolerance) & (r >= self.inner_radius - tolerance)
        return near & inside_outline(self.outline, local[:, :2], tolerance)

    @property
    def corners(self) -> Floats:
        """Points that bound the region, shape (n, 3); of a disc 32 points on its rim."""
        if self.radius == 0:
            return self.place(self.outline)
        t = np.arange(32) * (np.pi / 16)
        return self.place(self.radius * np.stack([np.cos(t), np.sin(t)], axis=1))

    @property
    def area(self) -> float:
        """Area of the region, square metres."""
        if self.radius > 0:
            return float(np.pi * (self.radius**2 - self.inner_radius**2))
        return signed_area(self.outline)

    @property
    def sides(self) -> Floats:
        """Extent along u and v of the outline, shape (2,), m."""
        return np.ptp(self.outline, axis=0) if self.radius == 0 else np.full(2, 2 * self.radius)


def signed_area(outline: Floats) -> float:
    """Area of a closed polygon (n, 2), positive when counterclockwise."""
    x, y = outline.T
    return float(0.5 * np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))


def inside_outline(outline: Floats, uv: Floats, tolerance: float) -> NDArray[np.bool_]:
    """Points in a polygon by the crossing rule, or within `tolerance` of its rim; (n, 2) -> (n,)."""
    start, end = outline, np.roll(outline, -1, axis=0)
    d = end - start
    rel = uv[:, None] - start
    t = np.clip((rel * d).sum(-1) / (d * d).sum(-1), 0, 1)
    rim = (np.linalg.norm(rel - t[..., None] * d, axis=-1) <= tolerance).any(1)
    straddles = (start[:, 1] > uv[:, None, 1]) != (end[:, 1] > uv[:, None, 1])
    with np.errstate(divide="ignore", invalid="ignore"):
        x = start[:, 0] + rel[..., 1] * d[:, 0] / d[:, 1]
    return rim | ((straddles & (uv[:, None, 0] < x)).sum(1) % 2 == 1)


def region_of(sheet: Sheet) -> Region:
    """The flat region of a strip, plate, disc or polygon; raises InputError where it is no sound shape."""
    if isinstance(sheet, Polygon):
        return _polygon(sheet)
    normal = _triple(sheet, "normal", sheet.normal)
    if isinstance(sheet, Disc):
        return _disc(sheet, normal)
    if isinstance(sheet, Strip):
        start, end = _triple(sheet, "start", sheet.start), _triple(sheet, "end", sheet.end)
        width, length = _positive(sheet, "width", sheet.width), float(np.linalg.norm(end - start))
        if not length > 0:
            raise InputError(f"start and end coincide at {start.tolist()} m.", where=place_of(sheet, "end"))
        frame = _frame(sheet, normal, end - start)
        origin = start - 0.5 * width * frame[1]
    else:
        size = np.asarray(sheet.size, dtype=float)
        if size.shape != (2,):
            raise InputError(f"size = {sheet.size} is not two lengths.", where=place_of(sheet, "size"))
        length, width = (_positive(sheet, "size", s) for s in size)
        frame = _frame(sheet, normal, _triple(sheet, "axis", sheet.axis))
        origin = _triple(sheet, "centre", sheet.centre) - 0.5 * length * frame[0] - 0.5 * width * frame[1]
    return Region(origin, frame, np.array([[0, 0], [length, 0], [length, width], [0, width]], dtype=float))


def _disc(disc: Disc, normal: Floats) -> Region:
    centre, radius = _triple(disc, "centre", disc.centre), _positive(disc, "radius", disc.radius)
    if not 0 <= disc.inner_radius < radius * (1 - 1e-6):
        raise InputError(
            f"inner_radius = {disc.inner_radius} m does not fit in radius = {radius} m.",
            where=place_of(disc, "inner_radius"),
            allowed=f"0 to below {radius} m",
        )
    if np.linalg.norm(normal) == 0:
        raise InputError("the normal is a zero vector.", where=place_of(disc, "normal"))
    frame = _frame(disc, normal, any_axis(normal))
    return Region(centre, frame, np.zeros((0, 2)), radius, float(disc.inner_radius))


def _polygon(polygon: Polygon) -> Region:
    points = _polyline(polygon, polygon.points, 3)
    if np.allclose(points[0], points[-1], rtol=0, atol=1e-12 * np.abs(points).max()):
        points = points[:-1]
    extent = np.ptp(points, axis=0).max()
    sides = np.linalg.norm(np.roll(points, -1, axis=0) - points, axis=1)
    if len(points) < 3 or sides.min() <= 1e-9 * extent:
        raise InputError("two neighbouring corners coincide.", where=place_of(polygon, "points"))
    rel = points - points.mean(0)
    normal = 0.5 * np.cross(rel, np.roll(rel, -1, axis=0)).sum(0)
    if np.linalg.norm(normal) <= 1e-9 * extent**2:
        raise InputError("the corners enclose no area.", where=place_of(polygon, "points"))
    normal /= np.linalg.norm(normal)
    off = np.abs(rel @ normal).max()
    if off > 1e-6 * extent:
        raise InputError(
            f"the corners are not in one plane: one lies {off:.3g} m off it.",
            where=place_of(polygon, "points"),
        )
    axis = points[1] - points[0]
    frame = _frame(polygon, normal, axis - (axis @ normal) * normal)
    outline = (points - points[0]) @ frame[:2].T
    _refuse_crossing_sides(polygon, outline)
    return Region(points[0], frame, outline)


def _refuse_crossing_sides(polygon: Polygon, outline: Floats) -> None:
    n = len(outline)
    i, j = np.triu_indices(n, k=2)
    apart = (j - i) % n < n - 1  # not neighbours around the polygon
    i, j = i[apart], j[apart]
    start = np.column_stack([outline, np.zeros(n)])
    end = np.roll(start, -1, axis=0)
    distance, _, _ = segment_distance(start[i], end[i], start[j], end[j])
    d = end - start
    folds = (d * np.roll(d, -1, axis=0)).sum(1) < -(1 - 1e-12) * np.linalg.norm(d, axis=1) * np.linalg.norm(
        np.roll(d, -1, axis=0), axis=1
    )
    bad = distance <= 1e-9 * np.ptp(outline, axis=0).max()
    if bad.any() or folds.any():
        first = int(i[np.argmax(bad)]) if bad.any() else int(np.argmax(folds))
        second = int(j[np.argmax(bad)]) if bad.any() else (first + 1) % n
        raise InputError(
            f"side {first + 1} and side {second + 1} of the polygon touch or cross.",
            where=place_of(polygon, "points"),
            allowed="a simple polygon, corners in order around it",
        )


def wire_points(wire: Wire) -> Floats:
    """The checked polyline of a wire, shape (n, 3)."""
    points = _polyline(wire, wire.points, 2)
    _positive(wire, "radius", wire.radius)
    lengths = np.linalg.norm(np.diff(points, axis=0), axis=1)
    for leg, length in enumerate(lengths, start=1):
        if length < 4 * wire.radius * (1 - 1e-9):
            raise InputError(
                f"leg {leg} of the wire is {length:.4g} m long, shorter than its radius allows: "
                f"{length / wire.radius:.3g} radii of {wire.radius:.4g} m.",
                where=place_of(wire, "points"),
                allowed="straight legs of at least 4 radii (thin-wire model)",
            )
    return points


def check_sheets_over_ground(sheets: Sequence[tuple[Sheet, Region]], tolerance: float) -> None:
    """With a ground at z = 0: nothing below it, no sheet lying on it."""
    for sheet, region in sheets:
        z = region.corners[:, 2]
        if z.min() < -tolerance:
            raise InputError(
                f"the conductor reaches z = {z.min():.4g} m, below the ground at z = 0.",
                where=place_of(sheet),
            )
        if z.max() <= tolerance:
            raise InputError("the sheet lies on the ground at z = 0.", where=place_of(sheet))


def check_names(conductors: Sequence[Conductor]) -> None:
    """Each conductor has its own name and is of a kind the mesher knows."""
    seen: set[str] = set()
    for conductor in conductors:
        if conductor.name in seen:
            raise InputError(f"the name '{conductor.name}' is used twice.", where=place_of(conductor, "name"))
        seen.add(conductor.name)
        if not isinstance(conductor, Wire | Strip | Plate | Disc | Polygon | MeshFile):
            raise InputError(
                f"'{type(conductor).__name__}' is no kind of conductor.",
                where=place_of(conductor),
                allowed="wire, strip, plate, disc, polygon, mesh",
            )
