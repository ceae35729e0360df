"""Whatever a file holds, reading it gives a scenario or a scenario error."""

from __future__ import annotations

import copy
import datetime
import math
import tomllib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

from swarmpush.demos import demo
from swarmpush.loading import ScenarioError, from_tables, load, loads
from swarmpush.quantities import for_people, to_si
from swarmpush.scenario import Scenario

# The examples are the same at every run, so that a failure is due to a change in the code. The first unit takes the
# time to build the registry of units, hence no deadline.
STEADY = settings(
    derandomize=True,
    deadline=None,
    max_examples=200,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)

TEXT = demo("service_passage").read_text(encoding="utf-8")
RAW = TEXT.encode()
TABLES = tomllib.loads(TEXT)

Way = tuple[str | int, ...]


def ways(value: Any, way: Way = ()) -> Iterator[Way]:
    """The way to every key and list item of nested tables."""
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield (*way, key)
        yield from ways(inner, (*way, key))


def value_at(tables: Any, way: Way) -> Any:
    for key in way:
        tables = tables[key]
    return tables


WAYS = list(ways(TABLES))


TABLE_WAYS = [(), *(way for way in WAYS if isinstance(value_at(TABLES, way), dict))]
SCHEMA = Scenario.model_json_schema()
KNOWN = {key for table in (SCHEMA, *SCHEMA["$defs"].values()) for key in table.get("properties", {})}


def outcome(read: Callable[..., Scenario], *arguments: Any) -> Scenario | ScenarioError:
    """What reading gives; an exception of another kind is passed on and fails the test."""
    try:
        result: Scenario | ScenarioError = read(*arguments)
    except ScenarioError as error:
        result = error
    if isinstance(result, ScenarioError):
        assert result.problems
        assert all(problem.sentence and str(problem) in str(result) for problem in result.problems)
    else:
        assert isinstance(result, Scenario)
    return result


def quantity_or_error(text: str, unit: str) -> float | str:
    try:
        number = to_si(text, unit)
    except ValueError as error:
        return str(error)
    assert not math.isnan(number)
    return number


# numbers and texts near what the file holds, and whatever else TOML can say
scalars = st.one_of(
    st.booleans(),
    st.integers(),
    st.integers(-3, 40),
    st.floats(),
    st.floats(0, 10),
    st.text(max_size=30),
    st.sampled_from(["contact", "counter", "time", "run", "branch", "depart", "halt", "cross", "given", "ahead"]),
    st.builds("{} {}".format, st.floats(), st.sampled_from(["m", "mm", "kg", "deg", "s", "N", "%", "m/s", "rad/s"])),
    st.dates(),
    st.times(),
    st.datetimes(timezones=st.just(datetime.UTC)),
)
keys = st.one_of(st.text(max_size=12), st.sampled_from(sorted(KNOWN)))
values = st.recursive(scalars, lambda inner: st.lists(inner, max_size=4) | st.dictionaries(keys, inner, max_size=4))


@STEADY
@given(st.binary(max_size=400))
def test_random_bytes(tmp_path: Path, raw: bytes) -> None:
    """A file of random bytes is refused and never breaks the reader."""
    path = tmp_path / "rig.toml"
    path.write_bytes(raw)
    with pytest.raises(ScenarioError):
        load(path)


@STEADY
@given(st.integers(0, len(RAW) - 1))
def test_truncated_files(tmp_path: Path, length: int) -> None:
    """A file cut off anywhere is a scenario still or a scenario error."""
    path = tmp_path / "rig.toml"
    path.write_bytes(RAW[:length])
    outcome(load, path)


@STEADY
@given(st.data())
def test_mutated_text(data: st.DataObject) -> None:
    """A file in which pieces are replaced, doubled or lost is a scenario or a scenario error."""
    text = TEXT
    for _ in range(data.draw(st.integers(1, 4))):
        start = data.draw(st.integers(0, len(text)))
        end = min(len(text), start + data.draw(st.integers(0, 12)))
        piece = data.draw(
            st.one_of(st.text(max_size=6), st.sampled_from(["", '"', "]", "[[", "=", "1e999", text[start:end] * 2]))
        )
        text = text[:start] + piece + text[end:]
    outcome(loads, text)


@STEADY
@given(st.sampled_from(WAYS), values)
def test_random_values_at_known_keys(way: Way, value: Any) -> None:
    """Any value at any key is a scenario or a scenario error."""
    changed = copy.deepcopy(TABLES)
    value_at(changed, way[:-1])[way[-1]] = value
    outcome(from_tables, changed)


@STEADY
@given(st.sampled_from(TABLE_WAYS), st.text(max_size=12), values)
def test_unknown_keys(way: Way, key: str, value: Any) -> None:
    """An unknown key in any table is the one problem that is reported, under its own name."""
    assume(key not in KNOWN)
    changed = copy.deepcopy(TABLES)
    value_at(changed, way)[key] = value
    error = outcome(from_tables, changed)
    assert isinstance(error, ScenarioError)
    [problem] = error.problems
    assert problem.sentence.startswith("unknown key")
    assert problem.key.endswith(key) or not key.isprintable()


@STEADY
@given(st.sampled_from(WAYS))
def test_missing_keys(way: Way) -> None:
    """A file without any one of its keys or list items is a scenario or a scenario error."""
    changed = copy.deepcopy(TABLES)
    del value_at(changed, way[:-1])[way[-1]]
    outcome(from_tables, changed)


@STEADY
@given(values)
def test_tables_of_anything(value: Any) -> None:
    """Tables that have nothing to do with a scenario are refused."""
    tables = value if isinstance(value, dict) else {"format": value}
    assert isinstance(outcome(from_tables, tables), ScenarioError)


@STEADY
@given(st.text(max_size=60), st.sampled_from(["m", "kg", "rad", "rad/s", "1", "1/s", "rad/sqrt(s)", "N*m*s"]))
def test_random_text_as_quantity(text: str, unit: str) -> None:
    """Any text is a quantity or raises ValueError."""
    for candidate in (text, f"1 {text}"):
        assert quantity_or_error(candidate, unit) != ""


@STEADY
@given(st.text(alphabet="mkgsNradeu°µ%/*^().- 0123459", min_size=1, max_size=16))
def test_random_units(text: str) -> None:
    """Text made of the letters and signs of units is a quantity or raises ValueError."""
    assert quantity_or_error(f"1 {text}", "m") != ""


DIGITS = 9
WRITTEN = 10.0 ** (1 - DIGITS)  # relative; half a unit of the last digit written is at most half of this


@STEADY
@given(st.floats(1e-11, 1e11), st.booleans(), st.sampled_from(["m", "N", "kg", "s", "rad", "m/s", "1"]))
def test_quantities_round_trip(size: float, is_negative: bool, unit: str) -> None:
    """What is written for people is read back as the same number, to the digits written."""
    value = -size if is_negative else size
    assert to_si(for_people(value, unit, DIGITS), unit) == pytest.approx(value, rel=WRITTEN, abs=0)


@STEADY
@given(st.floats(allow_nan=False, allow_infinity=False), st.sampled_from(["m", "N", "kg", "s", "rad", "rad/s", "1/s"]))
def test_text_in_si_is_exact(value: float, unit: str) -> None:
    """A number written out with its SI unit is read back bit for bit."""
    assert to_si(f"{value!r} {unit}", unit) == value == to_si(value, unit)
