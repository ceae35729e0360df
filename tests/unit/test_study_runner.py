"""Running studies: what is made, whoever makes it and whatever comes between."""

from __future__ import annotations

import errno
import json
import math
import multiprocessing
import os
import random
import signal
import subprocess
import sys
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from unittest.mock import patch

import pandas as pd
import pytest
from small_studies import DeadlyStudy, harmful, quick_base, small_study

from swarmpush.auditing.replicates import replicate_seeds
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.planning import plan
from swarmpush.loading import from_tables
from swarmpush.output import OutputError
from swarmpush.studies import pools, runner, store
from swarmpush.studies.agenda import Agenda, is_enough
from swarmpush.studies.pools import LocalPool, Pool, PoolError
from swarmpush.studies.runner import run_study
from swarmpush.studies.store import Summary, forget_failures, read_failures, read_runs
from swarmpush.studies.study import Stop, Study
from swarmpush.studies.work import WHOLE_POINT, Made, RunKey, make_runs

SPEED = "block_speed_m_s"
NOTHING_KNOWN = pd.DataFrame({"point": [], "replicate": [], "value": []})


class HandyPool(Pool):
    """Makes runs in this process, when asked for results; the last chunk given is the first to be made."""

    chunk_s = 0.05
    most_losses = 3

    def __init__(self, study: Study, loses: Callable[[Sequence[RunKey]], bool] = lambda _: False) -> None:
        self._study, self._loses = study, loses
        self._waiting: deque[tuple[int, Sequence[RunKey]]] = deque()
        self.chunks: list[Sequence[RunKey]] = []
        self._is_called_off = self.is_closed = False

    @property
    def n_workers(self) -> int:
        return 2

    @property
    def capacity(self) -> int:
        return 4

    def submit(self, name: int, keys: Sequence[RunKey]) -> None:
        assert len(self._waiting) < self.capacity
        self._waiting.append((name, keys))
        self.chunks.append(keys)

    def collect(self, timeout: float) -> list[tuple[int, Made | None]]:
        if not self._waiting:
            return []
        name, keys = self._waiting.pop()
        return [(name, None if self._loses(keys) else make_runs(self._study, keys, lambda: self._is_called_off))]

    def call_off(self) -> None:
        self._is_called_off = True

    def close(self) -> None:
        self.is_closed = True


@contextmanager
def handy(study: Study, **options: Callable[[Sequence[RunKey]], bool]) -> Iterator[HandyPool]:
    """Studies run inside go to one such pool."""
    pool = HandyPool(study, **options)
    with patch.object(runner, "_open_pool", lambda *_: pool):
        yield pool


def table_of(folder: Path) -> bytes:
    return (folder / "runs.parquet").read_bytes()


# ---- what is made ------------------------------------------------------------------------------------------------


def test_rows_are_those_of_an_audit(tmp_path: Path) -> None:
    """A row holds what one run by hand gives, with the seed of its replicate and the plan's main lap."""
    study = small_study(2, 2)
    with handy(study):
        run_study(study, tmp_path)
    table = read_runs(tmp_path)
    s = study.scenario(1)
    planned, seed = plan(s), replicate_seeds(study.seed, 2)[1]
    run = simulate(s, seed=seed, cycles=tuple(lap.surfaces for lap in planned.laps))
    expected = pd.DataFrame([{"point": 1, "replicate": 1, "seed": seed, **run.summary(planned.main_lap)}])
    pd.testing.assert_frame_equal(table.iloc[[3]].reset_index(drop=True), expected, check_exact=True)


def test_the_table_depends_on_nothing_but_the_study(tmp_path: Path) -> None:
    """Processes or none, one or two, in any chunks and any order: the same bytes."""
    study = small_study(4, 3)
    told: list[tuple[int, int, int]] = []
    with handy(study):
        run_study(study, tmp_path / "here")
    run_study(study, tmp_path / "one", workers=1)
    summary = run_study(study, tmp_path / "two", workers=2, progress=lambda *counts: told.append(counts))
    assert table_of(tmp_path / "here") == table_of(tmp_path / "one") == table_of(tmp_path / "two")
    assert (summary.n_points_done, summary.n_runs_done, summary.n_failures, summary.is_finished) == (4, 12, 0, True)
    assert told[-1] == (12, 12, 0)
    assert multiprocessing.active_children() == []


