"""Teams that lean on a block on a dry floor: how many it takes to set it off, and how fast it then goes.

Coulomb's law with a static and a kinetic coefficient: n pushers with the stall force F and the drag g each set a
block of weight W off once n F > mu_s W, and then drive it at (n F - mu_k W)/(n g), F falling linearly to 0 at the free
speed. (Any textbook's friction and the balance of forces.)
"""

from __future__ import annotations

import math

import pytest
from rigs import PUSH_ON, G, placed, rig

import swarmpush
from swarmpush.scenario import Scenario

RADIUS, FORCE, DRAG = 0.02, 0.5, 0.5  # m, N, N s/m (free speed 1 m/s)
WEIGHT = G  # N, of a block of 1 kg
IN_TOUCH = 1 - 1e-10  # a distance this much short of touching is a touch in spite of rounding
STEP = 1e-3  # s: a twentieth of radius over speed; the steady speed does not depend on it
STILL = 1e-9  # m over a run
SETTLED = 1e-6  # relative: exp(-15) of the start is left after 15 T, T = (n m + M)/(n g + g_b)
CONVERGED = 100  # iterations: the push of a file passes from link to link, and 6 links take more than 20


def in_a_row(n: int, x: float, heading: float) -> list[tuple[float, float, float]]:
    """Starts side by side, in touch with a face at x."""
    away = x - math.cos(heading) * RADIUS * IN_TOUCH
    return [(away, 0.5 + (k - (n - 1) / 2) * 2.5 * RADIUS, heading) for k in range(n)]


def in_a_file(n: int) -> list[tuple[float, float, float]]:
    """Starts one behind the other, the first in touch with the rear face and each with the next."""
    return [(4.0 - RADIUS - k * 2 * RADIUS * IN_TOUCH, 0.5, 0.0) for k in range(n)]


def team(
    starts: list[tuple[float, float, float]],
    static: float,
    kinetic: float,
    *,
    iterations: int = 10,
    time: float | None = None,
    **tables: dict[str, float],
) -> Scenario:
    """Pushers that lean for 15 settling times on a wide block that a rail keeps from turning."""
    n, drag = len(starts), tables.get("fluid", {}).get("block_drag", 0.0)
    return rig(
        channel={"length": 100.0},
        block={"width": 0.6, "yaw": "held"},
        pushers={"count": n, "stall_force": FORCE, "latency": PUSH_ON},
        start=placed(*starts),
        floor={"static_friction": static, "kinetic_friction": kinetic},
        goal={"time_limit": time or 15 * (n * 0.1 + 1.0) / (n * DRAG + drag), "travel": 90.0},
        numerics={"step": STEP, "iterations": iterations},
        **tables,
    )


def final_speed(run: swarmpush.Run) -> float:
    """Speed of the block at the end, m/s."""
    return float(run.block["vx_m_s"].iloc[-1])


# static and kinetic friction, and the smallest team that sets the block off: mu_s W/F = 1.03, 4.04, 6.87, 6.87
FLOORS = ((0.0525, 0.03, 2), (0.206, 0.13, 5), (0.35, 0.35, 7), (0.35, 0.08, 7))


@pytest.mark.parametrize(("static", "kinetic", "enough"), FLOORS)
@pytest.mark.parametrize("formation", ["row", "file"])
def test_smallest_team(static: float, kinetic: float, enough: int, formation: str) -> None:
    """One pusher fewer than mu_s W/F never moves the block; from there on it moves at the force balance's speed.

    In a file the push of those behind reaches the block through those ahead.
    """
    assert enough == math.ceil(static * WEIGHT / FORCE)
    for n in (enough - 1, enough, enough + 2):
        if formation == "row":
            s = team(in_a_row(n, 4.0, 0.0), static, kinetic)
        else:
            s = team(in_a_file(n), static, kinetic, iterations=CONVERGED)
        run = swarmpush.simulate(s, cycles=())
        if n < enough:
            assert abs(run.travel_m) < STILL
        else:
            assert final_speed(run) == pytest.approx((n * FORCE - kinetic * WEIGHT) / (n * DRAG), rel=SETTLED)
        push = swarmpush.plan(s, n_starts=1).force
        assert push.pushers_to_move == pytest.approx(static * WEIGHT / FORCE, rel=1e-12)


