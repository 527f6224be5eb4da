"""Macro basis of finite arrays: currents of the infinite array over the whole Brillouin zone.

One driven element among matched or shorted ones carries the average of the Floquet currents over the zone (B. A. Munk,
G. A. Burrell, IEEE Trans. Antennas Propag. 27, 331, 1979; from memory), so snapshots that reach into invisible space as
far as the zone's corner span the currents of any arrangement of the same elements: edges, gaps in the lattice, the
element alone. How many are needed is measured on small arrays, in which edges are everything: the isolated element,
pairs, and three by three, whose scattering parameters must stand still while the basis grows.

Measured against brute force (isolated, 1 x 2, 3 x 3, sparse sites; one frequency): dipoles 6e-7 in S with 8 snapshots;
a probe-fed patch 5e-6 with 11, 2e-6 with 14. Snapshots of isolated elements bring nothing that these lack.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError
from .basis import Basis
from .lag_coupling import lag_couplings
from .mode_transforms import BrillouinZone
from .network import port_response
from .reduced import ReducedModel
from .reduced_build import ReducedBuilder
from .snapshots import take_snapshot
from .sweep import CellSolver, wavenumber
from .training import Training, training_points

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]

FIRST = 8  # snapshots before the first estimate
AT_ONCE = 3  # snapshots added in one step
OPERATOR_SHARE = 1e-2  # of the wanted error, for the sampling of the operator
PROBES: tuple[tuple[tuple[int, int], ...], ...] = (
    ((0, 0),),
    ((0, 0), (1, 0)),
    ((0, 0), (0, 1)),
    tuple((p, q) for p in range(3) for q in range(3)),
)


@dataclass(frozen=True)
class ArrayCertificate:
    """What is known about the basis' error in scattering parameters of finite arrays.

    Attributes
    ----------
    wanted : requested error of every |S|
    estimated : largest change of any S of the small probe arrays by the newest snapshots; it is the error of the basis
        without them, that of the whole basis is smaller
    snapshots : full solutions spent; `size` : dimension r of the basis
    operator : relative error of the reduced operator between its samples
    """

    wanted: float
    estimated: float
    snapshots: int
    size: int
    operator: float

    @property
    def reached(self) -> bool:
        """Whether the estimate meets the wanted error."""
        return self.estimated <= self.wanted

    def __str__(self) -> str:
        verdict = "reached" if self.reached else "NOT reached"
        return (
            f"finite arrays: wanted |dS| {self.wanted:.1e} {verdict}, estimated {self.estimated:.1e} with "
            f"{self.snapshots} snapshots, {self.size} currents"
        )


def build_array_model(
    solver: CellSolver,
    band: tuple[float, float],
    *,
    error: float = 1e-4,
    limit: int = 48,
    progress: Callable[[ArrayCertificate], None] | None = None,
) -> tuple[ReducedModel, ArrayCertificate]:
    """Reduced model whose basis serves arrays of any lattice sites (`finite_array.FiniteArray`).

    Parameters
    ----------
    solver : CellSolver filled for at least the highest frequency, of a cell with at least one port
    band : lowest and highest frequency, Hz; equal for one frequency, where 8 to 14 snapshots do
    error : wanted error of every scattering parameter
    limit : full solutions at most
    progress : called after every estimate

    Returns
    -------
    The model and its certificate; `ArrayCertificate.reached` is False where `limit` came first.
    """
    builder = ReducedBuilder(solver, band)
    check_separate(solver.operator.basis)
    points = _points_of_zone(solver, band).spread(limit)
    checked = np.unique([band[0], 0.5 * (band[0] + band[1]), band[1]])
    used, refined = 0, False
    while True:
        count = FIRST - AT_ONCE if not used else AT_ONCE
        for point in points[used : used + count]:
            builder.extend(take_snapshot(solver, *(float(x) for x in point)))
        used = min(used + count, len(points))
        if used < min(FIRST, len(points)):
            continue
        model = builder.model(None if refined else max(OPERATOR_SHARE * error, 0.3 * solver.operator.tolerance))
        refined = True
        smaller = builder.ends[-1 - min(AT_ONCE, len(builder.ends) - 1)]
        estimate = max(probe_change(model, float(hertz), smaller) for hertz in checked)
        certificate = ArrayCertificate(error, estimate, used, model.size, builder.operator_error)
        if progress:
            progress(certificate)
        if certificate.reached or used >= len(points):
            return model, certificate


def check_separate(basis: Basis) -> None:
    """Refuse conductors that run on into the next cell.

    Raises
    ------
    InputError
        For a connected array: where it ends the cell does not say.
    """
    if any(shift.any() for shift in (basis.triangle_shift, basis.segment_shift, basis.fan_shift)):
        raise InputError(
            "conductors of neighbouring cells touch, so the cell does not say how the array ends at its rim.",
            where="finite array",
            allowed="cells whose conductors do not meet those of the next cell",
            hint="Leave a gap between neighbouring elements, or use the infinite array only.",
        )


def _points_of_zone(solver: CellSolver, band: tuple[float, float]) -> Training:
    """Training points within the Brillouin zone."""
    zone = BrillouinZone(solver.operator.lattice)
    radius = float(np.linalg.norm(zone.box)) / wavenumber(band[0])
    points = training_points(solver.cell, band, radius).points
    kt = points[:, 1:] * wavenumber(1.0) * points[:, :1]
    reduced, _ = zone.reduce(kt)
    return Training(points[np.linalg.norm(reduced - kt, axis=1) < 1e-9 * np.linalg.norm(zone.box)])


def basis_error(model: ReducedModel, frequency: float) -> float:
    """Estimated error of S in finite arrays of any reduced model: what its newest snapshots change in the probe arrays.

    Models trained for scan maps in visible space serve too (measured: 2e-6 in S for a patch, model of error 1e-3). NaN
    for a model of one step.
    """
    return probe_change(model, frequency, model.ends[-2]) if len(model.ends) > 1 else float("nan")


def probe_change(model: ReducedModel, frequency: float, smaller: int) -> float:
    """Largest |change of S| of the probe arrays when only the first `smaller` basis vectors are kept."""
    offsets = np.stack(np.meshgrid(np.arange(-2, 3), np.arange(-2, 3), indexing="ij"), -1).reshape(-1, 2)
    lags = lag_couplings(model, frequency, offsets).reshape(5, 5, model.size, model.size)
    return max(
        float(np.abs(_probe(model, lags, probe, model.size) - _probe(model, lags, probe, smaller)).max())
        for probe in PROBES
    )


def _probe(model: ReducedModel, lags: Complexes, probe: tuple[tuple[int, int], ...], r: int) -> Complexes:
    """S of one small array with the first r basis vectors."""
    sites, n = np.array(probe), len(probe)
    first, second = (sites[None] - sites[:, None] + 2).transpose(2, 0, 1)
    system = lags[first, second][:, :, :r, :r].transpose(0, 2, 1, 3).reshape(n * r, n * r)
    drive = np.kron(np.eye(n), model.ports.excitation(np.zeros((1, 2)))[0, :r])
    admittance = drive.T @ np.linalg.solve(system, drive)
    return port_response(admittance, np.tile(model.reference, n)).scattering
