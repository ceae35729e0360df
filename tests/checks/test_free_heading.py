"""Free headings: turning against drag, wandering, and what contacts do to them."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import PUSH_ON, pair, placed, rig

import swarmpush
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step
from swarmpush.scenario import Scenario

RADIUS, FORCE, SPEED = 0.02, 1.0, 0.1  # m, N, m/s
TURN_DRAG = 0.01  # N m s
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000


def free(
    *starts: tuple[float, float, float], time: float, pushers: dict[str, Any], **tables: dict[str, Any]
) -> Scenario:
    """Discs with free headings that gain speed in 10 us, so that only their drags count."""
    crew = {
        "count": len(starts), "mass": 1e-4, "stall_force": FORCE, "free_speed": SPEED, "heading": "free",
        "turn_drag": TURN_DRAG, "turn_rate": 2.0, "latency": PUSH_ON,
    }  # fmt: skip
    return rig(
        pushers=crew | pushers,
        start=placed(*starts),
        goal={"time_limit": time},
        trial={"sample_every": time / 200},
        **{"numerics": {"step": 1e-3}} | tables,
    )


def headings(run: Run) -> NDArray[np.float64]:
    """Heading of the only pusher along the run."""
    return np.unwrap(run.pushers["heading_rad"].to_numpy())


# ---- in the open ----------------------------------------------------------------------------------------------------

OPEN = (2.0, 0.5, 0.0)
ROUNDING = 1e-9


@pytest.mark.parametrize("tau", [1e-6, 0.05, 0.2])
def test_a_turn_reaches_its_angle(tau: float) -> None:
    """A turn commanded by its rate w ends at the commanded angle, whatever the moment of inertia I.

    Drive g (w - spin), later -g spin: I spin integrates to g (angle - turned) = 0 in the end (derived here).
    """
    once = {"name": "once", "acts": [{"act": "run"}, {"act": "turn", "angle": 1.5}, {"act": "halt"}]}
    run = swarmpush.simulate(
        free(
            OPEN, time=8.0, pushers={"yaw_inertia": tau * TURN_DRAG, "latency": 0.0},
            errors={"false_bumps": 2.0}, routine={"stages": [once]},
        ),
        cycles=(),
    )  # fmt: skip
    ends = run.pushers["t_s"][run.pushers["mode"] == "turn"].max()
    assert 8.0 - ends > 20 * tau  # then exp(-20) is left
    assert headings(run)[-1] == pytest.approx(1.5, abs=1e-8)


def relaxing(step: float) -> float:
    """Largest error of the heading of a disc that begins to curve against its moment of inertia."""
    tau, drift = 0.3, 1.5
    s = free(OPEN, time=1.5, pushers={"yaw_inertia": tau * TURN_DRAG}, errors={"heading_drift": drift})
    run = swarmpush.simulate(s.replace(numerics={"step": step}), cycles=())
    t = run.pushers["t_s"].to_numpy()
    return float(np.abs(headings(run) - drift * (t - tau * (1 - np.exp(-t / tau)))).max())


def test_turning_relaxes() -> None:
    """A steady curving w sets in with I/g: the heading is w (t - tau (1 - exp(-t/tau))), to first order in the step."""
    errors = [relaxing(step) for step in (4e-3, 2e-3, 1e-3)]
    assert errors[0] < 0.6 * 4e-3 * 1.5  # half a step of the final rate: angles move with the last step's rate
    assert (np.log2(np.array(errors[:-1]) / errors[1:]) > 0.9).all()


N_WANDERERS, DIFFUSION, DRIFT = 600, 0.5, 0.4  # the last in rad/s, the one before in rad/sqrt(s)


@pytest.mark.parametrize("tau", [1e-6, 0.1])
def test_wandering_against_inertia(tau: float) -> None:
    """A free heading drifts by w t and spreads as sigma^2 t, both late by tau = I/g.

    The turning rate is an Ornstein-Uhlenbeck process: mean w (t - tau e1) and variance sigma^2 (t - 2 tau e1 +
    tau e2/2), e1 = 1 - exp(-t/tau), e2 = 1 - exp(-2 t/tau). Source: Uhlenbeck and Ornstein, Phys. Rev. 36 (1930) 823,
    for a start at rest.
    """
    s = free(
        *[(20 + 0.2 * (k % 25), 20 + 0.2 * (k // 25), 0.0) for k in range(N_WANDERERS)],
        time=1.0, pushers={"pass_through": True, "yaw_inertia": tau * TURN_DRAG},
        channel={"length": 60.0, "width": 60.0}, block={"rear_at": 50.0},
        errors={"heading_diffusion": DIFFUSION, "heading_drift": DRIFT}, numerics={"step": 2e-3},
    )  # fmt: skip
    run = swarmpush.simulate(s, cycles=())
    turned = run.pushers["heading_rad"].to_numpy().reshape(-1, N_WANDERERS)
    for share in (0.2, 0.5, 1.0):
        k = round(share * (len(turned) - 1))
        t = run.block["t_s"][k]
        e1, e2 = -math.expm1(-t / tau), -math.expm1(-2 * t / tau)
        variance = DIFFUSION**2 * (t - 2 * tau * e1 + tau * e2 / 2)
        assert turned[k].var() == pytest.approx(variance, rel=FOUR_SIGMA * math.sqrt(2 / N_WANDERERS))
        mean = DRIFT * (t - tau * e1)
        assert turned[k].mean() == pytest.approx(mean, abs=FOUR_SIGMA * math.sqrt(variance / N_WANDERERS))


# ---- at a wall -------------------------------------------------------------------------------------------------------

# rad; the disc needs a step to gain speed, one to touch, and a contact's arm acts a step later, at up to 0.4 rad/s
STARTS_LATE = 1.2e-3
TOUCHING = 0.98 - 1e-6  # m: y of a centre that all but touches the upper wall


@pytest.mark.parametrize("arm", [0.004, -0.004])
def test_contact_arm_turns_along_or_into_a_wall(arm: float) -> None:
    """A contact arm a > 0 turns a disc away from the wall it leans on, a < 0 into it, as tan p = tan p0 exp(-a F t/g).

    p is the angle of the heading into the wall: the wall answers with F sin p, which has the lever a cos p, so p' =
    -(a F/g) sin p cos p (derived here).
    """
    s = free((1.0, TOUCHING, 0.7), time=3.0, pushers={"contact_arm": arm})
    run = swarmpush.simulate(s, cycles=())
    t = run.pushers["t_s"].to_numpy()
    expected = np.arctan(math.tan(0.7) * np.exp(-arm * FORCE * t / TURN_DRAG))
    assert headings(run) == pytest.approx(expected, abs=STARTS_LATE)
    along = np.diff(run.pushers["x_m"])[-1] / np.diff(t)[-1]
    assert along == pytest.approx(SPEED * math.cos(expected[-1]), rel=5e-3)  # as the heading has it, in that interval


def test_friction_turns_a_disc_into_the_wall() -> None:
    """Sliding friction at the rim turns a disc into the wall as tan(p/2) = tan(p0/2) exp(mu F r t/g).

    The friction mu F sin p has the lever r, so p' = (mu F r/g) sin p, while it slides on (derived here).
    """
    mu, turn_drag, p0 = 0.2, TURN_DRAG / 2, 0.3
    s = free((1.0, TOUCHING, p0), time=0.5, pushers={"turn_drag": turn_drag}, contacts={"pusher_wall": pair(0.0, mu)})
    run = swarmpush.simulate(s, cycles=())
    t, x = run.pushers["t_s"].to_numpy(), run.pushers["x_m"].to_numpy()
    expected = 2 * np.arctan(math.tan(p0 / 2) * np.exp(mu * FORCE * RADIUS * t / turn_drag))
    assert headings(run) == pytest.approx(expected, abs=STARTS_LATE)
    speed = np.diff(x)[-20:].sum() / np.diff(t)[-20:].sum()
    middle = expected[-11]
    assert speed == pytest.approx(SPEED * (math.cos(middle) - mu * math.sin(middle)), rel=1e-3)


def test_a_held_heading_bears_the_friction() -> None:
    """The same wall does not turn a held heading; its drive does the work."""
    s = free((1.0, TOUCHING, 0.3), time=0.5, pushers={}, contacts={"pusher_wall": pair(0.0, 0.2)})
    run = swarmpush.simulate(s.replace(pushers={"heading": "held", "turn_drag": None}), cycles=())
    assert np.ptp(headings(run)) == 0.0


def turned_at_a_wall(arm: float) -> list[float]:
    """Heading after a second of turning along a wall, at three steps."""
    s, turned = free((1.0, TOUCHING, 0.7), time=1.0, pushers={"contact_arm": arm}), []
    steps = choose_step(s.replace(numerics={"step": 4e-3}))
    for _ in range(3):
        turned.append(headings(swarmpush.simulate(s, cycles=(), steps=steps))[-1])
        steps = steps.halved()
    return turned


@pytest.mark.parametrize("arm", [0.004, -0.004])
def test_turning_at_a_wall_converges(arm: float) -> None:
    """The heading at the end of a lean nears the closed form with the step, at first order or better."""
    exact = math.atan(math.tan(0.7) * math.exp(-arm * FORCE / TURN_DRAG))
    errors = np.abs(np.array(turned_at_a_wall(arm)) - exact)
    assert (np.log2(errors[:-1] / errors[1:]) > 0.9).all()
