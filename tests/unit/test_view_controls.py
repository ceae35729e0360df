"""The window's state machine: what each key and each move of the pointer leads to."""

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

import swarmpush
from swarmpush.viewing import controls as state
from swarmpush.viewing.commands import BINDINGS, BY_KEY, Command
from swarmpush.viewing.controls import (
    Close,
    Controls,
    KeyDown,
    PointerDown,
    PointerMove,
    PointerUp,
    Restart,
    SavePicture,
    Wheel,
    handle,
    view_of,
)
from swarmpush.viewing.film import LiveFilm
from swarmpush.viewing.layout import lay_out
from swarmpush.viewing.parameters import parameters, stepped

LAYOUT = lay_out(1280, 720)
ROUNDING_PX = 1e-6  # of arithmetic with numbers of some thousand pixels


@pytest.fixture(scope="module")
def scenario():
    return swarmpush.load(swarmpush.demo("service_passage")).replace(goal={"time_limit": 60.0})


@pytest.fixture(scope="module")
def film(scenario):
    """A complete run."""
    film = LiveFilm(scenario, 3)
    film.finish()
    return film


@pytest.fixture
def growing(scenario, film):
    """A run that has got as far as 20 s."""
    growing = LiveFilm(scenario, 3, film.plan)
    growing.advance(20.0)
    return growing


def press(controls, key, film, layout=LAYOUT):
    return handle(controls, KeyDown(key), film, layout)


def after(controls, film, *keys):
    for key in keys:
        controls, _ = press(controls, key, film)
    return controls


# ---- the table of keys ---------------------------------------------------------------------------------------


def test_no_key_is_double_and_no_command_is_without_one():
    keys = [key for binding in BINDINGS for key in binding.keys]
    assert len(set(keys)) == len(keys) == len(BY_KEY)
    assert sorted(binding.command for binding in BINDINGS) == sorted(Command)
    assert all(binding.keys and binding.words for binding in BINDINGS)


@pytest.mark.parametrize("command", list(Command))
def test_every_command_does_something(command, film):
    """Each changes the state or asks the window for something."""
    controls = Controls(t_s=20.0, follow=2, is_paused=True, zoom=2.0)
    assert state.perform(controls, command, film, LAYOUT) != (controls, None)


def test_keys_without_a_meaning_do_nothing(film):
    controls = Controls(t_s=1.0)
    assert press(controls, "j", film) == (controls, None)
    assert press(controls, "shift+w", film) == (controls, None)


# ---- time ----------------------------------------------------------------------------------------------------


def test_a_run_passes_in_about_a_minute(scenario):
    for limit in (10.0, 60.0, 300.0, 3000.0):
        speed = state.start(scenario.replace(goal={"time_limit": limit})).speed
        assert math.log2(speed).is_integer()
        assert 60.0 / math.sqrt(2) <= limit / speed <= 60.0 * math.sqrt(2)
    assert state.start(scenario.replace(goal={"time_limit": 1e-3})).speed == 0.125
    assert state.start(scenario.replace(goal={"time_limit": 1e6})).speed == 64.0
    assert state.start(scenario, duration_s=480.0).speed == 8.0
    assert state.start(scenario, speed=3.1).speed == 3.1


def test_pause_stops_the_clock(film):
    controls = Controls(t_s=5.0, speed=4.0)
    assert state.passed(controls, 0.5) == 7.0
    assert state.passed(after(controls, film, "space"), 0.5) == 5.0
    assert state.passed(after(controls, film, "space", "space"), 0.5) == 7.0


def test_speeds_double_and_have_limits(film):
    controls = Controls(speed=1.0)
    assert after(controls, film, "+").speed == after(controls, film, "=").speed == 2.0
    assert after(controls, film, "-").speed == 0.5
    slowest, fastest = after(controls, film, *["-"] * 20), after(controls, film, *["+"] * 20)
    assert (slowest.speed, fastest.speed) == (0.125, 64.0)
    odd = Controls(speed=3.0)
    assert after(odd, film, "+").speed == 6.0
    assert after(odd, film, *["+"] * 5).speed == 64.0
    assert "limit" in slowest.message
    assert "limit" in fastest.message


