"""Cases with misplaced gaps, impossible conductors and broken mesh files."""

from bad_case_base import (
    CORNERS,
    LINE,
    MESH,
    MSH,
    PLATE,
    STRIP,
    BadCase,
    edit,
    mesh,
    more,
    plate,
    strip,
    vtk,
    wire,
)

PLACES = [
    wire(
        "port on nothing",
        'at = [0, 0, "14 mm"]',
        'at = [0, "3 mm", "14 mm"]',
        "(0, 3, 14) mm is not on 'dipole'",
        "3 mm off",
        "nearest point of its centre line is (0, 0, 14) mm",
    ),
    wire(
        "port on an unknown conductor",
        'conductor = "dipole"',
        'conductor = "dipol"',
        "no conductor 'dipol'",
        "Did you mean 'dipole'?",
    ),
    wire("port without place", 'at = [0, 0, "14 mm"]\n', "", "no place is given", "exactly one of"),
    wire(
        "port with two places",
        'at = [0, 0, "14 mm"]',
        'along = 0.5\nat = [0, 0, "14 mm"]',
        "at and along are given",
    ),
    wire("along past the end", 'at = [0, 0, "14 mm"]', 'along = "30 mm"', "30 mm is past the end", "25.2 mm"),
    wire("fraction above one", 'at = [0, 0, "14 mm"]', "along = 1.5", "1.5 is off the centre line"),
    wire("gap past the end", 'at = [0, 0, "14 mm"]', "along = 0", "reaches past the end of 'dipole'"),
    wire(
        "gap wider than its leg",
        'name = "feed"',
        'name = "feed"\nwidth = "30 mm"',
        "the gap of 30 mm is wider than",
        "up to 25.2 mm",
    ),
    wire(
        "gap across a bend",
        '["arm", 0, "14 mm"]',
        '["0.2 mm", 0, "14 mm"], ["0.2 mm", 0, "24 mm"]',
        "reaches across a bend of 'dipole'",
        "0.2 mm from there",
    ),
    wire(
        "gap a tenth of a wavelength",
        'name = "feed"',
        'name = "feed"\nwidth = "6 mm"',
        "the gap of 6 mm is 0.116 wavelengths",
    ),
    wire(
        "gap line on a wire",
        'at = [0, 0, "14 mm"]',
        "line = [[0, 0, 0], [0, 0, 0]]",
        "'line' does not place a gap",
    ),
    strip(
        "base on a strip", 'at = [0, 0, "14 mm"]', "base = true", "'base' does not place a gap on the strip"
    ),
    strip(
        "port beside the strip's centre line",
        'at = [0, 0, "14 mm"]',
        'at = [0, "0.4 mm", "14 mm"]',
        "is not on 'dipole'",
        "(0, 0, 14) mm",
    ),
    strip(
        "gap wider than the strip is long",
        '"12.6 mm"',
        '"0.4 mm"',
        "the gap of 1 mm is wider than the leg",
        "0.8 mm",
    ),
    BadCase(
        "base without ground", PLATE.replace("ground = true\n", ""), ("no ground", "Write ground = true")
    ),
    plate(
        "base in the air",
        '["5.5 mm", 0, 0]',
        '["5.5 mm", 0, "1 mm"]',
        "no end on the ground",
        "(5.5, 0, 1) mm",
    ),
    plate(
        "base gap longer than the foot", "base = true", 'base = true\nwidth = "5 mm"', "wider than the leg"
    ),
    plate(
        "at on a plate",
        'conductor = "probe"\nbase = true',
        'conductor = "patch"\nat = [0, 0, "4 mm"]',
        "no centre line",
        "line = ",
    ),
    plate(
        "gap line off the plate",
        '"probe"\nbase = true',
        LINE.replace('"8 mm", "4', '"9 mm", "4'),
        "the gap line leaves 'patch' at (1,",
        "nearest point of its rim is (1, 8, 4) mm",
    ),
    plate(
        "gap line above the plate", '"probe"\nbase = true', LINE.replace('"4 mm"', '"5 mm"'), "leaves 'patch'"
    ),
    plate(
        "gap line that ends in the metal",
        '"probe"\nbase = true',
        LINE.replace('"8 mm", "4', '"3 mm", "4'),
        "ends inside 'patch'",
        "(1, 3, 4) mm",
        "from rim to rim",
    ),
    plate(
        "gap over the rim",
        '"probe"\nbase = true',
        LINE.replace('"1 mm", ', '"10.9 mm", '),
        "reaches out of 'patch'",
    ),
    plate(
        "gap line of no length",
        '"probe"\nbase = true',
        LINE.replace('"-8 mm"', '"8 mm"'),
        "both ends of the gap line",
    ),
    more(
        "two ports on each other",
        '[[port]]\nname = "second"\nconductor = "dipole"\nat = ["1 mm", 0, "14 mm"]\n',
        "overlaps that of [[port]] 'feed'",
        "[[port]] 'second'",
    ),
    more(
        "load on a port",
        '[[load]]\nname = "coil"\nconductor = "dipole"\nalong = "arm"\ninductance = "1 nH"\n',
        "[[load]] 'coil'",
        "overlaps that of [[port]] 'feed'",
    ),
    more(
        "load on a port of a strip",
        '[[load]]\nname = "coil"\nconductor = "dipole"\nalong = "arm + 0.9 mm"\n',
        "overlaps that of [[port]] 'feed'",
        base=STRIP,
    ),
    more(
        "gap that catches another wire",
        '[[conductor]]\nkind = "wire"\nname = "other"\nradius = "0.1 mm"\n'
        'points = [[0, "-9 mm", "14.5 mm"], [0, "9 mm", "14.5 mm"]]\n',
        "also catches 'other'",
        "0.5 mm",
    ),
]

