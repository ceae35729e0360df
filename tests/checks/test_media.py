"""What resists the block: liquid, floor and liquid together, and the thrust that fades or fails against them."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import PUSH_ON, G, dry, pair, placed, plate_moment, rig
from scipy.integrate import solve_ivp

import swarmpush
from swarmpush.dynamics.patch import friction_arm
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step
from swarmpush.scenario import Scenario

FIRST_ORDER = 0.9  # least order of convergence; the scheme's own is 1
AWAY = (1.0, 0.5, math.pi)  # a pusher that never gets to the block
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000


def orders(errors: NDArray[np.float64]) -> NDArray[np.float64]:
    """Observed orders of convergence from errors at steps that halve."""
    return np.asarray(np.log2(np.abs(errors[:-1] / errors[1:])))


def at_three_steps(s: Scenario) -> list[Run]:
    """The run at the step chosen, half of it, and a quarter."""
    steps, runs = choose_step(s), []
    for _ in range(3):
        runs.append(swarmpush.simulate(s, cycles=(), steps=steps))
        steps = steps.halved()
    return runs


# ---- stopping -------------------------------------------------------------------------------------------------------


def test_stopping_on_a_floor_under_liquid() -> None:
    """Under a force M a + g v a block stops after v/b - (a/b^2) ln(1 + b v/a), b = g/M (integral of M dv/dt)."""
    mu, drag, mass = 0.05, 0.1, 0.1
    s = rig(
        block={"mass": mass}, floor=dry(mu), fluid={"block_drag": drag, "block_yaw_drag": 0.01},
        contacts={"pusher_block": pair(0.5)}, start=placed((3.0, 0.5, 0.0)), goal={"time_limit": 6.0},
    )  # fmt: skip
    errors = []
    for run in at_three_steps(s):
        v, a, b = run.visits["impact_Ns"].sum() / mass, mu * G, drag / mass
        errors.append(run.travel_m / (v / b - a / b**2 * math.log1p(b * v / a)) - 1)
    assert abs(errors[0]) < 1e-4  # relative: half a step of the first speed, over the way
    assert (orders(np.array(errors)) > FIRST_ORDER).all()


# a plate twice as draggy across its length as along, hit off its centre
ALONG, ACROSS, YAW_DRAG, FACTOR, OFFSET = 0.25, 0.75, 0.005, 2.0, 0.03


def struck_plate(**tables: Any) -> Scenario:
    return rig(
        channel={"width": 4.0}, block={"length": 0.4, "width": 0.1},
        contacts={"pusher_block": pair(1.0)}, pushers={"mass": 0.5, "stall_force": 0.5},
        start=placed((3.0, 2.0 + OFFSET, 0.0)), goal={"time_limit": 4.0, "travel": 2.0}, **tables,
    )  # fmt: skip


LIQUID = {
    "block_drag": ALONG,
    "block_drag_across": ACROSS,
    "block_yaw_drag": YAW_DRAG,
    "near_wall_factor": FACTOR,
}


def coasted(run: Run, mu: float, wet: float, arm: float) -> NDArray[np.float64]:
    """x, y and yaw that the struck plate gains until the end under drags times `wet` and the elliptic limit surface."""
    s = run.scenario
    impulse, moment, mass = float(run.visits["impact_Ns"].iloc[0]), plate_moment(s), s.block.mass

    def rates(t: float, z: NDArray[np.float64]) -> list[float]:
        c, q = math.cos(z[2]), math.sin(z[2])
        total = math.hypot(z[3], z[4], arm * z[5]) + 1e-9
        push = mu * mass * G / total
        along = -wet * FACTOR * ALONG * (c * z[3] + q * z[4])
        across = -wet * FACTOR * ACROSS * (c * z[4] - q * z[3])
        fx, fy = c * along - q * across - push * z[3], q * along + c * across - push * z[4]
        torque = -(wet * FACTOR * YAW_DRAG + push * arm**2) * z[5]
        return [z[3], z[4], z[5], fx / mass, fy / mass, torque / moment]

    def rests(t: float, z: NDArray[np.float64]) -> float:
        return math.hypot(z[3], z[4]) - 1e-4

    rests.terminal = True  # type: ignore[attr-defined]
    time = run.duration_s - float(run.visits["t_off_s"].iloc[0])
    begin = [0.0, 0.0, 0.0, impulse / mass, 0.0, -impulse * OFFSET / moment]
    end = solve_ivp(rates, (0, time), begin, rtol=1e-9, atol=1e-11, events=rests if mu else None)
    return np.asarray(end.y[:3, -1])


@pytest.mark.parametrize(("mu", "wet"), [(0.0, 1.0), (0.01, 1.0), (0.03, 0.0)])
def test_coasting_with_two_drags(mu: float, wet: float) -> None:
    """A plate hit off centre coasts and turns by its drags along, across and about it, over a dry floor, or on one.

    The motion is integrated apart (SciPy) from the impulse; the error is of first order in the step.
    """
    s = struck_plate(**({"fluid": LIQUID} if wet else {}), **({"floor": dry(mu)} if mu else {}))
    arm = friction_arm(((-0.2, -0.05), (0.2, -0.05), (0.2, 0.05), (-0.2, 0.05)))
    errors = []
    for run in at_three_steps(s):
        assert len(run.visits) == 1
        block, expected = run.block, coasted(run, mu, wet, arm)
        got = [block[name].iloc[-1] - block[name].iloc[0] for name in ("x_m", "y_m", "yaw_rad")]
        errors.append(np.array(got) - expected)
    assert np.abs(errors[0]).max() < 3e-4  # m and rad: half a step of the first speeds
    has_error = np.abs(errors[0]) > 1e-12  # on a dry floor alone a plate is not turned off its way
    assert (orders(np.array(errors)[:, has_error]) > FIRST_ORDER).all()


# ---- steady motion --------------------------------------------------------------------------------------------------

SETTLED = 1e-8  # relative: exact but for what is left of the start and the rounding of places


@pytest.mark.parametrize("step", [2e-4, 1e-3, 5e-3])
def test_sinking_speed_at_any_step(step: float) -> None:
    """A tilted block settles at M g sin/drag along and across its length, with drags as the near walls have them."""
    s = rig(
        channel={"slope": -0.1, "cross_slope": -0.2, "width": 6.0, "length": 20.0},
        block={"mass": 0.5, "yaw": "held"}, floor=dry(0.0),
        fluid={"block_drag": 2.0, "block_drag_across": 5.0, "block_yaw_drag": 1.0, "near_wall_factor": 1.5},
        start=placed(AWAY), goal={"time_limit": 5.0, "travel": 10.0}, numerics={"step": step},
    )  # fmt: skip
    block = swarmpush.simulate(s, cycles=()).block.iloc[[-2, -1]]
    dt = block["t_s"].diff().iloc[-1]
    vx, vy = block["x_m"].diff().iloc[-1] / dt, block["y_m"].diff().iloc[-1] / dt
    assert vx == pytest.approx(0.5 * G * math.sin(0.1) / 3.0, rel=SETTLED)
    assert vy == pytest.approx(0.5 * G * math.sin(0.2) / 7.5, rel=SETTLED)


@pytest.mark.parametrize("step", [3e-5, 3e-3, 3e-2])
@pytest.mark.parametrize("is_turned", [False, True])
def test_leaning_speed_at_any_step(step: float, is_turned: bool) -> None:
    """A small pusher leans a block on at F/(g + factor g_b) at any step, be the block's mass resolved or not."""
    r, v, force, drag = 1e-4, 3e-4, 13e-9, 0.46e-3
    bar = {"nose": 1e-4, "heading": "free", "turn_rate": 5.0} if is_turned else {}
    s = rig(
        channel={"length": 10e-3, "width": 1e-3},
        block={"length": 6e-4, "width": 5.8e-4, "mass": 1e-7, "rear_at": 2.5e-3},
        pushers={"radius": r, "mass": 5.4e-9, "free_speed": v, "stall_force": force, "latency": PUSH_ON, **bar},
        fluid={"block_drag": drag, "block_drag_across": 1e-3, "block_yaw_drag": 4e-11, "near_wall_factor": 3.0},
        start=placed((2.4e-3, 0.5e-3, 0.0)), goal={"travel": 2e-3, "time_limit": 10.0}, numerics={"step": step},
    )  # fmt: skip
    speed = swarmpush.simulate(s, cycles=()).block["vx_m_s"].iloc[-1]
    assert speed == pytest.approx(force / (force / v + 3.0 * drag), rel=SETTLED)


