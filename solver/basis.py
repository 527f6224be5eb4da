"""Current basis functions: edge functions on triangles, linear functions on wires, attachments between the two.

Every function is a sum of *shapes*, each living on one element:

- triangle (three shapes): ``(r - v_a) / (2 A)``, a = 0, 1, 2 (Rao, Wilton, Glisson, IEEE TAP 30, 409, 1982);
  coefficient +-(edge length).
- segment (two shapes): ``lambda_0 s`` and ``lambda_1 s``, s the unit vector from end 0 to end 1.
- fan (one shape): the current spreading from a wire's foot at corner v_0 over a triangle,
  ``-(1 - h^2/t^2) rho / (2 A)``: unit flux out of the corner, none through the opposite edge, constant divergence
  ``-1/A`` (vertex attachment of Hwu, Wilton, Rao, IEEE APS Symposium 1988; form from memory, flux and divergence
  verified in the tests).

The lattice enters here only: edges and wire ends that lie on each other modulo a lattice vector are joined by a
function whose second half lives on a *displaced copy* of its element. The rest of the solver sees functions with
ordinary, if boundary-crossing, support.
"""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.spatial import cKDTree

from ..geometry.errors import InputError
from ..geometry.lattice import Lattice
from ..geometry.mesh import Mesh

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True)
class Basis:
    """Elements with their true positions, and the coefficients of every function on their shapes.

    Attributes
    ----------
    triangles : (n_t, 3, 3) corner points, m; the mesh's own triangles first, then displaced copies
    segments : (n_s, 2, 3) end points, m, likewise; `segment_radius` : (n_s,)
    fans : (n_f, 3, 3) corner points, the attachment corner first
    triangle_owner, segment_owner, fan_owner : mesh element that each copies
    triangle_shift, segment_shift, fan_shift : (., 2) m, displacement of each from its owner
    coefficients : sparse (3 n_t + 2 n_s + n_f, n), column i is function i on the shapes (triangle-major)
    kinds : (n,) "edge", "wire", "attachment"
    """

    triangles: Floats
    segments: Floats
    segment_radius: Floats
    fans: Floats
    triangle_owner: Ints
    segment_owner: Ints
    fan_owner: Ints
    triangle_shift: Floats
    segment_shift: Floats
    fan_shift: Floats
    coefficients: sparse.csr_matrix
    kinds: tuple[str, ...]
    mesh: Mesh

    @property
    def n(self) -> int:
        """Number of basis functions (unknowns)."""
        return self.coefficients.shape[1]

    @property
    def shape_offsets(self) -> tuple[int, int, int]:
        """Index of the first triangle, segment and fan shape among the rows of `coefficients`."""
        return 0, 3 * len(self.triangles), 3 * len(self.triangles) + 2 * len(self.segments)


class _Builder:
    """Collects displaced elements and the (shape, function, coefficient) triples."""

    def __init__(self, mesh: Mesh, lattice: Lattice):
        self.mesh, self.lattice = mesh, lattice
        self.tables: dict[str, dict[tuple, int]] = {"triangle": {}, "segment": {}, "fan": {}}
        for kind, count in (("triangle", len(mesh.triangles)), ("segment", len(mesh.segments))):
            self.tables[kind] = {(i, 0, 0): i for i in range(count)}
        self.entries: list[tuple[str, int, int, float]] = []  # element kind, element, local shape, coefficient
        self.columns: list[int] = []
        self.kinds: list[str] = []

    def element(self, kind: str, key: tuple) -> int:
        table = self.tables[kind]
        return table.setdefault(key, len(table))

    def add(self, kind: str, parts: list[tuple[str, tuple, int, float]]) -> None:
        for element_kind, key, shape, coefficient in parts:
            self.entries.append((element_kind, self.element(element_kind, key), shape, coefficient))
            self.columns.append(len(self.kinds))
        self.kinds.append(kind)

    def basis(self) -> Basis:
        mesh = self.mesh
        place = {kind: list(table) for kind, table in self.tables.items()}

        def pick(kind: str, column: int) -> Ints:
            return np.array([key[column] for key in place[kind]], dtype=np.int64)

        owner = {kind: pick(kind, 0) for kind in place}
        shift = {kind: self.lattice.positions(np.column_stack([pick(kind, 1), pick(kind, 2)])) for kind in place}

        def displaced(kind: str, corners: Ints) -> Floats:
            points = mesh.points[corners]
            points[..., :2] += shift[kind][:, None, :]
            return points

        turn = (pick("fan", 3)[:, None] + np.arange(3)) % 3
        fan_corners = np.take_along_axis(mesh.triangles[owner["fan"]].reshape(-1, 3), turn, axis=1)
        triangles = displaced("triangle", mesh.triangles[owner["triangle"]].reshape(-1, 3))
        segments = displaced("segment", mesh.segments[owner["segment"]].reshape(-1, 2))
        fans = displaced("fan", fan_corners)
        offset = {"triangle": 0, "segment": 3 * len(triangles), "fan": 3 * len(triangles) + 2 * len(segments)}
        width = {"triangle": 3, "segment": 2, "fan": 1}
        rows = [offset[kind] + width[kind] * element + local for kind, element, local, _ in self.entries]
        values = [entry[3] for entry in self.entries]
        size = (offset["fan"] + len(fans), len(self.kinds))
        coefficients = sparse.csr_matrix((values, (rows, self.columns)), shape=size)
        return Basis(
            triangles, segments, mesh.segment_radius[owner["segment"]], fans,
            owner["triangle"], owner["segment"], owner["fan"],
            shift["triangle"], shift["segment"], shift["fan"],
            coefficients, tuple(self.kinds), mesh,
        )  # fmt: skip


