"""The window on a real display server without a screen: what it shows fits at small and at large sizes."""

import os
import shutil
import subprocess
import time
from itertools import combinations

import pytest

import swarmpush
from swarmpush.viewing.film import LiveFilm, record

os.environ.setdefault("PYGAME_HIDE_SUPPORT_PROMPT", "1")
pygame = pytest.importorskip("pygame")

from swarmpush.viewing import window as viewer  # noqa: E402
from swarmpush.viewing.window import Window  # noqa: E402

REQUIRED = "SWARMPUSH_DISPLAY"  # set to "required": without a server the tests fail instead of being skipped
SIZES = [(1024, 640), (3840, 2160)]
RIGS = ["service_passage", "gel_channel", "bristle_tray"]
PATIENCE_S = 60.0
SMALLEST_TYPE = 11  # px high, as the font draws it


@pytest.fixture(scope="module")
def server():
    """Xvfb on a free number; the value for DISPLAY."""
    program = shutil.which("Xvfb")
    if program is None:
        sentence = "no Xvfb on the PATH; on Debian: apt-get install xvfb"
        if os.environ.get(REQUIRED) == "required":
            pytest.fail(sentence)
        pytest.skip(sentence)
    read, write = os.pipe()
    command = [program, "-displayfd", str(write), "-screen", "0", "3840x2160x24", "-nolisten", "tcp", "-noreset"]
    process = subprocess.Popen(command, pass_fds=[write], stderr=subprocess.DEVNULL)
    os.close(write)
    with os.fdopen(read) as told:
        number = told.readline().strip()
    assert number, "Xvfb did not start"
    yield f":{number}"
    process.terminate()
    process.wait()


@pytest.fixture(params=SIZES, ids=lambda size: f"{size[0]}x{size[1]}")
def size(request, server, monkeypatch):
    """An open window of this size."""
    monkeypatch.setenv("DISPLAY", server)
    monkeypatch.setenv("SDL_VIDEODRIVER", "x11")
    viewer.open_display(request.param)
    assert pygame.display.get_driver() == "x11"
    pygame.event.clear()
    yield request.param
    viewer.close_display()


@pytest.fixture(scope="module", params=RIGS)
def scenario(request):
    return swarmpush.load(swarmpush.demo(request.param)).replace(goal={"time_limit": 30.0})


@pytest.fixture(scope="module")
def plan(scenario):
    return swarmpush.plan(scenario)


@pytest.fixture(scope="module")
def replay(scenario, plan):
    return record(scenario, 1, plan)


def press(window, key, sign="", mod=0):
    pygame.event.post(pygame.event.Event(pygame.KEYDOWN, key=key, unicode=sign, mod=mod))
    pygame.event.post(pygame.event.Event(pygame.KEYUP, key=key, mod=mod))
    window.turn(0.02)


def assert_fits(window, size):
    """Every text lies in the window, none is cut or tiny, and no two overlap."""
    assert pygame.display.get_surface().get_size() == size
    assert len(window.texts) > 5
    for text, place in window.texts:
        assert place.x >= 0, text
        assert place.y >= 0, text
        assert place.x + place.width <= size[0], text
        assert place.y + place.height <= size[1], text
        assert not (text.endswith("...") and not text.endswith(" ...")), text
        assert place.height >= SMALLEST_TYPE * size[1] / SIZES[0][1], text
    for (text, a), (other, b) in combinations(window.texts, 2):
        assert not overlap(a, b), f"{text!r} overlaps {other!r}"
    if not window.controls.shows_help:
        layout = window.layout
        for part in (*layout.rigs, layout.charts, layout.timeline):
            for text, place in window.texts:
                is_in = place.x >= part.x and place.x + place.width <= part.x + part.width
                is_in = is_in and place.y >= part.y and place.y + place.height <= part.y + part.height
                assert is_in or not overlap(place, part), f"{text!r} is cut off"


def overlap(a, b):
    """Whether two rectangles have more than an edge in common."""
    across = min(a.x + a.width, b.x + b.width) - max(a.x, b.x)
    down = min(a.y + a.height, b.y + b.height) - max(a.y, b.y)
    return across > 0 and down > 0


def test_a_live_run_fits(size, scenario, plan, tmp_path):
    window = Window(LiveFilm(scenario, 1, plan), folder=tmp_path)
    for _ in range(20):
        window.turn(0.1)
    assert_fits(window, size)
    for key, sign in [(pygame.K_t, "t"), (pygame.K_y, "y"), (pygame.K_f, "f"), (pygame.K_s, "s"), (pygame.K_e, "e")]:
        press(window, key, sign)
        assert_fits(window, size)
    for _ in range(6):
        press(window, pygame.K_z, "z")
    assert_fits(window, size)
    press(window, pygame.K_DOWN)
    assert_fits(window, size)


def test_a_replay_fits_and_its_picture_is_what_the_window_shows(size, replay, tmp_path):
    window = Window(replay, folder=tmp_path)
    for share in (0.0, 0.3, 1.0):
        window.controls = viewer.replace(window.controls, t_s=share * replay.duration_s, message="")
        window.turn(0.0)
        assert_fits(window, size)
    press(window, pygame.K_HOME)  # it stands still, because it was at its end
    press(window, pygame.K_p, "p")
    window.turn(0.0)
    (picture,) = tmp_path.glob("*.png")
    saved = pygame.image.load(picture)
    assert saved.get_size() == size
    rig, shown = window.layout.rigs[0], pygame.display.get_surface()
    places = [(x, y) for x in range(rig.x, rig.x + rig.width, 37) for y in range(rig.y, rig.y + rig.height, 23)]
    assert all(saved.get_at(place)[:3] == shown.get_at(place)[:3] for place in places)
    assert len({tuple(saved.get_at(place)[:3]) for place in places}) > 2


def test_the_list_fits(size, replay):
    window = Window(replay)
    press(window, pygame.K_h, "h")
    assert_fits(window, size)


def test_two_worlds_fit(size, replay):
    window = Window(replay)
    press(window, pygame.K_d, "d")
    deadline = time.monotonic() + PATIENCE_S
    while any(text.startswith("Working out") for text, _ in window.texts):
        assert time.monotonic() < deadline
        window.turn(0.02)
    assert_fits(window, size)


def test_it_fits_after_it_was_made_smaller(server, monkeypatch, replay):
    monkeypatch.setenv("DISPLAY", server)
    monkeypatch.setenv("SDL_VIDEODRIVER", "x11")
    viewer.open_display(SIZES[1])
    window = Window(replay)
    window.turn(0.02)
    pygame.display.set_mode(SIZES[0], pygame.RESIZABLE)
    window.turn(0.02)
    assert_fits(window, SIZES[0])
    viewer.close_display()
