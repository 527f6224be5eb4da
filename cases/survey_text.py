"""What a survey found, in the words of the trade: figures to sign, blindness, cause, and what would move it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..solver.pattern import decibel
from ..solver.survey import Blindness, Peak, Survey
from .job import Job
from .judge import degrees
from .result import Result
from .survey_advice import advice

HARM = (
    "In these directions most of the available power of every element returns into its transmitter at once. Keep them "
    "out of the beam-steering tables, or prove that the transmitters survive."
)


@dataclass(frozen=True)
class BlindnessText:
    """One blindness in words: heading, where, how it moves, what becomes of the power, cause, advice."""

    title: str
    inside: bool
    where: str
    moves: str
    power: str
    cause: str
    advice: str


def signed_rows(result: Result) -> list[tuple[str, str]]:
    """The figures a designer signs, as (name, text); none without a survey."""
    survey = result.survey
    if survey is None:
        return []
    cone = survey.free_cone
    rows: list[tuple[str, str]] = []
    level = f"active reflection at most {decibel(cone.level):.4g} dB in every driven port"
    if not any(limit.quantity == "reflection" for limit in result.job.limits):
        level += " (half of the power: the case sets no reflection limit)"
    rows.append(("Judged at", level))
    rows.append(("Largest clear cone, all azimuths, whole band", _cone_text(cone.cone)))
    if cone.by_plane:
        planes = "; ".join(f"phi {degrees(phi)}: {_cone_text(theta)}" for phi, theta in cone.by_plane)
        rows.append(("Largest clear angle by cut, both sides", planes))
    rows.append((f"Band usable in the cone of {degrees(cone.wanted)}", usable_text(result)))
    if np.isfinite(cone.gain_drop):
        rows.append(("Worst drop of gain from broadside in the clear cone", f"{cone.gain_drop:.2f} dB"))
    if np.isfinite(cone.wanted_drop):
        rows.append((f"Worst drop of gain in the cone of {degrees(cone.wanted)}", _drop_text(cone.wanted_drop)))
    rows.append(("Blindness", blindness_summary(result)))
    certificate = result.certificate
    confirmed = "" if certificate is None else (
        f"; estimated {certificate.estimated:.1e}, confirmed {certificate.confirmed:.1e} by "
        f"{len(certificate.errors)} full solutions held back"
    )  # fmt: skip
    rows.append(("Error of the active reflection against a full solution", f"{survey.error:.1e}{confirmed}"))
    return rows


def usable_text(result: Result) -> str:
    """The band over which the wanted cone is clear."""
    survey = result.survey
    assert survey is not None
    usable, frequency = survey.free_cone.usable, result.job.frequency
    if usable is None:
        return "none of the frequencies looked at"
    low, high = usable
    whole = low <= frequency[0] * (1 + 1e-9) and high >= frequency[-1] * (1 - 1e-9)
    if high <= low * (1 + 1e-9):
        return f"{low / 1e9:.6g} GHz" + (", the whole band" if whole else " only")
    return f"{low / 1e9:.5g} to {high / 1e9:.5g} GHz" + (", the whole band" if whole else "")


def blindness_summary(result: Result) -> str:
    """How many, and the first one inside the scan cone."""
    survey = result.survey
    assert survey is not None
    blind = [one for one in survey.blindnesses if one.is_blind]
    inside = [one for one in blind if least_theta(one) <= result.job.scan.cone]
    if not blind:
        weak = f", {len(survey.blindnesses)} strong mismatches" if survey.blindnesses else ""
        return f"none found ({searched_text(survey)}){weak}"
    if not inside:
        first = min(least_theta(one) for one in blind)
        return f"none inside the scan cone; {len(blind)} outside, from theta {degrees(first)} on"
    first = min(inside, key=least_theta)
    peak = min(first.peaks, key=lambda p: p.theta)
    return (
        f"{len(inside)} inside the scan cone, the first at theta {degrees(peak.theta)}, phi {azimuth_text(peak.phi)}, "
        f"{peak.frequency / 1e9:.6g} GHz: {short_cause(first)}"
    )


def searched_text(survey: Survey) -> str:
    """What was looked at."""
    maps = survey.scan_map
    count = int(maps.solved.sum())
    return (
        f"{count} points of {len(maps.frequency)} frequencies, and searches from all maxima, circles and roots; error "
        f"of the active reflection {survey.error:.1e}"
    )


def least_theta(one: Blindness) -> float:
    """Scan angle nearest to broadside that it reaches, rad."""
    return min(peak.theta for peak in (*one.peaks, one.worst))


def blindness_texts(result: Result) -> list[BlindnessText]:
    """Every blindness and strong mismatch in words, those inside the scan cone first."""
    return [_text(one, result) for one in _by_place(result)]


def _by_place(result: Result) -> list[Blindness]:
    found = () if result.survey is None else result.survey.blindnesses
    return sorted(found, key=lambda one: (least_theta(one) > result.job.scan.cone, least_theta(one)))


def finding_rows(result: Result) -> list[tuple[str, ...]]:
    """One row of text for each of `blindness_texts`, under `FINDING_HEADER`."""
    rows = []
    for one in _by_place(result):
        worst = one.worst
        rows.append((
            "Blindness" if one.is_blind else "Strong mismatch",
            f"{degrees(worst.theta)}, {azimuth_text(worst.phi)}" + (" and opposite" if one.mirrored else ""),
            f"{worst.frequency / 1e9:.6g} GHz",
            f"{100 * min(worst.power, 9.99):.4g} %",
            _width_text(worst.width) if np.isfinite(worst.width) else "",
            short_cause(one),
            _cones(one, result.job),
        ))  # fmt: skip
    return rows


FINDING_HEADER = (
    "Found", "Worst at theta, phi", "Frequency", "Comes back", "Width at half power", "Cause", "Inside",
)  # fmt: skip


def _cones(one: Blindness, job: Job) -> str:
    """Inside which of the case's cones it comes."""
    reached = least_theta(one)
    names = ["scan cone"] if reached <= job.scan.cone else []
    if any(limit.quantity == "reflection" and reached <= limit.cone for limit in job.limits):
        names.append("limit's cone")
    return " and ".join(names) or "neither cone"


