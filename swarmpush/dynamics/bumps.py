"""From visits to bumps, strikes and laps: pure functions of the visit table.

A pusher that rebounds a little and comes back at once makes several visits, yet bumps into the surface once.
Consecutive visits of a pusher to one surface are therefore one bump, and so are visits with little time between
them, whatever it has touched meanwhile: squeezed between the block and a neighbour it rattles at a rate that says more
of the time step than of the rig. A bump on the rear face is a strike; and a lap is a run of bumps on the surfaces of a
planned lap, from one strike to the strike that closes it.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any, NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.kinematics.boundary import REAR
from swarmpush.kinematics.laps import IN_THE_OPEN

BUMP_COLUMNS = (
    "pusher", "surface", "t_on_s", "t_off_s", "impact_Ns", "lean_Ns", "x_m", "y_m", "approach_m_s", "heading_rad"
)  # fmt: skip
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
    columns = {name: visits[name].to_numpy() for name in ("partner", "other_pusher", *BUMP_COLUMNS)}
    of_pusher = np.flatnonzero(columns["pusher"] >= 0)
    between = of_pusher[columns["partner"][of_pusher] == "pusher"]
    # a visit between pushers is entered once, by the first; the second has bumped as well
    touches = {name: np.concatenate([columns[name][of_pusher], columns[name][between]]) for name in BUMP_COLUMNS}
    n = len(of_pusher)
    touches["pusher"][n:] = columns["other_pusher"][between]
    for name in ("x_m", "y_m", "heading_rad"):
        touches[name][n:] = np.nan
    order = np.lexsort([touches["t_on_s"], touches["pusher"]])
    touches = {name: values[order] for name, values in touches.items()}
    number = _bump_numbers(touches, apart_s)
    first = np.unique(number, return_index=True)[1]
    bumps = {name: values[first] for name, values in touches.items()}
    np.maximum.at(bumps["t_off_s"], number, touches["t_off_s"])
    for name in ("impact_Ns", "lean_Ns"):
        bumps[name] = np.bincount(number, touches[name], minlength=len(first))
    return pd.DataFrame(bumps)


def _bump_numbers(touches: dict[str, NDArray[Any]], apart_s: float) -> NDArray[np.int64]:
    """Number of the bump to which each touch belongs; touches in order of pusher and time."""
    numbers = np.zeros(len(touches["pusher"]), dtype=np.int64)
    latest: dict[tuple[int, str], tuple[int, float]] = {}  # by pusher and surface: number and end of the last bump
    before, n_bumps = None, 0
    # plain values are quicker
    columns = (touches[name].tolist() for name in ("pusher", "surface", "t_on_s", "t_off_s"))
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
    laps = lap_rows(bumps, cycles)
    pusher, t_on = bumps["pusher"].to_numpy(), bumps["t_on_s"].to_numpy()
    columns = (pusher[laps.first], t_on[laps.first], t_on[laps.last], laps.n_strikes)
    return pd.DataFrame(
        {name: values.astype(kind) for (name, kind), values in zip(LAP_COLUMNS.items(), columns, strict=True)}
    )


class LapRows(NamedTuple):
    """Rows of a table of bumps between which a lap was completed, (n,) each, and the strikes that each lap has."""

    first: NDArray[np.int64]
    last: NDArray[np.int64]
    n_strikes: NDArray[np.int64]


def lap_rows(bumps: pd.DataFrame, cycles: Iterable[tuple[str, ...]]) -> LapRows:
    """The strikes that begin and close the planned laps that pushers completed, in order of pusher and time.

    Arguments:
        bumps, cycles: see `find_completed_laps`.
    """
    surface, pusher = bumps["surface"].to_numpy(), bumps["pusher"].to_numpy()
    found = []
    for cycle in dict.fromkeys(_as_bumped(cycle) for cycle in cycles):
        length = len(cycle)
        n = len(surface) - length
        if n <= 0:
            continue
        is_lap = pusher[:n] == pusher[length:]
        for k, name in enumerate((*cycle, REAR)):
            is_lap &= surface[k : n + k] == name
        found += [(first, first + length, cycle.count(REAR)) for first in np.flatnonzero(is_lap).tolist()]
    free_from, last_pusher, kept = 0, -1, []
    for first, last, n_strikes in sorted(found):
        # a lap begins after the pusher's last one has ended, so that no time counts twice
        if pusher[first] != last_pusher or first >= free_from:
            kept.append((first, last, n_strikes))
            free_from, last_pusher = last, pusher[first]
    return LapRows(*np.array(kept, dtype=np.int64).reshape(-1, 3).T)


def _as_bumped(cycle: tuple[str, ...]) -> tuple[str, ...]:
    """A planned lap as `find_bumps` would see it: bumps repeated at once taken as one, and gone round once only."""
    cycle = tuple(name for name in cycle if name != IN_THE_OPEN)
    # of alike neighbours the last is kept; the end of the lap meets its beginning
    merged = tuple(name for k, name in enumerate(cycle) if name != cycle[(k + 1) % len(cycle)]) or cycle[:1]
    for n in range(1, len(merged) + 1):
        if len(merged) % n == 0 and merged == merged[:n] * (len(merged) // n):
            return merged[:n]
    return merged