_OTHER = '[[conductor]]\nkind = "wire"\nname = "other"\nradius = "0.3 mm"\npoints = '

SHAPES = [
    more(
        "conductor below ground",
        _OTHER + '[[0, "9 mm", "5 mm"], [0, "9 mm", "-1 mm"]]\n',
        "'other'",
        "below the ground",
    ),
    more(
        "wire in the ground",
        _OTHER + '[["-5 mm", "9 mm", "0.1 mm"], ["5 mm", "9 mm", "0.1 mm"]]\n',
        "'other'",
        "ground",
    ),
    wire(
        "single point",
        'points = [["-arm", 0, "14 mm"], ["arm", 0, "14 mm"]]',
        'points = [["-arm", 0, "14 mm"]]',
        "at least 2 points",
        "'dipole'",
    ),
    wire(
        "wire of no length",
        '["arm", 0, "14 mm"]',
        '["-arm", 0, "14 mm"]',
        "leg 1",
        "shorter than its radius allows",
    ),
    wire(
        "wire shorter than its radius allows",
        '["-arm", 0, "14 mm"]',
        '["11.8 mm", 0, "14 mm"]',
        "leg 1",
        "shorter than its radius allows",
        "2.67 radii",
    ),
    more(
        "two wires on each other", _OTHER + '[["-arm", 0, "14 mm"], ["arm", 0, "14 mm"]]\n', "other", "dipole"
    ),
    more(
        "crossing wires too close",
        _OTHER + '[["6 mm", "-5 mm", "14.4 mm"], ["6 mm", "5 mm", "14.4 mm"]]\n',
        "overlap",
        "sum of the radii",
    ),
    more(
        "wire on the next cell's wire",
        _OTHER + '[["20 mm", "0.2 mm", "14 mm"], ["26 mm", "0.2 mm", "14 mm"]]\n',
        "of the next cell",
        "overlap",
    ),
    strip(
        "strip of no length",
        'end = ["arm", 0, "14 mm"]',
        'end = ["-arm", 0, "14 mm"]',
        "start and end coincide",
    ),
    more(
        "strip on the ground",
        '[[conductor]]\nkind = "strip"\nname = "other"\nwidth = "1 mm"\n'
        'start = ["-5 mm", 0, 0]\nend = ["5 mm", 0, 0]\n',
        "'other'",
        "ground at z = 0",
    ),
    strip(
        "face along the strip", 'width = "1 mm"', 'width = "1 mm"\nnormal = [1, 0, 0]', "not perpendicular"
    ),
    strip("normal of no length", 'width = "1 mm"', 'width = "1 mm"\nnormal = [0, 0, 0]', "zero vector"),
    more(
        "strips crossing without common edges",
        '[[conductor]]\nkind = "strip"\nname = "other"\nwidth = "1 mm"\n'
        'start = ["6.1 mm", "-9 mm", "11.5 mm"]\nend = ["6.3 mm", "9 mm", "16.5 mm"]\n'
        "normal = [1, 0, -0.04]\n",
        "other",
        base=STRIP,
    ),
    strip("strip over its own copy", '"12.6 mm"', '"17 mm"', "'dipole'", "overlap"),
    more(
        "disc that bites into a strip",
        '[[conductor]]\nkind = "disc"\nname = "cap"\nradius = "4 mm"\ncentre = ["arm + 4 mm", 0, "14 mm"]\n',
        "cap",
        "dipole",
        base=STRIP,
    ),
    more(
        "polygon that crosses itself",
        '[[conductor]]\nkind = "polygon"\nname = "bow"\npoints = [["0 mm", "5 mm", '
        '"14 mm"], ["5 mm", "9 mm", "14 mm"], ["5 mm", "5 mm", "14 mm"], ["0 mm", "12 mm", "14 mm"]]\n',
        "'bow'",
        "touch or cross",
    ),
    more(
        "polygon out of its plane",
        '[[conductor]]\nkind = "polygon"\nname = "bow"\npoints = [["0 mm", "5 mm", '
        '"14 mm"], ["5 mm", "5 mm", "14 mm"], ["5 mm", "9 mm", "15 mm"], ["0 mm", "9 mm", "14 mm"]]\n',
        "'bow'",
        "not in one plane",
    ),
    more(
        "ring without metal",
        '[[conductor]]\nkind = "disc"\nname = "ring"\nradius = "3 mm"\ninner_radius = "3 mm"\n'
        'centre = [0, "9 mm", "9 mm"]\n',
        "'ring'",
        "inner_radius",
    ),
    wire(
        "sheet resistance of a wire",
        'radius = "0.3 mm"',
        'radius = "0.3 mm"\nsheet_resistance = "5 ohm"',
        "no key 'sheet_resistance'",
        "Did you mean 'wire_resistance'?",
    ),
    wire(
        "two ways to give the loss",
        'radius = "0.3 mm"',
        'radius = "0.3 mm"\nwire_resistance = "5 ohm/m"\nconductivity = "1e7 S/m"',
        "are given together",
    ),
    strip(
        "thickness without conductivity",
        'width = "1 mm"',
        'width = "1 mm"\nmetal_thickness = "18 um"',
        "metal_thickness = 0.018 mm is given without conductivity",
    ),
]

