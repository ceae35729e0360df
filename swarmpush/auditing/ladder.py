"""The ladder: from the geometric plan to the scenario as given, one assumption at a time."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from swarmpush.scenario import Errors, Scenario


@dataclass(frozen=True)
class Assumption:
    """Something a geometric plan takes for granted.

    key: short name. rung: what the ladder's rung adds when the assumption is dropped. statement: the assumption.
    idealise: the scenario with the assumption granted, all else unchanged.
    """

    key: str
    rung: str
    statement: str
    idealise: Callable[[Scenario], Scenario]


def _turns_at_once(s: Scenario) -> Scenario:
    # the latency stays: the forecast counts on the thrust during it
    return s.replace(pushers={"turn_rate": math.inf, "bump_threshold": 0.0, "bumper_arc": 2 * math.pi})


def _are_discs_on_course(s: Scenario) -> Scenario:
    # comes after the turning rate, because neither a bar nor a free heading can turn at once
    held = {"nose": 0.0, "trunk": 0.0, "yaw_inertia": None, "heading": "held", "turn_drag": None, "contact_arm": 0.0}
    return s if s.pushers.is_disc and s.pushers.heading == "held" else s.replace(pushers=held)


def _is_one_block(s: Scenario) -> Scenario:
    return s.model_copy(update={"train": ()})


def _holds_yaw(s: Scenario) -> Scenario:
    held = s.replace(block={"yaw": "held"})
    return held.model_copy(update={"train": tuple(block.model_copy(update={"yaw": "held"}) for block in s.train)})


def _makes_no_errors(s: Scenario) -> Scenario:
    return s.model_copy(update={"errors": Errors()})


def _pass_each_other(s: Scenario) -> Scenario:
    return s.replace(pushers={"pass_through": True}) if s.pushers.count > 1 else s


# in the order in which the rungs are climbed
ASSUMPTIONS = (
    Assumption("turning", "turning time and deaf bumpers", "pushers feel every touch and turn at once", _turns_at_once),
    Assumption("shape", "bars and free headings", "pushers are discs that hold their heading", _are_discs_on_course),
    Assumption("train", "further blocks of the train", "there is one block only", _is_one_block),
    Assumption("yaw", "yaw of the block", "the block does not turn", _holds_yaw),
    Assumption("errors", "errors and unit spread", "headings, turns and units are exact", _makes_no_errors),
    Assumption("crowding", "crowding", "pushers do not get in each other's way", _pass_each_other),
)


@dataclass(frozen=True)
class Rung:
    """One step of the ladder: its key, what it adds, and the scenario to run."""

    key: str
    adds: str
    scenario: Scenario


def climb(s: Scenario) -> tuple[Rung, ...]:
    """The rungs above geometry: bodies under ideal conditions, then one assumption dropped after another.

    Assumptions that the scenario grants anyway make no rung. The last rung is the scenario as given.

    >>> import swarmpush
    >>> [rung.key for rung in climb(swarmpush.load(swarmpush.demo("service_passage")))]
    ['bodies', 'turning', 'yaw', 'errors', 'crowding']
    """
    relevant = [a for a in ASSUMPTIONS if a.idealise(s) != s]
    rungs = []
    for k in range(len(relevant) + 1):
        scenario = s
        for assumption in relevant[k:]:
            scenario = assumption.idealise(scenario)
        key, adds = (relevant[k - 1].key, relevant[k - 1].rung) if k else ("bodies", "mass, contact and friction")
        rungs.append(Rung(key, adds, scenario))
    return tuple(rungs)