def _against_limits(one: Blindness, job: Job) -> str:
    """On which side of the cones of the reflection limits it lies, in a sentence; empty without such a limit."""
    cones = [limit.cone for limit in job.limits if limit.quantity == "reflection"]
    if not cones:
        return ""
    wide, reached = max(cones), least_theta(one)
    if reached <= wide:
        return f" It comes inside the cone of the reflection limit, {degrees(wide)}."
    return f" It stays outside the cone of the reflection limit, {degrees(wide)}."


def short_cause(one: Blindness) -> str:
    """The cause in a few words."""
    cause = one.cause
    if cause.kind == "surface wave":
        return f"surface wave {cause.wave} through the Floquet wave {_order(cause.order)}"
    if cause.kind == "grating lobe":
        return f"onset of the grating lobe {_order(cause.order)}"
    return "resonance of the element and its feed"


def _text(one: Blindness, result: Result) -> BlindnessText:
    job, worst = result.job, one.worst
    kind = "Blindness" if one.is_blind else "Strong mismatch"
    inside = least_theta(one) <= job.scan.cone
    side = "inside" if inside else "outside"
    port = f", port {result.port_names[worst.port]}" if len(result.port_names) > 1 else ""
    title = f"{kind} {side} the scan cone: {short_cause(one)}"
    opposite = "; the opposite direction is the same" if one.mirrored else ""
    width = ""
    if np.isfinite(worst.width):
        width = f", {_width_text(worst.width)} wide where more than half of the power comes back"
    where = f"At {_place(worst)}{port}: {_level(worst)} come back{width}{opposite}.{_against_limits(one, job)}"
    return BlindnessText(title, inside, where, _moves(one), _power(worst, result), _cause(one), advice(one, job))


