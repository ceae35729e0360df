"""Points lie where they should, whatever is varied; reading any study file gives a study or an error."""

from __future__ import annotations

import copy
import datetime
import itertools
import math
import tomllib
from collections import Counter
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from swarmpush.demos import study_demo
from swarmpush.problems import ScenarioError
from swarmpush.studies.designs import grid_values, make_points, n_points, spread
from swarmpush.studies.study import Axis, Study
from swarmpush.studies.study_file import loads_study, study_from_tables

# the same examples at every run; the first unit takes the time to build the registry of units
STEADY = settings(derandomize=True, deadline=None, max_examples=60)
FUZZ = settings(derandomize=True, deadline=None, max_examples=200)
ROUNDING = 1e-12  # relative

ends = st.tuples(st.floats(0.001, 1e3), st.floats(0.001, 1e3)).filter(lambda pair: pair[1] > pair[0] * 1.001)
ranges = st.builds(
    lambda pair, is_log, n: Axis("x", low=pair[0], high=pair[1], is_log=is_log, n=n),
    ends,
    st.booleans(),
    st.integers(2, 5),
)
whole = st.builds(
    lambda low, size: Axis("x", low=float(low), high=float(low + size), is_whole=True, n=size + 1),
    st.integers(1, 20),
    st.integers(1, 8),
)
numbers = st.lists(st.integers(-50, 50), min_size=2, max_size=5, unique=True).map(lambda v: Axis("x", values=tuple(v)))
texts = st.lists(st.text(max_size=4), min_size=2, max_size=4, unique=True).map(lambda v: Axis("x", values=tuple(v)))
truths = st.just(Axis("x", values=(True, False)))


def named(axes: list[Axis]) -> tuple[Axis, ...]:
    return tuple(Axis(**(vars(axis) | {"name": f"x{k}"})) for k, axis in enumerate(axes))


def some(*kinds: st.SearchStrategy[Axis]) -> st.SearchStrategy[tuple[Axis, ...]]:
    return st.lists(st.one_of(*kinds), min_size=1, max_size=4).map(named)


ANY = (ranges, whole, numbers, texts, truths)


@STEADY
@given(some(*ANY))
def test_a_grid_has_each_combination_once(axes: tuple[Axis, ...]) -> None:
    """A grid holds every combination of the axes' values once, ends included, the last axis going fastest."""
    points = make_points("grid", axes, None, 1)
    rows = [tuple(row) for row in points.itertuples(index=False)]
    assert rows == list(itertools.product(*(grid_values(axis).tolist() for axis in axes)))
    assert len(rows) == n_points("grid", axes, None) == len(set(rows))
    for axis in axes:
        if not axis.values:
            assert math.isclose(points[axis.name].min(), axis.ends[0], rel_tol=ROUNDING)
            assert math.isclose(points[axis.name].max(), axis.ends[1], rel_tol=ROUNDING)


@STEADY
@given(some(ranges), st.integers(2, 40), st.integers(0, 2**62))
def test_a_latin_hypercube_has_one_point_to_each_part(axes: tuple[Axis, ...], n: int, seed: int) -> None:
    """Each of n equal parts of every axis (of its logarithm) holds one point."""
    points = make_points("latin hypercube", axes, n, seed)
    for axis in axes:
        low, high = axis.ends
        x = points[axis.name].to_numpy()
        share = np.log(x / low) / np.log(high / low) if axis.is_log else (x - low) / (high - low)
        assert sorted(np.floor(share * n).astype(int)) == list(range(n))


@STEADY
@given(some(*ANY), st.sampled_from(["latin hypercube", "sobol", "screening", "sensitivity"]), st.integers(0, 2**62))
def test_sampled_points_stay_within_the_axes(axes: tuple[Axis, ...], design: str, seed: int) -> None:
    """All values lie in the range or are among those given, in their kind; the same seed gives the same points."""
    points = make_points(design, axes, 8, seed)
    assert len(points) == n_points(design, axes, 8)
    assert points.equals(make_points(design, axes, 8, seed))
    for axis in axes:
        column = points[axis.name].tolist()
        if axis.values:
            assert set(column) <= set(axis.values)
        else:
            assert all(axis.ends[0] <= value <= axis.ends[1] for value in column)
        assert not axis.is_whole or all(isinstance(value, int) for value in column)


