"""Neighbours of a scenario: which there are, and what their runs say about crew sizes and measured values."""

from __future__ import annotations

import math
from pathlib import Path

import pandas as pd
import pytest

import swarmpush
from swarmpush.auditing.audit import Audit, load_audit
from swarmpush.auditing.ladder import climb
from swarmpush.auditing.neighbours import (
    CREW,
    REACH,
    SHIFTED,
    crew_sizes,
    influences,
    neighbours,
    other_crews,
    shifts,
    untried_crews,
)
from swarmpush.auditing.statistics import Verdict
from swarmpush.demos import DEMOS, demo
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.loading import from_tables, load
from swarmpush.reporting.audit_words import crew_words, influence_words
from swarmpush.vary import value_at

N_RUNS = 5


@pytest.fixture(scope="module")
def passage() -> Plan:
    return plan(load(demo("service_passage")), n_starts=200)


@pytest.fixture(scope="module")
def around() -> Audit:
    """A short audit with its neighbours, of a rig on which nothing is drawn but the starts."""
    s = load(demo("service_passage")).replace(goal={"time_limit": 2.0}, pushers={"count": 2})
    return swarmpush.audit(s, replicates=2, around=True, require=("arrival>=0.5",))


@pytest.mark.parametrize("name", DEMOS)
def test_neighbours_are_valid_and_differ_in_one_value(name: str) -> None:
    """Each is a scenario that a file could hold, and moves one value up or down by the same share."""
    s = load(demo(name))
    for level, other in neighbours(s).items():
        assert from_tables(other.to_tables(), level) == other
    for shift in shifts(s):
        assert 0.0 < shift.reach <= REACH
        assert value_at(shift.lower, shift.key) == pytest.approx((1.0 - shift.reach) * shift.value, rel=1e-12)
        assert value_at(shift.higher, shift.key) == pytest.approx((1.0 + shift.reach) * shift.value, rel=1e-12)
    keys = [shift.key for shift in shifts(s)]
    assert len(set(keys)) == len(keys)
    assert "pushers.free_speed" in keys
    assert not {"goal.travel", "trial.tolerance", "channel.length"} & set(keys)


def test_a_narrow_fit_is_varied_by_less(passage: Plan) -> None:
    """A channel that the block nearly fills is not made so narrow that the block no longer fits."""
    reach = {shift.key: shift.reach for shift in shifts(passage.scenario)}
    assert reach["pushers.mass"] == REACH
    assert reach["channel.width"] == REACH / 4  # 0.32 m round a block of 0.30 m


def test_crews_that_find_no_room_are_left_out() -> None:
    """A crew that is placed one by one has no other sizes; one that fills its region has only smaller ones."""
    s = load(demo("service_passage"))
    assert untried_crews(s) == [48]
    placed = {"x": 0.3, "y": 0.16, "heading": 0.0}
    alone = {"start": {"placed": [placed]}, "pushers": s.to_tables()["pushers"] | {"count": 1}}
    one = from_tables(s.to_tables() | alone)
    assert other_crews(one) == {}
    assert untried_crews(one) == [2, 4, 8]


def made(speeds: list[float], arrived: int = 0) -> pd.DataFrame:
    """Summaries of runs with these speeds, of which so many arrived."""
    return pd.DataFrame(
        {
            "block_speed_m_s": speeds,
            "has_arrived": [k < arrived for k in range(len(speeds))],
            "strike_rate_1_s": 0.1,
            "cause_leaning_too_weak_for_floor": 0.25,
            "cause_touching_pusher": 0.5,
        }
    )


def spread(mean: float, noise: float = 0.01) -> list[float]:
    """Speeds about a mean, the same pattern in each set, so that differences in pairs are exact."""
    return [mean + noise * (k - (N_RUNS - 1) / 2) for k in range(N_RUNS)]


