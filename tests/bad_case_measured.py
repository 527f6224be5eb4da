"""Broken measured files: a sound one, one mistake, and what the error must say."""

from dataclasses import dataclass, field

from scanward.cases.invented_measurement import MARK


@dataclass(frozen=True)
class BadMeasured:
    """Files that replace the sound ones by name, and fragments of the message; `measured`: the Touchstone files."""

    name: str
    files: dict[str, str | bytes]
    says: tuple[str, ...]
    measured: tuple[str, ...] = ("data.s4p",)
    patterns: tuple[str, ...] = ()
    options: dict[str, str] = field(default_factory=dict)


def touchstone(option="# GHz S RI R 50", frequencies=(5.2, 5.3, 5.4, 5.5, 5.6), ports=4, rows=None, edit=None):
    """A file of a 4-port that hardly reflects and couples; `edit` changes its lines (data begin at lines[2])."""
    lines = [f"! {MARK}", option]
    for f in frequencies:
        for i in range(rows or ports):
            values = " ".join("0.1 0.02" if i == j else "0.01 -0.02" for j in range(ports))
            lines.append(f"{f} {values}" if i == 0 else f"  {values}")
    if edit is not None:
        edit(lines)
    return "\n".join(lines) + "\n"


def version2(**change):
    keys = {"Version": "2.0", "Number of Ports": "4", "Number of Frequencies": "5", "Reference": "50 50 50 50",
            "Matrix Format": "Full"} | {k.replace("_", " "): v for k, v in change.items()}  # fmt: skip
    end = keys.pop("End", "yes")
    head = [f"[{k}] {v}" if k != "Version" else f"[Version] {v}\n# GHz S RI R 50" for k, v in keys.items() if v]
    body = touchstone().splitlines()[2:]
    return "\n".join([*head, "[Network Data]", *body, *(["[End]"] if end else [])]) + "\n"


MAP = "measured port,row,column\n1,1,1\n2,1,2\n3,2,1\n4,2,2\n"
SOUND = {"data.s4p": touchstone(), "map.csv": MAP}


def put(index, text):
    return lambda lines: lines.__setitem__(index, text)


def cut(index):
    return lambda lines: lines.__delitem__(slice(index, None))


def swap(text, old, new):
    assert old in text
    return text.replace(old, new, 1)


def data(name, content, *says, **rest):
    return BadMeasured(name, {"data.s4p": content}, says, **rest)


def ts(name, content, *says):
    return BadMeasured(name, {"data.ts": content}, says, measured=("data.ts",))


def port_map(name, content, *says, **rest):
    return BadMeasured(name, {"map.csv": content}, says, **rest)


HEADER = "cut (deg),angle (deg),co (dBi),cross (dBi)\n"
CUT = "".join(f"0,{a},{3 - (a / 30) ** 2:.2f},-20\n" for a in range(-60, 61, 10))


def pattern(name, content, *says, **options):
    return BadMeasured(name, {"cut.csv": content}, says, patterns=("cut.csv",), options=options)


