"""Routines: what is refused, what they need, and what the interpreter makes of them."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from pydantic import ValidationError

from swarmpush.draws import stream_keys
from swarmpush.program import MEMORY, NOTES, Command, Contact, Program, Senses, compile_routine, decide, in_units
from swarmpush.routine import MAX_COUNTERS, Device, Routine

ROUNDING = 1e-12  # rad; a few additions of angles
EXACT = Senses(turn_bias=0.0, turn_sd=0.0, bearing_step=0.0, bearing_sd=0.0)
RUN = {"act": "run"}
WALL_BELOW = math.pi / 2  # inward normal of the wall at y = 0


def stage(name: str, *acts: dict[str, Any], then: str | None = None) -> dict[str, Any]:
    return {"name": name, "acts": list(acts)} | ({"then": then} if then else {})


def routine(*stages: dict[str, Any]) -> Routine:
    return Routine.model_validate({"stages": list(stages)})


def depart(degrees: float, side: str) -> dict[str, Any]:
    return {"act": "depart", "angle": f"{degrees} deg", "side": side}


class Pusher:
    """One pusher's side of the interpreter, for asking it one decision after the other."""

    def __init__(self, *stages: dict[str, Any], senses: Senses = EXACT, seed: int = 1) -> None:
        self.program: Program = compile_routine(routine(*stages))
        self.senses = senses
        self.keys = stream_keys(seed, 1)[0]
        self.memory = np.zeros(MEMORY, dtype=np.int64)
        self.notes = np.zeros(NOTES)

    def decide(
        self, *, contact: Contact = Contact.NONE, heading: float = 0.0, normal: float = 0.0, now: float = 0.0
    ) -> tuple[Command, float]:
        command, rotation, _ = decide(
            self.program, self.senses, self.keys, self.memory, self.notes, now, heading, int(contact), normal
        )
        return Command(command), rotation


@pytest.mark.parametrize(
    ("stages", "way"),
    [
        ([stage("a", {"act": "turn", "angle": 1})], "stage 'a' can"),
        (
            [stage("a", {"act": "tally", "counter": "n", "add": 1}, then="b"), stage("b", depart(1, "left"), then="a")],
            "'a' -> 'b'",
        ),
        ([stage("a", {"act": "branch", "on": "contact", "kind": "wall", "go": "a"}, RUN)], "stage 'a' can"),
        (
            [
                stage("a", RUN, {"act": "branch", "on": "time", "after": 1, "go": "b"}),
                stage("b", {"act": "mirror"}, {"act": "branch", "on": "contact", "kind": "block", "go": "b"}, then="a"),
            ],
            "stage 'b' can",
        ),
    ],
)
def test_refuses_a_loop_without_a_run(stages: list[dict[str, Any]], way: str) -> None:
    """A loop of acts in which no time passes is refused, and the stages on it are named."""
    with pytest.raises(ValidationError, match=f"{way}.* go round for ever without a run"):
        routine(*stages)


def test_admits_a_loop_with_a_run_and_an_end_at_a_halt() -> None:
    """Going round past a run is what routines do, and a halt ends a chain of stages."""
    assert routine(stage("a", RUN, {"act": "mirror"})).stages[0].then is None
    assert len(routine(stage("a", {"act": "turn", "angle": 1}, then="b"), stage("b", {"act": "halt"})).stages) == 2


@pytest.mark.parametrize(
    ("stages", "complaint"),
    [
        ([stage("a", RUN, then="b")], "leads to 'b', which is not a stage"),
        ([stage("a", RUN, {"act": "branch", "on": "time", "after": 1, "go": "z"})], "leads to 'z'"),
        ([stage("a", RUN), stage("a", RUN)], "two stages have the same name"),
        (
            [stage("a", RUN, *({"act": "tally", "counter": f"c{k}", "add": 1} for k in range(9)))],
            "more than 8 counters",
        ),
        ([stage("a", RUN, {"act": "tally", "counter": "n"})], "either add"),
        ([stage("a", RUN, {"act": "tally", "counter": "n", "add": 1, "set": 0})], "either add"),
        ([stage("a", RUN, depart(90, "left"))], "less than or equal"),
        ([], "at least 1"),
    ],
)
def test_refuses(stages: list[dict[str, Any]], complaint: str) -> None:
    """A routine that does not hold together is refused with the reason."""
    with pytest.raises(ValidationError, match=complaint):
        routine(*stages)