def _place(peak: Peak) -> str:
    return (
        f"theta {degrees(peak.theta)}, phi {azimuth_text(peak.phi)} (u = {_cosine(peak.u)}, v = {_cosine(peak.v)}), "
        f"{peak.frequency / 1e9:.6g} GHz"
    )


def _cosine(value: float) -> str:
    return f"{round(value, 4) + 0.0:.4f}"


def azimuth_text(phi: float) -> str:
    """Azimuth from 0 to below 360 degrees."""
    return degrees(np.radians(round(np.degrees(phi), 2) % 360.0))


def _level(peak: Peak) -> str:
    return (
        f"{100 * min(peak.power, 9.99):.4g} % of the port's power ({round(float(decibel(peak.power)), 3) + 0.0:g} dB)"
    )


def _moves(one: Blindness) -> str:
    first, last = one.peaks[0], one.peaks[-1]
    if first is last:
        return f"Seen at {first.frequency / 1e9:.6g} GHz only, of the frequencies looked at."
    per_cent = 100 * (last.frequency - first.frequency) / (0.5 * (last.frequency + first.frequency))
    rate = np.degrees(last.theta - first.theta) / per_cent
    return (
        f"From theta {degrees(first.theta)} at {first.frequency / 1e9:.6g} GHz to {degrees(last.theta)} at "
        f"{last.frequency / 1e9:.6g} GHz: {rate:+.2f} deg per per cent of frequency."
    )


def _power(peak: Peak, result: Result) -> str:
    """Where the power goes, largest share first; shares below 0.05 per cent are left out."""
    names = result.port_names
    shares = [(f"into the generator of port {names[n]}", float(s)) for n, s in enumerate(peak.returned)]
    shares += [("radiated into the main wave", peak.radiated), ("into other Floquet waves", peak.lobes)]
    shares += [
        (f"absorbed in {name}", float(s)) for name, s in zip(result.sweep.loss_names, peak.absorbed, strict=True)
    ]
    told = [f"{100 * share:.3g} % {name}" for name, share in sorted(shares, key=lambda x: -x[1]) if share >= 5e-4]
    return f"Of the available power {', '.join(told)}."


def _cause(one: Blindness) -> str:
    cause = one.cause
    if cause.kind == "surface wave":
        return (
            f"Surface wave {cause.wave} of the bare stack: the Floquet wave {_order(cause.order)} runs at "
            f"{cause.index:.4f} k, {cause.wave} of the bare stack at {cause.expected:.4f} k (the conductors shift it), "
            f"and carries {100 * cause.share:.0f} % of the reaction of all Floquet waves near it."
        )
    if cause.kind == "grating lobe":
        return (
            f"The Floquet wave {_order(cause.order)} grazes the array here ({cause.index:.4f} k) and carries "
            f"{100 * cause.share:.0f} % of the reaction: a grating lobe is about to leave."
        )
    return f"No Floquet wave meets anything here: the element and its feed resonate{_quality(one)}."


def _quality(one: Blindness) -> str:
    q = one.cause.quality
    if not np.isfinite(q):
        return ""
    return f", with a quality factor of {q:.3g}"


def _cone_text(theta: float) -> str:
    return "all of visible space" if theta >= np.pi / 2 - 1e-9 else f"theta {np.degrees(theta):.1f} deg"


def _drop_text(drop: float) -> str:
    return f"{drop:.2f} dB" if drop < 40 else "more than 40 dB"


def _width_text(width: float) -> str:
    angle = np.degrees(width)
    return f"{angle:.1f} deg" if angle >= 1 else f"{angle:.2g} deg"


def _order(order: tuple[int, int]) -> str:
    return f"({order[0]}, {order[1]})"
