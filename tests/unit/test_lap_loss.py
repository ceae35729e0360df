"""How many laps a pusher keeps its lap: following, counting, estimating."""

from __future__ import annotations

import math

import numpy as np
import pytest

from swarmpush.demos import demo
from swarmpush.kinematics.drift import laps_to_drift_out
from swarmpush.kinematics.lap_loss import LapFollower, errs, estimate_laps, laps_kept
from swarmpush.kinematics.laps import Lap, find_laps
from swarmpush.kinematics.planning import plan
from swarmpush.loading import load
from swarmpush.scenario import Errors, Scenario

TABLE = 1e-3  # relative: quantiles printed to four digits
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000


def erring(**errors: float) -> tuple[Scenario, Lap]:
    """The service passage with these errors only, and its lap."""
    s = load(demo("service_passage")).model_copy(update={"errors": Errors(**errors)})
    return s, find_laps(s, n_starts=100)[0][0]


def follower(s: Scenario, lap: Lap, n: int = 50) -> LapFollower:
    found = LapFollower.of(s, lap, n=n)
    assert found is not None
    return found


# ---- following ----------------------------------------------------------------------------------------------------


def test_a_pusher_without_errors_keeps_its_lap() -> None:
    """Without errors every bump is the lap's for as long as one looks, on every lap of every demo."""
    for name in ("service_passage", "gel_channel"):
        s = load(demo(name))
        stages = [
            stage.model_copy(
                update={
                    "acts": tuple(a.model_copy(update={"spread": 0.0}) if a.act == "depart" else a for a in stage.acts)
                }
            )
            for stage in s.routine.stages
        ]
        s = s.model_copy(update={"routine": s.routine.model_copy(update={"stages": tuple(stages)}), "errors": Errors()})
        for lap in find_laps(s, n_starts=100)[0]:
            assert (follower(s, lap, 3).legs_kept(s.errors, 40) == 40 * len(lap.surfaces)).all()


def test_random_numbers_have_addresses() -> None:
    """Following more pushers, or following them further, leaves the losses already seen as they were."""
    s, lap = erring(turn_sd=0.17)
    few = follower(s, lap, 40).legs_kept(s.errors, 30)
    assert (follower(s, lap, 90).legs_kept(s.errors, 30)[:40] == few).all()
    assert (np.minimum(follower(s, lap, 40).legs_kept(s.errors, 300), 90) == few).all()


def test_larger_errors_lose_sooner() -> None:
    """With the same draws in other sizes, more pushers have left after the same number of laps."""
    s, lap = erring()
    pushers = follower(s, lap, 200)
    shares = [(pushers.legs_kept(Errors(turn_sd=sd), 20) == 60).mean() for sd in (0.05, 0.1, 0.15, 0.2, 0.3)]
    assert shares == sorted(shares, reverse=True)
    assert shares[0] == 1.0
    assert shares[-1] < 0.05


def test_theory_and_following_agree_where_losses_are_rare() -> None:
    """Where departures renew the heading, lost laps are as rare as the errors that leave a leg's band."""
    s, lap = erring(turn_sd=math.radians(5.0))
    kept = laps_kept(s, lap, n=2000, most_legs=2_000_000)
    error = FOUR_SIGMA / math.sqrt(kept.n - kept.censored)  # relative, of an exponential mean
    assert kept.mean == pytest.approx(laps_to_drift_out(s, lap), rel=error)
    assert 0 < kept.censored < kept.n


def test_every_kind_of_error_counts() -> None:
    """Turns, bearings, wandering and curving paths make pushers lose their lap."""
    for errors in ({"turn_sd": 0.3}, {"turn_bias": 0.7}, {"bearing_sd": 0.3}, {"heading_diffusion": 0.4}):
        s, lap = erring(**errors)
        assert laps_kept(s, lap, n=60, most_legs=40_000).mean < 20.0
    s, lap = erring(heading_drift=0.9)
    assert laps_kept(s, lap, n=10, most_legs=10_000).mean < 20.0


def test_without_errors_nothing_is_followed() -> None:
    """A plan without errors or spread keeps its lap for ever."""
    s, lap = erring()
    assert not errs(s)
    assert laps_kept(s, lap).mean == math.inf
    assert laps_kept(s, lap).n == 0
    assert errs(load(demo("gel_channel")).model_copy(update={"errors": Errors()}))  # its routine scatters


# ---- estimating ---------------------------------------------------------------------------------------------------


def test_all_losses_seen() -> None:
    """Three losses after 1, 2 and 3 laps have the mean 2 and Student's interval of +-4.3027/sqrt(3) (any table)."""
    kept = estimate_laps(np.array([1.0, 2.0, 3.0]), np.zeros(3, dtype=bool), 0.95)
    assert (kept.mean, kept.n, kept.censored) == (2.0, 3, 0)
    assert kept.high - kept.mean == pytest.approx(4.3027 / math.sqrt(3), rel=TABLE)
    assert kept.low == 0.0  # no mean is below it


def test_some_losses_seen() -> None:
    """Five losses in 100 laps have the mean 20 and an interval by chi^2 = 23.337 and 3.2470 (12 and 10 degrees)."""
    laps = np.array([5.0, 10.0, 10.0, 15.0, 20.0, 20.0, 20.0])
    kept = estimate_laps(laps, np.array([False] * 5 + [True] * 2), 0.95)
    assert (kept.mean, kept.n, kept.censored) == (20.0, 7, 2)
    assert kept.low == pytest.approx(200 / 23.337, rel=TABLE)
    assert kept.high == pytest.approx(200 / 3.2470, rel=TABLE)
    assert "exponential" in kept.basis


def test_no_loss_seen() -> None:
    """Without a loss there is only a lower end, all laps over -ln(0.025)."""
    kept = estimate_laps(np.full(4, 25.0), np.ones(4, dtype=bool), 0.95)
    assert kept.mean == kept.high == math.inf
    assert kept.low == pytest.approx(100 / -math.log(0.025))


def test_laps_kept_stand_in_the_plan() -> None:
    """Each lap of a plan has its laps kept by theory and, for the most frequent laps, by following."""
    for lap in plan(load(demo("gel_channel")), n_starts=50).to_dict()["laps"]:
        kept = lap["laps_to_drift_out_mc"]
        assert set(kept) == {"mean", "low", "high", "n", "censored", "basis"}
        assert kept["low"] < kept["mean"] < kept["high"] < 1.0
        assert lap["laps_to_drift_out"] < 1.0
