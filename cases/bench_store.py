"""The group "breadboard" of the result file, and the Touchstone file of the whole array."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..geometry.errors import InputError
from ..solver.array_basis import ArrayCertificate
from ..solver.result import ScanPoints
from .bench import BUDGET, Bench, SizeRow, Slope
from .export import write_csv
from .guide_plan import GuideRow
from .layout import join, split
from .prediction import CutPattern, InfinitePrediction, Prediction, Sensitivity
from .result import Result
from .touchstone import write_network

if TYPE_CHECKING:
    import xarray

FILE, MAP_FILE = "breadboard", "breadboard-ports.csv"
STEPS = 12  # scan angles of a comparison from broadside to the cone's edge
GUIDE_NUMBERS = ("frequency", "width", "height", "across", "theta", "phi", "level", "single")


def bench_dataset(bench: Bench) -> xarray.Dataset:
    """Labelled data set; complex numbers with the last axis `part`."""
    import xarray

    guides = np.array([[float(getattr(g, name)) for name in GUIDE_NUMBERS] for g in bench.guides], dtype=float)
    variables: dict[str, Any] = {
        "frequency": ("frequency", bench.frequency, {"units": "Hz"}),
        "cells": (("cell", "mn"), bench.cells, {"long_name": "element at m a + n b"}),
        "dummy": ("cell", bench.dummy.astype(np.int8), {"long_name": "1: terminated, not led out"}),
        "ports": (("port", "cell_and_port"), bench.ports, {"long_name": "cell index, port index"}),
        "reference": ("port", bench.reference, {"units": "ohm"}),
        "scattering": (("frequency", "port", "port_in", "part"), split(bench.scattering)),
        "scan_u": ("scan", bench.scan.u),
        "scan_v": ("scan", bench.scan.v),
        "scan_phi": ("scan", bench.scan.phi, {"units": "rad"}),
        "active_reflection": (("frequency", "scan", "port", "part"), split(bench.active)),
        "infinite_reflection": (("frequency", "scan", "cell_port", "part"), split(bench.infinite)),
        "budget": ("share", bench.budget, {"long_name": BUDGET}),
        "cut_phi": ("cut", bench.cut_phi, {"units": "rad"}),
        "cut_theta": ("angle", bench.cut_theta, {"units": "rad"}),
        "centre_pattern": (("cut", "angle", "co_cross"), bench.finite_pattern, {"units": "dBi"}),
        "infinite_pattern": (("cut", "angle", "co_cross"), bench.infinite_pattern, {"units": "dBi"}),
        "array_pattern": (("scan", "cut", "angle"), bench.array_pattern, {"units": "dBi"}),
        "coupling_cells": (("lag", "mn"), bench.coupling_cells),
        "coupling": (("frequency", "lag", "cell_port", "cell_port_in", "part"), split(bench.coupling)),
        "size_side": ("size", np.array([row.side for row in bench.sizes], dtype=np.int64)),
        "size_reflection": ("size", np.array([row.reflection for row in bench.sizes], dtype=float)),
        "size_pattern": ("size", np.array([row.pattern for row in bench.sizes], dtype=float), {"units": "dB"}),
        "guides": (("guide", "number"), guides.reshape(-1, len(GUIDE_NUMBERS))),
    }
    if bench.slopes:
        slopes = np.stack([split(one.derivative) for one in bench.slopes])
        variables["slope"] = (("parameter", "frequency", "port", "port_in", "part"), slopes)
        for name in ("name", "unit"):
            variables[f"slope_{name}"] = ("parameter", np.array([getattr(s, name) for s in bench.slopes], dtype=object))
        for name in ("nominal", "tolerance"):
            variables[f"slope_{name}"] = ("parameter", np.array([getattr(s, name) for s in bench.slopes]))
    attributes = {
        "centre": bench.centre,
        "enough": bench.enough or 0,
        "coupling_error": bench.coupling_error,
        "guide_note": bench.guide_note,
        "guide_numbers": ", ".join(GUIDE_NUMBERS),
        **{f"certificate_{name}": value for name, value in asdict(bench.certificate).items()},
    }
    return xarray.Dataset(variables, attrs=attributes)


def read_bench(data: xarray.Dataset) -> Bench:
    """What `bench_dataset` wrote."""
    value = {str(name): one.values for name, one in data.variables.items()}
    a = data.attrs
    certificate = ArrayCertificate(
        float(a["certificate_wanted"]), float(a["certificate_estimated"]), int(a["certificate_snapshots"]),
        int(a["certificate_size"]), float(a["certificate_operator"]),
    )  # fmt: skip
    sizes = zip(value["size_side"], value["size_reflection"], value["size_pattern"], strict=True)
    return Bench(
        frequency=value["frequency"],
        cells=value["cells"],
        dummy=value["dummy"].astype(bool),
        ports=value["ports"],
        reference=value["reference"],
        scattering=join(value["scattering"]),
        scan=ScanPoints(value["scan_u"], value["scan_v"], value["scan_phi"]),
        active=join(value["active_reflection"]),
        infinite=join(value["infinite_reflection"]),
        budget=value["budget"],
        centre=int(a["centre"]),
        cut_phi=value["cut_phi"],
        cut_theta=value["cut_theta"],
        finite_pattern=value["centre_pattern"],
        infinite_pattern=value["infinite_pattern"],
        array_pattern=value["array_pattern"],
        coupling_cells=value["coupling_cells"],
        coupling=join(value["coupling"]),
        coupling_error=float(a["coupling_error"]),
        sizes=tuple(SizeRow(int(side), float(r), float(p)) for side, r, p in sizes),
        enough=int(a["enough"]) or None,
        guides=tuple(_guide(row) for row in value["guides"]),
        guide_note=str(a["guide_note"]),
        certificate=certificate,
        slopes=_read_slopes(value),
    )


def _read_slopes(value: dict[str, np.ndarray]) -> tuple[Slope, ...]:
    if "slope" not in value:
        return ()
    rows = zip(value["slope_name"], value["slope_unit"], value["slope_nominal"], value["slope_tolerance"], strict=True)
    return tuple(
        Slope(str(name), str(unit), float(nominal), float(tolerance), join(value["slope"][n]))
        for n, (name, unit, nominal, tolerance) in enumerate(rows)
    )


def _guide(row: np.ndarray) -> GuideRow:
    frequency, width, height, across, theta, phi, level, single = (float(x) for x in row)
    return GuideRow(frequency, width, height, across, theta, phi, level, bool(single))


def write_bench(folder: Path, result: Result) -> tuple[Path, ...]:
    """``breadboard.sNp`` of all live ports, and the map of its ports to elements, as `compare` reads it."""
    bench = result.bench
    assert bench is not None
    path = Path(folder) / f"{FILE}.s{len(bench.ports)}p"
    names = result.port_names
    head = f"Predicted by Scanward: {result.job.title}. Port order: {MAP_FILE}."
    write_network(path, bench.frequency, bench.scattering, bench.reference, head)
    rows: list[list[object]] = [["measured port", "row", "column", "port"]]
    for n, (cell, port) in enumerate(bench.ports, start=1):
        rows.append([n, int(bench.cells[cell, 1]), int(bench.cells[cell, 0]), names[port]])
    write_csv(Path(folder) / MAP_FILE, rows)
    return path, Path(folder) / MAP_FILE


def prediction_of(path: Path) -> Prediction:
    """From a result file or its folder, or a file that holds nothing but a prediction.

    Raises
    ------
    InputError
        If the file cannot be read, or is the result of a case without `[breadboard]`.
    """
    from .prediction_store import is_prediction, load_prediction
    from .store import load_result

    path = Path(path) / "result.nc" if Path(path).is_dir() else Path(path)
    if is_prediction(path):
        return load_prediction(path)
    result = load_result(path)
    if result.bench is None:
        raise InputError(
            "this result predicts no finite array.",
            where=str(path),
            allowed="results of cases with [breadboard]",
            hint="Add [breadboard] with rows and columns to the case and run it again.",
        )
    return to_prediction(result)


def to_prediction(result: Result) -> Prediction:
    """What measured data are compared with."""
    bench, job = result.bench, result.job
    assert bench is not None
    names, ports = result.port_names, bench.ports
    drive = np.array([port.drive for port in job.cell.ports])
    directions, matrices = _infinite(result)
    infinite = InfinitePrediction(directions, matrices, names, bench.coupling_cells, bench.coupling)
    first = int(np.flatnonzero(drive)[0])
    column, row = (int(x) for x in bench.cells[bench.centre])
    middle = float(bench.frequency[len(bench.frequency) // 2])
    patterns = tuple(
        CutPattern(
            middle, (column, row), names[first], float(phi), bench.cut_theta, bench.finite_pattern[c, :, 0],
            bench.finite_pattern[c, :, 1], bench.infinite_pattern[c, :, 0], bench.infinite_pattern[c, :, 1],
        )
        for c, phi in enumerate(bench.cut_phi)
    )  # fmt: skip
    return Prediction(
        frequency=bench.frequency,
        cells=bench.cells[ports[:, 0]],
        ports=tuple(names[p] for p in ports[:, 1]),
        scattering=bench.scattering,
        reference=bench.reference,
        lattice=job.cell.lattice,
        error=bench.certificate.estimated,
        drive=drive[ports[:, 1]].astype(complex),
        infinite=infinite,
        sensitivities=tuple(
            Sensitivity(one.name, one.unit, one.nominal, one.tolerance, one.derivative) for one in bench.slopes
        ),
        patterns=patterns,
        title=job.title,
    )


def _infinite(result: Result) -> tuple[np.ndarray, np.ndarray]:
    """Directions (n, 2) along the cuts, to either side, and the active scattering matrices (n_freq, n, p, p) of the
    infinite array there."""
    from .ask import ask

    bench, cone = result.bench, result.job.scan.cone
    assert bench is not None
    if result.stored is None:  # a direct run: what the breadboard's own scan directions hold
        matrices = np.einsum("fsp,pq->fspq", bench.infinite, np.eye(bench.infinite.shape[-1]))
        return np.column_stack([bench.scan.u, bench.scan.v]), np.nan_to_num(matrices)
    theta = np.linspace(0, cone, STEPS + 1)[1:]
    turns = np.concatenate([bench.cut_phi, bench.cut_phi + np.pi])
    scan = ScanPoints.from_angles(
        np.append(0.0, np.tile(theta, len(turns))), np.append(0.0, np.repeat(turns, len(theta)))
    )
    return np.column_stack([scan.u, scan.v]), ask(result, bench.frequency, scan).scattering
