"""Meshes of canonical flat shapes in plain NumPy: rectangle, four-sided region, triangle, disc and ring.

Every function returns points in the shape's own plane, (n, 2), and triangles, (m, 3), counterclockwise.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
SECTORS = 8


def cell_count(length: float, size: float) -> int:
    """Number of cells of about `size` that fill `length`, at least one."""
    return max(1, int(np.ceil(length / size - 1e-6)))


def grid_triangles(nu: int, nv: int) -> Ints:
    """Triangles of an nu x nv grid of cells, point (i, j) at index ``i (nv + 1) + j``.

    Diagonals alternate like a Union Jack, so that the mesh is its own mirror image in a direction with an
    even number of cells.
    """
    i, j = (x.ravel() for x in np.meshgrid(np.arange(nu), np.arange(nv), indexing="ij"))
    p00, p01 = i * (nv + 1) + j, i * (nv + 1) + j + 1
    p10, p11 = p00 + nv + 1, p01 + nv + 1
    rising = ((i + j) % 2 == 0)[:, None]
    first = np.where(rising, np.stack([p00, p10, p11], 1), np.stack([p00, p10, p01], 1))
    second = np.where(rising, np.stack([p00, p11, p01], 1), np.stack([p10, p11, p01], 1))
    return np.stack([first, second], axis=1).reshape(-1, 3).astype(np.int64)


def rectangle_mesh(u: Floats, v: Floats) -> tuple[Floats, Ints]:
    """Rectangle with grid lines at `u` (nu + 1,) and `v` (nv + 1,)."""
    grid = np.stack(np.meshgrid(u, v, indexing="ij"), axis=-1).reshape(-1, 2)
    return grid, grid_triangles(len(u) - 1, len(v) - 1)


def even(count: int) -> int:
    """`count`, or the next even number when it is odd and above one (for mirror symmetry)."""
    return count if count == 1 else count + count % 2


def quadrilateral_mesh(corners: Floats, size: float) -> tuple[Floats, Ints]:
    """Convex four-sided region by the bilinear map of a square; `corners` (4, 2) counterclockwise."""
    sides = np.linalg.norm(np.roll(corners, -1, axis=0) - corners, axis=1)
    nu, nv = (even(cell_count(max(sides[k], sides[k + 2]), size)) for k in (0, 1))
    s, t = np.meshgrid(np.arange(nu + 1) / nu, np.arange(nv + 1) / nv, indexing="ij")
    weights = np.stack([(1 - s) * (1 - t), s * (1 - t), s * t, (1 - s) * t], axis=-1).reshape(-1, 4)
    return weights @ corners, grid_triangles(nu, nv)


def triangle_mesh(corners: Floats, size: float) -> tuple[Floats, Ints]:
    """Triangle cut into n^2 similar ones; `corners` (3, 2) counterclockwise."""
    n = cell_count(np.linalg.norm(np.roll(corners, -1, axis=0) - corners, axis=1).max(), size)
    rows = np.arange(n + 1)
    row = np.repeat(rows, rows + 1)
    column = np.concatenate([np.arange(r + 1) for r in rows])
    weights = np.stack([n - row, row - column, column], axis=1) / n
    start = rows * (rows + 1) // 2
    up = [(start[r] + c, start[r + 1] + c, start[r + 1] + c + 1) for r in range(n) for c in range(r + 1)]
    down = [(start[r] + c, start[r + 1] + c + 1, start[r] + c + 1) for r in range(1, n) for c in range(r)]
    return weights @ corners, np.array(up + down, dtype=np.int64)


def equal_area_factor(sides: int | Ints) -> Floats:
    """Corner radius of the regular polygon with the area of the unit circle."""
    angle = 2 * np.pi / np.asarray(sides)
    return np.sqrt(angle / np.sin(angle))


def disc_mesh(radius: float, inner_radius: float, size: float) -> tuple[Floats, Ints]:
    """Disc or ring about the origin by concentric rings of points, each count a multiple of eight.

    The rims are regular polygons of the same area as the circles they stand for, so the area of the mesh is
    exact; their corners lie outside the circle by the factor ``sqrt(t / sin t)``, t = 2 pi / n (n = 32:
    0.3 %).
    The mesh has the symmetry of the square.
    """
    rings = max(1, int(np.ceil(0.88 * (radius - inner_radius) / size - 1e-6)))
    radii = np.linspace(inner_radius, radius, rings + 1)
    if inner_radius > 0:
        counts = SECTORS * np.array([cell_count(2 * np.pi * r / SECTORS, size) for r in radii])
    else:
        counts = SECTORS * np.arange(rings + 1)
    rim = [0, -1] if inner_radius > 0 else [-1]
    radii[rim] *= equal_area_factor(counts[rim])
    points, triangles, first = [], [], 0
    for r, n in zip(radii, counts, strict=True):
        angle = 2 * np.pi * np.arange(max(n, 1)) / max(n, 1)
        points.append(r * np.stack([np.cos(angle), np.sin(angle)], axis=1))
    for inside, outside in pairwise(counts):
        next_first = first + max(inside, 1)
        triangles += _ring_triangles(int(first), int(inside), int(next_first), int(outside))
        first = next_first
    return np.concatenate(points), np.array(triangles, dtype=np.int64)


def _ring_triangles(a0: int, na: int, b0: int, nb: int) -> list[tuple[int, int, int]]:
    """Triangles between two closed rings of points (the inner one may be a single point)."""
    out = []
    p, q = na // SECTORS, nb // SECTORS

    def inner(i: int) -> int:
        return a0 + (i % na if na else 0)

    for sector in range(SECTORS):
        for kind, i, j in _zip_steps(p, q, mirrored=bool(sector % 2)):
            i, j = i + sector * p, j + sector * q
            if kind == "outer":
                out.append((inner(i), b0 + j % nb, b0 + (j + 1) % nb))
            else:
                out.append((inner(i), b0 + j % nb, inner(i + 1)))
    return out


def _zip_steps(p: int, q: int, mirrored: bool) -> list[tuple[str, int, int]]:
    """Order in which p inner and q outer intervals of a sector are joined by triangles."""
    steps, i, j = [], 0, 0
    while i < p or j < q:
        if j < q and (i == p or (2 * j + 1) * p <= (2 * i + 1) * q):
            steps.append(("outer", p - i, q - j - 1) if mirrored else ("outer", i, j))
            j += 1
        else:
            steps.append(("inner", p - i - 1, q - j) if mirrored else ("inner", i, j))
            i += 1
    return steps