def test_arrows_go_by_samples_when_paused_and_by_seconds_of_watching_else(film):
    row = 100
    paused = Controls(t_s=float(film.times_s[row]), is_paused=True)
    assert after(paused, film, "right").t_s == film.times_s[row + 1]
    assert after(paused, film, "left").t_s == film.times_s[row - 1]
    between = replace(paused, t_s=float(film.times_s[row : row + 2].mean()))
    assert after(between, film, "right").t_s == film.times_s[row + 1]
    assert after(between, film, "left").t_s == film.times_s[row]
    running = Controls(t_s=10.0, speed=4.0)
    assert after(running, film, "right").t_s == 14.0
    assert after(running, film, "left").t_s == 6.0


def test_arrows_stay_in_the_film(film):
    assert after(Controls(t_s=0.0, is_paused=True), film, "left").t_s == 0.0
    assert after(Controls(t_s=1.0, speed=8.0), film, "left").t_s == 0.0
    assert after(Controls(t_s=film.duration_s, is_paused=True), film, "right").t_s == film.duration_s
    assert after(Controls(t_s=film.duration_s - 1.0, speed=8.0), film, "right").t_s == film.duration_s


def test_a_sample_beyond_a_growing_films_end_is_asked_for(growing):
    controls = after(Controls(t_s=growing.duration_s, is_paused=True), growing, "right")
    assert controls.t_s > growing.duration_s
    n_before = len(growing.times_s)
    growing.advance(controls.t_s)
    assert len(growing.times_s) == n_before + 1
    assert state.arrived(controls, growing, controls.t_s).t_s == pytest.approx(growing.duration_s, rel=1e-12)


def test_home_and_end(film, growing):
    assert after(Controls(t_s=9.0), film, "home").t_s == 0.0
    assert after(Controls(t_s=9.0), film, "end").t_s == film.duration_s
    assert after(Controls(t_s=9.0), growing, "end").t_s == growing.duration_s


def test_it_stops_at_the_end_and_says_how_the_run_ended(film):
    ended = state.arrived(Controls(), film, film.duration_s + 1.0)
    assert (ended.t_s, ended.is_paused) == (film.duration_s, True)
    assert ("time limit" if film.run.ended == "time" else "goal") in ended.message
    again = after(ended, film, "space")
    assert (again.t_s, again.is_paused) == (0.0, False)


def test_a_growing_film_is_waited_for(growing):
    waiting = state.arrived(Controls(), growing, growing.duration_s + 5.0)
    assert (waiting.t_s, waiting.is_paused) == (growing.duration_s, False)


# ---- events of the run ---------------------------------------------------------------------------------------


def test_strikes_are_visited_one_by_one(film):
    times = film.strikes(-math.inf, math.inf)["t_on_s"].to_numpy()
    assert len(times) > 3
    controls, seen = Controls(is_paused=True), []
    for _ in range(3):
        controls = after(controls, film, "s")
        seen.append(controls.t_s)
    np.testing.assert_array_equal(seen, np.unique(times[times > 0.0])[:3])
    assert after(controls, film, "shift+s").t_s == seen[1]
    assert "No strike before" in after(Controls(is_paused=True), film, "shift+s").message
    last = Controls(t_s=film.duration_s, is_paused=True)
    assert "No strike after" in after(last, film, "s").message


def test_going_back_by_strikes_gets_on_while_the_film_runs(film):
    """Some frames pass between two presses; without slack each press would lead to the same strike again."""
    times = np.unique(film.strikes(-math.inf, math.inf)["t_on_s"].to_numpy())
    controls = Controls(t_s=float(times[4]), speed=1.0)
    seen = []
    for _ in range(2):
        controls = after(replace(controls, t_s=controls.t_s + 0.2), film, "shift+s")
        seen.append(controls.t_s)
    assert seen[1] < seen[0] < times[4]


def test_a_growing_film_without_a_later_strike_says_that_it_grows(growing):
    assert "under way" in after(Controls(t_s=growing.duration_s), growing, "s").message


def test_failures_are_visited_in_order_and_named(film):
    spells = film.spells()
    spells = spells[~spells["cause"].isin(["touching_wall", "turning", "in_no_lap"])]  # parts of any run
    begins = np.unique(spells["t_first_s"].to_numpy(dtype=float))
    begins = begins[begins > 0.0]
    assert len(begins) >= 2
    controls = after(Controls(is_paused=True), film, "e")
    assert controls.t_s == begins[0]
    assert "Begins here: " in controls.message
    controls = after(controls, film, "e")
    assert controls.t_s == begins[1]
    assert after(controls, film, "shift+e").t_s == begins[0]
    assert "No failure" in after(Controls(t_s=film.duration_s, is_paused=True), film, "e").message


