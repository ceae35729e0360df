"""The block as a uniform plate: area, centre, moment of inertia, and the friction moment of its contact patch."""

from __future__ import annotations

import math

from swarmpush.geometry import Corners, sides_of, signed_area


def centre(corners: Corners) -> tuple[float, float]:
    """Centroid of a polygon (any textbook of mechanics)."""
    x = y = 0.0
    for (ax, ay), (bx, by) in sides_of(corners):
        cross = ax * by - bx * ay
        x += (ax + bx) * cross
        y += (ay + by) * cross
    area = signed_area(corners)
    return x / (6.0 * area), y / (6.0 * area)


def about(corners: Corners, origin: tuple[float, float]) -> Corners:
    """The corners as seen from `origin`."""
    return tuple((x - origin[0], y - origin[1]) for x, y in corners)


def gyration_squared(corners: Corners) -> float:
    """Moment of inertia over mass of a uniform polygon about the origin, m2 (any textbook of mechanics).

    >>> round(12 * gyration_squared(((-1.0, -1.5), (1.0, -1.5), (1.0, 1.5), (-1.0, 1.5))), 12)
    13.0
    """
    moment = 0.0
    for (ax, ay), (bx, by) in sides_of(corners):
        cross = ax * by - bx * ay
        moment += cross * (ax * ax + ax * bx + bx * bx + ay * ay + ay * by + by * by) / 12.0
    return moment / signed_area(corners)


def friction_arm(corners: Corners) -> float:
    """Largest friction moment over largest friction force of a patch under uniform pressure, turned about the origin.

    It is the mean distance of the patch from the origin. Each side at distance h, seen from angle a to angle b off its
    foot, bounds a triangle that contributes h^3/6 [sec tan + ln(sec + tan)] from a to b. Idea: Goyal, Ruina and
    Papadopoulos, "Planar sliding with dry friction", Wear 143 (1991) 307; the integral was worked out here.

    >>> round(friction_arm(((-0.5, -0.5), (0.5, -0.5), (0.5, 0.5), (-0.5, 0.5))), 9)
    0.382597858
    """
    total = 0.0
    for (ax, ay), (bx, by) in sides_of(corners):
        length = math.hypot(bx - ax, by - ay)
        h = (ax * by - bx * ay) / length
        if h == 0.0:
            continue
        from_foot = (ax * (bx - ax) + ay * (by - ay)) / length
        total += h**3 / 6.0 * (_primitive((from_foot + length) / h) - _primitive(from_foot / h))
    return total / signed_area(corners)


def _primitive(tangent: float) -> float:
    secant = math.hypot(1.0, tangent)
    return secant * tangent + math.asinh(tangent)
