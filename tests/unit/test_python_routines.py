"""Routines written as Python functions: the same motion as the scenario's own, and plain words for wrong answers."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.dynamics.asking import MAX_ACTS, MAX_ANSWERS, Situation
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.boundary import surface_names
from swarmpush.loading import load
from swarmpush.problems import RoutineError
from swarmpush.routine import Depart, Routine, Turn
from swarmpush.routine import Run as RunOn
from swarmpush.scenario import Scenario

SECONDS = 60.0
RUN: dict[str, Any] = {"act": "run"}


def passage(seconds: float = SECONDS, **tables: Any) -> Scenario:
    """The service passage, cut short."""
    return load(demo("service_passage")).replace(goal={"time_limit": seconds}, **tables)


def are_same(one: Run, other: Run) -> bool:
    """Whether two runs have the same tables, bit by bit."""
    for name in ("visits", "block", "pushers", "bumps"):
        pd.testing.assert_frame_equal(getattr(one, name), getattr(other, name), check_exact=True)
    return one.books == other.books and one.energy == other.energy


def crossing(now: Situation) -> list[dict[str, Any]]:
    """The service passage's routine: 45 deg after the block, 15 after the first wall, 75 after the second."""
    book = now.notebook
    if "walls" not in book:
        book["walls"] = 0
        return [RUN]
    if now.contact == "block":
        book["walls"], angle = 0, "45 deg"
    else:
        book["walls"], angle = (1, "15 deg") if book["walls"] == 0 else (0, "75 deg")
    return [{"act": "depart", "angle": angle, "side": "right"}, RUN]


def crossing_in_models(now: Situation) -> Any:
    """The same with models for answers."""
    answer = crossing(now)
    if len(answer) == 1:
        return RunOn(act="run")
    angle = math.radians(float(answer[0]["angle"].removesuffix(" deg")))
    return (Depart(act="depart", angle=angle, side="right"), RunOn(act="run"))


@pytest.mark.parametrize("decide", [crossing, crossing_in_models])
@pytest.mark.parametrize("turn_rate", [3.0, math.inf])
def test_function_and_file_move_alike(decide: Callable[[Situation], Any], turn_rate: float) -> None:
    """The service passage's routine written in Python gives the run of the scenario's own, with all its errors."""
    s = passage(pushers={"turn_rate": turn_rate})
    own = simulate(s, cycles=())
    assert len(own.bumps) > 50
    assert are_same(own, simulate(s, cycles=(), decide=decide))


def test_another_function_moves_otherwise() -> None:
    """Two degrees more after the block make another run, so that the comparison can fail."""

    def other(now: Situation) -> Any:
        answer = crossing(now)
        return [{**answer[0], "angle": "47 deg"}, RUN] if answer[0].get("angle") == "45 deg" else answer

    s = passage()
    with pytest.raises(AssertionError):
        are_same(simulate(s, cycles=()), simulate(s, cycles=(), decide=other))


# what stands in a file after the run, and what a function answers for it
ONE_BY_ONE: dict[str, list[dict[str, Any]]] = {
    "turn": [{"act": "turn", "angle": 2.0}],
    "depart": [{"act": "depart", "angle": 0.5, "side": "either", "spread": 0.4}],
    "mirror": [{"act": "mirror"}],
    "wander": [{"act": "wander", "law": "cosine"}],
    "advance": [{"act": "depart", "angle": 0.5}, {"act": "advance", "distance": "7 cm"}, {"act": "turn", "angle": 1.0}],
    "slide for a length": [{"act": "slide", "length": "5 cm"}, {"act": "depart", "angle": 0.6}],
    "slide for a time": [{"act": "slide", "time": "0.4 s"}, {"act": "depart", "angle": 0.6}],
    "declare": [{"act": "declare"}, {"act": "turn", "angle": 2.0}],
    "halt": [{"act": "turn", "angle": 2.0}, {"act": "advance", "distance": "30 cm"}, {"act": "halt"}],
}


