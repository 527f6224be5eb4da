"""Figures of the breadboard: coupling over the lattice, edges, the centre's pattern, how many rows are enough."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..solver.pattern import decibel
from .bench import Bench
from .plot import ALARM, FAINT, HUES, INK, MAP, MUTED, WIDTH, Drawing, arc, canvas, gigahertz, render, style
from .result import Result

FLOOR = -60.0  # dB


def bench_figures(result: Result) -> tuple[Drawing, ...]:
    """All figures of a breadboard; none without one."""
    if result.bench is None:
        return ()
    return (
        coupling_map(result), edge_map(result), centre_pattern(result), array_pattern(result), size_chart(result)
    )  # fmt: skip


def coupling_map(result: Result) -> Drawing:
    """Coupling into the centre element over the array, and of the infinite array over distance."""
    bench = result.bench
    assert bench is not None
    f = len(bench.frequency) // 2
    lattice = result.job.cell.lattice
    position = lattice.positions(bench.cells) * 1e3
    port = _centre_port(bench)
    row = np.abs(bench.scattering[f, port])
    with style():
        figure = canvas(WIDTH, 3.3)
        left, right = figure.subplots(1, 2)
        same = bench.ports[:, 1] == bench.ports[port, 1]
        level = np.maximum(decibel(row[same] ** 2), FLOOR)
        at = position[bench.ports[same, 0]]
        left.plot(*position[bench.dummy].T, "s", color=FAINT, markersize=5, label="dummy")
        dots = left.scatter(*at.T, c=level, cmap=MAP, s=_dot_size(len(at)), marker="s", vmin=FLOOR, vmax=0)
        left.plot(*position[bench.centre], "s", markerfacecolor="none", color=ALARM, markersize=9)
        left.set(aspect="equal", xlabel="x (mm)", ylabel="y (mm)")
        left.set_title(f"Into the marked element, {gigahertz(bench.frequency[f])}")
        left.grid(False)
        bar = figure.colorbar(dots, ax=left, label="coupling (dB)", shrink=0.85, extend="min")
        bar.outline.set_visible(False)
        _over_distance(right, result, bench, f, at - position[bench.centre], row[same])
        data = render(figure)
    return Drawing(
        "breadboard-coupling", data, "image/svg+xml",
        "Left: coupling from every element into the marked one (red: its own reflection), all led-out ports matched. "
        "Right: the same over distance, beside the coupling coefficients of the infinite array.",
        "Coupling over the lattice and over distance.",
    )  # fmt: skip


def _over_distance(axis: Any, result: Result, bench: Bench, f: int, away: Any, size: Any) -> None:
    distance = np.hypot(*away.T)
    other = distance > 1e-6
    axis.plot(distance[other], decibel(size[other] ** 2), "o", color=HUES[0], markersize=4, label="breadboard")
    p = bench.ports[_centre_port(bench), 1]
    position = result.job.cell.lattice.positions(bench.coupling_cells) * 1e3
    far = np.hypot(*position.T)
    infinite = np.abs(bench.coupling[f, :, p, p])
    kept = far > 1e-6
    axis.plot(far[kept], decibel(infinite[kept] ** 2), "x", color=HUES[1], markersize=5, label="infinite array")
    axis.set(xlabel="distance (mm)", ylabel="coupling (dB)", ylim=(FLOOR, 0))
    axis.legend(frameon=False, loc="upper right")
    axis.set_title("Over distance")


def edge_map(result: Result) -> Drawing:
    """Active reflection of every element at broadside and at the last scan direction, less the infinite array's."""
    bench = result.bench
    assert bench is not None
    f, p = len(bench.frequency) // 2, bench.ports[_centre_port(bench), 1]
    same = bench.ports[:, 1] == p
    position = result.job.cell.lattice.positions(bench.cells) * 1e3
    chosen = [0, int(np.argmax(np.hypot(bench.scan.u, bench.scan.v)))]
    with style():
        figure = canvas(WIDTH, 3.3)
        axes = figure.subplots(1, 2, sharey=True)
        for axis, s in zip(axes, chosen, strict=True):
            off = np.abs(bench.active[f, s, same] - bench.infinite[f, s, p])
            at = position[bench.ports[same, 0]]
            axis.plot(*position[bench.dummy].T, "s", color=FAINT, markersize=5)
            dots = axis.scatter(*at.T, c=off, cmap=MAP, s=_dot_size(len(at)), marker="s", vmin=0, vmax=0.5)
            theta, phi = float(bench.scan.theta[s]), float(bench.scan.phi[s])
            axis.set_title("Broadside" if s == 0 else f"θ = {arc(theta)}, φ = {arc(phi)}")
            axis.set(aspect="equal", xlabel="x (mm)")
            axis.grid(False)
        axes[0].set_ylabel("y (mm)")
        bar = figure.colorbar(dots, ax=axes, label="|Γ − Γ infinite|", shrink=0.85, extend="max")
        bar.outline.set_visible(False)
        data = render(figure)
    return Drawing(
        "breadboard-edges", data, "image/svg+xml",
        f"Distance of each element's active reflection from the infinite array's, {gigahertz(bench.frequency[f])}.",
        "Difference from the infinite array over the elements, for two scan directions.",
    )  # fmt: skip


