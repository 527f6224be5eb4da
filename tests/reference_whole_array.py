"""A whole small array in air or over ground by brute force: one matrix of all unknowns of all elements.

The free-space kernel ``exp(-jkR)/(4 pi R)`` and its ground image between all quadrature points, plus the static
corrections between close elements: no lattice, no Floquet waves, no splitting, no reduced basis.
"""

from __future__ import annotations

import dataclasses

import numpy as np
from scanward.geometry.cell import UnitCell
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesh import Mesh
from scanward.solver.basis import build_basis
from scanward.solver.cloud import build_cloud
from scanward.solver.corrections import build_corrections
from scanward.solver.gaps import GapFunctional
from scanward.solver.network import port_response
from scanward.solver.operator import ETA
from scanward.solver.rays import air_rays
from scanward.solver.zones import divide_zones

NOWHERE = Lattice(np.array([1e3, 0.0]), np.array([0.0, 1e3]))  # copies that do not couple
MIRROR = np.array([1.0, 1.0, -1.0])


class WholeArray:
    """Perfectly conducting elements of a cell without loads at lattice sites (n, 2).

    Attributes
    ----------
    scattering, impedance : (n n_port, n n_port), sites first
    """

    def __init__(self, cell: UnitCell, sites, k: float):
        self.cell, self.k = cell, k
        offsets = np.pad(cell.lattice.positions(np.asarray(sites)), ((0, 0), (0, 1)))
        self.basis = build_basis(_copies(cell.mesh, offsets), NOWHERE, ground=cell.ground)
        self.cloud = build_cloud(self.basis)
        gaps = [
            (port, dataclasses.replace(port.gap, centre=port.gap.centre + offset))
            for offset in offsets
            for port in cell.ports
        ]
        right = np.stack([GapFunctional(p.name, gap, self.basis, NOWHERE).parts[0] for p, gap in gaps], axis=1)
        currents = np.linalg.solve(self._matrix(), right)
        response = port_response(right.T @ currents, np.array([port.resistance for port, _ in gaps]))
        self.scattering, self.impedance = response.scattering, response.impedance
        self.currents = currents @ response.voltage

    def _matrix(self):
        cloud, k = self.cloud, self.k
        direct = self._kernel(cloud.points)
        image = self._kernel(cloud.points * MIRROR) if self.cell.ground else np.zeros_like(direct)
        rays = air_rays(self.cell.ground)
        corrections = build_corrections(self.basis, NOWHERE, rays, divide_zones(self.basis, None))[0, 0]
        a = sum(_form(b, direct + sign * image) for b, sign in zip(cloud.current, (-1, -1, 1), strict=True) if b.nnz)
        q = _form(cloud.charge, direct - image)
        for p, (current, charge) in enumerate(zip(*corrections, strict=True)):
            a, q = a + k ** (2 * p) * current.toarray(), q + k ** (2 * p) * charge.toarray()
        return 1j * k * ETA * a + ETA / (1j * k) * q

    def _kernel(self, sources):
        """The static part is left out where points coincide: the corrections hold it."""
        distance = np.linalg.norm(self.cloud.points[:, None] - sources, axis=2)
        same = distance < 1e-9
        distance[same] = 1.0
        kernel = np.exp(-1j * self.k * distance) / (4 * np.pi * distance)
        kernel[same] = -1j * self.k / (4 * np.pi)
        return kernel

    def gain_amplitudes(self, theta, phi):
        """Embedded patterns (n_direction, n_port, 2), theta and phi parts, |.|^2 the realised gain."""
        out = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], -1)
        e_theta = np.stack([np.cos(theta) * np.cos(phi), np.cos(theta) * np.sin(phi), -np.sin(theta)], -1)
        e_phi = np.stack([-np.sin(phi), np.cos(phi), 0 * phi], -1)
        phase = np.exp(1j * self.k * out @ self.cloud.points.T)
        image = np.exp(1j * self.k * (out * MIRROR) @ self.cloud.points.T) if self.cell.ground else 0 * phase
        moments = [
            (phase + sign * image) @ (b @ self.currents)
            for b, sign in zip(self.cloud.current, (-1, -1, 1), strict=True)
        ]
        field = np.einsum("dec,cdp->dpe", np.stack([e_theta, e_phi], axis=1), np.array(moments))
        return -self.k * np.sqrt(ETA / (4 * np.pi)) * field  # E = -j k eta exp(-jkr) J / 4 pi r, j left out


def _form(weights, kernel):
    return weights.T @ (weights.T @ kernel.T).T


def _copies(mesh: Mesh, offsets) -> Mesh:
    n, count = len(mesh.points), len(offsets)
    step = n * np.arange(count)[:, None, None]
    return Mesh(
        (mesh.points + offsets[:, None]).reshape(-1, 3),
        (mesh.triangles + step).reshape(-1, 3), np.tile(mesh.triangle_conductor, count),
        (mesh.segments + step).reshape(-1, 2), np.tile(mesh.segment_radius, count),
        np.tile(mesh.segment_conductor, count), mesh.names, mesh.materials,
    )  # fmt: skip
