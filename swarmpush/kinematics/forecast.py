"""From visits to block travel: what a crew makes of its strikes if no pusher ever disturbs another.

One strike's worth is in `nudge.py`. Here strikes are added up, and pushers that lean at the same time are given what
they achieve together.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from swarmpush.kinematics.lap_loss import senses_on
from swarmpush.kinematics.laps import Lap
from swarmpush.kinematics.nudge import impact_impulse, normal_force, slope_pull, static_friction
from swarmpush.kinematics.strikes import Strikes
from swarmpush.kinematics.teams import CrewPush, crew_push, strikes_of
from swarmpush.kinematics.visits import Visits, follow_visits
from swarmpush.scenario import Scenario

FRICTION_RANGE = (0.5, 2.0)  # handbook values of one pair of materials differ by that much


@dataclass(frozen=True)
class PushForce:
    """Thrust against floor and slope: what one pusher can do, what holds the blocks, how many must lean together.

    stall_N: thrust of one pusher at rest. floor_friction_N, slope_N: what the dry floor holds and what pulls the blocks
    away from the goal, all blocks of a train together. climb_N: slope's pull on one pusher, which its thrust must carry
    besides. pushers_to_move: infinite where a pusher cannot carry itself, 0 where the blocks slide to the goal by
    themselves. pushers_to_move_low, pushers_to_move_high: the same with half and with twice the friction coefficient.
    """

    stall_N: float
    floor_friction_N: float
    slope_N: float
    climb_N: float
    pushers_to_move: float
    pushers_to_move_low: float
    pushers_to_move_high: float


@dataclass(frozen=True)
class TravelForecast:
    """What the plan promises. Times are infinite and speeds 0 when nothing moves the block.

    nudge_m: block travel per strike, the crew's common doing included. strike_impulse_Ns: momentum passed by an impact.
    strikes_per_lap: per pusher in the main lap's time, turns at once. strike_rate_1_s: of the whole crew, latency and
    turning time taken. block_speed_m_s: of the whole crew; strikes on the front count backwards.
    strikes_to_goal, time_to_goal_s.
    from_impact_m_s, from_pushing_on_m_s, from_leaning_together_m_s: what the block speed is made of.
    leaning_share: of its time in which a pusher leans on the rear face. enough_share: of the time in which those who
    lean overcome what the floor holds at rest. basis: in words, which law gives how much.
    """

    nudge_m: float
    strike_impulse_Ns: float
    strikes_per_lap: float
    strike_rate_1_s: float
    block_speed_m_s: float
    strikes_to_goal: float
    time_to_goal_s: float
    from_impact_m_s: float
    from_pushing_on_m_s: float
    from_leaning_together_m_s: float
    leaning_share: float
    enough_share: float
    basis: str


def push_force(s: Scenario) -> PushForce:
    """The force margin: pushers_to_move = (mu_s M g cos + M g sin)/(F - m g sin), M being the mass of all blocks.

    Source: Coulomb's law and the balance of forces along the slope, for pushers that head straight for the goal.
    (Worked out here.)
    """
    mass = sum(block.mass for block in s.blocks)
    friction = s.floor.static_friction * normal_force(s, mass) if s.floor else 0.0
    pull, climb = slope_pull(s, mass), slope_pull(s, s.pushers.mass)
    left = s.pushers.stall_force - climb

    def needed(factor: float) -> float:
        holds = max(0.0, factor * friction + pull)
        return holds / left if left > 0.0 else math.inf if holds > 0.0 else 0.0

    low, high = map(needed, FRICTION_RANGE)
    return PushForce(s.pushers.stall_force, friction, pull, climb, needed(1.0), low, high)


def forecast(s: Scenario, laps: tuple[Lap, ...], strikes: Strikes) -> TravelForecast:
    """What the crew does to the block if pushers pass each other and the block is where it was.

    Arguments:
        s: the scenario. laps: the main one first. strikes: of points that turn at once.
    """
    rear, front = follow_visits(s)
    forwards, backwards, speed = crew_speed(s, rear, front)
    rate = s.pushers.count * rear.strike_rate_1_s
    impacts = [impact_impulse(s, strike.approach_m_s) for strike in strikes_of(s, rear)]
    return TravelForecast(
        nudge_m=forwards.total / rate if rate > 0.0 else 0.0,
        strike_impulse_Ns=float(np.mean(impacts)) if impacts else 0.0,
        strikes_per_lap=strikes.rate_1_s * laps[0].time_s if laps else math.nan,
        strike_rate_1_s=rate,
        block_speed_m_s=speed,
        strikes_to_goal=rate * s.goal.travel / speed if speed > 0.0 else math.inf,
        time_to_goal_s=s.goal.travel / speed if speed > 0.0 else math.inf,
        from_impact_m_s=forwards.impact - backwards.impact,
        from_pushing_on_m_s=forwards.pushing_on - backwards.pushing_on,
        from_leaning_together_m_s=forwards.together - backwards.together,
        leaning_share=rear.leaning_share,
        enough_share=forwards.enough,
        basis=_basis(s, forwards, backwards, rear.leaning_share),
    )


def crew_speed(s: Scenario, rear: Visits, front: Visits) -> tuple[CrewPush, CrewPush, float]:
    """What the crew does to the rear face, what it does to the front face, and the block's speed from both, m/s.

    Arguments:
        s: the scenario. rear, front: from `follow_visits`.
    """
    downhill = s.replace(channel={"slope": -s.channel.slope})  # a push on the front face is one the other way
    forwards, backwards = crew_push(s, rear), crew_push(downhill, front)
    if math.isinf(forwards.total + backwards.total):  # a nudge never ends, and the more frequent strikes win
        rate, back_rate = rear.strike_rate_1_s, front.strike_rate_1_s
        return forwards, backwards, math.copysign(math.inf, rate - back_rate) if rate != back_rate else 0.0
    return forwards, backwards, forwards.total - backwards.total


def speed_with_errors(s: Scenario, lap: Lap, *, seed: int = 0) -> tuple[float, float]:
    """The forecast of the block's speed with errors of headings and turns, and without, for the same starts and draws.

    Still the point world: pushers pass each other and the block is where it was. The crew is followed from its starts
    for the trial's time as for `forecast`, but turns, bearings, ranges and sights err and headings wander as the
    scenario says (`senses_on`; the mean leg is that of `lap`). A pusher that loses its lap goes on by its routine, so
    that strikes it makes out of the lap, on its way back to one, and on the front face all count. (Worked out here.)

    Arguments:
        s: the scenario. lap: its main lap. seed: of starts and draws.

    Returns:
        with_errors, without: block speed, m/s, of the whole crew.
    """
    e = s.errors
    erring = follow_visits(s, seed=seed, senses=senses_on(e, lap), diffusion=e.heading_diffusion)
    return crew_speed(s, *erring)[2], crew_speed(s, *follow_visits(s, seed=seed))[2]


def _basis(s: Scenario, push: CrewPush, back: CrewPush, leaning_share: float) -> str:
    """Which law gives how much, in a sentence."""
    if s.forecast.law == "given":
        return "every strike moves the block by the nudge given"
    parts = {
        "sliding after impacts": push.impact - back.impact,
        "pushing on after them": push.pushing_on - back.pushing_on,
        "leaning together": push.together - back.together,
    }
    total = sum(parts.values())
    if total == 0.0 or not math.isfinite(total):
        return "no strike moves the block" if total == 0.0 else "nothing stops the block after a strike"
    # adding 0 turns a rounded -0 into 0
    shares = ", ".join(f"{round(value / total, 2) + 0.0:.0%} {what}" for what, value in parts.items() if value != 0.0)
    text = f"{shares}. A pusher leans for {_percent(leaning_share)} of its time"
    if static_friction(s) > 0.0:
        text += f"; those who lean overcome the resting floor for {_percent(push.enough)} of it"
    return text


def _percent(share: float) -> str:
    return f"{share:.0%}" if share >= 0.1 else f"{100 * share:.2g}%"
