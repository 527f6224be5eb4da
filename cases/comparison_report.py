"""The comparison as an HTML section for the report, as a page of its own, and as tables."""

from __future__ import annotations

import base64
import csv
import re
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from markupsafe import Markup

from .comparison import Comparison
from .comparison_charts import draw_comparison
from .comparison_words import (
    cable_rows,
    check_rows,
    evidence_rows,
    headline,
    how_judged,
    parameter_rows,
    pattern_rows,
    support_rows,
    untested,
)
from .plot import Drawing

FOLDER = Path(__file__).parent
CABLES_SHOWN = 30


def comparison_section(comparison: Comparison, figures: Sequence[Drawing] | None = None) -> Markup:
    """HTML of the comparison without head and body; `figures` default to `draw_comparison`."""
    from jinja2 import Environment, FileSystemLoader, StrictUndefined

    environment = Environment(
        loader=FileSystemLoader(FOLDER),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    drawn = draw_comparison(comparison) if figures is None else figures
    sentence, tone = headline(comparison)
    values: dict[str, Any] = {
        "headline": sentence,
        "tone": tone,
        "sentence": comparison.diagnosis.sentence,
        "invented": comparison.invented,
        "notes": comparison.data.notes,
        "support": support_rows(comparison),
        "how": how_judged(),
        "untested": untested(comparison),
        "figures": [_embedded(one) for one in drawn],
        "evidence": evidence_rows(comparison),
        "infinite": infinite_words(comparison),
        "checks": check_rows(comparison),
        "doubts": comparison.diagnosis.notes,
        "parameters": parameter_rows(comparison),
        "cables": cable_rows(comparison, CABLES_SHOWN),
        "more_cables": max(len(cable_rows(comparison)) - CABLES_SHOWN, 0),
        "patterns": pattern_rows(comparison),
    }
    return Markup(environment.get_template("comparison.html").render(values))


def comparison_page(comparison: Comparison, figures: Sequence[Drawing] | None = None) -> str:
    """A complete page in the style of the report."""
    style = re.search(r"<style>.*?</style>", (FOLDER / "report.html").read_text(encoding="utf-8"), re.DOTALL)
    assert style is not None
    title = Markup.escape(f"{comparison.prediction.title or 'Array'}: measurement against prediction")
    return (
        f'<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n<title>{title}</title>\n{style.group(0)}\n'
        f"</head>\n<body>\n<header>\n<h1>{title}</h1>\n</header>\n<main>\n{comparison_section(comparison, figures)}"
        "\n</main>\n</body>\n</html>\n"
    )


def infinite_words(comparison: Comparison) -> str:
    """How far the finite size of the array shows in the measured coupling."""
    d = comparison.diagnosis
    if not np.isfinite(d.infinite_level):
        return ""
    words = (
        f"Against the infinite array the residuals are {d.infinite_level:.2f} times their uncertainty (r.m.s.), "
        f"against the finite array {d.finite_level:.2f} times, over the same coefficients"
    )
    if d.infinite_level > 1.3 * d.finite_level and d.finite_level < 1.3:
        return f"{words}: the difference to the infinite array is the finite size, and is predicted."
    if d.infinite_level > 1.3 * d.finite_level:
        return f"{words}: the finite size accounts for part of the difference to the infinite array."
    return f"{words}: the measurement does not tell the two apart."


def write_comparison(folder: Path, comparison: Comparison) -> tuple[Path, ...]:
    """Write `comparison.html`, the figures, `comparison-residuals.csv` and `comparison-scan.csv` into `folder`."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    figures = draw_comparison(comparison)
    page = folder / "comparison.html"
    page.write_text(comparison_page(comparison, figures), encoding="utf-8")
    files = [page]
    for one in figures:
        path = folder / f"{one.name}{one.suffix}"
        path.write_bytes(one.data)
        files.append(path)
    files.append(_write(folder / "comparison-residuals.csv", comparison.invented, _residual_rows(comparison)))
    files.append(_write(folder / "comparison-scan.csv", comparison.invented, _scan_rows(comparison)))
    cables = cable_rows(comparison)
    if cables:
        rows: list[tuple] = [("port", "delay", "loss at the middle of the band"), *cables]
        files.append(_write(folder / "comparison-cables.csv", comparison.invented, rows))
    return tuple(files)


def _write(path: Path, invented: bool, rows: list[tuple]) -> Path:
    with open(path, "w", newline="", encoding="utf-8") as stream:
        if invented:
            stream.write("# INVENTED measurement: the measured files say so\n")
        csv.writer(stream).writerows(rows)
    return path


def _residual_rows(comparison: Comparison) -> list[tuple]:
    p, data = comparison.prediction, comparison.data
    along, across = data.uncertainty.deviations(np.abs(p.scattering), p.error)
    spread = np.sqrt(along**2 + across**2)
    names = [f"{r}/{c}/{name}" for (c, r), name in zip(p.cells, p.ports, strict=True)]
    head = ("frequency_hz", "to_row/column/port", "from_row/column/port", "measured_re", "measured_im", "predicted_re",
            "predicted_im", "corrected_re", "corrected_im", "uncertainty_rms")  # fmt: skip
    rows: list[tuple] = [head]
    mended = comparison.diagnosis.corrected
    for f, i, j in np.argwhere(data.known):
        m, s, c = data.scattering[f, i, j], p.scattering[f, i, j], mended[f, i, j]
        numbers = (m.real, m.imag, s.real, s.imag, c.real, c.imag, spread[f, i, j])
        rows.append((f"{p.frequency[f]:.10g}", names[i], names[j], *(f"{x:.6e}" for x in numbers)))
    return rows


def _scan_rows(comparison: Comparison) -> list[tuple]:
    scan, s = comparison.corrected_scan or comparison.scan, comparison.headline_support
    plain = comparison.scan
    words = {1: "supported", -1: "not supported", 0: "untested"}
    rows: list[tuple] = [
        (
            "frequency_hz",
            "u",
            "v",
            "as_measured",
            "measured",
            "finite",
            "infinite",
            "distance",
            "may_be",
            "reach95",
            "state",
        )
    ]
    for f in range(len(comparison.prediction.frequency)):
        for d, (u, v) in enumerate(scan.directions):
            sizes = (abs(x[f, d]) for x in (plain.measured, scan.measured, scan.finite, scan.infinite))
            place = (f"{comparison.prediction.frequency[f]:.10g}", f"{u:.6f}", f"{v:.6f}")
            tested = (f"{s.distance[f, d]:.3f}", f"{s.limit:.3f}", f"{s.reach[f, d]:.5f}")
            rows.append((*place, *(f"{x:.6f}" for x in sizes), *tested, words[int(s.direction_state[f, d])]))
    return rows


def _embedded(figure: Drawing) -> dict[str, str]:
    data = base64.b64encode(figure.data).decode("ascii")
    return {"source": f"data:{figure.media};base64,{data}", "words": figure.words, "caption": figure.caption}
