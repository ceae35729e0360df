"""Dimensionless numbers, and in words which assumptions of a geometric plan they put at risk.

Everything here follows from the scenario and its laps; nothing is run.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from swarmpush.geometry import block_corners, channel_corners, is_plain, post_corners
from swarmpush.kinematics.drift import laps_to_drift_out
from swarmpush.kinematics.forecast import PushForce, TravelForecast, push_force
from swarmpush.kinematics.laps import Lap
from swarmpush.kinematics.nudge import normal_force, slope_pull
from swarmpush.kinematics.omissions import climb_share, fade_left, failures_expected
from swarmpush.quantities import for_people
from swarmpush.scenario import Scenario


@dataclass(frozen=True)
class Regime:
    """One dimensionless number: name, formula, value, what it means here, and whether it puts the plan at risk."""

    name: str
    formula: str
    value: float
    meaning: str
    is_at_risk: bool


def regimes(s: Scenario, laps: tuple[Lap, ...], travel: TravelForecast) -> tuple[Regime, ...]:
    """The numbers that apply to a scenario, in the order in which a plan usually breaks."""
    found = [*_motion(s), *_shape(s), *_force(s, travel), *_slopes(s), *_wear(s), *_channel(s)]
    if laps:
        found += [*_turning(s, laps[0]), *_errors(s, laps[0])]
    return tuple(found)


def _motion(s: Scenario) -> Iterator[Regime]:
    p = s.pushers
    inertia = p.relaxation_time * p.free_speed / p.radius
    if inertia < 0.02:
        text, risk = "drag-dominated: an impact moves nothing, only held pushing does", True
    elif inertia > 0.5:
        text, risk = "inertial: a pusher needs several radii to gain speed after a bump", True
    else:
        text, risk = "speed is regained within a radius; impacts count", False
    yield Regime("inertia", "m v / (drag r)", inertia, text, risk)
    if s.fluid and s.fluid.viscosity and s.fluid.density:
        reynolds = s.fluid.density * p.free_speed * 2 * p.radius / s.fluid.viscosity
        text = "Stokes drag is a fair law" if reynolds < 0.1 else "Stokes drag is strained; expect more drag"
        yield Regime("Reynolds number", "rho v d / eta", reynolds, text, reynolds >= 0.1)


def _shape(s: Scenario) -> Iterator[Regime]:
    """What a disc that holds its heading stands for.

    A stall force at the end of the outline's reach R turns a free heading at F R/turn drag; in the time R/v0 that the
    pusher takes to run as far, by F R^2/(turn drag v0). (Worked out here, without inertia.)
    """
    p = s.pushers
    if not p.is_disc:
        bar = p.reach / p.radius
        text = "the plan takes the bar for a disc of this radius"
        yield Regime("bar", "reach / r", bar, text + ("" if bar < 1.2 else ", and it reaches much farther"), bar >= 1.2)
    if p.heading == "free":
        turned = p.drag * p.reach**2 / p.turning_drag
        text = (
            f"a push off the centre turns it by some {turned:.2g} rad in the time it runs its reach; the plan holds it"
        )
        yield Regime("free heading", "F R^2 / (turn drag v)", turned, text, turned > 0.1)


def _force(s: Scenario, travel: TravelForecast) -> Iterator[Regime]:
    force = push_force(s)
    if force.pushers_to_move > 0.0:
        needed = force.pushers_to_move
        if s.train:
            share = (
                force.floor_friction_N / (s.floor.static_friction * normal_force(s, s.block.mass)) if s.floor else 1.0
            )
            text = (
                f"{len(s.blocks)} blocks in a row hold {share:.2g} times what the first does; the nudge is that of one"
            )
            yield Regime("train", "friction of all / of the first", share, text, share > 1.0 + s.trial.tolerance)
        if needed > s.pushers.count:
            text = "the whole crew leaning together cannot move the block; only impacts can"
        elif needed > 1.0:
            text = f"{math.ceil(needed)} pushers must lean at the same time to move the block"
        else:
            text = "one leaning pusher moves the block: held pushing adds to the planned nudges"
        formula = "(mu cos + sin) M g / (F - m g sin)" if s.channel.slope else "mu m g / stall force"
        yield Regime("floor hold", formula, needed, text, needed > 1.0 or s.pushers.latency > 0)
        yield _force_margin(s.pushers.count, force)
    if travel.nudge_m > 0.0:
        slide = travel.nudge_m / s.pushers.radius
        text = "a strike is almost nothing; transport needs many" if slide < 0.05 else "strikes move the block visibly"
        yield Regime("slide per strike", "nudge / r", slide, text, False)


def _force_margin(crew: int, force: PushForce) -> Regime:
    """Crew against floor, for friction from half to twice the given: a pair's handbook values scatter by that much."""
    margin = crew / force.pushers_to_move
    low, high = force.pushers_to_move_low, force.pushers_to_move_high
    text = f"from half to twice the friction it takes {low:.2g} to {high:.2g} leaning together, of {crew}"
    if high > crew >= force.pushers_to_move:
        text += "; at twice the friction the crew cannot"
    return Regime("force margin", "crew / pushers to move the block", margin, text, high > crew)


