"""Groups of the result file: the reduced model, its certificate, and the survey of the scan volume."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from ..solver.greedy import Certificate
from ..solver.survey import Blindness, Cause, FreeCone, Peak, ScanMap, Survey
from .layout import join, split
from .result import Result

if TYPE_CHECKING:
    import xarray

MODEL, CERTIFICATE, MAP, BLINDNESS, FREE_CONE = "reduced", "certificate", "map", "blindness", "free_cone"
BENCH = "breadboard"
PEAK_NUMBERS = ("frequency", "u", "v", "port", "width", "radiated", "lobes")


def to_groups(result: Result) -> dict[str, xarray.Dataset]:
    """Data sets by group name; none after a direct run."""
    groups: dict[str, xarray.Dataset] = {}
    if result.stored is not None:
        stored = result.stored
        groups[MODEL] = _model(stored if isinstance(stored, dict) else stored.arrays())
    if result.certificate is not None:
        groups[CERTIFICATE] = _certificate(result.certificate)
    if result.survey is not None:
        groups[MAP] = _map(result.survey)
        groups[BLINDNESS] = _blindness(result.survey.blindnesses, len(result.port_names), result.sweep.loss_names)
        groups[FREE_CONE] = _free_cone(result.survey.free_cone)
    if result.bench is not None:
        from .bench_store import bench_dataset

        groups[BENCH] = bench_dataset(result.bench)
    for data in groups.values():
        for name in data.variables:
            if data[name].size > 4096:
                data[name].encoding = {"zlib": True, "complevel": 4}
    return groups


def with_groups(result: Result, path: Path) -> Result:
    """`result` with what the groups of its file hold."""
    import h5netcdf
    import xarray

    with h5netcdf.File(path, "r") as file:
        names = set(file.groups)
    data = {name: xarray.load_dataset(path, engine="h5netcdf", group=name) for name in names}
    if MODEL in data:
        result = replace(result, stored=_read_model(data[MODEL]))
    if CERTIFICATE in data:
        result = replace(result, certificate=_read_certificate(data[CERTIFICATE]))
    if MAP in data:
        maps, error = _read_map(data[MAP])
        cone = _read_free_cone(data[FREE_CONE])
        result = replace(result, survey=Survey(maps, _read_blindness(data[BLINDNESS]), cone, error))
    if BENCH in data:
        from .bench_store import read_bench

        result = replace(result, bench=read_bench(data[BENCH]))
    return result


def _dataset(variables: dict[str, Any], attributes: dict[str, Any] | None = None) -> xarray.Dataset:
    import xarray

    return xarray.Dataset(variables, attrs=attributes or {})


def _model(arrays: dict[str, NDArray]) -> xarray.Dataset:
    """Every array under its own name; complex ones with the last axis `part`."""
    variables: dict[str, Any] = {}
    for name, array in arrays.items():
        if array.dtype.kind == "U":
            array = array.astype(object)
        axes = tuple(f"{name}_{i}" for i in range(array.ndim))
        is_complex = array.dtype.kind == "c"
        variables[name] = ((*axes, "part"), split(array)) if is_complex else (axes, array)
    return _dataset(variables, {"long_name": "reduced model V^T Z V; complex numbers: last axis part = re, im"})


def _read_model(data: xarray.Dataset) -> dict[str, NDArray]:
    return {str(name): join(one.values) if "part" in one.dims else one.values for name, one in data.data_vars.items()}


def _certificate(certificate: Certificate) -> xarray.Dataset:
    variables = {"points": (("check", "place"), certificate.points), "errors": (("check",), certificate.errors)}
    names = ("wanted", "estimated", "confirmed", "operator")
    attributes: dict[str, Any] = {name: float(getattr(certificate, name)) for name in names}
    attributes |= {name: int(getattr(certificate, name)) for name in ("snapshots", "full_solutions", "reached")}
    attributes["long_name"] = "error of the active reflection; points are frequency (Hz), u, v"
    return _dataset(variables, attributes)


def _read_certificate(data: xarray.Dataset) -> Certificate:
    a = data.attrs
    return Certificate(
        float(a["wanted"]), float(a["estimated"]), float(a["confirmed"]), data["points"].values,
        data["errors"].values, int(a["snapshots"]), int(a["full_solutions"]), float(a["operator"]), bool(a["reached"]),
    )  # fmt: skip


def _map(survey: Survey) -> xarray.Dataset:
    maps, grid = survey.scan_map, ("frequency", "u", "v")
    variables = {
        "reflection": ((*grid, "port", "part"), split(maps.reflection), {"long_name": "active reflection"}),
        "field": (
            (*grid, "component", "part"),
            split(maps.field),
            {"long_name": "theta and phi part of the main wave; squared magnitude is the realised gain"},
        ),
        "solved": (grid, maps.solved.astype(np.int8), {"long_name": "1 solved, 0 interpolated"}),
        "frequency": ("frequency", maps.frequency, {"units": "Hz"}),
        "u": ("u", maps.axis, {"long_name": "sin(theta) cos(phi)"}),
        "v": ("v", maps.axis, {"long_name": "sin(theta) sin(phi)"}),
    }
    return _dataset(variables, {"error_of_reflection": float(survey.error)})


def _read_map(data: xarray.Dataset) -> tuple[ScanMap, float]:
    maps = ScanMap(
        data["frequency"].values, data["u"].values, join(data["reflection"].values), join(data["field"].values),
        data["solved"].values.astype(bool),
    )  # fmt: skip
    return maps, float(data.attrs["error_of_reflection"])


def _blindness(found: tuple[Blindness, ...], ports: int, absorbers: tuple[str, ...]) -> xarray.Dataset:
    rows = [(n, one) for n, blind in enumerate(found) for one in (*blind.peaks, blind.worst)]
    # the last of each blindness is its worst, which may be one of the others too
    last = [i + 1 == len(rows) or rows[i + 1][0] != n for i, (n, _) in enumerate(rows)]
    peaks = [one for _, one in rows]
    count = len(peaks)
    variables: dict[str, Any] = {
        "blindness": ("peak", np.array([n for n, _ in rows], dtype=np.int64)),
        "is_worst": ("peak", np.array(last, dtype=np.int8)),
        "reflection": (("peak", "part"), split(np.array([p.reflection for p in peaks], dtype=complex))),
        "returned": (("peak", "port"), np.array([p.returned for p in peaks], dtype=float).reshape(count, ports)),
        "absorbed": (
            ("peak", "absorber"),
            np.array([p.absorbed for p in peaks], dtype=float).reshape(count, len(absorbers)),
        ),
    }
    for name in PEAK_NUMBERS:
        kind = np.int64 if name == "port" else float
        variables[f"peak_{name}"] = ("peak", np.array([getattr(p, name) for p in peaks], dtype=kind))
    causes = [one.cause for one in found]
    for name in ("kind", "wave"):
        variables[f"cause_{name}"] = ("cause", np.array([getattr(c, name) for c in causes], dtype=object))
    for name in ("index", "expected", "share", "quality"):
        variables[f"cause_{name}"] = ("cause", np.array([getattr(c, name) for c in causes], dtype=float))
    variables["cause_order"] = (("cause", "pq"), np.array([c.order for c in causes], dtype=np.int64).reshape(-1, 2))
    variables["mirrored"] = ("cause", np.array([one.mirrored for one in found], dtype=np.int8))
    return _dataset(variables, {"count": len(found)})


def _read_blindness(data: xarray.Dataset) -> tuple[Blindness, ...]:
    value = {str(name): one.values for name, one in data.data_vars.items()}
    found = []
    for n in range(int(data.attrs["count"])):
        rows = np.flatnonzero(value["blindness"] == n)
        peaks = [_read_peak(value, int(i)) for i in rows]
        numbers = (float(value[f"cause_{name}"][n]) for name in ("index", "expected", "share", "quality"))
        order = tuple(int(x) for x in value["cause_order"][n])
        cause = Cause(str(value["cause_kind"][n]), str(value["cause_wave"][n]), order, *numbers)  # type: ignore[arg-type]
        found.append(Blindness(tuple(peaks[:-1]), peaks[-1], cause, bool(value["mirrored"][n])))
    return tuple(found)


def _read_peak(value: dict[str, NDArray], i: int) -> Peak:
    numbers = {name: value[f"peak_{name}"][i].item() for name in PEAK_NUMBERS}
    reflection = complex(join(value["reflection"][i]))
    return Peak(reflection=reflection, returned=value["returned"][i], absorbed=value["absorbed"][i], **numbers)


def _free_cone(cone: FreeCone) -> xarray.Dataset:
    variables = {
        "theta": (("frequency", "azimuth"), cone.theta, {"units": "rad"}),
        "frequency": ("frequency", cone.frequency, {"units": "Hz"}),
        "azimuth": ("azimuth", cone.azimuth, {"units": "rad"}),
        "by_plane": (("plane", "phi_theta"), np.array(cone.by_plane, dtype=float).reshape(-1, 2), {"units": "rad"}),
        "usable": ("end", np.array(cone.usable or (np.nan, np.nan)), {"units": "Hz"}),
    }
    names = ("level", "cone", "wanted", "gain_drop", "wanted_drop")
    return _dataset(variables, {name: float(getattr(cone, name)) for name in names})


def _read_free_cone(data: xarray.Dataset) -> FreeCone:
    a, usable = data.attrs, data["usable"].values
    return FreeCone(
        float(a["level"]), data["frequency"].values, data["azimuth"].values, data["theta"].values, float(a["cone"]),
        tuple((float(phi), float(theta)) for phi, theta in data["by_plane"].values), float(a["wanted"]),
        None if np.isnan(usable).any() else (float(usable[0]), float(usable[1])), float(a["gain_drop"]),
        float(a["wanted_drop"]),
    )  # fmt: skip
