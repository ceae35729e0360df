"""What one strike does to the block: impact, catching up, pushing on, sliding out.

All laws are one-dimensional, along the normal of the struck face; the pusher keeps its heading. The block starts at
rest, and further blocks of a train are left out. A sloping table lightens the block on the floor by the slope's cosine
and pulls it, and whoever pushes it, down by the sine: a steady force that adds to the floor's. Sources are named with
each law.
"""

from __future__ import annotations

import math
from typing import NamedTuple

from swarmpush.scenario import Scenario

_NO_REBOUND = 1e-3  # of the speed of arrival: bodies that part more slowly stay together
_MOST_BOUNCES = 100  # of a pusher that hardly loses speed in them


class Strike(NamedTuple):
    """One strike as the laws need it.

    approach_m_s: normal speed of arrival. push_N, push_s: thrust along the normal while the pusher leans, and how long.
    turning_N, turning_s: the same while its turn away still drives into the face. kept: share of momentum and thrust
    that the side walls leave to the block, from 0 to 1.
    """

    approach_m_s: float
    push_N: float
    push_s: float
    turning_N: float = 0.0
    turning_s: float = 0.0
    kept: float = 1.0


def normal_force(s: Scenario, mass: float) -> float:
    """How hard a mass presses on the dry floor, N: m g sqrt(1 - sin(slope)^2 - sin(cross slope)^2); 0 without a floor.

    Each slope is the rise of an axis of the channel, so these sines are gravity's parts along two directions at right
    angles in the table, and what is left of its square is the part into the floor. With one slope it is the cosine.
    """
    if s.floor is None:
        return 0.0
    return mass * s.floor.gravity * math.sqrt(1 - math.sin(s.channel.slope) ** 2 - math.sin(s.channel.cross_slope) ** 2)


def slope_pull(s: Scenario, mass: float) -> float:
    """Force down the slope on a mass, N: m g sin(slope), positive where the table rises towards the goal."""
    return mass * s.gravity * math.sin(s.channel.slope)


def static_friction(s: Scenario) -> float:
    """Largest force the dry floor holds before the block slides, N."""
    return s.floor.static_friction * normal_force(s, s.block.mass) if s.floor else 0.0


def static_hold(s: Scenario) -> float:
    """What must be overcome to set the block going towards the goal, N: static friction and the slope's pull.

    Less than 0 where the block slides down to the goal by itself.
    """
    return static_friction(s) + slope_pull(s, s.block.mass)


def kinetic_hold(s: Scenario) -> float:
    """What brakes the block while it slides towards the goal, N: kinetic friction and the slope's pull."""
    friction = s.floor.kinetic_friction * normal_force(s, s.block.mass) if s.floor else 0.0
    return friction + slope_pull(s, s.block.mass)


def block_drag(s: Scenario) -> float:
    """Drag of the fluid on the block in its channel, along its length, N s/m; 0 without one."""
    return s.fluid.drag_along if s.fluid else 0.0


def impact_impulse(s: Scenario, approach_m_s: float) -> float:
    """Normal impulse of one impact on the resting block, J = (1 + e) v m M / (m + M), in N s.

    Source: central impact of two free bodies with Newton's restitution, any textbook of mechanics. The floor's
    friction is left out: it is of the order of mu m g times the contact time.
    """
    m, big = s.pushers.mass, s.block.mass
    return (1.0 + s.contacts.pusher_block.restitution) * approach_m_s * m * big / (m + big)


def slide_out(mass: float, speed: float, friction: float, drag: float) -> float:
    """How far a body slides until it rests, x = (M/g) [V - (f/g) ln(1 + g V/f)], in m.

    Limits: without drag M V^2/(2 f); without friction M V/g; without either no end. (Integrated here from
    M dv/dt = -f - g v.)

    Arguments:
        mass: kg. speed: m/s, not negative. friction: N. drag: N s/m.
    """
    if speed <= 0.0:
        return 0.0
    if drag == 0.0:
        return math.inf if friction <= 0.0 else speed**2 * mass / (2.0 * friction)
    if friction <= 0.0:
        return mass * speed / drag
    ratio = drag * speed / friction
    if ratio < 1e-4:  # the series, where the closed form would cancel
        return speed**2 * mass / (2.0 * friction) * (1.0 - 2.0 * ratio / 3.0)
    return mass / drag * (speed - (friction / drag) * math.log1p(ratio))


def impact_nudge(s: Scenario, approach_m_s: float) -> float:
    """Slide after one impact at the given normal speed and nothing else, in m; see `slide_out`."""
    speed = impact_impulse(s, approach_m_s) / s.block.mass
    return slide_out(s.block.mass, speed, kinetic_hold(s), block_drag(s))


def lean_speed(s: Scenario, push_cosine: float, pushers: int = 1) -> float:
    """Speed of the block while k pushers lean on it, in m/s: max(0, k (F cos a - w) - f)/(k g_p + g_b).

    F falls with speed along the linear force-speed line, which is the pusher's drag g_p = F/v0; w is the slope's pull
    on a pusher; f is what brakes the sliding block, and nothing moves below what holds it at rest. Source: force
    balance without inertia.

    Arguments:
        push_cosine: cosine of heading against normal. pushers: how many lean alike.
    """
    push = s.pushers.stall_force * push_cosine - slope_pull(s, s.pushers.mass)
    return _lean(s, pushers * push, pushers)