def _slopes(s: Scenario) -> Iterator[Regime]:
    """Gravity along the table against thrust and against the floor: m g sin/F, and tan(slope)/mu_s for the block."""
    if s.floor is None:
        return
    for name, angle in (("slope", s.channel.slope), ("cross slope", s.channel.cross_slope)):
        if angle == 0.0:
            continue
        share = (
            climb_share(s) if name == "slope" else s.pushers.mass * s.gravity * math.sin(angle) / s.pushers.stall_force
        )
        if abs(share) >= 1.0:
            text = (
                "no pusher can drive against it"
                if name == "cross slope" or share > 0.0
                else "pushers cannot drive back"
            )
        else:
            text = f"gravity takes or gives {abs(share):.1%} of a pusher's thrust along it, and as much of its speed"
        yield Regime(name, "m g sin / stall force", share, text, abs(share) > s.trial.tolerance / 2)
    pull, holds = slope_pull(s, 1.0), s.floor.static_friction * normal_force(s, 1.0)
    if s.channel.slope != 0.0:
        ratio = abs(pull) / holds if holds > 0.0 else math.inf
        way = "back" if pull > 0.0 else "to the goal"
        text = f"the floor holds the block on the slope with {1.0 - ratio:.0%} to spare"
        text = text if ratio < 1.0 else f"the block slides {way} by itself"
        yield Regime("slide down", "tan(slope) / mu", ratio, text, ratio >= 1.0)


def _wear(s: Scenario) -> Iterator[Regime]:
    """What a run takes from the crew. A fading crew overcomes the floor until fade time x ln(crew/pushers to move)."""
    e, limit = s.errors, s.goal.time_limit
    if e.fade_time is not None:
        text = f"{fade_left(s):.0%} of the thrust is left at the time limit; the plan counts on all of it"
        needed = push_force(s).pushers_to_move
        if 0.0 < needed < s.pushers.count:
            end = e.fade_time * math.log(s.pushers.count / needed)
            text += f"; after {for_people(end, 's')} the whole crew cannot move the block" if end < limit else ""
        yield Regime(
            "fading", "time limit / fade time", limit / e.fade_time, text, fade_left(s) < 1.0 - s.trial.tolerance
        )
    if e.dropout > 0.0:
        failed = failures_expected(s)
        text = (
            f"of {s.pushers.count} pushers so many are expected to fail within the time limit, and then lie in the way"
        )
        yield Regime("failures", "n (1 - exp(-dropout T))", failed, text, failed > s.trial.tolerance * s.pushers.count)