def test_counts_counters_in_order_of_use() -> None:
    """As many counters as there is memory for are admitted, in order of first use."""
    acts = [{"act": "tally", "counter": f"c{k}", "add": 1} for k in reversed(range(MAX_COUNTERS))]
    assert routine(stage("a", RUN, *acts)).counters() == tuple(f"c{k}" for k in reversed(range(MAX_COUNTERS)))


def test_kit() -> None:
    """The kit is the set of devices that the acts need, in a fixed order."""
    plain = routine(stage("a", RUN, {"act": "turn", "angle": 2}))
    assert plain.kit() == (Device.DRIVE, Device.BUMP, Device.STEERING)
    rich = routine(
        stage(
            "a",
            RUN,
            {"act": "branch", "on": "contact", "kind": "block", "go": "a"},
            {"act": "branch", "on": "contact", "kind": "pusher", "go": "a"},
            {"act": "tally", "counter": "n", "add": 1},
            {"act": "branch", "on": "time", "after": 1, "go": "a"},
            {"act": "wander"},
            {"act": "advance", "distance": 1},
            {"act": "gauge", "maximum": 1},
            {"act": "sight", "face": "rear"},
        )
    )
    assert rich.kit() == tuple(Device)


@pytest.mark.parametrize(
    ("act", "heading_deg", "target_deg"),
    [
        (depart(15, "left"), 250, 105),  # the normal stands at 90 deg, left of it is counter-clockwise
        (depart(15, "right"), 250, 75),
        (depart(15, "onward"), 250, 105),  # comes from the right, goes on to the left
        (depart(15, "onward"), 290, 75),
        ({"act": "mirror"}, 250, 110),
        ({"act": "mirror"}, 290, 70),
        ({"act": "mirror"}, 270, 90),
        ({"act": "turn", "angle": "120 deg"}, 250, 10),
    ],
)
def test_departures_by_hand(act: dict[str, Any], heading_deg: float, target_deg: float) -> None:
    """From a bump on the wall at y = 0 each act leads to the heading drawn by hand."""
    pusher = Pusher(stage("a", act, RUN))
    heading = math.radians(heading_deg)
    command, rotation = pusher.decide(contact=Contact.WALL, heading=heading, normal=WALL_BELOW)
    error = math.remainder(heading + rotation - math.radians(target_deg), 2 * math.pi)
    assert command == Command.ROTATE
    assert abs(error) < ROUNDING
    assert abs(rotation) <= math.pi + ROUNDING  # the short way round
    assert pusher.decide() == (Command.RUN, 0.0)


@pytest.mark.parametrize("law", ["uniform", "cosine"])
def test_wander_leaves_the_surface(law: str) -> None:
    """A random departure never points into the surface; its angle follows the law that was asked for."""
    pusher = Pusher(stage("a", RUN, {"act": "wander", "law": law}))
    pusher.decide()
    angles = []
    for _ in range(2000):
        rotation = pusher.decide(contact=Contact.WALL, heading=-1.0, normal=WALL_BELOW)[1]
        angles.append(math.remainder(-1.0 + rotation - WALL_BELOW, 2 * math.pi))
        pusher.decide()
    assert max(map(abs, angles)) <= math.pi / 2 + ROUNDING
    even = np.sin(angles) if law == "cosine" else np.array(angles) / (math.pi / 2)
    assert abs(even.mean()) < 4 * math.sqrt(1 / 3 / 2000)  # what should be uniform on (-1, 1), within 4 sigma
    assert abs(even.var() - 1 / 3) < 4 * math.sqrt(4 / 45 / 2000)


def test_either_side_is_fair() -> None:
    """A departure to either side takes both about equally often."""
    pusher = Pusher(stage("a", RUN, depart(30, "either")))
    pusher.decide()
    left = 0
    for _ in range(400):
        left += pusher.decide(contact=Contact.WALL, heading=WALL_BELOW + math.pi, normal=WALL_BELOW)[1] < 0
        pusher.decide()
    assert abs(left - 200) < 4 * math.sqrt(400 / 4)


def test_spread_departures_leave_the_surface() -> None:
    """However wide the spread of a departure, it stays within 89 deg of the normal."""
    pusher = Pusher(stage("a", RUN, depart(80, "left") | {"spread": "60 deg"}))
    pusher.decide()
    angles = []
    for _ in range(200):
        angles.append(pusher.decide(contact=Contact.WALL, heading=0.0, normal=0.0)[1])
        pusher.decide()
    assert math.isclose(max(angles), math.radians(89))
    assert min(angles) >= -math.radians(89) - ROUNDING


