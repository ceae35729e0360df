"""Numbers that tell whether a run went as a plan takes for granted: pure functions of a run's tables."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.dynamics.bumps import LapRows
from swarmpush.kinematics.boundary import REAR
from swarmpush.kinematics.laps import Lap

FloatArray = NDArray[np.float64]

LEAST_PAIRS = 12  # of strikes in a row, below which their regression says nothing
LEAST_PER_PUSHER = 3  # its own mean takes one of them
SAME_HEADING = 1e-6  # rad; headings that scatter less do so by rounding, and have no regression
LEAST_SCATTERED = 0.25  # of the strikes must be off their pusher's median
IS_MOVING = 0.01  # of the free speed
LAPS_TO_CATCH = 5.0  # lap times that a run must last before its pushers can be said to have found no lap


def lap_ends(bumps: pd.DataFrame, lap: Lap, passes: LapRows) -> pd.DataFrame:
    """The strikes at both ends of each completed pass round one lap.

    Arguments:
        bumps: from `find_bumps`. lap: of the plan. passes: its passes, from `lap_rows`.

    Returns:
        One row per pass: pusher, y_m where its last strike was, and before_rad, after_rad: by how much the headings of
        its first and its last strike differ from the plan's, within half a turn.
    """
    pusher, y, heading = (bumps[name].to_numpy() for name in ("pusher", "y_m", "heading_rad"))
    return pd.DataFrame(
        {
            "pusher": pusher[passes.last],
            "y_m": y[passes.last],
            "before_rad": _half_turn(heading[passes.first] - lap.rear_heading_rad),
            "after_rad": _half_turn(heading[passes.last] - lap.rear_heading_rad),
        }
    )


def _half_turn(angle: FloatArray) -> FloatArray:
    return np.asarray(np.remainder(angle + math.pi, 2 * math.pi) - math.pi)


def heading_growth(ends: pd.DataFrame) -> float:
    """By which factor a deviation of heading grows from strike to strike: 0 forgotten, 1 kept, more than 1 growing.

    The slope r of a regression of the later on the earlier deviation, each pusher about its own means, and its bias
    taken out: with n pairs of k pushers and a true factor g it is low by (1 + g) k/n for the means and by 2 g/n for the
    slope itself, so g = (r + k/n)/(1 - (k + 2)/n). (With one pusher the bias is (1 + 3 g)/n: Kendall, Biometrika 41
    (1954) 403; Marriott and Pope, ibid. 390; for several worked out here.)

    Arguments:
        ends: from `lap_ends`. Pushers with fewer than 3 passes are left out.

    Returns:
        The factor; NaN with fewer than 12 pairs, or where three quarters of the headings are alike.
    """
    by_pusher = ends.groupby("pusher")
    ends = ends[by_pusher["before_rad"].transform("size") >= LEAST_PER_PUSHER]
    n, k = len(ends), ends["pusher"].nunique()
    if n < LEAST_PAIRS:
        return math.nan
    pairs = ends[["before_rad", "after_rad"]]
    usual = ends.groupby("pusher")["before_rad"].transform("median")
    if ((pairs["before_rad"] - usual).abs() > SAME_HEADING).mean() <= LEAST_SCATTERED:
        return math.nan  # a slope would hang on single strikes, such as the first one on a lap without errors
    before, after = (pairs - pairs.groupby(ends["pusher"]).transform("mean")).to_numpy().T
    slope = float(before @ after) / float(before @ before)
    return (slope + k / n) / (1.0 - (k + 2) / n)


def share_in_band(bumps: pd.DataFrame, lap: Lap, passes: LapRows) -> float:
    """Share of strikes out of a lap that keep the lap: on its route, and under a heading within its band.

    Counted is each strike that follows on one which has closed the lap, however the pusher got there, unless it has
    bumped into another pusher on the way. To take only completed laps would leave out those that errors have ended.

    Arguments:
        bumps: from `find_bumps`. lap: of the plan. passes: its passes, from `lap_rows`.

    Returns:
        The share, from 0 to 1; NaN if no strike is counted.
    """
    ends, closed = set(passes.last.tolist()), set(passes.first.tolist())
    low, high = lap.leg_bands_rad[-1]
    n_kept = n_counted = 0
    begun: int | None = None  # row of the last strike, if it has closed the lap and nobody was met since
    pusher, heading = bumps["pusher"].to_numpy(), bumps["heading_rad"].to_numpy()
    for row, surface in enumerate(bumps["surface"].to_numpy()):
        if surface == "pusher" or (begun is not None and pusher[begun] != pusher[row]):
            begun = None
        if surface != REAR:
            continue
        if begun is not None:
            off = math.remainder(heading[row] - lap.rear_heading_rad, 2 * math.pi)
            n_kept += begun in closed and low <= off <= high
            n_counted += 1
        begun = row if row in ends else None
    return n_kept / n_counted if n_counted else math.nan


def moving_alone_share(block: pd.DataFrame, visits: pd.DataFrame, free_speed_m_s: float) -> float:
    """Share of time in which the struck block moves along the channel while no pusher touches it, 0 to 1.

    Told from the rows of the path: moving is faster than a hundredth of the free speed.

    Arguments:
        block, visits: tables of a `Run`. free_speed_m_s: of the pushers.

    Returns:
        The share; NaN for a path without a row after the start.
    """
    rows = block[block["t_s"] > 0.0]
    if not len(rows):
        return math.nan
    on_block = (visits["pusher"] >= 0) & (visits["partner"] == "block") & ~visits["surface"].str.startswith("block ")
    on, off = (np.sort(visits.loc[on_block, name].to_numpy()) for name in ("t_on_s", "t_off_s"))
    t = rows["t_s"].to_numpy()
    n_touching = np.searchsorted(on, t, side="right") - np.searchsorted(off, t, side="right")
    is_moving = rows["vx_m_s"].abs().to_numpy() > IS_MOVING * free_speed_m_s
    return float(np.mean(is_moving & (n_touching == 0)))


def yaw_rms(block: pd.DataFrame) -> float:
    """Root of the mean square yaw along the path, rad; turning right round counts as standing straight."""
    return float(np.sqrt(np.mean(_half_turn(block["yaw_rad"].to_numpy()) ** 2)))


def reacting_share(pushers: pd.DataFrame) -> float:
    """Share of the crew's time spent in reacting to bumps and in turning, 0 to 1; NaN for a path without rows."""
    modes = pushers.loc[pushers["t_s"] > 0.0, "mode"]
    return float(modes.isin(["react", "turn"]).mean()) if len(modes) else math.nan


def strong_share(block: pd.DataFrame) -> float:
    """Share of the time with pushers leaning in which the block moves or they push harder than its floor holds.

    From 0 to 1; NaN if nobody ever leans.
    """
    lasted = np.diff(block["t_s"].to_numpy(), prepend=0.0)
    leaning = float(block["leaning_share"].to_numpy() @ lasted)
    return float(block["strong_share"].to_numpy() @ lasted) / leaning if leaning > 0.0 else math.nan


def bumps_between_pushers(bumps: pd.DataFrame) -> float:
    """Share of all bumps that are bumps into another pusher, 0 to 1; NaN without bumps."""
    return float((bumps["surface"] == "pusher").mean()) if len(bumps) else math.nan
