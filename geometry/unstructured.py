"""Flat sheets of any outline meshed together by gmsh (OpenCASCADE kernel): the only file that knows it.

All shapes are planar polygons; circles become regular polygons of the same area. A boolean fragment makes
every contact and overlap a common edge. Lengths are divided by the smallest element size, because the kernel
works to an absolute precision.
"""

from __future__ import annotations

import contextlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from types import ModuleType

import numpy as np
from numpy.typing import NDArray

from .contact import triangle_normals
from .errors import InputError
from .port import Gap
from .shapes import Region, inside_outline
from .structured import SECTORS, cell_count, equal_area_factor

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LIBRARIES = (
    "libglu1-mesa libgl1 libxrender1 libxcursor1 libxfixes3 libxext6 libxft2 libfontconfig1 libxinerama1 "
    "libx11-6 libgomp1"
)
PRECISION = 1e-6  # part of the smallest element size within which things coincide


@contextlib.contextmanager
def _session() -> Iterator[ModuleType]:
    """A gmsh session of our own: no user configuration, no signal handler, silent, always closed."""
    try:
        import gmsh
    except (ImportError, OSError) as fault:
        raise InputError(
            f"the unstructured mesher gmsh cannot be loaded ({fault}).",
            where="[mesh], key 'method'",
            hint=f"Install the Python package gmsh and the system libraries it needs: {LIBRARIES}.",
        ) from fault
    if gmsh.isInitialized():
        raise RuntimeError("a gmsh session is open in this process already; finalise it first")
    gmsh.initialize(argv=[], readConfigFiles=False, run=False, interruptible=False)
    try:
        options = {
            "General.Terminal": 0, "General.NumThreads": 1, "Geometry.ToleranceBoolean": PRECISION,
            "Geometry.OCCAutoFix": 0, "Mesh.MeshSizeFromPoints": 1, "Mesh.MeshSizeExtendFromBoundary": 1,
            "Mesh.MeshSizeFromCurvature": 0, "Mesh.Algorithm": 6, "Mesh.ElementOrder": 1,
        }  # fmt: skip
        for name, value in options.items():
            gmsh.option.setNumber(name, value)
        gmsh.model.add("cell")
        yield gmsh
    except InputError:
        raise
    except Exception as fault:  # gmsh raises plain Exception with its own last message
        raise InputError(
            f"gmsh could not mesh the sheets: {fault}.",
            where="[mesh]",
            hint="Look for sheets that almost touch, or try another element size.",
        ) from fault
    finally:
        gmsh.finalize()


@dataclass(frozen=True)
class _Shape:
    """A region by straight outlines (n, 2) and its element size, in units of the smallest element size."""

    origin: Floats
    frame: Floats
    outer: Floats
    inner: Floats | None
    size: float

    def place(self, uv: Floats) -> Floats:
        return self.origin + uv @ self.frame[:2]

    def contains(self, points: Floats) -> NDArray[np.bool_]:
        local = (points - self.origin) @ self.frame.T
        near = 10 * PRECISION
        inside = (np.abs(local[:, 2]) <= near) & inside_outline(self.outer, local[:, :2], near)
        return inside if self.inner is None else inside & ~inside_outline(self.inner, local[:, :2], -1.0)


def mesh_regions(
    regions: Sequence[Region],
    sizes: Sequence[float],
    points: Sequence[Sequence[Floats]],
    gaps: Sequence[Gap],
    shifts: Floats,
    tolerance: float,
) -> tuple[Floats, Ints, Ints]:
    """Mesh flat regions together, conforming wherever they touch, cross or overlap.

    Parameters
    ----------
    regions, sizes
        Regions and the element size (m) wanted in each. The first named owns what several cover.
    points
        For each region, points (3,) that must become mesh points (ends of wires).
    gaps
        Sheet gaps; the middle line of each becomes mesh lines of the sheets it lies on.
    shifts : (k, 3) m
        Lattice displacements. Edges that lie on the copy of another edge get the same points.
    tolerance : m
        Points closer than this coincide.

    Returns
    -------
    points (n, 3) m, triangles (m, 3), and (m,) the index of the region each triangle belongs to.
    """
    unit = min(sizes)
    shapes = [_shape(r, s, unit) for r, s in zip(regions, sizes, strict=True)]
    fixed = [np.asarray(p) / unit for those in points for p in those]
    lines = _gap_lines(regions, gaps, tolerance, unit)
    with _session() as gmsh:
        _build(gmsh, shapes, fixed, lines)
        pairs = _periodic_curves(gmsh, shifts[shifts.any(axis=1)] / unit)
        _set_sizes(gmsh, shapes)
        for slave, master, shift in pairs:
            affine = np.eye(4)
            affine[:3, 3] = shift
            gmsh.model.mesh.setPeriodic(1, [slave], [master], affine.ravel().tolist())
        gmsh.model.mesh.generate(2)
        xyz, triangles, owner = _take(gmsh, shapes)
    used, inverse = np.unique(triangles, return_inverse=True)
    return xyz[used] * unit, inverse.reshape(-1, 3).astype(np.int64), owner


