"""Pictures and films of runs from the command line, and what is said when no window can be opened."""

from __future__ import annotations

import os
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import pytest
from commands import BAD_INPUT, PATIENCE, Saved, assert_refused, call

pytest.importorskip("pygame")
Image = pytest.importorskip("PIL.Image")
imageio_ffmpeg = pytest.importorskip("imageio_ffmpeg")


@pytest.fixture(scope="module")
def swept(short: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A study of two points of the short scenario."""
    folder = tmp_path_factory.mktemp("study")
    (folder / "study.toml").write_text(
        f'format = 1\nbase = "{short.as_posix()}"\nreplicates = 1\n[about]\nname = "Two"\n[design]\nkind = "grid"\n'
        '[[vary]]\nkey = "pushers.count"\nvalues = [1, 3]\n',
        encoding="utf-8",
    )
    call("sweep", folder / "study.toml", "--out", folder / "out", "--workers", "1", "--json")
    return folder / "out"


def test_a_picture_of_a_scenario(short: Path, tmp_path: Path) -> None:
    """A PNG has the size asked for; an SVG is XML that names the clock's time; another time gives another picture."""
    png, svg = tmp_path / "a.png", tmp_path / "a.svg"
    assert call("watch", short, "--export", png, "--size", "800x500", "--json").json() == {"picture": str(png)}
    with Image.open(png) as image:
        assert image.size == (800, 500)
    call("watch", short, "--export", svg, "--at", "1.5")
    text = svg.read_text(encoding="utf-8")
    assert ElementTree.fromstring(text).tag.endswith("svg")
    assert "t = 1.50 s" in text
    again = tmp_path / "b.svg"
    call("watch", short, "--export", again, "--at", "1.5")
    assert again.read_bytes() == svg.read_bytes()


def test_films(short: Path, tmp_path: Path) -> None:
    """GIF and MP4 have the frames that span, speed and frame rate give."""
    gif, mp4 = tmp_path / "a.gif", tmp_path / "a.mp4"
    film = ("--span", "0.5:2.5", "--speed", "2", "--fps", "10", "--size", "640x320")
    assert call("watch", short, "--export", gif, *film, "--json").json() == {"film": str(gif)}
    with Image.open(gif) as image:
        assert image.n_frames == 10
    assert call("watch", short, "--export", mp4, *film, "--json").json() == {"film": str(mp4)}
    frames, _ = imageio_ffmpeg.count_frames_and_secs(str(mp4))
    assert frames == 10


def test_a_saved_run_and_a_run_of_a_study(ran: Saved, swept: Path, tmp_path: Path) -> None:
    """A folder with a run, and a point of a study, are shown; the point has its own number of pushers."""
    for k, source in enumerate(([ran.folder], ["--from-study", swept, "--point", "1"])):
        path = tmp_path / f"{k}.png"
        assert call("watch", *source, "--export", path, "--json").json() == {"picture": str(path)}
        assert path.stat().st_size > 10_000


def test_files_are_kept(short: Path, tmp_path: Path) -> None:
    """A file that is there is not replaced without --force."""
    path = tmp_path / "a.png"
    path.write_text("mine")
    assert_refused(call("watch", short, "--export", path), str(path), "--force")
    assert path.read_text() == "mine"
    call("watch", short, "--export", path, "--force")
    assert path.read_bytes()[:4] == b"\x89PNG"


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--export", "a.jpeg"], ["a.jpeg", ".png", ".mp4"]),
        (["--export", "a.png", "--span", "0:1"], ["--span"]),
        (["--export", "a.gif", "--at", "1"], ["--at"]),
        (["--export", "a.gif", "--span", "2:1"], ["nothing to show"]),
        (["--export", "a.gif", "--span", "0-1"], ["--span", "10:25"]),
        (["--export", "a.png", "--size", "wide"], ["--size", "1280x720"]),
        (["--export", "a.png", "--size", "1x1"], ["320"]),
        (["--export", "nowhere/a.png"], ["make its folder"]),
        (["--at", "1"], ["--export"]),
        (["--json"], ["--export"]),
        (["--point", "1", "--export", "a.png"], ["--from-study"]),
    ],
)
def test_what_is_refused(arguments: list[str], words: list[str], short: Path, tmp_path: Path) -> None:
    """Options that make no sense are refused with one message, and no file is made."""
    before = os.getcwd()
    os.chdir(tmp_path)
    try:
        assert_refused(call("watch", short, *arguments), *words)
    finally:
        os.chdir(before)
    assert list(tmp_path.iterdir()) == []


def test_nothing_to_watch() -> None:
    """Without a source the message says what there is to name."""
    assert_refused(call("watch"), "--from-study")


@pytest.mark.skipif(sys.platform != "linux", reason="elsewhere there is always a display")
def test_without_a_display(short: Path) -> None:
    """Without a display one sentence says what to do instead."""
    bare = {name: value for name, value in os.environ.items() if name not in ("DISPLAY", "WAYLAND_DISPLAY")}
    done = subprocess.run(
        [sys.executable, "-m", "swarmpush", "watch", str(short)],
        env=bare | {"SDL_VIDEODRIVER": ""},
        capture_output=True,
        text=True,
        timeout=PATIENCE,
        check=False,
    )
    assert done.returncode == BAD_INPUT
    assert "display" in done.stderr
    assert "Traceback" not in done.stderr
