"""Surface waves of the bare stack: every bound TE and TM pole, and the scan directions that meet one.

Lossless stacks: along z the pair (V, I = j h) is real, and the angle of the point (h, V) of the solution
from below minus that of the wave decaying above, taken with all its turns, decreases steadily with beta
(Sturm and Pruefer; both lines have d/dz angle = (series h^2 + shunt V^2)/(V^2 + h^2) up to sign, and beta^2
lowers it everywhere). Each multiple of pi it passes on its way from beta = k is one mode: the number of
modes is known before any root is sought, and every root is bracketed.

Lossy stacks: with x = sqrt(beta^2 - k^2) the dispersion function is entire in x (no branch cut left). Roots
are followed by Newton's method while the loss is switched on, and the argument principle then counts the
zeros with Re x > 0; if a zero is missing it is sought until the count is met, or an error is raised.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from scipy.optimize import root_scalar

from ..geometry.lattice import Lattice
from ..geometry.stack import Stack
from .dispersion import Complexes, Dispersion, Floats, Mode

CUTOFF = 1e-12
"""Angles (rad) by which a mode must have passed cut-off to be counted."""
EDGE = 1e-9
"""Lossy waves whose decay constant beyond the stack has a real part below this share of k are not counted as
bound."""
MAX_RIM = 400_000
"""Points at most on the rim of a box whose zeros are counted."""


@dataclass(frozen=True)
class GuidedWave:
    """One surface wave.

    Attributes
    ----------
    polarisation : "TE" or "TM"
    index : 0, 1, ... by falling beta within a polarisation. On a grounded stack the trade's names of TE waves
        start at TE1; see `name`.
    beta : beta/k, complex for lossy stacks (imaginary part negative)
    name : such as "TM0", "TE1"
    """

    polarisation: Mode
    index: int
    beta: complex
    name: str


@dataclass(frozen=True)
class CircleHit:
    """A direction in which the Floquet wave `order` runs along the surface wave: a candidate for scan
    blindness."""

    wave: GuidedWave
    order: tuple[int, int]
    theta: float
    u: float
    v: float


def guided_waves(stack: Stack, k: float) -> list[GuidedWave]:
    """All bound surface waves of the stack without conductors, TM first, by falling beta.

    In lossy stacks waves that die by more than exp(-2 pi) per wavelength of their own (attenuation above
    phase constant) are left out: they are zeros of the same function, without end in number, but no scan
    direction meets them.

    Parameters
    ----------
    stack : Stack, with or without ground, losses and sheets
    k : free-space wavenumber, rad/m

    Raises
    ------
    RuntimeError
        If, for a lossy stack, the roots found do not add up to the count of the argument principle.
    """
    if not k > 0:
        raise ValueError(f"k = {k:g} rad/m is not above zero")
    modes: tuple[Mode, ...] = ("TM", "TE")
    waves = []
    for mode in modes:
        dispersion = Dispersion(stack, k, mode)
        roots: list[complex] = [complex(x) for x in _lossless_roots(dispersion)]
        if not stack.is_lossless:
            roots = _lossy_roots(dispersion, roots)
        betas = sorted((complex(np.sqrt(1 + x * x)) for x in roots), key=lambda b: -b.real)
        first = 1 if mode == "TE" and stack.ground else 0
        waves += [GuidedWave(mode, i, b, f"{mode}{i + first}") for i, b in enumerate(betas)]
    return waves


def mode_count(stack: Stack, k: float, mode: Mode) -> int:
    """Number of bound waves of the stack with its losses taken away."""
    return len(_multiples(Dispersion(stack, k, mode)))


def _multiples(dispersion: Dispersion) -> range:
    """Multiples of pi that the angle passes on its way from x = 0 to infinity, one for every mode, by
    falling x."""
    return range(dispersion.last_multiple, int(np.ceil((dispersion.angle(0.0) - CUTOFF) / np.pi)))


def _lossless_roots(dispersion: Dispersion) -> list[float]:
    """x of every mode, falling."""
    top = dispersion.reach
    while dispersion.angle(top) > dispersion.last_multiple * np.pi:
        top *= 2
    roots = []
    for n in _multiples(dispersion):

        def passed(x: float, n: int = n) -> float:
            return dispersion.angle(x) - n * np.pi

        found = root_scalar(passed, bracket=(0.0, top), method="brentq", xtol=1e-300, rtol=1e-15, maxiter=500)
        roots.append(float(found.root))
    return roots


# Lossy stacks. Boxes are drawn in the plane c = tau + j s with x = sinh(tau) + j s cosh(tau): on the line s = -1,
# where Re(1 + x^2) = 0, the attenuation equals the phase constant, so one box holds just the waves asked for.


def _lossy_roots(dispersion: Dispersion, lossless: list[complex]) -> list[complex]:
    """Follow the lossless roots, then make sure of the count."""
    # passive stacks have no zeros with Re x > 0, Im x > 0; the box reaches a little beyond for those of
    # vanishing loss
    low, high = complex(np.arcsinh(EDGE), -1.0), complex(np.arcsinh(dispersion.reach), 1e-3)
    roots: list[complex] = []
    for x in lossless:
        end = _follow(dispersion, x)
        if end is not None and _within(end, low, high) and _is_new(end, roots):
            roots.append(end)
    count = _zeros_inside(dispersion, low, high)
    if len(roots) < count:
        _search(dispersion, roots, low, high, count)
    if len(roots) != count:
        raise RuntimeError(
            f"{len(roots)} {dispersion.mode} surface waves of a lossy stack were found, "
            f"but the argument principle counts {count}"
        )
    return roots


def _point(c: Complexes) -> Complexes:
    """x at a point of the plane of boxes."""
    return np.sinh(np.real(c)) + 1j * np.imag(c) * np.cosh(np.real(c))


def _within(x: complex, low: complex, high: complex) -> bool:
    """Whether x lies in the box between two corners of the plane of boxes."""
    tau = np.arcsinh(x.real)
    return bool(low.real < tau <= high.real and low.imag < x.imag / np.cosh(tau) <= high.imag)


def _is_new(x: complex, roots: list[complex]) -> bool:
    return all(abs(x - other) > 1e-8 * max(abs(x), EDGE) for other in roots)


def _follow(dispersion: Dispersion, x: complex) -> complex | None:
    """Root at full loss from that without, in steps halved while Newton's method strays."""
    loss, step = 0.0, 1.0
    while loss < 1.0:
        trial = min(1.0, loss + step)
        found = _newton(dispersion, x, trial)
        if found is not None and abs(found - x) <= 0.3 * max(abs(x), 1e-3):
            loss, x, step = trial, found, 2 * step
        else:
            step /= 2
            if step < 0.01:  # the search finds it
                return None
    return x


