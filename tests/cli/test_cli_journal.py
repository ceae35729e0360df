"""An audit that is broken off goes on where it stopped."""

from __future__ import annotations

import json
import os
import signal
import time
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from commands import DONE, INTERRUPTED, PATIENCE, Saved, assert_refused, call, contents, edited, finish, start

JOURNAL = "unfinished.jsonl"


def table(folder: Path) -> pd.DataFrame:
    """The runs of a saved audit."""
    return pd.read_parquet(folder / "replicates.parquet")


def journal(audited: Saved) -> list[dict[str, Any]]:
    """What the journal of an audit holds when all its runs are done."""
    rows: list[dict[str, Any]] = table(audited.folder).to_dict("records")
    return [audited.outcome.json()["provenance"], *rows]


def write(folder: Path, entries: list[Any]) -> Path:
    """A folder as a broken-off audit leaves it."""
    path = folder / JOURNAL
    path.write_text("".join(json.dumps(entry) + "\n" for entry in entries), encoding="utf-8")
    return path


@pytest.mark.skipif(os.name == "nt", reason="needs the signal of an interrupted terminal")
def test_an_interrupted_audit_goes_on(tmp_path: Path) -> None:
    """An audit stopped from the keyboard says how to go on, and then ends with the table of one that ran through."""
    scenario, stopped, through = tmp_path / "rig.toml", tmp_path / "stopped", tmp_path / "through"
    scenario.write_text(edited(('time_limit = "3 s"', 'time_limit = "60 s"')), encoding="utf-8")
    process = start("audit", scenario, "--out", stopped, "--workers", "1")
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
    n_finished = (stopped / JOURNAL).read_text().count("\n") - 1

    resumed, direct = (call("audit", scenario, "--json", "--out", folder).json() for folder in (stopped, through))
    assert resumed | {"files": None} == direct | {"files": None}
    pd.testing.assert_frame_equal(table(stopped), table(through), check_exact=True)
    assert n_finished < len(table(through))
    assert contents(stopped).keys() == contents(through).keys()


def test_finished_runs_are_not_made_again(audited: Saved, short: Path, tmp_path: Path) -> None:
    """A run that stands in the journal is taken from there; those that do not are made, and give what they gave."""
    header, *rows = journal(audited)
    marked = rows[0] | {"travel_m": 123.0}
    write(tmp_path, [header, marked, *rows[3:7]])
    assert call("audit", short, "--out", tmp_path).code == DONE
    expected = table(audited.folder)
    expected.loc[0, "travel_m"] = 123.0
    pd.testing.assert_frame_equal(table(tmp_path), expected, check_exact=True)
    assert not (tmp_path / JOURNAL).exists()


@pytest.mark.parametrize("n_bytes", [1, 40])
def test_a_journal_cut_off_within_a_line(n_bytes: int, audited: Saved, short: Path, tmp_path: Path) -> None:
    """A journal whose last line was cut off, as by a power failure, still gives the same table."""
    path = write(tmp_path, journal(audited)[:6])
    path.write_bytes(path.read_bytes()[:-n_bytes])
    assert call("audit", short, "--out", tmp_path).code == DONE
    pd.testing.assert_frame_equal(table(tmp_path), table(audited.folder), check_exact=True)


@pytest.mark.parametrize("kind", ["other scenario", "other seed", "other version", "damaged", "binary", "no run"])
def test_a_journal_of_something_else_is_refused(kind: str, audited: Saved, short: Path, tmp_path: Path) -> None:
    """A journal that is damaged, or of another scenario, seed or version, is refused by its name and kept."""
    header, *rows = journal(audited)
    match kind:
        case "other scenario":
            write(tmp_path, [header | {"scenario_hash": "0" * 16}, *rows])
        case "other seed":
            write(tmp_path, [header | {"seed": 2}, *rows])
        case "other version":
            write(tmp_path, [header | {"versions": header["versions"] | {"pymunk": "7.2.0"}}, *rows])
        case "damaged":
            write(tmp_path, [header]).write_text(json.dumps(header) + "\n{what is this}\n")
        case "binary":
            (tmp_path / JOURNAL).write_bytes(bytes(range(256)))
        case "no run":
            write(tmp_path, [header, {"colour": "red"}])
    before = contents(tmp_path)
    assert_refused(call("audit", short, "--out", tmp_path), str(tmp_path / JOURNAL), "delete it")
    assert contents(tmp_path) == before


def test_a_folder_in_place_of_the_journal(short: Path, tmp_path: Path) -> None:
    """A journal that cannot be a file is refused by its name."""
    (tmp_path / JOURNAL).mkdir()
    assert_refused(call("audit", short, "--out", tmp_path), str(tmp_path / JOURNAL))
