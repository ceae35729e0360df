"""Strip charts and the time line of films."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.dynamics.states import STATES
from swarmpush.kinematics.planning import plan
from swarmpush.loading import load
from swarmpush.quantities import for_people
from swarmpush.reporting.palette import GREEN, INK, MEASURED, PAPER, PLANNED, QUIET, STATE_COLOURS
from swarmpush.viewing import charts as ch
from swarmpush.viewing.film import Film, LiveFilm, record
from swarmpush.viewing.marks import Line, Mark, Polygon, Text
from swarmpush.viewing.sheet import sheet

pygame = pytest.importorskip("pygame")

from swarmpush.viewing.surface import paint, text_size  # noqa: E402

PLACE = (20.0, 10.0, 1000.0, 200.0)
BAR = (12.0, 5.0, 900.0, 50.0)


@pytest.fixture(scope="module")
def film() -> Film:
    s = load(demo("bristle_tray")).replace(goal={"time_limit": 60.0})
    return record(s, 1, plan(s, n_starts=50))


@pytest.fixture(scope="module")
def passage() -> Film:
    s = load(demo("service_passage")).replace(goal={"time_limit": 60.0})
    return record(s, 3, plan(s, n_starts=50))


def curves(marks: list[Mark]) -> list[Line]:
    return [mark for mark in marks if isinstance(mark, Line) and mark.colour == MEASURED]


def dashes(marks: list[Mark], colour: str, part: ch.Place) -> np.ndarray:
    """All points of dashes of a colour in a panel's plot."""
    x, y, width, height = ch._plot(part, 16.0)
    points = [mark.points for mark in marks if isinstance(mark, Line) and mark.colour == colour and mark.z == ch.CURVE]
    found = np.vstack([np.zeros((0, 2)), *points])
    inside = (found[:, 0] >= x - 1) & (found[:, 0] <= x + width + 1)
    return found[inside & (found[:, 1] >= y - 1) & (found[:, 1] <= y + height + 1)]


def test_curves_end_where_the_run_does(passage: Film) -> None:
    """The last point of travel is at the run's travel on the scale that the ticks give, and at its end."""
    marks = ch.charts_ground(passage, PLACE, type_px=16.0)
    travel, _, momentum = curves(marks)
    part = ch._parts(PLACE, 16.0)[0]
    x, y, width, height = ch._plot(part, 16.0)
    ticks = {mark.text: mark.y for mark in marks if isinstance(mark, Text) and mark.anchor == "e" and mark.x < x}
    (zero,) = (at for text, at in ticks.items() if text == "0")
    (top,) = (text for text in ticks if text != "0")
    number, unit = top.split(" ")
    per_px = float(number) * {"mm": 1e-3, "m": 1.0}[unit] / (zero - ticks[top])
    assert travel.points[-1, 0] == pytest.approx(x + width)
    assert (zero - travel.points[-1, 1]) * per_px == pytest.approx(float(passage.series().travel_m[-1]))
    assert (np.diff(momentum.points[:, 0]) > 0.0).all()
    for points in (travel.points, momentum.points):
        assert points[:, 1].min() >= y - 1e-9
        assert points[:, 1].max() <= y + height + 1e-9


def test_the_plans_lines(passage: Film) -> None:
    """Travel at the planned speed, and momentum of the planned impacts, where the measured curves have their scale."""
    marks = ch.charts_ground(passage, PLACE, type_px=16.0)
    series, travel = passage.series(), passage.plan.travel
    rates = (travel.block_speed_m_s, None, travel.strike_impulse_Ns * travel.strike_rate_1_s)
    measured = (series.travel_m, None, series.impulse_Ns)
    for part, curve, rate, values in zip(ch._parts(PLACE, 16.0), curves(marks), rates, measured, strict=True):
        if rate is None or values is None:
            continue
        x, y, width, height = ch._plot(part, 16.0)
        per_px = float(values[-1]) / (y + height - curve.points[-1, 1])
        line = dashes(marks, PLANNED, part)
        t_s = (line[:, 0] - x) / width * passage.duration_s
        np.testing.assert_allclose((y + height - line[:, 1]) * per_px, rate * t_s, atol=1e-6 * float(values[-1]))
        assert np.ptp(t_s) > 0.3 * passage.duration_s


