"""Which starts end in which lap, and why the others are lost: a table with a row for every start."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from swarmpush.geometry import free_region, is_plain
from swarmpush.kinematics.bounce import FATE_WORDS, Fate
from swarmpush.kinematics.laps import Lap, find_laps
from swarmpush.kinematics.settling import (
    REPELLING,
    Ends,
    Progress,
    closed,
    cycle_of,
    multipliers_of,
    rig_of,
    settle_starts,
    stability,
    trace_seen,
)
from swarmpush.scenario import Scenario

if TYPE_CHECKING:
    import pandas as pd

FloatArray = NDArray[np.float64]

CAUGHT, UNDECIDED = "caught by a lap", "undecided"
RARE = "a rare lap"  # when there are too many to keep an example of each
WORDS = {Fate.LOCKED: CAUGHT, Fate.UNDECIDED: UNDECIDED} | FATE_WORDS  # of the column `fate`
N_ACROSS, N_HEADINGS = 96, 180
MAX_ROUNDS = 1000  # of drawing starts; a region in which less than a thousandth is open is no place to start in


def basin_map(
    s: Scenario,
    *,
    n_across: int = N_ACROSS,
    n_headings: int = N_HEADINGS,
    behind_m: float | None = None,
    n_starts: int | None = None,
    seed: int = 0,
    laps: Sequence[Lap] | None = None,
    workers: int | None = None,
    progress: Progress | None = None,
) -> pd.DataFrame:
    """What becomes of starts, without any error, the block standing still.

    The starts are a regular grid of positions across the channel and headings, at one distance behind the rear face;
    or, with `n_starts`, random ones from the scenario's start region. They are independent of those that `find_laps`
    draws, unless the scenario places its pushers one by one: then those are the starts.

    Arguments:
        s: the scenario. n_across, n_headings: size of the grid; positions in which a pusher has no room are left out.
        behind_m: distance of the grid's pusher centres from the rear face's place at the start, m; default: the
            channel's width, or half the way to the near end if that is less.
        n_starts, seed: number of random starts instead, and the seed of their draws.
        laps: those of `find_laps` by which to number, searched for if not given.
        workers: threads; one per processor unless given. The result does not depend on it.
        progress: called now and then with starts done, starts in all, and a word.

    Returns:
        table: x_m, y_m, heading_rad (-pi to pi on the grid); fate (category, see `WORDS`); lap, its number in `laps`,
        further ones being numbered by how many of these starts they catch, -1 for none; surfaces (category) of the lap.
        A million rows take some 30 MB.

    Raises:
        ValueError: when a pusher has no room `behind_m` behind the rear face, or in the start region.

    >>> import swarmpush
    >>> table = basin_map(swarmpush.load(swarmpush.demo("service_passage")), n_across=3, n_headings=4)
    >>> table[["fate", "lap", "surfaces"]].drop_duplicates().values.tolist()
    [['caught by a lap', 0, 'rear - top - bottom']]
    """
    import pandas as pd

    if n_starts is None:
        starts = _grid(s, n_across, n_headings, behind_m)
    else:
        starts = random_starts(s, n_starts, seed)
    if laps is None:
        laps = find_laps(s)[0]
    ends = settle_starts(s, starts, workers=workers, progress=progress)
    numbers, names = _numbered(s, ends, laps)
    fates = np.where((ends.fates == Fate.LOCKED) & (numbers < 0), np.int8(Fate.UNDECIDED), ends.fates)
    return pd.DataFrame(
        {
            "x_m": starts[:, 0],
            "y_m": starts[:, 1],
            "heading_rad": starts[:, 2],
            "fate": pd.Categorical.from_codes(fates, pd.Index([WORDS[fate] for fate in Fate])),
            "lap": numbers,
            "surfaces": pd.Categorical([*names, None], sorted(set(names)))[numbers],
        }
    )


def random_starts(s: Scenario, n: int, seed: int) -> FloatArray:
    """Starts from the scenario's start region, each as if it were alone; the placed ones where there are such.

    They are spread as `starts.draw_starts` spreads them, but drawn all at once.

    Returns:
        starts: (n, 3) x, y in m and heading in rad.

    Raises:
        ValueError: when the start region has no room.
    """
    if s.start.placed is not None:
        return np.array([(p.x, p.y, p.heading) for p in s.start.placed])
    rng, r = np.random.default_rng(seed), s.pushers.radius
    behind, ahead = (r, s.block.rear_at - r), (s.block_front_at + r, s.channel.length - r)
    stretches = {"behind": [behind], "ahead": [ahead], "anywhere": [behind, ahead]}[s.start.region]
    lengths = np.array([max(high - low, 0.0) for low, high in stretches])
    starts = np.empty((0, 3))
    for _ in range(MAX_ROUNDS):
        along, across, turn = rng.random((n, 3)).T
        along *= lengths.sum()
        is_ahead = along >= lengths[0]
        x = np.where(is_ahead, stretches[-1][0] + along - lengths[0], stretches[0][0] + along)
        y = r + across * (s.channel.width - 2 * r)
        free = _is_free(s, x, y)
        starts = np.vstack([starts, np.column_stack([x, y, turn])[free]])[:n]
        if len(starts) == n:
            break
    else:
        raise ValueError(f'no room for a pusher "{s.start.region}"')
    if s.start.heading is None:
        starts[:, 2] *= 2 * math.pi
    else:
        starts[:, 2] = s.start.heading + s.start.heading_spread * rng.standard_normal(n)
    return starts


def _grid(s: Scenario, n_across: int, n_headings: int, behind_m: float | None) -> FloatArray:
    r, rear, width = s.pushers.radius, s.block.rear_at, s.channel.width
    behind = min(width, (rear + r) / 2) if behind_m is None else behind_m
    y = r + (np.arange(n_across) + 0.5) / n_across * (width - 2 * r)
    y = y[_is_free(s, np.full(n_across, rear - behind), y)] if r <= behind <= rear - r else y[:0]
    if len(y) == 0:
        raise ValueError(f"no pusher has room {behind:.4g} m behind the rear face")
    headings = ((np.arange(n_headings) + 0.5) / n_headings * 2 - 1) * math.pi
    y, headings = (axis.ravel() for axis in np.meshgrid(y, headings, indexing="ij"))
    return np.column_stack([np.full(len(y), rear - behind), y, headings])


def _is_free(s: Scenario, x: FloatArray, y: FloatArray) -> NDArray[np.bool_]:
    """Whether centres are clear of walls, posts and block; in a plain corridor their ranges see to that."""
    if is_plain(s):
        return np.ones(len(x), dtype=np.bool_)
    from shapely import contains_xy, prepare

    region = free_region(s)
    prepare(region)
    return np.asarray(contains_xy(region, x, y))


def _numbered(s: Scenario, ends: Ends, laps: Sequence[Lap]) -> tuple[NDArray[np.int32], list[str]]:
    """Each start's lap by number, and what the numbers stand for; -1 for what does not close after all, or repels.

    A lap that was seen is one of `laps` if it touches the same surfaces in the same order; where several do, because
    the pusher acts differently at them, the one nearest in length.
    """
    rig = rig_of(s)
    examples = {lap.signature: lap for lap in ends.seen}
    names = [" - ".join(cycle_of(lap.surfaces)) for lap in laps]

    def number(signature: int) -> int:
        if signature not in examples:
            names.append(RARE)
            return len(names) - 1
        lap = closed(rig, examples[signature])
        if lap is None:
            return -1
        trace, _, surfaces = trace_seen(rig, lap)
        cycle = " - ".join(cycle_of(surfaces))
        same = [k for k, lap in enumerate(laps) if names[k] == cycle]
        if same:
            return min(same, key=lambda k: abs(laps[k].length_m - trace.length))
        if stability(multipliers_of(trace)) == REPELLING:
            return -1
        names.append(cycle)
        return len(names) - 1

    is_locked = ends.fates == Fate.LOCKED
    signatures, where, counts = np.unique(ends.signatures[is_locked], return_inverse=True, return_counts=True)
    known = np.full(len(signatures), -1, dtype=np.int32)
    for k in np.argsort(-counts, kind="stable"):
        known[k] = number(int(signatures[k]))
    numbers = np.full(len(ends.fates), -1, dtype=np.int32)
    numbers[is_locked] = known[where]
    return numbers, names
