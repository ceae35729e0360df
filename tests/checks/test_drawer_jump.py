"""The sticking drawer's jump: a push a little nearer the middle moves the block, a little farther out it jams for good.

Diagonal corners D apart along the channel carry the moment of an axial push P at the offset q from the middle with
P q/D each, and their friction holds 2 mu P q/D. The block stands, whatever P, if q >= D/(2 mu). (Statics, worked out
here; for a small clearance it is the textbook's drawer, q >= l/(2 mu), as in Whitney, "Quasi-static assembly of
compliantly supported rigid parts", J. Dyn. Syst. Meas. Control 104 (1982) 65.) No single push within the face gets so
far out unless the corners lie in each other's friction cones, D < mu w. There statics leaves the forces open, so a push
short of the jump is only known to be able to move the block. Pushers behind and ahead of it, on opposite sides of the
middle, make a couple that reaches the jump well clear of that.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from rigs import PUSH_ON, pair, placed, rig
from test_jamming import tilt

import swarmpush
from swarmpush.scenario import Scenario

TIP, FREE_SPEED = 0.002, 0.2  # m, radius of the pushers; m/s
JAM_TIME = 2.0  # s: the block has tilted, moved on or stopped after a tenth of it
SHARES = (0.9, 0.98, 1.02, 1.1)  # of the offset that jams
# The tilt moves pushers along the face and the walls give way by the slop, a thousandth of the offset between them.
PLACED = 0.01  # relative: how well an offset is met
STANDS = 1e-9  # of the free speed

# l, b, w in m, mu; in the last three the corners lie in each other's friction cones
CLEAR = ((0.10, 0.08, 0.082, 0.5), (0.08, 0.08, 0.081, 0.4), (0.12, 0.06, 0.062, 0.8), (0.06, 0.05, 0.051, 0.6))
WITHIN_THE_FACE = ((0.05, 0.10, 0.1005, 0.7), (0.04, 0.10, 0.1005, 0.5), (0.08, 0.10, 0.101, 0.9))


def spacing(yaw: float, length: float, width: float) -> float:
    """Distance along the channel between diagonal corners, m."""
    return length * math.cos(yaw) - width * math.sin(abs(yaw))


def drawer(
    sizes: tuple[float, float, float, float], share: float, force: float, *, n_behind: int, n_ahead: int
) -> Scenario:
    """A snug block on a slippery floor, with pushers that stick to it at a share of the offset that jams it."""
    length, width, channel, friction = sizes
    phi = tilt(length, width, channel)
    n = n_behind + n_ahead
    reach = share * spacing(phi, length, width) / (2 * friction) * (n_behind - n_ahead) / n
    reach -= length / 2 * math.sin(phi)  # the tilt takes the pushers along
    middle, rear = channel / 2, 0.5
    behind, ahead = (rear - TIP, middle + reach, 0.0), (rear + length + TIP, middle - reach, math.pi)
    return rig(
        channel={"width": channel, "length": 3.0},
        block={"length": length, "width": width, "mass": 0.2, "rear_at": rear},
        contacts={"block_wall": pair(0.0, friction), "pusher_block": pair(0.0, 1.0)},
        pushers={
            "count": n, "radius": TIP, "mass": 0.01, "stall_force": force, "free_speed": FREE_SPEED,
            "latency": PUSH_ON, "pass_through": True,
        },
        start=placed(*[behind] * n_behind, *[ahead] * n_ahead),
        goal={"time_limit": JAM_TIME, "travel": 1.5},
    )  # fmt: skip


def offsets(run: swarmpush.Run) -> np.ndarray:
    """How far out each push acts at the end, towards the side that turns the block on, m."""
    last = run.pushers[run.pushers["t_s"] == run.pushers["t_s"].max()]
    facing = np.cos(last["heading_rad"].to_numpy())
    tip = TIP * math.sin(run.block["yaw_rad"].iloc[-1])
    return facing * (last["y_m"].to_numpy() - run.scenario.channel.width / 2) + tip


@pytest.mark.parametrize("share", SHARES)
@pytest.mark.parametrize("sizes", CLEAR, ids=lambda sizes: "l={}, b={}, w={}, mu={}".format(*sizes))
def test_couple(sizes: tuple[float, float, float, float], share: float) -> None:
    """Two pushers behind and one ahead jam the block from q = D/(2 mu) on; nearer in, it creeps on at a known speed.

    At the share u of the free speed those behind push with F (1 - u), the one ahead with F (1 + u), and the walls take
    k = 2 mu/D times the moment: 2 (1 - u) - (1 + u) = k [2 q_behind (1 - u) + q_ahead (1 + u)].
    """
    length, width, channel, friction = sizes
    run = swarmpush.simulate(drawer(sizes, share, 1.0, n_behind=2, n_ahead=1), cycles=())
    yaw = run.block["yaw_rad"].iloc[-1]
    corners = spacing(yaw, length, width)
    assert corners > friction * channel, "no wedging"
    one, other, ahead = offsets(run)
    k, behind = 2 * friction / corners, (one + other) / 2
    assert k * (2 * behind + ahead) == pytest.approx(share, rel=PLACED / 4)
    speed = run.block["vx_m_s"].iloc[-1] / FREE_SPEED
    jammed = run.causes["block_jammed_between_walls"]
    if share > 1.0:
        assert speed == pytest.approx(0.0, abs=STANDS)
        assert jammed > 0.9
    else:
        balance = (1 - k * (2 * behind + ahead)) / (3 - k * (2 * behind - ahead))
        assert speed == pytest.approx(balance, abs=1e-4)  # corners that rattle within the slop
        assert jammed == 0.0


@pytest.mark.parametrize("force", [0.5, 50.0])
@pytest.mark.parametrize("share", SHARES)
@pytest.mark.parametrize("sizes", WITHIN_THE_FACE, ids=lambda sizes: "l={}, b={}, w={}, mu={}".format(*sizes))
def test_push_within_the_face(sizes: tuple[float, float, float, float], share: float, force: float) -> None:
    """One pusher on a wide block moves it just short of q = D/(2 mu) and never beyond, be it weak or strong."""
    length, width, channel, friction = sizes
    run = swarmpush.simulate(drawer(sizes, share, force, n_behind=1, n_ahead=0), cycles=())
    corners = spacing(run.block["yaw_rad"].iloc[-1], length, width)
    assert corners < friction * channel
    assert 2 * friction / corners * offsets(run)[0] == pytest.approx(share, rel=PLACED)
    speed = run.block["vx_m_s"].iloc[-1] / FREE_SPEED
    if share > 1.0:
        assert speed == pytest.approx(0.0, abs=STANDS)
    else:
        assert speed > 0.05
