"""From a scenario to the engine: bodies, constants and memory of one run, in engine units."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import Purpose, normal, stream_keys, uniform
from swarmpush.dynamics.blocks import BLOCK_STATE, Ground
from swarmpush.dynamics.chipmunk import address
from swarmpush.dynamics.crew import Crew, Rig, new_crew
from swarmpush.dynamics.drive import Drive
from swarmpush.dynamics.host import BLOCK, PUSHER, WALL, Footing, HostSpace, Hull
from swarmpush.dynamics.ledger import SERIES, SLOTS, new_ledger
from swarmpush.dynamics.loop import Limits, Path, Task
from swarmpush.dynamics.patch import about, centre, friction_arm, gyration_squared
from swarmpush.dynamics.ranging import surroundings
from swarmpush.dynamics.steps import StepSettings, Units, effective_mass, engine_units, relaxed
from swarmpush.geometry import (
    Corner,
    Corners,
    block_corners,
    channel_corners,
    outward_normal,
    post_corners,
    pusher_corners,
    sides_of,
)
from swarmpush.kinematics.boundary import surface_names
from swarmpush.program import Senses, compile_routine, in_units
from swarmpush.scenario import Block, Errors, Pushers, Scenario, rounded_gyration_squared
from swarmpush.starts import draw_starts

MISSED_BUMP_RETRY = 4.0  # radius / free speed: a pusher that goes on pressing feels a missed bump this much later
APPROACH = 0.005  # of the free speed: slower than this nothing arrives, it only presses
LEAN_SHARE = 0.1  # of the stall force: pressing harder than this on the rear face counts as leaning


def unit_deviates(keys: NDArray[np.uint64], purpose: Purpose) -> NDArray[np.float64]:
    """How far each unit is off the mean in some respect, in standard deviations, three at most."""
    return np.array([min(max(normal(key, 0), -3.0), 3.0) for key in keys[:, purpose]])


def unit_spreads(s: Scenario, keys: NDArray[np.uint64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Each pusher's free speed and mass over the nominal ones."""
    e = s.errors
    speeds = 1.0 + e.speed_spread * unit_deviates(keys, Purpose.UNIT_SPEED)
    return speeds, 1.0 + e.mass_spread * unit_deviates(keys, Purpose.UNIT_MASS)


def scaled(corners: Corners, unit: float) -> Corners:
    """Corners measured in `unit`."""
    return tuple((x / unit, y / unit) for x, y in corners)


def build(s: Scenario, seed: int, steps: StepSettings) -> tuple[HostSpace, Task]:
    """Set the stage for one run."""
    u, p, e, n = engine_units(s), s.pushers, s.errors, s.pushers.count
    dt = steps.dt_s / u.time
    keys, starts = stream_keys(seed, n), draw_starts(s, seed)
    crew = _crew(s, u, dt, keys, starts)
    outline = scaled(pusher_corners(p), u.length)
    footed = [_footed(s, block, u, dt) for block in s.blocks]
    walls = [side for fixed in (channel_corners(s), *post_corners(s)) for side in sides_of(scaled(fixed, u.length))]
    c = s.contacts
    by_kind = {
        (PUSHER, WALL): c.pusher_wall,
        (PUSHER, BLOCK): c.pusher_block,
        (PUSHER, PUSHER): c.pusher_pusher,
        (BLOCK, WALL): c.block_wall,
        (BLOCK, BLOCK): c.block_block or c.block_wall,
    }
    space = HostSpace(
        [block.hull for block in footed],
        [
            Hull(x / u.length, y / u.length, heading, outline, 1.0, unit["step_mass"], unit["step_moment"] or math.inf)
            for (x, y, heading), unit in zip(starts.tolist(), crew.pushers, strict=True)
        ],
        walls,
        {kinds: (pair.restitution, pair.friction) for kinds, pair in by_kind.items()},
        slop=steps.slop_m / u.length,
        iterations=steps.iterations,
        footings=[block.footing for block in footed] if s.floor else (),
        pass_through=p.pass_through,
    )
    ground = _ground(s, u, crew, footed, len(walls))
    moving = [address(body._body) for body in space.moving]
    fixed = [address(body._body) for body in space.walls]
    n_pairs = len(space.host.pairs) - 2
    final_step = max(1, round(s.goal.time_limit / steps.dt_s))
    n_samples = final_step // steps.sample_steps + 2
    task = Task(
        rig=_rig(s, u, steps),
        crew=crew,
        program=in_units(compile_routine(s.routine, surface_names(s)), u.length, u.time),
        senses=Senses(e.turn_bias, e.turn_sd, e.bearing_step, e.bearing_sd, e.range_sd / u.length, e.missed_sights),
        around=surroundings(s, u.length, (footed[0].hull.x, footed[0].hull.y)),
        keys=keys,
        ground=ground,
        ledger=new_ledger(np.array(moving + fixed), len(moving), n_pairs, max(4096, 4 * SLOTS * len(moving))),
        path=new_path(n_samples, n, len(s.train)),
        limits=Limits(
            outline=np.array([(*start, *end) for start, end in walls]),
            length=s.channel.length / u.length,
            width=s.channel.width / u.length,
            goal_x=footed[0].hull.x + s.goal.travel / u.length,
            final_step=final_step,
            sample_steps=steps.sample_steps,
        ),
    )
    return space, task


