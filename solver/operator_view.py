"""What the reduced model needs to know of a cell: its parts, the couplings of both parts of its operator, and a split
of the far part into few Floquet waves that carry every singularity and a rest without any.

Everything is in terms of ``X = (k / j eta) Z = k^2 A - Q``, a polynomial in k^2 in the near part.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.cell import UnitCell
from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from .basis import Basis, build_basis
from .cloud import Cloud, build_cloud
from .ewald import choose_split
from .far import FarPart, choose_layers, tall_fraction
from .gaps import GapFunctional
from .guided_waves import guided_waves
from .layered_far import LayeredFarPart
from .losses import ConductorLoss
from .near import NearBlock
from .operator import RAY_REACH, PeriodicOperator
from .rays import layered_rays
from .sweep import CellSolver
from .zones import divide_zones

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

FEW_WAVES = 1.7  # E' of the exact waves in air times the square root of the cell area
WINDOW_WIDTH = 10.0  # width of the window's edge in layered stacks times the square root of the cell area
WINDOW_SLOPE = 2.5  # shape of the window's edge: steeper in the middle, flatter at its ends when larger


@dataclass(frozen=True)
class CellView:
    """A cell's parts by name, with or without a filled near part (`near` is None then).

    `far` carries every Floquet wave; `exact` those kept exact, weighed with `window`.
    """

    cell: UnitCell
    lattice: Lattice
    basis: Basis
    cloud: Cloud
    stack: Stack | None
    k_max: float
    tolerance: float
    far: FarPart
    exact: FarPart
    window: Window
    ports: list[GapFunctional]
    loads: list[GapFunctional]
    losses: ConductorLoss
    loss_names: tuple[str, ...]
    near: list[NearBlock] | None

    def reach(self, k: float) -> float:
        """Transverse wavenumber beyond which Floquet waves are dropped at k, rad/m."""
        index = 1.0 if self.stack is None else np.sqrt(np.abs(self.stack.permittivity * self.stack.permeability).max())
        return float(np.hypot(self.far.split.far_radius, k * max(1.0, float(index))))


@dataclass(frozen=True)
class Window:
    """Weight of exact waves over k_t: 1 up to `low`, 0 from `high` on, smooth between, rad/m."""

    low: float
    high: float

    def __call__(self, square: Floats) -> Floats:
        """Weights for k_t^2 of any shape: ``erfc(c (2x - 1) / sqrt(4 x (1 - x))) / 2`` over the edge x = 0..1.

        All derivatives vanish at both ends (a partition of unity after J. P. Boyd; form from memory).
        """
        from scipy.special import erfc

        if self.low == self.high:  # the kernel itself dies
            return (square <= self.high**2).astype(float)
        x = np.clip((np.sqrt(square) - self.low) / (self.high - self.low), 1e-9, 1 - 1e-9)
        weight = 0.5 * erfc(WINDOW_SLOPE * (2 * x - 1) / np.sqrt(4 * x * (1 - x)))
        return np.where(x <= 1e-9, 1.0, np.where(x >= 1 - 1e-9, 0.0, weight))


def view_of(solver: CellSolver) -> CellView:
    """The parts of a direct solver."""
    operator = solver.operator
    return _view(solver.cell, operator, solver.ports, solver.loads, solver.losses, solver.loss_names, operator.near)


def view_without_near(cell: UnitCell, k_max: float, tolerance: float, loss_names: tuple[str, ...]) -> CellView:
    """The same parts without filling the near part, for a reduced model read from a file."""
    operator = _Unfilled(cell, k_max, tolerance)
    ports, loads = (
        [GapFunctional(one.name, one.gap, operator.basis, operator.lattice) for one in found]
        for found in (cell.ports, cell.loads)
    )
    return _view(cell, operator, ports, loads, ConductorLoss(operator.basis), loss_names, None)


def _view(
    cell: UnitCell,
    operator: PeriodicOperator | _Unfilled,
    ports: list[GapFunctional],
    loads: list[GapFunctional],
    losses: ConductorLoss,
    loss_names: tuple[str, ...],
    near: list[NearBlock] | None,
) -> CellView:
    exact, window = few_waves(operator, cell.ground)
    return CellView(
        cell, operator.lattice, operator.basis, operator.cloud, operator.stack, operator.k_max, operator.tolerance,
        operator.far, exact, window, ports, loads, losses, loss_names, near,
    )  # fmt: skip


class _Unfilled:
    """`operator.PeriodicOperator` before its near part is filled."""

    def __init__(self, cell: UnitCell, k_max: float, tolerance: float):
        self.k_max, self.tolerance = k_max, tolerance
        self.lattice = cell.lattice.reduced
        self.basis = build_basis(cell.mesh, cell.lattice, ground=cell.ground)
        self.cloud = build_cloud(self.basis)
        self.stack = stack = cell.stack if cell.stack is not None and not cell.stack.is_air else None
        index = 1.0 if stack is None else float(np.sqrt(np.abs(stack.permittivity * stack.permeability).max()))
        zoning = divide_zones(self.basis, stack)
        split = choose_split(self.lattice.area, k_max * index, tolerance, tall=tall_fraction(self.cloud, zoning))
        layers = choose_layers(self.cloud, zoning, split, tolerance)
        if stack is None:
            self.far = FarPart(self.cloud, self.lattice, split, layers, cell.ground)
        else:
            rays, cross = layered_rays(stack, zoning, RAY_REACH / split.splitting)
            self.far = LayeredFarPart(self.cloud, self.lattice, split, stack, rays, cross, layers)


def few_waves(operator: PeriodicOperator | _Unfilled, ground: bool) -> tuple[FarPart, Window]:
    """The Floquet waves kept exact: far part and window.

    In air the far part of a smaller splitting parameter E': it holds every singularity (the light circles), and what
    it lacks of the far part of E is entire in k and k_t. In layered stacks the kernels themselves within a window
    that is 1 up to beyond the light circle and every surface-wave pole.
    """
    area, k_max, tolerance = operator.lattice.area, operator.k_max, operator.tolerance
    if operator.stack is None:
        split = choose_split(area, k_max, tolerance, max(FEW_WAVES / np.sqrt(area), k_max / 4.5))
        reach = float(np.hypot(split.far_radius, k_max))
        layers = choose_layers(operator.cloud, divide_zones(operator.basis, None), split, tolerance)
        return FarPart(operator.cloud, operator.lattice, split, layers, ground), Window(reach, reach)
    low = 1.03 * max(
        k * max([1.0, *(abs(wave.beta) for wave in guided_waves(operator.stack, k))]) for k in (k_max, 0.7 * k_max)
    )
    return operator.far, Window(low, low + WINDOW_WIDTH / float(np.sqrt(area)))


def couplings(far: FarPart, k: float, square: Floats) -> dict[tuple[int, int], list[tuple[int, int, Complexes, float]]]:
    """By pair of layers: (row component, column component, kernel (n_mode, n_level, n_level), factor in X).

    Components 0, 1, 2, 3: x, y, z current and charge; factor ``k^2`` for ``j k eta`` and -1 for ``eta / j k``.
    """
    return {
        pair: [(one.row, one.column, one.kernel, -1.0 if one.of_charges else k * k) for one in found]
        for pair, found in far.component_kernels(k, square).items()
    }


def near_terms(block: NearBlock) -> list[tuple[int, float, NDArray]]:
    """X of one near block as (first power of k^2, sign, matrices by power of k^2)."""
    return [(1, 1.0, block.current), (0, -1.0, block.charge)]
