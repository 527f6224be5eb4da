"""Slow reference: the kernels between horizontal currents on top of a grounded slab, by Sommerfeld integrals.

Space domain and no lattice: with ``c = coth(g1 d)``, ``g0 = sqrt(kt^2 - k^2)``, ``g1 = sqrt(kt^2 - eps k^2)`` the
lines of a slab of thickness d over ground (written out for this one interface, nothing of the product's) give

    K_A = Z_TE/(j k eta)                   = 1/(g0 + g1 c)
    K_Q = (j k/eta)(Z_TM - Z_TE)/kt^2      = (g1 + g0 c)/((g0 + g1 c)(g1 + eps g0 c))

    G(rho) = (1/2 pi) int_0^inf K(kt) J0(kt rho) kt dkt

with the path above the poles and branch points. The first two orders of K at large kt,
``w/(2 sqrt(kt^2 - kappa k^2))`` with w = 1, kappa = (1 + eps)/2 for K_A and w = 2/(1 + eps), kappa = 2 eps/(1 + eps)
for K_Q (checked in the tests: the rest falls as kt^-5), are taken out and put back as
``w exp(-j sqrt(kappa) k R)/(4 pi R)``; the rest, which falls as kt^-5 and exp(-2 kt d), is tabulated over rho.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from reference_finite import WholeArrayReference, distances, smooth_kernel
from scanward.geometry.cell import UnitCell
from scanward.solver.cloud import Cloud
from scanward.solver.operator import ETA, SPEED_OF_LIGHT
from scanward.solver.rays import Ray
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq
from scipy.special import jv

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

LAST = 150.0  # the real path ends at this times the largest wavenumber (and where exp(-2 kt d) is below 1e-10)
TABLE_STEP = 1 / 300  # wavelengths in air, or a fortieth of the slab's thickness


class GroundedSlab:
    """Surroundings (see `reference_finite`) of horizontal currents on a grounded slab's upper face.

    Parameters
    ----------
    k : free-space wavenumber, rad/m
    permittivity : relative, complex for loss (negative imaginary part)
    thickness : d, m
    reach : largest lateral distance asked for, m
    """

    def __init__(self, k: float, permittivity: complex, thickness: float, reach: float):
        self.k, self.eps, self.d, self.reach = k, complex(permittivity), thickness, reach
        self.ray = Ray(
            current=1.0,
            charge=2 / (1 + self.eps),
            kappa_current=(1 + self.eps) / 2,
            kappa_charge=2 * self.eps / (1 + self.eps),
        )
        step = min(TABLE_STEP * 2 * np.pi / k, thickness / 40)
        rho = np.arange(0.0, reach + 4 * step, step)
        self._table = CubicSpline(rho, self.rest(rho), axis=0)

    @property
    def rays(self) -> list[Ray]:
        """The direct term alone: the slab's images are smooth on the scale of its thickness."""
        return [self.ray]

    def spectra(self, kt: ArrayLike) -> tuple[Complexes, Complexes]:
        """K_A and K_Q, m each, on or above the real kt axis; any shape."""
        kt = np.asarray(kt, dtype=complex)
        g0, g1 = np.sqrt(kt**2 - self.k**2), np.sqrt(kt**2 - self.eps * self.k**2)
        t = np.tanh(g1 * self.d)
        te, tm = g0 * t + g1, g1 * t + self.eps * g0
        return np.asarray(t / te, complex), np.asarray(t * (g1 * t + g0) / (te * tm), complex)

    def leading(self, kt: ArrayLike) -> tuple[Complexes, Complexes]:
        """The part of both that is put back in closed form."""
        kt = np.asarray(kt, dtype=complex)
        ray = self.ray
        of_current = ray.current / (2 * np.sqrt(kt**2 - ray.kappa_current * self.k**2))
        return np.asarray(of_current, complex), np.asarray(
            ray.charge / (2 * np.sqrt(kt**2 - ray.kappa_charge * self.k**2)), complex
        )

    def rest(self, rho: Floats) -> Complexes:
        """Both kernels less their closed-form part, (n, 2), 1/m, by integration along the deformed path."""
        kt, weight = self._path(float(rho.max()))
        both = np.stack(self.spectra(kt)) - np.stack(self.leading(kt))
        samples = (both * weight * kt / (2 * np.pi)).T
        low = kt.imag > 0
        result = np.empty((len(rho), 2), dtype=complex)
        for start in range(0, len(rho), 100):
            part = rho[start : start + 100, None]
            result[start : start + 100] = (
                jv(0, part * kt[low]) @ samples[low] + jv(0, part * kt[~low].real) @ samples[~low]
            )
        return result

    def _path(self, rho: float) -> tuple[Complexes, Complexes]:
        """Half an ellipse above the singularities, then the real axis; nodes and weights."""
        index = float(np.sqrt(abs(self.eps)))
        turn = 1.3 * index * self.k
        height = min(0.3 * self.k, 1.5 / max(rho, 1e-9))
        x, w = np.polynomial.legendre.leggauss(10)
        panels = 40 + int(rho * turn)
        s = (np.arange(panels)[:, None] + 0.5 * (x + 1)).ravel() / panels  # 0..1 along the ellipse
        ws = np.tile(0.5 * w, panels) / panels
        low = 0.5 * turn * (1 - np.cos(np.pi * s)) + 1j * height * np.sin(np.pi * s)
        slope = np.pi * (0.5 * turn * np.sin(np.pi * s) + 1j * height * np.cos(np.pi * s))
        stop = max(LAST * index * self.k, 12 / self.d)
        width = min(np.pi / max(rho, 1e-9), 0.5 / self.d)
        # panels grow with kt where neither the Bessel function nor the slab limits them
        edges = [turn]
        while edges[-1] < stop:
            edges.append(edges[-1] + min(width, 0.3 * edges[-1]))
        edge = np.array(edges)
        size = np.diff(edge)
        high = (edge[:-1, None] + size[:, None] * 0.5 * (x + 1)).ravel()
        weights = np.concatenate([slope * ws, (size[:, None] * 0.5 * w).ravel()])
        return np.asarray(np.concatenate([low, high]), complex), np.asarray(weights, complex)

    def greens(self, rho: ArrayLike) -> tuple[Complexes, Complexes]:
        """G_A and G_Q over lateral distance (n, m), 1/m; at rho = 0 less the static part."""
        rho = np.asarray(rho, dtype=float)
        if rho.max(initial=0.0) > self.reach:
            raise ValueError(f"distance {rho.max():g} m beyond the table's {self.reach:g} m")
        return self._whole(rho, self._table(rho))

    def _whole(self, rho: Floats, rest: Complexes) -> tuple[Complexes, Complexes]:
        """The tabulated or integrated rest (..., 2) with the closed-form part put back."""
        ray = self.ray
        a = ray.current * smooth_kernel(rho, complex(np.sqrt(ray.kappa_current)) * self.k)
        q = ray.charge * smooth_kernel(rho, complex(np.sqrt(ray.kappa_charge)) * self.k)
        return a + rest[..., 0], q + rest[..., 1]

    def integrated(self, rho: Floats) -> tuple[Complexes, Complexes]:
        """G_A and G_Q at a few distances (n,), 1/m, without the table and its reach."""
        return self._whole(rho, self.rest(rho))

    def kernels(self, observers: Floats, sources: Floats) -> tuple[Complexes, Complexes, Complexes]:
        """As `reference_finite.Surroundings`; there are no vertical currents."""
        a, q = self.greens(distances(observers[:, :2], sources[:, :2]))
        return a, a, q

    def radiation(self, cloud: Cloud, theta: Floats, phi: Floats) -> Complexes:
        """By stationary phase: ``E_theta = -(j k/2 pi r) Z_TM J_u``, ``E_phi = -(j k cos(theta)/2 pi r) Z_TE J_v``."""
        kt = self.k * np.sin(theta)
        k_a, k_q = self.spectra(kt + 1e-12j * self.k)
        z_te = 1j * self.k * ETA * k_a
        z_tm = z_te + ETA / (1j * self.k) * k_q * kt**2
        along = np.stack([np.cos(phi), np.sin(phi)], -1)
        phase = np.exp(1j * (kt[:, None] * along) @ cloud.points[:, :2].T)
        x, y = (phase @ b for b in cloud.current[:2])
        cosine, sine = np.cos(phi)[:, None], np.sin(phi)[:, None]
        theta_part = z_tm[:, None] * (x * cosine + y * sine)
        phi_part = (z_te * np.cos(theta))[:, None] * (y * cosine - x * sine)
        # the phase of plane z = d is referred to z = 0
        front = -1j * self.k / (2 * np.pi) * np.sqrt(4 * np.pi / ETA) * np.exp(1j * self.k * self.d * np.cos(theta))
        return front[:, None, None] * np.stack([theta_part, phi_part], axis=1)

    def surface_wave(self) -> tuple[float, tuple[float, float]]:
        """Wavenumber (rad/m) of the TM0 wave of a lossless slab too thin for TE1; residues of K_A (0) and K_Q."""
        eps, k, d = self.eps.real, self.k, self.d
        if self.eps.imag or d * np.sqrt(eps - 1) >= np.pi / (2 * k):
            raise ValueError("lossless slabs below the cut-off of TE1 only")

        def mismatch(kt: float) -> float:
            inside = np.sqrt(eps * k * k - kt * kt)
            return eps * np.sqrt(kt * kt - k * k) * np.cos(inside * d) - inside * np.sin(inside * d)

        pole = float(brentq(mismatch, k, k * np.sqrt(eps) * (1 - 1e-12), xtol=1e-14 * k))
        ring = 1e-3 * (pole - k) * np.exp(2j * np.pi * (np.arange(16) + 0.5) / 16)
        # on this ring both square roots stay on the sheet of the real axis: Re > 0 of g0, tanh(g1 d) odd over odd
        residue = [complex((np.asarray(f) * ring).mean()) for f in self.spectra(pole + ring)]
        return pole, (residue[0].real, residue[1].real)


