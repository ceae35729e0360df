"""A round block that spins, or slides and spins, to rest on a dry floor.

Under uniform pressure a disc of radius R resists spinning with the moment (2/3) mu N R and a square of side a with
0.382598 mu N a (Goyal, Ruina and Papadopoulos, "Planar sliding with dry friction", Wear 143 (1991) 307). Couples come
from two pushers that strike at opposite points at once.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import G, dry, pair, placed, rig

import swarmpush
from swarmpush.scenario import Scenario

R, MASS, TIP = 0.05, 0.5, 0.02  # m, radius of the disc; kg; m, radius of the pushers
N_SIDES = 96  # of the polygon that stands for the disc; its moments are 4e-4 and 7e-4 short of the disc's
POLYGON = 1e-3  # relative
STEP = 4e-5  # s
AT = 2.0, 1.0  # m, the block's centre
RUN_UP = 0.3  # m
A_SAMPLE = 1e-3  # s


def on_a_floor(
    friction: float, grip: float, restitution: float, block: dict[str, Any], *starts: tuple[float, float, float]
) -> Scenario:
    """A block in the open, struck by pushers that then halt."""
    return rig(
        channel={"length": 4.0, "width": 2 * AT[1]},
        block={"mass": MASS, **block},
        pushers={"count": len(starts), "radius": TIP, "mass": 0.1, "stall_force": 1.0},
        contacts={"pusher_block": pair(restitution, grip)},
        floor=dry(friction),
        start=placed(*starts),
        goal={"time_limit": 2.0},
        numerics={"step": STEP},
        trial={"sample_every": A_SAMPLE},
    )


def disc() -> dict[str, Any]:
    """The block's table for a disc, with a side that faces straight back."""
    angles = math.pi + (np.arange(N_SIDES) + 0.5) * 2 * math.pi / N_SIDES
    x, y = R * np.cos(angles), R * np.sin(angles)
    outline = [(float(a - x.min()), float(b)) for a, b in zip(x, y, strict=True)]
    return {"length": 2 * REACH, "width": 2 * float(y.max()), "outline": outline, "rear_at": AT[0] - REACH}


REACH = R * math.cos(math.pi / N_SIDES)  # m, from the disc's centre to the middle of a side


def striking(reach: float, offset: float, heading: float) -> tuple[float, float, float]:
    """Where a pusher starts that strikes from behind, `reach` before the block's centre and `offset` off it."""
    x = AT[0] - reach - TIP - RUN_UP * math.cos(heading)
    return x, AT[1] + offset - RUN_UP * math.sin(heading), heading


def opposite(start: tuple[float, float, float]) -> tuple[float, float, float]:
    """The same start turned about the block's centre by half a turn."""
    return 2 * AT[0] - start[0], 2 * AT[1] - start[1], start[2] + math.pi


def spin_from(run: swarmpush.Run, reach: float, inertia: float) -> float:
    """Spin that the visits give the block, rad/s, from their impulses at the places where they happened."""
    total = 0.0
    for hit in run.visits.itertuples():
        side = 1.0 if hit.x_m < AT[0] else -1.0  # struck from behind, or from ahead
        total += reach * hit.tangential_Ns - side * (hit.y_m - AT[1]) * (hit.impact_Ns + hit.lean_Ns)
    return total / inertia


# block, reach, arm (moment over mu N), inertia over mass, offset and heading of the pusher, its grip
SPINNERS = {
    "disc": (disc(), REACH, 2 / 3 * R, R**2 / 2, 0.0, 0.8, 0.3),
    "square": ({"length": 0.1, "width": 0.1, "rear_at": AT[0] - 0.05}, 0.05, 0.0382597858, 0.1**2 / 6, 0.03, 0.0, 0.0),
}


@pytest.mark.parametrize("name", SPINNERS)
@pytest.mark.parametrize("friction", [0.05, 0.15])
def test_spin_down(name: str, friction: float) -> None:
    """A block that only spins stops after k^2 w0/(c mu g), having turned k^2 w0^2/(2 c mu g), and does not travel.

    k^2 is inertia over mass and c the floor's moment over mu N: 3 R w0/(4 mu g) and 3 R w0^2/(8 mu g) for a disc.
    """
    block, reach, arm, gyration, offset, heading, grip = SPINNERS[name]
    start = striking(reach, offset, heading)
    run = swarmpush.simulate(on_a_floor(friction, grip, 0.5, block, start, opposite(start)), cycles=())
    assert len(run.visits) == 2
    spin = spin_from(run, reach, MASS * gyration)
    assert abs(spin) > 2.0
    slow_down = arm * friction * G / gyration
    assert run.block["yaw_rad"].iloc[-1] == pytest.approx(
        math.copysign(spin**2, spin) / (2 * slow_down), rel=2 * POLYGON
    )
    turning = run.block["t_s"][run.block["yaw_rad"].diff().abs() > 1e-9]
    assert turning.max() - run.visits["t_on_s"].min() == pytest.approx(abs(spin) / slow_down, abs=2 * A_SAMPLE)
    assert abs(run.travel_m) < 1e-6 * R


