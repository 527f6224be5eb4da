"""A comparison in words and tables, for the page, the table and the terminal."""

from __future__ import annotations

import numpy as np

from .bench_fit import Fit
from .comparison import Comparison
from .scan_synthesis import ScanReflection
from .support import ALLOWANCE, FALSE_ALARM, Support, runs

Row = tuple[str, ...]


def headline(comparison: Comparison) -> tuple[str, str]:
    """The verdict in one sentence, and its tone: "met", "failed" or "close"."""
    d, s = comparison.diagnosis, comparison.headline_support
    aside = (
        " once the faults of the bench named below are taken out" if comparison.corrected_support is not None else ""
    )
    bad = [f.name for f in d.checks.failed if f.name in ("reciprocity", "passivity")]
    if bad:
        return f"The measurement contradicts itself ({' and '.join(bad)}): it supports nothing.", "failed"
    cuts = [p for p in comparison.patterns if not p.supported]
    if comparison.supported:
        return f"The measurement supports the prediction within its uncertainty{aside}, where it tests it.", "met"
    if not s.contradicted and not cuts:
        return "The measurement tests nothing of the prediction.", "close"
    moved = comparison.moved_support
    if moved is not None and moved.holds and not cuts:
        return (
            "The measurement does not support the nominal prediction; with the model's parameters moved within their "
            "tolerances it does.",
            "close",
        )
    what = "the patterns" if cuts and not s.contradicted else "the prediction"
    return f"The measurement does not support {what} within its uncertainty{aside}.", "failed"


def support_rows(comparison: Comparison) -> list[Row]:
    """Which frequencies and directions are supported: (data, frequencies, directions, worst)."""
    rows = [_support_row("as measured", comparison.support, comparison.scan, comparison)]
    if comparison.corrected_support is not None and comparison.corrected_scan is not None:
        rows.append(
            _support_row("bench faults taken out", comparison.corrected_support, comparison.corrected_scan, comparison)
        )
    if comparison.moved_support is not None and comparison.moved_scan is not None:
        rows.append(_support_row("and parameters moved", comparison.moved_support, comparison.moved_scan, comparison))
    return rows


def _support_row(name: str, support: Support, scan: ScanReflection, comparison: Comparison) -> Row:
    f = comparison.prediction.frequency
    good, bad = support.frequency_state > 0, support.frequency_state < 0
    parts = []
    for mask, word in ((good, "supported"), (bad, "not supported"), (support.frequency_state == 0, "not measured")):
        if np.any(mask):
            listed = ", ".join(_band(f[a], f[b]) for a, b in runs(mask))
            parts.append(f"{word}: {listed} GHz")
    if not support.direction_state.size or np.all(np.isnan(support.distance)):
        return name, "; ".join(parts), "none tested", "-"
    return name, "; ".join(parts), _directions(support, scan), _worst(support, scan, comparison)


def _band(low: float, high: float) -> str:
    return f"{low / 1e9:.4g}" if low == high else f"{low / 1e9:.4g} to {high / 1e9:.4g}"


def _directions(support: Support, scan: ScanReflection) -> str:
    state = support.direction_state
    tested = np.any(state != 0, axis=0)
    refuted = np.any(state < 0, axis=0)
    angle = _theta(scan)
    words = f"{np.count_nonzero(tested & ~refuted)} of {len(tested)} supported at every frequency tested"
    if np.any(refuted):
        low, high = angle[refuted].min(), angle[refuted].max()
        words += f"; not supported: {np.count_nonzero(refuted)}, from {low:.0f} to {high:.0f} deg"
    if np.any(~tested):
        words += f"; untested: {np.count_nonzero(~tested)}"
    return words


def _theta(scan: ScanReflection) -> np.ndarray:
    return np.degrees(np.arcsin(np.clip(np.linalg.norm(scan.directions, axis=1), 0, 1)))


def _worst(support: Support, scan: ScanReflection, comparison: Comparison) -> str:
    f, d = np.unravel_index(int(np.nanargmax(np.nan_to_num(support.distance, nan=-1))), support.distance.shape)
    u, v = scan.directions[d]
    phi = np.degrees(np.arctan2(v, u)) % 360
    off = abs(scan.measured[f, d] - scan.same[f, d])
    return (
        f"{support.distance[f, d]:.1f} (may be {support.limit:.1f}): |Δ Gamma| {off:.3f} at θ {_theta(scan)[d]:.0f}, "
        f"φ {phi:.0f} deg, {comparison.prediction.frequency[f] / 1e9:.4g} GHz"
    )


def evidence_rows(comparison: Comparison) -> list[Row]:
    """The explanations: (explanation, of, removes alone, removes last, beyond chance, evidence)."""
    return [
        (
            s.name,
            s.kind,
            f"{100 * s.alone:.0f} %",
            f"{100 * s.last:.0f} %",
            "yes" if s.significant else "no",
            s.words,
        )
        for s in comparison.diagnosis.shares
    ]


def check_rows(comparison: Comparison) -> list[Row]:
    """What the measurement says against itself: (check, outcome, words)."""
    return [
        (f.name, "failed" if f.failed else "passed" if f.possible else "not possible", f.words)
        for f in comparison.diagnosis.checks.findings
    ]


