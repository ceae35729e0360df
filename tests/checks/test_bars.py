"""Pushers that are bars: their moment of inertia, how they meet a wall, and how much room they need."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import PUSH_ON, pair, placed, rig
from scipy.integrate import dblquad, solve_ivp

import swarmpush
from swarmpush.dynamics.run import Run
from swarmpush.scenario import Scenario, rounded_gyration_squared
from swarmpush.starts import draw_starts

# ---- moment of inertia ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("length", "width", "radius"), [(0.0, 0.0, 0.3), (0.0, 0.5, 0.2), (0.7, 0.0, 0.1), (0.4, 0.9, 0.2)]
)
def test_moment_of_a_rounded_bar(length: float, width: float, radius: float) -> None:
    """The moment of a rounded bar about its centre is the mean of x^2 + y^2 over it (definition), by quadrature."""

    def half_height(x: float) -> float:
        beyond = max(x - length / 2, 0.0)
        return width / 2 + math.sqrt(max(radius**2 - beyond**2, 0.0))

    end = length / 2 + radius
    parts = [(0.0, length / 2), (length / 2, end)]  # smooth on either side of the corner
    area = sum(dblquad(lambda y, x: 1.0, low, high, 0, half_height)[0] for low, high in parts)
    squares = sum(dblquad(lambda y, x: x * x + y * y, low, high, 0, half_height)[0] for low, high in parts)
    assert rounded_gyration_squared(length, width, radius) == pytest.approx(
        squares / area, rel=1e-7
    )  # as dblquad has it


# ---- against a wall -------------------------------------------------------------------------------------------------

RADIUS, NOSE, TRUNK = 0.01, 0.06, 0.04  # m
WALL = 1.0  # m: y of the side wall that the bar runs into
FORCE, DRAG = 1.0, 10.0  # N and N s/m: it relaxes in 0.1 ms, so that only drags count
TURN_DRAG = 4e-3  # N m s


STARTS_LATE = 2.5e-3  # rad: it needs two steps to gain speed and reach the wall, and turns at some 2 rad/s
FLUSH = 1e-3  # rad: the overlap allowed at either end of the nose, over the nose, is a third of that


def bar_at_a_wall(
    off: float, *, friction: float = 0.0, time: float = 1.0, trunk: float = TRUNK, **pushers: float
) -> Scenario:
    """A bar that drives on into the upper wall, its heading `off` the wall's normal to the left; it all but touches."""
    ahead, aside = trunk / 2, NOSE / 2
    corner = max(abs(ahead * math.cos(off)) + abs(aside * math.sin(off)), 0.0)
    return rig(
        pushers={
            "radius": RADIUS, "nose": NOSE, "trunk": trunk, "mass": 1e-3, "stall_force": FORCE,
            "free_speed": FORCE / DRAG, "heading": "free", "turn_drag": TURN_DRAG, "turn_rate": 10.0,
            "latency": PUSH_ON, **pushers,
        },
        contacts={"pusher_wall": pair(0.0, friction)},
        start=placed((1.0, WALL - RADIUS - corner - 1e-5, math.pi / 2 + off)),
        goal={"time_limit": time},
        trial={"sample_every": time / 200},
        numerics={"step": 2e-4},
    )  # fmt: skip


def angles_off(run: Run) -> NDArray[np.float64]:
    """Heading of the pusher off the upper wall's normal, along the run."""
    return run.pushers["heading_rad"].to_numpy() - math.pi / 2


def squaring_up(off: float, times: NDArray[np.float64]) -> NDArray[np.float64]:
    """The same for a frictionless bar without inertia that pivots on its leading corner (derived here).

    The corner is q = a sin p - b cos p to the side of the centre, a and b being half the trunk and half the nose. The
    wall's force N turns the bar, g_t p' = N q, and holds it back, g q p' = F cos p - N: p' = F q cos p/(g_t + g q^2).
    """
    a, b = TRUNK / 2, NOSE / 2

    def rate(t: float, p: NDArray[np.float64]) -> NDArray[np.float64]:
        q = a * np.sin(p) - b * np.cos(p)
        return FORCE * q * np.cos(p) / (TURN_DRAG + DRAG * q**2)

    found = solve_ivp(rate, (0.0, times[-1]), [off], t_eval=times, rtol=1e-9, atol=1e-12)
    return np.asarray(found.y[0])


