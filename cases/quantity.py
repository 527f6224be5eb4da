"""Quantities of the case file: "arm/2 + 0.4 mm" read into SI numbers, with parameters and dimension checks.

Grammar: ``+ - * / ^`` (or ``**``), parentheses, numbers, names. A number directly followed by a unit binds
tightest, so that ``c0 / 5.4 GHz`` is a wavelength. Names are parameters, units, the constants pi and c0 (the
speed of light) and the functions sqrt, sin, cos, tan. Nothing else is ever evaluated.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from functools import lru_cache
from typing import Any

from ..geometry.errors import InputError, nearest

SPEED_OF_LIGHT = 299792458.0
LONGEST, DEEPEST = 300, 20

_PREFIXES = ("tera- = 1e12 = T-", "giga- = 1e9 = G-", "mega- = 1e6 = M-", "kilo- = 1e3 = k-",
             "centi- = 1e-2 = c-", "milli- = 1e-3 = m-", "micro- = 1e-6 = u- = µ- = μ-",
             "nano- = 1e-9 = n-", "pico- = 1e-12 = p-", "femto- = 1e-15 = f-")  # fmt: skip
_UNITS = ("meter = [length] = m = metre", "inch = 0.0254 * meter = in", "mil = 2.54e-5 * meter",
          "radian = [angle] = rad", "degree = 0.017453292519943295 * radian = deg = °",
          "second = [time] = s", "hertz = 1 / second = Hz", "ohm = [resistance] = Ω = Ohm",
          "siemens = 1 / ohm = S", "henry = ohm * second = H", "farad = second / ohm = F",
          "decibel = [level] = dB = dBi", "percent = 0.01 = %", "square = 1 = sq")  # fmt: skip

# SI unit of each kind of quantity, how the kind is called, and an example for error messages.
UNITS: dict[str, str] = {
    "ratio": "", "length": "m", "angle": "rad", "frequency": "Hz", "resistance": "ohm", "level": "dB",
    "resistance_per_length": "ohm/m", "conductivity": "S/m", "inductance": "H", "capacitance": "F",
}  # fmt: skip
KINDS: dict[str, tuple[str, str]] = {
    "ratio": ("a plain number", "0.5"),
    "length": ("a length", "27 mm"),
    "angle": ("an angle", "60 deg"),
    "frequency": ("a frequency", "5.4 GHz"),
    "resistance": ("a resistance", "50 ohm"),
    "level": ("a level in decibels", "-10 dB"),
    "resistance_per_length": ("a resistance per length", "20 ohm/m"),
    "conductivity": ("a conductivity", "5.8e7 S/m"),
    "inductance": ("an inductance", "1.2 nH"),
    "capacitance": ("a capacitance", "0.3 pF"),
}
_EXAMPLE_UNITS = ("m", "cm", "mm", "um", "inch", "mil", "deg", "rad", "Hz", "MHz", "GHz", "ohm", "kohm", "S",
                  "nH", "pH", "pF", "fF", "dB", "percent", "s", "ns", "ps")  # fmt: skip
FUNCTIONS = ("sqrt", "sin", "cos", "tan")
CONSTANTS = ("pi", "c0")

_TOKEN = re.compile(
    r"\s*(?:(?P<number>(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)|(?P<name>[^\W\d]\w*|°|%)|(?P<mark>\*\*|[-+*/^()]))"
)


@lru_cache(maxsize=1)
def unit_registry() -> Any:
    """The one pint registry of the program: just the units named above, angle and dB as dimensions."""
    import pint

    registry = pint.UnitRegistry(None)  # pyright: ignore[reportArgumentType]  (an empty registry)
    for definition in (*_PREFIXES, *_UNITS):
        registry.define(definition)
    return registry


def is_unit(name: str) -> bool:
    """Whether `name` is a unit, with or without a prefix."""
    return _unit(name) is not None


@lru_cache(maxsize=256)
def _unit(name: str) -> Any:
    """One of the unit `name` as a quantity in base units, or None."""
    registry = unit_registry()
    # pint takes a % or an odd name through its own parser, which we never want to reach
    name = "percent" if name == "%" else "degree" if name == "°" else name
    if not name.isidentifier():
        return None
    found = registry.parse_unit_name(name)
    # each hit is (prefix, unit, plural ending): a prefix alone has no unit, and plurals are no units here
    found = [hit for hit in found if hit[1] and not hit[2]]
    if not found:
        return None
    return registry.Quantity(1.0, "".join(found[0][:2])).to_base_units()


def describe(dimensionality: Any) -> str:
    """The name of a dimension: "a length", or pint's own text for one that has no name here."""
    for kind, (word, _) in KINDS.items():
        if _dimension(kind) == dimensionality:
            return word
    return f"of dimension {dimensionality}"


