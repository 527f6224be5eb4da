"""Figures in the plane: u-v maps and the reflection-coefficient chart."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..solver.pattern import LIGHT_SPEED, decibel
from .plot import (
    ALARM,
    FAINT,
    HUES,
    INK,
    MAP,
    MUTED,
    WIDTH,
    Drawing,
    Floats,
    arc,
    canvas,
    driven_ports,
    gigahertz,
    render,
    shades,
    style,
)
from .result import Result
from .surface_waves import near_orders, surface_waves

SURFACE_ARCS = " White dotted: where a Floquet wave meets a surface wave of the bare stack, at both ends of the band."


def scan_maps(result: Result) -> Drawing | None:
    """Worst active reflection and worst gain shortfall over the u-v map, with grating-lobe boundaries."""
    plan, ports = result.job.scan, driven_ports(result)
    if not len(plan.map_u):
        return None
    level = decibel(np.abs(result.response.reflection[..., ports]) ** 2).max(axis=(0, 2))
    with np.errstate(invalid="ignore"):
        short = (decibel(result.response.ceiling) - result.co_cross_gain[0]).max(axis=0)
    limits = [limit.value for limit in result.job.limits if limit.quantity == "reflection"]
    with style():
        figure = canvas(WIDTH, 3.2)
        left, right = figure.subplots(1, 2)
        low = max(-30.0, float(np.nanmin(level)))
        _map(
            figure,
            left,
            result,
            level,
            "active reflection (dB)",
            (low, max(0.0, float(np.nanmax(level)))),
            limits,
        )
        _map(
            figure,
            right,
            result,
            short,
            "gain below ideal cell (dB)",
            (0.0, min(20.0, float(np.nanmax(short)))),
            [],
        )
        left.set_title("Worst active reflection")
        right.set_title("Worst gain shortfall")
        data = render(figure)
    return Drawing(
        "scan-maps",
        data,
        "image/svg+xml",
        "Worst value over the band and the driven ports, over direction cosines. Solid red: the limit's "
        "contour. White dashed: where a grating lobe enters visible space at the top frequency. Grey circle: "
        "edge of the scan cone." + (SURFACE_ARCS if surface_waves(result.job) else ""),
        "Two colour maps over u and v: worst active reflection, and worst gain shortfall.",
    )


def _map(figure: Any, axis: Any, result: Result, values: Floats, label: str, span: Any, contours: list[float]) -> None:
    plan = result.job.scan
    grid = np.where(plan.map_index >= 0, values[np.maximum(plan.map_index, 0)], np.nan)
    span = span if span[1] > span[0] else (span[0], span[0] + 1)
    picture = axis.pcolormesh(
        plan.map_u,
        plan.map_v,
        grid.T,
        cmap=MAP,
        vmin=span[0],
        vmax=span[1],
        shading="nearest",
        rasterized=True,
    )
    finite = grid[np.isfinite(grid)]
    beyond = (bool(finite.size and finite.min() < span[0]), bool(finite.size and finite.max() > span[1]))
    ends = {(False, False): "neither", (True, False): "min", (False, True): "max", (True, True): "both"}[beyond]
    bar = figure.colorbar(picture, ax=axis, shrink=0.78, extend=ends, label=label)
    bar.outline.set_visible(False)
    for value in sorted(set(contours)):
        if finite.size and finite.min() < value < finite.max():
            lines = axis.contour(
                plan.map_u, plan.map_v, grid.T, levels=[value], colors=ALARM, linewidths=1.4, linestyles="solid"
            )
            axis.clabel(lines, fmt=f"{value:g} dB", fontsize=7.5)
    turn = np.linspace(0, 2 * np.pi, 361)
    rim = np.sin(min(plan.cone, np.pi / 2))
    axis.plot(rim * np.cos(turn), rim * np.sin(turn), color=MUTED, linewidth=1)
    _lobe_boundaries(axis, result, rim)
    _surface_arcs(axis, result, rim)
    reach = max(float(np.max(np.abs(plan.map_u))), rim) * 1.05
    axis.set(
        xlim=(-reach, reach),
        ylim=(-reach, reach),
        aspect="equal",
        xlabel="u = sinθ cosφ",
        ylabel="v = sinθ sinφ",
    )
    axis.grid(False)


def _lobe_boundaries(axis: Any, result: Result, rim: float) -> None:
    """Arcs |(u, v) + G/k| = 1 inside the cone: beyond them a grating lobe radiates (top frequency)."""
    k = 2 * np.pi * result.job.frequency[-1] / LIGHT_SPEED
    lattice = result.job.cell.lattice
    turn = np.linspace(0, 2 * np.pi, 1441)
    for order in lattice.orders_within(2.0 * k):
        if not order.any():
            continue
        g = order @ lattice.reciprocal / k
        u, v = np.cos(turn) - g[0], np.sin(turn) - g[1]
        inside = np.hypot(u, v) <= rim
        axis.plot(
            np.where(inside, u, np.nan),
            np.where(inside, v, np.nan),
            color="white",
            linestyle="--",
            linewidth=1.2,
        )


def _surface_arcs(axis: Any, result: Result, rim: float) -> None:
    """Arcs inside the cone on which a Floquet wave runs along a surface wave, at the two ends of the band."""
    turn, lattice = np.linspace(0, 2 * np.pi, 1441), result.job.cell.lattice
    for item in surface_waves(result.job):
        k, beta = 2 * np.pi * item.frequency / LIGHT_SPEED, item.wave.beta.real
        for order in near_orders(lattice, k, beta):
            g = order @ lattice.reciprocal / k
            u, v = beta * np.cos(turn) - g[0], beta * np.sin(turn) - g[1]
            inside = np.hypot(u, v) <= rim
            axis.plot(np.where(inside, u, np.nan), np.where(inside, v, np.nan), color="white", linestyle=":")


def reflection_chart(result: Result) -> Drawing:
    """Active reflection on the reflection-coefficient chart: over scan at mid band, over frequency at
    broadside."""
    ports = driven_ports(result)[:3]
    scan_panels = bool(result.job.scan.planes)
    band_panels = len(result.job.frequency) > 1
    columns = max(1, scan_panels + band_panels)
    with style():
        figure = canvas(WIDTH if columns > 1 else 4.4, 3.9 * len(ports))
        axes = figure.subplots(len(ports), columns, squeeze=False)
        for row, port in zip(axes, ports, strict=True):
            panels = iter(row)
            name = f"port {result.port_names[port]}, " if len(result.port_names) > 1 else ""
            base = f"{name}{result.sweep.reference[port]:g} Ω"
            if scan_panels:
                _scan_panel(next(panels), result, port, base)
            if band_panels or not scan_panels:
                _band_panel(next(panels), result, port, base)
        data = render(figure)
    return Drawing(
        "reflection-chart",
        data,
        "image/svg+xml",
        "Active reflection coefficient with circles of constant normalised resistance and reactance. Dot: "
        "broadside (left), lowest frequency (right).",
        "Traces of active reflection on a chart of constant resistance and reactance circles.",
    )


def _scan_panel(axis: Any, result: Result, port: int, base: str) -> None:
    f, plan = len(result.job.frequency) // 2, result.job.scan
    chart_grid(axis)
    _chart_title(axis, f"Scan at {gigahertz(result.job.frequency[f])} ({base})")
    for (phi, index), theta, colour in zip(plan.planes[:6], plan.plane_theta[:6], HUES, strict=False):
        ahead = index[theta >= -1e-9]
        trace = result.response.reflection[f, ahead, port]
        axis.plot(trace.real, trace.imag, color=colour, label=f"φ = {arc(phi)}, to θ = {arc(theta.max())}")
        if len(trace):
            axis.plot(trace[0].real, trace[0].imag, "o", color=INK, markersize=4, zorder=5)
    axis.legend(loc="upper center", bbox_to_anchor=(0.5, 0.02), frameon=False, fontsize=7.5, ncols=2)


def _band_panel(axis: Any, result: Result, port: int, base: str) -> None:
    """Frequency traces at broadside (or the point nearest to it)."""
    scan = result.job.scan.points
    nearest = int(np.argmin(np.hypot(scan.u, scan.v)))
    trace = result.response.reflection[:, nearest, port]
    chart_grid(axis)
    _chart_title(axis, f"Band at θ = {arc(float(scan.theta[nearest]))} ({base})")
    axis.plot(trace.real, trace.imag, color=MUTED, linewidth=1)
    for value, colour in zip(trace, shades(len(trace)), strict=True):
        axis.plot(value.real, value.imag, "o", color=colour, markersize=3)
    axis.plot(trace[0].real, trace[0].imag, "o", color=INK, markersize=4.5, zorder=5)
    ends = (0, len(trace) - 1) if len(trace) > 1 else (0,)
    rising = trace[-1].imag >= trace[0].imag
    shifts = ((8, -12), (8, 6)) if rising else ((8, 6), (8, -12))
    for f, shift in zip(ends, shifts, strict=False):
        axis.annotate(
            gigahertz(result.job.frequency[f]), (trace[f].real, trace[f].imag), xytext=shift,
            textcoords="offset points", fontsize=7.5, zorder=6,
        )  # fmt: skip


def chart_grid(axis: Any) -> None:
    """Unit circle and circles of constant r and x of z = (1 + Gamma) / (1 - Gamma)."""
    steps = (0.2, 0.5, 1.0, 2.0, 5.0)
    sweep = np.concatenate([[0.0], np.geomspace(1e-3, 1e4, 500)])
    for r in (0.0, *steps):
        gamma = _gamma(r + 1j * np.concatenate([-sweep[::-1], sweep]))
        axis.plot(gamma.real, gamma.imag, color=MUTED if r == 0 else FAINT, linewidth=1.0 if r == 0 else 0.7)
        spot = _gamma(complex(r))
        if r > 0:
            axis.annotate(
                f"{r:g}", (spot.real, 0), fontsize=6.5, color=MUTED, xytext=(1, 1), textcoords="offset points"
            )
    for x in steps:
        for sign in (1, -1):
            gamma = _gamma(sweep + 1j * sign * x)
            axis.plot(gamma.real, gamma.imag, color=FAINT, linewidth=0.7)
            spot = _gamma(1j * sign * x) * 1.08
            axis.text(
                spot.real, spot.imag, f"{'+' if sign > 0 else '−'}j{x:g}", fontsize=6.5, color=MUTED,
                ha="center", va="center",
            )  # fmt: skip
    axis.plot([-1, 1], [0, 0], color=FAINT, linewidth=0.7)
    axis.set(xlim=(-1.2, 1.2), ylim=(-1.2, 1.42), aspect="equal")
    axis.axis("off")


def _chart_title(axis: Any, text: str) -> None:
    """A title inside the axes: with the frame off, the layout leaves no room for one above."""
    axis.text(-1.15, 1.3, text, fontsize=9, fontweight="bold")


def _gamma(z: Any) -> Any:
    return (z - 1) / (z + 1)
