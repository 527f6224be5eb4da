"""The near part of the operator: real matrices by cell and power of k, filled once per mesh."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.lattice import Lattice
from .basis import Basis
from .cloud import Cloud
from .corrections import Cell, build_corrections
from .ewald import Split, near_kernels
from .pairs import MIRROR, half_cells

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

ROW_BLOCK = 384


@dataclass(frozen=True)
class NearBlock:
    """Matrices coupling the cell to cell `cell`: dense on the rows and columns that couple at all.

    `current` and `charge` : (powers, n_rows, n_columns), coefficients of k^(2p).
    """

    cell: Cell
    rows: Ints
    columns: Ints
    current: Floats
    charge: Floats


def build_near(basis: Basis, cloud: Cloud, lattice: Lattice, split: Split, ground: bool) -> list[NearBlock]:
    """Fill the near part. Cells of one half-plane only; the matrix at -m is the transpose of that at m."""
    corrections = build_corrections(basis, lattice, ground)
    extent = np.linalg.norm(np.ptp(cloud.points[:, :2], axis=0))
    cells = {tuple(map(int, m)) for m in half_cells(lattice, split.near_radius + extent)} | set(corrections)
    blocks = []
    for cell in sorted(cells, key=lambda m: (m != (0, 0), m)):
        block = _build_block(basis, cloud, lattice, split, ground, cell, corrections.get(cell))
        if block is not None:
            blocks.append(block)
    return blocks


def _build_block(basis, cloud, lattice, split, ground, cell, correction) -> NearBlock | None:  # noqa: ANN001
    shift = np.append(lattice.positions(np.array([cell]))[0], 0.0)
    sources = cloud.points + shift
    rows_q, columns_q = _coupled_points(cloud.points, sources, split.near_radius, ground)
    near_rows = _functions_at(cloud, rows_q)
    near_columns = _functions_at(cloud, columns_q)
    if correction is not None:
        touched = sum(abs(m) for part in correction for m in part)
        near_rows = np.union1d(near_rows, np.flatnonzero(np.diff(touched.tocsr().indptr)))
        near_columns = np.union1d(near_columns, np.flatnonzero(np.diff(touched.tocsc().indptr)))
    if not len(near_rows) or not len(near_columns):
        return None
    if cell == (0, 0):
        near_rows = near_columns = np.arange(basis.n)
        rows_q = columns_q = np.arange(len(cloud.points))
    current, charge = _point_sums(
        cloud, (rows_q, columns_q), sources, (near_rows, near_columns), split, ground, cell == (0, 0)
    )
    if correction is not None:
        for part, matrices in zip((current, charge), correction, strict=True):
            for p, matrix in enumerate(matrices):
                part[p] += matrix[near_rows][:, near_columns].toarray()
    return NearBlock(cell, near_rows, near_columns, current, charge)


def _coupled_points(points: Floats, sources: Floats, radius: float, ground: bool) -> tuple[Ints, Ints]:
    """Indices of points with a source, and sources with a point, within reach (ground images included)."""
    low, high = points.min(axis=0) - radius, points.max(axis=0) + radius

    def inside(p: Floats, low: Floats, high: Floats) -> Ints:
        axes = slice(0, 2) if ground else slice(0, 3)
        return np.flatnonzero(((p >= low) & (p <= high))[:, axes].all(axis=1))

    columns = inside(sources, low, high)
    if not len(columns):
        return np.arange(0), columns
    reach = sources[columns]
    return inside(points, reach.min(axis=0) - radius, reach.max(axis=0) + radius), columns


def _functions_at(cloud: Cloud, points: Ints) -> Ints:
    """Functions with weight at any of the given points."""
    if not len(points):
        return np.arange(0)
    used = abs(cloud.charge[points]).sum(axis=0) + sum(abs(c[points]).sum(axis=0) for c in cloud.current)
    return np.flatnonzero(np.asarray(used).ravel())


def _point_sums(cloud, points, sources, functions, split, ground, symmetric) -> tuple[Floats, Floats]:  # noqa: ANN001
    """``B^T K_p B`` for the currents and charges, over blocks of rows of the kernel."""
    rows_q, columns_q = points
    rows, columns = functions
    left = [m[rows_q][:, rows].T.tocsr() for m in (*cloud.current, cloud.charge)]
    right = [m[columns_q][:, columns].T.tocsr() for m in (*cloud.current, cloud.charge)]
    used = [bool(a.nnz and b.nnz) for a, b in zip(left, right, strict=True)]
    current = np.zeros((split.powers, len(rows), len(columns)))
    charge = np.zeros_like(current)
    for start in range(0, len(rows_q), ROW_BLOCK):
        part = slice(start, start + ROW_BLOCK)
        observers = cloud.points[rows_q[part]]
        first = start if symmetric else 0  # kernels below the diagonal block follow from symmetry
        direct, image = _kernel_rows(observers, sources[columns_q[first:]], split, ground)
        for p in range(split.powers):
            horizontal = direct[p] - image[p] if ground else direct[p]
            vertical = direct[p] + image[p] if ground else direct[p]
            if symmetric:  # halve the diagonal block, the transpose adds the other half
                size = horizontal.shape[0]
                horizontal[:, :size] *= 0.5
                if ground:
                    vertical[:, :size] *= 0.5
            for c, target, kernel in ((0, current, horizontal), (1, current, horizontal), (2, current, vertical), (3, charge, horizontal)):
                if used[c]:
                    inner = right[c][:, first:] @ kernel.T  # (columns, block)
                    target[p] += left[c][:, part] @ inner.T
    if symmetric:
        current += current.transpose(0, 2, 1).copy()
        charge += charge.transpose(0, 2, 1).copy()
    return current, charge


def _kernel_rows(observers: Floats, sources: Floats, split: Split, ground: bool) -> tuple[list, list]:
    """Near kernels between points, direct and in the ground's mirror; zero beyond the near radius."""
    return (
        _cut_kernels(observers, sources, split),
        _cut_kernels(observers, sources * MIRROR, split) if ground else [],
    )


def _cut_kernels(observers: Floats, sources: Floats, split: Split) -> list[Floats]:
    square = (observers**2).sum(axis=1)[:, None] + (sources**2).sum(axis=1) - 2 * observers @ sources.T
    near = square < split.near_radius**2
    kernels = [np.zeros(square.shape) for _ in range(split.powers)]
    i, j = np.nonzero(near)
    if len(i):
        distance = np.sqrt(((observers[i] - sources[j]) ** 2).sum(axis=1))
        distance[distance < 1e-9 * split.near_radius] = 0.0
        for kernel, values in zip(kernels, near_kernels(distance, split), strict=True):
            kernel[i, j] = values
    return kernels
