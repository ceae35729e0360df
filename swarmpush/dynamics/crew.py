"""The pushers' side of a step: routine, sensing, turning, drive and drag, in compiled code and engine units."""

from __future__ import annotations

import math
from enum import IntEnum
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import borrowed, compiled, inlined
from swarmpush.draws import Purpose, normal, uniform
from swarmpush.dynamics.host import MOTION, ORDERS, Host
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


_RUN, _REACT, _TURN, _STOP, _SLIDE = (int(mode) for mode in Mode)
_ROTATE, _HALT, _TO_ADVANCE, _TO_SLIDE, _TO_GAUGE, _TO_LOOK = (
    int(c) for c in (Command.ROTATE, Command.STOP, Command.ADVANCE, Command.SLIDE, Command.GAUGE, Command.SIGHT)
)
_HEADING, _MISSED, _FALSE = int(Purpose.HEADING), int(Purpose.MISSED_BUMP), int(Purpose.FALSE_BUMP)
_WALL = 1


class Rig(NamedTuple):
    """Constants of a run, in engine units.

    inverse_mass, inverse_step_mass: (n_entities,) of block, pushers and walls (0), as they are and as the engine has
    them (see `effective_mass`). corners: (m, 2) of the block, and sides: (m, 2) outward normals, in its own frame, the
    rear face first. stall: of every pusher; what else differs from unit to unit is in `PUSHER_STATE`.
    """

    dt: float
    stall: float
    drive_while_turning: float
    turn_rate: float
    bump_threshold: float
    half_arc: float
    latency: float
    retry: float
    missed_bumps: float
    false_bumps: float
    diffusion: float
    drift: float
    noise_steps: int
    inverse_mass: FloatArray
    inverse_step_mass: FloatArray
    block_mass: float
    block_step_mass: float
    block_drag: float
    block_yaw_drag: float
    front_reach: float
    corners: FloatArray
    sides: FloatArray
    has_floor: bool
    floor_static: float
    floor_kinetic: float
    floor_arm: float
    yaw_is_held: bool
    channel_length: float
    channel_width: float
    goal_x: float
    lean_force: float


# One record per pusher: compiled code reaches records much faster than one array per field.
PUSHER_STATE = np.dtype(
    [
        ("drag", "f8"),  # along the heading, and
        ("side_drag", "f8"),  # across it
        ("heading", "f8"),  # direction of drive, and
        ("ux", "f8"),  # its unit vector
        ("uy", "f8"),
        ("mode", "i8"),  # see `Mode`
        ("until", "f8"),  # end of the latency, or of deafness after a missed bump
        ("to_turn", "f8"),  # angle still to turn
        ("to_go", "f8"),  # way along the heading, or along the surface, after which the leg ends by itself, and
        ("leg_ends", "f8"),  # time at which it does
        ("pressed", "f8"),  # impulse felt in the present touch
        ("percept_kind", "i8"),  # partner of the last bump felt, and
        ("percept_normal", "f8"),  # direction of its normal
        ("hardest", "f8"),  # hardest touch of the bumper in this step, its partner and its normal
        ("step_kind", "i8"),
        ("step_normal", "f8"),
        ("touched_at", "i8"),  # last step in which the bumper was touched
        ("n_bumps", "i8"),  # bumps felt or missed so far
        ("next_false", "f8"),  # time of the next false bump, and
        ("n_false", "i8"),  # how many there were
        ("force_x", "f8"),  # drive and drag in this step
        ("force_y", "f8"),
    ]
)


class Crew(NamedTuple):
    """State of the pushers, changed in place.

    pushers: (n,) records of `PUSHER_STATE`. memory: (n, MEMORY) and notes: (n, NOTES), see `program.decide`.
    """

    pushers: NDArray[np.void]
    memory: IntArray
    notes: FloatArray


