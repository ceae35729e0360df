"""Verdicts: bands, what is left out, the order of failures, and rigs of which is known what fails."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from typing import Any

import faulty_rigs
import pandas as pd
import pytest

from swarmpush.auditing import claims
from swarmpush.auditing.statistics import Estimate, Verdict
from swarmpush.auditing.verdicts import Finding, find_verdicts, heading_multiplier, most_failed
from swarmpush.demos import demo
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.loading import load
from swarmpush.scenario import Scenario

LONGEST = 70  # characters of a statement, so that a row fits
SUMMARY = ("lap_hit_y_m", "lap_hit_heading_rad", "heading_growth", "in_band_share", "captured_share")


@cache
def carts() -> Plan:
    """The service passage: six carts, errors, a block that may turn, one lap."""
    return plan(load(demo("service_passage")), n_starts=200)


def judged(p: Plan, **measured: float) -> dict[str, Finding]:
    """Verdicts on a plan from two runs alike with these measures, and with no others."""
    row = {"has_arrived": 0.0} | measured
    return {f.assumption: f for f in find_verdicts(p, pd.DataFrame([row, row]))}


def changed(p: Plan, s: Scenario | None = None, **parts: Any) -> Plan:
    """A plan with some parts, its scenario or numbers of its forecast put in their place."""
    return replace(p, scenario=s or p.scenario, **parts)


# ---- bands ---------------------------------------------------------------------------------------------------------

NEAR_ZERO = [  # claim, measure: predicted 0, tolerance 0.1
    (claims.INSTANT_TURNS, "reacting_share"),
    (claims.UNDISTURBED, "bumps_between_pushers"),
    (claims.AT_REST, "moving_alone_share"),
    (claims.GROWTH, "heading_growth"),
]


@pytest.mark.parametrize(("name", "measure"), NEAR_ZERO)
def test_shares_predicted_as_none(name: str, measure: str) -> None:
    """Up to the tolerance a share that should be 0 holds, above it fails."""
    assert judged(carts(), **{measure: 0.099})[name].verdict is Verdict.HOLDS
    found = judged(carts(), **{measure: 0.101})[name]
    assert (found.predicted, found.verdict) == (0.0, Verdict.FAILS)
    assert found.band == (-0.1, 0.1)


@pytest.mark.parametrize(("name", "measure"), [(claims.IN_BAND, "in_band_share"), (claims.CAPTURE, "captured_share")])
def test_shares_predicted_as_all(name: str, measure: str) -> None:
    """Down to the tolerance a share that should be 1 holds, below it fails."""
    assert judged(carts(), **{measure: 0.901})[name].verdict is Verdict.HOLDS
    found = judged(carts(), **{measure: 0.899})[name]
    assert (found.predicted, found.verdict) == (1.0, Verdict.FAILS)


def test_yaw_band() -> None:
    """Yaw counts by the way of the face's edge over the radius: 0.15 m x yaw/0.04 m must stay below 0.1."""
    assert judged(carts(), yaw_rms_rad=0.026)[claims.NO_YAW].verdict is Verdict.HOLDS
    found = judged(carts(), yaw_rms_rad=0.028)[claims.NO_YAW]
    assert found.verdict is Verdict.FAILS
    assert found.measured.mean == pytest.approx(0.105)


def test_place_and_heading_bands() -> None:
    """Places may be off by a tenth of the block's 0.3 m, headings by a tenth of the lap's band of 45 deg."""
    lap = carts().main_lap
    assert lap is not None
    for off, verdict in ((0.029, Verdict.HOLDS), (-0.031, Verdict.FAILS)):
        assert judged(carts(), lap_hit_y_m=lap.rear_y_m + off)[claims.STRIKE_PLACE].verdict is verdict
    for degrees, verdict in ((-4.4, Verdict.HOLDS), (4.6, Verdict.FAILS)):
        heading = lap.rear_heading_rad + math.radians(degrees)
        assert judged(carts(), lap_hit_heading_rad=heading)[claims.STRIKE_HEADING].verdict is verdict


def test_what_was_not_measured_is_undecided() -> None:
    """Without a measure, or with one that is no number, nothing is decided, and nothing is outside."""
    for found in (judged(carts()), judged(carts(), **dict.fromkeys(SUMMARY, math.nan))):
        for name in (claims.STRIKE_PLACE, claims.STRIKE_HEADING, claims.GROWTH, claims.IN_BAND, claims.CAPTURE):
            assert (found[name].verdict, found[name].excess) == (Verdict.UNDECIDED, 0.0)


