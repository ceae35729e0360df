"""What the plan takes for granted, in numbers, against what the body world measured."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import pandas as pd
from numpy.typing import ArrayLike

from swarmpush.auditing import claims
from swarmpush.auditing.statistics import Estimate, Verdict, judge, mean_interval, share_interval
from swarmpush.kinematics.laps import Lap
from swarmpush.kinematics.planning import Plan
from swarmpush.scenario import Errors

_FORGOTTEN = 1e-6  # a multiplier smaller than this belongs to a heading, or a place, that is renewed in every lap


@dataclass(frozen=True)
class Finding:
    """One claim of the plan and its verdict.

    assumption: short name. statement: the claim in words. unit: of the numbers. predicted: by the point world.
    measured: over the runs of the scenario as given, with its interval at `confidence`. tolerance: relative; of 1 for
    shares and other pure numbers that may be 0. verdict: see `judge`. band: what was acceptable, low and high.
    """

    assumption: str
    statement: str
    unit: str
    predicted: float
    measured: Estimate
    confidence: float
    tolerance: float
    verdict: Verdict
    band: tuple[float, float]

    @property
    def excess(self) -> float:
        """How far the measured mean lies outside the band, in widths of the band; 0 inside, or if not measured."""
        low, high = self.band
        outside = max(low - self.measured.mean, self.measured.mean - high, 0.0)
        if not outside > 0.0:  # NaN as well
            return 0.0
        return outside / (high - low) if high > low else math.inf


def find_verdicts(plan: Plan, runs: pd.DataFrame) -> tuple[Finding, ...]:
    """Judge the plan's claims: first what it takes for granted, then what it concludes.

    Claims that make no sense for a scenario are left out: about laps without a lap, about yaw of a block on a rail,
    about others for a single pusher, about errors where nothing errs.

    Arguments:
        plan: the point world's answer.
        runs: summaries (`Run.summary` with the plan's main lap) of independent runs of the scenario as given, one row
            each. A column that is missing counts as not measured.
    """
    j = _Judge(plan, runs)
    return (*_conditions(j), *_laps(j), *_travel(j))


def most_failed(findings: Iterable[Finding]) -> tuple[Finding, ...]:
    """The claims that fail, what most likely ended the plan first.

    Failed conditions come before failed conclusions, which follow from them; within both, those farther outside their
    band, in widths of the band, come first (see `Finding.excess`), and equals stay in order.

    Arguments:
        findings: of one audit. All others than those with the verdict "fails" are passed over.
    """
    failed = [f for f in findings if f.verdict is Verdict.FAILS]
    return tuple(sorted(failed, key=lambda f: (f.assumption not in claims.CONDITIONS, -f.excess)))


@dataclass(frozen=True)
class _Judge:
    """A plan and the runs to judge it by."""

    plan: Plan
    runs: pd.DataFrame

    @property
    def tolerance(self) -> float:
        return self.plan.scenario.trial.tolerance

    def mean_of(self, column: str, factor: float = 1.0) -> Estimate:
        values: ArrayLike = self.runs[column] * factor if column in self.runs else []
        return mean_interval(values, self.plan.scenario.trial.confidence)

    def within(
        self, name: str, statement: str, unit: str, predicted: float, measured: Estimate, band: tuple[float, float]
    ) -> Finding:
        """A claim that holds within a band of its own."""
        trial = self.plan.scenario.trial
        verdict = judge(measured, band)
        return Finding(name, statement, unit, predicted, measured, trial.confidence, trial.tolerance, verdict, band)

    def near(
        self, name: str, statement: str, unit: str, predicted: float, measured: Estimate, scale: float = 1.0
    ) -> Finding:
        """A claim that holds within the tolerance times a scale, either way."""
        off = self.tolerance * scale
        return self.within(name, statement, unit, predicted, measured, (predicted - off, predicted + off))

    def about(self, name: str, statement: str, unit: str, predicted: float, measured: Estimate) -> Finding:
        """A claim that holds within the tolerance, relative to what is predicted."""
        return self.near(name, statement, unit, predicted, measured, abs(predicted))


def _conditions(j: _Judge) -> Iterator[Finding]:
    """What the plan takes for granted."""
    s, lap, time = j.plan.scenario, j.plan.main_lap, "share of time"
    if lap is not None:
        # the strike rate counts reacting and turning; lap times, and all that is told in laps, do not
        statement = "reacting and turning take none of the crew's time"
        yield j.near(claims.INSTANT_TURNS, statement, time, 0.0, j.mean_of("reacting_share"))
        if _is_simple(lap) and _errs(j.plan):
            statement = "a strike out of the lap keeps its route and heading band"
            yield j.near(claims.IN_BAND, statement, "share of strikes", 1.0, j.mean_of("in_band_share"))
    if s.pushers.count > 1 and not s.pushers.pass_through:
        # told by bumps and not by time, since a touch is short and yet ends a lap
        statement = "no bump is into another pusher"
        yield j.near(claims.UNDISTURBED, statement, "share of bumps", 0.0, j.mean_of("bumps_between_pushers"))
    if s.block.yaw == "free":
        half = s.block.width / 2 / s.pushers.radius
        statement = "r.m.s. yaw x half the block's width / pusher radius is 0"
        yield j.near(claims.NO_YAW, statement, "1", 0.0, j.mean_of("yaw_rms_rad", half))
    statement = "the block never moves while nobody touches it"
    yield j.near(claims.AT_REST, statement, time, 0.0, j.mean_of("moving_alone_share"))
    enough = _enough_when_leaning(j.plan)
    if enough > j.tolerance:
        statement = "those who lean overcome what the floor holds at rest"
        band = (enough - j.tolerance, 1.0 + j.tolerance)  # more force than planned fails nothing
        yield j.within(claims.FORCE, statement, "share of leaning", enough, j.mean_of("strong_share"), band)


def _laps(j: _Judge) -> Iterator[Finding]:
    """What it concludes about laps, or about strikes without one."""
    s, travel, lap, capture = j.plan.scenario, j.plan.travel, j.plan.main_lap, j.plan.capture.captured
    if lap is None:
        statement = "the crew strikes as often as undisturbed pushers would"
        rate = j.mean_of("strike_rate_1_s", s.pushers.count)
        yield j.about(claims.STRIKE_RATE, statement, "1/s", travel.strike_rate_1_s, rate)
        return
    statement = "a lap takes its length over the free speed"
    yield j.about(claims.LAP_TIME, statement, "s", lap.time_s, j.mean_of("lap_time_s"))
    if _is_simple(lap):
        low, high = lap.band_rad
        statement = f"laps end at this y, within {j.tolerance:.2g} of the block's width"
        place = j.mean_of("lap_hit_y_m")
        yield j.near(claims.STRIKE_PLACE, statement, "m", lap.rear_y_m, place, s.block.width)
        statement = f"laps end under this heading, within {j.tolerance:.2g} of its band"
        heading = j.mean_of("lap_hit_heading_rad")
        yield j.near(claims.STRIKE_HEADING, statement, "rad", lap.rear_heading_rad, heading, high - low)
        growth = heading_multiplier(lap)
        statement = "a heading's error grows by this factor in a lap"
        yield j.near(claims.GROWTH, statement, "1", growth, j.mean_of("heading_growth"))
    statement = "pushers whose start leads to a lap complete one"
    yield j.near(claims.CAPTURE, statement, "share of crew", capture, j.mean_of("captured_share"))
    statement = "a pusher that its lap has caught stays in it"
    yield j.about(claims.LOCK, statement, "share of time", capture, j.mean_of("lock_share"))
    statement, per_lap = "every pusher strikes in every lap time", j.mean_of("strike_rate_1_s", lap.time_s)
    yield j.about(claims.STRIKES_PER_LAP, statement, "1", travel.strikes_per_lap, per_lap)


def _travel(j: _Judge) -> Iterator[Finding]:
    """What it concludes about the block."""
    s, travel, runs = j.plan.scenario, j.plan.travel, j.runs
    statement = f"a strike moves the block by {_law(j.plan)}"
    yield j.about(claims.NUDGE, statement, "m", travel.nudge_m, j.mean_of("nudge_m"))
    statement = "an impact passes on (1 + e) v m M/(m + M)"
    yield j.about(claims.MOMENTUM, statement, "N s", travel.strike_impulse_Ns, j.mean_of("impact_Ns"))
    statement = "strikes add up to the block's speed"
    yield j.about(claims.BLOCK_SPEED, statement, "m/s", travel.block_speed_m_s, j.mean_of("block_speed_m_s"))
    share = share_interval(int(runs["has_arrived"].sum()), len(runs), s.trial.confidence)
    arrives = float(travel.time_to_goal_s <= s.goal.time_limit)
    statement = "the block arrives in time" if arrives else "the block does not arrive in time"
    band = (1.0 - j.tolerance, 1.0) if arrives else (0.0, j.tolerance)
    yield j.within(claims.ARRIVAL, statement, "share of runs", arrives, share, band)


def _is_simple(lap: Lap) -> bool:
    """Whether a lap has one strike; of several, a run does not tell with which one the plan's lap begins."""
    return lap.n_rear == 1


def _errs(plan: Plan) -> bool:
    """Whether anything errs, or the routine leaves something to chance."""
    s = plan.scenario
    spreads = [getattr(act, "spread", 0.0) for stage in s.routine.stages for act in stage.acts]
    return s.errors != Errors() or any(spreads)


def heading_multiplier(lap: Lap) -> float:
    """The factor by which a lap multiplies an error of heading.

    Between straight surfaces a place does not act on headings, so the return map is triangular and the factor is one of
    its two eigenvalues: 0 where a departure renews the heading, else 1 in size. The place's is not 0 unless a slide
    into a corner renews it. (Derived here.)
    """
    by_size = sorted(lap.multipliers, key=abs)
    neutral = [m for m in by_size if abs(abs(m) - 1.0) < _FORGOTTEN]
    return (by_size[0] if abs(by_size[0]) < _FORGOTTEN or not neutral else neutral[0]).real


def _enough_when_leaning(plan: Plan) -> float:
    """Share of the time with anybody leaning in which, by the plan, they overcome the floor; NaN where it has none.

    The plan's share is of all time, and with n pushers that lean independently for the share q of it somebody leans for
    1 - (1 - q)^n.
    """
    s, q = plan.scenario, plan.travel.leaning_share
    if s.forecast.law in ("given", "impact") or q <= 0.0:
        return math.nan
    anybody = -math.expm1(s.pushers.count * math.log1p(-q)) if q < 1.0 else 1.0
    return min(1.0, plan.travel.enough_share / anybody)


def _law(plan: Plan) -> str:
    return {
        "given": "the given nudge",
        "impact": "the slide after one impact",
        "lean": "the thrust while in touch",
        "auto": "one slide and the thrust while in touch",
    }[plan.scenario.forecast.law]
