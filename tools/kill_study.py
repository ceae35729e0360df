"""Kill a study again and again while it runs, and compare what it gives in the end with one that was left alone.

    python tools/kill_study.py                      50 kills of a study of 400 runs
    python tools/kill_study.py --kills 5 --runs 60 --workers 2 --first-seed 3

Kills are by signal 9 and of three kinds by turns: of the process that leads the study at a random moment, of one of
its workers likewise, and of the leader in the midst of writing a part or the final table, or just after. After each
but those of workers the same call is made again. When a study has come to its end, its `runs.parquet` is compared byte
by byte with the one of a study that nobody disturbed, and the next one begins, until the number of kills is reached.

Needs Linux, where processes can be found by their parents. Exit code: 0 when all tables were identical and no process
was left behind, else 1.
"""

from __future__ import annotations

import argparse
import os
import random
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

LEADER, WORKER, WRITE = KINDS = ("leader", "worker", "write")
START_S = 1.0  # that a leader gets before it is killed, so that the work gets ahead
LONGEST_S = 4.0  # after that at most
MOST_WRITES = 6  # in the midst of one of which a leader dies
WAIT_S = 0.2  # between two parts, so that there are many
REPLICATES = 10
PATIENCE = 10.0  # s in which processes must be gone
REFERENCE = "undisturbed"


@dataclass
class Tally:
    """What came of all the kills.

    kills: by kind. studies: brought to their end. lost, doubled: runs. identical: studies with the same bytes as the
    undisturbed one. stray: processes that outlived their leader.
    """

    kills: Counter[str] = field(default_factory=Counter)
    studies: int = 0
    lost: int = 0
    doubled: int = 0
    identical: int = 0
    stray: int = 0

    @property
    def is_good(self) -> bool:
        return self.lost == self.doubled == self.stray == 0 and self.identical == self.studies > 0


# ---- the leader --------------------------------------------------------------------------------------------------


