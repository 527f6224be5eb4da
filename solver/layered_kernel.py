"""Mixed-potential kernels of a layered stack, in the spectral domain.

With û along k_t, v̂ = ẑ x û and the transform ``d = -j k_t . J_t + dJ_z/dz`` of the charge, the field is

    -E = j k eta [ K_A J_t + k_t K_tz J_z + ẑ (K_zt k_t . J_t + K_zz J_z) ] - (eta / j k) (-j k_t + ẑ d/dz) K_Q d

so that the moment matrix is ``j k eta <f, K f> + (eta / j k) <div f, K_Q div f>``, everything integrated
over z and z':

    K_A  = V_i^TE / (j k eta)
    K_Q  = (j k / eta) (V_i^TM - V_i^TE) / k_t^2
    K_tz = j mu' (V_v^TM - V_v^TE) / k_t^2
    K_zt = j mu  (I_i^TM - I_i^TE) / k_t^2                            K_zt(z, z') = -K_tz(z', z)
    K_zz = (eta / j k) [ (mu'/eps + mu/eps') I_v^TM - k^2 mu mu' (I_v^TM - I_v^TE) / k_t^2 ]

(primed: at the source). This is formulation C of K. A. Michalski, D. Zheng, IEEE TAP 38, 335, 1990, in the
symmetric form of K. A. Michalski, J. R. Mosig, IEEE TAP 45, 508, 1997 (citations from memory, formulas
derived anew). Why C: its K_Q is the same for charges of horizontal and vertical currents and, like every
V_i, continuous through interfaces at both ends. The integration by parts that moves d/dz' onto J_z therefore
leaves nothing behind where a conductor crosses an interface; in formulations A and B K_Q jumps there and
each crossing carries a line charge of its own. K_tz, K_zt and K_zz do jump (eps, mu), so no set of
interpolation levels may straddle an interface.

What the solver uses is the same form with one more integration by parts (`symmetric_kernels`): there ``k_t . J_t``
is written as charge less ``dJ_z/dz``, and both mixed kernels become one between charges and vertical currents,

    j k eta [ <J_t, K_A J_t> + <J_z, K_v J_z> + <d, K_c J_z> + <J_z, K_c^T d> ] + (eta / j k) <d, K_Q d>
    K_c = mu' (V_v^TM - V_v^TE) / k_t^2,      K_v = -j k eta mu mu' (I_v^TM - I_v^TE) / k_t^2

Without magnetic layers all four are continuous through every interface (a sheet excepted), and K_v behaves for large
k_t as in air. The boundary terms vanish: V_v is continuous in z and zero on the ground.

`vertical_correction` gives the same field with K_tz moved into the scalar potential (K_phi^z = P_z).

All are even in k_t and finite at k_t = 0. In air they reduce to ``exp(-j kz |z - z'|) / (2 j kz)`` and its
ground image.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import erf

from ..geometry.stack import Side, Stack
from .lines import ETA, Lines, propagation

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Sides = Side | NDArray[np.str_] | list[Side]


@dataclass(frozen=True)
class Kernels:
    """All five kernels, each (n_kt, n_z, n_source); see the module's formulas.

    Attributes
    ----------
    a, q : K_A and K_Q, m
    zz : K_zz, m
    tz, zt : m^2; horizontal current by vertical and the reverse, to be multiplied by the vector k_t
    """

    a: Complexes
    q: Complexes
    zz: Complexes
    tz: Complexes
    zt: Complexes


def horizontal_kernels(
    stack: Stack, k: float, kt: ArrayLike, z: ArrayLike, source: ArrayLike | None = None
) -> tuple[Complexes, Complexes]:
    """K_A and K_Q between heights, each (n_kt, n_z, n_source), m.

    Parameters
    ----------
    stack : Stack
    k : free-space wavenumber, rad/m
    kt : (n_kt,) transverse wavenumber, real or complex, rad/m
    z, source : heights, m; sources default to z. On interfaces and on the ground too (where K_A = K_Q = 0).
    """
    return _horizontal(Lines(stack, k, kt, z, source))


def _horizontal(lines: Lines) -> tuple[Complexes, Complexes]:
    return lines.vi("TE") / (1j * lines.k * ETA), (1j * lines.k / ETA) * lines.vi("difference")


@dataclass(frozen=True)
class SymmetricKernels:
    """The four kernels the moment matrix is made of, each (n_kt, n_z, n_z); see the module's formulas.

    Attributes
    ----------
    a, q, v : K_A, K_Q and K_v, m, symmetric
    c : K_c between a charge at the first height and a vertical current at the second, m^2
    """

    a: Complexes
    q: Complexes
    v: Complexes
    c: Complexes


def symmetric_kernels(stack: Stack, k: float, kt: ArrayLike, z: ArrayLike) -> SymmetricKernels:
    """Kernels between heights z (n_z,), m, none of them on the border of a magnetic layer or on a sheet.

    Parameters as for `horizontal_kernels`.
    """
    lines = Lines(stack, k, kt, z)
    mu = stack.permeability[stack.region_at(lines.z)]
    v = (-1j * k * ETA) * mu[:, None] * mu * lines.iv("difference")
    return SymmetricKernels(*_horizontal(lines), v, mu * lines.vv("difference"))


def layered_kernels(
    stack: Stack,
    k: float,
    kt: ArrayLike,
    z: ArrayLike,
    source: ArrayLike | None = None,
    *,
    side: Sides = "above",
    source_side: Sides | None = None,
) -> Kernels:
    """All kernels between heights, for horizontal and vertical currents.

    Parameters
    ----------
    stack, k, kt, z, source : as for `horizontal_kernels`
    side, source_side : to which side's medium a height on an interface belongs, one word or one each. Where
    observer and
        source share a height, K_tz and K_zt are the mean of their two limits.
    """
    lines = Lines(stack, k, kt, z, source)
    a, q = _horizontal(lines)
    there = side if source_side is None and source is None else (source_side or "above")
    here_region = stack.region_at(lines.z, np.broadcast_to(side, lines.z.shape))
    there_region = stack.region_at(lines.source, np.broadcast_to(there, lines.source.shape))
    eps, mu = stack.permittivity[here_region][:, None], stack.permeability[here_region][:, None]
    eps_s, mu_s = stack.permittivity[there_region], stack.permeability[there_region]
    ratio = mu_s / eps + mu / eps_s
    zz = (ETA / (1j * k)) * (ratio * lines.iv("TM") - k * k * mu * mu_s * lines.iv("difference"))
    return Kernels(a, q, zz, 1j * mu_s * lines.vv("difference"), 1j * mu * lines.ii("difference"))


def vertical_correction(
    stack: Stack,
    k: float,
    kt: ArrayLike,
    z: ArrayLike,
    source: ArrayLike,
    *,
    source_side: Sides = "above",
    side: Sides = "above",
) -> tuple[Complexes, Complexes]:
    """K_phi^z and the K_zz that goes with it, each (n_kt, n_z, n_source): vertical currents the other way.

        -E = j k eta [K_A J_t + ẑ (K_zt k_t . J_t + K_zz J_z)]
             - (eta / j k) (-j k_t + ẑ d/dz) (K_Q d + K_phi^z J_z)

    with ``K_phi^z = k^2 mu' (V_v^TE - V_v^TM) / k_t^2`` (m) and ``K_zz = (eta mu / (j k eps'))
    I_v^TM`` (m). Zero in air. Not symmetric: for Galerkin matrices use `layered_kernels`.
    """
    lines = Lines(stack, k, kt, z, source)
    here = stack.region_at(lines.z, np.broadcast_to(side, lines.z.shape))
    there = stack.region_at(lines.source, np.broadcast_to(source_side, lines.source.shape))
    mu, mu_s = stack.permeability[here][:, None], stack.permeability[there]
    zz = (ETA / (1j * k)) * (mu / stack.permittivity[there]) * lines.iv("TM")
    return -k * k * mu_s * lines.vv("difference"), zz


@dataclass(frozen=True)
class InterfaceTerms:
    """Two-term large-k_t expansion on an interface: ``K ~ c / (2 sqrt(k_t^2 - kappa k^2))`` up to k_t^-5."""

    c_a: float
    kappa_a: complex
    c_q: complex
    kappa_q: complex


def interface_terms(stack: Stack, height: float) -> InterfaceTerms:
    """The constants of the expansion for a source and observer at one height, from the media on both sides.

    With eps and mu below (1) and above (2):

        c_A = 2 mu1 mu2/(mu1+mu2),  kappa_A = mu1 mu2 (eps1+eps2)/(mu1+mu2)
        c_Q = 2/(eps1+eps2)
        kappa_Q = 2 mu1 mu2 (eps1+eps2)/(mu1+mu2) - (eps1^2 mu1 + eps2^2 mu2)/(eps1+eps2)

    which for mu = 1 are (eps1+eps2)/2 and 2 eps1 eps2/(eps1+eps2). The remainder falls off as k_t^-5 when

    - other interfaces and the ground are far: at distance h they add terms exp(-2 k_t h), so the power law
      shows beyond k_t about ten over h only, and those terms need quasi-static images or more Floquet waves;
    - no sheet lies at this height (its constant impedance adds k_t^-2 terms): refused;
    - losses are no obstacle, but kappa and c_Q are complex; magnetic media need c_A and the general kappa_Q.

    Raises
    ------
    ValueError
        On a sheet or on the ground.
    """
    height = float(stack.snap(height))
    if stack.ground and height == 0:
        raise ValueError("on the ground itself both kernels vanish")
    if any(float(stack.snap(sheet.height)) == height for sheet in stack.sheets):
        raise ValueError(f"a sheet lies at {height:g} m: there the expansion has other powers of k_t")
    regions = [int(stack.region_at(height, side)) for side in ("below", "above")]
    (e1, e2), (m1, m2) = stack.permittivity[regions], stack.permeability[regions]
    c_a = float(2 * m1 * m2 / (m1 + m2))
    return InterfaceTerms(
        c_a,
        complex(0.5 * c_a * (e1 + e2)),
        complex(2 / (e1 + e2)),
        complex(c_a * (e1 + e2) - (e1 * e1 * m1 + e2 * e2 * m2) / (e1 + e2)),
    )


def smooth_share(k: float, kt: ArrayLike, kappa: complex, splitting: float) -> NDArray:
    """``erf(j kz / 2E) / (2 j kz)`` with ``kz^2 = kappa k^2 - k_t^2``: the share of Ewald's near part.

    Metres, of the shape of `kt`. Even in kz, so kz = 0 is no special point: the limit there is ``1 / (2 sqrt(pi) E)``.
    """
    gamma = propagation(k, np.asarray(kt), np.sqrt(complex(kappa)))
    x = gamma / (2 * splitting)
    small = np.abs(x) < 1e-4
    safe = np.where(small, 1.0, x)
    series = (2 / np.sqrt(np.pi)) * (1 - x * x / 3 + x**4 / 10)
    return np.where(small, series, erf(safe) / safe) / (4 * splitting)


def interface_far_kernels(
    stack: Stack, k: float, kt: ArrayLike, height: float, splitting: float, area: float
) -> tuple[Complexes, Complexes]:
    """D_A and D_Q of conductors at one height, each (n_kt,), 1/m: (kernel less near part's share) / cell area.

    The near part must carry ``c_A sum_p (kappa_A k^2)^p A_p`` and ``c_Q sum_p (kappa_Q k^2)^p Q_p``
    (`interface_terms`).
    """
    kt = np.atleast_1d(np.asarray(kt))
    terms = interface_terms(stack, height)
    a, q = (kernel[:, 0, 0] for kernel in horizontal_kernels(stack, k, kt, [height]))
    near_a = terms.c_a * smooth_share(k, kt, terms.kappa_a, splitting)
    return (a - near_a) / area, (q - terms.c_q * smooth_share(k, kt, terms.kappa_q, splitting)) / area