@pytest.mark.parametrize("name", ONE_BY_ONE)
def test_every_act_as_an_answer(name: str) -> None:
    """Each act, answered one by one by a function, does what it does in a file."""
    acts = [RUN, *ONE_BY_ONE[name]]
    s = passage(20.0)
    s = s.model_copy(update={"routine": Routine.model_validate({"stages": [{"name": "a", "acts": acts}]})})

    def decide(now: Situation) -> dict[str, Any]:
        now.notebook["at"] = now.notebook.get("at", -1) + 1
        return acts[now.notebook["at"] % len(acts)]

    own = simulate(s, cycles=())
    assert len(own.bumps) > 5
    assert are_same(own, simulate(s, cycles=(), decide=decide))


LOOKING = {
    "stages": [
        {
            "name": "go",
            "acts": [
                RUN,
                {"act": "depart", "angle": 0.7, "side": "either"},
                {"act": "gauge", "maximum": "60 cm", "resolution": "1 cm"},
                {"act": "branch", "on": "range", "below": "20 cm", "go": "short"},
                {"act": "sight", "face": "rear", "half_angle": "20 deg"},
                {"act": "branch", "on": "sight", "go": "seen"},
            ],
        },
        {"name": "short", "acts": [{"act": "turn", "angle": -0.6}], "then": "go"},
        {"name": "seen", "acts": [{"act": "turn", "angle": 0.1}], "then": "go"},
    ]
}


def looking(now: Situation) -> Any:
    """The routine above: three questions after each bump."""
    at = now.notebook.get("at", "start")
    if at == "bumped":
        now.notebook["at"] = "gauged"
        return [LOOKING["stages"][0]["acts"][1], LOOKING["stages"][0]["acts"][2]]
    if at == "gauged" and now.range_m >= 0.2:
        now.notebook["at"] = "looked"
        return LOOKING["stages"][0]["acts"][4]
    now.notebook["at"] = "bumped"
    if at == "gauged":
        return [{"act": "turn", "angle": -0.6}, RUN]
    return [{"act": "turn", "angle": 0.1}, RUN] if at == "looked" and now.seen else RUN


def test_sights_and_gauges() -> None:
    """A function that gauges and looks knows what a compiled routine knows, errors of both senses included."""
    s = passage(40.0, errors={"range_sd": 0.02, "missed_sights": 0.3})
    s = s.model_copy(update={"routine": Routine.model_validate(LOOKING)})
    own = simulate(s, cycles=())
    assert len(own.bumps) > 30
    assert are_same(own, simulate(s, cycles=(), decide=looking))


def test_situations() -> None:
    """A function is told its pusher, the time, its heading, the partner and bearing of its bump, and what it noted."""
    told: list[Situation] = []

    def decide(now: Situation) -> Any:
        told.append(now)
        now.notebook["n"] = now.notebook.get("n", 0) + 1
        return [{"act": "declare"}, {"act": "turn", "angle": 2.0}, RUN] if now.contact == "wall" else RUN

    s = passage(10.0, pushers={"count": 2}, errors={"bearing_step": 0.0, "missed_bumps": 0.0})
    simulate(s, cycles=(), decide=decide)
    first, later = told[0], [now for now in told if now.contact == "wall"]
    assert (first.pusher, first.time_s, first.contact, first.range_m, first.seen) == (0, 0.0, "none", 0.0, False)
    assert {now.pusher for now in told} == {0, 1}
    assert told[0].notebook is not told[1].notebook
    assert sum(now.notebook["n"] for now in (told[0], told[1])) == len(told)
    assert [now.time_s for now in told] == sorted(now.time_s for now in told)
    assert all(abs(now.heading_rad) <= math.pi for now in told)
    assert all(abs(now.bearing_rad) > math.pi / 2 for now in later)  # the normal looks back at who comes
    assert not later[0].declared
    assert later[-1].declared


# ---- wrong answers ------------------------------------------------------------------------------------------------

