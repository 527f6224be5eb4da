"""One table of the case file turned into SI values by the schema, and back into text."""

from __future__ import annotations

import cmath
import math
from collections.abc import Mapping
from typing import Any

import numpy as np

from ..geometry.errors import InputError, nearest
from .quantity import UNITS, Quantities
from .schema import EXPECTED, MOST_ROWS, TOP, Key, Table

Values = dict[str, Any]

_CUSTOMARY = {
    "length": (1e-3, "mm"),
    "frequency": (1e9, "GHz"),
    "inductance": (1e-9, "nH"),
    "capacitance": (1e-12, "pF"),
}


def read_table(raw: object, table: Table, place: str, quantities: Quantities) -> Values:
    """Every key of `table`, in SI: the given value, else the default, else None.

    Raises
    ------
    InputError
        Naming `place` and key, for an unknown or missing key, a value of the wrong kind or shape, or one
        out of range.
    """
    if not isinstance(raw, Mapping):
        raise InputError(
            f"{_shown(raw)} is not a table.", where=place, allowed=f"a table with {', '.join(table.keys)}"
        )
    for name in raw:
        if name not in table.keys:
            raise InputError(
                f"there is no key '{name}' here (value given: {_shown(raw[name])}).",
                where=place,
                allowed=", ".join(table.keys),
                hint=nearest(name, table.keys) or _misplaced(name),
            )
    return {name: _read_key(raw, name, key, place, quantities) for name, key in table.keys.items()}


def _misplaced(name: str) -> str:
    """What to do about a key of the top level that stands below a table's header."""
    return f"'{name}' belongs above the first [table] of the file." if name in TOP.keys else ""


def _read_key(raw: Mapping[str, object], name: str, key: Key, place: str, quantities: Quantities) -> Any:
    where = f"{place}, key '{name}'"
    if name not in raw:
        if key.required:
            raise InputError(f"'{name}' is missing.", where=place, hint=f"It means: {key.text}")
        if key.default is None:
            return None
    return read_value(raw.get(name, key.default), key, where, quantities)


def read_value(given: object, key: Key, where: str, quantities: Quantities) -> Any:
    """One value of any kind and shape; arrays are float and finite. Raises InputError at `where`."""
    if key.shape:
        return _read_array(given, key, key.shape, where, quantities)
    if key.kind == "any":
        return given
    if key.kind in ("text", "choice"):
        return _read_text(given, key, where)
    if key.kind == "flag":
        if not isinstance(given, bool):
            raise InputError(
                f"{_shown(given)} is neither true nor false.", where=where, allowed="true, false"
            )
        return given
    if key.kind == "count":
        return _in_range(_read_count(given, where), given, key, where)
    if key.kind == "wave":
        return _read_wave(given, where, quantities)
    if key.kind == "along":
        return _read_along(given, where, quantities)
    if key.kind == "co":
        return _read_co(given, where, quantities)
    return _in_range(quantities.value(given, key.kind, where), given, key, where)


def _read_array(given: object, key: Key, shape: tuple, where: str, quantities: Quantities) -> Any:
    size, rest = shape[0], shape[1:]
    word = "pairs" if rest == (2,) else "points" if rest == (3,) else "values"
    if not isinstance(given, list):
        wanted = f"{size} {word}" if isinstance(size, int) else word
        raise InputError(f"{_shown(given)} is not a list.", where=where, allowed=f"a list [...] of {wanted}")
    if isinstance(size, int) and len(given) != size:
        raise InputError(f"{_shown(given)} has {len(given)} {word}.", where=where, allowed=f"exactly {size}")
    if len(given) > MOST_ROWS:
        raise InputError(f"the list has {len(given)} {word}.", where=where, allowed=f"at most {MOST_ROWS}")
    scalar = Key(key.kind, key.text, low=key.low, above=key.above, high=key.high)
    rows = []
    for number, item in enumerate(given, start=1):
        place = f"{where}, entry {number}"
        if rest:
            rows.append(_read_array(item, key, rest, place, quantities))
        else:
            rows.append(read_value(item, scalar, place, quantities))
    return np.array(rows, dtype=float).reshape(len(rows), *rest)


def _read_text(given: object, key: Key, where: str) -> str:
    if not isinstance(given, str):
        raise InputError(
            f"{_shown(given)} is not text in quotes.", where=where, allowed=", ".join(key.choices)
        )
    if key.choices and given not in key.choices:
        raise InputError(
            f"'{given}' is not known here.",
            where=where,
            allowed=", ".join(key.choices),
            hint=nearest(given, key.choices),
        )
    if key.required and not given.strip():
        raise InputError("the text is empty.", where=where, hint=f"It means: {key.text}")
    return given


def _read_count(given: object, where: str) -> int:
    if isinstance(given, bool) or not isinstance(given, int):
        raise InputError(
            f"{_shown(given)} is not a whole number.", where=where, allowed="a whole number, unquoted"
        )
    return given


