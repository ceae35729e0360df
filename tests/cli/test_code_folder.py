"""Where compiled code is kept, also when the usual place cannot be written."""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from pathlib import Path

import pytest
from commands import PATIENCE

from swarmpush import compiled
from swarmpush.compiled import code_folder, is_first_start

pytestmark = pytest.mark.skipif(sys.platform in ("win32", "darwin"), reason="the user's cache folder is elsewhere")


@pytest.fixture
def blocked(tmp_path: Path) -> Path:
    """A place that nobody can make a folder in, not even an administrator: it lies below a file."""
    file = tmp_path / "file"
    file.write_text("")
    return file / "below"


def fresh() -> Path:
    """The folder, looked for anew."""
    return code_folder.__wrapped__()


def temporary(folder: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Take this for the system's folder of temporary files."""
    folder.mkdir()
    monkeypatch.setattr(tempfile, "tempdir", str(folder))
    return folder


def test_in_the_users_cache(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Compiled code is kept in the user's cache folder, in a folder named by what was compiled."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    folder = fresh()
    assert folder.parent == tmp_path / "cache" / "swarmpush"
    assert folder.is_dir()
    assert fresh() == folder


def test_changes_with_the_sources(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Other sources have another folder, so that code that no longer belongs to them is never used."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    package = tmp_path / "package"
    (package / "dynamics").mkdir(parents=True)
    (package / "compiled.py").write_text("")
    (package / "dynamics" / "loop.py").write_text("a = 1")
    monkeypatch.setattr(compiled, "__file__", str(package / "compiled.py"))
    first = fresh()
    (package / "dynamics" / "loop.py").write_text("a = 2")
    assert fresh() != first


def test_without_a_cache_folder(blocked: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """When the user's cache folder cannot be written, it is the folder of temporary files."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(blocked))
    place = temporary(tmp_path / "temporary", monkeypatch)
    assert fresh().parent == place / "swarmpush"


def test_without_a_home(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A user without a home has a folder too."""

    def homeless() -> Path:
        raise RuntimeError("Could not determine home directory.")

    monkeypatch.delenv("XDG_CACHE_HOME", raising=False)
    monkeypatch.setattr(Path, "home", homeless)
    place = temporary(tmp_path / "temporary", monkeypatch)
    assert fresh().parent == place / "swarmpush"


def test_when_another_user_was_first(blocked: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """When somebody else has taken the name among the temporary files, there is a new folder at each start."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(blocked))
    place = temporary(tmp_path / "temporary", monkeypatch)
    (place / "swarmpush").write_text("somebody else's")
    one, other = fresh(), fresh()
    assert one != other
    assert one.is_dir()
    assert one.parent == place


def test_the_first_start_is_known(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """It is a first start until there is compiled code."""
    monkeypatch.setattr("numba.config.CACHE_DIR", str(tmp_path))
    assert is_first_start()
    (tmp_path / "module").mkdir()
    (tmp_path / "module" / "loop.1.nbc").write_text("")
    assert not is_first_start()


def compile_once(module: Path, **environment: str) -> int:
    """Start Python, let it compile a function of a module, and return how often it found the code ready."""
    script = "import halve; halve.halve(2.0); print(sum(halve.halve.stats.cache_hits.values()))"
    clean = {name: value for name, value in os.environ.items() if name != "NUMBA_CACHE_DIR"}
    done = subprocess.run(
        [sys.executable, "-B", "-c", script],
        cwd=module.parent,
        env=clean | environment,
        capture_output=True,
        text=True,
        timeout=PATIENCE,
        check=True,
    )
    return int(done.stdout)


def test_code_is_found_again_without_a_cache_folder(blocked: Path, tmp_path: Path) -> None:
    """With home and cache out of reach, code is compiled once, kept elsewhere and never beside the sources."""
    module, place = tmp_path / "installed" / "halve.py", tmp_path / "temporary"
    module.parent.mkdir()
    place.mkdir()
    module.write_text("from swarmpush.compiled import compiled\n\n@compiled\ndef halve(x):\n    return 0.5 * x\n")
    places = {"HOME": str(blocked), "XDG_CACHE_HOME": str(blocked), "TMPDIR": str(place)}
    assert [compile_once(module, **places) for _ in range(2)] == [0, 1]
    assert list((place / "swarmpush").rglob("*.nbc"))
    assert [path.name for path in module.parent.rglob("*")] == ["halve.py"]


def test_the_user_may_name_the_place(tmp_path: Path) -> None:
    """A folder that the user names for compiled code is taken."""
    module, place = tmp_path / "halve.py", tmp_path / "mine"
    module.write_text("from swarmpush.compiled import compiled\n\n@compiled\ndef halve(x):\n    return 0.5 * x\n")
    assert compile_once(module, NUMBA_CACHE_DIR=str(place)) == 0
    assert list(place.rglob("halve*.nbc"))
