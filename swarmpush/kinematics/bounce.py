"""The point world's engine: exact straight runs from bump to bump, turns at once, no time stepping.

Rules for the awkward cases:
- A surface stops a pusher only while it moves towards it, so a pusher never hits twice the flat surface it has
  just left, and a grazing path along a surface goes on.
- A heading that still points into the touched surface bumps again at once, after a run of length zero.
- At a corner the second surface is hit after a run of length zero; equal distances go to the lower number.
"""

from __future__ import annotations

import math
from enum import IntEnum
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import borrowed, compiled
from swarmpush.draws import Purpose, normal
from swarmpush.kinematics.boundary import Boundary
from swarmpush.kinematics.legs import SLIDE, STOP, next_leg
from swarmpush.program import FIRST_COUNTER, NOTES, PC, STAGE_SINCE, Op, Program, Senses, wrap_angle
from swarmpush.routine import MAX_COUNTERS

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_HEADING_STREAM = int(Purpose.HEADING)


@compiled
def trace(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    diffusion: float,
    speed: float,
    keys: NDArray[np.uint64],
    start: FloatArray,
    nudge: float,
    hits: FloatArray,
    surfaces: IntArray,
    memory: IntArray,
    notes: FloatArray,
) -> int:
    """Follow one pusher from leg to leg and write each leg's end down.

    Arguments:
        boundary, program, senses: the region, the compiled routine, the pusher's faults.
        diffusion: s.d. of the heading after 1 s of running, rad/sqrt(s); applied at the end of each leg.
        speed: m/s.
        keys: (n_purposes,) random streams.
        start: (3,) x, y in m and heading in rad.
        nudge: how far the block gives way at each bump on its rear face, m.
        hits: (n, 6) filled with x, y, arriving heading (from -pi to pi), departing heading (the same plus the turns),
            length and duration of the leg.
        surfaces: (n,) filled with surface numbers; -1 for a leg that ended without a bump.
        memory, notes: (MEMORY,), (NOTES,) what the pusher remembers, changed in place.

    Returns:
        Number of legs written: less than n when the pusher halts or no surface is met.
    """
    segments, arcs, moving = borrowed(boundary.segments), borrowed(boundary.arcs), borrowed(boundary.moving)
    kinds, program, keys = borrowed(boundary.kinds), borrowed(program), borrowed(keys)
    memory, notes = borrowed(memory), borrowed(notes)
    x, y, heading = start[0], start[1], start[2]
    now, shift = 0.0, 0.0
    contact, normal_angle = 0, heading + math.pi
    for k in range(len(surfaces)):
        leg = next_leg(
            segments, arcs, moving, boundary.scale, shift, speed,
            program, senses, keys, memory, notes, now, x, y, heading, contact, normal_angle,
        )  # fmt: skip
        if k > 0:
            hits[k - 1, 3] = leg.heading
        if leg.command == STOP:
            return k
        heading = wrap_angle(leg.heading)  # one that grows turn by turn would lose digits
        x += leg.run * leg.ux
        y += leg.run * leg.uy
        now += leg.time
        if diffusion > 0.0:
            heading += diffusion * math.sqrt(leg.time) * normal(keys[_HEADING_STREAM], k)
        hits[k, 0], hits[k, 1], hits[k, 2], hits[k, 3], hits[k, 4], hits[k, 5] = (
            x,
            y,
            heading,
            heading,
            leg.run,
            leg.time,
        )
        surfaces[k] = leg.surface
        if leg.surface >= 0:
            contact, normal_angle = kinds[leg.surface], leg.normal_angle
            if leg.surface == boundary.rear:
                shift += nudge
        elif leg.command != SLIDE:
            contact = 0
    return len(surfaces)


class Fate(IntEnum):
    """What becomes of a start when nothing goes wrong."""

    LOCKED = 0
    UNDECIDED = 1
    NEVER_REACHES_REAR = 2
    LEAVES_REAR_FOR_GOOD = 3
    AHEAD_OF_BLOCK = 4
    STUCK = 5
    HALTED = 6


FATE_WORDS = {
    Fate.NEVER_REACHES_REAR: "never reaches the rear face",
    Fate.LEAVES_REAR_FOR_GOOD: "loses the rear face and bounces between walls",
    Fate.AHEAD_OF_BLOCK: "ends ahead of the block",
    Fate.STUCK: "stuck in a corner or against a surface",
    Fate.HALTED: "its routine halts",
}

_LOCKED, _UNDECIDED, _NEVER, _LEAVES, _AHEAD, _STUCK, _HALTED = (int(fate) for fate in Fate)

