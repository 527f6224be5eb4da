"""Broken stacks: layers, sheets, and conductors that do not fit them."""

from __future__ import annotations

from bad_case_base import HEAD, BadCase, edit, vtk

LAYERS = """[[layer]]
name = "base"
thickness = "3.2 mm"
permittivity = 2.2
loss_tangent = 0.001
[[layer]]
name = "foam"
thickness = "4 mm"
permittivity = 1.06
[[sheet]]
name = "film"
on = "foam"
reactance = "-200 ohm"
"""

PRINTED = (
    HEAD
    + LAYERS
    + """[[conductor]]
kind = "strip"
name = "dipole"
start = ["-arm", 0, "3.2 mm"]
end = ["arm", 0, "3.2 mm"]
width = "1 mm"
[[port]]
name = "feed"
conductor = "dipole"
at = [0, 0, "3.2 mm"]
"""
)

UPRIGHT = """[[conductor]]
kind = "plate"
name = "fin"
centre = [0, "8 mm", "3 mm"]
size = ["2 mm", "4 mm"]
normal = [0, 1, 0]
"""


WIRE = """[[conductor]]
kind = "wire"
name = "rod"
points = [["3 mm", "4 mm", "FROM"], ["3 mm", "8 mm", "TO"]]
radius = "0.1 mm"
"""
MESHED = """[[conductor]]
kind = "mesh"
name = "sail"
file = "sheet.vtk"
unit = "1 mm"
offset = [0, "6 mm", "HEIGHT"]
"""


def rod(name: str, low: str, high: str, *says: str) -> BadCase:
    return added(name, WIRE.replace("FROM", low).replace("TO", high), *says)


def sail(name: str, height: str, *says: str) -> BadCase:
    """A mesh file of one square that rises by 2 mm."""
    points = [(0, 0, 0), (2, 0, 0), (2, 2, 2), (0, 2, 2)]
    case = added(name, MESHED.replace("HEIGHT", height), *says)
    return BadCase(name, case.text, says, {"sheet.vtk": vtk(points)})


def printed(name: str, old: str, new: str, *says: str) -> BadCase:
    return BadCase(name, edit(PRINTED, old, new), says)


def added(name: str, addition: str, *says: str) -> BadCase:
    """Tables added behind the layers."""
    return BadCase(name, PRINTED.replace("[[conductor]]", addition + "[[conductor]]", 1), says)


