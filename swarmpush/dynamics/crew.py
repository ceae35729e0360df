"""The pushers' side of a step: routine, sensing, turning, drive and drag, in compiled code and engine units."""

from __future__ import annotations

import math
from enum import IntEnum
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import inlined
from swarmpush.draws import Purpose, normal, uniform
from swarmpush.dynamics.host import MOTION, ORDERS, Host
from swarmpush.program import MEMORY, Command, Program, Senses, decide

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


class Mode(IntEnum):
    """What a pusher is doing."""

    RUN = 0
    REACT = 1  # has felt a bump and drives on until the latency is over
    TURN = 2
    STOP = 3


_RUN, _REACT, _TURN, _STOP = (int(mode) for mode in Mode)
_ROTATE, _HALT = int(Command.ROTATE), int(Command.STOP)
_HEADING, _MISSED, _FALSE = int(Purpose.HEADING), int(Purpose.MISSED_BUMP), int(Purpose.FALSE_BUMP)
_WALL = 1


class Rig(NamedTuple):
    """Constants of a run, in engine units; arrays have one entry per pusher.

    inverse_mass, inverse_step_mass: (n_entities,) of block, pushers and walls (0), as they are and as the engine has
    them (see `effective_mass`).
    """

    dt: float
    stall: FloatArray
    drag: FloatArray
    side_drag: FloatArray
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
    half_length: float
    half_width: float
    has_floor: bool
    floor_static: float
    floor_kinetic: float
    floor_arm: float
    channel_length: float
    channel_width: float
    goal_x: float
    lean_force: float


class Crew(NamedTuple):
    """State of the pushers, changed in place; one row each.

    heading, ux, uy: direction of drive. mode: see `Mode`. until: end of the latency, or of deafness after a missed
    bump. to_turn: angle still to turn. pressed: impulse felt in the present touch. percept_kind, percept_normal:
    the last bump felt. hardest, step_kind, step_normal: the hardest touch of this step. touched_at: step of the last.
    n_bumps: bumps felt or missed so far. next_false: time of the next false bump. n_false: how many there were.
    force_x, force_y: drive and drag of this step.
    """

    heading: FloatArray
    ux: FloatArray
    uy: FloatArray
    mode: IntArray
    until: FloatArray
    to_turn: FloatArray
    pressed: FloatArray
    percept_kind: IntArray
    percept_normal: FloatArray
    step_kind: IntArray
    step_normal: FloatArray
    hardest: FloatArray
    touched_at: IntArray
    n_bumps: IntArray
    next_false: FloatArray
    n_false: IntArray
    force_x: FloatArray
    force_y: FloatArray
    memory: IntArray
    stage_since: FloatArray


def new_crew(headings: FloatArray) -> Crew:
    """A crew at the start of its routine."""
    n = len(headings)

    def zeros() -> FloatArray:
        return np.zeros(n)

    def whole(value: int = 0) -> IntArray:
        return np.full(n, value, dtype=np.int64)

    return Crew(
        heading=np.array(headings, dtype=np.float64), ux=np.cos(headings), uy=np.sin(headings),
        mode=whole(_TURN), until=np.full(n, -1.0), to_turn=zeros(), pressed=zeros(),
        percept_kind=whole(), percept_normal=np.array(headings) + math.pi,
        step_kind=whole(), step_normal=zeros(), hardest=zeros(), touched_at=whole(-9),
        n_bumps=whole(), next_false=np.full(n, -1.0), n_false=whole(), force_x=zeros(), force_y=zeros(),
        memory=np.zeros((n, MEMORY), dtype=np.int64), stage_since=np.zeros((n, 1)),
    )  # fmt: skip


@inlined
def _carry_out(
    rig: Rig, crew: Crew, program: Program, senses: Senses, keys: NDArray[np.uint64], i: int, now: float
) -> None:
    """Let the routine decide until the pusher runs, turns for some time, or halts."""
    while True:
        command, rotation = decide(
            program, senses, keys[i], crew.memory[i], crew.stage_since[i], now,
            crew.heading[i], crew.percept_kind[i], crew.percept_normal[i],
        )  # fmt: skip
        if command == _ROTATE:
            if rig.turn_rate < np.inf:
                crew.mode[i], crew.to_turn[i] = _TURN, rotation
                return
            crew.heading[i] += rotation
            continue
        crew.mode[i] = _STOP if command == _HALT else _RUN
        crew.pressed[i] = 0.0
        crew.until[i] = -1.0
        crew.ux[i], crew.uy[i] = math.cos(crew.heading[i]), math.sin(crew.heading[i])
        return


