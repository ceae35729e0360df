"""The same rigs in two general-purpose engines, MuJoCo and Box2D: strikes, leaning, and travel over several strikes.

`engines.py` builds each rig anew from the scenario's numbers, with the engine's own bodies, joints, friction and
contacts and with a routine written by hand; nothing of swarmpush's body world takes part. It is therefore a check from
outside, and one of what the two-body formulas in the other files cannot reach: yaw, wedging, queues of pushers, and
errors that add up from strike to strike.

The two engines err in different ways. Box2D's contacts are rigid and solved by impulses, as those of the engine inside
swarmpush are, but it is another program with another order within a step, another treatment of overlap, and single
precision. MuJoCo's contacts are stiff springs that let go, solved as one convex problem in accelerations. Where all
three agree it is the mechanics that agrees, not the solvers.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
import pytest
from engines import Engine, Path, play_box2d, play_mujoco
from numpy.typing import NDArray
from rigs import PUSH_ON, STOP_AT_A_BUMP, dry, one_stage, pair, placed, rig

import swarmpush
from swarmpush.scenario import Scenario

pytestmark = pytest.mark.slow  # some 20 s together, most of them in MuJoCo's small steps


class Other(NamedTuple):
    """An engine and its step, s."""

    play: Engine
    dt: float


# swarmpush takes steps of 1.6e-4 s for these rigs, Box2D about the same; an impact in MuJoCo takes sixty steps
MUJOCO, BOX2D = Other(play_mujoco, 3e-5), Other(play_box2d, 2e-4)
BOTH = pytest.mark.parametrize("other", [MUJOCO, BOX2D], ids=["mujoco", "box2d"])


def simulate(s: Scenario) -> swarmpush.Run:
    """The run here; nothing in these rigs is random, so any seed will do."""
    return swarmpush.simulate(s, seed=1, cycles=())


def off_path(run: swarmpush.Run, path: Path) -> NDArray[np.float64]:
    """How far the block is off at most on its way: x, y (m) and yaw (rad)."""
    here = run.block[["x_m", "y_m", "yaw_rad"]].to_numpy()[1:]
    there = np.column_stack([np.interp(run.block["t_s"][1:], path.t, column) for column in path.block.T])
    return np.abs(here - there).max(axis=0)


# ---- one strike -----------------------------------------------------------------------------------------------------


def strike(restitution: float, friction: float, heading: float, offset: float) -> Scenario:
    """A pusher runs 0.3 m at `heading`, hits the face `offset` off its middle, and halts; nothing slows the block."""
    run = 0.3
    return rig(
        block={"length": 0.1, "width": 0.2, "mass": 0.3},
        pushers={"stall_force": 0.5},
        contacts={"pusher_block": pair(restitution, friction)},
        start=placed((3.98 - run * math.cos(heading), 0.5 + offset - run * math.sin(heading), heading)),
        goal={"time_limit": 0.55},
        trial={"sample_every": 5e-3},
    )


def given(run: swarmpush.Run) -> NDArray[np.float64]:
    """What the first impact gives the block here: momentum along and across (N s), and spin (rad/s)."""
    hit = run.visits.iloc[0]
    after = run.block[run.block["t_s"] > hit["t_off_s"]]
    spin = np.polyfit(after["t_s"], after["yaw_rad"], 1)[0]
    return np.array([hit["impact_Ns"], -hit["tangential_Ns"], spin])


def taken(s: Scenario, path: Path) -> NDArray[np.float64]:
    """The same in another engine, from the block's mass and its rates at the end."""
    return path.rates[-1] * [s.block.mass, s.block.mass, 1.0]


# Relative to the momentum along, and to the spin. Box2D finds the touch up to a step late, in which the pusher gains
# (F - g v) dt/m = 4e-5 m/s, and drives on for that step: 1e-4 each. What is left is single precision.
RIGID = 5e-4
# It takes the force to act halfway into the overlap, up to v dt/2 = 0.1 mm, and its polygons have rounded corners of
# 0.1 mm: on the block's arm of 50 mm that is 4e-3 of the spin that friction gives.
ARM_OFF = 4e-3
# MuJoCo's spring starts with up to a step's overlap, a sixtieth of the impact, which is worth some e/60 in e; and the
# pusher, its drive switched off at the touch, is slowed by drag for the length of the impact, g t/m = 0.002.
SPRING = 0.01
# With friction, MuJoCo's convex problem makes a sliding contact push apart, at up to mu times the slip. The normal
# impulse is then too small for as long as the contact slides, here by 2 %; at mu = 0.3 and 37 degrees, by 7 %.
SPREADING = 0.03
BRIEF = 1e-5  # s: MuJoCo's step here, so that the impact takes 0.6 ms

