"""Laps kept in spite of errors, pushers that lean, and blocks between walls: the plan against worked numbers."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import G, closed_corridor, dry, pair, rig, turning
from scipy import stats
from test_jamming import DRAWERS, snug, tilt

import swarmpush
from swarmpush.kinematics.drift import DISCRETE_STEP, turns_to_leave
from swarmpush.kinematics.forecast import push_force
from swarmpush.kinematics.lap_loss import LapFollower
from swarmpush.kinematics.laps import find_laps
from swarmpush.kinematics.nudge import impact_nudge, lean_speed
from swarmpush.kinematics.regimes import Regime
from swarmpush.scenario import Scenario

FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000
PRINTED = 0.005  # turns: the values are printed with two decimals

# ---- first passage ------------------------------------------------------------------------------------------------

# Turns of sd 1 until the heading has left +-15, with a steady bias: (H/d) tanh(H d), H = 15 + 0.5826 (derived here from
# Wald's identities; the widening: Siegmund, "Sequential Analysis", 1985). Independent simulations of the sums had given
# 203.1 +- 0.8, 143.4 +- 0.5 and 77.69 +- 0.22.
BIASED = ((0.05, 203.26), (0.1, 142.60), (0.2, 77.61))
TAIL_E_FOLD = 196.8  # turns without bias: 2 (30 + 1.1652)^2/pi^2, from the slowest term of the series for the interval


def exits(bias: float, n: int = 4000) -> NDArray[np.float64]:
    """Turns until sums of normal steps have left +-15, by NumPy alone."""
    rng = np.random.default_rng(7)
    place, turns = np.zeros(n), np.zeros(n)
    inside = np.arange(n)
    while len(inside):
        place[inside] += bias + rng.standard_normal(len(inside))
        turns[inside] += 1
        inside = inside[np.abs(place[inside]) <= 15.0]
    return turns


@pytest.mark.parametrize(("bias", "turns"), BIASED)
def test_exit_turns_with_a_bias(bias: float, turns: float) -> None:
    """A steady bias throws the heading out sooner, as (H/d) tanh(H d/sd^2) says and as sums of normal steps do."""
    assert turns_to_leave(15.0, 15.0, 1.0, bias) == pytest.approx(turns, abs=PRINTED)
    assert turns_to_leave(15.0, 15.0, 1.0, -bias) == turns_to_leave(15.0, 15.0, 1.0, bias)
    found = exits(bias)
    error = FOUR_SIGMA * found.std() / math.sqrt(len(found))
    assert found.mean() == pytest.approx(turns, abs=error + 0.5)  # 0.5: the formula's remainder, 1/4 without bias


def test_limits_of_the_biased_formula() -> None:
    """A vanishing bias gives the unbiased time, a strong one distance over bias, and none of either no end."""
    unbiased = turns_to_leave(15.0, 15.0, 1.0)
    assert turns_to_leave(15.0, 15.0, 1.0, 1e-12) == unbiased
    assert turns_to_leave(15.0, 15.0, 1.0, 1e-5) == pytest.approx(unbiased - 0.25, abs=1e-3)
    assert turns_to_leave(9.0, 15.0, 1.0, 2.0) == pytest.approx((15.0 + DISCRETE_STEP) / 2.0)
    assert turns_to_leave(9.0, 15.0, 0.0, -2.0) == 5.0  # at 10 it is outside
    assert turns_to_leave(9.0, 15.0, 0.0, 0.0) == math.inf


def test_tail_of_the_exit_times() -> None:
    """Late exits die out by a factor e in 196.8 turns, the slowest mode of the widened interval."""
    late = exits(0.0)
    late = late[late > 200] - 200
    assert 2 * (30 + 2 * DISCRETE_STEP) ** 2 / math.pi**2 == pytest.approx(TAIL_E_FOLD, abs=0.05)
    # survivors of 200 turns are close to the slowest mode: the next one is at exp(-8 200/197) of it
    assert late.mean() == pytest.approx(TAIL_E_FOLD, rel=FOUR_SIGMA / math.sqrt(len(late)))


# Clean passes of the corridor lap from the heading 15 deg at the lower wall, when every turn is off by a steady error
# (derived here by ray tracing; each lap turns the heading by three errors).
CLEAN_LAPS = ((119, 5), (118, 3), (121, 13), (122, 7))
ONE_LAP = 1.0  # the plan's lap starts at 14.8 deg, the middle of the band as found, and at the face


@pytest.mark.parametrize(("degrees", "laps"), CLEAN_LAPS)
def test_laps_with_a_steady_error(degrees: int, laps: int) -> None:
    """Pushers that turn by 119, 118, 121, 122 instead of 120 deg make 5, 3, 13, 7 laps and are lost."""
    s = closed_corridor(turning(120), errors={"turn_bias": math.radians(degrees - 120)})
    plan = swarmpush.plan(s, n_starts=200)
    kept = plan.laps_to_drift_out_mc[0]
    assert kept.low == kept.mean == kept.high  # all alike
    assert kept.mean == pytest.approx(laps, abs=ONE_LAP)
    # theory counts until the heading leaves the attracting band, on one side of which the lap is met for a while yet
    assert plan.laps_to_drift_out[0] <= kept.mean + ONE_LAP


def test_pushers_outlive_the_attracting_band() -> None:
    """With turns that err by 1 deg the lap is kept for longer than the 81 laps to the edge of the attracting band.

    From 30 to 60 deg at the lower wall the lap still exists, repelling; a heading that strays there may come back.
    """
    plan = swarmpush.plan(closed_corridor(turning(120), errors={"turn_sd": math.radians(1.0)}), n_starts=200)
    kept = plan.laps_to_drift_out_mc[0]
    assert kept.low > plan.laps_to_drift_out[0]
    assert plan.laps_to_drift_out[0] == pytest.approx(243.067334 / 3, rel=0.04)  # see test_first_passage.py
    # nine turns add up to more than 15 deg for one pusher in a million
    follower = LapFollower.of(plan.scenario, plan.laps[0])
    assert follower is not None
    assert follower.legs_kept(plan.scenario.errors, 3).min() == 9


def test_share_of_laps_kept_is_geometric() -> None:
    """Where departures renew the heading, losses of a lap have no memory: geometric, as many late as early."""
    s = swarmpush.load(swarmpush.demo("service_passage"))
    s = s.model_copy(update={"errors": type(s.errors)(turn_sd=math.radians(8.0))})
    lap = find_laps(s, n_starts=100)[0][0]
    follower = LapFollower.of(s, lap, n=3000)
    assert follower is not None
    laps = follower.legs_kept(s.errors, 200) // 3
    kept = [(laps >= k).sum() for k in (5, 20, 35)]
    early, late = kept[1] / kept[0], kept[2] / kept[1]
    assert early == pytest.approx(late, abs=FOUR_SIGMA * math.sqrt(2 * early * (1 - early) / kept[1]))


def test_noise_budget_of_a_corridor_lap() -> None:
    """What a turn may err for 80 % to keep 60 laps is where the errors of 180 departures are that rarely too large."""
    s = swarmpush.load(swarmpush.demo("service_passage"))
    s = s.model_copy(update={"errors": type(s.errors)()})
    plan = swarmpush.plan(s, n_starts=100)
    budget, bands = plan.noise_budget, plan.laps[0].leg_bands_rad
    assert budget is not None

    def kept(sd: float) -> float:
        return math.prod(float(stats.norm.cdf(high / sd) - stats.norm.cdf(low / sd)) for low, high in bands) ** 60

    limit = budget.turn_sd_rad
    assert kept(limit.low) > 0.8 > kept(limit.high)  # independent departures, derived here


# ---- leaning ------------------------------------------------------------------------------------------------------

# Speed of the block under pushers that lean together, m/s (worked out by hand from max(0, k F - f)/(k g_p + g_b)):
# vibration pushers of 20 mN and 0.15 m/s on a pine block of 27 g; carts of 1 N and 0.15 m/s on a crate of 0.5 kg;
# immersed pushers of 13 nN and 0.3 mm/s on a gel block with 0.46 mN s/m. Believable rigs, printed to two digits.
TOGETHER = (
    ("dry", 0.020, 0.15, 0.027, ((4, 0.001), (6, 0.05), (8, 0.075))),
    ("dry", 1.0, 0.15, 0.5, ((1, 0.0), (2, 0.04), (3, 0.076))),
    ("wet", 13e-9, 3e-4, 1e-7, ((1, 2.6e-5), (2, 4.8e-5), (5, 9.6e-5))),
)


def pushed(kind: str, stall: float, speed: float, mass: float) -> Scenario:
    under = {"floor": {"static_friction": 0.30, "kinetic_friction": 0.30}} if kind == "dry" else {}
    under = under or {"fluid": {"block_drag": 0.46e-3, "block_yaw_drag": 1e-9}}
    return rig(pushers={"stall_force": stall, "free_speed": speed}, block={"mass": mass}, **under)


@pytest.mark.parametrize(("kind", "stall", "speed", "mass", "expected"), TOGETHER)
def test_leaning_together(
    kind: str, stall: float, speed: float, mass: float, expected: tuple[tuple[int, float], ...]
) -> None:
    """Pushers that lean together move the block at the speed that the balance of forces gives."""
    s = pushed(kind, stall, speed, mass)
    for pushers, block_speed in expected:
        assert lean_speed(s, 1.0, pushers) == pytest.approx(block_speed, rel=0.05, abs=1e-9)  # two digits


@pytest.mark.parametrize(("grams", "friction", "pushers"), [(10, 0.30, 1.5), (27, 0.30, 4.0), (64, 0.35, 11.0)])
def test_pushers_to_move(grams: float, friction: float, pushers: float) -> None:
    """Against 20 mN a block of 10, 27, 64 g takes 1.5, 4, 11 pushers, mu m g over the stall force (Coulomb)."""
    s = rig(pushers={"stall_force": 0.020}, block={"mass": grams * 1e-3}, floor=dry(friction))
    force = push_force(s)
    assert force.pushers_to_move == pytest.approx(pushers, rel=0.02)  # printed to two digits
    assert force.pushers_to_move_high == pytest.approx(4 * force.pushers_to_move_low)


@pytest.mark.parametrize(("m", "e", "big", "way"), [(0.007, 0.3, 0.027, 0.274e-3), (0.20, 0.2, 0.50, 0.449e-3)])
def test_one_hit_is_nearly_nothing(m: float, e: float, big: float, way: float) -> None:
    """One impact at 0.15 m/s slides a block on mu = 0.3 by [m v (1 + e)/(m + M)]^2/(2 mu g): 0.27 and 0.45 mm."""
    s = rig(pushers={"mass": m}, block={"mass": big}, floor=dry(0.3), contacts={"pusher_block": pair(e)})
    assert impact_nudge(s, 0.15) == pytest.approx(way, rel=0.002)  # three digits
    assert impact_nudge(s, 0.15) == pytest.approx((m * 0.15 * (1 + e) / (m + big)) ** 2 / (2 * 0.3 * G))


# ---- blocks between walls -----------------------------------------------------------------------------------------


def regimes(s: Scenario) -> dict[str, Regime]:
    return {r.name: r for r in swarmpush.plan(s, n_starts=1).regime}


@pytest.mark.parametrize(("length", "width", "channel", "friction", "tilt_deg", "spacing", "jams_at"), DRAWERS)
def test_drawer_rule(
    length: float,
    width: float,
    channel: float,
    friction: float,
    tilt_deg: float | None,
    spacing: float | None,
    jams_at: float,
) -> None:
    """A push inside the face cannot jam a snug block when b/l < 1/mu, and the plan says how much an edge push loses."""
    wedging = regimes(snug(length, width, channel, friction))["wedging"]
    assert (jams_at > width / 2) == (not wedging.is_at_risk)
    assert wedging.value == pytest.approx(friction * width / length)
    if not wedging.is_at_risk:
        assert f"{wedging.value:.0%}" in wedging.meaning


def test_diagonal_rule() -> None:
    """A block touches both walls at the tilt of l sin(phi) + b cos(phi) = w; above its diagonal it turns round."""
    found = regimes(snug(0.10, 0.08, 0.082, 0.3))["diagonal"]
    assert f"{math.degrees(tilt(0.10, 0.08, 0.082)):.2g} deg" in found.meaning
    assert math.degrees(tilt(0.10, 0.08, 0.082)) == pytest.approx(1.1553118, abs=1e-7)
    assert found.value == pytest.approx(math.hypot(0.10, 0.08) / 0.082)
    assert not found.is_at_risk
    assert regimes(snug(0.03, 0.04, 0.0501, 0.3))["diagonal"].value < 1.0
    assert regimes(snug(0.03, 0.04, 0.0501, 0.3))["diagonal"].is_at_risk
    assert not regimes(snug(0.03, 0.04, 0.0499, 0.0))["diagonal"].is_at_risk


@pytest.mark.parametrize(("friction", "wedges"), [(0.5, True), (0.4, False)])
def test_wedging_without_a_push(friction: float, wedges: bool) -> None:
    """Corners D = 0.0457821 m apart hold a block of 0.05 x 0.10 m in 0.102 m by friction alone from mu = D/w = 0.45 on.

    Source of the argument: Whitney, J. Dyn. Syst. Meas. Control 104 (1982) 65; the numbers were worked out here.
    """
    phi = tilt(0.05, 0.10, 0.102)
    assert 0.05 * math.cos(phi) - 0.10 * math.sin(phi) == pytest.approx(0.0457821, abs=1e-7)  # digits printed
    found = regimes(snug(0.05, 0.10, 0.102, friction))["diagonal"]
    assert found.is_at_risk == wedges
    assert ("cornerwise" in found.meaning) == wedges
