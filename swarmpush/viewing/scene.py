"""A film at one time as a picture of the rig, to scale: pure geometry, in marks that anything can draw."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import pandas as pd

from swarmpush.dynamics.states import STATES
from swarmpush.geometry import block_corners, channel_corners, outward_normal, post_corners, sides_of
from swarmpush.quantities import for_people
from swarmpush.reporting.palette import (
    AXIS,
    BLUE,
    GREEN,
    INK,
    MEASURED,
    PALE,
    PAPER,
    PLANNED,
    PURPLE,
    QUIET,
    STATE_COLOURS,
)
from swarmpush.scenario import Scenario
from swarmpush.viewing.film import Film, Frame
from swarmpush.viewing.marks import (
    Circle,
    FloatArray,
    Line,
    Mark,
    Polygon,
    Text,
    box,
    dashed,
    round_number,
    segment_within,
    text_width,
    type_size,
    within,
)

STATE_NAMES = {
    "locked": "in a planned lap",
    "lost": "in no lap",
    "held at a wall": "held at a wall",
    "ahead": "ahead of the block",
    "idle": "idle",
}
IMPACT, LEAN = BLUE, PURPLE
GROUND, TRAIL, LAP, BLOCK, CREW, FLASH, STRIP, LETTERS = range(8)  # what lies above what
UNKNOWN_STATE = -1
TRAIL_POINTS = (16, 48, 5000)  # of one pusher's trail, least and most, and of all trails together
FADES = 4  # steps in which a strike fades
LARGEST = 0.95  # quantile of the impulses so far that counts as a large one
LEAN_ROOM = (
    6.0  # by how much leaning's impulse may exceed what the key's size stands for before impacts are drawn smaller
)
STRIKE_SIZE = 0.62  # of a large strike's disc, radius over type size
SYMBOL_FROM = 5.0  # px: half the width of the smallest pusher in which a symbol can be made out
CORNER_POINTS = (3, 6)  # of a bar's rounded corner: small and large
ROUND_FROM = 4.0  # px: radius of the smallest corner that is large
ARROW_AT = 0.62  # of a leg: legs there and back cross in their middles
ARROW_FROM = 8.0  # sizes of an arrow: a shorter leg of the lap has none
MARGIN = 60.0  # px round the picture within which outlines are cut off, so that their cut edges are not seen
LONGEST_UNIT = "this size: 500 mN s"  # for the room that the key takes


@dataclass(frozen=True)
class View:
    """What part of the rig is shown, and how.

    width, height: of the picture, px. centre: what is in its middle, m. px_per_m. yaw_factor: by how much the blocks'
    yaw is drawn larger, which the picture then says. trail_s: length of trails; 0: none. has_lap: whether the planned
    lap is drawn, moving with the block. flash_s: how long a strike is shown, in model time. picked: number of a pusher
    that is ringed. type_px: size of type; None: as the picture's size asks.
    """

    width: int
    height: int
    centre: tuple[float, float]
    px_per_m: float
    yaw_factor: float = 1.0
    trail_s: float = 0.0
    has_lap: bool = True
    flash_s: float = 0.4
    picked: int | None = None
    type_px: float | None = None

    def to_px(self, x_m: Any, y_m: Any) -> tuple[Any, Any]:
        """Places of the rig in the picture: numbers or arrays."""
        return (
            self.width / 2 + (x_m - self.centre[0]) * self.px_per_m,
            self.height / 2 - (y_m - self.centre[1]) * self.px_per_m,
        )

    def to_m(self, px: Any, py: Any) -> tuple[Any, Any]:
        """Places of the picture in the rig: numbers or arrays."""
        return (
            self.centre[0] + (px - self.width / 2) / self.px_per_m,
            self.centre[1] - (py - self.height / 2) / self.px_per_m,
        )

    def points(self, places_m: Any) -> FloatArray:
        """(..., 2) places of the rig in the picture."""
        places = np.asarray(places_m, dtype=np.float64)
        return np.stack(self.to_px(places[..., 0], places[..., 1]), axis=-1)

    @property
    def letters(self) -> float:
        """Size of type, px."""
        return self.type_px or type_size(self.width, self.height)

    @property
    def strips(self) -> tuple[float, float]:
        """Heights of the strips at the top (clock, name, scale) and at the bottom (key), px."""
        return strips(self.width, self.letters)


def strips(width: float, letters: float) -> tuple[float, float]:
    """Heights of a picture's upper and lower strip, px; see `View.strips`."""
    names = [*STATE_NAMES.values(), "impact", "leaning", LONGEST_UNIT, "planned lap"]
    return 1.8 * letters, (_flow(names, width, letters)[-1][1] + 1.5) * letters


