"""Slow reference: a whole small array by brute force, every element with terminations, loads and losses of its own.

All unknowns of all elements in one matrix, filled block by block: the block between two elements depends on the
difference m of their sites only. It is the point-to-point sum over the element's own quadrature cloud with the kernel
of the surroundings (free space with the ground's image here, a grounded slab in `reference_finite_layered`) plus the
product's static corrections of close pairs. No lattice sums, no Floquet waves, no splitting, no reduced basis: what
differs from the product is the array theory, not the mesh. Time factor exp(+j w t), r.m.s.
phasors, real reference resistances.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from functools import cached_property
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scanward.geometry.cell import UnitCell
from scanward.geometry.errors import InputError
from scanward.geometry.lattice import Lattice
from scanward.solver.basis import Basis, build_basis
from scanward.solver.cloud import Cloud, build_cloud
from scanward.solver.corrections import build_corrections
from scanward.solver.gaps import GapFunctional
from scanward.solver.losses import ConductorLoss
from scanward.solver.operator import ETA, SPEED_OF_LIGHT
from scanward.solver.rays import Ray, air_rays
from scanward.solver.zones import divide_zones

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

NOWHERE = Lattice(np.array([1e4, 0.0]), np.array([0.0, 1e4]))
"""A lattice whose copies join nothing."""
MIRROR = np.array([1.0, 1.0, -1.0])
STEP = 256  # observers handled at a time


class Surroundings(Protocol):
    """What an element sees: the kernels of the mixed potentials and the far field."""

    @property
    def k(self) -> float:
        """Free-space wavenumber, rad/m."""
        ...

    @property
    def rays(self) -> list[Ray]:
        """Static singular parts, for `build_corrections`."""
        ...

    def kernels(self, observers: Floats, sources: Floats) -> tuple[Complexes, Complexes, Complexes]:
        """Of horizontal currents, vertical currents and charges, (n_observer, n_source) each, 1/m.

        Where points coincide, what is left when 1/(4 pi R) and its amplitude are taken away.
        """
        ...

    def radiation(self, cloud: Cloud, theta: Floats, phi: Floats) -> Complexes:
        """``sqrt(4 pi/eta) r exp(+jkr) E`` per ampere of every function, (n_direction, 2, n): theta and phi parts."""
        ...


def smooth_kernel(distance: Floats, k: complex) -> Complexes:
    """``exp(-jkR)/(4 pi R)``; ``-jk/(4 pi)``, its rest without the static part, where R = 0."""
    with np.errstate(divide="ignore", invalid="ignore"):
        kernel = np.asarray(np.exp(-1j * k * distance) / (4 * np.pi * distance), dtype=complex)
    kernel[distance == 0] = -1j * k / (4 * np.pi)
    return kernel


def distances(observers: Floats, sources: Floats) -> Floats:
    """(n, 3) and (m, 3) -> (n, m); exactly 0 where points coincide."""
    square = np.zeros((len(observers), len(sources)))
    for axis in range(observers.shape[1]):
        square += (observers[:, axis, None] - sources[:, axis]) ** 2
    distance = np.sqrt(square)
    distance[distance < 1e-9 * max(1.0, float(np.abs(observers).max()))] = 0.0
    return distance


def unit_vectors(theta: Floats, phi: Floats) -> tuple[Floats, Floats, Floats]:
    """Outward, theta and phi unit vectors, (n, 3) each."""
    out = np.stack([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)], -1)
    e_theta = np.stack([np.cos(theta) * np.cos(phi), np.cos(theta) * np.sin(phi), -np.sin(theta)], -1)
    return out, e_theta, np.stack([-np.sin(phi), np.cos(phi), np.zeros_like(phi)], -1)


@dataclasses.dataclass(frozen=True)
class Air:
    """Free space, or the half-space over a perfectly conducting ground at z = 0 (images)."""

    k: float
    ground: bool

    @property
    def rays(self) -> list[Ray]:
        """Direct, and the image."""
        return air_rays(self.ground)

    def kernels(self, observers: Floats, sources: Floats) -> tuple[Complexes, Complexes, Complexes]:
        """The image has the opposite sign for charges and horizontal currents, the same for vertical ones."""
        direct = smooth_kernel(distances(observers, sources), self.k)
        if not self.ground:
            return direct, direct, direct
        image = smooth_kernel(distances(observers, sources * MIRROR), self.k)
        return direct - image, direct + image, direct - image

    def radiation(self, cloud: Cloud, theta: Floats, phi: Floats) -> Complexes:
        """``E = -j k eta exp(-jkr)/(4 pi r) (N_theta, N_phi)`` with N the transform of the current and its image."""
        out, *transverse = unit_vectors(theta, phi)
        direct = np.exp(1j * self.k * out @ cloud.points.T)
        image = np.exp(1j * self.k * (out * MIRROR) @ cloud.points.T) if self.ground else np.zeros_like(direct)
        signs = (-1.0, -1.0, 1.0)
        moments = np.stack([(direct + s * image) @ b for s, b in zip(signs, cloud.current, strict=True)], axis=1)
        return -1j * self.k * np.sqrt(ETA / (4 * np.pi)) * np.einsum("edc,dcn->den", np.stack(transverse), moments)


class WholeArrayReference:
    """The elements of `cell` at integer sites, solved as one problem at one frequency.

    Parameters
    ----------
    cell : UnitCell whose conductors keep clear of those of its neighbours
    sites : (n_site, 2) integer cells of the case's lattice
    frequency : Hz
    terminations : by site index (all ports of that element) or (site, port): "matched" (its reference), "open", "short"
        or an impedance, ohm. Those ports are no longer driven; all others are live.
    surroundings : default air, with the ground the cell names

    Attributes
    ----------
    live : (n_live, 2) site and port of the driven ports, in the order of all results
    scattering : (n_live, n_live)
    port_currents, port_voltages : (n_site, n_port, n_live) at all gaps for a unit power wave into each live port
    currents : (n_site, n, n_live) basis coefficients for the same

    Raises
    ------
    InputError
        For conductors that connect across the cell border, a stack without `surroundings`, or repeated sites.
    """

    def __init__(
        self,
        cell: UnitCell,
        sites: ArrayLike,
        frequency: float,
        terminations: Mapping[int | tuple[int, int], str | complex] | None = None,
        *,
        surroundings: Surroundings | None = None,
    ):
        self.cell, self.frequency = cell, frequency
        self.k = 2 * np.pi * frequency / SPEED_OF_LIGHT
        self.sites = np.asarray(sites, dtype=np.int64)
        _check(cell, self.sites, surroundings)
        self.positions = cell.lattice.positions(self.sites)
        self.surroundings: Surroundings = surroundings or Air(self.k, cell.ground)
        self.basis = build_basis(cell.mesh, NOWHERE, ground=cell.ground)
        self.cloud = build_cloud(self.basis)
        self.blocks = element_blocks(cell.lattice, self.basis, self.cloud, self.sites, self.surroundings)
        self.gaps = _functionals(cell.ports, self.basis)
        self.load_gaps = _functionals(cell.loads, self.basis)
        self.reference = np.array([port.resistance for port in cell.ports])
        self._terminated, self._impedance = _terminations(terminations or {}, len(self.sites), self.reference)
        self.live = np.argwhere(~self._terminated)
        self._solve()

    def matrix(self) -> Complexes:
        """Impedance matrix of all unknowns, site by site, (n_site n, n_site n), ohm, loads and losses included."""
        count, n = len(self.sites), self.basis.n
        own = sum(
            (m.toarray() for m in ConductorLoss(self.basis).matrices(np.zeros(2), self.frequency)),
            start=np.zeros((n, n), dtype=complex),
        )
        for load, u in zip(self.cell.loads, self.load_gaps.T, strict=True):
            own += load.impedance(self.frequency) * np.outer(u, u)
        whole = np.empty((count, n, count, n), dtype=complex)
        for i, here in enumerate(self.sites):
            for j, there in enumerate(self.sites):
                whole[i, :, j] = self.block(there - here) + (own if i == j else 0.0)
        return whole.reshape(count * n, count * n)

    def block(self, lag: ArrayLike) -> Complexes:
        """Z_m: tested by the element at the origin, the source displaced by the cell `lag`, (n, n), ohm."""
        p, q = (int(x) for x in np.asarray(lag))
        return self.blocks[p, q] if (p, q) in self.blocks else self.blocks[-p, -q].T

    def _solve(self) -> None:
        count, n_port = len(self.sites), len(self.reference)
        drive = np.kron(np.eye(count), self.gaps)
        unit = np.linalg.solve(self.matrix(), drive)  # currents per volt
        self.admittance = drive.T @ unit
        """Of all gaps, (n_site n_port, n_site n_port), S: sites first."""
        live = ~self._terminated.ravel()
        resistance = np.where(live, np.tile(self.reference, count), 0.0) + np.where(live, 0.0, self._impedance.ravel())
        closed = np.isfinite(resistance)
        incident = np.zeros((count * n_port, int(live.sum())))
        incident[np.flatnonzero(live), np.arange(live.sum())] = 2 * np.sqrt(np.tile(self.reference, count)[live])
        voltage = np.zeros(incident.shape, dtype=complex)
        y = self.admittance
        fixed, free = np.ix_(closed, closed), np.flatnonzero(~closed)
        reduced = y[fixed]
        if len(free):  # no current through open gaps
            from_closed = -np.linalg.solve(y[np.ix_(free, free)], y[np.ix_(free, closed)])
            reduced = reduced + y[np.ix_(closed, free)] @ from_closed
        r = resistance[closed]
        current = np.linalg.solve(np.eye(len(r)) + reduced * r, reduced @ incident[closed])
        voltage[closed] = incident[closed] - r[:, None] * current
        if len(free):
            voltage[free] = from_closed @ voltage[closed]
        through = y @ voltage
        self.scattering = (
            np.eye(int(live.sum())) - np.sqrt(np.tile(self.reference, count)[live])[:, None] * through[live]
        )
        self.port_voltages = voltage.reshape(count, n_port, -1)
        self.port_currents = through.reshape(count, n_port, -1)
        self.currents = (unit @ voltage).reshape(count, self.basis.n, -1)

    @property
    def impedance(self) -> Complexes:
        """Open-circuit impedances of all gaps, terminations left out, (n_site n_port, n_site n_port), ohm."""
        return np.asarray(np.linalg.inv(self.admittance), dtype=complex)

    def embedded_patterns(self, theta: ArrayLike, phi: ArrayLike) -> Complexes:
        """Theta and phi amplitudes (n_direction, n_live, 2): one port driven, all others terminated.

        |.|^2 summed over the two is the realised gain; phase reference: the origin of the lattice, at z = 0.
        """
        theta, phi = np.broadcast_arrays(np.atleast_1d(theta).astype(float), np.atleast_1d(phi).astype(float))
        element = self.surroundings.radiation(self.cloud, theta, phi)
        out, _, _ = unit_vectors(theta, phi)
        phase = np.exp(1j * self.k * out[:, :2] @ self.positions.T)
        total = np.tensordot(phase, self.currents, 1)  # (n_direction, n, n_live)
        return np.swapaxes(element @ total, 1, 2)

    def radiated_power(self, excitation: ArrayLike) -> float:
        """Power through the sphere (the upper half over a ground), W, for incident waves (n_live,)."""
        a = np.asarray(excitation, dtype=complex)
        span = float(np.linalg.norm(np.ptp(self.positions, axis=0)) + np.linalg.norm(np.ptp(self.cloud.points, axis=0)))
        size = int(np.ceil(self.k * span)) + 12
        x, w = np.polynomial.legendre.leggauss(size)
        x, w = (0.5 * (x + 1), 0.5 * w) if self.cell.ground else (x, w)
        phi = 2 * np.pi * np.arange(2 * size) / (2 * size)
        gain = np.abs(
            np.swapaxes(self.embedded_patterns(np.repeat(np.arccos(x), len(phi)), np.tile(phi, size)), 1, 2) @ a
        )
        return float(w @ (gain**2).sum(axis=1).reshape(size, -1).mean(axis=1) / 2)

    @cached_property
    def loss_matrices(self) -> list[Complexes]:
        """Lossy conductors' matrices of one element, (n, n), ohm."""
        return [m.toarray() for m in ConductorLoss(self.basis).matrices(np.zeros(2), self.frequency)]

    def absorbed_power(self, excitation: ArrayLike) -> float:
        """Power, W, lost in conductors, loads and terminations for incident waves (n_live,)."""
        a = np.asarray(excitation, dtype=complex)
        c = self.currents @ a
        power = sum(float(np.einsum("si,ij,sj->", c.conj(), m, c).real) for m in self.loss_matrices)
        for load, u in zip(self.cell.loads, self.load_gaps.T, strict=True):
            power += load.impedance(self.frequency).real * float((np.abs(c @ u) ** 2).sum())
        ends = self._terminated & np.isfinite(self._impedance)
        resistance = self._impedance.real[ends]
        return power + float((resistance * np.abs((self.port_currents @ a)[ends]) ** 2).sum())


