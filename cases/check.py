"""What was understood of a case, told before anything is solved."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..solver.pattern import LIGHT_SPEED
from .cost import estimate_cost
from .job import Job
from .judge import AT_LEAST, TITLES, UNITS, degrees, number
from .layers import layer_rows
from .progress import duration
from .report import material_text
from .surface_waves import planes_of, trouble, wave_header, wave_rows

Rows = list[tuple[str, ...]]


def show_check(job: Job, console: Any) -> None:
    """Print the case: lattice and grating lobes, cell, ports, scan, limits, expected cost."""
    console.print(f"[bold]{_safe(job.title)}[/bold]")
    stack = job.cell.stack
    layers = [] if stack is None else layer_rows(stack)
    for title, header, rows in (
        ("Lattice", ("", ""), lattice_rows(job)),
        ("Stack, top to bottom", ("", "height", "material", "loss"), layers),
        ("Surface waves of the bare stack", wave_header(job), wave_rows(job)),
        (
            "Grating lobes at the top frequency",
            ("cut phi", "free up to theta", "first order"),
            lobe_rows(job),
        ),
        ("Cell", ("conductor", "triangles", "segments", "material"), conductor_rows(job)),
        ("Ports and loads", ("name", "value", "drive", "gap"), port_rows(job)),
        ("Band and scan", ("", ""), scan_rows(job)),
        ("Limits", ("quantity", "limit", "within"), limit_rows(job)),
        ("Expected cost of a run", ("", ""), cost_rows(job)),
    ):
        if rows:
            _table(console, title, header, rows)
    told = trouble(job)
    if told:
        console.print(f"\n{_safe(told)}")


def lattice_rows(job: Job) -> Rows:
    """Vectors, area, spacing in wavelengths at the top frequency."""
    lattice, wavelength = job.cell.lattice, LIGHT_SPEED / job.frequency[-1]
    rows: Rows = []
    for name, vector in zip("ab", lattice.vectors, strict=True):
        length = float(np.hypot(*vector))
        x, y = (round(part * 1e3, 4) + 0.0 for part in vector)
        rows.append((name, f"({x:g}, {y:g}) mm, length {length * 1e3:.5g} mm = {length / wavelength:.4g} wavelengths"))
    rows.append(("cell area", f"{lattice.area * 1e6:.5g} mm2 = {lattice.area / wavelength**2:.4g} square wavelengths"))
    gain = 10 * np.log10(4 * np.pi * lattice.area / wavelength**2)
    rows.append(("ideal-cell gain", f"{gain:.2f} dBi at broadside, {job.frequency[-1] / 1e9:.6g} GHz"))
    rows.append(("ground plane", "perfectly conducting, z = 0" if job.cell.ground else "none"))
    return rows


def lobe_rows(job: Job) -> Rows:
    """Onset of the first grating lobe in every cut (both half-planes) and over all azimuths."""
    lattice, k = job.cell.lattice, 2 * np.pi * job.frequency[-1] / LIGHT_SPEED
    rows: Rows = []
    for phi in planes_of(job):
        onset, order = min((lattice.grating_lobe_onset(k, phi + side) for side in (0.0, np.pi)), key=lambda x: x[0])
        rows.append((degrees(phi), degrees(onset), "none enters" if order is None else f"({order[0]}, {order[1]})"))
    free = lattice.grating_lobe_free_cone(k)
    inside = free < job.scan.cone - 1e-9
    rows.append(("all", degrees(free), "INSIDE the scan cone" if inside else "outside the scan cone"))
    return rows


def conductor_rows(job: Job) -> Rows:
    mesh = job.cell.mesh
    return [
        (
            name,
            str(int((mesh.triangle_conductor == c).sum())),
            str(int((mesh.segment_conductor == c).sum())),
            material_text(mesh.materials[c]).replace("µ", "u"),
        )
        for c, name in enumerate(mesh.names)
    ]


def port_rows(job: Job) -> Rows:
    rows: Rows = []
    for port in job.cell.ports:
        drive = f"{abs(port.drive):.4g} at {degrees(float(np.angle(port.drive)))}" if port.drive else "not driven"
        rows.append((port.name, f"{port.resistance:g} ohm", drive, f"{port.gap.width * 1e3:.4g} mm"))
    for load in job.cell.loads:
        value = f"{load.resistance:g} ohm, {load.inductance * 1e9:g} nH"
        value += "" if load.capacitance is None else f", {load.capacitance * 1e12:g} pF"
        rows.append((load.name, value, "load", f"{load.gap.width * 1e3:.4g} mm"))
    return rows


def scan_rows(job: Job) -> Rows:
    low, high, count = job.frequency[0] / 1e9, job.frequency[-1] / 1e9, len(job.frequency)
    band = f"{low:.6g} GHz" if count == 1 else f"{low:.6g} to {high:.6g} GHz, {count} frequencies"
    cuts = ", ".join(degrees(phi) for phi, _ in job.scan.planes) or "none"
    grid = f"{len(job.scan.map_u)} by {len(job.scan.map_v)}" if len(job.scan.map_u) else "none"
    return [
        ("band", band),
        ("scan cone", degrees(job.scan.cone)),
        ("cuts at phi", cuts),
        ("u-v map", grid),
        ("directions", str(len(job.scan.points))),
        ("co-polarisation", f"{job.co_polar}, reference axis at {degrees(job.co_polar_angle)} from x"),
    ]


def limit_rows(job: Job) -> Rows:
    return [
        (
            TITLES[limit.quantity] + (f" of port {limit.port}" if limit.port else ""),
            ("at least " if limit.quantity in AT_LEAST else "at most ") + number(limit.value, UNITS[limit.quantity]),
            degrees(limit.cone),
        )
        for limit in job.limits
    ] or [("none: nothing will be judged", "", "")]


def cost_rows(job: Job) -> Rows:
    cost = estimate_cost(job)
    grid = f"{len(job.frequency)} frequencies x {len(job.scan.points)} directions"
    solutions = f"{cost.solutions} ({grid})"
    if cost.cheap:
        solutions = f"about {cost.solutions} in full; {grid} and the survey, about {cost.cheap} points, from their span"
    return [
        ("unknowns", str(cost.unknowns)),
        ("solutions", solutions),
        (
            "time",
            f"about {duration(cost.seconds)}, {duration(cost.estimate_seconds)} for the error estimate, and "
            f"{duration(cost.writing_seconds)} for figures and report",
        ),
        ("memory", f"about {_bytes(cost.memory)}, and {_bytes(cost.estimate_memory)} for the error estimate"),
        (
            "",
            f"scaled from one timed solution of {cost.trial} unknowns on this machine; rough, within a factor of 2",
        ),
    ]


def _bytes(size: float) -> str:
    return f"{size / 1e9:.1f} GB" if size >= 1e9 else f"{max(size, 1e6) / 1e6:.0f} MB"


def _table(console: Any, title: str, header: tuple[str, ...], rows: Rows) -> None:
    from rich.table import Table

    table = Table(
        title=title,
        title_justify="left",
        title_style="bold",
        box=None,
        show_header=any(header),
        pad_edge=False,
    )
    for name in header:
        table.add_column(name, header_style="dim", overflow="fold")
    for row in rows:
        table.add_row(*(_safe(cell) for cell in row))
    console.print()
    console.print(table)


def _safe(text: str) -> str:
    """Text of the user's that must not be read as markup."""
    from rich.markup import escape

    return escape(text)