CASES = [
    ("box2d", 0.0, 0.0, 0.0, 0.0), ("mujoco", 0.0, 0.0, 0.0, 0.0),
    ("box2d", 0.5, 0.0, 0.0, 0.0), ("mujoco", 0.5, 0.0, 0.0, 0.0),
    ("box2d", 0.8, 0.0, 0.64, 0.03), ("mujoco", 0.8, 0.0, 0.64, 0.03),
    ("box2d", 0.5, 0.1, 0.3, 0.0), ("mujoco", 0.5, 0.1, 0.3, 0.0),  # slides
    ("box2d", 0.5, 0.3, 0.3, 0.03), ("mujoco", 0.5, 0.3, 0.3, 0.03),  # sticks, off centre
    ("box2d", 0.8, 0.3, 0.64, 0.0),  # slides fast
]  # fmt: skip


@pytest.mark.parametrize(("engine", "restitution", "friction", "heading", "offset"), CASES)
def test_strike(engine: str, restitution: float, friction: float, heading: float, offset: float) -> None:
    """A strike gives the block the momentum and the spin that it gets in another engine, smooth or rough."""
    s = strike(restitution, friction, heading, offset)
    here = given(simulate(s))
    if engine == "box2d":
        there, momentum_off, spin_off = taken(s, play_box2d(s, s.goal.time_limit, BOX2D.dt)), RIGID, ARM_OFF
    else:
        there = taken(s, play_mujoco(s, s.goal.time_limit, BRIEF))
        momentum_off = spin_off = SPREADING if friction else SPRING
    assert there[:2] == pytest.approx(here[:2], abs=momentum_off * here[0])
    assert there[2] == pytest.approx(here[2], rel=spin_off, abs=1e-9)


# A strong drive gains its speed within a tenth of its radius, and the step is then a twentieth of that time. The mass
# that an impact meets is too large by half of this; the block of three times the mass gets 3/4 of it in speed.
STRONG = 0.025 * 0.75
EXTRAPOLATED = 3e-4  # relative: a hundredth of it is of second order


def test_strike_of_a_strong_drive() -> None:
    """Where the drive sets the step a strike is off by half a step over the relaxation time, and that vanishes with it.

    The momentum of the block in Box2D lies where the runs at the step and at half the step point to.
    """
    s = strike(0.5, 0.0, 0.0, 0.0).replace(pushers={"stall_force": 50.0})
    run = simulate(s)
    half = simulate(s.replace(numerics={"step": run.steps.dt_s / 2}))
    here, at_half = run.books.pushers[0], half.books.pushers[0]
    there = taken(s, play_box2d(s, s.goal.time_limit, run.steps.dt_s / 2))[0]
    assert here == pytest.approx(there, rel=1.05 * STRONG)
    assert 2 * at_half - here == pytest.approx(there, rel=EXTRAPOLATED)


# ---- leaning --------------------------------------------------------------------------------------------------------

SLOW_FLUID = {"block_drag": 3.0, "block_yaw_drag": 2e-3}
LIGHT_FLUID = {"block_drag": 0.3, "block_yaw_drag": 2e-3}
DRIVE = 0.5  # N; the pushers' drag is 0.5 N s/m and their mass 0.1 kg


def crew(
    *starts: tuple[float, float, float], restitution: float = 0.0, friction: float = 0.0, **tables: Any
) -> Scenario:
    """Pushers in a corridor 0.5 m wide that drive on after they have touched something; all pairs are alike."""
    names = ("pusher_block", "pusher_wall", "pusher_pusher", "block_wall")
    pushers = {"count": len(starts), "stall_force": DRIVE, "latency": PUSH_ON} | tables.pop("pushers", {})
    return rig(
        channel={"length": 7.0, "width": 0.5},
        block={"length": 0.1, "width": 0.2, "mass": 0.3, "rear_at": 3.0} | tables.pop("block", {}),
        pushers=pushers,
        contacts={name: pair(restitution, friction) for name in names},
        start=placed(*starts),
        goal={"time_limit": 1.5} | tables.pop("goal", {}),
        trial={"sample_every": 7.5e-3},
        **{"routine": {"stages": STOP_AT_A_BUMP}} | tables,
    )


def queue(n: int) -> list[tuple[float, float, float]]:
    """Pushers in touch one behind the other, the first of them with the block."""
    return [(2.98 - 0.04 * i, 0.25, 0.0) for i in range(n)]


