"""Blocks whose mass or floor friction is not centred: what turns them, and when they let go."""

from __future__ import annotations

import math
from typing import Any

import pytest
from rigs import FAINT, PUSH_ON, G, dry, pair, placed, rig

import swarmpush
from swarmpush.dynamics.patch import friction_arm
from swarmpush.scenario import Scenario

SIDE, MU, REAR = 0.2, 0.3, 4.0  # m; friction; m: where the rear face is
ITERATIONS = 30  # of the solver: with 10, what holds the block off centre can give way by a tenth of a millimetre
HELD = 1e-9  # m and rad: the solver's rest of the first steps
# centres of mass and of friction: x from the rear face, y from the middle, m
CENTRES: list[dict[str, Any]] = [
    {"centre_of_mass": (0.06, 0.03), "centre_of_friction": (0.12, -0.04)},
    {"centre_of_friction": (0.12, -0.04)},
    {"centre_of_mass": (0.14, 0.05)},
]


def leaning(force: float, y: float, centres: dict[str, Any], **tables: Any) -> Scenario:
    """A pusher that leans on the rear face of a square block at y."""
    pushers = {"stall_force": force, "latency": PUSH_ON} | tables.pop("pushers", {})
    return rig(
        block={"length": SIDE, "width": SIDE, **centres}, floor=dry(MU), pushers=pushers,
        start=placed((REAR - pushers.get("radius", 0.02), 0.5 + y, 0.0)),
        **{"goal": {"time_limit": 0.3}, "numerics": {"iterations": ITERATIONS}} | tables,
    )  # fmt: skip


def friction_of(centres: dict[str, Any]) -> tuple[tuple[float, float], float]:
    """The centre of friction, and the mean distance of the block's base from it."""
    x, y = centres.get("centre_of_friction") or centres["centre_of_mass"]
    left, right, low, high = -x, SIDE - x, -SIDE / 2 - y, SIDE / 2 - y
    return (x, y), friction_arm(((left, low), (right, low), (right, high), (left, high)))


@pytest.mark.parametrize("off", [0.0, 0.03, -0.05])
@pytest.mark.parametrize("centres", CENTRES)
def test_threshold_about_the_centre_of_friction(centres: dict[str, Any], off: float) -> None:
    """A push at a distance c from the centre of friction lets go at mu N/sqrt(1 + (c/arm)^2), wherever the mass is.

    The ellipse of Howe and Cutkosky, Int. J. Robotics Research 15 (1996) 557, about the centre of friction; the arm is
    the mean distance of the patch from it.
    """
    (_, y), arm = friction_of(centres)
    threshold = MU * G / math.hypot(1.0, off / arm)
    held = swarmpush.simulate(leaning(0.998 * threshold, y + off, centres), cycles=())
    assert abs(held.travel_m) < HELD
    assert held.yaw_max_rad < HELD
    assert swarmpush.simulate(leaning(1.005 * threshold, y + off, centres), cycles=()).travel_m > 1e-4


def slow_push(off: float, centres: dict[str, Any]) -> tuple[float, float]:
    """Rate of turning in a slow push that passes the centre of friction at a distance, and what the model has for it.

    The pusher can hardly be shoved sideways, and the block has hardly any inertia. Model: with the contact at r from
    the centre of friction, a normal n and the lever t = r x n, a speed p along n turns the block at p t/(arm^2 + t^2).
    """
    centre, arm = friction_of(centres)
    tip = 0.01
    cart = {"radius": tip, "mass": 0.02, "stall_force": 10.0, "free_speed": 0.05, "sideways_drag": 100}
    s = leaning(10.0, centre[1] + off, centres, pushers=cart, trial={"sample_every": 0.02})
    run = swarmpush.simulate(s.replace(block={"mass": 0.1}, numerics={"step": 1e-4}), cycles=())
    first, middle, last = 6, 7, 8  # by then the pusher has got up to speed
    block, pusher = run.block, run.pushers
    dt, yaw = block["t_s"][last] - block["t_s"][first], block["yaw_rad"][middle]
    mass = centres.get("centre_of_mass", (SIDE / 2, 0.0))
    turn, normal = complex(math.cos(yaw), math.sin(yaw)), complex(math.cos(yaw), math.sin(yaw))
    footing = complex(block["x_m"][middle], block["y_m"][middle]) + turn * complex(
        centre[0] - mass[0], centre[1] - mass[1]
    )
    lever = complex(pusher["x_m"][middle], pusher["y_m"][middle]) + tip * normal - footing
    t = lever.real * normal.imag - lever.imag * normal.real
    speed = (pusher["x_m"][last] - pusher["x_m"][first]) / dt * normal.real
    return (block["yaw_rad"][last] - block["yaw_rad"][first]) / dt, speed * t / (arm**2 + t**2)


QUASI_STATIC = 0.05  # relative: inertia keeps the block turning as the lever shrinks; more so with its mass off centre


@pytest.mark.parametrize("centres", CENTRES)
def test_a_slow_push_turns_the_block_about_its_centre_of_friction(centres: dict[str, Any]) -> None:
    """A slow push through the centre of friction does not turn the block; beside it, it turns as the ellipsoid has it.

    Source: Lynch, Maekawa and Tanie, "Manipulation and active sensing by pushing using tactile feedback", IROS 1992,
    for a force along the normal.
    """
    for off in (0.03, -0.03):
        rate, expected = slow_push(off, centres)
        assert rate == pytest.approx(expected, rel=QUASI_STATIC)
        assert abs(slow_push(0.0, centres)[0]) < 0.05 * abs(rate)


def test_a_hit_turns_the_block_about_its_centre_of_mass() -> None:
    """A hit gives (1 + e) v/(1/m + 1/M + h^2/I), and the spin J h/I about the centre of mass (textbook)."""
    inertia, e = 0.01, 0.8
    s = rig(
        block={"length": SIDE, "width": SIDE, "centre_of_mass": (0.06, 0.03), "yaw_inertia": inertia},
        fluid=FAINT, contacts={"pusher_block": pair(e)}, start=placed((3.0, 0.47, 0.0)), goal={"time_limit": 2.0},
    )  # fmt: skip
    run = swarmpush.simulate(s, cycles=())
    hit, h = run.visits.iloc[0], 0.06  # the push passes 6 cm to the right of it
    impulse = hit["impact_Ns"] + hit["lean_Ns"]
    met = (1 + e) * hit["approach_m_s"] / (1 / s.pushers.mass + 1 / s.block.mass + h**2 / inertia)
    assert hit["impact_Ns"] == pytest.approx(met, rel=1e-3)  # the drive's push in the step of the hit
    late = run.block.iloc[[-2, -1]]
    spin = late["yaw_rad"].diff().iloc[-1] / late["t_s"].diff().iloc[-1]
    assert spin == pytest.approx(impulse * h / inertia, rel=1e-6)
    assert run.books.about_centre["pushers"] == pytest.approx(impulse * h, rel=1e-9)
    assert run.books.about_centre["change"] == pytest.approx(inertia * spin, rel=1e-6)
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(impulse / s.block.mass, rel=1e-6)
