"""Outlines of channel, posts and block at the start of a run: lists of corners, all counter-clockwise."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from swarmpush.scenario import Scenario

if TYPE_CHECKING:
    from shapely.geometry.base import BaseGeometry

Corner = tuple[float, float]
Corners = tuple[Corner, ...]

ARC_SIDES = 64  # of the polygon that stands for a circle where regions are computed; 0.03 % of the radius off


def is_plain(s: Scenario) -> bool:
    """Whether the channel is a bare rectangle and the block a rectangle."""
    return s.channel.outline is None and not s.channel.posts and s.block.outline is None


def channel_corners(s: Scenario) -> Corners:
    """Corners of the channel, m."""
    length, width = s.channel.length, s.channel.width
    return counter_clockwise(s.channel.outline or ((0.0, 0.0), (length, 0.0), (length, width), (0.0, width)))


def post_corners(s: Scenario) -> tuple[Corners, ...]:
    """Corners of each post, m."""
    return tuple(counter_clockwise(post) for post in s.channel.posts)


def block_corners(s: Scenario) -> Corners:
    """Corners of the block at its starting place, m; the first edge is the rear face.

    The rear face is the side that looks most squarely back along the channel.
    """
    half = s.block.width / 2
    outline = s.block.outline or ((0.0, half), (0.0, -half), (s.block.length, -half), (s.block.length, half))
    x, y = s.block.rear_at, s.channel.width / 2 + s.block.offset
    corners = counter_clockwise(tuple((x + a, y + b) for a, b in outline))
    rear = min(range(len(corners)), key=lambda k: outward_normal(corners, k)[0])
    return corners[rear:] + corners[:rear]


def counter_clockwise(corners: Corners) -> Corners:
    """The same outline with its inside on the left."""
    return corners if signed_area(corners) >= 0.0 else corners[::-1]


def signed_area(corners: Corners) -> float:
    """Area of a polygon, m2; negative when it is gone round clockwise (the shoelace formula)."""
    pairs = zip(corners, corners[1:] + corners[:1], strict=True)
    return 0.5 * sum(a[0] * b[1] - b[0] * a[1] for a, b in pairs)


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


def free_region(s: Scenario) -> BaseGeometry:
    """Where a pusher's centre can be, the block at its starting place; circles as polygons."""
    from shapely import Polygon, union_all

    r = s.pushers.radius
    obstacles = [
        Polygon(corners).buffer(r, quad_segs=ARC_SIDES // 4) for corners in (*post_corners(s), block_corners(s))
    ]
    return Polygon(channel_corners(s)).buffer(-r, quad_segs=ARC_SIDES // 4).difference(union_all(obstacles))
