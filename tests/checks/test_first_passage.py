"""How many turns until heading errors have left their band."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import closed_corridor, follow, turning

import swarmpush
from swarmpush.kinematics.drift import turns_to_leave
from swarmpush.program import Senses

FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000

# Mean number of Gaussian steps until the sum has left +-h/sigma, from the integral equation with 400 Gauss points
# (derived here). The constant 0.5826 of the closed form: Siegmund, "Sequential Analysis" (1985).
EXIT_TURNS = (
    (3.0, 13.085649),
    (5.0, 31.415390),
    (10.0, 112.241363),
    (15.0, 243.067334),
    (20.0, 423.893306),
    (30.0, 935.545249),
)


@pytest.mark.parametrize(("half_width", "turns"), EXIT_TURNS)
def test_exit_turns(half_width: float, turns: float) -> None:
    """The closed form of the mean exit time meets the integral equation's solution."""
    tolerance = 2e-6 if half_width >= 5 else 1e-3  # what the closed form promises; it is asymptotic
    assert turns_to_leave(half_width, half_width, 1.0) == pytest.approx(turns, abs=tolerance)


def test_exit_turns_with_an_uneven_band() -> None:
    """In wide bands the mean exit time is that of Brownian motion, a b/sigma^2 (gambler's ruin: 15/15, 10/20)."""
    for below, above, ruin in ((15.0, 15.0, 225.0), (10.0, 20.0, 200.0)):
        assert turns_to_leave(100 * below, 100 * above, 1.0) == pytest.approx(1e4 * ruin, rel=0.015)
        # the overshoot widens both ends by 0.58 steps: 0.78 % and 0.87 % here
        assert turns_to_leave(100 * below, 100 * above, 1.0) > 1e4 * ruin
    assert turns_to_leave(1.0, 1.0, 0.0) == math.inf


# ---- pushers that really turn with errors --------------------------------------------------------------------------

N_PUSHERS = 1500
MAX_TURNS = 3000
SD = math.radians(1.0)
HALF_BAND = math.radians(15.0)  # turns of 120 deg keep their lap for headings from 0 to 30 deg at the lower wall

# Share that is still inside after so many turns (integral equation, derived here; the series for Brownian motion is in
# Redner, "A Guide to First-Passage Processes", 2001)
SURVIVAL = ((50, 0.944114), (100, 0.760730), (200, 0.460262), (300, 0.276946), (500, 0.100252))


@pytest.fixture(scope="module")
def turns_kept() -> NDArray[np.int64]:
    """For pushers in the middle of the band, the number of the turn with which the heading leaves it."""
    s = closed_corridor(turning(120))
    found = []
    for seed in range(N_PUSHERS):
        hits, _ = follow(s, (-1.0, 0.0, HALF_BAND), MAX_TURNS, seed=seed, senses=Senses(0.0, SD, 0.0, 0.0))
        error = np.cumsum(hits[:, 3] - hits[:, 2] - 2 * math.pi / 3)
        outside = np.abs(error) > HALF_BAND
        assert outside.any(), "the trial is long enough for all"  # 3000 turns are 14 e-folds of the tail
        found.append(int(np.argmax(outside)) + 1)
    return np.array(found)


def test_turns_until_the_band_is_left(turns_kept: NDArray[np.int64]) -> None:
    """Pushers whose turns err by 1 deg leave a band of +-15 deg after 243.07 turns in the mean."""
    error = FOUR_SIGMA * turns_kept.std() / math.sqrt(N_PUSHERS)
    assert turns_kept.mean() == pytest.approx(243.067334, abs=error)
    assert turns_kept.mean() == pytest.approx(turns_to_leave(HALF_BAND, HALF_BAND, SD), abs=error)


@pytest.mark.parametrize(("turns", "share"), SURVIVAL)
def test_survival(turns_kept: NDArray[np.int64], turns: int, share: float) -> None:
    """The share of pushers still in the band falls as the integral equation has it."""
    error = FOUR_SIGMA * math.sqrt(share * (1 - share) / N_PUSHERS)
    assert (turns_kept > turns).mean() == pytest.approx(share, abs=error)


def test_plan_counts_laps_until_drift_out() -> None:
    """The plan for turns of 120 deg that err by 1 deg gives 243.07/3 = 81.0 laps until the heading has drifted out."""
    s = closed_corridor(turning(120), errors={"turn_sd": SD})
    plan = swarmpush.plan(s, n_starts=400)
    # the plan finds the upper edge of the band 0.4 deg early, where laps close too slowly to be seen to close
    assert plan.laps_to_drift_out[0] == pytest.approx(243.067334 / 3, rel=0.04)