BASE = 'thickness = "3.2 mm"'
STACKS = [
    printed("negative thickness", BASE, 'thickness = "-3.2 mm"', "[[layer]] 'base', key 'thickness'", "more than 0 mm"),
    printed("no thickness at all", BASE, 'thickness = "0 mm"', "[[layer]] 'base', key 'thickness'", "more than 0 mm"),
    printed("thickness missing", BASE + "\n", "", "'thickness' is missing", "[[layer]] 'base'"),
    printed("thickness in ohm", BASE, 'thickness = "3.2 ohm"', "key 'thickness'", "a length"),
    printed("endless layer", BASE, 'thickness = "3 km"', "wavelengths at the highest frequency", "air without end"),
    printed("infinite layer", BASE, "thickness = inf", "[[layer]] 'base', key 'thickness'", "inf makes", "half-space"),
    printed("layer after an open half-space", 'thickness = "4 mm"', 'thickness = "inf mm"', "[[layer]] 'foam'",
            "layers cannot follow a half-space"),
    printed("thickness misspelt", BASE, 'thicknes = "3.2 mm"', "no key 'thicknes'", "Did you mean 'thickness'"),
    printed("permittivity below 1", "permittivity = 2.2", "permittivity = 0.9", "0.9 is out", "artificial = true"),
    printed("permittivity zero", "permittivity = 2.2", "permittivity = 0", "key 'permittivity'", "more than 0"),
    printed("permittivity missing", "permittivity = 2.2\n", "", "'permittivity' is missing"),
    printed("permittivity with a unit", "permittivity = 2.2", 'permittivity = "2.2 mm"', "key 'permittivity'"),
    printed("negative loss", "loss_tangent = 0.001", "loss_tangent = -0.001", "key 'loss_tangent'", "0"),
    printed("loss in per cent", "loss_tangent = 0.001", "loss_tangent = 2", "key 'loss_tangent'", "at most 1"),
    printed("permeability below 1", "loss_tangent = 0.001", "permeability = 0.5", "permeability = 0.5", "artificial"),
    printed("two layers of one name", 'name = "foam"', 'name = "base"', "the name 'base' is used twice"),
    printed("layer as one table", "[[layer]]\nname = \"base\"", "[layer]\nname = \"base\"", "TOML"),
    printed("sheet on no layer", 'on = "foam"', 'on = "fom"', "no layer 'fom'", "Did you mean 'foam'"),
    printed("sheet nowhere", 'on = "foam"\n', "", "neither height nor on"),
    printed("sheet given twice", 'on = "foam"', 'on = "foam"\nheight = "7.2 mm"', "height and on are both given"),
    printed("sheet above the stack", 'on = "foam"', 'height = "9 mm"', "lies outside the layers", "[[sheet]] 'film'"),
    printed("sheet on the ground", 'on = "foam"', 'height = "0 mm"', "lies on the ground"),
    printed("perfect sheet", 'reactance = "-200 ohm"', 'reactance = "0 ohm"', "not that of a passive sheet"),
    printed("active sheet", 'reactance = "-200 ohm"', 'resistance = "-20 ohm"', "key 'resistance'"),
    added("two sheets in one place", '[[sheet]]\nheight = "7.2 mm"\nresistance = "50 ohm"\n', "two sheets"),
    printed("sheet under the dipole", 'on = "foam"', 'on = "base"', "it lies on the sheet", "[[conductor]] 'dipole'"),
    BadCase("dipole a hair too high", PRINTED.replace('"3.2 mm"]\n', '"3.201 mm"]\n'),
            ("[[conductor]] 'dipole'", "z = 3.201 mm", "off the interface at 3.2 mm")),
    BadCase("conductor in the ground", PRINTED.replace('"3.2 mm"]\n', '"-3 mm"]\n'),
            ("[[conductor]] 'dipole'", "ground")),
    added("face across an interface", UPRIGHT, "[[conductor]] 'fin'", "across the interface or sheet at 3.2 mm"),
    printed("sheet a hair off an interface", 'on = "foam"', 'height = "7.199 mm"', "key 'height'", "7.199 mm lies",
            "off the interface at 7.2 mm", "on = the name of the layer"),
    printed("sheet over the dipole", 'on = "foam"', 'height = "4.5 mm"', "[[sheet]] 'film'",
            "conductor 'dipole' is 1.3 mm away from the sheet at z = 4.5 mm", "at least"),
    rod("wire along a sheet", "7.2 mm", "7.2 mm", "[[conductor]] 'rod'", "it lies on the sheet at z = 7.2 mm"),
    rod("wire through a sheet", "6 mm", "8 mm", "[[sheet]] 'film'", "conductor 'rod' reaches through the sheet"),
    sail("mesh across an interface", "2 mm", "[[conductor]] 'sail'", "across the interface or sheet at 3.2 mm"),
    sail("mesh a hair off an interface", "1.201 mm", "[[conductor]] 'sail'", "z = 3.201 mm", "0.001 mm off"),
    added("two sheets of one name", '[[sheet]]\nname = "film"\nheight = "6 mm"\nresistance = "50 ohm"\n',
          "the name 'film' is used twice", "[[sheet]]"),
    printed("sheet named like a layer", 'name = "film"', 'name = "foam"', "the name 'foam' is used twice"),
    printed("ground as a layer's key", "loss_tangent = 0.001", "ground = true", "[[layer]] 'base'", "no key 'ground'",
            "above the first [table]"),
    printed("thickness in words", BASE, 'thickness = "infinite"', "key 'thickness'", "infinite makes"),
    printed("thickness of an unknown name", BASE, 'thickness = "h"', "key 'thickness'", "neither a unit nor"),
    printed("impedance of a sheet", 'reactance = "-200 ohm"', 'impedance = "50 ohm"', "no key 'impedance'",
            "resistance, reactance"),
    BadCase("sheet without layers", PRINTED.replace(LAYERS, '[[sheet]]\nheight = "1 mm"\nresistance = "50 ohm"\n'),
            ("lies outside the layers",)),
]  # fmt: skip
