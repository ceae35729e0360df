"""The region open to a pusher's centre: every surface moved inward by the pusher's radius.

A disc of radius r touches a straight surface when its centre lies on the surface moved by r along its inward
normal, and touches a convex corner when its centre lies on the circle of radius r about the corner. The open
region is what is left of the plane after all thick surfaces and corner discs are taken away, so a ray that
starts in it meets the true boundary before anything else and no piece needs trimming.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.program import Contact
from swarmpush.scenario import Scenario

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


class Boundary(NamedTuple):
    """Segments and arcs that stop a pusher's centre; lengths in m.

    segments: (n, 8): a point on the line (2), the unit tangent (2), the length from that point, the inward unit
        normal (2) and its direction in rad.
    arcs: (m, 3): centre and radius; the open region lies outside the circle.
    kinds, moving: (n + m,) kind of partner (`Contact`) and whether the piece belongs to the block; segments
        first, then arcs. The position in this list is the surface's number.
    scale: a length of the region, for tolerances.
    """

    segments: FloatArray
    arcs: FloatArray
    kinds: IntArray
    moving: IntArray
    scale: float


REAR = "rear"

# numbers of the corridor's surfaces, in the order in which `corridor` lays them down
SURFACES = (
    "bottom", "far end", "top", "near end",
    REAR, "block bottom", "front", "block top",
    "lower rear corner", "lower front corner", "upper front corner", "upper rear corner",
)  # fmt: skip
REAR_SURFACE = SURFACES.index(REAR)
FRONT_SURFACE = SURFACES.index("front")


def _segment(start: tuple[float, float], end: tuple[float, float], radius: float) -> list[float]:
    """The surface from start to end, open region on its left, moved left by the radius."""
    dx, dy = end[0] - start[0], end[1] - start[1]
    length = math.hypot(dx, dy)
    tx, ty = dx / length, dy / length
    nx, ny = -ty, tx
    return [start[0] + radius * nx, start[1] + radius * ny, tx, ty, length, nx, ny, math.atan2(ny, nx)]


def corridor(s: Scenario) -> Boundary:
    """The boundary of a scenario's corridor with the block at its starting place."""
    r, length, width = s.pushers.radius, s.channel.length, s.channel.width
    rear, front = s.block.rear_at, s.block_front_at
    low = width / 2 + s.block.offset - s.block.width / 2
    high = low + s.block.width
    walls = [(0.0, 0.0), (length, 0.0), (length, width), (0.0, width)]
    # clockwise, so that the open region lies to the left of each side as well
    block = [(rear, high), (rear, low), (front, low), (front, high)]
    block_sides = [(block[k], block[(k + 1) % 4]) for k in range(4)]  # rear, bottom, front, top
    segments = [_segment(walls[k], walls[(k + 1) % 4], r) for k in range(4)]
    segments += [_segment(end, start, r) for start, end in block_sides]
    arcs = [[x, y, r] for x, y in (block[1], block[2], block[3], block[0])]
    kinds = [Contact.WALL] * 4 + [Contact.BLOCK] * 8
    return Boundary(
        np.array(segments),
        np.array(arcs),
        np.array(kinds, dtype=np.int64),
        np.array([0] * 4 + [1] * 8, dtype=np.int64),
        width,
    )
