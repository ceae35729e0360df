"""Step halving from the command line."""

from __future__ import annotations

import json
import os
import signal
import time
from pathlib import Path

import pandas as pd
import pytest
from commands import (
    BAD_INPUT,
    DONE,
    INTERRUPTED,
    PATIENCE,
    Saved,
    assert_refused,
    call,
    contents,
    edited,
    finish,
    start,
)

from swarmpush.cautions import CAUTIONS

JOURNAL = "unfinished.jsonl"
KEYS = {
    "answer", "is_smooth", "is_drawn", "confidence", "tolerance", "suggested_step_s", "quantities", "steps", "numerics",
    "files", "provenance",
}  # fmt: skip
PLACED = 'placed = [{ x = "0.9 m", y = "0.16 m", heading = "20 deg" }]'


@pytest.fixture(scope="module")
def converged(short: Path, tmp_path_factory: pytest.TempPathFactory) -> Saved:
    """Step halving with --json and --out."""
    folder = tmp_path_factory.mktemp("results") / "converge"
    outcome = call("run", short, "--converge", "--json", "--out", folder)
    assert outcome.code == DONE, outcome.err
    return Saved(outcome, folder)


def test_it_has_the_documented_keys(converged: Saved) -> None:
    """The result gives its answer, each quantity at three steps with its verdict, the books, and where it came from."""
    result = converged.outcome.json()
    assert converged.outcome.err == ""
    assert result.keys() == KEYS
    assert [row["quantity"] for row in result["quantities"]] == [
        "block speed", "strike rate", "nudge", "lap time", "arrival",
    ]  # fmt: skip
    for row in result["quantities"]:
        assert row["effect"] in {"small", "large", "untold"}
        assert [mean.keys() for mean in row["at_steps"]] == 3 * [{"mean", "standard_error", "n", "n_left_out"}]
        assert row["difference"].keys() == row["judged"].keys() == {"mean", "low", "high", "n"}
        assert {"unit", "grid", "allowed", "suggested_step_s", "words"} <= row.keys()
    assert [step["n"] for step in result["steps"]] == [2, 2, 2]  # the scenario's replicates
    dt = result["numerics"]["dt_s"]
    assert [step["dt_s"] for step in result["steps"]] == [dt, dt / 2, dt / 4]
    assert all(step["residual_rel"] < 1e-9 for step in result["steps"])
    assert result["provenance"]["seed"] == 1


def test_it_writes_its_files(converged: Saved) -> None:
    """The folder holds the JSON that was printed and the table of runs; no journal is left."""
    files = contents(converged.folder)
    assert files.keys() == {"convergence.json", "runs.parquet"}
    printed, saved = converged.outcome.json(), json.loads(files["convergence.json"])
    assert printed.pop("files") == saved.pop("files") | {"folder": str(converged.folder)}
    assert saved == printed
    assert len(pd.read_parquet(converged.folder / "runs.parquet")) == 6


def test_text_for_people(short: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without --json and --out there are tables with the caution, and a new folder that is named."""
    monkeypatch.chdir(tmp_path)
    outcome = call("run", short, "--converge", "--replicates", "1", "--seed", "4")
    assert outcome.code == DONE
    assert "Service passage" in outcome.out
    assert "The step's effect is" in " ".join(outcome.out.split())
    assert CAUTIONS[0] in " ".join(outcome.out.split())
    written = Path("results", "short-converge", "convergence.json")
    assert outcome.out.splitlines()[-1] == f"convergence: {written}"
    assert json.loads(written.read_text(encoding="utf-8"))["provenance"]["seed"] == 4


def test_a_run_without_chance(tmp_path: Path) -> None:
    """A placed pusher without errors is run once; asking for more is refused with the reason."""
    scenario = tmp_path / "rig.toml"
    text = edited(("count = 6", "count = 1"), ('region = "behind"', PLACED))
    before, _, rest = text.partition("\n[errors]")
    scenario.write_text(before + "\n[start]" + rest.partition("\n[start]")[2], encoding="utf-8")
    result = call("run", scenario, "--converge", "--json", "--out", tmp_path / "one").json()
    assert (result["is_drawn"], result["is_smooth"]) == (False, True)
    assert [step["n"] for step in result["steps"]] == [1, 1, 1]
    refused = call("run", scenario, "--converge", "--replicates", "2", "--out", tmp_path / "two")
    assert_refused(refused, "--replicates", "draws no random number")
    assert not (tmp_path / "two").exists()


def test_wrong_calls(short: Path, tmp_path: Path) -> None:
    """Replicates without step halving, or none at all, are refused; so is a folder that holds other things."""
    assert_refused(call("run", short, "--replicates", "3"), "--converge")
    assert_refused(call("run", short, "--converge", "--replicates", "0"), "--replicates")
    assert_refused(call("run", tmp_path / "nothere.toml", "--converge"), "no such file")
    (tmp_path / "mine.txt").write_text("mine")
    assert_refused(call("run", short, "--converge", "--out", tmp_path), str(tmp_path), "--force")
    assert contents(tmp_path) == {"mine.txt": b"mine"}
    assert call("run", short, "--converge", "--out", tmp_path / "mine.txt").code == BAD_INPUT


@pytest.mark.skipif(os.name == "nt", reason="needs the signal of an interrupted terminal")
def test_an_interrupted_study_goes_on(tmp_path: Path) -> None:
    """Stopped from the keyboard, it says how to go on, keeps finished runs, and then ends as one that ran through."""
    scenario, stopped, through = tmp_path / "rig.toml", tmp_path / "stopped", tmp_path / "through"
    scenario.write_text(edited(('time_limit = "3 s"', 'time_limit = "40 s"')), encoding="utf-8")
    process = start("run", scenario, "--converge", "--replicates", "4", "--out", stopped)
    deadline = time.monotonic() + PATIENCE
    while not (stopped / JOURNAL).exists() or (stopped / JOURNAL).read_text().count("\n") < 3:
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < deadline
        time.sleep(0.01)
    process.send_signal(signal.SIGINT)
    outcome = finish(process)
    assert (outcome.code, outcome.out) == (INTERRUPTED, "")
    assert outcome.err.splitlines()[-1] == f"interrupted; go on with --out {stopped}"
    assert "Traceback" not in outcome.err
    assert contents(stopped).keys() == {JOURNAL}

    command = ("run", scenario, "--converge", "--replicates", "4", "--json", "--out")
    resumed, direct = (call(*command, folder).json() for folder in (stopped, through))
    assert resumed | {"files": None} == direct | {"files": None}
    tables = [pd.read_parquet(folder / "runs.parquet") for folder in (stopped, through)]
    pd.testing.assert_frame_equal(*tables, check_exact=True)
    assert contents(stopped).keys() == contents(through).keys()
