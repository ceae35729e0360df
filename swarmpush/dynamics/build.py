"""From a scenario to the engine: bodies, constants and memory of one run, in engine units."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import Purpose, normal, stream_keys
from swarmpush.dynamics.crew import Rig, new_crew
from swarmpush.dynamics.host import BLOCK, PUSHER, WALL, Disc, HostSpace, Plate
from swarmpush.dynamics.ledger import SLOTS, new_ledger
from swarmpush.dynamics.loop import Path, Task
from swarmpush.dynamics.patch import about, centre, friction_arm, gyration_squared
from swarmpush.dynamics.ranging import surroundings
from swarmpush.dynamics.steps import StepSettings, effective_mass, engine_units
from swarmpush.geometry import Corner, Corners, block_corners, channel_corners, outward_normal, post_corners
from swarmpush.kinematics.boundary import surface_names
from swarmpush.program import Senses, compile_routine, in_units
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts

MISSED_BUMP_RETRY = 4.0  # radius / free speed: a pusher that goes on pressing feels a missed bump this much later
LEAN_SHARE = 0.1  # of the stall force: pressing harder than this on the rear face counts as leaning


def unit_spreads(s: Scenario, keys: NDArray[np.uint64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Each pusher's free speed and mass over the nominal ones, three standard deviations at most off."""

    def draw(spread: float, purpose: Purpose) -> NDArray[np.float64]:
        deviates = [min(max(normal(key, 0), -3.0), 3.0) for key in keys[:, purpose]]
        return np.array([1.0 + spread * z for z in deviates])

    return draw(s.errors.speed_spread, Purpose.UNIT_SPEED), draw(s.errors.mass_spread, Purpose.UNIT_MASS)


def scaled(corners: Corners, unit: float) -> Corners:
    """Corners measured in `unit`."""
    return tuple((x / unit, y / unit) for x, y in corners)


def sides_of(corners: Corners) -> list[tuple[Corner, Corner]]:
    """Sides of a polygon, each from its first corner to its second."""
    return list(zip(corners, corners[1:] + corners[:1], strict=True))


def build(s: Scenario, seed: int, steps: StepSettings) -> tuple[HostSpace, Task]:
    """Set the stage for one run."""
    u = engine_units(s)
    p, e, n = s.pushers, s.errors, s.pushers.count
    dt = steps.dt_s / u.time
    keys = stream_keys(seed, n)
    speeds, masses = unit_spreads(s, keys)
    starts = draw_starts(s, seed)
    stall = p.stall_force / u.force
    drag = stall / speeds
    side_drag = drag * p.sideways_drag
    # a body's sideways drag is explicit, which is stable while its mass is at least side drag times the step
    step_masses = [
        max(effective_mass(m, g, dt), g_side * dt) for m, g, g_side in zip(masses, drag, side_drag, strict=True)
    ]

    outline = block_corners(s)
    at = centre(outline)
    corners = scaled(about(outline, at), u.length)
    block_mass = s.block.mass / u.mass
    block_moment = s.block.yaw_inertia / u.inertia if s.block.yaw_inertia else block_mass * gyration_squared(corners)
    block_drag = s.fluid.block_drag / u.drag if s.fluid else 0.0
    yaw_drag = s.fluid.block_yaw_drag / u.turn_drag if s.fluid else 0.0
    block_step_mass = effective_mass(block_mass, block_drag, dt)
    step_moment = effective_mass(block_moment, yaw_drag, dt) if s.block.yaw == "free" else math.inf
    weight = s.block.mass * s.floor.gravity / u.force if s.floor else 0.0

    x, y = at[0] / u.length, at[1] / u.length
    walls = [side for fixed in (channel_corners(s), *post_corners(s)) for side in sides_of(scaled(fixed, u.length))]
    immovable = [math.inf] * len(walls)
    pair = {name: (q.restitution, q.friction) for name, q in s.contacts}
    space = HostSpace(
        Plate(x, y, corners, block_step_mass, step_moment),
        [Disc(a / u.length, b / u.length, 1.0, m) for (a, b, _), m in zip(starts, step_masses, strict=True)],
        walls,
        {
            (PUSHER, WALL): pair["pusher_wall"],
            (PUSHER, BLOCK): pair["pusher_block"],
            (PUSHER, PUSHER): pair["pusher_pusher"],
            (BLOCK, WALL): pair["block_wall"],
        },
        slop=steps.slop_m / u.length,
        iterations=steps.iterations,
        has_floor=s.floor is not None,
        pass_through=p.pass_through,
    )
    rig = Rig(
        dt=dt,
        stall=stall,
        drive_while_turning=p.drive_while_turning,
        turn_rate=p.turn_rate * u.time,
        bump_threshold=p.bump_threshold / u.impulse,
        half_arc=p.bumper_arc / 2,
        latency=p.latency / u.time,
        retry=MISSED_BUMP_RETRY,
        missed_bumps=e.missed_bumps,
        false_bumps=e.false_bumps * u.time,
        diffusion=e.heading_diffusion * math.sqrt(u.time),
        drift=e.heading_drift * u.time,
        noise_steps=steps.noise_steps,
        inverse_mass=1.0 / np.array([block_mass, *masses, *immovable]),
        inverse_step_mass=1.0 / np.array([block_step_mass, *step_masses, *immovable]),
        block_mass=block_mass,
        block_step_mass=block_step_mass,
        block_drag=block_drag,
        block_yaw_drag=yaw_drag,
        front_reach=max(a for a, _ in corners),
        corners=np.array(corners),
        sides=np.array([outward_normal(corners, k) for k in range(len(corners))]),
        has_floor=s.floor is not None,
        floor_static=s.floor.static_friction * weight if s.floor else 0.0,
        floor_kinetic=s.floor.kinetic_friction * weight if s.floor else 0.0,
        floor_arm=friction_arm(corners),
        yaw_is_held=s.block.yaw == "held",
        channel_length=s.channel.length / u.length,
        channel_width=s.channel.width / u.length,
        goal_x=x + s.goal.travel / u.length,
        lean_force=LEAN_SHARE * stall,
    )
    n_samples = round(s.goal.time_limit / steps.dt_s) // steps.sample_steps + 1
    task = Task(
        rig=rig,
        crew=new_crew(starts[:, 2], drag, side_drag),
        program=in_units(compile_routine(s.routine, surface_names(s)), u.length, u.time),
        senses=Senses(e.turn_bias, e.turn_sd, e.bearing_step, e.bearing_sd, e.range_sd / u.length, e.missed_sights),
        around=surroundings(s, u.length, (x, y)),
        keys=keys,
        ledger=new_ledger(space.moving_ids(), space.wall_ids(), max(4096, 4 * SLOTS * (n + 1))),
        path=Path(np.zeros((n_samples, 5)), np.zeros((n_samples, n, 4))),
        sample_steps=steps.sample_steps,
    )
    return space, task
