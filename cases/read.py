"""A case file read into a `Job`: every table checked, every quantity in SI, the cell meshed."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ..geometry.cell import UnitCell
from ..geometry.conductor import Conductor
from ..geometry.errors import InputError, nearest
from ..geometry.gap_checks import check_gaps
from ..geometry.lattice import Lattice
from ..geometry.placement import place_gap
from ..geometry.port import Load, Port
from ..geometry.stack import Stack
from . import build
from .bench_plan import build_breadboard, build_tolerance
from .fields import Values, read_table, write_table
from .job import Expectation, Job, ScanPlan
from .layers import build_stack, check_conductors, check_sheets, refuse_endless, sized
from .quantity import SPEED_OF_LIGHT, Quantities
from .scan_plan import build_scan_plan
from .schema import CONDUCTORS, MOST_SOLUTIONS, MOST_TABLES, REPEATED, SINGLE, STEEPEST, TOP, Table

LARGEST_FILE = 5_000_000  # bytes
ELEMENTS_PER_WAVELENGTH = 20.0


def read_case(path: str | Path, overrides: Mapping[str, str] | None = None) -> Job:
    """Read and mesh the case file at `path`.

    Parameters
    ----------
    overrides
        Values that replace those of `[parameters]`, such as ``{"arm": "12.8 mm"}``.

    Raises
    ------
    InputError
        For anything wrong with the file or the case, located with the file's name.
    """
    path = Path(path)
    try:
        return parse_case(_load(path), path=path, overrides=overrides)
    except InputError as fault:
        raise fault.located(str(path)) from fault.__cause__


def _load(path: Path) -> str:
    if path.is_dir():
        raise InputError("this is a directory.", allowed="a case file (TOML)")
    try:
        data = path.read_bytes() if path.stat().st_size <= LARGEST_FILE else None
    except FileNotFoundError:
        siblings = [p.name for p in path.parent.glob("*.toml")] if path.parent.is_dir() else []
        raise InputError("there is no such file.", hint=nearest(path.name, siblings)) from None
    except OSError as fault:
        raise InputError(f"the file cannot be opened: {fault.strerror}.") from None
    except ValueError as fault:  # a null byte in the name
        raise InputError(f"the file cannot be opened: {fault}.") from None
    if data is None:
        raise InputError(f"the file has {path.stat().st_size} bytes.", allowed=f"at most {LARGEST_FILE}")
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as fault:
        line = data[: fault.start].count(b"\n") + 1
        raise InputError(
            f"the file is not UTF-8 text: byte 0x{data[fault.start]:02x} in line {line}.", allowed="UTF-8"
        ) from None
    if not text.strip():
        raise InputError("the file is empty.", allowed="a case with title, [band], [lattice], [[conductor]], [[port]]")
    return text


def parse_case(text: str, *, path: Path | None = None, overrides: Mapping[str, str] | None = None) -> Job:
    """Like `read_case`, from text; mesh files are looked for beside `path` (default: working directory)."""
    raw = _parse_toml(text)
    _check_tables(raw)
    quantities = Quantities(_plain_table(raw, "parameters"), overrides)
    top = read_table({name: value for name, value in raw.items() if name in TOP.keys}, TOP, "top level", quantities)
    single = {name: _single(raw, name, table, quantities) for name, table in SINGLE.items()}
    if "breadboard" not in raw:
        single["breadboard"] = dict.fromkeys(single["breadboard"])
    repeated = {name: _repeated(raw, name, quantities) for name in REPEATED}
    build.check_names(repeated)
    if not repeated["conductor"]:
        raise InputError("there is no [[conductor]].", allowed="at least one")
    draft = _draft(top, single, repeated, (path or Path("case.toml")).parent)
    expect = tuple(
        build.build_expectation(values, draft.frequencies, draft.ports, _place("expect", k, values), quantities)
        for k, values in enumerate(repeated["expect"], start=1)
    )
    scan = _scan_plan(single["scan"], expect)
    _check_solutions(len(draft.frequencies), len(scan.points))
    co_polar, angle = _polarisation(single["polarisation"]["co"])
    return Job(
        title=top["title"],
        path=path,
        text=_resolved(top, single, repeated),
        cell=draft.cell(),
        frequency=draft.frequencies,
        scan=scan,
        limits=build.build_limits(single["limits"], scan.cone, draft.ports, "[limits]"),
        tolerance=single["accuracy"]["tolerance"],
        co_polar=co_polar,
        co_polar_angle=angle,
        element_size=draft.element_size,
        remesh=draft.cell,
        expect=expect,
        expected_to_fail=top["expected_verdict"] == "failed",
        reduced_error=single["accuracy"]["reduced_error"] if single["accuracy"]["solver"] == "reduced" else None,
        breadboard=build_breadboard(single["breadboard"], draft.frequencies) if "breadboard" in raw else None,
        tolerances=tuple(
            build_tolerance(values, _place("tolerance", n, values), raw.get("parameters", {}), quantities)  # type: ignore[arg-type]
            for n, values in enumerate(repeated["tolerance"], start=1)
        ),
        vary=_Variation(text, path, dict(overrides or {})),
    )


@dataclass(frozen=True)
class _Variation:
    """The case with more parameters replaced; a job that holds it can be sent to another process."""

    text: str
    path: Path | None
    overrides: dict[str, str]

    def __call__(self, changes: Mapping[str, str]) -> Job:
        return parse_case(self.text, path=self.path, overrides={**self.overrides, **changes})


def _parse_toml(text: str) -> dict[str, object]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as fault:
        raise InputError(f"this is not TOML: {fault}.", hint='Quantities stand in quotes: radius = "0.5 mm".') from None
    except ValueError:
        raise InputError("this is not TOML: a whole number has thousands of digits.") from None
    except RecursionError:
        raise InputError("the lists are nested too deep to be a case.") from None


def _check_tables(raw: Mapping[str, object]) -> None:
    known = [*TOP.keys, "parameters", *SINGLE, *REPEATED]
    for name, value in raw.items():
        if name not in known:
            kind = "table" if isinstance(value, (dict, list)) else "key"
            raise InputError(
                f"there is no {kind} '{name}'.",
                where="top level",
                allowed=", ".join(known),
                hint=nearest(name, known),
            )
    if isinstance(raw.get("ground"), dict):
        raise InputError("[ground] is no table.", where="[ground]", hint="Write ground = true above the first table.")


def _plain_table(raw: Mapping[str, object], name: str) -> dict[str, object]:
    value = raw.get(name, {})
    if not isinstance(value, dict):
        raise InputError(f"'{name}' is not a table.", where=name, allowed=f"[{name}]")
    return value


def _single(raw: Mapping[str, object], name: str, table: Table, quantities: Quantities) -> Values:
    if name not in raw and name in ("band", "lattice"):
        raise InputError(f"[{name}] is missing.", allowed=f"[{name}] with {', '.join(table.keys)}")
    if isinstance(raw.get(name), list):
        raise InputError(f"[[{name}]] is given as a list of tables.", where=f"[[{name}]]", allowed=f"one [{name}]")
    return read_table(raw.get(name, {}), table, f"[{name}]", quantities)


def _repeated(raw: Mapping[str, object], name: str, quantities: Quantities) -> list[Values]:
    rows = raw.get(name, [])
    if not isinstance(rows, list) or not all(isinstance(row, dict) for row in rows):
        raise InputError(f"'{name}' is not a list of tables.", where=f"[{name}]", allowed=f"[[{name}]], once for each")
    if len(rows) > MOST_TABLES:
        raise InputError(f"there are {len(rows)} tables.", where=f"[[{name}]]", allowed=f"at most {MOST_TABLES}")
    out = []
    for number, row in enumerate(rows, start=1):
        place = _place(name, number, row)
        table = REPEATED[name]
        if not isinstance(table, Table):
            table = _conductor_table(row, place)
        if name == "layer":
            refuse_endless(row, place)
        out.append(read_table(row, table, place, quantities))
    return out


def _conductor_table(row: Mapping[str, object], place: str) -> Table:
    kind = row.get("kind")
    if not isinstance(kind, str) or kind not in CONDUCTORS:
        told = "'kind' is missing" if kind is None else f"'{kind}' is no kind of conductor"
        raise InputError(
            f"{told}.",
            where=f"{place}, key 'kind'",
            allowed=", ".join(CONDUCTORS),
            hint=nearest(str(kind), CONDUCTORS),
        )
    return CONDUCTORS[kind]


def _place(table: str, number: int, row: Mapping[str, object]) -> str:
    name = row.get("name", row.get("quantity"))
    return f"[[{table}]] '{name}'" if isinstance(name, str) and name else f"[[{table}]] number {number}"


@dataclass(frozen=True)
class _Draft:
    """The cell before it is meshed; `cell(factor)` meshes it with all elements longer by `factor`."""

    lattice: Lattice
    conductors: tuple[Conductor, ...]
    ports: tuple[Port, ...]
    loads: tuple[Load, ...]
    ground: bool
    frequencies: np.ndarray
    element_size: float
    method: str
    stack: Stack | None

    def cell(self, factor: float = 1.0) -> UnitCell:
        from ..geometry.mesher import mesh_conductors

        gaps = [terminal.gap for terminal in (*self.ports, *self.loads)]
        mesh = mesh_conductors(
            self.conductors,
            self.lattice,
            ground=self.ground,
            element_size=self.element_size,
            gaps=gaps,
            method=self.method,
            refinement=1.0 / factor,
            interfaces=() if self.stack is None else self.stack.interfaces[1 if self.ground else 0 :].tolist(),
        )
        return UnitCell(self.lattice, mesh, self.ports, self.loads, self.ground, self.stack)


def _draft(top: Values, single: Mapping[str, Values], repeated: Mapping[str, list[Values]], folder: Path) -> _Draft:
    frequencies = build.build_frequencies(single["band"])
    wavelength = SPEED_OF_LIGHT / float(frequencies[-1])
    lattice = Lattice(single["lattice"]["a"], single["lattice"]["b"])
    build.check_lattice(lattice, wavelength)
    conductors = [
        build.build_conductor(values, _place("conductor", k, values), folder)
        for k, values in enumerate(repeated["conductor"], start=1)
    ]
    build.check_wire_radii(conductors, wavelength)
    stack = build_stack(repeated["layer"], repeated["sheet"], ground=top["ground"], wavelength=wavelength)
    meshed = build.read_mesh_shapes(conductors, 1e-6 * wavelength)
    if stack is not None:
        check_conductors(conductors, stack, meshed)
        slowness = float(np.sqrt(np.abs(stack.permittivity * stack.permeability).max()))
        k_max = 2 * np.pi * slowness / wavelength
        check_sheets(conductors, stack, meshed, lattice, k_max, single["accuracy"]["tolerance"])
    gaps = []
    for table in ("port", "load"):
        for k, values in enumerate(repeated[table], start=1):
            where = _place(table, k, values)
            gap = place_gap(build.build_placement(values), conductors, ground=top["ground"], where=where, meshed=meshed)
            build.check_gap_width(gap, wavelength, where)
            values["width"] = gap.width
            gaps.append((where, gap))
    check_gaps(gaps, conductors, lattice)
    n = len(repeated["port"])
    ports = tuple(build.build_port(v, g) for v, (_, g) in zip(repeated["port"], gaps[:n], strict=True))
    loads = tuple(build.build_load(v, g) for v, (_, g) in zip(repeated["load"], gaps[n:], strict=True))
    if not any(abs(port.drive) > 0 for port in ports):
        told = "there is no [[port]]" if not ports else "every port's drive is zero"
        raise InputError(f"{told}.", where="[[port]]", allowed="at least one port that is driven")
    by_medium = stack is not None and single["mesh"]["element_size"] is None
    size = _element_size(single["mesh"], wavelength)
    if stack is not None and by_medium:
        conductors = sized(conductors, repeated["conductor"], stack, size)
    method = single["mesh"]["method"]
    return _Draft(lattice, tuple(conductors), ports, loads, top["ground"], frequencies, size, method, stack)


def _element_size(mesh: Values, wavelength: float) -> float:
    """Element size in m, written back into the table with the alternative removed."""
    size, count = mesh["element_size"], mesh["per_wavelength"]
    if size is not None and count is not None:
        raise InputError(
            "element_size and per_wavelength are given together.", where="[mesh]", allowed="one of the two"
        )
    if size is None:
        size = mesh["element_size"] = wavelength / (count or ELEMENTS_PER_WAVELENGTH)
    if size > wavelength / 6:
        raise InputError(
            f"element_size of {1e3 * size:.4g} mm is {size / wavelength:.3g} wavelengths at the highest frequency.",
            where="[mesh], key 'element_size'",
            allowed=f"up to a sixth, {1e3 * wavelength / 6:.4g} mm",
        )
    mesh["per_wavelength"] = None
    return float(size)


def _scan_plan(scan: Values, expect: tuple[Expectation, ...]) -> ScanPlan:
    listed = scan["points"] is not None or scan["cosines"] is not None
    if scan["planes"] is None:
        scan["planes"] = np.zeros(0) if listed else np.radians([0.0, 45.0, 90.0])
    if scan["grid"] is None:
        scan["grid"] = 0 if listed else 11
    points = np.zeros((0, 2)) if scan["points"] is None else scan["points"]
    for number, (theta, _) in enumerate(points, start=1):
        if not 0 <= theta <= STEEPEST * (1 + 1e-12):
            raise InputError(
                f"theta = {np.degrees(theta):.6g} deg is no direction of the half-space.",
                where=f"[scan], key 'points', entry {number}",
                allowed="theta from 0 to 89.9 deg",
                hint="Invisible space is reached by cosines = [[u, v], ...].",
            )
    points = np.concatenate([points, np.array([(e.theta, e.phi) for e in expect]).reshape(-1, 2)])
    return build_scan_plan(
        cone=scan["cone"],
        planes=scan["planes"],
        step=scan["step"],
        grid=scan["grid"],
        points=points,
        cosines=scan["cosines"],
    )


def _check_solutions(frequencies: int, directions: int) -> None:
    count = frequencies * directions
    if count > MOST_SOLUTIONS:
        raise InputError(
            f"{frequencies} frequencies times {directions} directions are {count} solutions.",
            where="[band] and [scan]",
            allowed=f"at most {MOST_SOLUTIONS}",
        )


def _polarisation(co: str | float) -> tuple[str, float]:
    """(co_polar, co_polar_angle) of the job; an angle is told as "x" turned by it."""
    if isinstance(co, str):
        return co, np.pi / 2 if co == "y" else 0.0
    return "x", co


def _resolved(top: Values, single: Mapping[str, Values], repeated: Mapping[str, list[Values]]) -> str:
    """The case as TOML text without parameters, in SI units, every default written out."""
    parts = [write_table(top, TOP, "")]
    for name, table in SINGLE.items():
        if any(value is not None for value in single[name].values()):
            parts.append(write_table(single[name], table, f"[{name}]"))
    for name, rows in repeated.items():
        for values in rows:
            if name == "tolerance":  # of parameters, which the resolved case has no more; the job keeps them apart
                continue
            table = REPEATED[name]
            parts.append(
                write_table(values, table if isinstance(table, Table) else table[values["kind"]], f"[[{name}]]")
            )
    return "\n".join(parts)