def _lean(s: Scenario, push: float, pushers: int = 1) -> float:
    if push <= static_hold(s):
        return 0.0
    return max(0.0, push - kinetic_hold(s)) / (pushers * s.pushers.drag + block_drag(s))


def strike_nudge(s: Scenario, strike: Strike, *, others: int = 0, others_push_N: float = 0.0) -> float:
    """Block travel that one strike causes by the scenario's law, in m.

    Arguments:
        s: the scenario. strike: how the pusher arrives and leaves.
        others: pushers that lean on the block all the while (law auto). others_push_N: their thrust together, less than
            what brakes the sliding block, or 0.
    """
    match s.forecast.law:
        case "given":
            return float(s.forecast.nudge or 0.0)
        case "impact":
            return impact_nudge(s, strike.approach_m_s)
        case "lean":
            turning = _lean(s, strike.kept * strike.turning_N) * strike.turning_s
            return _lean(s, strike.kept * strike.push_N) * strike.push_s + turning
    return _push_on(s, strike, others, others_push_N)


def _push_on(s: Scenario, strike: Strike, others: int, others_push: float) -> float:
    """Impact, catching up, pushing on until the pusher has turned away, sliding out. (Derived here.)

    1. Impact: Newton's law for two free bodies. They part with e times the speed at which they met.
    2. The pusher, driven, catches up with the braked block and meets it again, and so on until hardly any speed is left
       between them; then they go on with their common momentum.
    3. In touch, (m + M) dV/dt = F cos a - f - (g_p + g_b) V: an exponential approach to the leaning speed, or to rest.
       The thrust lasts for the latency and, at its share, for as long as the turn away points into the face.
    4. The block slides out alone.
    A touching pusher keeps touching until then; floor friction is kinetic from the impact on, and static again once
    the block rests.
    """
    p, m, big = s.pushers, s.pushers.mass, s.block.mass
    friction, drag = kinetic_hold(s) - others_push, block_drag(s)
    own, speed, way, time_left = strike.approach_m_s, 0.0, 0.0, strike.push_s
    for _ in range(_MOST_BOUNCES):
        parting = s.contacts.pusher_block.restitution * (own - speed)
        impulse = impact_impulse(s, own - speed)
        own, speed = own - impulse / m, speed + strike.kept * impulse / big
        if parting <= _NO_REBOUND * strike.approach_m_s:
            break
        flight = _Flight(0.0, 0.0, own, speed)
        for _ in range(3):  # accelerations at the flight's mean speeds, which three rounds find to a percent
            gains = max(0.0, strike.push_N - p.drag * (own + flight.own) / 2.0) / m
            loses = (friction + drag * (speed + flight.speed) / 2.0) / big
            flight = _catch_up(own, speed, parting, gains, loses)
        if flight.time >= time_left:
            return way + slide_out(big, speed, friction, drag)
        own, speed, way, time_left = flight.own, flight.speed, way + flight.way, time_left - flight.time
    speed = (m * own + big * speed) / (m + big)
    mass, total_drag = big + (1 + others) * m, drag + (1 + others) * p.drag
    for push, time in ((strike.push_N, time_left), (strike.turning_N, strike.turning_s)):
        force = strike.kept * push - friction
        if speed <= 0.0 and strike.kept * push + others_push <= static_hold(s):
            continue
        step, speed = _driven(mass, total_drag, force, speed, time)
        way += step
    return way + slide_out(big + others * m, speed, friction, drag + others * p.drag)


class _Flight(NamedTuple):
    """From one impact to the next: how long, how far the block, and both speeds then."""

    time: float
    way: float
    own: float
    speed: float


def _catch_up(own: float, speed: float, parting: float, gains: float, loses: float) -> _Flight:
    """A pusher that steadily gains speed meets again a block that steadily loses speed.

    The gap closes after 2 (parting speed)/(gains + loses), or later if the block rests before.
    """
    if gains + loses <= 0.0:
        return _Flight(math.inf, 0.0, own, speed)
    time = 2.0 * parting / (gains + loses)
    if speed >= loses * time:
        return _Flight(time, speed * time - loses * time**2 / 2.0, own + gains * time, speed - loses * time)
    way = speed**2 / (2.0 * loses)
    mean = (own + math.sqrt(own**2 + 2.0 * gains * way)) / 2.0  # speed of the pusher until it is there
    time = way / mean if mean > 0.0 else math.inf
    return _Flight(time, way, own + gains * time if math.isfinite(time) else own, 0.0)


def _driven(mass: float, drag: float, force: float, speed: float, time: float) -> tuple[float, float]:
    """Way and final speed of a body under a steady force and linear drag; once it rests it stays at rest."""
    limit, relaxation = force / drag, mass / drag
    if limit < 0.0 and speed < -limit * math.expm1(min(time / relaxation, 700.0)):
        return limit * relaxation * math.log1p(-speed / limit) + relaxation * speed, 0.0
    gone = -math.expm1(-time / relaxation)
    return limit * time + relaxation * (speed - limit) * gone, speed + (limit - speed) * gone
