"""Cases with values out of their range."""

from bad_case_base import STRIP, WIRE, BadCase, more, wire

RANGES = [
    wire("band backwards", '"5.8 GHz"', '"4.8 GHz"', "start = 5 GHz, stop = 4.8 GHz", "start below stop"),
    wire("negative frequency", '"5 GHz"', '"-5 GHz"', "'-5 GHz' is out of range", "more than 0 GHz"),
    wire("no points", "points = 5", "points = 0", "0 is out of range", "at least 1"),
    wire("fractional count", "points = 5", "points = 5.5", "5.5 is not a whole number"),
    wire(
        "huge count of frequencies",
        "points = 5",
        "points = 50000000",
        "50000000 is out of range",
        "at most 2001",
    ),
    wire(
        "stop without start",
        'start = "5 GHz"\n',
        "",
        "the band is given by stop, points",
        "start, stop and points; or",
    ),
    wire(
        "two ways to give a band",
        "points = 5",
        'points = 5\nfrequency = "5 GHz"',
        "by start, stop, points, frequency",
    ),
    BadCase(
        "falling list",
        WIRE.replace('start = "5 GHz"\nstop = "5.8 GHz"\npoints = 5', 'frequencies = ["6 GHz", "5 GHz"]'),
        ("do not rise",),
    ),
    wire("parallel lattice vectors", '"26 mm"', '"0 mm"', "are parallel or zero", "[lattice]"),
    wire("zero lattice vector", '["30 mm", 0]', "[0, 0]", "are parallel or zero"),
    wire("zero radius", '"0.3 mm"', '"0 mm"', "'0 mm' is out of range", "more than 0 mm"),
    wire("thick wire", '"0.3 mm"', '"3 mm"', "the radius 3 mm is 0.058 wavelengths", "up to 2.58"),
    wire(
        "negative resistance",
        'name = "feed"',
        'name = "feed"\nresistance = "-50 ohm"',
        "'-50 ohm' is out of range",
    ),
    wire(
        "drive without @",
        'name = "feed"',
        'name = "feed"\ndrive = "1, 90 deg"',
        "key 'drive'",
        "',' has no meaning",
    ),
    wire(
        "drive phase without unit",
        'name = "feed"',
        'name = "feed"\ndrive = "1 @ 90"',
        "90' has no unit",
        "an angle",
    ),
    wire("no drive", 'name = "feed"', 'name = "feed"\ndrive = 0', "every port's drive is zero"),
    more("cone too wide", '[scan]\ncone = "95 deg"\n', "'95 deg' is out of range", "at most 89.9 deg"),
    more("cone without unit", "[scan]\ncone = 60\n", "60 has no unit", "[scan], key 'cone'"),
    more("even grid", "[scan]\ngrid = 40\n", "40 is even", "such as 41"),
    more("huge grid", "[scan]\ngrid = 100001\n", "100001 is out of range", "at most 201"),
    more("huge number of directions", '[scan]\nstep = "0.01 deg"\n', "more than 20000 directions"),
    BadCase(
        "huge number of solutions",
        WIRE.replace("points = 5", "points = 2001") + "[scan]\ngrid = 101\n",
        ("solutions", "at most 1000000"),
    ),
    more("theta beyond the horizon", '[scan]\npoints = [["95 deg", 0]]\n', "theta = 95 deg", "cosines"),
    more("no direction", "[scan]\nplanes = []\ngrid = 0\n", "no scan direction is left"),
    more("far cosines", "[scan]\ncosines = [[50, 0]]\n", "50 is out of range"),
    more(
        "unknown polarisation", '[polarisation]\nco = "rihgt"\n', "'rihgt' is not a polarisation", "'right'"
    ),
    more(
        "unknown method",
        '[mesh]\nmethod = "structred"\n',
        "'structred' is not known",
        "Did you mean 'structured'?",
    ),
    more(
        "two element sizes",
        '[mesh]\nelement_size = "2 mm"\nper_wavelength = 20\n',
        "element_size and per_wavelength are given together",
    ),
    wire("tiny lattice", '["30 mm", 0]', '["30 nm", 0]', "3e-05 mm", "0.01 to 20 wavelengths"),
    wire("giant lattice", '["30 mm", 0]', '["30 m", 0]', "503 wavelengths", "0.01 to 20 wavelengths"),
    more("coarse mesh", '[mesh]\nelement_size = "20 mm"\n', "20 mm is 0.387 wavelengths", "up to a sixth"),
    more(
        "huge mesh", '[mesh]\nelement_size = "1 um"\n', "unknowns", "[mesh], key 'element_size'", base=STRIP
    ),
    more("no accuracy", "[accuracy]\ntolerance = 0\n", "0 is out of range", "at most 0.01"),
    more(
        "positive reflection", '[limits]\nreflection = "10 dB"\n', "'10 dB' is out of range", "at most 0 dB"
    ),
    more("efficiency above one", "[limits]\nefficiency = 1.2\n", "1.2 is out of range", "at most 1"),
    more(
        "wide limits",
        '[limits]\nreflection = "-10 dB"\ncone = "70 deg"\n',
        "cone of 70 deg is wider",
        "60 deg",
    ),
    more(
        "limit for an unknown port",
        '[limits]\nreflection = "-10 dB"\nport = "fed"\n',
        "no port 'fed'",
        "'feed'",
    ),
    more(
        "expectation off the band",
        '[[expect]]\nquantity = "gain"\nvalue = "5 dBi"\ntolerance = "1 dB"\n'
        'origin = "x"\nfrequency = "5.3 GHz"\n',
        "5.3 GHz is not a frequency of the band",
        "[[expect]] 'gain'",
    ),
    more(
        "expectation in a wrong unit",
        '[[expect]]\nquantity = "gain"\nvalue = "5 ohm"\ntolerance = "1 dB"\n'
        'origin = "x"\nfrequency = "5.2 GHz"\n',
        "'5 ohm' is a resistance",
        "key 'value'",
    ),
    more(
        "expectation without origin",
        '[[expect]]\nquantity = "gain"\nvalue = "5 dBi"\ntolerance = "1 dB"\n',
        "'origin' is missing",
    ),
]
