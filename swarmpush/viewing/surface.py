"""Marks on a pygame surface, with smooth edges where that costs little. Needs no display."""

from __future__ import annotations

import math
from collections.abc import Iterable
from functools import lru_cache

import numpy as np
import pygame

from swarmpush.viewing.marks import Circle, FloatArray, Line, Mark, Polygon, Text

SUBPIXELS = 4  # places within a pixel at which discs are kept, so that slow ones do not jerk
THIN = 1.6  # px: up to here a line is one smooth line
SMOOTH = 4.0  # px: up to here it is several side by side
CENTRES = 0.5  # px: pygame's smooth lines take places from the middle of the first pixel
DEFAULT_FONT_SHARE = 0.6875  # by which pygame draws its own font smaller than asked for


def paint(
    surface: pygame.Surface,
    marks: Iterable[Mark],
    offset: tuple[float, float] = (0.0, 0.0),
    size: tuple[float, float] | None = None,
) -> None:
    """Draw marks in their order.

    Arguments:
        surface: to draw on. marks: what to draw. offset: where their picture's upper left corner is, px. size: of their
            picture; what lies outside is cut off. None: nothing is.
    """
    before = surface.get_clip()
    if size is not None:
        surface.set_clip(pygame.Rect(*map(round, (*offset, *size))).clip(before))
    for mark in marks:
        if isinstance(mark, Circle):
            _circle(surface, mark, offset)
        elif isinstance(mark, Polygon):
            _polygon(surface, mark, offset)
        elif isinstance(mark, Line):
            _line(surface, mark.points + offset, mark.colour, mark.width)
        else:
            _text(surface, mark, offset)
    surface.set_clip(before)


def _polygon(surface: pygame.Surface, mark: Polygon, offset: tuple[float, float]) -> None:
    points = mark.points + offset
    if mark.fill is not None:
        if _is_box(mark.points):
            low, high = np.rint(points.min(axis=0)), np.rint(points.max(axis=0))
            surface.fill(mark.fill, pygame.Rect(*low.tolist(), *(high - low).tolist()))
        else:
            corners = points.tolist()
            pygame.draw.polygon(surface, mark.fill, corners)
            if mark.edge is None:
                pygame.draw.aalines(surface, mark.fill, True, (points - CENTRES).tolist())
    if mark.edge is not None:
        if mark.width <= THIN:
            pygame.draw.aalines(surface, mark.edge, True, (points - CENTRES).tolist())
        else:
            _line(surface, np.vstack([points, points[:1]]), mark.edge, mark.width, is_closed=True)


def _is_box(points: FloatArray) -> bool:
    """Whether an outline is a rectangle along the picture's sides."""
    if len(points) != 4:
        return False
    (a, b), (c, d), (e, f), (g, h) = points.tolist()
    return bool(b == d and c == e and f == h and a == g)


def _line(surface: pygame.Surface, points: FloatArray, colour: str, width: float, *, is_closed: bool = False) -> None:
    if width <= THIN:
        pygame.draw.aalines(surface, colour, False, (points - CENTRES).tolist())
        return
    if len(points) == 2 and width <= SMOOTH:
        _stroke(surface, points.tolist(), colour, width)
        return
    ways = np.diff(points, axis=0)
    lengths = np.hypot(ways[:, 0], ways[:, 1])
    keep = lengths > 0.0
    if not keep.any():
        return
    ways, lengths = ways[keep], lengths[keep]
    points = np.vstack([points[:-1][keep], points[-1]])
    aside = np.column_stack([-ways[:, 1], ways[:, 0]]) / lengths[:, None] * (width / 2)
    if width <= SMOOTH and not (ways == 0.0).any(axis=1).all():
        _side_by_side(surface, points, aside, colour, width, is_closed)
        return
    for a, b, n in zip(points[:-1], points[1:], aside, strict=True):
        if a[0] == b[0] or a[1] == b[1]:  # along the picture's sides: sharp
            low = np.minimum(a, b) - abs(n)
            high = np.maximum(a, b) + abs(n)
            extent = np.maximum(np.rint(high - low), 1.0)
            surface.fill(colour, pygame.Rect(*np.rint(low).tolist(), *extent.tolist()))
        else:
            n = n * (1.0 - 1.0 / width)  # the smooth edge adds half a pixel on either side
            _filled(surface, np.array([a + n, b + n, b - n, a - n]), colour)
    joints = points[:-1] if is_closed else points[1:-1]
    for x, y in joints.tolist():
        _circle(surface, Circle(x, y, width / 2, colour), (0.0, 0.0))