WRONG: dict[str, tuple[Any, str]] = {
    "nothing": (None, "no act"),
    "no acts": ([], "0 acts"),
    "too many": ([RUN] * (MAX_ACTS + 1), f"{MAX_ACTS + 1} acts"),
    "a word": ("run", "'run'"),
    "a number": (7, "no act"),
    "unknown act": ({"act": "fly"}, "fly"),
    "unknown key": ({"act": "run", "speed": 3}, "no act"),
    "missing key": ({"act": "turn"}, "no act"),
    "not a number": ({"act": "turn", "angle": math.nan}, "no act"),
    "too far": ({"act": "advance", "distance": 1e9}, "no act"),
    "wrong unit": ({"act": "advance", "distance": "3 s"}, "no act"),
    "a list within": ({"act": "turn", "angle": [1.0]}, "no act"),
    "nested": ([[RUN]], "no act"),
    "pairs": ([(("act", "run"),)], "no act"),
    "branch": ({"act": "branch", "on": "contact", "kind": "wall", "go": "a"}, "branches"),
    "tally": ({"act": "tally", "counter": "a", "add": 1}, "counts"),
    "unknown face": ([{"act": "sight", "face": "moon"}, RUN], "moon"),
    "a class": (Turn, "no act"),
    "one wrong of two": ([RUN, {"act": "turn", "angle": "left"}], "no act"),
}


@pytest.mark.parametrize("name", WRONG)
def test_wrong_answers(name: str) -> None:
    """An answer that is no act ends the run with one sentence, and a note of whose it was and when."""
    answer, words = WRONG[name]
    asked: list[float] = []

    def decide(now: Situation) -> Any:
        asked.append(now.time_s)
        return RUN if now.contact == "none" else answer

    with pytest.raises(RoutineError, match=words) as caught:
        simulate(passage(), cycles=(), decide=decide)
    assert "\n" not in str(caught.value)
    (note,) = caught.value.__notes__
    assert note.startswith("pusher ")
    assert f"{asked[-1]:.6g} s" in note
    assert caught.value.__suppress_context__ or caught.value.__context__ is None


def test_wrong_answer_is_refused_again() -> None:
    """An answer that was refused once is refused in the next run as well."""
    for _ in range(2):
        with pytest.raises(RoutineError):
            simulate(passage(), cycles=(), decide=lambda now: {"act": "fly"})


def test_functions_own_exception_comes_through() -> None:
    """What a function raises reaches the caller as it was, with a note of the pusher and the time."""

    def decide(now: Situation) -> Any:
        if now.time_s > 2.0 and now.pusher == 3:
            raise LookupError("no map")
        return [{"act": "turn", "angle": 2.0}, RUN]

    with pytest.raises(LookupError, match="no map") as caught:
        simulate(passage(), cycles=(), decide=decide)
    assert caught.value.args == ("no map",)
    (note,) = caught.value.__notes__
    assert note.startswith("pusher 3 ")
    assert float(note.split()[-2]) > 2.0


@pytest.mark.parametrize("turn_rate", [3.0, math.inf])
def test_endless_answers_are_refused(turn_rate: float) -> None:
    """A function that only looks, declares or turns at once for ever is stopped, not waited for."""
    asked: list[int] = []

    def decide(now: Situation) -> Any:
        asked.append(now.pusher)
        return {"act": "declare"}

    with pytest.raises(RoutineError, match=r"at 0 s that take no time") as caught:
        simulate(passage(pushers={"turn_rate": turn_rate}), cycles=(), decide=decide)
    assert "pusher 0" in str(caught.value)
    assert asked.count(0) == MAX_ANSWERS


def test_answers_may_be_changed_afterwards() -> None:
    """A function that gives the same list again with other contents is taken at its present word."""
    kept: list[dict[str, Any]] = [{"act": "turn", "angle": 0.0}, dict(RUN)]

    def decide(now: Situation) -> Any:
        kept[0]["angle"] = 2.0 if now.contact == "wall" else 1.0
        return kept

    def fresh(now: Situation) -> Any:
        return [{"act": "turn", "angle": 2.0 if now.contact == "wall" else 1.0}, RUN]

    s = passage(20.0)
    assert are_same(simulate(s, cycles=(), decide=decide), simulate(s, cycles=(), decide=fresh))


def test_faces_can_be_looked_for() -> None:
    """Every surface of the rig may be the face of a sight."""
    names = surface_names(passage())
    answers = [[{"act": "sight", "face": name}, {"act": "turn", "angle": 2.0}, RUN] for name in names]
    run = simulate(passage(10.0), cycles=(), decide=lambda now: answers[int(now.time_s * 7) % len(answers)])
    assert run.ended == "time"
