"""What each pusher is about, and what keeps a crew from pushing, told from a run's tables."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.scenario import Scenario

FloatArray = NDArray[np.float64]

# in the order in which they are looked for; the last one is all that remains
STATES = ("idle", "ahead", "locked", "held at a wall", "lost")
HELD_TURNS = 3.0  # times the longest reaction and half turn: touching a wall for longer, a pusher is held there


class Tables(NamedTuple):
    """The tables of a `Run` that states are told from."""

    visits: pd.DataFrame
    block: pd.DataFrame
    pushers: pd.DataFrame
    bumps: pd.DataFrame
    laps: pd.DataFrame


def pusher_states(s: Scenario, run: Tables) -> NDArray[np.object_]:
    """The state of each pusher at each row of `run.pushers`.

    idle: halted or failed. ahead: beyond the block's front. locked: in a lap of the plan that it completes. held at a
    wall: touching one for longer than it could need to turn away, and not sliding along it on purpose. lost: none of
    these, so it is on its way to a lap or out of one.
    """
    table = run.pushers
    t, pusher = table["t_s"].to_numpy(), table["pusher"].to_numpy()
    mode = table["mode"].to_numpy()
    moved = run.block["x_m"].to_numpy() - run.block["x_m"].iloc[0]
    front = s.block_front_at + np.repeat(moved, s.pushers.count)
    walls = run.bumps[~run.bumps["surface"].isin(["pusher", *_block_sides(run.visits)])]
    patience = HELD_TURNS * (
        s.pushers.latency + math.pi / s.pushers.turn_rate + s.pushers.radius / s.pushers.free_speed
    )
    long_ones = walls[walls["t_off_s"] - walls["t_on_s"] > patience]
    is_in_lap = _within(pusher, t, run.laps["pusher"], run.laps["t_start_s"], run.laps["t_end_s"])
    is_held = _within(pusher, t, long_ones["pusher"], long_ones["t_on_s"] + patience, long_ones["t_off_s"])
    conditions = [
        (mode == "stop") | (mode == "failed"),
        table["x_m"].to_numpy() > front,
        is_in_lap,
        is_held & (mode != "slide"),
    ]
    return np.asarray(np.select(conditions, list(STATES[:-1]), default=STATES[-1]).astype(object))


def _block_sides(visits: pd.DataFrame) -> list[str]:
    return list(visits.loc[visits["partner"] == "block", "surface"].unique())


def _within(pusher: FloatArray, t: FloatArray, owner: pd.Series, start: pd.Series, end: pd.Series) -> NDArray[np.bool_]:
    """Whether each pusher is, at each time, in one of its intervals; those of a pusher do not overlap."""
    is_within = np.zeros(len(t), dtype=bool)
    for k in np.unique(owner.to_numpy()):
        mine = (owner == k).to_numpy()
        starts, ends = start.to_numpy()[mine], end.to_numpy()[mine]
        rows = np.flatnonzero(pusher == k)
        at = np.searchsorted(starts, t[rows], side="right") - 1
        is_within[rows] = (at >= 0) & (t[rows] < ends[np.maximum(at, 0)])
    return is_within


def failures(block: pd.DataFrame, states: NDArray[np.object_], n: int) -> pd.DataFrame:
    """What kept the crew from pushing, and when.

    Arguments:
        block: the table of a `Run`. states: from `pusher_states`. n: size of the crew.

    Returns:
        One row per cause: cause; share (of the crew's time, or of all time for what happens to the block, 0 to 1);
        t_first_s, t_last_s: when it first and last happened, to within a row of the path (NaN: never); spells: how
        often it set in; longest_s: its longest spell.
    """
    state = states.reshape(-1, n)
    t = block["t_s"].to_numpy()
    lasted = np.diff(t, prepend=0.0)
    shares = {
        "leaning_too_weak_for_floor": block["leaning_share"] - block["strong_share"],
        "block_jammed_between_walls": block["jammed_share"],
        "ahead_of_block": block["n_ahead"] / n,
        "held_at_wall": (state == "held at a wall").mean(axis=1),
        "in_no_lap": (state == "lost").mean(axis=1),
        "touching_wall": block["n_at_wall"] / n,
        "touching_pusher": block["n_at_pusher"] / n,
        "turning": block["n_turning"] / n,
        "halted": block["n_halted"] / n,
        "dropped_out": block["n_failed"] / n,
    }
    return pd.DataFrame(
        [_cause(name, np.asarray(share, dtype=np.float64), t, lasted) for name, share in shares.items()]
    )


def _cause(name: str, share: FloatArray, t: FloatArray, lasted: FloatArray) -> dict[str, object]:
    happens = (share > 0.0) & (lasted > 0.0)
    edges = np.diff(happens.astype(np.int8), prepend=0, append=0)
    begins, ends = np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)
    total = float(lasted.sum())
    spans = [float(lasted[a:b].sum()) for a, b in zip(begins, ends, strict=True)]
    return {
        "cause": name,
        "share": float((share * lasted).sum()) / total if total > 0.0 else 0.0,
        "t_first_s": float(t[begins[0]] - lasted[begins[0]]) if spans else math.nan,
        "t_last_s": float(t[ends[-1] - 1]) if spans else math.nan,
        "spells": len(spans),
        "longest_s": max(spans, default=0.0),
    }
