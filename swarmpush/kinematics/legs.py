"""One leg at a time: the next surface along a ray, and the next straight move that a routine makes."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import compiled, inlined
from swarmpush.kinematics.boundary import Boundary
from swarmpush.program import PC, Command, Op, Program, Senses, decide, note_range, note_sight

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

# of the pusher's radius
_BEHIND_TOLERANCE = 0.5  # a centre less far behind a surface is in it, by rounding or overlap, and not beyond the wall
_TOUCH = 1e-11  # a surface this near is touched: in a corner rounding must not choose which of two comes first
_END_TOLERANCE = 1e-9  # closes the seam between a segment and the arc at its end
_GRAZE = 1e-12  # a path that cuts into a corner's circle by less goes past, as one along the sides next to it does
_FLAT = 1.5e-6  # rad, a little more than sqrt(2 _GRAZE): a path that grazed a corner may point into the side next to it
#   by this, and meets it so much before its beginning

_PARALLEL = 1e-12  # rad: a run this parallel to a surface does not meet it
_SQUARE = 1e-9  # rad: a pusher that presses this squarely on a surface does not slide
LOOKS = 16  # rays into a cone of sight; the edges and the middle are among them

_ROTATE, _STOP, _ADVANCE, _SLIDE = (int(c) for c in (Command.ROTATE, Command.STOP, Command.ADVANCE, Command.SLIDE))
_GAUGE, _SIGHT = int(Command.GAUGE), int(Command.SIGHT)
_TURN, _MIRROR = int(Op.TURN), int(Op.MIRROR)
STOP, SLIDE = _STOP, _SLIDE


class Hit(NamedTuple):
    """The next bump: run length, surface number (-1: none), direction of the inward normal there."""

    run: float
    surface: int
    normal_angle: float


@compiled
def next_hit(boundary: Boundary, shift: float, x: float, y: float, ux: float, uy: float) -> Hit:
    """First surface met from (x, y) along the unit vector (ux, uy), the block moved by `shift` in x."""
    return hit_among(boundary.segments, boundary.arcs, boundary.moving, boundary.scale, shift, x, y, ux, uy)


# Inlined functions take the boundary's arrays one by one: reaching into a tuple for an array counts a reference, and at
# millions of legs per second that shows.


@inlined
def hit_among(
    segments: FloatArray,
    arcs: FloatArray,
    moving: IntArray,
    scale: float,
    shift: float,
    x: float,
    y: float,
    ux: float,
    uy: float,
) -> Hit:
    """`next_hit` among the surfaces of a boundary; `scale` is the pusher's radius."""
    slack, long_slack = _END_TOLERANCE * scale, _FLAT * scale
    behind = -_BEHIND_TOLERANCE * scale
    touch, graze = _TOUCH * scale, _GRAZE * scale
    best, surface, normal_angle = np.inf, -1, 0.0
    n = len(segments)
    for k in range(n):
        nx, ny = segments[k, 5], segments[k, 6]
        approach = -(ux * nx + uy * ny)
        if approach <= _PARALLEL:
            continue
        px = x - segments[k, 0] - shift * moving[k]
        py = y - segments[k, 1]
        distance = px * nx + py * ny
        if distance < behind or distance >= best * approach:
            continue
        run = distance / approach if distance > touch else 0.0
        along = (px + run * ux) * segments[k, 2] + (py + run * uy) * segments[k, 3]
        reach = slack if approach > _FLAT else long_slack
        if run < best and -reach <= along <= segments[k, 4] + reach:
            best, surface, normal_angle = run, k, segments[k, 7]
    corner = -1
    for k in range(len(arcs)):
        qx = x - arcs[k, 0] - shift * moving[n + k]
        qy = y - arcs[k, 1]
        approach = -(qx * ux + qy * uy)
        radius = arcs[k, 2]
        if approach <= 0.0 or approach - radius >= best:
            continue
        beside = abs(qx * uy - qy * ux)  # of the ray, from the centre; a difference of squares would lose digits
        depth = radius - beside
        if depth <= graze:
            continue
        run = approach - math.sqrt(depth * (radius + beside))
        if run < touch:
            run = 0.0
        if run < best:
            best, corner = run, k
    if corner >= 0:
        surface = n + corner
        hx = x - arcs[corner, 0] - shift * moving[surface] + best * ux
        hy = y - arcs[corner, 1] + best * uy
        normal_angle = math.atan2(hy, hx)
    return Hit(best, surface, normal_angle)


