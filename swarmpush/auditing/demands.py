"""Demands on an audit: a small grammar, and whether the runs meet them even at the doubtful end of the interval.

    NAME >= NUMBER [UNIT]     the interval's low end must reach the number
    NAME <= NUMBER [UNIT]     the interval's high end must not pass it
    CLAIM = VERDICT           the claim must have this verdict
    CLAIM                     the claim must hold

Names may be written with spaces, hyphens or underscores and with or without their unit. Numbers are in SI units unless
a unit follows. To demand that the claim of arrival holds is to demand that the block does arrive.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import pandas as pd

from swarmpush.auditing.claims import ARRIVAL, CLAIMS, MEASURES, VERDICTS
from swarmpush.auditing.statistics import Estimate, Verdict, mean_interval, runs_to_show, share_interval
from swarmpush.auditing.verdicts import Finding
from swarmpush.quantities import to_si

_DEMAND = re.compile(r"\s*([A-Za-z][A-Za-z0-9_ \-]*?)\s*(?:(>=|<=|=)\s*(\S(?:.*\S)?))?\s*")
_LONGEST = 200  # characters


@dataclass(frozen=True)
class Demand:
    """One demand. text: as written. name: of a measure or a claim. relation: ">=", "<=" or "=". bound: number in SI
    units, or verdict."""

    text: str
    name: str
    relation: str
    bound: float | Verdict


@dataclass(frozen=True)
class DemandResult:
    """Whether a demand is met.

    demand: as written. value, low, high: what was measured, with its interval; NaN where nothing was. is_met. end: what
    decided: "low" or "high" end of the interval, or the "verdict". reason: why it is not met; empty if it is.
    """

    demand: str
    value: float
    low: float
    high: float
    is_met: bool
    end: str
    reason: str


def read_demand(text: str) -> Demand:
    """Read a demand.

    Raises:
        ValueError: with a sentence when the text is no demand, or names what does not exist.

    >>> read_demand("block_speed >= 100 um/s")
    Demand(text='block_speed >= 100 um/s', name='block speed', relation='>=', bound=0.0001)
    >>> read_demand("Lap-time = strained").bound
    <Verdict.STRAINED: 'strained'>
    """
    match = _DEMAND.fullmatch(text) if len(text) <= _LONGEST else None
    if match is None:
        raise ValueError("write NAME>=NUMBER, NAME<=NUMBER, CLAIM=VERDICT or CLAIM; numbers may have a unit")
    name, relation, bound = _words(match[1]), match[2], match[3]
    if relation in (">=", "<="):
        if name not in _NAMES:
            raise ValueError(f"no measure is called {name}; there are {', '.join(MEASURES)}")
        measure = _NAMES[name]
        unit = MEASURES[measure][1]
        return Demand(text, measure, relation, _number(bound, unit))
    if name not in CLAIMS:
        raise ValueError(f"no claim is called {name}; there are {', '.join(CLAIMS)}")
    if relation is None:
        return Demand(text, name, "=", Verdict.HOLDS)
    if bound.lower() not in VERDICTS:
        raise ValueError(f"no verdict is called {bound}; there are {', '.join(VERDICTS)} (numbers go with >= or <=)")
    return Demand(text, name, "=", Verdict(bound.lower()))


def check_demands(
    demands: Iterable[Demand], findings: Sequence[Finding], runs: pd.DataFrame, confidence: float
) -> tuple[DemandResult, ...]:
    """Hold demands against an audit.

    Arguments:
        demands: from `read_demand`. findings: the audit's verdicts.
        runs: summaries of independent runs of the scenario as given, one row each. confidence: of the intervals.

    Returns:
        One result per demand, in order.
    """
    by_name = {finding.assumption: finding for finding in findings}
    return tuple(
        _judged(demand, by_name.get(demand.name))
        if isinstance(demand.bound, Verdict)
        else _measured(demand, demand.bound, runs, confidence)
        for demand in demands
    )


def _measured(demand: Demand, bound: float, runs: pd.DataFrame, confidence: float) -> DemandResult:
    column, unit = MEASURES[demand.name]
    found = (
        share_interval(int(runs[column].sum()), len(runs), confidence)
        if demand.name == ARRIVAL
        else mean_interval(runs[column], confidence)
    )
    is_floor = demand.relation == ">="
    end = found.low if is_floor else found.high
    is_met = math.isfinite(found.mean) and (end >= bound if is_floor else end <= bound)
    shown = "" if unit == "1" else f" {unit}"
    reason = (
        f"the {'low' if is_floor else 'high'} end of its interval is {end:.4g}{shown} (mean {found.mean:.4g}{shown})"
    )
    if not math.isfinite(found.mean):
        reason = "nothing could be measured"
    elif not is_met and is_floor and demand.name == ARRIVAL and found.mean == 1.0:
        reason += (
            f"; {runs_to_show(bound, confidence)} replicates could show it" if bound < 1.0 else "; no runs can show it"
        )
    return _result(demand, found, "" if is_met else reason)


def _judged(demand: Demand, finding: Finding | None) -> DemandResult:
    if finding is None:
        return _result(demand, Estimate(math.nan, math.nan, math.nan, 0), "geometry gives no lap here to judge")
    reason = _shortfall(finding) if demand.bound is Verdict.HOLDS else ""
    if demand.bound is not Verdict.HOLDS and finding.verdict is not demand.bound:
        reason = _SAID[finding.verdict]
    return _result(demand, finding.measured, reason)


_SAID = {
    Verdict.HOLDS: "it holds",
    Verdict.FAILS: "it fails",
    Verdict.STRAINED: "it is strained",
    Verdict.UNDECIDED: "it is undecided",
}


def _shortfall(finding: Finding) -> str:
    """Why a claim that is demanded does not hold; empty if it does."""
    if finding.assumption == ARRIVAL and finding.predicted == 0.0:
        return "the plan itself says that the block does not arrive in time"
    if finding.verdict is Verdict.HOLDS:
        return ""
    if finding.assumption == ARRIVAL and finding.measured.mean == 1.0:
        needed = runs_to_show(1.0 - finding.tolerance, finding.confidence)
        return f"{finding.measured.n} runs cannot show it; {needed} replicates could"
    return _SAID[finding.verdict]


def _result(demand: Demand, found: Estimate, reason: str) -> DemandResult:
    end = {">=": "low", "<=": "high", "=": "verdict"}[demand.relation]
    return DemandResult(demand.text, found.mean, found.low, found.high, not reason, end, reason)


def _words(name: str) -> str:
    return " ".join(re.split(r"[\s_\-]+", name.strip().lower()))


def _number(text: str, unit: str) -> float:
    try:
        number = float(text) if re.fullmatch(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d{1,3})?", text) else to_si(text, unit)
    except ValueError as error:
        raise ValueError(f"{text!r} is no number here: {error}") from None
    if not math.isfinite(number):
        raise ValueError(f"{text!r} is no finite number")
    return number


# a measure is known by its plain name and by its column, which ends in its unit
_NAMES = {_words(spelling): name for name, (column, _) in MEASURES.items() for spelling in (name, column)}