@lru_cache(maxsize=16)
def _dimension(kind: str) -> Any:
    unit = UNITS[kind]
    return unit_registry().Quantity(1.0, unit).dimensionality


class Quantities:
    """Evaluates quantities that may refer to the case's parameters.

    Parameters
    ----------
    parameters
        The raw `[parameters]` table: name to number or text.
    overrides
        Values that replace those of the table, by name.

    Raises
    ------
    InputError
        For a bad parameter name, an override of a parameter that does not exist, a cycle, or a value that
        cannot be read. Every parameter is evaluated at once, used or not.
    """

    def __init__(self, parameters: Mapping[str, object], overrides: Mapping[str, str] | None = None):
        self._raw = dict(parameters)
        for name, given in (overrides or {}).items():
            if name not in self._raw:
                raise InputError(
                    f"there is no parameter '{name}' to set to '{given}'.",
                    where="[parameters]",
                    allowed=", ".join(self._raw) or "nothing: the case has no [parameters]",
                    hint=nearest(name, self._raw),
                )
            self._raw[name] = given
        self._known: dict[str, Any] = {}
        self._open: list[str] = []
        for name in self._raw:
            _check_name(name)
        for name in self._raw:
            self._parameter(name)

    def value(self, given: object, kind: str, where: str) -> float:
        """`given` (text, or a bare number) as a float in the SI unit of `kind`, one of `UNITS`.

        Raises InputError at `where` for text that cannot be read, a wrong or missing unit (zero needs none),
        or a result that is not finite.
        """
        word, example = KINDS[kind]
        if isinstance(given, bool) or not isinstance(given, (int, float, str)):
            raise InputError(f"{given} is not {word}.", where=where, allowed=f'{word} such as "{example}"')
        result = self._evaluate(given, where)
        if result.dimensionality != _dimension(kind):
            shown = f"'{given}'" if isinstance(given, str) else f"{given}"
            if result.dimensionless and result.magnitude == 0:
                return 0.0
            if result.dimensionless:
                raise InputError(f"{shown} has no unit.", where=where, allowed=f'{word} such as "{example}"')
            raise InputError(
                f"{shown} is {describe(result.dimensionality)}, but {word} is wanted.",
                where=where,
                allowed=f'{word} such as "{example}"',
            )
        return float(result.magnitude)

    def _parameter(self, name: str) -> Any:
        if name not in self._known:
            if name in self._open:
                loop = " -> ".join([*self._open[self._open.index(name) :], name])
                raise InputError(f"parameters refer to each other in a circle: {loop}.", where="[parameters]")
            self._open.append(name)
            self._known[name] = self._evaluate(self._raw[name], f"[parameters], key '{name}'")
            self._open.pop()
        return self._known[name]

    def _evaluate(self, given: object, where: str) -> Any:
        """A pint quantity in base units, finite."""
        if isinstance(given, str):
            result = _Reader(given, where, self).read()
        elif isinstance(given, (int, float)) and not isinstance(given, bool):
            result = unit_registry().Quantity(_as_float(given))
        else:
            raise InputError(f"{given!r} is neither a number nor text.", where=where)
        magnitude = result.magnitude
        if isinstance(magnitude, complex) or not math.isfinite(magnitude):
            raise InputError(f"{str(given)[:60]!r} is not a finite real number.", where=where)
        return result

    def look_up(self, name: str) -> Any:
        """Quantity of a parameter, constant or unit; None when there is no such name."""
        if name in self._raw:
            return self._parameter(name)
        if name == "pi":
            return unit_registry().Quantity(math.pi)
        if name == "c0":
            return SPEED_OF_LIGHT * (_unit("m") / _unit("s"))
        return _unit(name)

    def names(self) -> list[str]:
        """All names that may stand in a quantity (prefixed units by example)."""
        return [*self._raw, *CONSTANTS, *FUNCTIONS, *_EXAMPLE_UNITS]


def _as_float(number: int | float) -> float:
    try:
        return float(number)
    except OverflowError:
        return math.inf


def _check_name(name: str) -> None:
    where = f"[parameters], key '{name}'"
    if not name.isidentifier():
        raise InputError(f"'{name}' cannot be a parameter's name.", where=where, allowed="letters, digits, _")
    if name in FUNCTIONS or name in CONSTANTS:
        raise InputError(
            f"'{name}' already means something in quantities.", where=where, hint="Choose another name."
        )
    if is_unit(name):
        raise InputError(f"'{name}' is the name of a unit.", where=where, hint="Choose another name.")


