"""Quantities: "120 um" to SI numbers, and SI numbers back to text for people.

Inside the package every number is in SI (m, s, kg, N, rad). A scenario may write a number, taken as SI, or a
string with a unit. This module knows how to read the string and how to write the number, and nothing else.
"""

from __future__ import annotations

import math
import re
from functools import cache
from typing import TYPE_CHECKING, Annotated, Any

from pydantic import BeforeValidator, WithJsonSchema

if TYPE_CHECKING:
    from pint import UnitRegistry

_NUMBER_AND_UNIT = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,3})?|[+-]?inf)\s*(\D.{0,39})\s*")
_UNIT_TEXT = re.compile(r"[A-Za-zµμΩ°%/*·() ^.\-\d]+")
_SQUARE_ROOT = re.compile(r"sqrt\(\s*([A-Za-z]+)\s*\)")
_LONG_POWER = re.compile(r"\d{2,}")


@cache
def _registry() -> UnitRegistry[Any]:
    """The unit registry, made on first use because it takes a third of a second to build."""
    from pint import UnitRegistry

    return UnitRegistry()


@cache
def _factor_to(unit_text: str, si_unit: str) -> float:
    """How many `si_unit` one `unit_text` is. Raises ValueError with a sentence when there is no such factor."""
    from pint.errors import DimensionalityError, PintError

    text = unit_text.replace("·", "*").replace("^", "**").replace("°", "deg").replace("%", "percent")
    text = _SQUARE_ROOT.sub(r"\1**0.5", text)
    if not _UNIT_TEXT.fullmatch(text) or _LONG_POWER.search(text.replace("**0.5", "")):
        raise ValueError(f"'{unit_text}' is not a unit")
    registry = _registry()
    try:
        unit = registry.parse_units(text)
        return float(registry.Quantity(1.0, unit).to(si_unit.replace("sqrt(s)", "s**0.5")).magnitude)
    except DimensionalityError:
        raise ValueError(f"the unit '{unit_text}' does not measure what is asked for here ({si_unit})") from None
    # pint's parser passes on whatever Python's tokenizer or arithmetic raises on odd text
    except (PintError, AttributeError, TypeError, ValueError, SyntaxError, OverflowError, AssertionError):
        raise ValueError(f"'{unit_text}' is not a known unit") from None


def to_si(value: object, si_unit: str) -> float:
    """Read a number (taken as SI) or a string with a unit, and return the number in `si_unit`.

    Arguments:
        value: a number, or text such as "120 um", "4 deg", "15 deg/sqrt(s)", "30 %".
        si_unit: the SI unit wanted, e.g. "m", "rad", "N*s/m"; "1" for a plain ratio.

    Raises:
        ValueError: when the text is not a number with a unit, or the unit measures something else.

    >>> to_si("120 um", "m")
    0.00012
    >>> round(to_si("180 deg", "rad"), 6)
    3.141593
    """
    if isinstance(value, bool):
        raise ValueError(f"expected a number or a string with a unit ({si_unit}), not true or false")
    if isinstance(value, int | float):
        number = float(value) if abs(value) < 1e300 else math.inf
        return _finite_or_infinite(number)
    if not isinstance(value, str):
        raise ValueError(f"expected a number or a string with a unit ({si_unit})")
    if len(value) > 80:
        raise ValueError(f"expected a number or a short string with a unit ({si_unit})")
    match = _NUMBER_AND_UNIT.fullmatch(value)
    if match is None:
        if si_unit == "1" and re.fullmatch(r"\s*[+-]?(\d+\.?\d*|\.\d+)\s*", value):
            return float(value)
        raise ValueError(f"'{value}' is not a number with a unit; write for example \"{_example(si_unit)}\"")
    number_text, unit_text = match.groups()
    # dividing by a whole factor keeps "120 um" at 0.00012 exactly as a reader would write it
    factor = _factor_to(unit_text.strip(), "dimensionless" if si_unit == "1" else si_unit)
    number = float(number_text)
    inverse = 1.0 / factor
    if factor < 1.0 and abs(inverse - round(inverse)) < 1e-9 * inverse:
        return _finite_or_infinite(number / round(inverse))
    return _finite_or_infinite(number * factor)


def _finite_or_infinite(number: float) -> float:
    if math.isnan(number):
        raise ValueError("not a number (nan)")
    return number


_EXAMPLES = {"m": "40 mm", "s": "40 ms", "kg": "7 g", "N": "20 mN", "rad": "15 deg", "1": "30 %"}


def _example(si_unit: str) -> str:
    return _EXAMPLES.get(si_unit, f"1.5 {si_unit}")


def quantity(si_unit: str) -> Any:
    """The pydantic type of a physical quantity: a number in `si_unit`, or a string with any unit of its kind."""
    return Annotated[
        float,
        BeforeValidator(lambda value: to_si(value, si_unit)),
        WithJsonSchema(
            {
                "anyOf": [{"type": "number"}, {"type": "string"}],
                "description": f'a number in {si_unit}, or a string with a unit, e.g. "{_example(si_unit)}"',
            }
        ),
    ]


_PREFIXES = (
    (1e9, "G"),
    (1e6, "M"),
    (1e3, "k"),
    (1.0, ""),
    (1e-3, "m"),
    (1e-6, "µ"),
    (1e-9, "n"),
    (1e-12, "p"),
)


def for_people(value: float, si_unit: str, digits: int = 3) -> str:
    """Write an SI number with a prefix a person reads easily; angles are written in degrees.

    >>> for_people(0.00012, "m"), for_people(0.0698132, "rad"), for_people(0.0, "N")
    ('120 µm', '4 deg', '0 N')
    """
    if value is None or math.isnan(value):
        return "unknown"
    if math.isinf(value):
        return "never" if si_unit == "s" else ("unlimited" if value > 0 else "minus infinity")
    if si_unit == "rad":
        return f"{math.degrees(value):.{digits}g} deg"
    if si_unit == "1":
        return f"{value:.{digits}g}"
    if value == 0.0:
        return f"0 {si_unit}"
    if si_unit == "s" and abs(value) >= 1.0:
        return f"{value:.{digits}g} s" if abs(value) < 10**digits else f"{value:.0f} s"
    if si_unit == "kg":
        value, si_unit = value * 1e3, "g"
        if abs(value) >= 1e3:
            return f"{value / 1e3:.{digits}g} kg"
    for factor, prefix in _PREFIXES:
        if abs(value) >= factor * 0.9995:
            return f"{value / factor:.{digits}g} {prefix}{si_unit}"
    return f"{value:.{digits}g} {si_unit}"