IN_A_ROW = [(2.98, y, 0.0) for y in (0.2, 0.25, 0.3)]
A_SECOND = {"time_limit": 1.0}
TOGETHER = {
    "one in a fluid": crew(*queue(1), fluid=LIGHT_FLUID, goal=A_SECOND),
    "three side by side in a fluid": crew(*IN_A_ROW, fluid=SLOW_FLUID, goal=A_SECOND),
    "four in a queue on a dry floor": crew(*queue(4), floor=dry(0.5), goal=A_SECOND),
    "three side by side on a dry floor": crew(*IN_A_ROW, floor=dry(0.3), block={"yaw": "held"}, goal=A_SECOND),
}


def balance(s: Scenario, t: float) -> float:
    """Speed at the time t of a block and n pushers that set out together, by the balance of forces.

    (n m + M) dv/dt = n F - mu M g - (n g_p + g_b) v.
    """
    n, p, b = s.pushers.count, s.pushers, s.block
    held = s.floor.kinetic_friction * b.mass * s.floor.gravity if s.floor else 0.0
    drag = n * p.drag + (s.fluid.block_drag if s.fluid else 0.0)
    return (n * p.stall_force - held) / drag * -math.expm1(-t * drag / (n * p.mass + b.mass))


# m/s: what they gain in a step at first, at up to F/m = 5 m/s2; it fades with time, and Box2D's step is the longest
GAIN = 5.0 * BOX2D.dt
# m: what they run in a step, 1 m/s times 0.2 ms; once for when the contact is seen, once for the order within a step
PLACE = 4e-4
RAMMED = 3e-4  # m: the same for one head-on, where nothing slides along the face


@BOTH
@pytest.mark.parametrize("name", TOGETHER)
def test_leaning(name: str, other: Other) -> None:
    """Leaning pushers move the block as fast and as far as in another engine, and as fast as the forces balance."""
    s = TOGETHER[name]
    run = simulate(s)
    path = other.play(s, run.duration_s, other.dt)
    assert off_path(run, path)[0] < PLACE
    at = run.block["t_s"].iloc[-1]
    there = float(np.interp(at, path.t, path.rates[:, 0]))
    assert there == pytest.approx(balance(s, at), abs=GAIN)
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(there, abs=GAIN)


TURNING = {
    "off centre, smooth": crew((2.98, 0.28, 0.0), fluid=LIGHT_FLUID, goal=A_SECOND),
    "off centre, rough": crew((2.98, 0.28, 0.0), friction=0.4, fluid=LIGHT_FLUID, goal=A_SECOND),
    "two, one after the other": crew((2.9, 0.2, 0.0), (2.8, 0.32, 0.0), friction=0.2, fluid=SLOW_FLUID),
    "turned against the wall": crew((2.98, 0.33, 0.0), friction=0.3, fluid=SLOW_FLUID, block={"width": 0.4}),
}
# rad: the place of the push is known to about PLACE on arms of 30 mm and more
TURN = PLACE / 0.03


@BOTH
@pytest.mark.parametrize("name", TURNING)
def test_leaning_off_centre(name: str, other: Other) -> None:
    """A block that is pushed off centre moves, drifts and turns as in another engine, also along a wall."""
    s = TURNING[name]
    run = simulate(s)
    assert run.yaw_max_rad > 0.3
    off = off_path(run, other.play(s, run.duration_s, other.dt))
    assert max(off[:2]) < PLACE
    assert off[2] < TURN


RAMMING = {
    f"{force} N and {mass} kg": rig(
        pushers={"stall_force": force, "mass": mass, "latency": PUSH_ON},
        floor=dry(0.3),
        start=placed((3.5, 0.5, 0.0)),
        goal={"time_limit": 2.5},
        trial={"sample_every": 0.01},
    )
    for force, mass in ((3.2, 0.5), (2.5, 0.5), (2.5, 2.0))
}


@BOTH
@pytest.mark.parametrize("name", RAMMING)
def test_ramming_and_leaning(name: str, other: Other) -> None:
    """A cart that rams a block on a dry floor and leans on moves it as far, whether friction stops them or not."""
    s = RAMMING[name]
    run = simulate(s)
    path = other.play(s, run.duration_s, other.dt)
    assert off_path(run, path)[0] < RAMMED
    assert run.pushers["x_m"].iloc[-1] == pytest.approx(path.pushers[-1, 0, 0], abs=RAMMED)


