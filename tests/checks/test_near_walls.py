"""A sphere near walls at low Reynolds number, pushed along them: its drag from the published series, its motion here.

The scenario takes a block's drag as given. Fed with the drag of a sphere near a wall, the body world must make of it
the leaning speed of the force balance and the travel of an impulse over the drag.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import pairwise

import pytest
from rigs import PUSH_ON, pair, placed, rig

import swarmpush
from swarmpush.scenario import Scenario

ETA, DENSITY = 0.8900e-3, 1050.0  # Pa s, water at 25 degC; kg/m3 of the spheres
BALL, PUSHER, FREE_SPEED = 50e-6, 20e-6, 1e-4  # m, radii; m/s
EXACT = 1e-8  # relative: the scheme for linear drag is exact for a steady push; what is left is rounding


def one_wall(x: float) -> float:
    """Drag beside one plane wall over the free drag, for a sphere of radius x times its centre's distance.

    Source: Faxen's series as in Faucheux and Libchaber, "Confined Brownian motion", Phys. Rev. E 49 (1994) 5158.
    """
    return 1.0 / (1.0 - 9 / 16 * x + x**3 / 8 - 45 / 256 * x**4 - x**5 / 16)


def two_walls(x: float) -> float:
    """The same midway between two plane walls.

    Source: Happel and Brenner, "Low Reynolds Number Hydrodynamics" (1965), the chapter on walls (from memory).
    """
    return 1.0 / (1.0 - 1.004 * x + 0.418 * x**3 + 0.21 * x**4 - 0.169 * x**5)


SERIES: tuple[tuple[Callable[[float], float], float, float], ...] = (  # radius over distance, factor on the drag
    (one_wall, 0.1, 1.0594828),
    (one_wall, 0.2, 1.1258741),
    (one_wall, 0.5, 1.3861252),
    (one_wall, 0.8, 1.9174720),
    (two_walls, 0.1, 1.1110651),
    (two_walls, 0.2, 1.2456000),
)


def sphere_mass(radius: float) -> float:
    """Mass of a sphere, kg."""
    return DENSITY * 4 / 3 * math.pi * radius**3


def stokes(radius: float) -> float:
    """Stokes' drag 6 pi eta a of a sphere far from walls, N s/m."""
    return 6 * math.pi * ETA * radius


def leaned_on(drag: float, step: float) -> Scenario:
    """A small sphere that drives itself leans on a large one, for long enough to settle."""
    relaxation = (sphere_mass(BALL) + sphere_mass(PUSHER)) / (drag + stokes(PUSHER))
    return rig(
        channel={"length": 2e-2, "width": 1e-3},
        block={
            "length": 2 * BALL, "width": 2 * BALL, "mass": sphere_mass(BALL), "rear_at": 5e-3,
            "yaw_inertia": 0.4 * sphere_mass(BALL) * BALL**2,
        },
        pushers={
            "radius": PUSHER, "mass": sphere_mass(PUSHER), "free_speed": FREE_SPEED,
            "stall_force": stokes(PUSHER) * FREE_SPEED, "latency": PUSH_ON,
        },
        fluid={"block_drag": drag, "block_yaw_drag": 8 * math.pi * ETA * BALL**3},
        start=placed((5e-3 - PUSHER, 0.5e-3, 0.0)),
        goal={"travel": 1e-2, "time_limit": max(40 * relaxation, 200 * step)},
        numerics={"step": step},
        trial={"sample_every": step},
    )  # fmt: skip


STEPS = (1e-5, 1e-3, 5e-2)  # s: a tenth, ten times and five hundred times the pusher's relaxation time of 0.1 ms


@pytest.mark.parametrize("step", STEPS)
@pytest.mark.parametrize(("series", "x", "factor"), SERIES)
def test_leaning_near_walls(series: Callable[[float], float], x: float, factor: float, step: float) -> None:
    """A sphere that is leaned on near a wall moves at v0 a_p/(a_p + f a), f the wall's factor, at any step.

    Both drags are Stokes', so that viscosity and pi drop out of the balance F = (g_p + f g_b) v, F = g_p v0.
    """
    assert series(x) == pytest.approx(factor, abs=1e-7)  # digits of the table, worked out apart
    run = swarmpush.simulate(leaned_on(series(x) * stokes(BALL), step), cycles=())
    speed = FREE_SPEED * PUSHER / (PUSHER + series(x) * BALL)
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(speed, rel=EXACT)
    path = run.block.set_index("t_s")["x_m"].tail(50)
    assert (path.iloc[-1] - path.iloc[0]) / (path.index[-1] - path.index[0]) == pytest.approx(speed, rel=EXACT)
    assert len(run.visits) == 1
    travel = swarmpush.plan(run.scenario.replace(forecast={"law": "lean"}), n_starts=1).travel
    assert travel.block_speed_m_s == pytest.approx(speed * travel.leaning_share, rel=EXACT)


