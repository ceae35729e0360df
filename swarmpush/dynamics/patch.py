"""The contact patch of the block on the floor."""

from __future__ import annotations

import math


def friction_arm(a: float, b: float) -> float:
    """Largest friction moment over largest friction force of an a x b rectangle under uniform pressure.

    It is the mean distance of the patch from its centre: [2 d + (a^2/b) ln((b + d)/a) + (b^2/a) ln((a + d)/b)]/12
    with d the diagonal. Idea: Goyal, Ruina and Papadopoulos, "Planar sliding with dry friction", Wear 143 (1991)
    307; the integral was worked out here.

    >>> round(friction_arm(1.0, 1.0), 9)
    0.382597858
    """
    d = math.hypot(a, b)
    return (2 * d + a * a / b * math.log((b + d) / a) + b * b / a * math.log((a + d) / b)) / 12
