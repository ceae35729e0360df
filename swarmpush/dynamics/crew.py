"""The pushers' side of a step: routine, sensing, turning, drive and drag, in compiled code and engine units."""

from __future__ import annotations

import math
from enum import IntEnum
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import compiled, inlined
from swarmpush.draws import Purpose, normal, uniform
from swarmpush.dynamics.chipmunk import weigh_body
from swarmpush.dynamics.host import Host
from swarmpush.dynamics.ranging import Surroundings, clear_run, sees
from swarmpush.program import MEMORY, NOTES, Command, Program, Senses, decide, note_range, note_sight

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


class Mode(IntEnum):
    """What a pusher is doing."""

    RUN = 0
    REACT = 1  # has felt a bump and drives on until the latency is over
    TURN = 2
    STOP = 3
    SLIDE = 4  # presses on along the surface it has touched
    FAILED = 5  # has dropped out for good


_RUN, _REACT, _TURN, _STOP, _SLIDE, _FAILED = (int(mode) for mode in Mode)
_ROTATE, _HALT, _TO_ADVANCE, _TO_SLIDE, _TO_GAUGE, _TO_LOOK, _TO_ASK = (
    int(c)
    for c in (
        Command.ROTATE, Command.STOP, Command.ADVANCE, Command.SLIDE, Command.GAUGE, Command.SIGHT, Command.ASK,
    )
)  # fmt: skip
_HEADING, _MISSED, _FALSE = int(Purpose.HEADING), int(Purpose.MISSED_BUMP), int(Purpose.FALSE_BUMP)
_WALL = 1


class Rig(NamedTuple):
    """Constants of the crew, in engine units.

    What differs from unit to unit is in `PUSHER_STATE`. turn_cos, turn_sin: of the angle of a step's turning.
    heading_is_free: whether contacts turn pushers. follows: whether a held heading must turn the body with it, as it
    does not look alike from all sides. turn_drag, contact_arm: of a free heading. fade_rate: of the thrust. pull_x,
    pull_y: acceleration down the slope of the table.
    """

    dt: float
    drive_while_turning: float
    turn_rate: float
    turn_cos: float
    turn_sin: float
    bump_threshold: float
    half_arc: float
    latency: float
    retry: float
    missed_bumps: float
    false_bumps: float
    diffusion: float
    noise_steps: int
    heading_is_free: bool
    follows: bool
    turn_drag: float
    contact_arm: float
    fade_rate: float
    pull_x: float
    pull_y: float


# One record per pusher: compiled code reaches records much faster than one array per field.
PUSHER_STATE = np.dtype(
    [
        ("mass", "f8"),  # as it is, and
        ("held_mass", "f8"),  # as the engine has it in a lasting contact, see `effective_mass`
        ("step_mass", "f8"),  # as the engine has it in this step
        ("moment", "f8"),  # likewise; 0 for a held heading
        ("held_moment", "f8"),
        ("step_moment", "f8"),
        ("along_rest", "f8"),  # share of a drag's impulse that is left when speed follows it through a step: along,
        ("across_rest", "f8"),  # across
        ("turn_rest", "f8"),  # and in turning
        ("stall", "f8"),
        ("drag", "f8"),  # along the heading, and
        ("side_drag", "f8"),  # across it
        ("drift", "f8"),  # steady curving
        ("fails_at", "f8"),
        ("heading", "f8"),  # direction of drive, and
        ("ux", "f8"),  # its unit vector
        ("uy", "f8"),
        ("mode", "i8"),  # see `Mode`
        ("asks", "i8"),  # whether it waits for an answer from outside compiled code
        ("until", "f8"),  # end of the latency, or of deafness after a missed bump
        ("to_turn", "f8"),  # angle still to turn
        ("to_go", "f8"),  # way along the heading, or along the surface, after which the leg ends by itself, and
        ("leg_ends", "f8"),  # time at which it does
        ("pressed", "f8"),  # impulse felt in the present touch
        ("percept_kind", "i8"),  # partner of the last bump felt, and
        ("percept_normal", "f8"),  # direction of its normal
        ("hardest", "f8"),  # hardest touch of the bumper in this step, its partner and its normal
        ("step_kind", "i8"),
        ("step_nx", "f8"),
        ("step_ny", "f8"),
        ("touched_at", "i8"),  # last step in which the bumper was touched
        ("touches", "i8"),  # bits: what the body touched in the last step
        ("has_reacted", "i8"),  # whether the routine has answered to the touch that still lasts
        ("n_bumps", "i8"),  # bumps felt or missed so far
        ("next_false", "f8"),  # time of the next false bump, and
        ("n_false", "i8"),  # how many there were
        ("noise", "f8"),  # random turning rate in the present interval
        ("thrust", "f8"),  # in this step
        ("force_x", "f8"),  # drive, drag and slope in this step
        ("force_y", "f8"),
        ("torque", "f8"),  # on a free heading in this step, and
        ("drive_torque", "f8"),  # the part of its own drive and contact arm
        ("contact_x", "f8"),  # impulse of the contacts in the last step
        ("contact_y", "f8"),
        ("contact_turn", "f8"),
    ]
)
GAP_STEPS = 2  # a contact that is missing for more steps than this has ended
TOUCHES_WALL, TOUCHES_PUSHER, TOUCHES_BLOCK = 1, 2, 4


