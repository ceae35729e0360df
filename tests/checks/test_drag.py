"""Viscous drag: leaning, coasting, and what the drive's wandering makes of a path."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import PUSH_ON, pair, placed, rig

import swarmpush
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step
from swarmpush.scenario import Scenario

FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000

# ---- leaning ----------------------------------------------------------------------------------------------------

BALANCE = 1e-9  # relative: the drag's scheme is exact for a steady push, at any step


def micro(**pushers: float) -> Scenario:
    """Pushers of 100 um in touch with a block in a lab-chip channel: drag rules, and steps are long against m/g."""
    return rig(
        channel={"length": 10e-3, "width": 1e-3},
        block={"length": 600e-6, "width": 580e-6, "mass": 1e-7, "rear_at": 2.5e-3},
        pushers={
            "radius": 1e-4, "mass": 5.4e-9, "free_speed": 3e-4, "stall_force": 13e-9, "latency": PUSH_ON, **pushers,
        },
        fluid={"block_drag": 0.46e-3, "block_yaw_drag": 4e-11},
        start=placed((2.4e-3, 0.5e-3, 0.0)),
        goal={"travel": 2e-3, "time_limit": 10.0},
    )  # fmt: skip


def inertial(block_drag: float) -> Scenario:
    """A cart in touch with a crate under linear drag, both with relaxation times that the steps resolve."""
    return rig(
        block={"mass": 1e-2},
        pushers={"mass": 1e-3, "stall_force": 1.0, "latency": PUSH_ON},
        fluid={"block_drag": block_drag, "block_yaw_drag": 1.0},
        start=placed((3.98, 0.5, 0.0)),
        goal={"travel": 3.0, "time_limit": 2.0},
    )


@pytest.mark.parametrize(
    "s", [inertial(0.05), inertial(1.0), inertial(10.0), micro()], ids=["0.05", "1", "10", "micro"]
)
def test_leaning_speed(s: Scenario) -> None:
    """One pusher that leans in a viscous medium moves the block at F/(g_p + g_b) (force balance)."""
    run = swarmpush.simulate(s, cycles=())
    assert s.fluid is not None
    speed = s.pushers.stall_force / (s.pushers.drag + s.fluid.block_drag)
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(speed, rel=BALANCE)
    assert len(run.visits) == 1
    # the plan promises that speed for as long as the pusher leans, which is the whole trial
    travel = swarmpush.plan(s.replace(forecast={"law": "lean"}), n_starts=1).travel
    assert travel.leaning_share == pytest.approx(1.0, rel=BALANCE)
    assert travel.block_speed_m_s == pytest.approx(speed, rel=BALANCE)


def test_leaning_speed_at_any_step() -> None:
    """The leaning speed does not depend on the step, from a fraction of the relaxation time to hundreds of it."""
    speeds = [
        swarmpush.simulate(micro().replace(numerics={"step": step}), cycles=()).block["vx_m_s"].iloc[-1]
        for step in (3e-5, 3e-3, 3e-2)  # the pusher's m/g is 1.2e-4 s
    ]
    assert speeds == pytest.approx([13e-9 / (13e-9 / 3e-4 + 0.46e-3)] * 3, rel=BALANCE)


def test_two_lean_more_than_one() -> None:
    """Two pushers side by side lean with 2 F against g_b + 2 g_p (force balance)."""
    one = micro()
    two = one.replace(
        pushers={"count": 2}, block={"yaw": "held"},
        start={"placed": tuple(one.start.placed[0].model_copy(update={"y": y}) for y in (0.38e-3, 0.62e-3))},
    )  # fmt: skip
    run = swarmpush.simulate(two, cycles=())
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(26e-9 / (26e-9 / 3e-4 + 0.46e-3), rel=BALANCE)
    assert run.block["n_leaning"].iloc[-1] == 2.0


def test_oblique_lean_slides_off() -> None:
    """A frictionless pusher at heading a leans with F cos a: the block moves at F cos a/(g_p + g_b) (force balance)."""
    s = micro()
    heading = 0.3
    start = s.start.placed[0].model_copy(update={"heading": heading})
    s = s.replace(start={"placed": (start,)}, block={"yaw": "held"}, goal={"time_limit": 0.3})
    run = swarmpush.simulate(s, cycles=())
    speed = 13e-9 * math.cos(heading) / (13e-9 / 3e-4 + 0.46e-3)
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(speed, rel=BALANCE)
    along_face = np.diff(run.pushers["y_m"])[-1] / np.diff(run.pushers["t_s"])[-1]
    assert along_face == pytest.approx(3e-4 * math.sin(heading), rel=1e-6)  # a difference of positions


# ---- coasting ---------------------------------------------------------------------------------------------------

# A position moves with the velocity of the step before, which lengthens a coast by dt/2 of its first speed; the rest of
# the error is the step's place in the first contact. Both are of first order.
COAST = 2e-3  # relative, at steps of m/g/600


def test_a_pusher_coasts_m_v_over_g() -> None:
    """A pusher that rebounds from a wall and halts coasts e v m/g from it (linear drag; Stokes number)."""
    s = rig(
        pushers={"stall_force": 1.0},
        contacts={"pusher_wall": pair(0.6)},
        start=placed((1.0, 0.5, math.pi)),
        goal={"time_limit": 3.0},
    )
    steps, errors = choose_step(s), []
    for _ in range(3):
        run = swarmpush.simulate(s, cycles=(), steps=steps)
        distance = 0.6 * run.visits["approach_m_s"].iloc[0] * s.pushers.relaxation_time
        errors.append((run.pushers["x_m"].iloc[-1] - s.pushers.radius) / distance - 1)
        steps = steps.halved()
    assert abs(errors[0]) < COAST
    assert abs(errors[2]) < COAST / 4


@pytest.mark.parametrize("block_mass", [0.3, 1.0, 3.0])
def test_a_block_coasts_its_impulse_over_its_drag(block_mass: float) -> None:
    """Under linear drag the block travels J/g after an impulse J, whatever its mass (integral of M dv = -g v dt)."""
    s = rig(
        block={"mass": block_mass},
        fluid={"block_drag": 1.0, "block_yaw_drag": 0.1},
        contacts={"pusher_block": pair(1.0)},
        start=placed((2.0, 0.5, 0.0)),
        goal={"time_limit": 3.0 + 15 * block_mass, "travel": 3.0},
    )
    run = swarmpush.simulate(s, cycles=())
    assert len(run.visits) == 1
    impulse = run.visits["impact_Ns"].iloc[0]
    assert run.travel_m == pytest.approx(impulse, rel=COAST)
    assert run.books.pushers[0] + run.books.drag[0] == pytest.approx(0.0, abs=1e-5 * impulse)  # exp(-15) of it is left
    nudge = swarmpush.plan(s.replace(forecast={"law": "impact"}), n_starts=1).travel.nudge_m  # at the free speed
    assert nudge * run.visits["approach_m_s"].iloc[0] == pytest.approx(impulse, rel=1e-3)


def test_micrometre_spheres_do_not_coast() -> None:
    """A sphere of 1 um at 20 um/s coasts 5.24e-12 m at a Reynolds number of 4.5e-5, and the plan says so.

    Source of the argument: Purcell, "Life at low Reynolds number", Am. J. Phys. 45 (1977) 3; drag 6 pi eta a and m/g =
    (2/9) rho a^2/eta by Stokes; the numbers were worked out here for rho = 1050 kg/m3 in water at 25 degC.
    """
    a, v, eta = 1e-6, 20e-6, 0.8900e-3
    s = rig(
        channel={"length": 1e-3, "width": 2e-5},
        block={"length": 1e-5, "width": 1e-5, "mass": 1e-12, "rear_at": 5e-4},
        pushers={
            "radius": a, "mass": 1050 * 4 / 3 * math.pi * a**3, "free_speed": v,
            "stall_force": 6 * math.pi * eta * a * v,
        },
        fluid={"block_drag": 1e-7, "block_yaw_drag": 1e-17, "viscosity": eta, "density": 1000.0},
        goal={"travel": 1e-4, "time_limit": 1.0},
    )  # fmt: skip
    regime = {number.name: number for number in swarmpush.plan(s, n_starts=20).regime}
    assert s.pushers.relaxation_time == pytest.approx(2.62172e-7, rel=1e-5)  # digits printed
    assert regime["inertia"].value * a == pytest.approx(5.24345e-12, rel=1e-5)
    assert regime["inertia"].is_at_risk
    assert regime["Reynolds number"].value == pytest.approx(4.5e-5, rel=0.01)  # printed to two digits
    assert not regime["Reynolds number"].is_at_risk


# ---- wandering ----------------------------------------------------------------------------------------------------

N_WANDERERS = 500
DIFFUSION = 2.0  # rad/sqrt(s): the heading is forgotten in 2/4 s


@pytest.fixture(scope="module")
def wanderers() -> Run:
    """Pushers that wander in the open for four persistence times; they gain speed at once and meet nobody."""
    s = rig(
        channel={"length": 100.0, "width": 100.0},
        block={"rear_at": 98.0},
        pushers={"count": N_WANDERERS, "pass_through": True, "stall_force": 1000.0},
        errors={"heading_diffusion": DIFFUSION},
        start={"region": "behind", "heading": 0.0},
        goal={"time_limit": 2.0},
        trial={"sample_every": 0.1},
    )
    return swarmpush.simulate(s, cycles=())


def paths(run: Run, name: str) -> NDArray[np.float64]:
    """A quantity of the pushers' path: (samples, pushers), from the start."""
    values = run.pushers.pivot(index="t_s", columns="pusher", values=name).to_numpy()
    return values - values[0]


