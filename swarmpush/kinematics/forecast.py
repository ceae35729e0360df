"""From bumps to block travel: how far one strike moves the block, and what that makes per lap, crew and goal.

Each law is a closed form for one strike on a block at rest; the forecast adds strikes up as if they never met.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from swarmpush.kinematics.laps import Lap
from swarmpush.kinematics.strikes import Strikes
from swarmpush.scenario import Scenario


@dataclass(frozen=True)
class PushForce:
    """Thrust against the dry floor: what one pusher can do, what the floor holds, how many must lean together."""

    stall_N: float
    floor_friction_N: float
    pushers_to_move: float


@dataclass(frozen=True)
class TravelForecast:
    """What the plan promises. Times are infinite and speeds 0 when nothing moves the block.

    nudge_m: block travel per strike. strike_impulse_Ns: momentum passed by its impact. strikes_per_lap: per
    pusher in the main lap's time.
    strike_rate_1_s, block_speed_m_s: of the whole crew; the speed counts strikes on the front backwards.
    strikes_to_goal, time_to_goal_s.
    """

    nudge_m: float
    strike_impulse_Ns: float
    strikes_per_lap: float
    strike_rate_1_s: float
    block_speed_m_s: float
    strikes_to_goal: float
    time_to_goal_s: float


def push_force(s: Scenario) -> PushForce:
    """The force margin. Source: Coulomb's law; pushers_to_move = mu_s m g / stall force."""
    friction = static_friction(s)
    return PushForce(s.pushers.stall_force, friction, friction / s.pushers.stall_force)


def static_friction(s: Scenario) -> float:
    """Largest force the dry floor holds before the block slides, N."""
    return s.floor.static_friction * s.block.mass * s.floor.gravity if s.floor else 0.0


def kinetic_friction(s: Scenario) -> float:
    """Force of the dry floor on the sliding block, N."""
    return s.floor.kinetic_friction * s.block.mass * s.floor.gravity if s.floor else 0.0


def impact_impulse(s: Scenario, approach_m_s: float) -> float:
    """Normal impulse of one impact on the resting block, J = (1 + e) v m M / (m + M), in N s.

    Source: central impact of two free bodies with Newton's restitution, any textbook of mechanics. The floor's
    friction is left out: it is of the order of mu m g times the contact time.
    """
    m, big = s.pushers.mass, s.block.mass
    return (1.0 + s.contacts.pusher_block.restitution) * approach_m_s * m * big / (m + big)


def impact_nudge(s: Scenario, approach_m_s: float) -> float:
    """Slide after one impact at the given normal speed, in m.

    With V = J/M, floor force f = mu_k M g and drag g_b: x = (M/g_b) [V - (f/g_b) ln(1 + g_b V/f)]. Limits: without
    fluid V^2/(2 mu_k g); without floor J/g_b. (Integrated here from M dv/dt = -f - g_b v.)
    """
    big = s.block.mass
    speed = impact_impulse(s, approach_m_s) / big
    friction = kinetic_friction(s)
    drag = s.fluid.block_drag if s.fluid else 0.0
    if drag == 0.0:
        return math.inf if friction == 0.0 else speed**2 * big / (2.0 * friction)
    ratio = drag * speed / friction if friction > 0.0 else math.inf
    if ratio < 1e-4:  # the series, where the closed form would cancel
        return speed**2 * big / (2.0 * friction) * (1.0 - 2.0 * ratio / 3.0)
    return big / drag * (speed - (friction / drag) * math.log1p(ratio) if friction > 0.0 else speed)


def lean_speed(s: Scenario, push_cosine: float) -> float:
    """Speed of the block while one pusher leans on it, in m/s: max(0, F cos a - f)/(g_p + g_b).

    F falls with speed along the linear force-speed line, which is the pusher's drag g_p = F/v0; f is the kinetic
    friction, and nothing moves below the static one. Source: force balance without inertia.
    """
    push = s.pushers.stall_force * push_cosine
    if push <= static_friction(s):
        return 0.0
    return max(0.0, push - kinetic_friction(s)) / (s.pushers.drag + (s.fluid.block_drag if s.fluid else 0.0))


def strike_nudge(s: Scenario, push_cosine: float) -> float:
    """Block travel from one strike by the scenario's law, in m; `push_cosine` is that of heading against normal."""
    if s.forecast.law == "given":
        return float(s.forecast.nudge or 0.0)
    nudge = 0.0
    if s.forecast.law in ("auto", "impact"):
        nudge += impact_nudge(s, s.pushers.free_speed * push_cosine)
    if s.forecast.law in ("auto", "lean"):
        nudge += lean_speed(s, push_cosine) * s.pushers.latency
    return nudge


def forecast(s: Scenario, laps: tuple[Lap, ...], strikes: Strikes) -> TravelForecast:
    """What the crew does to the block if no pusher ever disturbs another and the block is where it was.

    Block speed is crew size x (strikes per second x mean nudge, on the rear face minus on the front).
    """
    rate = s.pushers.count * strikes.rate_1_s
    per_lap = strikes.rate_1_s * laps[0].time_s if laps else math.nan
    nudge = _mean(strikes.cosines, lambda c: strike_nudge(s, c))
    back_nudge = _mean(strikes.back_cosines, lambda c: strike_nudge(s, c))
    back_rate = s.pushers.count * strikes.back_rate_1_s
    if math.isinf(nudge + back_nudge):  # without friction a nudge never ends, and the more frequent strikes win
        speed = math.copysign(math.inf, rate - back_rate) if rate != back_rate else 0.0
    else:
        speed = rate * nudge - back_rate * back_nudge
    return TravelForecast(
        nudge_m=nudge,
        strike_impulse_Ns=_mean(strikes.cosines, lambda c: impact_impulse(s, s.pushers.free_speed * c)),
        strikes_per_lap=per_lap,
        strike_rate_1_s=rate,
        block_speed_m_s=speed,
        strikes_to_goal=rate * s.goal.travel / speed if speed > 0.0 else math.inf,
        time_to_goal_s=s.goal.travel / speed if speed > 0.0 else math.inf,
    )


def _mean(cosines: NDArray[np.float64], law: Callable[[float], float]) -> float:
    """Mean of a law over strikes; 0 when there are none."""
    values, counts = np.unique(cosines.round(6), return_counts=True)
    return float(np.average([law(c) for c in values.tolist()], weights=counts)) if len(values) else 0.0
