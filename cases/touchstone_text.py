"""The text of a Touchstone file taken apart and held to its rules, line by line, before its numbers are used.

Lenient readers take a truncated block, a falling frequency or text among numbers for something else without a word;
here each is refused with its line. Versions 1.0, 1.1, 2.0 and 2.1, S-parameters only.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from pathlib import Path

from ..geometry.errors import InputError, nearest

UNITS = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9}
FORMATS = ("ma", "db", "ri")
KEYWORDS = (
    "version",
    "number of ports",
    "two-port data order",
    "number of frequencies",
    "number of noise frequencies",
    "reference",
    "matrix format",
    "mixed-mode order",
    "begin information",
    "end information",
    "network data",
    "noise data",
    "end",
)
LARGEST = 2_000_000_000


@dataclass
class TouchstoneText:
    """What the text of one file says of itself; `rows` are blocks (line number, values of one frequency)."""

    name: str
    ports: int | None = None
    version: str = "1.0"
    option: tuple[str, str, list[float]] | None = None
    keywords: dict[str, str] = field(default_factory=dict)
    reference: list[float] = field(default_factory=list)
    rows: list[tuple[int, list[float]]] = field(default_factory=list)
    section: str = "head"

    @property
    def matrix(self) -> str:
        return self.keywords.get("matrix format", "full").lower()

    @property
    def numbers(self) -> int:
        """Numbers per frequency."""
        assert self.ports is not None
        return 1 + (2 * self.ports**2 if self.matrix == "full" else self.ports * (self.ports + 1))


def read_text(path: Path) -> TouchstoneText:
    """Take the file apart.

    Raises
    ------
    InputError
        With file and line, for whatever breaks the rules of the format or is not a scattering matrix.
    """
    text = file_text(path)
    found = TouchstoneText(path.name, _ports_of_name(path))
    try:
        for number, line in enumerate(text.splitlines(), start=1):
            _take(found, number, line)
        _complete(found)
        _check_rows(found)
    except InputError as fault:
        raise fault.located(str(path)) from None
    return found


def file_text(path: Path) -> str:
    """Text of a file of measured data; refuses what is missing, empty or binary."""
    try:
        if path.is_dir():
            raise InputError("this is a directory.", where=str(path), allowed="a file")
        if path.stat().st_size > LARGEST:
            raise InputError(
                f"the file has {path.stat().st_size} bytes.", where=str(path), allowed=f"at most {LARGEST}"
            )
        data = path.read_bytes()
    except OSError as fault:
        names = [p.name for p in path.parent.glob("*")] if path.parent.is_dir() else []
        raise InputError(
            f"the file cannot be read: {fault.strerror or fault}.", where=str(path), hint=nearest(path.name, names)
        ) from None
    if not data.strip():
        raise InputError("the file is empty.", where=str(path))
    if b"\0" in data:
        raise InputError(
            "the file holds binary data (a zero byte).",
            where=str(path),
            allowed="plain text",
            hint="Export from the analyser as text.",
        )
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError:
        return data.decode("latin-1")


def number_of(token: str, where: str) -> float:
    """A finite number, or InputError that says what is wrong with it."""
    try:
        value = float(token)
    except ValueError:
        value = None
    if value is None or "_" in token:
        if re.fullmatch(r"[-+]?\d+,\d+([eE][-+]?\d+)?", token):
            raise InputError(
                f"'{token}' has a decimal comma.",
                where=where,
                allowed="a decimal point",
                hint="Set the exporting program to decimal points.",
            )
        raise InputError(f"'{token[:40]}' is not a number.", where=where, allowed="numbers such as -0.125 or 1.2e-3")
    if not math.isfinite(value):
        raise InputError(f"'{token}' is not a finite number.", where=where, hint="Leave out what was not measured.")
    return value


def _ports_of_name(path: Path) -> int | None:
    suffix = path.suffix.lower()
    if suffix == ".ts":
        return None
    match = re.fullmatch(r"\.s([1-9]\d*)p", suffix)
    if match is None:
        raise InputError(
            f"the name ends in '{path.suffix}', which does not say how many ports there are.",
            where=str(path),
            allowed=".s1p, .s2p, ... for Touchstone 1 and 2, .ts for Touchstone 2",
        )
    return int(match.group(1))


def _take(found: TouchstoneText, number: int, raw: str) -> None:
    """Sort one line into where it belongs."""
    where = f"line {number}"
    if re.match(r"\s*!\s*port impedance", raw, re.IGNORECASE):
        raise InputError(
            "a comment gives port impedances that vary with frequency.",
            where=where,
            allowed="one real reference resistance per port",
            hint="Renormalise the data when exporting.",
        )
    line = raw.partition("!")[0].strip()
    if not line:
        return
    if found.section == "information":
        if re.match(r"\[end information\]", line, re.IGNORECASE):
            found.section = "head"
        return
    if found.section == "end":
        raise InputError(f"'{line[:40]}' stands after [End].", where=where, allowed="nothing")
    if line.startswith("["):
        _keyword(found, where, line)
    elif line.startswith("#"):
        _option(found, where, line)
    else:
        _values(found, number, line)


def _values(found: TouchstoneText, number: int, line: str) -> None:
    where = f"line {number}"
    if found.section == "noise":
        return
    if found.option is None:
        raise InputError(
            f"'{line[:40]}' stands before the option line, so that its unit is unknown.",
            where=where,
            allowed="an option line such as '# GHz S RI R 50' first",
        )
    values = [number_of(token, where) for token in line.split()]
    if found.section == "reference":
        found.reference += values
    elif found.version != "1.0" and found.section != "data":
        raise InputError(f"'{line[:40]}' stands before [Network Data].", where=where)
    elif len(values) % 2 or not found.rows:
        found.rows.append((number, values))
        if _begins_noise(found):
            found.rows.pop()
            found.section = "noise"
    else:
        found.rows[-1][1].extend(values)


def _begins_noise(found: TouchstoneText) -> bool:
    """Noise parameters of an amplifier follow the data of a version 1 two-port at a lower frequency, five to a line."""
    rows = found.rows
    return (
        found.version == "1.0"
        and found.ports == 2
        and len(rows) > 1
        and len(rows[-1][1]) == 5
        and rows[-1][1][0] <= rows[-2][1][0]
        and len(rows[-2][1]) == 9
    )


def _option(found: TouchstoneText, where: str, line: str) -> None:
    words = line[1:].lower().split()
    unit, kind, form, resistance = "ghz", "s", "ma", [50.0]
    while words:
        word = words.pop(0)
        if word in UNITS:
            unit = word
        elif word in ("s", "y", "z", "g", "h"):
            kind = word
        elif word in FORMATS:
            form = word
        elif word == "r":
            resistance = [number_of(token, where) for token in words]
            words = []
            if not resistance:
                raise InputError("the option line ends after R.", where=where, allowed="R and a resistance in ohm")
        else:
            raise InputError(
                f"'{word}' has no meaning in the option line.",
                where=where,
                allowed="Hz, kHz, MHz or GHz; S; RI, MA or DB; R and a resistance",
                hint=nearest(word, [*UNITS, *FORMATS]),
            )
    if kind != "s":
        raise InputError(f"the file holds {kind.upper()}-parameters.", where=where, allowed="S", hint="Convert them.")
    if any(r <= 0 for r in resistance):
        raise InputError(f"the reference resistance is {min(resistance):g} ohm.", where=where, allowed="above zero")
    option = (unit, form, resistance)
    if found.option is not None and found.option != option:
        raise InputError(
            f"a second option line '{line}' contradicts the first.",
            where=where,
            allowed="one option line",
            hint="Were two files with different units joined?",
        )
    found.option = option


def _keyword(found: TouchstoneText, where: str, line: str) -> None:
    match = re.match(r"\[([^\]]*)\]\s*(.*)", line)
    name = match.group(1).strip().lower() if match else ""
    if match is None or name not in KEYWORDS:
        raise InputError(f"'{line[:40]}' is no keyword of Touchstone 2.", where=where, hint=nearest(name, KEYWORDS))
    argument = match.group(2).strip()
    if name == "version":
        if argument not in ("1.0", "2.0", "2.1") or found.keywords or found.rows:
            raise InputError(
                f"[Version] {argument} cannot be read.", where=where, allowed="1.0, 2.0 or 2.1, first in the file"
            )
        found.version = argument
    elif found.version == "1.0":
        raise InputError(f"[{match.group(1)}] stands in a file without [Version] 2.0.", where=where)
    if name in found.keywords:
        raise InputError(f"[{match.group(1)}] stands twice.", where=where)
    if name not in ("begin information", "end information"):
        found.keywords[name] = argument
    sections = {"network data": "data", "noise data": "noise", "reference": "reference", "end": "end"}
    found.section = "information" if name == "begin information" else sections.get(name, "head")
    if name == "number of ports":
        count = _count(argument, where, "[Number of Ports]")
        if found.ports not in (None, count):
            raise InputError(
                f"[Number of Ports] is {count}, but the name says {found.ports}.",
                where=where,
                allowed="the same number in both",
            )
        found.ports = count
    elif name == "reference":
        found.reference += [number_of(token, where) for token in argument.split()]
    elif name in ("number of frequencies",):
        _count(argument, where, "[Number of Frequencies]")
    elif name == "mixed-mode order" and any(word[0] in "dc" for word in argument.lower().split()):
        raise InputError(
            f"[Mixed-Mode Order] {argument}: differential and common modes are no ports of elements.",
            where=where,
            allowed="single-ended ports",
            hint="Export single-ended data.",
        )
    elif name == "matrix format" and argument.lower() not in ("full", "lower", "upper"):
        raise InputError(f"[Matrix Format] {argument} is unknown.", where=where, allowed="Full, Lower or Upper")
    elif name == "two-port data order" and argument not in ("12_21", "21_12"):
        raise InputError(f"[Two-Port Data Order] {argument} is unknown.", where=where, allowed="12_21 or 21_12")


def _count(text: str, where: str, keyword: str) -> int:
    if not re.fullmatch(r"[1-9]\d*", text):
        raise InputError(f"{keyword} '{text}' is no count.", where=where, allowed="a whole number from 1")
    return int(text)


def _complete(found: TouchstoneText) -> None:
    """What must be there is there."""
    if found.version != "1.0":
        needed = ["number of ports", "number of frequencies", "network data", "end"]
        if found.ports == 2:
            needed.append("two-port data order")
        for name in needed:
            if name not in found.keywords:
                hint = "The file was cut off." if name == "end" else ""
                raise InputError(
                    f"[{name.title()}] is missing.", allowed="all keywords Touchstone 2 requires", hint=hint
                )
        if "reference" in found.keywords and len(found.reference) != found.ports:
            raise InputError(
                f"[Reference] gives {len(found.reference)} resistances.", allowed=f"{found.ports}, one per port"
            )
        if any(r <= 0 for r in found.reference):
            raise InputError(f"[Reference] gives {min(found.reference):g} ohm.", allowed="above zero")
    if found.option is None:
        raise InputError("there is no option line.", allowed="a line such as '# GHz S RI R 50'")
    if found.ports is None:
        raise InputError("the number of ports is not stated.", allowed="[Number of Ports]")
    if len(found.option[2]) not in (1, found.ports):
        raise InputError(
            f"the option line gives {len(found.option[2])} resistances.", allowed=f"one, or {found.ports}: one per port"
        )
    if not found.rows:
        raise InputError("there is no data after the head.", hint="The file was cut off.")


def _check_rows(found: TouchstoneText) -> None:
    """Every frequency has its matrix, and frequencies rise."""
    for i, (number, values) in enumerate(found.rows):
        if len(values) != found.numbers:
            last = i == len(found.rows) - 1 and i > 0 and len(values) < found.numbers
            fits = math.isqrt(max(len(values) - 1, 0) // 2)
            other = len(values) == 1 + 2 * fits**2 and fits != found.ports
            raise InputError(
                f"the frequency has {len(values)} numbers.",
                where=f"line {number}",
                allowed=f"{found.numbers} for {found.ports} ports, frequency included",
                hint="The file was cut off." if last else f"The numbers would fit {fits} ports." if other else "",
            )
        if i and values[0] <= found.rows[i - 1][1][0]:
            before = found.rows[i - 1][1][0]
            same = values[0] == before
            raise InputError(
                f"frequency {values[0]:g} {'stands twice' if same else f'follows {before:g}'}.",
                where=f"line {number}",
                allowed="rising frequencies",
            )
    if found.rows[0][1][0] < 0:
        raise InputError(f"frequency {found.rows[0][1][0]:g} is negative.", where=f"line {found.rows[0][0]}")
    stated = found.keywords.get("number of frequencies")
    if stated is not None and int(stated) != len(found.rows):
        raise InputError(
            f"there are {len(found.rows)} frequencies.",
            allowed=f"{stated}, as [Number of Frequencies] says",
            hint="The file was cut off." if len(found.rows) < int(stated) else "",
        )