MAX_PERIOD = 8  # longest lap looked for, in bumps on the rear face
SHORTEST_LAP = 1e-3  # of the size; what repeats within less is on its way into a corner, or bumps on the spot
_LOCK_TOLERANCE = 1e-6  # of the size, and in rad: a lap that returns this closely is closed; contraction does the rest
_ON_THE_SPOT = 1e-9  # of the size: a run shorter than this is rounding
_HASH = 1_000_003
_WITHIN = 0x3FFFFFFFFFFFFF  # the bits that are kept of a number that stands for many others
_MOST_INSTRUCTIONS = 8192  # in a program: 64 stages of 64 acts and a way on

_ADD, _IF_COUNTER, _IF_TIME = int(Op.ADD), int(Op.IF_COUNTER), int(Op.IF_TIME)
_UNREAD, _UNBOUNDED = -(10**9), 10**9  # no counter gets that far within a budget


@compiled
def _what_counts(program: Program, caps: IntArray) -> float:
    """How far a pusher's counters and clock matter to what it will do.

    Beyond the largest value that a branch asks for, counters are alike if they are never counted down.

    Arguments:
        caps: (MAX_COUNTERS,) filled with the value from which on each counter is as good as any larger one.

    Returns:
        The same for the time in the present stage, s.
    """
    caps[:] = _UNREAD
    longest = 0.0
    for step in program:
        if step.op == _IF_COUNTER:
            caps[step.number] = max(caps[step.number], int(step.value))
        elif step.op == _IF_TIME:
            longest = max(longest, step.value)
    for step in program:
        if step.op == _ADD and step.amount < 0 and caps[step.number] > _UNREAD:
            caps[step.number] = _UNBOUNDED
    return longest


class Settled(NamedTuple):
    """Where a start ended up.

    fate: see `Fate`. period: bumps on the rear face per lap (0 unless locked). signature: a number that stands
    for the sequence of surfaces and acts of the lap. along, heading: of the last arrival at the rear face, `along`
    measured from the beginning of its segment. n_bumps: legs followed.
    """

    fate: int
    period: int
    signature: int
    along: float
    heading: float
    n_bumps: int


