"""The window under SDL's dummy driver: events go in as pygame posts them, pictures come out."""

import math
import os
import subprocess
import sys
import time
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

import swarmpush
from swarmpush.dynamics.simulation import Simulation
from swarmpush.loading import from_tables
from swarmpush.output import OutputError
from swarmpush.viewing import app
from swarmpush.viewing.app import ViewingError, watch
from swarmpush.viewing.commands import BINDINGS
from swarmpush.viewing.film import LiveFilm
from swarmpush.viewing.parameters import parameters

os.environ.setdefault("PYGAME_HIDE_SUPPORT_PROMPT", "1")
pygame = pytest.importorskip("pygame")

from swarmpush.viewing import window as viewer  # noqa: E402
from swarmpush.viewing.window import Window  # noqa: E402

SIZE = (1280, 720)
FRAME_S = 1 / 60
STEPS, STEPS_A_FRAME = 200, 700  # measured: some 210 steps a frame
PATIENCE_S = 60.0  # for what a thread prepares, on a slow machine


@pytest.fixture(scope="module")
def scenario():
    return swarmpush.load(swarmpush.demo("service_passage")).replace(goal={"time_limit": 20.0})


@pytest.fixture(scope="module")
def plan(scenario):
    return swarmpush.plan(scenario)


@pytest.fixture
def display(monkeypatch):
    monkeypatch.setenv("SDL_VIDEODRIVER", "dummy")
    viewer.open_display(SIZE)
    pygame.event.clear()
    yield
    viewer.close_display()


@pytest.fixture
def window(display, scenario, plan, tmp_path):
    """A window on a run that has just begun."""
    return Window(LiveFilm(scenario, 5, plan), folder=tmp_path)


SIGNS = {"+": pygame.K_PLUS, "-": pygame.K_MINUS, ",": pygame.K_COMMA, ".": pygame.K_PERIOD}


def press(window, *names, shift=False):
    """Press and release keys, one frame each."""
    for name in names:
        key = SIGNS.get(name) or pygame.key.key_code(name)
        sign = name if len(name) == 1 else ""
        sign = sign.upper() if shift else sign
        mod = pygame.KMOD_LSHIFT if shift else 0
        pygame.event.post(pygame.event.Event(pygame.KEYDOWN, key=key, unicode=sign, mod=mod))
        pygame.event.post(pygame.event.Event(pygame.KEYUP, key=key, mod=mod))
        window.turn(FRAME_S)


def click(window, x, y):
    for kind in (pygame.MOUSEBUTTONDOWN, pygame.MOUSEBUTTONUP):
        pygame.event.post(pygame.event.Event(kind, pos=(round(x), round(y)), button=1))
    window.turn(0.0)


def wait(window, is_done):
    """Frames until something is there."""
    deadline = time.monotonic() + PATIENCE_S
    while not is_done():
        assert time.monotonic() < deadline
        window.turn(0.0)
        time.sleep(0.005)


def texts(window):
    return [text for text, _ in window.texts]


def watched_to_its_end(window):
    deadline = time.monotonic() + PATIENCE_S
    while not window.film.is_complete:
        assert time.monotonic() < deadline
        window.turn(FRAME_S)


# ---- never changes a result ----------------------------------------------------------------------------------


def test_a_watched_run_is_the_headless_one_bit_by_bit(window, scenario):
    """Odd speeds, pauses, seeks, single samples, zooms and pictures all along the way."""
    rng, k = np.random.default_rng(0), 0
    odd = ["+", "-", "space", "right", "left", "home", "end", "s", "t", "l", "y", "f", "z", "x", "w", "d", "p"]
    while not window.film.is_complete:
        k += 1
        assert k < 5000
        press(window, odd[rng.integers(len(odd))])
        bar = window.layout.timeline
        click(window, bar.x + rng.uniform() * bar.width, bar.y + 1)
        for _ in range(3):
            window.turn(rng.uniform(0.0, 0.2))
        if window.controls.is_paused:
            press(window, "space", "end")
    watched, headless = window.film.run, swarmpush.simulate(scenario, seed=5)
    assert watched.ended == headless.ended
    assert (watched.travel_m, watched.duration_s) == (headless.travel_m, headless.duration_s)
    for name in ("pushers", "block", "visits", "bumps", "laps"):
        pd.testing.assert_frame_equal(getattr(watched, name), getattr(headless, name), check_exact=True)
    assert watched.books == headless.books


