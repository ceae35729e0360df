"""What a film tells over time, as marks: three strip charts, and a bar over the whole run.

Both come in two parts, so that the one which stays the same from frame to frame can be kept: a ground, and what moves.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from swarmpush.dynamics.states import STATES
from swarmpush.quantities import for_people
from swarmpush.reporting.palette import AXIS, GREEN, INK, MEASURED, PALE, PLANNED, QUIET, STATE_COLOURS
from swarmpush.reporting.wording import TELLS_LITTLE
from swarmpush.viewing.film import Film, Series
from swarmpush.viewing.marks import (
    FloatArray,
    Line,
    Mark,
    Place,
    Polygon,
    Text,
    box,
    dashed,
    round_number,
    segment_within,
    text_width,
)

COLUMN = 1.5  # px: a curve has one point each
MOST_ABOVE = 2.5  # a plan's line is shown in full up to so many times what was measured
BAR_FROM = 0.4  # share of the time line's height above the bar, for what went wrong
STACK = ("locked", "lost", "held at a wall", "ahead", "idle")  # what serves the purpose lies at the bottom
WIDEST_VALUE = "48.4 mm"  # beside a panel's name
NARROW = 0.84  # of the most that a text can take: short words and numbers
GROUND, CURVE, LETTERS, CURSOR = range(4)


class _Panel(NamedTuple):
    """One strip chart: (k,) values at the series' times; what is planned per second, and a level, with names."""

    name: str
    unit: str
    values: FloatArray
    planned_per_s: float = 0.0
    planned_name: str = "plan"
    level: float = 0.0
    level_name: str = ""
    level_colour: str = GREEN


def span_s(film: Film) -> float:
    """What the axes of time cover, s: a complete film, or all that a growing one may come to."""
    return max(film.duration_s if film.is_complete else film.scenario.goal.time_limit, 1e-12)


# ---- strip charts ---------------------------------------------------------------------------------------------------


def charts(film: Film, t_s: float, place: Place, *, type_px: float | None = None) -> list[Mark]:
    """Travel of the block, pushers that lean on it and momentum that they gave it, with a cursor at a time.

    Arguments:
        film, t_s: what is shown. place: where, px. type_px: size of type; None: as the place asks.
    """
    return [*charts_ground(film, place, type_px=type_px), *charts_cursor(film, t_s, place, type_px=type_px)]


def charts_ground(film: Film, place: Place, *, type_px: float | None = None) -> list[Mark]:
    """The strip charts without their cursors."""
    letters = type_px or _letters(place)
    series = film.series()
    marks: list[Mark] = []
    for panel, part in zip(_panels(film, series), _parts(place, letters), strict=True):
        marks += _panel(film, series.t_s, panel, part, letters)
    return marks


def charts_cursor(film: Film, t_s: float, place: Place, *, type_px: float | None = None) -> list[Mark]:
    """The cursors of the strip charts, and the values there."""
    letters = type_px or _letters(place)
    series = film.series()
    marks: list[Mark] = []
    for panel, part in zip(_panels(film, series), _parts(place, letters), strict=True):
        plot = _plot(part, letters)
        t = min(max(t_s, 0.0), film.duration_s)
        value = float(np.interp(t, series.t_s, panel.values))
        x = plot[0] + t / span_s(film) * plot[2]
        marks.append(Line(np.array([(x, plot[1]), (x, plot[1] + plot[3])]), INK, _edge(letters), CURSOR))
        text = for_people(value, panel.unit) if panel.unit else f"{value:.1f}"
        marks.append(Text(part[0] + part[2], part[1] + 0.7 * letters, text, letters, MEASURED, "e", LETTERS))
    return marks


def _panels(film: Film, series: Series) -> tuple[_Panel, ...]:
    s, travel, force = film.scenario, film.plan.travel, film.plan.force
    momentum = travel.strike_impulse_Ns * travel.strike_rate_1_s  # the rate is that of the whole crew
    needed = force.pushers_to_move
    return (
        _Panel("block travel", "m", series.travel_m, travel.block_speed_m_s, "plan", s.goal.travel, "goal"),
        _Panel(
            "pushers leaning",
            "",
            series.n_leaning,
            level=needed if 0.0 < needed <= 2.0 * s.pushers.count else 0.0,
            level_name="needed",
            level_colour=PLANNED,
        ),
        _Panel("momentum", "N*s", series.impulse_Ns, momentum, "plan: impacts"),
    )


def _letters(place: Place) -> float:
    return max(11.0, min(place[3] / 9, place[2] / 64))


def _edge(letters: float) -> float:
    return max(1.0, letters / 11)


def _parts(place: Place, letters: float) -> list[Place]:
    """Places of the three panels, side by side."""
    x, y, width, height = place
    gap = 1.5 * letters
    each = (width - 2 * gap) / 3
    return [(x + k * (each + gap), y, each, height) for k in range(3)]


