"""Run the body world on many random scenarios and name what goes wrong.

    python tools/soak.py                      1000 scenarios, 10 s of model time each
    python tools/soak.py --scenarios 100 --first 5000 --seconds 2 --limit 5 --workers 2
    python tools/soak.py --replay soak/fault_17.json     one saved scenario again, here, with its faults and its tables

Scenarios are those of `tests/property/random_scenarios.py`, one per seed from `--first` on; what must hold of each run
is in `tests/property/sound_runs.py`. A scenario gets `--limit` seconds of wall time: one that needs more is cut off at
what it has done by then, and counted as such. Runs happen in processes of their own, so that a crash of
the interpreter costs one run. Scenarios with faults are saved in `--folder` for replay.

Exit code: 0 when all runs were sound, else 1.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import subprocess
import sys
import threading
import time
from collections import Counter
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

PROJECT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(PROJECT / "tests" / "property"))

STUCK = 120.0  # s: a process that is so much over its limit will not come back
Result = dict[str, Any]


class TimeUp(Exception):
    """The wall time is used up; holds the share of the run that is done."""


# ---- in a worker ------------------------------------------------------------------------------------------------


def soak_one(s: Any, seconds: float, limit: float) -> tuple[Any, bool]:
    """The run of a scenario for so many seconds of model time, or for what can be done within the limit of wall time;
    and whether it was cut off."""
    from swarmpush.dynamics.world import simulate

    begin = time.monotonic()

    def watch(share: float) -> None:
        if time.monotonic() - begin > limit:
            raise TimeUp(share)

    s = s.replace(goal={"time_limit": seconds})
    try:
        return simulate(s, cycles=(), progress=watch), False
    except TimeUp as up:
        return simulate(s.replace(goal={"time_limit": seconds * up.args[0]}), cycles=()), True


def work(seconds: float, limit: float) -> None:
    """Read seeds from the standard input, and write a line of JSON for each run."""
    import warnings

    from random_scenarios import seeded_scenario
    from sound_runs import faults_of

    for line in sys.stdin:
        begin, result = time.monotonic(), {"seed": int(line), "faults": [], "warnings": []}
        with warnings.catch_warnings(record=True) as caught:
            warnings.simplefilter("always")
            try:
                run, is_cut = soak_one(seeded_scenario(int(line)), seconds, limit)
                result |= {
                    "ended": run.ended, "is_cut": is_cut, "model_s": run.duration_s, "visits": len(run.visits),
                    "steps": round(run.duration_s / run.steps.dt_s), "momentum": run.books.residual_rel,
                    "turning": run.books.residual_turn_rel, "energy": run.energy.residual_rel,
                    "overlap": run.overlap_max_m / run.scenario.pushers.radius,
                }  # fmt: skip
                result["faults"] = faults_of(run)
            except Exception as error:
                result["faults"] = [f"{type(error).__name__}: {error}"]
        result["faults"] += [f"warning: {w.message}" for w in caught]
        result["wall_s"] = time.monotonic() - begin
        print(json.dumps(result), flush=True)


# ---- in the parent ----------------------------------------------------------------------------------------------


class Worker:
    """A process that makes runs, and is replaced when it dies."""

    def __init__(self, seconds: float, limit: float) -> None:
        self._command = [sys.executable, __file__, "--worker", "--seconds", str(seconds), "--limit", str(limit)]
        self._patience = 2 * limit + STUCK
        self._process: subprocess.Popen[str] | None = None

    def run(self, seed: int) -> Result:
        """The result of a seed; of a process that died or had to be killed, how that went."""
        if self._process is None:
            self._process = subprocess.Popen(self._command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
        process = self._process
        assert process.stdin
        assert process.stdout
        alarm = threading.Timer(self._patience, process.kill)
        alarm.start()
        try:
            process.stdin.write(f"{seed}\n")
            process.stdin.flush()
            line = process.stdout.readline()
        except BrokenPipeError:
            line = ""
        finally:
            alarm.cancel()
        if line:
            result: Result = json.loads(line)
            return result
        return {"seed": seed, "faults": [f"the process died with exit code {self.close()}"], "ended": "crash"}

    def close(self) -> int:
        """Let the process end, if there is one; returns its exit code."""
        process, self._process = self._process, None
        if process is None:
            return 0
        for pipe in (process.stdin, process.stdout):
            with contextlib.suppress(OSError):  # a dead process cannot be sent what is still in the pipe
                if pipe:
                    pipe.close()
        return process.wait()


def soak(first: int, n: int, seconds: float, limit: float, n_workers: int) -> Iterator[Result]:
    """The results of n seeds in order."""
    local, workers = threading.local(), []

    def one(seed: int) -> Result:
        if not hasattr(local, "worker"):
            local.worker = Worker(seconds, limit)
            workers.append(local.worker)
        found: Result = local.worker.run(seed)
        return found

    with ThreadPoolExecutor(n_workers) as pool:
        yield from pool.map(one, range(first, first + n))
    for worker in workers:
        worker.close()


def save(result: Result, folder: Path) -> Path:
    """Write the scenario of a run with faults, for `--replay`."""
    from random_scenarios import seeded_scenario

    folder.mkdir(parents=True, exist_ok=True)
    path = folder / f"fault_{result['seed']}.json"
    scenario = seeded_scenario(result["seed"]).to_tables()
    path.write_text(json.dumps({"result": result, "scenario": scenario}, indent=1), encoding="utf-8")
    return path


def report(results: list[Result], wall: float) -> None:
    """Print the table of endings and the worst residuals."""
    endings = Counter(result.get("ended", "exception") for result in results)
    print(f"\n{'ending':60} runs")
    for ending, count in endings.most_common():
        print(f"{ending:60} {count:4}")
    print(f"\n{'worst':12} {'value':>10}  seed")
    for name in ("momentum", "turning", "energy", "overlap", "wall_s"):
        with_it = [result for result in results if name in result]
        if with_it:
            worst = max(with_it, key=lambda result: result[name])
            print(f"{name:12} {worst[name]:10.2e}  {worst['seed']}")
    steps, visits = (sum(result.get(name, 0) for result in results) for name in ("steps", "visits"))
    n_cut, faulty = sum(result.get("is_cut", False) for result in results), [r for r in results if r["faults"]]
    print(
        f"\n{len(results)} runs, {steps:.3g} steps, {visits:.3g} visits in {wall:.0f} s; {n_cut} cut off by the limit"
    )
    print(f"{len(faulty)} with faults")


def replay(path: Path, seconds: float, limit: float) -> int:
    """Run a saved scenario in this process and print its faults and tables."""
    from sound_runs import faults_of

    from swarmpush.loading import from_tables

    run, _ = soak_one(from_tables(json.loads(path.read_text(encoding="utf-8"))["scenario"]), seconds, limit)
    faults = faults_of(run)
    print(run.ended, run.steps, run.books, run.energy, run.visits.tail(20).to_string(), sep="\n")
    print(*(faults or ["sound"]), sep="\n")
    return 1 if faults else 0


def main() -> int:
    """Soak, report, and say by the exit code whether all was well."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--scenarios", type=int, default=1000)
    parser.add_argument("--first", type=int, default=0, help="first seed")
    parser.add_argument("--seconds", type=float, default=10.0, help="model time of each run")
    parser.add_argument("--limit", type=float, default=10.0, help="wall time of each run, s")
    parser.add_argument("--workers", type=int, default=1)
    parser.add_argument("--folder", type=Path, default=Path("soak"), help="where scenarios with faults are saved")
    parser.add_argument("--replay", type=Path, help="a saved scenario")
    parser.add_argument("--worker", action="store_true", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.worker:
        work(options.seconds, options.limit)
        return 0
    if options.replay:
        return replay(options.replay, options.seconds, options.limit)
    begin, results = time.monotonic(), []
    for result in soak(options.first, options.scenarios, options.seconds, options.limit, options.workers):
        results.append(result)
        if result["faults"]:
            print(
                f"seed {result['seed']}: {'; '.join(result['faults'])}; saved as {save(result, options.folder)}",
                flush=True,
            )
    report(results, time.monotonic() - begin)
    return 1 if any(result["faults"] for result in results) else 0


if __name__ == "__main__":
    sys.exit(main())