def _newton(dispersion: Dispersion, x: complex, loss: float = 1.0, known: Sequence[complex] = ()) -> complex | None:
    """Zero of W near x, `known` zeros divided out; None if 40 steps do not settle or lead out of the
    region."""
    zeros, move = np.array(known, dtype=complex), np.inf
    for _ in range(40):
        size = 1e-5 * max(abs(x), 1e-6)
        points = x + size * np.array([-1.0, 0.0, 1.0])
        w, exponent = dispersion.logarithm(points, loss)
        w = w * np.exp(exponent - exponent[1])  # W itself, to a constant: w alone is not analytic
        for zero in zeros[np.abs(zeros - x) > 2 * size]:
            w = w / (points - zero)
        slope = (w[2] - w[0]) / (2 * size)
        if slope == 0 or not np.isfinite(slope):
            return None
        move = complex(w[1] / slope)
        x -= move
        if abs(x) > 2 * dispersion.reach:
            return None
        if abs(move) <= 1e-14 * max(abs(x), 1e-9):
            return x
    return x if abs(move) < 1e-11 * max(abs(x), 1e-6) else None


def _zeros_inside(dispersion: Dispersion, low: complex, high: complex) -> int:
    """Zeros of W in the box between two corners, by the turns of its argument along the rim."""
    corners = [low, complex(high.real, low.imag), high, complex(low.real, high.imag), low]
    sides = [np.linspace(p, q, 40, endpoint=False) for p, q in pairwise(corners)]
    if low.imag < 0 < high.imag:  # waves near cut-off crowd about x = 0
        up, down = np.geomspace(high.imag, 1e-12, 80), -np.geomspace(1e-12, -low.imag, 120)[:-1]
        sides[3] = low.real + 1j * np.concatenate([up, [0.0], down])
    rim = np.append(np.concatenate(sides), low)
    phase = _phase(dispersion, _point(rim))
    while True:
        step = np.angle(np.exp(1j * np.diff(phase)))
        coarse = np.flatnonzero((np.abs(step) > 0.7) | (dispersion.turning(_point(rim)) > 1.0))
        # a zero on the rim itself cannot be resolved: leave its half turn to the rounding
        coarse = coarse[np.abs(np.diff(rim))[coarse] > 1e-14]
        if not len(coarse) or len(rim) > MAX_RIM:
            break
        middle = 0.5 * (rim[coarse] + rim[coarse + 1])
        rim = np.insert(rim, coarse + 1, middle)
        phase = np.insert(phase, coarse + 1, _phase(dispersion, _point(middle)))
    return round(float(step.sum()) / (2 * np.pi))