TOUCHSTONES = [
    data("cut off inside a frequency", touchstone(edit=cut(-2)), "line 19", "17 numbers", "33 for 4", "cut off"),
    data("cut off after the head", touchstone(edit=cut(2)), "no data", "cut off"),
    data("wrong number of ports", touchstone(ports=3), "19 numbers", "33 for 4 ports", "fit 3 ports"),
    data("a number missing", touchstone(edit=put(3, "  0.01 -0.02 0.1 0.02 0.01 -0.02 0.01")), "line 3", "9 numbers"),
    data("nan", touchstone(edit=put(3, "  nan 0 0 0 0 0 0 0")), "line 4", "'nan' is not a finite"),
    data("infinite", touchstone(edit=put(3, "  1e999 0 0 0 0 0 0 0")), "line 4", "'1e999' is not a finite"),
    data("text among numbers", touchstone(edit=put(3, "  0.1 ovl 0 0 0 0 0 0")), "line 4", "'ovl' is not a number"),
    data("decimal comma", touchstone(edit=put(3, "  0,1 0 0 0 0 0 0 0")), "line 4", "'0,1' has a decimal comma"),
    data("frequency twice", touchstone(frequencies=(5.2, 5.3, 5.3, 5.4)), "line 11", "frequency 5.3 stands twice"),
    data("falling frequencies", touchstone(frequencies=(5.2, 5.4, 5.3)), "5.3 follows 5.4", "rising frequencies"),
    data("negative frequency", touchstone(frequencies=(-5.2, 5.4)), "-5.2 is negative"),
    data("empty", "", "data.s4p", "empty"),
    data("binary", b"PK\x03\x04\x00\x00\x01", "binary data"),
    data("no option line", touchstone(option="!"), "stands before the option line", "# GHz S RI R 50"),
    data("option line misspelt", touchstone(option="# GHzz S RI R 50"), "'ghzz'", "Did you mean 'ghz'?"),
    data("impedances", touchstone(option="# GHz Z RI R 50"), "Z-parameters", "Allowed: S"),
    data("negative resistance", touchstone(option="# GHz S RI R -50"), "-50 ohm", "above zero"),
    data("no resistance", touchstone(option="# GHz S RI R"), "ends after R"),
    data("mixed units", touchstone(edit=put(7, "# MHz S RI R 50")), "contradicts the first", "different units"),
    data("hertz called gigahertz", touchstone(frequencies=(5.2e9, 5.4e9)), "5.4e+18 Hz", "another unit"),
    data("another band", touchstone(frequencies=(2.4, 2.5)), "2.4 to 2.5 GHz", "5.2 to 5.6 GHz"),
    data("port impedances in remarks", touchstone(edit=put(0, "! Port Impedance 50 0 50 0")), "vary with frequency"),
    data("version 2 keyword in version 1", touchstone(edit=put(0, "[Number of Ports] 4")), "without [Version] 2.0"),
    BadMeasured("no port count in the name", {"data.txt": touchstone()}, ("'.txt'", ".s1p"), measured=("data.txt",)),
    BadMeasured("missing file", {}, ("dat.s4p", "cannot be read", "'data.s4p'"), measured=("dat.s4p",)),
    BadMeasured("file given twice", {}, ("'data.s4p' was given twice",), measured=("data.s4p", "data.s4p")),
    ts("version 2 without end", version2(End=""), "[End] is missing", "cut off"),
    ts("version 2 with fewer frequencies", version2(Number_of_Frequencies="6"), "5 frequencies", "6, as"),
    ts("version 2 without port count", version2(Number_of_Ports=""), "[Number Of Ports] is missing"),
    ts("version 2 with short reference", version2(Reference="50 50"), "gives 2 resistances", "4, one per port"),
    ts("version 2 with unknown keyword", version2(Numbr_of_Ports="4"), "no keyword", "'number of ports'"),
    ts("version 2 with mixed modes", version2(Mixed_Mode_Order="", **{"Mixed-Mode_Order": "D1,2 C1,2 S3 S4"}),
       "differential and common", "single-ended"),
    ts("version 3", version2(Version="3.0"), "[Version] 3.0", "2.1"),
    ts("version 2 with unknown format", version2(Matrix_Format="Diagonal"), "Diagonal", "Full, Lower or Upper"),
]  # fmt: skip
MAPS = [
    port_map("map without column", "measured port,row\n1,1\n", "'column'", "is missing"),
    port_map("map with unknown column", swap(MAP, "row", "line"), "'line' is no column", "measured port, row, column"),
    port_map("map beyond the array", swap(MAP, "4,2,2", "4,2,9"), "row 2, column 9", "columns 1 to 2"),
    port_map("map with an element twice", swap(MAP, "4,2,2", "4,2,1"), "row 2, column 1 was assigned in line 4"),
    port_map("map with a port twice", swap(MAP, "4,2,2", "3,2,2"), "port 3 was assigned in line 4"),
    port_map("map with a port too many", swap(MAP, "4,2,2", "5,2,2"), "port 5", "1 to 4"),
    port_map("map with port zero", swap(MAP, "1,1,1", "0,1,1"), "port 0 does not exist"),
    port_map("map with text", swap(MAP, "4,2,2", "4,two,2"), "'two' is not a whole number", "column 'row'"),
    port_map("map with semicolons", MAP.replace(",", ";"), "semicolons", "commas"),
    port_map("map with a short row", swap(MAP, "4,2,2", "4,2"), "2 entries", "3, as the header"),
    port_map("map of another port name", "measured port,row,column,port\n1,1,1,fed\n", "'fed' is no port", "'feed'"),
    port_map("map empty", "", "map.csv", "empty"),
    port_map("map with a header only", "measured port,row,column\n", "no row"),
    port_map("map of another file", "file,measured port,row,column\nother.s4p,1,1,1\n",
             "'other.s4p', which was not given"),
    BadMeasured(
        "several files without file column", {"b.s4p": touchstone()}, ("does not say which file",),
        measured=("data.s4p", "b.s4p"),
    ),
    BadMeasured(
        "references that differ with ports missing",
        {"data.ts": version2(Reference="50 75 50 50"), "map.csv": "measured port,row,column\n1,1,1\n2,1,2\n"},
        ("different references (50, 75 ohm)", "equal references"), measured=("data.ts",),
    ),
]  # fmt: skip
PATTERNS = [
    pattern("degrees called radians", HEADER.replace("deg", "rad") + CUT, "60 rad", "look like degrees"),
    pattern("radians called degrees", HEADER + "".join(f"0,{a / 10},1,-9\n" for a in range(-15, 16)), "like radians"),
    pattern("angle without unit", swap(HEADER, "angle (deg)", "angle") + CUT, "'angle' states no unit", "(deg)"),
    pattern("mixed angle units", swap(HEADER, "cut (deg)", "cut (rad)") + CUT, "angle is in deg and cut in rad"),
    pattern("mixed levels", swap(HEADER, "cross (dBi)", "cross (dB)") + CUT, "co is in dBi and cross in dB"),
    pattern("linear of what", HEADER.replace("dBi", "linear") + CUT, "'linear'", "power or amplitude?"),
    pattern("decibels called amplitude", HEADER.replace("dBi", "amplitude") + CUT, "negative", "look like decibels"),
    pattern("amplitudes called decibels", HEADER.replace("dBi", "dB")
            + "".join(f"0,{a},{0.5 + a / 200},0.1\n" for a in range(-60, 61, 10)), "look linear"),
    pattern("cross missing", "cut (deg),angle (deg),co (dBi)\n0,0,1\n", "'cross'", "is missing"),
    pattern("an angle twice", HEADER + CUT + "0,0,3,-20\n", "angle 0 deg stood in line 8"),
    pattern("two angles", HEADER + "0,0,3,-20\n0,5,3,-20\n", "2 angles", "at least 3"),
    pattern("text in a pattern", HEADER + swap(CUT, "3.00", "high"), "'high' is not a number", "column 'co'"),
    pattern("decimal commas in a pattern", HEADER + swap(CUT, "3.00", "3,00"), "5 entries", "Decimal commas"),
    pattern("absurd level", HEADER + swap(CUT, "3.00", "3e5"), "300000 dBi makes no sense"),
    pattern("row without column", "row," + HEADER + CUT.replace("0,", "1,0,", 1)[: CUT.index("\n") + 3], "together"),
    pattern("no pattern uncertainty", HEADER + CUT, "without their uncertainty", uncertainty="none"),
]  # fmt: skip
STATEMENTS = [
    BadMeasured("floor above zero", {}, ("noise floor of 3 dB",), options={"floor": "3 dB"}),
    BadMeasured("phase without unit", {}, ("'1' has no unit", "--phase-uncertainty"), options={"phase": "1"}),
    BadMeasured("unknown parameter", {}, ("'arms'", "Did you mean 'arm'?"), options={"fit": "arms"}),
]
BAD_MEASURED = [*TOUCHSTONES, *MAPS, *PATTERNS, *STATEMENTS]
