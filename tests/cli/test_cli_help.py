"""Help, and what it costs."""

from __future__ import annotations

import subprocess
import sys

import pytest
from commands import BAD_INPUT, DONE, PATIENCE, assert_refused, call

COMMANDS = ("plan", "run", "audit", "sweep", "schema", "report")


def test_help_names_every_command() -> None:
    """The program's help lists each command and says that it predicts and proves nothing about safety."""
    outcome = call("--help")
    assert outcome.code == DONE
    listed = [line.split()[0] for line in outcome.out.partition("Commands:")[2].splitlines() if line.strip()]
    assert set(COMMANDS) <= set(listed)
    assert "no safety proof" in outcome.out


@pytest.mark.parametrize("command", COMMANDS)
def test_help_of_a_command(command: str) -> None:
    """Every command explains itself and its options, among them --json, --out and --force."""
    outcome = call(command, "--help")
    assert (outcome.code, outcome.err) == (DONE, "")
    assert outcome.out.startswith(f"Usage: swarmpush {command} ")
    for option in ("--json", "--out", "--force", "-h, --help"):
        assert f"\n  {option} " in outcome.out


def test_help_comes_without_heavy_packages() -> None:
    """Help imports none of the packages that take their time."""
    heavy = {"matplotlib", "numba", "numpy", "pandas", "pint", "pyarrow", "pymunk", "scipy"}
    script = (
        "import sys\n"
        "from swarmpush.cli import main\n"
        "sys.argv = ['swarmpush', 'audit', '--help']\n"
        "try:\n    main()\n"
        "except SystemExit:\n    print('imported:', *sorted(sys.modules))\n"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, timeout=PATIENCE, check=True)
    imported = set(done.stdout.partition("imported:")[2].split())
    assert "typer" in imported
    assert not heavy & imported


def test_nothing_to_do_is_answered_with_help() -> None:
    """The program called without a command shows its help, with the exit code of a wrong call."""
    outcome = call()
    assert outcome.code == BAD_INPUT
    assert "Commands:" in outcome.out + outcome.err


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (["plam", "x.toml"], "plam"),
        (["plan"], "SCENARIO"),
        (["plan", "x.toml", "y.toml"], "y.toml"),
        (["plan", "x.toml", "--jsno"], "--jsno"),
        (["run", "x.toml", "--seed", "-1"], "--seed"),
        (["run", "x.toml", "--seed", "one"], "--seed"),
        (["run", "x.toml", "--seed", str(2**62 + 1)], "--seed"),
        (["run", "x.toml", "--seed"], "--seed"),
        (["audit", "x.toml", "--replicates", "1"], "--replicates"),
        (["audit", "x.toml", "--workers", "0"], "--workers"),
        (["audit", "x.toml", "--require"], "--require"),
    ],
)
def test_a_wrong_call_names_what_is_wrong(arguments: list[str], word: str) -> None:
    """A misspelt command or option, or a value out of range, is named in the message."""
    assert_refused(call(*arguments), word)