def test_impact_where_walls_are_near() -> None:
    """Walls that raise the block's drag shorten the step with its relaxation time: an impact still meets its mass."""
    s = rig(
        fluid={"block_drag": 1.0, "block_yaw_drag": 1.0, "near_wall_factor": 300.0}, block={"mass": 0.5},
        contacts={"pusher_block": pair(0.5)}, start=placed((3.0, 0.5, 0.0)),
    )  # fmt: skip
    hit = swarmpush.simulate(s, cycles=()).visits.iloc[0]
    met = 1.5 * hit["approach_m_s"] / (1 / 0.1 + 1 / 0.5)
    assert hit["impact_Ns"] == pytest.approx(met, rel=0.03)  # the step rule allows x/2 = 1/40 too much mass


def test_a_pusher_hard_to_shove_sideways_gains_speed_at_once() -> None:
    """A light pusher in touch is up to speed at once, however large its drag across (force balance)."""
    s = rig(
        block={"mass": 1e-3, "yaw": "held"}, fluid={"block_drag": 0.1, "block_yaw_drag": 1.0},
        pushers={"mass": 1e-4, "stall_force": 1.0, "sideways_drag": 100.0, "latency": PUSH_ON},
        start=placed((3.98, 0.5, 0.0)), goal={"time_limit": 0.1}, trial={"sample_every": 2e-3},
    )  # fmt: skip
    block = swarmpush.simulate(s, cycles=()).block
    assert block["vx_m_s"].iloc[10] == pytest.approx(1.0 / 1.1, rel=1e-3)  # 20 relaxation times (m + M)/(g + g_b)


