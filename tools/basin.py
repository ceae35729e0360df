"""The `basin` case's own side: many starts in the point world, each followed for the same number of legs.

    python tools/basin.py 1000000 100 2      starts, legs each, threads: prints legs, seconds and the peak memory in MB

The inner loop is the package's `trace`, called from a compiled loop over the starts. It runs without Python's lock, so
threads that each take a part of the starts run side by side. What is kept of a start is where its last leg ended.
"""

from __future__ import annotations

import sys
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np

import swarmpush
from swarmpush.compiled import compiled
from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.program import EXACT, MEMORY, NOTES, compile_routine

PARTS = 8  # of the starts per thread, so that a thread that was held up has less left to do than the others


def rig() -> Any:
    """The plain corridor of the case."""
    return swarmpush.load(swarmpush.demo("service_passage"))


def draw_many(s: Any, n: int, seed: int = 0) -> Any:
    """Starts behind the block with any heading: (n, 3) x, y in m and heading in rad.

    The package draws them by address, one by one, which takes longer than following them; here one stream will do.
    """
    r, low = s.pushers.radius, np.zeros(3)
    low[:2] = r
    high = np.array([s.block.rear_at - r, s.channel.width - r, 2.0 * np.pi])
    return np.random.default_rng(seed).uniform(low, high, (n, 3))


@compiled
def _follow(boundary, program, senses, speed, keys, starts, n_legs, ends, surfaces):
    hits, met = np.zeros((n_legs, 6)), np.zeros(n_legs, dtype=np.int64)
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    total = 0
    for i in range(len(starts)):
        memory[:] = 0
        notes[:] = 0.0
        n = trace(boundary, program, senses, 0.0, speed, keys, starts[i], 0.0, hits, met, memory, notes)
        if n > 0:
            ends[i, 0], ends[i, 1], ends[i, 2] = hits[n - 1, 0], hits[n - 1, 1], hits[n - 1, 2]
            surfaces[i] = met[n - 1]
        total += n
    return total


class Legs(NamedTuple):
    """Every leg of some starts: hits (n, n_legs, 6) and surfaces (n, n_legs), columns as in `trace`."""

    hits: Any
    surfaces: Any


class Basin:
    """The compiled engine on one rig, ready to follow starts."""

    def __init__(self, s: Any) -> None:
        program = compile_routine(s.routine, surface_names(s))
        self._fixed = boundary_of(s), program, EXACT, s.pushers.free_speed, stream_keys(0, 1)[0]
        self.follow(draw_many(s, 1), 1)  # compiles

    def follow(self, starts: Any, n_legs: int, n_threads: int = 1) -> int:
        """Follow all starts, keep where each ends, and return the number of legs."""
        self.ends, self.surfaces = np.empty((len(starts), 3)), np.empty(len(starts), dtype=np.int64)

        def part(a: int, b: int) -> int:
            return int(_follow(*self._fixed, starts[a:b], n_legs, self.ends[a:b], self.surfaces[a:b]))

        if n_threads == 1:
            return part(0, len(starts))
        cuts = np.linspace(0, len(starts), n_threads * PARTS + 1).astype(int).tolist()
        with ThreadPoolExecutor(n_threads) as pool:
            return sum(pool.map(part, cuts[:-1], cuts[1:]))

    def legs(self, starts: Any, n_legs: int) -> Legs:
        """The same with every leg written down."""
        boundary, program, senses, speed, keys = self._fixed
        found = Legs(np.zeros((len(starts), n_legs, 6)), np.zeros((len(starts), n_legs), dtype=np.int64))
        for start, hits, surfaces in zip(starts, *found, strict=True):
            memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
            n = trace(boundary, program, senses, 0.0, speed, keys, start, 0.0, hits, surfaces, memory, notes)
            if n < n_legs:
                raise SystemExit(f"a start ended after {n} legs; the case needs a routine that goes on")
        return found


def peak_MB() -> float:
    """The most memory that this process has held so far."""
    status = Path("/proc/self/status")
    if (
        status.exists()
    ):  # Linux passes ru_maxrss on through exec, so it may be that of the process that started this one
        (line,) = (line for line in status.read_text().splitlines() if line.startswith("VmHWM"))
        return int(line.split()[1]) * 1024 / 1e6
    import resource

    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1.0 if sys.platform == "darwin" else 1024.0) / 1e6


def main(n_starts: int, n_legs: int, n_threads: int) -> None:
    """Follow them once and say what it took."""
    s = rig()
    basin, starts = Basin(s), draw_many(s, n_starts)
    start = time.perf_counter()
    n = basin.follow(starts, n_legs, n_threads)
    print(n, time.perf_counter() - start, peak_MB())


if __name__ == "__main__":
    main(*map(int, sys.argv[1:]))
