"""How a result is laid out in the result file: names, axes, units and attributes."""

from __future__ import annotations

import json
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ..geometry.cell import UnitCell
from ..solver.pattern import axial_ratio, decibel, embedded_patterns
from .job import ScanPlan
from .record import job_record
from .result import CONVENTIONS, Result

if TYPE_CHECKING:
    import xarray

FORMAT = 1
WAVE_AXES = ("frequency", "scan", "wave", "port_in", "part")


def to_dataset(result: Result) -> xarray.Dataset:
    """The labelled data set that goes into the file."""
    import xarray

    variables = {**_matrices(result), **_derived(result), **_plan(result.job.scan), **_mesh(result.job.cell)}
    coordinates = _coordinates(result)
    data = xarray.Dataset(
        {name: (axes, values, attributes) for name, (axes, values, attributes) in variables.items()},
        coords={name: (axes, values, attributes) for name, (axes, values, attributes) in coordinates.items()},
        attrs=_attributes(result),
    )
    for name in data.variables:
        data[name].encoding = {"zlib": True, "complevel": 4} if data[name].size > 4096 else {}
    return data


def split(values: NDArray[np.complex128]) -> NDArray[np.float64]:
    """Complex (...) -> real (..., 2)."""
    values = np.asarray(values, dtype=complex)
    return np.stack([values.real, values.imag], axis=-1)


def join(values: NDArray[np.float64]) -> NDArray[np.complex128]:
    """Real (..., 2) -> complex (...)."""
    return np.asarray(values)[..., 0] + 1j * np.asarray(values)[..., 1]


def _coordinates(result: Result) -> dict[str, Any]:
    sweep, scan, table = result.sweep, result.sweep.scan, result.sweep.wave_table
    orders = result.response.orders
    names = np.array(result.port_names, dtype=object)
    angle, plain = {"units": "rad"}, {}
    return {
        "frequency": ("frequency", sweep.frequency, {"units": "Hz"}),
        "scan": ("scan", np.arange(len(scan)), {"long_name": "index of the scan point"}),
        "u": ("scan", scan.u, {"units": "1", "long_name": "direction cosine sin(theta) cos(phi)"}),
        "v": ("scan", scan.v, {"units": "1", "long_name": "direction cosine sin(theta) sin(phi)"}),
        "theta": ("scan", scan.theta, {**angle, "long_name": "angle from broadside; NaN in invisible space"}),
        "phi": ("scan", scan.phi, {**angle, "long_name": "azimuth from x"}),
        "port": ("port", names, plain),
        "port_in": ("port_in", names, plain),
        "part": ("part", np.array(["re", "im"], dtype=object), plain),
        "absorber": ("absorber", np.array(sweep.loss_names, dtype=object), plain),
        "wave_p": ("wave", table.order[:, 0], plain),
        "wave_q": ("wave", table.order[:, 1], plain),
        "wave_side": ("wave", table.side, {"long_name": "+1 up (z > 0), -1 down"}),
        "wave_polarisation": ("wave", table.polarisation, {"long_name": "0 theta (TM), 1 phi (TE)"}),
        "order_p": ("order", orders[:, 0], plain),
        "order_q": ("order", orders[:, 1], plain),
        "order_side": ("order", orders[:, 2], {"long_name": "+1 up (z > 0), -1 down"}),
    }


def _matrices(result: Result) -> dict[str, Any]:
    sweep = result.sweep
    matrix = ("frequency", "scan", "port", "port_in", "part")
    variables: dict[str, Any] = {
        "impedance": (matrix, split(sweep.impedance), {"units": "ohm", "long_name": "active matrix"}),
        "scattering": (matrix, split(sweep.scattering), {"long_name": "active matrix, power waves"}),
        "waves": (WAVE_AXES, split(sweep.waves), {"long_name": "outgoing Floquet waves per incident wave"}),
        "loss_matrix": (
            ("frequency", "scan", "absorber", "port", "port_in", "part"),
            split(sweep.loss),
            {"long_name": "absorbed power is a^H M a for incident waves a"},
        ),
        "residual": (("frequency", "scan"), sweep.residual, {"long_name": "relative residual of the solve"}),
        "reference": ("port", sweep.reference, {"units": "ohm", "long_name": "reference resistance"}),
        "drive": (("port", "part"), split(result.response.drive), {"long_name": "incident power waves"}),
    }
    if sweep.currents is not None:
        axes = ("frequency", "scan", "basis", "port_in", "part")
        variables["currents"] = (axes, split(sweep.currents), {"units": "A W^-1/2"})
    return variables


