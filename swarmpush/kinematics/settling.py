"""Where many starts end up: exact pushers followed chunk by chunk on threads, and the laps they were seen in."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import Fate, LapTrace, settle, settle_many, trace_lap
from swarmpush.kinematics.boundary import REAR, Boundary, boundary_of, surface_names
from swarmpush.kinematics.laps import BUDGET, IN_THE_OPEN, MAX_LAP_BUMPS
from swarmpush.program import EXACT, MEMORY, NOTES, Contact, Op, Program, compile_routine
from swarmpush.routine import Device
from swarmpush.scenario import Scenario

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[[float, float, str], None]

CHUNK = 8192  # starts; some tens of milliseconds of work, a megabyte of memory
MAX_SEEN = 2000  # laps of which an example is kept
NAMED = 6  # surfaces of a lap that its short name has
ATTRACTING, NEUTRAL, REPELLING = "attracting", "neutral", "repelling"
_ROUNDING = 1e-9  # of the size, and rad: a lap that misses by less is closed, a multiplier this close to 1 is 1
_NEWTON_STEPS = 20


class Rig(NamedTuple):
    """A scenario's point world: boundary, names of its surfaces, compiled routine, random streams.

    speed: of the pusher, m/s. size: a length of the region, m, to which tolerances refer.
    """

    boundary: Boundary
    names: tuple[str, ...]
    program: Program
    keys: NDArray[np.uint64]
    speed: float
    size: float


def rig_of(s: Scenario) -> Rig:
    """The point world in which laps are looked for: a departure with a spread is taken at its mean angle."""
    names = surface_names(s)
    program = compile_routine(s.routine, names)
    program["spread"][program["op"] == Op.DEPART] = 0.0
    return Rig(boundary_of(s), names, program, stream_keys(0, 1)[0], s.pushers.free_speed, s.channel.width)


class Seen(NamedTuple):
    """A lap as a start was seen to repeat it.

    signature, n_rear: see `bounce.Settled`. state: (2,) place along the rear face in m and heading in rad of an arrival
    there. memory, notes: (MEMORY,), (NOTES,) what the pusher remembers at that moment, the clock being 0.
    """

    signature: int
    n_rear: int
    state: FloatArray
    memory: IntArray
    notes: FloatArray


@dataclass(frozen=True)
class Ends:
    """What became of starts.

    fates: (n,) numbers of `bounce.Fate`. signatures: (n,) of the lap, 0 unless locked. seen: an example of each lap, in
    order of the first start that it caught.
    """

    fates: NDArray[np.int8]
    signatures: IntArray
    seen: tuple[Seen, ...]


def settle_starts(
    s: Scenario, starts: FloatArray, *, workers: int | None = None, progress: Progress | None = None
) -> Ends:
    """Follow starts without any error, the block standing still, until each repeats a lap or has spent its budget.

    A routine that draws sides or directions by chance has no laps, whatever it may happen to repeat.

    Arguments:
        s: the scenario. starts: (n, 3) x, y in m and heading in rad.
        workers: threads; one per processor unless given. The result does not depend on it.
        progress: called after each chunk with starts done, starts in all, and a word.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage"))
    >>> settle_starts(s, np.array([[0.5, 0.1, 0.3], [0.6, 0.2, 1.0]])).fates
    array([0, 0], dtype=int8)
    """
    rig, n = rig_of(s), len(starts)
    keys = stream_keys(0, -(-n // CHUNK))
    fates, signatures = np.zeros(n, dtype=np.int8), np.zeros(n, dtype=np.int64)

    def settle_chunk(k: int) -> list[int]:
        part = slice(k * CHUNK, min((k + 1) * CHUNK, n))
        here = np.ascontiguousarray(starts[part])
        ends, states = np.zeros((len(here), 3), dtype=np.int64), np.zeros((len(here), 2))
        memories = np.zeros((len(here), MEMORY), dtype=np.int64)
        settle_many(rig.boundary, rig.program, EXACT, keys[k], rig.speed, here, BUDGET, ends, states, memories)
        fates[part], signatures[part] = ends[:, 0], ends[:, 2]
        locked = np.flatnonzero(ends[:, 0] == Fate.LOCKED)
        _, first = np.unique(ends[locked, 2], return_index=True)
        return [k * CHUNK + int(i) for i in locked[np.sort(first)]]

    seen: dict[int, Seen] = {}
    pool = ThreadPoolExecutor(workers or os.cpu_count())
    try:
        for k, found in enumerate(pool.map(settle_chunk, range(len(keys)))):
            for i in found:
                if signatures[i] not in seen and len(seen) < MAX_SEEN:
                    seen[signatures[i]] = _seen(rig, starts[i])
            if progress:
                progress(min((k + 1) * CHUNK, n), n, "following starts")
    finally:
        pool.shutdown(cancel_futures=True)
    if Device.RANDOM in s.routine.kit():
        fates[fates == Fate.LOCKED] = Fate.UNDECIDED
        signatures[:] = 0
        seen = {}
    return Ends(fates, signatures, tuple(seen.values()))


def _seen(rig: Rig, start: FloatArray) -> Seen:
    """The lap in which a start ends that is known to end in one."""
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    x, y, heading = start.tolist()
    end = settle(
        rig.boundary, rig.program, EXACT, rig.keys, rig.speed,
        x, y, heading, memory, notes, int(Contact.NONE), heading + math.pi, BUDGET,
    )  # fmt: skip
    return Seen(end.signature, end.period, np.array([end.along, end.heading]), memory, notes)


def trace_seen(rig: Rig, seen: Seen) -> tuple[LapTrace, FloatArray, tuple[str, ...]]:
    """One lap from an arrival at the rear face: its trace, (n, 4) hits as in `trace_lap`, and the surfaces' names.

    The names begin with the rear face; they are () when the lap breaks.
    """
    hits, surfaces = np.zeros((MAX_LAP_BUMPS, 4)), np.zeros(MAX_LAP_BUMPS, dtype=np.int64)
    lap = trace_lap(
        rig.boundary, rig.program, EXACT, rig.keys, rig.speed,
        seen.state[0], seen.state[1], seen.memory.copy(), seen.notes.copy(), seen.n_rear, hits, surfaces,
    )  # fmt: skip
    names = [rig.names[k] if k >= 0 else IN_THE_OPEN for k in surfaces[: max(lap.n_bumps - 1, 0)]]
    return lap, hits[: lap.n_bumps], (REAR, *names) if lap.n_bumps else ()


def closed(rig: Rig, seen: Seen) -> Seen | None:
    """The lap that closes near a state, by Newton's method on the return map; None if there is none.

    A neutral direction is left where it is (least-squares step).
    """
    for _ in range(_NEWTON_STEPS):
        trace, _, _ = trace_seen(rig, seen)
        if trace.n_bumps == 0:
            return None
        residual = np.array([trace.along, trace.heading]) - seen.state
        residual[1] = math.remainder(residual[1], 2 * math.pi)
        if abs(residual[0]) < _ROUNDING * rig.size and abs(residual[1]) < _ROUNDING:
            return seen
        step = np.linalg.lstsq(return_map(trace) - np.eye(2), residual, rcond=_ROUNDING)[0]
        seen = seen._replace(state=seen.state - step)
    return None


def return_map(trace: LapTrace) -> FloatArray:
    """Derivative of (place, heading) at the end of a lap with respect to those at its beginning, (2, 2)."""
    return np.array([[trace.aa, trace.ah], [trace.ha, trace.hh]])


def multipliers_of(trace: LapTrace) -> tuple[complex, complex]:
    """Eigenvalues of a lap's return map, the larger one first."""
    larger, smaller = sorted(map(complex, np.linalg.eigvals(return_map(trace)).tolist()), key=abs, reverse=True)
    return larger, smaller


