"""Scenarios that cannot be used: one message, the exit code for bad input, nothing written, never a traceback."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest
from commands import assert_refused, call, edited
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

TEXT = edited()
# The examples are the same at every run, so that a failure is due to a change in the code.
STEADY = settings(
    derandomize=True,
    deadline=None,
    max_examples=100,
    suppress_health_check=[HealthCheck.function_scoped_fixture],
)


def holds(content: str | bytes) -> Callable[[Path], None]:
    """A maker of files with this content."""
    raw = content.encode() if isinstance(content, str) else content

    def make(path: Path) -> None:
        path.write_bytes(raw)

    return make


def nothing(path: Path) -> None:
    """No file is made."""


BROKEN = {
    "missing": (nothing, "no such file"),
    "folder": (Path.mkdir, "folder"),
    "empty": (holds(""), "empty"),
    "blank": (holds("\n \n"), "empty"),
    "malformed": (holds(TEXT.replace("[channel]", "[channel")), "TOML"),
    "truncated": (holds(TEXT[: TEXT.index("width")]), "missing"),
    "cut in a word": (holds(TEXT[: TEXT.index("[block]") + 4]), "TOML"),
    "binary": (holds(bytes(range(256)) * 40), "UTF-8"),
    "zeros": (holds(bytes(4096)), "TOML"),
    "huge": (holds(TEXT + "# more\n" * 200_000), "larger than"),
    "unknown key": (holds(TEXT.replace("free_speed", "fre_speed")), "did you mean 'free_speed'"),
    "wrong dimension": (holds(TEXT.replace('"0.20 kg"', '"0.20 m"')), "pushers.mass"),
    "impossible": (holds(TEXT.replace('radius = "40 mm"', 'radius = "400 mm"')), "does not fit the channel"),
}


@pytest.mark.parametrize("command", ["plan", "run", "audit"])
@pytest.mark.parametrize("kind", BROKEN)
def test_a_scenario_that_cannot_be_used(
    command: str, kind: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Every command refuses every kind of broken file by its name and says what is wrong with it."""
    make, word = BROKEN[kind]
    monkeypatch.chdir(tmp_path)
    make(Path("rig.toml"))
    before = set(tmp_path.iterdir())
    outcome = call(command, "rig.toml", "--json")
    assert_refused(outcome, word)
    assert outcome.err.startswith("rig.toml: ")
    assert set(tmp_path.iterdir()) == before


def test_all_mistakes_are_told_at_once(tmp_path: Path) -> None:
    """Every mistake of a file stands in the message, one to a line."""
    path = tmp_path / "rig.toml"
    path.write_text(TEXT.replace("count = 6", "count = 0").replace('"0.15 m/s"', '"fast"'), encoding="utf-8")
    outcome = call("run", path)
    assert_refused(outcome, "2 problems")
    assert [line.split(":")[0].strip() for line in outcome.err.splitlines()[1:]] == [
        "pushers.count",
        "pushers.free_speed",
    ]


@STEADY
@given(junk=st.binary(max_size=400))
def test_random_bytes(junk: bytes, tmp_path: Path) -> None:
    """Whatever bytes a file holds, it is refused with a message."""
    path = tmp_path / "rig.toml"
    path.write_bytes(junk)
    assert_refused(call("plan", path), str(path))


@STEADY
@given(length=st.integers(0, len(TEXT[: TEXT.index("time_limit")].encode())))
def test_truncated_bytes(length: int, tmp_path: Path) -> None:
    """A file that breaks off before its last needed value is refused with a message, wherever it breaks off."""
    path = tmp_path / "rig.toml"
    path.write_bytes(TEXT.encode()[:length])
    assert_refused(call("plan", path), str(path))


@STEADY
@given(place=st.integers(0, len(TEXT.encode())), junk=st.binary(min_size=1, max_size=6))
def test_bytes_that_are_no_text(place: int, junk: bytes, tmp_path: Path) -> None:
    """A file with bytes in it that are no UTF-8 is refused with a message, wherever they stand."""
    path = tmp_path / "rig.toml"
    raw = TEXT.encode()
    path.write_bytes(raw[:place] + junk + b"\xff" + raw[place:])
    assert_refused(call("plan", path), str(path), "UTF-8")


@given(name=st.text(st.characters(exclude_categories=["Cs"]), min_size=1, max_size=30).filter(lambda n: n[0] != "-"))
@STEADY
def test_random_names(name: str, tmp_path_factory: pytest.TempPathFactory) -> None:
    """A name that no file can have, or none has, is refused with a message."""
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(_empty(tmp_path_factory))
        if not Path("/", name).exists() and not Path(name).exists():
            assert_refused(call("plan", name))


def _empty(factory: pytest.TempPathFactory) -> Path:
    folder = factory.getbasetemp() / "empty"
    folder.mkdir(exist_ok=True)
    return folder