def _stroke(surface: pygame.Surface, ends: list[list[float]], colour: str, width: float) -> None:
    """A straight line of a few pixels: a bar along the picture's sides, else smooth lines side by side.

    Most lines are of this kind, and there are many; plain arithmetic is faster here than arrays.
    """
    (ax, ay), (bx, by) = ends
    if ax == bx or ay == by:
        half_x, half_y = (width / 2, 0.0) if ax == bx else (0.0, width / 2)
        left, top = min(ax, bx) - half_x, min(ay, by) - half_y
        across, down = abs(bx - ax) + 2 * half_x, abs(by - ay) + 2 * half_y
        surface.fill(colour, (round(left), round(top), max(round(across), 1), max(round(down), 1)))
        return
    length = math.hypot(bx - ax, by - ay)
    n = math.ceil(width)
    for k in range(n):
        share = (k / (n - 1) - 0.5) * (width - 1.0) / length
        right, down = (ay - by) * share - CENTRES, (bx - ax) * share - CENTRES
        pygame.draw.aaline(surface, colour, (ax + right, ay + down), (bx + right, by + down))


def _side_by_side(
    surface: pygame.Surface, points: FloatArray, aside: FloatArray, colour: str, width: float, is_closed: bool
) -> None:
    """A line of a few pixels as smooth lines beside each other, which meet in full corners."""
    first, last = (aside[-1:], aside[:1]) if is_closed else (aside[:1], aside[-1:])
    before, after = np.vstack([first, aside]), np.vstack([aside, last])
    middle = before + after
    # the corner's point lies where both sides' parallels meet, but not far out where a line turns back on itself
    bend = np.maximum((middle * middle).sum(axis=1) / (2.0 * (aside[0] @ aside[0])), 0.5)
    corners = middle / bend[:, None]
    for share in np.linspace(-1.0, 1.0, math.ceil(width)) * (1.0 - 1.0 / width):
        pygame.draw.aalines(surface, colour, False, (points + share * corners - CENTRES).tolist())


def _filled(surface: pygame.Surface, points: FloatArray, colour: str) -> None:
    corners = (points - CENTRES).tolist()
    pygame.draw.polygon(surface, colour, corners)
    pygame.draw.aalines(surface, colour, True, corners)


def _circle(surface: pygame.Surface, mark: Circle, offset: tuple[float, float]) -> None:
    radius = round(mark.radius * SUBPIXELS) / SUBPIXELS
    if radius <= 0.0:
        return
    x, y = round((mark.x + offset[0]) * SUBPIXELS), round((mark.y + offset[1]) * SUBPIXELS)
    disc, middle = _disc(radius, mark.fill, mark.edge, mark.width, x % SUBPIXELS, y % SUBPIXELS)
    surface.blit(disc, (x // SUBPIXELS - middle, y // SUBPIXELS - middle))


@lru_cache(maxsize=4096)
def _disc(
    radius: float, fill: str | None, edge: str | None, width: float, x_part: int, y_part: int
) -> tuple[pygame.Surface, int]:
    """A picture of a circle whose centre lies a part of a pixel beyond the corner of its middle pixel, and that pixel.

    A pixel's cover is how far it reaches over the circle's edge, which is exact but for the edge's bend within it.
    """
    middle = int(np.ceil(radius)) + 1
    pixels = np.arange(2 * middle + 1) + 0.5 - middle
    away = np.hypot(*np.meshgrid(pixels - x_part / SUBPIXELS, pixels - y_part / SUBPIXELS, indexing="ij"))
    cover = np.clip(radius - away + 0.5, 0.0, 1.0)
    has_edge = edge is not None and width > 0.0
    inner = np.clip(radius - width - away + 0.5, 0.0, 1.0) if has_edge else cover
    inside = np.array(pygame.Color(fill or edge or "white")[:3], dtype=np.float64)
    rim = np.array(pygame.Color(edge or fill or "white")[:3], dtype=np.float64)
    alpha = cover if fill is not None else np.clip(cover - inner, 0.0, 1.0)
    share = (inner / np.maximum(cover, 1e-9))[..., None]
    picture = pygame.Surface((len(pixels), len(pixels)), pygame.SRCALPHA, 32)
    pygame.surfarray.pixels3d(picture)[...] = np.rint(share * inside + (1.0 - share) * rim)
    pygame.surfarray.pixels_alpha(picture)[...] = np.rint(255 * alpha)
    return picture, middle


def _text(surface: pygame.Surface, mark: Text, offset: tuple[float, float]) -> None:
    picture = _letters(mark.text, round(mark.size), mark.colour)
    width, height = picture.get_size()
    left = 0.0 if "w" in mark.anchor else width if "e" in mark.anchor else width / 2
    up = 0.0 if "n" in mark.anchor else height if "s" in mark.anchor else height / 2
    surface.blit(picture, (round(mark.x + offset[0] - left), round(mark.y + offset[1] - up)))


@lru_cache(maxsize=1024)
def _letters(text: str, size: int, colour: str) -> pygame.Surface:
    return _font(size).render(text, True, colour)


@lru_cache(maxsize=64)
def _font(size: int) -> pygame.font.Font:
    """pygame's own font, which is the same everywhere."""
    pygame.font.init()
    return pygame.font.Font(None, round(size / DEFAULT_FONT_SHARE))


def text_size(text: str, size: float) -> tuple[int, int]:
    """Width and height of a text as it is drawn, px."""
    return _font(round(size)).size(text)