def stability(multipliers: Sequence[complex]) -> str:
    """Whether a lap attracts, repels, or leaves an error as it is.

    >>> stability((1.0, -0.3)), stability((-0.3, 0.0)), stability((-1.2, 1.0))
    ('neutral', 'attracting', 'repelling')
    """
    size = max(abs(m) for m in multipliers)
    if size > 1.0 + _ROUNDING:
        return REPELLING
    return NEUTRAL if size > 1.0 - _ROUNDING else ATTRACTING


def first_hit(surfaces: Sequence[str], y: Sequence[float] = ()) -> int:
    """Which of a lap's bumps on the rear face to name it by.

    A lap with several may be written down from any of them. Taken is the one from which the names come first in the
    alphabet; where a lap repeats its surfaces, the one with the least `y`.
    """
    at_rear = [k for k, name in enumerate(surfaces) if name == REAR]
    return min(at_rear, key=lambda k: (*surfaces[k:], *surfaces[:k], y[k] if len(y) else 0.0))


def cycle_of(surfaces: Sequence[str]) -> tuple[str, ...]:
    """A lap's surfaces, the same from whichever of its bumps on the rear face they are written down.

    >>> cycle_of(["rear", "top", "rear", "bottom"])
    ('rear', 'bottom', 'rear', 'top')
    """
    if not surfaces:
        return ()
    k = first_hit(surfaces)
    return (*surfaces[k:], *surfaces[:k])


def short_name(surfaces: Sequence[str]) -> str:
    """A lap's surfaces, shortened for people.

    >>> short_name(["rear", "top"] * 5)
    'rear - top - rear - top - rear - top ... (10 bumps)'
    """
    name = " - ".join(surfaces[:NAMED])
    return f"{name} ... ({len(surfaces)} bumps)" if len(surfaces) > NAMED else name