def _plot(part: Place, letters: float) -> Place:
    """What a panel's title above, its times below and its numbers on the left leave for the curve."""
    x, y, width, height = part
    left, top, bottom = 5.2 * letters, 1.7 * letters, 1.4 * letters
    return x + left, y + top, max(width - left, 1.0), max(height - top - bottom, 1.0)


class _Axes(NamedTuple):
    """A panel's plot: its place, the span of its times and the range of its values."""

    plot: Place
    span_s: float
    bottom: float
    top: float

    def points(self, t_s: FloatArray, values: FloatArray) -> FloatArray:
        """(k, 2) px of times and values."""
        x, y, width, height = self.plot
        rise = (values - self.bottom) / (self.top - self.bottom)
        return np.column_stack([x + t_s / self.span_s * width, y + height - rise * height])

    def level(self, value: float) -> FloatArray:
        """A line across at a value, (2, 2) px."""
        return self.points(np.array([0.0, self.span_s]), np.array([value, value]))


def _panel(film: Film, t_s: FloatArray, panel: _Panel, part: Place, letters: float) -> list[Mark]:
    axes = _Axes(_plot(part, letters), span_s(film), *_range(panel, span_s(film)))
    x, y, width, height = axes.plot
    edge, title = _edge(letters), part[1] + 0.7 * letters
    marks = [Text(part[0], title, panel.name, letters, INK, "w", LETTERS), *_scales(axes, panel.unit, letters)]
    labels = []
    if panel.planned_per_s and math.isfinite(panel.planned_per_s):
        start, end = axes.points(np.array([0.0, axes.span_s]), np.array([0.0, panel.planned_per_s * axes.span_s]))
        line = segment_within(start, end, (x, y), (x + width, y + height))
        if line is not None:
            marks += dashed(line, 0.5 * letters, PLANNED, 1.3 * edge, CURVE)
            labels.append((panel.planned_name, PLANNED))
    if 0.0 < panel.level <= axes.top:
        marks += dashed(axes.level(panel.level), 0.25 * letters, panel.level_colour, 1.3 * edge, CURVE)
        labels.append((panel.level_name, panel.level_colour))
    at = part[0] + text_width(panel.name, letters) + 0.6 * letters
    for text, colour in labels:
        room = 1.85 * letters + NARROW * text_width(text, 0.8 * letters)
        if at + room + NARROW * text_width(WIDEST_VALUE, letters) > part[0] + part[2]:
            break
        sample = np.array([(at, title), (at + 1.1 * letters, title)])
        marks += dashed(sample, 0.22 * letters, colour, 1.3 * edge, LETTERS)
        marks.append(Text(at + 1.35 * letters, title, text, 0.8 * letters, AXIS, "w", LETTERS))
        at += room
    marks.append(Line(_curve(film, t_s, panel, axes), MEASURED, 1.6 * edge, CURVE))
    marks.sort(key=lambda mark: mark.z)
    return marks


def _range(panel: _Panel, span: float) -> tuple[float, float]:
    """Least and largest value of a panel's plot."""
    measured = float(panel.values.max(initial=0.0))
    top = max(measured, panel.level if not measured or panel.level <= MOST_ABOVE * measured else 0.0)
    planned = panel.planned_per_s * span
    if math.isfinite(planned):
        top = max(top, min(planned, MOST_ABOVE * top) if top > 0.0 else planned)
    if not panel.unit:
        top = max(top, 1.0)
    top = 1.08 * top or 1.0
    return min(0.0, float(panel.values.min(initial=0.0))), top


def _scales(axes: _Axes, unit: str, letters: float) -> list[Mark]:
    """Two round numbers on either axis."""
    x, y, width, height = axes.plot
    edge, small = _edge(letters), 0.9 * letters
    marks: list[Mark] = []
    for value in (0.0, round_number(axes.top)):
        line = axes.level(value)
        marks.append(Line(line, PALE, edge, GROUND))
        text = for_people(value, unit) if unit and value else f"{value:g}"
        marks.append(Text(x - 0.4 * letters, float(line[0, 1]), text, small, AXIS, "e", LETTERS))
    last = round_number(axes.span_s)
    text, below = for_people(last, "s"), y + height + 0.3 * letters
    middle = min(x + last / axes.span_s * width, x + width - text_width(text, small) / 2)
    marks.append(Text(x, below, "0", small, AXIS, "n", LETTERS))
    marks.append(Text(middle, below, text, small, AXIS, "n", LETTERS))
    marks.append(Line(np.array([(x, y), (x, y + height)]), AXIS, edge, GROUND))
    return marks


def _curve(film: Film, t_s: FloatArray, panel: _Panel, axes: _Axes) -> FloatArray:
    """What was measured so far, one point per column; a count is averaged over each, so that none is lost."""
    shown = min(film.duration_s, axes.span_s)
    n = max(2, round(shown / axes.span_s * axes.plot[2] / COLUMN))
    if panel.unit or len(t_s) < n:
        times = np.linspace(0.0, shown, n)
        values = np.interp(times, t_s, panel.values)
    else:
        edges = np.linspace(0.0, shown, n + 1)
        times, values = (edges[1:] + edges[:-1]) / 2, _averaged(edges, t_s, panel.values)
    return axes.points(times, values)


