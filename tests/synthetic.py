"""A made-up but physically consistent sweep: crossed current sheets over a plane, unitary by construction.

Each port drives a sheet current along x or y. The sheet radiates the (0, 0) wave only, with the active
resistance of a current sheet (cos(theta) in the E plane, 1/cos(theta) in the H plane), has a series
reactance and a series loss. Waves, scattering and loss follow from one impedance matrix, so power is
conserved to rounding.
"""

from __future__ import annotations

import numpy as np
from scanward.cases.job import Job, Limit, ScanPlan
from scanward.cases.result import Accuracy, Provenance, Result, peak_memory, versions
from scanward.geometry.cell import UnitCell
from scanward.geometry.conductor import Material
from scanward.geometry.lattice import Lattice
from scanward.geometry.mesh import Mesh
from scanward.geometry.port import Gap, Port
from scanward.solver.result import FloquetWaves, ScanPoints, Sweep

CENTRE = 5.4e9
TABLE = FloquetWaves(
    np.array([[0, 0], [0, 0], [-1, 0], [-1, 0]]), np.array([1, 1, 1, 1]), np.array([0, 1, 0, 1])
)


def sheet_sweep(
    frequency: np.ndarray, scan: ScanPoints, *, ports: int = 1, loss: float = 0.0, reference: float = 120.0
) -> Sweep:
    """Sweep of crossed current sheets (port 0 along x, port 1 along y, others skewed) with r0 = 120 ohm."""
    frequency = np.atleast_1d(np.asarray(frequency, dtype=float))
    nf, ns = len(frequency), len(scan)
    cos_t = np.sqrt(np.maximum(1 - scan.u**2 - scan.v**2, 1e-6))
    axis = np.array([0, np.pi / 2, 0.3, 1.0, 2.0])[:ports]
    turn = scan.phi[:, None] - axis[None, :]
    root = np.sqrt(120.0) * np.stack(
        [-np.sqrt(cos_t)[:, None] * np.cos(turn), np.sin(turn) / np.sqrt(cos_t)[:, None]], axis=1
    )  # (scan, polarisation, port): wave per ampere
    detune = 150 * (frequency / CENTRE - CENTRE / frequency)
    reactance = detune[:, None] + 40 * (1 / cos_t - 1)[None, :]
    impedance = np.einsum("swp,swq->spq", root, root)[None].astype(complex)
    impedance = impedance + (1j * reactance + loss)[..., None, None] * np.eye(ports)
    system = np.linalg.inv(impedance + reference * np.eye(ports))
    current = 2 * np.sqrt(reference) * system
    waves = np.zeros((nf, ns, len(TABLE.side), ports), dtype=complex)
    waves[:, :, :2] = root[None] @ current
    absorbed = loss * np.swapaxes(current.conj(), -1, -2) @ current
    return Sweep(
        frequency=frequency,
        scan=scan,
        reference=np.full(ports, reference),
        impedance=impedance,
        scattering=np.eye(ports) - 2 * reference * system,
        waves=waves,
        wave_table=TABLE,
        loss=absorbed[:, :, None],
        loss_names=("arm",),
        residual=np.full((nf, ns), 1e-14),
    )


def plan(cone: float = np.radians(60), step: float = 10.0, grid: int = 9) -> ScanPlan:
    """Two cuts (phi 0 and 90 degrees) and a u-v map inside the cone, without repeats at broadside."""
    theta = np.radians(np.arange(-np.degrees(cone), np.degrees(cone) + step / 2, step))
    axis = np.linspace(-np.sin(cone), np.sin(cone), grid)
    u, v, phi = [0.0], [0.0], [0.0]
    planes = []
    for cut in (0.0, np.pi / 2):
        index = []
        for t in theta:
            if abs(t) < 1e-9:
                index.append(0)
                continue
            index.append(len(u))
            u.append(np.sin(t) * np.cos(cut))
            v.append(np.sin(t) * np.sin(cut))
            phi.append(cut if t > 0 else cut + np.pi)
        planes.append((cut, np.array(index)))
    where = np.full((grid, grid), -1)
    for i, x in enumerate(axis):
        for j, y in enumerate(axis):
            if np.hypot(x, y) <= np.sin(cone) + 1e-12:
                where[i, j] = len(u)
                u.append(x)
                v.append(y)
                phi.append(np.arctan2(y, x))
    points = ScanPoints(np.array(u), np.array(v), np.array(phi))
    return ScanPlan(points, tuple(planes), (theta, theta), axis, axis, where, cone)


