"""Tables of measured data as comma-separated text with one header line; lines that begin with # are remarks."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from ..geometry.errors import InputError, nearest
from .touchstone_text import file_text


@dataclass(frozen=True)
class Table:
    """Rows of one file: (line number, column name -> text); `units` holds what stood in parentheses in the header."""

    path: Path
    units: dict[str, str]
    rows: tuple[tuple[int, dict[str, str]], ...]


def read_table(path: Path, required: Mapping[str, str], optional: Mapping[str, str]) -> Table:
    """Read a table whose columns have the names given (name -> what it holds), in any order.

    A header entry is ``name`` or ``name (unit)``; units are the caller's to check.

    Raises
    ------
    InputError
        For files that cannot be read, other separators than commas, unknown, missing or repeated columns, and rows of
        another length than the header.
    """
    path = Path(path)
    text = file_text(path)
    lines = [(i, line.strip()) for i, line in enumerate(text.splitlines(), start=1)]
    lines = [(i, line) for i, line in lines if line and not line.startswith("#")]
    if not lines:
        raise InputError("the file has only remarks.", where=str(path), allowed="a header line and rows")
    number, header = lines[0]
    names, units = _header(header, f"{path}: line {number}", required, optional)
    rows = []
    for number, line in lines[1:]:
        cells = [cell.strip() for cell in line.split(",")]
        if len(cells) != len(names):
            comma = len(cells) > len(names) and re.search(r"\d,\d", line)
            raise InputError(
                f"the row has {len(cells)} entries.",
                where=f"{path}: line {number}",
                allowed=f"{len(names)}, as the header ({', '.join(names)})",
                hint="Decimal commas must be points." if comma else "",
            )
        rows.append((number, dict(zip(names, cells, strict=True))))
    if not rows:
        raise InputError("there is a header but no row.", where=str(path), hint="The file was cut off.")
    return Table(path, units, tuple(rows))


def _header(
    line: str, where: str, required: Mapping[str, str], optional: Mapping[str, str]
) -> tuple[list[str], dict[str, str]]:
    known = [*required, *optional]
    if "," not in line and re.search(r"[;\t]", line):
        raise InputError(
            "columns are separated by semicolons or tabs.", where=where, allowed="commas, with decimal points"
        )
    names, units = [], {}
    for entry in line.split(","):
        match = re.fullmatch(r"\s*([^()]*?)\s*(?:\(([^()]*)\))?\s*", entry)
        name = match.group(1).lower().replace("_", " ") if match else entry.strip()
        if match is None or name not in known:
            raise InputError(
                f"'{entry.strip()}' is no column of this table.",
                where=where,
                allowed=", ".join(known),
                hint=nearest(name, known),
            )
        if name in names:
            raise InputError(f"column '{name}' stands twice.", where=where)
        names.append(name)
        units[name] = (match.group(2) or "").strip()
    for name, meaning in required.items():
        if name not in names:
            raise InputError(
                f"column '{name}' ({meaning}) is missing.",
                where=where,
                allowed=f"{', '.join(required)}; also {', '.join(optional)}",
            )
    return names, units
