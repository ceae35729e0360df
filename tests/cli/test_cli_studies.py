"""Studies from the command line: run, gone on with, looked into, replayed, refused."""

from __future__ import annotations

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

from swarmpush.demos import STUDY_DEMOS
from swarmpush.studies.sweep import load_sweep

STUDY = """
format = 1
base = "rig.toml"
replicates = 2
outputs = ["block speed", "arrival"]
demand = "block_speed>=0 m/s"
[about]
name = "Crews and turns"
[design]
kind = "grid"
[[vary]]
key = "pushers.count"
values = [1, 2]
[[vary]]
key = "errors.turn_sd"
low = "0 deg"
high = "20 deg"
n = 3
"""
# no block of 0.30 m fits into the first
WITH_A_FAULT = STUDY.replace('key = "errors.turn_sd"\nlow = "0 deg"\nhigh = "20 deg"\nn = 3',
                             'key = "channel.width"\nvalues = ["0.25 m", "0.32 m"]')  # fmt: skip


def written(folder: Path, text: str = STUDY, name: str = "study.toml", **changes: str) -> Path:
    """A study file beside its base."""
    folder.mkdir(exist_ok=True)
    (folder / "rig.toml").write_text(edited(*changes.items()), encoding="utf-8")
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def swept(tmp_path_factory: pytest.TempPathFactory) -> Saved:
    """The study with --json and --out; its file lies beside the folder of results."""
    folder = tmp_path_factory.mktemp("study")
    outcome = call("sweep", written(folder), "--json", "--out", folder / "out", "--workers", "1")
    assert (outcome.code, outcome.err) == (DONE, "")
    return Saved(outcome, folder / "out")


@pytest.fixture(scope="module")
def faulty(tmp_path_factory: pytest.TempPathFactory) -> Saved:
    """A study half of whose points make no scenario."""
    folder = tmp_path_factory.mktemp("faulty")
    outcome = call("sweep", written(folder, WITH_A_FAULT), "--json", "--out", folder / "out", "--workers", "1")
    assert outcome.code == DONE, outcome.err
    return Saved(outcome, folder / "out")


def test_what_a_study_writes(swept: Saved) -> None:
    """All runs are done; the tidy table has a row per point with units, means and intervals; the page is there."""
    answer = swept.outcome.json()
    assert answer["summary"] | {"runs_per_s": None} == {
        "n_points": 6, "n_points_done": 6, "n_points_failed": 0, "n_runs_planned": 12, "n_runs_done": 12,
        "n_failures": 0, "runs_per_s": None,
    }  # fmt: skip
    for name in ("runs", "table", "csv", "report"):
        assert (swept.folder / answer["files"][name]).is_file()
    table = pd.read_csv(swept.folder / "table.csv")
    pd.testing.assert_frame_equal(table, pd.read_parquet(swept.folder / "table.parquet"), rtol=1e-12)
    assert list(table) == [
        "point", "pushers.count", "errors.turn_sd_rad", "n_runs", "block_speed_m_s", "block_speed_m_s_low",
        "block_speed_m_s_high", "arrived_share", "arrived_share_low", "arrived_share_high",
    ]  # fmt: skip
    runs = pd.read_parquet(swept.folder / "runs.parquet")
    means = runs.groupby("point")["block_speed_m_s"].mean()
    assert table["block_speed_m_s"].tolist() == pytest.approx(means.tolist(), rel=1e-12)
    assert (table["block_speed_m_s_low"] <= table["block_speed_m_s"]).all()
    assert answer["provenance"]["study_hash"] in (swept.folder / "report.html").read_text(encoding="utf-8")


def test_the_same_command_goes_on(swept: Saved) -> None:
    """A finished study is not made again, and its tables stay as they are to the last byte."""
    kept = ("runs.parquet", "table.csv", "table.parquet", "report.html", "points.parquet", "study.json")
    before = {name: (swept.folder / name).read_bytes() for name in kept}
    outcome = call("sweep", swept.folder.parent / "study.toml", "--json", "--out", swept.folder)
    assert outcome.json()["summary"]["n_runs_done"] == 12
    assert {name: (swept.folder / name).read_bytes() for name in kept} == before


