"""Pictures and films of runs as files."""

from __future__ import annotations

import re
import sys
from pathlib import Path
from xml.etree import ElementTree

import numpy as np
import pytest

from swarmpush.demos import DEMOS, demo
from swarmpush.dynamics.states import STATES
from swarmpush.geometry import channel_corners
from swarmpush.kinematics.planning import plan
from swarmpush.loading import load
from swarmpush.output import OutputError
from swarmpush.reporting.palette import PALE, STATE_COLOURS
from swarmpush.viewing import export
from swarmpush.viewing.export import save_gif, save_mp4
from swarmpush.viewing.film import Film, record
from swarmpush.viewing.sheet import LARGEST, SMALLEST, sheet
from swarmpush.viewing.still import save_png, save_svg

pygame = pytest.importorskip("pygame")
Image = pytest.importorskip("PIL.Image")
imageio_ffmpeg = pytest.importorskip("imageio_ffmpeg")

FEW_S = 0.4  # of a film, where only its file matters


@pytest.fixture(scope="module")
def film() -> Film:
    s = load(demo("service_passage")).replace(goal={"time_limit": 20.0})
    return record(s, 3, plan(s, n_starts=50))


def rgb(colour: str) -> tuple[int, ...]:
    return tuple(int(colour[k : k + 2], 16) for k in (1, 3, 5))


def test_a_gif_is_as_long_as_asked(film: Film, tmp_path: Path) -> None:
    """Number of frames, their time in sum, size; it goes round and round, and progress is told."""
    told: list[tuple[int, int]] = []
    path = tmp_path / "film.gif"
    save_gif(
        film,
        path,
        size=(640, 240),
        fps=30.0,
        begin_s=2.0,
        end_s=8.0,
        speed=4.0,
        progress=lambda k, n: told.append((k, n)),
    )
    lasted = 0
    with Image.open(path) as image:
        assert (image.size, image.n_frames, image.info["loop"]) == ((640, 240), 45, 0)
        for k in range(image.n_frames):
            image.seek(k)
            lasted += image.info["duration"]
    assert lasted == 1500  # ms, though a 30th of a second is no whole number of hundredths
    assert told == [(k + 1, 45) for k in range(45)]


def test_a_gif_shows_the_film(film: Film, tmp_path: Path) -> None:
    """Its colours are the palette's own, where the block and a pusher are; each frame has its time."""
    path = tmp_path / "film.gif"
    save_gif(film, path, size=(1000, 300), fps=10.0, begin_s=1.0, end_s=11.0, speed=5.0)
    parts = sheet(film.scenario, (1000, 300))
    for k in (0, 7, 19):
        with Image.open(path) as image:
            image.seek(k)
            pixels = np.asarray(image.convert("RGB"))
        frame = film.frame(1.0 + k * 0.5)
        x, y = parts.view.to_px(frame.blocks[0, 0] + 0.06, frame.blocks[0, 1])
        assert tuple(pixels[int(y), int(x)]) == rgb(PALE)
        px, py = parts.view.to_px(frame.pushers[:, 0], frame.pushers[:, 1])
        radius = film.scenario.pushers.radius * parts.view.px_per_m
        heading = frame.pushers[:, 2]
        behind = px - 0.65 * radius * np.cos(heading), py + 0.65 * radius * np.sin(heading)  # between symbol and edge
        found = [
            tuple(pixels[int(b), int(a)]) == rgb(STATE_COLOURS[STATES[state]])
            for a, b, state in zip(*behind, frame.states, strict=True)
        ]
        assert sum(found) >= len(found) - 1  # one may lie under a strike


def test_an_mp4_can_be_read_back(film: Film, tmp_path: Path) -> None:
    """As many frames as asked, an even size, and a white picture with dark ink."""
    path = tmp_path / "film.mp4"
    save_mp4(film, path, size=(641, 361), fps=20.0, begin_s=1.0, end_s=7.0, speed=4.0)
    frames, seconds = imageio_ffmpeg.count_frames_and_secs(str(path))
    assert (frames, round(seconds, 3)) == (30, 1.5)
    reader = imageio_ffmpeg.read_frames(str(path))
    meta = next(reader)
    assert meta["size"] == (642, 362)
    first = np.frombuffer(next(reader), dtype=np.uint8)
    assert first.size == 642 * 362 * 3
    assert np.median(first) > 250
    assert first.min() < 60
    reader.close()


@pytest.mark.parametrize("name", DEMOS)
def test_svg_is_sound_and_the_same_again(name: str, tmp_path: Path) -> None:
    """Valid XML of the size asked for, with its texts as texts; the same film gives the same file."""
    s = load(demo(name)).replace(goal={"time_limit": 10.0})
    film = record(s, 3, plan(s, n_starts=30))
    one, other = tmp_path / "one.svg", tmp_path / "other.svg"
    save_svg(film, 7.3, one, (1000, 500), yaw_factor=5.0, trail_s=2.0)
    save_svg(record(s, 3, film.plan), 7.3, other, (1000, 500), yaw_factor=5.0, trail_s=2.0)
    assert one.read_bytes() == other.read_bytes()
    root = ElementTree.fromstring(one.read_text(encoding="utf-8"))
    assert (root.get("width"), root.get("height")) == ("720pt", "360pt")  # a CSS pixel is 0.75 points
    texts = {element.text for element in root.iter("{http://www.w3.org/2000/svg}text")}
    assert {"t = 7.30 s", "yaw x 5", f"{s.about.name}, seed 3", "in no lap", "block travel"} <= texts
    assert any(re.fullmatch(r"[125]0{0,2} [mµ]?m", str(text)) for text in texts)


