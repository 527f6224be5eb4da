"""The periodic moment matrix Z(k, kt), explicit in wavenumber and scan (design: the central equation).

    Z = j k eta (A_near + A_far) + (eta / j k) (Q_near + Q_far)

tested and expanded in the same functions, so that ``Z I = V`` with ``V_i = int f_i . E_impressed``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from ..geometry.cell import UnitCell
from .basis import build_basis
from .cloud import build_cloud
from .ewald import choose_split
from .far import FarPart, choose_layers, tall_fraction
from .layered_far import LayeredFarPart
from .near import build_near
from .rays import air_rays, check_sheets, layered_rays
from .zones import divide_zones

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

ETA = 376.730313668  # free-space wave impedance, ohm (CODATA 2018)
SPEED_OF_LIGHT = 299792458.0  # m/s
RAY_REACH = 4.0  # rays longer than this over E are left to the far part: exp(-x^2) there is below 1e-7


class PeriodicOperator:
    """Fills the near part once; every (k, kt) afterwards is a linear combination plus a sum over Floquet waves.

    Parameters
    ----------
    cell : UnitCell
    k_max : largest wavenumber asked for, rad/m
    tolerance : relative truncation error of both sums; sets every cut-off (`ewald.choose_split`)
    splitting : overrides the splitting parameter E, 1/m (tests)
    """

    def __init__(self, cell: UnitCell, k_max: float, tolerance: float = 1e-6, *, splitting: float | None = None):
        self.cell, self.k_max, self.tolerance = cell, k_max, tolerance
        self.lattice = cell.lattice.reduced
        self.basis = build_basis(cell.mesh, cell.lattice, ground=cell.ground)
        self.cloud = build_cloud(self.basis)
        self.stack = stack = cell.stack if cell.stack is not None and not cell.stack.is_air else None
        index = 1.0 if stack is None else float(np.sqrt(np.abs(stack.permittivity * stack.permeability).max()))
        zoning = divide_zones(self.basis, stack)
        tall = tall_fraction(self.cloud, zoning)
        self.split = choose_split(self.lattice.area, k_max * index, tolerance, splitting, tall=tall)
        layers = choose_layers(self.cloud, zoning, self.split, tolerance)
        cross = None
        if stack is None:
            rays = air_rays(cell.ground)
            self.far = FarPart(self.cloud, self.lattice, self.split, layers, cell.ground)
        else:
            check_sheets(stack, zoning, self.split.far_radius)
            rays, cross = layered_rays(stack, zoning, RAY_REACH / self.split.splitting)
            self.far = LayeredFarPart(self.cloud, self.lattice, self.split, stack, rays, cross, layers)
        self.near = build_near(self.basis, self.cloud, self.lattice, self.split, rays, zoning, cross)
        self._combined: tuple[float, tuple[NDArray, NDArray, NDArray, Floats]] | None = None

    @property
    def n(self) -> int:
        """Number of unknowns."""
        return self.basis.n

    @property
    def near_bytes(self) -> int:
        """Memory of the stored near part."""
        return sum(block.current.nbytes + block.charge.nbytes for block in self.near)

    def matrix(self, k: float, kt: Floats) -> Complexes:
        """Z(k, kt) in ohm, (n, n), for perfect conductors; k in rad/m (real, <= k_max), kt (2,) rad/m."""
        if not 0 < k <= self.k_max * (1 + 1e-9):
            raise ValueError(
                f"k = {k:g} rad/m lies outside (0, {self.k_max:g}], the range the near part was filled for"
            )
        kt = np.asarray(kt, dtype=float)
        z = self.far.matrix(k, kt, 1j * k * ETA, ETA / (1j * k))
        home, even, odd, rho = self._at(k)
        angle = rho @ kt
        if np.iscomplexobj(home):
            z += 1j * home
            z += 1j * (np.cos(angle) @ even).reshape(z.shape) + (np.sin(angle) @ odd).reshape(z.shape)
            return z
        z.imag += home
        if len(rho):
            z.imag += (np.cos(angle) @ even).reshape(z.shape)
            z.real += (np.sin(angle) @ odd).reshape(z.shape)
        return z

    def _at(self, k: float) -> tuple[NDArray, NDArray, NDArray, Floats]:
        """Near reactance ``k eta A - (eta / k) Q`` at k, kept for the next scan point.

        Returns the home block (n, n); for the m other blocks X the flattened ``X + X^T`` and ``X - X^T``, (m, n n), so
        that ``j (exp(-j a) X + exp(j a) X^T) = j cos(a) (X + X^T) + sin(a) (X - X^T)``; and rho_m, (m, 2).
        """
        if self._combined is not None and self._combined[0] == k:
            return self._combined[1]
        others = [block for block in self.near if block.cell != (0, 0)]
        kind = np.result_type(*(part for block in self.near for part in (block.current, block.charge)))
        home = np.zeros((self.n, self.n), kind)
        even, odd = (np.zeros((len(others), self.n, self.n), kind) for _ in range(2))
        for block in self.near:
            powers = k ** (2.0 * np.arange(len(block.current)))
            x = np.tensordot(k * ETA * powers, block.current, 1) - np.tensordot((ETA / k) * powers, block.charge, 1)
            if block.cell == (0, 0):
                home[np.ix_(block.rows, block.columns)] = x
                continue
            i = next(i for i, other in enumerate(others) if other is block)
            even[i][np.ix_(block.rows, block.columns)] = x
            odd[i] = even[i] - even[i].T
            even[i] += even[i].T.copy()
        flat = (len(others), self.n * self.n)
        rho = self.lattice.positions(np.array([block.cell for block in others]).reshape(-1, 2))
        self._combined = (k, (home, even.reshape(flat), odd.reshape(flat), rho))
        return self._combined[1]

    def __repr__(self) -> str:
        return (
            f"PeriodicOperator({self.n} unknowns, {len(self.cloud.points)} points, E = {self.split.splitting:.4g} 1/m, "
            f"{self.split.powers} powers of k^2, {len(self.near)} near blocks of {self.near_bytes / 1e6:.0f} MB, "
            f"{self.far.n_level} levels)"
        )
