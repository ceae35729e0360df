"""Outlines of channel, posts and block at the start of a run: lists of corners, all counter-clockwise.

Corners at which an outline goes straight on are left out, so that a side is one surface however it was written down.
"""

from __future__ import annotations

import math
from itertools import pairwise
from typing import TYPE_CHECKING

from swarmpush.scenario import Block, Pushers, Scenario

if TYPE_CHECKING:
    from shapely.geometry.base import BaseGeometry

Corner = tuple[float, float]
Corners = tuple[Corner, ...]

STRAIGHT = 1e-9  # rad: an outline that turns by less at a corner has none there; also: sides that look back alike
ARC_SIDES = 256  # of the polygon that stands for a circle where areas and pockets are found; 0.008 % of the radius off


def is_plain(s: Scenario) -> bool:
    """Whether the channel is a bare rectangle and the block a rectangle."""
    return s.channel.outline is None and not s.channel.posts and s.block.outline is None


def channel_corners(s: Scenario) -> Corners:
    """Corners of the channel, m."""
    length, width = s.channel.length, s.channel.width
    return tidy(s.channel.outline or ((0.0, 0.0), (length, 0.0), (length, width), (0.0, width)))


def post_corners(s: Scenario) -> tuple[Corners, ...]:
    """Corners of each post, m."""
    return tuple(tidy(post) for post in s.channel.posts)


def block_corners(s: Scenario, block: Block | None = None) -> Corners:
    """Corners of the block, or of another one, at its starting place, m; the first side is the rear face.

    The rear face is the side that looks most squarely back along the channel; of two that do so alike, it is the
    one that begins first in the outline.
    """
    block = block or s.block
    half = block.width / 2
    outline = block.outline or ((0.0, half), (0.0, -half), (block.length, -half), (block.length, half))
    x, y = block.rear_at, s.channel.width / 2 + block.offset
    corners = tidy(tuple((x + a, y + b) for a, b in outline))
    rear = _facing(corners, -1.0)
    return corners[rear:] + corners[:rear]


def pusher_corners(p: Pushers) -> Corners:
    """Corners of a pusher's outline before it is rounded off with its radius, as seen from its centre, m.

    One of a disc, two or four of a bar.
    """
    ahead, aside = p.trunk / 2, p.nose / 2
    return tuple(dict.fromkeys(((-ahead, -aside), (ahead, -aside), (ahead, aside), (-ahead, aside))))


def front_side(block: Corners) -> int:
    """Number of the block's side that looks most squarely ahead along the channel, chosen like the rear face."""
    return _facing(block, 1.0)


def _facing(corners: Corners, sense: float) -> int:
    ahead = [sense * outward_normal(corners, k)[0] for k in range(len(corners))]
    return next(k for k, value in enumerate(ahead) if value >= max(ahead) - STRAIGHT)


def tidy(outline: Corners) -> Corners:
    """The outline from its first corner on with its inside on the left, without corners that are none."""
    corners = outline if signed_area(outline) >= 0.0 else outline[:1] + outline[:0:-1]
    return tuple(corner for k, corner in enumerate(corners) if abs(turning(corners, k)) > STRAIGHT) or corners


def sides_of(corners: Corners) -> list[tuple[Corner, Corner]]:
    """Sides of a polygon, each from its first corner to its second."""
    return list(zip(corners, corners[1:] + corners[:1], strict=True))


def signed_area(corners: Corners) -> float:
    """Area of a polygon, m2; negative when it is gone round clockwise (the shoelace formula)."""
    x, y = corners[0]  # seen from there, a small outline far from the origin keeps its digits
    return 0.5 * sum((a[0] - x) * (b[1] - y) - (b[0] - x) * (a[1] - y) for a, b in pairwise(corners))


def outward_normal(corners: Corners, k: int) -> Corner:
    """Unit normal out of the polygon at its side from corner k."""
    (ax, ay), (bx, by) = corners[k], corners[(k + 1) % len(corners)]
    length = math.hypot(bx - ax, by - ay)
    return (by - ay) / length, (ax - bx) / length


def turning(corners: Corners, k: int) -> float:
    """Angle by which the outline turns at corner k, rad: positive where it bulges out."""
    a, b, c = corners[k - 1], corners[k], corners[(k + 1) % len(corners)]
    into, out = (b[0] - a[0], b[1] - a[1]), (c[0] - b[0], c[1] - b[1])
    return math.atan2(into[0] * out[1] - into[1] * out[0], into[0] * out[0] + into[1] * out[1])


def open_floor(s: Scenario) -> BaseGeometry:
    """The channel without posts and blocks, the blocks at their starting places."""
    from shapely import Polygon, union_all

    blocks = [block_corners(s, block) for block in s.blocks]
    obstacles = union_all([Polygon(corners) for corners in (*post_corners(s), *blocks)])
    return Polygon(channel_corners(s)).difference(obstacles)


def free_region(s: Scenario) -> BaseGeometry:
    """Where a pusher's centre can be, the block at its starting place; circles as polygons."""
    return open_floor(s).buffer(-s.pushers.radius, quad_segs=ARC_SIDES // 4)