def test_failures_of_a_growing_film_are_not_known(growing):
    controls = after(Controls(t_s=1.0), growing, "e")
    assert controls.t_s == 1.0
    assert "once the run is over" in controls.message


# ---- place ---------------------------------------------------------------------------------------------------


def test_wheel_zooms_about_the_pointer(film):
    rig, at = LAYOUT.rigs[0], (400.0, 150.0)
    for notches in (1.0, -1.0, 3.0):
        controls = Controls(zoom=2.0, centre_m=(0.5 * film.scenario.channel.length, 0.5 * film.scenario.channel.width))
        before = view_of(controls, film, LAYOUT)
        place = before.to_m(at[0] - rig.x, at[1] - rig.y)
        controls, action = handle(controls, Wheel(*at, notches), film, LAYOUT)
        view = view_of(controls, film, LAYOUT)
        assert action is None
        assert view.px_per_m == pytest.approx(before.px_per_m * state.ZOOM_STEP**notches)
        np.testing.assert_allclose(view.to_px(*place), (at[0] - rig.x, at[1] - rig.y), atol=ROUNDING_PX)


def test_zoom_keys_act_about_the_pointer_too(film):
    controls, _ = handle(Controls(zoom=2.0), PointerMove(400.0, 150.0), film, LAYOUT)
    by_key = after(controls, film, "z")
    by_wheel, _ = handle(controls, Wheel(400.0, 150.0, 1.0), film, LAYOUT)
    assert by_key.centre_m == by_wheel.centre_m
    assert by_key.zoom == by_wheel.zoom
    assert after(Controls(zoom=2.0), film, "z").centre_m is None  # no pointer: about the middle


def test_zoom_has_limits_and_comes_back_to_the_whole(film):
    near, far = after(Controls(), film, *["z"] * 60), after(Controls(), film, *["x"] * 60)
    rig, s = LAYOUT.rigs[0], film.scenario
    radius_px = view_of(near, film, LAYOUT).px_per_m * s.pushers.radius
    assert radius_px == pytest.approx(state.LARGEST_PUSHER * rig.height)
    assert far.zoom == state.LEAST_ZOOM
    assert after(Controls(), film, "z", "z", "x", "x").zoom == 1.0
    back = after(replace(near, centre_m=(0.0, 0.0)), film, "w")
    assert (back.zoom, back.centre_m) == (1.0, None)


def test_drag_moves_the_picture_with_the_pointer(film):
    controls = Controls(zoom=3.0)
    before = view_of(controls, film, LAYOUT)
    grabbed = before.to_m(500.0, 200.0)
    for event in (PointerDown(500, 200), PointerMove(520, 190), PointerMove(560, 180), PointerUp(560, 180)):
        controls, _ = handle(controls, event, film, LAYOUT)
    np.testing.assert_allclose(view_of(controls, film, LAYOUT).to_px(*grabbed), (560.0, 180.0), atol=ROUNDING_PX)
    assert controls.hold is None
    still, _ = handle(controls, PointerMove(100, 100), film, LAYOUT)
    assert still.centre_m == controls.centre_m


def test_keys_pan_and_the_channel_is_never_lost(film):
    s, middle = film.scenario, view_of(Controls(), film, LAYOUT).centre
    assert after(Controls(zoom=2.0), film, "shift+right").centre_m[0] > middle[0]
    assert after(Controls(zoom=2.0), film, "shift+left").centre_m[0] < middle[0]
    assert after(Controls(zoom=2.0), film, "shift+up").centre_m[1] > middle[1]
    assert after(Controls(zoom=2.0), film, "shift+down").centre_m[1] < middle[1]
    away = after(Controls(zoom=2.0), film, *["shift+right", "shift+up"] * 100)
    assert away.centre_m == (s.channel.length, s.channel.width)


