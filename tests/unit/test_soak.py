"""The soak: a process that dies is named, and what was saved can be replayed."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parents[2] / "tools"))

import soak


def worker_of(code: str, patience: float = 60.0) -> soak.Worker:
    worker = soak.Worker(seconds=1.0, limit=1.0)
    worker._command = [sys.executable, "-c", code]
    worker._patience = patience
    return worker


def test_a_crash_is_named() -> None:
    """A process that the interpreter takes down costs its own run, and the next one gets a new process."""
    worker = worker_of("import os; input(); os.abort()")
    for seed in (5, 6):
        result = worker.run(seed)
        assert (result["seed"], result["ended"]) == (seed, "crash")
        assert "died with exit code" in result["faults"][0]


def test_a_process_that_hangs_is_ended() -> None:
    """A process that does not come back in its time is ended, and named like one that died."""
    result = worker_of("import time; time.sleep(600)", patience=0.5).run(7)
    assert result["ended"] == "crash"


def test_runs_are_made_and_replayed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """Runs come back in order with their measures, and a saved scenario runs again."""
    results = list(soak.soak(first=3, n=2, seconds=0.5, limit=5.0, n_workers=1))
    assert [result["seed"] for result in results] == [3, 4]
    assert all(result["faults"] == [] and result["steps"] > 0 for result in results)
    soak.report(results, wall=1.0)
    assert "2 runs" in capsys.readouterr().out
    assert soak.replay(soak.save(results[0], tmp_path), seconds=0.5, limit=5.0) == 0
    assert "sound" in capsys.readouterr().out


def test_a_run_beyond_its_limit_is_cut_off() -> None:
    """What takes longer than the limit of wall time is run for as long as it could be."""
    from random_scenarios import seeded_scenario

    run, is_cut = soak.soak_one(seeded_scenario(3), seconds=1e6, limit=0.0)
    assert is_cut
    assert 0.0 < run.duration_s < 1e6
