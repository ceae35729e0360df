"""The ladder: from the geometric plan to the scenario as given, one assumption at a time; and one of them restored."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from swarmpush.routine import Routine, Run, Stage, Wander
from swarmpush.scenario import Errors, Scenario

RESTORED = "restored: "  # before an assumption's key: the level of its runs
BASELINE = "baseline"  # the level of the runs that bounce at random


@dataclass(frozen=True)
class Assumption:
    """Something a geometric plan takes for granted.

    key: short name. rung: what the ladder's rung adds when the assumption is dropped. statement: the assumption.
    idealise: the scenario with the assumption granted, all else unchanged. needs: key of the assumption that must be
    granted as well, where it is not, for the scenario to make sense.
    """

    key: str
    rung: str
    statement: str
    idealise: Callable[[Scenario], Scenario]
    needs: str | None = None


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
    Assumption(
        "turning", "turning time and deaf bumpers", "pushers feel every touch and turn at once", _turns_at_once, "shape"
    ),
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


@dataclass(frozen=True)
class Restored:
    """The scenario as given with one assumption granted again: its key, the statement, and the scenario to run."""

    key: str
    statement: str
    scenario: Scenario

    @property
    def level(self) -> str:
        """How its runs are called among all runs."""
        return f"{RESTORED}{self.key}"


def climb(s: Scenario) -> tuple[Rung, ...]:
    """The rungs above geometry: bodies under ideal conditions, then one assumption dropped after another.

    Assumptions that the scenario grants anyway make no rung. The last rung is the scenario as given.

    >>> import swarmpush
    >>> [rung.key for rung in climb(swarmpush.load(swarmpush.demo("service_passage")))]
    ['bodies', 'turning', 'yaw', 'errors', 'crowding']
    """
    relevant = _dropped(s)
    rungs = []
    for k in range(len(relevant) + 1):
        scenario = s
        for assumption in relevant[k:]:
            scenario = assumption.idealise(scenario)
        key, adds = (relevant[k - 1].key, relevant[k - 1].rung) if k else ("bodies", "mass, contact and friction")
        rungs.append(Rung(key, adds, scenario))
    return tuple(rungs)


def restore(s: Scenario) -> tuple[Restored, ...]:
    """The scenario as given with each assumption that it drops granted alone, in the ladder's order.

    What an assumption costs depends on what else is real by then. The ladder says what it costs with all those above it
    still granted, this one what would come back with all others dropped. Bars and free headings cannot turn at once, so
    that with them turning brings discs on course along.

    >>> import swarmpush
    >>> [restored.level for restored in restore(swarmpush.load(swarmpush.demo("service_passage")))][-2:]
    ['restored: errors', 'restored: crowding']
    """
    relevant = {a.key: a for a in _dropped(s)}
    granted = []
    for a in relevant.values():
        scenario, statement = a.idealise(s), a.statement
        if a.needs in relevant:
            other = relevant[a.needs]
            scenario, statement = other.idealise(scenario), f"{statement}; {other.statement}"
        granted.append(Restored(a.key, statement, scenario))
    return tuple(granted)


def bounce_at_random(s: Scenario) -> Scenario:
    """The same crew without a plan: it runs to the next bump and leaves by the cosine law; all else as given.

    The cosine law (Lambert's) spreads a crew evenly over the channel and its headings evenly over all directions, and
    is thus what geometry does for a crew that knows nothing (Comets, Popov, Schuetz and Vachkovskaia, Arch. Rational
    Mech. Anal. 191 (2009) 497). Starts, errors and seeds stay as they are.
    """
    stage = Stage(name="bounce", acts=(Run(act="run"), Wander(act="wander", law="cosine")))
    return s.model_copy(update={"routine": Routine(stages=(stage,))})


def _dropped(s: Scenario) -> list[Assumption]:
    """The assumptions that the scenario does not grant."""
    return [a for a in ASSUMPTIONS if a.idealise(s) != s]