def test_a_click_on_a_pusher_follows_it_and_another_lets_go(film):
    rig, controls = LAYOUT.rigs[0], Controls(t_s=7.0, is_paused=True)
    x, y, _ = film.frame(7.0).pushers[4]
    px, py = view_of(controls, film, LAYOUT).to_px(x, y)
    click = (PointerDown(px + rig.x, py + rig.y), PointerUp(px + rig.x, py + rig.y))
    for event in click:
        controls, _ = handle(controls, event, film, LAYOUT)
    assert controls.follow == 4
    assert view_of(controls, film, LAYOUT).picked == 4
    zoomed = after(controls, film, "z", "z")
    np.testing.assert_allclose(view_of(zoomed, film, LAYOUT).centre, (x, y))
    for event in click:
        controls, _ = handle(controls, event, film, LAYOUT)
    assert controls.follow is None


def test_a_click_beside_all_pushers_follows_none(film):
    controls = Controls(t_s=7.0)
    for event in (PointerDown(2, 2), PointerUp(2, 2)):
        controls, _ = handle(controls, event, film, LAYOUT)
    assert controls.follow is None


def test_pushers_are_followed_in_turn(film):
    n, controls, seen = film.scenario.pushers.count, Controls(), []
    for _ in range(n + 1):
        controls = after(controls, film, "f")
        seen.append(controls.follow)
    assert seen == [*range(n), 0]
    assert after(controls, film, "shift+f").follow is None


# ---- what is shown -------------------------------------------------------------------------------------------


def test_switches(film):
    trails = [view_of(after(Controls(), film, *["t"] * k), film, LAYOUT).trail_s for k in range(4)]
    assert trails[0] == trails[3] == 0.0
    assert 0.0 < trails[1] < trails[2]
    yaws = [view_of(after(Controls(), film, *["y"] * k), film, LAYOUT).yaw_factor for k in range(4)]
    assert yaws == [1.0, 5.0, 20.0, 1.0]
    assert not view_of(after(Controls(), film, "l"), film, LAYOUT).has_lap
    assert after(Controls(), film, "d").has_point_world
    assert not after(Controls(), film, "d", "d").has_point_world
    assert after(Controls(), film, "h").shows_help
    assert not after(Controls(), film, "f1", "h").shows_help


def test_strikes_are_shown_for_the_same_time_on_the_clock_at_any_speed(film):
    views = [view_of(Controls(speed=speed), film, LAYOUT) for speed in (0.125, 64.0)]
    assert [view.flash_s for view in views] == [0.05, 25.6]


def test_escape_closes_the_list_first(film):
    controls = after(Controls(), film, "h")
    assert press(controls, "escape", film) == (replace(controls, shows_help=False), None)
    assert isinstance(press(Controls(), "escape", film)[1], Close)
    assert isinstance(press(controls, "q", film)[1], Close)


def test_picture_is_asked_for(film):
    assert isinstance(press(Controls(), "p", film)[1], SavePicture)


# ---- seeds and values ----------------------------------------------------------------------------------------


def test_seeds(film):
    controls, action = press(Controls(t_s=9.0, speed=2.0), "n", film)
    assert action == Restart(film.scenario, film.seed + 1)
    assert (controls.t_s, controls.wanted) == (9.0, action)  # what is shown goes on until the new run is there
    assert press(Controls(), "b", film)[1] == Restart(film.scenario, film.seed - 1)
    assert press(controls, "n", film)[1] == Restart(film.scenario, film.seed + 2)


def test_a_new_film_begins_at_its_start_and_as_before(film, growing):
    controls = Controls(t_s=9.0, speed=2.0, zoom=3.0, is_paused=True, follow=5, wanted=Restart(film.scenario, 4))
    fresh = state.begun(controls, film, growing)
    assert fresh == Controls(t_s=0.0, speed=2.0, zoom=3.0, is_paused=True, follow=5)
    assert not state.begun(replace(controls, t_s=film.duration_s), film, growing).is_paused
    few = LiveFilm(film.scenario.replace(pushers={"count": 5}), 3, film.plan)
    assert state.begun(controls, film, few).follow is None


def test_there_is_no_seed_below_0(film):
    first = replace_seed(film, 0)
    controls, action = press(Controls(t_s=9.0), "b", first)
    assert action is None
    assert controls.t_s == 9.0
    assert "from 0" in controls.message


def replace_seed(film, seed):
    """The same film under another seed."""
    from swarmpush.viewing.film import Film

    return Film(film.scenario, seed, film.plan, film.times_s, film.blocks, film.pushers, film.impulses_Ns, film.run)