def test_heading_spreads_as_the_root_of_time(wanderers: Run) -> None:
    """The s.d. of the heading after a time t is the diffusion times sqrt(t) (definition of the random walk)."""
    times = np.unique(wanderers.pushers["t_s"])
    turned = np.unwrap(paths(wanderers, "heading_rad"), axis=0)
    for k in (1, 4, 12, 20):
        error = FOUR_SIGMA / math.sqrt(2 * N_WANDERERS)
        assert turned[k].std() == pytest.approx(DIFFUSION * math.sqrt(times[k]), rel=error)
        assert abs(turned[k].mean()) < FOUR_SIGMA * DIFFUSION * math.sqrt(times[k] / N_WANDERERS)


def test_mean_square_distance_of_a_persistent_path(wanderers: Run) -> None:
    """The mean square distance is 2 v^2 tau^2 (t/tau + exp(-t/tau) - 1) with tau = 2/diffusion^2.

    Source: the active Brownian particle without thermal motion of its own, as in Howse et al., Phys. Rev. Lett. 99
    (2007) 048102 (its formula is written with a tau twice as long; from memory).
    """
    times = np.unique(wanderers.pushers["t_s"])
    squares = paths(wanderers, "x_m") ** 2 + paths(wanderers, "y_m") ** 2
    tau = 2 / DIFFUSION**2
    for k in (1, 2, 5, 10, 20):
        expected = 2 * tau**2 * (times[k] / tau + math.exp(-times[k] / tau) - 1)
        # the walk's steps of 0.1 radius/speed = 2 ms weigh a thousandth at the shortest time
        error = FOUR_SIGMA * squares[k].std() / math.sqrt(N_WANDERERS) + 2e-3 * expected
        assert squares[k].mean() == pytest.approx(expected, abs=error)