@inlined
def drive(
    host: Host, rig: Rig, crew: Crew, program: Program, senses: Senses, keys: NDArray[np.uint64], step: int
) -> None:
    """Before the engine's step: reactions, turning and heading noise; then the forces on pushers and block."""
    now = step * rig.dt
    noisy = rig.diffusion > 0.0 and step % rig.noise_steps == 0
    motion, orders = host.motion, host.orders
    for i in range(len(crew.heading)):
        spin, thrust = 0.0, rig.stall[i]
        mode = crew.mode[i]
        if (mode == _REACT and now >= crew.until[i] - 1e-9) or (mode == _TURN and crew.to_turn[i] == 0.0):
            _carry_out(rig, crew, program, senses, keys, i, now)
            mode = crew.mode[i]
        if mode == _TURN:
            most = rig.turn_rate * rig.dt
            angle = min(max(crew.to_turn[i], -most), most)
            crew.to_turn[i] -= angle
            crew.heading[i] += angle
            crew.ux[i], crew.uy[i] = math.cos(crew.heading[i]), math.sin(crew.heading[i])
            spin = angle / rig.dt
            thrust *= rig.drive_while_turning
        elif mode == _STOP:
            thrust = 0.0
        elif noisy or rig.drift != 0.0:
            if noisy:
                spread = rig.diffusion * math.sqrt(rig.noise_steps * rig.dt)
                crew.heading[i] += spread * normal(keys[i, _HEADING], step // rig.noise_steps)
            crew.heading[i] += rig.drift * rig.dt
            crew.ux[i], crew.uy[i] = math.cos(crew.heading[i]), math.sin(crew.heading[i])
        ux, uy = crew.ux[i], crew.uy[i]
        vx, vy = motion[MOTION * (i + 1) + 3], motion[MOTION * (i + 1) + 4]
        along = thrust - rig.drag[i] * (vx * ux + vy * uy)
        across = -rig.side_drag[i] * (vy * ux - vx * uy)
        crew.force_x[i] = along * ux - across * uy
        crew.force_y[i] = along * uy + across * ux
        place = ORDERS * (i + 1)
        orders[place] = spin
        orders[place + 1] = crew.force_x[i]
        orders[place + 2] = crew.force_y[i]
        crew.hardest[i] = -1.0
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
    vx, vy, spin = host.motion[3], host.motion[4], host.motion[5]
    slide, swivel = math.hypot(vx, vy), rig.floor_arm * abs(spin)
    total = math.hypot(slide, swivel)
    if total > _REST:
        cap = rig.floor_kinetic
        force, torque = cap * slide / total, cap * rig.floor_arm * swivel / total
    else:
        cap = rig.floor_static
        force, torque = cap, cap * rig.floor_arm
        pull, twist = host.floor_load[0], host.floor_load[1]
        load = math.hypot(pull / (cap * rig.dt), twist / (cap * rig.floor_arm * rig.dt)) if cap > 0.0 else 0.0
        if load > 1.0:
            force, torque = pull / (rig.dt * load), twist / (rig.dt * load)
    host.floor_cap[0], host.floor_cap[1] = force, torque


@inlined
def feel(rig: Rig, crew: Crew, keys: NDArray[np.uint64], step: int) -> None:
    """After the contacts are read: which pushers have felt a bump."""
    now = (step + 1) * rig.dt
    for i in range(len(crew.heading)):
        if crew.mode[i] != _RUN:
            continue
        if rig.false_bumps > 0.0:
            if crew.next_false[i] < 0.0:
                crew.next_false[i] = now - math.log(uniform(keys[i, _FALSE], crew.n_false[i])) / rig.false_bumps
                crew.n_false[i] += 1
            if now >= crew.next_false[i]:
                crew.next_false[i] = -1.0
                crew.mode[i], crew.until[i] = _REACT, now + rig.latency
                crew.percept_kind[i], crew.percept_normal[i] = _WALL, crew.heading[i] + math.pi
                continue
        if crew.touched_at[i] != step:
            crew.pressed[i] = 0.0
            continue
        crew.pressed[i] += crew.hardest[i]
        if crew.pressed[i] <= 0.0 or crew.pressed[i] < rig.bump_threshold or now < crew.until[i]:
            continue
        crew.n_bumps[i] += 1
        if rig.missed_bumps > 0.0 and uniform(keys[i, _MISSED], crew.n_bumps[i]) < rig.missed_bumps:
            crew.until[i] = now + rig.retry
            continue
        crew.mode[i], crew.until[i] = _REACT, now + rig.latency
        crew.percept_kind[i], crew.percept_normal[i] = crew.step_kind[i], crew.step_normal[i]
