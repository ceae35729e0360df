"""Oblique hits with friction over a grid, on the face and on a corner, against the algebraic Newton-Coulomb solution.

With u the block's velocity relative to the pusher's at the contact, n the normal into the block, t = n turned left and
B the inverse masses there, B_nn = sum(1/m + (r x n)^2/I), B_tt likewise with t, B_nt = sum (r x n)(r x t)/I, a contact
that sticks takes P = -B^-1 ((1 + e) u_n, u_t). If that needs |P_t| > mu P_n it slides, s being the sense of u_t:
P_t = -mu s P_n, P_n = -(1 + e) u_n/(B_nn - mu s B_nt). A pusher holds its heading, so its moment is infinite and it
adds 1/m to B_nn and B_tt alone. Sources: Wang and Mason, "Two-dimensional rigid-body collisions with friction", J.
Appl. Mech. 59 (1992) 635; Brach, "Mechanical Impact Dynamics" (1991).
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import pair, placed, plate_moment, rig

import swarmpush
from swarmpush.scenario import Scenario

HALF_LENGTH, HALF_WIDTH = 0.05, 0.1  # m, of the block
CENTRE = np.array([4.05, 2.0])  # m, of the block before the hit
RADIUS, MASS, FORCE = 0.02, 0.1, 0.1  # m, kg, N, of the pusher
RUN_UP = 0.05  # m: it arrives at 0.3 m/s
STEP = 5e-5  # s
# Drive and drag act on within the step of the hit, F dt together at most; a velocity read from a path adds half a step.
IN_A_STEP = 1.5 * FORCE * STEP  # N s; hits pass on from 1.5e-2 N s upwards


@dataclass(frozen=True)
class Impact:
    """What one hit did. normal, tangential: impulse on the block in N s. spin: of the block. pusher: its velocity."""

    normal: float
    tangential: float
    spin: float
    pusher: NDArray[np.float64]
    sticks: bool


def approaching(
    aim: tuple[float, float], heading: float, restitution: float, friction: float, *, step: float = STEP
) -> Scenario:
    """A pusher that runs up at `heading`, touches the free block with its centre at `aim`, and halts."""
    x, y = aim[0] - RUN_UP * math.cos(heading), aim[1] - RUN_UP * math.sin(heading)
    return rig(
        channel={"width": 4.0},
        block={"length": 2 * HALF_LENGTH, "width": 2 * HALF_WIDTH},
        pushers={"radius": RADIUS, "mass": MASS, "stall_force": FORCE},
        contacts={"pusher_block": pair(restitution, friction)},
        start=placed((x, y, heading)),
        goal={"time_limit": 0.5},
        numerics={"step": step},
        trial={"sample_every": 0.005},
    )


def solve(s: Scenario, normal: NDArray[np.float64], arm: NDArray[np.float64], velocity: NDArray[np.float64]) -> Impact:
    """The algebraic solution for a pusher that arrives at `velocity`, with `arm` from the block's centre."""
    tangent = np.array([-normal[1], normal[0]])
    inertia, law = plate_moment(s), s.contacts.pusher_block
    n_arm, t_arm = (arm[0] * way[1] - arm[1] * way[0] for way in (normal, tangent))
    bare = 1 / s.pushers.mass + 1 / s.block.mass
    b_nn, b_tt, b_nt = bare + n_arm**2 / inertia, bare + t_arm**2 / inertia, n_arm * t_arm / inertia
    u_n, u_t = -velocity @ normal, -velocity @ tangent
    p_n, p_t = -np.linalg.solve([[b_nn, b_nt], [b_nt, b_tt]], [(1 + law.restitution) * u_n, u_t])
    sticks = abs(p_t) <= law.friction * p_n
    if not sticks:
        sense = math.copysign(1.0, u_t)
        p_n = -(1 + law.restitution) * u_n / (b_nn - law.friction * sense * b_nt)
        p_t = -law.friction * sense * p_n
    after = velocity - (p_n * normal + p_t * tangent) / s.pushers.mass
    return Impact(p_n, p_t, (n_arm * p_n + t_arm * p_t) / inertia, after, sticks)


