"""The same tables bit by bit, however a run is carried out: in pieces, spilled to a file, elsewhere, or plainly."""

from __future__ import annotations

import gc
import hashlib
import subprocess
import sys
import warnings
from concurrent.futures import ThreadPoolExecutor
from functools import cache, partial
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from swarmpush.dynamics import build, simulation, world
from swarmpush.dynamics.ledger import SLOTS
from swarmpush.dynamics.loop import advance_plainly
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step
from swarmpush.dynamics.visit_log import VisitLog
from swarmpush.dynamics.world import simulate
from swarmpush.loading import from_tables
from swarmpush.scenario import Scenario

N_STEPS = 8000
N_PLAIN_STEPS = 1500  # a step of the plain loop takes some tenth of a millisecond


def rig(shape: str, heading: str, outline: bool) -> Scenario:
    """A crowded rig: train, post, tapered walls, floor, fluid, slopes, every error and all kinds of acts."""
    pair = {"restitution": 0.4, "friction": 0.3}
    bar = {"nose": 0.03, "trunk": 0.02} if shape == "bar" else {}
    free = {"heading": "free", "turn_drag": 2e-4, "contact_arm": 0.005} if heading == "free" else {}
    wedge = [[0.0, 0.02], [0.6, 0.0], [1.2, 0.01], [1.2, 0.3], [0.5, 0.3], [0.0, 0.29]]
    nose = [[0.0, -0.06], [0.1, -0.08], [0.12, 0.0], [0.1, 0.08], [0.0, 0.06]]
    return from_tables(
        {
            "format": 1,
            "about": {"name": "every feature"},
            "channel": {
                "length": 1.2, "width": 0.3, "slope": 0.02, "cross_slope": -0.03,
                **({"outline": wedge, "posts": [[[0.12, 0.13], [0.16, 0.13], [0.15, 0.17]]]} if outline else {}),
            },
            "block": {
                "length": 0.12, "width": 0.16, "mass": 0.3, "rear_at": 0.3, "centre_of_mass": [0.05, 0.01],
                "centre_of_friction": [0.06, -0.01], **({"outline": nose} if outline else {}),
            },
            "train": [
                {"length": 0.1, "width": 0.2, "mass": 0.2, "rear_at": 0.43, "offset": 0.01, "yaw": "held"},
                {"length": 0.08, "width": 0.1, "mass": 0.1, "rear_at": 0.53},
            ],
            "pushers": {
                "count": 10, "radius": 0.015, "mass": 0.1, "free_speed": 0.6, "stall_force": 0.8, "sideways_drag": 3.0,
                "turn_rate": 6.0, "latency": 0.01, "bump_threshold": 1e-4, "bumper_arc": 4.0,
                "drive_while_turning": 0.3, **bar, **free,
            },
            "floor": {"static_friction": 0.3, "kinetic_friction": 0.2, "gravity": 5.0},
            "fluid": {
                "block_drag": 0.2, "block_drag_across": 0.4, "block_yaw_drag": 1e-3, "near_wall_factor": 1.5,
            },
            "contacts": dict.fromkeys(
                ("pusher_wall", "pusher_block", "pusher_pusher", "block_wall", "block_block"), pair
            ),
            "routine": {
                "stages": [
                    {
                        "name": "go",
                        "acts": [
                            {"act": "run"},
                            {"act": "branch", "on": "contact", "kind": "block", "go": "lean"},
                            {"act": "depart", "angle": 0.6, "side": "either", "spread": 0.3},
                            {"act": "gauge", "maximum": 0.3, "resolution": 0.01},
                            {"act": "branch", "on": "range", "below": 0.08, "go": "look"},
                        ],
                    },
                    {
                        "name": "lean",
                        "acts": [{"act": "slide", "time": 0.1}, {"act": "wander"}, {"act": "advance", "distance": 0.1}],
                        "then": "go",
                    },
                    {
                        "name": "look",
                        "acts": [
                            {"act": "sight", "face": "rear", "half_angle": 0.3},
                            {"act": "branch", "on": "sight", "go": "go"},
                            {"act": "turn", "angle": 1.0},
                        ],
                        "then": "go",
                    },
                ]
            },
            "errors": {
                "turn_bias": 0.05, "turn_sd": 0.1, "heading_diffusion": 0.3, "heading_drift": 0.1, "bearing_step": 0.1,
                "bearing_sd": 0.05, "range_sd": 0.01, "missed_sights": 0.1, "missed_bumps": 0.1, "false_bumps": 0.3,
                "speed_spread": 0.1, "mass_spread": 0.1, "stall_spread": 0.1, "drift_spread": 0.05, "fade_time": 60.0,
                "dropout": 0.02,
            },
            "goal": {"travel": 0.3, "time_limit": 10.0},
        }
    )  # fmt: skip


RIGS = {
    "held discs": rig("disc", "held", outline=False),
    "free discs": rig("disc", "free", outline=True),
    "held bars": rig("bar", "held", outline=True),
    "free bars": rig("bar", "free", outline=False),
}


def run_of(name: str, n_steps: int = N_STEPS) -> Run:
    s = RIGS[name]
    return simulate(s.replace(goal={"time_limit": n_steps * choose_step(s).dt_s}), seed=3, cycles=())


def digest(run: Run) -> str:
    """A hash of all that a run has recorded, bit by bit."""
    found = hashlib.sha256()
    for table in (run.visits, run.block, run.pushers, run.bumps):
        for name in table:
            column = table[name].to_numpy()
            found.update("|".join(column).encode() if column.dtype == object else column.tobytes())
    found.update(repr((run.books, run.energy, run.ended, run.duration_s, run.travel_m, run.causes)).encode())
    return found.hexdigest()