def new_crew(headings: FloatArray, drag: FloatArray, side_drag: FloatArray) -> Crew:
    """A crew at the start of its routine; one heading and drag per pusher."""
    n = len(headings)
    pushers = np.zeros(n, dtype=PUSHER_STATE)
    pushers["drag"], pushers["side_drag"] = drag, side_drag
    pushers["heading"], pushers["ux"], pushers["uy"] = headings, np.cos(headings), np.sin(headings)
    pushers["mode"] = _TURN  # by nothing: the routine decides in the first step
    pushers["percept_normal"] = headings + math.pi
    pushers["until"] = pushers["next_false"] = -1.0
    pushers["to_go"] = pushers["leg_ends"] = np.inf
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
) -> None:
    """Let the routine decide until the pusher moves, turns for some time, or halts."""
    p, memory, notes = crew.pushers[i], crew.memory[i], crew.notes[i]
    while True:
        command, value, number = decide(
            program, senses, keys[i], memory, notes, now, p.heading, p.percept_kind, p.percept_normal
        )
        if command == _ROTATE:
            if rig.turn_rate < np.inf:
                p.mode, p.to_turn = _TURN, value
                return
            p.heading += value
            continue
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
        return


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
def drive(
    host: Host,
    rig: Rig,
    crew: Crew,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    around: Surroundings,
    step: int,
) -> None:
    """Before the engine's step: reactions, turning and heading noise; then the forces on pushers and block."""
    now = step * rig.dt
    noisy = rig.diffusion > 0.0 and step % rig.noise_steps == 0
    motion, orders, pushers = borrowed(host.motion), borrowed(host.orders), borrowed(crew.pushers)
    for i in range(len(pushers)):
        p = pushers[i]
        spin, thrust = 0.0, rig.stall
        vx, vy = motion[MOTION * (i + 1) + 3], motion[MOTION * (i + 1) + 4]
        is_over = (p.mode == _REACT and now >= p.until - 1e-9) or (p.mode == _TURN and p.to_turn == 0.0)
        if p.to_go < np.inf or p.leg_ends < np.inf:
            is_over |= _ends_leg(rig, p, vx, vy, now)
        if is_over:
            _carry_out(host, rig, crew, program, senses, keys, around, i, now)
        if p.mode == _TURN:
            most = rig.turn_rate * rig.dt
            angle = min(max(p.to_turn, -most), most)
            p.to_turn -= angle
            p.heading += angle
            p.ux, p.uy = math.cos(p.heading), math.sin(p.heading)
            spin = angle / rig.dt
            thrust *= rig.drive_while_turning
        elif p.mode == _STOP:
            thrust = 0.0
        elif noisy or rig.drift != 0.0:
            if noisy:
                spread = rig.diffusion * math.sqrt(rig.noise_steps * rig.dt)
                p.heading += spread * normal(keys[i, _HEADING], step // rig.noise_steps)
            p.heading += rig.drift * rig.dt
            p.ux, p.uy = math.cos(p.heading), math.sin(p.heading)
        along = thrust - p.drag * (vx * p.ux + vy * p.uy)
        across = -p.side_drag * (vy * p.ux - vx * p.uy)
        p.force_x = along * p.ux - across * p.uy
        p.force_y = along * p.uy + across * p.ux
        place = ORDERS * (i + 1)
        orders[place] = spin
        orders[place + 1] = p.force_x
        orders[place + 2] = p.force_y
        p.hardest = -1.0
    orders[0] = motion[5]
    orders[1] = -rig.block_drag * motion[3]
    orders[2] = -rig.block_drag * motion[4]
    orders[3] = -rig.block_yaw_drag * motion[5]


_REST = 1e-9  # engine speed below which the floor's static friction holds; a held block has about 1e-17


@inlined
def set_floor(host: Host, rig: Rig) -> None:
    """Caps of the dry floor for this step, force and torque coupled on the elliptic limit surface.

    (F/F_max)^2 + (T/T_max)^2 = 1 (Howe and Cutkosky, Int. J. Robotics Research 15 (1996) 557), normality giving
    F : T c^-2 = v : w with c = T_max/F_max while sliding. At rest the loads of the last step are brought back on to
    the ellipse if they left it.
    """
    motion, floor_cap, floor_load = borrowed(host.motion), borrowed(host.floor_cap), borrowed(host.floor_load)
    vx, vy, spin = motion[3], motion[4], motion[5]
    slide, swivel = math.hypot(vx, vy), rig.floor_arm * abs(spin)
    total = math.hypot(slide, swivel)
    if total > _REST:
        cap = rig.floor_kinetic
        force, torque = cap * slide / total, cap * rig.floor_arm * swivel / total
    else:
        cap = rig.floor_static
        force, torque = cap, cap * rig.floor_arm
        pull = floor_load[0]
        twist = 0.0 if rig.yaw_is_held else floor_load[1]  # a joint on a body that cannot turn gives no number
        load = math.hypot(pull / (cap * rig.dt), twist / (cap * rig.floor_arm * rig.dt)) if cap > 0.0 else 0.0
        if load > 1.0:
            force, torque = pull / (rig.dt * load), twist / (rig.dt * load)
    floor_cap[0], floor_cap[1] = force, torque


@inlined
def feel(rig: Rig, crew: Crew, keys: NDArray[np.uint64], step: int) -> None:
    """After the contacts are read: which pushers have felt a bump."""
    now = (step + 1) * rig.dt
    pushers = borrowed(crew.pushers)
    for i in range(len(pushers)):
        p = pushers[i]
        if p.mode != _RUN and p.mode != _SLIDE:
            continue
        if rig.false_bumps > 0.0:
            if p.next_false < 0.0:
                p.next_false = now - math.log(uniform(keys[i, _FALSE], p.n_false)) / rig.false_bumps
                p.n_false += 1
            if now >= p.next_false:
                p.next_false = -1.0
                p.mode, p.until = _REACT, now + rig.latency
                p.percept_kind, p.percept_normal = _WALL, p.heading + math.pi
                continue
        if p.touched_at != step:
            p.pressed = 0.0
            continue
        p.pressed += p.hardest
        if p.pressed <= 0.0 or p.pressed < rig.bump_threshold or now < p.until:
            continue
        p.n_bumps += 1
        if rig.missed_bumps > 0.0 and uniform(keys[i, _MISSED], p.n_bumps) < rig.missed_bumps:
            p.until = now + rig.retry
            continue
        p.mode, p.until = _REACT, now + rig.latency
        p.percept_kind, p.percept_normal = p.step_kind, p.step_normal