def leaning_plan(share: float, enough: float, count: int, law: str = "auto") -> Plan:
    p = carts()
    travel = replace(p.travel, leaning_share=share, enough_share=enough)
    return changed(p, p.scenario.replace(pushers={"count": count}, forecast={"law": law}), travel=travel)


def test_force_is_judged_by_the_time_somebody_leans() -> None:
    """Two pushers that lean for half of their time leave a quarter without any: 0.6 of all time is 0.8 of the rest."""
    found = judged(leaning_plan(0.5, 0.6, 2), strong_share=0.71)[claims.FORCE]
    assert found.predicted == pytest.approx(0.8)
    assert found.verdict is Verdict.HOLDS
    assert judged(leaning_plan(0.5, 0.6, 2), strong_share=0.69)[claims.FORCE].verdict is Verdict.FAILS
    assert judged(leaning_plan(0.5, 0.6, 2), strong_share=1.0)[claims.FORCE].verdict is Verdict.HOLDS
    assert judged(leaning_plan(1.0, 0.9, 2), strong_share=1.0)[claims.FORCE].predicted == 0.9


def test_force_that_the_plan_does_not_count_on_is_not_judged() -> None:
    """There is no claim on force if the plan does without, or if its share is within the tolerance of none."""
    assert claims.FORCE in judged(leaning_plan(0.5, 0.6, 2, "lean"))
    for p in (leaning_plan(0.5, 0.6, 2, "given"), leaning_plan(0.5, 0.6, 2, "impact"), leaning_plan(0.5, 0.07, 2)):
        assert claims.FORCE not in judged(p)
    assert claims.FORCE not in judged(leaning_plan(0.0, 0.0, 2))


# ---- which claims there are ----------------------------------------------------------------------------------------


def test_names_and_statements() -> None:
    """Each claim has its own name, known to the list of claims, and its own short statement."""
    assert len(set(claims.CLAIMS)) == len(claims.CLAIMS)
    found = find_verdicts(leaning_plan(0.5, 0.6, 2), pd.DataFrame([{"has_arrived": 0.0}]))
    order = [claims.CLAIMS.index(f.assumption) for f in found]
    assert order == sorted(order)
    assert {f.assumption for f in found} == set(claims.CLAIMS) - {claims.STRIKE_RATE}
    assert len({f.statement for f in found}) == len(found)
    assert all(len(f.statement) < LONGEST for f in found)


def test_claims_without_a_lap() -> None:
    """Without a lap there is none about laps, but one about the strike rate."""
    found = judged(changed(carts(), laps=()))
    about_laps = (claims.INSTANT_TURNS, claims.IN_BAND, claims.LAP_TIME, claims.STRIKE_PLACE, claims.STRIKE_HEADING)
    for name in (*about_laps, claims.GROWTH, claims.CAPTURE, claims.LOCK, claims.STRIKES_PER_LAP):
        assert name not in found
    assert claims.STRIKE_RATE in found


def test_claims_that_make_no_sense_are_left_out() -> None:
    """One pusher, or some that pass each other, disturb nobody; a rail lets nothing turn; nothing errs without errors;
    of several strikes in a lap none is the one compared."""
    s = carts().scenario
    for pushers in ({"count": 1}, {"pass_through": True}):
        assert claims.UNDISTURBED not in judged(changed(carts(), s.replace(pushers=pushers)))
    assert claims.NO_YAW not in judged(changed(carts(), s.replace(block={"yaw": "held"})))
    exact = s.model_copy(update={"errors": type(s.errors)()})
    assert claims.IN_BAND not in judged(changed(carts(), exact))
    assert {claims.UNDISTURBED, claims.NO_YAW, claims.IN_BAND, claims.STRIKE_PLACE} <= set(judged(carts()))
    twice = judged(changed(carts(), laps=(replace(carts().laps[0], n_rear=2),)))
    assert not {claims.IN_BAND, claims.STRIKE_PLACE, claims.STRIKE_HEADING, claims.GROWTH} & set(twice)


@pytest.mark.parametrize(
    ("multipliers", "growth"),
    [
        ((-0.27, 0.0), 0.0),  # renewed heading
        ((1.0, 0.0), 0.0),  # renewed heading, place kept
        ((1.0, 1.0), 1.0),
        ((1.0, 0.3), 1.0),  # kept heading, place attracted
        ((-1.0, 0.3), -1.0),
    ],
)
def test_heading_multiplier(multipliers: tuple[float, ...], growth: float) -> None:
    """A renewed heading shows as a multiplier of 0, a kept one as one of size 1."""
    lap = replace(carts().laps[0], multipliers=tuple(complex(m) for m in multipliers))
    assert heading_multiplier(lap) == growth


