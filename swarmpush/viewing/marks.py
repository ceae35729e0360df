"""What pictures are made of: shapes and texts in pixels from a picture's upper left corner, with their colours."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Place = tuple[float, float, float, float]  # of a part of a picture: x, y of its upper left corner, width, height
Anchor = Literal["nw", "n", "ne", "w", "c", "e", "sw", "s", "se"]  # which point of a text is at its x, y

LETTER = 0.62  # widest mean width of a letter over the size of its type, among the fonts that are used
WIDER = 0.6  # widths more that broad letters take


class Polygon(NamedTuple):
    """A closed outline, (k, 2) px, filled or not, with an edge or none; marks with more `z` lie above others."""

    points: FloatArray
    fill: str | None
    edge: str | None = None
    width: float = 1.0
    z: int = 0


class Circle(NamedTuple):
    """A circle; its edge of `width` lies within the radius."""

    x: float
    y: float
    radius: float
    fill: str | None
    edge: str | None = None
    width: float = 1.0
    z: int = 0


class Line(NamedTuple):
    """An open line through (k, 2) px."""

    points: FloatArray
    colour: str
    width: float = 1.0
    z: int = 0


class Text(NamedTuple):
    """A line of text of a size in px."""

    x: float
    y: float
    text: str
    size: float
    colour: str
    anchor: Anchor = "nw"
    z: int = 0


Mark = Polygon | Circle | Line | Text


def type_size(width: float, height: float) -> float:
    """Size of type that can be read in a picture of this size, px."""
    return max(12.0, min(height / 36, width / 64))


def text_width(text: str, size: float) -> float:
    """Room that a text takes at most, px; what is drawn is mostly narrower."""
    return LETTER * size * (len(text) + WIDER * sum(text.count(letter) for letter in "mwMW@%"))


def box(place: Place) -> FloatArray:
    """Corners of a rectangle, (4, 2) px."""
    x, y, width, height = place
    return np.array([(x, y), (x + width, y), (x + width, y + height), (x, y + height)])


def dashed(ends: FloatArray, dash: float, colour: str, width: float, z: int) -> list[Line]:
    """A straight line between two places, (2, 2) px, as dashes with gaps of the same length, px."""
    way = ends[1] - ends[0]
    length = float(np.hypot(*way))
    if not length > 0.0:
        return []
    begins = np.arange(0.0, length, 2 * dash)
    shares = np.stack([begins, np.minimum(begins + dash, length)], axis=1)[:, :, None] / length
    return [Line(points, colour, width, z) for points in ends[0] + shares * way]


def within(points: FloatArray, low: tuple[float, float], high: tuple[float, float]) -> FloatArray:
    """The part of a filled outline inside a rectangle, (k, 2); empty when there is none.

    Source: I. E. Sutherland and G. W. Hodgman, "Reentrant polygon clipping", Communications of the ACM 17, 1974.
    """
    for axis, limit, sense in ((0, low[0], 1), (0, high[0], -1), (1, low[1], 1), (1, high[1], -1)):
        if not len(points):
            break
        inside = sense * (points[:, axis] - limit)
        if (inside >= 0.0).all():
            continue
        kept = []
        for k in range(len(points)):
            a, b = inside[k - 1], inside[k]
            if (a >= 0.0) != (b >= 0.0):
                kept.append(points[k - 1] + a / (a - b) * (points[k] - points[k - 1]))
            if b >= 0.0:
                kept.append(points[k])
        points = np.array(kept).reshape(-1, 2)
    return points


def segment_within(
    a: Sequence[float], b: Sequence[float], low: tuple[float, float], high: tuple[float, float]
) -> FloatArray | None:
    """The part of a straight line inside a rectangle, (2, 2); None when there is none.

    Source: Y.-D. Liang and B. A. Barsky, "A new concept and method for line clipping", ACM Transactions on Graphics 3,
    1984.
    """
    first, last = 0.0, 1.0
    for axis in range(2):
        ahead = b[axis] - a[axis]
        for distance, step in ((low[axis] - a[axis], ahead), (a[axis] - high[axis], -ahead)):
            if step == 0.0:
                if distance > 0.0:
                    return None
            elif step > 0.0:
                first = max(first, distance / step)
            else:
                last = min(last, distance / step)
    if first > last:
        return None
    start, way = np.array(a), np.array(b) - np.array(a)
    return np.array([start + first * way, start + last * way])


def round_number(value: float) -> float:
    """The largest of 1, 2, 5, 10, 20 ... and their parts that is not above a positive value.

    >>> round_number(0.37), round_number(7.0), round_number(1.0)
    (0.2, 5.0, 1.0)
    """
    power = 10.0 ** math.floor(math.log10(value))
    digit = next(d for d in (10, 5, 2, 1) if d <= value / power * (1 + 1e-9) or d == 1)  # 10: logarithms are rounded
    return float(f"{digit * power:.12g}")  # 0.2 rather than 0.2 and a little