def build_basis(mesh: Mesh, lattice: Lattice, *, ground: bool = False) -> Basis:
    """All basis functions of a meshed cell.

    An edge shared (modulo the lattice) by n triangles carries n - 1 functions, n on the ground plane, where the
    image continues the current; likewise a wire node where n ends meet. A wire node on a sheet's vertex carries
    one attachment function per wire end.

    Raises
    ------
    InputError
        If the mesh carries no current at all (no function can be built).
    """
    builder = _Builder(mesh, lattice)
    size = _smallest_length(mesh)
    _add_edges(builder, ground, 1e-5 * size)
    _add_nodes(builder, ground, 1e-5 * size)
    if not builder.kinds:
        raise InputError("the mesh carries no current: no two elements are connected.", where="[[conductor]]")
    return builder.basis()


def _smallest_length(mesh: Mesh) -> float:
    lengths = list(mesh.segment_lengths)
    p = mesh.points[mesh.triangles]
    lengths += list(np.linalg.norm(p - np.roll(p, 1, axis=1), axis=2).ravel())
    return float(min(lengths)) if lengths else 1.0


def _classes(points: Floats, lattice: Lattice, tolerance: float) -> tuple[Ints, Ints]:
    """Group points that coincide modulo the lattice.

    Returns the class of each point (n,) and the integer cell (n, 2) by which it must be displaced to land on the
    first member of its class.
    """
    fraction = lattice.coordinates(points)
    scale = np.sqrt(lattice.area)
    torus = np.column_stack([np.mod(fraction, 1.0), points[:, 2] / scale])
    torus[:, :2][torus[:, :2] >= 1.0] = 0.0
    tree = cKDTree(torus, boxsize=np.array([1.0, 1.0, 0.0]))
    radius = tolerance / np.linalg.norm(lattice.reduced.vectors, axis=1).min()
    pairs = tree.query_pairs(max(radius, 1e-12), output_type="ndarray")
    graph = sparse.coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(points), len(points)))
    _, label = sparse.csgraph.connected_components(graph, directed=False)
    first = np.full(label.max() + 1, -1)
    for i in range(len(points) - 1, -1, -1):
        first[label[i]] = i
    shift = np.rint(fraction[first[label]] - fraction).astype(np.int64)
    return label.astype(np.int64), shift


def _add_edges(builder: _Builder, ground: bool, tolerance: float) -> None:
    mesh = builder.mesh
    if not len(mesh.triangles):
        return
    edges: dict[tuple[int, int], list[tuple[int, int]]] = defaultdict(list)
    for t, corners in enumerate(mesh.triangles):
        for a in range(3):
            i, j = sorted((int(corners[(a + 1) % 3]), int(corners[(a + 2) % 3])))
            edges[i, j].append((t, a))
    keys = list(edges)
    ends = mesh.points[np.array(keys)]
    label, shift = _classes(ends.mean(axis=1), builder.lattice, tolerance)
    length = np.linalg.norm(ends[:, 1] - ends[:, 0], axis=1)
    members: dict[int, list[int]] = defaultdict(list)
    for e, group in enumerate(label):
        members[int(group)].append(e)
    for group in members.values():
        grounded = ground and bool(np.all(np.abs(ends[group[0], :, 2]) < tolerance))
        halves = [
            ("triangle", (t, int(shift[e, 0]), int(shift[e, 1])), a, float(length[e]))
            for e in group
            if _parallel(ends[e], ends[group[0]], tolerance)
            for t, a in edges[keys[e]]
        ]
        _join(builder, "edge", halves, grounded)


def _parallel(first: Floats, second: Floats, tolerance: float) -> bool:
    """Whether two edges with one midpoint are the same edge."""
    u, w = first[1] - first[0], second[1] - second[0]
    return bool(min(np.linalg.norm(u - w), np.linalg.norm(u + w)) < 4 * tolerance)


def _join(builder: _Builder, kind: str, halves: list, sink: bool) -> None:
    """Functions that let current pass between `halves` (each with unit inflow), or into a sink (the ground)."""
    if sink:
        for half in halves:
            builder.add(kind, [half])
        return
    for half in halves[1:]:
        element, key, shape, coefficient = half
        builder.add(kind, [halves[0], (element, key, shape, -coefficient)])


