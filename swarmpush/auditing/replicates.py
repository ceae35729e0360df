"""Many independent runs: seeds, a pool of threads, finished runs written down, and an orderly end when interrupted."""

from __future__ import annotations

import os
from collections.abc import Callable, Collection, Mapping, Sequence
from concurrent.futures import CancelledError, Future, ThreadPoolExecutor, as_completed
from threading import Event
from typing import NamedTuple

import numpy as np

from swarmpush.auditing.journal import Journal, Row

Progress = Callable[[int, int, str], None]


class Task(NamedTuple):
    """One run to be made: the level it belongs to (a rung, a time step) and its number on that level, from 0."""

    level: str
    replicate: int


Work = Callable[[Task, Callable[[float], None]], Row]


class Stopped(Exception):
    """Nobody waits for this run any more."""


def replicate_seeds(seed: int, n: int) -> list[int]:
    """Seeds of the replicates: the first ones stay the same when more are asked for."""
    return [replicate_seed(seed, k) for k in range(n)]


def replicate_seed(seed: int, replicate: int) -> int:
    """Seed of one replicate, counted from 0."""
    return int(np.random.SeedSequence(seed, spawn_key=(replicate,)).generate_state(1)[0])


def run_tasks(
    tasks: Sequence[Task],
    work: Work,
    *,
    journal: Journal | None = None,
    known: Mapping[Task, Row] | None = None,
    again: Collection[Task] = (),
    workers: int | None = None,
    progress: Progress | None = None,
) -> dict[Task, Row]:
    """Make all runs that the journal does not hold, in a pool of threads.

    Arguments:
        tasks: the runs, the shortest first. They are started from the end, because a long run that is started last
            leaves the other workers idle.
        work: makes one run and returns its row; called in a thread. What it is given second must be called now and then
            with any number: it raises `Stopped` once the runs are called off.
        journal: takes each row as it comes; its rows are not made anew.
        known: further rows that are not made anew.
        again: tasks that are made, and first, though the journal may hold them.
        workers: threads; one per processor unless given. The rows do not depend on it.
        progress: called after each run with runs done, runs in all and the run's level.

    Returns:
        The row of every task.

    Raises:
        OutputError: when the journal cannot be written. Whatever `work` raises is passed on, and so is an interruption
        from the keyboard; runs under way then end soon, and those that have ended are in the journal.
    """
    rows = dict(known or {}) | ({Task(*key): row for key, row in journal.rows.items()} if journal else {})
    waiting = [*again, *(task for task in reversed(tasks) if task not in rows and task not in again)]
    done = len(tasks) - len(waiting)
    is_stopped = Event()

    def look_up(_: float) -> None:
        if is_stopped.is_set():
            raise Stopped

    def keep(task: Task, row: Row) -> None:
        if journal and task not in rows:
            journal.add(row)
        rows[task] = row

    pool = ThreadPoolExecutor(workers or os.cpu_count())
    futures: dict[Future[Row], Task] = {}
    try:
        futures.update({pool.submit(work, task, look_up): task for task in waiting})
        for future in as_completed(list(futures)):
            task = futures.pop(future)
            keep(task, future.result())
            done += 1
            if progress:
                progress(done, len(tasks), task.level)
    except KeyboardInterrupt:
        is_stopped.set()
        pool.shutdown(cancel_futures=True)
        for future, task in futures.items():
            if _has_row(future):
                keep(task, future.result())
        raise
    finally:
        is_stopped.set()
        pool.shutdown(cancel_futures=True)
    return {task: rows[task] for task in tasks}


def _has_row(future: Future[Row]) -> bool:
    try:
        return future.exception() is None
    except CancelledError:
        return False
