"""What would move a blindness, where physics says so plainly: the dispersion relation and the lattice, no promises."""

from __future__ import annotations

from dataclasses import replace
from math import gcd

import numpy as np

from ..geometry.lattice import Lattice
from ..geometry.stack import SheetImpedance, Stack
from ..solver.guided_waves import guided_waves
from ..solver.pattern import LIGHT_SPEED
from ..solver.survey import Blindness
from .job import Job
from .judge import degrees

LESS = (0.05, 0.10)  # of spacing; the second also of thickness and permittivity
SAME_ANGLE = np.radians(0.05)
PRACTICE = (
    "Fences or cavities round each element, and elements whose currents do not run along (TM) or across (TE) that "
    "wave, weaken it (common practice)."
)
RESONANT = (
    "What moves it is the element: its length or size, the feed, the height over ground. A study of those dimensions "
    "tells; no number can be promised."
)


def advice(one: Blindness, job: Job) -> str:
    """What would move it, in sentences."""
    cause, stack, lattice = one.cause, job.cell.stack, job.cell.lattice
    if cause.kind == "resonance":
        return RESONANT
    k = 2 * np.pi * one.worst.frequency / LIGHT_SPEED
    said = [_closer_lattice(one, lattice, k)]
    if cause.kind == "grating lobe":
        said.append(_row_spacing(one, job))
    elif stack is not None:
        said += [_changed_stack(one, job, stack, k, "thickness"), _changed_stack(one, job, stack, k, "permittivity")]
        said.append(PRACTICE)
    return " ".join(text for text in said if text)


def meeting_angle(lattice: Lattice, k: float, order: tuple[int, int], index: float, phi: float) -> float:
    """Least scan angle (rad) in the azimuth phi at which the Floquet wave `order` runs at ``index k``:
    ``|s (cos phi, sin phi) + G/k| = index``; NaN where it never does."""
    g = np.array(order) @ lattice.reciprocal / k
    along = float(g @ [np.cos(phi), np.sin(phi)])
    rest = along**2 - float(g @ g) + index**2
    if rest < 0:
        return np.nan
    roots = np.array([-along - np.sqrt(rest), -along + np.sqrt(rest)])
    roots = roots[(roots >= 0) & (roots <= 1)]
    return float(np.arcsin(roots.min())) if len(roots) else np.nan


def nearest_angle(lattice: Lattice, k: float, order: tuple[int, int], index: float) -> float:
    """The same over all azimuths: ``sin(theta) = ||G|/k - index|``."""
    away = abs(float(np.linalg.norm(np.array(order) @ lattice.reciprocal)) / k - index)
    return float(np.arcsin(away)) if away <= 1 else np.nan


def _closer_lattice(one: Blindness, lattice: Lattice, k: float) -> str:
    """Where the wave is met with all spacings smaller, and whether that is further out."""
    order, index, phi = one.cause.order, one.cause.expected, one.worst.phi
    now = meeting_angle(lattice, k, order, index, phi)
    then = [meeting_angle(scaled(lattice, 1 - less), k, order, index, phi) for less in LESS]
    met = f"{one.cause.wave} is met" if one.cause.kind == "surface wave" else "the grating lobe starts"
    texts = [f"with {100 * less:.0f} % less spacing at {_angle(theta)}" for less, theta in zip(LESS, then, strict=True)]
    return f"{_sense(now, then)} In this azimuth {met} at {_angle(now)} now, {', '.join(texts)}."


def _sense(now: float, then: list[float]) -> str:
    """What a closer lattice does to the angle; NaN counts as beyond the horizon."""
    moved = np.diff([np.pi if np.isnan(theta) else theta for theta in (now, *then)])
    if np.isnan(now) and np.isnan(then).all():
        return "The conductors shift this wave so far that the bare stack does not tell what a closer lattice does."
    if (moved >= 0).all():
        return "A closer lattice moves it outwards."
    return "A closer lattice brings it closer to broadside." if (moved <= 0).all() else "A closer lattice shifts it."


