"""What the plan takes for granted, in numbers, against what the body world measured."""

from __future__ import annotations

from dataclasses import dataclass

import pandas as pd

from swarmpush.auditing import claims
from swarmpush.auditing.statistics import Estimate, Verdict, judge, mean_interval, share_interval
from swarmpush.kinematics.planning import Plan


@dataclass(frozen=True)
class Finding:
    """One claim of the plan and its verdict.

    assumption: short name. statement: the claim in words. unit: of the numbers. predicted: by the point world.
    measured: over the runs of the scenario as given, with its interval at `confidence`. tolerance: relative. verdict:
    see `judge`.
    """

    assumption: str
    statement: str
    unit: str
    predicted: float
    measured: Estimate
    confidence: float
    tolerance: float
    verdict: Verdict


def _within(predicted: float, tolerance: float) -> tuple[float, float]:
    return predicted - tolerance * abs(predicted), predicted + tolerance * abs(predicted)


def find_verdicts(plan: Plan, runs: pd.DataFrame) -> tuple[Finding, ...]:
    """Judge the plan's claims.

    Arguments:
        plan: the point world's answer.
        runs: summaries of independent runs of the scenario as given, one row each.
    """
    s, travel, lap = plan.scenario, plan.travel, plan.main_lap
    confidence, tolerance = s.trial.confidence, s.trial.tolerance
    findings: list[Finding] = []

    def claim(assumption: str, statement: str, unit: str, predicted: float, measured: Estimate) -> None:
        verdict = judge(measured, _within(predicted, tolerance))
        findings.append(Finding(assumption, statement, unit, predicted, measured, confidence, tolerance, verdict))

    def mean_of(column: str, factor: float = 1.0) -> Estimate:
        return mean_interval(runs[column] * factor, confidence)

    if lap is not None:
        statement = "a lap takes its length over the free speed"
        claim(claims.LAP_TIME, statement, "s", lap.time_s, mean_of("lap_time_s"))
        statement = "a pusher that its lap has caught stays in it"
        claim(claims.LOCK, statement, "share of time", plan.capture.captured, mean_of("lock_share"))
        per_lap = mean_of("strike_rate_1_s", lap.time_s)
        claim(claims.STRIKES_PER_LAP, "every pusher strikes in every lap time", "1", travel.strikes_per_lap, per_lap)
    else:
        statement = "the crew strikes as often as undisturbed pushers would"
        claim(claims.STRIKE_RATE, statement, "1/s", travel.strike_rate_1_s, mean_of("strike_rate_1_s", s.pushers.count))
    claim(claims.NUDGE, f"a strike moves the block by {_law(plan)}", "m", travel.nudge_m, mean_of("nudge_m"))
    statement = "an impact passes on (1 + e) v m M/(m + M)"
    claim(claims.MOMENTUM, statement, "N s", travel.strike_impulse_Ns, mean_of("impact_Ns"))
    statement = "strikes add up to the block's speed"
    claim(claims.BLOCK_SPEED, statement, "m/s", travel.block_speed_m_s, mean_of("block_speed_m_s"))

    share = share_interval(int(runs["has_arrived"].sum()), len(runs), confidence)
    arrives = float(travel.time_to_goal_s <= s.goal.time_limit)
    statement = "the block arrives in time" if arrives else "the block does not arrive in time"
    verdict = judge(share, (1.0 - tolerance, 1.0) if arrives else (0.0, tolerance))
    unit = "share of runs"
    findings.append(Finding(claims.ARRIVAL, statement, unit, arrives, share, confidence, tolerance, verdict))
    return tuple(findings)


def _law(plan: Plan) -> str:
    return {
        "given": "the given nudge",
        "impact": "the slide after one impact",
        "lean": "the thrust while in touch",
        "auto": "the slide after one impact and the thrust while in touch",
    }[plan.scenario.forecast.law]
