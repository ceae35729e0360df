"""The ladder: one assumption at a time, by pure functions of the scenario, and the same whoever climbs it."""

from __future__ import annotations

import math
from itertools import pairwise

import pandas as pd
import pytest

from swarmpush.auditing.audit import audit, replicate_seeds
from swarmpush.auditing.ladder import ASSUMPTIONS, climb
from swarmpush.demos import demo
from swarmpush.kinematics.planning import plan
from swarmpush.loading import from_tables, load
from swarmpush.scenario import Errors, Scenario
from swarmpush.starts import draw_starts

DEMOS = ("service_passage", "vibration_duct", "gel_channel")


@pytest.fixture(params=DEMOS)
def s(request: pytest.FixtureRequest) -> Scenario:
    return load(demo(request.param))


def test_rungs_of_bars_and_trains() -> None:
    """Bars become discs on course and a train one block below their rungs, and every rung is a valid scenario."""
    s = load(demo("bristle_tray"))
    rungs = climb(s)
    assert [rung.key for rung in rungs] == ["bodies", "turning", "shape", "train", "yaw", "errors", "crowding"]
    for rung in rungs:
        assert from_tables(rung.scenario.to_tables(), rung.key) == rung.scenario
    discs, bars, train = (rung.scenario for rung in rungs[1:4])
    assert discs.pushers.is_disc
    assert discs.pushers.heading == "held"
    assert bars.pushers == s.pushers.model_copy(update={"pass_through": True})
    assert bars.train == ()
    assert [block.yaw for block in train.train] == ["held"]
    assert rungs[4].scenario.train == s.train


def test_rungs_of_the_demos(s: Scenario) -> None:
    """Each demo drops all four assumptions, in the ladder's order, from bodies to the scenario as given."""
    rungs = climb(s)
    assert [rung.key for rung in rungs] == ["bodies", "turning", "yaw", "errors", "crowding"]
    assert rungs[-1].scenario == s
    ideal = rungs[0].scenario
    assert ideal.pushers.turn_rate == math.inf
    assert ideal.pushers.bumper_arc == 2 * math.pi
    assert ideal.pushers.bump_threshold == 0.0
    assert ideal.pushers.pass_through
    assert ideal.block.yaw == "held"
    assert ideal.errors == Errors()


def test_each_rung_changes_what_it_names(s: Scenario) -> None:
    """Granting a rung's assumption again gives the scenario of the rung below."""
    rungs = climb(s)
    by_key = {assumption.key: assumption for assumption in ASSUMPTIONS}
    for below, rung in pairwise(rungs):
        assert by_key[rung.key].idealise(rung.scenario) == below.scenario
        assert below.scenario != rung.scenario


def test_rungs_are_pure(s: Scenario) -> None:
    """Climbing changes nothing in the scenario, and twice gives the same."""
    before = s.digest()
    assert climb(s) == climb(s)
    assert s.digest() == before


def test_idealising_twice_changes_nothing_more(s: Scenario) -> None:
    """An assumption that is granted already can be granted again, and the order of granting does not matter."""
    for one in ASSUMPTIONS:
        assert one.idealise(one.idealise(s)) == one.idealise(s)
        for other in ASSUMPTIONS:
            assert one.idealise(other.idealise(s)) == other.idealise(one.idealise(s))


def test_what_is_granted_makes_no_rung() -> None:
    """Assumptions that the scenario grants anyway are left out of the ladder."""
    s = load(demo("service_passage"))
    alone = s.replace(pushers={"count": 1})
    assert [rung.key for rung in climb(alone)] == ["bodies", "turning", "yaw", "errors"]
    railed = alone.replace(block={"yaw": "held"})
    assert [rung.key for rung in climb(railed)] == ["bodies", "turning", "errors"]
    faultless = railed.model_copy(update={"errors": Errors()})
    assert [rung.key for rung in climb(faultless)] == ["bodies", "turning"]
    assert [rung.key for rung in climb(climb(faultless)[0].scenario)] == ["bodies"]


def test_rungs_keep_geometry_starts_and_forecast(s: Scenario) -> None:
    """All rungs have the plan's laps and the same starts, so that what differs between them is the assumption.

    The forecast counts with the time that turns take and with the push meanwhile, which the first rung leaves out.
    """
    expected = plan(s, n_starts=60)
    for rung in climb(s):
        assert (draw_starts(rung.scenario, 3) == draw_starts(s, 3)).all()
        found = plan(rung.scenario, n_starts=60)
        assert [lap.surfaces for lap in found.laps] == [lap.surfaces for lap in expected.laps]
        if rung.scenario.pushers.turn_rate == s.pushers.turn_rate:
            assert found.travel == expected.travel


def test_replicate_seeds() -> None:
    """Replicates have different seeds, and asking for more leaves the first ones as they were."""
    seeds = replicate_seeds(1, 200)
    assert len(set(seeds)) == 200
    assert replicate_seeds(1, 10) == seeds[:10]
    assert not set(replicate_seeds(2, 200)) & set(seeds)


def short(name: str) -> Scenario:
    return load(demo(name)).replace(goal={"time_limit": 3.0}, trial={"replicates": 2})


def test_workers_do_not_matter() -> None:
    """An audit gives the same rows whether one worker runs it or three."""
    s = short("service_passage")
    one, three = audit(s, workers=1), audit(s, workers=3)
    pd.testing.assert_frame_equal(one.replicates, three.replicates, check_exact=True)
    assert one.to_dict() == three.to_dict()


def test_more_replicates_keep_the_first_ones() -> None:
    """Asking for more replicates adds runs and leaves the others as they were."""
    s = short("service_passage")
    few, more = (audit(s, replicates=n).replicates.set_index(["rung", "replicate"]) for n in (2, 3))
    common = [row for row in few.index if row[0] != "halved step" or row in more.index]
    pd.testing.assert_frame_equal(few.loc[common], more.loc[common], check_exact=True)


def test_costs_are_paired_differences() -> None:
    """A rung's cost is the mean of its differences to the rung below, run by run, and costs add up to the whole."""
    result = audit(short("service_passage"))
    speeds = result.replicates.pivot(index="replicate", columns="rung", values="block_speed_m_s")
    steps = result.ladder
    for below, rung in pairwise(steps[1:]):
        assert rung.cost_m_s is not None
        assert rung.cost_m_s.mean == pytest.approx((speeds[rung.rung] - speeds[below.rung]).mean(), abs=1e-15)
    promise = result.plan.travel.block_speed_m_s
    total = sum(rung.cost_m_s.mean for rung in steps if rung.cost_m_s is not None)
    assert steps[0].block_speed_m_s.mean == promise
    assert promise + total == pytest.approx(steps[-1].block_speed_m_s.mean)


def test_one_replicate_is_too_few() -> None:
    """An interval needs two runs at least."""
    with pytest.raises(ValueError, match="at least 2"):
        audit(short("service_passage"), replicates=1)
