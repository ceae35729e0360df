"""Where the runs of a study are made: the interface of all such places, and processes of this machine.

A pool takes chunks of runs and gives back what they made, or that the worker was lost. Chunks are submitted a few at a
time (`capacity`), so that nothing piles up.
"""

from __future__ import annotations

import multiprocessing
import os
import queue
import signal
import sys
import threading
import types
from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from concurrent.futures import Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager, suppress
from dataclasses import replace
from multiprocessing.context import BaseContext
from multiprocessing.process import BaseProcess
from multiprocessing.synchronize import Event
from typing import TypeVar

from swarmpush.compiled import is_first_start
from swarmpush.studies.study import Study
from swarmpush.studies.work import Made, RunKey, make_runs, warm_up

AHEAD = 2  # chunks per process: one that is worked on, one that waits, so that no process waits for the parent
CHUNK_S = 1.5  # of work in a chunk: long against its way there and back, short against a study
PATIENCE = 1.0  # s that a process gets to end by itself
MOST_FALSE_STARTS = 3  # in a row: processes that end before they are of use
ONE_THREAD = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS", "VECLIB_MAXIMUM_THREADS",
)  # fmt: skip


Item = TypeVar("Item")


class PoolError(Exception):
    """Runs cannot be made; the message says why and what to do."""


class Pool(ABC):
    """Workers. Close it after use; what is not done by then is called off.

    capacity: chunks that should be in its hands. n_workers: chunks that are worked on at the same time.
    chunk_s: how long the work of a chunk should take. most_losses: how often a chunk may come back as lost before it is
    split, and a single run before it is given up.
    """

    chunk_s: float
    most_losses: int

    @property
    @abstractmethod
    def n_workers(self) -> int: ...

    @property
    @abstractmethod
    def capacity(self) -> int: ...

    @abstractmethod
    def submit(self, name: int, keys: Sequence[RunKey]) -> None:
        """Have a chunk of runs made; its name comes back with the result."""

    @abstractmethod
    def collect(self, timeout: float) -> list[tuple[int, Made | None]]:
        """Chunks that have ended since the last call, or do so within the time in s; None where the worker was lost.

        Raises:
            PoolError: when no more can be expected.
        """

    @abstractmethod
    def call_off(self) -> None:
        """Let the chunks under way end soon, with what they have made; those that wait come to nothing."""

    @abstractmethod
    def close(self) -> None:
        """End all workers that are this pool's."""


class LocalPool(Pool):
    """Processes of this machine, each with one thread for numbers.

    Each is the only one of an executor of its own, so that one that is killed takes no other with it, and it is known
    which chunk it was at, since it works on them in order.

    Arguments:
        study: what is run. n_workers: processes.

    Raises:
        PoolError: when processes end before they are of use; also from `submit` and `collect`.
    """

    chunk_s = CHUNK_S
    most_losses = 3

    def __init__(self, study: Study, n_workers: int) -> None:
        self._study = replace(study)  # without what it may have worked out for itself, which need not be sent
        self._n_workers = n_workers
        self._context = _start_method()
        self._is_called_off = self._context.Event()
        self._ended: queue.SimpleQueue[tuple[_Process, int]] = queue.SimpleQueue()
        self._processes: list[_Process] = []
        self._n_false_starts = 0
        try:
            # where nothing is compiled yet, one does it for all
            with _launching():
                self._processes += [self._start() for _ in range(1 if is_first_start() else n_workers)]
            with suppress(BrokenProcessPool):  # which the first chunk will meet again
                self._processes[0].is_of_use.result()
            with _launching():
                self._processes += [self._start() for _ in range(n_workers - len(self._processes))]
        except BaseException:
            self.close()
            raise

    @property
    def n_workers(self) -> int:
        return self._n_workers

    @property
    def capacity(self) -> int:
        return AHEAD * self._n_workers

    @property
    def pids(self) -> list[int]:
        """Process numbers of the workers that are of use."""
        return [pid for process in self._processes if process.is_ready for pid in process.pids]

    def submit(self, name: int, keys: Sequence[RunKey]) -> None:
        process = min(self._processes, key=lambda process: len(process.chunks))
        if process.is_broken:
            process = self._replace(process)
        try:
            future = process.executor.submit(_make, keys)
        except BrokenProcessPool:
            process = self._replace(process)
            future = process.executor.submit(_make, keys)
        process.chunks[name] = _Chunk(keys, future)
        future.add_done_callback(lambda _: self._ended.put((process, name)))

    def collect(self, timeout: float) -> list[tuple[int, Made | None]]:
        results: list[tuple[int, Made | None]] = []
        for process, name in drain(self._ended, timeout):
            if name not in process.chunks:  # of a process whose end was dealt with
                continue
            try:
                results.append((name, process.chunks[name].future.result()))
                del process.chunks[name]
                self._n_false_starts = 0
            except BrokenProcessPool:
                results += self._bury(process)
        return results

    def call_off(self) -> None:
        self._is_called_off.set()

    def close(self) -> None:
        self.call_off()
        futures = {process: [chunk.future for chunk in process.chunks.values()] for process in self._processes}
        wait([future for of_one in futures.values() for future in of_one], PATIENCE)
        for process, of_one in futures.items():
            if not all(future.done() for future in of_one) or not process.is_ready:
                process.kill()
        for process in futures:
            process.executor.shutdown(wait=True, cancel_futures=True)

    def _start(self) -> _Process:
        executor = ProcessPoolExecutor(1, self._context, _begin, (self._study, self._is_called_off))
        before = set(multiprocessing.active_children())
        is_of_use = executor.submit(_get_ready)  # the first call starts the process
        return _Process(executor, is_of_use, set(multiprocessing.active_children()) - before)

    def _replace(self, process: _Process) -> _Process:
        """A new process in place of one that is broken, whose chunks are dealt with as they come in."""
        with _launching():
            new = self._start()
            self._processes[self._processes.index(process)] = new
        return new

    def _bury(self, process: _Process) -> list[tuple[int, Made | None]]:
        """Deal with the end of a process: the chunk it was at comes back as lost, those that waited go to another."""
        chunks, process.chunks = process.chunks, {}
        results: list[tuple[int, Made | None]] = []
        if process in self._processes:
            self._replace(process)
        if not process.is_ready:
            self._n_false_starts += 1
            if self._n_false_starts >= MOST_FALSE_STARTS:
                raise PoolError(
                    f"{self._n_false_starts} worker processes ended as soon as they had started; see what they wrote "
                    "on the error stream, or whether memory ran out"
                )
        for name, chunk in chunks.items():
            if chunk.future.done() and not chunk.future.exception():
                results.append((name, chunk.future.result()))
            elif process.is_ready and not any(made is None for _, made in results):
                results.append((name, None))
            else:
                self.submit(name, chunk.keys)
        return results