def _row_spacing(one: Blindness, job: Job) -> str:
    """Spacing of lattice rows below which the lobe stays out of the scan cone over the whole band, closed form:
    ``|G| > k (1 + sin theta)``, on a rectangular lattice the textbook's ``d < lambda / (1 + sin theta)``."""
    order, cone = one.cause.order, job.scan.cone
    if gcd(*order) != 1:
        return ""
    now = 2 * np.pi / float(np.linalg.norm(np.array(order) @ job.cell.lattice.reciprocal))
    top = float(job.frequency[-1])
    most = LIGHT_SPEED / top / (1 + np.sin(cone))
    state = "which they are" if now < most else "which they are not"
    return (
        f"Up to {top / 1e9:.6g} GHz this lobe stays out of the scan cone of {degrees(cone)} in all azimuths while the "
        f"rows of elements across it are less than lambda / (1 + sin theta) = {1e3 * most:.2f} mm apart, {state} "
        f"({1e3 * now:.2f} mm)."
    )


def _changed_stack(one: Blindness, job: Job, stack: Stack, k: float, what: str) -> str:
    """Where the wave is met with all layers 10 % thinner, or of 10 % less permittivity (but not below 1)."""
    try:
        waves = guided_waves(thinner(stack) if what == "thickness" else lighter(stack), k)
    except (RuntimeError, ValueError):
        return ""
    name = f"{100 * LESS[1]:.0f} % {'thinner layers' if what == 'thickness' else 'less permittivity'}"
    wave = one.cause.wave
    beta = next((float(np.real(w.beta)) for w in waves if w.name == wave), None)
    if beta is None:
        return f"With {name} there is no {wave} any more."
    lattice, order, phi = job.cell.lattice, one.cause.order, one.worst.phi
    now = meeting_angle(lattice, k, order, one.cause.expected, phi)
    then = meeting_angle(lattice, k, order, beta, phi)
    nearest = nearest_angle(lattice, k, order, beta)
    clear = np.isnan(nearest) or nearest > job.scan.cone
    nowhere = f" and, in any azimuth, outside the scan cone of {degrees(job.scan.cone)}" if clear else ""
    return f"With {name} {wave} runs at {beta:.4f} k and is met at {_angle(then)}{_further(now, then)}{nowhere}."


def thinner(stack: Stack) -> Stack:
    """The stack with all heights reduced by a tenth, sheets included."""
    factor = 1 - LESS[1]
    layers = tuple(replace(layer, thickness=factor * layer.thickness) for layer in stack.layers)
    sheets = tuple(SheetImpedance(factor * sheet.height, sheet.impedance, sheet.name) for sheet in stack.sheets)
    return Stack(layers, stack.ground, sheets)


def lighter(stack: Stack) -> Stack:
    """The stack with all permittivities above 1 reduced by a tenth, but not below 1."""
    factor = 1 - LESS[1]
    layers = tuple(
        replace(layer, permittivity=max(1.0, factor * layer.permittivity)) if layer.permittivity > 1 else layer
        for layer in stack.layers
    )
    return Stack(layers, stack.ground, stack.sheets)


def scaled(lattice: Lattice, factor: float) -> Lattice:
    """The lattice with all spacings multiplied by `factor`."""
    return Lattice(lattice.a * factor, lattice.b * factor)


def _further(now: float, then: float) -> str:
    if np.isnan(now) or np.isnan(then):
        return ""
    if abs(then - now) < SAME_ANGLE:
        return ", no other angle than now"
    return f", {np.degrees(abs(then - now)):.1f} deg {'further out' if then > now else 'closer to broadside'}"


def _angle(theta: float) -> str:
    return f"theta {np.degrees(theta):.1f} deg" if np.isfinite(theta) else "no scan angle"