def test_a_finished_study_is_not_run_again(tmp_path: Path) -> None:
    """The same call after the end makes nothing and gives the same."""
    study = small_study()
    with handy(study):
        run_study(study, tmp_path)
    before = table_of(tmp_path)
    with handy(study) as pool:
        assert run_study(study, tmp_path).n_runs_done == 6
    assert pool.chunks == []
    assert table_of(tmp_path) == before


def test_chunks_take_their_time_and_become_shorter(tmp_path: Path) -> None:
    """Once the time per run is known, chunks hold many runs; towards the end fewer."""
    study = small_study(5, 20, base=quick_base(0.2))
    with handy(study) as pool, patch.object(HandyPool, "chunk_s", 0.3):
        run_study(study, tmp_path)
    lengths = [len(keys) for keys in pool.chunks]
    assert sum(lengths) == 100
    assert lengths[0] == 1
    assert max(lengths) > 4
    assert lengths[-1] < max(lengths)


# ---- interruptions -----------------------------------------------------------------------------------------------


def test_an_interruption_keeps_what_has_ended(tmp_path: Path) -> None:
    """Wherever it is interrupted, the rest is made by the next call, nothing twice, and the table is the same."""
    study = small_study(4, 3)
    with handy(study):
        run_study(study, tmp_path / "whole")
    made: list[RunKey] = []
    for _ in range(20):

        def interrupt(done: int, planned: int, failures: int) -> None:
            if done < planned:
                os.kill(os.getpid(), signal.SIGINT)

        with handy(study) as pool:
            try:
                run_study(study, tmp_path / "often", progress=interrupt)
                break
            except KeyboardInterrupt:
                assert pool.is_closed
            finally:
                ended = read_runs(tmp_path / "often")[["point", "replicate"]].itertuples(index=False)
                made = [RunKey(*key) for key in ended]
                assert len(set(made)) == len(made)
    assert len(made) == 12
    assert table_of(tmp_path / "often") == table_of(tmp_path / "whole")


def test_an_interruption_ends_processes(tmp_path: Path) -> None:
    """Ctrl-C in the midst of long runs: it ends soon, the processes as well, and what had ended is kept."""
    study = small_study(3, 2, base=quick_base(3000.0), counts=[1, 1, 200])  # hours of work
    with pytest.raises(KeyboardInterrupt):
        run_study(study, tmp_path, workers=2, progress=lambda *_: os.kill(os.getpid(), signal.SIGINT))
    assert multiprocessing.active_children() == []
    assert signal.getsignal(signal.SIGINT) is signal.default_int_handler


def test_a_full_disk_ends_the_study_and_costs_nothing_but_time(tmp_path: Path) -> None:
    """When nothing can be written any more it ends with one error; with room again the same call goes on."""
    study = small_study(4, 3)
    with handy(study):
        run_study(study, tmp_path / "whole")

    def fill(*_: int) -> None:
        disk.side_effect = OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    with (
        handy(study) as pool,
        patch.object(os, "fsync") as disk,
        patch.object(store, "MOST_ROWS", 4),
        pytest.raises(OutputError, match=r"No space.*make room.*goes on from there"),
    ):
        run_study(study, tmp_path / "full", progress=fill)
    assert pool.is_closed
    with handy(study):
        run_study(study, tmp_path / "full")
    assert table_of(tmp_path / "full") == table_of(tmp_path / "whole")


# ---- lost workers ------------------------------------------------------------------------------------------------