class _Chunk:
    """A chunk in the hands of a process."""

    def __init__(self, keys: Sequence[RunKey], future: Future[Made]) -> None:
        self.keys, self.future = keys, future


class _Process:
    """A worker process: its executor, what it gives once it is of use, and its chunks in order."""

    def __init__(self, executor: ProcessPoolExecutor, is_of_use: Future[None], started: set[BaseProcess]) -> None:
        self.executor, self.is_of_use, self._started = executor, is_of_use, started
        self.chunks: dict[int, _Chunk] = {}

    @property
    def pids(self) -> list[int]:
        """Its number."""
        return [process.pid for process in self._started if process.pid is not None]

    def kill(self) -> None:
        """End it at once."""
        for process in self._started:
            process.kill()

    @property
    def is_ready(self) -> bool:
        """Whether it has come to be of use."""
        return self.is_of_use.done() and self.is_of_use.exception() is None

    @property
    def is_broken(self) -> bool:
        """Whether it has ended before that."""
        return self.is_of_use.done() and self.is_of_use.exception() is not None


def drain(waiting: queue.SimpleQueue[Item], timeout: float) -> Iterator[Item]:
    """What is in a queue; waits for the first, for a time in s."""
    with suppress(queue.Empty):
        yield waiting.get(timeout=timeout)
        while True:
            yield waiting.get_nowait()


def _start_method() -> BaseContext:
    """Forking from a process that has all packages loaded and no threads where there is such a thing, else anew."""
    if "forkserver" not in multiprocessing.get_all_start_methods():
        return multiprocessing.get_context("spawn")
    context = multiprocessing.get_context("forkserver")
    context.set_forkserver_preload(["swarmpush.studies.pools"])
    return context


@contextmanager
def _launching() -> Iterator[None]:
    """Processes started inside have one thread for numbers, and do not run the caller's script a second time.

    Ctrl-C is put off to the end, so that none is left half started.
    """
    interruptions: list[int] = []
    is_main = threading.current_thread() is threading.main_thread()
    handler = signal.signal(signal.SIGINT, lambda number, _: interruptions.append(number)) if is_main else None
    before = {name: os.environ.get(name) for name in ONE_THREAD}
    script = sys.modules["__main__"]
    os.environ.update(dict.fromkeys(ONE_THREAD, "1"))
    sys.modules["__main__"] = types.ModuleType("__main__")
    try:
        yield
    finally:
        sys.modules["__main__"] = script
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value
        if is_main:
            signal.signal(signal.SIGINT, handler)
        if interruptions:
            signal.raise_signal(signal.SIGINT)


# ---- in a process ------------------------------------------------------------------------------------------------

_study: Study
_is_called_off: Event


def _begin(study: Study, is_called_off: Event) -> None:
    global _study, _is_called_off
    _study, _is_called_off = study, is_called_off
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # goes to the whole group; the parent calls the work off in order
    threading.Thread(target=_follow_parent, daemon=True).start()


def _follow_parent() -> None:
    """End with the parent, however that ends."""
    parent = multiprocessing.parent_process()
    assert parent
    parent.join()
    os._exit(1)


def _get_ready() -> None:
    warm_up(_study.base)


def _make(keys: Sequence[RunKey]) -> Made:
    return make_runs(_study, keys, _is_called_off.is_set)
