"""The scenario: one frozen description of channel, block, pushers, routine, errors, starts, goal and trial.

Values are in SI units (m, s, kg, N, rad). `loading.py` reads scenarios from TOML files and words the errors.
"""

from __future__ import annotations

import hashlib
import json
import math
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, Strict

from swarmpush.quantities import Quantity
from swarmpush.routine import Routine

Length = Annotated[float, Quantity("m")]
Time = Annotated[float, Quantity("s")]
Mass = Annotated[float, Quantity("kg")]
Inertia = Annotated[float, Quantity("kg*m^2")]
Speed = Annotated[float, Quantity("m/s")]
AngularSpeed = Annotated[float, Quantity("rad/s")]
TurnRate = Annotated[float, Quantity("rad/s", may_be_infinite=True)]
Force = Annotated[float, Quantity("N")]
Impulse = Annotated[float, Quantity("N*s")]
Drag = Annotated[float, Quantity("N*s/m")]
TurnDrag = Annotated[float, Quantity("N*m*s")]
Angle = Annotated[float, Quantity("rad")]
HeadingDiffusion = Annotated[float, Quantity("rad/sqrt(s)")]
Rate = Annotated[float, Quantity("1/s")]
Ratio = Annotated[float, Quantity("1")]
Viscosity = Annotated[float, Quantity("Pa*s")]
Density = Annotated[float, Quantity("kg/m^3")]
Acceleration = Annotated[float, Quantity("m/s^2")]
Whole = Annotated[int, Strict()]
YesNo = Annotated[bool, Strict()]

GRAVITY = 9.81  # m/s2

# Below these nothing can be a body that drives itself, and the engine's numbers could run out of range.
SMALLEST = 1e-9  # m
LIGHTEST = 1e-24  # kg
SLOWEST = 1e-12  # m/s
WEAKEST = 1e-24  # N


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=True)


class About(_Table):
    """Who and what the scenario is."""

    name: str = Field(min_length=1, max_length=120)
    note: str = Field(default="", max_length=2000)


Point = tuple[Length, Length]
Outline = Annotated[tuple[Point, ...], Field(min_length=3, max_length=200)]


class Channel(_Table):
    """Straight walls: a corridor with closed ends, x along it from 0 to length and y across from 0 to width, or any
    outline."""

    length: Length = Field(ge=SMALLEST, le=1e3, description="between the ends; with an outline, its extent in x")
    width: Length = Field(ge=SMALLEST, le=1e3, description="between the side walls; with an outline, its extent in y")
    outline: Outline | None = Field(default=None, description="corners x, y in order; left out: the rectangle")
    posts: tuple[Outline, ...] = Field(default=(), max_length=50, description="fixed obstacles, each a list of corners")


class Block(_Table):
    """The convex object to be moved in +x. Its rear face looks back to x = 0."""

    length: Length = Field(ge=SMALLEST, le=1e3, description="along the channel")
    width: Length = Field(ge=SMALLEST, le=1e3, description="across the channel")
    outline: Outline | None = Field(
        default=None,
        description="corners of a convex block in order, x from its rearmost edge, y from the middle of its width; "
        "left out: the rectangle",
    )
    mass: Mass = Field(ge=LIGHTEST, le=1e6)
    yaw_inertia: Inertia | None = Field(default=None, ge=1e-45, le=1e12, description="default: a uniform plate")
    rear_at: Length = Field(ge=0, description="x of the rear face at the start")
    offset: Length = Field(default=0.0, description="y of the centre at the start, from the middle of the channel")
    yaw: Literal["free", "held"] = Field(default="free", description="held: a rail keeps the block from turning")

    @property
    def moment(self) -> float:
        """Yaw inertia about the centre, kg m2; a uniform rectangle's m (l^2 + b^2)/12 unless given."""
        return self.yaw_inertia or self.mass * (self.length**2 + self.width**2) / 12.0


