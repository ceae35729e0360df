"""One key of a scenario set to another value: how keys are written, checked and gone through."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from swarmpush.demos import DEMOS, demo
from swarmpush.loading import load
from swarmpush.problems import ScenarioError
from swarmpush.routine import Routine
from swarmpush.scenario import Scenario
from swarmpush.vary import MAX_VALUES, column_of, first_angle_range, parse_range, unit_at, value_at, with_value

ROUNDING = 1e-12  # relative; a conversion of units and an even division


def passage() -> Scenario:
    return load(demo("service_passage"))


def changes(before: Any, after: Any, way: str = "") -> dict[str, Any]:
    """Places at which two nests of tables differ, with the later value."""
    if isinstance(before, dict):
        names = before.keys() | after.keys()
        parts = [changes(before.get(name), after.get(name), f"{way}.{name}") for name in sorted(names)]
    elif isinstance(before, list):
        parts = [changes(b, a, f"{way}[{k}]") for k, (b, a) in enumerate(zip(before, after, strict=True), 1)]
    else:
        return {} if before == after else {way.removeprefix("."): after}
    return {place: value for part in parts for place, value in part.items()}


@pytest.mark.parametrize(
    ("key", "value", "si"),
    [
        ("channel.width", "35 cm", 0.35),
        ("pushers.radius", 0.03, 0.03),
        ("routine.stages[3].acts[2].angle", "80 deg", math.radians(80)),
        ("contacts.pusher_wall.friction", 0.1, 0.1),
        ("errors.heading_diffusion", "1 deg/sqrt(s)", math.radians(1)),
        ("numerics.step", "1 ms", 1e-3),
        ("forecast.law", "impact", "impact"),
        ("pushers.count", 4.0, 4),
    ],
)
def test_one_key_is_changed(key: str, value: float | str, si: Any) -> None:
    """Setting a key changes this key, to the value in SI units, and nothing else."""
    s = passage()
    changed = with_value(s, key, value)
    expected = si if isinstance(si, str) else pytest.approx(si, rel=ROUNDING)
    assert changes(s.to_tables(), changed.to_tables()) == {key: expected}
    assert value_at(changed, key) == expected


@pytest.mark.parametrize(
    ("key", "value", "si"),
    [
        ("channel.slope", "1 deg", math.radians(1)),
        ("train[1].mass", "5 g", 5e-3),
        ("block.centre_of_mass[2]", "-3 mm", -3e-3),
        ("errors.fade_time", "1 min", 60.0),
        ("errors.dropout", "0.6 1/min", 0.01),
        ("pushers.contact_arm", "2 mm", 2e-3),
    ],
)
def test_keys_of_trains_points_and_wear(key: str, value: str, si: float) -> None:
    """Keys in a list of tables, in a point and of things left out before are changed alone, and their unit is known."""
    s = load(demo("bristle_tray"))
    changed = with_value(s, key, value)
    assert value_at(changed, key) == pytest.approx(si, rel=ROUNDING)
    assert changes(s.to_tables(), changed.to_tables()) == {key: pytest.approx(si, rel=ROUNDING)}
    assert changed.digest() != s.digest()
    assert unit_at(s, key) in ("rad", "kg", "m", "s", "1/s")


def test_a_range_of_a_block_of_the_train() -> None:
    """A range may run along a key of the train."""
    key, values = parse_range(load(demo("bristle_tray")), "train[1].mass=5 g:10 g:2")
    assert key == "train[1].mass"
    assert values == pytest.approx([5e-3, 10e-3], rel=ROUNDING)


def test_the_own_value_changes_nothing() -> None:
    """Setting keys to what they are gives the same scenario, for every demo."""
    for name in DEMOS:
        s = load(demo(name))
        for key in ("channel.width", "pushers.turn_rate", "trial.seed", "routine.stages[1].name"):
            value = value_at(s, key)
            assert with_value(s, key, "inf rad/s" if value == math.inf else value) == s


@pytest.mark.parametrize(
    ("key", "nearest"),
    [
        ("channel.with", "channel.width"),
        ("radius", "pushers.radius"),
        ("pusher.radius", "pushers.radius"),
        ("routine.stages[4].acts[2].angle", "routine.stages[3].acts[2].angle"),
        ("routine.stages[0].acts[5].angle", "routine.stages[1].acts[5].angle"),
        ("pushers", "pushers.mass"),
        ("", "channel.width"),
    ],
)
def test_unknown_keys_name_the_nearest(key: str, nearest: str) -> None:
    """A key that does not exist is refused by its name, together with keys that are written almost so."""
    with pytest.raises(ScenarioError) as caught:
        with_value(passage(), key, 1.0)
    (problem,) = caught.value.problems
    assert problem.key == key
    assert nearest in problem.sentence


def test_items_are_counted_as_in_messages() -> None:
    """The message about a wrong value names the key as it was given, items counted from 1."""
    key = "routine.stages[3].acts[2].angle"
    with pytest.raises(ScenarioError) as caught:
        with_value(passage(), key, 3.0)
    assert [problem.key for problem in caught.value.problems] == [key]


@pytest.mark.parametrize(
    ("key", "value", "word"),
    [
        ("channel.width", 0.2, "wider than the channel"),
        ("channel.width", "30 s", "does not measure"),
        ("pushers.count", 4.5, "whole number"),
        ("contacts.pusher_wall.restitution", 1.5, "at most 1"),
        ("forecast.law", "magic", "allowed"),
    ],
)
def test_values_are_checked_like_a_file(key: str, value: float | str, word: str) -> None:
    """A value that makes no valid scenario is refused, with key and value in the message."""
    with pytest.raises(ScenarioError, match=word) as caught:
        with_value(passage(), key, value)
    assert caught.value.source == f"{key} = {value}"


@pytest.mark.parametrize(
    ("key", "unit", "column"),
    [
        ("channel.width", "m", "channel.width_m"),
        ("pushers.bump_threshold", "N*s", "pushers.bump_threshold_Ns"),
        ("block.yaw_inertia", "kg*m^2", "block.yaw_inertia_kgm2"),
        ("errors.heading_diffusion", "rad/sqrt(s)", "errors.heading_diffusion_rad_sqrt_s"),
        ("errors.false_bumps", "1/s", "errors.false_bumps_1_s"),
        ("numerics.step", "s", "numerics.step_s"),
        ("floor.static_friction", "1", "floor.static_friction"),
        ("pushers.count", "1", "pushers.count"),
    ],
)
def test_units(key: str, unit: str, column: str) -> None:
    """A key knows its SI unit, also where it may be left open, and its column is named after it."""
    assert (unit_at(passage(), key), column_of(passage(), key)) == (unit, column)


def test_unit_within_a_list() -> None:
    """A corner of an outline is a length."""
    assert unit_at(load(demo("loading_bay")), "channel.outline[2][1]") == "m"


@pytest.mark.parametrize(
    ("text", "key", "values"),
    [
        ("channel.width=25 cm:40 cm:4", "channel.width", [0.25, 0.30, 0.35, 0.40]),
        ("channel.width = 0.25 : 400mm : 2", "channel.width", [0.25, 0.40]),
        ("pushers.count=2:6:3", "pushers.count", [2, 4, 6]),
        ("errors.turn_bias=1 deg:-1 deg:3", "errors.turn_bias", [math.radians(1), 0.0, -math.radians(1)]),
        ("block.yaw_inertia=1e-3:2e-3:2", "block.yaw_inertia", [1e-3, 2e-3]),
    ],
)
def test_ranges(text: str, key: str, values: list[float]) -> None:
    """A range gives evenly spaced SI numbers, both ends included, up or down."""
    found, numbers = parse_range(passage(), text)
    assert found == key
    assert numbers == pytest.approx(values, rel=ROUNDING, abs=ROUNDING)


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("channel.width", "KEY=LOW:HIGH:N"),
        ("channel.width=1:2", "KEY=LOW:HIGH:N"),
        ("channel.width=1:2:3:4", "KEY=LOW:HIGH:N"),
        ("channel.with=1:2:3", "channel.width"),
        ("channel.width=1 s:2 s:3", "does not measure"),
        ("channel.width=wide:2:3", "number with a unit"),
        ("channel.width=nan:2:3", "no end of a range"),
        ("channel.width=1:inf:3", "no end of a range"),
        ("channel.width=1:1:3", "the same"),
        ("channel.width=1:2:1", "from 2"),
        (f"channel.width=1:2:{MAX_VALUES + 1}", "from 2"),
        ("channel.width=1:2:-3", "from 2"),
        ("channel.width=1:2:2.5", "from 2"),
        ("about.name=1:2:3", "number"),
        ("pushers.pass_through=0:1:2", "number"),
    ],
)
def test_wrong_ranges(text: str, word: str) -> None:
    """A range that cannot be read is refused with the reason."""
    with pytest.raises(ValueError, match=word):
        parse_range(passage(), text)


def only(act: dict[str, Any]) -> Scenario:
    """The service passage with a routine of a run and one more act."""
    stages = [{"name": "only", "acts": [{"act": "run"}, act]}]
    return passage().model_copy(update={"routine": Routine.model_validate({"stages": stages})})


@pytest.mark.parametrize(
    ("act", "low", "high"),
    [
        ({"act": "turn", "angle": "-120 deg"}, -180.0, -60.0),
        ({"act": "depart", "angle": "40 deg"}, 20.0, 60.0),
        ({"act": "depart", "angle": "70 deg"}, 35.0, 89.0),  # flatter departures are not allowed
        ({"act": "depart", "angle": 0}, 0.0, 15.0),
    ],
)
def test_first_angle(act: dict[str, Any], low: float, high: float) -> None:
    """Without a range the routine's first angle goes from half to one and a half of itself, as far as it may."""
    key, values = first_angle_range(only(act))
    assert key == "routine.stages[1].acts[2].angle"
    assert np.degrees(values[[0, -1]]) == pytest.approx([low, high])


def test_no_angle() -> None:
    """A routine without an angle has the channel's width varied."""
    key, values = first_angle_range(only({"act": "mirror"}))
    assert (key, values[0], values[-1]) == ("channel.width", pytest.approx(0.16), pytest.approx(0.48))