def new_path(n_samples: int, n_pushers: int, n_train: int) -> Path:
    """Room for this many samples."""
    return Path(
        steps=np.zeros(n_samples, dtype=np.int64),
        block=np.zeros((n_samples, 4)),
        train=np.zeros((n_samples, n_train, 3)),
        pushers=np.zeros((n_samples, n_pushers, 4)),
        series=np.zeros((n_samples, len(SERIES) + 1)),
        n_rows=np.zeros(1, dtype=np.int64),
    )


def pusher_gyration_squared(p: Pushers) -> float:
    """Moment of inertia of a pusher over its mass, m2; evenly spread unless given."""
    return p.yaw_inertia / p.mass if p.yaw_inertia else rounded_gyration_squared(p.trunk, p.nose, p.radius)


def _crew(s: Scenario, u: Units, dt: float, keys: NDArray[np.uint64], starts: NDArray[np.float64]) -> Crew:
    """The pushers with their spreads, at their starts."""
    p, e = s.pushers, s.errors
    crew = new_crew(starts[:, 2])
    units = crew.pushers
    speeds, masses = unit_spreads(s, keys)
    # the drag is that of the medium and alike for all: a stronger unit is faster as well
    units["stall"] = p.stall_force / u.force * (1.0 + e.stall_spread * unit_deviates(keys, Purpose.UNIT_STALL))
    units["drag"] = p.stall_force / u.force / speeds
    units["side_drag"] = units["drag"] * p.sideways_drag
    units["drift"] = (e.heading_drift + e.drift_spread * unit_deviates(keys, Purpose.UNIT_DRIFT)) * u.time
    if e.dropout > 0.0:
        units["fails_at"] = [-math.log(uniform(key, 0)) / (e.dropout * u.time) for key in keys[:, Purpose.DROPOUT]]
    units["mass"] = masses
    if p.heading == "free":
        units["moment"] = masses * pusher_gyration_squared(p) / u.length**2
    prepare_masses(units, p.turning_drag / u.turn_drag, dt)
    return crew


def prepare_masses(units: NDArray[np.void], turn_drag: float, dt: float) -> None:
    """What `crew.act` steps pushers with, in touch and not, from their masses, moments and drags."""
    for unit in units:
        unit["held_mass"] = step_mass(unit["mass"], unit["drag"], unit["side_drag"], dt)
        unit["along_rest"] = relaxed(unit["drag"] * dt / unit["mass"])
        unit["across_rest"] = relaxed(unit["side_drag"] * dt / unit["mass"])
        if unit["moment"] > 0.0:
            unit["held_moment"] = effective_mass(unit["moment"], turn_drag, dt)
            unit["turn_rest"] = relaxed(turn_drag * dt / unit["moment"])
    units["step_mass"], units["step_moment"] = units["mass"], units["moment"]


def step_mass(mass: float, drag: float, side_drag: float, dt: float) -> float:
    """The mass to step a body with whose drag differs along and across.

    It is the effective mass under the drag along; the drag across is explicit, which is stable while the mass is at
    least that drag times the step.
    """
    return max(effective_mass(mass, drag, dt), side_drag * dt)


def step_turn(turn_rate: float, dt: float) -> float:
    """Angle of one step's turning at the full rate; 0 when pushers turn at once."""
    return turn_rate * dt if math.isfinite(turn_rate) else 0.0


def _rig(s: Scenario, u: Units, steps: StepSettings) -> Rig:
    p = s.pushers
    rig = rig_of(
        p,
        s.errors,
        u,
        steps.dt_s / u.time,
        turn_drag=p.turning_drag / u.turn_drag,
        follows=not p.is_disc,
        retry=MISSED_BUMP_RETRY,
        noise_steps=steps.noise_steps,
    )
    pull_x, pull_y = (-s.gravity * math.sin(rise) / u.acceleration for rise in (s.channel.slope, s.channel.cross_slope))
    return rig._replace(pull_x=pull_x, pull_y=pull_y)


