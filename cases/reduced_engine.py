"""The reduced model as the engine of a run: few full solutions, the rest from their span, with a certified error."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from ..geometry.cell import UnitCell
from ..solver.greedy import Certificate, build_reduced
from ..solver.reduced import ReducedModel
from ..solver.reduced_sweep import reduced_sweep
from ..solver.result import ScanPoints, Sweep
from ..solver.snapshots import Snapshots
from .engine import Advance, DirectEngine
from .job import Job
from .partial import PartialRun

Say = Callable[[str], None]


class ReducedEngine(DirectEngine):
    """`DirectEngine` whose solutions come from a reduced model, made when the first one is asked for.

    Parameters
    ----------
    cell, frequency_max, scan, tolerance : as for `DirectEngine`
    band : lowest and highest frequency, Hz
    error : wanted error of the active reflection
    kept : where finished snapshots are kept, and found again after an interruption
    say : told what is going on
    """

    def __init__(
        self,
        cell: UnitCell,
        frequency_max: float,
        scan: ScanPoints,
        tolerance: float,
        *,
        band: tuple[float, float],
        error: float,
        kept: PartialRun | None = None,
        say: Say = lambda text: None,
    ):
        super().__init__(cell, frequency_max, scan, tolerance)
        self.band, self.error, self.kept, self.say = band, error, kept, say
        self.radius = max(1.0, float(np.hypot(scan.u, scan.v).max()))
        self.model: ReducedModel | None = None
        self.certificate: Certificate | None = None

    def build(self) -> ReducedModel:
        """The model, made at the first call."""
        if self.model is None:
            start = None if self.kept is None else self.kept.load_snapshots()
            self.say("choosing snapshots for the reduced model" + (f" ({len(start)} kept)" if start else ""))
            self.model, self.certificate = build_reduced(
                self.solver,
                self.band,
                error=self.error,
                scan_radius=self.radius,
                start=start,
                on_snapshot=self._keep,
                progress=lambda so_far: self.say(
                    f"reduced model: {so_far.snapshots} snapshots, estimated error {so_far.estimated:.1e}"
                ),
            )
            self.say(f"reduced model: {self.certificate}")
        return self.model

    def _keep(self, snapshots: Snapshots) -> None:
        if self.kept is not None:
            self.kept.save_snapshots(snapshots)

    def solve(
        self,
        frequency: float,
        scan: ScanPoints,
        *,
        advance: Advance | None = None,
        keep_currents: bool = False,
    ) -> Sweep:
        return reduced_sweep(
            self.build(), np.array([frequency]), scan, table=self.table, keep_currents=keep_currents, progress=advance
        )


def reduced_factory(job: Job, kept: PartialRun, say: Say) -> Callable[..., ReducedEngine]:
    """An `EngineFactory` for the job's own cell."""
    band, error = (float(job.frequency[0]), float(job.frequency[-1])), job.reduced_error
    assert error is not None

    def make(cell: UnitCell, frequency_max: float, scan: ScanPoints, tolerance: float) -> ReducedEngine:
        return ReducedEngine(cell, frequency_max, scan, tolerance, band=band, error=error, kept=kept, say=say)

    return make


def drive_ratios(drives: Sequence[complex]) -> NDArray[np.float64]:
    """(n_port,) largest drive amplitude over each port's own, NaN at ports that are not driven: by so much the active
    reflection of a port may err more than the row sums of the scattering matrix, which a certificate bounds."""
    amplitudes = np.abs(np.asarray(drives, dtype=complex))
    return amplitudes.max(initial=0.0) / np.where(amplitudes > 0, amplitudes, np.nan)


def certificate_note(certificate: Certificate, spread: float = 1.0) -> str:
    """The certificate in words, for the report; `spread`: largest of `drive_ratios`."""
    uneven = "" if spread == 1 else f", times {spread:.3g} for the largest drive over the smallest,"
    return (
        f"Answers come from a reduced model of {certificate.snapshots} snapshots ({certificate.full_solutions} full "
        f"solutions in all). Error of the active reflection against the full solution of the same mesh: wanted "
        f"{certificate.wanted:.1e}, estimated {certificate.estimated:.1e}, confirmed {certificate.confirmed:.1e} by "
        f"{len(certificate.errors)} full solutions at held-back points; to be counted with{uneven} "
        f"{certificate.stated * spread:.1e}."
    )