def test_values_are_chosen_and_changed(film):
    s = film.scenario
    chosen = parameters(s)
    controls = Controls(t_s=9.0)
    for k, parameter in enumerate(chosen):
        assert controls.parameter == k
        _, action = press(controls, ".", film)
        assert action == Restart(stepped(s, parameter, 1), film.seed)
        assert action.scenario != s
        controls = after(controls, film, "down")
    assert controls.parameter == 0
    assert after(controls, film, "up").parameter == len(chosen) - 1


def test_an_impossible_value_is_refused_with_its_reason(film):
    keys = [parameter.key for parameter in parameters(film.scenario)]
    controls = Controls(t_s=9.0, parameter=keys.index("errors.turn_sd"))
    s = film.scenario.replace(errors={"turn_sd": 0.0})
    ideal = LiveFilm(s, 3, film.plan)
    controls, action = press(controls, ",", ideal)
    assert action is None
    assert controls.t_s == 9.0
    assert controls.message.startswith("Not changed. errors.turn_sd: ")
    assert "at least 0 deg" in controls.message


# ---- parameters ----------------------------------------------------------------------------------------------


def test_steps_of_values(scenario):
    by_key = {parameter.key: parameter for parameter in parameters(scenario)}
    angle = next(key for key in by_key if key.endswith(".angle"))
    value = swarmpush.vary.value_at
    raised = stepped(scenario, by_key[angle], 1)
    assert math.degrees(value(raised, angle) - value(scenario, angle)) == pytest.approx(1.0)
    assert stepped(scenario, by_key["pushers.count"], -1).pushers.count == scenario.pushers.count - 1
    friction = stepped(scenario, by_key["floor.kinetic_friction"], 1).floor.kinetic_friction
    assert friction == pytest.approx(1.05 * scenario.floor.kinetic_friction)


def test_degrees_go_back_to_nothing_exactly(scenario):
    s = scenario.replace(errors={"turn_sd": 0.0})
    turn_sd = next(p for p in parameters(s) if p.key == "errors.turn_sd")
    for direction in (1, 1, 1, -1, -1, -1):
        s = stepped(s, turn_sd, direction)
    assert s.errors.turn_sd == 0.0


def test_static_friction_is_taken_along(scenario):
    s = scenario.replace(floor={"static_friction": 0.3, "kinetic_friction": 0.3})
    kinetic = next(p for p in parameters(s) if p.key == "floor.kinetic_friction")
    raised = stepped(s, kinetic, 1).floor
    assert raised.static_friction == raised.kinetic_friction == pytest.approx(0.315)
    lowered = stepped(s, kinetic, -1).floor
    assert (lowered.static_friction, lowered.kinetic_friction) == (0.3, pytest.approx(0.3 / 1.05))


def test_friction_leaves_zero_upward(scenario):
    s = scenario.replace(floor={"static_friction": 0.3, "kinetic_friction": 0.0})
    kinetic = next(p for p in parameters(s) if p.key == "floor.kinetic_friction")
    assert stepped(s, kinetic, 1).floor.kinetic_friction > 0.0
    assert stepped(s, kinetic, -1).floor.kinetic_friction == 0.0


def test_a_crew_that_does_not_fit_is_refused(scenario):
    count = next(p for p in parameters(scenario) if p.key == "pushers.count")
    with pytest.raises(ValueError, match=r"pushers\.count: .*do not fit"):
        stepped(scenario.replace(pushers={"count": 4999}), count, 1)
    with pytest.raises(ValueError, match=r"pushers\.count: 0 given; must be at least 1"):
        stepped(scenario.replace(pushers={"count": 1}), count, -1)


def test_placed_starts_fix_the_crew():
    s = swarmpush.load(swarmpush.demo("service_passage"))
    start = swarmpush.scenario.FixedStart(x=0.2, y=0.2, heading=0.0)
    placed = s.replace(start={"placed": (start,) * s.pushers.count})
    assert "pushers.count" not in [parameter.key for parameter in parameters(placed)]


# ---- pointer in the status line, the list and the time line ----------------------------------------------------


def middle(rect):
    return rect.x + rect.width / 2, rect.y + rect.height / 2


@pytest.mark.parametrize("command", list(LAYOUT.cells))
def test_cells_of_the_status_line_do_what_their_keys_do(command, film):
    key = next(binding.keys[0] for binding in BINDINGS if binding.command is command)
    at = middle(LAYOUT.cells[command])
    by_key = press(Controls(t_s=9.0, pointer=at), key, film)
    assert handle(Controls(t_s=9.0), PointerDown(*at), film, LAYOUT) == by_key


