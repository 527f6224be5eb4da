"""What the interactive map carries: a scan map in a few bytes per point, and the circles drawn over it."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..solver.pattern import LIGHT_SPEED, co_cross, decibel
from ..solver.surface_circles import stack_waves
from ..solver.survey import Blindness, ScanMap
from .job import Job
from .surface_waves import near_orders

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

MOST_FREQUENCIES = 11
MOST_POINTS = 101  # along each axis
MOST_BYTES = 2_000_000  # of numbers, before base64; above it the grid is thinned
MISSING = -32768  # stands for NaN
LARGEST = 32767
GAIN_STEP = 0.005  # dB
GAIN_FLOOR = -150.0  # dBi; what is less is told as "below"
LOBE = "Grating lobe enters"
SAME_FREQUENCY = 1e-6


def map_payload(job: Job, scan_map: ScanMap, blindnesses: Sequence[Blindness] = ()) -> dict[str, Any]:
    """Numbers of the map as plain JSON types.

    Keys
    ----
    axis : (n,) values of u and of v; frequency : (n_freq,) Hz; cone : sine of the scan cone's half-angle
    ports : name, resistance (ohm) and strictest reflection limit (dB or None) of the driven ports
    mask : bits (v, u) of the points that hold numbers, N in all, row by row
    reflection : `values` (n_freq, n_driven, 2, N), real and imaginary part in units of `step`
    gain : `values` (n_freq, 2, N), co- and cross-polar realised gain (dBi) in units of `step`
    circles : per frequency, (centre u, centre v, radius, what happens there, order of the Floquet wave)
    contours : per frequency and driven port, u and v of the limit's contour, None between its pieces
    peaks : per frequency, those of `blindnesses` as u, v, index among the driven ports, reflection (dB)

    Values are little-endian int16 in base64, -32768 for NaN. The step of the reflection is 1/32767 of the largest part.
    """
    driven = [p for p, port in enumerate(job.cell.ports) if port.drive != 0]
    thin = thinned(scan_map, len(driven))
    reflection = thin.reflection[..., driven].transpose(0, 3, 2, 1)  # (frequency, port, v, u)
    gain = _gains(job, thin)
    mask = np.isfinite(reflection).any(axis=(0, 1))
    parts = np.stack([reflection.real, reflection.imag], axis=2)[..., mask]
    step = float(np.nanmax(np.abs(parts), initial=1e-9)) / LARGEST
    limits = [_limit(job, job.cell.ports[p].name) for p in driven]
    return {
        "axis": thin.axis.round(9).tolist(),
        "frequency": thin.frequency.tolist(),
        "cone": float(np.sin(min(job.scan.cone, np.pi / 2))),
        "ports": [
            {"name": job.cell.ports[p].name, "resistance": job.cell.ports[p].resistance, "limit": limit}
            for p, limit in zip(driven, limits, strict=True)
        ],
        "mask": base64.b64encode(np.packbits(mask.ravel()).tobytes()).decode("ascii"),
        "reflection": {"step": step, "values": _packed(parts, step)},
        "gain": {
            "step": GAIN_STEP, "floor": GAIN_FLOOR, "values": _packed(gain[..., mask], GAIN_STEP),
            "top": [_top(gain[:, 0]), _top(gain[:, 1])],
        },
        "circles": [_circles(job, float(f)) for f in thin.frequency],
        "contours": [[contour(thin.axis, g, limit) for g, limit in zip(r, limits, strict=True)] for r in reflection],
        "peaks": [_peaks(blindnesses, float(f), driven) for f in thin.frequency],
    }  # fmt: skip


def thinned(scan_map: ScanMap, ports: int) -> ScanMap:
    """At most `MOST_FREQUENCIES` frequencies, both ends among them, and a grid that keeps to `MOST_POINTS` and, with
    `ports` driven, to `MOST_BYTES`; broadside stays in it."""
    count, n = len(scan_map.frequency), len(scan_map.axis)
    f = np.unique(np.round(np.linspace(0, count - 1, min(count, MOST_FREQUENCIES))).astype(int))

    def fits(step: int) -> bool:
        along = (n - 1) // (2 * step) * 2 + 1
        return along <= MOST_POINTS and len(f) * along**2 * np.pi / 4 * (2 * ports + 2) * 2 <= MOST_BYTES

    step = next(s for s in range(1, n + 1) if fits(s) or s == n)
    i = np.arange(n // 2 % step, n, step)
    pick = np.ix_(f, i, i)
    return ScanMap(
        scan_map.frequency[f], scan_map.axis[i], scan_map.reflection[pick], scan_map.field[pick], scan_map.solved[pick]
    )


def contour(axis: Floats, reflection: Complexes, limit: float | None) -> list[list[float | None]]:
    """u and v of the lines on which |reflection| (v, u) is at `limit` (dB); None between lines."""
    from bokeh.plotting.contour import contour_data

    with np.errstate(invalid="ignore"):
        level = decibel(np.abs(reflection) ** 2)
    finite = level[np.isfinite(level)]
    if limit is None or not finite.size or not finite.min() < limit < finite.max():
        return [[], []]
    lines = contour_data(axis, axis, level, [limit], want_fill=False, want_line=True).line_data
    assert lines is not None
    return [[None if np.isnan(x) else round(float(x), 4) for x in part[0]] for part in (lines.xs, lines.ys)]


def _gains(job: Job, scan_map: ScanMap) -> Floats:
    """Co- and cross-polar realised gain in dBi, (n_freq, 2, v, u)."""
    u, v = np.meshgrid(scan_map.axis, scan_map.axis, indexing="ij")
    parts = co_cross(scan_map.field, np.arctan2(v, u), job.co_polar, job.co_polar_angle)
    gain = np.stack([decibel(np.abs(part) ** 2) for part in parts], axis=1)
    return np.maximum(gain, GAIN_FLOOR).transpose(0, 1, 3, 2)


def _packed(values: Floats, step: float) -> str:
    known = np.isfinite(values)
    whole = np.where(known, np.round(np.where(known, values, 0.0) / step), MISSING)
    return base64.b64encode(whole.astype("<i2").tobytes()).decode("ascii")


def _top(gain: Floats) -> float:
    """Upper end of the colour range: the next whole dB above the largest gain."""
    return float(np.ceil(np.nanmax(gain, initial=GAIN_FLOOR)))


def _limit(job: Job, port: str) -> float | None:
    limits = [limit.value for limit in job.limits if limit.quantity == "reflection" and limit.port in (None, port)]
    return min(limits, default=None)


def _circles(job: Job, frequency: float) -> list[list[Any]]:
    """Circles that reach into visible space, of grating lobes and of surface waves (none where they were not found,
    which the report says elsewhere)."""
    k, lattice = 2 * np.pi * frequency / LIGHT_SPEED, job.cell.lattice
    try:
        waves = [(float(wave.beta.real), f"{wave.name} met by Floquet wave") for wave in stack_waves(job.cell.stack, k)]
    except RuntimeError:
        waves = []
    found: list[list[Any]] = []
    for radius, name in [(1.0, LOBE), *waves]:
        for order in near_orders(lattice, k, radius):
            centre = -(order @ lattice.reciprocal) / k
            if abs(radius - np.hypot(*centre)) < 1:
                p, q = (int(part) for part in order)
                found.append([*centre.round(5).tolist(), round(radius, 5), name, f"({p}, {q})"])
    return found


def _peaks(blindnesses: Sequence[Blindness], frequency: float, driven: list[int]) -> list[list[float]]:
    """Peaks at one frequency, and their opposites where those are alike."""
    found = []
    for one in blindnesses:
        for peak in {id(peak): peak for peak in (*one.peaks, one.worst)}.values():
            if abs(peak.frequency / frequency - 1) > SAME_FREQUENCY or peak.port not in driven:
                continue
            for sign in (1, -1) if one.mirrored else (1,):
                row = [sign * peak.u, sign * peak.v, driven.index(peak.port), float(decibel(peak.power))]
                if row not in found:
                    found.append(row)
    return found
