"""Figures over the scan cuts and over frequency: reflection, gain, cross-polarisation, where the power
goes."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..solver.pattern import decibel
from .judge import UNITS
from .plot import (
    ALARM,
    DASHES,
    FAINT,
    HUES,
    INK,
    MUTED,
    WIDTH,
    Drawing,
    Floats,
    arc,
    canvas,
    chosen_frequencies,
    driven_ports,
    gigahertz,
    label_ends,
    limit_line,
    plane_grid,
    render,
    shades,
    style,
)
from .result import Result

FLOOR = -40.0
GREYS = (INK, MUTED, "#93a0ab")  # absorbers, the greatest first


def reflection_cuts(result: Result) -> Drawing | None:
    """Active reflection over the scan cuts, one row per driven port, one line per frequency."""
    if not result.job.scan.planes:
        return None
    ports, chosen = driven_ports(result)[:4], chosen_frequencies(result)
    with style():
        figure, axes = plane_grid(result, len(ports))
        level = np.maximum(decibel(np.abs(result.response.reflection[..., ports]) ** 2), FLOOR)
        shown = level[np.ix_(chosen, _plane_points(result))]
        low, high = float(np.nanmin(shown)), float(np.nanmax(shown))
        axes[0, 0].set_ylim(max(FLOOR, np.floor(low / 5) * 5), max(0.0, high) + 1.0)
        for row in range(len(ports)):
            name = f" of port {result.port_names[ports[row]]}" if len(result.port_names) > 1 else ""
            axes[row, 0].set_ylabel(f"active reflection{name} (dB)")
            bounds = _bounds(result, "reflection", result.port_names[ports[row]])
            _lines(result, axes[row], level[..., row], chosen, bounds)
        data = render(figure)
    return Drawing(
        "reflection-cuts",
        data,
        "image/svg+xml",
        "Active reflection over the scan cuts (every cell excited; negative angles: opposite half-plane).",
        f"Line charts of active reflection in decibel against scan angle at {len(chosen)} frequencies.",
    )


def gain_cuts(result: Result) -> Drawing | None:
    """Co-polar realised gain over the scan cuts against the ceiling of the ideal cell."""
    if not result.job.scan.planes:
        return None
    chosen, gain = chosen_frequencies(result), result.co_cross_gain[0]
    ceiling = decibel(result.response.ceiling)
    with style():
        figure, axes = plane_grid(result, 1, 2.7)
        axes[0, 0].set_ylabel("co-polar realised gain (dBi)")
        points = _plane_points(result)
        top = float(np.nanmax(ceiling[:, points]))
        shown = gain[np.ix_(chosen, points)]
        low = float(np.nanmin(np.where(np.isfinite(shown), shown, np.nan)))
        axes[0, 0].set_ylim(max(low, top - 25) - 0.7, top + 0.7)
        for column, axis in enumerate(axes[0]):
            index, theta = result.job.scan.planes[column][1], result.job.scan.plane_theta[column]
            for f in (chosen[0], chosen[-1]):
                axis.plot(np.degrees(theta), ceiling[f, index], color=MUTED, linewidth=1, linestyle=(0, (4, 2)))
        _lines(result, axes[0], gain, chosen, [])
        edges = ", band edges" if len(chosen) > 1 else ""
        wrap = "\n" if axes.shape[1] > 2 else " "
        _note(axes[0, 0], f"dashed: ideal cell,{wrap}4πS cosθ/λ²{edges}")
        data = render(figure)
    return Drawing(
        "gain-cuts",
        data,
        "image/svg+xml",
        "Realised gain of one element with all others terminated, against the ceiling of a matched, lossless "
        "cell (Hannan 1964). The distance is mismatch, loss, cross-polarisation and grating lobes.",
        "Line charts of co-polar realised gain against scan angle with the ideal-cell ceiling dashed.",
    )


def cross_polar_cuts(result: Result) -> Drawing | None:
    """Cross-polar level relative to co-polar over the scan cuts."""
    if not result.job.scan.planes:
        return None
    chosen = chosen_frequencies(result)
    co, cross = result.co_cross_gain
    with np.errstate(invalid="ignore"):
        level = np.clip(cross - co, -80.0, 60.0)
    with style():
        figure, axes = plane_grid(result, 1)
        axes[0, 0].set_ylabel("cross-polar / co-polar (dB)")
        shown = level[np.ix_(chosen, _plane_points(result))]
        high = float(np.nanmax(shown))
        low = max(float(np.nanmin(shown)), min(high, -20.0) - 40)
        bounds = _bounds(result, "cross_polar", None)
        top = max([high, low + 20, *(value for value, _ in bounds)])
        axes[0, 0].set_ylim(low - 2, top + 3)
        _lines(result, axes[0], np.maximum(level, low), chosen, bounds)
        if high <= -79.9:
            _note(axes[0, 0], "below -80 dB everywhere in the cuts", 0.15)
        data = render(figure)
    meaning = "circular" if result.job.co_polar in ("left", "right") else "Ludwig's third definition"
    return Drawing(
        "cross-polar-cuts",
        data,
        "image/svg+xml",
        f"Cross-polar level under the case's drive ({meaning}); values below {low:.0f} dB are drawn there.",
        "Line charts of cross-polar level relative to co-polar against scan angle.",
    )


def power_cuts(result: Result) -> Drawing | None:
    """Where the available power goes over the scan cuts, at the middle frequency."""
    if not result.job.scan.planes:
        return None
    f, parts = len(result.job.frequency) // 2, _budget(result)
    with style():
        figure, axes = plane_grid(result, 1, 2.8)
        axes[0, 0].set_ylabel("share of available power")
        axes[0, 0].set_ylim(0, 1)
        for column, axis in enumerate(axes[0]):
            index, theta = result.job.scan.planes[column][1], result.job.scan.plane_theta[column]
            stack = [values[f, index] for _, values, _ in parts]
            axis.stackplot(
                np.degrees(theta), stack, labels=[name for name, _, _ in parts],
                colors=[colour for _, _, colour in parts], edgecolor="white", linewidth=0.2,
            )  # fmt: skip
        handles, names = axes[0, 0].get_legend_handles_labels()
        figure.legend(handles, names, loc="outside lower center", ncols=min(len(parts), 4), frameon=False, fontsize=8)
        data = render(figure)
    return Drawing(
        "power-cuts",
        data,
        "image/svg+xml",
        f"Where the power goes at {gigahertz(result.job.frequency[f])}: shares of the available power.",
        "Stacked areas of radiated, absorbed and reflected power against scan angle.",
    )


def band(result: Result) -> Drawing | None:
    """Worst active reflection inside growing scan cones over frequency."""
    if len(result.job.frequency) < 2:
        return None
    scan, ports = result.job.scan, driven_ports(result)
    level = decibel(np.abs(result.response.reflection[..., ports]) ** 2).max(axis=-1)
    cones = [c for c in np.radians([0.1, 15, 30, 45, 60, 75, 90]) if c < scan.cone - 1e-6] + [scan.cone]
    with style():
        figure = canvas(WIDTH, 2.9)
        axis = figure.subplots()
        ends, drawn = [], 0
        for cone, colour in zip(cones, shades(len(cones)), strict=True):
            inside = scan.points.theta <= cone + 1e-9
            if not inside.any():
                continue
            worst = np.maximum(level[:, inside].max(axis=1), FLOOR)
            axis.plot(result.job.frequency / 1e9, worst, color=colour, linestyle=DASHES[drawn % 2])
            ends.append((float(worst[-1]), "broadside" if cone < 0.01 else f"within {arc(cone)}", colour))
            drawn += 1
        axis.set_xlim(result.job.frequency[0] / 1e9, result.job.frequency[-1] / 1e9)
        axis.set_ylim(max(FLOOR, axis.get_ylim()[0]), max(0.0, axis.get_ylim()[1]) + 0.5)
        axis.set_xlabel("frequency (GHz)")
        axis.set_ylabel("worst active reflection (dB)")
        for value, text in _bounds(result, "reflection", None):
            limit_line(axis, value, text)
        label_ends(axis, ends)
        data = render(figure)
    return Drawing(
        "band",
        data,
        "image/svg+xml",
        "Worst active reflection (over driven ports and directions) inside growing cones, over frequency.",
        "Line chart of worst active reflection against frequency for several scan cones.",
    )


def _lines(result: Result, row: Any, values: Floats, chosen: Any, bounds: list[tuple[float, str]]) -> None:
    """One line per chosen frequency in each plane's axes; labels at the right end of the last."""
    colours = shades(len(chosen))
    for column, axis in enumerate(row):
        index, theta = result.job.scan.planes[column][1], result.job.scan.plane_theta[column]
        for f, colour in zip(chosen, colours, strict=True):
            marker = "o" if len(index) < 3 else None
            axis.plot(np.degrees(theta), values[f, index], color=colour, marker=marker, markersize=3)
        for value, text in bounds:
            limit_line(axis, value, text if column == 0 else "")
        axis.axvline(0, color=FAINT, linewidth=0.8, zorder=1)
    last = result.job.scan.planes[len(row) - 1][1]
    if len(last):
        ends = [
            (float(values[f, last[-1]]), gigahertz(float(result.job.frequency[f])), colour)
            for f, colour in zip(chosen, colours, strict=True)
        ]
        label_ends(row[-1], ends)


