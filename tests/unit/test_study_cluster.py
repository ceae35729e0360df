"""Studies on a Dask cluster: a real scheduler and real workers, as processes of this machine."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.util import find_spec
from pathlib import Path
from unittest.mock import patch

import pytest
from small_studies import quick_base, small_study

from swarmpush.output import versions
from swarmpush.studies import cluster
from swarmpush.studies.cluster import check_versions
from swarmpush.studies.pools import PoolError
from swarmpush.studies.runner import run_study

PATIENCE_S = 30.0  # for a process to start

is_installed = find_spec("distributed") is not None
needs_dask = pytest.mark.skipif(not is_installed, reason="dask is not installed")


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def start(folder: Path, *arguments: str) -> subprocess.Popen[bytes]:
    path = os.pathsep.join([str(Path(__file__).parent), *sys.path])
    environment = os.environ | {"PYTHONPATH": path, "DASK_DISTRIBUTED__WORKER__DAEMON": "False"}
    quiet = subprocess.DEVNULL
    return subprocess.Popen([sys.executable, "-m", *arguments], cwd=folder, env=environment, stdout=quiet, stderr=quiet)


@contextmanager
def scheduler(folder: Path) -> Iterator[str]:
    """A scheduler's address."""
    port = free_port()
    arguments = ("--host", "127.0.0.1", "--port", str(port), "--no-dashboard")
    process = start(folder, "distributed.cli.dask_scheduler", *arguments)
    try:
        deadline = time.monotonic() + PATIENCE_S
        while time.monotonic() < deadline:
            with socket.socket() as probe:
                if probe.connect_ex(("127.0.0.1", port)) == 0:
                    break
            time.sleep(0.05)
        yield f"tcp://127.0.0.1:{port}"
    finally:
        process.kill()
        process.wait()


@contextmanager
def workers(folder: Path, address: str, n: int) -> Iterator[list[subprocess.Popen[bytes]]]:
    """Workers of one thread each, that nobody starts again."""
    arguments = (address, "--nthreads", "1", "--no-nanny", "--no-dashboard", "--local-directory", str(folder))
    processes = [start(folder, "distributed.cli.dask_worker", *arguments) for _ in range(n)]
    try:
        yield processes
    finally:
        for process in processes:
            process.kill()
            process.wait()


@needs_dask
@pytest.mark.slow
def test_a_cluster_makes_the_same_runs(tmp_path: Path) -> None:
    """A cluster of which a worker is killed in the midst gives the table of this machine, to the last bit."""
    study = small_study(6, 10, base=quick_base(3.0))
    run_study(study, tmp_path / "here", workers=2)
    with scheduler(tmp_path) as address, workers(tmp_path, address, 2) as processes:

        def kill(done: int, *_: int) -> None:
            if done > 10 and processes[0].poll() is None:
                processes[0].send_signal(signal.SIGKILL)
                processes[0].wait()

        with patch.object(cluster.ClusterPool, "chunk_s", 0.3):
            summary = run_study(study, tmp_path / "there", cluster=address, progress=kill)
        assert processes[0].poll() is not None
        assert (summary.n_runs_done, summary.n_failures) == (60, 0)
        tables = [(tmp_path / name / "runs.parquet").read_bytes() for name in ("here", "there")]
        assert tables[0] == tables[1]

        other = dict(versions()) | {"swarmpush": "99.1"}
        with patch.object(cluster, "versions", lambda: other), pytest.raises(PoolError, match=r"swarmpush .*99.1"):
            run_study(study, tmp_path / "other", cluster=address)


@needs_dask
@pytest.mark.slow
def test_a_cluster_without_workers_or_scheduler_is_told(tmp_path: Path) -> None:
    """Where nobody answers, and where nobody works, one sentence says so and what to do, soon."""
    with patch.object(cluster, "CONNECT_S", 0.5):
        address = f"tcp://127.0.0.1:{free_port()}"
        with pytest.raises(PoolError, match=rf"no Dask scheduler answers at {address}.*dask scheduler"):
            run_study(small_study(), tmp_path / "a", cluster=address)
        with pytest.raises(PoolError, match=r"no Dask scheduler answers at nonsense"):
            run_study(small_study(), tmp_path / "b", cluster="nonsense://here")
        with scheduler(tmp_path) as address, pytest.raises(PoolError, match=r"has no workers.*dask worker tcp"):
            run_study(small_study(), tmp_path / "c", cluster=address)


def test_a_cluster_needs_dask(tmp_path: Path) -> None:
    """Without dask there is one error, which says how to install it."""
    with patch.dict(sys.modules, {"distributed": None}), pytest.raises(PoolError, match=r"pip install swarmpush\[clu"):
        run_study(small_study(), tmp_path, cluster="tcp://127.0.0.1:8786")


def test_versions_must_match() -> None:
    """Workers with the same versions pass; else the first that differs is named with what it has."""
    ours = {"swarmpush": "1.0", "numpy": "2.0"}
    check_versions(ours, {"tcp://a": dict(ours), "tcp://b": dict(ours)})
    with pytest.raises(PoolError, match=r"tcp://b has numpy 2.1 \(here 2.0\)"):
        check_versions(ours, {"tcp://a": dict(ours), "tcp://b": ours | {"numpy": "2.1"}})
    with pytest.raises(PoolError, match=r"tcp://b has swarmpush None"):
        check_versions(ours, {"tcp://b": {"numpy": "2.0"}})
