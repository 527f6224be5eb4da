"""Conductor loss: surface impedances and the matrices that put them on the basis functions."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.special import jve

from ..geometry.conductor import Material
from .basis import Basis, owner_coefficients
from .cloud import fan_weights
from .quadrature import gauss, graded

Floats = NDArray[np.float64]
MU0 = 1.25663706212e-6  # H/m (CODATA 2018)


def surface_impedance(material: Material, frequency: float) -> complex:
    """Impedance of a sheet, ohm per square.

    With a conductivity: ``(1 + j)/(sigma delta) coth((1 + j) t/delta)``, all current on one face (the safe side:
    a sheet with equal currents on both faces loses half); DC limit 1/(sigma t).
    """
    z = complex(material.sheet_resistance or 0.0)
    if material.conductivity is not None:
        depth = skin_depth(material.conductivity, frequency)
        bulk = (1 + 1j) / (material.conductivity * depth)
        if material.thickness is not None:
            bulk /= np.tanh((1 + 1j) * material.thickness / depth)
        z += bulk
    return z


def wire_impedance(material: Material, radius: float, frequency: float) -> complex:
    """Internal impedance of a round wire, ohm per metre: ``kc J0(kc a) / (2 pi a sigma J1(kc a))``.

    kc = (1 - j)/delta (Ramo, Whinnery, Van Duzer, Fields and Waves, ch. 4; from memory, limits tested). DC limit
    1/(pi a^2 sigma).
    """
    z = complex(material.wire_resistance or 0.0)
    if material.conductivity is not None:
        kc = (1 - 1j) / skin_depth(material.conductivity, frequency)
        argument = np.asarray(kc * radius)
        z += kc * complex(jve(0, argument) / jve(1, argument)) / (2 * np.pi * radius * material.conductivity)
    return z


def skin_depth(conductivity: float, frequency: float) -> float:
    """``1 / sqrt(pi f mu0 sigma)``, m."""
    return float(1 / np.sqrt(np.pi * frequency * MU0 * conductivity))


class ConductorLoss:
    """Overlap matrices ``int f_i* . f_j`` over every lossy conductor, folded back into the cell."""

    def __init__(self, basis: Basis):
        self.basis = basis
        mesh = basis.mesh
        self.lossy = [c for c, material in enumerate(mesh.materials) if material != Material()]
        self.names = tuple(mesh.names[c] for c in self.lossy)
        self._sheet = {c: _sheet_overlaps(basis, mesh.triangle_conductor == c) for c in self.lossy}
        self._wire = {c: _wire_overlaps(basis, mesh.segment_conductor == c) for c in self.lossy}
        self._displaced = any(s.any() for s in (basis.triangle_shift, basis.segment_shift, basis.fan_shift))
        self._cache: tuple[bytes, list] | None = None
        self._done: tuple[bytes, float, list] | None = None

    def matrices(self, kt: Floats, frequency: float) -> list[sparse.csr_matrix]:
        """For each lossy conductor its impedance matrix (n, n), ohm; the real quadratic form is the loss."""
        if not self.lossy:
            return []
        # without displaced copies nothing depends on the scan
        key = np.asarray(kt).tobytes() if self._displaced else b""
        if self._cache is None or self._cache[0] != key:
            w = owner_coefficients(self.basis, kt)
            fold = [
                (w.conj().T @ self._sheet[c] @ w, [(r, w.conj().T @ m @ w) for r, m in self._wire[c]])
                for c in self.lossy
            ]
            self._cache, self._done = (key, fold), None
        if self._done is not None and self._done[1] == frequency:
            return self._done[2]
        result = []
        for c, (sheet, wires) in zip(self.lossy, self._cache[1], strict=True):
            material = self.basis.mesh.materials[c]
            total = surface_impedance(material, frequency) * sheet
            for radius, overlap in wires:
                total = total + wire_impedance(material, radius, frequency) * overlap
            result.append(sparse.csr_matrix(total))
        self._done = (key, frequency, result)
        return result


def _sheet_overlaps(basis: Basis, mine: NDArray[np.bool_]) -> sparse.csr_matrix:
    """Overlaps of triangle shapes and fans on the mesh triangles of one conductor, (n_shapes, n_shapes)."""
    size = basis.coefficients.shape[0]
    rows, columns, values = [], [], []
    for t in np.flatnonzero(mine):
        corners = basis.triangles[t]
        area = basis.mesh.triangle_areas[t]
        middles = 0.5 * (corners + np.roll(corners, 1, axis=0))  # three-point rule, degree 2: exact
        shapes = (middles[:, None] - corners) / (2 * area)
        block = area / 3 * np.einsum("qac,qbc->ab", shapes, shapes)
        a, b = np.meshgrid(3 * t + np.arange(3), 3 * t + np.arange(3), indexing="ij")
        rows.append(a.ravel())
        columns.append(b.ravel())
        values.append(block.ravel())
    start = basis.shape_offsets[2]
    for f, owner in enumerate(basis.fan_owner):
        if mine[owner] and not basis.fan_shift[f].any():
            for column, value in _fan_overlaps(basis, f):
                index = np.array([start + f, column])
                rows.append(index)
                columns.append(index[::-1])
                values.append(np.array([value, value]) * (0.5 if column == start + f else 1.0))
    if not rows:
        return sparse.csr_matrix((size, size))
    index = (np.concatenate(rows), np.concatenate(columns))
    return sparse.csr_matrix((np.concatenate(values), index), shape=(size, size))


def _fan_overlaps(basis: Basis, f: int) -> list[tuple[int, float]]:
    """Overlap of one fan with itself and with the shapes of its triangle; the spreading current starts at a tenth of
    the triangle's size (its loss grows only as the logarithm of that)."""
    fan, owner = basis.fans[f], basis.fan_owner[f]
    area = basis.mesh.triangle_areas[owner]
    x, w = graded(6, 4)
    points, vector, _ = fan_weights(fan[None], (0.1 + 0.9 * x, 0.9 * w), gauss(6))
    radial = np.repeat(0.1 + 0.9 * x, 6)
    field = (1 / radial**2 - 1)[:, None] * (points[0] - fan[0]) / (2 * area)
    own = float(np.einsum("qc,qc->", vector[0, :, 0], field))
    corners = basis.triangles[owner]
    found = [(basis.shape_offsets[2] + f, own)]
    for a in range(3):
        shape = (points[0] - corners[a]) / (2 * area)
        found.append((3 * int(owner) + a, float(np.einsum("qc,qc->", vector[0, :, 0], shape))))
    return found


def _wire_overlaps(basis: Basis, mine: NDArray[np.bool_]) -> list[tuple[float, sparse.csr_matrix]]:
    """Overlaps of segment shapes of one conductor, one matrix per wire radius."""
    size, start = basis.coefficients.shape[0], basis.shape_offsets[1]
    found = []
    radii = basis.mesh.segment_radius
    for radius in np.unique(radii[mine]):
        segments = np.flatnonzero(mine & (radii == radius))
        first = start + 2 * segments
        length = basis.mesh.segment_lengths[segments]
        rows = np.concatenate([first, first, first + 1, first + 1])
        columns = np.concatenate([first, first + 1, first, first + 1])
        values = np.concatenate([length / 3, length / 6, length / 6, length / 3])
        found.append((float(radius), sparse.csr_matrix((values, (rows, columns)), shape=(size, size))))
    return found
