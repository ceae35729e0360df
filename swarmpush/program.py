"""The compiled routine and its interpreter, the one that both worlds run.

A routine becomes a small table of instructions. The interpreter `decide` is called only at decision moments (start,
bump, end of a turn). It carries out acts until one of them needs the world: run on, turn by an angle, or stop.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
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
    ADVANCE = 12
    SLIDE = 13
    GAUGE = 14
    SIGHT = 15
    DECLARE = 16
    IF_RANGE = 17
    IF_SIGHT = 18
    ASK = 19


class Command(IntEnum):
    """What the interpreter asks the world to do."""

    RUN = 0  # straight until a bump
    ROTATE = 1  # by `value`
    STOP = 2
    ADVANCE = 3  # straight for `value` metres, or until a bump
    SLIDE = 4  # along the surface for `value` metres, or, where that is negative, for -`value` seconds
    GAUGE = 5  # write the clear run ahead, at most `value`, to notes[RANGE]
    SIGHT = 6  # write whether face `number` is seen within +-`value` to memory[SEEN]
    ASK = 7  # let a Python function write the next acts into the program


class Contact(IntEnum):
    """Kinds of partner a pusher can bump into."""

    NONE = 0
    WALL = 1
    BLOCK = 2
    PUSHER = 3


_SIDE = {"left": 1, "right": -1, "onward": 0, "either": 2}
_KIND = {"none": Contact.NONE, "wall": Contact.WALL, "block": Contact.BLOCK, "pusher": Contact.PUSHER}

# plain integers, which the compiler bakes into the machine code
_RUN, _TURN, _DEPART, _MIRROR, _WANDER, _ADD, _SET, _IF_CONTACT, _IF_COUNTER, _IF_TIME, _JUMP, _HALT = (
    int(op) for op in list(Op)[:12]
)
_ADVANCE, _SLIDE, _GAUGE, _SIGHT, _DECLARE, _IF_RANGE, _IF_SIGHT, _ASK = (int(op) for op in list(Op)[12:])
_COMMAND_RUN, _COMMAND_ROTATE, _COMMAND_STOP, _COMMAND_ADVANCE, _COMMAND_SLIDE, _COMMAND_GAUGE, _COMMAND_SIGHT = (
    int(c) for c in list(Command)[:7]
)
_COMMAND_ASK = int(Command.ASK)
_ONWARD, _EITHER = 0, 2
_TURN_STREAM, _DEPART_STREAM, _BEARING_STREAM = int(Purpose.TURN), int(Purpose.DEPART), int(Purpose.BEARING)
_RANGE_STREAM, _SIGHT_STREAM = int(Purpose.RANGE), int(Purpose.SIGHT)
_MAX_DEPARTURE = acts.MAX_DEPARTURE

# a pusher's memory: next operation, number of rotations and of looks so far, whether the last look saw its face,
# whether it holds itself for lost, then the counters; and its notes: time at which the stage was entered, last range
# gauged, steps of the reading
PC, N_ROTATIONS, N_LOOKS, SEEN, DECLARED, FIRST_COUNTER = 0, 1, 2, 3, 4, 5
STAGE_SINCE, RANGE, RESOLUTION = 0, 1, 2
NOTES = 3
MEMORY = FIRST_COUNTER + acts.MAX_COUNTERS


# One instruction. go: where to jump; number: a counter, a side, a kind of contact, a face; amount: what to add or set a
# counter to, or whether a jump enters another stage; value, spread: angle in rad, time, length, limit, resolution.
INSTRUCTION = np.dtype(
    [("op", "i8"), ("go", "i8"), ("number", "i8"), ("amount", "i8"), ("value", "f8"), ("spread", "f8")]
)
Program = NDArray[np.void]  # (n,) records of INSTRUCTION: a compiled routine


class Senses(NamedTuple):
    """What the pusher's turning and feeling does wrong; angles in rad.

    turn_bias, turn_sd: added to every turn, counter-clockwise positive, and its standard deviation.
    bearing_step, bearing_sd: resolution of the bump's bearing (0: exact), and its standard deviation.
    range_sd, missed_sights: standard deviation of a gauged range, share of sights missed.
    """

    turn_bias: float
    turn_sd: float
    bearing_step: float
    bearing_sd: float
    range_sd: float = 0.0
    missed_sights: float = 0.0


EXACT = Senses(0.0, 0.0, 0.0, 0.0)  # a pusher without faults


def compile_routine(routine: acts.Routine, surfaces: Sequence[str] = ()) -> Program:
    """Compile a checked routine to the table both worlds execute.

    Arguments:
        routine: the routine. surfaces: names of the world's surfaces by number, for the faces it looks for.
    """
    counters = {name: k for k, name in enumerate(routine.counters())}
    stages = [_instructions(stage, counters, surfaces) for stage in routine.stages]
    begins = dict(zip((stage.name for stage in routine.stages), np.cumsum([0, *map(len, stages)]), strict=False))
    rows = [
        (i.op, begins[i.go] if i.go else 0, i.number, i.amount, i.value, i.spread) for stage in stages for i in stage
    ]
    return np.array(rows, dtype=INSTRUCTION)


def asking_program(n_pushers: int, room: int) -> tuple[Program, IntArray]:
    """A program that asks a Python function what to do next, and where in it each pusher begins.

    Each pusher has a part of its own: one instruction to ask, then `room` for the answer and the way back.
    """
    begins = np.arange(n_pushers, dtype=np.int64) * (room + 2)
    program = np.zeros(n_pushers * (room + 2), dtype=INSTRUCTION)
    program["op"][begins] = Op.ASK
    return program, begins


def compile_acts(listed: Sequence[acts.Act], surfaces: Sequence[str], back_to: int) -> Program:
    """Compile acts to be carried out one after another; then comes the instruction `back_to`."""
    instructions = [_instruction(act, {}, surfaces) for act in listed]
    rows = [(i.op, 0, i.number, i.amount, i.value, i.spread) for i in instructions]
    return np.array([*rows, (Op.JUMP, back_to, 0, 0, 0.0, 0.0)], dtype=INSTRUCTION)


class _Instruction(NamedTuple):
    op: Op
    go: str = ""  # name of a stage
    number: int = 0
    amount: int = 0
    value: float = 0.0
    spread: float = 0.0


def _instructions(stage: acts.Stage, counters: dict[str, int], surfaces: Sequence[str]) -> list[_Instruction]:
    """A stage's acts, and the way on after the last one; going round in a stage does not restart its clock."""
    following = stage.then or stage.name
    way_on = _Instruction(Op.JUMP, go=following, amount=int(following != stage.name))
    return [*(_instruction(act, counters, surfaces) for act in stage.acts), way_on]


