"""The port map: which port of which measured file sits at which element of the array."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

from ..geometry.errors import InputError, nearest
from .measured_table import read_table
from .prediction import Prediction

REQUIRED = {
    "measured port": "number of the port in the file, from 1",
    "row": "row of the element, along lattice vector b",
    "column": "column of the element, along lattice vector a",
}
OPTIONAL = {
    "port": "name of the element's port, where elements have several",
    "file": "name of the measured file, where there are several",
}


@dataclass(frozen=True)
class MapEntry:
    """Port `measured` (from 1) of `file` ("" where there is one file) is port `index` of the prediction."""

    file: str
    measured: int
    index: int
    line: int


def read_map(path: Path, prediction: Prediction) -> tuple[MapEntry, ...]:
    """Read a port map and hold it against the prediction's ports.

    Raises
    ------
    InputError
        With file and line: whole numbers wanted, an element or port that is not in the array, a measured port or an
        element assigned twice in one file.
    """
    path = Path(path)
    table = read_table(path, REQUIRED, OPTIONAL)
    entries: list[MapEntry] = []
    for number, row in table.rows:
        where = f"{path}: line {number}"
        measured, r, c = (_whole(row[key], f"{where}, column '{key}'") for key in REQUIRED)
        if measured < 1:
            raise InputError(f"measured port {measured} does not exist.", where=where, allowed="1, 2, ...")
        index = _port_index(prediction, c, r, row.get("port", ""), where)
        entry = MapEntry(row.get("file", ""), measured, index, number)
        for other in entries:
            if other.file == entry.file and other.measured == measured:
                raise InputError(f"measured port {measured} was assigned in line {other.line} already.", where=where)
            if other.file == entry.file and other.index == index:
                raise InputError(
                    f"{prediction.port_label(index)} was assigned in line {other.line} already.", where=where
                )
        entries.append(entry)
    return tuple(entries)


def entries_of(
    entries: tuple[MapEntry, ...], file: Path, ports: int, map_path: Path, several: bool
) -> tuple[MapEntry, ...]:
    """The entries of one measured file, in the order of its ports.

    Raises
    ------
    InputError
        If the map names no such file, or a port the file does not have.
    """
    named = [e for e in entries if e.file in ("", file.name)]
    if several and any(e.file == "" for e in named):
        raise InputError(
            "several measured files are given, but the map does not say which file a port is in.",
            where=str(map_path),
            allowed="a column 'file' with a name in every row",
        )
    if not named:
        names = sorted({e.file for e in entries})
        raise InputError(
            f"the map has no row for the measured file '{file.name}'.",
            where=str(map_path),
            allowed=", ".join(names[:8]) + (", ..." if len(names) > 8 else ""),
            hint=nearest(file.name, names),
        )
    for e in named:
        if e.measured > ports:
            raise InputError(
                f"measured port {e.measured} is assigned, but '{file.name}' has {ports} port{'s' * (ports > 1)}.",
                where=f"{map_path}: line {e.line}",
                allowed=f"1 to {ports}",
            )
    return tuple(sorted(named, key=lambda e: e.measured))


def _whole(text: str, where: str) -> int:
    if not re.fullmatch(r"[-+]?\d{1,6}", text):
        raise InputError(f"'{text[:40]}' is not a whole number.", where=where, allowed="whole numbers such as 4")
    return int(text)


def _port_index(prediction: Prediction, column: int, row: int, name: str, where: str) -> int:
    cells = {(int(c), int(r)) for c, r in prediction.cells}
    if (column, row) not in cells:
        columns, rows = prediction.cells[:, 0], prediction.cells[:, 1]
        raise InputError(
            f"there is no element at row {row}, column {column}.",
            where=where,
            allowed=f"rows {rows.min()} to {rows.max()}, columns {columns.min()} to {columns.max()}, where the "
            "array has elements",
        )
    names = [n for (c, r), n in zip(prediction.cells, prediction.ports, strict=True) if (c, r) == (column, row)]
    if not name and len(names) == 1:
        name = names[0]
    if name not in names:
        said = f"'{name}' is no port" if name else "the port is not named, and there are several"
        raise InputError(
            f"{said} of the element at row {row}, column {column}.",
            where=where,
            allowed=", ".join(names),
            hint=nearest(name, names) if name else "Add a column 'port'.",
        )
    return prediction.index[column, row, name]
