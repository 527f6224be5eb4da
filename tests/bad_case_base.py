"""Sound case files to break, and the ways to break them. All cases are invented."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

HEAD = """title = "Invented cell"
ground = true
[parameters]
arm = "12.6 mm"
[band]
start = "5 GHz"
stop = "5.8 GHz"
points = 5
[lattice]
a = ["30 mm", 0]
b = ["15 mm", "26 mm"]
"""

WIRE = (
    HEAD
    + """[[conductor]]
kind = "wire"
name = "dipole"
points = [["-arm", 0, "14 mm"], ["arm", 0, "14 mm"]]
radius = "0.3 mm"
[[port]]
name = "feed"
conductor = "dipole"
at = [0, 0, "14 mm"]
"""
)

STRIP = (
    HEAD
    + """[[conductor]]
kind = "strip"
name = "dipole"
start = ["-arm", 0, "14 mm"]
end = ["arm", 0, "14 mm"]
width = "1 mm"
[[port]]
name = "feed"
conductor = "dipole"
at = [0, 0, "14 mm"]
"""
)

PLATE = (
    HEAD
    + """[[conductor]]
kind = "plate"
name = "patch"
centre = [0, 0, "4 mm"]
size = ["22 mm", "16 mm"]
[[conductor]]
kind = "wire"
name = "probe"
points = [["5.5 mm", 0, 0], ["5.5 mm", 0, "4 mm"]]
radius = "0.3 mm"
[[port]]
name = "feed"
conductor = "probe"
base = true
"""
)

LINE = '"patch"\nwidth = "1 mm"\nline = [["1 mm", "-8 mm", "4 mm"], ["1 mm", "8 mm", "4 mm"]]'

MESH = (
    HEAD
    + """[[conductor]]
kind = "mesh"
name = "sheet"
file = "sheet.vtk"
unit = "1 mm"
offset = [0, 0, "14 mm"]
[[port]]
name = "feed"
conductor = "sheet"
line = [["5 mm", 0, "14 mm"], ["5 mm", "2 mm", "14 mm"]]
width = "1 mm"
"""
)

CORNERS = ((0, 0, 0), (10, 0, 0), (10, 2, 0), (0, 2, 0))


def vtk(points: object = CORNERS, triangles: object = ((0, 1, 2), (0, 2, 3))) -> str:
    """Legacy ASCII VTK text of a triangle mesh."""
    points, triangles = list(points), list(triangles)  # type: ignore[call-overload]
    rows = [" ".join(map(str, p)) for p in points] + [f"CELLS {len(triangles)} {4 * len(triangles)}"]
    rows += [f"3 {a} {b} {c}" for a, b, c in triangles] + [f"CELL_TYPES {len(triangles)}"]
    rows += ["5"] * len(triangles)
    head = "# vtk DataFile Version 3.0\nsheet\nASCII\nDATASET UNSTRUCTURED_GRID\n"
    return head + f"POINTS {len(points)} double\n" + "\n".join(rows) + "\n"


MSH = """$MeshFormat
2.2 0 8
$EndMeshFormat
$Nodes
4
1 0 0 0
2 10 0 0
3 10 2 0
4 0 2 0
$EndNodes
$Elements
2
1 2 2 1 1 1 2 3
2 2 2 1 1 1 3 4
$EndElements
"""


@dataclass(frozen=True)
class BadCase:
    """A case file with a mistake, fragments its error must hold, and the files that lie beside it."""

    name: str
    text: str | bytes
    says: tuple[str, ...]
    files: Mapping[str, str] = field(default_factory=dict)


def edit(text: str, old: str, new: str) -> str:
    assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times in the sound case"
    return text.replace(old, new)


def wire(name: str, old: str, new: str, *says: str) -> BadCase:
    return BadCase(name, edit(WIRE, old, new), says)


def strip(name: str, old: str, new: str, *says: str) -> BadCase:
    return BadCase(name, edit(STRIP, old, new), says)


def plate(name: str, old: str, new: str, *says: str) -> BadCase:
    return BadCase(name, edit(PLATE, old, new), says)


def more(name: str, addition: str, *says: str, base: str = WIRE) -> BadCase:
    return BadCase(name, base + addition, says)


def mesh(name: str, content: str, *says: str, file: str = "sheet.vtk") -> BadCase:
    return BadCase(name, edit(MESH, '"sheet.vtk"', f'"{file}"'), says, {file: content})
