"""The breadboard in words: rows of the report."""

from __future__ import annotations

import numpy as np

from ..solver.pattern import decibel
from .bench import BUDGET
from .judge import degrees
from .result import Result

Rows = list[tuple[str, ...]]
WORTH = -40.0  # dB: couplings below are not worth the measuring for the active reflection
TOLD = 12  # couplings listed
AIM = 0.02  # r.m.s. error of the active reflection that measured couplings are to give


def bench_facts(result: Result) -> list[tuple[str, str]]:
    """Figures of the predicted array, as (name, text)."""
    bench = result.bench
    if bench is None or result.job.breadboard is None:
        return []
    live, board = len(bench.ports), result.job.breadboard
    ends = board.termination if isinstance(board.termination, str) else f"{board.termination:g} ohm"
    dummies = f", {int(bench.dummy.sum())} of them dummies ({ends})" if bench.dummy.any() else ""
    low, high = bench.frequency[0] / 1e9, bench.frequency[-1] / 1e9
    rows = [
        ("Array", f"{len(bench.cells)} elements{dummies}, {live} ports led out"),
        ("Frequencies", f"{len(bench.frequency)}, {low:.6g} to {high:.6g} GHz"),
        ("Rows that are enough", enough_text(result)),
        ("Power at broadside, middle of the band", budget_text(bench.budget)),
        ("Strongest coupling", _strongest(result)),
        *_tolerance_row(result),
        ("What to measure, and how well", measuring_text(result)),
        ("Accuracy of every scattering parameter", _accuracy(result)),
    ]
    return rows


def enough_text(result: Result) -> str:
    """How large a square array must be."""
    bench, board = result.bench, result.job.breadboard
    assert bench is not None and board is not None
    last = bench.sizes[-1]
    if bench.enough is None:
        return (
            f"more than {last.side} by {last.side}: there the centre's active reflection still differs by "
            f"{last.reflection:.3f} from the infinite array (limit {board.alike:g})"
        )
    row = next(r for r in bench.sizes if r.side == bench.enough)
    return (
        f"{row.side} by {row.side}: from there on the centre's active reflection differs by at most {board.alike:g} "
        f"from the infinite array ({row.reflection:.3f} there), its pattern by {row.pattern:.2f} dB"
    )


def budget_text(budget: np.ndarray) -> str:
    """Shares above 0.05 per cent."""
    names = BUDGET.split(", ")
    told = [f"{name} {100 * share:.3g} %" for name, share in zip(names, budget, strict=True) if abs(share) >= 5e-4]
    return ", ".join(told)


def _tolerance_row(result: Result) -> list[tuple[str, str]]:
    bench = result.bench
    if bench is None or not bench.slopes:
        return []
    told = "; ".join(
        f"{s.name} {s.nominal:.5g} +/- {s.tolerance:.3g} {s.unit}: coefficients move by up to "
        f"{s.tolerance * np.abs(s.derivative).max():.3f}"
        for s in bench.slopes
    )
    return [("Toleranced parameters", told)]


def measuring_text(result: Result) -> str:
    """How many coefficients into the centre element count, how exact each must be for the active reflection to be known
    to AIM (r.m.s., independent errors), and what those left out add up to at most."""
    bench = result.bench
    assert bench is not None
    f = len(bench.frequency) // 2
    port = int(np.flatnonzero(bench.ports[:, 0] == bench.centre)[0])
    row = np.abs(bench.scattering[f, port])
    high = decibel(row**2) > WORTH
    each = AIM / np.sqrt(max(int(high.sum()), 1))
    return (
        f"{int(high.sum())} of {len(row)} coefficients into the centre element lie above {WORTH:g} dB; to know its "
        f"active reflection to {AIM:g} at any scan, each must be within {each:.4f} ({decibel(each**2):.0f} dB r.m.s.); "
        f"those left out add up to at most {row[~high].sum():.3f}"
    )


def coupling_rows(result: Result) -> Rows:
    """Strongest coefficients of the infinite array: offset, distance, level, and whether worth measuring; each pair of
    opposite offsets once."""
    bench = result.bench
    if bench is None:
        return []
    f, wavelength = len(bench.frequency) // 2, 299792458.0 / bench.frequency[len(bench.frequency) // 2]
    size = np.abs(bench.coupling[f]).max(axis=(1, 2))
    position = result.job.cell.lattice.positions(bench.coupling_cells)
    once = (bench.coupling_cells[:, 0] > 0) | ((bench.coupling_cells[:, 0] == 0) & (bench.coupling_cells[:, 1] > 0))
    order = np.flatnonzero(once)[np.argsort(-size[once])][:TOLD]
    phases = np.degrees(np.angle(bench.coupling[f, :, 0, 0]))
    return [
        (
            f"({m}, {n})",
            f"{np.hypot(*position[i]) * 1e3:.4g} mm = {np.hypot(*position[i]) / wavelength:.3g} wavelengths",
            degrees(float(np.arctan2(position[i, 1], position[i, 0]))),
            f"{decibel(size[i] ** 2):.1f} dB",
            f"{phases[i]:.0f} deg",
            "yes" if decibel(size[i] ** 2) > WORTH else f"below {WORTH:g} dB",
        )
        for i in order
        for m, n in [bench.coupling_cells[i]]
    ]


def guide_rows(result: Result) -> Rows:
    """Waveguide simulators: frequency, walls, scan angle, expected reflection, modes."""
    bench = result.bench
    if bench is None:
        return []
    return [
        (
            f"{g.frequency / 1e9:.6g} GHz",
            f"{g.width * 1e3:.2f} x {g.height * 1e3:.2f} mm",
            f"{g.across:g}",
            f"theta {np.degrees(g.theta):.1f} deg, phi {degrees(g.phi)}",
            f"{g.level:.1f} dB",
            "TE10 alone" if g.single else "more modes",
        )
        for g in bench.guides
    ]


def _strongest(result: Result) -> str:
    bench = result.bench
    assert bench is not None
    f = len(bench.frequency) // 2
    s = np.abs(bench.scattering[f]) * (1 - np.eye(len(bench.ports)))
    if len(bench.ports) < 2:
        return "one port only"
    i, j = np.unravel_index(np.argmax(s), s.shape)
    return f"{decibel(s[i, j] ** 2):.1f} dB between elements {_name(result, int(i))} and {_name(result, int(j))}"


def _name(result: Result, port: int) -> str:
    bench = result.bench
    assert bench is not None
    column, row = bench.cells[bench.ports[port, 0]]
    name = f", port {result.port_names[bench.ports[port, 1]]}" if len(result.port_names) > 1 else ""
    return f"row {row}, column {column}{name}"


def _accuracy(result: Result) -> str:
    bench = result.bench
    assert bench is not None
    c = bench.certificate
    return (
        f"estimated {c.estimated:.1e} (wanted {c.wanted:.1e}) against the full solution on the same mesh, with "
        f"{c.snapshots} snapshots; couplings of the infinite array {bench.coupling_error:.1e}"
    )