def _plane_points(result: Result) -> Any:
    return np.unique(np.concatenate([index for _, index in result.job.scan.planes]))


def _bounds(result: Result, quantity: str, port: str | None) -> list[tuple[float, str]]:
    """Limits on a quantity as (value, words)."""
    return [
        (limit.value, f"limit {limit.value:g} {UNITS[quantity]} within {arc(limit.cone)}")
        for limit in result.job.limits
        if limit.quantity == quantity and (port is None or limit.port in (None, port))
    ]


def _budget(result: Result) -> list[tuple[str, Floats, str]]:
    """Named shares of the available power, bottom to top, leaving out those that vanish everywhere."""
    response = result.response
    main = (response.orders == [0, 0, 1]).all(axis=1)
    down = (response.orders[:, 2] < 0) & (response.orders[:, :2] == 0).all(axis=1)
    lobes = ~main & ~down
    shares = [
        ("radiated in the beam", response.radiated[..., main].sum(-1), HUES[0]),
        ("radiated downwards", response.radiated[..., down].sum(-1), HUES[4]),
        ("grating lobes", response.radiated[..., lobes].sum(-1), HUES[5]),
        *_absorbed(result),
        ("reflected", response.reflected, ALARM),
    ]
    return [share for share in shares if share[1].max() > 1e-4]


def _absorbed(result: Result) -> list[tuple[str, Floats, str]]:
    """Shares of the absorbers that matter most, and of the rest together."""
    shares, names = result.response.absorbed, result.sweep.loss_names
    if not len(names):
        return []
    order = np.argsort(-shares.max(axis=(0, 1)), kind="stable")
    parts = [(f"absorbed in {names[n]}", shares[..., n], grey) for n, grey in zip(order, GREYS, strict=False)]
    rest = shares[..., order[len(GREYS) :]].sum(-1)
    return [*parts, ("absorbed elsewhere", rest, FAINT)]


def _note(axis: Any, text: str, height: float = 0.04) -> None:
    axis.annotate(text, (0.03, height), xycoords="axes fraction", color=MUTED, fontsize=7.5)