def printed_array(cell: UnitCell, sites: ArrayLike, frequency: float, terminations=None) -> WholeArrayReference:
    """Brute force for flat elements on the top of the cell's one layer over ground.

    Raises
    ------
    ValueError
        For any other stack or height.
    """
    stack, z = cell.stack, cell.mesh.points[:, 2]
    if (
        stack is None
        or not stack.ground
        or len(stack.layers) != 1
        or stack.sheets
        or np.ptp(z)
        or len(cell.mesh.segments)
    ):
        raise ValueError("flat conductors on one layer over ground only")
    if not np.allclose(z, stack.top, atol=1e-9 * stack.top) or stack.layers[0].permeability != 1:
        raise ValueError("the conductors must lie on top of a layer that is not magnetic")
    k = 2 * np.pi * frequency / SPEED_OF_LIGHT
    positions = cell.lattice.positions(np.asarray(sites))
    corners = positions[:, None] + cell.mesh.points[:, :2]
    reach = float(np.linalg.norm(np.ptp(corners.reshape(-1, 2), axis=0)))
    slab = GroundedSlab(k, stack.layers[0].complex_permittivity, stack.top, reach)
    return WholeArrayReference(cell, sites, frequency, terminations, surroundings=slab)


def surface_wave_power(array: WholeArrayReference, excitation: ArrayLike) -> float:
    """Power (W) in the TM0 wave for incident waves (n_live,): the residue's share of Re(I^H Z I).

    With K_Q ~ R/(kt - kp), the path above: ``-(eta R kp/(4 pi k)) int |q(kp, phi)|^2 dphi``, q the charges' transform.
    """
    slab = array.surroundings
    assert isinstance(slab, GroundedSlab)
    pole, (_, residue) = slab.surface_wave()
    phi = 2 * np.pi * np.arange(128) / 128
    wave = pole * np.stack([np.cos(phi), np.sin(phi)], -1)
    charges = array.currents @ np.asarray(excitation, dtype=complex)  # (n_site, n)
    element = np.exp(1j * wave @ array.cloud.points[:, :2].T) @ array.cloud.charge
    transform = np.einsum("en,es,sn->e", element, np.exp(1j * wave @ array.positions.T), charges)
    return float(-ETA * residue * pole / (4 * np.pi * slab.k) * 2 * np.pi * (np.abs(transform) ** 2).mean())
