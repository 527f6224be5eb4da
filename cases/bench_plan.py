"""The `[breadboard]` table: which cells carry an element, which are dummies, how they are excited."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError, nearest
from .job import Breadboard, Tolerance
from .quantity import UNITS, Quantities

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

WHERE = "[breadboard]"
POINTS = 5  # frequencies unless told otherwise
MOST_CELLS = 1600


def build_breadboard(values: Mapping[str, Any], band: Floats) -> Breadboard:
    """From the table's values and the case's frequencies (n,), Hz.

    Raises
    ------
    InputError
        For no or contradictory sizes, cells that are missing twice or outside, or no element left with live ports.
    """
    cells = _cells(values)
    if len(cells) > MOST_CELLS:
        raise InputError(f"the array has {len(cells)} elements.", where=WHERE, allowed=f"at most {MOST_CELLS}")
    dummy = _rim(cells, values["rim"]) | _listed_dummies(cells, values["dummies"])
    if (values["load"] is None) == (values["termination"] == "loaded"):
        raise InputError(
            f"termination is '{values['termination']}' and load is {values['load'] or 'not given'}.", where=WHERE,
            allowed="load together with termination = \"loaded\", and only then",
        )  # fmt: skip
    termination = values["load"] if values["termination"] == "loaded" else values["termination"]
    if dummy.all():
        raise InputError(
            f"with a rim of {values['rim']} no element is left that is led out.", where=f"{WHERE}, key 'rim'",
            allowed="fewer rings, or a larger array",
        )  # fmt: skip
    pedestal = 10 ** (values["edge_taper"] / 20)
    points = values["points"] or min(POINTS, len(band))
    frequency = np.linspace(band[0], band[-1], points) if points > 1 else np.array([0.5 * (band[0] + band[-1])])
    if len(band) == 1:
        frequency = band.copy()
    return Breadboard(
        cells, dummy, termination, frequency, _taper(cells, pedestal), values["alike"], values["largest"],
        values["error"],
    )  # fmt: skip


def build_tolerance(
    values: dict[str, Any], where: str, parameters: Mapping[str, object], quantities: Quantities
) -> Tolerance:
    """One entry of `[[tolerance]]`.

    Raises
    ------
    InputError
        For a parameter that does not exist, or a value of another kind or not above zero.
    """
    name = values["parameter"]
    if name not in parameters:
        raise InputError(
            f"there is no parameter '{name}'.", where=f"{where}, key 'parameter'",
            allowed=", ".join(parameters) or "names of [parameters], which is missing", hint=nearest(name, parameters),
        )  # fmt: skip
    kind, nominal = _kind_of(name, quantities, where)
    value = quantities.value(values["value"], kind, f"{where}, key 'value'")
    if not value > 0:
        raise InputError(f"{values['value']} is not above zero.", where=f"{where}, key 'value'", allowed="above zero")
    return Tolerance(name, kind, nominal, float(value))


def _kind_of(name: str, quantities: Quantities, where: str) -> tuple[str, float]:
    """Kind of quantity a parameter is, and its value in SI."""
    for kind in UNITS:
        try:
            return kind, float(quantities.value(name, kind, where))
        except InputError:
            continue
    raise InputError(f"'{name}' is no kind of quantity known here.", where=where, allowed=", ".join(UNITS))


def _cells(values: Mapping[str, Any]) -> Ints:
    """Cells (n, 2), row by row."""
    given = [name for name in ("rows", "columns", "cells") if values[name] is not None]
    if given not in (["rows", "columns"], ["cells"]):
        raise InputError(
            f"the size is given by {', '.join(given) or 'nothing'}.", where=WHERE, allowed="rows and columns; or cells"
        )
    if given == ["cells"]:
        if values["missing"] is not None:
            raise InputError(
                "'missing' goes with rows and columns.",
                where=f"{WHERE}, key 'missing'",
                allowed="leave it out of cells",
            )
        cells = np.array(values["cells"], dtype=np.int64).reshape(-1, 2)
        distinct, count = np.unique(cells, axis=0, return_counts=True)
        if not len(cells) or (count > 1).any():
            what = f"cell {distinct[count > 1][0].tolist()} is listed twice" if len(cells) else "no cell is listed"
            raise InputError(f"{what}.", where=f"{WHERE}, key 'cells'", allowed="each cell once, at least one")
        return cells
    rows, columns = values["rows"], values["columns"]
    row, column = np.divmod(np.arange(rows * columns), columns)
    kept = np.ones(rows * columns, dtype=bool)
    for i, j in [] if values["missing"] is None else np.array(values["missing"], dtype=np.int64).reshape(-1, 2):
        if not (0 <= i < rows and 0 <= j < columns) or not kept[i * columns + j]:
            raise InputError(
                f"element [{i}, {j}] is missing twice, or is not of the array.", where=f"{WHERE}, key 'missing'",
                allowed=f"[row, column] from [0, 0] to [{rows - 1}, {columns - 1}], each once",
            )  # fmt: skip
        kept[i * columns + j] = False
    if not kept.any():
        raise InputError("every element is missing.", where=f"{WHERE}, key 'missing'", allowed="at least one left")
    return np.column_stack([column, row])[kept]


def _rim(cells: Ints, rings: int) -> NDArray[np.bool_]:
    """Elements in the outermost rings: one with a neighbour (of eight) that is no element is in the first."""
    left = {tuple(cell) for cell in cells.tolist()}
    rim: set[tuple[int, ...]] = set()
    around = [(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1) if i or j]
    for _ in range(rings):
        ring = {c for c in left if any((c[0] + i, c[1] + j) not in left for i, j in around)}
        rim |= ring
        left -= ring
    return np.array([tuple(cell) in rim for cell in cells.tolist()], dtype=bool)


def _listed_dummies(cells: Ints, listed: Any) -> NDArray[np.bool_]:
    """Elements named as dummies by [row, column], which is cell (column, row)."""
    dummy = np.zeros(len(cells), dtype=bool)
    for row, column in [] if listed is None else np.array(listed, dtype=np.int64).reshape(-1, 2):
        hit = (cells == [column, row]).all(axis=1)
        if not hit.any():
            raise InputError(
                f"there is no element [{row}, {column}].", where=f"{WHERE}, key 'dummies'",
                allowed="[row, column] of elements of the array",
            )  # fmt: skip
        dummy |= hit
    return dummy


def _taper(cells: Ints, pedestal: float) -> Floats:
    """Cosine on a pedestal over the array's extent in both directions, 1 in the middle."""
    middle = 0.5 * (cells.max(axis=0) + cells.min(axis=0))
    half = np.maximum(0.5 * np.ptp(cells, axis=0), 0.5)
    x = np.clip(np.abs(cells - middle) / half, 0, 1)
    cosine = pedestal + (1 - pedestal) * np.cos(0.5 * np.pi * x)
    return cosine.prod(axis=1)
