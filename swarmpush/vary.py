"""One key of a scenario set to another value, and ranges of values to go through.

A key is written as in the messages about a file: tables joined by dots, items of a list counted from 1, e.g.
`channel.width` or `routine.stages[3].acts[2].angle`.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Iterator
from typing import Any, get_args

import numpy as np
from numpy.typing import NDArray
from pydantic.fields import FieldInfo

from swarmpush.loading import from_tables
from swarmpush.problems import Problem, ScenarioError
from swarmpush.quantities import Quantity, to_si
from swarmpush.routine import Depart, Turn
from swarmpush.scenario import Scenario

FloatArray = NDArray[np.float64]
Way = tuple[str | int, ...]

MAX_VALUES = 10_000
N_VALUES = 41  # of the range that is taken when none is given: its middle is the scenario's own value
_RANGE = re.compile(r"(?P<key>[^=]+)=(?P<low>[^:]+):(?P<high>[^:]+):(?P<n>[^:]+)")


def with_value(s: Scenario, key: str, value: float | str) -> Scenario:
    """The scenario with one key set to another value, checked like a file.

    Arguments:
        s: the scenario. key: see above. value: an SI number, or text as in a file ("25 cm").

    Returns:
        The changed scenario.

    Raises:
        ScenarioError: when there is no such key (the nearest ones are named), or the value makes no valid scenario.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage"))
    >>> with_value(s, "channel.width", "40 cm").channel.width
    0.4
    """
    way = _way(s, key)
    tables = s.to_tables()
    place: Any = tables
    for part in way[:-1]:
        place = place[part]
    before = place[way[-1]] if isinstance(way[-1], int) else place.get(way[-1])
    if isinstance(before, int) and not isinstance(before, bool) and isinstance(value, float) and value.is_integer():
        value = int(value)  # a count that comes from an even range
    place[way[-1]] = value
    return from_tables(tables, f"{key} = {value}")


def value_at(s: Scenario, key: str) -> Any:
    """The value of a key, in SI units; None where the scenario leaves it open.

    Raises:
        ScenarioError: when there is no such key.
    """
    value: Any = s
    for part in _way(s, key):
        value = value[part] if isinstance(part, int) else getattr(value, part)
    return value


def unit_at(s: Scenario, key: str) -> str:
    """SI unit of a key, "1" for a ratio, a count or text.

    Raises:
        ScenarioError: when there is no such key.
    """
    field = field_at(s, key)
    marks = [*(mark for mark in field.metadata if isinstance(mark, Quantity)), *_quantities(field.annotation)]
    return marks[0].si_unit if marks else "1"


def column_of(s: Scenario, key: str) -> str:
    """Name of a table's column that holds the values of a key: the key, and its unit where it has one.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage"))
    >>> column_of(s, "pushers.free_speed"), column_of(s, "pushers.count")
    ('pushers.free_speed_m_s', 'pushers.count')
    """
    unit = unit_at(s, key)
    if unit == "1":
        return key
    letters = unit.replace("*", "").replace("^", "").replace("/", "_").replace("(", "_").replace(")", "")
    return f"{key}_{letters}"


def parse_range(s: Scenario, text: str) -> tuple[str, FloatArray]:
    """Read "KEY=LOW:HIGH:N", LOW and HIGH with or without a unit.

    Returns:
        key, values: the key and (N,) evenly spaced SI numbers from LOW to HIGH.

    Raises:
        ValueError: with a sentence that says what is wrong.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage"))
    >>> parse_range(s, "channel.width=30 cm:40 cm:3")
    ('channel.width', array([0.3 , 0.35, 0.4 ]))
    """
    match = _RANGE.fullmatch(text)
    if match is None:
        raise ValueError("write KEY=LOW:HIGH:N, for example channel.width=25cm:40cm:16")
    key = match["key"].strip()
    known = known_keys(s)
    if key not in known:
        raise ValueError(f"{key} is no key of this scenario; {nearest_keys(key, known)}")
    if isinstance(value_at(s, key), str | bool | tuple):
        raise ValueError(f"{key} does not hold a number")
    unit = unit_at(s, key)
    low, high = (_number(match[end], unit) for end in ("low", "high"))
    if low == high:
        raise ValueError("LOW and HIGH are the same")
    number = match["n"].strip()
    if not number.isdecimal() or not 2 <= int(number[:6]) <= MAX_VALUES:
        raise ValueError(f"N is {number}; it must be a whole number from 2 to {MAX_VALUES}")
    return key, np.linspace(low, high, int(number))


def first_angle_range(s: Scenario) -> tuple[str, FloatArray]:
    """The routine's first angle and values of half to one and a half of it, as far as they are allowed.

    An angle of 0 is varied by 15 deg to either side. A routine without turns and departures has no angle; then it is
    the channel's width.

    Returns:
        key, values: the key and (N_VALUES,) SI numbers.
    """
    angles = (
        f"routine.stages[{i}].acts[{j}].angle"
        for i, stage in enumerate(s.routine.stages, 1)
        for j, act in enumerate(stage.acts, 1)
        if isinstance(act, Turn | Depart)
    )
    key = next(angles, "channel.width")
    value = float(value_at(s, key))
    reach = 0.5 * abs(value) or math.radians(15.0)
    least, most = _limits(s, key)
    return key, np.linspace(max(value - reach, least), min(value + reach, most), N_VALUES)


def _number(text: str, unit: str) -> float:
    try:
        number = float(text)
    except ValueError:
        number = to_si(text, unit)
    if not math.isfinite(number):
        raise ValueError(f"{text.strip()} is no end of a range")
    return number


def _limits(s: Scenario, key: str) -> tuple[float, float]:
    marks = field_at(s, key).metadata
    least = [mark.ge for mark in marks if hasattr(mark, "ge")]
    most = [mark.le for mark in marks if hasattr(mark, "le")]
    return max(least, default=-math.inf), min(most, default=math.inf)


def _way(s: Scenario, key: str) -> Way:
    known = known_keys(s)
    if key not in known:
        raise ScenarioError(s.about.name, [Problem(key, f"no key of this scenario; {nearest_keys(key, known)}")])
    return known[key]


def known_keys(s: Scenario) -> dict[str, Way]:
    """Every key that holds a single value, or could, with the way to it: names of tables, items of lists from 0."""
    return {written(way): way for way in _leaves(s.model_dump(mode="json"))}


def _leaves(value: Any, way: Way = ()) -> Iterator[Way]:
    if isinstance(value, dict):
        for name, inner in value.items():
            yield from _leaves(inner, (*way, name))
    elif isinstance(value, list):
        for k, inner in enumerate(value):
            yield from _leaves(inner, (*way, k))
    else:
        yield way


def written(way: Way) -> str:
    """A way as a key."""
    parts = (f"[{part + 1}]" if isinstance(part, int) else f".{part}" for part in way)
    return "".join(parts).removeprefix(".")


def nearest_keys(key: str, known: dict[str, Way]) -> str:
    """The keys most like this one; a wrong table is forgiven where the last name is right."""
    name = key.rpartition(".")[2]
    close = difflib.get_close_matches(key, known, n=3, cutoff=0.6)
    close += [other for other in known if other.rpartition(".")[2] == name and other not in close]
    if not close:
        return "keys are written like channel.width or routine.stages[1].acts[2].angle"
    return f"nearest: {', '.join(close[:3])}"


def field_at(s: Scenario, key: str) -> FieldInfo:
    """The model's field that holds a key; for an item of a list of numbers, that of the list."""
    value: Any = s
    field: FieldInfo | None = None
    for part in _way(s, key):
        if isinstance(part, int):
            value = value[part]
        else:
            field, value = type(value).model_fields[part], getattr(value, part)
    assert field is not None
    return field


def _quantities(annotation: Any) -> Iterator[Quantity]:
    """The marks within an annotation such as `Annotated[float, Quantity("m")] | None`."""
    if isinstance(annotation, Quantity):
        yield annotation
    for part in get_args(annotation):
        yield from _quantities(part)
