"""The vocabulary of the case file: every table and key, its kind, range, default and one line of explanation.

Reader, error messages and documentation all take their words from here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

DEGREE = 0.017453292519943295
STEEPEST = 89.9 * DEGREE  # at 90 deg the wave runs along the array and the periodic sums have no limit

# Largest counts a case may ask for, so that a slip of a digit is told rather than tried.
MOST_FREQUENCIES = 2001
MOST_DIRECTIONS = 20000
MOST_MAP_POINTS = 201
MOST_ROWS = 2000
MOST_TABLES = 200
MOST_SOLUTIONS = 1_000_000  # frequencies times directions


@dataclass(frozen=True)
class Key:
    """One key of a table.

    Attributes
    ----------
    kind : a quantity of `quantity.UNITS`, or "text", "flag", "count", "choice", "wave" (amplitude @ phase),
        "along" (length or fraction), "co" (polarisation), "any" (read later by the table's own rule)
    text : one line of explanation
    shape : () a single value, (3,) three values, ("n", 3) a list of such, ("n",) a list
    required, default : default None means "not given"; else as it would be written in the file
    low, high : allowed range in SI (angles rad); `above` instead of `low` when the bound itself is excluded
    choices : the words allowed
    """

    kind: str
    text: str
    shape: tuple[int | str, ...] = ()
    required: bool = False
    default: object = None
    low: float | None = None
    above: float | None = None
    high: float | None = None
    choices: tuple[str, ...] = ()


@dataclass(frozen=True)
class Table:
    """One table: its title in the file, an explanation, and its keys in the order they are documented."""

    title: str
    text: str
    keys: Mapping[str, Key]


def _table(title: str, text: str, /, **keys: Key) -> Table:
    return Table(title, text, MappingProxyType(keys))


def _length(text: str, **more: object) -> Key:
    return Key("length", text, above=0.0, **more)  # type: ignore[arg-type]


def _point(text: str, **more: object) -> Key:
    return Key("length", text, shape=(3,), **more)  # type: ignore[arg-type]


def _direction(text: str, default: tuple[int, int, int]) -> Key:
    return Key("ratio", text, shape=(3,), default=list(default))


TOP = _table(
    "top level",
    "What the case is, and whether there is a ground plane.",
    title=Key("text", "What the case is, in one line.", required=True),
    notes=Key("text", "Free text: assumptions, sources, history.", default=""),
    ground=Key("flag", "A perfectly conducting plane at z = 0 below everything.", default=False),
    expected_verdict=Key("choice", "In ready-made cases: whether the limits are expected to be met.",
                         choices=("met", "failed"), default="met"),
)  # fmt: skip

LAYER = _table(
    "[[layer]]",
    "A dielectric layer; from z = 0 upwards in the order given. Below the first: the ground, or air.",
    name=Key("text", "Name, unique among the layers.", default=""),
    thickness=_length("Thickness.", required=True),
    permittivity=Key("ratio", "Relative permittivity, real part; below 1 only with `artificial`.", required=True,
                     above=0.0, high=1000.0),
    loss_tangent=Key("ratio", "Loss tangent: the permittivity is permittivity (1 - j loss_tangent). A plain number, "
                     "not in per cent.", default=0, low=0.0, high=1.0),
    permeability=Key("ratio", "Relative permeability.", default=1, above=0.0, high=1000.0),
    artificial=Key("flag", "The material is an artificial one, whose permittivity or permeability may lie below 1.",
                   default=False),
)  # fmt: skip

SHEET = _table(
    "[[sheet]]",
    "A sheet much thinner than a wavelength, given by its surface impedance, the same at all frequencies. Conductors "
    "keep away from it (about a seventh of the lattice period; the message tells how far).",
    name=Key("text", "Name in messages and the table of losses.", default=""),
    height=Key("length", "Height above z = 0."),
    on=Key("text", "Instead of `height`: the layer on whose upper face the sheet lies."),
    resistance=Key("resistance", "Real part, ohm per square.", default="0 ohm", low=0.0),
    reactance=Key("resistance", "Imaginary part, ohm per square; capacitive sheets have it negative.",
                  default="0 ohm"),
)  # fmt: skip

BAND = _table(
    "[band]",
    "Frequencies: start, stop and points, or one frequency, or a list of them.",
    start=Key("frequency", "Lowest frequency.", above=0.0),
    stop=Key("frequency", "Highest frequency.", above=0.0),
    points=Key("count", "Number of frequencies from start to stop, evenly spaced.", low=1, high=MOST_FREQUENCIES),
    frequency=Key("frequency", "A single frequency.", above=0.0),
    frequencies=Key("frequency", "A list of frequencies.", shape=("n",), above=0.0),
)

LATTICE = _table(
    "[lattice]",
    "Where the elements stand: two vectors in the plane of the array.",
    a=Key("length", "First lattice vector (x, y).", shape=(2,), required=True),
    b=Key("length", "Second lattice vector (x, y).", shape=(2,), required=True),
)

_COMMON = {
    "kind": Key("text", "Which conductor: wire, strip, plate, disc, polygon or mesh.", required=True),
    "name": Key("text", "Name, unique in the case.", required=True),
    "element_size": _length("Target size of this conductor's mesh elements; default: that of [mesh]."),
}
_METAL = {
    "conductivity": Key("conductivity", "Bulk conductivity; without it the metal is perfect.", above=0.0),
}
_SHEET = {
    **_METAL,
    "sheet_resistance": Key("resistance", "Surface resistance in ohm per square.", low=0.0),
    "metal_thickness": _length("Metal thickness; goes with conductivity. Default: many skin depths."),
}
_WIRE = {**_METAL, "wire_resistance": Key("resistance_per_length", "Series resistance of the wire.", low=0.0)}
_NORMAL = {"normal": _direction("Direction the face looks, any length.", (0, 0, 1))}

CONDUCTORS: Mapping[str, Table] = MappingProxyType({
    "wire": _table("[[conductor]]", "Round wire along a polyline.",
        **_COMMON,
        points=Key("length", "Corners of the axis (x, y, z), at least two.", shape=("n", 3), required=True),
        radius=_length("Radius of the wire.", required=True),
        **_WIRE),
    "strip": _table("[[conductor]]", "Flat strip along a straight centre line.",
        **_COMMON,
        start=_point("Start of the centre line.", required=True),
        end=_point("End of the centre line.", required=True),
        width=_length("Width across.", required=True),
        **_NORMAL, **_SHEET),
    "plate": _table("[[conductor]]", "Flat rectangle.",
        **_COMMON,
        centre=_point("Centre.", required=True),
        size=Key("length", "Size along axis, and across.", shape=(2,), required=True, above=0.0),
        axis=_direction("Direction of the first side, any length.", (1, 0, 0)),
        **_NORMAL, **_SHEET),
    "disc": _table("[[conductor]]", "Flat disc, or ring.",
        **_COMMON,
        centre=_point("Centre.", required=True),
        radius=_length("Radius.", required=True),
        inner_radius=Key("length", "Radius of the hole; 0 for a full disc.", default=0, low=0.0),
        **_NORMAL, **_SHEET),
    "polygon": _table("[[conductor]]", "Flat polygon.",
        **_COMMON,
        points=Key("length", "Corners (x, y, z) in order, at least three, in one plane.", shape=("n", 3),
                   required=True),
        **_SHEET),
    "mesh": _table("[[conductor]]", "Triangles and lines from a mesh file.",
        **_COMMON,
        file=Key("text", "Mesh file, relative to the case file.", required=True),
        unit=_length("Length of one unit of the file.", required=True),
        offset=_point("Where the file's origin goes.", default=[0, 0, 0]),
        wire_radius=_length("Radius of the file's lines, which become wires."),
        **_SHEET, wire_resistance=_WIRE["wire_resistance"]),
})  # fmt: skip

_PLACE = {
    "name": Key("text", "Name, unique among ports and loads.", required=True),
    "conductor": Key("text", "Name of the conductor the gap is cut into.", required=True),
    "at": _point("Middle of the gap, on the centre line of a wire or strip."),
    "along": Key("along", "Instead of `at`: length along the centre line from its start, or fraction of it."),
    "base": Key("flag", "Instead of `at`: the gap sits at the wire's foot on the ground.", default=False),
    "line": Key("length", "Instead of `at`, on plate, disc, polygon, mesh: the two ends of the gap line; "
                "positive current crosses it from right to left, seen from the side the normal looks to.",
                shape=(2, 3)),
    "width": _length("Width of the gap along the current; default: 4 radii on a wire, the strip's width on a "
                     "strip, the length of the gap line elsewhere."),
    "reverse": Key("flag", "Reverse the sense of positive current (default: from start to end of the "
                   "conductor; at a base: up from the ground).", default=False),
}  # fmt: skip

PORT = _table(
    "[[port]]",
    "A gap with a generator.",
    **_PLACE,
    resistance=Key("resistance", "Reference and generator resistance.", default="50 ohm", above=0.0, high=1e6),
    drive=Key("wave", "Amplitude @ phase of the case's excitation, as a power wave.", default="1 @ 0 deg"),
)

LOAD = _table(
    "[[load]]",
    "A gap with lumped resistance, inductance and capacitance in series; all zero: a short.",
    **_PLACE,
    resistance=Key("resistance", "Series resistance.", default="0 ohm", low=0.0),
    inductance=Key("inductance", "Series inductance.", default="0 nH", low=0.0),
    capacitance=Key("capacitance", "Series capacitance; left out: none.", above=0.0),
)

SCAN = _table(
    "[scan]",
    "Scan directions: cuts and a u-v map inside a cone, or a list of directions.",
    cone=Key("angle", "Half-angle of the scan volume.", default="60 deg", above=0.0, high=STEEPEST),
    planes=Key("angle", "Azimuths of the cuts, each from -cone to cone; [] for none. Default 0, 45, 90 deg, "
               "or none where points or cosines are given.", shape=("n",),
               low=-720 * DEGREE, high=720 * DEGREE),
    step=Key("angle", "Step along the cuts.", default="2 deg", low=0.01 * DEGREE, high=45 * DEGREE),
    grid=Key("count", "Points per axis of the u-v map, odd; 0 for none. Default 11, or 0 where points or "
             "cosines are given.", low=0, high=MOST_MAP_POINTS),
    points=Key("angle", "Single directions [theta, phi].", shape=("n", 2)),
    cosines=Key("ratio", "Single directions [u, v]; invisible space is allowed here only.", shape=("n", 2),
                low=-20.0, high=20.0),
)  # fmt: skip

POLARISATION = _table(
    "[polarisation]",
    "Which polarisation is wanted.",
    co=Key("co", 'Co-polar: "x", "y", an angle from x (Ludwig 3), or circular "right" or "left" (IEEE).',
           default="x"),
)  # fmt: skip

MESH = _table(
    "[mesh]",
    "How finely the conductors are cut up.",
    element_size=_length("Target edge length of the elements."),
    per_wavelength=Key("ratio", "Instead: elements per wavelength at the highest frequency. Default 20.",
                       low=6.0, high=400.0),
    method=Key("choice", "structured: regular, canonical shapes only; unstructured: any shape.",
               choices=("structured", "unstructured"), default="structured"),
)  # fmt: skip

ACCURACY = _table(
    "[accuracy]",
    "How exactly the periodic sums are carried out, and how the points are solved.",
    tolerance=Key("ratio", "Relative accuracy of the sums.", default=1e-6, low=1e-12, high=1e-2),
    solver=Key("choice", "reduced: from a model made of few full solutions, with a certified error, which also surveys "
               "the whole scan volume; direct: every point by a full solution, and nothing between the points.",
               choices=("reduced", "direct"), default="reduced"),
    reduced_error=Key("ratio", "Wanted error of the active reflection of the reduced model.", default=1e-4, low=1e-8,
                      high=1e-2),
)  # fmt: skip

LIMITS = _table(
    "[limits]",
    "What the element must meet, over the band and the cone.",
    reflection=Key("level", "Active reflection of every port under the case's drive, at most.", high=0.0),
    port=Key("text", "Restrict `reflection` to this port."),
    gain_drop=Key("level", "Realised co-polar gain below broadside, at most.", low=0.0),
    cross_polar=Key("level", "Cross-polar relative to co-polar, at most.", high=60.0),
    axial_ratio=Key("level", "Axial ratio, at most.", low=0.0),
    efficiency=Key("ratio", "Radiated over accepted power, at least.", above=0.0, high=1.0),
    grating_lobe=Key("level", "Grating lobes relative to the main wave, at most.", high=60.0),
    cone=Key("angle", "Half-angle where the limits hold; default: the scan cone.", above=0.0, high=STEEPEST),
)

BREADBOARD = _table(
    "[breadboard]",
    "The finite array that will be built and measured; row i, column j stands at j a + i b.",
    rows=Key("count", "Number of rows.", low=1, high=64),
    columns=Key("count", "Number of columns.", low=1, high=64),
    missing=Key("count", "Elements left out, [row, column] counted from 0.", shape=("n", 2)),
    cells=Key("count", "Instead of rows and columns: all cells [m, n] that carry an element, at m a + n b.",
              shape=("n", 2)),
    rim=Key("count", "Rings of outermost elements that are dummies.", default=0, low=0, high=8),
    dummies=Key("count", "Further elements that are dummies, [row, column] counted from 0.", shape=("n", 2)),
    termination=Key("choice", "What the dummies' ports end in; loaded: in `load`.",
                    choices=("matched", "open", "short", "loaded"), default="matched"),
    load=Key("resistance", "Resistance of loaded dummies.", low=0.0),
    points=Key("count", "Frequencies over the band at which the array is solved.", low=1, high=101),
    edge_taper=Key("level", "Level of the outermost elements in the excitation, cosine on a pedestal; 0 dB: uniform.",
                   default="0 dB", low=-60.0, high=0.0),
    alike=Key("ratio", "Largest difference between the centre element's active reflection and that of the infinite "
              "array with which the array counts as large enough.", default=0.05, above=0.0, high=1.0),
    largest=Key("count", "Largest square array tried for that.", default=15, low=3, high=31),
    error=Key("ratio", "Wanted error of every scattering parameter.", default=1e-4, low=1e-8, high=1e-2),
)  # fmt: skip

TOLERANCE = _table(
    "[[tolerance]]",
    "How far a parameter may be off in what is built. With [breadboard], the scattering matrix is predicted for both "
    "ends, so that a comparison with a measurement can fit the parameter within them.",
    parameter=Key("text", "Name of a parameter of [parameters].", required=True),
    value=Key("any", "Largest deviation to either side, in the parameter's unit.", required=True),
)  # fmt: skip

EXPECTED: Mapping[str, str] = MappingProxyType({
    "resistance": "resistance", "reactance": "resistance", "reflection": "level", "gain": "level",
    "cross_polar": "level", "axial_ratio": "level", "efficiency": "ratio",
})  # fmt: skip

EXPECT = _table(
    "[[expect]]",
    "A number the case must give, and where it comes from.",
    quantity=Key("choice", "What is expected.", required=True, choices=tuple(EXPECTED)),
    value=Key("any", "The value, with its unit.", required=True),
    tolerance=Key("any", "Largest deviation, in the same unit.", required=True),
    origin=Key("text", "Where the value comes from.", required=True),
    frequency=Key("frequency", "Which frequency of the band; may be left out if there is one only.", above=0.0),
    theta=Key("angle", "Scan angle from broadside.", default="0 deg", low=0.0, high=STEEPEST),
    phi=Key("angle", "Azimuth from x.", default="0 deg"),
    port=Key("text", "Which port; default: the first."),
)

SINGLE: Mapping[str, Table] = MappingProxyType({
    "band": BAND, "lattice": LATTICE, "scan": SCAN, "polarisation": POLARISATION, "mesh": MESH,
    "accuracy": ACCURACY, "limits": LIMITS, "breadboard": BREADBOARD,
})  # fmt: skip
REPEATED: Mapping[str, Table | Mapping[str, Table]] = MappingProxyType({
    "layer": LAYER, "sheet": SHEET, "conductor": CONDUCTORS, "port": PORT, "load": LOAD, "tolerance": TOLERANCE,
    "expect": EXPECT,
})  # fmt: skip
