"""Laps along one key of the scenario: where they are, how stable, how wide their bands, and what bounds these."""

from __future__ import annotations

import math
import os
from collections.abc import Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import suppress
from dataclasses import dataclass, field
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from swarmpush.kinematics.band_edges import band_edges
from swarmpush.kinematics.boundary import REAR
from swarmpush.kinematics.laps import Lap, find_laps
from swarmpush.kinematics.settling import (
    Progress,
    Rig,
    Seen,
    closed,
    cycle_of,
    first_hit,
    multipliers_of,
    rig_of,
    settle_starts,
    stability,
    trace_seen,
)
from swarmpush.problems import Problem, ScenarioError
from swarmpush.quantities import to_si
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts
from swarmpush.vary import column_of, unit_at, value_at, with_value

if TYPE_CHECKING:
    import pandas as pd

FloatArray = NDArray[np.float64]

N_STARTS = 1000  # per value; puts the 95 % interval of a share within 0.031
_SAME = 1e-6  # of the scale, and rad: bumps on the rear face closer than this are one and the same

_EMPTY: dict[str, Any] = {
    "lap": -1, "surfaces": "", "n_rear": 0, "period": 0, "rear_y_m": math.nan, "rear_heading_rad": math.nan,
    "multiplier_1": math.nan, "multiplier_2": math.nan, "multiplier_size": math.nan, "stability": "",
    "band_low_rad": math.nan, "band_high_rad": math.nan, "bounded_low_by": "", "bounded_high_by": "",
    "lap_length_m": math.nan, "lap_time_s": math.nan, "share": math.nan, "reason": "",
}  # fmt: skip


def cycle_map(
    s: Scenario,
    key: str,
    values: Iterable[float | str],
    *,
    n_starts: int = N_STARTS,
    workers: int | None = None,
    progress: Progress | None = None,
) -> pd.DataFrame:
    """Find the laps at each value of one key, and follow each to neighbouring values at which no start finds it.

    A lap that no start falls into, because it repels or catches too little, is followed by Newton's method on the
    return map from the value next to it; whole numbers have no neighbours, so there laps are only looked for.

    Arguments:
        s: the scenario. key: see `vary`. values: SI numbers, or texts with a unit ("25 cm"), in order.
        n_starts: starts drawn at each value.
        workers: threads; one per processor unless given. The result does not depend on it.
        progress: called after each value with values done, values in all, and a word.

    Returns:
        table: a row for each value and lap, at least one for each value. The key's value (SI; see `vary.column_of`);
        lap, 0 being the most frequent at this value, -1 if there is none; surfaces, from the bump on the rear face that
        `settling.first_hit` chooses, to which rear_y_m and rear_heading_rad (arrival) belong; n_rear, period (bumps on
        the rear face, and in all, per lap); multiplier_1, multiplier_2 (larger first; of complex ones the real part)
        and multiplier_size (the larger one's magnitude; below 1 the lap attracts); stability; band_low_rad,
        band_high_rad (headings that keep the lap on the leg to that bump); bounded_low_by, bounded_high_by (see
        `band_edges`); lap_length_m, lap_time_s; share of the starts that end in the lap. Bands are unknown (NaN) and
        the share is 0 for a lap that was only followed. reason: why there is no lap, or no valid scenario.

    Raises:
        ScenarioError: when there is no such key, or it holds no number.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage"))
    >>> table = cycle_map(s, "channel.width", ["28 cm", "35 cm"], n_starts=50)
    >>> table[["channel.width_m", "surfaces", "multiplier_1", "reason"]].round(3).values.tolist()[1]
    [0.35, 'rear - top - bottom', -0.268, '']
    >>> table["reason"][0]
    'block.width: the block (300 mm) is wider than the channel (280 mm)'
    """
    import pandas as pd

    if isinstance(value_at(s, key), str | bool | tuple):
        raise ScenarioError(s.about.name, [Problem(key, "does not hold a number")])
    wanted = list(values)
    points: list[_Point] = []
    pool = ThreadPoolExecutor(workers or os.cpu_count())
    try:
        for point in pool.map(lambda value: _point(s, key, value, n_starts), wanted):
            points.append(point)
            if progress:
                progress(len(points), len(wanted), "cycle map")
    finally:
        pool.shutdown(cancel_futures=True)
    if not isinstance(value_at(s, key), int):
        for before, after in [*pairwise(points), *pairwise(points[::-1])]:
            _follow(before, after)
    rows = [{column_of(s, key): point.value} | row for point in points for row in point.rows()]
    return pd.DataFrame(rows, columns=[column_of(s, key), *_EMPTY])


@dataclass(frozen=True)
class _Orbit:
    """A lap at one value: its cycle of surfaces, an example to follow it from (None: not known), its row."""

    cycle: tuple[str, ...]
    seen: Seen | None
    row: dict[str, Any]


