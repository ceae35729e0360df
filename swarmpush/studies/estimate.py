"""What a study will cost, before it starts: runs, time and disk."""

from __future__ import annotations

import math
import os
import time
from dataclasses import dataclass

import numpy as np

from swarmpush.dynamics.steps import choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.laps import find_laps
from swarmpush.problems import Problem, ScenarioError
from swarmpush.scenario import Scenario
from swarmpush.studies.study import Study

N_TIMED = 3  # points that are run once: the middle one, and one to either side
N_TRIED = 30  # points near those, until one makes a valid scenario
WARM_UP = 100  # steps; they load or compile the inner loops, which must not count

# A column of numbers takes 8 bytes to a value. Compression takes a third off that (200 bytes to a row of 37 numbers
# were measured for a thousand runs of two demos), which pays for headers unless a part holds only a few runs.
BYTES_PER_VALUE = 8
KEY_COLUMNS = 3  # point, replicate, seed


@dataclass(frozen=True)
class Size:
    """How large a study is. least_runs, most_runs: they differ where replicates are added to a point as needed."""

    n_points: int
    least_runs: int
    most_runs: int


@dataclass(frozen=True)
class Cost:
    """What a study will take.

    size: its runs. run_s, plan_s: mean time of a run, and of finding a point's laps, over the points timed.
    slowest_s: the longest run among them. least_s, most_s: of the whole study on so many workers.
    least_bytes, most_bytes: of its results. workers: that share the work.
    """

    size: Size
    run_s: float
    plan_s: float
    slowest_s: float
    least_s: float
    most_s: float
    least_bytes: int
    most_bytes: int
    workers: int


def size(study: Study) -> Size:
    """Points and runs of a study."""
    n = len(study.points)
    return Size(n, n * study.counts[0], n * study.counts[-1])


def estimate(study: Study, workers: int | None = None) -> Cost:
    """Time and disk that a study will take, from a few of its runs, which are made for this.

    Runs of other points may take much longer or shorter: their time grows with the crew and the time limit.

    Arguments:
        study: the study. workers: that will share the runs; one per processor unless given.

    Raises:
        ScenarioError: when no point near those to be timed makes a valid scenario.
    """
    scenarios = _some_scenarios(study)
    first = scenarios[0]
    simulate(first.replace(goal={"time_limit": min(first.goal.time_limit, WARM_UP * choose_step(first).dt_s)}))
    find_laps(first)
    run_times, plan_times = [], []
    n_values = KEY_COLUMNS
    for s in scenarios:
        start = time.perf_counter()
        laps = find_laps(s)[0]
        planned = time.perf_counter()
        run = simulate(s, seed=study.seed, cycles=tuple(lap.surfaces for lap in laps))
        summary = run.summary(laps[0] if laps else None)
        run_times.append(time.perf_counter() - planned)
        plan_times.append(planned - start)
        n_values = KEY_COLUMNS + len(summary)
    run_s, plan_s = float(np.mean(run_times)), float(np.mean(plan_times))
    runs, n_workers = size(study), workers or os.cpu_count() or 1

    def seconds(n: int) -> float:
        # no run is split between workers
        return (run_s * math.ceil(n / n_workers)) + plan_s * math.ceil(runs.n_points / n_workers)

    return Cost(
        size=runs,
        run_s=run_s,
        plan_s=plan_s,
        slowest_s=max(run_times),
        least_s=seconds(runs.least_runs),
        most_s=seconds(runs.most_runs),
        least_bytes=runs.least_runs * n_values * BYTES_PER_VALUE,
        most_bytes=runs.most_runs * n_values * BYTES_PER_VALUE,
        workers=n_workers,
    )


def _some_scenarios(study: Study) -> list[Scenario]:
    """Scenarios of points in the middle of the study and to either side, or after these where they are invalid."""
    n = len(study.points)
    scenarios: dict[int, Scenario] = {}
    reasons: list[Problem] = []
    for share in np.linspace(0.0, 1.0, 2 * N_TIMED + 1)[1::2]:
        start = int(share * n)
        for point in range(start, min(start + N_TRIED, n)):
            try:
                scenarios.setdefault(point, study.scenario(point))
                break
            except ScenarioError as error:
                reasons += error.problems
    if not scenarios:
        raise ScenarioError(
            study.name, [Problem("", "no point tried makes a valid scenario; for example"), *reasons[:3]]
        )
    return list(scenarios.values())
