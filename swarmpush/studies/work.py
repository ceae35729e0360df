"""What a worker does: the runs of one chunk of a study."""

from __future__ import annotations

import json
import time
from collections.abc import Callable, Sequence
from contextlib import suppress
from dataclasses import dataclass, field
from functools import lru_cache
from itertools import groupby
from typing import Any, NamedTuple

from swarmpush.auditing.replicates import Stopped, replicate_seed
from swarmpush.dynamics.steps import choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.laps import Lap, find_laps
from swarmpush.problems import ScenarioError
from swarmpush.scenario import Scenario
from swarmpush.studies.study import Study

WHOLE_POINT = -1  # replicate of a failure that is the point's, not a run's
LAPS_KEPT = 8  # scenarios whose laps are at hand, since the next chunk often goes on with the same point
WARM_STEPS = 50  # of the run that has everything compiled

Row = dict[str, Any]


class RunKey(NamedTuple):
    """One run of a study: its point and its replicate, both counted from 0."""

    point: int
    replicate: int


@dataclass(frozen=True)
class Failure:
    """A run that gave no row, or a point that makes no scenario (replicate `WHOLE_POINT`).

    seed: of the run. error, message: kind and text of the exception. tables: the scenario as JSON, from which
    `loading.from_tables` makes it again; "" where there is none.
    """

    point: int
    replicate: int
    seed: int
    error: str
    message: str
    tables: str


@dataclass
class Made:
    """What a chunk gave: rows of finished runs, failures, and the time it took."""

    rows: list[Row] = field(default_factory=list)
    failures: list[Failure] = field(default_factory=list)
    seconds: float = 0.0


def make_runs(study: Study, keys: Sequence[RunKey], is_called_off: Callable[[], bool]) -> Made:
    """Make runs of a study, one after the other; a run that fails is noted and does not stop the rest.

    Arguments:
        study: what is run. keys: the runs; those of a point in a row, so that its laps are looked for once.
        is_called_off: asked now and then, some times a second; once it says so, the work ends.

    Returns:
        What was made; when called off, only the runs that had ended.
    """
    made, begin = Made(), time.perf_counter()
    try:
        for point, of_point in groupby(keys, key=lambda key: key.point):
            _run_point(study, point, [key.replicate for key in of_point], made, is_called_off)
    except Stopped:
        pass
    made.seconds = time.perf_counter() - begin
    return made


def _run_point(
    study: Study, point: int, replicates: Sequence[int], made: Made, is_called_off: Callable[[], bool]
) -> None:
    def look_up(_: float) -> None:
        if is_called_off():
            raise Stopped

    look_up(0.0)
    s = None
    try:
        s = study.scenario(point)
        laps = _laps_of(s)
    except Exception as error:
        made.failures.append(failure(RunKey(point, WHOLE_POINT), study.seed, error, s))
        return
    for replicate in replicates:
        look_up(0.0)
        seed = replicate_seed(study.seed, replicate)
        try:
            run = simulate(s, seed=seed, cycles=tuple(lap.surfaces for lap in laps), progress=look_up)
            row = run.summary(laps[0] if laps else None)
        except Stopped:
            raise
        except Exception as error:
            made.failures.append(failure(RunKey(point, replicate), seed, error, s))
        else:
            made.rows.append({"point": point, "replicate": replicate, "seed": seed, **row})


@lru_cache(LAPS_KEPT)
def _laps_of(s: Scenario) -> tuple[Lap, ...]:
    return find_laps(s)[0]


def failure(key: RunKey, seed: int, error: Exception, s: Scenario | None) -> Failure:
    """The record of an exception in a run."""
    message = "; ".join(map(str, error.problems)) if isinstance(error, ScenarioError) else str(error)
    tables = json.dumps(s.to_tables()) if s else ""
    return Failure(key.point, key.replicate, seed, type(error).__name__, message, tables)


def warm_up(base: Scenario) -> None:
    """Have everything compiled that runs need, so that other workers find it in the cache.

    What goes wrong here goes wrong in the runs as well, where it is recorded.
    """
    with suppress(Exception):
        laps = find_laps(base)[0]
        short = base.replace(goal={"time_limit": WARM_STEPS * choose_step(base).dt_s})
        simulate(short, cycles=tuple(lap.surfaces for lap in laps)).summary(laps[0] if laps else None)
