"""The report: one HTML file that opens with the verdict, then the evidence, then the cautions."""

from __future__ import annotations

import base64
import os
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from ..solver.pattern import LIGHT_SPEED, decibel
from .bench_text import bench_facts, coupling_rows, guide_rows
from .expect import compare
from .interactive import interactive_map
from .job import Job
from .judge import CLOSE, FAILED, MET, OPEN, Verdict, degrees, judge, number
from .layers import layer_rows, stack_summary
from .plot import Drawing, driven_ports
from .progress import duration
from .result import CONVENTIONS, Result
from .surface_waves import WHY, trouble, wave_header, wave_rows, wave_summary
from .survey_text import FINDING_HEADER, HARM, blindness_texts, finding_rows, searched_text, signed_rows

MARKS = {MET: "met", FAILED: "failed", CLOSE: "close", OPEN: "open"}
TABLE_ANGLES = np.radians([0, 15, 30, 45, 60, 75])


def write_report(path: Path, result: Result, figures: Sequence[Drawing]) -> None:
    """Write the self-contained report, replacing an older one only when complete: nothing from a network, and no
    scripts but those of the interactive map."""
    path = Path(path)
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        temporary.write_text(report_text(result, figures), encoding="utf-8")
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def report_text(result: Result, figures: Sequence[Drawing]) -> str:
    """The report as HTML text."""
    from jinja2 import Environment, FileSystemLoader, StrictUndefined

    environment = Environment(
        loader=FileSystemLoader(Path(__file__).parent),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    verdicts = judge(result)
    return environment.get_template("report.html").render(
        title=result.job.title or "Untitled case",
        headline=headline(result, verdicts),
        tone=tone(result, verdicts),
        failure=result.failure,
        verdicts=[_verdict_row(verdict) for verdict in verdicts],
        signed=signed_rows(result),
        blindness=(blindness := blindness_texts(result)),
        found=finding_rows(result),
        found_header=FINDING_HEADER,
        surveyed=result.survey is not None,
        searched="" if result.survey is None else searched_text(result.survey),
        harm=HARM if any(item.inside for item in blindness) else "",
        bench=bench_facts(result),
        bench_couplings=coupling_rows(result),
        bench_guides=guide_rows(result),
        bench_guide_note="" if result.bench is None else result.bench.guide_note,
        facts=_facts(result),
        accuracy=_accuracy(result),
        comparisons=[_comparison_row(item) for item in compare(result)],
        figures=[_figure(figure) for figure in figures],
        interactive=_interactive(result),
        impedance=_impedance_rows(result),
        several_ports=len(driven_ports(result)) > 1,
        checks=_checks(result),
        conductors=_conductors(result),
        layers=[] if result.job.cell.stack is None else layer_rows(result.job.cell.stack),
        surface_header=wave_header(result.job),
        surface_waves=wave_rows(result.job),
        surface_why=WHY,
        surface_trouble=trouble(result.job),
        expected_to_fail=result.job.expected_to_fail,
        losses=_losses(result),
        ports=_ports(result),
        loads=_loads(result),
        notes=result.sweep.notes,
        conventions=[(name.replace("_", " "), text) for name, text in CONVENTIONS.items()],
        versions=sorted(result.provenance.versions.items()),
        provenance=_provenance(result),
        case=result.job.text,
    )


def headline(result: Result, verdicts: Sequence[Verdict]) -> str:
    """The one sentence the report and the command line open with."""
    if result.failure:
        return "The computation did not reach its tolerance: do not use these numbers."
    if not verdicts:
        return "The case sets no limits; nothing was judged."
    missed = sum(not verdict.holds for verdict in verdicts)
    close = sum(verdict.state == CLOSE for verdict in verdicts)
    limits = "limit" if len(verdicts) == 1 else "limits"
    if missed:
        text = f"{missed} of {len(verdicts)} {limits} {'is' if missed == 1 else 'are'} not met"
    else:
        text = "The limit is met" if len(verdicts) == 1 else f"All {len(verdicts)} limits are met"
    if not close:
        return f"{text}."
    which = "1 lies closer to its limit" if close == 1 else f"{close} lie closer to their limits"
    return f"{text}; {which} than the estimated error: too close to call."


def tone(result: Result, verdicts: Sequence[Verdict]) -> str:
    """Which colour the headline has: "met", "failed", "close" or "open"."""
    if result.failure or any(not verdict.holds for verdict in verdicts):
        return "failed"
    if any(verdict.state == CLOSE for verdict in verdicts):
        return "close"
    return "met" if verdicts else "open"


def _verdict_row(verdict: Verdict) -> dict[str, Any]:
    judged = np.isfinite(verdict.frequency)
    return {
        "requirement": verdict.requirement,
        "cone": degrees(verdict.limit.cone),
        "state": verdict.state,
        "mark": MARKS[verdict.state],
        "worst": number(verdict.worst, verdict.unit) if judged else "",
        "place": verdict.place or verdict.reason,
        "margin": margin_text(verdict) if judged else "",
        "error": error_text(verdict) if judged else "",
        "points": verdict.points,
    }


def margin_text(verdict: Verdict) -> str:
    """Distance to the limit in words."""
    if not np.isfinite(verdict.margin):
        return "beyond any limit" if verdict.margin < 0 else "clear"
    side = "within" if verdict.margin >= 0 else "beyond"
    return f"{number(abs(verdict.margin), verdict.unit)} {side}"


def error_text(verdict: Verdict) -> str:
    """Estimated error of the worst value in words."""
    if not np.isfinite(verdict.error):
        return "unknown" if np.isnan(verdict.error) and np.isfinite(verdict.worst) else ""
    least = 0.01 if verdict.unit else 0.0001
    if verdict.error < least:
        return f"< {number(least, verdict.unit)}"
    return f"± {number(verdict.error, verdict.unit)}"


def _facts(result: Result) -> list[tuple[str, str]]:
    job = result.job
    lattice, wavelength = job.cell.lattice, LIGHT_SPEED / job.frequency[-1]
    free = lattice.grating_lobe_free_cone(2 * np.pi / wavelength)
    low, high, count = job.frequency[0] / 1e9, job.frequency[-1] / 1e9, len(job.frequency)
    band = f"{low:.6g} GHz" if count == 1 else f"{low:.6g} to {high:.6g} GHz in {count} frequencies"
    vectors = ", ".join(
        f"{n} = ({x * 1e3:.5g}, {y * 1e3:.5g}) mm" for n, (x, y) in zip("ab", lattice.vectors, strict=True)
    )
    area = f"{lattice.area * 1e6:.5g} mm² = {lattice.area / wavelength**2:.4g} λ² at the top frequency"
    lobes = "none at any scan angle" if free >= np.pi / 2 - 1e-9 else f"none inside {degrees(free)}"
    polarisation = {
        "x": "linear",
        "y": "linear",
        "right": "right-hand circular",
        "left": "left-hand circular",
    }
    kind = polarisation[job.co_polar]
    if kind == "linear":
        kind += f", reference axis at {degrees(job.co_polar_angle)} from x (Ludwig's third definition)"
    return [
        ("Band", band),
        ("Scan", f"{len(job.scan.points)} directions, cone of {degrees(job.scan.cone)}"),
        ("Lattice", vectors),
        ("Cell area", area),
        ("Grating lobes at the top frequency", lobes),
        ("Wanted polarisation", kind),
        ("Ground plane", "perfectly conducting at z = 0" if job.cell.ground else "none"),
        *_stack_facts(job),
    ]


def _stack_facts(job: Job) -> list[tuple[str, str]]:
    if job.cell.stack is None:
        return []
    waves = wave_summary(job)
    rows = [("Layers, bottom to top", stack_summary(job.cell.stack))]
    return [*rows, ("Surface waves of the bare layers", waves)] if waves else rows


def _accuracy(result: Result) -> dict[str, Any]:
    accuracy = result.accuracy
    return {
        "estimated": accuracy.samples > 0,
        "gamma": f"{accuracy.reflection:.4f}",
        "impedance": f"{100 * accuracy.impedance:.1f} %",
        "samples": accuracy.samples,
        "factor": f"{accuracy.factor:.2g}",
        "unknowns": accuracy.unknowns,
        "others": accuracy.compared_unknowns,
        "kind": accuracy.compared,
        "note": accuracy.note,
    }


def _comparison_row(item: Any) -> dict[str, Any]:
    wanted = item.expectation
    port = f", port {wanted.port}" if wanted.port else ""
    return {
        "quantity": wanted.quantity.replace("_", " "),
        "place": f"theta {degrees(wanted.theta)}, phi {degrees(wanted.phi)}, {wanted.frequency / 1e9:.6g} GHz{port}",
        "expected": f"{wanted.value:g} ± {wanted.tolerance:g} {item.unit}",
        "computed": f"{item.computed:.4g} {item.unit}" if np.isfinite(item.computed) else "not in this run",
        "agrees": item.agrees,
        "origin": wanted.origin,
    }


def _figure(figure: Drawing) -> dict[str, str]:
    data = base64.b64encode(figure.data).decode("ascii")
    return {"source": f"data:{figure.media};base64,{data}", "words": figure.words, "caption": figure.caption}


def _interactive(result: Result) -> Any:
    """The interactive map of a surveyed run, ready-made HTML; empty without a survey."""
    from markupsafe import Markup

    survey = result.survey
    return Markup("" if survey is None else interactive_map(result.job, survey.scan_map, survey.blindnesses))


def _impedance_rows(result: Result) -> list[dict[str, str]]:
    """Active impedance at round angles of the cuts, at the middle frequency."""
    f, rows = len(result.job.frequency) // 2, []
    z, gamma, co = result.active_impedance, result.response.reflection, result.co_cross_gain[0]
    for (phi, index), theta in zip(result.job.scan.planes, result.job.scan.plane_theta, strict=True):
        for angle in TABLE_ANGLES:
            near = int(np.argmin(np.abs(theta - angle))) if len(theta) else 0
            if not len(theta) or abs(theta[near] - angle) > 1e-6:
                continue
            for p in driven_ports(result):
                s = index[near]
                rows.append(
                    {
                        "plane": degrees(phi),
                        "theta": degrees(angle),
                        "port": result.port_names[p],
                        "z": complex_text(z[f, s, p]),
                        "gamma": f"{decibel(np.abs(gamma[f, s, p]) ** 2):.1f}",
                        "gain": f"{co[f, s]:.2f}",
                    }
                )
    return rows


def complex_text(value: complex) -> str:
    """A complex number with one decimal: "73.1 + j 42.5"."""
    return f"{value.real:.1f} {'+' if value.imag >= 0 else '−'} j {abs(value.imag):.1f}"


def _checks(result: Result) -> list[tuple[str, str]]:
    balance = np.abs(result.response.balance)
    f, s = np.unravel_index(np.argmax(np.nan_to_num(balance, nan=np.inf)), balance.shape)
    u, v = (round(float(part[s]), 4) + 0.0 for part in (result.sweep.scan.u, result.sweep.scan.v))
    place = f"{result.sweep.frequency[f] / 1e9:.6g} GHz, u = {u:g}, v = {v:g}"
    stack = result.job.cell.stack
    if stack is not None and not stack.is_lossless:
        place += "; no check here: the loss in layers and sheets takes it for granted"
    return [
        ("Requested tolerance of the lattice sums", f"{result.job.tolerance:.1e}"),
        ("Largest power-balance error, of available power", f"{balance[f, s]:.1e} at {place}"),
        ("Largest relative residual of the linear solves", f"{result.sweep.residual.max():.1e}"),
        ("Largest absorbed share of available power", f"{result.response.absorbed.sum(-1).max():.4f}"),
    ]


def _losses(result: Result) -> list[dict[str, str]]:
    """What every absorber takes of the available power: at broadside (the direction nearest to it) and at most."""
    sweep, absorbed = result.sweep, result.response.absorbed
    middle, nearest = len(sweep.frequency) // 2, int(np.argmin(np.hypot(sweep.scan.u, sweep.scan.v)))
    rows = []
    for n, name in enumerate(sweep.loss_names):
        share = absorbed[..., n]
        f, s = np.unravel_index(np.argmax(share), share.shape)
        theta = float(np.arcsin(min(1.0, np.hypot(sweep.scan.u[s], sweep.scan.v[s]))))
        phi = float(np.arctan2(sweep.scan.v[s], sweep.scan.u[s]))
        place = f"theta {degrees(theta)}, phi {degrees(phi)}, {sweep.frequency[f] / 1e9:.6g} GHz"
        rows.append(
            {"name": name, "broadside": _percent(share[middle, nearest]), "most": _percent(share[f, s]), "place": place}
        )
    return rows


def _percent(share: float) -> str:
    return f"{100 * share:.2g} %"


def _conductors(result: Result) -> list[dict[str, Any]]:
    mesh = result.job.cell.mesh
    return [
        {
            "name": name,
            "triangles": int((mesh.triangle_conductor == c).sum()),
            "segments": int((mesh.segment_conductor == c).sum()),
            "material": material_text(mesh.materials[c]),
        }
        for c, name in enumerate(mesh.names)
    ]


def material_text(material: Any) -> str:
    """What a conductor is made of, in words."""
    if material.sheet_resistance is not None:
        return f"{material.sheet_resistance:g} ohm per square"
    if material.wire_resistance is not None:
        return f"{material.wire_resistance:g} ohm per metre"
    if material.conductivity is not None:
        thick = f", {material.thickness * 1e6:g} µm thick" if material.thickness is not None else ""
        return f"{material.conductivity:g} S/m{thick}"
    return "perfect conductor"


def _ports(result: Result) -> list[dict[str, str]]:
    return [
        {
            "name": port.name,
            "resistance": f"{port.resistance:g} ohm",
            "drive": f"{abs(port.drive):.4g} at {degrees(float(np.angle(port.drive)))}" if port.drive else "not driven",
            "gap": f"{port.gap.width * 1e3:.4g} mm in a {'wire' if port.gap.kind == 'wire' else 'sheet'}",
        }
        for port in result.job.cell.ports
    ]


def _loads(result: Result) -> list[dict[str, str]]:
    return [
        {
            "name": load.name,
            "value": f"{load.resistance:g} ohm, {load.inductance * 1e9:.4g} nH"
            + (f", {load.capacitance * 1e12:.4g} pF" if load.capacitance is not None else ""),
        }
        for load in result.job.cell.loads
    ]


def _provenance(result: Result) -> list[tuple[str, str]]:
    origin = result.provenance
    rows = [
        ("Made", origin.created.replace("T", " ").replace("+00:00", " UTC") or "unknown"),
        ("Wall time", duration(np.nan_to_num(origin.wall_time))),
    ]
    if np.isfinite(origin.peak_memory):
        rows.append(("Peak memory", f"{origin.peak_memory / 1e6:.0f} MB"))
    if result.accuracy.unknowns:
        rows.append(("Unknowns", str(result.accuracy.unknowns)))
    return rows
