"""What --json prints: the keys that others build on, and nothing but JSON."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from commands import BAD_INPUT, DONE, NOT_MET, Outcome, Saved, assert_refused, call, edited

from swarmpush.demos import DEMOS, demo

PLAN = """
laps.*.surfaces laps.*.hits laps.*.lap_length_m laps.*.lap_time_s laps.*.multipliers laps.*.rear_hit.y_m
laps.*.rear_hit.heading_rad laps.*.band.heading_rad laps.*.laps_to_drift_out
capture.captured capture.lost capture.undecided force.stall_N force.floor_friction_N force.pushers_to_move regime
forecast.nudge_m forecast.block_speed_m_s forecast.strikes_to_goal forecast.time_to_goal_s
"""
RUN = """
block.travel_m block.speed_m_s block.yaw_max_rad visits strikes strike_impulse_Ns.impact strike_impulse_Ns.lean
lock_share laps books.residual_rel books.phantom_share ended causes files
"""
AUDIT = """
answer arrival.share arrival.low arrival.high
ladder.*.rung ladder.*.block_speed_m_s.mean ladder.*.block_speed_m_s.low ladder.*.block_speed_m_s.high ladder.*.cost
ladder.*.against restored.*.assumption restored.*.statement restored.*.block_speed_m_s.mean restored.*.gain_m_s.mean
restored.*.gain_m_s.low restored.*.gain_m_s.high restored.*.arrival.mean baseline.block_speed_m_s.mean
baseline.arrival.mean baseline.lead_m_s.low demands
verdicts.*.assumption verdicts.*.statement verdicts.*.predicted verdicts.*.measured.mean verdicts.*.measured.low
verdicts.*.measured.high verdicts.*.tolerance verdicts.*.verdict numerics provenance.versions provenance.scenario_hash
provenance.seed
"""


def missing(value: Any, paths: str) -> list[str]:
    """Those dotted paths that lead nowhere; a star stands for every item of a list, of which there must be some."""

    def leads_on(value: Any, way: list[str]) -> bool:
        if not way:
            return True
        if way[0] == "*":
            return isinstance(value, list) and bool(value) and all(leads_on(item, way[1:]) for item in value)
        return isinstance(value, dict) and way[0] in value and leads_on(value[way[0]], way[1:])

    return [path for path in paths.split() if not leads_on(value, path.split("."))]


def test_plan_has_the_documented_keys(planned: Saved) -> None:
    """A plan gives laps with their stability, the shares of starts, the forces and the forecast."""
    plan = planned.outcome.json()
    assert missing(plan, PLAN) == []
    assert plan["laps"][0]["surfaces"] == ["rear", "top", "bottom"]
    low, high = plan["laps"][0]["band"]["heading_rad"]
    assert low <= plan["laps"][0]["rear_hit"]["heading_rad"] <= high


def test_run_has_the_documented_keys(ran: Saved) -> None:
    """A run gives the block's way, visits, strikes, books, how it ended and why, and its files."""
    run = ran.outcome.json()
    assert missing(run, RUN) == []
    assert run["ended"] == "time"
    assert run["visits"] > 0


def test_audit_has_the_documented_keys(audited: Saved) -> None:
    """An audit gives its answer, the ladder with its costs, the verdicts, the numerics and where it came from."""
    audit = audited.outcome.json()
    assert missing(audit, AUDIT) == []
    rungs = ["geometry", "headings", "bodies", "turning", "yaw", "errors", "crowding"]
    assert [row["rung"] for row in audit["ladder"]] == rungs
    assert [row["assumption"] for row in audit["restored"]] == ["turning", "yaw", "errors", "crowding"]
    assert {row["verdict"] for row in audit["verdicts"]} <= {"holds", "strained", "fails", "undecided"}
    assert audit["provenance"]["seed"] == 1


def test_json_stands_alone(planned: Saved, ran: Saved, audited: Saved) -> None:
    """With --json a command says nothing on the error stream either."""
    assert [saved.outcome.err for saved in (planned, ran, audited)] == ["", "", ""]


def test_the_seed_given_is_the_seed_used(short: Path) -> None:
    """The same seed gives the same run, another seed another one, and the result says which it was."""
    one, same, other = (call("run", short, "--json", "--seed", seed).json() for seed in ("7", "7", "8"))
    assert one["provenance"]["seed"] == 7
    assert one == same
    assert one["books"] != other["books"]


# ---- demanded verdicts ---------------------------------------------------------------------------------------------