def element_blocks(
    lattice: Lattice, basis: Basis, cloud: Cloud, sites: Ints, around: Surroundings
) -> dict[tuple[int, int], Complexes]:
    """Z_m (n, n) for one of m and -m of every difference of sites; the other is the transpose."""
    lags = {(int(d[0]), int(d[1])) for i in sites for d in sites - i if d[0] > 0 or (d[0] == 0 and d[1] >= 0)}
    missed = build_corrections(basis, lattice, around.rays, divide_zones(basis, None))
    k = around.k
    blocks = {}
    for lag in lags:
        block = distant_block(cloud, np.append(lattice.positions(np.array([lag]))[0], 0.0), around)
        for p, (more_current, more_charge) in enumerate(zip(*missed.get(lag, ([], [])), strict=True)):
            block += 1j * k * ETA * k ** (2 * p) * more_current.toarray()
            block += ETA / (1j * k) * k ** (2 * p) * more_charge.toarray()
        blocks[lag] = block
    return blocks


def distant_block(cloud: Cloud, shift: Floats, around: Surroundings) -> Complexes:
    """Z (n, n), ohm, by the cloud's points alone, sources displaced by `shift` (3,): exact enough far apart."""
    current, charge = (np.zeros((cloud.n, cloud.n), dtype=complex) for _ in range(2))
    for start in range(0, len(cloud.points), STEP):
        part = slice(start, start + STEP)
        kernels = around.kernels(cloud.points[part], cloud.points + shift)
        weights = [(current, m, kernels[min(1, max(0, axis - 1))]) for axis, m in enumerate(cloud.current)]
        for target, weight, kernel in (*weights, (charge, cloud.charge, kernels[2])):
            if weight.nnz:
                target += weight[part].T @ (weight.T @ kernel.T).T
    return 1j * around.k * ETA * current + ETA / (1j * around.k) * charge