@dataclass(frozen=True)
class _Point:
    """One value: SI number, the point world (None: no valid scenario), why there is no lap, the laps."""

    value: float
    rig: Rig | None
    reason: str
    orbits: list[_Orbit] = field(default_factory=list)

    def rows(self) -> list[dict[str, Any]]:
        if not self.orbits:
            return [_EMPTY | {"reason": self.reason}]
        return [_EMPTY | orbit.row | {"lap": k} for k, orbit in enumerate(self.orbits)]


def _point(s: Scenario, key: str, value: float | str, n_starts: int) -> _Point:
    try:
        changed = with_value(s, key, value)
    except ScenarioError as error:
        number = math.nan
        with suppress(ValueError):
            number = to_si(value, unit_at(s, key))
        return _Point(number, None, "; ".join(map(str, error.problems)))
    rig, laps = rig_of(changed), find_laps(changed, n_starts=n_starts)[0]
    seen = _seen(changed, rig, n_starts) if laps else []
    orbits = [_found(rig, lap, seen) for lap in laps]
    return _Point(float(value_at(changed, key)), rig, f"no lap caught any of {n_starts} starts", orbits)


def _seen(s: Scenario, rig: Rig, n_starts: int) -> list[tuple[Seen, tuple[str, ...], float]]:
    """The laps that the starts of `find_laps` fall into, each with its cycle of surfaces and its length."""
    many = s.replace(pushers={"count": n_starts}, start={"placed": None})
    starts = draw_starts(s, 0) if s.start.placed else draw_starts(many, 0, apart=False)
    examples = []
    for seen in settle_starts(s, starts, workers=1).seen:
        trace, _, surfaces = trace_seen(rig, seen)
        examples.append((seen, cycle_of(surfaces), trace.length))
    return examples


def _found(rig: Rig, lap: Lap, examples: list[tuple[Seen, tuple[str, ...], float]]) -> _Orbit:
    cycle = cycle_of(lap.surfaces)
    same = [(abs(length - lap.length_m), seen) for seen, other, length in examples if other == cycle]
    seen = min(same, key=lambda pair: pair[0])[1] if same else None
    k = first_hit(lap.surfaces, lap.hits[:, 1].tolist())
    heading = float(lap.hits[k, 2])
    low, high = lap.leg_bands_rad[k - 1]
    row = _row(lap.surfaces, lap.hits, lap.n_rear, lap.multipliers, lap.length_m, lap.time_s)
    row |= {"share": lap.share, "band_low_rad": heading + low, "band_high_rad": heading + high}
    if seen is not None:
        row["bounded_low_by"], row["bounded_high_by"] = band_edges(rig, lap, seen)
    return _Orbit(cycle, seen, row)


def _row(
    surfaces: Sequence[str], hits: FloatArray, n_rear: int, multipliers: Sequence[complex], length: float, time: float
) -> dict[str, Any]:
    k = first_hit(surfaces, hits[:, 1].tolist())
    first, second = multipliers
    return {
        "surfaces": " - ".join((*surfaces[k:], *surfaces[:k])),
        "n_rear": n_rear,
        "period": len(surfaces),
        "rear_y_m": float(hits[k, 1]),
        "rear_heading_rad": float(math.remainder(hits[k, 2], 2 * math.pi)),
        "multiplier_1": first.real,
        "multiplier_2": second.real,
        "multiplier_size": abs(first),
        "stability": stability(multipliers),
        "lap_length_m": length,
        "lap_time_s": time,
    }


def _follow(before: _Point, after: _Point) -> None:
    """Add to a value those laps of its neighbour's that it lacks and that close there as well."""
    if after.rig is None:
        return
    for orbit in before.orbits:
        if orbit.seen is None or any(orbit.cycle == other.cycle for other in after.orbits):
            continue
        seen = closed(after.rig, orbit.seen)
        if seen is None:
            continue
        trace, hits, surfaces = trace_seen(after.rig, seen)
        if cycle_of(surfaces) == orbit.cycle and not _is_repetition(after.rig, surfaces, hits):
            multipliers = multipliers_of(trace)
            row = _row(surfaces, np.roll(hits, 1, axis=0), seen.n_rear, multipliers, trace.length, trace.time)
            after.orbits.append(_Orbit(orbit.cycle, seen, row | {"share": 0.0}))


def _is_repetition(rig: Rig, surfaces: Sequence[str], hits: FloatArray) -> bool:
    """Whether a lap is a shorter one gone round several times; where one splits in two, Newton's method may find it."""
    y, heading = np.roll(hits[:, 1:3], 1, axis=0)[[name == REAR for name in surfaces]].T
    gaps = np.maximum(abs(y - y[0]) / rig.size, abs(np.sin((heading - heading[0]) / 2)))
    return bool((gaps[1:] < _SAME).any())
