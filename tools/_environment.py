"""The project's own Python environment: `.venv` at its top, made and filled when it is needed.

Only the standard library, and nothing newer than Python 3.8 outside the annotations, so that an old Python gets as
far as the message that it is too old.
"""

from __future__ import annotations

import hashlib
import importlib.util
import os
import shutil
import subprocess
import sys
from pathlib import Path

PROJECT = Path(__file__).resolve().parent.parent
VENV = PROJECT / ".venv"
PYTHON = VENV / ("Scripts/python.exe" if os.name == "nt" else "bin/python")
OLDEST = (3, 11)

_UNFINISHED = VENV / "unfinished"  # there while the environment is being made; what it marks is never reused
_INSTALLED = VENV / "installed.txt"  # one line for each set of packages that is in place, written last


class SetupError(Exception):
    """The environment cannot be made; the message says why and what to do."""


def prepare(extra: str = "") -> Path:
    """Make the environment if there is none, install the project if it changed, and return its Python.

    Arguments:
        extra: the optional dependencies to install along, e.g. "test"; "" for none.

    Raises:
        SetupError: when one of the two does not work.
    """
    if _UNFINISHED.exists() or not VENV.exists():
        _create()
    if not PYTHON.exists():
        raise SetupError(f"{VENV} holds no Python that works; delete it and run this again.")
    if _stamp(extra) not in _stamps():
        _install(extra)
    return PYTHON


def run(arguments: list[str]) -> int:
    """Run the environment's Python from the project's top folder and return its exit code."""
    return subprocess.run([str(PYTHON), *arguments], cwd=str(PROJECT)).returncode


def _create() -> None:
    if sys.version_info < OLDEST:
        has = ".".join(map(str, sys.version_info[:3]))
        raise SetupError(f"Python {OLDEST[0]}.{OLDEST[1]} or newer is needed, this is {has}; run it with a newer one.")
    if not all(importlib.util.find_spec(module) for module in ("venv", "ensurepip")):
        raise SetupError(
            f"This Python ({sys.executable}) cannot make environments: its modules venv and ensurepip are not "
            "installed. Install them (on Debian and Ubuntu the package python3-venv), or use another Python."
        )
    import venv

    say("making the environment .venv")
    try:
        if VENV.exists():
            shutil.rmtree(VENV)
        VENV.mkdir()
        _UNFINISHED.touch()
        venv.create(VENV, with_pip=True, symlinks=os.name != "nt")
        _UNFINISHED.unlink()
    except (OSError, subprocess.CalledProcessError) as error:
        raise SetupError(f"{VENV} cannot be made: {error}. Put that right and run this again.") from None


def _install(extra: str) -> None:
    what = f".[{extra}]" if extra else "."
    say(f"installing {what} into .venv; the first time this takes some minutes")
    _INSTALLED.unlink(missing_ok=True)
    code = run(["-m", "pip", "install", "--quiet", "--disable-pip-version-check", "--editable", what])
    if code != 0:
        raise SetupError(
            "pip could not install the project; its reason stands above. Check that the package index can be reached "
            "and that the disk is not full, then run this again. If it persists, delete the folder .venv first."
        )
    # whatever the extra, the project itself is in place too
    _INSTALLED.write_text("\n".join({_stamp(extra), _stamp("")}))


def _stamp(extra: str) -> str:
    """Changes with the project's metadata and with its folder, which an editable installation points to."""
    text = (PROJECT / "pyproject.toml").read_bytes() + f"{PROJECT} [{extra}]".encode()
    return hashlib.sha256(text).hexdigest()


def _stamps() -> list[str]:
    return _INSTALLED.read_text().split() if _INSTALLED.exists() else []


def say(text: str) -> None:
    """Print at once, so that the lines keep their order among those of other programs."""
    print(text, flush=True)
