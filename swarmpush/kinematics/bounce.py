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

from swarmpush.compiled import compiled, inlined
from swarmpush.draws import Purpose, normal
from swarmpush.kinematics.boundary import FRONT_SURFACE, REAR_SURFACE, Boundary
from swarmpush.program import MEMORY, PC, Command, Op, Program, Senses, decide, wrap_angle

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_ROTATE, _STOP = int(Command.ROTATE), int(Command.STOP)
_HEADING_STREAM = int(Purpose.HEADING)
_REAR, _FRONT = REAR_SURFACE, FRONT_SURFACE
_END_TOLERANCE = 1e-12  # of the scale: closes the seam between a segment and the arc at its end
_BEHIND_TOLERANCE = 1e-9  # of the scale: a pusher further behind a surface than rounding explains is not stopped by it


class Hit(NamedTuple):
    """The next bump: run length, surface number (-1: none), direction of the inward normal there."""

    run: float
    surface: int
    normal_angle: float


@inlined
def next_hit(boundary: Boundary, shift: float, x: float, y: float, ux: float, uy: float) -> Hit:
    """First surface met from (x, y) along the unit vector (ux, uy), the block moved by `shift` in x."""
    segments, arcs, moving = boundary.segments, boundary.arcs, boundary.moving
    slack = _END_TOLERANCE * boundary.scale
    behind = -_BEHIND_TOLERANCE * boundary.scale
    best, surface, normal_angle = np.inf, -1, 0.0
    n = len(segments)
    for k in range(n):
        nx, ny = segments[k, 5], segments[k, 6]
        approach = -(ux * nx + uy * ny)
        if approach <= 0.0:
            continue
        px = x - segments[k, 0] - shift * moving[k]
        py = y - segments[k, 1]
        distance = px * nx + py * ny
        if distance < behind or distance >= best * approach:
            continue
        run = max(distance / approach, 0.0)
        along = (px + run * ux) * segments[k, 2] + (py + run * uy) * segments[k, 3]
        if -slack <= along <= segments[k, 4] + slack:
            best, surface, normal_angle = run, k, segments[k, 7]
    corner = -1
    for k in range(len(arcs)):
        qx = x - arcs[k, 0] - shift * moving[n + k]
        qy = y - arcs[k, 1]
        approach = -(qx * ux + qy * uy)
        radius = arcs[k, 2]
        if approach <= 0.0 or approach - radius >= best:
            continue
        outside = qx * qx + qy * qy - radius * radius
        discriminant = approach * approach - outside
        if discriminant < 0.0:
            continue
        # the smaller root, written so that nothing cancels for a start close to the circle
        run = max(outside / (approach + math.sqrt(discriminant)), 0.0)
        if run < best:
            best, corner = run, k
    if corner >= 0:
        surface = n + corner
        hx = x - arcs[corner, 0] - shift * moving[surface] + best * ux
        hy = y - arcs[corner, 1] + best * uy
        normal_angle = math.atan2(hy, hx)
    return Hit(best, surface, normal_angle)


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
) -> int:
    """Follow one pusher from bump to bump and write each bump down.

    Arguments:
        boundary, program, senses: the region, the compiled routine, the pusher's faults.
        diffusion: s.d. of the heading after 1 s of running, rad/sqrt(s); applied at the end of each run.
        speed: m/s.
        keys: (n_purposes,) random streams.
        start: (3,) x, y in m and heading in rad.
        nudge: how far the block gives way at each bump on its rear face, m.
        hits: (n, 5) filled with x, y, arriving heading, departing heading, run length.
        surfaces: (n,) filled with surface numbers.

    Returns:
        Number of bumps written: less than n when the pusher halts or no surface is met.
    """
    memory = np.zeros(MEMORY, dtype=np.int64)
    clock = np.zeros(1)
    x, y, heading = start[0], start[1], start[2]
    now, shift = 0.0, 0.0
    contact, normal_angle = 0, heading + math.pi
    for k in range(len(surfaces)):
        while True:
            command, rotation = decide(program, senses, keys, memory, clock, now, heading, contact, normal_angle)
            if command != _ROTATE:
                break
            heading += rotation
        if k > 0:
            hits[k - 1, 3] = heading
        if command == _STOP:
            return k
        ux, uy = math.cos(heading), math.sin(heading)
        hit = next_hit(boundary, shift, x, y, ux, uy)
        if hit.surface < 0:
            return k
        x += hit.run * ux
        y += hit.run * uy
        now += hit.run / speed
        if diffusion > 0.0:
            heading += diffusion * math.sqrt(hit.run / speed) * normal(keys[_HEADING_STREAM], k)
        contact = boundary.kinds[hit.surface]
        normal_angle = hit.normal_angle
        hits[k, 0], hits[k, 1], hits[k, 2], hits[k, 3], hits[k, 4] = x, y, heading, heading, hit.run
        surfaces[k] = hit.surface
        if hit.surface == REAR_SURFACE:
            shift += nudge
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
SHORTEST_LAP = 1e-3  # of the scale; what repeats within less is on its way into a corner, or bumps on the spot
_LOCK_TOLERANCE = 1e-6  # of the scale, and in rad: a lap that returns this closely is closed; contraction does the rest
_HASH = 1_000_003