@compiled
def _clear_run(
    segments: FloatArray,
    arcs: FloatArray,
    moving: IntArray,
    scale: float,
    shift: float,
    x: float,
    y: float,
    heading: float,
) -> float:
    """How far the pusher could run along the heading before it touches something."""
    return hit_among(segments, arcs, moving, scale, shift, x, y, math.cos(heading), math.sin(heading)).run


@compiled
def _sees(
    segments: FloatArray,
    arcs: FloatArray,
    moving: IntArray,
    scale: float,
    shift: float,
    x: float,
    y: float,
    heading: float,
    half_angle: float,
    face: int,
) -> bool:
    """Whether a ray within the cone meets the face first."""
    for k in range(LOOKS + 1):
        angle = heading + half_angle * (2.0 * k / LOOKS - 1.0)
        hit = hit_among(segments, arcs, moving, scale, shift, x, y, math.cos(angle), math.sin(angle))
        if hit.surface == face:
            return True
        if half_angle == 0.0:
            return False
    return False


class Leg(NamedTuple):
    """One straight move, with the turns before it.

    command: what it is; STOP if there is none. heading: after the turns. by_heading, by_normal: how it depends on the
    heading before and on the direction of the touched surface's normal (derivatives). ux, uy: direction of motion.
    run, time: its length and duration. surface, normal_angle: what it meets; surface is -1 when it ends by itself.
    """

    command: int
    heading: float
    by_heading: float
    by_normal: float
    ux: float
    uy: float
    run: float
    time: float
    surface: int
    normal_angle: float


@inlined
def next_leg(
    segments: FloatArray,
    arcs: FloatArray,
    moving: IntArray,
    scale: float,
    shift: float,
    speed: float,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    memory: IntArray,
    notes: FloatArray,
    now: float,
    x: float,
    y: float,
    heading: float,
    contact: int,
    normal_angle: float,
) -> Leg:
    """Let the routine decide until it moves, and follow that move to its end.

    A run that meets nothing is given the command STOP, as is a routine that halts.
    """
    by_heading, by_normal = 1.0, 0.0
    while True:
        command, value, number = decide(program, senses, keys, memory, notes, now, heading, contact, normal_angle)
        if command == _ROTATE:
            heading += value
            op = program[memory[PC] - 1].op
            if op == _MIRROR:
                by_heading, by_normal = -by_heading, 2.0 - by_normal
            elif op != _TURN:
                by_heading, by_normal = 0.0, 1.0
        elif command == _GAUGE:
            run = _clear_run(segments, arcs, moving, scale, shift, x, y, heading)
            note_range(senses, keys, memory, notes, run, value)
        elif command == _SIGHT:
            is_there = _sees(segments, arcs, moving, scale, shift, x, y, heading, value, number)
            note_sight(senses, keys, memory, is_there)
        else:
            break
    ux, uy = math.cos(heading), math.sin(heading)
    if command == _STOP:
        return Leg(_STOP, heading, by_heading, by_normal, ux, uy, 0.0, 0.0, -1, normal_angle)
    pace, limit = speed, np.inf
    if command == _ADVANCE:
        limit = value
    elif command == _SLIDE:
        tx, ty = -math.sin(normal_angle), math.cos(normal_angle)
        along = ux * tx + uy * ty
        ux, uy = (tx, ty) if along >= 0.0 else (-tx, -ty)
        pace = speed * abs(along)
        limit = value if value >= 0.0 else -value * pace
        if contact == 0 or abs(along) < _SQUARE:  # nothing to slide along, or pressing straight on
            waits = max(-value, 0.0)
            return Leg(_SLIDE, heading, by_heading, by_normal, ux, uy, 0.0, waits, -1, normal_angle)
    hit = hit_among(segments, arcs, moving, scale, shift, x, y, ux, uy)
    if hit.run > limit + _TOUCH * scale:
        return Leg(command, heading, by_heading, by_normal, ux, uy, limit, limit / pace, -1, normal_angle)
    if hit.surface < 0:
        command = _STOP
    return Leg(command, heading, by_heading, by_normal, ux, uy, hit.run, hit.run / pace, hit.surface, hit.normal_angle)


@compiled
def leg_from(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    speed: float,
    memory: IntArray,
    notes: FloatArray,
    x: float,
    y: float,
    heading: float,
    contact: int,
    normal_angle: float,
) -> Leg:
    """`next_leg` by itself, the block at its starting place and the clock at 0."""
    return next_leg(
        boundary.segments, boundary.arcs, boundary.moving, boundary.scale, 0.0, speed,
        program, senses, keys, memory, notes, 0.0, x, y, heading, contact, normal_angle,
    )  # fmt: skip