# ---- time ----------------------------------------------------------------------------------------------------


def test_time_passes_as_fast_as_asked_for(window, monkeypatch):
    monkeypatch.setattr(viewer, "BUDGET_S", math.inf)  # however slow the machine is
    press(window, "home")
    window.controls = replace(window.controls, speed=2.0, t_s=0.0)
    for _ in range(10):
        window.turn(0.05)
    assert window.controls.t_s == pytest.approx(1.0)
    press(window, "space")
    stopped = window.controls.t_s
    window.turn(0.05)
    assert window.controls.t_s == stopped


def test_a_long_frame_is_no_leap(window):
    """As after the window was dragged about, or the machine slept."""
    before = window.controls.t_s
    window.turn(30.0)
    assert window.controls.t_s - before <= viewer.LONGEST_FRAME_S * window.controls.speed + 1e-12


def test_a_frame_does_not_wait_for_the_run(window, monkeypatch):
    """At the highest speed a run without any time for it comes on by a place of the film at a time, and no more."""
    monkeypatch.setattr(viewer, "BUDGET_S", 0.0)
    press(window, *["+"] * 10)
    before = len(window.film.times_s)
    for _ in range(5):
        window.turn(viewer.LONGEST_FRAME_S)
    assert len(window.film.times_s) - before == 5
    assert window.controls.t_s == window.film.duration_s  # what is shown waits for the run, too


def test_a_crew_of_200_is_drawn_without_jerks(display, scenario):
    """A frame costs no more than 700 steps, side by side: 60 frames a second where a step takes 24 us."""
    tables, larger = scenario.to_tables(), math.sqrt(200 / scenario.pushers.count)
    tables["pushers"]["count"] = 200
    for table, key in [("channel", "length"), ("channel", "width"), ("block", "width"), ("block", "rear_at")]:
        tables[table][key] *= larger
    crowd = from_tables(tables)
    window = Window(LiveFilm(crowd, 1, swarmpush.plan(crowd, n_starts=200)), speed=1.0)
    simulation = Simulation(crowd, seed=1, cycles=())
    frames_s, steps_s = [], []
    for _ in range(30):
        begin = time.process_time()
        window.turn(FRAME_S)
        frames_s.append(time.process_time() - begin)
        begin = time.process_time()
        simulation.advance(STEPS)
        steps_s.append((time.process_time() - begin) / STEPS)
    assert min(frames_s) < STEPS_A_FRAME * min(steps_s)


def test_the_end_is_said_and_it_can_be_seen_again(window):
    press(window, *["+"] * 10)
    watched_to_its_end(window)
    wait(window, lambda: (window.turn(0.1), window.controls.is_paused)[1])
    assert any("time limit" in text or "goal asks" in text for text in texts(window))
    assert "replay" in texts(window)
    press(window, "space")
    assert window.controls.t_s < 5.0


def test_a_live_run_says_that_states_are_not_known(window):
    window.turn(FRAME_S)
    assert "live: states are told at the end" in texts(window)


# ---- keys as pygame tells them -------------------------------------------------------------------------------


def test_keys_are_known_by_what_they_write():
    def name(key, sign="", mod=0):
        return viewer.key_name(pygame.event.Event(pygame.KEYDOWN, key=key, unicode=sign, mod=mod))

    assert name(pygame.K_PLUS, "+", pygame.KMOD_LSHIFT) == "+"  # above the equals sign of many keyboards
    assert name(pygame.K_s, "s") == "s"
    assert name(pygame.K_s, "S", pygame.KMOD_LSHIFT) == "shift+s"
    assert name(pygame.K_s, "S", pygame.KMOD_CAPS) == "s"
    assert name(pygame.K_s, "s", pygame.KMOD_LCTRL) is None


