"""The block between two walls: the sticking drawer.

A block of l along the channel and b across it in a channel of width w tilts by phi, l sin(phi) + b cos(phi) = w, until
diagonal corners touch, D = l cos(phi) - b sin(phi) apart along the channel. An axial push P at the offset q from the
centre presses each corner with P q/D; with friction mu at the walls, moving on against the resistance F takes
P = F/(1 - 2 mu q/D), and q >= D/(2 mu) jams whatever P. (Statics, worked out here; for a small clearance it is the
textbook's sticking drawer, q >= l/(2 mu), as in Whitney, "Quasi-static assembly of compliantly supported rigid parts",
J. Dyn. Syst. Meas. Control 104 (1982) 65.)
"""

from __future__ import annotations

import math
from typing import Any

import pytest
from rigs import PUSH_ON, G, dry, pair, placed, rig
from scipy.optimize import brentq

import swarmpush
from swarmpush.dynamics.run import Run
from swarmpush.scenario import Scenario

# l, b, w in m, mu; tilt in deg, D and the offset that jams in m
DRAWERS = ((0.10, 0.08, 0.082, 0.3, 1.1553118, 0.0983667, 0.1639444), (0.05, 0.10, 0.1001, 0.5, None, None, 0.05))


def snug(length: float, width: float, channel: float, friction: float, offset: float = 0.0, **keys: Any) -> Scenario:
    """A block between close walls; one pusher leans on it for good at an offset from the middle."""
    return rig(
        channel={"width": channel, "length": 3.0},
        block={"length": length, "width": width, "mass": 0.2, "rear_at": 0.5},
        contacts={"block_wall": pair(0.0, friction)},
        pushers={"radius": 0.008, "mass": 0.01, "stall_force": 2.0, "free_speed": 0.2, "latency": PUSH_ON},
        start=placed((0.5 - 0.008, channel / 2 + offset, 0.0)),
        goal={"time_limit": 5.0, "travel": 2.0},
        **keys,
    )


def tilt(length: float, width: float, channel: float) -> float:
    """The yaw at which diagonal corners touch both walls, rad."""
    return float(brentq(lambda a: length * math.sin(a) + width * math.cos(a) - channel, 0.0, 0.5))


@pytest.mark.parametrize(("length", "width", "channel", "friction", "tilt_deg", "spacing", "jams_at"), DRAWERS)
def test_wedging_number(
    length: float,
    width: float,
    channel: float,
    friction: float,
    tilt_deg: float | None,
    spacing: float | None,
    jams_at: float,
) -> None:
    """The plan's wedging number is half the width over the offset that jams a snug block, l/(2 mu)."""
    if tilt_deg is not None:
        phi = tilt(length, width, channel)
        assert math.degrees(phi) == pytest.approx(tilt_deg, abs=1e-7)  # digits printed
        assert length * math.cos(phi) - width * math.sin(phi) == pytest.approx(spacing, abs=1e-7)
    regime = {r.name: r for r in swarmpush.plan(snug(length, width, channel, friction), n_starts=1).regime}
    wedging = regime["wedging"]
    # the number leaves the clearance out, which shortens D by 2 % in the first case
    assert wedging.value == pytest.approx(width / 2 / jams_at, rel=0.02)
    assert wedging.is_at_risk == (friction * width / length >= 1.0)


OFF_AXIS = 0.01  # relative: the push stands at right angles to the face, up to 1.2 deg off the axis


def arm_of_push(run: Run) -> float:
    """Distance of the block's centre from the line of the frictionless push at the end of a run, m."""
    block, pusher = run.block.iloc[-1], run.pushers.iloc[-1]
    c, s = math.cos(block["yaw_rad"]), math.sin(block["yaw_rad"])
    x = pusher["x_m"] - block["x_m"]
    y = pusher["y_m"] - block["y_m"]
    return abs(x * s - y * c)


@pytest.mark.parametrize("offset", [0.015, 0.03])
@pytest.mark.parametrize("floor", [True, False])
def test_walls_take_their_share_of_an_off_centre_push(offset: float, floor: bool) -> None:
    """An off-centre push on a snug block goes on against F/(1 - 2 mu q/D), dry or viscous."""
    length, width, channel, friction = 0.10, 0.08, 0.082, 0.3
    under: dict[str, Any] = {"floor": dry(0.5)} if floor else {"fluid": {"block_drag": 40.0, "block_yaw_drag": 0.01}}
    s = snug(length, width, channel, friction, offset, **under)
    run = swarmpush.simulate(s, cycles=())
    phi = tilt(length, width, channel)
    assert run.block["yaw_rad"].abs().iloc[-1] == pytest.approx(phi, rel=0.01)  # the walls give way by the slop
    spacing = length * math.cos(phi) - width * math.sin(phi)
    left = 1 - 2 * friction * arm_of_push(run) / spacing
    push, drag = s.pushers.stall_force, s.pushers.drag
    speed = (push - 0.5 * 0.2 * G / left) / drag if floor else push * left / (40.0 + drag * left)
    free = (push - 0.5 * 0.2 * G) / drag if floor else push / (40.0 + drag)
    assert run.block["vx_m_s"].tail(100).mean() == pytest.approx(speed, rel=OFF_AXIS)
    assert speed < (1 - 2 * OFF_AXIS) * free, "the walls' share must be seen"
    assert run.books.walls[0] < 0.0


def test_a_push_in_the_middle_does_not_feel_the_walls() -> None:
    """A push through the centre leaves the walls alone, however snug the block."""
    run = swarmpush.simulate(snug(0.10, 0.08, 0.082, 0.3, 0.0, floor=dry(0.5)), cycles=())
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx((2.0 - 0.5 * 0.2 * G) / 10.0, rel=1e-9)  # steady, no walls
    assert run.books.walls == (0.0, 0.0)


@pytest.mark.parametrize(("push", "moves"), [(1.25, False), (1.40, True)])
def test_push_that_moves_a_tilted_block(push: float, moves: bool) -> None:
    """With l = 0.1 m, mu = 0.3 and the push 40 mm off, the block goes on from 1.3158 times the floor's friction."""
    length, width, channel = 0.10, 0.10, 0.1005
    hold = 0.5 * 0.2 * G
    phi = tilt(length, width, channel)
    spacing = length * math.cos(phi) - width * math.sin(phi)
    offset = (0.04 - length / 2 * math.sin(phi)) / math.cos(phi)
    s = snug(length, width, channel, 0.3, offset, floor=dry(0.5))
    s = s.replace(pushers={"stall_force": push * hold, "sideways_drag": 100.0})  # it hardly slips along the face
    assert 1 / (1 - 2 * 0.3 * 0.04 / spacing) == pytest.approx(1.315789, rel=0.005)  # the clearance shortens D
    run = swarmpush.simulate(s.replace(goal={"time_limit": 10.0}), cycles=())
    late = run.block[run.block["t_s"] > 5.0]
    assert (late["x_m"].iloc[-1] - late["x_m"].iloc[0] > 1e-3) == moves