# ---- order of failures ---------------------------------------------------------------------------------------------


def finding(name: str, mean: float, band: tuple[float, float], verdict: Verdict = Verdict.FAILS) -> Finding:
    return Finding(name, "", "1", 0.0, Estimate(mean, mean, mean, 2), 0.95, 0.1, verdict, band)


@pytest.mark.parametrize(
    ("mean", "band", "excess"),
    [
        (0.5, (0.0, 1.0), 0.0),
        (1.0, (0.0, 1.0), 0.0),
        (3.0, (0.0, 2.0), 0.5),
        (-4.0, (0.0, 2.0), 2.0),
        (1.0, (0.0, 0.0), math.inf),
        (0.0, (0.0, 0.0), 0.0),
        (math.nan, (0.0, 1.0), 0.0),
    ],
)
def test_excess(mean: float, band: tuple[float, float], excess: float) -> None:
    """Distance beyond the band in its widths, on either side."""
    assert finding("a", mean, band).excess == excess


def test_order_of_failures() -> None:
    """Only failures are listed: conditions first, those farther outside their own band before the others."""
    unit = (0.0, 1.0)
    found = [
        finding(claims.LOCK, 9.0, unit),
        finding(claims.NO_YAW, 1.5, unit),
        finding(claims.AT_REST, 8.0, unit, Verdict.UNDECIDED),
        finding(claims.UNDISTURBED, 0.4, (0.0, 0.1)),
        finding(claims.ARRIVAL, 9.5, unit),
        finding(claims.FORCE, 1.5, unit),
    ]
    order = [f.assumption for f in most_failed(found)]
    assert order == [claims.UNDISTURBED, claims.NO_YAW, claims.FORCE, claims.ARRIVAL, claims.LOCK]
    assert most_failed(found[2:3]) == ()


# ---- measures of a real run ----------------------------------------------------------------------------------------


@cache
def ideal_run(seconds: float = 60.0) -> tuple[Plan, Run]:
    p = faulty_rigs.planned("ideal")
    s = p.scenario.replace(goal={"time_limit": seconds})
    return p, simulate(s, seed=1, cycles=tuple(lap.surfaces for lap in p.laps))


def test_summary_of_a_run_on_the_lap() -> None:
    """A cart without errors strikes where the plan says, under exactly its heading."""
    p, run = ideal_run()
    lap, m = p.main_lap, run.summary(p.main_lap)
    assert lap is not None
    assert m["lap_hit_heading_rad"] == pytest.approx(lap.rear_heading_rad, abs=1e-9)
    assert m["lap_hit_y_m"] == pytest.approx(lap.rear_y_m, abs=0.003)  # the block is a little farther on each time
    assert (m["in_band_share"], m["captured_share"], m["yaw_rms_rad"]) == (1.0, 1.0, 0.0)


def test_summary_without_a_lap() -> None:
    """Measures that need the lap are not there without it, the others are the same."""
    p, run = ideal_run()
    bare, full = run.summary(), run.summary(p.main_lap)
    assert all(math.isnan(bare[name]) for name in SUMMARY)
    assert {k: v for k, v in bare.items() if k not in SUMMARY} == {k: v for k, v in full.items() if k not in SUMMARY}


def test_a_short_run_tells_nothing_about_capture() -> None:
    """Within five lap times nobody can be said to have found no lap."""
    p, run = ideal_run(20.0)
    assert math.isnan(run.summary(p.main_lap)["captured_share"])


# ---- rigs of which is known what fails -----------------------------------------------------------------------------


@pytest.mark.parametrize("name", faulty_rigs.SOUND)
@pytest.mark.parametrize("case", range(2))
def test_nothing_fails_in_a_sound_rig(name: str, case: int) -> None:
    """A rig that keeps all that the plan takes for granted has no failed claim, and all its conditions hold."""
    found = faulty_rigs.findings(name, case)
    assert most_failed(found) == ()
    conditions = [f for f in found if f.assumption in claims.CONDITIONS]
    assert conditions
    assert {f.verdict for f in conditions} == {Verdict.HOLDS}


@pytest.mark.parametrize("name", faulty_rigs.FAULTY)
@pytest.mark.parametrize("case", range(2))
def test_the_fault_is_named_first(name: str, case: int) -> None:
    """In a rig that breaks one condition that one heads the list, and no other condition fails."""
    failed = [f.assumption for f in most_failed(faulty_rigs.findings(name, case))]
    assert failed[:1] == [name]
    assert not set(failed[1:]) & set(claims.CONDITIONS)
