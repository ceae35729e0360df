"""Demands on an audit at the command line: what is printed and with which code it ends."""

from __future__ import annotations

from pathlib import Path

import pytest
from commands import DONE, NOT_MET, Saved, assert_refused, call

from swarmpush.auditing.claims import CLAIMS, MEASURES


def demanding(*demands: str) -> list[str]:
    return [word for demand in demands for word in ("--require", demand)]


def test_met_and_unmet_demands(short: Path, tmp_path: Path) -> None:
    """All demands stand in the JSON with what was measured; those not met are named, and end with their code."""
    demands = ("block_speed <= 1 m/s", "arrival>=0.9", "lock=fails", "block_speed_m_s>=1", "lap_time>=0")
    outcome = call("audit", short, "--json", "--out", tmp_path / "audit", *demanding(*demands))
    assert outcome.code == NOT_MET
    audit = outcome.json()
    rows = audit["demands"]
    assert [row["demand"] for row in rows] == list(demands)
    assert [row["is_met"] for row in rows] == [True, False, True, False, False]
    arrival, speed = rows[1], rows[3]
    assert {key: arrival[key] for key in ("value", "low", "high")} == {
        "value": audit["arrival"]["share"], "low": audit["arrival"]["low"], "high": audit["arrival"]["high"],
    }  # fmt: skip
    measured = audit["ladder"][-1]["block_speed_m_s"]
    assert (speed["value"], speed["low"], speed["high"]) == (measured["mean"], measured["low"], measured["high"])
    assert (rows[4]["value"], rows[4]["reason"]) == (None, "nothing could be measured")
    assert outcome.err.splitlines() == [
        f"required: {row['demand']}, but {row['reason']}" for row in rows if not row["is_met"]
    ]
    assert "the low end of its interval is 0 (mean 0)" in outcome.err
    saved = call("report", tmp_path / "audit", "--out", tmp_path / "again.html")
    assert saved.code == DONE


def test_demands_that_are_met(short: Path, tmp_path: Path, audited: Saved) -> None:
    """With its demands met an audit is done and says nothing more; the rest of the result is the same."""
    outcome = call("audit", short, "--json", "--out", tmp_path / "audit", *demanding("arrival<=1", "lock=fails"))
    assert (outcome.code, outcome.err) == (DONE, "")
    assert outcome.json() | {"files": None, "demands": []} == audited.outcome.json() | {"files": None}


@pytest.mark.parametrize(
    ("demand", "word"),
    [
        ("arrival>0.9", "NAME>=NUMBER"),
        ("arival>=0.9", "there are arrival, block speed"),
        ("block_speed>=100 mm", "does not measure"),
        ("lock=perhaps", "there are holds"),
        ("", "NAME>=NUMBER"),
    ],
)
def test_bad_demands_are_refused_before_the_work(demand: str, word: str, short: Path, tmp_path: Path) -> None:
    """A demand that cannot be read is one message and bad input, before anything is run or written."""
    outcome = call("audit", short, "--out", tmp_path / "audit", *demanding("lock", demand))
    assert_refused(outcome, f"--require {demand}: ", word)
    assert outcome.err.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


def test_help_lists_what_can_be_demanded() -> None:
    """The help names every measure and every claim."""
    text = " ".join(call("audit", "--help").out.split())
    for name in (*MEASURES, *CLAIMS):
        assert name in text
    assert "block_speed>=100 um/s" in text


def test_the_console_shows_what_would_come_back(short: Path, tmp_path: Path) -> None:
    """The console lists assumptions by their gain, most first, and the crew that bounces at random."""
    text = " ".join(call("audit", short, "--out", tmp_path / "audit").out.split())
    assert "what would come back if" in text
    assert "The same crew bouncing at random: " in text
    assert "errors of headings and bodies are compared with geometry" in text
