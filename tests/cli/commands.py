"""Calling the command line in this process or in one of its own, and short scenarios for it."""

from __future__ import annotations

import io
import json
import os
import subprocess
import sys
from contextlib import redirect_stderr, redirect_stdout
from pathlib import Path
from typing import Any, NamedTuple
from unittest.mock import patch

from swarmpush.cli import main
from swarmpush.demos import demo

PATIENCE = 120  # s: for a command in a process of its own, which may have to compile
DONE, BAD_INPUT, NOT_MET, INTERRUPTED = 0, 2, 3, 130


class Outcome(NamedTuple):
    """Exit code and what went to the two streams."""

    code: int
    out: str
    err: str

    def json(self) -> Any:
        """The only thing on the output stream, as strict JSON."""
        return json.loads(self.out, parse_constant=_refuse)


class Saved(NamedTuple):
    """A command's outcome and the folder it wrote."""

    outcome: Outcome
    folder: Path


def _refuse(constant: str) -> None:
    raise AssertionError(f"{constant} is no JSON")


def call(*arguments: str | Path) -> Outcome:
    """Run a command in this process, as its entry point is called."""
    out, err = (io.TextIOWrapper(io.BytesIO(), encoding="utf-8", write_through=True) for _ in range(2))
    code = DONE
    with patch.object(sys, "argv", ["swarmpush", *map(str, arguments)]), redirect_stdout(out), redirect_stderr(err):
        try:
            main()
        except SystemExit as end:
            code = int(end.code or 0)
    return Outcome(code, *(stream.buffer.getvalue().decode() for stream in (out, err)))  # type: ignore[attr-defined]


def start(*arguments: str | Path, **environment: str) -> subprocess.Popen[str]:
    """Start a command in a process of its own."""
    return subprocess.Popen(
        [sys.executable, "-m", "swarmpush", *map(str, arguments)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        encoding="utf-8",
        env=os.environ | environment,
    )


def finish(process: subprocess.Popen[str]) -> Outcome:
    """Wait for a process that was started."""
    out, err = process.communicate(timeout=PATIENCE)
    return Outcome(process.returncode, out, err)


def edited(*changes: tuple[str, str]) -> str:
    """The service passage, cut down to two replicates of three seconds, with more of its text changed."""
    text = demo("service_passage").read_text(encoding="utf-8")
    for old, new in (('time_limit = "300 s"', 'time_limit = "3 s"'), ("replicates = 12", "replicates = 2"), *changes):
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    return text


def contents(folder: Path) -> dict[str, bytes]:
    """Every file below a folder."""
    return {str(path.relative_to(folder)): path.read_bytes() for path in sorted(folder.rglob("*")) if path.is_file()}


def assert_refused(outcome: Outcome, *words: str) -> None:
    """One readable message on the error stream, with these words in it; nothing else; the exit code for bad input."""
    assert outcome.code == BAD_INPUT, outcome
    assert outcome.out == ""
    assert "Traceback" not in outcome.err
    assert outcome.err.strip()
    for word in words:
        assert word in outcome.err