class Pushers(_Table):
    """The crew: discs that drive themselves along their heading."""

    count: Whole = Field(ge=1, le=5000, description="size of the crew")
    radius: Length = Field(ge=SMALLEST, le=1e2)
    mass: Mass = Field(ge=LIGHTEST, le=1e4)
    free_speed: Speed = Field(ge=SLOWEST, le=1e3)
    stall_force: Force = Field(
        ge=WEAKEST, le=1e6, description="push at zero speed; falls linearly to 0 at the free speed"
    )
    sideways_drag: Ratio = Field(default=1.0, ge=1e-2, le=1e2, description="drag across the heading over drag along it")
    turn_rate: TurnRate = Field(
        default=math.inf,
        gt=0,
        description="how fast it turns; inf: at once",
        json_schema_extra={"default": "inf rad/s"},  # JSON has no number for it
    )
    drive_while_turning: Ratio = Field(default=0.0, ge=0, le=1, description="share of the drive kept while turning")
    bump_threshold: Impulse = Field(default=0.0, ge=0, description="least impulse that the bump sensor feels")
    bumper_arc: Angle = Field(default=2 * math.pi, gt=0, le=2 * math.pi, description="arc that feels, centred ahead")
    latency: Time = Field(default=0.0, ge=0, le=1e4, description="from the bump to the reaction; drives on meanwhile")
    pass_through: YesNo = Field(
        default=False, description="true: pushers do not touch each other (to see what crowding costs)"
    )

    @property
    def drag(self) -> float:
        """Drag along the heading, N s/m: stall force over free speed."""
        return self.stall_force / self.free_speed

    @property
    def relaxation_time(self) -> float:
        """Time in which a free pusher gains speed, s: mass over drag."""
        return self.mass / self.drag


class Floor(_Table):
    """Dry floor under the block (Coulomb friction, uniform pressure)."""

    static_friction: Ratio = Field(ge=0, le=10, description="coefficient that must be overcome to set the block going")
    kinetic_friction: Ratio = Field(ge=0, le=10, description="coefficient while it slides; not above the static one")
    gravity: Acceleration = Field(default=GRAVITY, ge=0, le=1e3)


class Fluid(_Table):
    """Liquid round the block (Stokes drag). The pushers' own drag is stall force over free speed."""

    block_drag: Drag = Field(gt=0, le=1e9, description="force per speed of the block in this channel")
    block_yaw_drag: TurnDrag = Field(gt=0, le=1e9, description="torque per yaw rate of the block in this channel")
    viscosity: Viscosity | None = Field(default=None, gt=0, description="only for the Reynolds number")
    density: Density | None = Field(default=None, gt=0, description="only for the Reynolds number")


class Pair(_Table):
    """Restitution (Newton's law) and friction (Coulomb's law) between two surfaces."""

    restitution: Ratio = Field(ge=0, le=1)
    friction: Ratio = Field(ge=0, le=10)


class Contacts(_Table):
    """The pairs of surfaces that can meet."""

    pusher_wall: Pair
    pusher_block: Pair
    pusher_pusher: Pair
    block_wall: Pair


class Errors(_Table):
    """What is not ideal in the pushers. Everything left out is 0."""

    turn_bias: Angle = Field(
        default=0.0, ge=-math.pi, le=math.pi, description="added to every turn, counter-clockwise positive"
    )
    turn_sd: Angle = Field(default=0.0, ge=0, le=math.pi, description="standard deviation of a turn")
    heading_diffusion: HeadingDiffusion = Field(default=0.0, ge=0, le=10, description="s.d. of the heading after 1 s")
    heading_drift: AngularSpeed = Field(default=0.0, ge=-100, le=100, description="steady curving of the path")
    bearing_step: Angle = Field(default=0.0, ge=0, le=math.pi, description="resolution of the bump's bearing; 0: exact")
    bearing_sd: Angle = Field(default=0.0, ge=0, le=math.pi, description="standard deviation of the bump's bearing")
    range_sd: Length = Field(default=0.0, ge=0, le=1e3, description="standard deviation of a gauged range")
    missed_sights: Ratio = Field(default=0.0, ge=0, lt=1, description="share of looks that miss what is there")
    missed_bumps: Ratio = Field(default=0.0, ge=0, lt=1, description="share of bumps not felt")
    false_bumps: Rate = Field(default=0.0, ge=0, le=1e3, description="bumps felt out of nothing, per second")
    speed_spread: Ratio = Field(default=0.0, ge=0, le=0.3, description="s.d. of free speed from unit to unit, relative")
    mass_spread: Ratio = Field(default=0.0, ge=0, le=0.3, description="s.d. of mass from unit to unit, relative")