def test_crews_are_compared_with_the_next_smaller_one(passage: Plan) -> None:
    """Gains are paired differences along the sizes tried, the scenario's own among them."""
    given = climb(passage.scenario)[-1].key
    runs = {given: made(spread(3.0), 2), f"{CREW}3": made(spread(1.0)), f"{CREW}12": made(spread(2.5), 5)}
    three, six, twelve = crew_sizes(passage, runs)
    assert [size.count for size in (three, six, twelve)] == [3, 6, 12]
    assert three.gain_m_s is None
    assert six.gain_m_s is not None
    assert twelve.gain_m_s is not None
    assert six.gain_m_s.mean == pytest.approx(2.0)
    assert twelve.gain_m_s.high == pytest.approx(-0.5, abs=1e-9)  # the pattern drops out of the pairs
    assert [size.arrival.mean for size in (three, six, twelve)] == [0.0, 0.4, 1.0]
    assert (six.strikes_1_s, six.too_weak, six.in_touch) == pytest.approx((0.1, 0.25, 0.5))
    assert crew_sizes(passage, {given: made(spread(3.0))}) == ()


def test_influences_in_order_of_what_must_be_known_best(passage: Plan) -> None:
    """A change in pairs, per relative change of the value; what is lost in chance comes last, whatever its mean."""
    s = passage.scenario
    given = climb(s)[-1].key
    runs = {given: made(spread(2.0))}
    changes = {"pushers.mass": 0.5, "block.mass": -1.0, "pushers.latency": 0.1}
    for shift in shifts(s):
        change = changes.get(shift.key, 0.0)
        lower, higher = ([x + sign * shift.reach * change for x in spread(2.0)] for sign in (-1, 1))
        if shift.key == "pushers.latency":  # a large mean change, larger still by chance
            higher = [x + (-1) ** k * 10.0 + 2.0 for k, x in enumerate(higher)]
        for level, speeds in zip(shift.levels, (lower, higher), strict=True):
            runs[level] = made(speeds)
    found = {one.key: one for one in influences(passage, runs)}
    assert list(found)[:2] == ["block.mass", "pushers.mass"]
    assert found["block.mass"].change_m_s.mean == pytest.approx(-1.0)
    assert found["block.mass"].precision == pytest.approx(s.trial.tolerance * 2.0 / 1.0)
    assert found["pushers.mass"].precision == pytest.approx(s.trial.tolerance * 2.0 / 0.5)
    assert [one.is_seen for one in found.values()] == [True, True] + [False] * (len(found) - 2)
    assert found["pushers.latency"].at_worst < found["pushers.latency"].precision
    assert found["floor.kinetic_friction"].precision == math.inf
    assert influences(passage, {given: runs[given]}) == ()


def test_an_audit_with_its_neighbours(around: Audit, tmp_path: Path) -> None:
    """Neighbours have the audit's seeds, tell in words, and come back from a saved audit, as do the demands."""
    levels = set(around.replicates["rung"])
    assert {level for level in levels if level.startswith((CREW, SHIFTED))} == set(neighbours(around.scenario))
    for _, rows in around.replicates[around.replicates["rung"].str.startswith(CREW)].groupby("rung"):
        assert rows["seed"].tolist() == around.as_given["seed"].tolist()
    assert [size.count for size in around.crews] == [1, 2, 4, 8, 16]
    assert "16" in crew_words(around)
    assert "beyond chance in 2 runs" in influence_words(around) or "Measure first" in influence_words(around)
    around.save(tmp_path)
    again = load_audit(tmp_path)
    assert again.to_dict() == around.to_dict()
    assert again.crews == around.crews
    assert [demand.demand for demand in again.demands] == ["arrival>=0.5"]


def test_neighbours_change_nothing_else(around: Audit) -> None:
    """The same audit without them has the same ladder and verdicts, and nothing to say about crews or values."""
    bare = swarmpush.audit(around.scenario, replicates=2)
    assert bare.ladder == around.ladder
    assert bare.verdicts == around.verdicts
    assert (bare.crews, bare.influences, bare.demands) == ((), (), ())
    assert crew_words(bare) == influence_words(bare) == ""
    assert Verdict.UNDECIDED in {finding.verdict for finding in bare.verdicts}
