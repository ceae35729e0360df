"""Single impacts in the body world against the textbook's algebra.

The law is Newton's restitution with Coulomb friction, solved algebraically: the normal speed is reversed by the factor
e, and the tangential one is stopped unless that takes more than mu times the normal impulse. Other laws (Poisson's,
Stronge's) differ by some percent where the contact sticks; see Wang and Mason, "Two-dimensional rigid-body collisions
with friction", J. Appl. Mech. 59 (1992) 635, and Brach, "Mechanical Impact Dynamics" (1991).
"""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from rigs import pair, placed, plate_moment, rig

import swarmpush
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step
from swarmpush.scenario import Scenario

# In the step of the impact the pusher's drag weighs dt/(2 tau) = 8e-5 of its mass, and the push adds F dt to the
# impulse, as much again. Both vanish with the step.
DRAG_IN_A_STEP = 3e-4
# The ledger takes both out of the impact, but the push as a whole where only the block's share M/(m + M) of it goes
# through the contact: F (1 - v/v0) dt, which is 3e-6 N s at most, against impulses of 0.05 N s and more.
IMPACT = 3e-5
SAME = 1e-12  # relative: sums of a few numbers


def first_strike(run: Run) -> pd.Series:
    """The first visit on the block."""
    return run.visits[run.visits["partner"] == "block"].iloc[0]


def head_on(restitution: float, *, block_mass: float = 1.0) -> Scenario:
    """A pusher that has three metres to gain speed, then hits the middle of the free block's face."""
    return rig(
        block={"mass": block_mass},
        contacts={"pusher_block": pair(restitution)},
        start=placed((1.0, 0.5, 0.0)),
        goal={"time_limit": 4.5},
    )


@pytest.mark.parametrize("restitution", [0.0, 0.5, 1.0])
@pytest.mark.parametrize("block_mass", [0.1, 1.0])
def test_head_on_impulse(restitution: float, block_mass: float) -> None:
    """A head-on hit on the free block passes on J = (1 + e) v m M/(m + M) (textbook), as forecast and as measured."""
    s = head_on(restitution, block_mass=block_mass)
    run = swarmpush.simulate(s, cycles=())
    strike = first_strike(run)
    m = s.pushers.mass
    j = (1 + restitution) * strike["approach_m_s"] * m * block_mass / (m + block_mass)
    assert strike["impact_Ns"] == pytest.approx(j, rel=IMPACT)
    assert strike["tangential_Ns"] == pytest.approx(0.0, abs=SAME * j)
    forecast = swarmpush.plan(s, n_starts=1).travel.strike_impulse_Ns  # at the free speed
    assert forecast * strike["approach_m_s"] == pytest.approx(j, rel=SAME)


@pytest.mark.parametrize("restitution", [0.5, 1.0])
def test_head_on_books(restitution: float) -> None:
    """After a head-on hit the block's momentum is the impulse in its books, and the pusher has lost as much."""
    s = head_on(restitution)
    run = swarmpush.simulate(s, cycles=())
    strike, books = first_strike(run), run.books
    assert books.pushers[0] == pytest.approx(strike["impact_Ns"] + strike["lean_Ns"], rel=SAME)
    assert books.change[0] - books.drag[0] == pytest.approx(books.pushers[0], rel=SAME)
    m, big, v, e = 0.1, 1.0, strike["approach_m_s"], restitution
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx((1 + e) * v * m / (m + big), rel=DRAG_IN_A_STEP)
    after = run.pushers[run.pushers["t_s"] >= strike["t_off_s"]].head(2)
    rebound = np.diff(after["x_m"])[0] / np.diff(after["t_s"])[0]
    coasting = math.exp(-(after["t_s"].mean() - strike["t_off_s"]) / s.pushers.relaxation_time)  # it halts at the bump
    assert rebound == pytest.approx(coasting * v * (m - e * big) / (m + big), rel=DRAG_IN_A_STEP)


def test_impulse_converges_with_the_step() -> None:
    """The whole impulse of a hit approaches the textbook's value in proportion to the step."""
    s = head_on(0.5)
    steps, errors = choose_step(s), []
    for _ in range(3):
        run = swarmpush.simulate(s, cycles=(), steps=steps)
        j = 1.5 * first_strike(run)["approach_m_s"] * 0.1 / 1.1
        errors.append(run.books.pushers[0] / j - 1)
        steps = steps.halved()
    assert abs(errors[0]) < DRAG_IN_A_STEP
    order = np.log2(np.array(errors[:-1]) / errors[1:])
    assert order == pytest.approx([1.0, 1.0], abs=0.05)  # one, and what a second-order term adds at this step


# ---- off centre and oblique ---------------------------------------------------------------------------------------

OFFSET = 0.03  # m, of the hit from the middle of a face 0.2 m wide


def oblique(heading: float, friction: float, restitution: float = 0.5) -> Scenario:
    """A pusher that runs 2 m at `heading` and then hits a free plate of 0.1 x 0.2 m, 30 mm off the middle."""
    run = 2.0
    x, y = 4.0 - 0.02 - run * math.cos(heading), 2.0 + OFFSET - run * math.sin(heading)
    return rig(
        channel={"width": 4.0},
        block={"length": 0.1, "width": 0.2},
        contacts={"pusher_block": pair(restitution, friction)},
        start=placed((x, y, heading)),
        goal={"time_limit": 3.6},
    )


