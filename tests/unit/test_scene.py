"""Pictures of the rig: everything is where it should be, and nothing hides anything."""

from __future__ import annotations

import math
import subprocess
import sys
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from shapely import LineString, Polygon, box

from swarmpush.demos import DEMOS, demo
from swarmpush.dynamics.states import STATES
from swarmpush.geometry import block_corners, channel_corners, outward_normal
from swarmpush.kinematics.planning import plan
from swarmpush.loading import load
from swarmpush.reporting.palette import MEASURED, PALE, PAPER, PLANNED, QUIET, STATE_COLOURS
from swarmpush.viewing import marks as m
from swarmpush.viewing import scene as sc
from swarmpush.viewing.film import Film, Frame, LiveFilm, point_film, record
from swarmpush.viewing.scene import View, scene, whole

pygame = pytest.importorskip("pygame")

from swarmpush.viewing.surface import paint, text_size  # noqa: E402

ROUNDING = 1e-6  # px: places go through metres and back
SIZES = ((1024, 640), (3840, 2160), (800, 300))


@cache
def film_of(name: str, seconds: float = 30.0) -> Film:
    s = load(demo(name)).replace(goal={"time_limit": seconds})
    return record(s, 3, plan(s, n_starts=50))


@pytest.fixture(scope="module")
def film() -> Film:
    return film_of("service_passage")


@pytest.fixture(scope="module")
def view(film: Film) -> View:
    return whole(film.scenario, 1024, 640)


def strike_time(film: Film) -> float:
    """Shortly after the hardest impact of the film."""
    strikes = film.strikes(-1.0, film.duration_s)
    return float(strikes["t_on_s"].to_numpy()[strikes["impact_Ns"].to_numpy().argmax()]) + 0.02


def texts(marks: list[m.Mark]) -> list[str]:
    return [mark.text for mark in marks if isinstance(mark, m.Text)]


def picture(marks: list[m.Mark], view: View) -> pygame.Surface:
    surface = pygame.Surface((view.width, view.height), 0, 32)
    surface.fill(PAPER)
    paint(surface, marks, size=(view.width, view.height))
    return surface


def colour_at(surface: pygame.Surface, x: float, y: float) -> str:
    return "#{:02x}{:02x}{:02x}".format(*surface.get_at((int(x), int(y)))[:3])


