"""Running a study: chunks of runs go to workers, what comes back goes to the store, until all runs have ended."""

from __future__ import annotations

import math
import os
import signal
import threading
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from pathlib import Path
from types import FrameType
from typing import NamedTuple

from swarmpush.auditing.replicates import replicate_seed
from swarmpush.studies.agenda import Agenda, stop_column
from swarmpush.studies.pools import LocalPool, Pool, PoolError
from swarmpush.studies.saved import save_study
from swarmpush.studies.store import Store, Summary
from swarmpush.studies.study import Study
from swarmpush.studies.work import Failure, Made, RunKey

Progress = Callable[[int, int, int], None]

MOST_RUNS = 1_000  # of a chunk
SHORTEST_CHUNK = 0.1  # of the time that a chunk should take, towards the end
PACE_WEIGHT = 0.2  # of the latest chunk in what is known of the time per run
LOOK_EVERY_S = 0.25  # how soon an interruption is noticed
WIND_UP_S = 3.0  # that chunks under way get to hand over what they have made


class _Chunk(NamedTuple):
    """Runs that are made together, and how often they came back as lost."""

    keys: Sequence[RunKey]
    n_losses: int = 0


def run_study(
    study: Study,
    folder: Path,
    *,
    workers: int | None = None,
    cluster: str | None = None,
    progress: Progress | None = None,
    is_forced: bool = False,
) -> Summary:
    """Make all runs of a study that its folder does not hold yet.

    Whatever ends it before the end, the same call goes on where it stopped, and the final `runs.parquet` is the same
    to the last bit, whoever made the runs and in whatever order.

    Arguments:
        study: what is run. folder: of the results; see `store.py`.
        workers: processes on this machine; one per processor unless given. cluster: address of a Dask scheduler, e.g.
            "tcp://10.0.0.1:8786", whose workers make the runs instead.
        progress: called now and then with runs done, runs planned, which may grow, and failures so far.
        is_forced: throw away the runs that the folder holds, of whatever study, and start anew.

    Returns:
        The summary. Runs that failed do not end a study; `store.read_failures` lists them.

    Raises:
        OutputError: when the folder cannot be used; see `Store`. PoolError: when there are no workers; see `pools.py`
        and `cluster.py`. KeyboardInterrupt: after what has ended is written.
    """
    with Store(folder, study, is_forced=is_forced) as store:
        save_study(study, folder)
        agenda = Agenda(study, store.known(stop_column(study)))
        if agenda.done < agenda.planned:
            pool = _open_pool(study, workers, cluster, agenda.planned - agenda.done)
            try:
                with _interruptions() as is_interrupted:
                    _Work(study, store, agenda, pool, progress).do(is_interrupted)
            finally:
                pool.close()
            if is_interrupted():
                raise KeyboardInterrupt
        store.flush(agenda.wanted)
        store.finish()
        return store.summary()


def _open_pool(study: Study, workers: int | None, cluster: str | None, n_runs: int) -> Pool:
    if cluster:
        from swarmpush.studies.cluster import ClusterPool

        return ClusterPool(study, cluster)
    return LocalPool(study, min(workers or os.cpu_count() or 1, n_runs))


