"""The finite breadboard predicted from the cell: scattering matrix, patterns, edges, how many rows are enough."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from ..solver.active import ActiveModel
from ..solver.array_basis import ArrayCertificate, build_array_model, check_separate
from ..solver.array_sites import Termination, rectangle
from ..solver.basis import build_basis
from ..solver.finite_array import FiniteArray
from ..solver.infinite_coupling import infinite_couplings
from ..solver.pattern import co_cross, decibel
from ..solver.reduced import ReducedModel
from ..solver.result import ScanPoints
from ..solver.sweep import CellSolver
from .guide_plan import GuideRow, guide_plan
from .job import Breadboard, Job
from .progress import Progress
from .quantity import UNITS

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

COUPLING_REACH = 4  # cells in each direction whose infinite-array couplings are listed
PATTERN_STEP = np.radians(2.0)
BUDGET = "reflected, radiated up, radiated down, surface waves, conductors, loads, dummies, rest"


@dataclass(frozen=True)
class SizeRow:
    """Centre element of a square array of `side` by `side` against the infinite array, at the middle frequency.

    `reflection` : largest |difference of its active reflection| over the scan directions looked at; `pattern` : largest
    difference of its embedded co-polar pattern in dB, above -10 dB of its peak and inside the scan cone
    """

    side: int
    reflection: float
    pattern: float


@dataclass(frozen=True)
class Slope:
    """Difference quotient of the scattering matrix between both ends of a parameter's tolerance.

    `unit`: the one shown, in which `nominal`, `tolerance` and `derivative` (n_freq, n_live, n_live) are
    """

    name: str
    unit: str
    nominal: float
    tolerance: float
    derivative: Complexes


@dataclass(frozen=True)
class Bench:
    """Prediction of a finite array; ports in the order of `ports`.

    Attributes
    ----------
    frequency : (n_freq,) Hz
    cells : (n_cell, 2); `dummy` (n_cell,) : whether terminated
    ports : (n_live, 2) of cell index and port index; `reference` (n_live,) ohm
    scattering : (n_freq, n_live, n_live)
    scan : ScanPoints (n_scan) at which the active reflection is told: broadside, and every cut at half and whole cone
    active : (n_freq, n_scan, n_live) active reflection under the case's drive and taper; NaN where not driven
    infinite : (n_freq, n_scan, n_port) of the infinite array
    budget : (8,) where the power goes at broadside, middle frequency, in the order of BUDGET
    centre : index of the live element nearest to the middle
    cut_phi : (n_cut,) rad; `cut_theta` (n_theta,) rad, negative: the opposite half-plane
    finite_pattern, infinite_pattern : (n_cut, n_theta, 2) co- and cross-polar gain in dBi of the centre element's first
        driven port, middle frequency, all others terminated
    array_pattern : (n_scan, n_cut, n_theta) co-polar realised gain in dBi of the whole array at each scan direction
    coupling_cells : (n_lag, 2); `coupling` (n_freq, n_lag, n_port, n_port) of the infinite array;
        `coupling_error` : largest change by the last refinement
    sizes : growing square arrays; `enough` : side from which on the centre stays alike, None where not reached
    guides : plan of waveguide simulators; `guide_note` : why there is none, or what holds for all
    certificate : of the basis
    slopes : how the scattering matrix moves with the case's toleranced parameters
    """

    frequency: Floats
    cells: Ints
    dummy: NDArray[np.bool_]
    ports: Ints
    reference: Floats
    scattering: Complexes
    scan: ScanPoints
    active: Complexes
    infinite: Complexes
    budget: Floats
    centre: int
    cut_phi: Floats
    cut_theta: Floats
    finite_pattern: Floats
    infinite_pattern: Floats
    array_pattern: Floats
    coupling_cells: Ints
    coupling: Complexes
    coupling_error: float
    sizes: tuple[SizeRow, ...]
    enough: int | None
    guides: tuple[GuideRow, ...]
    guide_note: str
    certificate: ArrayCertificate
    slopes: tuple[Slope, ...] = ()


def check_bench(job: Job) -> None:
    """Refuse a breadboard whose elements the cell does not tell apart, before anything is solved."""
    if job.breadboard is not None:
        check_separate(build_basis(job.cell.mesh, job.cell.lattice, ground=job.cell.ground))


def predict_bench(job: Job, solver: CellSolver, told: Progress) -> Bench:
    """Predict `job.breadboard` with a solver filled for the case's band.

    Raises
    ------
    InputError
        For cells whose conductors touch those of the next cell.
    """
    board = job.breadboard
    assert board is not None
    told.say("breadboard: choosing snapshots over the whole Brillouin zone")
    band = (float(board.frequency[0]), float(board.frequency[-1]))
    model, certificate = build_array_model(
        solver, band, error=board.error, progress=lambda so_far: told.say(f"breadboard: {so_far}")
    )
    bench = _Prediction(job, board, model, told).bench(certificate)
    return replace(bench, slopes=_slopes(job, board, told))


SHOWN = {"length": ("mm", 1e3), "angle": ("deg", 180 / np.pi), "frequency": ("GHz", 1e-9)}
"""Unit and factor from SI of the kinds of quantities that are not shown in SI."""


def _slopes(job: Job, board: Breadboard, told: Progress) -> tuple[Slope, ...]:
    """By solving the cell again at both ends of every tolerance, on meshes of their own."""
    found = []
    for one in job.tolerances:
        told.say(f"breadboard: both ends of the tolerance of {one.name}")
        ends = []
        for sign in (1, -1):
            text = f"{one.nominal + sign * one.value!r} {UNITS[one.kind]}".strip()
            varied: Job = job.vary({one.name: text})  # type: ignore[operator]
            ends.append(_scattering(varied, board))
        unit, factor = SHOWN.get(one.kind, (UNITS[one.kind], 1.0))
        tolerance = one.value * factor
        found.append(Slope(one.name, unit, one.nominal * factor, tolerance, (ends[0] - ends[1]) / (2 * tolerance)))
    return tuple(found)


def _scattering(job: Job, board: Breadboard) -> Complexes:
    """Scattering matrices (n_freq, n_live, n_live) of the array of another cell."""
    frequency = board.frequency
    solver = CellSolver(job.cell, float(frequency[-1]), job.tolerance)
    model, _ = build_array_model(solver, (float(frequency[0]), float(frequency[-1])), error=board.error)
    ends: dict[int | tuple[int, int], Termination] = {int(s): board.termination for s in np.flatnonzero(board.dummy)}
    return np.array([FiniteArray(model, float(hertz), board.cells, ends).scattering() for hertz in frequency])


class _Prediction:
    """The steps of a prediction, sharing model and directions."""

    def __init__(self, job: Job, board: Breadboard, model: ReducedModel, told: Progress):
        self.job, self.board, self.model, self.told = job, board, model, told
        self.drive = np.array([port.drive for port in job.cell.ports])
        self.driven = int(np.flatnonzero(self.drive)[0])
        self.active = ActiveModel(model, self.drive)
        planes = [phi for phi, _ in job.scan.planes][:4] or [0.0, 0.5 * np.pi]
        theta = [0.0, *(t for _ in planes for t in (0.5 * job.scan.cone, job.scan.cone))]
        phi = [0.0, *(p for p in planes for _ in range(2))]
        self.scan = ScanPoints.from_angles(np.array(theta), np.array(phi))
        self.planes = np.array(planes)
        reach = np.radians(80)
        self.theta = np.arange(-reach, reach + 1e-9, PATTERN_STEP)
        self.middle = float(board.frequency[len(board.frequency) // 2])

    def bench(self, certificate: ArrayCertificate) -> Bench:
        board, frequency = self.board, self.board.frequency
        self.told.start("solving the breadboard", len(frequency))
        arrays, scattering, active, infinite, coupling, error = {}, [], [], [], [], 0.0
        lags = _lags(COUPLING_REACH)
        for f, hertz in enumerate(frequency):
            array = self._array(board.cells, board.dummy, float(hertz))
            scattering.append(array.scattering())
            active.append([self._active(array, s) for s in range(len(self.scan))])
            infinite.append(self.active.reflection(float(hertz), np.column_stack([self.scan.u, self.scan.v])))
            found = infinite_couplings(self.model, float(hertz), lags)
            coupling.append(found.scattering)
            error = max(error, found.error)
            arrays[float(hertz)] = array
            self.told.advance(f + 1)
        array = arrays[self.middle]
        centre = _centre(array)
        finite, ideal = self._centre_patterns(array, centre)
        budget = array.power_budget(self._excitation(array, 0))
        sizes = self._sizes()
        enough = _enough(sizes, board.alike)
        guides, note = guide_plan(self.job, self.active, frequency)
        shares = (
            budget.reflected, *budget.radiated, budget.surface_waves, budget.conductors, budget.loads,
            budget.terminations, budget.rest,
        )  # fmt: skip
        return Bench(
            frequency, board.cells, board.dummy, array.ports, array.reference, np.array(scattering), self.scan,
            np.array(active), np.array(infinite), np.array(shares), centre, self.planes, self.theta, finite, ideal,
            self._array_patterns(array), lags, np.array(coupling), error, sizes, enough, guides, note, certificate,
        )  # fmt: skip

    def _array(self, cells: Ints, dummy: NDArray[np.bool_], frequency: float) -> FiniteArray:
        ends: dict[int | tuple[int, int], Termination] = {
            int(site): self.board.termination for site in np.flatnonzero(dummy)
        }
        return FiniteArray(self.model, frequency, cells, ends)

    def _excitation(self, array: FiniteArray, s: int, taper: Floats | None = None) -> Complexes:
        taper = self.board.taper if taper is None else taper
        return array.scan_excitation(float(self.scan.u[s]), float(self.scan.v[s]), taper)

    def _active(self, array: FiniteArray, s: int) -> Complexes:
        """Active reflection (n_live,) from the scattering matrix; NaN where a port is not driven."""
        a = self._excitation(array, s)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(a != 0, (array.scattering() @ a) / a, np.nan)

    def _directions(self, phi: float) -> ScanPoints:
        theta, turn = np.abs(self.theta), np.where(self.theta >= 0, phi, phi + np.pi)
        return ScanPoints.from_angles(theta, turn)

    def _co_cross(self, field: Complexes, directions: ScanPoints) -> Floats:
        """(..., n_theta, 2) dBi from theta and phi amplitudes."""
        parts = co_cross(field, directions.phi, self.job.co_polar, self.job.co_polar_angle)
        return np.stack([decibel(np.abs(part) ** 2) for part in parts], axis=-1)

    def _centre_patterns(self, array: FiniteArray, centre: int) -> tuple[Floats, Floats]:
        """Embedded patterns of the centre element in the finite and the infinite array, (n_cut, n_theta, 2)."""
        port = int(np.flatnonzero((array.ports == [centre, self.driven]).all(axis=1))[0])
        unit = np.zeros(len(array.ports), dtype=complex)
        unit[port] = 1.0
        alone = ActiveModel(self.model, np.eye(len(self.drive))[self.driven])
        finite, ideal = [], []
        for phi in self.planes:
            directions = self._directions(float(phi))
            finite.append(self._co_cross(array.pattern(unit, directions), directions))
            uv = np.column_stack([directions.u, directions.v])
            ideal.append(self._co_cross(_with_azimuth(alone, array.frequency, uv), _from_uv(directions)))
        return np.array(finite), np.array(ideal)

    def _array_patterns(self, array: FiniteArray) -> Floats:
        """Co-polar realised gain (n_scan, n_cut, n_theta) in dBi."""
        rows = []
        for s in range(len(self.scan)):
            a, cuts = self._excitation(array, s), []
            for phi in self.planes:
                directions = self._directions(float(phi))
                cuts.append(self._co_cross(array.pattern(a, directions), directions)[:, 0])
            rows.append(cuts)
        return np.array(rows)

    def _sizes(self) -> tuple[SizeRow, ...]:
        """Square arrays of odd side, uniform and without dummies."""
        sides = [side for side in range(3, self.board.largest + 1, 2)]
        self.told.start("trying sizes of the array", len(sides))
        ideal = self.active.reflection(self.middle, np.column_stack([self.scan.u, self.scan.v]))[:, self.driven]
        rows = []
        for n, side in enumerate(sides):
            array = FiniteArray(self.model, self.middle, rectangle(side, side))
            centre = _centre(array)
            port = int(np.flatnonzero((array.ports == [centre, self.driven]).all(axis=1))[0])
            uniform = np.ones(side * side)
            found = [array.active_reflection(self._excitation(array, s, uniform))[port] for s in range(len(self.scan))]
            finite, infinite = self._centre_patterns(array, centre)
            co, cone = finite[..., 0], np.abs(self.theta) <= self.job.scan.cone + 1e-9
            high = (infinite[..., 0] > np.nanmax(infinite[..., 0]) - 10) & cone
            worst = float(np.abs(co - infinite[..., 0])[high].max()) if high.any() else np.nan
            rows.append(SizeRow(side, float(np.abs(np.array(found) - ideal).max()), worst))
            self.told.advance(n + 1)
        return tuple(rows)


def _with_azimuth(active: ActiveModel, frequency: float, uv: Floats) -> Complexes:
    return active.reflection_and_field(frequency, uv)[1]


def _from_uv(directions: ScanPoints) -> ScanPoints:
    return ScanPoints.from_cosines(directions.u, directions.v)


def _lags(reach: int) -> Ints:
    """Cells of half a square about the home cell, nearest first by rings: the other half follows by reciprocity."""
    side = np.arange(-reach, reach + 1)
    cells = np.stack(np.meshgrid(side, side, indexing="ij"), -1).reshape(-1, 2)
    return cells[np.argsort(np.abs(cells).max(axis=1), kind="stable")]


def _centre(array: FiniteArray) -> int:
    """Index of the live element nearest to the middle of the array."""
    live = np.unique(array.ports[:, 0])
    middle = array.positions.mean(axis=0)
    return int(live[np.argmin(np.linalg.norm(array.positions[live] - middle, axis=1))])


def _enough(sizes: tuple[SizeRow, ...], alike: float) -> int | None:
    """Least side from which on the centre's reflection stays within `alike` of the infinite array's."""
    good = [row.reflection <= alike for row in sizes]
    for i, row in enumerate(sizes):
        if all(good[i:]):
            return row.side
    return None