@STEADY
@given(st.one_of(whole, numbers, texts, truths), st.integers(1, 20))
def test_all_values_come_alike_often(axis: Axis, times: int) -> None:
    """Evenly spread shares of an axis give each whole number, each value and each option alike often."""
    n = len(axis.values) or round(axis.ends[1] - axis.ends[0]) + 1
    share = (np.arange(n * times) + 0.5) / (n * times)
    counts = Counter(spread(axis, share).tolist())
    assert list(counts.values()) == [times] * n


@STEADY
@given(some(*ANY), st.integers(2, 20), st.integers(0, 2**62))
def test_a_trajectory_changes_every_key_once(axes: tuple[Axis, ...], n: int, seed: int) -> None:
    """From point to point of a trajectory one key changes, and at its end all of them have."""
    points = make_points("screening", axes, n, seed)
    for _, path in points.groupby(np.arange(len(points)) // (len(axes) + 1)):
        changed = [
            [name for name in path.columns if path[name].iat[k] != path[name].iat[k + 1]] for k in range(len(axes))
        ]
        assert sorted(changed) == sorted([axis.name] for axis in axes)


@STEADY
@given(some(*ANY), st.sampled_from([2, 4, 16]), st.integers(0, 2**62))
def test_rows_of_a_sensitivity_design(axes: tuple[Axis, ...], n: int, seed: int) -> None:
    """A row is A, B, and A with one key after the other from B; all A and B together are Sobol' points."""
    points = make_points("sensitivity", axes, n, seed)
    for _, row in points.groupby(np.arange(len(points)) // (len(axes) + 2)):
        a, b = row.iloc[0], row.iloc[1]
        for k, axis in enumerate(axes):
            expected = a.copy()
            expected[axis.name] = b[axis.name]
            assert row.iloc[k + 2].tolist() == expected.tolist()


# ---- study files -------------------------------------------------------------------------------------------------

TEXT = """
format = 1
base = "vibration_duct"
replicates = 4
seed = 3
outputs = ["arrival", "travel"]
[about]
name = "n"
[design]
kind = "grid"
[[vary]]
key = "pushers.count"
values = [2, 4]
[[vary]]
key = "errors.turn_sd"
low = "0 deg"
high = "20 deg"
n = 3
[[vary]]
name = "departure"
options = { "as given" = {}, "exact" = { "routine.stages[1].acts[2].spread" = 0, errors.missed_bumps = "1 %" } }
[stop]
output = "block speed"
relative_width = 0.2
most = 8
"""
TABLES = tomllib.loads(TEXT)
HERE = Path("no such folder")

ODD = st.one_of(
    st.sampled_from(
        [
            "", " ", "\0", "5 deg", "1e400 m", "nan", "-1 %", "grid", "list", "sobol", "sensitivity", "screening",
            "gel_channel", "../x.toml", "\0.toml", "pushers.radius", "pushers", "routine.stages[1]", "train",
            "errors.turn_sd", "trial.seed", 0, -1, 1, 2, 3, 2**63, 10**60, 16**5000, 0.5, -0.0, math.inf, math.nan,
            True, False, [], [[]], {}, {"from": "gel_channel"}, {"from": 3}, {"x": {"routine": {"from": "x.toml"}}},
            {"a": {"routine.stages[1].acts[2]": {"act": "halt"}}, "b": {"pushers": 3}, "c": {"floor": {}}},
            datetime.date(2020, 1, 1), ["arrival", "arrival"], [1, "2 mm", True, None], [10**60, 1], list(range(300)),
        ]
    ),
    st.text(max_size=8),
)  # fmt: skip


def ways(value: Any, way: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield (*way, key)
        yield from ways(inner, (*way, key))


WAYS = list(ways(TABLES))


def is_study_or_errors(result: Study | ScenarioError) -> bool:
    if isinstance(result, ScenarioError):
        return bool(result.problems) and "Traceback" not in str(result)
    return len(result.digest()) == 16 and len(result.points) > 0


@FUZZ
@given(
    st.lists(
        st.tuples(st.sampled_from(WAYS), st.sampled_from(["set", "drop", "add", "repeat"]), ODD), min_size=1, max_size=3
    )
)
def test_odd_values_never_give_a_traceback(changes: list[tuple[tuple[Any, ...], str, Any]]) -> None:
    """A file of which some values are replaced, dropped, repeated or added gives a study or problems in words."""
    tables = copy.deepcopy(TABLES)
    for way, change, value in changes:
        place: Any = tables
        try:
            for part in way[:-1]:
                place = place[part]
            if change == "drop":
                del place[way[-1]]
            elif change == "repeat" and isinstance(place, list):
                place.append(copy.deepcopy(place[way[-1]]))
            elif change == "add" and isinstance(place, dict):
                place["extra"] = value
            else:
                place[way[-1]] = value
        except (KeyError, IndexError, TypeError):
            continue  # an earlier change took the place away
    result: Study | ScenarioError
    try:
        result = study_from_tables(tables, HERE)
    except ScenarioError as error:
        result = error
    assert is_study_or_errors(result)


@FUZZ
@given(st.integers(0, len(TEXT)), st.integers(0, 12), st.text(alphabet="[]{}\"'=.,#\n 0a\0é", max_size=4))
def test_mangled_text_never_gives_a_traceback(start: int, length: int, between: str) -> None:
    """A file of which a piece is cut out, or replaced by others, gives a study or problems in words."""
    result: Study | ScenarioError
    try:
        result = loads_study(TEXT[:start] + between + TEXT[start + length :], HERE)
    except ScenarioError as error:
        result = error
    assert is_study_or_errors(result)


@STEADY
@given(
    st.lists(st.integers(1, 12), min_size=1, max_size=5, unique=True),
    st.floats(0.0, 30.0),
    st.floats(31.0, 90.0),
    st.integers(2, 6),
)
def test_reading_back(counts: list[int], low: float, high: float, n: int) -> None:
    """Points are what the file says, in SI units, and a scenario holds the values of its point and else the base's."""
    tables = copy.deepcopy(TABLES)
    tables["vary"] = [
        {"key": "pushers.count", "values": counts},
        {"key": "errors.turn_sd", "low": f"{low!r} deg", "high": f"{high!r} deg", "n": n},
    ]
    study = study_from_tables(tables)
    expected = list(itertools.product(counts, np.radians(np.linspace(low, high, n))))
    assert np.allclose(study.points.to_numpy(), expected, rtol=ROUNDING, atol=ROUNDING)
    k = len(expected) // 2
    s = study.scenario(k)
    assert (s.pushers.count, s.errors.turn_sd) == (study.points["pushers.count"][k], study.points["errors.turn_sd"][k])
    base = study.base
    assert s == base.replace(pushers={"count": s.pushers.count}, errors={"turn_sd": s.errors.turn_sd})
    assert study.digest() == study_from_tables(copy.deepcopy(tables)).digest()


def test_digest_tells_all_differences() -> None:
    """Any change of the file that changes runs or points changes the digest."""
    text = study_demo("crew_and_departure").read_text(encoding="utf-8")
    changes = [
        ("seed = 1", "seed = 2"),
        ("replicates = 6", "replicates = 7"),
        ("[4, 8, 12, 18]", "[4, 8, 12, 17]"),
        ("[4, 8, 12, 18]", "[4, 8, 18, 12]"),
        ('"70 deg"', '"71 deg"'),
        ('"strike rate"', '"travel"'),
        ('"vibration_duct"', '"gel_channel"'),
        ('"flat" =', '"flatter" ='),
    ]
    digests = {loads_study(text).digest()}
    for old, new in changes:
        assert old in text
        digests.add(loads_study(text.replace(old, new)).digest())
    assert len(digests) == 1 + len(changes)