MESHES = [
    BadCase(
        "mesh file that is not there",
        MESH,
        ("'sheet.vtk' does not exist", "Did you mean 'sheets.vtk'?"),
        {"sheets.vtk": vtk()},
    ),
    BadCase("mesh file that is a directory", edit(MESH, '"sheet.vtk"', '"."'), ("is a directory",)),
    mesh(
        "mesh file of unknown extension", vtk(), "cannot be read as a mesh", "sheet.mash", file="sheet.mash"
    ),
    mesh("empty mesh file", "", "cannot be read as a mesh"),
    mesh("empty stl", "", "has no points", "'sheet'", "key 'file'", file="sheet.stl"),
    mesh(
        "stl without facets",
        "solid x\nendsolid x\n",
        "has no points",
        "'sheet'",
        "key 'file'",
        file="sheet.stl",
    ),
    mesh("truncated msh", MSH[: MSH.index("2 2 2 1 1 1 3 4")], "'sheet'", "key 'file'", file="sheet.msh"),
    mesh("msh cut in the nodes", MSH[: MSH.index("4 0 2 0")], "'sheet'", "key 'file'", file="sheet.msh"),
    mesh("text called msh", "hello\n", "cannot be read as a mesh", file="sheet.msh"),
    mesh("msh that names a missing node", MSH.replace("1 1 3 4", "1 1 3 9"), "'sheet'", file="sheet.msh"),
    mesh(
        "NaN points",
        vtk([(0, 0, 0), (10, "nan", 0), (10, 2, 0), (0, 2, 0)]),
        "infinite or missing coordinates",
    ),
    mesh(
        "three triangles at an edge",
        vtk([*CORNERS, (5, 1, 3)], [(0, 1, 2), (0, 2, 3), (0, 2, 4)]),
        "3 triangles of the file share the edge",
    ),
    mesh("triangle twice", vtk(CORNERS, [(0, 1, 2), (0, 2, 3), (0, 2, 3)]), "'sheet'"),
    mesh("degenerate triangle", vtk([*CORNERS, (20, 0, 0)], [(0, 1, 2), (0, 2, 3), (0, 1, 4)]), "'sheet'"),
    BadCase(
        "mesh below ground",
        edit(MESH, 'offset = [0, 0, "14 mm"]', 'offset = [0, 0, "-1 mm"]').replace('"14 mm"]', '"-1 mm"]'),
        ("'sheet'", "below the ground"),
        {"sheet.vtk": vtk()},
    ),
    BadCase(
        "mesh that does not meet its copy",
        edit(MESH, '["30 mm", 0]', '["10 mm", "1 mm"]'),
        ("'sheet'", "unmatched boundary", "of the neighbour cell"),
        {"sheet.vtk": vtk()},
    ),
    BadCase(
        "gap line off the mesh",
        MESH.replace('["5 mm", "2 mm"', '["5 mm", "4 mm"'),
        ("leaves 'sheet' at",),
        {"sheet.vtk": vtk()},
    ),
    BadCase(
        "at on a mesh without lines",
        MESH.replace("line = [", 'at = [0, 0, "14 mm"]\n#'),
        ("gaps are placed by `line`", "0 lines in the file"),
        {"sheet.vtk": vtk()},
    ),
]
