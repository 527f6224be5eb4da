"""The reduced model: the periodic operator on a few dozen currents, answering any (k, k_t) in a fraction of a
millisecond (design: the reduced model).

``Z_r = V^T Z V`` with the plain transpose, V orthonormal and spanned by snapshots and adjoint snapshots, so that the
port admittance ``V(-kt)^T V Z_r^-1 V^T V(kt)`` errs by the product of the two residuals only.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from ..geometry.cell import UnitCell
from .lag_sums import LagSum, merge
from .mode_transforms import ModeTransforms
from .operator import ETA, SPEED_OF_LIGHT
from .operator_view import CellView, view_without_near
from .reduced_far import ExactWaves, node_weights
from .reduced_parts import GapForms, LossForms, NearForms

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

BATCH_BYTES = 6e7
REMEMBERED = 4  # wavenumbers whose lag sums are kept


@dataclass(frozen=True)
class Answer:
    """Port matrices of n points at one frequency, in the columns of `result.Sweep`.

    Attributes
    ----------
    impedance, scattering : (n, n_port, n_port)
    coefficients : (n, r, n_port) of the basis vectors, per unit incident wave
    received : (n, n_port, n_port) ``I^H V``: what the currents receive from their gaps, per unit incident waves
    residual : (n,) relative residual of the reduced solves
    estimate : (n,) largest row sum of |S - S of the model without its newest snapshots|; NaN unless asked for
    """

    impedance: Complexes
    scattering: Complexes
    coefficients: Complexes
    received: Complexes
    residual: Floats
    estimate: Floats


@dataclass(frozen=True)
class Batch:
    """Points of one frequency close together, with the transforms at the exact waves that matter there.

    Attributes
    ----------
    index : (n,) places among the points asked for
    reduced, orders : (n, 2) k_t in the Brillouin zone and the orders taken off to get there
    pick : indices of the exact orders; `plus` : transforms there, by layer (n, n_pick, n_component, n_level, r)
    answer : Answer
    """

    index: Ints
    reduced: Floats
    orders: Ints
    pick: Ints
    plus: list[Complexes]
    answer: Answer


class ReducedModel:
    """Built by `greedy.build_reduced` or from stored arrays.

    Parameters
    ----------
    view : parts of the cell
    band : lowest and highest wavenumber, rad/m
    vectors : V, (n, r), orthonormal; `ends` : columns of the nested models, rising, the last is r
    exact : ExactWaves extended with V
    near : NearForms of V
    rest : half-plane cells (n_lag, 2) and X by Chebyshev node (n_node, n_lag, r, r) of the smooth rest
    """

    def __init__(
        self, view: CellView, band: tuple[float, float], vectors: Complexes, ends: list[int], exact: ExactWaves,
        near: NearForms, rest: tuple[Ints, Complexes],
    ):  # fmt: skip
        self.view, self.band, self.vectors, self.ends = view, band, vectors, ends
        self.exact, self.near, self.rest = exact, near, rest
        self._lag_sums: dict[float, LagSum] = {}
        self.cell = view.cell
        self.reference = np.array([port.resistance for port in self.cell.ports], dtype=float)
        self.ports, self.loads = GapForms(view.ports, vectors), GapForms(view.loads, vectors)
        self.losses = LossForms(view.losses, view.basis, view.lattice, *band, len(rest[1]))
        self.losses.rebuild(vectors, SPEED_OF_LIGHT)

    @property
    def size(self) -> int:
        """Dimension r."""
        return self.vectors.shape[1]

    @cached_property
    def all_transforms(self) -> ModeTransforms:
        """Transforms at every Floquet wave, for fields close to the conductors; made when first asked for."""
        view, zone = self.view, self.exact.zone
        reach = view.reach(view.k_max) + float(np.linalg.norm(zone.box))
        table = ModeTransforms(view.cloud, view.lattice, view.far.layers, reach, zone, view.tolerance)
        table.extend(self.vectors)
        return table

    def solve(self, k: float, kt: Floats, *, estimate: bool = False) -> Answer:
        """All points kt (n, 2), rad/m, at one wavenumber of the band."""
        batches = list(self.batches(k, kt, estimate=estimate))
        order = np.argsort(np.concatenate([batch.index for batch in batches]))
        names = ("impedance", "scattering", "coefficients", "received", "residual", "estimate")
        return Answer(*(np.concatenate([getattr(b.answer, name) for b in batches])[order] for name in names))

    def batches(self, k: float, kt: Floats, *, estimate: bool = False):
        """Yield the points kt (n, 2) in batches that lie close together in the Brillouin zone.

        Raises
        ------
        ValueError
            If k lies outside the band.
        """
        low, high = self.band
        if not low * (1 - 1e-9) <= k <= high * (1 + 1e-9):
            raise ValueError(f"k = {k:g} rad/m lies outside the reduced model's band {low:g} to {high:g} rad/m")
        lag_sum = self._lag_sum(k)
        reduced, orders = self.exact.zone.reduce(kt)
        for index in self._groups(reduced):
            kt0 = reduced[index]
            pick = self.exact.active(kt0)
            polynomials = self.exact.transforms.polynomials(kt0)
            plus = self.exact.transforms.at(polynomials, pick)
            minus = self.exact.transforms.reversed_at(polynomials, pick)
            x = self.exact.forms(np.array([k]), kt0, plus, minus, pick)[:, 0]
            x += lag_sum(kt0)
            answer = self._ports(k, kt0, self._loaded(k, kt0, x), estimate)
            yield Batch(index, kt0, orders[index], pick, plus, answer)

    def matrix(self, k: float, kt: Floats) -> Complexes:
        """``V^T Z V`` of the loaded cell, ohm, (n, r, r), at points kt (n, 2)."""
        kt0, _ = self.exact.zone.reduce(kt)
        x = self.exact.matrices(np.array([k]), kt0)[:, 0] + self._lag_sum(k)(kt0)
        return self._loaded(k, kt0, x)

    def rest_at(self, k: float, kt: Floats) -> Complexes:
        """The smooth rest's share of X = (k / j eta) Z, (n, r, r)."""
        cells, nodes = self.rest
        return LagSum(self.view.lattice, cells, np.tensordot(node_weights(*self.band, len(nodes), k), nodes, 1))(kt)

    def _lag_sum(self, k: float) -> LagSum:
        """Near part and rest at k; the last few are remembered."""
        if k not in self._lag_sums:
            while len(self._lag_sums) >= REMEMBERED:
                self._lag_sums.pop(next(iter(self._lag_sums)))
            self._lag_sums[k] = self._new_lag_sum(k)
        return self._lag_sums[k]

    def _new_lag_sum(self, k: float) -> LagSum:
        cells, nodes = self.rest
        rest = np.tensordot(node_weights(*self.band, len(nodes), k), nodes, 1)
        return LagSum(self.view.lattice, *merge([self.near.cells, cells], [self.near.at(k), rest]))

    def _groups(self, reduced: Floats) -> list[Ints]:
        """Batches of points close together, small enough for the memory they need."""
        size = max(self.size, 48)  # the same batches while a basis grows: their kernels may be remembered
        width = sum(c.shape[2] * c.shape[3] for c in self.exact.transforms.coefficients) * size
        modes = max(4.0, np.pi * self.view.window.high**2 * self.view.lattice.area / (4 * np.pi**2))
        count = int(np.clip(BATCH_BYTES / (16 * (3 * width * modes + 4 * size**2)), 1, 1024))
        groups = [np.arange(len(reduced))]
        while max(len(group) for group in groups) > count:
            halves = []
            for group in groups:
                if len(group) <= count:
                    halves.append(group)
                    continue
                axis = int(np.argmax(np.ptp(reduced[group], axis=0)))
                order = group[np.argsort(reduced[group, axis], kind="stable")]
                halves += [order[: len(order) // 2], order[len(order) // 2 :]]
            groups = halves
        return groups

    def _loaded(self, k: float, kt: Floats, x: Complexes) -> Complexes:
        """Z_r in ohm from X, with conductor losses and loads."""
        z = (1j * ETA / k) * x
        if self.losses.losses.names:
            z += self.losses.operator_at(k, kt)
        if self.cell.loads:
            into, out = self.loads.excitation(kt), self.loads.excitation(-kt)
            impedance = np.array([load.impedance(k * SPEED_OF_LIGHT / (2 * np.pi)) for load in self.cell.loads])
            z += (into * impedance) @ out.swapaxes(1, 2)
        return z

    def _ports(self, k: float, kt: Floats, z: Complexes, estimate: bool) -> Answer:
        right, out = self.ports.excitation(kt), self.ports.excitation(-kt).swapaxes(1, 2)
        solved = np.linalg.solve(z, right)
        residual = np.linalg.norm(z @ solved - right, axis=(1, 2)) / np.linalg.norm(right, axis=(1, 2))
        admittance = out @ solved
        scattering, voltage = self._terminate(admittance)
        error = np.full(len(kt), np.nan)
        if estimate and len(self.ends) > 1:
            r = self.ends[-2]
            smaller = out[:, :, :r] @ np.linalg.solve(z[:, :r, :r], right[:, :r])
            error = np.abs(self._terminate(smaller)[0] - scattering).sum(axis=2).max(axis=1)
        received = voltage.conj().swapaxes(1, 2) @ admittance.conj().swapaxes(1, 2) @ voltage
        impedance = np.asarray(np.linalg.inv(admittance), dtype=complex)
        return Answer(impedance, scattering, solved @ voltage, received, residual, error)

    def _terminate(self, admittance: Complexes) -> tuple[Complexes, Complexes]:
        """Scattering matrices and gap voltages, as `network.port_response` for many points."""
        root = np.sqrt(self.reference)
        identity = np.eye(len(root), dtype=complex)
        current = np.linalg.solve(identity + admittance * self.reference, 2 * admittance * root)
        scattering, voltage = identity - root[:, None] * current, 2 * np.diag(root) - self.reference[:, None] * current
        return scattering.astype(complex), voltage.astype(complex)

    def arrays(self) -> dict[str, NDArray]:
        """Everything as named plain arrays, for storing; `from_arrays` needs the same cell beside them."""
        return {
            "band": np.array(self.band),
            "filled_to": np.array([self.view.k_max, self.view.tolerance]),
            "loss_names": np.array(self.view.loss_names, dtype=str),
            "vectors": self.vectors,
            "ends": np.array(self.ends),
            "near_cells": self.near.cells,
            "near_powers": self.near.powers,
            "rest_cells": self.rest[0],
            "rest_nodes": self.rest[1],
        }

    @classmethod
    def from_arrays(cls, cell: UnitCell, arrays: dict[str, NDArray]) -> ReducedModel:
        """From stored arrays, without filling the near part of the cell.

        Raises
        ------
        ValueError
            If the cell has another number of unknowns than the one the arrays were made for.
        """
        k_max, tolerance = (float(x) for x in arrays["filled_to"])
        view = view_without_near(cell, k_max, tolerance, tuple(str(name) for name in arrays["loss_names"]))
        vectors = np.asarray(arrays["vectors"], dtype=complex)
        if len(vectors) != view.basis.n:
            raise ValueError(f"the model was made for {len(vectors)} unknowns, this cell has {view.basis.n}")
        exact = ExactWaves(view)
        exact.transforms.extend(vectors)
        low, high = (float(x) for x in arrays["band"])
        near = NearForms(np.asarray(arrays["near_cells"]), np.asarray(arrays["near_powers"]))
        rest = (np.asarray(arrays["rest_cells"]), np.asarray(arrays["rest_nodes"]))
        return cls(view, (low, high), vectors, [int(e) for e in arrays["ends"]], exact, near, rest)