def compare(s: Scenario, corner: NDArray[np.float64] | None = None) -> bool:
    """Hold one hit against the algebra, for the place at which it happened; returns whether it stuck."""
    run = swarmpush.simulate(s, cycles=())
    assert len(run.visits) == 1
    hit = run.visits.iloc[0]
    place, heading = hit[["x_m", "y_m"]].to_numpy(dtype=float), hit["heading_rad"]
    if corner is None:
        normal, arm = np.array([1.0, 0.0]), np.array([-HALF_LENGTH, place[1] - CENTRE[1]])
    else:
        normal, arm = (corner - place) / math.hypot(*(corner - place)), corner - CENTRE
    way = np.array([math.cos(heading), math.sin(heading)])
    velocity = hit["approach_m_s"] / (way @ normal) * way
    expected = solve(s, normal, arm, velocity)

    assert hit["impact_Ns"] == pytest.approx(expected.normal, abs=IN_A_STEP)
    assert -hit["tangential_Ns"] == pytest.approx(expected.tangential, abs=IN_A_STEP)
    on_block = expected.normal * normal + expected.tangential * np.array([-normal[1], normal[0]])
    assert run.books.pushers == pytest.approx(on_block, abs=IN_A_STEP)
    after = run.block[run.block["t_s"] > hit["t_off_s"]]
    spin, vy = (np.polyfit(after["t_s"], after[name], 1)[0] for name in ("yaw_rad", "y_m"))
    assert spin * plate_moment(s) / HALF_WIDTH == pytest.approx(
        expected.spin * plate_moment(s) / HALF_WIDTH, abs=IN_A_STEP
    )
    assert s.block.mass * after["vx_m_s"].iloc[0] == pytest.approx(on_block[0], abs=IN_A_STEP)
    assert s.block.mass * vy == pytest.approx(on_block[1], abs=IN_A_STEP)
    path = run.pushers[run.pushers["t_s"] > hit["t_off_s"]].head(2)
    coasting = math.exp(-(path["t_s"].mean() - hit["t_off_s"]) / s.pushers.relaxation_time)
    rebound = np.array([np.diff(path[name])[0] for name in ("x_m", "y_m")]) / np.diff(path["t_s"])[0] / coasting
    assert MASS * rebound == pytest.approx(MASS * expected.pusher, abs=IN_A_STEP)
    return expected.sticks


OFFSETS = (-0.07, -0.02, 0.035, 0.085)  # m, of the hit from the middle of the face
HEADINGS = (-0.9, -0.35, 0.2, 0.7)  # rad


@pytest.mark.parametrize("restitution", [0.1, 0.4, 0.8, 1.0])
@pytest.mark.parametrize("friction", [0.05, 0.25, 0.6])
def test_face(restitution: float, friction: float) -> None:
    """A hit on the face passes on the algebra's impulse, spins the block and sends the pusher back as it says."""
    stuck = [
        compare(approaching((4.0 - RADIUS, 2.0 + offset), heading, restitution, friction))
        for offset, heading in itertools.product(OFFSETS, HEADINGS)
    ]
    if friction > 0.05:
        assert 0 < sum(stuck) < len(stuck), "the grid must hold both modes"


@pytest.mark.parametrize("restitution", [0.2, 0.9])
@pytest.mark.parametrize("friction", [0.0, 0.15, 0.7])
def test_corner(restitution: float, friction: float) -> None:
    """A hit on a corner acts along the line from the corner to the pusher's centre, with the same algebra."""
    for side, bearing, heading in itertools.product((1.0, -1.0), (0.35, 0.9), (-0.3, 0.0, 0.25)):
        corner = np.array([4.0, 2.0 + side * HALF_WIDTH])
        aim = corner[0] - RADIUS * math.cos(bearing), corner[1] + side * RADIUS * math.sin(bearing)
        compare(approaching(aim, heading, restitution, friction), corner)


@pytest.mark.parametrize(("friction", "sticks"), [(0.1, False), (0.6, True)])
def test_order_in_the_step(friction: float, sticks: bool) -> None:
    """What drive and drag add within the step of an oblique hit is of first order in the step."""
    errors = []
    for step in (2e-4, 1e-4, 5e-5):
        s = approaching((4.0 - RADIUS, 2.035), 0.3, 0.5, friction, step=step)
        run = swarmpush.simulate(s, cycles=())
        hit = run.visits.iloc[0]
        way = np.array([1.0, math.tan(hit["heading_rad"])])
        arm = np.array([-HALF_LENGTH, hit["y_m"] - CENTRE[1]])
        expected = solve(s, np.array([1.0, 0.0]), arm, hit["approach_m_s"] * way)
        assert expected.sticks == sticks
        errors.append(run.books.pushers[0] - expected.normal)
    order = np.log2(np.array(errors[:-1]) / errors[1:])
    assert order == pytest.approx([1.0, 1.0], abs=0.05)