def test_a_killed_worker_costs_nothing(tmp_path: Path) -> None:
    """A worker that is killed in the midst of its work is replaced, and its runs are made again."""
    study = small_study(4, 4)
    with handy(study):
        run_study(study, tmp_path / "whole")
    pools: list[LocalPool] = []
    begin = LocalPool.__init__

    def noted(pool: LocalPool, study: Study, n_workers: int) -> None:
        begin(pool, study, n_workers)
        pools.append(pool)

    killed: list[int] = []

    def kill(done: int, *_: int) -> None:
        if pools[0].pids and len(killed) < 2:
            killed.append(pools[0].pids[0])
            os.kill(killed[-1], signal.SIGKILL)

    with patch.object(LocalPool, "__init__", noted):
        summary = run_study(study, tmp_path / "killed", workers=2, progress=kill)
    assert len(killed) == 2
    assert summary.n_failures == 0
    assert table_of(tmp_path / "killed") == table_of(tmp_path / "whole")


def test_a_run_that_kills_its_worker_is_given_up(tmp_path: Path) -> None:
    """A run that takes three workers along is recorded as failed; all others are made."""
    study = harmful(small_study(3, 1), at_1="kill")
    summary = run_study(study, tmp_path, workers=2)
    failures = read_failures(tmp_path)
    assert failures[["point", "replicate", "error"]].to_numpy().tolist() == [[1, 0, "WorkerLost"]]
    assert "each worker that took this run has ended" in failures["message"][0]
    assert (summary.n_runs_done, summary.n_failures, summary.is_finished) == (2, 1, True)


def test_a_chunk_that_loses_workers_is_split(tmp_path: Path) -> None:
    """After three losses a chunk is made run by run, so that only the one to blame is given up."""
    study, culprit = small_study(6, 4), RunKey(2, 3)
    with handy(study, loses=lambda keys: culprit in keys) as pool, patch.object(runner, "SHORTEST_CHUNK", 1e9):
        summary = run_study(study, tmp_path)
    failures = read_failures(tmp_path)
    assert [RunKey(*key) for key in failures[["point", "replicate"]].to_numpy()] == [culprit]
    assert failures["seed"].tolist() == [replicate_seeds(study.seed, 4)[3]]
    assert (summary.n_runs_done, summary.n_failures) == (23, 1)
    losses = [len(keys) for keys in pool.chunks if culprit in keys]
    assert len(losses) == 3 if losses[0] == 1 else losses[0] > 1 and losses == [losses[0]] * 3 + [1] * 3


def test_processes_that_cannot_start_are_told(tmp_path: Path) -> None:
    """Where no process ever comes to be of use, there is one error, not a failure for each run."""
    values = {name: getattr(small_study(), name) for name in Study.__dataclass_fields__}
    with pytest.raises(PoolError, match="ended as soon as they had started"):
        run_study(DeadlyStudy(**values), tmp_path, workers=1)
    assert len(read_failures(tmp_path)) == 0


def test_processes_have_one_thread_for_numbers() -> None:
    """Libraries of numbers are told to use one thread in a worker, and the caller's surroundings stay as they are."""
    before = dict(os.environ)
    pool = LocalPool(small_study(), 1)
    try:
        executor = pool._processes[0].executor
        threads = [executor.submit(os.getenv, name).result() for name in pools.ONE_THREAD]
    finally:
        pool.close()
    assert threads == ["1"] * len(pools.ONE_THREAD)
    assert dict(os.environ) == before
    assert multiprocessing.active_children() == []


@pytest.mark.slow
def test_processes_that_are_not_forked(tmp_path: Path) -> None:
    """Where there is no server to fork from, processes start anew and give the same."""
    study = small_study()
    with handy(study):
        run_study(study, tmp_path / "here")
    with patch.object(pools, "_start_method", lambda: multiprocessing.get_context("spawn")):
        run_study(study, tmp_path / "spawned", workers=1)
    assert table_of(tmp_path / "here") == table_of(tmp_path / "spawned")


