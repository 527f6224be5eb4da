"""Finite arrays of the cell's elements: any lattice sites, full interaction, edge effects included.

The macro basis of `array_basis` at every site, coupled by `lag_coupling.lag_couplings`; ground and layers extend
without end. Power waves, real references, ``exp(+j w t)``. Port p is driven through its reference resistance R by an
incident wave a: the gap sees ``V = 2 sqrt(R) a - R I``, so that ``(Z + sum_p R_p u_p u_p^T) c = sum_p 2 sqrt(R_p) a_p
u_p`` with u the gaps' functionals, and ``b = a - sqrt(R) I`` (Kurokawa, IEEE MTT 13, 194, 1965). A dummy element has
its load in place of R.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..geometry.errors import InputError
from .array_basis import check_separate
from .array_pattern import element_factors, surface_wave_power
from .array_sites import Termination, checked_sites, port_impedances
from .block_toeplitz import BlockToeplitz
from .gaps import GapFunctional
from .lag_coupling import lag_couplings
from .operator import SPEED_OF_LIGHT
from .reduced import ReducedModel
from .result import ScanPoints

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

DIRECT_LIMIT = 5000  # unknowns up to which the system is factorised (16 bytes times its square)
ITERATIVE_TOLERANCE = 1e-6
MOST_BYTES = 4e9  # of the couplings between all offsets
PATTERN_BYTES = 1e8  # of what directions are handled together


@dataclass(frozen=True)
class ArrayState:
    """A finite array under one set of incident waves.

    Attributes
    ----------
    incident, reflected : (n_live,) power waves a and b, sqrt(W)
    coefficients : (n_site, r) of the basis currents
    residual : relative residual of the linear system
    """

    incident: Complexes
    reflected: Complexes
    coefficients: Complexes
    residual: float

    @property
    def active_reflection(self) -> Complexes:
        """``b / a`` (n_live,), NaN at ports that are not driven."""
        a = self.incident
        return np.divide(self.reflected, a, out=np.full(a.shape, complex(np.nan, np.nan)), where=a != 0)


@dataclass(frozen=True)
class PowerBudget:
    """Where the power of an excitation goes, as fractions of the available power |a|^2.

    `reflected` into the generators; `radiated` up and down; `surface_waves` bound to a lossless stack, running away
    along it; `conductors`, `loads` of the cells and `terminations` of dummy elements: absorbed there; `rest`: what
    lossy layers absorb, bound waves with it, or the error of the balance where nothing of the kind exists.
    """

    reflected: float
    radiated: tuple[float, float]
    surface_waves: float
    conductors: float
    loads: float
    terminations: float

    @property
    def rest(self) -> float:
        """1 less all the others."""
        return 1 - (
            self.reflected + sum(self.radiated) + self.surface_waves + self.conductors + self.loads + self.terminations
        )


class FiniteArray:
    """Array of the cell's elements at given lattice sites, at one frequency.

    Parameters
    ----------
    model : ReducedModel from `array_basis.build_array_model`
    frequency : Hz, within the model's band
    sites : (n_site, 2) integer cells of the case's own lattice, all different; `array_sites.rectangle` lists rows
        and columns
    terminations : what dummy elements end in: by index of the site, for all its ports, or by (site, port):
        "matched" (in the reference resistance), "open", "short" or an impedance in ohm. All other ports are live:
        driven through, or terminated in, their reference resistance.
    direct_limit : unknowns (sites times basis size) up to which the system is solved directly
    tolerance : relative residual of the iterative solver beyond that

    Attributes
    ----------
    ports : (n_live, 2) site index and port index of the live ports, in the order of all results
    positions : (n_site, 2) m

    Raises
    ------
    InputError
        For sites twice the same or too far apart, unknown terminations, no live port, or conductors that touch those of
        the next cell.
    """

    def __init__(
        self,
        model: ReducedModel,
        frequency: float,
        sites: ArrayLike,
        terminations: Mapping[int | tuple[int, int], Termination] | None = None,
        *,
        direct_limit: int = DIRECT_LIMIT,
        tolerance: float = ITERATIVE_TOLERANCE,
    ):
        check_separate(model.view.basis)
        self.model, self.frequency = model, frequency
        self.k = 2 * np.pi * frequency / SPEED_OF_LIGHT
        self.sites = checked_sites(sites)
        self.positions = model.cell.lattice.positions(self.sites)
        self._gaps, self._load_gaps = (_local(gaps, model.vectors) for gaps in (model.view.ports, model.view.loads))
        n_port = len(model.reference)
        impedance, live = port_impedances(len(self.sites), model.reference, terminations or {})
        self._impedance, self._live = impedance, live
        self.ports = np.argwhere(live)
        if not len(self.ports):
            raise InputError("every port is terminated.", where="finite array", allowed="at least one live port")
        self.reference = np.broadcast_to(model.reference, (len(self.sites), n_port))[live]
        own = (self._gaps * impedance[:, None, :]) @ self._gaps.T
        self.system = BlockToeplitz(self.sites, self._lags(), own, direct_limit, tolerance)

    def _lags(self) -> Complexes:
        sides = np.ptp(self.sites, axis=0)
        size = 16.0 * np.prod(2.0 * sides + 1) * self.model.size**2
        if size > MOST_BYTES:
            raise InputError(
                f"the couplings over {sides[0] + 1} by {sides[1] + 1} cells would take {size / 1e9:.1f} GB.",
                where="finite array",
                allowed=f"{MOST_BYTES / 1e9:.0f} GB",
                hint="Fewer rows and columns, or a basis of fewer currents (`build_array_model` at one frequency).",
            )
        steps = [np.arange(-side, side + 1) for side in sides]
        offsets = np.stack(np.meshgrid(*steps, indexing="ij"), -1).reshape(-1, 2)
        lags = lag_couplings(self.model, self.frequency, offsets)
        return lags.reshape(len(steps[0]), len(steps[1]), self.model.size, self.model.size)

    def solve(self, excitation: ArrayLike) -> ArrayState:
        """Currents and outgoing waves for incident waves (n_live,)."""
        a = self._checked(excitation)
        coefficients, residual = self._currents(a[:, None])
        return ArrayState(a, self._outgoing(a[:, None], coefficients)[:, 0], coefficients[:, :, 0], residual)

    def scattering(self) -> Complexes:
        """S of all live ports, (n_live, n_live); dummies as terminated."""
        return self._outgoing(np.eye(len(self.ports), dtype=complex), self.unit_currents)

    @cached_property
    def unit_currents(self) -> Complexes:
        """Coefficients (n_site, r, n_live) for a unit wave into each live port in turn."""
        return self._currents(np.eye(len(self.ports), dtype=complex))[0]

    def scattering_column(self, port: int) -> Complexes:
        """One column (n_live,) of S, which by reciprocity is the row too: for arrays too large for all of it."""
        unit = np.zeros(len(self.ports), dtype=complex)
        unit[port] = 1.0
        return self.solve(unit).reflected

    def currents(self, excitation: ArrayLike) -> Complexes:
        """Coefficients (n_site, r) of the basis currents `model.vectors` at every site."""
        return self.solve(excitation).coefficients

    def active_reflection(self, excitation: ArrayLike) -> Complexes:
        """``b / a`` of every live port (n_live,), NaN where a = 0."""
        return self.solve(excitation).active_reflection

    def scan_excitation(self, u: float, v: float, taper: ArrayLike | None = None) -> Complexes:
        """Incident waves (n_live,) that point the beam at (u, v), normalised to 1 W in all.

        taper : (n_site,) amplitudes (real or complex), default uniform. Ports of a cell by the case's own drive.
        """
        weights = np.ones(len(self.sites)) if taper is None else np.asarray(taper)
        if weights.shape != (len(self.sites),):
            raise ValueError(f"taper has shape {weights.shape}, the array {len(self.sites)} sites")
        phase = np.exp(-1j * self.k * (self.positions @ np.array([u, v])))
        drive = np.array([port.drive for port in self.model.cell.ports])
        a = (weights * phase)[self.ports[:, 0]] * drive[self.ports[:, 1]]
        power = np.sum(np.abs(a) ** 2)
        if not power > 0:
            raise ValueError("no live port is driven: every amplitude is zero")
        return a / np.sqrt(power)

    def embedded_patterns(self, directions: ScanPoints, side: int = 1) -> Complexes:
        """Embedded pattern of every live port, (n_direction, n_live, 2): theta and phi amplitudes.

        |.|^2 is the realised gain (linear) with all other live ports in their references and dummies as terminated.
        Phase reference: the array's cell (0, 0). `side` -1: the half-space below of arrays without ground.
        """
        return self._patterns(directions, self.unit_currents, side)

    def pattern(self, excitation: ArrayLike, directions: ScanPoints, side: int = 1) -> Complexes:
        """Pattern of the whole array (n_direction, 2), |.|^2 the realised gain for the available power |a|^2."""
        state = self.solve(excitation)
        available = np.linalg.norm(state.incident)
        return self._patterns(directions, state.coefficients[:, :, None], side)[:, 0] / available

    def power_budget(self, excitation: ArrayLike) -> PowerBudget:
        """Where the power of these incident waves goes."""
        state = self.solve(excitation)
        c, model = state.coefficients, self.model
        available = float(np.sum(np.abs(state.incident) ** 2))
        sides = (1,) if model.cell.ground else (1, -1)
        radiated = [self._radiated(c, side) / available for side in sides]
        bound = surface_wave_power(model, self.k, self.positions, c)
        conductors = 0.0
        if model.losses.losses.names:
            lost = model.losses.power_lags(self.k)[:, 0].sum(axis=0)
            conductors = float(np.einsum("sr,rq,sq->", c.conj(), lost, c).real)
        resistance = np.array([load.impedance(self.frequency).real for load in model.cell.loads])
        loads = float((resistance * np.abs(c @ self._load_gaps) ** 2).sum())
        through = np.abs(c @ self._gaps) ** 2
        dummies = float((np.where(self._live, 0.0, self._impedance.real) * through).sum())
        return PowerBudget(
            float(np.sum(np.abs(state.reflected) ** 2)) / available,
            (radiated[0], radiated[1] if len(radiated) > 1 else 0.0),
            bound / available, conductors / available, loads / available, dummies / available,
        )  # fmt: skip

    def _checked(self, excitation: ArrayLike) -> Complexes:
        a = np.asarray(excitation, dtype=complex)
        if a.shape != (len(self.ports),):
            raise ValueError(f"excitation has shape {a.shape}, the array {len(self.ports)} live ports")
        if not np.all(np.isfinite(a)) or not a.any():
            raise ValueError("an excitation needs finite amplitudes, at least one of them not zero")
        return a

    def _currents(self, incident: Complexes) -> tuple[Complexes, float]:
        """Coefficients (n_site, r, m) for incident waves (n_live, m), and the residual."""
        site, port = self.ports.T
        right = np.zeros((len(self.sites), self.model.size, incident.shape[1]), dtype=complex)
        for p in range(self._gaps.shape[1]):
            mine = port == p
            voltage = 2 * np.sqrt(self.reference[mine])[:, None] * incident[mine]
            right[site[mine]] += self._gaps[:, p, None] * voltage[:, None]
        return self.system.solve(right)

    def _outgoing(self, incident: Complexes, coefficients: Complexes) -> Complexes:
        """b (n_live, m)."""
        through = np.einsum("rp,srm->spm", self._gaps, coefficients)[self._live]
        return incident - np.sqrt(self.reference)[:, None] * through

    def _patterns(self, directions: ScanPoints, coefficients: Complexes, side: int) -> Complexes:
        """(n_direction, m, 2) for coefficients (n_site, r, m)."""
        n, (sites, r, m) = len(directions), coefficients.shape
        result = np.empty((n, m, 2), dtype=complex)
        step = int(np.clip(PATTERN_BYTES / (16 * r * m), 1, 3000))
        for start in range(0, n, step):
            some = slice(start, start + step)
            part = ScanPoints(directions.u[some], directions.v[some], directions.phi[some])
            factors = element_factors(self.model, self.k, part, side)
            phase = np.exp(1j * self.k * (np.column_stack([part.u, part.v]) @ self.positions.T))
            total = (phase @ coefficients.reshape(sites, -1)).reshape(-1, r, m)
            result[some] = np.swapaxes(factors @ total, 1, 2)
        return result

    def _radiated(self, coefficients: Complexes, side: int) -> float:
        """Power radiated into one half-space: the pattern over the hemisphere, exact for its band limit."""
        span = float(np.linalg.norm(np.ptp(self.positions, axis=0))) + 2 * np.sqrt(self.model.cell.lattice.area)
        size = int(np.ceil(self.k * span))
        count = size // 2 + 16
        cosine, weight = np.polynomial.legendre.leggauss(count)
        theta = np.arccos(0.5 * (cosine + 1))
        phi = 2 * np.pi * np.arange(2 * size + 24) / (2 * size + 24)
        directions = ScanPoints.from_angles(np.repeat(theta, len(phi)), np.tile(phi, count))
        gain = np.abs(self._patterns(directions, coefficients[:, :, None], side)) ** 2
        rings = gain.sum(axis=(1, 2)).reshape(count, -1).mean(axis=1)
        return float(0.5 * weight @ rings) / 2  # the sphere's mean of the gain, one half of it


def _local(gaps: list[GapFunctional], vectors: Complexes) -> Complexes:
    """Functionals of the gaps on the basis of their own element, (r, n_gap).

    Raises
    ------
    InputError
        For a gap that lies on the conductors of several cells.
    """
    for gap in gaps:
        if len(gap.parts) > 1:
            raise InputError("a gap lies on conductors of two cells.", where="finite array", allowed="gaps of one cell")
    columns = [gap.parts[0] @ vectors for gap in gaps]
    return np.stack(columns, axis=1) if columns else np.zeros((vectors.shape[1], 0), dtype=complex)