def _functionals(gaps, basis: Basis) -> Floats:
    """Mean current of every function through every gap (ports or loads), (n, n_gap)."""
    columns = [GapFunctional(gap.name, gap.gap, basis, NOWHERE).parts[0] for gap in gaps]
    return np.stack(columns, axis=1) if columns else np.zeros((basis.n, 0))


def _terminations(given: Mapping, count: int, reference: Floats) -> tuple[NDArray[np.bool_], Complexes]:
    """Which ports are terminated, and in what, (n_site, n_port) each; open: infinite."""
    fixed = {"open": complex(np.inf), "short": 0j}
    terminated = np.zeros((count, len(reference)), dtype=bool)
    impedance = np.zeros((count, len(reference)), dtype=complex)
    for key, value in given.items():
        site, ports = (key[0], [key[1]]) if isinstance(key, tuple) else (key, range(len(reference)))
        for port in ports:
            terminated[site, port] = True
            name = value if isinstance(value, str) else ""
            impedance[site, port] = reference[port] if name == "matched" else fixed[name] if name else complex(value)
    return terminated, impedance


def _check(cell: UnitCell, sites: Ints, surroundings: Surroundings | None) -> None:
    if len({tuple(s) for s in sites.tolist()}) < len(sites):
        raise InputError("a site is listed twice.", where="sites", allowed="different sites")
    if surroundings is None and cell.stack is not None and not cell.stack.is_air:
        raise InputError("the cell has layers.", where="surroundings", allowed="the kernel of those layers")
    joined = build_basis(cell.mesh, cell.lattice, ground=cell.ground)
    if any(s.any() for s in (joined.triangle_shift, joined.segment_shift, joined.fan_shift)):
        raise InputError(
            "conductors connect across the border of the cell: how such an array ends is not defined.",
            where="[[conductor]]",
            allowed="elements that keep clear of their neighbours",
        )
