"""Routines: what a pusher does, as data. Named stages, each a list of acts.

There is no expression language: an act is a small table with fixed keys. `program.py` compiles a routine to the
arrays that both worlds execute.
"""

from __future__ import annotations

import math
from enum import StrEnum
from graphlib import CycleError, TopologicalSorter
from typing import Annotated, Literal, Self

from pydantic import BaseModel, ConfigDict, Field, Strict, model_validator

from swarmpush.quantities import Quantity

Angle = Annotated[float, Quantity("rad")]
Duration = Annotated[float, Quantity("s")]
Distance = Annotated[float, Quantity("m")]
Whole = Annotated[int, Strict()]
YesNo = Annotated[bool, Strict()]

MAX_COUNTERS = 8
MAX_DEPARTURE = math.radians(89.0)  # a pusher that leaves flatter than this would still rub the surface


class Device(StrEnum):
    """Hardware that an act needs. A routine's kit is the set of its acts' devices."""

    DRIVE = "straight drive"
    BUMP = "bump sensor"
    STEERING = "turn by an angle"
    BEARING = "bearing of the bump"
    BLOCK_TOLD = "telling the block from a wall"
    PUSHER_TOLD = "telling a pusher from a wall"
    DISTANCE = "distance run"
    RANGE = "range ahead"
    SIGHT = "sight of a marked face"
    COUNTER = "counter"
    CLOCK = "clock"
    RANDOM = "random number source"