class _Reader:
    """Recursive descent over one text."""

    def __init__(self, text: str, where: str, names: Quantities):
        self.text, self.where, self.names, self.depth = text, where, names, 0
        if not text.strip():
            raise InputError("the text is empty where a quantity is wanted.", where=where)
        if len(text) > LONGEST:
            raise self.error(f"the text has {len(text)} characters", allowed=f"at most {LONGEST}")
        self.tokens = self.split()
        self.next = 0

    def error(self, why: str, *, allowed: str = "", hint: str = "") -> InputError:
        shown = self.text if len(self.text) <= 60 else self.text[:57] + "..."
        return InputError(f"'{shown}' cannot be read: {why}.", where=self.where, allowed=allowed, hint=hint)

    def split(self) -> list[tuple[str, str]]:
        tokens, position, text = [], 0, self.text.rstrip()
        while position < len(text):
            match = _TOKEN.match(text, position)
            if match is None:
                odd = text[position:].lstrip()[0]
                raise self.error(
                    f"'{odd}' has no meaning here", allowed="numbers, units, names, + - * / ^ ( )"
                )
            kind = str(match.lastgroup)
            tokens.append((kind, match.group(kind)))
            position = match.end()
        return tokens

    def peek(self) -> tuple[str, str]:
        return self.tokens[self.next] if self.next < len(self.tokens) else ("end", "")

    def take(self, *marks: str) -> str:
        """The next token if it is one of `marks`, else an empty string."""
        kind, token = self.peek()
        if kind == "mark" and token in marks:
            self.next += 1
            return token
        return ""

    def read(self) -> Any:
        import pint

        try:
            result = self.sum()
            if self.peek()[0] != "end":
                raise self.error(f"'{self.peek()[1]}' is not expected there", hint="Write products with *.")
            return result.to_base_units()
        except pint.DimensionalityError as fault:
            one, two = describe(fault.dim1), describe(fault.dim2)
            raise self.error(f"it adds or raises {one} and {two}") from None
        except ZeroDivisionError:
            raise self.error("it divides by zero") from None
        except (OverflowError, pint.OffsetUnitCalculusError):
            raise self.error("the number is too large") from None

    def sum(self) -> Any:
        self.depth += 1
        if self.depth > DEEPEST:
            raise self.error(f"parentheses are nested more than {DEEPEST} deep")
        result = self.product()
        while mark := self.take("+", "-"):
            other = self.product()
            result = result + other if mark == "+" else result - other
        self.depth -= 1
        return result

    def product(self) -> Any:
        result = self.signed()
        while mark := self.take("*", "/"):
            other = self.signed()
            result = result * other if mark == "*" else result / other
        return result

    def signed(self) -> Any:
        negative = False
        while mark := self.take("+", "-"):
            negative ^= mark == "-"
        result = self.power(self.atom())
        return -result if negative else result

    def power(self, base: Any) -> Any:
        if not self.take("^", "**"):
            return base
        sign = -1.0 if self.take("-") else 1.0
        exponent = sign * self.atom()
        if not exponent.dimensionless:
            raise self.error("an exponent must be a plain number")
        return base ** float(exponent.magnitude)

    def atom(self) -> Any:
        kind, token = self.peek()
        self.next += 1
        if kind == "number":
            number = unit_registry().Quantity(float(token))
            if self.peek()[0] == "name":
                name = self.peek()[1]
                self.next += 1
                return number * self.power(self.named(name))
            return number
        if kind == "name":
            return self.named(token)
        if token == "(":
            result = self.sum()
            if not self.take(")"):
                raise self.error("a closing parenthesis is missing")
            return result
        raise self.error("it ends too early" if kind == "end" else f"'{token}' is not expected there")

    def named(self, name: str) -> Any:
        if name in FUNCTIONS:
            return self.function(name)
        found = self.names.look_up(name)
        if found is None:
            raise self.error(
                f"'{name}' is neither a unit nor a parameter", hint=nearest(name, self.names.names())
            )
        return found

    def function(self, name: str) -> Any:
        if not self.take("("):
            raise self.error(f"'{name}' wants its argument in parentheses")
        argument = self.sum().to_base_units()
        if not self.take(")"):
            raise self.error("a closing parenthesis is missing")
        if name == "sqrt":
            if argument.magnitude < 0:
                raise self.error("it takes the square root of a negative number")
            return argument**0.5
        if argument.dimensionality != _dimension("angle"):
            raise self.error(f"'{name}' wants an angle", allowed='an angle such as "30 deg"')
        return unit_registry().Quantity(getattr(math, name)(float(argument.magnitude)))
