"""Demands on an audit: what can be written, and which end of an interval decides."""

from __future__ import annotations

import math

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from swarmpush.auditing.claims import CLAIMS, MEASURES, VERDICTS
from swarmpush.auditing.demands import DemandResult, check_demands, read_demand
from swarmpush.auditing.statistics import Estimate, Verdict, mean_interval, share_interval
from swarmpush.auditing.verdicts import Finding

RUNS = pd.DataFrame(
    {
        "block_speed_m_s": [1.0e-4, 1.2e-4, 1.1e-4, 1.3e-4],
        "has_arrived": [1.0, 1.0, 1.0, 1.0],
        "lap_time_s": [math.nan] * 4,
        "lock_share": [0.2, 0.3, 0.2, 0.3],
    }
)


def finding(name: str, verdict: Verdict, predicted: float = 1.0, measured: float = 0.9) -> Finding:
    return Finding(name, "", "1", predicted, Estimate(measured, 0.8, 1.0, 4), 0.95, 0.1, verdict, (0.9, 1.1))


def check(text: str, *findings: Finding) -> DemandResult:
    (found,) = check_demands([read_demand(text)], findings, RUNS, 0.95)
    return found


@pytest.mark.parametrize(
    ("text", "name", "relation", "bound"),
    [
        ("arrival>=0.9", "arrival", ">=", 0.9),
        ("arrival >= 90 %", "arrival", ">=", 0.9),
        ("block_speed_m_s>=1e-4", "block speed", ">=", 1e-4),
        ("block_speed>=100 um/s", "block speed", ">=", 1e-4),
        (" Block-Speed <= 100um/s ", "block speed", "<=", 1e-4),
        ("lap time<=5", "lap time", "<=", 5.0),
        ("lap_time_s <= 5000 ms", "lap time", "<=", 5.0),
        ("nudge>=-1 mm", "nudge", ">=", -1e-3),
        ("impact_Ns>=2 mN*s", "impact", ">=", 2e-3),
        ("strike rate>=.5", "strike rate", ">=", 0.5),
        ("lock=holds", "lock", "=", Verdict.HOLDS),
        ("strikes-per-lap = Fails", "strikes per lap", "=", Verdict.FAILS),
        ("lock", "lock", "=", Verdict.HOLDS),
    ],
)
def test_what_can_be_demanded(text: str, name: str, relation: str, bound: float | Verdict) -> None:
    """Numbers with and without unit, verdicts, bare claims; names with spaces, hyphens, underscores or units."""
    found = read_demand(text)
    assert (found.text, found.name, found.relation) == (text, name, relation)
    assert found.bound == (bound if isinstance(bound, Verdict) else pytest.approx(bound))


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("", "write NAME>=NUMBER"),
        ("arrival>0.9", "write NAME>=NUMBER"),
        ("arrival>=", "write NAME>=NUMBER"),
        (">=0.9", "write NAME>=NUMBER"),
        ("arrival==1", "verdict"),
        ("arival", "no claim is called arival; there are instant turns"),
        ("arival>=0.9", "no measure is called arival; there are arrival"),
        ("momentum per strike>=1", "no measure is called momentum per strike"),
        ("lock=perhaps", "no verdict is called perhaps"),
        ("arrival=0.9", "numbers go with >="),
        ("block_speed>=100 mm", "does not measure"),
        ("block_speed>=fast", "is no number here"),
        ("block_speed>=__import__('os')", "is no number here"),
        ("block_speed>=nan", "no number"),
        ("block_speed>=inf m/s", "no finite number"),
        ("block_speed>=1e999", "no finite number"),
        ("arrival>=0.5>=0.1", "is no number here"),
        ("arrival>=" + "9" * 300, "write NAME>=NUMBER"),
    ],
)
def test_what_cannot_be_demanded(text: str, word: str) -> None:
    """Anything else is refused with a sentence."""
    with pytest.raises(ValueError, match=word.replace("(", "\\(")):
        read_demand(text)


@given(st.text(max_size=40))
def test_any_text_is_read_or_refused(text: str) -> None:
    """Whatever is written, there is a demand or a sentence."""
    try:
        name = read_demand(text).name
    except ValueError as error:
        name, told = None, str(error)
    assert name in {*CLAIMS, *MEASURES} if name else len(told) > 10


def test_words_of_verdicts() -> None:
    """The verdicts that the help lists are those there are."""
    assert list(VERDICTS) == [str(verdict) for verdict in Verdict]


def test_the_doubtful_end_decides() -> None:
    """At least: the low end of the interval must reach it; at most: the high end must not pass it."""
    speed = mean_interval(RUNS["block_speed_m_s"], 0.95)
    for text, is_met in (
        (f"block_speed>={speed.low!r}", True),
        (f"block_speed>={speed.low * 1.001!r}", False),
        (f"block_speed<={speed.high!r}", True),
        (f"block_speed<={speed.high * 0.999!r}", False),
        (f"block_speed>={speed.mean!r}", False),
        (f"block_speed<={speed.mean!r}", False),
    ):
        found = check(text)
        assert found.is_met == is_met
        assert (found.value, found.low, found.high) == (speed.mean, speed.low, speed.high)
        assert bool(found.reason) != is_met
        assert found.end == ("low" if ">=" in text else "high")
    assert "the low end of its interval is 9.446e-05 m/s (mean 0.000115 m/s)" in check("block_speed>=1").reason
    assert "the high end" in check("block_speed<=0").reason


def test_arrival_is_a_share() -> None:
    """Four arrivals of four show a share of 51 % by the score interval; the reason says how many would show 90 %."""
    assert check("arrival>=0.51").is_met
    found = check("arrival>=0.9")
    assert not found.is_met
    assert (found.low, found.high) == (share_interval(4, 4, 0.95).low, 1.0)
    assert "35 replicates could show it" in found.reason
    assert "no runs can show it" in check("arrival>=1").reason


def test_what_was_not_measured_is_not_met() -> None:
    """Without a completed lap no demand on the lap time is met, in either direction."""
    for text in ("lap_time<=100", "lap_time>=0"):
        found = check(text)
        assert not found.is_met
        assert found.reason == "nothing could be measured"


def test_demanded_verdicts() -> None:
    """A verdict is met by itself alone, and a claim that was not judged meets none."""
    lock = finding("lock", Verdict.STRAINED)
    assert check("lock=strained", lock).is_met
    assert check("lock", lock).reason == check("lock=holds", lock).reason == "it is strained"
    assert check("lock=fails", lock).reason == "it is strained"
    assert check("lock=fails", finding("lock", Verdict.HOLDS)).reason == "it holds"
    assert check("lock=fails").reason == "geometry gives no lap here to judge"
    assert (check("lock", lock).value, check("lock", lock).low, check("lock", lock).end) == (0.9, 0.8, "verdict")


def test_arrival_that_holds_is_arrival() -> None:
    """A plan that rightly foresees no arrival does not meet the demand for it."""
    right = finding("arrival", Verdict.HOLDS, predicted=0.0, measured=0.0)
    for text in ("arrival", "arrival=holds"):
        assert "the plan itself says" in check(text, right).reason
    assert "35 replicates could" in check("arrival", finding("arrival", Verdict.UNDECIDED, measured=1.0)).reason