def _derived(result: Result) -> dict[str, Any]:
    response, grid = result.response, ("frequency", "scan")
    ports = (*grid, "port", "part")
    co, cross = result.co_cross_gain
    embedded = split(embedded_patterns(result.sweep, result.job.cell.lattice.area))
    dbi = {"units": "dBi"}
    pattern = {"long_name": "embedded element pattern, amplitude; squared magnitude is the realised gain"}
    available = "over available power"
    return {
        "reflection": (ports, split(response.reflection), {"long_name": "active, under the case's drive"}),
        "gain_co": (grid, co, {**dbi, "long_name": "co-polar realised gain under the case's drive"}),
        "gain_cross": (grid, cross, {**dbi, "long_name": "cross-polar realised gain"}),
        "gain_ceiling": (grid, decibel(response.ceiling), {**dbi, "long_name": "ideal cell"}),
        "axial_ratio": (grid, 2 * decibel(axial_ratio(response.field)), {"units": "dB"}),
        "embedded_theta": (ports, embedded[..., 0, :], pattern),
        "embedded_phi": (ports, embedded[..., 1, :], pattern),
        "loss": ((*grid, "absorber"), response.absorbed, {"long_name": f"absorbed {available}"}),
        "floquet_power": ((*grid, "order"), response.radiated, {"long_name": f"radiated {available}"}),
        "power_balance": (grid, response.balance, {"long_name": "1 - reflected - radiated - absorbed"}),
    }


def _plan(plan: ScanPlan) -> dict[str, Any]:
    longest = max((len(theta) for theta in plan.plane_theta), default=0)
    index = np.full((len(plan.planes), longest), -1, dtype=np.int64)
    theta = np.full((len(plan.planes), longest), np.nan)
    for row, ((_, points), angles) in enumerate(zip(plan.planes, plan.plane_theta, strict=True)):
        index[row, : len(points)] = points
        theta[row, : len(angles)] = angles
    phi = np.array([phi for phi, _ in plan.planes], dtype=float)
    return {
        "plane_phi": ("plane", phi, {"units": "rad"}),
        "plane_index": (("plane", "plane_point"), index, {"long_name": "scan index, -1: none"}),
        "plane_theta": (("plane", "plane_point"), theta, {"units": "rad", "long_name": "signed scan angle"}),
        "map_u": ("map_column", np.asarray(plan.map_u, dtype=float), {}),
        "map_v": ("map_row", np.asarray(plan.map_v, dtype=float), {}),
        "map_index": (
            ("map_column", "map_row"),
            np.asarray(plan.map_index, dtype=np.int64).reshape(len(plan.map_u), len(plan.map_v)),
            {"long_name": "scan index at (map_u, map_v), -1 outside the cone"},
        ),
    }


def _mesh(cell: UnitCell) -> dict[str, Any]:
    mesh, metre = cell.mesh, {"units": "m"}
    return {
        "lattice": (("lattice_vector", "xy"), cell.lattice.vectors, metre),
        "mesh_points": (("mesh_point", "xyz"), mesh.points, metre),
        "mesh_triangles": (("triangle", "corner"), mesh.triangles.reshape(-1, 3), {}),
        "mesh_triangle_conductor": ("triangle", mesh.triangle_conductor, {}),
        "mesh_segments": (("segment", "end"), mesh.segments.reshape(-1, 2), {}),
        "mesh_segment_radius": ("segment", mesh.segment_radius, metre),
        "mesh_segment_conductor": ("segment", mesh.segment_conductor, {}),
    }


def _attributes(result: Result) -> dict[str, Any]:
    job, accuracy, origin = result.job, result.accuracy, result.provenance
    return {
        "title": job.title,
        "scanward_format": FORMAT,
        **CONVENTIONS,
        "tolerance": job.tolerance,
        "co_polarisation": f"{job.co_polar}, reference axis {np.degrees(job.co_polar_angle):g} deg from x",
        "estimated_error_gamma": float(accuracy.reflection),
        "estimated_error_impedance_relative": float(accuracy.impedance),
        "estimated_error_of_limits": json.dumps(accuracy.errors),
        "estimated_error_factor": float(accuracy.factor),
        "estimated_error_samples": int(accuracy.samples),
        "estimated_error_note": accuracy.note,
        "unknowns": int(accuracy.unknowns),
        "unknowns_compared": int(accuracy.compared_unknowns),
        "mesh_compared": accuracy.compared,
        "failure": result.failure,
        "case": job.text,
        "record": job_record(job),
        "notes": json.dumps(list(result.sweep.notes)),
        "versions": json.dumps(origin.versions),
        "wall_time_seconds": float(origin.wall_time),
        "peak_memory_bytes": float(origin.peak_memory),
        "created": origin.created,
    }