@pytest.mark.parametrize("drag", [0.3, 2.0])
def test_floor_and_fluid(drag: float) -> None:
    """With linear drag on the block besides, a team moves it at (n F - mu_k W)/(n g + g_b)."""
    static, kinetic, n = 0.23, 0.15, 6
    s = team(in_a_row(n, 4.0, 0.0), static, kinetic, fluid={"block_drag": drag, "block_yaw_drag": 1.0})
    speed = (n * FORCE - kinetic * WEIGHT) / (n * DRAG + drag)
    assert final_speed(swarmpush.simulate(s, cycles=())) == pytest.approx(speed, rel=SETTLED)


@pytest.mark.parametrize(("n_behind", "n_ahead", "moves"), [(5, 1, False), (6, 1, True), (7, 2, True), (6, 2, False)])
def test_tug(n_behind: int, n_ahead: int, moves: bool) -> None:
    """Pushers on the far side count against those behind: (n - n') F against mu_s W, then against the drag of all."""
    static, kinetic = 0.23, 0.15
    ahead = in_a_row(n_ahead, 4.2, math.pi)
    s = team(in_a_row(n_behind, 4.0, 0.0) + ahead, static, kinetic)
    run = swarmpush.simulate(s, cycles=())
    assert moves == ((n_behind - n_ahead) * FORCE > static * WEIGHT)
    if moves:
        speed = ((n_behind - n_ahead) * FORCE - kinetic * WEIGHT) / ((n_behind + n_ahead) * DRAG)
        assert final_speed(run) == pytest.approx(speed, rel=SETTLED)
    else:
        assert abs(run.travel_m) < STILL


@pytest.mark.parametrize(("n", "share"), [(3, 0.95), (6, 0.9), (8, 0.8)])
def test_file_that_is_too_weak(n: int, share: float) -> None:
    """A file with a share of the static friction between its members leaves the block where it is.

    The solver needs about 3 n^2 iterations for that. With fewer the push of those behind arrives late, piles up, gets
    over the static friction once, and then the kinetic friction lets the block go.
    """
    static = n * FORCE / (share * WEIGHT)
    s = team(in_a_file(n), static, 0.2 * static, time=1.0, iterations=3 * n**2)
    assert abs(swarmpush.simulate(s, cycles=()).travel_m) < STILL


# ---- between the two coefficients -----------------------------------------------------------------------------------

STATIC, KINETIC = 0.08, 0.03  # one pusher has 0.5 N against 0.78 N and 0.29 N


def alone(x: float, kinetic: float = KINETIC) -> swarmpush.Run:
    """One pusher that starts at x and leans on the block for good once it is there."""
    return swarmpush.simulate(team([(x, 0.5, 0.0)], STATIC, kinetic), cycles=())


def test_a_knock_sets_off_what_a_push_does_not() -> None:
    """Between mu_k W and mu_s W a push never sets the block off, but keeps it going once an impact has.

    The block then moves at (F - mu_k W)/g, or comes to rest again if F < mu_k W.
    """
    assert abs(alone(4.0 - RADIUS * IN_TOUCH).travel_m) < STILL
    kept_going = alone(3.6)
    assert final_speed(kept_going) == pytest.approx((FORCE - KINETIC * WEIGHT) / DRAG, rel=SETTLED)
    stopped = alone(3.6, kinetic=0.06)
    assert final_speed(stopped) == pytest.approx(0.0, abs=STILL)
    assert stopped.travel_m > 1e-3


@pytest.mark.parametrize("case", ["knocked off", "file"])
def test_a_push_that_moves_the_block_is_not_too_weak(case: str) -> None:
    """While a team keeps the block moving, it is not said that those leaning could not overcome the floor."""
    run = alone(3.6) if case == "knocked off" else swarmpush.simulate(team(in_a_file(5), 0.23, 0.15), cycles=())
    assert final_speed(run) > 0.2
    standing = (run.block["vx_m_s"] <= 0.0).mean()
    assert run.causes["leaning_too_weak_for_floor"] <= standing + 0.01