def test_arrows_and_function_keys_are_known_by_name(display):
    for key, expected in [(pygame.K_LEFT, "left"), (pygame.K_F1, "f1"), (pygame.K_SPACE, "space")]:
        sign = " " if key == pygame.K_SPACE else ""
        event = pygame.event.Event(pygame.KEYDOWN, key=key, unicode=sign, mod=0)
        assert viewer.key_name(event) == expected
    event = pygame.event.Event(pygame.KEYDOWN, key=pygame.K_UP, unicode="", mod=pygame.KMOD_RSHIFT)
    assert viewer.key_name(event) == "shift+up"


def test_held_keys_repeat_only_where_that_makes_sense(window):
    press(window, "space")
    for _ in range(3):
        pygame.event.post(pygame.event.Event(pygame.KEYDOWN, key=pygame.K_SPACE, unicode=" ", mod=0))
    window.turn(0.0)
    assert not window.controls.is_paused  # once, whatever the keyboard repeats
    pygame.event.post(pygame.event.Event(pygame.KEYUP, key=pygame.K_SPACE, mod=0))
    for _ in range(3):
        pygame.event.post(pygame.event.Event(pygame.KEYDOWN, key=pygame.K_z, unicode="z", mod=0))
    window.turn(0.0)
    assert window.controls.zoom == pytest.approx(1.25**3)


