"""Cases with mistakes in the file, its words and its quantities."""

from bad_case_base import HEAD, WIRE, BadCase, more, wire

FILE = [
    BadCase("empty file", "", ("the file is empty",)),
    BadCase("blank file", "\n  \n", ("the file is empty",)),
    BadCase(
        "not UTF-8",
        WIRE.replace("Invented", "Erfund\xe9n").encode("latin-1"),
        ("not UTF-8", "0xe9", "line 1"),
    ),
    wire("not TOML", "a = [", "a = [[", "not TOML", "line"),
    wire("unquoted quantity", '"0.3 mm"', "0.3 mm", "not TOML", "line 16", "stand in quotes"),
    wire("key twice", 'radius = "0.3 mm"', 'radius = "1 mm"\nradius = "1 mm"', "not TOML", "line 17"),
    BadCase("endless number", WIRE + "x = " + "9" * 5000, ("thousands of digits",)),
]

WORDS = [
    wire(
        "unknown key",
        "radius =",
        "raduis =",
        "no key 'raduis'",
        "'0.3 mm'",
        "Did you mean 'radius'?",
        "'dipole'",
    ),
    wire("unknown table", "[lattice]", "[latice]", "no table 'latice'", "Did you mean 'lattice'?"),
    wire("unknown top key", "ground = true", "grund = true", "no key 'grund'", "Did you mean 'ground'?"),
    wire("unknown kind", '"wire"', '"wires"', "'wires' is no kind of conductor", "Did you mean 'wire'?"),
    wire("kind is a list", '"wire"', '["wire"]', "is no kind of conductor", "wire, strip, plate"),
    wire("missing title", 'title = "Invented cell"\n', "", "'title' is missing"),
    wire("missing key", 'radius = "0.3 mm"\n', "", "'radius' is missing", "[[conductor]] 'dipole'"),
    wire("missing name", 'name = "dipole"\n', "", "'name' is missing", "[[conductor]] number 1"),
    wire("empty name", '"feed"', '" "', "the text is empty", "key 'name'"),
    wire("name is a number", 'name = "feed"', "name = 3", "3 is not text in quotes", "[[port]] number 1"),
    wire("ground is a word", "ground = true", 'ground = "yes"', "'yes' is neither true nor false"),
    BadCase(
        "ground is a table",
        WIRE.replace("ground = true\n", "") + "[ground]\npresent = true\n",
        ("Write ground = true above",),
    ),
    wire("table written as list", "[lattice]", "[[lattice]]", "given as a list of tables", "one [lattice]"),
    wire(
        "list written as table",
        "[[port]]",
        "[port]",
        "'port' is not a list of tables",
        "[[port]], once for each",
    ),
    wire(
        "table written as value",
        'title = "Invented cell"',
        'title = "x"\nscan = 3',
        "3 is not a table",
        "[scan]",
    ),
    BadCase(
        "no band",
        WIRE.replace('[band]\nstart = "5 GHz"\nstop = "5.8 GHz"\npoints = 5\n', ""),
        ("[band] is missing",),
    ),
    BadCase("no conductor", HEAD, ("no [[conductor]]",)),
    BadCase("no port", WIRE[: WIRE.index("[[port]]")], ("no [[port]]",)),
    more(
        "conductor name twice",
        '[[conductor]]\nkind = "wire"\nname = "dipole"\nradius = "0.3 mm"\n'
        'points = [[0, "9 mm", "5 mm"], [0, "9 mm", "15 mm"]]\n',
        "the name 'dipole' is used twice",
    ),
    more(
        "port name twice",
        '[[load]]\nname = "feed"\nconductor = "dipole"\nalong = "4 mm"\n',
        "the name 'feed' is used twice",
        "[[load]] number 1",
    ),
]

QUANTITIES = [
    wire("no unit", '"0.3 mm"', "0.3", "0.3 has no unit", 'a length such as "27 mm"', "key 'radius'"),
    wire("no unit in quotes", '"0.3 mm"', '"0.3"', "'0.3' has no unit"),
    wire(
        "wrong unit",
        '"0.3 mm"',
        '"0.3 GHz"',
        "'0.3 GHz' is a frequency, but a length is wanted",
        "key 'radius'",
    ),
    wire("unknown unit", '"0.3 mm"', '"0.3 mn"', "'mn' is neither a unit nor a parameter", "Did you mean"),
    wire(
        "unknown parameter",
        '"-arm"',
        '"-amr"',
        "'amr' is neither",
        "Did you mean 'arm'",
        "key 'points', entry 1",
    ),
    wire("sum of a length and an angle", '"-arm"', '"-arm + 3 deg"', "adds or raises a length and an angle"),
    wire(
        "parameters in a circle", 'arm = "12.6 mm"', 'arm = "leg"\nleg = "2*arm"', "circle: arm -> leg -> arm"
    ),
    wire(
        "parameter named like a unit",
        'arm = "12.6 mm"',
        'arm = "12.6 mm"\nmm = 3',
        "'mm' is the name of a unit",
    ),
    wire("code in a quantity", '"0.3 mm"', "\"__import__('os')\"", "cannot be read"),
    wire("NaN", '"0.3 mm"', "nan", "'nan' is not a finite real number", "key 'radius'"),
    wire("NaN in text", '"0.3 mm"', '"nan mm"', "'nan mm' cannot be read"),
    wire(
        "infinite coordinate", 'at = [0, 0, "14 mm"]', "at = [0, 0, inf]", "not a finite", "key 'at', entry 3"
    ),
    wire("overflow", '"0.3 mm"', '"1e999 mm"', "not a finite real number"),
    wire("two coordinates", 'at = [0, 0, "14 mm"]', 'at = [0, "14 mm"]', "has 2 values", "exactly 3"),
    wire("a point that is no list", 'at = [0, 0, "14 mm"]', 'at = "14 mm"', "'14 mm' is not a list"),
    wire("date", '"0.3 mm"', "2026-01-01", "is not a length"),
]
