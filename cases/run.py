"""One run from job to verdict: solve, estimate the error, check, judge, write."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from ..geometry.cell import UnitCell
from ..solver.result import ScanPoints, Sweep
from . import accuracy
from .bench import check_bench, predict_bench
from .bench_store import write_bench
from .engine import DirectEngine, Engine, EngineFactory, memory_free, memory_needed
from .export import write_tables
from .figures import draw_all
from .job import Job
from .judge import Verdict, judge
from .partial import PartialRun, join_frequencies
from .progress import Progress, Silent
from .reduced_engine import ReducedEngine, certificate_note, drive_ratios, reduced_factory
from .report import write_report
from .result import Accuracy, Provenance, Result, peak_memory, versions
from .scan_survey import survey_job
from .store import save_result

MET, MISSED, BAD_INPUT, NOT_REACHED, CRASHED, INTERRUPTED = 0, 1, 2, 3, 70, 130
"""Exit codes: all limits met; a limit missed; bad input; tolerance not reached; fault of the program;
Ctrl-C."""

BALANCE_FACTOR = 100.0
"""The power balance may be off by this many times the requested tolerance before a run counts as not
reached."""
RESULT_FILE, REPORT_FILE, FIGURE_FOLDER, PARTIAL_FOLDER = "result.nc", "report.html", "figures", "partial"


@dataclass(frozen=True)
class Outcome:
    """What a run came to. `result` is None after an interruption; `files` are those written."""

    code: int
    result: Result | None
    verdicts: tuple[Verdict, ...] = ()
    files: tuple[Path, ...] = ()
    message: str = ""


def run_case(
    job: Job,
    out_dir: Path,
    *,
    progress: Progress | None = None,
    refine: bool = True,
    engine: EngineFactory = DirectEngine,
) -> Outcome:
    """Solve `job` and write everything into `out_dir`.

    Finished frequencies are kept in ``out_dir/partial`` and used again when the same case is run again;
    they are removed at the end. Ctrl-C ends the run with code 130 and keeps them. With `refine` the
    discretisation error is estimated on another mesh. `engine` makes the solver of a cell (tests replace it).
    """
    out_dir = Path(out_dir)
    out_dir.mkdir(parents=True, exist_ok=True)
    kept = PartialRun(out_dir / PARTIAL_FOLDER, job)
    check_bench(job)
    begun = time.monotonic()
    told: Progress = progress if progress is not None else Silent()
    with told:
        try:
            own = reduced_factory(job, kept, told.say) if job.reduced_error and engine is DirectEngine else engine
            solver = _Lazy(job, own)
            sweep = solve_frequencies(job, solver, kept, told)
            result, shortfall = _surveyed(Result(job, sweep, Accuracy(), Provenance(versions())), solver, told)
            failure = check_sweep(job, result.sweep, result) or shortfall
            if job.breadboard is not None and isinstance(solver.engine, DirectEngine) and not failure:
                result = replace(result, bench=predict_bench(job, solver.engine.solver, told))
                failure = bench_shortfall(result)
            estimate = _estimate(result, solver, told, engine) if refine and not failure else _none(failure)
        except KeyboardInterrupt:
            return _interrupted(job, kept)
        origin = Provenance(versions(), time.monotonic() - begun, peak_memory(), _now())
        result = replace(result, accuracy=estimate, provenance=origin, failure=failure)
        told.say("writing result, tables, figures and report")
        files = write_all(out_dir, result)
        kept.clear()
    verdicts = judge(result)
    return Outcome(exit_code(result, verdicts), result, verdicts, files, failure)


def solve_frequencies(job: Job, solver: _Lazy, kept: PartialRun, told: Progress) -> Sweep:
    """All frequencies of the job, taking finished ones from `kept` and adding new ones to it."""
    points = len(job.scan.points)
    told.start("solving", points * len(job.frequency))
    parts = []
    for f, frequency in enumerate(job.frequency):
        part = kept.load(f)
        if part is None:
            done = f * points
            part = solver.engine.solve(
                float(frequency), job.scan.points, advance=lambda n, _, done=done: told.advance(done + n)
            )
            kept.save(f, part)
        parts.append(part)
        told.advance((f + 1) * points)
    return join_frequencies(parts)


def _surveyed(result: Result, solver: _Lazy, told: Progress) -> tuple[Result, str]:
    """The result with reduced model, certificate and survey of the scan volume where there is such a model, and why
    that model cannot be trusted."""
    if not isinstance(solver.engine, ReducedEngine):
        return result, ""
    model = solver.engine.build()
    certificate = solver.engine.certificate
    assert certificate is not None
    spread = float(np.nanmax(drive_ratios([port.drive for port in result.job.cell.ports])))
    sweep = replace(result.sweep, notes=(*result.sweep.notes, certificate_note(certificate, spread)))
    survey = survey_job(result.job, model, certificate.stated * spread, told)
    result = replace(result, sweep=sweep, certificate=certificate, survey=survey, stored=model)
    return result, "" if certificate.reached else f"the reduced model did not reach its accuracy: {certificate}"


def bench_shortfall(result: Result) -> str:
    """Why the prediction of the breadboard cannot be trusted; empty when it can."""
    bench = result.bench
    if bench is None or bench.certificate.reached:
        return ""
    return f"the prediction of the breadboard did not reach its accuracy: {bench.certificate}"


def check_sweep(job: Job, sweep: Sweep, result: Result) -> str:
    """Why the numbers cannot be trusted, as one sentence that names the place; empty when they can."""
    broken = ~np.isfinite(sweep.scattering).all(axis=(-2, -1)) | ~np.isfinite(sweep.waves).all(axis=(-2, -1))
    if broken.any():
        f, s = np.argwhere(broken)[0]
        return (
            f"the solution is not finite at {broken.sum()} of {broken.size} points, first at "
            f"{_spot(sweep, f, s)}; a wave exactly at grazing does this: move the scan point or the "
            "frequency a little"
        )
    f, s = np.unravel_index(np.argmax(sweep.residual), sweep.residual.shape)
    if sweep.residual[f, s] > job.tolerance:
        return (
            f"the linear solve reached a relative residual of {sweep.residual[f, s]:.1e} only, more than the "
            f"tolerance {job.tolerance:.1e}, at {_spot(sweep, f, s)}"
        )
    off = np.abs(result.response.balance)
    f, s = np.unravel_index(np.argmax(off), off.shape)
    allowed = BALANCE_FACTOR * job.tolerance
    if off[f, s] > allowed:
        return (
            f"the power balance is off by {off[f, s]:.1e} of the available power, more than {allowed:.1e}, "
            f"at {_spot(sweep, f, s)}"
        )
    return ""


def exit_code(result: Result, verdicts: tuple[Verdict, ...]) -> int:
    """3 if the computation cannot be trusted, else 1 if a limit is missed or could not be judged, else 0."""
    if result.failure:
        return NOT_REACHED
    return MET if all(verdict.holds for verdict in verdicts) else MISSED


def write_all(out_dir: Path, result: Result) -> tuple[Path, ...]:
    """Result file, tables, figures and report; the same from a run and from a result file read again."""
    path = out_dir / RESULT_FILE
    save_result(path, result)
    return (path, *write_views(out_dir, result))


def write_views(out_dir: Path, result: Result) -> tuple[Path, ...]:
    """Tables, figures and report."""
    figures = draw_all(result) if not result.failure or np.isfinite(result.sweep.scattering).all() else ()
    folder = out_dir / FIGURE_FOLDER
    folder.mkdir(parents=True, exist_ok=True)
    files = []
    for figure in figures:
        files.append(folder / f"{figure.name}{figure.suffix}")
        files[-1].write_bytes(figure.data)
    report = out_dir / REPORT_FILE
    write_report(report, result, figures)
    board = () if result.bench is None else write_bench(out_dir, result)
    return (*write_tables(out_dir, result), *files, *board, report)


class _Lazy:
    """The engine of the job's own cell, made when first needed: a resumed run may need it for the estimate
    only."""

    def __init__(self, job: Job, factory: EngineFactory):
        self.job, self.factory = job, factory
        self._engine: Engine | None = None

    @property
    def engine(self) -> Engine:
        if self._engine is None:
            self._engine = make_engine(self.job, self.factory)
        return self._engine

    def release(self) -> None:
        """Give the memory back."""
        self._engine = None


def make_engine(job: Job, factory: EngineFactory = DirectEngine) -> Engine:
    """The engine of the job's cell, filled for its whole band and scan."""
    return factory(job.cell, float(job.frequency.max()), job.scan.points, job.tolerance)