def algebra(s: Scenario, arm: NDArray[np.float64], velocity: NDArray[np.float64]) -> tuple[str, float, float, float]:
    """The impulse (normal, tangential) on the block and its spin, for a pusher that does not turn.

    With inverse masses B at the contact, P = -B^-1 ((1 + e) u_n, u_t) if it sticks; if that takes more than mu P_n, it
    slides: P_t = -mu s P_n and P_n = -(1 + e) u_n/(B_nn - mu s B_nt), s the sense of slip. Source: any of those above;
    normal n = x into the block, tangent t = y, u the block's velocity relative to the pusher's.
    """
    m, big, inertia = s.pushers.mass, s.block.mass, plate_moment(s)
    e, mu = s.contacts.pusher_block.restitution, s.contacts.pusher_block.friction
    n_arm, t_arm = -arm[1], arm[0]  # arm x n, arm x t
    b_nn, b_tt = 1 / m + 1 / big + n_arm**2 / inertia, 1 / m + 1 / big + t_arm**2 / inertia
    b_nt = n_arm * t_arm / inertia
    u_n, u_t = -velocity
    p_n, p_t = -np.linalg.solve([[b_nn, b_nt], [b_nt, b_tt]], [(1 + e) * u_n, u_t])
    mode = "stick"
    if abs(p_t) > mu * p_n:
        mode, sense = "slide", math.copysign(1.0, u_t)
        p_n = -(1 + e) * u_n / (b_nn - mu * sense * b_nt)
        p_t = -mu * sense * p_n
    return mode, p_n, p_t, (n_arm * p_n + t_arm * p_t) / inertia


@pytest.mark.parametrize(
    ("heading", "friction", "mode"),
    [
        (0.0, 0.0, "slide"),
        (0.0, 0.3, "stick"),
        (0.3, 0.1, "slide"),
        (0.3, 0.3, "stick"),
        (0.64, 0.3, "slide"),
        (0.64, 0.8, "stick"),
        (-0.64, 0.3, "slide"),
    ],
)
def test_oblique_impact(heading: float, friction: float, mode: str) -> None:
    """An oblique hit with friction passes on the algebraic solution's impulse, sliding or sticking, and its spin."""
    s = oblique(heading, friction)
    run = swarmpush.simulate(s, cycles=())
    strike, books = first_strike(run), run.books
    speed = strike["approach_m_s"] / math.cos(heading)
    arm = np.array([-0.05, strike["y_m"] - 2.0])
    expected_mode, p_n, p_t, spin = algebra(s, arm, speed * np.array([math.cos(heading), math.sin(heading)]))
    assert expected_mode == mode
    assert strike["impact_Ns"] == pytest.approx(p_n, rel=IMPACT)
    assert books.pushers == (pytest.approx(p_n, rel=DRAG_IN_A_STEP), pytest.approx(p_t, abs=DRAG_IN_A_STEP * p_n))
    if mode == "slide":
        assert abs(books.pushers[1]) == pytest.approx(friction * books.pushers[0], rel=1e-9, abs=SAME)
    else:
        assert abs(books.pushers[1]) < friction * books.pushers[0]
    assert abs(strike["tangential_Ns"]) == pytest.approx(abs(books.pushers[1]), rel=SAME, abs=SAME)
    turned = run.block[run.block["t_s"] > strike["t_off_s"]]
    assert np.polyfit(turned["t_s"], turned["yaw_rad"], 1)[0] == pytest.approx(spin, rel=DRAG_IN_A_STEP)


def test_off_centre_numbers() -> None:
    """A frictionless hit 30 mm off the middle gives J = (1 + e) v/(1/m + 1/M + c^2/I): 0.1337375 N s at 1 m/s."""
    s = oblique(0.0, 0.0)
    run = swarmpush.simulate(s, cycles=())
    strike = first_strike(run)
    c = strike["y_m"] - 2.0
    assert c == pytest.approx(OFFSET, abs=1e-9)
    assert strike["impact_Ns"] / strike["approach_m_s"] == pytest.approx(0.1337375, rel=IMPACT)


def test_wall_impact() -> None:
    """A pusher that hits a wall gives it (1 + e) m v, and mu times as much along it while it slides (textbook)."""
    heading = math.radians(-50)
    s = rig(
        contacts={"pusher_wall": pair(0.6, 0.2)}, start=placed((1.0, 0.9, heading)), goal={"time_limit": 2.5}
    )  # fmt: skip
    hit = swarmpush.simulate(s, cycles=()).visits.iloc[0]
    assert hit["surface"] == "bottom"
    normal = 1.6 * 0.1 * hit["approach_m_s"]
    assert hit["impact_Ns"] == pytest.approx(normal, rel=IMPACT)
    assert abs(hit["tangential_Ns"]) == pytest.approx(0.2 * (hit["impact_Ns"] + hit["lean_Ns"]), rel=1e-9)
    assert hit["lean_Ns"] < DRAG_IN_A_STEP * normal


def test_pusher_on_pusher() -> None:
    """Two equal pushers that meet head-on exchange (1 + e) m v/2 with v their closing speed (textbook)."""
    s = rig(
        pushers={"count": 2},
        contacts={"pusher_pusher": pair(0.5)},
        start=placed((1.0, 0.5, 0.0), (3.0, 0.5, math.pi)),
        goal={"time_limit": 3.0},
    )
    hits = swarmpush.simulate(s, cycles=()).visits
    hit = hits[hits["partner"] == "pusher"].iloc[0]
    assert (hit["pusher"], hit["other_pusher"]) == (0, 1)
    assert hit["impact_Ns"] == pytest.approx(1.5 * 0.1 / 2 * hit["approach_m_s"], rel=IMPACT)
