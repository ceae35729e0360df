"""Reading and writing quantities with units."""

from __future__ import annotations

import math

import pytest

from swarmpush.quantities import for_people, to_si

ROUNDING = 1e-14  # relative; one conversion is one or two floating-point operations


@pytest.mark.parametrize(
    ("text", "unit", "expected"),
    [
        ("120 um", "m", 120e-6),
        ("120 µm", "m", 120e-6),  # micro sign
        ("120 μm", "m", 120e-6),  # Greek mu
        ("3.0m", "m", 3.0),
        ("  -40 mm ", "m", -0.040),
        ("7 g", "kg", 0.007),
        ("2 mN*s", "N*s", 0.002),
        ("2 mN·s", "N*s", 0.002),
        ("1e-9 kg*m^2", "kg*m^2", 1e-9),
        ("180 deg", "rad", math.pi),
        ("180°", "rad", math.pi),
        ("30 rpm", "rad/s", math.pi),
        ("60 deg/sqrt(s)", "rad/sqrt(s)", math.pi / 3),
        ("6 1/min", "1/s", 0.1),
        ("2 Hz", "1/s", 2.0),
        ("5 %", "1", 0.05),
        ("1e-3", "1", 0.001),
        ("1 mPa*s", "Pa*s", 0.001),
        ("3 N*m*s", "N*m*s", 3.0),
        ("3 N*m/(rad/s)", "N*m*s", 3.0),
        (".5 ms", "s", 0.0005),
        (4, "m", 4.0),
        (0.25, "1", 0.25),
    ],
)
def test_reads(text: object, unit: str, expected: float) -> None:
    """A quantity with a unit becomes the SI number worked out by hand; a bare number is SI already."""
    assert to_si(text, unit) == pytest.approx(expected, rel=ROUNDING, abs=0)


def test_keeps_round_numbers_round() -> None:
    """A decimal multiple gives exactly the number that a reader would write in SI."""
    assert [to_si(text, "m") for text in ("120 um", "40 mm", "0.3 cm")] == [0.00012, 0.04, 0.003]


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("3 kg", "m"),
        ("3 m", "m/s"),
        ("5 degC", "m"),
        ("1 Hz", "rad/s"),  # would be wrong by a factor 2 pi
        ("1 1/s", "rad/s"),
        ("5 %", "rad"),
        ("5 deg", "1"),
        ("10 rpm", "1/s"),
    ],
)
def test_refuses_another_dimension(text: str, unit: str) -> None:
    """A unit of another kind is refused, also where an angle and a plain ratio could be mistaken for each other."""
    with pytest.raises(ValueError, match="does not measure what is asked for here"):
        to_si(text, unit)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "mm",
        "40",
        "1e-3",
        "4,5 mm",
        "12 3m",
        "1 furlongs_per_hour",
        "1 m/0",
        "1 (",
        "1 m)",
        "1 m**99",
        "1 m;import os",
        "1 __class__",
        "1 ym**9/Ym**8*m**0",
        "1 m\nm",
        "9" * 100 + " m",
        "nan m",
    ],
)
def test_refuses_what_is_no_quantity(text: str) -> None:
    """Text that is no number with a unit of length raises ValueError, whatever the unit parser makes of it."""
    with pytest.raises(ValueError, match=r"not|expected|sensible"):
        to_si(text, "m")


@pytest.mark.parametrize("value", [True, None, [1.0], {"m": 1}, math.nan])
def test_refuses_other_values(value: object) -> None:
    """Truth values, lists, tables and nan are no quantities."""
    with pytest.raises(ValueError, match=r"expected|nan"):
        to_si(value, "m")


def test_keeps_the_sign_of_what_is_too_large() -> None:
    """A whole number beyond the range of a float becomes infinite with its sign."""
    assert (to_si(10**400, "m"), to_si(-(10**400), "m")) == (math.inf, -math.inf)


@pytest.mark.parametrize(
    ("value", "unit", "expected"),
    [
        (0.00012, "m", "120 µm"),
        (-0.04, "m", "-40 mm"),
        (0.0, "m", "0 m"),
        (0.9999, "m", "1 m"),
        (0.007, "kg", "7 g"),
        (12.5, "kg", "12.5 kg"),
        (math.pi / 6, "rad", "30 deg"),
        (0.25, "1", "0.25"),
        (300.0, "s", "300 s"),
        (12345.0, "s", "12345 s"),
        (0.04, "s", "40 ms"),
        (2.5e-14, "N", "2.5e-14 N"),
        (math.inf, "s", "never"),
        (math.inf, "m", "unlimited"),
        (math.nan, "m", "unknown"),
    ],
)
def test_writes_for_people(value: float, unit: str, expected: str) -> None:
    """An SI number is written with the prefix a person would choose."""
    assert for_people(value, unit) == expected