def _add_nodes(builder: _Builder, ground: bool, tolerance: float) -> None:
    mesh = builder.mesh
    if not len(mesh.segments):
        return
    label, shift = _classes(mesh.points, builder.lattice, tolerance)
    wires: dict[int, list[tuple[int, int, int]]] = defaultdict(list)  # class -> (segment, end, point)
    for s, ends in enumerate(mesh.segments):
        for end, point in enumerate(ends):
            wires[int(label[point])].append((s, end, int(point)))
    sheets: dict[int, list[tuple[int, int, int]]] = defaultdict(list)  # class -> (triangle, corner, point)
    for t, corners in enumerate(mesh.triangles):
        for a, point in enumerate(corners):
            if int(label[point]) in wires:
                sheets[int(label[point])].append((t, a, int(point)))
    for group, ends in wires.items():
        halves = [("segment", (s, *map(int, shift[point])), end, 1.0 if end == 1 else -1.0) for s, end, point in ends]
        grounded = ground and abs(mesh.points[ends[0][2], 2]) < tolerance
        if group in sheets:
            fans = _fan_halves(mesh, sheets[group], shift)
            for half in halves:
                builder.add("attachment", [half, *fans])
        else:
            _join(builder, "wire", halves, bool(grounded))


def _fan_halves(mesh: Mesh, corners: list[tuple[int, int, int]], shift: Ints) -> list:
    """The fan shapes around one vertex, weighted by the share of the full angle each triangle takes."""
    angles = []
    for t, a, _ in corners:
        p = mesh.points[np.roll(mesh.triangles[t], -a)]
        u, w = p[1] - p[0], p[2] - p[0]
        angles.append(np.arccos(np.clip(u @ w / np.linalg.norm(u) / np.linalg.norm(w), -1, 1)))
    total = sum(angles)
    return [
        ("fan", (t, *map(int, shift[point]), a), 0, float(angle / total))
        for (t, a, point), angle in zip(corners, angles, strict=True)
    ]


def owner_coefficients(basis: Basis, kt: Floats) -> sparse.csr_matrix:
    """Coefficients by shape with every displaced copy folded back on its owner, phase included.

    What flows on a copy displaced by rho flows on the owner with ``exp(+j kt . rho)``. Same shape as
    `Basis.coefficients`; rows of copies are empty.
    """
    start_s, start_f = basis.shape_offsets[1:]
    target = np.concatenate(
        [
            (3 * basis.triangle_owner[:, None] + np.arange(3)).ravel(),
            (start_s + 2 * basis.segment_owner[:, None] + np.arange(2)).ravel(),
            start_f + _first_fans(basis),
        ]
    )
    shift = np.concatenate(
        [np.repeat(basis.triangle_shift, 3, 0), np.repeat(basis.segment_shift, 2, 0), basis.fan_shift]
    )
    size = basis.coefficients.shape[0]
    fold = sparse.csr_matrix((np.exp(1j * shift @ kt), (target, np.arange(size))), shape=(size, size))
    return sparse.csr_matrix(fold @ basis.coefficients)


def _first_fans(basis: Basis) -> Ints:
    """For each fan the first fan on the same owner and corner."""
    home = basis.fans[:, 0].copy()
    home[:, :2] -= basis.fan_shift
    first = np.arange(len(home))
    for i in range(len(home)):
        same = (basis.fan_owner[:i] == basis.fan_owner[i]) & (np.abs(home[:i] - home[i]).max(axis=1) < 1e-12)
        if same.any():
            first[i] = np.argmax(same)
    return first


def surface_current(basis: Basis, coefficients: NDArray[np.complex128], kt: Floats) -> tuple[NDArray, NDArray]:
    """Current at the centres of the mesh's elements.

    Parameters
    ----------
    coefficients : (n,) complex currents of the basis functions, A
    kt : (2,) transverse wave vector of the excitation, rad/m

    Returns
    -------
    (n_triangles, 3) surface current density, A/m (fans at the centroid included), and (n_segments,) current, A,
    positive from end 0 to end 1.
    """
    weights = owner_coefficients(basis, kt) @ coefficients
    n_t, n_s = len(basis.mesh.triangles), len(basis.mesh.segments)
    tri = basis.triangles[:n_t]
    area = basis.mesh.triangle_areas
    shapes = (tri.mean(axis=1)[:, None, :] - tri) / (2 * area[:, None, None])
    sheet = np.einsum("ta,tac->tc", weights[: 3 * n_t].reshape(-1, 3), shapes)
    start, fan_start = basis.shape_offsets[1:]
    wire = weights[start : start + 2 * n_s].reshape(-1, 2).mean(axis=1)
    for fan, owner, weight in zip(basis.fans, basis.fan_owner, weights[fan_start:], strict=True):
        rho = fan.mean(axis=0) - fan[0]  # t / h = 2/3 at the centroid
        sheet[owner] += weight * (9 / 4 - 1) * rho / (2 * area[owner])
    return sheet, wire