def _phase(dispersion: Dispersion, x: Complexes) -> Floats:
    w, exponent = dispersion.logarithm(x)
    return np.angle(w) + np.imag(exponent)


def _search(
    dispersion: Dispersion, roots: list[complex], low: complex, high: complex, count: int, depth: int = 0
) -> None:
    """Add missing roots to the list: halve the box where zeros are missing until Newton's method finds
    them."""
    known = [x for x in roots if _within(x, low, high)]
    if len(known) >= count or depth > 60:
        return
    size = high - low
    for share in (0.5, 0.2, 0.8) if count - len(known) == 1 else ():
        found = _newton(dispersion, complex(_point(np.asarray(low + share * size))), known=known)
        found = None if found is None else _newton(dispersion, found)
        if found is not None and _within(found, low, high) and _is_new(found, roots):
            roots.append(found)
            return
    for share in (0.382, 0.45, 0.55):  # another cut where one runs through a zero
        halves = _halves(low, high, share)
        counts = [_zeros_inside(dispersion, *half) for half in halves]
        if sum(counts) == count:
            for half, inside in zip(halves, counts, strict=True):
                _search(dispersion, roots, *half, inside, depth + 1)
            return


def _halves(low: complex, high: complex, share: float) -> list[tuple[complex, complex]]:
    """The box cut across its longer side, off the middle to keep clear of symmetry lines."""
    size = high - low
    if size.real > size.imag:
        cut = low.real + share * size.real
        return [(low, complex(cut, high.imag)), (complex(cut, low.imag), high)]
    cut = low.imag + (1 - share) * size.imag
    return [(low, complex(high.real, cut)), (complex(low.real, cut), high)]


# The lattice


def circles_hit(waves: list[GuidedWave], lattice: Lattice, k: float, phi: float) -> list[CircleHit]:
    """Directions in the half-plane `phi` where a Floquet wave meets a surface wave, by rising theta.

    Solves ``|k s (cos phi, sin phi) + p b1 + q b2| = k Re(beta)`` for s = sin(theta) in [0, 1]. These are
    the poles of the bare stack; conductors shift the blindness from them (about 1 degree for narrow
    dipoles), and whether it occurs depends on their coupling to the wave (a TM wave is not excited by
    currents across its path).

    Parameters
    ----------
    waves : from `guided_waves`
    lattice : Lattice
    k : rad/m
    phi : azimuth of the half-plane, rad
    """
    direction = np.array([np.cos(phi), np.sin(phi)])
    hits = []
    for wave in waves:
        b = wave.beta.real
        for order in lattice.orders_within((b + 1.001) * k):
            g = (order @ lattice.reciprocal) / k
            along, rest = float(g @ direction), float(g @ g) - b * b
            under = along * along - rest
            if under < 0:
                continue
            for s in {-along - np.sqrt(under), -along + np.sqrt(under)}:
                if -1e-12 <= s <= 1:
                    theta = float(np.arcsin(max(s, 0.0)))
                    u, v = float(s * direction[0]), float(s * direction[1])
                    hits.append(CircleHit(wave, (int(order[0]), int(order[1])), theta, u, v))
    return sorted(hits, key=lambda hit: (hit.theta, hit.wave.name, hit.order))