class _Table(BaseModel):
    """A frozen TOML table that refuses keys it does not know."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class Run(_Table):
    """Run straight until a bump is felt."""

    act: Literal["run"]


class Advance(_Table):
    """Run straight for a distance, or until a bump that comes sooner."""

    act: Literal["advance"]
    distance: Distance = Field(gt=0, le=1e3)


class Slide(_Table):
    """Slide along the touched surface, onward, for a length or a time, or until something else is met.

    The heading stays; the speed along the surface is the part of the free speed that points along it.
    """

    act: Literal["slide"]
    length: Distance | None = Field(default=None, gt=0, le=1e3)
    time: Duration | None = Field(default=None, gt=0, le=1e6)

    @model_validator(mode="after")
    def _has_one_measure(self) -> Self:
        if (self.length is None) == (self.time is None):
            raise ValueError("give either length or time")
        return self


class Turn(_Table):
    """Turn by an angle relative to the own heading, counter-clockwise positive."""

    act: Literal["turn"]
    angle: Angle = Field(ge=-2 * math.pi, le=2 * math.pi)


class Depart(_Table):
    """Leave the touched surface at an angle to its inward normal."""

    act: Literal["depart"]
    angle: Angle = Field(ge=0, le=MAX_DEPARTURE)
    side: Literal["left", "right", "onward", "either"] = Field(
        default="onward",
        description="to which side of the inward normal: left (counter-clockwise), right, "
        "onward (keeps the sense of travel along the surface) or either (a fair draw each time)",
    )
    spread: Angle = Field(default=0.0, ge=0, le=math.pi / 2, description="standard deviation of the angle")


class Mirror(_Table):
    """Leave as light leaves a mirror: angle of departure equals angle of arrival."""

    act: Literal["mirror"]


class Wander(_Table):
    """Leave the touched surface in a random direction."""

    act: Literal["wander"]
    law: Literal["uniform", "cosine"] = Field(
        default="cosine",
        description="uniform: every angle to the normal alike; cosine: sine of the angle uniform (Lambert's law)",
    )


class Gauge(_Table):
    """Measure how far it could run along its heading before it touches something."""

    act: Literal["gauge"]
    maximum: Distance = Field(gt=0, le=1e3, description="a longer range reads as this")
    resolution: Distance = Field(default=0.0, ge=0, le=1e3, description="steps of the reading; 0: exact")


class Sight(_Table):
    """Look for a marked face along the heading; anything between that would stop the pusher hides it."""

    act: Literal["sight"]
    face: str = Field(
        min_length=1, max_length=40, description="rear, front, near end, far end, ...: a name that plan prints"
    )
    half_angle: Angle = Field(default=0.0, ge=0, le=math.pi, description="of the cone looked into; 0: straight ahead")


class Declare(_Table):
    """Note that the pusher holds itself for lost: that it will not strike the rear face again."""

    act: Literal["declare"]


class Tally(_Table):
    """Add to a counter, or set it."""

    act: Literal["tally"]
    counter: str = Field(min_length=1, max_length=40)
    add: Whole = Field(default=0, ge=-1000, le=1000)
    set: Whole | None = Field(default=None, ge=0, le=1000)

    @model_validator(mode="after")
    def _adds_or_sets(self) -> Self:
        if (self.add != 0) == (self.set is not None):
            raise ValueError("give either add (not zero) or set")
        return self


class BranchContact(_Table):
    """Go to a stage if the last bump was with this kind of partner."""

    act: Literal["branch"]
    on: Literal["contact"]
    kind: Literal["wall", "block", "pusher", "none"] = Field(description="none: the last advance ended in the open")
    go: str


class BranchCounter(_Table):
    """Go to a stage if a counter has reached a value."""

    act: Literal["branch"]
    on: Literal["counter"]
    counter: str = Field(min_length=1, max_length=40)
    at_least: Whole = Field(ge=-1000, le=1000)
    go: str


class BranchTime(_Table):
    """Go to a stage if the present stage was entered long enough ago."""

    act: Literal["branch"]
    on: Literal["time"]
    after: Duration = Field(gt=0)
    go: str


class BranchRange(_Table):
    """Go to a stage if the last gauged range was shorter than this."""

    act: Literal["branch"]
    on: Literal["range"]
    below: Distance = Field(gt=0, le=1e3)
    go: str


class BranchSight(_Table):
    """Go to a stage if the last look saw its face, or did not."""

    act: Literal["branch"]
    on: Literal["sight"]
    seen: YesNo = True
    go: str


class Halt(_Table):
    """Stop for good."""

    act: Literal["halt"]


Branch = Annotated[BranchContact | BranchCounter | BranchTime | BranchRange | BranchSight, Field(discriminator="on")]
Act = Annotated[
    Run | Advance | Slide | Turn | Depart | Mirror | Wander | Gauge | Sight | Declare | Tally | Branch | Halt,
    Field(discriminator="act"),
]


class Stage(_Table):
    """A named list of acts; after the last act comes the stage `then` (itself unless set)."""

    name: str = Field(min_length=1, max_length=40)
    acts: tuple[Act, ...] = Field(min_length=1, max_length=64)
    then: str | None = Field(default=None, min_length=1)


class Routine(_Table):
    """What every pusher does. It begins with the first stage."""

    stages: tuple[Stage, ...] = Field(min_length=1, max_length=64)

    def counters(self) -> tuple[str, ...]:
        """Names of the counters in order of first use."""
        acts = [act for stage in self.stages for act in stage.acts]
        return tuple(dict.fromkeys(a.counter for a in acts if isinstance(a, Tally | BranchCounter)))

    def faces(self) -> tuple[str, ...]:
        """Names of the faces that the routine looks for, in order of first use."""
        acts = [act for stage in self.stages for act in stage.acts]
        return tuple(dict.fromkeys(act.face for act in acts if isinstance(act, Sight)))

    def kit(self) -> tuple[Device, ...]:
        """The hardware a pusher needs to carry out this routine, in the order of `Device`."""
        needed = {device for stage in self.stages for act in stage.acts for device in _devices(act)}
        return tuple(device for device in Device if device in needed)

    @model_validator(mode="after")
    def _holds_together(self) -> Self:
        names = [stage.name for stage in self.stages]
        if len(set(names)) < len(names):
            raise ValueError("two stages have the same name")
        if len(self.counters()) > MAX_COUNTERS:
            raise ValueError(f"more than {MAX_COUNTERS} counters")
        for stage in self.stages:
            targets = [act.go for act in stage.acts if isinstance(act, BRANCHES)]
            for target in [*targets, stage.then or stage.name]:
                if target not in names:
                    known = ", ".join(map(repr, names))
                    raise ValueError(f"stage {stage.name!r} leads to {target!r}, which is not a stage; stages: {known}")
        _demand_a_run_in_every_loop(self)
        return self


BRANCHES = (BranchContact, BranchCounter, BranchTime, BranchRange, BranchSight)
MOVES = (Run, Advance, Slide)


def _devices(act: Act) -> tuple[Device, ...]:
    match act:
        case Run():
            return (Device.DRIVE, Device.BUMP)
        case Advance():
            return (Device.DRIVE, Device.BUMP, Device.DISTANCE)
        case Slide(time=None):
            return (Device.DRIVE, Device.DISTANCE)
        case Slide():
            return (Device.DRIVE, Device.CLOCK)
        case Gauge() | BranchRange():
            return (Device.RANGE,)
        case Sight() | BranchSight():
            return (Device.SIGHT,)
        case Turn():
            return (Device.STEERING,)
        case Depart(side="either"):
            return (Device.STEERING, Device.BEARING, Device.RANDOM)
        case Depart() | Mirror():
            return (Device.STEERING, Device.BEARING)
        case Wander():
            return (Device.STEERING, Device.BEARING, Device.RANDOM)
        case Tally() | BranchCounter():
            return (Device.COUNTER,)
        case BranchContact(kind="pusher"):
            return (Device.BUMP, Device.PUSHER_TOLD)
        case BranchContact():
            return (Device.BUMP, Device.BLOCK_TOLD)
        case BranchTime():
            return (Device.CLOCK,)
    return ()


def _demand_a_run_in_every_loop(routine: Routine) -> None:
    """A loop of acts without a run would never let time pass; it is refused before it can hang a world."""
    after: dict[tuple[str, int], set[tuple[str, int]]] = {}
    for stage in routine.stages:
        for k, act in enumerate(stage.acts):
            if isinstance(act, (*MOVES, Halt)):
                continue
            following = (stage.name, k + 1) if k + 1 < len(stage.acts) else (stage.then or stage.name, 0)
            after[stage.name, k] = {following}
            if isinstance(act, BRANCHES):
                after[stage.name, k].add((act.go, 0))
    try:
        TopologicalSorter(after).prepare()
    except CycleError as error:
        stages = dict.fromkeys(place[0] for place in error.args[1])
        raise ValueError(
            f"stage {' -> '.join(map(repr, stages))} can go round for ever without a run, advance or slide"
        ) from None
