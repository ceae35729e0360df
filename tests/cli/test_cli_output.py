"""Where results go: folders that are made, filled, and not overwritten by accident."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pandas as pd
import pytest
from commands import DONE, Saved, assert_refused, call, contents, finish, start

from swarmpush.cautions import CAUTIONS
from swarmpush.demos import DEMOS


def test_plan_writes_its_files(planned: Saved) -> None:
    """A plan leaves a picture and the same JSON that it printed."""
    files = contents(planned.folder)
    assert files.keys() == {"plan.json", "plan.png"}
    assert json.loads(files["plan.json"]) == planned.outcome.json()
    assert files["plan.png"].startswith(b"\x89PNG\r\n")


FIGURES = {"lap", "end", "path", "impulses", "books", "energy", "leaning", "states"}


def figures(*names: str) -> set[str]:
    """The tables beside a report."""
    return {f"figures/{name}.csv" for name in (*FIGURES, *names)}


def test_run_writes_its_files(ran: Saved) -> None:
    """A run leaves its tables under the names that it printed, its summary, a report and the data of its figures."""
    run = ran.outcome.json()
    names = {name.replace("\\", "/") for name in contents(ran.folder)}
    assert names == {"run.json", "report.html", *run["files"].values(), *figures()}
    summary = json.loads((ran.folder / "run.json").read_text(encoding="utf-8"))
    assert summary.pop("scenario")["about"]["name"] == "Service passage"
    assert summary == run
    assert len(pd.read_parquet(ran.folder / run["files"]["visits"])) == run["visits"]


def test_audit_writes_its_files(audited: Saved) -> None:
    """An audit leaves its runs as a table, one run in full, the JSON that it printed and a report; no journal."""
    sample = {f"sample/{name}" for name in ("run.json", "visits.parquet", "block.parquet", "pushers.parquet")}
    files = contents(audited.folder)
    names = {name.replace("\\", "/") for name in files}
    assert names == {"audit.json", "replicates.parquet", "report.html", *sample, *figures("ladder", "arrivals")}
    audit = audited.outcome.json()
    saved = json.loads(files["audit.json"])
    assert audit.pop("files") == saved.pop("files") | {"folder": str(audited.folder), "report": "report.html"}
    assert saved == audit
    replicates = pd.read_parquet(audited.folder / "replicates.parquet")
    as_given = replicates[replicates["rung"] == "crowding"]
    assert as_given["block_speed_m_s"].mean() == pytest.approx(audit["ladder"][-1]["block_speed_m_s"]["mean"])


@pytest.mark.parametrize("command", ["plan", "run", "audit"])
def test_results_are_not_overwritten(command: str, short: Path, tmp_path: Path) -> None:
    """A folder that holds something is refused and left as it is; with --force the results are written into it."""
    (tmp_path / "mine.txt").write_text("mine")
    assert_refused(call(command, short, "--out", tmp_path), str(tmp_path), "--force")
    assert contents(tmp_path) == {"mine.txt": b"mine"}
    assert call(command, short, "--out", tmp_path, "--force").code == DONE
    assert (tmp_path / f"{command}.json").exists()
    assert (tmp_path / "mine.txt").read_text() == "mine"


@pytest.mark.parametrize("command", ["plan", "run", "audit"])
def test_a_place_that_cannot_be_written(command: str, short: Path, tmp_path: Path) -> None:
    """A file named as the folder, or as a part of the way to it, is refused before any work is done."""
    file = tmp_path / "results"
    file.write_text("mine")
    assert_refused(call(command, short, "--out", file), str(file))
    assert_refused(call(command, short, "--out", file / "below"), str(file / "below"))
    assert file.read_text() == "mine"


def test_an_audit_finds_a_folder(short: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without --out audits go to numbered folders below the present one and say where."""
    monkeypatch.chdir(tmp_path)
    for name in ("short-audit", "short-audit-2"):
        outcome = call("audit", short)
        report = Path("results", name, "report.html")
        assert report.exists()
        assert outcome.out.splitlines()[-1] == f"report: {report}"
    assert {path.name for path in Path("results").iterdir()} == {"short-audit", "short-audit-2"}


def test_a_demo_is_found_by_its_name(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A demo scenario is at hand everywhere under its name, unless a file of that name is there."""
    monkeypatch.chdir(tmp_path)
    assert call("plan", DEMOS[0], "--json").code == DONE
    Path(DEMOS[0]).write_text("")
    assert_refused(call("plan", DEMOS[0]), DEMOS[0], "empty")


@pytest.mark.parametrize("command", ["plan", "run"])
def test_text_for_people(command: str, short: Path) -> None:
    """Without --json there is text with the caution in it, and no codes for colours when it goes to a file."""
    outcome = call(command, short)
    assert outcome.code == DONE
    assert "Service passage" in outcome.out
    assert CAUTIONS[0] in re.sub(r"\s+", " ", outcome.out)
    assert "\x1b" not in outcome.out


def test_a_reader_that_goes_away(short: Path) -> None:
    """When the reader of a pipe has gone, the command ends without complaint."""
    process = start("plan", short, "--json")
    assert process.stdout is not None
    process.stdout.close()
    assert process.stderr is not None
    complaints = process.stderr.read()
    process.wait()
    process.stderr.close()
    assert complaints == ""


def test_the_command_in_a_process_of_its_own(planned: Saved, short: Path) -> None:
    """Called from a shell, a command prints the same JSON as in this process."""
    outcome = finish(start("plan", short, "--json"))
    assert (outcome.code, outcome.err) == (DONE, "")
    assert outcome.json() == planned.outcome.json()
