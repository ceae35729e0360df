"""The compiled routine and its interpreter, the one that both worlds run.

A routine becomes two small arrays: `ops` (operation and integer arguments) and `args` (float arguments). The
interpreter `decide` is called only at decision moments (start, bump, end of a turn). It carries out acts until
one of them needs the world: run on, turn by an angle, or stop.
"""

from __future__ import annotations

import math
from enum import IntEnum
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush import routine as acts
from swarmpush.compiled import compiled, inlined
from swarmpush.draws import Purpose, normal, uniform

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


class Op(IntEnum):
    """Operation codes of the table."""

    RUN = 0
    TURN = 1
    DEPART = 2
    MIRROR = 3
    WANDER = 4
    ADD = 5
    SET = 6
    IF_CONTACT = 7
    IF_COUNTER = 8
    IF_TIME = 9
    JUMP = 10
    HALT = 11


class Command(IntEnum):
    """What the interpreter asks the world to do."""

    RUN = 0
    ROTATE = 1
    STOP = 2


class Contact(IntEnum):
    """Kinds of partner a pusher can bump into."""

    NONE = 0
    WALL = 1
    BLOCK = 2
    PUSHER = 3


_SIDE = {"left": 1, "right": -1, "onward": 0, "either": 2}
_KIND = {"wall": Contact.WALL, "block": Contact.BLOCK, "pusher": Contact.PUSHER}

# plain integers, which the compiler bakes into the machine code
_RUN, _TURN, _DEPART, _MIRROR, _WANDER, _ADD, _SET, _IF_CONTACT, _IF_COUNTER, _IF_TIME, _JUMP = (
    int(op) for op in list(Op)[:11]
)
_COMMAND_RUN, _COMMAND_ROTATE, _COMMAND_STOP = (int(c) for c in Command)
_ONWARD, _EITHER = 0, 2
_TURN_STREAM, _DEPART_STREAM, _BEARING_STREAM = int(Purpose.TURN), int(Purpose.DEPART), int(Purpose.BEARING)
_MAX_DEPARTURE = acts.MAX_DEPARTURE

# a pusher's memory: next operation, number of rotations so far, then the counters
PC, N_ROTATIONS, FIRST_COUNTER = 0, 1, 2
MEMORY = FIRST_COUNTER + acts.MAX_COUNTERS


class Program(NamedTuple):
    """A compiled routine.

    ops: (n_ops, 3) int64: operation, then up to two integer arguments (side, counter, stage to go to, ...).
    args: (n_ops, 2) float64: up to two float arguments (angle in rad, spread in rad, time).
    """

    ops: IntArray
    args: FloatArray


class Senses(NamedTuple):
    """What the pusher's turning and feeling does wrong; angles in rad.

    turn_bias, turn_sd: added to every turn, counter-clockwise positive, and its standard deviation.
    bearing_step, bearing_sd: resolution of the bump's bearing (0: exact), and its standard deviation.
    """

    turn_bias: float
    turn_sd: float
    bearing_step: float
    bearing_sd: float


EXACT = Senses(0.0, 0.0, 0.0, 0.0)  # a pusher without faults


def compile_routine(routine: acts.Routine) -> Program:
    """Compile a checked routine to the table both worlds execute."""
    counters = {name: k for k, name in enumerate(routine.counters())}
    rows: list[list[int | str]] = []
    numbers: list[list[float]] = []
    first_op: dict[str, int] = {}

    def emit(op: Op, *integers: int | str, floats: tuple[float, ...] = ()) -> None:
        rows.append([int(op), *integers, *([0] * (2 - len(integers)))])
        numbers.append([*floats, *([0.0] * (2 - len(floats)))])

    for stage in routine.stages:
        first_op[stage.name] = len(rows)
        for act in stage.acts:
            match act:
                case acts.Run():
                    emit(Op.RUN)
                case acts.Turn():
                    emit(Op.TURN, floats=(act.angle,))
                case acts.Depart():
                    emit(Op.DEPART, _SIDE[act.side], floats=(act.angle, act.spread))
                case acts.Mirror():
                    emit(Op.MIRROR)
                case acts.Wander():
                    emit(Op.WANDER, int(act.law == "cosine"))
                case acts.Tally():
                    if act.set is not None:
                        emit(Op.SET, counters[act.counter], act.set)
                    else:
                        emit(Op.ADD, counters[act.counter], act.add)
                case acts.BranchContact():
                    emit(Op.IF_CONTACT, act.go, int(_KIND[act.kind]))
                case acts.BranchCounter():
                    emit(Op.IF_COUNTER, act.go, counters[act.counter], floats=(float(act.at_least),))
                case acts.BranchTime():
                    emit(Op.IF_TIME, act.go, floats=(act.after,))
                case acts.Halt():
                    emit(Op.HALT)
        following = stage.then or stage.name
        emit(Op.JUMP, following, int(following != stage.name))  # going round does not restart the stage's clock

    ops = np.array([[first_op[v] if isinstance(v, str) else v for v in row] for row in rows], dtype=np.int64)
    return Program(ops, np.array(numbers, dtype=np.float64))


