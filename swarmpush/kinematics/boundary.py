"""The region open to a pusher's centre: every surface moved inward by the pusher's radius.

A disc of radius r touches a straight surface when its centre lies on the surface moved by r along its inward
normal, and touches a corner that sticks out when its centre lies on the circle of radius r about the corner. The open
region is what is left of the plane after all thick surfaces and corner discs are taken away, so a ray that
starts in it meets the true boundary before anything else and no piece needs trimming.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.geometry import (
    Corner,
    Corners,
    block_corners,
    channel_corners,
    front_side,
    is_plain,
    post_corners,
    turning,
)
from swarmpush.program import Contact
from swarmpush.scenario import Scenario

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

REAR, FRONT = "rear", "front"

# surfaces of a straight corridor with a rectangular block, in the order in which `boundary_of` lays them down
SURFACES = (
    "bottom", "far end", "top", "near end",
    REAR, "block bottom", FRONT, "block top",
    "lower rear corner", "lower front corner", "upper front corner", "upper rear corner",
)  # fmt: skip


class Boundary(NamedTuple):
    """Segments and arcs that stop a pusher's centre; lengths in m.

    segments: (n, 8): a point on the line (2), the unit tangent (2), the length from that point, the inward unit
        normal (2) and its direction in rad.
    arcs: (m, 3): centre and radius; the open region lies outside the circle.
    kinds, moving: (n + m,) kind of partner (`Contact`) and whether the piece belongs to the block; segments
        first, then arcs. The position in this list is the surface's number.
    scale: the pusher's radius, to which tolerances of touching refer. size: a length of the region, for those of laps.
    rear, front: numbers of the block's rear and front face. ahead_x: a centre from here on is ahead of the block.
    """

    segments: FloatArray
    arcs: FloatArray
    kinds: IntArray
    moving: IntArray
    scale: float
    size: float
    rear: int
    front: int
    ahead_x: float


def boundary_of(s: Scenario) -> Boundary:
    """The boundary of a scenario's channel with the block at its starting place."""
    r, walls, posts, block = s.pushers.radius, channel_corners(s), post_corners(s), block_corners(s)
    # going round an obstacle backwards puts the open region on the left there as well
    segments = [_segment(walls[k], walls[(k + 1) % len(walls)], r) for k in range(len(walls))]
    segments += [_segment(post[(k + 1) % len(post)], post[k], r) for post in posts for k in range(len(post))]
    rear = len(segments)
    segments += [_segment(block[(k + 1) % len(block)], block[k], r) for k in range(len(block))]
    fixed_arcs = [*_sticking_out(walls, -1.0), *(corner for post in posts for corner in _sticking_out(post, 1.0))]
    block_arcs = list(_sticking_out(block, 1.0))
    is_block = [0] * rear + [1] * len(block) + [0] * len(fixed_arcs) + [1] * len(block_arcs)
    return Boundary(
        segments=np.array(segments),
        arcs=np.array([[x, y, r] for x, y in (*fixed_arcs, *block_arcs)]).reshape(-1, 3),
        kinds=np.array([Contact.BLOCK if moves else Contact.WALL for moves in is_block], dtype=np.int64),
        moving=np.array(is_block, dtype=np.int64),
        scale=r,
        size=s.channel.width,
        rear=rear,
        front=rear + front_side(block),
        ahead_x=max(x for x, _ in block) + r,
    )


def surface_names(s: Scenario) -> tuple[str, ...]:
    """Names of the boundary's surfaces, in order."""
    if is_plain(s):
        return SURFACES
    walls, posts, block = channel_corners(s), post_corners(s), block_corners(s)
    sides = {0: REAR, front_side(block): FRONT}
    names = [f"wall {k + 1}" for k in range(len(walls))]
    names += [f"post {n + 1} side {k + 1}" for n, post in enumerate(posts) for k in range(len(post))]
    names += [sides.get(k, f"block side {k + 1}") for k in range(len(block))]
    names += [f"wall corner {k + 1}" for k, _ in enumerate(_sticking_out(walls, -1.0))]
    names += [
        f"post {n + 1} corner {k + 1}" for n, post in enumerate(posts) for k, _ in enumerate(_sticking_out(post, 1.0))
    ]
    return (*names, *(f"block corner {k + 1}" for k, _ in enumerate(_sticking_out(block, 1.0))))


def _segment(start: Corner, end: Corner, radius: float) -> list[float]:
    """The surface from start to end, open region on its left, moved left by the radius."""
    dx, dy = end[0] - start[0], end[1] - start[1]
    length = math.hypot(dx, dy)
    tx, ty = dx / length, dy / length
    nx, ny = -ty, tx
    return [start[0] + radius * nx, start[1] + radius * ny, tx, ty, length, nx, ny, math.atan2(ny, nx)]


def _sticking_out(corners: Corners, sense: float) -> Iterator[Corner]:
    """Corners that stick out into the open region: +1 for an obstacle's outline, -1 for the channel's."""
    for k in range(1, len(corners) + 1):
        if sense * turning(corners, k % len(corners)) > 0.0:
            yield corners[k % len(corners)]