class Crew(NamedTuple):
    """State of the pushers, changed in place.

    pushers: (n,) records of `PUSHER_STATE`. memory: (n, MEMORY) and notes: (n, NOTES), see `program.decide`.
    """

    pushers: NDArray[np.void]
    memory: IntArray
    notes: FloatArray


def new_crew(headings: FloatArray) -> Crew:
    """A crew at the start of its routine; masses, thrust and drag are still to be set."""
    n = len(headings)
    pushers = np.zeros(n, dtype=PUSHER_STATE)
    pushers["heading"], pushers["ux"], pushers["uy"] = headings, np.cos(headings), np.sin(headings)
    pushers["mode"] = _TURN  # by nothing: the routine decides in the first step
    pushers["percept_normal"] = headings + math.pi
    pushers["until"] = pushers["next_false"] = -1.0
    pushers["to_go"] = pushers["leg_ends"] = pushers["fails_at"] = np.inf
    pushers["touched_at"] = -9
    return Crew(pushers, np.zeros((n, MEMORY), dtype=np.int64), np.zeros((n, NOTES)))


@compiled
def _carry_out(
    host: Host,
    rig: Rig,
    crew: Crew,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    around: Surroundings,
    i: int,
    now: float,
) -> int:
    """Let the routine decide until the pusher moves, turns for some time, or halts; 1 if it must ask outside."""
    p, memory, notes = crew.pushers[i], crew.memory[i], crew.notes[i]
    p.asks = 0
    while True:
        command, value, number = decide(
            program, senses, keys[i], memory, notes, now, p.heading, p.percept_kind, p.percept_normal
        )
        if command == _ROTATE:
            if rig.turn_rate < np.inf:
                p.mode, p.to_turn = _TURN, value
                return 0
            p.heading += value
            continue
        if command == _TO_ASK or (command == _TO_GAUGE and around.is_unknown):
            p.asks = command
            return 1
        if command == _TO_GAUGE:
            note_range(senses, keys[i], memory, notes, clear_run(around, host.motion, i, p.heading)[0], value)
            continue
        if command == _TO_LOOK:
            note_sight(senses, keys[i], memory, sees(around, host.motion, i, p.heading, value, number))
            continue
        p.mode, p.to_go, p.leg_ends = _RUN, np.inf, np.inf
        if command == _HALT:
            p.mode = _STOP
        elif command == _TO_ADVANCE:
            p.to_go = value
        elif command == _TO_SLIDE:
            p.mode = _SLIDE
            if value >= 0.0:
                p.to_go = value
            else:
                p.leg_ends = now - value
        p.pressed = 0.0
        p.until = -1.0
        p.ux, p.uy = math.cos(p.heading), math.sin(p.heading)
        return 0