def whole(scenario: Scenario, width: int, height: int, *, type_px: float | None = None) -> View:
    """A view of the whole channel.

    Arguments:
        scenario: what is shown. width, height: of the picture, px. type_px: see `View`.
    """
    corners = np.array(channel_corners(scenario))
    low, high = corners.min(axis=0), corners.max(axis=0)
    letters = type_px or type_size(width, height)
    top, bottom = strips(width, letters)
    room = (max(width - 2 * letters, 1.0), max(height - top - bottom - 3.2 * letters, 1.0))  # the goal has its name
    scale = float(min(room / (high - low)))
    x, y = (low + high) / 2
    return View(width, height, (float(x), float(y + (top - bottom) / 2 / scale)), scale, type_px=type_px)


def aspect_of(scenario: Scenario) -> float:
    """Length of the channel over its width, both as they are drawn."""
    x, y = np.ptp(np.array(channel_corners(scenario)), axis=0)
    return float(x / y)


def scene(film: Film, t_s: float, view: View) -> list[Mark]:
    """The rig at one time, in the order in which marks are to be drawn.

    Arguments:
        film, t_s: what is shown; the time is brought into the film's span. view: how.
    """
    frame = film.frame(t_s)
    rests = film.frame(0.0).blocks
    scale = StrikeScale(large_strike_Ns(film), _large_px(film.scenario, view))
    marks = [
        *_channel(film.scenario, view),
        *(_trails(film, frame.t_s, view) if view.trail_s > 0.0 else ()),
        *(_lap(film, float(frame.blocks[0, 0] - rests[0, 0]), view) if view.has_lap else ()),
        *_blocks(film.scenario, rests, frame.blocks, view),
        *_goal(film.scenario, view),
        *_crew(film.scenario, frame, view),
        *(_strikes(film, frame, rests, scale, view) if scale.large_Ns else ()),
        *_strips(film, frame, scale, view),
    ]
    marks.sort(key=lambda mark: mark.z)
    return marks


# ---- the rig --------------------------------------------------------------------------------------------------------


def _edge(view: View) -> float:
    return max(1.0, view.letters / 11)


def _bounds(view: View) -> tuple[tuple[float, float], tuple[float, float]]:
    return (-MARGIN, -MARGIN), (view.width + MARGIN, view.height + MARGIN)


def _channel(s: Scenario, view: View) -> list[Mark]:
    marks: list[Mark] = []
    low, high = _bounds(view)
    walls = view.points(channel_corners(s))
    edge = 1.6 * _edge(view)
    for a, b in sides_of(tuple((float(x), float(y)) for x, y in walls)):
        way = np.array(b) - np.array(a)
        way *= edge / 2 / max(float(np.hypot(*way)), 1e-9)  # so that sides meet in full corners
        side = segment_within(np.array(a) - way, np.array(b) + way, low, high)
        if side is not None:
            marks.append(Line(side, INK, edge, GROUND))
    for post in post_corners(s):
        shape = within(view.points(post), low, high)
        if len(shape):
            marks.append(Polygon(shape, QUIET, INK, _edge(view), GROUND))
    return marks


def _goal(s: Scenario, view: View) -> list[Mark]:
    """Where the rear face is at the goal: a dashed line across the channel, with its name above it."""
    corners = np.array(channel_corners(s))
    low, high = corners[:, 1].min(), corners[:, 1].max()
    letters = view.letters
    x, top = view.to_px(s.block.rear_at + s.goal.travel, high)
    bottom = view.to_px(0.0, low)[1]
    if not -letters < x < view.width + letters:
        return []
    ends = np.array([(x, max(top - 0.5 * letters, 0.0)), (x, min(bottom + 0.5 * letters, view.height))])
    name = "goal of the rear face"
    half = text_width(name, 0.9 * letters) / 2
    at = min(max(x, half), max(view.width - half, half))
    return [
        *dashed(ends, 0.4 * letters, GREEN, _edge(view), BLOCK),
        Text(at, top - 0.6 * letters, name, 0.9 * letters, AXIS, "s", BLOCK),
    ]