def strip_mesh(size: float = 2.5e-3) -> Mesh:
    """A flat strip 25 mm by 2 mm along x at 14 mm height, and one wire post down to z = 0."""
    n = max(2, round(25e-3 / size))
    bars = max(2, round(5e-3 / size))
    x = np.linspace(-12.5e-3, 12.5e-3, n + 1)
    strip = [(xi, yi, 14e-3) for xi in x for yi in (-1e-3, 1e-3)]
    post = [(9e-3, 8e-3, z) for z in np.linspace(0, 10e-3, bars + 1)]
    triangles = []
    for i in range(n):
        k = 2 * i
        triangles += [(k, k + 2, k + 1), (k + 1, k + 2, k + 3)]
    first = len(strip)
    return Mesh(
        points=np.array(strip + post),
        triangles=np.array(triangles),
        triangle_conductor=np.zeros(len(triangles), dtype=np.int64),
        segments=first + np.column_stack([np.arange(bars), np.arange(1, bars + 1)]),
        segment_radius=np.full(bars, 0.4e-3),
        segment_conductor=np.ones(bars, dtype=np.int64),
        names=("arm", "post"),
        materials=(Material(sheet_resistance=0.1), Material()),
    )


def sheet_job(*, ports: int = 1, frequencies: int = 3, limits: tuple[Limit, ...] | None = None) -> Job:
    """A job around the strip mesh; its sweep comes from `sheet_sweep`, not from the solver."""

    def cell(factor: float = 1.0) -> UnitCell:
        gap = Gap("sheet", np.array([0, 0, 14e-3]), np.array([1.0, 0, 0]), 1e-3, np.array([0, 1.0, 0]), 2e-3)
        names = ("east", "north", "third", "fourth", "fifth")[:ports]
        return UnitCell(
            Lattice(np.array([27e-3, 0]), np.array([13.5e-3, 23.4e-3])),
            strip_mesh(2.5e-3 * factor),
            tuple(Port(name, gap, 120.0, 1.0 + 0j if i == 0 else 0j) for i, name in enumerate(names)),
            ground=True,
        )

    cone = np.radians(60)
    if limits is None:
        limits = (Limit("reflection", -6.0, cone), Limit("gain_drop", 5.0, cone))
    return Job(
        title="Avalanche-watch panel, sheet element",
        path=None,
        text='title = "Avalanche-watch panel, sheet element"\n',
        cell=cell(),
        frequency=np.linspace(5.2e9, 5.6e9, frequencies) if frequencies > 1 else np.array([CENTRE]),
        scan=plan(cone),
        limits=limits,
        tolerance=1e-6,
        co_polar="x",
        co_polar_angle=0.0,
        element_size=2.5e-3,
        remesh=cell,
    )


def sheet_result(
    *, ports: int = 1, frequencies: int = 3, loss: float = 0.0, limits: tuple[Limit, ...] | None = None
) -> Result:
    """A finished run of `sheet_job` with made-up error estimates."""
    job = sheet_job(ports=ports, frequencies=frequencies, limits=limits)
    sweep = sheet_sweep(job.frequency, job.scan.points, ports=ports, loss=loss)
    accuracy = Accuracy(3.0, 5, 0.01, 0.02, {"reflection": 0.01, "gain_drop": 0.05}, 120, 270)
    return Result(
        job, sweep, accuracy, Provenance(versions(), 12.5, peak_memory(), "2026-01-01T00:00:00+00:00")
    )