def _averaged(edges: FloatArray, t_s: FloatArray, values: FloatArray) -> FloatArray:
    """Means of a series between edges, (k - 1,) from (k,)."""
    areas = np.concatenate([[0.0], np.cumsum(np.diff(t_s) * (values[1:] + values[:-1]) / 2)])
    return np.asarray(np.diff(np.interp(edges, t_s, areas)) / np.maximum(np.diff(edges), 1e-300))


# ---- time line ------------------------------------------------------------------------------------------------------


def timeline(film: Film, t_s: float, place: Place, *, type_px: float | None = None) -> list[Mark]:
    """A bar over the whole run: what the crew was about, strikes, what went wrong, and a cursor at a time.

    Arguments:
        film, t_s: what is shown. place: where, px; the bar takes its whole width. type_px: size of type; None: a third
            of the place's height.
    """
    return [*timeline_ground(film, place, type_px=type_px), *timeline_cursor(film, t_s, place)]


def timeline_time(film: Film, place: Place, px: float) -> float:
    """The time at an x of the time line, s, which may lie beyond a film that grows."""
    return min(max((px - place[0]) / place[2], 0.0), 1.0) * span_s(film)


def timeline_ground(film: Film, place: Place, *, type_px: float | None = None) -> list[Mark]:
    """The time line without its cursor."""
    letters = type_px or max(11.0, place[3] / 3)
    x, y, width, height = place
    bar = (x, y + BAR_FROM * height, width, (1.0 - BAR_FROM) * height)
    marks: list[Mark] = [Polygon(box(bar), PALE, z=GROUND)]
    done = min(film.duration_s / span_s(film), 1.0)
    shares = film.state_shares
    if shares is None:
        marks.append(Polygon(box((x, bar[1], max(done * width, 1.0), bar[3])), QUIET, z=GROUND))
    else:
        marks += _stack(film, shares, bar)
    times = film.strikes(-1.0, film.duration_s)["t_on_s"].to_numpy()
    columns = np.unique(np.floor(x + times / span_s(film) * width) + 0.5)
    low, tick = bar[1] + bar[3], 0.3 * bar[3]
    marks += [Line(np.array([(at, low - tick), (at, low)]), INK, _edge(letters), CURVE) for at in columns]
    return marks + _spells(film, (x, y, width, BAR_FROM * height), letters)


def timeline_cursor(film: Film, t_s: float, place: Place) -> list[Mark]:
    """The cursor of the time line."""
    x, y, width, height = place
    at = x + min(max(t_s, 0.0) / span_s(film), 1.0) * width
    size = 0.12 * height
    handle = np.array([(at - size, y), (at + size, y), (at, y + 1.5 * size)])
    edge = max(2.0, height / 24)
    return [Line(np.array([(at, y), (at, y + height)]), INK, edge, CURSOR), Polygon(handle, INK, z=CURSOR)]


def _stack(film: Film, shares: FloatArray, bar: Place) -> list[Mark]:
    """Shares of the crew by state, stacked, averaged over columns of the bar."""
    x, y, width, height = bar
    t_s, n = film.times_s, max(2, int(width / (2 * COLUMN)))
    edges = np.linspace(0.0, film.duration_s, n + 1)
    middles = x + (edges[1:] + edges[:-1]) / 2 / span_s(film) * width
    middles[[0, -1]] = x, x + film.duration_s / span_s(film) * width
    below = np.zeros(n)
    marks: list[Mark] = []
    for name in STACK:
        share = _averaged(edges, t_s, shares[:, STATES.index(name)])
        if not (share > 0.0).any():
            continue
        outline = np.vstack(
            [
                np.column_stack([middles, y + height * (1.0 - below - share)]),
                np.column_stack([middles, y + height * (1.0 - below)])[::-1],
            ]
        )
        marks.append(Polygon(outline, STATE_COLOURS[name], z=GROUND))
        below = below + share
    return marks


def _spells(film: Film, place: Place, letters: float) -> list[Mark]:
    """What went wrong: a pointer where it first did, and its name where there is room up to the next."""
    x, y, width, height = place
    spells = film.spells()
    spells = spells[~spells["cause"].isin(TELLS_LITTLE)]
    begins = x + spells["t_first_s"].to_numpy(dtype=np.float64) / span_s(film) * width
    small, size = min(0.85 * letters, 0.8 * height), 0.22 * height
    names = [str(cause).replace("_", " ") for cause in spells["cause"]]
    ends = np.append(begins, x + width)[1:].tolist()  # of each name's room
    marks: list[Mark] = []
    for at, following, name in zip(begins.tolist(), ends, names, strict=True):
        low = y + height
        pointer = np.array([(at, low), (at - size, low - 1.6 * size), (at + size, low - 1.6 * size)])
        marks.append(Polygon(pointer, PLANNED, z=CURVE))
        if at + 2.5 * size + text_width(name, small) <= following:
            marks.append(Text(at + 1.5 * size, y + height / 2, name, small, AXIS, "w", LETTERS))
    return marks