# ---- sliding and spinning -------------------------------------------------------------------------------------------

FLOOR = 0.02  # friction: slow to stop, so that paths are well sampled

# v0/(R w0), and until both stop: time times mu g/v0, distance times mu g/v0^2, for a disc under uniform pressure. The
# friction of a sliding and spinning disc is integrated as in Farkas, Bartels, Unger and Wolf, "Frictional coupling
# between sliding and spinning motion", Phys. Rev. Lett. 90 (2003) 248302; the numbers were worked out here.
UNIFORM = ((1.0, 1.34029, 0.63740), (2.0, 1.12168, 0.53236), (5.0, 1.02803, 0.50504))


def thrown(ratio: float) -> swarmpush.Run:
    """A disc struck by one pusher that slips along its rim: it slides at `ratio` times the speed of its rim's spin.

    The impulse (P, mu P) gives v = P hypot(1, mu)/M and R w = mu P R^2/I = 2 mu P/M.
    """
    grip = 1 / math.sqrt(4 * ratio**2 - 1)
    return swarmpush.simulate(on_a_floor(FLOOR, grip, 0.5, disc(), striking(REACH, 0.0, 1.0)), cycles=())


def speeds(run: swarmpush.Run) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Times between samples of the block's path, and there its speed and its spin."""
    path = run.block
    dt = np.diff(path["t_s"])
    speed = np.hypot(np.diff(path["x_m"]), np.diff(path["y_m"])) / dt
    return path["t_s"].to_numpy()[:-1] + dt / 2, speed, np.diff(path["yaw_rad"]) / dt


@pytest.mark.parametrize(("ratio", "time", "distance"), UNIFORM)
def test_thrown_disc(ratio: float, time: float, distance: float) -> None:
    """A disc that slides and spins stops both at once, a little sooner than under uniform pressure.

    The elliptic limit surface lies outside that of the uniform disc, by 7 % in radius at most, so that the stop comes
    up to 7 % too soon and never late; by then most of the way is covered.
    """
    run = thrown(ratio)
    assert len(run.visits) == 1
    start = run.visits["t_on_s"].iloc[0]
    times, speed, spin = speeds(run)
    v0 = math.hypot(*run.books.pushers) / MASS
    after = times > start + A_SAMPLE
    assert speed[after][0] / (R * abs(spin[after][0])) == pytest.approx(ratio, rel=5e-3)  # it changes from the first on
    slides, spins = times[speed > 1e-7].max() - start, times[np.abs(spin) > 1e-6].max() - start
    assert slides == pytest.approx(spins, abs=1.1 * A_SAMPLE)
    path = run.block
    slid = math.hypot(*(path[name].iloc[-1] - path[name].iloc[0] for name in ("x_m", "y_m")))
    assert 0.93 < slides * FLOOR * G / v0 / time < 1.0
    assert 0.95 < slid * FLOOR * G / v0**2 / distance < 1.0


@pytest.mark.parametrize("ratio", [0.8, 2.0])
def test_sliding_and_spinning_by_the_ellipse(ratio: float) -> None:
    """On the elliptic limit surface speed falls as the spin to the power (k/c)^2, which is 9/8 for a disc.

    Normality gives dv/dt = -mu g v/s and k^2 dw/dt = -mu g c^2 w/s with s = hypot(v, c w), so d ln v/d ln w = k^2/c^2
    = (1/2)/(2/3)^2, whatever the start (worked out here). The surface: Howe and Cutkosky, Int. J. Robotics Research 15
    (1996) 557. A disc under uniform pressure would tend to v = 0.653 R w instead (Weidman and Malhotra, Physica D 233
    (2007) 1), and no ellipse does.
    """
    run = thrown(ratio)
    start = run.visits["t_on_s"].iloc[0]
    times, speed, spin = speeds(run)
    stop = times[speed > 1e-7].max()
    steady = (times > start + 5 * A_SAMPLE) & (times < start + 0.8 * (stop - start))
    power = np.polyfit(np.log(np.abs(spin[steady])), np.log(speed[steady]), 1)[0]
    assert power == pytest.approx(9 / 8, rel=POLYGON)
