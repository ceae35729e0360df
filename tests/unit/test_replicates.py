"""The runner of many runs: what is made, what is kept, and how it ends."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from swarmpush.auditing.journal import Journal
from swarmpush.auditing.replicates import Stopped, Task, run_tasks

TASKS = [Task(level, k) for level in ("low", "high") for k in range(3)]
PATIENCE = 10.0  # s: far more than any of this takes

LookUp = Callable[[float], None]


def row(task: Task) -> dict[str, Any]:
    return {"rung": task.level, "replicate": task.replicate, "block_speed_m_s": float(task.replicate)}


def work(task: Task, look_up: LookUp) -> dict[str, Any]:
    look_up(0.5)
    return row(task)


@pytest.mark.parametrize("workers", [1, 3, None])
def test_every_task_has_its_row(workers: int | None) -> None:
    """The rows come in the order of the tasks, whoever made them."""
    rows = run_tasks(TASKS, work, workers=workers)
    assert list(rows) == TASKS
    assert list(rows.values()) == list(map(row, TASKS))


def test_long_runs_start_first() -> None:
    """One worker starts with the tasks to be made again, then goes from the last task to the first."""
    begun: list[Task] = []

    def noted(task: Task, look_up: LookUp) -> dict[str, Any]:
        begun.append(task)
        return work(task, look_up)

    run_tasks(TASKS, noted, again=(TASKS[1],), workers=1)
    assert begun == [TASKS[1], TASKS[5], TASKS[4], TASKS[3], TASKS[2], TASKS[0]]


def test_progress_counts_every_run(tmp_path: Path) -> None:
    """Runs in the journal count as done, and those to be made again are made; the journal then holds each once."""
    journal = Journal(tmp_path / "journal", {"of": "test"})
    for task in TASKS[:2]:
        journal.add(row(task))
    told: list[tuple[int, int, str]] = []
    run_tasks(
        TASKS, work, journal=Journal(tmp_path / "journal", {"of": "test"}), again=(TASKS[0],), workers=1,
        progress=lambda *what: told.append(what),
    )  # fmt: skip
    assert told == [(2, 6, "low"), (3, 6, "high"), (4, 6, "high"), (5, 6, "high"), (6, 6, "low")]
    assert (tmp_path / "journal").read_text().count("\n") == 1 + len(TASKS)


def until_stopped(look_up: LookUp) -> None:
    """A run that goes on until it is called off."""
    deadline = time.monotonic() + PATIENCE
    while time.monotonic() < deadline:
        look_up(0.1)
        time.sleep(0.001)
    raise AssertionError("nobody stopped this run")


def test_a_run_that_fails_ends_all(tmp_path: Path) -> None:
    """An error in a run is passed on, runs under way stop, and what had ended is in the journal."""
    begun: list[Task] = []

    def failing(task: Task, look_up: LookUp) -> dict[str, Any]:
        begun.append(task)
        if task == TASKS[4]:
            raise RuntimeError("broken")
        if task in TASKS[:4]:
            until_stopped(look_up)
        return work(task, look_up)

    with pytest.raises(RuntimeError, match="broken"):
        run_tasks(TASKS, failing, journal=Journal(tmp_path / "journal", {}), workers=1)
    assert TASKS[0] not in begun
    assert set(Journal(tmp_path / "journal", {}).rows) == {TASKS[5]}


def test_an_interruption_keeps_what_has_ended(tmp_path: Path) -> None:
    """On an interruption runs under way are told to stop, and runs that have ended are kept, seen or not."""
    is_under_way = threading.Event()
    stopped: list[Task] = []

    def slow(task: Task, look_up: LookUp) -> dict[str, Any]:
        if task in TASKS[4:]:
            return work(task, look_up)
        is_under_way.set()
        with pytest.raises(Stopped):
            until_stopped(look_up)
        stopped.append(task)
        raise Stopped

    def interrupt(*_: object) -> None:
        assert is_under_way.wait(PATIENCE)  # the second run has ended by then, and has not been looked at
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        run_tasks(TASKS, slow, journal=Journal(tmp_path / "journal", {}), workers=1, progress=interrupt)
    assert stopped == [TASKS[3]]
    assert set(Journal(tmp_path / "journal", {}).rows) == {TASKS[4], TASKS[5]}