def _in_range(value: Any, given: object, key: Key, where: str) -> Any:
    low_fails = (key.low is not None and value < key.low) or (key.above is not None and value <= key.above)
    if low_fails or (key.high is not None and value > key.high * (1 + 1e-12 * math.copysign(1, key.high))):
        parts = []
        if key.low is not None:
            parts.append(f"at least {in_words(key.low, key.kind)}")
        if key.above is not None:
            parts.append(f"more than {in_words(key.above, key.kind)}")
        if key.high is not None:
            parts.append(f"at most {in_words(key.high, key.kind)}")
        raise InputError(f"{_shown(given)} is out of range.", where=where, allowed=" and ".join(parts))
    return value


def _read_wave(given: object, where: str, quantities: Quantities) -> complex:
    allowed = 'amplitude @ phase, such as "1 @ 90 deg"'
    if isinstance(given, str) and "@" in given:
        amplitude, _, phase = given.partition("@")
        size = quantities.value(amplitude.strip(), "ratio", where)
        angle = quantities.value(phase.strip(), "angle", where)
    else:
        if not isinstance(given, (int, float, str)):
            raise InputError(f"{_shown(given)} is not a drive.", where=where, allowed=allowed)
        size, angle = quantities.value(given, "ratio", where), 0.0
    if size < 0 or size > 1e6:
        raise InputError(f"{_shown(given)} has the amplitude {size:g}.", where=where, allowed="0 to 1e6")
    return cmath.rect(size, angle)


def _read_along(given: object, where: str, quantities: Quantities) -> tuple[str, float]:
    """("ratio", fraction) or ("length", metres)."""
    allowed = 'a length such as "3 mm" or a fraction from 0 to 1'
    for kind in ("ratio", "length"):
        try:
            value = quantities.value(given, kind, where)
        except InputError as fault:
            if kind == "length":
                raise InputError(fault.message, where=where, allowed=allowed, hint=fault.hint) from None
            continue
        if value < 0 or (kind == "ratio" and value > 1):
            raise InputError(f"{_shown(given)} is off the centre line.", where=where, allowed=allowed)
        return kind, value
    raise AssertionError("unreachable")


def _read_co(given: object, where: str, quantities: Quantities) -> str | float:
    words = ("x", "y", "right", "left")
    if isinstance(given, str) and given in words:
        return given
    try:
        return quantities.value(given, "angle", where)
    except InputError as fault:
        raise InputError(
            f"{_shown(given)} is not a polarisation.",
            where=where,
            hint=nearest(str(given), words),
            allowed=f'{", ".join(words)}, or an angle from x such as "45 deg"',
        ) from fault


def in_words(value: float, kind: str) -> str:
    """A value in SI as a person would write it: 0.027 length -> "27 mm"."""
    if kind == "angle":
        return f"{math.degrees(value):.6g} deg"
    if kind in ("count", "ratio", "level"):
        return f"{value:.6g} {UNITS.get(kind, '')}".strip()
    scale, unit = _CUSTOMARY.get(kind, (1.0, UNITS[kind]))
    return f"{value / scale:.6g} {unit}"


def write_table(values: Values, table: Table, header: str) -> str:
    """TOML text that `read_table` reads back to the same numbers: SI units, every default spelled out."""
    lines = [header] if header else []
    for name, key in table.keys.items():
        value = values.get(name)
        if value is not None:
            kind = EXPECTED[values["quantity"]] if key.kind == "any" else key.kind
            lines.append(f"{name} = {_toml(value, kind)}")
    return "\n".join(lines) + "\n"


def quoted(text: str) -> str:
    """A TOML basic string."""
    escapes = {"\\": "\\\\", '"': '\\"', "\n": "\\n", "\t": "\\t", "\r": "\\r", "\b": "\\b", "\f": "\\f"}
    out = [escapes.get(c, c if ord(c) >= 32 and ord(c) != 127 else f"\\u{ord(c):04x}") for c in text]
    return '"' + "".join(out) + '"'


def _toml(value: Any, kind: str) -> str:
    if isinstance(value, np.ndarray):
        return "[" + ", ".join(_toml(item, kind) for item in value) + "]"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return quoted(value)
    if isinstance(value, tuple):
        return _toml(value[1], value[0])
    if isinstance(value, complex):
        return f'"{abs(value)!r} @ {cmath.phase(value)!r} rad"'
    if kind == "count":
        return str(int(value))
    unit = UNITS["angle" if kind == "co" else kind]
    return f'"{float(value)!r} {unit}"' if unit else repr(float(value))


def _shown(given: object) -> str:
    """A raw value for an error message, cut short."""
    text = (
        f"'{given}'"
        if isinstance(given, str)
        else "true"
        if given is True
        else "false"
        if given is False
        else f"{given}"
    )
    return text if len(text) <= 80 else text[:77] + "..."