def test_pictures_are_made_without_a_window_or_a_plotting_library() -> None:
    """What is drawn is worked out without the packages that draw it."""
    code = (
        "import sys, swarmpush.viewing.scene, swarmpush.viewing.charts, swarmpush.viewing.sheet\n"
        "print([name for name in ('pygame', 'matplotlib') if name in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_places_there_and_back(view: View) -> None:
    """y points up in the rig and down in the picture; the way back is the inverse."""
    x, y = view.to_px(*view.centre)
    assert (x, y) == (view.width / 2, view.height / 2)
    assert view.to_px(view.centre[0] + 0.1, view.centre[1] + 0.1)[1] == pytest.approx(y - 0.1 * view.px_per_m)
    back = view.to_m(*view.to_px(np.array([0.3, 1.7]), np.array([0.0, 0.2])))
    np.testing.assert_allclose(back, [[0.3, 1.7], [0.0, 0.2]], atol=1e-12)  # m: rounding


@pytest.mark.parametrize("size", SIZES)
@pytest.mark.parametrize("name", DEMOS)
def test_the_whole_channel_is_seen(name: str, size: tuple[int, int]) -> None:
    """All corners lie between the strips, and the channel is as large as that allows."""
    s = load(demo(name))
    shown = whole(s, *size)
    corners = shown.points(channel_corners(s))
    top, bottom = shown.strips
    assert corners[:, 0].min() >= 0.0
    assert corners[:, 0].max() <= size[0]
    assert corners[:, 1].min() >= top
    assert corners[:, 1].max() <= size[1] - bottom
    taken = np.ptp(corners, axis=0) / (size[0], size[1] - top - bottom)
    assert taken.max() > 0.6


@pytest.mark.parametrize("size", SIZES)
@pytest.mark.parametrize("name", DEMOS)
def test_no_text_lies_on_another(name: str, size: tuple[int, int]) -> None:
    """Clock, name, yaw, scale, key and goal have places of their own, as wide as their letters really are."""
    film = film_of(name)
    shown = replace(whole(film.scenario, *size), yaw_factor=5.0)
    boxes = []
    for mark in scene(film, strike_time(film), shown):
        if isinstance(mark, m.Text):
            width, height = text_size(mark.text, mark.size)
            x = mark.x - (width if "e" in mark.anchor else 0 if "w" in mark.anchor else width / 2)
            y = mark.y - (height if "s" in mark.anchor else 0 if "n" in mark.anchor else height / 2)
            boxes.append((mark.text, box(x, y, x + width, y + height)))
    assert len(boxes) >= 10
    sheet = box(0, 0, *size)
    for k, (text, one) in enumerate(boxes):
        assert sheet.buffer(1.0).contains(one), text  # px: half a letter's margin is empty
        for other_text, other in boxes[:k]:
            assert one.intersection(other).area == 0.0, (text, other_text)


def test_pushers_are_where_the_film_has_them(film: Film, view: View) -> None:
    """Each in the colour of its state, with a tick to its front."""
    t = 12.34
    frame = film.frame(t)
    marks = scene(film, t, view)
    places = view.points(frame.pushers[:, :2])
    radius = film.scenario.pushers.radius * view.px_per_m
    discs = {(round(c.x, 3), round(c.y, 3)): c for c in marks if isinstance(c, m.Circle) and c.radius == radius}
    for (x, y), heading, state in zip(places, frame.pushers[:, 2], frame.states, strict=True):
        assert discs[(round(x, 3), round(y, 3))].fill == STATE_COLOURS[STATES[state]]
        tip = np.array([x + radius * math.cos(heading), y - radius * math.sin(heading)])
        ticks = [line for line in marks if isinstance(line, m.Line) and line.z == sc.CREW]
        assert min(np.hypot(*(line.points[-1] - tip)) for line in ticks) < ROUNDING


def test_states_differ_in_more_than_colour(film: Film) -> None:
    """Each state has a symbol of its own where pushers are large enough for one."""
    near = View(1024, 640, (1.0, 0.16), 1500.0)
    frame = film.frame(5.0)
    shapes = set()
    for state in (-1, *range(len(STATES))):
        one = Frame(0.0, frame.blocks, np.array([[1.0, 0.16, 0.3]]), np.array([state]))
        parts = sc._crew(film.scenario, one, near)
        shapes.add(
            tuple(
                (type(mark).__name__, len(mark.points) if hasattr(mark, "points") else round(mark.radius, 3))
                + ((mark.fill is None,) if isinstance(mark, m.Circle) else ())
                for mark in parts
            )
        )
    assert len(shapes) == len(STATES) + 1


def test_a_growing_film_does_not_tell_states() -> None:
    """Before a run is over its pushers are blank, and the key has no states."""
    s = load(demo("service_passage")).replace(goal={"time_limit": 20.0})
    live = LiveFilm(s, 3, plan(s, n_starts=20))
    live.advance(4.0)
    shown = whole(s, 1024, 640)
    marks = scene(live, 4.0, shown)
    discs = [c for c in marks if isinstance(c, m.Circle) and c.z == sc.CREW]
    assert len(discs) == s.pushers.count
    assert {(c.fill, c.edge) for c in discs} == {(PAPER, MEASURED)}
    assert "pusher" in texts(marks)
    assert not set(sc.STATE_NAMES.values()) & set(texts(marks))


def test_bars_are_drawn_as_bars() -> None:
    """The outline of a bar is as long and as wide as the scenario says."""
    film = film_of("bristle_tray")
    p = film.scenario.pushers
    shown = whole(film.scenario, 1024, 640)
    bars = [q for q in scene(film, 0.0, shown) if isinstance(q, m.Polygon) and q.z == sc.CREW and len(q.points) == 24]
    assert len(bars) == p.count
    for bar, (x, y, heading) in zip(bars, film.frame(0.0).pushers, strict=False):
        away = (np.stack(shown.to_m(*bar.points.T), axis=1) - (x, y)) @ [
            [math.cos(heading), -math.sin(heading)],
            [math.sin(heading), math.cos(heading)],
        ]
        np.testing.assert_allclose(np.ptp(away, axis=0), [p.trunk + 2 * p.radius, p.nose + 2 * p.radius], rtol=1e-9)
        np.testing.assert_allclose(away.max(axis=0) + away.min(axis=0), 0.0, atol=1e-12)  # m: rounding


@pytest.mark.parametrize("factor", [1.0, 5.0])
def test_the_block_turns_about_its_centre_of_mass(factor: float) -> None:
    """With its yaw as large as the view says; only then does the picture say so."""
    film = film_of("bristle_tray")
    shown = replace(whole(film.scenario, 1024, 640), yaw_factor=factor)
    t = film.duration_s
    rests, now = film.frame(0.0).blocks, film.frame(t).blocks
    assert abs(now[0, 2]) > 0.01  # rad: it did turn
    marks = scene(film, t, shown)
    drawn = [mark for mark in marks if isinstance(mark, m.Polygon) and mark.fill == PALE]
    assert len(drawn) == len(film.scenario.blocks) == 2
    for k, block in enumerate(film.scenario.blocks):
        about = np.array(block_corners(film.scenario, block)) - rests[k, :2]
        c, s = math.cos(factor * now[k, 2]), math.sin(factor * now[k, 2])
        wanted = shown.points(about @ np.array([[c, s], [-s, c]]) + now[k, :2])
        np.testing.assert_allclose(drawn[k].points, wanted, atol=ROUNDING)
    assert ("yaw x 5" in texts(marks)) == (factor == 5.0)


def test_the_planned_lap_moves_with_the_block(film: Film, view: View) -> None:
    """Its corners are those of the plan, as far ahead as the block has come; it can be left out."""
    t = film.duration_s
    travel = film.series().travel_m[-1]
    assert travel > 1e-3  # m: it did move
    lap = film.plan.main_lap
    assert lap is not None
    marks = scene(film, t, view)
    legs = [mark for mark in marks if isinstance(mark, m.Line) and mark.z == sc.LAP]
    wanted = view.points(lap.hits[:, :2] + [travel, 0.0])
    np.testing.assert_allclose([leg.points[0] for leg in legs], wanted, atol=ROUNDING)
    assert {leg.colour for leg in legs} == {PLANNED}
    without = scene(film, t, replace(view, has_lap=False))
    assert not [mark for mark in without if mark.z == sc.LAP]
    assert "planned lap" in texts(marks)
    assert "planned lap" not in texts(without)


def test_a_strike_is_seen_on_the_rear_face(film: Film, view: View) -> None:
    """Impact is a disc and leaning a square, at the pusher's place carried to the face; both are gone after a while."""
    t = strike_time(film)
    strike = film.strikes(t - 0.03, t).iloc[-1]
    marks = [mark for mark in scene(film, t, view) if mark.z == sc.FLASH]
    discs = [mark for mark in marks if isinstance(mark, m.Circle)]
    squares = [mark for mark in marks if isinstance(mark, m.Polygon)]
    pose = film.frame(float(strike["t_on_s"])).blocks[0]
    normal = np.array(outward_normal(block_corners(film.scenario), 0))
    c, s = math.cos(pose[2]), math.sin(pose[2])
    normal = np.array([c * normal[0] - s * normal[1], s * normal[0] + c * normal[1]])
    face = np.array([strike["x_m"], strike["y_m"]]) - film.scenario.pushers.radius * normal
    wanted = view.points(face)
    away = [np.hypot(disc.x - wanted[0], disc.y - wanted[1]) for disc in discs]
    assert min(away) < 1.0  # px: contacts sink in a little, and the block moves on
    centre = squares[int(np.argmin(away))].points.mean(axis=0)
    assert np.hypot(*(centre - wanted)) < 1.0
    painted = picture(scene(film, t, view), view)
    assert colour_at(painted, *wanted) == sc.faded(sc.IMPACT, 1.0).lower()
    later = film.strikes(t, film.duration_s)["t_on_s"]
    quiet = t + view.flash_s + 0.01
    if not ((later > t) & (later <= quiet)).any():
        assert not [mark for mark in scene(film, quiet, view) if mark.z == sc.FLASH]


def test_areas_of_strikes_are_in_proportion(film: Film, view: View) -> None:
    """Twice the impulse has twice the area, disc and square alike; the key's unit is drawn as large as it says."""
    scale = sc.StrikeScale(sc.large_strike_Ns(film), 10.0)
    assert scale.radius(2e-3) ** 2 == pytest.approx(2 * scale.radius(1e-3) ** 2)
    disc, square = sc.strike_marks(0.0, 0.0, 8.0, 8.0, 16.0)[::-1]
    outer = np.ptp(square.points, axis=0) + square.width  # its edge is drawn astride the points
    assert outer[0] * outer[1] == pytest.approx(math.pi * disc.radius**2)
    marks = scene(film, 0.0, view)
    said = next(text for text in texts(marks) if text.startswith("this size: "))
    number, prefixed = said.removeprefix("this size: ").split(" ", 1)
    unit = float(number) * {"mN s": 1e-3, "N s": 1.0, "µN s": 1e-6}[prefixed]
    key = [mark for mark in marks if isinstance(mark, m.Circle) and mark.fill == sc.faded(sc.IMPACT, 1.0)]
    large = sc.STRIKE_SIZE * view.letters
    assert key[0].radius == pytest.approx(large * math.sqrt(unit / sc.large_strike_Ns(film)))
    digit = unit / 10 ** math.floor(math.log10(unit) + 1e-9)
    assert min(abs(digit - d) for d in (1, 2, 5)) < 1e-9


@pytest.mark.parametrize("zoom", [1.0, 3.7, 40.0])
def test_the_scale_bar_is_as_long_as_it_says(film: Film, view: View, zoom: float) -> None:
    """A round length with its unit, drawn to scale, in ink."""
    near = replace(view, px_per_m=zoom * view.px_per_m)
    marks = scene(film, 0.0, near)
    said = next(text for text in texts(marks) if text.endswith("m") and text[0].isdigit())
    number, unit = said.split(" ")
    length = float(number) * {"m": 1.0, "mm": 1e-3, "µm": 1e-6}[unit]
    bars = [mark for mark in marks if isinstance(mark, m.Line) and mark.z == sc.LETTERS and mark.points[0, 1] < 50]
    bar = max(bars, key=lambda line: np.ptp(line.points[:, 0]))
    assert np.ptp(bar.points[:, 0]) == pytest.approx(length * near.px_per_m)
    assert near.width / 20 < np.ptp(bar.points[:, 0]) <= near.width / 6
    painted = picture(marks, near)
    assert colour_at(painted, *bar.points.mean(axis=0)) == sc.INK


@pytest.mark.parametrize("name", DEMOS)
def test_what_is_outside_is_cut_off(name: str) -> None:
    """However near, no mark of walls, posts, blocks and lap has places far from the picture."""
    film = film_of(name)
    for zoom in (5.0, 1e4):
        shown = whole(film.scenario, 1024, 640)
        near = replace(shown, px_per_m=zoom * shown.px_per_m, centre=tuple(film.frame(0.0).blocks[0, :2]))
        limit = sc.MARGIN + 30 * near.letters
        for mark in scene(film, film.duration_s, near):
            if isinstance(mark, m.Line | m.Polygon) and mark.z <= sc.BLOCK:
                assert np.abs(mark.points - [near.width / 2, near.height / 2]).max() < near.width / 2 + limit


def test_trails_end_at_the_pushers(film: Film, view: View) -> None:
    """And begin where they were so many seconds ago."""
    t, seconds = 20.0, 5.0
    marks = scene(film, t, replace(view, trail_s=seconds, picked=2))
    trails = [mark for mark in marks if isinstance(mark, m.Line) and mark.z == sc.TRAIL]
    assert len(trails) == film.scenario.pushers.count
    step = film.scenario.pushers.free_speed * np.diff(film.times_s).max() * view.px_per_m * 1.5
    for k, at in ((0, t - seconds), (-1, t)):
        wanted = view.points(film.frame(at).pushers[:, :2])
        np.testing.assert_allclose([line.points[k] for line in trails], wanted, atol=step)
    assert [line.colour == MEASURED for line in trails] == [i == 2 for i in range(len(trails))]
    assert {line.colour for line in trails} == {MEASURED, QUIET}
    ring = [mark for mark in marks if isinstance(mark, m.Circle) and mark.fill is None and mark.edge == sc.INK]
    place = view.points(film.frame(t).pushers[2, :2])
    assert any(np.hypot(c.x - place[0], c.y - place[1]) < ROUNDING for c in ring)


def test_the_point_world_says_so(film: Film, view: View) -> None:
    """Its pictures have the same rig, no strikes, and its name."""
    points = point_film(film.scenario, 3, film.plan)
    marks = scene(points, 3.0, view)
    assert any("point world" in text for text in texts(marks))
    assert "t = 3.0 s" in texts(marks)
    assert "impact" not in texts(marks)
    assert not [mark for mark in marks if mark.z == sc.FLASH]


def test_outlines_are_cut_as_geometry_says() -> None:
    """Areas and lengths of what is left are those of a geometry library."""
    rng = np.random.default_rng(4)
    frame = box(0.0, 0.0, 10.0, 6.0)
    for _ in range(200):
        ring = np.sort(rng.uniform(0.0, 2 * math.pi, 7))
        shape = rng.uniform(-2, 12, 2) + rng.uniform(1, 8, 2) * np.column_stack([np.cos(ring), np.sin(ring)])  # convex
        cut = m.within(shape, (0.0, 0.0), (10.0, 6.0))
        area = Polygon(cut).area if len(cut) >= 3 else 0.0
        assert area == pytest.approx(Polygon(shape).intersection(frame).area, abs=1e-9)
        a, b = rng.uniform(-5, 15, (2, 2))
        part = m.segment_within(a, b, (0.0, 0.0), (10.0, 6.0))
        length = 0.0 if part is None else float(np.hypot(*(part[1] - part[0])))
        assert length == pytest.approx(LineString([a, b]).intersection(frame).length, abs=1e-9)


def test_round_numbers() -> None:
    """Powers of ten are themselves, however their logarithm is rounded."""
    for power in range(-15, 16):
        for digit in (1, 2, 5):
            value = float(f"{digit}e{power}")
            assert m.round_number(value) == value
            assert m.round_number(1.9 * value) == value


def test_dashes_share_a_line() -> None:
    """They begin at its beginning, do not leave it, and cover half of it."""
    dashes = m.dashed(np.array([(0.0, 0.0), (30.0, 40.0)]), 5.0, PLANNED, 1.0, 0)
    ends = np.array([dash.points for dash in dashes])
    np.testing.assert_allclose(ends[0], [(0.0, 0.0), (3.0, 4.0)])
    assert np.hypot(*(ends[:, 1] - ends[:, 0]).T).sum() == pytest.approx(25.0)
    np.testing.assert_allclose(ends[..., 0] * 40.0, ends[..., 1] * 30.0)
    assert m.dashed(np.zeros((2, 2)), 5.0, PLANNED, 1.0, 0) == []


def test_discs_cover_what_they_should() -> None:
    """The cover of a painted disc adds up to its area, wherever in a pixel its centre lies."""
    for x, y, radius in ((50.0, 50.0, 7.0), (50.25, 49.5, 7.25), (40.75, 61.0, 20.5)):
        surface = pygame.Surface((100, 110), 0, 32)
        surface.fill("#000000")
        paint(surface, [m.Circle(x, y, radius, "#ffffff")])
        cover = pygame.surfarray.array_red(surface) / 255.0
        assert cover.sum() == pytest.approx(math.pi * radius**2, rel=0.01)  # the edge's bend within a pixel
        middle = [(cover.sum(axis=1 - k) * (np.arange(cover.shape[k]) + 0.5)).sum() / cover.sum() for k in range(2)]
        np.testing.assert_allclose(middle, [x, y], atol=0.02)  # px: levels are rounded to 256


def test_nothing_is_painted_beyond_a_pictures_size() -> None:
    """A picture beside another keeps to its place."""
    surface = pygame.Surface((60, 40), 0, 32)
    surface.fill(PAPER)
    paint(surface, [m.Polygon(m.box((-50.0, -50.0, 200.0, 200.0)), "#000000")], (10, 5), (20, 10))
    dark = pygame.surfarray.array_red(surface) == 0
    assert dark.sum() == 20 * 10
    assert dark[10:30, 5:15].all()
