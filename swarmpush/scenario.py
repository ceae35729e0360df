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


def rounded_gyration_squared(length: float, width: float, radius: float) -> float:
    """Moment of inertia over mass of a uniform rectangle about its centre, m2, after it is rounded off with a radius.

    Put together from two crossing rectangles and four quarter discs (any textbook of mechanics); 0 by 0 gives a disc.

    >>> rounded_gyration_squared(0.0, 0.0, 2.0)
    2.0
    """
    a, b, r = length, width, radius
    area = math.pi * r**2 + b * (a + 2 * r) + 2 * a * r
    corners = math.pi * r**2 * (a**2 + b**2) / 4 + 4 * (a + b) * r**3 / 3 + math.pi * r**4 / 2
    along = b * (a + 2 * r) * ((a + 2 * r) ** 2 + b**2) / 12
    flanks = 2 * a * r * ((a**2 + r**2) / 12 + ((b + r) / 2) ** 2)
    return (corners + along + flanks) / area


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
    slope: Angle = Field(default=0.0, ge=-0.5, le=0.5, description="rise of the table towards the goal")
    cross_slope: Angle = Field(default=0.0, ge=-0.5, le=0.5, description="rise of the table towards increasing y")


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
    yaw_inertia: Inertia | None = Field(
        default=None, ge=1e-45, le=1e12, description="about the centre of mass; left out: a uniform plate"
    )
    centre_of_mass: Point | None = Field(
        default=None, description="x from the rearmost edge, y from the middle of its width; left out: that of a plate"
    )
    centre_of_friction: Point | None = Field(
        default=None, description="where the floor's friction acts, measured likewise; left out: the centre of mass"
    )
    rear_at: Length = Field(ge=0, description="x of the rear face at the start")
    offset: Length = Field(default=0.0, description="y of the centre at the start, from the middle of the channel")
    yaw: Literal["free", "held"] = Field(default="free", description="held: a rail keeps the block from turning")


class Pushers(_Table):
    """The crew: discs, or bars with a flat nose, that drive themselves along their heading."""

    count: Whole = Field(ge=1, le=5000, description="size of the crew")
    radius: Length = Field(ge=SMALLEST, le=1e2, description="of the disc, or of a bar's rounded corners")
    nose: Length = Field(default=0.0, ge=0, le=1e2, description="width of a bar's flat nose, between its corners")
    trunk: Length = Field(default=0.0, ge=0, le=1e2, description="length of a bar's flat sides, between its corners")
    mass: Mass = Field(ge=LIGHTEST, le=1e4)
    yaw_inertia: Inertia | None = Field(
        default=None, ge=1e-45, le=1e12, description="about its centre; left out: evenly spread mass"
    )
    free_speed: Speed = Field(ge=SLOWEST, le=1e3)
    stall_force: Force = Field(
        ge=WEAKEST, le=1e6, description="push at zero speed; falls linearly to 0 at the free speed"
    )
    sideways_drag: Ratio = Field(default=1.0, ge=1e-2, le=1e2, description="drag across the heading over drag along it")
    heading: Literal["held", "free"] = Field(
        default="held", description="held: only its own drive turns a pusher; free: contacts turn it as well"
    )
    turn_drag: TurnDrag | None = Field(
        default=None,
        gt=0,
        le=1e9,
        description="torque per turning rate of a free heading; left out: the drag spread evenly over the outline",
    )
    contact_arm: Length = Field(
        default=0.0,
        ge=-1e2,
        le=1e2,
        description="how far ahead of its centre a contact's force swings a free heading: more than 0 turns it along "
        "the force, less than 0 into it",
    )
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
    def comeback_time(self) -> float:
        """Time to regain its speed twice and cross its radius, s; a pusher that is back sooner has rebounded."""
        return 2 * self.relaxation_time + self.radius / self.free_speed

    @property
    def is_disc(self) -> bool:
        """Whether the outline is round."""
        return self.nose == 0.0 and self.trunk == 0.0

    @property
    def reach(self) -> float:
        """Farthest point of the outline from the centre, m."""
        return self.radius + math.hypot(self.nose, self.trunk) / 2

    @property
    def turning_drag(self) -> float:
        """Torque per turning rate of a free heading, N m s; by default that of the drag spread over the outline."""
        return self.turn_drag or self.drag * rounded_gyration_squared(self.trunk, self.nose, self.radius)

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

    block_drag: Drag = Field(gt=0, le=1e9, description="force per speed of the block along its own length")
    block_drag_across: Drag | None = Field(
        default=None, gt=0, le=1e9, description="the same across its length; left out: as along it"
    )
    block_yaw_drag: TurnDrag = Field(gt=0, le=1e9, description="torque per yaw rate of the block")
    near_wall_factor: Ratio = Field(
        default=1.0, ge=1, le=1e3, description="drag in this channel over the drags given; 1: they are those in it"
    )
    viscosity: Viscosity | None = Field(default=None, gt=0, description="only for the Reynolds number")
    density: Density | None = Field(default=None, gt=0, description="only for the Reynolds number")

    @property
    def drag_along(self) -> float:
        """Drag of the block in this channel along its length, N s/m."""
        return self.block_drag * self.near_wall_factor

    @property
    def drag_across(self) -> float:
        """Drag of the block in this channel across its length, N s/m."""
        return (self.block_drag_across or self.block_drag) * self.near_wall_factor

    @property
    def yaw_drag(self) -> float:
        """Torque per yaw rate of the block in this channel, N m s."""
        return self.block_yaw_drag * self.near_wall_factor


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
    block_block: Pair | None = Field(default=None, description="of a train; left out: as block_wall")


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
    stall_spread: Ratio = Field(
        default=0.0, ge=0, le=0.3, description="s.d. of stall force from unit to unit, relative"
    )
    drift_spread: AngularSpeed = Field(
        default=0.0, ge=0, le=100, description="s.d. of the steady curving from unit to unit"
    )
    fade_time: Time | None = Field(
        default=None, gt=0, le=1e9, description="time in which thrust falls to 1/e of itself; left out: it stays"
    )
    dropout: Rate = Field(default=0.0, ge=0, le=1e3, description="failures per second and pusher; it then lies still")


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
    iterations: Whole | None = Field(
        default=None,
        ge=1,
        le=1000,
        description="of the contact solver per step; default: 10, or 40 per further block of a train. n pushers that "
        "lean one behind another need some 3 n^2 to hold exactly at the static threshold",
    )


class Scenario(_Table):
    """Everything about one rig. Frozen; changes are made with `replace`."""

    format: Literal[1] = Field(description="version of this file format")
    about: About
    channel: Channel
    block: Block
    train: tuple[Block, ...] = Field(
        default=(), max_length=20, description="further blocks ahead of the first, which it pushes along"
    )
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
    def blocks(self) -> tuple[Block, ...]:
        """The block that is struck, then those ahead of it."""
        return (self.block, *self.train)

    @property
    def gravity(self) -> float:
        """Gravity, m/s2."""
        return self.floor.gravity if self.floor else GRAVITY

    @property
    def block_front_at(self) -> float:
        """x of the block's front face at the start, m."""
        return self.block.rear_at + self.block.length