def test_a_goal_in_sight_is_drawn(film: Film, passage: Film) -> None:
    """But one far above what was reached would make the curve flat."""
    part = ch._parts(PLACE, 16.0)[0]
    assert film.series().travel_m[-1] > film.scenario.goal.travel / ch.MOST_ABOVE
    assert len(dashes(ch.charts_ground(film, PLACE, type_px=16.0), GREEN, part)) > 10
    assert passage.series().travel_m[-1] < passage.scenario.goal.travel / ch.MOST_ABOVE
    assert not len(dashes(ch.charts_ground(passage, PLACE, type_px=16.0), GREEN, part))


def test_a_plan_without_end_has_no_line(passage: Film) -> None:
    """A forecast that is infinite, as of a block that slides by itself, is left out."""
    endless = replace(passage.plan.travel, block_speed_m_s=math.inf)
    other = Film(
        passage.scenario, 3, replace(passage.plan, travel=endless), passage.times_s, passage.blocks, passage.pushers,
        passage.impulses_Ns, passage.run,
    )  # fmt: skip
    marks = ch.charts_ground(other, PLACE, type_px=16.0)
    assert not len(dashes(marks, PLANNED, ch._parts(PLACE, 16.0)[0]))
    assert all(np.isfinite(mark.points).all() for mark in marks if isinstance(mark, Line))


def test_cursors_say_the_value(passage: Film) -> None:
    """Each panel has a cursor at the time, and the value there in words."""
    t = 23.4
    marks = ch.charts_cursor(passage, t, PLACE, type_px=16.0)
    for part, line in zip(ch._parts(PLACE, 16.0), [k for k in marks if isinstance(k, Line)], strict=True):
        x, _, width, _ = ch._plot(part, 16.0)
        np.testing.assert_allclose(line.points[:, 0], x + t / passage.duration_s * width)
    said = [mark.text for mark in marks if isinstance(mark, Text)]
    moved = float(passage.frame(t).blocks[0, 0] - passage.blocks[0, 0, 0])
    assert said[0] == for_people(moved, "m")


def test_short_counts_are_not_lost() -> None:
    """Means over columns keep the area under a count, however short it lasts."""
    t = np.linspace(0.0, 10.0, 1001)
    values = np.where(np.abs(t - 3.21) < 0.015, 4.0, 0.0)
    edges = np.linspace(0.0, 10.0, 41)
    means = ch._averaged(edges, t, values)
    assert (means * np.diff(edges)).sum() == pytest.approx(np.trapezoid(values, t))
    assert means.max() > 0.0


@pytest.mark.parametrize("size", [(1024, 640), (1100, 620), (1280, 720), (3840, 2160), (800, 300), (640, 480)])
def test_every_line_is_named(film: Film, passage: Film, size: tuple[int, int]) -> None:
    """In pictures of all sizes the panels' titles have room for what their dashes mean."""
    for shown, wanted in ((film, {"plan", "goal", "needed"}), (passage, {"plan", "needed", "plan: impacts"})):
        parts = sheet(shown.scenario, size)
        marks = parts.ground(shown).marks
        assert wanted <= {mark.text for mark in marks if isinstance(mark, Text)}


@pytest.mark.parametrize("size", [(1000.0, 180.0), (780.0, 90.0), (3800.0, 700.0)])
def test_no_text_of_the_charts_lies_on_another(film: Film, passage: Film, size: tuple[float, float]) -> None:
    """Names, values and ticks, with their real widths."""
    for shown in (film, passage):
        letters = max(12.0, min(size[1] / 9, size[0] / 64))
        boxes = []
        for mark in ch.charts(shown, 0.7 * shown.duration_s, (0.0, 0.0, *size), type_px=letters):
            if isinstance(mark, Text):
                width, height = text_size(mark.text, mark.size)
                x = mark.x - (width if "e" in mark.anchor else 0 if "w" in mark.anchor else width / 2)
                y = mark.y - (0 if "n" in mark.anchor else height / 2)
                boxes.append((mark.text, x, y, x + width, y + 0.8 * height))  # what hangs below the line is little
        for k, (text, *a) in enumerate(boxes):
            for other, *b in boxes[:k]:
                apart = a[0] >= b[2] or b[0] >= a[2] or a[1] >= b[3] or b[1] >= a[3]
                assert apart, (text, other)


def test_time_line_and_pointer_agree(film: Film) -> None:
    """The time under the cursor is the time shown; beyond the ends it is the end's."""
    for t in (0.0, 13.7, film.duration_s):
        cursor = next(mark for mark in ch.timeline_cursor(film, t, BAR) if isinstance(mark, Line))
        assert ch.timeline_time(film, BAR, float(cursor.points[0, 0])) == pytest.approx(t)
    assert ch.timeline_time(film, BAR, -100.0) == 0.0
    assert ch.timeline_time(film, BAR, 5000.0) == film.duration_s


