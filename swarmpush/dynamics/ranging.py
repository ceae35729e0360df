"""What a pusher's range sensor and eye meet in the body world: walls, the moved block, other pushers."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import borrowed, compiled
from swarmpush.kinematics.boundary import boundary_of
from swarmpush.kinematics.legs import LOOKS, hit_among
from swarmpush.scenario import Scenario

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

PUSHER_IN_THE_WAY = -2  # stands for the surface that another pusher is


class Surroundings(NamedTuple):
    """The point world's boundary in engine units: what is fixed, and the block in its own frame.

    walls, wall_arcs, block, block_arcs: as in `Boundary`. still: zeros, one per surface. n_pushers: how many can be
    in the way. is_unknown: there is no map, and ranges must be asked of the engine.
    """

    walls: FloatArray
    wall_arcs: FloatArray
    block: FloatArray
    block_arcs: FloatArray
    still: IntArray
    scale: float
    n_pushers: int
    is_unknown: bool = False


def surroundings(s: Scenario, unit: float, centre: tuple[float, float]) -> Surroundings:
    """The surroundings of a scenario; `centre` is that of the block at the start, in engine units of `unit` metres."""
    boundary = boundary_of(s)
    segments, arcs = boundary.segments.copy(), boundary.arcs / unit
    segments[:, [0, 1, 4]] /= unit
    n = len(segments)
    is_block = boundary.moving.astype(bool)
    block, block_arcs = segments[is_block[:n]], arcs[is_block[n:]]
    block[:, :2] -= centre
    block_arcs[:, :2] -= centre
    return Surroundings(
        walls=segments[~is_block[:n]],
        wall_arcs=arcs[~is_block[n:]],
        block=block,
        block_arcs=block_arcs,
        still=np.zeros(len(is_block), dtype=np.int64),
        scale=boundary.scale / unit,
        n_pushers=0 if s.pushers.pass_through else s.pushers.count,
    )


@compiled
def clear_run(around: Surroundings, motion: FloatArray, i: int, heading: float) -> tuple[float, int]:
    """How far pusher i could run along a heading, and the number of the surface it would meet there."""
    walls, wall_arcs, still = borrowed(around.walls), borrowed(around.wall_arcs), borrowed(around.still)
    block, block_arcs, motion = borrowed(around.block), borrowed(around.block_arcs), borrowed(motion)
    x, y = motion[i + 1, 0], motion[i + 1, 1]
    ux, uy = math.cos(heading), math.sin(heading)
    hit = hit_among(walls, wall_arcs, still, around.scale, 0.0, x, y, ux, uy)
    run, surface = hit.run, hit.surface
    if surface >= len(walls):  # numbers go: walls, block, corners of walls, corners of the block
        surface += len(block)
    c, s = math.cos(motion[0, 2]), math.sin(motion[0, 2])
    dx, dy = x - motion[0, 0], y - motion[0, 1]
    bx, by, bux, buy = c * dx + s * dy, c * dy - s * dx, c * ux + s * uy, c * uy - s * ux
    hit = hit_among(block, block_arcs, still, around.scale, 0.0, bx, by, bux, buy)
    if hit.surface >= 0 and hit.run < run:
        run, surface = hit.run, hit.surface + len(walls)
        if hit.surface >= len(block):
            surface += len(wall_arcs)
    for j in range(around.n_pushers):
        qx, qy = motion[j + 1, 0] - x, motion[j + 1, 1] - y
        ahead = qx * ux + qy * uy
        reach = 4.0 - (qx * qx + qy * qy - ahead * ahead)  # two discs of radius 1 touch at a distance of 2
        if j != i and ahead > 0.0 and reach > 0.0:
            gap = max(ahead - math.sqrt(reach), 0.0)
            if gap < run:
                run, surface = gap, PUSHER_IN_THE_WAY
    return run, surface


@compiled
def sees(around: Surroundings, motion: FloatArray, i: int, heading: float, half_angle: float, face: int) -> bool:
    """Whether a ray within the cone meets the face first."""
    for k in range(LOOKS + 1):
        angle = heading + half_angle * (2.0 * k / LOOKS - 1.0)
        if clear_run(around, motion, i, angle)[1] == face:
            return True
        if half_angle == 0.0:
            return False
    return False
