"""A tilted table: when a block slides down it, how fast, what pushers do on it, and whether a team holds a block."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from rigs import PUSH_ON, G, dry, placed, rig

import swarmpush
from swarmpush.scenario import Scenario

STATIC, KINETIC = 0.30, 0.20
LATE = 2e-3  # relative: places lag half a step behind speeds, in 300 steps of a slide
CREEP = 1e-9  # m
AWAY = (1.0, 0.5, math.pi)  # a pusher that never gets to the block
HALTED = {"stages": [{"name": "rest", "acts": [{"act": "halt"}]}]}


def tilted(slope: float, cross: float = 0.0, **tables: Any) -> Scenario:
    """A block of 1 kg on a dry tilted table, in the middle of a wide channel."""
    return rig(
        channel={"width": 3.0, "slope": slope, "cross_slope": cross},
        floor=tables.pop("floor", {"static_friction": STATIC, "kinetic_friction": KINETIC}),
        start=tables.pop("start", placed(AWAY)),
        goal=tables.pop("goal", {"time_limit": 0.5}),
        trial={"sample_every": 0.01},
        **tables,
    )


@pytest.mark.parametrize("turned", [0.0, math.pi / 2, math.pi])
@pytest.mark.parametrize(("share", "slides"), [(0.99, False), (1.01, True)])
def test_a_block_slides_down_above_the_friction_angle(share: float, slides: bool, turned: float) -> None:
    """A block slides down iff the tangent of the slope is more than mu_s, and then at g (sin - mu_k cos) (textbook)."""
    angle = math.atan(share * STATIC)
    run = swarmpush.simulate(tilted(-angle * math.cos(turned), -angle * math.sin(turned)), cycles=())
    way = np.diff(run.block[["x_m", "y_m"]].to_numpy()[[0, -1]], axis=0)[0]
    expected = 0.5 * G * (math.sin(angle) - KINETIC * math.cos(angle)) * run.duration_s**2 if slides else 0.0
    downhill = np.array([math.cos(turned), math.sin(turned)])
    assert way == pytest.approx(expected * downhill, rel=LATE, abs=max(CREEP, LATE * expected))
    assert run.yaw_max_rad < CREEP


@pytest.mark.parametrize(("slope", "cross"), [(0.2, 0.3), (-0.4, 0.45)])
def test_two_slopes_at_once(slope: float, cross: float) -> None:
    """With both slopes the pull is g (sin a, sin b), and g sqrt(1 - sin^2 a - sin^2 b) presses: three parts at right
    angles make up g (derived here)."""
    run = swarmpush.simulate(tilted(slope, cross, floor=dry(0.3), goal={"time_limit": 0.3}), cycles=())
    pull = np.array([-math.sin(slope), -math.sin(cross)])
    size = math.hypot(*pull)
    speeding = G * (size - 0.3 * math.sqrt(1 - size**2))
    way = np.diff(run.block[["x_m", "y_m"]].to_numpy()[[0, -1]], axis=0)[0]
    assert way == pytest.approx(0.5 * speeding * run.duration_s**2 * pull / size, rel=2 * LATE)


def test_books_on_a_slope() -> None:
    """Gravity's impulse is -m g sin(slope) t, and its work that of the height lost, to rounding."""
    slope, cross = -0.4, 0.1
    run = swarmpush.simulate(tilted(slope, cross, pushers={"stall_force": 1e-6}), cycles=())
    books, t = run.books, run.duration_s
    assert books.slope == pytest.approx((-G * math.sin(slope) * t, -G * math.sin(cross) * t), rel=1e-9)
    for axis in (0, 1):
        assert books.slope[axis] + books.floor[axis] == pytest.approx(books.change[axis], rel=1e-9)
    block, pusher = run.block, run.pushers
    work = 0.0
    for mass, path in ((1.0, block), (0.1, pusher)):
        dx, dy = (path[name].iloc[-1] - path[name].iloc[0] for name in ("x_m", "y_m"))
        work -= mass * G * (math.sin(slope) * dx + math.sin(cross) * dy)
    assert run.energy.slope == pytest.approx(work, rel=2 * LATE)
    assert run.energy.change + run.energy.floor == pytest.approx(run.energy.slope + run.energy.drive, rel=1e-3)


def test_pushers_drift_downhill() -> None:
    """A halted pusher drifts at m g sin/drag, along and across its heading by the drag of either (force balance)."""
    slope, cross, sideways = 0.02, -0.03, 3.0
    s = tilted(
        slope, cross, floor=dry(1.0), start=placed((2.0, 0.5, 0.0)), goal={"time_limit": 1.0}, routine=HALTED,
        pushers={"stall_force": 5.0, "sideways_drag": sideways},
    )  # fmt: skip
    path = swarmpush.simulate(s, cycles=()).pushers.iloc[[-2, -1]]
    vx, vy = (path[name].diff().iloc[-1] / path["t_s"].diff().iloc[-1] for name in ("x_m", "y_m"))
    weight = s.pushers.mass * G
    assert vx == pytest.approx(-weight * math.sin(slope) / s.pushers.drag, rel=1e-8)  # a difference of positions
    assert vy == pytest.approx(-weight * math.sin(cross) / (sideways * s.pushers.drag), rel=1e-8)


def team(share: float, n: int = 2) -> Scenario:
    """A team that leans uphill on a block with less or more than what keeps it from sliding back.

    The pushers' own weight pulls them back as well.
    """
    slope, mass = 0.5, 0.05
    needed = G * (math.sin(slope) - STATIC * math.cos(slope))
    force = share * needed / n + mass * G * math.sin(slope)
    return tilted(
        slope,
        block={"width": 0.3, "yaw": "held"},
        pushers={"count": n, "mass": mass, "stall_force": force, "latency": PUSH_ON},
        start=placed(*[(4.0 - 0.02, 1.5 + 0.1 * (k - (n - 1) / 2), 0.0) for k in range(n)]),
    )


@pytest.mark.parametrize(("share", "holds"), [(0.98, False), (1.02, True)])
def test_a_team_holds_a_block_on_a_slope(share: float, holds: bool) -> None:
    """A team holds a block uphill iff its push and the floor's static friction make up for the slope (statics)."""
    travel = swarmpush.simulate(team(share), cycles=()).travel_m
    assert (abs(travel) < CREEP) if holds else (travel < -1e-3)


def test_a_team_pushes_a_block_uphill() -> None:
    """A team that does move it goes at (n (F - m g sin) - M g (sin + mu_k cos))/(n g) in the end (force balance)."""
    s = team(1.0)
    force = 1.2 * G * (math.sin(0.5) + STATIC * math.cos(0.5)) / 2
    s = s.replace(pushers={"stall_force": force}, goal={"time_limit": 2.0})
    run = swarmpush.simulate(s, cycles=())
    net = 2 * (force - 0.05 * G * math.sin(0.5)) - G * (math.sin(0.5) + KINETIC * math.cos(0.5))
    speed = net / (2 * s.pushers.drag)
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(speed, rel=1e-3)  # 20 relaxation times (M + n m)/(n g)