# ---- travel over several strikes ------------------------------------------------------------------------------------


def shuttle(*starts: tuple[float, float, float], latency: float, restitution: float, **tables: Any) -> Scenario:
    """Pushers that mirror at every bump, to and fro between the block and the near end 0.3 m behind it."""
    return crew(
        *starts,
        restitution=restitution,
        routine=one_stage({"act": "mirror"}),
        pushers={"latency": latency},
        block={"rear_at": 0.3, "width": 0.3} | tables.pop("block", {}),
        goal={"time_limit": 3.0},
        **tables,
    )


HELD = {"yaw": "held"}
STICKY_FLUID = {"block_drag": 1.0, "block_yaw_drag": 0.05}
SHUTTLES = {
    "strikes on a dry floor": shuttle((0.1, 0.25, 0.0), latency=0.02, restitution=0.5, floor=dry(0.3), block=HELD),
    "strikes and leaning": shuttle((0.1, 0.25, 0.0), latency=0.2, restitution=0.5, floor=dry(0.1), block=HELD),
    "two that strike and lean": shuttle(
        (0.1, 0.2, 0.0), (0.05, 0.3, 0.0), latency=0.15, restitution=0.0, floor=dry(0.2), block=HELD
    ),
    "zigzag in a fluid": shuttle((0.1, 0.25, 0.5), latency=0.05, restitution=0.5, fluid=STICKY_FLUID),
    "rough zigzag": shuttle((0.1, 0.25, 0.5), latency=0.05, restitution=0.5, friction=0.1, fluid=STICKY_FLUID),
}
# Path in m, yaw in rad. Every bump is felt up to a step late, and up to nine of them come after one another: 9 times
# v dt = 0.2 mm at worst, half of it on average. In yaw, a strike of J = 0.08 N s turns the block by J/yaw drag = 1.6
# rad per metre of its offset, which is off by as much.
RIGID_PATH = (1e-3, 5e-3)
# In MuJoCo each strike is off by half of SPRING as well, hence a slide by the whole of it, and the pusher's way back
# too: for 0.2 m of travel that is another 2 mm, and 10 mrad where the walls are rough.
SPRING_PATH = (3e-3, 1.5e-2)


@BOTH
@pytest.mark.parametrize("name", SHUTTLES)
def test_travel_over_strikes(name: str, other: Other) -> None:
    """Over two to four strikes and the bumps between them the block goes where it goes in another engine."""
    s = SHUTTLES[name]
    run = simulate(s)
    assert len(run.strikes) >= 2
    place, yaw = SPRING_PATH if other is MUJOCO else RIGID_PATH
    path = other.play(s, run.duration_s, other.dt)
    off = off_path(run, path)
    assert max(off[:2]) < place
    assert off[2] < yaw
    assert run.travel_m == pytest.approx(path.block[-1, 0] - s.block.rear_at - s.block.length / 2, abs=place)


# ---- the checks can fail --------------------------------------------------------------------------------------------

HEAVIER = 1.1
STRIKES = [strike(*case[1:]) for case in CASES if case[0] == "box2d"]
WATCHED = {
    **{name: (s, PLACE, TURN) for name, s in (TOGETHER | TURNING | RAMMING).items()},
    **{name: (s, *SPRING_PATH) for name, s in SHUTTLES.items()},
}


def heavier(s: Scenario) -> list[Scenario]:
    """The rig with a tenth more mass on the pushers, and on the block."""
    masses = {"pushers": s.pushers.mass, "block": s.block.mass}
    return [s.replace(**{body: {"mass": HEAVIER * mass}}) for body, mass in masses.items()]


@pytest.mark.parametrize("s", STRIKES)
def test_a_tenth_more_mass_shows_in_a_strike(s: Scenario) -> None:
    """With a tenth more mass on either side the block's speed misses the widest tolerance."""
    speed = given(simulate(s))[0] / s.block.mass
    for other in heavier(s):
        path = play_box2d(other, s.goal.time_limit, BOX2D.dt)
        assert path.rates[-1, 0] != pytest.approx(speed, rel=SPREADING)


@pytest.mark.parametrize("name", WATCHED)
def test_a_tenth_more_mass_shows_on_the_way(name: str) -> None:
    """With a tenth more mass on either side the block's path misses the wider of the tolerances."""
    s, place, yaw = WATCHED[name]
    run = simulate(s)
    for other in heavier(s):
        x, y, turn = off_path(run, play_box2d(other, run.duration_s, BOX2D.dt))
        assert max(x, y) > place or turn > yaw