def test_pointer_and_wheel(window):
    rig = window.layout.rigs[0]
    at = (rig.x + rig.width // 3, rig.y + rig.height // 3)
    for kind, pos, more in [
        (pygame.MOUSEBUTTONDOWN, at, {"button": 1}),
        (pygame.MOUSEMOTION, (at[0] + 50, at[1]), {"rel": (50, 0), "buttons": (1, 0, 0)}),
        (pygame.MOUSEBUTTONUP, (at[0] + 50, at[1]), {"button": 1}),
    ]:
        pygame.event.post(pygame.event.Event(kind, pos=pos, **more))
    pygame.event.post(pygame.event.Event(pygame.MOUSEWHEEL, x=0, y=1, flipped=False))
    pygame.event.post(pygame.event.Event(pygame.MOUSEBUTTONDOWN, pos=at, button=3))
    window.turn(0.0)
    assert window.controls.centre_m is not None
    assert window.controls.zoom == pytest.approx(1.25)
    assert window.controls.hold is None


# ---- seeds, values, point world ------------------------------------------------------------------------------


def test_seeds_add_up_while_a_run_is_prepared(window):
    press(window, "n", "n", "n", "b")
    wait(window, lambda: window.controls.wanted is None)
    assert window.film.seed == 7
    assert window.controls.t_s < 1.0
    assert "seed 7" in texts(window)


def test_a_changed_value_starts_a_run_with_it(window, scenario):
    keys = [parameter.key for parameter in parameters(scenario)]
    press(window, *["down"] * keys.index("pushers.count"), ".")
    wait(window, lambda: window.controls.wanted is None)
    assert window.film.scenario.pushers.count == scenario.pushers.count + 1
    assert window.film.seed == 5
    assert window.film.plan.scenario == window.film.scenario
    assert f"pushers.count = {scenario.pushers.count + 1}" in texts(window)


def test_an_impossible_value_is_refused_and_the_run_goes_on(window, scenario):
    keys = [parameter.key for parameter in parameters(scenario)]
    film = window.film
    press(window, *["down"] * keys.index("errors.turn_sd"))
    press(window, *[","] * 60)
    wait(window, lambda: window.controls.wanted is None or "Not changed" in window.controls.message)
    assert window.controls.message.startswith("Not changed. errors.turn_sd: ")
    assert any(text.startswith("Not changed. errors.turn_sd: ") for text in texts(window))
    assert window.film is film or window.film.scenario.errors.turn_sd >= 0.0


def test_what_cannot_be_prepared_is_said(window, monkeypatch):
    class Crowded(LiveFilm):
        def __init__(self, *_):
            raise ValueError("no room for the crew")

    monkeypatch.setattr(viewer, "LiveFilm", Crowded)
    press(window, "n")
    wait(window, lambda: window.controls.wanted is None)
    assert window.film.seed == 5
    assert "Not changed. no room for the crew" in texts(window)


def test_the_point_world_comes_beside_the_body_world(window):
    press(window, "d")
    wait(window, lambda: "Working out the point world ..." not in texts(window))
    assert any("point world" in text for text in texts(window))
    assert len(window.layout.rigs) == 2
    press(window, "d")
    assert len(window.layout.rigs) == 1


# ---- pictures ------------------------------------------------------------------------------------------------


def test_pictures_never_replace_each_other(window, tmp_path):
    window.turn(FRAME_S)
    press(window, "space", "p", "p")
    files = sorted(tmp_path.glob("*.png"))
    assert len(files) == 2
    assert files[0].name.startswith("service-passage-seed5-")
    assert pygame.image.load(files[0]).get_size() == SIZE
    assert any(text.startswith("Saved service-passage-seed5-") for text in texts(window))


def test_a_picture_that_cannot_be_saved_is_said(display, scenario, plan, tmp_path):
    window = Window(LiveFilm(scenario, 5, plan), folder=tmp_path / "missing")
    window.turn(FRAME_S)
    press(window, "p")
    assert "cannot be written" in window.controls.message


def test_the_list_shows_every_command(window):
    press(window, "f1")
    shown = texts(window)
    for binding in BINDINGS:
        assert binding.words in shown
        assert binding.key_words in shown
    press(window, "f1")
    assert "Help" in texts(window)


# ---- opening and closing -------------------------------------------------------------------------------------


@pytest.mark.parametrize("event", [{"type": "QUIT"}, {"key": pygame.K_q, "unicode": "q"}, {"key": pygame.K_ESCAPE}])
def test_it_closes(window, event):
    if "type" in event:
        pygame.event.post(pygame.event.Event(pygame.QUIT))
    else:
        pygame.event.post(pygame.event.Event(pygame.KEYDOWN, {"unicode": "", "mod": 0} | event))
    window.turn(0.0)
    assert not window.is_open


def test_watch_runs_until_it_is_closed(scenario, monkeypatch):
    monkeypatch.setenv("SDL_VIDEODRIVER", "dummy")
    seen = []

    def turn(self, elapsed_s):
        seen.append(elapsed_s)
        if len(seen) == 3:
            pygame.event.post(pygame.event.Event(pygame.QUIT))
        original(self, elapsed_s)

    original = Window.turn
    monkeypatch.setattr(Window, "turn", turn)
    watch(scenario, seed=2)
    assert len(seen) == 3
    assert not pygame.display.get_init()


def test_without_pygame_there_is_one_sentence(scenario, monkeypatch):
    monkeypatch.setitem(sys.modules, "pygame", None)
    with pytest.raises(OutputError, match=r"not installed here \(pygame\); run: pip install 'swarmpush\[view\]'$"):
        watch(scenario)


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere there is always a display")
@pytest.mark.parametrize("settings", [{}, {"DISPLAY": ":987"}, {"SDL_VIDEODRIVER": "none such"}])
def test_without_a_display_there_is_one_sentence(scenario, monkeypatch, settings):
    for name in viewer.DISPLAY_NAMES:
        monkeypatch.delenv(name, raising=False)
    for name, value in settings.items():
        monkeypatch.setenv(name, value)
    pygame.display.quit()
    with pytest.raises(ViewingError, match=r"^no display to open a window on.*xvfb-run$"):
        watch(scenario)


def test_app_needs_no_pygame_to_be_imported():
    """The command line imports it before it knows whether a window is wanted."""
    source = f"import sys; sys.modules['pygame'] = None; import {app.__name__}"
    subprocess.run([sys.executable, "-c", source], check=True)


@pytest.mark.parametrize("size", [(0, 0), (-5, 400), (300, 400), (1280, 100_000)])
def test_a_size_without_a_window_is_refused(scenario, size):
    with pytest.raises(ViewingError, match="choose a size from 640x400 to 8192x8192"):
        watch(scenario, size=size)


def test_a_window_made_tiny_goes_on(window):
    pygame.display.set_mode((90, 60), pygame.RESIZABLE)
    press(window, "d", "h", "h", "p")
    assert window.is_open