@cache
def usual(name: str) -> str:
    run = run_of(name)
    assert len(run.visits) > 100
    assert {"pusher", "wall", "block"} <= set(run.visits["partner"])
    return digest(run)


@pytest.mark.parametrize("name", RIGS)
@pytest.mark.parametrize("chunk", [1, 37, 1000, 10**9])
def test_in_pieces(name: str, chunk: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """The number of steps between two reports of progress changes nothing."""
    monkeypatch.setattr(world, "CHUNK", chunk)
    assert digest(run_of(name)) == usual(name)


@pytest.mark.parametrize("name", RIGS)
def test_with_little_room_for_visits(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """With a log that must be fetched at nearly every step, and one far too large, the tables stay the same."""
    fetched: list[int] = []

    class Watched(VisitLog):
        def fetch(self, ledger: Any) -> None:
            fetched.append(int(ledger.n_log[0]))
            super().fetch(ledger)

    monkeypatch.setattr(simulation, "VisitLog", Watched)
    new_ledger = build.new_ledger
    for room in (lambda n_moving: SLOTS * n_moving + 2, lambda n_moving: 10**5):
        fetched.clear()
        monkeypatch.setattr(
            build, "new_ledger", lambda at, n_moving, n_pairs, capacity, room=room: new_ledger(
                at, n_moving, n_pairs, room(n_moving)
            )
        )  # fmt: skip
        assert digest(run_of(name)) == usual(name)
        assert (len(fetched) > 20) == (room(1) < 10**5)


@pytest.mark.parametrize("kept", [0, 5, 50])
@pytest.mark.parametrize("name", ["held discs", "free bars"])
def test_spilled_to_a_file(name: str, kept: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """Visits that were put down in a temporary file come back as they were."""
    logs: list[VisitLog] = []

    def log() -> VisitLog:
        logs.append(VisitLog(kept=kept))
        return logs[-1]

    monkeypatch.setattr(simulation, "VisitLog", log)
    monkeypatch.setattr(world, "CHUNK", 100)
    assert digest(run_of(name)) == usual(name)
    assert logs[0]._file is not None


def test_temporary_file_is_closed(monkeypatch: pytest.MonkeyPatch) -> None:
    """The temporary file goes with its log, without a warning about a file left open."""
    monkeypatch.setattr(simulation, "VisitLog", partial(VisitLog, kept=0))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with monkeypatch.context() as patched:
            unraised: list[object] = []
            patched.setattr(sys, "unraisablehook", unraised.append)
            run_of("held discs")
            gc.collect()
    assert unraised == []


def test_in_another_process() -> None:
    """A fresh process, with hashes and addresses of its own, gives the same tables."""
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); from test_same_bits import *; "
        "print(*(digest(run_of(name)) for name in RIGS))"
    )
    folder = str(Path(__file__).parent)
    other = subprocess.run(
        [sys.executable, "-c", code, folder], capture_output=True, text=True, check=True, timeout=300
    )  # fmt: skip
    assert other.stdout.split() == [usual(name) for name in RIGS]


@pytest.mark.parametrize("n_threads", [2, 5])
def test_in_threads(n_threads: int) -> None:
    """Runs side by side in any number of threads do not disturb each other."""
    names = [*RIGS, *RIGS]
    with ThreadPoolExecutor(n_threads) as pool:
        side_by_side = list(pool.map(lambda name: digest(run_of(name)), names))
    assert side_by_side == [usual(name) for name in names]


@pytest.mark.parametrize("name", RIGS)
def test_plainly(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """The compiled loop and the one through pymunk's public interface give the same run."""
    fast = run_of(name, N_PLAIN_STEPS)
    monkeypatch.setattr(simulation, "_stepper", lambda: advance_plainly)
    plain = run_of(name, N_PLAIN_STEPS)
    assert len(fast.visits) > 15
    assert digest(fast) == digest(plain)


def test_a_digest_tells_runs_apart() -> None:
    """One bit more in one row makes another digest, and so does another seed."""
    run = run_of("held discs", 200)
    before = digest(run)
    run.pushers.loc[0, "x_m"] = np.nextafter(run.pushers.loc[0, "x_m"], 1.0)
    assert digest(run) != before
    other = simulate(run.scenario, seed=4, cycles=())
    assert digest(other) != before


# ---- memory -------------------------------------------------------------------------------------------------------

# MB that a run of a million steps may need beyond one of 100 000: the visits of both are kept, 135 bytes and two tables
# each, some 10 000 of them at most; a leak of 64 bytes a step would be 58 MB
FLAT_MB = 25.0

MEMORY = """
import resource, sys
import swarmpush
from swarmpush.dynamics.steps import choose_step
s = swarmpush.load(swarmpush.demo("service_passage")).replace(channel={"length": 1e3}, goal={"travel": 900.0})
dt = choose_step(s).dt_s
for n_steps in (100_000, 1_000_000):
    run = swarmpush.simulate(s.replace(goal={"travel": 900.0, "time_limit": n_steps * dt}), seed=1, cycles=())
    assert run.ended == "time", run.ended
    print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
    print(len(run.visits), file=sys.stderr)
"""


@pytest.mark.skipif(sys.platform == "win32", reason="the system's own count of memory is asked for")
def test_memory_stays_flat() -> None:
    """Ten times as many steps need no more memory than the visits that they add."""
    done = subprocess.run([sys.executable, "-c", MEMORY], capture_output=True, text=True, check=True, timeout=300)
    short, long = map(float, done.stdout.split())
    assert long - short < FLAT_MB