def _channel(s: Scenario) -> Iterator[Regime]:
    p = s.pushers
    width = s.channel.width / (2 * p.reach)
    text = "pushers can hardly pass each other" if width < 3 else "room to pass"
    yield Regime("width", "channel width / pusher's largest extent", width, text, width < 3 and s.pushers.count > 1)
    area = math.pi * p.radius**2 + 2 * p.radius * (p.nose + p.trunk) + p.nose * p.trunk
    packing = p.count * area / max(s.block.rear_at * s.channel.width, 1e-300)
    text = "pushers meet often" if packing > 0.03 else "meetings are rare"
    yield Regime("crowding", "crew area / area behind the block", packing, text, packing > 0.03)
    if is_plain(s):
        yield from _between_walls(s)
    else:
        corners = len(channel_corners(s)) + sum(map(len, post_corners(s))) + len(block_corners(s))
        text = "the rules for wedging, turning round and clearance hold for plain corridors and do not apply here"
        yield Regime("outline", "corners of channel, posts and block", corners, text, False)


def _between_walls(s: Scenario) -> Iterator[Regime]:
    """What a rectangular block can do between two parallel walls.

    Two corners touch at the tilt phi from l sin(phi) + b cos(phi) = w, D = l cos(phi) - b sin(phi) apart along the
    channel. A push at the offset q jams against the friction mu of the walls if q >= D/(2 mu), about l/(2 mu): the
    sticking drawer. It holds even without a push if D <= mu w (Whitney, J. Dyn. Syst. Meas. Control 104 (1982) 65:
    wedging). Wider than the diagonal, the channel lets the block turn round and never touch both walls. (Statics,
    worked out here.)
    """
    length, width, channel = s.block.length, s.block.width, s.channel.width
    friction, turns = s.contacts.block_wall.friction, s.block.yaw == "free"
    if friction > 0.0:
        wedge = (width / 2) / (length / (2 * friction))
        text = (
            "a push near the edge of the face can jam the block between the walls (sticking drawer)"
            if wedge >= 1.0
            else f"no axial push on the face can jam it; an edge push loses up to {wedge:.0%} to the walls"
        )
        yield Regime("wedging", "(b/2) / (l / (2 mu))", wedge, text, wedge >= 1.0)
    diagonal = math.hypot(length, width)
    if channel > diagonal:
        text, risk = "the channel is wider: the block can turn right round and present another face", turns
    else:
        tilt = math.asin(min(1.0, channel / diagonal)) - math.atan2(width, length)
        spacing = length * math.cos(tilt) - width * math.sin(tilt)
        risk = turns and spacing <= friction * channel
        text = f"the block cannot turn round; its corners touch both walls at a yaw of {math.degrees(tilt):.2g} deg"
        text += ", where friction alone can hold it cornerwise" if risk else ""
    yield Regime("diagonal", "sqrt(l^2 + b^2) / w", diagonal / channel, text, risk)
    clearance = (channel - width) / length
    passes = channel - width > 2 * s.pushers.radius
    text, risk = _clearance(clearance, channel > diagonal, passes)
    yield Regime("clearance", "(w - b) / l", clearance, text, (risk and turns) or passes)


def _clearance(clearance: float, is_wide: bool, passes: bool) -> tuple[str, bool]:
    """The window of good clearances is below a tenth of the length; beyond the diagonal the block turns freely."""
    if is_wide:
        text, risk = "the block can turn freely", True
    elif clearance > 0.1:
        text, risk = "the block can tilt by several degrees and wedge cornerwise", True
    else:
        text, risk = "snug: the block stays nearly straight", False
    return text + ("; pushers can slip past it to the front" if passes else ""), risk


def _turning(s: Scenario, lap: Lap) -> Iterator[Regime]:
    p = s.pushers
    rotations = abs((lap.hits[:, 3] - lap.hits[:, 2] + math.pi) % (2 * math.pi) - math.pi)
    lost = float(rotations.sum()) / p.turn_rate + len(rotations) * p.latency
    share = lost / lap.time_s
    text = "turns are as good as instant" if share < 0.05 else "a lap takes noticeably longer than its geometry"
    yield Regime("turning", "(turn time + latency) / lap time", share, text, share >= 0.05)


def _errors(s: Scenario, lap: Lap) -> Iterator[Regime]:
    laps_kept = laps_to_drift_out(s, lap)
    if math.isinf(laps_kept):
        return
    text = "the lap survives its errors" if laps_kept > 100 else "errors throw pushers out of the lap every so often"
    yield Regime("drift", "1 / laps until drift-out", 1.0 / laps_kept, text, laps_kept <= 100)