def test_bearing_is_known_to_its_resolution() -> None:
    """A bump ring with 90 deg steps turns a bearing of 130 deg to its nearest step, 90 deg."""
    coarse = EXACT._replace(bearing_step=math.pi / 2)
    pusher = Pusher(stage("a", depart(0, "left"), RUN), senses=coarse)
    assert abs(pusher.decide(contact=Contact.WALL, normal=math.radians(130))[1] - math.pi / 2) < ROUNDING


def test_turn_errors() -> None:
    """Bias and standard deviation of a turn come out as given, and a stream gives the same errors again."""
    faulty = EXACT._replace(turn_bias=0.1, turn_sd=0.05)

    def turns() -> list[float]:
        pusher = Pusher(stage("a", RUN, {"act": "turn", "angle": 1.0}), senses=faulty)
        return [rotation for _ in range(1000) for command, rotation in [pusher.decide()] if command == Command.ROTATE]

    first = turns()
    assert len(first) == 500
    assert abs(np.mean(first) - 1.1) < 4 * 0.05 / math.sqrt(500)
    assert abs(np.std(first) - 0.05) < 4 * 0.05 / math.sqrt(1000)
    assert turns() == first


def test_counts_bumps() -> None:
    """Every third bump is answered by the other turn: counters add up, branch, and are set back."""
    pusher = Pusher(
        stage(
            "a",
            RUN,
            {"act": "tally", "counter": "n", "add": 1},
            {"act": "branch", "on": "counter", "counter": "n", "at_least": 3, "go": "b"},
            {"act": "turn", "angle": 1},
        ),
        stage("b", {"act": "tally", "counter": "n", "set": 0}, {"act": "turn", "angle": -1}, then="a"),
    )
    turns = [rotation for _ in range(12) for command, rotation in [pusher.decide()] if command == Command.ROTATE]
    assert turns == [1, 1, -1, 1, 1, -1]


def test_tells_partners_apart() -> None:
    """A branch on the contact's kind is taken for that kind alone."""
    acts = [RUN, {"act": "branch", "on": "contact", "kind": "block", "go": "b"}, {"act": "turn", "angle": 1}]
    for contact, angle in ((Contact.WALL, 1.0), (Contact.BLOCK, 2.0), (Contact.PUSHER, 1.0)):
        pusher = Pusher(stage("a", *acts), stage("b", {"act": "turn", "angle": 2}, then="a"))
        pusher.decide()
        assert pusher.decide(contact=contact) == (Command.ROTATE, angle)


def test_the_clock_starts_with_the_stage() -> None:
    """Time counts from when the stage was entered by another one; going round in the stage does not set it back."""
    late = {"act": "branch", "on": "time", "after": "10 s", "go": "b"}
    pusher = Pusher(
        stage("a", RUN, late, {"act": "turn", "angle": 1}), stage("b", RUN, {"act": "turn", "angle": 2}, then="a")
    )
    by_hand = [
        (0, Command.RUN, 0),
        (6, Command.ROTATE, 1),
        (6, Command.RUN, 0),
        (12, Command.RUN, 0),  # late, so on to b
        (13, Command.ROTATE, 2),
        (13, Command.RUN, 0),  # back in a, where the clock starts again
        (19, Command.ROTATE, 1),
        (19, Command.RUN, 0),
        (22, Command.ROTATE, 1),  # 9 s after 13
        (22, Command.RUN, 0),
        (23, Command.RUN, 0),  # late again
        (24, Command.ROTATE, 2),
    ]
    assert [(now, *pusher.decide(now=float(now))) for now, _, _ in by_hand] == by_hand


def test_times_can_be_scaled() -> None:
    """A program for an engine with another unit of time branches at the same moment."""
    late = {"act": "branch", "on": "time", "after": "10 s", "go": "a"}
    program = compile_routine(routine(stage("a", RUN, late)))
    scaled = in_units(program, 3.0, 2.0)
    assert program["value"][1] == 10.0
    assert scaled["value"][1] == 5.0
    assert (scaled["op"] == program["op"]).all()


def test_halts_for_good() -> None:
    """After a halt every decision is to stop."""
    pusher = Pusher(stage("a", RUN, {"act": "halt"}))
    assert [pusher.decide()[0] for _ in range(4)] == [Command.RUN, *[Command.STOP] * 3]