@pytest.mark.slow
def test_a_script_without_a_guard_may_run_a_study(tmp_path: Path) -> None:
    """Workers do not run the caller's script again, so it needs no `if __name__ == "__main__"`."""
    script = tmp_path / "script.py"
    script.write_text(
        "from pathlib import Path\nfrom small_studies import small_study\n"
        "from swarmpush.studies.runner import run_study\n"
        f"print(run_study(small_study(), Path({str(tmp_path / 'study')!r}), workers=2).n_runs_done)\n"
    )
    path = os.pathsep.join([str(Path(__file__).parent), *sys.path])
    ended = subprocess.run(
        [sys.executable, script], capture_output=True, text=True, env=os.environ | {"PYTHONPATH": path}, check=False
    )
    assert (ended.stdout, ended.stderr) == ("6\n", "")


# ---- failures ----------------------------------------------------------------------------------------------------


def test_a_point_that_makes_no_scenario_is_one_failure(tmp_path: Path) -> None:
    """Its problems are recorded once, none of its runs is planned any more, and the rest is made."""
    study = harmful(small_study(3, 4), at_1="invalid")
    told: list[tuple[int, int, int]] = []
    with handy(study):
        summary = run_study(study, tmp_path, progress=lambda *counts: told.append(counts))
    failures = read_failures(tmp_path)
    assert failures[["point", "replicate", "error", "message", "tables"]].to_numpy().tolist() == [
        [1, WHOLE_POINT, "ScenarioError", "pushers.count: too many of them", ""]
    ]
    expected = Summary(3, 3, 1, 8, 8, 1, summary.runs_per_s)
    assert (summary, told[-1]) == (expected, (8, 8, 1))
    with handy(study) as pool:
        assert run_study(study, tmp_path).n_runs_done == 8
    assert pool.chunks == []


def test_a_run_that_fails_can_be_replayed_and_made_again(tmp_path: Path) -> None:
    """An exception is recorded with all that leads to it again; once forgotten, only these runs are made anew."""
    whole, study = small_study(3, 2), harmful(small_study(3, 2), at_1="break")
    with handy(study):
        summary = run_study(study, tmp_path / "broken")
    assert (summary.n_runs_done, summary.n_failures, summary.is_finished) == (4, 2, True)
    failure = read_failures(tmp_path / "broken").iloc[1]
    assert (failure["point"], failure["replicate"]) == (1, 1)
    with pytest.raises(ZeroDivisionError) as raised:
        simulate(study.scenario(1), seed=int(failure["seed"]), cycles=())
    assert (type(raised.value).__name__, str(raised.value)) == (failure["error"], failure["message"])
    assert json.loads(failure["tables"])["numerics"]["step"] == 0.0
    assert forget_failures(tmp_path / "broken") == 2
    with handy(whole) as pool:
        run_study(whole, tmp_path / "broken")
    assert sorted(key for keys in pool.chunks for key in keys) == [RunKey(1, 0), RunKey(1, 1)]
    with handy(whole):
        run_study(whole, tmp_path / "whole")
    assert table_of(tmp_path / "broken") == table_of(tmp_path / "whole")


def test_the_tables_of_a_failure_make_the_scenario_again() -> None:
    """What is recorded of a run that broke off is its scenario, whole."""
    study = small_study()
    with patch("swarmpush.studies.work.simulate", side_effect=FloatingPointError("no number")):
        made = make_runs(study, [RunKey(1, 0)], lambda: False)
    assert [(f.point, f.replicate, f.error, f.message) for f in made.failures] == [
        (1, 0, "FloatingPointError", "no number")
    ]
    assert from_tables(json.loads(made.failures[0].tables)) == study.scenario(1)


# ---- stop rules --------------------------------------------------------------------------------------------------


def values_of(point: int, replicate: int) -> float:
    """Made-up speeds: the higher the point, the wider they scatter."""
    return 1.0 + 0.2 * point * math.sin(12.9898 * replicate + point)