def test_results_read_back(swept: Saved) -> None:
    """A folder holds the study itself: nothing of it hangs on the file it came from."""
    result = load_sweep(swept.folder)
    assert result.study.digest() == swept.outcome.json()["provenance"]["study_hash"]
    assert result.summary.is_finished
    assert result.meets_demand() == (result.table["block_speed_m_s_low"] >= 0.0).tolist()
    assert "demand block_speed>=0 m/s is met at the doubtful end of the interval at" in result.answer


def test_a_changed_study_is_refused(swept: Saved, tmp_path: Path) -> None:
    """Another study in the same folder is refused with the way out; --force starts anew."""
    changed = written(tmp_path, STUDY.replace("replicates = 2", "replicates = 1"))
    before = contents(swept.folder)
    assert_refused(call("sweep", changed, "--json", "--out", swept.folder), str(swept.folder), "--force")
    assert contents(swept.folder).keys() == before.keys()
    mine = tmp_path / "out"
    assert call("sweep", changed, "--json", "--out", mine, "--workers", "1").json()["summary"]["n_runs_done"] == 6
    again = call("sweep", written(tmp_path), "--json", "--out", mine, "--workers", "1", "--force")
    assert again.json()["summary"]["n_runs_done"] == 12
    assert (mine / "runs.parquet").read_bytes() == (swept.folder / "runs.parquet").read_bytes()


def test_a_dry_run_tells_and_writes_nothing(tmp_path: Path) -> None:
    """Runs, points, time and disk are told before anything is run."""
    path = written(tmp_path, WITH_A_FAULT)
    outcome = call("sweep", path, "--dry-run", "--out", tmp_path / "out")
    assert outcome.code == DONE
    text = " ".join(outcome.out.split())
    assert "8 runs at 4 points" in text
    assert "on the disk" in text
    assert "2 of 4 points make no valid scenario" in text
    assert not (tmp_path / "out").exists()
    cost = call("sweep", path, "--dry-run", "--json").json()["cost"]
    assert cost["size"] == {"n_points": 4, "least_runs": 8, "most_runs": 8}
    assert cost["least_s"] > 0.0


def test_how_far_it_has_come(swept: Saved, faulty: Saved) -> None:
    """`study show` tells runs done and planned, and failures."""
    assert call("study", "show", swept.folder).out == "12 of 12 runs are done, 0 failed.\n"
    assert call("study", "show", faulty.folder, "--json").json()["summary"]["n_failures"] == 2


def test_failures_do_not_stop_the_rest(swept: Saved, faulty: Saved) -> None:
    """Points that make no scenario are listed with their values and the reason; all other runs are there."""
    assert faulty.outcome.json()["summary"]["n_runs_done"] == 4
    listed = call("study", "failures", faulty.folder, "--json").json()["failures"]
    assert [(row["point"], row["replicate"], row["error"]) for row in listed] == [
        (0, -1, "ScenarioError"), (2, -1, "ScenarioError"),
    ]  # fmt: skip
    text = " ".join(call("study", "failures", faulty.folder).out.split())
    assert "channel.width" in text
    assert "250 mm" in text
    assert "rerun-failed" in text
    page = (faulty.folder / "report.html").read_text(encoding="utf-8")
    assert "Failures" in page
    assert call("study", "failures", swept.folder).out == "no failures\n"


def test_failed_runs_are_made_again(faulty: Saved) -> None:
    """`study rerun-failed` forgets failures and tries once more; what fails for a reason fails again."""
    before = (faulty.folder / "runs.parquet").read_bytes()
    again = call("study", "rerun-failed", faulty.folder, "--json", "--workers", "1").json()
    assert again["summary"]["n_failures"] == 2
    assert (faulty.folder / "runs.parquet").read_bytes() == before