def centre_pattern(result: Result) -> Drawing:
    """Embedded pattern of the centre element in the breadboard and in the infinite array."""
    bench = result.bench
    assert bench is not None
    theta = np.degrees(bench.cut_theta)
    with style():
        figure = canvas(WIDTH, 2.7)
        axes = figure.subplots(1, len(bench.cut_phi), squeeze=False, sharey=True)[0]
        for c, (axis, phi) in enumerate(zip(axes, bench.cut_phi, strict=True)):
            axis.plot(theta, bench.infinite_pattern[c, :, 0], color=MUTED, linewidth=2.4, label="infinite, co")
            axis.plot(theta, bench.finite_pattern[c, :, 0], color=HUES[0], label="breadboard, co")
            axis.plot(theta, bench.infinite_pattern[c, :, 1], ":", color=MUTED, linewidth=1.5)
            axis.plot(theta, bench.finite_pattern[c, :, 1], "--", color=HUES[1], label="breadboard, cross")
            axis.set(xlabel="θ (deg)", xlim=(theta[0], theta[-1]), xticks=(-60, -30, 0, 30, 60))
            axis.set_title(f"cut at φ = {arc(float(phi))}")
        top = float(np.nanmax(bench.finite_pattern[..., 0]))
        axes[0].set(ylabel="realised gain (dBi)", ylim=(top - 35, top + 3))
        axes[-1].legend(frameon=False, fontsize=7, loc="lower center")
        data = render(figure)
    return Drawing(
        "breadboard-pattern", data, "image/svg+xml",
        "Embedded pattern of the element nearest to the middle, all others terminated, middle of the band.",
        "Gain over angle in every cut, finite and infinite array.",
    )  # fmt: skip


def array_pattern(result: Result) -> Drawing:
    """Gain of the whole array from its true embedded patterns, scanned within each cut."""
    bench = result.bench
    assert bench is not None
    theta, hues = np.degrees(bench.cut_theta), HUES
    with style():
        figure = canvas(WIDTH, 2.7)
        axes = figure.subplots(1, len(bench.cut_phi), squeeze=False, sharey=True)[0]
        for c, (axis, phi) in enumerate(zip(axes, bench.cut_phi, strict=True)):
            for s in range(len(bench.scan)):
                angle = float(bench.scan.theta[s])
                if s and abs(float(bench.scan.phi[s]) - float(phi)) > 1e-6:
                    continue  # a beam of another cut
                n = 0 if not s else 1 + (s - 1) % 2
                axis.plot(theta, bench.array_pattern[s, c], color=hues[n], linewidth=1.2, label=f"to θ = {arc(angle)}")
            axis.set(xlabel="θ (deg)", xlim=(theta[0], theta[-1]), xticks=(-60, -30, 0, 30, 60))
            axis.set_title(f"cut at φ = {arc(float(phi))}")
        top = float(np.nanmax(bench.array_pattern))
        axes[0].set(ylabel="realised gain, co (dBi)", ylim=(top - 40, top + 3))
        axes[-1].legend(frameon=False, fontsize=7, loc="upper left")
        data = render(figure)
    return Drawing(
        "breadboard-array-pattern", data, "image/svg+xml",
        "The whole breadboard with the case's taper, from the true embedded patterns of all elements, at broadside and "
        "scanned in each cut, middle of the band.",
        "Gain of the array over angle for several scan directions.",
    )  # fmt: skip


def size_chart(result: Result) -> Drawing:
    """Difference of the centre element from the infinite array over the side of square arrays."""
    bench = result.bench
    assert bench is not None and result.job.breadboard is not None
    side = [row.side for row in bench.sizes]
    with style():
        figure = canvas(WIDTH, 2.6)
        left, right = figure.subplots(1, 2)
        left.plot(side, [row.reflection for row in bench.sizes], "o-", color=HUES[0], markersize=4)
        alike = result.job.breadboard.alike
        left.axhline(alike, color=ALARM, linestyle="--", linewidth=1)
        left.annotate("counts as alike", (side[0], alike), xytext=(0, 2), textcoords="offset points", fontsize=7.5,
                      color=ALARM)  # fmt: skip
        left.set(xlabel="elements on a side", ylabel="largest |Γ − Γ infinite|", ylim=(0, None), xticks=side)
        right.plot(side, [row.pattern for row in bench.sizes], "o-", color=INK, markersize=4)
        right.set(xlabel="elements on a side", ylabel="largest pattern difference (dB)", ylim=(0, None), xticks=side)
        data = render(figure)
    return Drawing(
        "breadboard-sizes", data, "image/svg+xml",
        "Centre element of square arrays against the infinite array: active reflection over the scan directions looked "
        "at, and embedded co-polar pattern in the scan cone.",
        "Differences over the number of elements on a side.",
    )  # fmt: skip


def _centre_port(bench: Bench) -> int:
    """Row of the scattering matrix of the centre element's first port."""
    return int(np.flatnonzero(bench.ports[:, 0] == bench.centre)[0])


def _dot_size(count: int) -> float:
    return float(np.clip(9000 / max(count, 1), 12, 260))