def _blocks(s: Scenario, rests: FloatArray, now: FloatArray, view: View) -> list[Mark]:
    marks: list[Mark] = []
    low, high = _bounds(view)
    for k, block in enumerate(s.blocks):
        corners = view.points(_placed(np.array(block_corners(s, block)) - rests[k, :2], now[k], view))
        shape = within(corners, low, high)
        if not len(shape):
            continue
        marks.append(Polygon(shape, PALE, INK, _edge(view), BLOCK))
        if k == 0:  # the face that is struck
            rear = segment_within(corners[0], corners[1], low, high)
            if rear is not None:
                marks.append(Line(rear, INK, 2.4 * _edge(view), BLOCK))
    return marks


def _placed(outline: FloatArray, pose: FloatArray, view: View) -> FloatArray:
    """An outline about a block's centre of mass, (k, 2) m, where the block is drawn."""
    return _turned(outline, float(pose[2]) * view.yaw_factor) + pose[:2]


def _turned(points: FloatArray, angle: Any) -> FloatArray:
    """(..., 2) points turned about the origin, counter-clockwise, by one angle or one each."""
    c, s = np.cos(angle), np.sin(angle)
    x, y = points[..., 0], points[..., 1]
    return np.stack([c * x - s * y, s * x + c * y], axis=-1)


def _lap(film: Film, travel_m: float, view: View) -> list[Mark]:
    """The planned lap, as far from where it was planned as the block has come, with an arrow on each of its legs."""
    lap = film.plan.main_lap
    if lap is None:
        return []
    low, high = _bounds(view)
    corners = view.points(lap.hits[:, :2] + np.array([travel_m, 0.0]))
    marks: list[Mark] = []
    size = 0.55 * view.letters
    for a, b in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        leg = segment_within(a, b, low, high)
        if leg is None:
            continue
        marks.append(Line(leg, PLANNED, 1.3 * _edge(view), LAP))
        way = b - a
        length = float(np.hypot(*way))
        if length > ARROW_FROM * size:
            ahead = way / length
            aside = np.array([-ahead[1], ahead[0]])
            tip = a + ARROW_AT * way + size * ahead
            tail = tip - 2 * size * ahead
            marks.append(Polygon(np.array([tip, tail + 0.7 * size * aside, tail - 0.7 * size * aside]), PLANNED, z=LAP))
    return marks


