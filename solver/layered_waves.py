"""Power and plane waves of currents in a layered stack: radiation, excitation, absorption.

Currents are r.m.s. spectral amplitudes per unit area (the transform over one cell divided by the cell area)
in the components (u, v, z): along k_t, across it (ẑ x û), and vertical. exp(+jwt).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..geometry.stack import Side, Stack
from .lines import ETA, Lines, Tie, propagation, wave_impedance

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]


@dataclass(frozen=True)
class OuterField:
    """Tangential field of outgoing waves at an outer face per unit current, ohm, each (n_kt, n_source).

    `te`: E_v per J_v; `tm`: E_u per J_u; `tm_vertical`: E_u per J_z.
    """

    te: Complexes
    tm: Complexes
    tm_vertical: Complexes


def _vertical_source(stack: Stack, lines: Lines, side: Side) -> Complexes:
    """Series voltage per unit J_z, ``eta k_t / (k eps')``, (n_kt, n_source)."""
    eps = stack.permittivity[stack.region_at(lines.source, side)]
    return ETA * lines.kt[:, None] / (lines.k * eps)


def radiated_field(
    stack: Stack,
    k: float,
    kt: ArrayLike,
    source: ArrayLike,
    *,
    upwards: bool = True,
    source_side: Side = "above",
) -> OuterField:
    """Outgoing TE and TM waves above (or below an open stack) per unit current at the given heights.

    The amplitudes are referred to the top interface (to z = 0 when looking down), also for currents beyond
    it. The power leaving per unit area is ``|E_u|^2 / Z_TM + |E_v|^2 / Z_TE`` for waves that propagate
    (`lines.wave_impedance`).

    Raises
    ------
    ValueError
        Looking down on a grounded stack.
    """
    if not upwards and stack.ground:
        raise ValueError("nothing radiates through the ground")
    kt = np.atleast_1d(np.asarray(kt))
    source = np.atleast_1d(stack.snap(source))
    face = stack.top if upwards else 0.0
    plane = max(face, source.max()) if upwards else min(face, source.min())
    lines = Lines(stack, k, kt, [plane], source, "above" if upwards else "below")
    back = np.exp(propagation(k, kt, 1.0 + 0j, open_space=True) * abs(plane - face))[:, None]
    vertical = _vertical_source(stack, lines, source_side) * lines.vv("TM")[:, 0]
    return OuterField(-back * lines.vi("TE")[:, 0], -back * lines.vi("TM")[:, 0], back * vertical)


def incident_field(
    stack: Stack, k: float, kt: ArrayLike, z: ArrayLike, *, from_above: bool = True, side: Side = "above"
) -> OuterField:
    """Total field in the bare stack per unit tangential E of an incident plane wave, each (n_kt, n_z).

    `te`: E_v(z) of the TE wave; `tm`, `tm_vertical`: E_u(z) and E_z(z) of the TM wave; the incident wave's
    tangential field is 1 at the outer face. By reciprocity ``-2/Z`` (for E_z ``+2/Z``, the wave vector k_t
    being the same and not reversed) times the radiated field. On an interface E_z is that of the given side.
    """
    kt = np.atleast_1d(np.asarray(kt))
    out = radiated_field(stack, k, kt, z, upwards=from_above, source_side=side)
    z_te, z_tm = (wave_impedance(k, kt, p)[:, None] for p in ("TE", "TM"))
    return OuterField(-2 / z_te * out.te, -2 / z_tm * out.tm, 2 / z_tm * out.tm_vertical)


class _Excited:
    """Voltages and currents on both lines, (n_kt, n_z), of all sources together."""

    def __init__(self, lines: Lines, current: Complexes, series: Complexes):
        def total(green: Complexes, weight: Complexes) -> Complexes:
            return np.einsum("kzs,ks->kz", green, weight)

        j_u, j_v = current[..., 0], current[..., 1]
        self.v_te, self.i_te = total(lines.vi("TE"), -j_v), total(lines.ii("TE"), -j_v)
        self.v_tm = total(lines.vi("TM"), -j_u) + total(lines.vv("TM"), series)
        self.i_tm = total(lines.ii("TM"), -j_u) + total(lines.iv("TM"), series)

    @property
    def power(self) -> Floats:
        """Upward Poynting power per area."""
        return (self.v_te * self.i_te.conj() + self.v_tm * self.i_tm.conj()).real

    @property
    def square(self) -> Floats:
        """Tangential |E|^2."""
        return np.abs(self.v_te) ** 2 + np.abs(self.v_tm) ** 2


@dataclass(frozen=True)
class Absorbed:
    """Absorbed power per unit area, W/m^2: (n_kt, n_layer) and (n_kt, n_sheet), in the order of the stack."""

    layers: Floats
    sheets: Floats


def absorbed_power(
    stack: Stack,
    k: float,
    kt: ArrayLike,
    source: ArrayLike,
    current: ArrayLike,
    *,
    source_side: Side = "above",
) -> Absorbed:
    """Power lost in every layer and sheet while currents flow at the given heights.

    Every layer is cut at the sources and sheets inside it; what enters a piece and does not leave it, by the
    Poynting power Re(V I*) just inside its two ends, is absorbed there. Waves of different k_t add: the loss
    per cell is the cell area times the sum over Floquet waves.

    Parameters
    ----------
    kt : (n_kt,) real transverse wavenumbers, rad/m
    source : (n_source,) heights, m
    current : (n_kt, n_source, 3) r.m.s. spectral current per area, components u, v, z

    Raises
    ------
    ValueError
        For complex k_t or a current of another shape.
    """
    kt = np.atleast_1d(np.asarray(kt))
    source = np.atleast_1d(stack.snap(source))
    current = np.asarray(current, dtype=complex)
    if np.iscomplexobj(kt) or current.shape != (len(kt), len(source), 3):
        raise ValueError(f"current has shape {current.shape}, real kt and {(len(kt), len(source), 3)} are needed")
    lines = Lines(stack, k, kt, source)
    series = _vertical_source(stack, lines, source_side) * current[..., 2]
    sheets = np.array([float(stack.snap(sheet.height)) for sheet in stack.sheets])
    inside = [h for h in np.concatenate([source, sheets]) if 0 < h < stack.top]
    cuts = np.unique(np.concatenate([stack.interfaces, inside]))
    sides: tuple[Tie, Tie] = ("above", "below")
    upper, lower = (_Excited(Lines(stack, k, kt, cuts, source, tie), current, series) for tie in sides)
    start, end = upper.power, lower.power
    # `Lines` splits a sheet into halves on either side of its height (and of a vertical source there)
    half = 0.5 * np.array([(1 / complex(s.impedance)).real for s in stack.sheets])
    at = np.searchsorted(cuts, sheets)
    upper_half, lower_half = half * upper.square[:, at], half * lower.square[:, at]
    start[:, at] -= upper_half
    end[:, at] += lower_half
    pieces = start[:, :-1] - end[:, 1:]
    owner = np.searchsorted(stack.interfaces, 0.5 * (cuts[:-1] + cuts[1:])) - 1
    layers = np.zeros((len(kt), len(stack.layers)))
    for n in range(len(stack.layers)):
        layers[:, n] = pieces[:, owner == n].sum(axis=1)
    if np.any(series):  # heat of the smooth field times the singular field of the vertical current itself
        moment = _Excited(lines, current, series).i_tm * current[..., 2].conj()
        region = stack.region_at(source, source_side)
        loss = stack.permittivity.imag / np.abs(stack.permittivity) ** 2
        heat = 2 * ETA / k * kt[:, None] * loss[region] * moment.imag
        for n in range(len(stack.layers)):
            layers[:, n] += heat[:, region == n + 1].sum(axis=1)
    return Absorbed(layers, upper_half + lower_half)
