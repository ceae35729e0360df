"""From visits to bumps, strikes and laps: pure functions of the visit table.

A pusher that rebounds a little and comes back at once makes several visits, yet bumps into the surface once.
Consecutive visits of a pusher to one surface are therefore one bump, and so are visits with little time between
them, whatever it has touched meanwhile: squeezed between the block and a neighbour it rattles at a rate that says more
of the time step than of the rig. A bump on the rear face is a strike; and a lap is a run of bumps on the surfaces of a
planned lap, from one strike to the strike that closes it.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pandas as pd

from swarmpush.kinematics.boundary import REAR
from swarmpush.kinematics.laps import IN_THE_OPEN

LAP_COLUMNS = {"pusher": np.int64, "t_start_s": np.float64, "t_end_s": np.float64, "n_strikes": np.int64}


def find_bumps(visits: pd.DataFrame, apart_s: float = 0.0) -> pd.DataFrame:
    """Gather visits into bumps.

    Arguments:
        visits: the table of a `Run`.
        apart_s: a pusher that is back at a surface within this time has not bumped into it anew.

    Returns:
        One row per bump in order of pusher and time: pusher, surface ("pusher" for another pusher), t_on_s, t_off_s,
        impact_Ns, lean_Ns (summed), x_m, y_m, approach_m_s and heading_rad (of the first touch; NaN for a pusher that
        another one's visit is entered for).
    """
    touches = visits[visits["pusher"] >= 0]
    between = touches[touches["partner"] == "pusher"]
    # a visit between pushers is entered once, by the first; the second has bumped as well
    seconds = between.assign(pusher=between["other_pusher"], x_m=np.nan, y_m=np.nan, heading_rad=np.nan)
    both = pd.concat([touches, seconds], ignore_index=True) if len(seconds) else touches
    both = both.sort_values(["pusher", "t_on_s"], kind="stable")
    number = _bump_numbers(both, apart_s)
    first = both.iloc[np.unique(number, return_index=True)[1]]
    ends = both["t_off_s"].groupby(number).max()
    sums = both[["impact_Ns", "lean_Ns"]].groupby(number).sum()
    return pd.DataFrame(
        {
            "pusher": first["pusher"].to_numpy(),
            "surface": first["surface"].to_numpy(),
            "t_on_s": first["t_on_s"].to_numpy(),
            "t_off_s": ends.to_numpy(),
            "impact_Ns": sums["impact_Ns"].to_numpy(),
            "lean_Ns": sums["lean_Ns"].to_numpy(),
            "x_m": first["x_m"].to_numpy(),
            "y_m": first["y_m"].to_numpy(),
            "approach_m_s": first["approach_m_s"].to_numpy(),
            "heading_rad": first["heading_rad"].to_numpy(),
        }
    )


def _bump_numbers(touches: pd.DataFrame, apart_s: float) -> np.ndarray:
    """Number of the bump to which each touch belongs; touches in order of pusher and time."""
    numbers = np.zeros(len(touches), dtype=np.int64)
    latest: dict[tuple[int, str], tuple[int, float]] = {}  # by pusher and surface: number and end of the last bump
    before, n_bumps = None, 0
    columns = (touches[name].to_numpy() for name in ("pusher", "surface", "t_on_s", "t_off_s"))
    for k, (pusher, surface, t_on, t_off) in enumerate(zip(*columns, strict=True)):
        place = pusher, surface
        number, end = latest.get(place, (-1, -np.inf))
        if number < 0 or (before != place and t_on - end >= apart_s):
            number, end, n_bumps = n_bumps, -np.inf, n_bumps + 1
        latest[place] = number, max(end, t_off)
        numbers[k], before = number, place
    return numbers


def find_completed_laps(bumps: pd.DataFrame, cycles: Iterable[tuple[str, ...]]) -> pd.DataFrame:
    """The planned laps that pushers completed.

    Arguments:
        bumps: from `find_bumps`.
        cycles: surfaces of each planned lap, from the rear face.

    Returns:
        One row per lap: pusher, t_start_s, t_end_s, n_strikes.
    """
    surface, pusher, t_on = (bumps[name].to_numpy() for name in ("surface", "pusher", "t_on_s"))
    found: list[pd.DataFrame] = []
    for cycle in dict.fromkeys(_as_bumped(cycle) for cycle in cycles):
        length = len(cycle)
        n = len(surface) - length
        if n <= 0:
            continue
        is_lap = pusher[:n] == pusher[length:]
        for k, name in enumerate((*cycle, REAR)):
            is_lap &= surface[k : n + k] == name
        at = np.flatnonzero(is_lap)
        found.append(
            pd.DataFrame(
                {
                    "pusher": pusher[at],
                    "t_start_s": t_on[at],
                    "t_end_s": t_on[at + length],
                    "n_strikes": np.full(len(at), cycle.count(REAR)),
                }
            )
        )
    if not found:
        return pd.DataFrame({name: pd.Series(dtype=kind) for name, kind in LAP_COLUMNS.items()})
    laps = pd.concat(found).sort_values(["pusher", "t_start_s", "t_end_s"], kind="stable")
    return _one_after_another(laps)


def _one_after_another(laps: pd.DataFrame) -> pd.DataFrame:
    """The laps that begin after the pusher's last one has ended, so that no time counts twice."""
    is_kept, last, free_from = [], -1, 0.0
    for pusher, start, end in zip(laps["pusher"], laps["t_start_s"], laps["t_end_s"], strict=True):
        is_kept.append(pusher != last or start >= free_from)
        if is_kept[-1]:
            last, free_from = pusher, end
    return laps[np.array(is_kept, dtype=bool)].reset_index(drop=True)


def _as_bumped(cycle: tuple[str, ...]) -> tuple[str, ...]:
    """A planned lap as `find_bumps` would see it: bumps repeated at once taken as one, and gone round once only."""
    cycle = tuple(name for name in cycle if name != IN_THE_OPEN)
    # of alike neighbours the last is kept; the end of the lap meets its beginning
    merged = tuple(name for k, name in enumerate(cycle) if name != cycle[(k + 1) % len(cycle)]) or cycle[:1]
    for n in range(1, len(merged) + 1):
        if len(merged) % n == 0 and merged == merged[:n] * (len(merged) // n):
            return merged[:n]
    return merged
