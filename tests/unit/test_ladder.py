"""The ladder: one assumption at a time, by pure functions of the scenario, and the same whoever climbs it."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest

from swarmpush.auditing.audit import Audit, audit, scenarios_to_run
from swarmpush.auditing.ladder import ASSUMPTIONS, BASELINE, bounce_at_random, climb, restore
from swarmpush.auditing.replicates import replicate_seeds
from swarmpush.auditing.rungs import N_HEADINGS, has_headings, speed_off_course
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


@pytest.fixture(scope="module")
def audited() -> Audit:
    return audit(short("service_passage"))


def speeds_of(result: Audit) -> pd.DataFrame:
    """Block speeds, one column per level and one row per replicate."""
    return result.replicates.pivot(index="replicate", columns="rung", values="block_speed_m_s")


def test_costs_are_paired_differences(audited: Audit) -> None:
    """A rung's cost is the mean of its differences to the rung below, run by run, and costs add up to the whole."""
    speeds = speeds_of(audited)
    steps = [rung for rung in audited.ladder if rung.rung != "headings"]
    for below, rung in pairwise(steps[1:]):
        assert rung.cost_m_s is not None
        assert rung.against == below.rung
        assert rung.cost_m_s.mean == pytest.approx((speeds[rung.rung] - speeds[below.rung]).mean(), abs=1e-15)
    promise = audited.plan.travel.block_speed_m_s
    total = sum(rung.cost_m_s.mean for rung in steps if rung.cost_m_s is not None)
    assert steps[0].block_speed_m_s.mean == promise
    assert promise + total == pytest.approx(steps[-1].block_speed_m_s.mean)


# ---- errors of headings, in the point world ------------------------------------------------------------------------


def test_headings_stand_beside_geometry(audited: Audit) -> None:
    """Errors of headings are the second rung; they and bodies are both compared with geometry."""
    assert [rung.rung for rung in audited.ladder[:3]] == ["geometry", "headings", "bodies"]
    geometry, headings, bodies = audited.ladder[:3]
    assert (headings.against, bodies.against) == ("geometry", "geometry")
    assert headings.cost_m_s is not None
    assert headings.arrival is None
    assert headings.block_speed_m_s.mean == pytest.approx(geometry.block_speed_m_s.mean + headings.cost_m_s.mean)


def test_headings_cost_more_the_larger_the_errors() -> None:
    """In the point world, turns that err by 20 deg cost a good part of the promise, and errors of 0.01 deg nothing."""
    s = load(demo("service_passage"))
    costs = []
    for degrees in (0.01, 20.0):
        erring = s.model_copy(update={"errors": Errors(turn_sd=math.radians(degrees))})
        planned = plan(erring, n_starts=200)
        assert has_headings(planned)
        speeds = [speed_off_course(planned, seed=k) for k in range(N_HEADINGS)]
        costs.append(np.mean(speeds) / planned.travel.block_speed_m_s - 1.0)
    assert abs(costs[0]) < 0.001
    assert costs[1] < -0.05


def test_no_headings_without_errors_or_lap() -> None:
    """Without errors of headings, or without a lap, there is no such rung; a spread of speeds is none of them."""
    s = load(demo("service_passage"))
    for other in (
        s.model_copy(update={"errors": Errors()}),
        s.model_copy(update={"errors": Errors(speed_spread=0.05, missed_bumps=0.02)}),
        bounce_at_random(s),
    ):
        planned = plan(other, n_starts=100)
        assert bool(planned.laps) == (other.routine == s.routine)
        assert not has_headings(planned)


# ---- one assumption restored ---------------------------------------------------------------------------------------


def test_restored_scenarios_grant_one_assumption(s: Scenario) -> None:
    """Each differs from the scenario as given by one assumption, and is a valid scenario; the last is a rung."""
    granted = restore(s)
    by_key = {assumption.key: assumption for assumption in ASSUMPTIONS}
    assert [one.key for one in granted] == [rung.key for rung in climb(s)[1:]]
    for one in granted:
        assert one.scenario == by_key[one.key].idealise(s) != s
        assert from_tables(one.scenario.to_tables(), one.key) == one.scenario
    assert granted[-1].scenario == climb(s)[-2].scenario


def test_bars_that_turn_at_once_are_discs() -> None:
    """Turning at once brings discs on course along, as neither a bar nor a free heading can; the statement says so."""
    s = load(demo("bristle_tray"))
    granted = {one.key: one for one in restore(s)}
    assert list(granted) == [rung.key for rung in climb(s)[1:]]
    turning = granted["turning"]
    assert turning.scenario.pushers.is_disc
    assert "turn at once; pushers are discs" in turning.statement
    assert granted["shape"].scenario.pushers.turn_rate == s.pushers.turn_rate
    for one in granted.values():
        assert from_tables(one.scenario.to_tables(), one.key) == one.scenario