def rig_of(
    p: Pushers | Drive,
    e: Errors,
    u: Units,
    dt: float,
    *,
    turn_drag: float,
    follows: bool,
    retry: float,
    noise_steps: int,
) -> Rig:
    """What all pushers share, on a level table; everything but p and e in engine units.

    Arguments:
        p, e: the pushers, or what drives them; their errors. dt: time step. turn_drag: of a free heading.
        follows: whether shapes follow headings. retry: time after which a missed bump may be felt. noise_steps: steps
            between two changes of a wandering heading.
    """
    turned = step_turn(p.turn_rate * u.time, dt)
    return Rig(
        dt=dt,
        drive_while_turning=p.drive_while_turning,
        turn_rate=p.turn_rate * u.time,
        turn_cos=math.cos(turned),
        turn_sin=math.sin(turned),
        bump_threshold=p.bump_threshold / u.impulse,
        half_arc=p.bumper_arc / 2,
        latency=p.latency / u.time,
        retry=retry,
        missed_bumps=e.missed_bumps,
        false_bumps=e.false_bumps * u.time,
        diffusion=e.heading_diffusion * math.sqrt(u.time),
        noise_steps=noise_steps,
        heading_is_free=p.heading == "free",
        follows=follows,
        turn_drag=turn_drag,
        contact_arm=p.contact_arm / u.length,
        fade_rate=u.time / e.fade_time if e.fade_time else 0.0,
        pull_x=0.0,
        pull_y=0.0,
    )


class _Footed(NamedTuple):
    """A block for the engine: hull and footing, its constants, and its outward normals."""

    hull: Hull
    footing: Footing
    constants: dict[str, float]
    normals: list[Corner]


def _footed(s: Scenario, block: Block, u: Units, dt: float) -> _Footed:
    """One block in engine units."""
    outline = block_corners(s, block)
    origin = block.rear_at, s.channel.width / 2 + block.offset

    def placed(point: Corner | None, otherwise: Corner) -> Corner:
        return (origin[0] + point[0], origin[1] + point[1]) if point else otherwise

    at = placed(block.centre_of_mass, centre(outline))
    footing = placed(block.centre_of_friction, at)
    corners = scaled(about(outline, at), u.length)
    mass, is_free = block.mass / u.mass, block.yaw == "free"
    moment = block.yaw_inertia / u.inertia if block.yaw_inertia else mass * gyration_squared(corners)
    along, across, yaw_drag, load = 0.0, 0.0, 0.0, 0.0
    if s.fluid:
        along, across = s.fluid.drag_along / u.drag, s.fluid.drag_across / u.drag
        yaw_drag = s.fluid.yaw_drag / u.turn_drag
    if s.floor:
        # both slopes are rises of an axis, so three parts at right angles make up gravity
        pressing = math.sqrt(1.0 - math.sin(s.channel.slope) ** 2 - math.sin(s.channel.cross_slope) ** 2)
        load = block.mass * s.floor.gravity / u.force * pressing
    constants = {
        "n_sides": len(corners),
        "mass": mass,
        "step_mass": step_mass(mass, along, across, dt),
        "moment": moment if is_free else 0.0,
        "step_moment": effective_mass(moment, yaw_drag, dt) if is_free else 0.0,
        "drag_along": along,
        "drag_across": across,
        "yaw_drag": yaw_drag,
        "floor_static": s.floor.static_friction * load if s.floor else 0.0,
        "floor_kinetic": s.floor.kinetic_friction * load if s.floor else 0.0,
        "floor_arm": friction_arm(about(outline, footing)) / u.length,
        "footing_x": (footing[0] - at[0]) / u.length,
        "footing_y": (footing[1] - at[1]) / u.length,
    }
    return _Footed(
        hull=Hull(
            at[0] / u.length, at[1] / u.length, 0.0, corners, 0.0,
            constants["step_mass"], constants["step_moment"] or math.inf,
        ),
        footing=Footing(constants["footing_x"], constants["footing_y"]),
        constants=constants,
        normals=[outward_normal(corners, k) for k in range(len(corners))],
    )  # fmt: skip


def _ground(s: Scenario, u: Units, crew: Crew, footed: list[_Footed], n_walls: int) -> Ground:
    n = s.pushers.count
    blocks = np.zeros(len(footed), dtype=BLOCK_STATE)
    for k, block in enumerate(footed):
        blocks[k]["entity"] = k and n + k
        blocks[k]["first_side"] = sum(len(other.normals) for other in footed[:k])
        for name, value in block.constants.items():
            blocks[k][name] = value
    return Ground(
        blocks=blocks,
        sides=np.array([normal for block in footed for normal in block.normals]),
        inertia=np.concatenate([inverse_inertia(rows) for rows in (blocks[:1], crew.pushers, blocks[1:])]),
        wall_x=np.zeros(n_walls),
        wall_y=np.zeros(n_walls),
        has_floor=s.floor is not None,
        pull_x=-s.gravity * math.sin(s.channel.slope) / u.acceleration,
        pull_y=-s.gravity * math.sin(s.channel.cross_slope) / u.acceleration,
        front_reach=max(x for x, _ in footed[0].hull.corners),
        lean_force=LEAN_SHARE * s.pushers.stall_force / u.force,
        approach=APPROACH,
    )


def inverse_inertia(rows: NDArray[np.void]) -> NDArray[np.float64]:
    """(n, 4) inverse mass and moment as they are, then as the engine has them; a moment of 0 stands for a held body."""
    columns = [rows[name] for name in ("mass", "moment", "step_mass", "step_moment")]
    with np.errstate(divide="ignore"):
        return np.column_stack([np.where(values > 0.0, 1.0 / values, 0.0) for values in columns])
