"""Currents of chosen solutions, solved once more and written for a viewer."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from ..geometry.errors import InputError
from ..solver.result import ScanPoints
from .engine import DirectEngine
from .job import Job
from .touchstone import file_name
from .vtk import write_currents


def parse_place(text: str, where: str = "--currents") -> tuple[float, float, float]:
    """Frequency (Hz), theta and phi (rad) from "5.4 GHz, 30 deg, 0 deg".

    Raises
    ------
    InputError
        If the text does not hold a frequency and two angles, or theta is not below 90 degrees.
    """
    from .quantity import Quantities

    allowed = 'frequency, theta, phi such as "5.4 GHz, 30 deg, 0 deg"'
    parts = [part.strip() for part in text.split(",")]
    if len(parts) != 3:
        raise InputError(f"'{text}' has {len(parts)} parts.", where=where, allowed=allowed)
    quantities = Quantities({})
    frequency = quantities.value(parts[0], "frequency", where)
    theta, phi = (quantities.value(part, "angle", where) for part in parts[1:])
    if frequency <= 0 or abs(theta) >= np.pi / 2:
        raise InputError(f"'{text}' lies outside what can be solved.", where=where, allowed="theta below 90 deg")
    return frequency, theta, phi


def write_current_files(folder: Path, job: Job, places: list[tuple[float, float, float]]) -> tuple[Path, ...]:
    """One ``.vtu`` file per (frequency, theta, phi), currents under the case's drive, r.m.s. A and A/m.

    The available power per cell is |drive|^2 watts.
    """
    from ..solver.basis import surface_current
    from ..solver.sweep import wavenumber

    if not places:
        return ()
    folder.mkdir(parents=True, exist_ok=True)
    drive = np.array([port.drive for port in job.cell.ports])
    top = max(frequency for frequency, _, _ in places)
    scans = [ScanPoints.from_angles(np.array(theta), np.array(phi)) for _, theta, phi in places]
    engine = DirectEngine(job.cell, top, scans[0], job.tolerance)
    files = []
    for number, ((frequency, theta, phi), scan) in enumerate(zip(places, scans, strict=True)):
        sweep = engine.solve(frequency, scan, keep_currents=True)
        assert sweep.currents is not None
        kt = wavenumber(frequency) * np.array([scan.u[0], scan.v[0]])
        surface, along = surface_current(engine.solver.operator.basis, sweep.currents[0, 0] @ drive, kt)
        stem = file_name(job.title, number, theta, phi, 1).removesuffix(".s1p").replace("_scan", "_currents")
        path = folder / f"{stem}_{frequency / 1e9:.4f}GHz.vtu"
        files.append(write_currents(path, job.cell.mesh, surface, along))
    return tuple(files)