# ---- thrust ---------------------------------------------------------------------------------------------------------


def test_fading_thrust() -> None:
    """Thrust that fades as exp(-t/tau) drives a light pusher v tau (1 - exp(-T/tau)) far (integral of its speed)."""
    tau, time, step = 0.8, 2.0, 1e-3
    s = rig(
        channel={"length": 50.0}, block={"rear_at": 40.0}, pushers={"mass": 1e-5}, errors={"fade_time": tau},
        start=placed((1.0, 0.5, 0.0)), goal={"time_limit": time}, numerics={"step": step},
    )  # fmt: skip
    path = swarmpush.simulate(s, cycles=()).pushers["x_m"]
    expected = tau * -math.expm1(-time / tau)
    # the last step's speed moves it in the next one: late by a step, and half a step of the fall in between
    assert path.iloc[-1] - path.iloc[0] == pytest.approx(expected, abs=step)


def test_fading_lean() -> None:
    """A fading push leans a block on at F exp(-t/tau)/(g + g_b) when masses are small (force balance)."""
    tau = 1.5
    s = rig(
        block={"mass": 1e-4}, pushers={"mass": 1e-5, "latency": PUSH_ON}, errors={"fade_time": tau},
        fluid={"block_drag": 0.3, "block_yaw_drag": 1.0}, start=placed((3.98, 0.5, 0.0)), goal={"time_limit": 3.0},
    )  # fmt: skip
    block = swarmpush.simulate(s, cycles=()).block
    k = np.array([300, 600, 900])
    assert block["vx_m_s"][k].to_numpy() == pytest.approx(
        0.25 * np.exp(-block["t_s"][k] / tau), rel=2e-3
    )  # m/(g tau): 2e-4


N_UNITS = 500