def _shape(region: Region, size: float, unit: float) -> _Shape:
    if region.radius == 0:
        return _Shape(region.origin / unit, region.frame, region.outline / unit, None, size / unit)
    rims = [_circle(r, size) / unit for r in (region.radius, region.inner_radius) if r > 0]
    return _Shape(
        region.origin / unit, region.frame, rims[0], rims[1] if len(rims) > 1 else None, size / unit
    )


def _circle(radius: float, size: float) -> Floats:
    """Regular polygon with sides of about `size` and the area of the circle, (n, 2)."""
    n = SECTORS * cell_count(2 * np.pi * radius / SECTORS, size)
    angle = 2 * np.pi * np.arange(n) / n
    return radius * equal_area_factor(n) * np.stack([np.cos(angle), np.sin(angle)], axis=1)


def _gap_lines(regions: Sequence[Region], gaps: Sequence[Gap], tolerance: float, unit: float) -> list[Floats]:
    """Middle lines (2, 3) of the sheet gaps that lie on some region, in units of `unit`."""
    lines = []
    for gap in gaps:
        centre = np.asarray(gap.centre, dtype=float)
        if gap.kind == "sheet" and any(r.contains(centre[None], tolerance)[0] for r in regions):
            half = 0.5 * gap.span * np.asarray(gap.across, dtype=float)
            lines.append(np.stack([centre - half, centre + half]) / unit)
    return lines


def _build(
    gmsh: ModuleType, shapes: Sequence[_Shape], fixed: Sequence[Floats], lines: Sequence[Floats]
) -> None:
    """Surfaces, attachment points and gap lines in the kernel, fragmented into one conforming model."""
    occ = gmsh.model.occ

    def loop(corners: Floats) -> int:
        tags = [occ.addPoint(*p) for p in corners]
        sides = [occ.addLine(a, b) for a, b in zip(tags, tags[1:] + tags[:1], strict=True)]
        return occ.addCurveLoop(sides)

    entities = []
    for shape in shapes:
        loops = [loop(shape.place(rim)) for rim in (shape.outer, shape.inner) if rim is not None]
        entities.append((2, occ.addPlaneSurface(loops)))
    entities += [(0, occ.addPoint(*p)) for p in fixed]
    entities += [(1, occ.addLine(occ.addPoint(*a), occ.addPoint(*b))) for a, b in lines]
    occ.fragment(entities, [])
    occ.synchronize()


def _curve_ends(gmsh: ModuleType) -> tuple[list[int], Floats]:
    """Tags of all curves that bound a surface, and their end points (n, 2, 3)."""
    tags, ends = [], []
    for _, tag in gmsh.model.getEntities(1):
        if len(gmsh.model.getAdjacencies(1, tag)[0]):
            corners = gmsh.model.getBoundary([(1, tag)], oriented=False)
            tags.append(tag)
            ends.append([gmsh.model.getValue(0, corner, []) for _, corner in corners])
    return tags, np.array(ends, dtype=float).reshape(-1, 2, 3)