class FixedStart(_Table):
    """Where one pusher starts."""

    x: Length
    y: Length
    heading: Angle


class Start(_Table):
    """Where the pushers start: drawn from a region, or placed one by one."""

    region: Literal["behind", "ahead", "anywhere"] = Field(
        default="behind", description="behind or ahead of the block, or either, evenly spread"
    )
    heading: Angle | None = Field(default=None, description="mean heading; left out: any heading alike")
    heading_spread: Angle = Field(
        default=0.0, ge=0, le=math.pi, description="standard deviation about the mean heading"
    )
    placed: tuple[FixedStart, ...] | None = Field(default=None, max_length=5000, description="one start per pusher")


class Goal(_Table):
    """When a run is a success."""

    travel: Length = Field(gt=0, le=1e3, description="how far the block must move in +x")
    time_limit: Time = Field(gt=0, le=1e7)


class Forecast(_Table):
    """How the point world turns strikes into block travel."""

    law: Literal["auto", "impact", "lean", "given"] = Field(
        default="auto",
        description="impact: slide after one impact on the dry floor; lean: thrust while in touch; "
        "given: a fixed nudge; auto: impact and lean added",
    )
    nudge: Length | None = Field(default=None, gt=0, description="travel per strike, for law = given")


class Trial(_Table):
    """How the scenario is tried out."""

    replicates: Whole = Field(default=12, ge=2, le=100_000, description="independent runs per rung of the ladder")
    seed: Whole = Field(default=1, ge=0, le=2**62, description="of all random draws")
    confidence: Ratio = Field(default=0.95, gt=0.5, lt=1, description="of every interval")
    tolerance: Ratio = Field(default=0.10, gt=0, le=1, description="relative band within which an assumption holds")
    sample_every: Time | None = Field(
        default=None, gt=0, description="interval of the recorded path; default: 1000 samples"
    )


class Numerics(_Table):
    """Solver settings; everything has a default that follows from the scenario."""

    step: Time | None = Field(default=None, gt=0, description="time step; default: from the shortest thing to resolve")
    iterations: Whole = Field(default=10, ge=1, le=1000, description="of the contact solver per step")


class Scenario(_Table):
    """Everything about one rig. Frozen; changes are made with `replace`."""

    format: Literal[1] = Field(description="version of this file format")
    about: About
    channel: Channel
    block: Block
    pushers: Pushers
    floor: Floor | None = None
    fluid: Fluid | None = None
    contacts: Contacts
    routine: Routine
    errors: Errors = Errors()
    start: Start = Start()
    goal: Goal
    forecast: Forecast = Forecast()
    trial: Trial = Trial()
    numerics: Numerics = Numerics()

    def replace(self, **tables: dict[str, Any]) -> Scenario:
        """A copy with some keys changed, e.g. `scenario.replace(pushers={"count": 1})`.

        The values are SI numbers and are not checked again; use it for changes that keep a scenario valid.
        """
        changed = {name: getattr(self, name).model_copy(update=keys) for name, keys in tables.items()}
        return self.model_copy(update=changed)

    def to_tables(self) -> dict[str, Any]:
        """All values as nested tables that JSON can hold and from which `from_tables` makes the same scenario."""
        tables = self.model_dump(mode="json", exclude_none=True)
        if math.isinf(self.pushers.turn_rate):
            tables["pushers"]["turn_rate"] = "inf rad/s"
        return tables

    def digest(self) -> str:
        """A hash of all values, the same on every platform; 16 hexadecimal digits."""
        text = json.dumps(self.to_tables(), sort_keys=True)
        return hashlib.sha256(text.encode()).hexdigest()[:16]

    @property
    def block_front_at(self) -> float:
        """x of the block's front face at the start, m."""
        return self.block.rear_at + self.block.length