def crowd(**errors: float) -> Run:
    """Many light pushers that run along x in the open and meet nobody."""
    starts = [(10 + 0.1 * (k % 25), 10 + 0.1 * (k // 25), 0.0) for k in range(N_UNITS)]
    s = rig(
        channel={"length": 60.0, "width": 60.0}, block={"rear_at": 50.0},
        pushers={"count": N_UNITS, "pass_through": True, "mass": 1e-5}, errors=errors, start=placed(*starts),
        goal={"time_limit": 2.0}, trial={"sample_every": 0.1}, numerics={"step": 2e-3},
    )  # fmt: skip
    return swarmpush.simulate(s, cycles=())


def table_of(run: Run, name: str) -> NDArray[Any]:
    return run.pushers[name].to_numpy().reshape(-1, N_UNITS)


def test_dropout() -> None:
    """The share that has failed after t is 1 - exp(-r t) (exponential times), and what has failed lies still."""
    rate = 0.7
    run = crowd(dropout=rate)
    failed, t = table_of(run, "mode") == "failed", run.block["t_s"].to_numpy()
    for k in (3, 8, 20):
        share = -math.expm1(-rate * t[k])
        assert failed[k].mean() == pytest.approx(share, abs=FOUR_SIGMA * math.sqrt(share * (1 - share) / N_UNITS))
    assert (failed[1:] >= failed[:-1]).all()
    steps = np.diff(table_of(run, "x_m"), axis=0)
    assert np.abs(steps[1:][failed[1:-1]]).max() < 1e-9  # m; it stops within 10 us
    over_time = 1 + math.expm1(-rate * 2.0) / (rate * 2.0)  # mean of the share over the run
    assert run.causes["dropped_out"] == pytest.approx(over_time, abs=FOUR_SIGMA * 0.5 / math.sqrt(N_UNITS))


def test_a_failed_pusher_is_an_obstacle() -> None:
    """Of two pushers that run into each other, the one that has not failed shoves the other on at F/(2 g)."""
    s = rig(
        pushers={"count": 2, "mass": 1e-3, "latency": PUSH_ON}, errors={"dropout": 0.6},
        start=placed((1.5, 0.5, 0.0), (2.0, 0.5, math.pi)), goal={"time_limit": 2.0}, trial={"sample_every": 0.01},
    )  # fmt: skip
    n_shoved = 0
    for seed in range(8):
        run = swarmpush.simulate(s, cycles=(), seed=seed)
        has_failed = (run.pushers["mode"] == "failed").to_numpy().reshape(-1, 2)
        if has_failed[-50].sum() == has_failed[-1].sum() == 1:
            n_shoved += 1
            x = run.pushers["x_m"].to_numpy().reshape(-1, 2)
            speed = -0.5 if has_failed[-1, 0] else 0.5
            t = run.block["t_s"].to_numpy()
            assert (x[-1] - x[-21]) / (t[-1] - t[-21]) == pytest.approx(
                [speed, speed], rel=2e-3
            )  # m/g is a hundredth of 1 s
            assert x[-1, 1] - x[-1, 0] == pytest.approx(0.04, abs=2 * run.steps.slop_m)
    assert n_shoved >= 2


def test_spreads_from_unit_to_unit() -> None:
    """Free speeds spread as the stall forces do, since the drag is the medium's, and curvings as they are told."""
    stall, drift = 0.1, 0.5
    run = crowd(stall_spread=stall, drift_spread=drift)
    t, headings = run.block["t_s"].to_numpy(), table_of(run, "heading_rad")
    places = table_of(run, "x_m") + 1j * table_of(run, "y_m")
    rates = headings[10] / t[10]
    half = rates * (t[11] - t[10]) / 2
    speeds = np.abs(places[11] - places[10]) / (t[11] - t[10]) * half / np.sin(half)  # chord to arc
    for values, mean, sd in ((speeds, 1.0, stall), (rates, 0.0, drift)):
        assert values.mean() == pytest.approx(mean, abs=FOUR_SIGMA * sd / math.sqrt(N_UNITS))
        assert values.std() == pytest.approx(sd, rel=FOUR_SIGMA / math.sqrt(2 * N_UNITS))
    assert abs(np.corrcoef(speeds, rates)[0, 1]) < FOUR_SIGMA / math.sqrt(N_UNITS)
