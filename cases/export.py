"""Tables for spreadsheets: reflection and impedance, patterns, verdicts. Units are in the column names."""

from __future__ import annotations

import csv
import os
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

from ..solver.pattern import axial_ratio, decibel
from ..solver.survey import Survey
from .judge import judge
from .result import Result


def write_tables(folder: Path, result: Result) -> tuple[Path, ...]:
    """Write reflection.csv, pattern.csv and limits.csv into `folder`, and of a survey blindness.csv and
    clear-cone.csv; returns their paths."""
    files = [
        (Path(folder) / "reflection.csv", reflection_rows(result)),
        (Path(folder) / "pattern.csv", pattern_rows(result)),
        (Path(folder) / "limits.csv", limit_rows(result)),
    ]
    if result.survey is not None:
        files.append((Path(folder) / "blindness.csv", blindness_rows(result, result.survey)))
        files.append((Path(folder) / "clear-cone.csv", cone_rows(result.survey)))
    for path, rows in files:
        write_csv(path, rows)
    return tuple(path for path, _ in files)


def write_csv(path: Path, rows: Iterable[Sequence[object]]) -> None:
    """Write rows (the first is the header), replacing an older file only when complete."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        with temporary.open("w", newline="", encoding="utf-8") as stream:
            csv.writer(stream).writerows([[_cell(value) for value in row] for row in rows])
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def reflection_rows(result: Result) -> Iterable[Sequence[object]]:
    """Active reflection and impedance of every driven port at every point."""
    yield (*PLACE, "port", "gamma_re", "gamma_im", "gamma_db", "resistance_ohm", "reactance_ohm")
    gamma, z = result.response.reflection, result.active_impedance
    level = decibel(np.abs(gamma) ** 2)
    for f, s, place in _places(result):
        for p, name in enumerate(result.port_names):
            if result.response.drive[p] != 0:
                g, active = gamma[f, s, p], z[f, s, p]
                yield (*place, name, g.real, g.imag, level[f, s, p], active.real, active.imag)


def pattern_rows(result: Result) -> Iterable[Sequence[object]]:
    """Realised gain under the case's drive and the power budget at every point."""
    yield (
        *PLACE, "gain_co_dbi", "gain_cross_dbi", "gain_theta_dbi", "gain_phi_dbi", "ideal_cell_dbi",
        "axial_ratio_db", "reflected", "radiated", "absorbed", "balance_error",
    )  # fmt: skip
    response, (co, cross) = result.response, result.co_cross_gain
    parts, ceiling = decibel(np.abs(response.field) ** 2), decibel(response.ceiling)
    ratio = 2 * decibel(axial_ratio(response.field))
    radiated, absorbed = response.radiated.sum(-1), response.absorbed.sum(-1)
    for f, s, place in _places(result):
        yield (
            *place, co[f, s], cross[f, s], *parts[f, s], ceiling[f, s], ratio[f, s], response.reflected[f, s],
            radiated[f, s], absorbed[f, s], response.balance[f, s],
        )  # fmt: skip


def limit_rows(result: Result) -> Iterable[Sequence[object]]:
    """One row per limit of the case."""
    yield (
        "quantity", "limit", "cone_deg", "state", "holds", "worst", "margin", "estimated_error", "unit",
        "frequency_ghz", "theta_deg", "phi_deg", "port", "points", "reason",
    )  # fmt: skip
    for v in judge(result):
        yield (
            v.limit.quantity, v.limit.value, np.degrees(v.limit.cone), v.state, int(v.holds), v.worst,
            v.margin, v.error, v.unit, v.frequency / 1e9, np.degrees(v.theta), np.degrees(v.phi),
            v.port or "", v.points, v.reason,
        )  # fmt: skip


def blindness_rows(result: Result, survey: Survey) -> Iterable[Sequence[object]]:
    """One row per peak of every blindness and strong mismatch; the last of each is its worst over frequency."""
    ports, absorbers = result.port_names, result.sweep.loss_names
    yield (
        "number", "worst", "blind", *PLACE, "port", "gamma_db", "width_deg", *(f"returned_{name}" for name in ports),
        "radiated", "lobes", *(f"absorbed_{name}" for name in absorbers), "cause", "surface_wave", "order_p",
        "order_q", "index", "expected_index", "share", "quality", "opposite_alike",
    )  # fmt: skip
    for n, one in enumerate(survey.blindnesses, start=1):
        cause = one.cause
        peaks = (*one.peaks, one.worst)
        for i, peak in enumerate(peaks):
            yield (
                n, int(i + 1 == len(peaks)), int(one.is_blind), peak.frequency / 1e9, np.degrees(peak.theta),
                np.degrees(peak.phi), peak.u, peak.v, ports[peak.port], decibel(peak.power), np.degrees(peak.width),
                *peak.returned, peak.radiated, peak.lobes, *peak.absorbed, cause.kind, cause.wave, *cause.order,
                cause.index, cause.expected, cause.share, cause.quality, int(one.mirrored),
            )  # fmt: skip


def cone_rows(survey: Survey) -> Iterable[Sequence[object]]:
    """First scan angle at which the limit is passed, by frequency and azimuth; 90 where it never is."""
    cone = survey.free_cone
    yield ("frequency_ghz", "phi_deg", "clear_theta_deg", "limit_db")
    for f, frequency in enumerate(cone.frequency):
        for azimuth, theta in zip(cone.azimuth, cone.theta[f], strict=True):
            yield (frequency / 1e9, np.degrees(azimuth), np.degrees(theta), decibel(cone.level))


PLACE = ("frequency_ghz", "theta_deg", "phi_deg", "u", "v")


def _places(result: Result) -> Iterable[tuple[int, int, tuple[float, ...]]]:
    scan = result.sweep.scan
    theta, phi = np.degrees(scan.theta), np.degrees(scan.phi)
    for f, frequency in enumerate(result.sweep.frequency):
        for s in range(len(scan)):
            yield f, s, (frequency / 1e9, theta[s], phi[s], scan.u[s], scan.v[s])


def _cell(value: object) -> object:
    """Numbers with 9 significant digits; not-a-number is an empty cell."""
    if isinstance(value, (float, np.floating)):
        return "" if np.isnan(value) else format(float(value), ".9g")
    return value
