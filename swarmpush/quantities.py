"""Quantities: "120 um" to SI numbers, and SI numbers back to text for people.

Inside the package every number is in SI (m, s, kg, N, rad). A scenario may write a number, taken as SI, or a
string with a unit. This module knows how to read the string and how to write the number, and nothing else.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING, Any

from pydantic import GetCoreSchemaHandler, GetJsonSchemaHandler
from pydantic.json_schema import JsonSchemaValue
from pydantic_core import CoreSchema, core_schema

if TYPE_CHECKING:
    from pint import Quantity as PintQuantity
    from pint import UnitRegistry

# the number is an atomic group, so that "1e-3" is one number and never a 1 with the unit "e-3"
_NUMBER = r"(?>[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d{1,3})?|[+-]?inf)"
_PLAIN_NUMBER = re.compile(rf"\s*{_NUMBER}\s*")
_NUMBER_AND_UNIT = re.compile(rf"\s*({_NUMBER})\s*(\D.{{0,39}})\s*")
_UNIT_TEXT = re.compile(r"[A-Za-zµμΩ°%/*·() ^.\-\d]+")
_SQUARE_ROOT = re.compile(r"sqrt\(\s*([A-Za-z]+)\s*\)")
_LONG_POWER = re.compile(r"\d{2,}")
_LEAST_FACTOR = 1e-60  # far below the Planck mass in kilograms or any other unit that people use


@cache
def _registry() -> UnitRegistry[Any]:
    """The unit registry, made on first use because it takes a third of a second to build."""
    from pint import UnitRegistry

    return UnitRegistry()


@cache
def _factor_to(unit_text: str, si_unit: str) -> float:
    """How many `si_unit` one `unit_text` is. Raises ValueError with a sentence when there is no such factor."""
    from pint.errors import DimensionalityError

    wrong_kind = f"the unit {unit_text!r} does not measure what is asked for here ({_called(si_unit)})"
    text = unit_text.replace("·", "*").replace("^", "**").replace("°", "deg").replace("%", "percent")
    text = _SQUARE_ROOT.sub(r"\1**0.5", text)
    if not _UNIT_TEXT.fullmatch(text) or _LONG_POWER.search(text.replace("**0.5", "")):
        raise ValueError(f"{unit_text!r} is not a unit")
    registry = _registry()
    wanted = "dimensionless" if si_unit == "1" else si_unit.replace("sqrt(s)", "s**0.5")
    try:
        given = registry.Quantity(1.0, registry.parse_units(text))
        factor, offset = float(given.to(wanted).magnitude), float((0.0 * given).to(wanted).magnitude)
        fits_angle = _has_angle(given) == _has_angle(registry.Quantity(1.0, wanted))
    except DimensionalityError:
        raise ValueError(wrong_kind) from None
    except Exception:  # pint's parser passes on whatever Python's tokenizer and arithmetic raise on odd text
        raise ValueError(f"{unit_text!r} is not a known unit") from None
    # To pint an angle is a plain ratio, so that 1 Hz would pass for 1 rad/s and 5 % for an angle. Only a torque per
    # turning speed may be written either way: N*m*s or N*m/(rad/s).
    if not fits_angle and "N*m" not in si_unit:
        raise ValueError(wrong_kind)
    if offset != 0.0 or not _LEAST_FACTOR < factor < 1.0 / _LEAST_FACTOR:  # decibels, for one
        raise ValueError(f"{unit_text!r} is no sensible multiple of {_called(si_unit)}")
    return factor


def _has_angle(quantity: PintQuantity[Any]) -> bool:
    return any(name == "radian" for name, _ in quantity.to_root_units().unit_items())


def _called(si_unit: str) -> str:
    return "a plain ratio" if si_unit == "1" else si_unit


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
        raise ValueError(f"expected a number or a string with a unit ({_called(si_unit)}), not true or false")
    if isinstance(value, int | float):
        try:
            return _refuse_nan(float(value))
        except OverflowError:  # a whole number beyond the range of a float
            return math.inf if value > 0 else -math.inf
    if not isinstance(value, str):
        raise ValueError(f"expected a number or a string with a unit ({_called(si_unit)})")
    if len(value) > 80:
        raise ValueError(f"expected a number or a short string with a unit ({_called(si_unit)})")
    match = _NUMBER_AND_UNIT.fullmatch(value)
    if match is None:
        if si_unit == "1" and _PLAIN_NUMBER.fullmatch(value):
            return float(value)
        raise ValueError(f'not a number with a unit; write for example "{_example(si_unit)}"')
    number_text, unit_text = match.groups()
    # dividing by a whole factor keeps "120 um" at 0.00012 exactly as a reader would write it
    factor = _factor_to(unit_text.strip(), si_unit)
    number = float(number_text)
    inverse = 1.0 / factor
    if factor < 1.0 and abs(inverse - round(inverse)) < 1e-9 * inverse:
        return _refuse_nan(number / round(inverse))
    return _refuse_nan(number * factor)


def _refuse_nan(number: float) -> float:
    if math.isnan(number):
        raise ValueError("not a number (nan)")
    return number


_EXAMPLES = {"m": "40 mm", "s": "40 ms", "kg": "7 g", "N": "20 mN", "rad": "15 deg", "1": "30 %"}


def _example(si_unit: str) -> str:
    return _EXAMPLES.get(si_unit, f"1.5 {si_unit}")


@dataclass(frozen=True)
class Quantity:
    """Marks a number of a model as a physical quantity: `Annotated[float, Quantity("m")]`.

    Such a field reads a number in `si_unit`, or a string with any unit of its kind, and holds the number in `si_unit`.
    """

    si_unit: str
    may_be_infinite: bool = False

    def __get_pydantic_core_schema__(self, source: Any, handler: GetCoreSchemaHandler) -> CoreSchema:
        return core_schema.no_info_before_validator_function(self._read, handler(source))

    def __get_pydantic_json_schema__(self, schema: CoreSchema, handler: GetJsonSchemaHandler) -> JsonSchemaValue:
        return {
            "anyOf": [
                {"type": "number", "description": f"in {_called(self.si_unit)}"},
                {"type": "string", "description": f'with a unit, e.g. "{_example(self.si_unit)}"'},
            ]
        }

    def _read(self, value: object) -> float:
        number = to_si(value, self.si_unit)
        if math.isinf(number) and not self.may_be_infinite:
            raise ValueError("must be finite")
        return number


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

    >>> for_people(0.00012, "m"), for_people(0.0698132, "rad"), for_people(0.0, "N"), for_people(6.4e-3, "kg*m^2")
    ('120 µm', '4 deg', '0 N', '0.0064 kg m²')
    """
    if value is None or math.isnan(value):
        return "unknown"
    if math.isinf(value):
        return "never" if si_unit == "s" else ("unlimited" if value > 0 else "minus infinity")
    if si_unit in ("rad", "rad/sqrt(s)"):
        return f"{math.degrees(value):.{digits}g} deg{si_unit[3:]}"
    if si_unit in ("1", "rad/s"):
        return f"{value:.{digits}g} {si_unit}".removesuffix(" 1")
    si_unit = si_unit.replace("*", " ").replace("^2", "²").replace("^3", "³")
    if value == 0.0:
        return f"0 {si_unit}"
    if si_unit.startswith(("kg ", "kg/")):  # whose prefix is taken
        return f"{value:.{digits}g} {si_unit}"
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


def prefix_for(value: float) -> tuple[float, str]:
    """The SI prefix in which a value of this size is easy to read, as factor and letter.

    >>> prefix_for(0.00027)
    (1e-06, 'µ')
    """
    for factor, prefix in _PREFIXES:
        if abs(value) >= factor * 0.9995:
            return factor, prefix
    return (1.0, "") if value == 0.0 else _PREFIXES[-1]
