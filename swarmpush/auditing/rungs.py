"""What the rungs gave: block speeds, and what one assumption dropped or restored changes, in pairs of runs."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import pandas as pd

from swarmpush.auditing.ladder import BASELINE, climb, restore
from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval
from swarmpush.kinematics.forecast import speed_with_errors
from swarmpush.kinematics.lap_loss import headings_err
from swarmpush.kinematics.planning import Plan

GEOMETRY, HEADINGS = "geometry", "headings"  # the rungs of the point world
N_HEADINGS = 4  # seeds of forecasts of 300 pushers each, with and without errors; they differ little from seed to seed

Runs = Mapping[str, pd.DataFrame]  # by level, with the replicate as index


@dataclass(frozen=True)
class RungResult:
    """What one rung of the ladder gave.

    rung, adds: its key and what it adds. block_speed_m_s: mean over replicates. cost_m_s: paired difference to the
    rung that it is compared with, negative when the block gets slower; None for geometry. arrival: share of runs; None
    in the point world. against: key of the rung that it is compared with; empty for geometry.
    """

    rung: str
    adds: str
    block_speed_m_s: Estimate
    cost_m_s: Estimate | None
    arrival: Estimate | None
    against: str = ""


@dataclass(frozen=True)
class RestoredResult:
    """The scenario as given with one assumption granted again.

    assumption, statement: its key and what it says. block_speed_m_s: mean over replicates. gain_m_s: paired difference
    to the scenario as given, positive when the block gets faster. arrival: share of runs.
    """

    assumption: str
    statement: str
    block_speed_m_s: Estimate
    gain_m_s: Estimate
    arrival: Estimate


@dataclass(frozen=True)
class Baseline:
    """The same crew bouncing at random; see `bounce_at_random`.

    block_speed_m_s: mean over replicates. arrival: share of runs. lead_m_s: paired difference, the scenario as given
    minus this; positive when the routine is worth something.
    """

    block_speed_m_s: Estimate
    arrival: Estimate
    lead_m_s: Estimate


def ladder(planned: Plan, runs: Runs) -> tuple[RungResult, ...]:
    """The ladder's results, geometry first.

    Errors of headings come second, while everything is still a point. Bodies make no errors at first and are therefore
    compared with geometry, and from there on each rung with the one below: those costs add up to the whole.
    """
    s, promise = planned.scenario, planned.travel.block_speed_m_s
    confidence = s.trial.confidence
    results = [RungResult(GEOMETRY, "the plan's own promise", _exactly(promise), None, None)]
    if HEADINGS in runs:
        speeds = runs[HEADINGS]["block_speed_m_s"]
        cost = mean_interval(speeds - promise, confidence)
        speed = mean_interval(speeds, confidence)
        results.append(RungResult(HEADINGS, "errors of headings alone", speed, cost, None, GEOMETRY))
    below: pd.Series[float] | float = promise
    against = GEOMETRY
    for rung in climb(s):
        speed, arrival = _speed_and_arrival(planned, runs[rung.key])
        speeds = runs[rung.key]["block_speed_m_s"]
        cost = mean_interval(speeds - below, confidence)
        results.append(RungResult(rung.key, rung.adds, speed, cost, arrival, against))
        below, against = speeds, rung.key
    return tuple(results)


def has_headings(planned: Plan) -> bool:
    """Whether errors of headings make a rung: there is a lap, there are such errors, and something moves."""
    is_finite = math.isfinite(planned.travel.block_speed_m_s)
    return planned.main_lap is not None and headings_err(planned.scenario.errors) and is_finite


def speed_off_course(planned: Plan, seed: int) -> float:
    """Block speed in the point world with errors of headings and turns, m/s: the promise plus what they change.

    The promise is one forecast of many; only the difference of two with the same starts is kept of this seed's.
    """
    assert planned.main_lap is not None
    erring, exact = speed_with_errors(planned.scenario, planned.main_lap, seed=seed)
    return planned.travel.block_speed_m_s + erring - exact


def restored(planned: Plan, runs: Runs) -> tuple[RestoredResult, ...]:
    """What would come back with one assumption granted again, in the ladder's order."""
    s = planned.scenario
    results = []
    for granted in restore(s):
        speed, arrival = _speed_and_arrival(planned, runs[granted.level])
        gain = runs[granted.level]["block_speed_m_s"] - _as_given(planned, runs)["block_speed_m_s"]
        gained = mean_interval(gain, s.trial.confidence)
        results.append(RestoredResult(granted.key, granted.statement, speed, gained, arrival))
    return tuple(results)


def baseline(planned: Plan, runs: Runs) -> Baseline:
    """What the same crew does when it bounces at random."""
    speed, arrival = _speed_and_arrival(planned, runs[BASELINE])
    lead = _as_given(planned, runs)["block_speed_m_s"] - runs[BASELINE]["block_speed_m_s"]
    return Baseline(speed, arrival, mean_interval(lead, planned.scenario.trial.confidence))


def _as_given(planned: Plan, runs: Runs) -> pd.DataFrame:
    return runs[climb(planned.scenario)[-1].key]


def _speed_and_arrival(planned: Plan, rows: pd.DataFrame) -> tuple[Estimate, Estimate]:
    confidence = planned.scenario.trial.confidence
    n_arrived = int(rows["has_arrived"].sum())
    return mean_interval(rows["block_speed_m_s"], confidence), share_interval(n_arrived, len(rows), confidence)


def _exactly(value: float) -> Estimate:
    return Estimate(value, value, value, 0)
