"""Where output goes wrong, and what a demand means."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest
from commands import BAD_INPUT, DONE, NOT_MET, assert_refused, call, edited, finish, start

import swarmpush
from swarmpush.demos import DEMOS


def test_a_terminal_without_greek_letters_gets_its_tables() -> None:
    """Signs that the terminal's encoding lacks are replaced, and JSON keeps to ASCII."""
    for option in ((), ("--json",)):
        outcome = finish(start("plan", "service_passage", *option, PYTHONIOENCODING="ascii"))
        assert (outcome.code, outcome.err.replace("compiling; only the first start does this", "").strip()) == (
            DONE,
            "",
        )
        assert outcome.out.isascii()


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="needs a device that is always full")
@pytest.mark.parametrize("arguments", [("--help",), ("schema",)])
def test_a_full_device_gives_one_message(arguments: tuple[str, ...]) -> None:
    """Output that cannot be written ends in one message and the exit code for bad input."""
    with Path("/dev/full").open("w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "swarmpush", *arguments], stdout=full, stderr=subprocess.PIPE, text=True
        )
    assert (done.returncode, done.stderr) == (BAD_INPUT, "cannot write the output (No space left on device)\n")


def test_demanding_arrival_demands_that_the_block_arrives(tmp_path: Path) -> None:
    """That a plan which promises no arrival is right does not fulfil a demand for arrival."""
    scenario = tmp_path / "rig.toml"
    scenario.write_text(edited(), encoding="utf-8")
    outcome = call("audit", scenario, "--replicates", "2", "--out", tmp_path / "audit", "--require", "arrival")
    assert outcome.code == NOT_MET
    assert outcome.err.splitlines()[-1] == (
        "required: arrival, but the plan itself says that the block does not arrive in time"
    )


def test_demands_that_too_few_runs_cannot_meet(tmp_path: Path) -> None:
    """When every run arrives and yet too few were made, the message says how many it takes."""
    scenario = tmp_path / "rig.toml"
    easy = edited(('travel = "0.10 m"', 'travel = "1 nm"'), ('time_limit = "3 s"', 'time_limit = "60 s"'))
    scenario.write_text(easy.replace('rear_at = "1.2 m"', 'rear_at = "0.4 m"'), encoding="utf-8")
    outcome = call("audit", scenario, "--replicates", "2", "--out", tmp_path / "audit", "--require", "arrival")
    assert outcome.code == NOT_MET
    assert outcome.err.splitlines()[-1] == "required: arrival, but 2 runs cannot show it; 35 replicates could"


def test_a_wrong_demo_name_names_the_right_ones() -> None:
    """Somebody who mistypes a demo's name is told which there are; a dash for a low line is understood."""
    assert_refused(call("plan", "nothere"), *DEMOS)
    assert call("plan", "gel-channel", "--json").code == DONE


def test_version() -> None:
    """The program tells its version."""
    assert call("--version").out.strip() == f"swarmpush {swarmpush.__version__}"