class _Work:
    """The traffic between agenda, pool and store."""

    def __init__(self, study: Study, store: Store, agenda: Agenda, pool: Pool, progress: Progress | None) -> None:
        self._study, self._store, self._agenda, self._pool, self._progress = study, store, agenda, pool, progress
        self._column = stop_column(study)
        self._again: deque[_Chunk] = deque()
        self._in_hand: dict[int, _Chunk] = {}
        self._n_in_hand = 0  # runs
        self._n_chunks = 0
        self._pace_s = math.inf  # of one run, as far as is known
        self._n_failures = store.summary().n_failures

    def do(self, is_interrupted: Callable[[], bool]) -> None:
        """Until all runs have ended, or an interruption; what has ended is then written."""
        try:
            while not is_interrupted() and self._give():
                self._take(LOOK_EVERY_S)
                self._store.flush_if_due(self._agenda.wanted)
                if self._progress:
                    self._progress(self._agenda.done, self._agenda.planned, self._n_failures)
        finally:
            if self._in_hand:
                self._wind_up()
            self._store.flush(self._agenda.wanted)

    def _wind_up(self) -> None:
        """Call the work off and keep what has been made."""
        with suppress(PoolError):  # it may be the reason for the end
            self._take(0.0)
            self._pool.call_off()
            deadline = time.monotonic() + WIND_UP_S
            while self._in_hand and time.monotonic() < deadline:
                self._take(LOOK_EVERY_S)

    def _give(self) -> bool:
        """Fill the pool's hands; whether there is anything in them."""
        n_free = self._pool.capacity - len(self._in_hand)
        for _ in range(n_free):
            chunk = self._again.popleft() if self._again else _Chunk(self._agenda.take(self._length()))
            if not chunk.keys:
                break
            self._n_chunks += 1
            self._in_hand[self._n_chunks] = chunk
            self._n_in_hand += len(chunk.keys)
            self._pool.submit(self._n_chunks, chunk.keys)
        return bool(self._in_hand)

    def _length(self) -> int:
        """Runs of the next chunk: as many as take a chunk's time, and towards the end less, so that all stay busy."""
        by_time = self._pool.chunk_s / self._pace_s
        share = (self._agenda.planned - self._agenda.done - self._n_in_hand) / (2 * self._pool.n_workers)
        return max(1, min(round(by_time), round(max(share, SHORTEST_CHUNK * by_time)), MOST_RUNS))

    def _take(self, timeout: float) -> None:
        """Keep what the pool has made; what was lost is to be made again."""
        for name, made in self._pool.collect(timeout):
            chunk = self._in_hand.pop(name)
            self._n_in_hand -= len(chunk.keys)
            if made is None:
                self._retry(chunk)
            else:
                self._keep(made)

    def _keep(self, made: Made) -> None:
        settle = self._agenda.settle
        rows = [
            row
            for row in made.rows
            if settle(RunKey(row["point"], row["replicate"]), row[self._column] if self._column else math.nan)
        ]
        failures = [f for f in made.failures if settle(RunKey(f.point, f.replicate), math.nan)]
        self._store.add(rows, failures)
        self._n_failures += len(failures)
        if n := len(made.rows) + len(made.failures):
            pace = made.seconds / n
            known = math.isfinite(self._pace_s)
            self._pace_s = self._pace_s + PACE_WEIGHT * (pace - self._pace_s) if known else pace

    def _retry(self, chunk: _Chunk) -> None:
        """A chunk whose worker was lost: again, or in single runs, or given up if it is one."""
        if chunk.n_losses + 1 < self._pool.most_losses:
            self._again.append(_Chunk(chunk.keys, chunk.n_losses + 1))
        elif len(chunk.keys) > 1:
            self._again.extend(_Chunk([key]) for key in chunk.keys)
        else:
            key = chunk.keys[0]
            message = "each worker that took this run has ended during it: crashed, killed, or out of memory"
            seed = replicate_seed(self._study.seed, key.replicate)
            self._keep(Made(failures=[Failure(*key, seed, "WorkerLost", message, "")]))


@contextmanager
def _interruptions() -> Iterator[Callable[[], bool]]:
    """Whether Ctrl-C was pressed, instead of an exception in the midst of anything; a second one is as usual."""
    is_interrupted = threading.Event()
    if threading.current_thread() is not threading.main_thread():  # where none arrives
        yield is_interrupted.is_set
        return
    before = signal.getsignal(signal.SIGINT)

    def note(_: int, __: FrameType | None) -> None:
        is_interrupted.set()
        signal.signal(signal.SIGINT, before)

    signal.signal(signal.SIGINT, note)
    try:
        yield is_interrupted.is_set
    finally:
        signal.signal(signal.SIGINT, before)