def test_every_command_can_be_clicked_in_the_list(film):
    for binding, cell in LAYOUT.help_cells:
        if binding.command is not Command.HELP:
            at = middle(cell)
            opened = Controls(t_s=9.0, shows_help=True)
            expected = state.perform(replace(opened, shows_help=False, pointer=at), binding.command, film, LAYOUT)
            assert handle(opened, PointerDown(*at), film, LAYOUT) == expected
    elsewhere, action = handle(Controls(shows_help=True), PointerDown(1, 1), film, LAYOUT)
    assert not elsewhere.shows_help
    assert action is None


def test_the_time_line_is_clicked_and_dragged(film):
    bar = LAYOUT.timeline
    y = bar.y + bar.height / 2
    controls, _ = handle(Controls(), PointerDown(bar.x + 0.25 * bar.width, y), film, LAYOUT)
    assert controls.t_s == pytest.approx(0.25 * film.duration_s)
    controls, _ = handle(controls, PointerMove(bar.x + 0.5 * bar.width, y - 300), film, LAYOUT)
    assert controls.t_s == pytest.approx(0.5 * film.duration_s)
    controls, _ = handle(controls, PointerMove(bar.x + 5 * bar.width, y), film, LAYOUT)
    assert controls.t_s == film.duration_s
    controls, _ = handle(controls, PointerUp(bar.x, y), film, LAYOUT)
    controls, _ = handle(controls, PointerMove(bar.x + 0.1 * bar.width, y), film, LAYOUT)
    assert controls.t_s == film.duration_s


def test_a_growing_film_is_scrubbed_only_as_far_as_it_goes(growing):
    bar = LAYOUT.timeline
    controls, _ = handle(Controls(), PointerDown(bar.x + 0.9 * bar.width, bar.y + 1), growing, LAYOUT)
    assert controls.t_s == growing.duration_s


# ---- layout --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("size", [(640, 400), (1024, 640), (1280, 720), (1000, 1400), (3840, 2160), (5000, 700)])
@pytest.mark.parametrize("n_rigs", [1, 2])
@pytest.mark.parametrize("aspect", [0.5, 1.0, 4.0, 20.0])
def test_parts_of_the_window_keep_apart(size, n_rigs, aspect):
    layout = lay_out(*size, n_rigs=n_rigs, rig_aspect=aspect)
    texts = (layout.speed_cell, layout.seed_cell, layout.value_cell)
    parts = [
        *layout.rigs,
        *layout.heads,
        layout.charts,
        *layout.cells.values(),
        *texts,
        layout.message,
        layout.timeline,
    ]
    assert len(layout.rigs) == n_rigs
    for k, a in enumerate(parts):
        assert a.width > 0
        assert a.height > 0
        assert a.x >= 0
        assert a.y >= 0
        assert a.x + a.width <= size[0]
        assert a.y + a.height <= size[1]
        for b in parts[k + 1 :]:
            assert a.x + a.width <= b.x or b.x + b.width <= a.x or a.y + a.height <= b.y or b.y + b.height <= a.y


@pytest.mark.parametrize("size", [(640, 400), (1024, 640), (3840, 2160)])
def test_the_list_fits_the_window(size):
    layout = lay_out(*size)
    box = layout.help_box
    assert box.y + box.height <= size[1]
    for _, cell in layout.help_cells:
        assert box.x <= cell.x
        assert cell.x + cell.width <= box.x + box.width
        assert cell.y + cell.height <= box.y + box.height


def test_two_long_channels_lie_above_each_other_and_short_ones_side_by_side():
    long, short = (lay_out(1280, 720, n_rigs=2, rig_aspect=aspect) for aspect in (15.0, 1.0))
    assert long.rigs[0].x == long.rigs[1].x
    assert short.rigs[0].y == short.rigs[1].y
    assert len(short.heads) == 2
    assert lay_out(1280, 720).heads == ()


def test_spells_without_failures(film):
    """A run in which nothing failed."""

    class Spotless(type(film)):
        def spells(self):
            return pd.DataFrame({"cause": [], "t_first_s": [], "t_last_s": []})

    spotless = Spotless.__new__(Spotless)
    spotless.__dict__.update(film.__dict__)
    assert "No failure" in after(Controls(), spotless, "e").message