def _instruction(act: acts.Act, counters: dict[str, int], surfaces: Sequence[str]) -> _Instruction:
    match act:
        case acts.Turn():
            return _Instruction(Op.TURN, value=act.angle)
        case acts.Depart():
            return _Instruction(Op.DEPART, number=_SIDE[act.side], value=act.angle, spread=act.spread)
        case acts.Mirror():
            return _Instruction(Op.MIRROR)
        case acts.Wander():
            return _Instruction(Op.WANDER, number=int(act.law == "cosine"))
        case acts.Tally():
            if act.set is None:
                return _Instruction(Op.ADD, number=counters[act.counter], amount=act.add)
            return _Instruction(Op.SET, number=counters[act.counter], amount=act.set)
        case acts.BranchContact():
            return _Instruction(Op.IF_CONTACT, go=act.go, number=int(_KIND[act.kind]))
        case acts.BranchCounter():
            return _Instruction(Op.IF_COUNTER, go=act.go, number=counters[act.counter], value=float(act.at_least))
        case acts.BranchTime():
            return _Instruction(Op.IF_TIME, go=act.go, value=act.after)
        case acts.BranchRange():
            return _Instruction(Op.IF_RANGE, go=act.go, value=act.below)
        case acts.BranchSight():
            return _Instruction(Op.IF_SIGHT, go=act.go, number=int(act.seen))
        case acts.Advance():
            return _Instruction(Op.ADVANCE, value=act.distance)
        case acts.Slide():
            return _Instruction(Op.SLIDE, value=act.length if act.length is not None else -(act.time or 0.0))
        case acts.Gauge():
            return _Instruction(Op.GAUGE, value=act.maximum, spread=act.resolution)
        case acts.Sight():
            return _Instruction(Op.SIGHT, value=act.half_angle, number=surfaces.index(act.face))
        case acts.Declare():
            return _Instruction(Op.DECLARE)
        case acts.Halt():
            return _Instruction(Op.HALT)
        case acts.Run():
            return _Instruction(Op.RUN)


def in_units(program: Program, length: float, time: float) -> Program:
    """The same program with lengths and times in units of `length` metres and `time` seconds."""
    scaled, op = program.copy(), program["op"]
    is_length = np.isin(op, [Op.ADVANCE, Op.GAUGE, Op.IF_RANGE]) | ((op == Op.SLIDE) & (program["value"] >= 0.0))
    scaled["value"][is_length] /= length
    scaled["spread"][op == Op.GAUGE] /= length
    scaled["value"][(op == Op.IF_TIME) | ((op == Op.SLIDE) & (program["value"] < 0.0))] /= time
    return scaled


@inlined
def wrap_angle(angle: float) -> float:
    """The same direction between -pi and pi."""
    return angle - 2.0 * math.pi * float(np.floor(angle * (0.5 / math.pi) + 0.5))


