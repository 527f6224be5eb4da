"""The parts of a job that are not arrays, as plain text and back: ports, loads, materials, limits,
expectations."""

from __future__ import annotations

import json
from dataclasses import asdict
from typing import Any

import numpy as np

from ..geometry.conductor import Material
from ..geometry.port import Gap, Load, Port
from ..geometry.stack import Layer, SheetImpedance, Stack
from .job import Breadboard, Expectation, Job, Limit


def job_record(job: Job) -> str:
    """JSON text of everything in `job` that the result file does not hold as arrays."""
    return json.dumps(
        {
            "title": job.title,
            "ports": [_plain(asdict(port)) for port in job.cell.ports],
            "loads": [_plain(asdict(load)) for load in job.cell.loads],
            "conductors": list(job.cell.mesh.names),
            "materials": [asdict(material) for material in job.cell.mesh.materials],
            "ground": int(job.cell.ground),
            "stack": None if job.cell.stack is None else _plain(asdict(job.cell.stack)),
            "limits": [asdict(limit) for limit in job.limits],
            "expect": [asdict(expectation) for expectation in job.expect],
            "tolerance": job.tolerance,
            "cone": job.scan.cone,
            "co_polar": job.co_polar,
            "co_polar_angle": job.co_polar_angle,
            "element_size": job.element_size,
            "expected_to_fail": job.expected_to_fail,
            "breadboard": None if job.breadboard is None else _plain(asdict(job.breadboard)),
        }
    )


def read_record(text: str) -> dict[str, Any]:
    """The record with ports, loads, materials, stack, limits and expectations turned back into their classes."""
    record = json.loads(text)
    record["ports"] = tuple(
        Port(port["name"], _gap(port["gap"]), port["resistance"], complex(*port["drive"])) for port in record["ports"]
    )
    record["loads"] = tuple(Load(**{**load, "gap": _gap(load["gap"])}) for load in record["loads"])
    record["materials"] = tuple(Material(**material) for material in record["materials"])
    record["stack"] = _stack(record.get("stack"))  # files of version 0.1.0 have none
    record["breadboard"] = _breadboard(record.get("breadboard"))
    record["limits"] = tuple(Limit(**limit) for limit in record["limits"])
    record["expect"] = tuple(Expectation(**expectation) for expectation in record["expect"])
    return record


def _breadboard(board: dict[str, Any] | None) -> Breadboard | None:
    if board is None:
        return None
    kinds = {"cells": np.int64, "dummy": bool, "frequency": float, "taper": float}
    return Breadboard(**{**board, **{name: np.array(board[name], dtype=kind) for name, kind in kinds.items()}})


def _stack(stack: dict[str, Any] | None) -> Stack | None:
    if stack is None:
        return None
    sheets = (SheetImpedance(**{**sheet, "impedance": _complex(sheet["impedance"])}) for sheet in stack["sheets"])
    return Stack(tuple(Layer(**layer) for layer in stack["layers"]), stack["ground"], tuple(sheets))


def _complex(value: Any) -> complex:
    return complex(*value) if isinstance(value, list) else complex(value)


def _gap(gap: dict[str, Any]) -> Gap:
    vectors = {key: np.array(gap[key], dtype=float) for key in ("centre", "direction", "across")}
    return Gap(**{**gap, **vectors})


def _plain(value: Any) -> Any:
    """Arrays as lists, complex numbers as (re, im), the rest as it is; recursive."""
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, complex):
        return [value.real, value.imag]
    return value