class Settled(NamedTuple):
    """Where a start ended up.

    fate: see `Fate`. period: bumps on the rear face per lap (0 unless locked). signature: a number that stands
    for the sequence of surfaces and acts of the lap. y, heading: of the last arrival at the rear face.
    n_bumps: bumps followed.
    """

    fate: int
    period: int
    signature: int
    y: float
    heading: float
    n_bumps: int


@compiled
def settle(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    x: float,
    y: float,
    heading: float,
    memory: IntArray,
    contact: int,
    normal_angle: float,
    budget: int,
) -> Settled:
    """Follow a pusher until it repeats a lap, halts, or the budget of bumps is spent; the block stands still.

    Arguments:
        x, y, heading: present state (m, rad).
        memory: (MEMORY,) the pusher's memory, changed in place; on a lock it is that at the last arrival at the
            rear face.
        contact, normal_angle: the bump that the routine is to react to first (0: none).
        budget: largest number of bumps.
    """
    clock = np.zeros(1)
    ring_signature = np.zeros(2 * MAX_PERIOD, dtype=np.int64)
    ring_y = np.zeros(2 * MAX_PERIOD)
    ring_heading = np.zeros(2 * MAX_PERIOD)
    ring_way = np.zeros(2 * MAX_PERIOD)
    way, shortest = 0.0, SHORTEST_LAP * boundary.scale
    n_rear, last_rear, n_short = 0, -1, 0
    signature = 0
    front_x = boundary.segments[_FRONT, 0]
    tolerance = _LOCK_TOLERANCE * boundary.scale
    for k in range(budget):
        while True:
            command, rotation = decide(program, senses, keys, memory, clock, float(k), heading, contact, normal_angle)
            if command != _ROTATE:
                break
            heading += rotation
        if command == _STOP:
            return Settled(_HALTED, 0, 0, y, heading, k)
        ux, uy = math.cos(heading), math.sin(heading)
        hit = next_hit(boundary, 0.0, x, y, ux, uy)
        if hit.surface < 0:
            return Settled(_UNDECIDED, 0, 0, y, heading, k)
        x += hit.run * ux
        y += hit.run * uy
        contact, normal_angle = boundary.kinds[hit.surface], hit.normal_angle
        signature = (signature * _HASH + hit.surface * 64 + memory[PC]) & 0x3FFFFFFFFFFFFF
        way += hit.run
        if 2 * k > budget and hit.run < _BEHIND_TOLERANCE * boundary.scale:
            n_short += 1
        if hit.surface == _REAR:
            place = n_rear % (2 * MAX_PERIOD)
            ring_signature[place], ring_y[place], ring_heading[place] = signature, y, heading
            ring_way[place] = way
            n_rear += 1
            last_rear = k
            signature = 0
            for period in range(1, min(MAX_PERIOD, n_rear // 2) + 1):
                before = (place - period) % (2 * MAX_PERIOD)
                gap = abs(y - ring_y[before])
                gap = max(gap, boundary.scale * abs(wrap_angle(heading - ring_heading[before])))
                if gap >= 100.0 * tolerance or way - ring_way[before] < shortest:
                    continue
                alike, total = True, 0
                for j in range(period):
                    mine = ring_signature[(place - j) % (2 * MAX_PERIOD)]
                    alike &= mine == ring_signature[(place - j - period) % (2 * MAX_PERIOD)]
                    total = (total + mine * mine) & 0x3FFFFFFFFFFFFF  # the same wherever in the lap one starts
                if alike and gap < tolerance:
                    return Settled(_LOCKED, period, total, y, heading, k + 1)
                if alike:
                    break  # about to close; an alternating lap passes the test at twice its period first
    fate = _UNDECIDED
    if 4 * n_short > budget:
        fate = _STUCK
    elif x >= front_x:
        fate = _AHEAD
    elif n_rear == 0:
        fate = _NEVER
    elif 2 * last_rear < budget:
        fate = _LEAVES
    return Settled(fate, 0, 0, y, heading, budget)


@compiled
def settle_many(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
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
        states: (n, 2) filled with y and heading of the last arrival at the rear face.
        memories: (n, MEMORY) filled with the pushers' memories.

    Returns:
        Total number of bumps followed.
    """
    total = 0
    for i in range(len(starts)):
        heading = starts[i, 2]
        end = settle(
            boundary, program, senses, keys + np.uint64(i) * np.uint64(0xD1342543DE82EF95),
            starts[i, 0], starts[i, 1], heading, memories[i], 0, heading + math.pi, budget,
        )  # fmt: skip
        fates[i, 0], fates[i, 1], fates[i, 2] = end.fate, end.period, end.signature
        states[i, 0], states[i, 1] = end.y, end.heading
        total += end.n_bumps
    return total


_TURN, _MIRROR = int(Op.TURN), int(Op.MIRROR)


class LapTrace(NamedTuple):
    """One lap, bump by bump, with the derivative of its return map.

    n_bumps: bumps in the lap (0: the lap broke). y, heading: of the arrival at the rear face that ends it.
    yy, yh, hy, hh: derivatives of the final (y, heading) with respect to the first.
    """

    n_bumps: int
    y: float
    heading: float
    yy: float
    yh: float
    hy: float
    hh: float


@compiled
def trace_lap(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    y: float,
    heading: float,
    memory: IntArray,
    period: int,
    hits: FloatArray,
    surfaces: IntArray,
) -> LapTrace:
    """From one arrival at the rear face to the `period`-th next, with the analytic Jacobian.

    The derivative is carried along as two displacement vectors (one per initial perturbation). Over a run of
    length L along u the displacement p of the bump is p + L dh u' + dL u with u' = u turned by 90 deg and dL such
    that p stays on the surface; on an arc the normal turns by (t . p)/r. A turn keeps dh, a departure referred to
    the surface replaces it by the normal's, a mirror gives 2 dn - dh. (Derived here; on flat sides it reduces to
    the slope -cos a/cos b per leg.)

    Arguments:
        y, heading: arrival at the rear face (m, rad). memory: (MEMORY,) at that moment, changed in place.
        hits: (n, 4) filled with x, y, arriving and departing heading of each bump, the last row being the arrival
            that closes the lap. surfaces: (n,) filled with surface numbers.
    """
    n_segments = len(boundary.segments)
    x = boundary.segments[_REAR, 0]
    clock = np.zeros(1)
    contact, normal_angle = boundary.kinds[_REAR], boundary.segments[_REAR, 7]
    px, py = np.zeros(2), np.array([1.0, 0.0])  # displacement of the bump
    dh, dn = np.array([0.0, 1.0]), np.zeros(2)  # perturbation of the heading, of the surface's normal
    n_rear, broken = 0, LapTrace(0, y, heading, 0.0, 0.0, 0.0, 0.0)
    for k in range(len(surfaces)):
        while True:
            command, rotation = decide(program, senses, keys, memory, clock, float(k), heading, contact, normal_angle)
            if command != _ROTATE:
                break
            heading += rotation
            op = program[memory[PC] - 1].op
            for j in range(2):
                if op == _MIRROR:
                    dh[j] = 2.0 * dn[j] - dh[j]
                elif op != _TURN:
                    dh[j] = dn[j]
        if k > 0:
            hits[k - 1, 3] = heading
        if command == _STOP:
            return broken
        ux, uy = math.cos(heading), math.sin(heading)
        hit = next_hit(boundary, 0.0, x, y, ux, uy)
        if hit.surface < 0:
            return broken
        x += hit.run * ux
        y += hit.run * uy
        contact, normal_angle = boundary.kinds[hit.surface], hit.normal_angle
        nx, ny = math.cos(normal_angle), math.sin(normal_angle)
        for j in range(2):
            qx = px[j] - hit.run * dh[j] * uy
            qy = py[j] + hit.run * dh[j] * ux
            stretch = -(nx * qx + ny * qy) / (nx * ux + ny * uy)
            px[j], py[j] = qx + stretch * ux, qy + stretch * uy
            dn[j] = 0.0
            if hit.surface >= n_segments:
                dn[j] = (nx * py[j] - ny * px[j]) / boundary.arcs[hit.surface - n_segments, 2]
        hits[k, 0], hits[k, 1], hits[k, 2], hits[k, 3] = x, y, heading, heading
        surfaces[k] = hit.surface
        if hit.surface == _REAR:
            n_rear += 1
            if n_rear == period:
                return LapTrace(k + 1, y, heading, py[0], py[1], dh[0], dh[1])
    return broken
