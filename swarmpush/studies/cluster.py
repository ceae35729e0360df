"""Runs of a study on a Dask cluster, whose scheduler is there already and is found by its address."""

from __future__ import annotations

import logging
import queue
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import CancelledError
from dataclasses import replace
from typing import Any

from swarmpush.output import versions
from swarmpush.studies.pools import Pool, PoolError, drain
from swarmpush.studies.study import Study
from swarmpush.studies.work import Made, RunKey, make_runs, warm_up

AHEAD = 4  # chunks per thread of a worker; so many that their way there does not count, so few that a scheduler copes
CHUNK_S = 6.0  # of work in a chunk, so that a scheduler with 500 threads sees less than 100 chunks per second
CONNECT_S = 10.0  # for a scheduler to answer, and for a first worker to be there
# report lost connections with tracebacks; what matters of them is raised here
CHATTY = ("distributed", "distributed.client", "distributed.core", "distributed.utils")
LOOK_EVERY_S = 5.0  # how often it is asked how many workers there are

Versions = Mapping[str, str]


class ClusterPool(Pool):
    """The workers of a Dask cluster. The scheduler gives chunks of lost workers to others; only what has taken several
    workers along comes back as lost.

    Arguments:
        study: what is run. address: of the scheduler, e.g. "tcp://10.0.0.1:8786".

    Raises:
        PoolError: when dask is not installed, nobody answers, there is no worker, or workers have other versions; also
        from `submit` and `collect`.
    """

    chunk_s = CHUNK_S
    most_losses = 1  # the scheduler has tried several workers by then

    def __init__(self, study: Study, address: str) -> None:
        try:
            import distributed
        except ImportError:
            raise PoolError("a cluster needs dask; install it with: pip install swarmpush[cluster]") from None
        self._address, self._lost, self._is_called_off = address, distributed.scheduler.KilledWorker, False
        self._levels = {name: logging.getLogger(name).level for name in CHATTY}
        for name in CHATTY:
            logging.getLogger(name).setLevel(logging.CRITICAL)
        self._ended: queue.SimpleQueue[int] = queue.SimpleQueue()
        self._futures: dict[int, Any] = {}
        self._versions = versions()
        try:
            self._client = distributed.Client(address, timeout=CONNECT_S, set_as_default=False)
        except (OSError, ValueError) as error:
            self._talk_again()
            raise PoolError(
                f"no Dask scheduler answers at {address} ({error}); start one with `dask scheduler`, or check "
                "the address"
            ) from None
        try:
            self._prepare(study)
        except BaseException:
            self.close()
            raise

    @property
    def n_workers(self) -> int:
        if time.monotonic() - self._looked_at > LOOK_EVERY_S:
            self._n_threads = self._count_threads()
        return self._n_threads

    @property
    def capacity(self) -> int:
        return AHEAD * self.n_workers

    def submit(self, name: int, keys: Sequence[RunKey]) -> None:
        future = self._client.submit(_make, self._study, keys, pure=False, key=f"swarmpush-{self._prefix}-{name}")
        self._futures[name] = future
        future.add_done_callback(lambda _: self._ended.put(name))

    def collect(self, timeout: float) -> list[tuple[int, Made | None]]:
        results: list[tuple[int, Made | None]] = []
        for name in drain(self._ended, timeout):
            try:
                theirs, made = self._futures.pop(name).result()
            except self._lost:
                results.append((name, None))
            except CancelledError:  # by this process, or else because nobody is there any more
                if not self._is_called_off:
                    raise self._is_gone() from None
                results.append((name, Made()))
            else:
                check_versions(self._versions, {"a worker": theirs})
                results.append((name, made))
        if self._client.status != "running":
            raise self._is_gone()
        return results

    def call_off(self) -> None:
        self._is_called_off = True
        self._client.cancel(list(self._futures.values()), force=True)

    def close(self) -> None:
        if self._client.status == "running":
            self.call_off()
        self._client.close()
        self._talk_again()

    def _talk_again(self) -> None:
        for name, level in self._levels.items():
            logging.getLogger(name).setLevel(level)

    def _prepare(self, study: Study) -> None:
        try:
            self._client.wait_for_workers(1, timeout=CONNECT_S)
        except TimeoutError:
            raise PoolError(
                f"the Dask scheduler at {self._address} has no workers; start some with `dask worker {self._address}`"
            ) from None
        try:
            check_versions(self._versions, self._client.run(versions))
            # the study goes to the workers once, as a result, which the scheduler has made again if it gets lost
            self._study = self._client.submit(_given, replace(study), pure=False)
            self._client.submit(_warm_up, self._study, pure=False).result()
        except ModuleNotFoundError as error:
            raise PoolError(f"a worker cannot load {error.name}; install swarmpush on all workers") from None
        self._prefix = self._study.key
        self._n_threads = self._count_threads()

    def _is_gone(self) -> PoolError:
        return PoolError(
            f"the Dask scheduler at {self._address} is gone; start it and its workers again, then repeat the command, "
            "which goes on from what has been written"
        )

    def _count_threads(self) -> int:
        self._looked_at = time.monotonic()
        return max(1, sum(map(int, self._client.nthreads().values())))


def check_versions(ours: Versions, of_workers: Mapping[str, Versions]) -> None:
    """Refuse workers with other versions than this process has.

    Raises:
        PoolError: naming the worker and what differs.
    """
    for address, theirs in of_workers.items():
        differ = [f"{name} {theirs.get(name)} (here {ours[name]})" for name in ours if theirs.get(name) != ours[name]]
        if differ:
            raise PoolError(
                f"{address} has {', '.join(differ)}; results of different versions do not mix, so install the same ones"
            )


# ---- on a worker -------------------------------------------------------------------------------------------------


def _given(study: Study) -> Study:
    return study


def _warm_up(study: Study) -> None:
    warm_up(study.base)


def _make(study: Study, keys: Sequence[RunKey]) -> tuple[Versions, Made]:
    return versions(), make_runs(study, keys, lambda: False)