def _periodic_curves(gmsh: ModuleType, shifts: Floats) -> list[tuple[int, int, Floats]]:
    """(slave, master, displacement) of curves that coincide modulo the lattice; cuts them to match."""
    for _ in range(8):
        tags, ends = _curve_ends(gmsh)
        extra = _missing_ends(ends, shifts)
        if not len(extra):
            break
        occ = gmsh.model.occ
        occ.fragment(
            gmsh.model.getEntities(2) + [(0, occ.addPoint(*p)) for p in extra], gmsh.model.getEntities(1)
        )
        occ.synchronize()
    else:
        raise InputError(
            "edges that lie on each other across the border of the cell divide each other without end.",
            where="[mesh]",
            hint="Align the sheets that cross the border, or make them clear of it.",
        )
    master: dict[int, tuple[int, Floats]] = {}
    for a, (p, q) in enumerate(ends):
        if tags[a] in master:
            continue
        for shift in shifts:
            same = np.minimum(
                np.abs(ends - [p + shift, q + shift]).max(axis=(1, 2)),
                np.abs(ends - [q + shift, p + shift]).max(axis=(1, 2)),
            )
            for b in np.flatnonzero(same <= 10 * PRECISION):
                if b != a and tags[b] not in master:
                    master[tags[b]] = (tags[a], shift)
        master.setdefault(tags[a], (tags[a], np.zeros(3)))
    return [(slave, chief, shift) for slave, (chief, shift) in master.items() if slave != chief]


def _missing_ends(ends: Floats, shifts: Floats) -> Floats:
    """Copies of curve ends that fall within the run of another curve, (n, 3)."""
    corners = np.unique(ends.reshape(-1, 3).round(9), axis=0)
    direction = ends[:, 1] - ends[:, 0]
    length = np.linalg.norm(direction, axis=1)
    direction = direction / length[:, None]
    found = []
    for shift in shifts:
        rel = corners[:, None] + shift - ends[:, 0]
        along = np.einsum("ijk,jk->ij", rel, direction)
        off = np.linalg.norm(rel - along[..., None] * direction, axis=2)
        inside = (off <= 10 * PRECISION) & (along > 20 * PRECISION) & (along < length - 20 * PRECISION)
        found.append(corners[inside.any(1)] + shift)
    return np.unique(np.concatenate([np.zeros((0, 3)), *found]).round(9), axis=0)


def _set_sizes(gmsh: ModuleType, shapes: Sequence[_Shape]) -> None:
    """At each model point the smallest size wanted by a shape it lies on."""
    for dim_tag in gmsh.model.getEntities(0):
        point = np.array(gmsh.model.getValue(0, dim_tag[1], []))
        wanted = [s.size for s in shapes if s.contains(point[None])[0]]
        gmsh.model.mesh.setSize([dim_tag], min(wanted, default=max(s.size for s in shapes)))
    gmsh.option.setNumber("Mesh.MeshSizeMax", max(s.size for s in shapes))


def _take(gmsh: ModuleType, shapes: Sequence[_Shape]) -> tuple[Floats, Ints, Ints]:
    """Points, triangles and owners as arrays; node tags are labels, not indices."""
    tags, xyz, _ = gmsh.model.mesh.getNodes()
    index = np.full(int(tags.max()) + 1, -1, dtype=np.int64)
    index[tags.astype(np.int64)] = np.arange(len(tags))
    xyz = np.asarray(xyz, dtype=float).reshape(-1, 3)
    triangles, owners = [np.zeros((0, 3), dtype=np.int64)], [np.zeros(0, dtype=np.int64)]
    for _, surface in gmsh.model.getEntities(2):
        _, nodes = gmsh.model.mesh.getElementsByType(2, surface)
        part = index[np.asarray(nodes, dtype=np.int64)].reshape(-1, 3)
        normal, area = triangle_normals(xyz[part])
        if not len(part) or abs(area.sum() / gmsh.model.occ.getMass(2, surface) - 1) > 1e-6:
            raise InputError("gmsh left part of a sheet unmeshed.", where="[mesh]")
        middle = xyz[part].mean(1)[np.argmax(area)]
        owner = next(k for k, s in enumerate(shapes) if s.contains(middle[None])[0])
        against = normal @ shapes[owner].frame[2] < 0
        part[against] = part[against][:, ::-1]
        triangles.append(part)
        owners.append(np.full(len(part), owner))
    return xyz, np.concatenate(triangles), np.concatenate(owners).astype(np.int64)
