"""Figures of a comparison: coupling over distance, residuals per frequency, active reflection over scan, patterns."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from .comparison import Comparison
from .pattern_comparison import CutComparison
from .plot import ALARM, FAINT, HUES, INK, MUTED, WIDTH, Drawing, arc, canvas, gigahertz, label_ends, render, style
from .scan_synthesis import LIGHT_SPEED, ScanReflection, reach95
from .support import Support

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
MEASURED, FINITE, INFINITE = HUES[1], INK, HUES[0]
CORRECTED = HUES[2]
LOWEST = -120.0


def decibels(values: NDArray[Any]) -> Floats:
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.maximum(20 * np.log10(np.abs(values)), LOWEST)


def draw_comparison(comparison: Comparison) -> list[Drawing]:
    """All figures there are data for."""
    made = [coupling_over_distance(comparison), level_over_frequency(comparison), reflection_over_scan(comparison)]
    made += [
        pattern_cut(comparison.patterns[start : start + 2], start) for start in range(0, len(comparison.patterns), 2)
    ]
    return [one for one in made if one is not None]


def middle_frequency(comparison: Comparison) -> int:
    """Index of the measured frequency nearest to the middle of the band."""
    seen = np.flatnonzero(np.any(comparison.data.known, axis=(1, 2)))
    return int(seen[len(seen) // 2])


def coupling_over_distance(comparison: Comparison) -> Drawing:
    """Coupling magnitude measured and predicted, and the residual beside its uncertainty, over distance."""
    p, data, m = comparison.prediction, comparison.data, comparison.scan.port
    f = middle_frequency(comparison)
    corrected = comparison.corrected_scan is not None
    line = (lambda s: s[f, :, m]) if comparison.scan.by_reciprocity else (lambda s: s[f, m, :])
    distance = np.linalg.norm(p.positions - p.positions[m], axis=1) * p.frequency[f] / LIGHT_SPEED
    predicted = line(p.scattering)
    infinite = p.infinite_coupling()
    measured = line(data.scattering)
    mended = line(comparison.diagnosis.corrected)
    along, across = data.uncertainty.deviations(np.abs(predicted), p.error)
    with style():
        figure = canvas(WIDTH, 5.6)
        top, bottom = figure.subplots(2, 1, sharex=True)
        top.plot(distance, decibels(predicted), "o", mfc="none", mec=FINITE, ms=6, label="finite array, predicted")
        if infinite is not None:
            values = decibels(line(infinite))
            top.plot(distance, values, "x", color=INFINITE, ms=5, label="infinite array, predicted")
        top.plot(distance, decibels(measured), ".", color=MEASURED, ms=6, label="measured, as it came")
        if corrected:
            top.plot(distance, decibels(mended), "+", color=CORRECTED, ms=6, label="measured, bench faults taken out")
        floor = data.uncertainty.floor
        if floor > 0 and 20 * np.log10(floor) > top.get_ylim()[0]:
            top.axhline(20 * np.log10(floor), color=ALARM, lw=1, ls=(0, (5, 2)), label="stated noise floor")
        top.set_ylabel("coupling (dB)")
        top.set_title(f"Coupling of {p.port_label(m)} to the others, {gigahertz(p.frequency[f])}")
        top.legend(frameon=False, fontsize=7.5, loc="upper right")
        bottom.plot(distance, decibels(measured - predicted), ".", color=MEASURED, ms=6, label="as measured")
        if corrected:
            label = "bench faults taken out"
            bottom.plot(distance, decibels(mended - predicted), "+", color=CORRECTED, ms=6, label=label)
        spread = decibels(2.45 * np.sqrt((along**2 + across**2) / 2))
        label = "95 % by the stated uncertainty"
        bottom.plot(distance, spread, "_", color=MUTED, ms=13, mew=1.6, zorder=1, label=label)
        bottom.set_ylabel("|measured − predicted| (dB)")
        bottom.set_xlabel("distance between the elements (wavelengths)")
        bottom.legend(frameon=False, fontsize=7.5, loc="upper right")
        data_bytes = render(figure)
    return Drawing(
        "comparison-coupling", data_bytes, "image/svg+xml",
        "Coupling coefficients over distance, measured beside predicted, and the magnitude of their difference beside "
        "what the stated uncertainty lets expect. The point at distance zero is the element's own reflection.",
        "Two scatter charts over distance: coupling in decibel, and residual in decibel with its uncertainty.",
    )  # fmt: skip


def level_over_frequency(comparison: Comparison) -> Drawing:
    """R.m.s. residual over its uncertainty per frequency, with the threshold of the test."""
    frequency = comparison.prediction.frequency / 1e9
    lines: list[tuple[str, str, Support | None]] = [
        ("as measured", MEASURED, comparison.support),
        ("bench faults out", CORRECTED, comparison.corrected_support),
        ("parameters moved", INFINITE, comparison.moved_support),
    ]
    with style():
        figure = canvas(WIDTH, 2.7)
        axes = figure.subplots()
        entries, top = [], 2.0
        for name, colour, support in lines:
            if support is None:
                continue
            level = np.sqrt(support.statistic)
            axes.plot(frequency, level, "o-", color=colour, ms=3.5)
            last = level[np.isfinite(level)]
            entries.append((float(last[-1]) if len(last) else np.nan, name, colour))
            top = max(top, float(np.nanmax(level)) if len(last) else 0.0)
        limit = np.sqrt(comparison.support.threshold)
        axes.plot(frequency, limit, color=ALARM, lw=1, ls=(0, (5, 2)))
        axes.set_yscale("log")
        axes.set_ylim(0.5, top * 1.5)
        ticks = np.array([0.5, 1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000])
        axes.set_yticks(ticks[ticks < top * 1.5], [f"{x:g}" for x in ticks[ticks < top * 1.5]])
        axes.set_yticks([], minor=True)
        seen = limit[np.isfinite(limit)]
        entries.append((float(seen[-1]), "threshold", ALARM))
        axes.set_xlabel("frequency (GHz)")
        axes.set_ylabel("r.m.s. residual / uncertainty")
        axes.set_title("Does the stated uncertainty explain the residuals?")
        low, high = axes.get_ylim()
        scaled = [(low + (high - low) * np.log(y / low) / np.log(high / low), t, c) for y, t, c in entries]
        label_ends(axes, scaled)
        data = render(figure)
    return Drawing(
        "comparison-levels", data, "image/svg+xml",
        "Root mean square of all residuals over their stated uncertainty, at each frequency; dashed: what sound data "
        "exceed in one of two hundred comparisons, ten per cent of doubt in the stated uncertainty included.",
        "Line chart of the normalised residual against frequency with its threshold.",
    )  # fmt: skip


def cut_groups(directions: Floats) -> list[tuple[float, NDArray[np.int64], Floats]]:
    """Directions (n, 2) sorted into cuts of common azimuth: (phi in [0, pi), indices, signed theta), from 3 on."""
    s = np.linalg.norm(directions, axis=1)
    centre = np.flatnonzero(s < 1e-9)
    away = np.flatnonzero((s >= 1e-9) & (s <= 1))
    turn = np.round(np.arctan2(directions[away, 1], directions[away, 0]) * 1e4)
    phi = np.mod(turn, np.round(np.pi * 1e4)) / 1e4
    phi[np.abs(phi - np.pi) < 2e-4] = 0.0
    groups = []
    for one in np.unique(phi):
        index = np.concatenate([centre[:1], away[phi == one]])
        along = directions[index] @ np.array([np.cos(one), np.sin(one)])
        theta = np.arcsin(np.clip(along, -1, 1))
        order = np.argsort(theta)
        if len(index) >= 3:
            groups.append((float(one), index[order], theta[order]))
    return sorted(groups, key=lambda g: -len(g[1]))[:4]


def reflection_over_scan(comparison: Comparison) -> Drawing | None:
    """Active reflection in cuts: synthesised from the measured coupling, predicted for finite and infinite array."""
    scan = comparison.corrected_scan or comparison.scan
    groups = sorted(cut_groups(scan.directions), key=lambda g: g[0])
    if not groups:
        return None
    seen = np.flatnonzero(np.any(np.isfinite(scan.measured), axis=1))
    rows = np.unique(seen[np.round(np.linspace(0, len(seen) - 1, min(3, len(seen)))).astype(int)])
    with style():
        figure = canvas(WIDTH, 2.4 * len(rows) + 0.3)
        axes = figure.subplots(len(rows), len(groups), squeeze=False, sharex="col", sharey="row")
        for r, f in enumerate(rows):
            for c, (phi, index, theta) in enumerate(groups):
                last = r == len(rows) - 1
                _scan_axes(axes[r, c], scan, comparison.scan, int(f), index, np.degrees(theta), r == 0 and c == 0)
                if r == 0:
                    axes[r, c].set_title(f"cut at φ = {arc(phi)}")
                if last:
                    axes[r, c].set_xlabel("scan angle θ (deg)")
            axes[r, 0].set_ylabel(f"active reflection (dB)\n{gigahertz(float(comparison.prediction.frequency[f]))}")
            low, high = axes[r, 0].get_ylim()
            axes[r, 0].set_ylim(max(-45.0, min(low, high - 10)), min(3.0, high + 1))
        handles, labels = axes[0, 0].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", ncols=4, frameon=False, fontsize=7.5)
        data = render(figure)
    missing = int(np.count_nonzero(np.any(scan.missing, axis=0)))
    gap = f" {missing} coefficients were not measured; the band holds what they may add." if missing else ""
    return Drawing(
        "comparison-scan", data, "image/svg+xml",
        f"Active reflection of {comparison.prediction.port_label(scan.port)} over scan, summed from measured coupling, "
        f"beside the predictions. Band: 95 % by the stated uncertainty.{gap}",
        "Line charts of active reflection in decibel against scan angle: measured, finite array, infinite array.",
    )  # fmt: skip


def _scan_axes(
    axes: Any, scan: ScanReflection, plain: ScanReflection, f: int, index: Any, angle: Floats, legend: bool
) -> None:
    names = ("measured, summed", "as it came", "finite array", "infinite array") if legend else (None,) * 4
    size = np.abs(scan.measured[f, index])
    reach = reach95(scan.covariance)[f, index] + scan.bound[f]
    low, high = decibels(np.maximum(size - reach, 1e-6)), decibels(size + reach)
    axes.fill_between(angle, low, high, color=MEASURED, alpha=0.2, lw=0)
    axes.plot(angle, decibels(size), "o", color=MEASURED, ms=3, label=names[0])
    if scan is not plain:
        axes.plot(angle, decibels(plain.measured[f, index]), ":", color=MUTED, lw=1, label=names[1])
    axes.plot(angle, decibels(scan.finite[f, index]), "-", color=FINITE, label=names[2])
    if np.any(np.isfinite(scan.infinite[f, index])):
        axes.plot(angle, decibels(scan.infinite[f, index]), "--", color=INFINITE, label=names[3])


def pattern_cut(cuts: tuple[CutComparison, ...], start: int) -> Drawing:
    """Measured cuts over the predicted ones, and their difference beside its uncertainty."""
    with style():
        figure = canvas(WIDTH, 4.4)
        axes = figure.subplots(2, len(cuts), squeeze=False, sharex="col", height_ratios=(2, 1))
        for column, cut in enumerate(cuts):
            _pattern_axes(axes[0, column], axes[1, column], cut, column == 0)
        handles, labels = axes[0, 0].get_legend_handles_labels()
        figure.legend(handles, labels, loc="outside lower center", ncols=4, frameon=False, fontsize=7.5)
        data = render(figure)
    return Drawing(
        f"comparison-pattern-{start + 1}", data, "image/svg+xml",
        "Embedded element pattern, measured beside predicted, and the difference of the co-polar levels with twice its "
        "stated uncertainty. A relative measurement is shown after its fitted level offset.",
        "Line charts of co- and cross-polar level against angle, and of the difference in decibel.",
    )  # fmt: skip


def _pattern_axes(top: Any, bottom: Any, cut: CutComparison, first: bool) -> None:
    p, angle = cut.predicted, np.degrees(cut.theta)
    grid = np.degrees(p.theta)
    cell = f"row {p.cell[1]}, column {p.cell[0]}"
    top.set_title(f"{cell}, φ = {arc(p.phi)}, {gigahertz(p.frequency)}")
    top.plot(grid, p.co, "-", color=FINITE, label="finite array, co")
    top.plot(grid, p.cross, "-", color=FAINT, label="finite array, cross")
    if p.infinite_co is not None:
        top.plot(grid, p.infinite_co, "--", color=INFINITE, label="infinite array, co")
    top.plot(angle, cut.measured.co + cut.offset, "o", color=MEASURED, ms=2.5, label="measured, co")
    top.plot(angle, cut.measured.cross + cut.offset, ".", color=HUES[5], ms=2.5, label="measured, cross")
    high = float(np.max(p.co))
    top.set_ylim(high - 45, high + 3)
    bottom.fill_between(angle, -2 * cut.sigma, 2 * cut.sigma, color=FAINT, alpha=0.6, lw=0)
    bottom.plot(angle, cut.difference, "o", color=MEASURED, ms=2.5)
    reach = float(np.nanmax(np.abs(cut.difference)))
    bottom.set_ylim(-max(1.0, min(reach, 6.0)) * 1.15, max(1.0, min(reach, 6.0)) * 1.15)
    bottom.set_xlabel("angle from broadside θ (deg)")
    if first:
        top.set_ylabel("level (dBi)")
        bottom.set_ylabel("difference (dB)")