def parameter_rows(comparison: Comparison) -> list[Row]:
    """Fitted parameters: (name, nominal, moved by, tolerance, remark)."""
    fit = moved_fit(comparison)
    rows = []
    for k, index in enumerate(comparison.fitted):
        s = comparison.prediction.sensitivities[index]
        unit = f" {s.unit}" if s.unit else ""
        error = fit.moves_error[k]
        move = f"{fit.moves[k]:+.3g}{unit} ± {error:.1g}" if np.isfinite(error) else "not determined"
        remark = ""
        if abs(fit.moves[k]) >= s.tolerance * (1 - 1e-6):
            remark = f"stops at its tolerance; without it, it would move by {fit.free_moves[k]:+.3g}{unit}"
        elif np.isfinite(error) and abs(fit.moves[k]) < 2.6 * error:
            remark = "no move beyond chance"
        rows.append((s.name, f"{s.nominal:.6g}{unit}", move, f"± {s.tolerance:.3g}{unit}", remark))
    return rows


def moved_fit(comparison: Comparison) -> Fit:
    """The fit with parameters: with cables where the data ask for cables."""
    return comparison.diagnosis.fits.both if comparison.diagnosis.cabled else comparison.diagnosis.fits.parameters


def cable_rows(comparison: Comparison, most: int = 10_000) -> list[Row]:
    """Fitted cables: (port, delay in ps, loss in dB); none where the data do not ask for any."""
    if not comparison.diagnosis.cabled:
        return []
    fit, p = comparison.diagnosis.fits.chosen, comparison.prediction
    known = np.any(comparison.data.known, axis=0)
    seen = np.any(known, axis=0) | np.any(known, axis=1)
    rows = []
    for i in np.flatnonzero(seen)[:most]:
        delay = _with_error(float(1e12 * fit.delay[i]), float(1e12 * fit.delay_error[i]), "ps")
        rows.append((p.port_label(int(i)), delay, _with_error(float(fit.loss[i]), float(fit.loss_error[i]), "dB")))
    return rows


def _with_error(value: float, error: float, unit: str) -> str:
    if not np.isfinite(error):
        return f"{value:.4g} {unit} (only its sum with others is determined)"
    digits = max(0, 1 - int(np.floor(np.log10(max(error, 1e-6)))))
    return f"{value:.{digits}f} ± {error:.{digits}f} {unit}"


def untested(comparison: Comparison) -> list[str]:
    """What remains untested, in sentences."""
    p, known, s = comparison.prediction, comparison.data.known, comparison.headline_support
    scan, found = comparison.corrected_scan or comparison.scan, []
    silent = ~np.any(known, axis=(1, 2))
    if np.any(silent):
        listed = ", ".join(_band(p.frequency[a], p.frequency[b]) for a, b in runs(silent))
        found.append(f"Frequencies predicted but not measured: {listed} GHz.")
    count = np.any(known, axis=0)
    if not np.all(count):
        found.append(f"{np.count_nonzero(~count)} of {count.size} coefficients were not measured.")
    missing = np.any(scan.missing, axis=0)
    if np.any(missing):
        names = [p.port_label(int(i)) for i in np.flatnonzero(missing)]
        listed = "; ".join(names[:12]) + (f" and {len(names) - 12} more" if len(names) > 12 else "")
        found.append(
            f"The active reflection of {p.port_label(scan.port)} lacks the coupling from {listed}: by their predicted "
            f"magnitudes they may change it by up to {scan.bound.max():.3f}."
        )
    wide = (s.direction_state == 0) & np.isfinite(s.reach)
    if np.any(wide):
        found.append(
            f"{np.count_nonzero(wide)} combinations of direction and frequency agree, but their uncertainty exceeds "
            f"{s.wanted:g} in the reflection coefficient: they prove little."
        )
    low = known & (np.abs(p.scattering) < 3 * comparison.data.uncertainty.floor)
    if np.any(low):
        found.append(
            f"{100 * np.count_nonzero(low) / np.count_nonzero(known):.0f} % of the measured values are predicted below "
            "three times the noise floor: noise would hide errors there."
        )
    found.append(f"Directions beyond the {len(scan.directions)} listed, and the active reflection of other elements.")
    if not p.patterns or not comparison.patterns:
        found.append("Patterns: none was compared.")
    found += [f"'{cut.path.name}', cut at {np.degrees(cut.phi):.4g} deg: {why}." for cut, why in comparison.loose_cuts]
    found += [
        f"{cut.outside} angles of '{cut.measured.path.name}' lie outside the predicted cut."
        for cut in comparison.patterns
        if cut.outside
    ]
    return found


def pattern_rows(comparison: Comparison) -> list[Row]:
    """Compared cuts: (cut, outcome, level, level offset, pointing)."""
    rows = []
    for c in comparison.patterns:
        p = c.predicted
        name = f"row {p.cell[1]}, column {p.cell[0]}, φ {np.degrees(p.phi):.4g} deg, {p.frequency / 1e9:.5g} GHz"
        offset = "absolute (dBi)" if c.measured.absolute else f"{c.offset:+.2f} dB fitted"
        turn = f"{np.degrees(c.pointing):+.2f} ± {np.degrees(c.pointing_error):.2f} deg"
        level = f"{c.level:.2f} (may be {c.threshold:.2f})"
        rows.append((name, "supported" if c.supported else "not supported", level, offset, turn))
    return rows


def how_judged() -> str:
    """The thresholds explained."""
    return (
        "Each residual is divided by its stated standard uncertainty, along and across the phasor. Per frequency the "
        "mean of the squares is tested against the chi-squared distribution; per direction and frequency, the distance "
        "between the active reflection summed from measured coefficients and the prediction over the same ones. Sound "
        f"data fail any of these tests in at most {100 * FALSE_ALARM:g} of 100 comparisons, even if the stated "
        f"uncertainty is {100 * ALLOWANCE:.0f} % too small. Errors are taken as independent between coefficients and "
        "frequencies; drift and calibration errors common to many are not, and count as disagreement."
    )