def test_a_growing_film_leaves_room_for_its_rest() -> None:
    """Its axes go to the time limit, its bar is filled as far as it has come."""
    s = load(demo("service_passage")).replace(goal={"time_limit": 40.0})
    live = LiveFilm(s, 3, plan(s, n_starts=20))
    live.advance(10.0)
    assert ch.span_s(live) == 40.0
    filled = next(mark for mark in ch.timeline_ground(live, BAR) if isinstance(mark, Polygon) and mark.fill == QUIET)
    assert np.ptp(filled.points[:, 0]) == pytest.approx(BAR[2] * live.duration_s / 40.0)
    travel = curves(ch.charts_ground(live, PLACE))[0]
    x, _, width, _ = ch._plot(ch._parts(PLACE, ch._letters(PLACE))[0], ch._letters(PLACE))
    assert travel.points[-1, 0] == pytest.approx(x + width * live.duration_s / 40.0)


def test_states_are_stacked_as_shares(film: Film) -> None:
    """At many times the painted bar shows each state over its share of the height."""
    surface = pygame.Surface((950, 60), 0, 32)
    surface.fill(PAPER)
    paint(
        surface, [mark for mark in ch.timeline_ground(film, BAR) if isinstance(mark, Polygon) and mark.z == ch.GROUND]
    )
    pixels = pygame.surfarray.array3d(surface)
    shares = film.state_shares
    assert shares is not None
    top, height = BAR[1] + ch.BAR_FROM * BAR[3], (1.0 - ch.BAR_FROM) * BAR[3]
    seen = set()
    for t in np.linspace(2.0, film.duration_s - 2.0, 25):
        row = int(np.searchsorted(film.times_s, t))
        near = shares[max(0, row - 60) : row + 60]
        if np.ptp(near, axis=0).max() > 0.0:
            continue  # the bar is a mean there
        x = int(BAR[0] + t / film.duration_s * BAR[2])
        column = pixels[x, int(top) : int(top + height)]
        for k, name in enumerate(STATES):
            colour = [int(STATE_COLOURS[name][c : c + 2], 16) for c in (1, 3, 5)]
            share = (column == colour).all(axis=1).mean()
            assert share == pytest.approx(near[0, k], abs=0.08)  # edges of a pixel or two out of thirty
            seen |= {name} if share > 0.0 else set()
    assert len(seen) >= 2


def test_strikes_are_ticks_at_their_times(passage: Film) -> None:
    """One for each strike that has a pixel of its own."""
    marks = ch.timeline_ground(passage, BAR)
    ticks = [mark for mark in marks if isinstance(mark, Line) and mark.colour == INK]
    times = passage.strikes(-1.0, passage.duration_s)["t_on_s"].to_numpy()
    places = BAR[0] + times / passage.duration_s * BAR[2]
    assert 0 < len(ticks) <= len(times)
    at = np.array([tick.points[0, 0] for tick in ticks])
    assert all(np.abs(at - place).min() <= 0.5 for place in places)
    assert all(np.abs(places - one).min() <= 0.5 for one in at)


def test_what_went_wrong_is_named(film: Film) -> None:
    """A pointer where each failure begins; a name only where it has room; what tells little is left out."""

    class Told(Film):
        def spells(self) -> pd.DataFrame:
            return pd.DataFrame(
                [
                    ("in_no_lap", 0.0, 1.0),
                    ("held_at_wall", 5.0, 9.0),
                    ("halted", 5.2, 6.0),
                    ("dropped_out", 40.0, 41.0),
                ],
                columns=["cause", "t_first_s", "t_last_s"],
            )

    told = Told(film.scenario, 1, film.plan, film.times_s, film.blocks, film.pushers, film.impulses_Ns, film.run)
    marks = ch.timeline_ground(told, BAR)
    pointers = [mark for mark in marks if isinstance(mark, Polygon) and mark.z == ch.CURVE]
    tips = [ch.timeline_time(told, BAR, float(mark.points[0, 0])) for mark in pointers]
    np.testing.assert_allclose(tips, [5.0, 5.2, 40.0])
    assert [mark.text for mark in marks if isinstance(mark, Text)] == ["halted", "dropped out"]
