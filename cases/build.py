"""Conductors, ports, loads, limits and expectations from the values of their tables."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ..geometry.conductor import Conductor, Disc, Material, MeshFile, Plate, Polygon, Strip, Wire
from ..geometry.errors import InputError, nearest
from ..geometry.lattice import Lattice
from ..geometry.mesh_file import read_mesh_file
from ..geometry.place import Placement
from ..geometry.port import Gap, Load, Port
from .fields import Values, in_words, read_value
from .job import Expectation, Limit
from .quantity import Quantities
from .schema import EXPECTED, Key

Floats = NDArray[np.float64]

LONGEST_GAP = 0.1  # wavelengths: a wider gap is no lumped port
CLOSEST, FARTHEST = 0.01, 20.0  # shortest and longest lattice vector, wavelengths
THICKEST_WIRE = 0.05  # wavelengths: beyond it the current varies around the wire


def build_material(values: Values, where: str) -> Material:
    """Material keys of a conductor; raises InputError where two of them contradict each other."""
    given = [
        name
        for name in ("sheet_resistance", "wire_resistance", "conductivity")
        if values.get(name) is not None
    ]
    if "conductivity" in given and len(given) > 1:
        raise InputError(
            f"{' and '.join(given)} are given together.",
            where=where,
            allowed="either conductivity, or a resistance",
        )
    thickness = values.get("metal_thickness")
    if thickness is not None and "conductivity" not in given:
        raise InputError(
            f"metal_thickness = {in_words(thickness, 'length')} is given without conductivity.",
            where=f"{where}, key 'metal_thickness'",
            allowed="metal_thickness together with conductivity",
        )
    return Material(
        sheet_resistance=values.get("sheet_resistance"),
        wire_resistance=values.get("wire_resistance"),
        conductivity=values.get("conductivity"),
        thickness=thickness,
    )


def build_conductor(values: Values, where: str, folder: Path) -> Conductor:
    """One conductor. Mesh files are looked for relative to `folder`."""
    v, kind = values, values["kind"]
    common = {"name": v["name"], "material": build_material(v, where), "element_size": v["element_size"]}
    if kind == "wire":
        return Wire(**common, points=v["points"], radius=v["radius"])
    if kind == "strip":
        return Strip(**common, start=v["start"], end=v["end"], width=v["width"], normal=v["normal"])
    if kind == "plate":
        return Plate(**common, centre=v["centre"], size=v["size"], axis=v["axis"], normal=v["normal"])
    if kind == "disc":
        return Disc(
            **common,
            centre=v["centre"],
            radius=v["radius"],
            inner_radius=v["inner_radius"],
            normal=v["normal"],
        )
    if kind == "polygon":
        return Polygon(**common, points=v["points"])
    path = folder / v["file"]
    if not path.is_file():
        told = "is a directory" if path.is_dir() else "does not exist"
        raise InputError(
            f"mesh file '{v['file']}' {told}.",
            where=f"{where}, key 'file'",
            allowed=f"a file in or below '{folder}'",
            hint=_similar_file(path),
        )
    return MeshFile(**common, path=path, scale=v["unit"], offset=v["offset"], wire_radius=v["wire_radius"])


def _similar_file(path: Path) -> str:
    names = [p.name for p in path.parent.iterdir()][:500] if path.parent.is_dir() else []
    return nearest(path.name, names)


def check_lattice(lattice: Lattice, wavelength: float) -> None:
    """Refuse a lattice too fine or too coarse to be one, at the shortest wavelength (m)."""
    for length in np.linalg.norm(lattice.reduced.vectors, axis=1):
        if not CLOSEST * wavelength <= length <= FARTHEST * wavelength:
            raise InputError(
                f"the lattice has the period {in_words(length, 'length')}, {length / wavelength:.3g} "
                "wavelengths at the highest frequency.",
                where="[lattice]",
                allowed=f"{CLOSEST:g} to {FARTHEST:g} wavelengths",
            )


def check_wire_radii(conductors: Sequence[Conductor], wavelength: float) -> None:
    """Refuse wires too thick for the thin-wire model at the shortest wavelength (m)."""
    for conductor in conductors:
        if isinstance(conductor, Wire) and conductor.radius > THICKEST_WIRE * wavelength:
            raise InputError(
                f"the radius {in_words(conductor.radius, 'length')} is "
                f"{conductor.radius / wavelength:.3g} wavelengths at the highest frequency.",
                where=f"[[conductor]] '{conductor.name}', key 'radius'",
                allowed=f"up to {in_words(THICKEST_WIRE * wavelength, 'length')} (thin-wire model)",
                hint="A thicker conductor can be given as strips, or as a mesh of its surface.",
            )


def read_mesh_shapes(conductors: Sequence[Conductor], tolerance: float) -> dict[str, tuple[Floats, Floats]]:
    """Triangles (n, 3, 3) and lines (n, 2, 3), m, of every conductor that is a mesh file, by name."""
    shapes = {}
    for conductor in conductors:
        if isinstance(conductor, MeshFile):
            try:
                points, triangles, lines = read_mesh_file(conductor, tolerance)
            except InputError as fault:
                where = fault.where.replace("key 'path'", "key 'file'")  # as the case file calls it
                raise InputError(
                    fault.message, where=where, allowed=fault.allowed, hint=fault.hint
                ) from fault
            shapes[conductor.name] = points[triangles], points[lines]
    return shapes


def build_placement(values: Values) -> Placement:
    """The place keys that ports and loads share."""
    return Placement(
        conductor=values["conductor"],
        at=values["at"],
        along=values["along"],
        base=values["base"],
        line=values["line"],
        width=values["width"],
        reverse=values["reverse"],
    )


def check_gap_width(gap: Gap, wavelength: float, where: str) -> None:
    """Refuse a gap so wide that it is no lumped element at the shortest wavelength (m)."""
    if gap.width > LONGEST_GAP * wavelength:
        raise InputError(
            f"the gap of {in_words(gap.width, 'length')} is {gap.width / wavelength:.3g} wavelengths wide at "
            "the highest frequency.",
            where=f"{where}, key 'width'",
            allowed=f"up to {in_words(LONGEST_GAP * wavelength, 'length')}",
        )


def build_port(values: Values, gap: Gap) -> Port:
    """A port in its gap."""
    return Port(values["name"], gap, values["resistance"], values["drive"])


def build_load(values: Values, gap: Gap) -> Load:
    """A load in its gap."""
    return Load(values["name"], gap, values["resistance"], values["inductance"], values["capacitance"])


def build_limits(values: Values, cone: float, ports: Sequence[Port], where: str) -> tuple[Limit, ...]:
    """The requirements, in the order of the schema."""
    within = cone if values["cone"] is None else values["cone"]
    if within > cone * (1 + 1e-9):
        raise InputError(
            f"the limits' cone of {in_words(within, 'angle')} is wider than the scan cone.",
            where=f"{where}, key 'cone'",
            allowed=f"up to the scan cone, {in_words(cone, 'angle')}",
        )
    port = values["port"]
    if port is not None:
        _known_port(port, ports, f"{where}, key 'port'")
        if values["reflection"] is None:
            raise InputError(
                f"port '{port}' is named without a limit on reflection.",
                where=f"{where}, key 'port'",
                allowed="port together with reflection",
            )
    quantities = ("reflection", "gain_drop", "cross_polar", "axial_ratio", "efficiency", "grating_lobe")
    return tuple(
        Limit(name, values[name], within, port if name == "reflection" else None)
        for name in quantities
        if values[name] is not None
    )


def _known_port(name: str, ports: Sequence[Port], where: str) -> None:
    names = [port.name for port in ports]
    if name not in names:
        raise InputError(
            f"there is no port '{name}'.",
            where=where,
            allowed=", ".join(names) or "no port at all",
            hint=nearest(name, names),
        )


def build_expectation(
    values: Values, frequencies: Floats, ports: Sequence[Port], where: str, quantities: Quantities
) -> Expectation:
    """One expectation; its value and tolerance take the unit of its quantity, written back to `values`."""
    kind = EXPECTED[values["quantity"]]
    for name, key in (("value", Key(kind, "")), ("tolerance", Key(kind, "", above=0.0))):
        values[name] = read_value(values[name], key, f"{where}, key '{name}'", quantities)
    frequency = values["frequency"]
    if frequency is None:
        if len(frequencies) > 1:
            raise InputError(
                f"frequency is missing, and the band has {len(frequencies)} of them.",
                where=where,
                allowed="one frequency of the band",
            )
        frequency = values["frequency"] = float(frequencies[0])
    nearest_one = float(frequencies[np.argmin(abs(frequencies - frequency))])
    if abs(nearest_one - frequency) > 1e-6 * frequency:
        raise InputError(
            f"{in_words(frequency, 'frequency')} is not a frequency of the band.",
            where=f"{where}, key 'frequency'",
            allowed=f"the frequencies of [band]; the nearest is {in_words(nearest_one, 'frequency')}",
        )
    if values["port"] is not None:
        _known_port(values["port"], ports, f"{where}, key 'port'")
    return Expectation(
        values["quantity"],
        values["value"],
        values["tolerance"],
        values["origin"],
        nearest_one,
        values["theta"],
        values["phi"],
        values["port"],
    )


def build_frequencies(values: Values, where: str = "[band]") -> Floats:
    """Ascending frequencies (n,), Hz."""
    ways = [name for name in ("start", "frequency", "frequencies") if values[name] is not None]
    stray = [name for name in ("stop", "points") if values[name] is not None and "start" not in ways]
    if len(ways) != 1 or stray:
        given = [name for name in values if values[name] is not None]
        raise InputError(
            f"the band is given by {', '.join(given) or 'nothing'}.",
            where=where,
            allowed="start, stop and points; or frequency; or frequencies",
        )
    if ways == ["frequency"]:
        return np.array([values["frequency"]])
    if ways == ["frequencies"]:
        return _listed(values["frequencies"], where)
    for name in ("stop", "points"):
        if values[name] is None:
            raise InputError(f"'{name}' is missing.", where=where, allowed="start, stop and points together")
    start, stop, points = values["start"], values["stop"], values["points"]
    if stop < start or (points == 1) != (stop == start):
        ends = f"start = {in_words(start, 'frequency')}, stop = {in_words(stop, 'frequency')}"
        raise InputError(
            f"{ends}, points = {points} is no band.",
            where=where,
            allowed="start below stop with two points or more, or both equal with one",
        )
    return np.linspace(start, stop, points)


def _listed(frequencies: Floats, where: str) -> Floats:
    if not len(frequencies):
        raise InputError("the list of frequencies is empty.", where=f"{where}, key 'frequencies'")
    if np.any(np.diff(frequencies) <= 0):
        raise InputError(
            "the frequencies do not rise.",
            where=f"{where}, key 'frequencies'",
            allowed="each above the one before",
        )
    return frequencies


def check_names(places: Mapping[str, Sequence[Values]]) -> None:
    """Names are unique among conductors, and among ports and loads together."""
    for group in (("conductor",), ("port", "load")):
        seen: dict[str, str] = {}
        for table in group:
            for number, values in enumerate(places[table], start=1):
                name = values["name"]
                if name in seen:
                    raise InputError(
                        f"the name '{name}' is used twice.",
                        where=f"[[{table}]] number {number}, key 'name'",
                        allowed=f"names other than {', '.join(sorted(seen))}",
                    )
                seen[name] = table