@compiled
def sensed_normal(senses: Senses, keys: NDArray[np.uint64], index: int, heading: float, normal_angle: float) -> float:
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
    notes: FloatArray,
    now: float,
    heading: float,
    contact: int,
    normal_angle: float,
) -> tuple[int, float, int]:
    """Carry out acts until one needs the world.

    Arguments:
        program, senses: the compiled routine; the pusher's faults.
        keys: (n_purposes,) the pusher's random streams.
        memory: (MEMORY,) int64, the pusher's memory, changed in place.
        notes: (NOTES,) float64, what else it knows, changed in place.
        now, heading: present time and heading.
        contact, normal_angle: kind of the last bump and the true direction of the surface's inward normal.

    Returns:
        command, value, number: see `Command`. A rotation contains its error.
    """
    following = memory[PC]
    while True:
        pc = following
        following = pc + 1
        step = program[pc]
        op = step.op
        if op == _RUN:
            memory[PC] = following
            return _COMMAND_RUN, 0.0, 0
        if op <= _WANDER:
            index = memory[N_ROTATIONS]
            memory[N_ROTATIONS] = index + 1
            if op == _TURN:
                rotation = step.value
            else:
                surface = sensed_normal(senses, keys, index, heading, normal_angle)
                incoming = wrap_angle(heading - surface)  # more than a quarter turn from the normal
                if op == _DEPART:
                    angle = step.value
                    if step.spread > 0.0:
                        angle += step.spread * normal(keys[_DEPART_STREAM], index)
                    angle = min(max(angle, -_MAX_DEPARTURE), _MAX_DEPARTURE)
                    if step.number == _ONWARD:
                        side = 1.0 if incoming >= 0.0 else -1.0
                    elif step.number == _EITHER:
                        side = 1.0 if uniform(keys[_DEPART_STREAM], -1 - index) < 0.5 else -1.0
                    else:
                        side = float(step.number)
                    target = surface + side * angle
                elif op == _MIRROR:
                    target = surface + math.pi - incoming
                else:
                    u = 2.0 * uniform(keys[_DEPART_STREAM], -1 - index) - 1.0
                    target = surface + (math.asin(u) if step.number == 1 else 0.5 * math.pi * u)
                rotation = wrap_angle(target - heading)
            rotation += senses.turn_bias
            if senses.turn_sd > 0.0:
                rotation += senses.turn_sd * normal(keys[_TURN_STREAM], index)
            memory[PC] = following
            return _COMMAND_ROTATE, rotation, 0
        if op == _ADD:
            memory[FIRST_COUNTER + step.number] += step.amount
        elif op == _SET:
            memory[FIRST_COUNTER + step.number] = step.amount
        elif op == _JUMP:
            following = step.go
            if step.amount == 1:
                notes[STAGE_SINCE] = now
        elif (
            (op == _IF_CONTACT and contact == step.number)
            or (op == _IF_COUNTER and memory[FIRST_COUNTER + step.number] >= step.value)
            or (op == _IF_TIME and now - notes[STAGE_SINCE] >= step.value)
            or (op == _IF_RANGE and notes[RANGE] < step.value)
            or (op == _IF_SIGHT and memory[SEEN] == step.number)
        ):
            following = step.go
            notes[STAGE_SINCE] = now
        elif op == _DECLARE:
            memory[DECLARED] = 1
        elif op >= _ADVANCE and op <= _SIGHT:
            memory[PC] = following
            if op == _ADVANCE:
                return _COMMAND_ADVANCE, step.value, 0
            if op == _SLIDE:
                return _COMMAND_SLIDE, step.value, 0
            if op == _GAUGE:
                notes[RESOLUTION] = step.spread
                return _COMMAND_GAUGE, step.value, 0
            return _COMMAND_SIGHT, step.value, step.number
        elif op == _HALT:
            memory[PC] = pc  # halted pushers stay at the halt
            return _COMMAND_STOP, 0.0, 0
        elif op == _ASK:
            memory[PC] = following
            return _COMMAND_ASK, 0.0, 0


@compiled
def note_range(
    senses: Senses, keys: NDArray[np.uint64], memory: IntArray, notes: FloatArray, run: float, most: float
) -> None:
    """Let the pusher read a range: the clear run with its error, at most `most`, in steps."""
    reading = run
    if senses.range_sd > 0.0:
        reading += senses.range_sd * normal(keys[_RANGE_STREAM], memory[N_LOOKS])
        memory[N_LOOKS] += 1
    reading = min(max(reading, 0.0), most)
    step = notes[RESOLUTION]
    notes[RANGE] = step * np.floor(reading / step + 0.5) if step > 0.0 else reading


@compiled
def note_sight(senses: Senses, keys: NDArray[np.uint64], memory: IntArray, is_there: bool) -> None:
    """Let the pusher look: what is there can be missed."""
    if is_there and senses.missed_sights > 0.0:
        is_there = uniform(keys[_SIGHT_STREAM], memory[N_LOOKS]) >= senses.missed_sights
        memory[N_LOOKS] += 1
    memory[SEEN] = 1 if is_there else 0