@compiled
def settle(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    speed: float,
    x: float,
    y: float,
    heading: float,
    memory: IntArray,
    notes: FloatArray,
    contact: int,
    normal_angle: float,
    budget: int,
) -> Settled:
    """Follow a pusher until it repeats a lap, halts, or the budget of legs is spent; the block stands still.

    A lap is repeated when the pusher comes back to the rear face at the same place with the same heading by the same
    legs, and with nothing in its counters and its clock that could ever make it do something else.

    Arguments:
        speed: m/s. x, y, heading: present state (m, rad).
        memory, notes: (MEMORY,), (NOTES,) what the pusher remembers, changed in place; on a lock it is that at the last
            arrival at the rear face, the clock being 0 then.
        contact, normal_angle: the bump that the routine is to react to first (0: none).
        budget: largest number of legs.
    """
    ring_signature = np.zeros(2 * MAX_PERIOD, dtype=np.int64)
    ring_along = np.zeros(2 * MAX_PERIOD)
    ring_heading = np.zeros(2 * MAX_PERIOD)
    ring_way = np.zeros(2 * MAX_PERIOD)
    ring_stage_time = np.zeros(2 * MAX_PERIOD)
    caps = np.zeros(MAX_COUNTERS, dtype=np.int64)
    longest = _what_counts(program, caps)
    now, way, shortest = 0.0, 0.0, SHORTEST_LAP * boundary.size
    n_rear, last_rear, n_short = 0, -1, 0
    signature, along = 0, 0.0
    segments, arcs, moving = borrowed(boundary.segments), borrowed(boundary.arcs), borrowed(boundary.moving)
    kinds, program, keys = borrowed(boundary.kinds), borrowed(program), borrowed(keys)
    memory, notes = borrowed(memory), borrowed(notes)
    rear = boundary.rear
    rear_x, rear_y, rear_tx, rear_ty = segments[rear, 0], segments[rear, 1], segments[rear, 2], segments[rear, 3]
    tolerance = _LOCK_TOLERANCE * boundary.size
    for k in range(budget):
        leg = next_leg(
            segments, arcs, moving, boundary.scale, 0.0, speed,
            program, senses, keys, memory, notes, now, x, y, heading, contact, normal_angle,
        )  # fmt: skip
        heading = wrap_angle(leg.heading)
        if leg.command == STOP:
            # what halts has stopped for good; a run into nothing can only be a hole in the boundary
            return Settled(_HALTED if leg.run == 0.0 else _UNDECIDED, 0, 0, along, heading, k)
        x += leg.run * leg.ux
        y += leg.run * leg.uy
        now += leg.time
        way += leg.run
        signature = (signature * _HASH + (leg.surface + 1) * _MOST_INSTRUCTIONS + memory[PC]) & _WITHIN
        if 2 * k > budget and leg.run < _ON_THE_SPOT * boundary.size:
            n_short += 1
        if leg.surface < 0:
            if leg.command != SLIDE:
                contact = 0
            continue
        contact, normal_angle = kinds[leg.surface], leg.normal_angle
        if leg.surface == rear:
            along = (x - rear_x) * rear_tx + (y - rear_y) * rear_ty
            for c in range(MAX_COUNTERS):
                if caps[c] > _UNREAD:
                    signature = (signature * _HASH + min(memory[FIRST_COUNTER + c], caps[c])) & _WITHIN
            stage_time = min(now - notes[STAGE_SINCE], longest)
            place = n_rear % (2 * MAX_PERIOD)
            ring_signature[place], ring_along[place], ring_heading[place] = signature, along, heading
            ring_way[place], ring_stage_time[place] = way, stage_time
            n_rear += 1
            last_rear = k
            signature = 0
            for period in range(1, min(MAX_PERIOD, n_rear // 2) + 1):
                before = (place - period) % (2 * MAX_PERIOD)
                gap = abs(along - ring_along[before])
                gap = max(gap, boundary.size * abs(wrap_angle(heading - ring_heading[before])))
                gap = max(gap, speed * abs(stage_time - ring_stage_time[before]))
                if gap >= 100.0 * tolerance or way - ring_way[before] < shortest:
                    continue
                alike, total = True, 0
                for j in range(period):
                    mine = ring_signature[(place - j) % (2 * MAX_PERIOD)]
                    alike &= mine == ring_signature[(place - j - period) % (2 * MAX_PERIOD)]
                    total = (total + mine * mine) & _WITHIN  # the same wherever in the lap one starts
                if alike and gap < tolerance:
                    notes[STAGE_SINCE] -= now
                    return Settled(_LOCKED, period, total, along, heading, k + 1)
                if alike:
                    break  # about to close; an alternating lap passes the test at twice its period first
    fate = _UNDECIDED
    if 4 * n_short > budget:
        fate = _STUCK
    elif x >= boundary.ahead_x:
        fate = _AHEAD
    elif n_rear == 0:
        fate = _NEVER
    elif 2 * last_rear < budget:
        fate = _LEAVES
    return Settled(fate, 0, 0, along, heading, budget)


@compiled
def settle_many(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    speed: float,
    starts: FloatArray,
    budget: int,
    fates: IntArray,
    states: FloatArray,
    memories: IntArray,
) -> int:
    """`settle` for many starts.

    Arguments:
        keys: (n_purposes,) the streams of the first start; start i uses them shifted by i.
        starts: (n, 3) x, y in m, heading in rad.
        fates: (n, 3) filled with fate, period, signature.
        states: (n, 2) filled with place along the rear face and heading of the last arrival there.
        memories: (n, MEMORY) filled with the pushers' memories.

    Returns:
        Total number of bumps followed.
    """
    total, notes = 0, np.zeros(NOTES)
    for i in range(len(starts)):
        heading = starts[i, 2]
        notes[:] = 0.0
        end = settle(
            boundary, program, senses, keys + np.uint64(i) * np.uint64(0xD1342543DE82EF95), speed,
            starts[i, 0], starts[i, 1], heading, memories[i], notes, 0, heading + math.pi, budget,
        )  # fmt: skip
        fates[i, 0], fates[i, 1], fates[i, 2] = end.fate, end.period, end.signature
        states[i, 0], states[i, 1] = end.along, end.heading
        total += end.n_bumps
    return total


class LapTrace(NamedTuple):
    """One lap, leg by leg, with the derivative of its return map.

    n_bumps: legs in the lap (0: the lap broke). along, heading: of the arrival at the rear face that ends it.
    aa, ah, ha, hh: derivatives of the final (along, heading) with respect to the first. length, time: of the lap.
    """

    n_bumps: int
    along: float
    heading: float
    aa: float
    ah: float
    ha: float
    hh: float
    length: float
    time: float


@compiled
def trace_lap(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    speed: float,
    along: float,
    heading: float,
    memory: IntArray,
    notes: FloatArray,
    period: int,
    hits: FloatArray,
    surfaces: IntArray,
) -> LapTrace:
    """From one arrival at the rear face to the `period`-th next, with the analytic Jacobian.

    The derivative is carried along as two displacement vectors (one per initial perturbation). Over a leg of
    length L along u, whose direction changes by da, the displacement p of its end is p + L da u' + dL u with u' = u
    turned by 90 deg. dL is such that p stays on the surface that is met; it is 0 for a leg of given length, and
    L dc/c for a slide of given time, c being the cosine between heading and surface. On an arc the normal turns by
    (t . p)/r. A turn keeps the heading's perturbation, a departure referred to the surface replaces it by the normal's,
    a mirror gives 2 dn - dh. (Derived here; on flat sides it reduces to the slope -cos a/cos b per leg.)

    Arguments:
        speed: m/s. along, heading: arrival at the rear face (m from the beginning of its segment, rad).
        memory, notes: (MEMORY,), (NOTES,) at that moment, changed in place.
        hits: (n, 4) filled with x, y, arriving and departing heading of each leg's end, the last row being the arrival
            that closes the lap. surfaces: (n,) filled with surface numbers, -1 where a leg ended without a bump.
    """
    segments, arcs, moving = borrowed(boundary.segments), borrowed(boundary.arcs), borrowed(boundary.moving)
    kinds, program, keys = borrowed(boundary.kinds), borrowed(program), borrowed(keys)
    memory, notes = borrowed(memory), borrowed(notes)
    rear = boundary.rear
    n_segments = len(segments)
    rear_x, rear_y, rear_tx, rear_ty = segments[rear, 0], segments[rear, 1], segments[rear, 2], segments[rear, 3]
    x, y = rear_x + along * rear_tx, rear_y + along * rear_ty
    contact, normal_angle = kinds[rear], segments[rear, 7]
    px, py = np.array([rear_tx, 0.0]), np.array([rear_ty, 0.0])  # displacement of the leg's end
    dh, dn = np.array([0.0, 1.0]), np.zeros(2)  # perturbation of the heading, of the surface's normal
    n_rear, now, way = 0, 0.0, 0.0
    broken = LapTrace(0, along, heading, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0)
    for k in range(len(surfaces)):
        leg = next_leg(
            segments, arcs, moving, boundary.scale, 0.0, speed,
            program, senses, keys, memory, notes, now, x, y, heading, contact, normal_angle,
        )  # fmt: skip
        heading, ux, uy = wrap_angle(leg.heading), leg.ux, leg.uy
        if k > 0:
            hits[k - 1, 3] = leg.heading
        if leg.command == STOP:
            return broken
        x += leg.run * ux
        y += leg.run * uy
        now += leg.time
        way += leg.run
        slides = leg.command == SLIDE
        met = leg.surface >= 0
        nx, ny = math.cos(leg.normal_angle), math.sin(leg.normal_angle)
        cosine = math.cos(heading) * ux + math.sin(heading) * uy
        sine = math.sin(heading) * ux - math.cos(heading) * uy
        for j in range(2):
            dh[j] = leg.by_heading * dh[j] + leg.by_normal * dn[j]
            da = dn[j] if slides else dh[j]
            qx = px[j] - leg.run * da * uy
            qy = py[j] + leg.run * da * ux
            stretch = 0.0
            if met:
                stretch = -(nx * qx + ny * qy) / (nx * ux + ny * uy)
            elif slides and program[memory[PC] - 1].value < 0.0 and cosine > 0.0:
                stretch = -leg.run * (sine / cosine) * (dh[j] - dn[j])
            px[j], py[j] = qx + stretch * ux, qy + stretch * uy
            if met:
                dn[j] = 0.0
                if leg.surface >= n_segments:
                    dn[j] = (nx * py[j] - ny * px[j]) / arcs[leg.surface - n_segments, 2]
        hits[k, 0], hits[k, 1], hits[k, 2], hits[k, 3] = x, y, heading, heading
        surfaces[k] = leg.surface
        if not met:
            if not slides:
                contact = 0
            continue
        contact, normal_angle = kinds[leg.surface], leg.normal_angle
        if leg.surface == rear:
            n_rear += 1
            if n_rear == period:
                along = (x - rear_x) * rear_tx + (y - rear_y) * rear_ty
                return LapTrace(
                    k + 1, along, heading,
                    px[0] * rear_tx + py[0] * rear_ty, px[1] * rear_tx + py[1] * rear_ty, dh[0], dh[1],
                    way, now,
                )  # fmt: skip
    return broken