def test_gains_are_paired_differences(audited: Audit) -> None:
    """A gain is the mean difference to the scenario as given, run by run, and the runs have the same seeds."""
    speeds = speeds_of(audited)
    assert [row.assumption for row in audited.restored] == ["turning", "yaw", "errors", "crowding"]
    for row in audited.restored:
        level = f"restored: {row.assumption}"
        assert row.gain_m_s.mean == pytest.approx((speeds[level] - speeds["crowding"]).mean(), abs=1e-15)
        assert row.block_speed_m_s.mean == pytest.approx(speeds[level].mean())
        seeds = audited.replicates[audited.replicates["rung"] == level]["seed"].tolist()
        assert seeds == replicate_seeds(audited.scenario.trial.seed, 2)


def test_runs_of_the_same_scenario_are_made_once(audited: Audit) -> None:
    """Crowding taken away again is the rung below it, so its runs are those, and progress counts them once."""
    rows = audited.replicates.set_index("rung")
    below = rows.loc["errors"].reset_index(drop=True)
    pd.testing.assert_frame_equal(rows.loc["restored: crowding"].reset_index(drop=True), below, check_exact=True)
    told: list[tuple[int, int, str]] = []
    audit(audited.scenario, progress=lambda *what: told.append(what))
    # 5 rungs, 3 restored and the baseline with 2 runs each, 2 with half the step, and 4 forecasts with errors
    assert {total for _, total, _ in told} == {24}
    assert [done for done, _, _ in told] == list(range(1, 25))
    assert "restored: crowding" not in {what for _, _, what in told}


# ---- the crew that bounces at random -------------------------------------------------------------------------------


def test_baseline_changes_the_routine_only(s: Scenario) -> None:
    """The crew at random has the same rig, errors and starts, and another routine, which may stand in a file."""
    random = bounce_at_random(s)
    assert random.model_copy(update={"routine": s.routine}) == s
    assert [act.act for act in random.routine.stages[0].acts] == ["run", "wander"]
    assert from_tables(random.to_tables(), "random") == random
    assert (draw_starts(random, 3) == draw_starts(s, 3)).all()
    assert scenarios_to_run(s)[BASELINE] == random


def test_lead_is_a_paired_difference(audited: Audit) -> None:
    """The routine's lead is what it moves the block by more than the crew at random, run by run."""
    speeds = speeds_of(audited)
    baseline = audited.baseline
    assert baseline.block_speed_m_s.mean == pytest.approx(speeds["baseline"].mean())
    assert baseline.lead_m_s.mean == pytest.approx((speeds["crowding"] - speeds["baseline"]).mean(), abs=1e-15)
    assert baseline.arrival.n == 2


def test_a_crew_at_random_has_no_lead_over_itself() -> None:
    """A scenario that bounces at random itself is its own baseline: the runs are the same and the lead is 0."""
    result = audit(bounce_at_random(short("service_passage")))
    assert result.baseline.lead_m_s.mean == 0.0
    assert result.ladder[1].rung == "bodies"


# ---- two designs ---------------------------------------------------------------------------------------------------


def test_comparing_two_audits(audited: Audit) -> None:
    """Two audits are compared run by run, other minus this; with itself an audit differs in nothing."""
    quicker = audited.scenario.replace(pushers={"count": 3})
    other = audit(quicker)
    found = audited.compare(other).set_index("quantity")
    assert found.index.tolist() == ["block speed", "arrival", "strike rate"]
    change = other.as_given["block_speed_m_s"].to_numpy() - audited.as_given["block_speed_m_s"].to_numpy()
    assert found.loc["block speed", "difference"] == pytest.approx(change.mean())
    assert found.loc["block speed", "difference"] != 0.0
    assert other.compare(audited)["difference"].to_numpy() == pytest.approx(-found["difference"].to_numpy())
    assert (audited.compare(audited)["difference"] == 0.0).all()


def test_other_draws_are_not_compared(audited: Audit) -> None:
    """Audits with other seeds or another number of replicates have no pairs."""
    s = audited.scenario
    with pytest.raises(ValueError, match="2 and 3 replicates"):
        audited.compare(audit(s, replicates=3))
    with pytest.raises(ValueError, match="different seeds"):
        audited.compare(audit(s.replace(trial={"seed": 2})))


def test_one_replicate_is_too_few() -> None:
    """An interval needs two runs at least."""
    with pytest.raises(ValueError, match="at least 2"):
        audit(short("service_passage"), replicates=1)