@pytest.mark.parametrize("size", [(1024, 640), (800, 300)])
def test_png_has_its_size_and_the_films_look(film: Film, tmp_path: Path, size: tuple[int, int]) -> None:
    """The block's colour where the block is, as in a film."""
    path = tmp_path / "still.png"
    save_png(film, 5.0, path, size)
    with Image.open(path) as file:
        image = file.convert("RGB")
    assert image.size == size
    block = film.frame(5.0).blocks[0]
    x, y = sheet(film.scenario, size).view.to_px(block[0] + 0.06, block[1])
    assert image.getpixel((int(x), int(y))) == rgb(PALE)


def test_charts_are_left_out_of_low_pictures(film: Film) -> None:
    """Or where they are not wanted; parts never overlap and stay in the picture."""
    assert sheet(film.scenario, (640, 160)).charts is None
    low = sheet(film.scenario, (800, 300))
    assert low.charts is not None
    assert low.timeline is None
    corners = low.view.points(channel_corners(film.scenario))
    assert np.ptp(corners[:, 0]) > 0.95 * 800
    near = sheet(film.scenario, (1024, 640), px_per_m=2000.0, centre=(1.2, 0.16))
    assert near.charts is not None
    assert near.view.height > 0.5 * 640
    assert near.view.to_px(1.2, 0.16) == (512.0, near.view.height / 2)
    assert sheet(film.scenario, (1024, 640), has_charts=False).timeline is None
    for name in DEMOS:
        for size in ((1024, 640), (3840, 2160), (1280, 720), (1080, 1920)):
            parts = sheet(load(demo(name)), size)
            assert parts.charts is not None
            assert parts.timeline is not None
            assert parts.view.height <= parts.charts[1]
            assert parts.charts[1] + parts.charts[3] <= parts.timeline[1]
            assert parts.timeline[1] + parts.timeline[3] <= size[1]
            assert parts.charts[3] >= 7.0 * parts.type_px


def test_gif_colours_are_near(film: Film) -> None:
    """Every colour that frames have lies near one of the palette, and solid ones in it."""
    colours, nearest = export._few_colours()
    table = np.frombuffer(colours, dtype=np.uint8).reshape(-1, 3).astype(int)
    assert len(table) <= 256
    for colour in export.SOLID:
        red, green, blue = rgb(colour)
        assert tuple(table[nearest[(red >> 3) << 10 | (green >> 3) << 5 | blue >> 3]]) == (red, green, blue)
    parts = sheet(film.scenario, (640, 240))
    (surface,) = export._surfaces(film, parts, [6.0], None)
    pixels = pygame.surfarray.array3d(surface).astype(int)
    away = np.abs(table[nearest[export._fifteen_bits(surface)]] - pixels).max(axis=2)
    assert away.max() <= 70  # levels of 255, at a few pixels where two colours' edges meet
    assert (away > 16).mean() < 0.005


@pytest.mark.parametrize("save", [save_gif, save_mp4])
@pytest.mark.parametrize(
    ("asked", "said"),
    [
        ({"fps": 0.0}, "frame rate"),
        ({"speed": -1.0}, "speed"),
        ({"speed": float("nan")}, "speed"),
        ({"begin_s": 21.0}, "span within the run's 19.99"),
        ({"begin_s": 5.0, "end_s": 5.0}, "nothing to show"),
        ({"speed": 1e-6}, "raise the speed"),
        ({"size": (SMALLEST[0] - 2, 300)}, "choose a size from 320x160 to 7680x4320"),
        ({"size": (800, LARGEST[1] + 2)}, "choose a size"),
    ],
)
def test_what_makes_no_film_is_refused(film: Film, tmp_path: Path, save, asked, said) -> None:  # type: ignore[no-untyped-def]
    """In one sentence with a remedy, and nothing is left behind."""
    with pytest.raises(OutputError, match=said):
        save(film, tmp_path / "film.out", **asked)
    assert list(tmp_path.iterdir()) == []


def test_a_gif_too_fast_for_gifs_is_refused(film: Film, tmp_path: Path) -> None:
    """Programs would show it slowly."""
    with pytest.raises(OutputError, match="at most 50 frames per second"):
        save_gif(film, tmp_path / "film.gif", fps=60.0)


@pytest.mark.parametrize("save", [save_gif, save_mp4])
def test_films_are_written_whole_or_not_at_all(film: Film, tmp_path: Path, save) -> None:  # type: ignore[no-untyped-def]
    """Stopped half-way, there is no new file, and an old one stays as it was."""
    path = tmp_path / "film.out"
    path.write_text("before")

    def stop(done: int, of: int) -> None:
        if done == 3:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        save(film, path, size=(640, 240), end_s=FEW_S, progress=stop)
    assert [p.name for p in tmp_path.iterdir()] == ["film.out"]
    assert path.read_text() == "before"
    with pytest.raises(OutputError, match="make its folder first"):
        save(film, tmp_path / "no" / "film.out", size=(640, 240), end_s=FEW_S)


@pytest.mark.parametrize(
    ("save", "package"), [(save_gif, "PIL"), (save_gif, "pygame"), (save_mp4, "pygame"), (save_mp4, "imageio_ffmpeg")]
)
def test_missing_packages_are_named(film: Film, tmp_path: Path, monkeypatch, save, package) -> None:  # type: ignore[no-untyped-def]
    """With the command that brings them."""
    monkeypatch.setitem(sys.modules, package, None)
    with pytest.raises(OutputError, match=rf"{package}.*pip install 'swarmpush\[view\]'"):
        save(film, tmp_path / "film.out", end_s=FEW_S)
    assert list(tmp_path.iterdir()) == []