def lenient() -> str:
    """A goal that the block reaches at once, and verdicts with so wide a band that two runs settle them."""
    return edited(
        ("tolerance = 0.10", "tolerance = 1.0"),
        ("confidence = 0.95", "confidence = 0.51"),
        ('travel = "0.10 m"', 'travel = "0.1 um"'),
        ('time_limit = "3 s"', 'time_limit = "30 s"'),
    )


def test_a_demanded_verdict_that_holds(tmp_path: Path) -> None:
    """An audit whose demanded claims hold is done, however the claim's name is written."""
    scenario = tmp_path / "lenient.toml"
    scenario.write_text(lenient(), encoding="utf-8")
    wanted = ("--require", "arrival", "--require", "Strikes-per-lap")
    outcome = call("audit", scenario, "--json", "--out", tmp_path / "audit", *wanted)
    verdicts = {row["assumption"]: row["verdict"] for row in outcome.json()["verdicts"]}
    assert (verdicts["arrival"], verdicts["strikes per lap"]) == ("holds", "holds")
    assert (outcome.code, outcome.err) == (DONE, "")


def test_demanded_verdicts_that_do_not_hold(short: Path, tmp_path: Path, audited: Saved) -> None:
    """Claims that are demanded and do not hold are named, each with its verdict; the result is there all the same."""
    outcome = call("audit", short, "--json", "--out", tmp_path / "audit", "--require", "lock", "--require", "lap time")
    verdicts = {row["assumption"]: row["verdict"] for row in outcome.json()["verdicts"]}
    assert (verdicts["lock"], verdicts["lap time"]) == ("fails", "undecided")
    assert outcome.code == NOT_MET
    assert outcome.err.splitlines() == ["required: lock, but it fails", "required: lap time, but it is undecided"]
    assert outcome.json() | {"files": None, "demands": []} == audited.outcome.json() | {"files": None}
    assert (tmp_path / "audit" / "report.html").exists()


def test_an_unknown_claim_is_refused_before_the_work(short: Path, tmp_path: Path) -> None:
    """A claim that does not exist is bad input; the message lists those that do, and nothing is written."""
    outcome = call("audit", short, "--out", tmp_path / "audit", "--require", "arival")
    assert_refused(outcome, "arival", "arrival", "block speed")
    assert list(tmp_path.iterdir()) == []


# ---- schema --------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def validator() -> Any:
    outcome = call("schema", "--json")
    assert outcome == Outcome(DONE, call("schema").out, "")
    schema = outcome.json()
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema)


@pytest.mark.parametrize("name", DEMOS)
def test_schema_takes_the_demos(validator: Any, name: str) -> None:
    """The schema accepts every demo scenario as it stands in its file."""
    tables = tomllib.loads(demo(name).read_text(encoding="utf-8"))
    assert [error.message for error in validator.iter_errors(tables)] == []


SPOILT: list[tuple[str, Any]] = [
    ("colour", {}),
    ("format", 2),
    ("pushers", {"count": 0}),
    ("pushers", {"cuont": 6}),
    ("block", {"yaw": "loose"}),
    ("routine", {"stages": [{"name": "cross", "acts": [{"act": "fly"}]}]}),
    ("goal", None),
]


@pytest.mark.parametrize(("key", "wrong"), SPOILT)
def test_schema_sees_mistakes(validator: Any, key: str, wrong: Any) -> None:
    """The schema refuses unknown keys and acts, values out of range, and a missing table."""
    tables = tomllib.loads(demo("service_passage").read_text(encoding="utf-8"))
    if wrong is None:
        del tables[key]
    elif isinstance(wrong, dict):
        tables[key] = tables.get(key, {}) | wrong
    else:
        tables[key] = wrong
    assert not validator.is_valid(tables)


def test_schema_in_a_file(tmp_path: Path) -> None:
    """The schema is written to a file that is not there yet, and replaces one only by force."""
    path = tmp_path / "schema.json"
    assert call("schema", "--json", "--out", path).json() == {"schema": str(path)}
    assert json.loads(path.read_text(encoding="utf-8")) == call("schema").json()
    path.write_text("mine")
    assert_refused(call("schema", "--out", path), str(path), "--force")
    assert path.read_text() == "mine"
    assert call("schema", "--out", path, "--force").code == DONE
    assert path.read_text() != "mine"
    assert call("schema", "--out", tmp_path / "nowhere" / "schema.json").code == BAD_INPUT
