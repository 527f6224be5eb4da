"""A prediction as a NetCDF-4 file, so that a measurement can be compared with it later and elsewhere.

Complex numbers have a last axis `part` = "re", "im", as in the result file.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import numpy as np

from ..geometry.errors import InputError
from ..geometry.lattice import Lattice
from .prediction import CutPattern, InfinitePrediction, Prediction, Sensitivity

FORMAT = 1
ATTRIBUTE = "scanward_prediction"
CONVENTIONS = (
    "exp(+j w t); power waves at real references; SI units; scattering[f, i, j] from port j into port i; cell = "
    "(column along lattice vector a, row along b); complex numbers have a last axis part = re, im"
)


def save_prediction(path: Path, prediction: Prediction) -> None:
    """Write `prediction`; an older file is replaced only when the new one is complete."""
    import xarray

    path = Path(path)
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    p, variables = prediction, {}
    variables["frequency"] = ("frequency", p.frequency)
    variables["cell"] = (("port", "axis"), p.cells)
    variables["port_name"] = ("port", np.array(p.ports, dtype=object))
    variables["reference"] = ("port", p.reference)
    variables["drive"] = (("port", "part"), _split(p.excitation))
    variables["scattering"] = (("frequency", "port", "port_in", "part"), _split(p.scattering))
    if p.sensitivities:
        slopes = np.stack([s.derivative for s in p.sensitivities])
        variables["sensitivity"] = (("parameter", "frequency", "port", "port_in", "part"), _split(slopes))
        variables["parameter_name"] = ("parameter", np.array([s.name for s in p.sensitivities], dtype=object))
        variables["parameter_unit"] = ("parameter", np.array([s.unit for s in p.sensitivities], dtype=object))
        variables["parameter_nominal"] = ("parameter", np.array([s.nominal for s in p.sensitivities]))
        variables["parameter_tolerance"] = ("parameter", np.array([s.tolerance for s in p.sensitivities]))
    if p.infinite is not None:
        variables |= _infinite_variables(p.infinite)
    attributes = {ATTRIBUTE: FORMAT, "title": p.title, "error": p.error, "conventions": CONVENTIONS,
                  "lattice_a": p.lattice.a, "lattice_b": p.lattice.b, "patterns": len(p.patterns)}  # fmt: skip
    try:
        xarray.Dataset(variables, attrs=attributes).to_netcdf(temporary, engine="h5netcdf")
        for i, cut in enumerate(p.patterns):
            _pattern_data(cut).to_netcdf(temporary, engine="h5netcdf", group=f"pattern_{i}", mode="a")
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def is_prediction(path: Path) -> bool:
    """Whether a file holds a prediction alone, of any format; False where it cannot be read."""
    import xarray

    try:
        with xarray.open_dataset(path, engine="h5netcdf") as data:
            return ATTRIBUTE in data.attrs
    except (OSError, ValueError, KeyError):
        return False


def load_prediction(path: Path) -> Prediction:
    """Read what `save_prediction` wrote.

    Raises
    ------
    InputError
        If there is no such file, or it holds no prediction of a known format.
    """
    import xarray

    try:
        data = xarray.load_dataset(path, engine="h5netcdf")
        if data.attrs.get(ATTRIBUTE) != FORMAT:
            raise InputError(
                "the file holds no predicted finite array.",
                where=str(path),
                allowed=f"a prediction of format {FORMAT}",
                hint="Run the case with a breadboard first.",
            )
        groups = [
            xarray.load_dataset(path, engine="h5netcdf", group=f"pattern_{i}") for i in range(data.attrs["patterns"])
        ]
    except InputError:
        raise
    except (OSError, ValueError, KeyError) as fault:
        raise InputError(f"the file cannot be read as a prediction: {fault}.", where=str(path)) from None
    value = {str(name): np.asarray(data[name].values) for name in data.variables}
    return Prediction(
        frequency=value["frequency"],
        cells=value["cell"],
        ports=tuple(str(x) for x in value["port_name"]),
        scattering=_join(value["scattering"]),
        reference=value["reference"],
        lattice=Lattice(np.asarray(data.attrs["lattice_a"]), np.asarray(data.attrs["lattice_b"])),
        error=float(data.attrs["error"]),
        drive=_join(value["drive"]),
        infinite=_infinite(value),
        sensitivities=_sensitivities(value),
        patterns=tuple(_pattern(group) for group in groups),
        title=str(data.attrs["title"]),
    )


def _infinite_variables(infinite: InfinitePrediction) -> dict[str, Any]:
    found: dict[str, Any] = {
        "direction": (("direction_index", "axis"), infinite.directions),
        "infinite_port": ("cell_port", np.array(infinite.ports, dtype=object)),
        "infinite_scattering": (
            ("frequency", "direction_index", "cell_port", "cell_port_in", "part"), _split(infinite.scattering)
        ),
    }  # fmt: skip
    if infinite.coupling is not None:
        found["lag"] = (("lag_index", "axis"), infinite.lags)
        axes = ("frequency", "lag_index", "cell_port", "cell_port_in", "part")
        found["infinite_coupling"] = (axes, _split(infinite.coupling))
    return found


def _infinite(value: dict[str, Any]) -> InfinitePrediction | None:
    if "infinite_scattering" not in value:
        return None
    ports = tuple(str(x) for x in value["infinite_port"])
    active = _join(value["infinite_scattering"])
    if "infinite_coupling" not in value:
        return InfinitePrediction(value["direction"], active, ports)
    return InfinitePrediction(value["direction"], active, ports, value["lag"], _join(value["infinite_coupling"]))


def _sensitivities(value: dict[str, Any]) -> tuple[Sensitivity, ...]:
    if "sensitivity" not in value:
        return ()
    slopes = _join(value["sensitivity"])
    columns = [value[f"parameter_{key}"] for key in ("name", "unit", "nominal", "tolerance")]
    return tuple(
        Sensitivity(str(name), str(unit), float(nominal), float(tolerance), slope)
        for name, unit, nominal, tolerance, slope in zip(*columns, slopes, strict=True)
    )


def _pattern_data(cut: CutPattern) -> Any:
    import xarray

    levels = {"co": cut.co, "cross": cut.cross, "infinite_co": cut.infinite_co, "infinite_cross": cut.infinite_cross}
    variables = {name: ("theta", values) for name, values in levels.items() if values is not None}
    attributes = {
        "frequency": cut.frequency,
        "column": cut.cell[0],
        "row": cut.cell[1],
        "port": cut.port,
        "phi": cut.phi,
    }
    return xarray.Dataset({"theta": ("theta", cut.theta), **variables}, attrs=attributes)


def _pattern(data: Any) -> CutPattern:
    a = data.attrs
    beyond = [data[name].values if name in data else None for name in ("infinite_co", "infinite_cross")]
    return CutPattern(
        float(a["frequency"]), (int(a["column"]), int(a["row"])), str(a["port"]), float(a["phi"]),
        data["theta"].values, data["co"].values, data["cross"].values, *beyond,
    )  # fmt: skip


def _split(values: Any) -> Any:
    return np.stack([np.real(values), np.imag(values)], axis=-1)


def _join(values: Any) -> Any:
    return values[..., 0] + 1j * values[..., 1]