def test_longest_step_that_is_allowed() -> None:
    """With the longest step that a scenario may set, a quarter radius over the speed, a lone pusher leans on."""
    run = swarmpush.simulate(leaned_on(one_wall(0.5) * stokes(BALL), 0.25 * PUSHER / FREE_SPEED), cycles=())
    assert run.ended == "time"


def struck(drag: float, step: float, mass: float) -> Scenario:
    """A pusher hits a block in a viscous medium, rebounds and halts."""
    return rig(
        block={"mass": mass},
        pushers={"stall_force": 0.5},
        contacts={"pusher_block": pair(0.5)},
        fluid={"block_drag": drag, "block_yaw_drag": 0.1},
        start=placed((3.6, 0.5, 0.0)),
        goal={"travel": 3.0, "time_limit": 2.0 + 25 * mass / drag},
        numerics={"step": step},
    )


@pytest.mark.parametrize("mass", [0.3, 2.0])
@pytest.mark.parametrize(("series", "x", "factor"), [SERIES[2], SERIES[5]])
def test_travel_of_an_impulse(series: Callable[[float], float], x: float, factor: float, mass: float) -> None:
    """After an impulse J the block travels J/g whatever its mass, to rounding at any step (integral of M dv = -g v dt).

    The impulse itself is m v (1 + e) M/(m + M), up to the push and drag of one step; that error halves with the step.
    """
    drag = 2.0 * series(x)
    errors = []
    for step in (2e-3, 1e-3, 5e-4):
        run = swarmpush.simulate(struck(drag, step, mass), cycles=())
        assert len(run.visits) == 1
        hit = run.visits.iloc[0]
        passed_on = hit["impact_Ns"] + hit["lean_Ns"]
        assert run.travel_m * drag == pytest.approx(passed_on, rel=EXACT)  # exp(-25) of it is left
        errors.append(passed_on / (1.5 * 0.1 * hit["approach_m_s"] * mass / (0.1 + mass)) - 1)
    assert abs(errors[0]) < 2e-3 / 0.2  # the step over the pusher's relaxation time of 0.2 s
    order = [math.log2(coarse / fine) for coarse, fine in pairwise(errors)]
    assert order == pytest.approx([1.0, 1.0], abs=0.1)  # the second-order term is a hundredth of the first
    nudge = swarmpush.plan(run.scenario.replace(forecast={"law": "impact"}), n_starts=1).travel.nudge_m
    assert nudge * drag == pytest.approx(1.5 * 0.1 * mass / (0.1 + mass), rel=EXACT)  # at the free speed of 1 m/s


@pytest.mark.parametrize("step", [5e-3, 2e-4])
@pytest.mark.parametrize(("grip", "heading"), [(0.0, 0.0), (0.5, 0.3)])
def test_turn_of_an_impulse(grip: float, heading: float, step: float) -> None:
    """After an off-centre impulse the block turns by its moment over the yaw drag, and travels as if hit in the middle.

    Forwards and sideways J/g, round L/g_yaw with L = r x J, to rounding at any step (integral of I dw = -g_yaw w dt).
    """
    drag, yaw_drag, y = 3.0 * one_wall(0.5), 0.02, 1.5
    s = rig(
        channel={"width": 2 * y},
        block={"length": 0.1, "width": 0.2},
        pushers={"stall_force": 0.5},
        contacts={"pusher_block": pair(0.5, grip)},
        fluid={"block_drag": drag, "block_yaw_drag": yaw_drag},
        start=placed((3.6, y + 0.04 - 0.38 * math.tan(heading), heading)),
        goal={"travel": 3.0, "time_limit": 12.0},
        numerics={"step": step},
    )
    run = swarmpush.simulate(s, cycles=())
    assert len(run.visits) == 1
    hit, last = run.visits.iloc[0], run.block.iloc[-1]
    forwards, sideways = hit["impact_Ns"] + hit["lean_Ns"], -hit["tangential_Ns"]
    moment = -(hit["y_m"] - y) * forwards - 0.05 * sideways
    assert abs(moment) > 1e-3
    assert run.travel_m * drag == pytest.approx(forwards, rel=EXACT)
    assert (last["y_m"] - y) * drag == pytest.approx(sideways, abs=EXACT * forwards)
    assert last["yaw_rad"] * yaw_drag == pytest.approx(moment, rel=EXACT)