def work_through(agenda: Agenda, chance: random.Random, most: int = 10_000) -> list[RunKey]:
    """Take runs and let them end in any order; those that ended."""
    in_hand: list[RunKey] = []
    ended: list[RunKey] = []
    while len(ended) < most:
        in_hand += agenda.take(chance.randint(1, 9))
        if not in_hand:
            break
        key = in_hand.pop(chance.randrange(len(in_hand)))
        assert agenda.settle(key, values_of(*key))
        assert not agenda.settle(key, values_of(*key))
        ended.append(key)
    return ended


STOPPED = small_study(6, 4, stop=Stop("block speed", 0.3, 32))


@pytest.mark.parametrize("seed", range(5))
def test_a_stop_rule_does_not_depend_on_order_or_interruptions(seed: int) -> None:
    """In any order, and cut anywhere, each point gets the same runs: up to a look, and no more than it needs."""
    expected = sorted(work_through(Agenda(STOPPED, NOTHING_KNOWN), random.Random(0)))
    chance = random.Random(seed)
    known = NOTHING_KNOWN
    for _ in range(4):
        ended = work_through(Agenda(STOPPED, known), chance, most=chance.randint(1, 40))
        rows = pd.DataFrame([(*key, values_of(*key)) for key in ended], columns=["point", "replicate", "value"])
        known = pd.concat([known, rows]) if len(known) else rows
        known = known.sample(frac=1.0, random_state=seed)
    agenda = Agenda(STOPPED, known)
    work_through(agenda, chance)
    last = work_through(Agenda(STOPPED, NOTHING_KNOWN), chance)
    assert sorted(last) == expected
    assert agenda.done == agenda.planned == len(expected)
    of_points = [sum(key.point == point for key in expected) for point in range(6)]
    assert of_points[0] == 4
    assert of_points[-1] == 32
    assert set(of_points) <= set(STOPPED.counts)


def test_each_look_has_its_share_of_the_error() -> None:
    """What decides is the interval at the confidence of a planned look: Student's t by hand for four values."""
    stop = Stop("block speed", 1.0, 16)  # looks at 4, 8, 16, so each has a third of 5 %
    study = small_study(1, 4, stop=stop)
    values = [1.0, 1.0 + 1e-9, 2.0, 2.0]  # mean 1.5, s.d. 0.577, 98.33 % of Student's t with 3: 4.857 (from tables)
    width = 2.0 * 4.857 * 0.57735 / 2.0 / 1.5
    for factor, is_narrow in ((0.999, False), (1.001, True)):
        limited = small_study(1, 4, stop=Stop("block speed", factor * width, 16))
        assert is_enough(limited, 0, values) is is_narrow
    assert not is_enough(study, 0, [math.nan, math.nan, 1.0, math.nan])  # failures leave one value, without an interval


def test_a_share_stops_by_its_absolute_width() -> None:
    """A share of arrivals has the score interval, whose width is not taken relative to it."""
    values = [0.0] * 20  # score interval at 95 %: 0 to 0.1611 (Newcombe 1998)
    for width, is_narrow in ((0.161, False), (0.1612, True)):
        assert is_enough(small_study(1, 20, stop=Stop("arrival", width, 20)), 0, values) is is_narrow


def test_stop_rules_on_real_runs(tmp_path: Path) -> None:
    """Points that scatter get more runs, the plan grows by them, and an interruption changes nothing."""
    study = small_study(3, 2, stop=Stop("lean", 0.5, 8), base=quick_base(20.0))
    with handy(study):
        summary = run_study(study, tmp_path / "whole")
    assert summary.n_runs_planned == summary.n_runs_done > 6
    assert summary.is_finished
    for _ in range(20):

        def interrupt(done: int, planned: int, failures: int) -> None:
            if done < planned:
                raise KeyboardInterrupt

        with handy(study):
            try:
                run_study(study, tmp_path / "often", progress=interrupt)
                break
            except KeyboardInterrupt:
                continue
    assert table_of(tmp_path / "often") == table_of(tmp_path / "whole")
