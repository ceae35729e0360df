"""Scenarios close to the one given: crews of other sizes, and each measured value a little lower and higher.

Runs of neighbours have the seeds of the scenario as given, so that what a neighbour changes is a paired difference.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

from swarmpush.auditing.ladder import climb
from swarmpush.auditing.looks import confidence_at
from swarmpush.auditing.rungs import Runs
from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval
from swarmpush.kinematics.planning import Plan
from swarmpush.problems import ScenarioError
from swarmpush.scenario import Scenario
from swarmpush.vary import known_keys, value_at, with_value

OCTAVES = range(-2, 4)  # crews from a quarter of the one given to eight times as many
REACH = 0.25  # relative; large enough to stand out from chance, small enough for a value that was guessed
N_HALVINGS = 4  # of the reach, where a value a quarter off makes no valid scenario

CREW, SHIFTED = "crew of ", "shifted: "  # before a number and before a key: the levels of their runs

MEASURED_TABLES = ("channel", "block", "pushers", "floor", "fluid", "contacts", "errors")
# places and nature's constants, which nobody measures to learn what a crew will do
_KNOWN = frozenset({"channel.length", "block.rear_at", "block.offset", "floor.gravity"})


class Shift(NamedTuple):
    """A measured value multiplied by 1 - reach and by 1 + reach."""

    key: str
    value: float
    reach: float
    lower: Scenario
    higher: Scenario

    @property
    def levels(self) -> tuple[str, str]:
        """How the runs of both are called among all runs."""
        return f"{SHIFTED}{self.key} lower", f"{SHIFTED}{self.key} higher"


@dataclass(frozen=True)
class CrewSize:
    """What a crew of another size does, or the one given.

    count: pushers. block_speed_m_s: mean over replicates. gain_m_s: paired difference to the next smaller crew tried;
    None for the smallest. arrival: share of runs. strikes_1_s: of one pusher. too_weak: share of the time in which
    those who lean could not overcome the floor. in_touch: share of the crew's time in touch with one another.
    """

    count: int
    block_speed_m_s: Estimate
    gain_m_s: Estimate | None
    arrival: Estimate
    strikes_1_s: float
    too_weak: float
    in_touch: float


@dataclass(frozen=True)
class Influence:
    """What one measured value does to the block's speed.

    key: where it stands in the scenario. value: as given, SI. reach: by which share it was lowered and raised.
    change_m_s: of the block's speed per relative change of the value, dv/dln(value), from paired differences; the
    intervals of all keys hold together. precision: relative error of the value that shifts the speed by the scenario's
    tolerance, at the change found; at_worst: the same at the far end of its interval. Both are infinite where nothing
    changes.
    """

    key: str
    value: float
    reach: float
    change_m_s: Estimate
    precision: float
    at_worst: float

    @property
    def is_seen(self) -> bool:
        """Whether chance alone does not explain the change."""
        return self.change_m_s.low > 0.0 or self.change_m_s.high < 0.0


def other_crews(s: Scenario) -> dict[int, Scenario]:
    """The scenario with crews of other sizes, smallest first; without those that find no room to start.

    >>> import swarmpush
    >>> list(other_crews(swarmpush.load(swarmpush.demo("service_passage"))))
    [2, 3, 12, 24]
    """
    crews = {}
    for count in _other_counts(s):
        try:
            crews[count] = with_value(s, "pushers.count", count)
        except ScenarioError:  # no room, or a start that is placed for each pusher
            continue
    return crews


def untried_crews(s: Scenario) -> list[int]:
    """Sizes that `other_crews` leaves out, smallest first."""
    return [count for count in _other_counts(s) if count not in other_crews(s)]


def _other_counts(s: Scenario) -> list[int]:
    return sorted({max(1, round(s.pushers.count * 2.0**k)) for k in OCTAVES} - {s.pushers.count})


def shifts(s: Scenario) -> Iterator[Shift]:
    """Every measured value, lowered and raised by a quarter or by as much less as makes valid scenarios."""
    for key in filter(_is_measured, known_keys(s)):
        value = value_at(s, key)
        if not isinstance(value, float) or value == 0.0 or not math.isfinite(value):
            continue
        for halvings in range(N_HALVINGS + 1):
            reach = REACH / 2**halvings
            try:
                lower, higher = (with_value(s, key, value * (1.0 + off)) for off in (-reach, reach))
            except ScenarioError:
                continue
            yield Shift(key, value, reach, lower, higher)
            break


def neighbours(s: Scenario) -> dict[str, Scenario]:
    """All neighbours by the name of their runs."""
    crews = {f"{CREW}{count}": scenario for count, scenario in other_crews(s).items()}
    moved = {level: other for x in shifts(s) for level, other in zip(x.levels, (x.lower, x.higher), strict=True)}
    return crews | moved


def crew_sizes(planned: Plan, runs: Runs) -> tuple[CrewSize, ...]:
    """What crews of all sizes tried did, smallest first; nothing if none was tried."""
    s = planned.scenario
    tried = {int(level.removeprefix(CREW)): rows for level, rows in runs.items() if level.startswith(CREW)}
    if not tried:
        return ()
    tried[s.pushers.count] = runs[climb(s)[-1].key]
    sizes: list[CrewSize] = []
    smaller = None
    for count, rows in sorted(tried.items()):
        speeds = rows["block_speed_m_s"]
        sizes.append(
            CrewSize(
                count,
                mean_interval(speeds, s.trial.confidence),
                None if smaller is None else mean_interval(speeds - smaller, s.trial.confidence),
                share_interval(int(rows["has_arrived"].sum()), len(rows), s.trial.confidence),
                float(rows["strike_rate_1_s"].mean()),
                float(rows["cause_leaning_too_weak_for_floor"].mean()),
                float(rows["cause_touching_pusher"].mean()),
            )
        )
        smaller = speeds
    return tuple(sizes)


def influences(planned: Plan, runs: Runs) -> tuple[Influence, ...]:
    """What each measured value does, the one that must be known best first; nothing if none was tried."""
    s = planned.scenario
    if not any(level.startswith(SHIFTED) for level in runs):
        return ()
    tried = list(shifts(s))
    confidence = confidence_at(0, 1, s.trial.confidence, n_claims=len(tried))
    allowed = s.trial.tolerance * abs(float(runs[climb(s)[-1].key]["block_speed_m_s"].mean()))
    found = []
    for x in tried:
        lower, higher = (runs[level]["block_speed_m_s"] for level in x.levels)
        change = mean_interval((higher - lower) / (2.0 * x.reach), confidence)
        steepest = max(abs(change.low), abs(change.high))
        found.append(Influence(x.key, x.value, x.reach, change, _over(allowed, change.mean), _over(allowed, steepest)))
    return tuple(sorted(found, key=lambda one: (not one.is_seen, -abs(one.change_m_s.mean))))


def _is_measured(key: str) -> bool:
    """Whether a key stands for one size or property of the rig; corners of outlines hang together and do not."""
    is_corner = ".outline" in key or ".posts" in key
    return key.partition(".")[0] in MEASURED_TABLES and key not in _KNOWN and not is_corner


def _over(allowed_m_s: float, change_m_s: float) -> float:
    return allowed_m_s / abs(change_m_s) if change_m_s != 0.0 else math.inf