def _trails(film: Film, t_s: float, view: View) -> list[Mark]:
    places = film.trail(t_s, view.trail_s)
    least, most, all_trails = TRAIL_POINTS
    n = min(most, max(least, all_trails // film.scenario.pushers.count))
    rows = np.unique(np.linspace(0, len(places) - 1, n).round().astype(int))
    if len(rows) < 2:
        return []
    trails = view.points(places[rows]).swapaxes(0, 1)
    width = 0.6 * _edge(view)
    low, high = trails.min(axis=1), trails.max(axis=1)
    seen = (high >= 0.0).all(axis=1) & (low[:, 0] <= view.width) & (low[:, 1] <= view.height)
    return [
        Line(trails[i], MEASURED if i == view.picked else QUIET, 2 * width if i == view.picked else width, TRAIL)
        for i in np.flatnonzero(seen)
    ]


# ---- the crew -------------------------------------------------------------------------------------------------------


def _crew(s: Scenario, frame: Frame, view: View) -> list[Mark]:
    p = s.pushers
    places = view.points(frame.pushers[:, :2])
    headings = -frame.pushers[:, 2]  # y points down in pictures
    reach = p.reach * view.px_per_m + 2 * view.letters
    seen = ((places > -reach) & (places < np.array([view.width, view.height]) + reach)).all(axis=1)
    scale = view.px_per_m
    body = (max(p.radius * scale, 1.5), p.trunk / 2 * scale, p.nose / 2 * scale)
    marks: list[Mark] = []
    for k in (UNKNOWN_STATE, *range(len(STATES))):
        chosen = np.flatnonzero(seen & (frame.states == k))
        if len(chosen):
            marks += _alike(body, k, places[chosen], headings[chosen], 0.75 * _edge(view))
    if view.picked is not None and view.picked < len(places):
        x, y = places[view.picked]
        radius = 1.25 * p.reach * view.px_per_m + 2 * _edge(view)
        marks.append(Circle(x, y, radius, None, INK, 1.6 * _edge(view), CREW))
    return marks


def _alike(
    body: tuple[float, float, float], state: int, places: FloatArray, headings: FloatArray, edge: float
) -> list[Mark]:
    """Pushers in one state: outline in the state's colour, a tick ahead, and the state's symbol where there is room.

    Arguments:
        body: radius, half the trunk and half the nose, px. state: see `Frame`. places: (k, 2) px. headings: (k,) rad,
            as they are drawn. edge: width of outlines, px.
    """
    radius, ahead, aside = body
    fill, outline, ink = _colours(state)
    marks: list[Mark]
    if ahead == aside == 0.0:
        marks = [Circle(x, y, radius, fill, outline, edge, CREW) for x, y in places.tolist()]
    else:
        shape = _rounded(ahead, aside, radius)
        shapes = _turned(shape[None], headings[:, None]) + places[:, None]
        marks = [Polygon(points, fill, outline, edge, CREW) for points in shapes]
    front = ahead + radius
    back = front - 0.5 * (radius + aside)
    ticks = _turned(np.array([[(back, 0.0), (front, 0.0)]]), headings[:, None]) + places[:, None]
    marks += [Line(tick, ink, 1.7 * edge, CREW) for tick in ticks]
    half = radius + min(ahead, aside)
    if half >= SYMBOL_FROM:
        marks += _symbols(state, places, headings, 0.4 * half, ink)
    return marks


def _colours(state: int) -> tuple[str, str, str]:
    """Fill, edge, and what is drawn inside, of a state."""
    if state == UNKNOWN_STATE:
        return PAPER, MEASURED, MEASURED
    name = STATES[state]
    return STATE_COLOURS[name], INK, PAPER if name == "idle" else INK


def _symbols(state: int, places: FloatArray, headings: FloatArray, size: float, ink: str) -> list[Mark]:
    """A mark by which states are told apart without colour: dot, ring, bar across, arrow head, cross."""
    name = STATES[state] if state != UNKNOWN_STATE else ""
    if name == "locked":
        return [Circle(x, y, 0.75 * size, PAPER, ink, 0.0, CREW) for x, y in places.tolist()]
    if name == "lost":
        return [Circle(x, y, 0.8 * size, None, ink, max(1.0, 0.22 * size), CREW) for x, y in places.tolist()]
    if name not in _OUTLINES:
        return []
    outline, follows = _OUTLINES[name]
    angles = headings if follows else np.zeros(len(headings))
    shapes = _turned(size * outline[None], angles[:, None]) + places[:, None]
    return [Polygon(shape, PAPER, z=CREW) for shape in shapes]


_ARM = np.array([(0.3, 0.3), (1.0, 0.3), (1.0, -0.3)])
_OUTLINES = {  # of the symbols, size 1, heading to the right; and whether they turn with the heading
    "ahead": (np.array([(0.9, 0.0), (-0.7, 0.9), (-0.7, -0.9)]), True),
    "held at a wall": (np.array([(0.35, -1.1), (0.35, 1.1), (-0.35, 1.1), (-0.35, -1.1)]), True),
    "idle": (
        np.vstack([_turned(_ARM, math.pi / 4 - k * math.pi / 2) for k in range(4)]),
        False,
    ),
}


def _rounded(ahead: float, aside: float, radius: float) -> FloatArray:
    """Outline of a bar about its centre with its corners rounded, heading to the right."""
    n = CORNER_POINTS[1 if radius >= ROUND_FROM else 0]
    corners = np.repeat([(ahead, aside), (-ahead, aside), (-ahead, -aside), (ahead, -aside)], n, axis=0)
    angles = np.concatenate([np.linspace(k, k + 1, n) for k in range(4)]) * math.pi / 2
    return np.asarray(corners + radius * np.column_stack([np.cos(angles), np.sin(angles)]))


# ---- strikes --------------------------------------------------------------------------------------------------------


def large_strike_Ns(film: Film) -> float:
    """The impulse that is drawn as a large strike, N s: one for impacts and leaning, so that areas can be compared.

    That of a large impact so far or of the plan's, whichever is more; more than that where leaning would be drawn too
    large. 0 where there are neither.
    """
    if film.is_point_world:  # which knows no masses
        return 0.0
    planned = film.plan.travel.strike_impulse_Ns
    strikes = film.strikes(-1.0, film.duration_s)
    impact, lean = (_large(strikes[column].to_numpy()) for column in ("impact_Ns", "lean_Ns"))
    return max(impact, lean / LEAN_ROOM, planned if math.isfinite(planned) else 0.0)


def _large(impulses_Ns: FloatArray) -> float:
    sizes = impulses_Ns[impulses_Ns > 0.0]
    if not len(sizes):
        return 0.0
    rank = min(int(LARGEST * len(sizes)), len(sizes) - 1)
    return float(np.partition(sizes, rank)[rank])


class StrikeScale(NamedTuple):
    """How large strikes are drawn: the impulse of a large one, N s, and the radius of its disc, px."""

    large_Ns: float
    large_px: float

    def radius(self, impulse_Ns: Any) -> Any:
        """Radius of a disc for an impulse, px; its area is in proportion. A square for leaning has the disc's area."""
        return self.large_px * np.sqrt(np.maximum(impulse_Ns, 0.0) / self.large_Ns)


def _large_px(s: Scenario, view: View) -> float:
    """As large as a line of the key allows, but not much larger than a pusher unless that is hardly to be seen."""
    most, least = STRIKE_SIZE * view.letters, 0.3 * view.letters
    return min(most, max(least, 1.2 * s.pushers.reach * view.px_per_m))


def _strikes(film: Film, frame: Frame, rests: FloatArray, scale: StrikeScale, view: View) -> list[Mark]:
    """Strikes of the last moments where they hit the rear face, which they stay on: impact a disc, leaning a square."""
    strikes = film.strikes(frame.t_s - view.flash_s, frame.t_s)
    if not len(strikes):
        return []
    places = view.points(_placed(_on_rear_face(film.scenario, film, strikes, rests), frame.blocks[0], view))
    ages = (frame.t_s - strikes["t_on_s"].to_numpy()) / view.flash_s
    impacts, leans = (scale.radius(strikes[column].to_numpy()) for column in ("impact_Ns", "lean_Ns"))
    marks: list[Mark] = []
    for (x, y), age, impact, lean in zip(places.tolist(), ages, impacts, leans, strict=True):
        share = 1.0 - 0.7 * math.floor(FADES * min(max(age, 0.0), 0.999)) / FADES
        marks += strike_marks(x, y, impact, lean, view.letters, share)
    return marks


def _on_rear_face(s: Scenario, film: Film, strikes: pd.DataFrame, rests: FloatArray) -> FloatArray:
    """Where strikes hit, (k, 2) m, as seen from the struck block's centre of mass with its yaw taken out."""
    corners = block_corners(s)
    t = strikes["t_on_s"].to_numpy()
    poses = np.column_stack([np.interp(t, film.times_s, film.blocks[:, 0, axis]) for axis in range(3)])
    seen = _turned(strikes[["x_m", "y_m"]].to_numpy() - poses[:, :2], -poses[:, 2])
    normal = np.array(outward_normal(corners, 0))
    away = (seen - (np.array(corners[0]) - rests[0, :2])) @ normal
    return np.asarray(seen - away[:, None] * normal)


def strike_marks(x: float, y: float, impact: float, lean: float, letters: float, share: float = 1.0) -> list[Mark]:
    """A strike at a place of the picture, by the radii of its impact and its leaning, with a share of its colour."""
    half = math.sqrt(math.pi) / 2 * lean
    marks: list[Mark] = []
    if half > 0.0:
        width = min(max(1.5, 0.14 * letters), half)
        inner = half - width / 2
        marks.append(Polygon(box((x - inner, y - inner, 2 * inner, 2 * inner)), None, faded(LEAN, share), width, FLASH))
    if impact > 0.0:
        marks.append(Circle(x, y, impact, faded(IMPACT, share), z=FLASH))
    return marks


def faded(colour: str, share: float) -> str:
    """A colour mixed with white, of which `share` is left."""
    parts = (int(colour[k : k + 2], 16) for k in (1, 3, 5))
    return "#" + "".join(f"{round(255 + share * (part - 255)):02x}" for part in parts)


# ---- what stands round the rig --------------------------------------------------------------------------------------


def _strips(film: Film, frame: Frame, scale: StrikeScale, view: View) -> list[Mark]:
    letters = view.letters
    top, bottom = view.strips
    return [
        Polygon(box((0.0, 0.0, view.width, top)), PAPER, z=STRIP),
        Polygon(box((0.0, view.height - bottom, view.width, bottom)), PAPER, z=STRIP),
        *_head(film, frame, view),
        *_key(film, frame, scale, view, view.height - bottom + 0.75 * letters),
    ]


def _head(film: Film, frame: Frame, view: View) -> list[Mark]:
    letters, middle = view.letters, view.strips[0] / 2
    clock = f"t = {frame.t_s:.{1 if film.scenario.goal.time_limit >= 20.0 else 2}f} s"
    bar = _scale_bar(view)
    marks: list[Mark] = [Text(0.6 * letters, middle, clock, letters, INK, "w", LETTERS), *bar[0]]
    left = 0.6 * letters + text_width("t = 1234.5 s", letters) + letters
    room = view.width - bar[1] - letters - left
    world = ", point world" if film.is_point_world else ""
    name = f"{film.scenario.about.name}, seed {film.seed}{world}"
    note = f"yaw x {view.yaw_factor:g}" if view.yaw_factor != 1.0 else ""
    if note:
        room -= text_width(note, letters) + letters
        at = left + max(room, 0.0) + letters
        marks.append(Text(at, middle, note, letters, PLANNED, "w", LETTERS))
    if (shown := _cut(name, room, letters)) is not None:
        marks.append(Text(left, middle, shown, letters, AXIS, "w", LETTERS))
    return marks


def _cut(text: str, room: float, letters: float) -> str | None:
    """A text, shortened to a room; None where nothing useful is left."""
    n = int(room / text_width("m", letters))
    return text if len(text) <= n else text[: n - 1].rstrip(" ,") + "…" if n >= 6 else None


def _scale_bar(view: View) -> tuple[list[Mark], float]:
    """A bar of a round length with its length, at the right of the upper strip, and the room that they take, px."""
    letters, middle = view.letters, view.strips[0] / 2
    length_m = round_number(view.width / 6 / view.px_per_m)
    text = for_people(length_m, "m")
    right, width = view.width - 0.8 * letters, length_m * view.px_per_m
    left, tick = right - width, 0.35 * letters
    points = np.array([(left, middle - tick), (left, middle), (right, middle), (right, middle - tick)]) + np.array(
        [0.0, 0.5 * tick]
    )
    edge = 1.3 * _edge(view)
    marks: list[Mark] = [Line(part, INK, edge, LETTERS) for part in (points[:2], points[1:3], points[2:])]
    marks.append(Text(left - 0.5 * letters, middle, text, letters, INK, "e", LETTERS))
    return marks, width + 1.3 * letters + text_width(text, letters)


def _key(film: Film, frame: Frame, scale: StrikeScale, view: View, top: float) -> list[Mark]:
    """What the marks mean, at the bottom."""
    letters = view.letters
    states = list(STATE_NAMES) if (frame.states != UNKNOWN_STATE).any() else []
    entries = [(STATE_NAMES[name], name) for name in states] or [("pusher", "")]
    unit_Ns = round_number(scale.large_Ns) if scale.large_Ns > 0.0 else 0.0
    if unit_Ns:
        size = f"this size: {for_people(unit_Ns, 'N s')}"
        entries += [("impact", "impact"), ("leaning", "lean"), (size, "size")]
    if view.has_lap and film.plan.main_lap is not None:
        entries.append(("planned lap", "lap"))
    marks: list[Mark] = []
    for (x, row), (text, what) in zip(_flow([text for text, _ in entries], view.width, letters), entries, strict=True):
        y, at = top + row * letters, x + 0.6 * letters
        marks.append(Text(x + (0.0 if what == "size" else 1.5 * letters), y, text, letters, INK, "w", LETTERS))
        if what in ("impact", "lean"):
            radius = float(scale.radius(unit_Ns))
            marks += strike_marks(at, y, *((radius, 0.0) if what == "impact" else (0.0, radius)), letters)
        elif what == "lap":
            marks.append(Line(np.array([(at - 0.5 * letters, y), (at + 0.6 * letters, y)]), PLANNED, 1.3 * _edge(view)))
        elif what != "size":
            state = STATES.index(what) if what else UNKNOWN_STATE
            body = (0.55 * letters, 0.0, 0.0)
            marks += _alike(body, state, np.array([(at, y)]), np.zeros(1), 0.75 * _edge(view))
    return [mark._replace(z=LETTERS) for mark in marks]


def _flow(texts: list[str], width: float, letters: float) -> list[tuple[float, float]]:
    """Where entries of a key begin: x in px, and their line in sizes of type below the first."""
    places = []
    x, row = 0.6 * letters, 0.0
    for text in texts:
        room = (1.5 if not text.startswith("this size") else 0.0) * letters + text_width(text, letters)
        if x > letters and (x + room > width or text == "impact"):  # what tells of strikes stays together
            x, row = 0.6 * letters, row + 1.5
        places.append((x, row))
        x += room + 1.0 * letters
    return places
