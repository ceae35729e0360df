"""The window on a real display server without a screen: what it shows fits at small and at large sizes."""

import os
import shutil
import struct
import subprocess
import time
from itertools import combinations
from pathlib import Path

import numpy as np
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
def screen(tmp_path_factory):
    """Folder in which the server keeps what its screen would show."""
    return tmp_path_factory.mktemp("screen")


@pytest.fixture(scope="module")
def server(screen):
    """Xvfb on a free number; the value for DISPLAY."""
    program = shutil.which("Xvfb")
    if program is None:
        sentence = "no Xvfb on the PATH; on Debian: apt-get install xvfb"
        if os.environ.get(REQUIRED) == "required":
            pytest.fail(sentence)
        pytest.skip(sentence)
    read, write = os.pipe()
    command = [program, "-displayfd", str(write), "-screen", "0", "3840x2160x24", "-nolisten", "tcp", "-noreset"]
    command += ["-fbdir", str(screen)]
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
    monkeypatch.setenv("SDL_VIDEO_WINDOW_POS", "0,0")
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


def on_screen(folder: Path, size):
    """(height, width, 3) colours in the upper left corner of the server's screen.

    The file is an X window dump (XWDFile.h of the X Window System): words of 32 bits, high byte first, with the
    header's length, the screen's size, bits per pixel, bytes per line and the number of colours, 12 bytes each, that
    follow the header.
    """
    (file,) = folder.glob("Xvfb_screen0")
    data = file.read_bytes()
    header = struct.unpack(">25I", data[:100])
    n_pixel_bytes, n_line_bytes, begin = header[11] // 8, header[12], header[0] + 12 * header[19]
    lines = np.frombuffer(data, np.uint8, header[5] * n_line_bytes, begin).reshape(header[5], n_line_bytes)
    pixels = lines[:, : header[4] * n_pixel_bytes].reshape(header[5], header[4], n_pixel_bytes)
    return pixels[: size[1], : size[0], 2::-1]


def test_a_replay_fits(size, replay):
    window = Window(replay)
    for share in (0.0, 0.3, 1.0):
        window.controls = viewer.replace(window.controls, t_s=share * replay.duration_s, message="")
        window.turn(0.0)
        assert_fits(window, size)


def test_the_screen_shows_what_is_drawn_and_saved(size, screen, replay, tmp_path):
    window = Window(replay, folder=tmp_path)
    window.controls = viewer.replace(window.controls, t_s=0.3 * replay.duration_s, is_paused=True)
    window.turn(0.0)
    drawn = pygame.surfarray.array3d(pygame.display.get_surface()).swapaxes(0, 1)
    assert len(np.unique(drawn[::7, ::7].reshape(-1, 3), axis=0)) > 10
    deadline = time.monotonic() + PATIENCE_S
    while not np.array_equal(on_screen(screen, size), drawn):
        assert time.monotonic() < deadline
        time.sleep(0.05)  # the server shows it when it comes to it
    press(window, pygame.K_p, "p")
    (picture,) = tmp_path.glob("*.png")
    saved = pygame.surfarray.array3d(pygame.image.load(picture)).swapaxes(0, 1)
    np.testing.assert_array_equal(saved, drawn)


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
