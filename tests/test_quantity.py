"""Quantities of the case file: values (CLOSED: definitions of the units), dimensions, safety, parameters."""

import math

import pytest
from scanward.cases.quantity import UNITS, Quantities, is_unit
from scanward.geometry.errors import InputError

PLAIN = Quantities({})
NAMED = Quantities({"arm": "12.6 mm", "f0": "5.4 GHz", "wave": "c0 / f0", "half": "wave/2", "n": 3})


@pytest.mark.parametrize(
    ("given", "kind", "value"),
    [
        ("27 mm", "length", 0.027),
        ("27mm", "length", 0.027),
        ("5 µm", "length", 5e-6),
        ("1 inch", "length", 0.0254),
        ("1 in", "length", 0.0254),
        ("10 mil", "length", 2.54e-4),
        ("60 deg", "angle", math.pi / 3),
        ("60°", "angle", math.pi / 3),
        ("0.5 rad", "angle", 0.5),
        ("5.4 GHz", "frequency", 5.4e9),
        ("1 / 2 ns", "frequency", 5e8),
        ("50 ohm", "resistance", 50.0),
        ("1.2 kΩ", "resistance", 1200.0),
        ("20 ohm/sq", "resistance", 20.0),
        ("20 ohm / mm", "resistance_per_length", 2e4),
        ("5.8e7 S/m", "conductivity", 5.8e7),
        ("1.2 nH", "inductance", 1.2e-9),
        ("0.3 pF", "capacitance", 3e-13),
        ("-10 dB", "level", -10.0),
        ("5 dBi", "level", 5.0),
        ("80 %", "ratio", 0.8),
        (0.25, "ratio", 0.25),
        ("1e-6", "ratio", 1e-6),
        (0, "length", 0.0),
        ("0", "angle", 0.0),
        ("3 mm / 2 mm", "ratio", 1.5),
        ("3 mm^2 / 1 mm", "length", 3e-3),
        ("2 * (1 mm + 3 mm)", "length", 8e-3),
        ("-2^2", "ratio", -4.0),
        ("2^-1", "ratio", 0.5),
        ("1 - 2 - 3", "ratio", -4.0),
        ("8 / 4 / 2", "ratio", 1.0),
        ("--3", "ratio", 3.0),
        ("sqrt(16 mm^2)", "length", 4e-3),
        ("sin(30 deg) + cos(60 deg) + tan(45 deg)", "ratio", 2.0),
        ("pi", "ratio", math.pi),
    ],
)
def test_values(given, kind, value):
    assert PLAIN.value(given, kind, "here") == pytest.approx(value, rel=1e-14, abs=1e-300)


@pytest.mark.parametrize(
    ("given", "value"),
    [("arm/2 + 0.4 mm", 6.7e-3), ("2 arm", 25.2e-3), ("n * arm", 37.8e-3), ("half", 299792458.0 / 10.8e9)],
)
def test_parameters_stand_in_quantities(given, value):
    assert NAMED.value(given, "length", "here") == pytest.approx(value, rel=1e-14)


def test_overrides_reach_what_depends_on_them():
    changed = Quantities({"f0": "5.4 GHz", "wave": "c0 / f0"}, {"f0": "6 GHz"})
    assert changed.value("wave", "length", "here") == pytest.approx(299792458.0 / 6e9, rel=1e-14)


@pytest.mark.parametrize(
    ("given", "kind", "message"),
    [
        (27, "length", "27 has no unit"),
        ("27", "length", 'Allowed: a length such as "27 mm"'),
        ("27 GHz", "length", "is a frequency, but a length is wanted"),
        ("3 mm", "ratio", "is a length, but a plain number is wanted"),
        ("2 mm + 3 deg", "length", "adds or raises a length and an angle"),
        ("2 mmm", "length", "Did you mean 'mm'?"),
        ("2 mms", "length", "'mms' is neither a unit nor a parameter"),
        ("milli", "length", "'milli' is neither a unit nor a parameter"),
        ("1/0", "ratio", "divides by zero"),
        ("9^9999", "ratio", "too large"),
        ("1e999", "ratio", "not a finite real number"),
        ("nan", "ratio", "'nan' is neither"),
        ("inf", "ratio", "'inf' is neither"),
        (math.nan, "length", "not a finite real number"),
        (10**400, "ratio", "not a finite real number"),
        ("(-8)^0.5", "ratio", "not a finite real number"),
        ("sqrt(-4)", "ratio", "square root of a negative"),
        ("2 ^ (1 mm)", "ratio", "exponent must be a plain number"),
        ("1 m ^ 0.5", "length", "of dimension"),
        ("sin(3)", "ratio", "'sin' wants an angle"),
        ("sin 3 deg", "ratio", "argument in parentheses"),
        ("(1", "ratio", "closing parenthesis is missing"),
        ("sqrt(4", "ratio", "closing parenthesis is missing"),
        ("1 +", "ratio", "ends too early"),
        ("1 * / 2", "ratio", "'/' is not expected there"),
        ("2 mm mm", "length", "Write products with"),
        ("2,5 mm", "length", "',' has no meaning here"),
        ("", "ratio", "empty"),
        ("(" * 60 + "1", "ratio", "nested more than 20 deep"),
        ("1+" * 200 + "1", "ratio", "401 characters"),
        (True, "ratio", "True is not a plain number"),
        ([1], "length", "is not a length"),
        ({}, "length", "is not a length"),
    ],
)
def test_refusals(given, kind, message):
    with pytest.raises(InputError) as caught:
        PLAIN.value(given, kind, "here")
    assert message in str(caught.value)
    assert caught.value.where == "here"


@pytest.mark.parametrize(
    "code", ["__import__('os')", "mm.real", "arm[0]", "lambda: 1", "a:=1", "1;2", "1 if 2", "@"]
)
def test_nothing_but_arithmetic_is_evaluated(code):
    with pytest.raises(InputError, match="cannot be read"):
        NAMED.value(code, "length", "here")


@pytest.mark.parametrize(
    ("parameters", "message"),
    [
        ({"a": "b", "b": "c", "c": "a"}, "circle: a -> b -> c -> a"),
        ({"a": "a + 1"}, "circle: a -> a"),
        ({"mm": 1}, "'mm' is the name of a unit"),
        ({"GHz": 1}, "'GHz' is the name of a unit"),
        ({"sin": 1}, "already means something"),
        ({"c0": 1}, "already means something"),
        ({"two words": 1}, "cannot be a parameter's name"),
        ({"a": True}, "neither a number nor text"),
        ({"a": "3 mm + lenght"}, "'lenght' is neither"),
        ({"arm_length": "1 mm", "a": "arm_lenght"}, "Did you mean 'arm_length'?"),
    ],
)
def test_parameter_refusals(parameters, message):
    with pytest.raises(InputError) as caught:
        Quantities(parameters)
    assert message in str(caught.value)
    assert "[parameters]" in caught.value.where


def test_override_of_an_unknown_parameter_names_the_nearest():
    with pytest.raises(InputError, match=r"no parameter 'arn' to set to '3 mm'.*Did you mean 'arm'"):
        Quantities({"arm": "1 mm"}, {"arn": "3 mm"})


def test_every_si_unit_reads_back_as_itself():
    for kind, unit in UNITS.items():
        assert PLAIN.value(f"2.5 {unit}", kind, "here") == 2.5


def test_units_are_a_closed_list():
    assert all(is_unit(name) for name in ("m", "mm", "GHz", "kohm", "pF", "deg", "dB"))
    assert not any(is_unit(name) for name in ("arm", "w", "h", "lightyear", "x.y", "", "__class__"))
