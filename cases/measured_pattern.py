"""Measured pattern cuts from comma-separated text whose header states every unit."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..geometry.errors import InputError, nearest
from .measured_table import Table, read_table
from .touchstone_text import number_of

Floats = NDArray[np.float64]

REQUIRED = {
    "angle": "theta from broadside, deg or rad, negative towards the opposite half-plane",
    "cut": "plane phi of the cut, deg or rad",
    "co": "co-polar level: dBi, dB, power or amplitude",
    "cross": "cross-polar level, same unit as co",
}
OPTIONAL = {
    "frequency": "Hz, kHz, MHz or GHz; needed where several predicted patterns would fit",
    "row": "row of the measured element",
    "column": "column of the measured element",
    "port": "its port",
}
ANGLES = {"deg": np.pi / 180, "rad": 1.0}
LEVELS = ("dBi", "dB", "power", "amplitude")
FREQUENCIES = {"Hz": 1.0, "kHz": 1e3, "MHz": 1e6, "GHz": 1e9}


@dataclass(frozen=True)
class MeasuredCut:
    """One cut of one element at one frequency.

    Parameters
    ----------
    path : file it came from
    frequency : Hz, None where not stated
    cell : column, row; None where not stated
    port : name, "" where not stated
    phi : rad
    theta : (n,) rising, rad
    co, cross : (n,) dB; -inf where a linear level is 0
    absolute : whether the levels are gain in dBi; else they have an unknown common offset
    """

    path: Path
    frequency: float | None
    cell: tuple[int, int] | None
    port: str
    phi: float
    theta: Floats
    co: Floats
    cross: Floats
    absolute: bool


def read_pattern(path: Path) -> tuple[MeasuredCut, ...]:
    """Read all cuts of a file.

    Raises
    ------
    InputError
        With file and line: units missing or unknown, numbers that are none or cannot be in the unit stated, angles that
        stand twice, columns missing.
    """
    table = read_table(Path(path), REQUIRED, OPTIONAL)
    try:
        return _cuts(table)
    except InputError as fault:
        raise fault.located(str(path)) from None


def _cuts(table: Table) -> tuple[MeasuredCut, ...]:
    angle_unit = _unit(table, "angle", ANGLES)
    cut_unit = _unit(table, "cut", ANGLES)
    level = _unit(table, "co", LEVELS)
    if angle_unit != cut_unit:
        raise InputError(
            f"angle is in {angle_unit} and cut in {cut_unit}.", where="header", allowed="one unit for both"
        )
    if _unit(table, "cross", LEVELS) != level:
        raise InputError(
            f"co is in {level} and cross in {table.units['cross']}.", where="header", allowed="one unit for both"
        )
    if ("row" in table.units) != ("column" in table.units):
        raise InputError("row and column of the element must be given together.", where="header")
    scale = FREQUENCIES[_unit(table, "frequency", FREQUENCIES)] if "frequency" in table.units else 1.0
    groups: dict[tuple, list[tuple[int, float, float, float]]] = {}
    for number, row in table.rows:
        where = f"line {number}"
        value = {name: number_of(row[name], f"{where}, column '{name}'") for name in REQUIRED}
        frequency = number_of(row["frequency"], where) * scale if "frequency" in row else None
        if frequency is not None and frequency <= 0:
            raise InputError(f"frequency {row['frequency']} is not positive.", where=where)
        cell = (_whole(row["column"], where), _whole(row["row"], where)) if "row" in row else None
        key = (frequency, cell, row.get("port", ""), round(value["cut"] * ANGLES[angle_unit], 9))
        groups.setdefault(key, []).append((number, value["angle"] * ANGLES[angle_unit], value["co"], value["cross"]))
    _check_angles(groups, angle_unit)
    _check_levels(table, level)
    return tuple(_cut(table.path, key, rows, level) for key, rows in groups.items())


def _unit(table: Table, name: str, allowed: Collection[str]) -> str:
    unit = table.units[name]
    if unit not in allowed:
        options = " or ".join(f"'{name} ({one})'" for one in allowed)
        said = f"'{unit}' is no unit of column '{name}'" if unit else f"column '{name}' states no unit"
        why = " (linear is not enough: power or amplitude?)" if unit.lower().startswith("lin") else ""
        raise InputError(f"{said}{why}.", where="header", allowed=options, hint=nearest(unit, allowed))
    return unit


def _whole(text: str, where: str) -> int:
    value = number_of(text, where)
    if value != round(value):
        raise InputError(f"'{text}' is not a whole number.", where=where, allowed="row and column of an element")
    return int(value)


def _check_angles(groups: dict[tuple, list[tuple[int, float, float, float]]], unit: str) -> None:
    angles = np.array([row[1] for rows in groups.values() for row in rows])
    given = angles / ANGLES[unit]
    worst = float(np.max(np.abs(given)))
    if np.max(np.abs(angles)) > np.pi * (1 + 1e-9):
        other = " The numbers look like degrees." if unit == "rad" and worst <= 180 else ""
        raise InputError(
            f"angle {worst:g} {unit} lies beyond a half turn.{other}",
            where="column 'angle'",
            allowed="-180 to 180 deg, or -pi to pi rad",
            hint="Mend the unit in the header." if other else "",
        )
    if unit == "deg" and len(angles) > 4 and worst <= np.pi / 2 + 1e-6:
        raise InputError(
            f"no angle exceeds {worst:g} deg; the numbers look like radians.",
            where="column 'angle'",
            allowed="a cut that reaches beyond 1.6 deg",
            hint="Mend the unit in the header.",
        )
    for (_, _, _, phi), rows in groups.items():
        if abs(phi) > 2 * np.pi + 1e-9:
            other = " The numbers look like degrees." if unit == "rad" else ""
            raise InputError(
                f"cut plane {phi / ANGLES[unit]:g} {unit} lies beyond a full turn.{other}",
                where="column 'cut'",
                allowed="-360 to 360 deg",
            )
        seen: dict[float, int] = {}
        for number, angle, _, _ in rows:
            first = seen.setdefault(round(angle, 9), number)
            if first != number:
                raise InputError(
                    f"angle {angle / ANGLES[unit]:g} {unit} stood in line {first} already.",
                    where=f"line {number}",
                    allowed="each angle once per cut",
                    hint="Give the frequency or element in a column if they differ.",
                )
        if len(rows) < 3:
            raise InputError(
                f"the cut at {phi / ANGLES[unit]:g} {unit} has {len(rows)} angle{'s' * (len(rows) > 1)}.",
                where=f"line {rows[0][0]}",
                allowed="at least 3",
            )


def _check_levels(table: Table, level: str) -> None:
    values = np.array([[float(row["co"]), float(row["cross"])] for _, row in table.rows])
    if level in ("power", "amplitude") and np.any(values < 0):
        raise InputError(
            f"a level of {values.min():g} is negative, but the unit is linear {level}.",
            where="columns 'co' and 'cross'",
            allowed="0 or more",
            hint="The numbers look like decibels: mend the unit in the header.",
        )
    if level in ("dB", "dBi") and np.any(np.abs(values) > 200):
        raise InputError(
            f"a level of {values.flat[np.argmax(np.abs(values))]:g} {level} makes no sense.",
            where="columns 'co' and 'cross'",
            allowed="-200 to 200",
        )
    co = values[:, 0]
    if level in ("dB", "dBi") and len(co) > 8 and co.min() >= 0 and co.max() <= 1 and np.ptp(co) > 0.2:
        raise InputError(
            f"all co-polar levels lie between {co.min():g} and {co.max():g} {level}; the numbers look linear.",
            where="column 'co'",
            allowed="a pattern in decibels",
            hint="Mend the unit in the header.",
        )


def _cut(path: Path, key: tuple, rows: list[tuple[int, float, float, float]], level: str) -> MeasuredCut:
    frequency, cell, port, phi = key
    data = np.array(sorted(row[1:] for row in rows))
    levels = data[:, 1:]
    if level in ("power", "amplitude"):
        with np.errstate(divide="ignore"):
            levels = (10 if level == "power" else 20) * np.log10(levels)
    return MeasuredCut(path, frequency, cell, port, phi, data[:, 0], levels[:, 0], levels[:, 1], level == "dBi")