@inlined
def _ends_leg(rig: Rig, p: Any, vx: float, vy: float, now: float) -> bool:
    """Whether a leg of given length or time is over, by the pusher's own reckoning of its way."""
    if p.mode == _SLIDE:
        p.to_go -= abs(vy * math.cos(p.percept_normal) - vx * math.sin(p.percept_normal)) * rig.dt
    elif p.mode == _RUN:
        p.to_go -= (vx * p.ux + vy * p.uy) * rig.dt
    else:
        return False
    if p.to_go > 0.0 and now < p.leg_ends - 1e-9:
        return False
    if p.mode == _RUN:
        p.percept_kind = 0
    return True


@inlined
def act(
    host: Host,
    rig: Rig,
    crew: Crew,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    around: Surroundings,
    inertia: FloatArray,
    step: int,
    is_answered: bool,
) -> int:
    """Let the pushers decide, and give their orders for this step; returns how many must first ask outside.

    is_answered: this is another call in a step, for those who have asked. All in one loop, as a large crew does not
    fit the processor's first cache.
    """
    now, n_asking = step * rig.dt, 0
    is_noise_due = rig.diffusion > 0.0 and step % rig.noise_steps == 0
    fade = math.exp(-rig.fade_rate * now) if rig.fade_rate > 0.0 else 1.0
    for i in range(len(crew.pushers)):
        p = crew.pushers[i]
        if is_answered:
            if p.asks == 0:
                continue
            is_over = True
        else:
            is_over = _is_over(rig, p, host.motion, i, now)
        if is_over and _carry_out(host, rig, crew, program, senses, keys, around, i, now) == 1:
            n_asking += 1
            continue
        deviate = normal(keys[i, _HEADING], step // rig.noise_steps) if is_noise_due else 0.0
        _drive(host, rig, p, inertia, i, fade, is_noise_due, deviate)
    return n_asking


@inlined
def _is_over(rig: Rig, p: Any, motion: FloatArray, i: int, now: float) -> bool:
    """Whether pusher i's latency, turn or leg is over, so that it decides anew."""
    if rig.heading_is_free:
        p.heading = motion[i + 1, 2]
        p.ux, p.uy = math.cos(p.heading), math.sin(p.heading)
    if now >= p.fails_at:
        p.mode = _FAILED
    if p.mode == _RUN and p.to_go == np.inf:
        return False
    is_over = (p.mode == _REACT and now >= p.until - 1e-9) or (p.mode == _TURN and p.to_turn == 0.0)
    if p.to_go < np.inf or p.leg_ends < np.inf:
        is_over |= _ends_leg(rig, p, motion[i + 1, 3], motion[i + 1, 4], now)
    return bool(is_over)


@inlined
def _drive(
    host: Host, rig: Rig, p: Any, inertia: FloatArray, i: int, fade: float, is_noise_due: bool, deviate: float
) -> None:
    """The orders of pusher i: turning, heading noise, thrust, drag and slope; and the mass to step with.

    A pusher that touches nothing is stepped with its own mass and with that force under which a step ends where linear
    drag and a constant force would have led it (exponential relaxation), so an impact meets the bare mass. One in touch
    is stepped with the `effective_mass`, under which it presses with exactly its force at rest.
    """
    dt, motion, orders = rig.dt, host.motion, host.orders
    vx, vy = motion[i + 1, 3], motion[i + 1, 4]
    turned = 0.0  # by its own drive
    thrust = p.stall * fade
    if p.mode == _TURN:
        most = rig.turn_rate * dt
        turned = min(max(p.to_turn, -most), most)
        p.to_turn -= turned
        thrust *= rig.drive_while_turning
    elif p.mode == _STOP or p.mode == _FAILED:
        thrust = 0.0
    along_rest, across_rest, turn_rest = 1.0, 1.0, 1.0
    mass, moment = p.held_mass, p.held_moment
    if p.touches == 0:
        along_rest, across_rest, turn_rest = p.along_rest, p.across_rest, p.turn_rest
        mass, moment = p.mass, p.moment
    p.touches = 0
    if mass != p.step_mass:
        p.step_mass, p.step_moment = mass, moment
        weigh_body(host.bodies[i + 1], mass, moment)
        inertia[i + 1, 2] = 1.0 / mass
        if moment > 0.0:
            inertia[i + 1, 3] = 1.0 / moment
    spin, torque = turned / dt, 0.0
    if is_noise_due:
        p.noise = rig.diffusion * deviate / math.sqrt(rig.noise_steps * dt)
    if rig.heading_is_free:
        if thrust > 0.0:
            spin += p.drift + p.noise
        arm = rig.contact_arm * (p.ux * p.contact_y - p.uy * p.contact_x) / dt
        p.drive_torque = rig.turn_drag * spin + arm
        spin = motion[i + 1, 5]
        torque = (p.drive_torque - rig.turn_drag * spin) * turn_rest
    else:
        if thrust > 0.0 and p.mode != _TURN:
            turned = p.drift * dt
            if rig.follows:
                # spread over its interval: all of it in one step would hit what a bar touches the harder, the shorter
                # the step
                turned += p.noise * dt
            elif is_noise_due:
                turned += p.noise * rig.noise_steps * dt
        if turned != 0.0:
            p.heading += turned
            if p.mode == _TURN and p.to_turn != 0.0:  # less costly than sine and cosine, which end the turn
                s = rig.turn_sin if turned > 0.0 else -rig.turn_sin
                p.ux, p.uy = p.ux * rig.turn_cos - p.uy * s, p.uy * rig.turn_cos + p.ux * s
            else:
                p.ux, p.uy = math.cos(p.heading), math.sin(p.heading)
            if rig.follows:
                spin = turned / dt
    across = vy * p.ux - vx * p.uy
    along = vx * p.ux + vy * p.uy
    push = (thrust - p.drag * along + p.mass * (rig.pull_x * p.ux + rig.pull_y * p.uy)) * along_rest
    shove = (p.mass * (rig.pull_y * p.ux - rig.pull_x * p.uy) - p.side_drag * across) * across_rest
    p.thrust = thrust
    p.force_x = push * p.ux - shove * p.uy
    p.force_y = push * p.uy + shove * p.ux
    p.torque = torque
    orders[i + 1, 0] = spin
    orders[i + 1, 1] = p.force_x
    orders[i + 1, 2] = p.force_y
    orders[i + 1, 3] = torque
    p.hardest = -1.0
    p.contact_x = p.contact_y = p.contact_turn = 0.0


@inlined
def feel(rig: Rig, p: Any, keys: NDArray[np.uint64], i: int, step: int) -> None:
    """After the contacts are read: whether pusher i has felt a bump."""
    if p.mode != _RUN and p.mode != _SLIDE:
        return
    now = (step + 1) * rig.dt
    if rig.false_bumps > 0.0:
        if p.next_false < 0.0:
            p.next_false = now - math.log(uniform(keys[i, _FALSE], p.n_false)) / rig.false_bumps
            p.n_false += 1
        if now >= p.next_false:
            p.next_false = -1.0
            p.mode, p.until = _REACT, now + rig.latency
            p.percept_kind, p.percept_normal = _WALL, p.heading + math.pi
            return
    if p.touched_at != step:
        p.pressed = 0.0
        if step - p.touched_at > GAP_STEPS:
            p.has_reacted = 0
        return
    p.pressed += p.hardest
    if p.pressed <= 0.0 or p.pressed < rig.bump_threshold or now < p.until:
        return
    p.n_bumps += 1
    if rig.missed_bumps > 0.0 and uniform(keys[i, _MISSED], p.n_bumps) < rig.missed_bumps:
        p.until = now + rig.retry
        return
    p.mode, p.until, p.has_reacted = _REACT, now + rig.latency, 1
    p.percept_kind, p.percept_normal = p.step_kind, math.atan2(p.step_ny, p.step_nx)