def _estimate(result: Result, solver: _Lazy, told: Progress, factory: EngineFactory) -> Accuracy:
    """Error estimate on another mesh, or an empty one with the reason."""
    job = result.job
    own, stored = solver.engine.unknowns, solver.engine.stored_bytes
    solver.release()
    reason = "there is no other mesh to compare with; a mesh file is used as it is"
    for other in accuracy.comparisons(job):
        growth = _elements(other.cell) / _elements(job.cell)
        needed = memory_needed(int(own * growth), stored * growth**2)
        if needed <= 0.7 * memory_free():
            return _compared(result, other, own, told, factory)
        reason = f"another mesh would need about {needed / 1e9:.1f} GB of memory"
    return Accuracy(unknowns=own, note=reason)


def _compared(result: Result, other: accuracy.Comparison, own: int, told: Progress, factory: EngineFactory) -> Accuracy:
    job = result.job
    count = sum(len(points) for points in accuracy.choose_samples(result).values())
    told.start(f"estimating the error on a {other.kind} mesh", count)
    engine = factory(other.cell, float(job.frequency.max()), job.scan.points, job.tolerance)
    done = 0

    def solve(frequency: float, scan: ScanPoints) -> Sweep:
        nonlocal done
        sweep = engine.solve(frequency, scan)
        done += len(scan)
        told.advance(done)
        return sweep

    return accuracy.estimate(result, other, solve, (own, engine.unknowns))


def _elements(cell: UnitCell) -> int:
    return len(cell.mesh.triangles) + len(cell.mesh.segments)


def _none(failure: str) -> Accuracy:
    return Accuracy(note="the computation itself failed" if failure else "not asked for")


def _interrupted(job: Job, kept: PartialRun) -> Outcome:
    count, snapshots = kept.count(), kept.load_snapshots()
    done = f"{count} of {len(job.frequency)} frequencies"
    if snapshots is not None:
        done += f" and {len(snapshots)} full solutions for the reduced model"
    where = f" in {kept.folder}" if count or snapshots is not None else ""
    return Outcome(
        INTERRUPTED,
        None,
        message=f"interrupted: {done} are finished and kept{where}; the same command takes them up again",
    )


def _spot(sweep: Sweep, f: Any, s: Any) -> str:
    return f"{sweep.frequency[f] / 1e9:.6g} GHz, u = {sweep.scan.u[s]:.5g}, v = {sweep.scan.v[s]:.5g}"


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="seconds")
