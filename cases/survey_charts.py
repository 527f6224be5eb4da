"""Figures of a survey: dense maps by frequency, the worst over scan angles, the clear cone, the paths of blindness."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..solver.pattern import LIGHT_SPEED, decibel
from ..solver.survey import Blindness, Survey
from .judge import degrees
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
    angle_ticks,
    arc,
    canvas,
    gigahertz,
    label_ends,
    render,
    shades,
    style,
)  # fmt: skip
from .result import Result
from .surface_waves import near_orders, surface_waves_at
from .survey_advice import meeting_angle
from .survey_text import short_cause

MOST_MAPS = 6
FLOOR = -30.0  # dB
COARSE = 96  # dots per inch of several smooth maps in one figure


def reflection_maps(result: Result) -> Drawing | None:
    """Worst active reflection of the driven ports over direction cosines, one map for each of a few frequencies."""
    survey = result.survey
    if survey is None:
        return None
    count = len(survey.scan_map.frequency)
    chosen = np.unique(np.round(np.linspace(0, count - 1, min(count, MOST_MAPS))).astype(int))
    columns = min(3, len(chosen))
    rows = -(-len(chosen) // columns)
    level = worst_level(survey)
    with style():
        figure = canvas(WIDTH if columns > 1 else 4.2, 0.35 + rows * (2.55 if columns == 3 else 3.3))
        axes = figure.subplots(rows, columns, squeeze=False, sharex=True, sharey=True)
        picture = None
        for axis, f in zip(axes.ravel(), chosen, strict=False):
            picture = _map(axis, result, survey, level[f], float(survey.scan_map.frequency[f]))
        for axis in axes.ravel()[len(chosen) :]:
            axis.set_visible(False)
        for axis in axes[-1]:
            axis.set_xlabel("u = sinθ cosφ")
        for axis in axes[:, 0]:
            axis.set_ylabel("v = sinθ sinφ")
        assert picture is not None
        bar = figure.colorbar(picture, ax=axes, shrink=0.8, extend="min", label="active reflection (dB)")
        bar.outline.set_visible(False)
        data = render(figure)
    return Drawing(
        "reflection-maps", data, "image/svg+xml",
        "Active reflection over all visible space, worst of the driven ports. Circle: scan cone. White dashed: a "
        "Floquet wave grazes (a grating lobe starts). White dotted: a Floquet wave meets a surface wave of the bare "
        "stack. Red line: the limit. Crosses: blindness; rings: strong mismatch.",
        "Colour maps of active reflection over u and v, one for each frequency.",
    )  # fmt: skip


def worst_level(survey: Survey) -> Floats:
    """Active reflection in dB, worst driven port, (n_freq, n, n); NaN outside visible space."""
    power = np.abs(survey.scan_map.reflection) ** 2
    driven = np.flatnonzero(~np.isnan(power).all(axis=(0, 1, 2)))
    return decibel(power[..., driven].max(axis=-1))


def _map(axis: Any, result: Result, survey: Survey, level: Floats, frequency: float) -> Any:
    maps = survey.scan_map
    picture = axis.pcolormesh(
        maps.axis, maps.axis, level.T, cmap=MAP, vmin=FLOOR, vmax=0.0, shading="gouraud", rasterized=True
    )
    limit = float(decibel(survey.free_cone.level))
    if np.nanmin(level) < limit < np.nanmax(level):
        axis.contour(maps.axis, maps.axis, level.T, levels=[limit], colors=ALARM, linewidths=0.9, linestyles="solid")
    turn = np.linspace(0, 2 * np.pi, 361)
    rim = np.sin(result.job.scan.cone)
    axis.plot(np.cos(turn), np.sin(turn), color=MUTED, linewidth=0.8)
    axis.plot(rim * np.cos(turn), rim * np.sin(turn), color="white", linewidth=1.6)
    axis.plot(rim * np.cos(turn), rim * np.sin(turn), color=INK, linewidth=0.8)
    _circles(axis, result, frequency)
    for one in survey.blindnesses:
        for peak in one.peaks:
            if abs(peak.frequency / frequency - 1) < 1e-6:
                style_ = {"marker": "x" if one.is_blind else "o", "color": ALARM, "markersize": 5}
                for sign in (1, -1) if one.mirrored else (1,):
                    axis.plot(sign * peak.u, sign * peak.v, markerfacecolor="none", linestyle="", **style_)
    axis.set(xlim=(-1.02, 1.02), ylim=(-1.02, 1.02), aspect="equal", xticks=(-1, 0, 1), yticks=(-1, 0, 1))
    axis.set_title(gigahertz(frequency))
    axis.grid(False)
    return picture


def _circles(axis: Any, result: Result, frequency: float) -> None:
    """Arcs in visible space where a Floquet wave grazes (dashed) or meets a surface wave (dotted)."""
    k, lattice = 2 * np.pi * frequency / LIGHT_SPEED, result.job.cell.lattice
    turn = np.linspace(0, 2 * np.pi, 721)
    for beta, line in [(1.0, "--"), *((beta, ":") for beta in surface_waves_at(result.job, frequency).values())]:
        for order in near_orders(lattice, k, beta):
            g = order @ lattice.reciprocal / k
            u, v = beta * np.cos(turn) - g[0], beta * np.sin(turn) - g[1]
            seen = np.hypot(u, v) <= 1.0
            axis.plot(np.where(seen, u, np.nan), np.where(seen, v, np.nan), color="white", linestyle=line, linewidth=1)


def angle_map(result: Result) -> Drawing | None:
    """Active reflection over scan angle and azimuth, at a few frequencies and the worst over the band."""
    survey = result.survey
    if survey is None:
        return None
    level, frequency = worst_level(survey), survey.scan_map.frequency
    count = len(frequency)
    chosen = [] if count == 1 else np.unique([0, count // 2, count - 1]).tolist()
    panels: list[tuple[str, Floats, Floats, float | None]] = [
        (gigahertz(float(frequency[f])), level[f], survey.free_cone.theta[f], float(frequency[f])) for f in chosen
    ]
    panels.append(("worst over the band", level.max(axis=0), survey.free_cone.theta.min(axis=0), None))
    columns = min(2, len(panels))
    rows = -(-len(panels) // columns)
    with style(COARSE):
        figure = canvas(WIDTH, 0.5 + rows * (2.1 if columns == 2 else 2.6))
        axes = figure.subplots(rows, columns, squeeze=False, sharex=True, sharey=True)
        picture = None
        for axis, (title, values, clear, at) in zip(axes.ravel(), panels, strict=False):
            picture = _angle_panel(axis, survey, values, clear, at)
            axis.set_title(title)
        for axis in axes.ravel()[len(panels) :]:
            axis.set_visible(False)
        for axis in axes[-1]:
            axis.set_xlabel("azimuth φ (deg)")
        for axis in axes[:, 0]:
            axis.set_ylabel("scan angle θ (deg)")
        assert picture is not None
        bar = figure.colorbar(picture, ax=axes, extend="min", label="active reflection (dB)", shrink=0.85)
        bar.outline.set_visible(False)
        data = render(figure)
    return Drawing(
        "angle-map", data, "image/svg+xml",
        "Active reflection over scan angle and azimuth, worst of the driven ports. Red line: where the limit is first "
        "passed. White dashed: the cone of the limit. Crosses: blindness; rings: strong mismatch.",
        "Colour maps of active reflection over azimuth and scan angle, by frequency and at worst.",
    )  # fmt: skip


def _angle_panel(axis: Any, survey: Survey, level: Floats, clear: Floats, frequency: float | None) -> Any:
    """One map with the clear angle (n_azimuth,) and the peaks at `frequency`, all of them for None."""
    theta, phi = np.radians(np.linspace(0, 89, 120)), np.radians(np.linspace(0, 360, 241))
    picture = axis.pcolormesh(
        np.degrees(phi), np.degrees(theta), _resampled(survey, level, theta, phi), cmap=MAP, vmin=FLOOR, vmax=0.0,
        shading="gouraud", rasterized=True,
    )  # fmt: skip
    turn = np.append(survey.free_cone.azimuth, 2 * np.pi)
    axis.plot(np.degrees(turn), np.degrees(np.append(clear, clear[0])), color=ALARM, linewidth=1.1)
    axis.axhline(np.degrees(survey.free_cone.wanted), color="white", linestyle="--", linewidth=1.1)
    for one in survey.blindnesses:
        _mark_angles(axis, one, frequency)
    axis.set(xlim=(0, 360), ylim=(0, 89), xticks=np.arange(0, 361, 90), yticks=(0, 30, 60))
    axis.grid(False)
    return picture


def _mark_angles(axis: Any, one: Blindness, frequency: float | None) -> None:
    for peak in one.peaks:
        if frequency is not None and abs(peak.frequency / frequency - 1) > 1e-6:
            continue
        for turn in (0.0, 180.0) if one.mirrored else (0.0,):
            axis.plot(
                (np.degrees(peak.phi) + turn) % 360, np.degrees(peak.theta), "x" if one.is_blind else "o",
                color=ALARM, markersize=4.5, markerfacecolor="none", clip_on=False,
            )  # fmt: skip


def _resampled(survey: Survey, values: Floats, theta: Floats, phi: Floats) -> Floats:
    """Values on the u-v grid at (theta, phi), linearly, (n_theta, n_phi)."""
    from scipy.interpolate import RegularGridInterpolator

    axis = survey.scan_map.axis
    s = np.sin(theta)[:, None]
    filled = _bled(values)
    points = np.stack([s * np.cos(phi), s * np.sin(phi)], axis=-1)
    return np.asarray(RegularGridInterpolator((axis, axis), filled)(points))


def _bled(values: Floats) -> Floats:
    """Values outside visible space taken from the nearest inside, so that interpolation works up to the rim."""
    from scipy.ndimage import distance_transform_edt

    missing = ~np.isfinite(values)
    nearest = distance_transform_edt(missing, return_distances=False, return_indices=True)
    return values[tuple(np.asarray(nearest))]


def clear_cone(result: Result) -> Drawing | None:
    """How far the beam may go: over azimuth by frequency, and the narrowest over frequency."""
    survey = result.survey
    if survey is None:
        return None
    cone = survey.free_cone
    several = len(cone.frequency) > 1
    with style():
        figure = canvas(WIDTH if several else 4.4, 3.4)
        grid = figure.add_gridspec(1, 2 if several else 1, width_ratios=(1.15, 1) if several else None)
        polar: Any = figure.add_subplot(grid[0, 0], projection="polar")
        turn = np.append(cone.azimuth, cone.azimuth[0] + 2 * np.pi)
        for theta, frequency, colour in zip(cone.theta, cone.frequency, shades(len(cone.frequency)), strict=True):
            polar.plot(turn, np.degrees(np.append(theta, theta[0])), color=colour, label=gigahertz(frequency))
        polar.plot(turn, np.full(len(turn), np.degrees(cone.wanted)), color=ALARM, linestyle="--", linewidth=1)
        polar.set(ylim=(0, 90), yticks=(30, 60, 90), yticklabels=("30°", "60°", "90°"))
        polar.tick_params(labelsize=7.5)
        polar.grid(color=FAINT)
        polar.set_title("Clear scan angle θ over azimuth φ")
        polar.legend(loc="upper left", bbox_to_anchor=(1.02, 1.0), frameon=False, fontsize=7)
        if several:
            _cone_over_band(figure.add_subplot(grid[0, 1]), cone)
        data = render(figure)
    level = f"{decibel(cone.level):.4g} dB"
    return Drawing(
        "clear-cone", data, "image/svg+xml",
        f"Scan angle up to which the active reflection of every driven port stays at or below {level}. Red dashed: "
        f"the cone asked for, {degrees(cone.wanted)}. Over the whole band and all azimuths the cone is "
        f"{np.degrees(cone.cone):.1f} deg.",
        "Clear scan angle over azimuth for each frequency, and the clear cone over frequency.",
    )  # fmt: skip


def _cone_over_band(axis: Any, cone: Any) -> None:
    axis.plot(cone.frequency / 1e9, np.degrees(cone.theta.min(axis=1)), "o-", color=HUES[0], markersize=3.5)
    axis.axhline(np.degrees(cone.wanted), color=ALARM, linestyle="--", linewidth=1)
    axis.set(xlabel="frequency (GHz)", ylabel="clear cone (deg)", ylim=(0, 90), yticks=(0, 30, 60, 90))
    axis.set_title("Narrowest over azimuth")
    if cone.usable is not None and cone.usable[1] > cone.usable[0]:
        axis.axvspan(cone.usable[0] / 1e9, cone.usable[1] / 1e9, color=HUES[2], alpha=0.12, linewidth=0)
        axis.annotate(
            "usable band", (0.5 * sum(cone.usable) / 1e9, 3), ha="center", va="bottom", fontsize=7.5, color=HUES[2]
        )


def blindness_paths(result: Result) -> Drawing | None:
    """Scan angle of every blindness and strong mismatch over frequency, with its width at half power."""
    survey = result.survey
    if survey is None or not survey.blindnesses or len(survey.scan_map.frequency) < 2:
        return None
    with style():
        figure = canvas(WIDTH, 3.2)
        axis = figure.subplots()
        ends = []
        for n, one in enumerate(survey.blindnesses[:6]):
            colour = HUES[n % len(HUES)]
            ends.append((_path(axis, result, one, colour), short_cause(one), colour))
        frequency = survey.scan_map.frequency / 1e9
        axis.axhline(np.degrees(result.job.scan.cone), color=MUTED, linewidth=1)
        axis.annotate(
            f"scan cone {arc(result.job.scan.cone)}", (frequency[0], np.degrees(result.job.scan.cone)),
            xytext=(2, 2), textcoords="offset points", fontsize=7.5, color=MUTED,
        )  # fmt: skip
        margin = 0.02 * (frequency[-1] - frequency[0])
        axis.set(
            xlim=(frequency[0] - margin, frequency[-1] + margin), ylim=(0, 90), yticks=angle_ticks(0, 90, 6),
            xlabel="frequency (GHz)", ylabel="scan angle θ (deg)",
        )  # fmt: skip
        label_ends(axis, ends, size=7.5)
        data = render(figure)
    return Drawing(
        "blindness-paths", data, "image/svg+xml",
        "Where reflection peaks, over frequency. Shaded: more than half of the power comes back. Dashed: where the "
        "Floquet wave meets the surface wave of the bare stack, or grazes, in the same azimuth.",
        "Scan angle of each blindness over frequency.",
    )  # fmt: skip


def _path(axis: Any, result: Result, one: Blindness, colour: str) -> float:
    """Draw one; returns the angle (deg) at which it ends."""
    frequency = np.array([peak.frequency for peak in one.peaks])
    theta = np.degrees([peak.theta for peak in one.peaks])
    half = 0.5 * np.degrees(np.nan_to_num([peak.width for peak in one.peaks]))
    axis.plot(frequency / 1e9, theta, "x-" if one.is_blind else "o-", color=colour, markersize=5)
    axis.fill_between(
        frequency / 1e9, theta - half, np.minimum(theta + half, 90), color=colour, alpha=0.15, linewidth=0
    )
    if one.cause.kind != "resonance":
        met = []
        for peak in one.peaks:
            beta = 1.0
            if one.cause.kind == "surface wave":
                beta = surface_waves_at(result.job, peak.frequency).get(one.cause.wave, np.nan)
            k = 2 * np.pi * peak.frequency / LIGHT_SPEED
            angles = [
                meeting_angle(result.job.cell.lattice, k, (sign * one.cause.order[0], sign * one.cause.order[1]), beta,
                              peak.phi)
                for sign in (1, -1)
            ]  # fmt: skip
            met.append(np.degrees(np.nanmin(angles)) if np.isfinite(angles).any() else np.nan)
        axis.plot(frequency / 1e9, met, "--", color=colour, linewidth=1)
    return float(theta[-1])
