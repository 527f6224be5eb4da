"""The result file: NetCDF-4 through xarray and h5netcdf, readable by anyone who has only xarray.

Complex numbers are stored as a last axis `part` = "re", "im" because readers disagree about complex types.
The file is written under a temporary name and renamed, so that it is either complete or not there.
"""

from __future__ import annotations

import json
import os
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..geometry.cell import UnitCell
from ..geometry.errors import InputError
from ..geometry.lattice import Lattice
from ..geometry.mesh import Mesh
from ..solver.result import FloquetWaves, ScanPoints, Sweep
from .job import Job, ScanPlan
from .layout import FORMAT, join, to_dataset
from .model_store import to_groups, with_groups
from .record import read_record
from .result import Accuracy, Provenance, Result

if TYPE_CHECKING:
    import xarray


def save_result(path: Path, result: Result) -> None:
    """Write `result` to `path` (NetCDF-4), replacing an older file only when the new one is complete."""
    path = Path(path)
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        to_dataset(result).to_netcdf(temporary, engine="h5netcdf")
        for name, group in to_groups(result).items():
            group.to_netcdf(temporary, engine="h5netcdf", group=name, mode="a")
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def load_result(path: Path) -> Result:
    """Read what `save_result` wrote.

    The job of the result cannot be meshed anew (`remesh` is None).

    Raises
    ------
    InputError
        If the file does not exist, is no NetCDF-4 file, or is not a Scanward result of a known format.
    """
    import xarray

    try:
        data = xarray.load_dataset(path, engine="h5netcdf")
    except (OSError, ValueError, KeyError) as error:
        raise InputError(f"'{path}' cannot be read as a result file: {error}.", where=str(path)) from None
    given = data.attrs.get("scanward_format")
    if given != FORMAT:
        raise InputError(f"result format {given} is not known here.", where=str(path), allowed=f"format {FORMAT}")
    return with_groups(from_dataset(data), path)


def from_dataset(data: xarray.Dataset) -> Result:
    """The result from a data set made by `to_dataset`."""
    attributes = data.attrs
    record = {**read_record(attributes["record"]), "text": str(attributes["case"])}
    value = {str(name): np.asarray(data[name].values) for name in data.variables}
    scan = ScanPoints(value["u"], value["v"], value["phi"])
    table = FloquetWaves(
        np.column_stack([value["wave_p"], value["wave_q"]]), value["wave_side"], value["wave_polarisation"]
    )
    sweep = Sweep(
        frequency=value["frequency"],
        scan=scan,
        reference=value["reference"],
        impedance=join(value["impedance"]),
        scattering=join(value["scattering"]),
        waves=join(value["waves"]),
        wave_table=table,
        loss=join(value["loss_matrix"]),
        loss_names=tuple(str(name) for name in value["absorber"]),
        residual=value["residual"],
        currents=join(value["currents"]) if "currents" in value else None,
        notes=tuple(json.loads(attributes["notes"])),
    )
    accuracy = Accuracy(
        factor=float(attributes["estimated_error_factor"]),
        samples=int(attributes["estimated_error_samples"]),
        reflection=float(attributes["estimated_error_gamma"]),
        impedance=float(attributes["estimated_error_impedance_relative"]),
        errors=json.loads(attributes["estimated_error_of_limits"]),
        unknowns=int(attributes["unknowns"]),
        compared_unknowns=int(attributes["unknowns_compared"]),
        compared=str(attributes["mesh_compared"]),
        note=str(attributes["estimated_error_note"]),
    )
    origin = Provenance(
        versions=json.loads(attributes["versions"]),
        wall_time=float(attributes["wall_time_seconds"]),
        peak_memory=float(attributes["peak_memory_bytes"]),
        created=str(attributes["created"]),
    )
    return Result(_job(value, record, scan), sweep, accuracy, origin, str(attributes["failure"]))


def _job(value: dict[str, Any], record: dict[str, Any], scan: ScanPoints) -> Job:
    keep = value["plane_index"] >= 0
    rows = zip(value["plane_phi"], value["plane_index"], keep, strict=True)
    planes = tuple((float(phi), index[ok]) for phi, index, ok in rows)
    plane_theta = tuple(theta[ok] for theta, ok in zip(value["plane_theta"], keep, strict=True))
    mesh = Mesh(
        points=value["mesh_points"],
        triangles=value["mesh_triangles"],
        triangle_conductor=value["mesh_triangle_conductor"],
        segments=value["mesh_segments"],
        segment_radius=value["mesh_segment_radius"],
        segment_conductor=value["mesh_segment_conductor"],
        names=tuple(record["conductors"]),
        materials=record["materials"],
    )
    lattice = Lattice(*value["lattice"])
    return Job(
        title=record["title"],
        path=None,
        text=record["text"],
        cell=UnitCell(lattice, mesh, record["ports"], record["loads"], bool(record["ground"]), record["stack"]),
        frequency=value["frequency"],
        scan=ScanPlan(scan, planes, plane_theta, value["map_u"], value["map_v"], value["map_index"], record["cone"]),
        limits=record["limits"],
        tolerance=record["tolerance"],
        co_polar=record["co_polar"],
        co_polar_angle=record["co_polar_angle"],
        element_size=record["element_size"],
        remesh=None,
        expect=record["expect"],
        expected_to_fail=bool(record.get("expected_to_fail", False)),
        breadboard=record["breadboard"],
    )