def test_a_run_of_a_study_is_made_again_bit_for_bit(swept: Saved) -> None:
    """`run --from-study` has the scenario and the seed of the row, and gives its numbers."""
    rows = pd.read_parquet(swept.folder / "runs.parquet").set_index(["point", "replicate"])
    for point, replicate in ((0, 1), (5, 0)):
        row = rows.loc[(point, replicate)]
        found = call(
            "run", "--from-study", swept.folder, "--point", str(point), "--replicate", str(replicate), "--json"
        ).json()
        assert found["provenance"]["seed"] == row["seed"]
        assert found["block"]["travel_m"] == row["travel_m"]
        assert found["lock_share"] == row["lock_share"]
        assert found["causes"]["turning"] == row["cause_turning"]
        assert found["duration_s"] == row["duration_s"]


def test_a_report_made_again(swept: Saved, tmp_path: Path) -> None:
    """`report` makes the page of a study from its folder, byte for byte."""
    path = tmp_path / "report.html"
    assert call("report", swept.folder, "--out", path, "--json").json() == {"report": str(path)}
    assert path.read_bytes() == (swept.folder / "report.html").read_bytes()


@pytest.mark.skipif(os.name == "nt", reason="needs the signal of an interrupted terminal")
def test_an_interrupted_study_goes_on(swept: Saved, tmp_path: Path) -> None:
    """A study stopped from the keyboard keeps what is done, says how to go on, and ends like one that ran through."""
    long = STUDY.replace("replicates = 2", "replicates = 40")
    path, stopped, through = written(tmp_path, long), tmp_path / "stopped", tmp_path / "through"
    process = start("sweep", path, "--out", stopped, "--workers", "1")
    deadline = time.monotonic() + PATIENCE
    while not list((stopped / "parts").glob("*.parquet")):
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < deadline
        time.sleep(0.01)
    process.send_signal(signal.SIGINT)
    outcome = finish(process)
    assert outcome.code == INTERRUPTED, outcome
    assert "the same command goes on" in outcome.err
    assert "Traceback" not in outcome.err
    assert 0 < call("study", "show", stopped, "--json").json()["summary"]["n_runs_done"] < 240
    for folder in (stopped, through):
        assert call("sweep", path, "--json", "--out", folder).json()["summary"]["n_runs_done"] == 240
    assert (stopped / "runs.parquet").read_bytes() == (through / "runs.parquet").read_bytes()


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["sweep", "no_such_study"], ["no_such_study", *STUDY_DEMOS]),
        (["sweep", "missing.toml"], ["missing.toml", "no such file"]),
        (["run"], ["--from-study", "--point"]),
        (["run", "service_passage", "--point", "1"], ["--from-study"]),
        (["run", "--from-study", "nowhere", "--point", "1"], ["nowhere", "holds no study"]),
        (["run", "--from-study", "nowhere"], ["--point"]),
        (["study", "show", "nowhere"], ["nowhere", "holds no study"]),
        (["study", "failures", "nowhere"], ["nowhere", "holds no study"]),
        (["study", "rerun-failed", "nowhere"], ["nowhere", "holds no study"]),
    ],
)
def test_what_is_refused(arguments: list[str], words: list[str]) -> None:
    """Each wrong call gets one message that says what to do."""
    assert_refused(call(*arguments), *words)


def test_a_broken_study_file(tmp_path: Path) -> None:
    """All that is wrong is told at once, with the nearest key where one is misspelt."""
    text = STUDY.replace("pushers.count", "pushers.cuont").replace("n = 3", 'n = "three"')
    text = text.replace("block_speed>=0 m/s", "lap_time>=0")
    outcome = call("sweep", written(tmp_path, text))
    assert_refused(outcome, "3 problems", "pushers.count", "vary[2].n", "demand", "add it there")
    assert outcome.code == BAD_INPUT


def test_a_point_that_is_not_there(swept: Saved) -> None:
    """A point beyond the study is refused with the number of points."""
    assert_refused(call("run", "--from-study", swept.folder, "--point", "6"), "--point", "there are 6")


def test_the_schema_of_study_files() -> None:
    """The JSON Schema of study files names their tables."""
    schema = call("schema", "--study").json()
    assert {"base", "design", "vary", "stop", "demand"} <= set(schema["properties"])