def lead(folder: Path, n_runs: int, workers: int, dies_in: int, is_half: bool) -> None:
    """Run the study in its folder to the end, or die in the midst of a write: before it is whole, or just after."""
    import pandas as pd

    import swarmpush
    from swarmpush.studies import store
    from swarmpush.studies.runner import run_study
    from swarmpush.studies.study import Study

    put_in_place, n_writes = store._put_in_place, 0

    def put_or_die(temporary: Path, path: Path) -> None:
        nonlocal n_writes
        n_writes += 1
        if n_writes != dies_in:
            put_in_place(temporary, path)
            return
        if is_half:
            os.truncate(temporary, temporary.stat().st_size // 2)
        else:
            put_in_place(temporary, path)
        os.kill(os.getpid(), signal.SIGKILL)

    store._put_in_place = put_or_die
    store.SHORTEST_WAIT = WAIT_S
    base = swarmpush.load(swarmpush.demo("service_passage")).replace(goal={"time_limit": 8.0})
    n_points = -(-n_runs // REPLICATES)
    points = pd.DataFrame({"errors.turn_sd": [0.002 * k for k in range(n_points)]})
    points.index.name = "point"
    run_study(Study("kills", "", base, points, REPLICATES, None, 1, ("block speed",), "grid"), folder, workers=workers)


# ---- the killer --------------------------------------------------------------------------------------------------


def kill_often(n_kills: int, n_runs: int, workers: int, folder: Path, first_seed: int = 0) -> Tally:
    """Run studies and kill them, until there were so many kills and the last study has come to its end."""
    chance, tally = random.Random(first_seed), Tally()
    reference = folder / REFERENCE
    if _start(reference, n_runs, workers).wait() != 0:
        raise RuntimeError("the undisturbed study does not come to its end")
    while tally.kills.total() < n_kills:
        tally.studies += 1
        study = folder / f"killed-{tally.studies}"
        while not _run_and_kill(study, n_runs, workers, n_kills, chance, tally):
            pass
        _compare(study, reference, tally)
    return tally


def _start(folder: Path, n_runs: int, workers: int, dies_in: int = 0, is_half: bool = False) -> subprocess.Popen[bytes]:
    options = ["--lead", folder, "--runs", n_runs, "--workers", workers, "--dies-in", dies_in, *["--half"][:is_half]]
    # what the killed leave to the resource tracker is reported by that on the error stream
    return subprocess.Popen([sys.executable, __file__, *map(str, options)], stderr=subprocess.DEVNULL)


def _run_and_kill(folder: Path, n_runs: int, workers: int, n_kills: int, chance: random.Random, tally: Tally) -> bool:
    """Make the call once, with a kill if there are still some to come; whether the study has come to its end."""
    kind = KINDS[tally.kills.total() % len(KINDS)] if tally.kills.total() < n_kills else ""
    dies_in = chance.randint(1, MOST_WRITES) if kind == WRITE else 0
    leader = _start(folder, n_runs, workers, dies_in, chance.random() < 0.5)
    family: set[int] = set()
    moment = time.monotonic() + START_S + chance.uniform(0.0, LONGEST_S)
    while leader.poll() is None:
        family |= set(descendants(leader.pid))
        if kind in (LEADER, WORKER) and time.monotonic() > moment:
            victims = [leader.pid] if kind == LEADER else workers_of(leader.pid)
            if victims:
                tally.kills[kind] += _kill(chance.choice(victims))
                kind = ""
        time.sleep(0.02)
    tally.kills[WRITE] += kind == WRITE and leader.returncode == -signal.SIGKILL
    tally.stray += _strays(family)
    if leader.returncode not in (0, -signal.SIGKILL):
        raise RuntimeError(f"a study ended with {leader.returncode}")
    return leader.returncode == 0


def _kill(pid: int) -> int:
    try:
        os.kill(pid, signal.SIGKILL)
    except ProcessLookupError:
        return 0
    return 1


def _compare(study: Path, reference: Path, tally: Tally) -> None:
    import pandas as pd

    ours, theirs = (folder / "runs.parquet" for folder in (study, reference))
    keys, expected = (pd.read_parquet(path)[["point", "replicate"]] for path in (ours, theirs))
    tally.doubled += int(keys.duplicated().sum())
    tally.lost += len(expected) - len(keys.drop_duplicates().merge(expected))
    tally.identical += ours.read_bytes() == theirs.read_bytes()


def descendants(pid: int) -> list[int]:
    """Processes that descend from one, nearest first."""
    parents: dict[int, int] = {}
    for entry in Path("/proc").iterdir():
        if entry.name.isdecimal():
            try:
                parents[int(entry.name)] = int((entry / "stat").read_text().rpartition(")")[2].split()[1])
            except OSError:
                continue  # it has ended meanwhile
    found = [pid]
    for parent in found:
        found += [child for child, its_parent in parents.items() if its_parent == parent]
    return found[1:]


def workers_of(leader: int) -> list[int]:
    """The workers among the descendants of a leader: they are forked from the server that is its child."""
    return [pid for pid in descendants(leader) if pid not in _children(leader)]


def _children(pid: int) -> list[int]:
    return [int(child) for child in Path(f"/proc/{pid}/task/{pid}/children").read_text().split()]


def _strays(family: set[int]) -> int:
    deadline = time.monotonic() + PATIENCE
    while alive := [pid for pid in family if Path(f"/proc/{pid}").exists()]:
        if time.monotonic() > deadline:
            return len(alive)
        time.sleep(0.05)
    return 0


def main() -> int:
    parser = argparse.ArgumentParser(description="Kill a study again and again, and compare what it gives.")
    parser.add_argument("--kills", type=int, default=50)
    parser.add_argument("--runs", type=int, default=400)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--first-seed", type=int, default=0, help="of the moments of the kills")
    parser.add_argument("--lead", type=Path, help=argparse.SUPPRESS)
    parser.add_argument("--dies-in", type=int, default=0, help=argparse.SUPPRESS)
    parser.add_argument("--half", action="store_true", help=argparse.SUPPRESS)
    given = parser.parse_args()
    if given.lead:
        lead(given.lead, given.runs, given.workers, given.dies_in, given.half)
        return 0
    with tempfile.TemporaryDirectory() as folder:
        tally = kill_often(given.kills, given.runs, given.workers, Path(folder), given.first_seed)
    kinds = ", ".join(f"{tally.kills[kind]} {kind}" for kind in KINDS)
    print(f"kills: {tally.kills.total()} ({kinds}); studies of {given.runs} runs: {tally.studies}")
    print(f"runs lost: {tally.lost}; doubled: {tally.doubled}; processes left behind: {tally.stray}")
    print(f"final tables identical to the undisturbed one: {tally.identical} of {tally.studies}")
    return 0 if tally.is_good else 1


if __name__ == "__main__":
    sys.exit(main())