def test_a_bar_squares_up_to_a_wall() -> None:
    """A bar that runs into a wall at an angle pivots on a corner until its nose lies flat, and stands there."""
    off = 0.6
    run = swarmpush.simulate(bar_at_a_wall(off), cycles=())
    t, p = run.pushers["t_s"].to_numpy(), angles_off(run)
    expected = squaring_up(off, t)
    turning = expected > 0.05
    assert turning.sum() > 20
    assert p[turning] == pytest.approx(expected[turning], abs=STARTS_LATE)
    assert abs(p[-1]) < FLUSH
    assert run.pushers["y_m"].iloc[-1] == pytest.approx(WALL - RADIUS - TRUNK / 2, abs=2 * run.steps.slop_m)
    aside = run.pushers["x_m"].diff().iloc[-1] / run.pushers["t_s"].diff().iloc[-1]
    assert abs(aside) < FLUSH * FORCE / DRAG


@pytest.mark.parametrize("share", [0.95, 1.05])
def test_which_way_a_bar_tips(share: float) -> None:
    """Without friction a bar squares up where the corner's normal passes its centre outside, tan p < nose/trunk; else
    it tips on to its flank and slides along the wall at its free speed (lever of the wall's force, derived here)."""
    run = swarmpush.simulate(bar_at_a_wall(share * math.atan(NOSE / TRUNK), time=6.0), cycles=())
    p = angles_off(run)
    if share < 1.0:
        assert abs(p[-1]) < FLUSH
    else:
        assert p[-1] == pytest.approx(math.pi / 2, abs=FLUSH)
        speed = -run.pushers["x_m"].diff().iloc[-1] / run.pushers["t_s"].diff().iloc[-1]
        assert speed == pytest.approx(FORCE / DRAG, rel=FLUSH)


def test_a_held_bar_does_not_square_up() -> None:
    """With a held heading the drive bears the wall's torque: the bar keeps its angle and slides at v sin p along."""
    off = 0.6
    s = bar_at_a_wall(off).replace(pushers={"heading": "held", "turn_drag": None})
    run = swarmpush.simulate(s, cycles=())
    assert np.ptp(angles_off(run)) == 0.0
    speed = -run.pushers["x_m"].diff().iloc[-1] / run.pushers["t_s"].diff().iloc[-1]
    assert speed == pytest.approx(FORCE / DRAG * math.sin(off), rel=FLUSH)


# ---- room ------------------------------------------------------------------------------------------------------------


def test_bars_start_clear_of_everything() -> None:
    """Drawn bars keep their farthest corner from walls and block, and two such reaches from each other."""
    s = rig(
        channel={"length": 2.0, "width": 0.4},
        block={"rear_at": 1.0},
        pushers={"count": 12, "radius": RADIUS, "nose": NOSE, "trunk": TRUNK, "turn_rate": 5.0},
        goal={"travel": 0.5},
    )
    reach = RADIUS + math.hypot(NOSE, TRUNK) / 2
    starts = np.array([draw_starts(s, seed)[:, :2] for seed in range(20)])
    x, y = starts[..., 0], starts[..., 1]
    assert x.min() >= reach
    assert x.max() <= 1.0 - reach
    assert y.min() >= reach
    assert y.max() <= 0.4 - reach
    apart = np.abs((x + 1j * y)[:, :, None] - (x + 1j * y)[:, None, :]) + np.eye(12)
    assert apart.min() >= 2 * reach
    assert y.min() < 1.2 * reach  # and they use that room