def scale_time(program: Program, unit_s: float) -> Program:
    """The same program with its times in units of `unit_s` seconds."""
    args = program.args.copy()
    args[program.ops[:, 0] == Op.IF_TIME, 0] /= unit_s
    return Program(program.ops, args)


@inlined
def wrap_angle(angle: float) -> float:
    """The same direction between -pi and pi."""
    return angle - 2.0 * math.pi * float(np.floor(angle * (0.5 / math.pi) + 0.5))


@compiled
def _sensed_normal(senses: Senses, keys: NDArray[np.uint64], index: int, heading: float, normal_angle: float) -> float:
    """Direction of the touched surface's inward normal as the pusher knows it."""
    bearing = wrap_angle(normal_angle - heading)
    if senses.bearing_sd > 0.0:
        bearing += senses.bearing_sd * normal(keys[_BEARING_STREAM], index)
    if senses.bearing_step > 0.0:
        bearing = senses.bearing_step * np.floor(bearing / senses.bearing_step + 0.5)
    return heading + bearing


@inlined
def decide(
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    memory: IntArray,
    stage_since: FloatArray,
    now: float,
    heading: float,
    contact: int,
    normal_angle: float,
) -> tuple[int, float]:
    """Carry out acts until one needs the world.

    Arguments:
        program, senses: the compiled routine; the pusher's faults.
        keys: (n_purposes,) the pusher's random streams.
        memory: (MEMORY,) int64, the pusher's memory, changed in place.
        stage_since: (1,) time at which the present stage was entered, changed in place.
        now, heading: present time and heading.
        contact, normal_angle: kind of the last bump and the true direction of the surface's inward normal.

    Returns:
        command: see `Command`.
        rotation: angle to rotate by, with its error, in rad; 0 unless the command is ROTATE.
    """
    ops, args = program.ops, program.args
    following = memory[PC]
    while True:
        pc = following
        following = pc + 1
        op, first, second = ops[pc, 0], ops[pc, 1], ops[pc, 2]
        if op == _RUN:
            memory[PC] = following
            return _COMMAND_RUN, 0.0
        if op <= _WANDER:
            index = memory[N_ROTATIONS]
            memory[N_ROTATIONS] = index + 1
            if op == _TURN:
                rotation = args[pc, 0]
            else:
                surface = _sensed_normal(senses, keys, index, heading, normal_angle)
                incoming = wrap_angle(heading - surface)  # more than a quarter turn from the normal
                if op == _DEPART:
                    angle = args[pc, 0]
                    if args[pc, 1] > 0.0:
                        angle += args[pc, 1] * normal(keys[_DEPART_STREAM], index)
                    angle = min(max(angle, -_MAX_DEPARTURE), _MAX_DEPARTURE)
                    if first == _ONWARD:
                        side = 1.0 if incoming >= 0.0 else -1.0
                    elif first == _EITHER:
                        side = 1.0 if uniform(keys[_DEPART_STREAM], -1 - index) < 0.5 else -1.0
                    else:
                        side = float(first)
                    target = surface + side * angle
                elif op == _MIRROR:
                    target = surface + math.pi - incoming
                else:
                    u = 2.0 * uniform(keys[_DEPART_STREAM], -1 - index) - 1.0
                    target = surface + (math.asin(u) if first == 1 else 0.5 * math.pi * u)
                rotation = wrap_angle(target - heading)
            rotation += senses.turn_bias
            if senses.turn_sd > 0.0:
                rotation += senses.turn_sd * normal(keys[_TURN_STREAM], index)
            memory[PC] = following
            return _COMMAND_ROTATE, rotation
        if op == _ADD:
            memory[FIRST_COUNTER + first] += second
        elif op == _SET:
            memory[FIRST_COUNTER + first] = second
        elif op == _JUMP:
            following = first
            if second == 1:
                stage_since[0] = now
        elif op == _IF_CONTACT:
            if contact == second:
                following = first
                stage_since[0] = now
        elif op == _IF_COUNTER:
            if memory[FIRST_COUNTER + second] >= args[pc, 0]:
                following = first
                stage_since[0] = now
        elif op == _IF_TIME:
            if now - stage_since[0] >= args[pc, 0]:
                following = first
                stage_since[0] = now
        else:
            memory[PC] = pc  # halted pushers stay at the halt
            return _COMMAND_STOP, 0.0
