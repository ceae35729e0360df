"""How many laps a pusher keeps its lap when it errs: many pushers followed until their bumps are no longer the lap's.

The counterpart of `drift.py`, which works the same number out. Turns, bearings, ranges, sights, the routine's own
spread and the heading's diffusion err as the scenario says; bumps are neither missed nor made up, and units are alike.
"""

from __future__ import annotations

import math
import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from itertools import pairwise
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaincinv, stdtrit

from swarmpush.compiled import compiled
from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import Fate, Settled, settle, trace, trace_lap
from swarmpush.kinematics.boundary import Boundary, boundary_of, surface_names
from swarmpush.kinematics.drift import bias_per_turn, wander_per_leg
from swarmpush.kinematics.laps import BUDGET, IN_THE_OPEN, Lap
from swarmpush.program import EXACT, MEMORY, NOTES, PC, Contact, Op, Program, Senses, compile_routine
from swarmpush.scenario import Errors, Scenario

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

N_PUSHERS = 400  # puts the standard error of a mean number of laps at 5 %
MOST_LEGS = 1_000_000  # followed for one lap at most: some tenths of a second
_FIRST_LAPS = 8  # followed at first; who keeps them is followed four times as far, and so on


@dataclass(frozen=True)
class LapsKept:
    """Mean number of laps until a pusher leaves its lap, with its interval; higher is better.

    mean, low, high: infinite when nobody left. n, censored: pushers followed, and those still on the lap at the end.
    basis: the estimator in words. Without pushers (n = 0) nothing errs, or the lap's start could not be found again.
    """

    mean: float
    low: float
    high: float
    n: int
    censored: int
    basis: str


def laps_kept(
    s: Scenario,
    lap: Lap,
    *,
    n: int = N_PUSHERS,
    most_legs: int = MOST_LEGS,
    seed: int = 0,
    confidence: float | None = None,
) -> LapsKept:
    """Follow pushers that start on a lap until they leave it, by Monte Carlo.

    Arguments:
        s: the scenario. lap: one of its laps. n: pushers. most_legs: of all pushers together, which caps the laps.
        seed: of their errors. confidence: of the interval; the trial's unless given.
    """
    if not errs(s):
        return LapsKept(math.inf, math.inf, math.inf, 0, 0, "nothing errs")
    follower = LapFollower.of(s, lap, n=n, seed=seed)
    if follower is None:
        return LapsKept(math.nan, math.nan, math.nan, 0, 0, "the lap was not found again")
    most_laps = max(_FIRST_LAPS, most_legs // (n * len(lap.surfaces)))
    legs = follower.legs_kept(s.errors, most_laps)
    is_kept = legs == most_laps * len(lap.surfaces)
    return estimate_laps(legs / len(lap.surfaces), is_kept, confidence or s.trial.confidence)


def errs(s: Scenario) -> bool:
    """Whether anything in the point world can throw a pusher off its lap."""
    spreads = [getattr(act, "spread", 0.0) for stage in s.routine.stages for act in stage.acts]
    return headings_err(s.errors) or any(spreads)


def headings_err(e: Errors) -> bool:
    """Whether the scenario's errors, apart from any spread in the routine, can throw a pusher off its lap."""
    faults = (e.turn_bias, e.turn_sd, e.heading_diffusion, e.heading_drift, e.bearing_step, e.bearing_sd, e.range_sd)
    return any((*faults, e.missed_sights))


def senses_on(e: Errors, lap: Lap) -> Senses:
    """The faults of a pusher's senses and turns on a lap.

    A leg is traced straight and its heading wanders at the end, so the chord's part goes with the turn before it.
    """
    sd = e.turn_sd if lap.is_heading_neutral else math.hypot(e.turn_sd, wander_per_leg(e, lap))
    return Senses(bias_per_turn(e, lap), sd, e.bearing_step, e.bearing_sd, e.range_sd, e.missed_sights)


def estimate_laps(laps: FloatArray, is_kept: NDArray[np.bool_], confidence: float) -> LapsKept:
    """Mean laps until loss from laps followed, some of which ended without a loss.

    If every loss was seen: the mean and Student's t interval. Else as for an exponential law with censoring at a fixed
    time: all laps followed over the number r of losses, and 2 (all laps)/chi^2 with 2 r + 2 and 2 r degrees of freedom
    (Epstein and Sobel, J. Am. Stat. Assoc. 48 (1953) 486, and common practice for a fixed time).

    Arguments:
        laps: (n,) laps followed. is_kept: (n,) whether the pusher was still on its lap then. confidence: e.g. 0.95.
    """
    n, lost, tail = len(laps), int(np.count_nonzero(~is_kept)), (1.0 - confidence) / 2.0
    if lost == n:
        mean = float(laps.mean())
        half = float(stdtrit(n - 1, 1.0 - tail) * laps.std(ddof=1) / math.sqrt(n)) if n > 1 else math.inf
        return LapsKept(mean, max(0.0, mean - half), mean + half, n, 0, "mean, every loss seen")
    total = float(laps.sum())
    return LapsKept(
        mean=total / lost if lost else math.inf,
        low=total / float(gammaincinv(lost + 1, 1.0 - tail)),
        high=total / float(gammaincinv(lost, tail)) if lost else math.inf,
        n=n,
        censored=n - lost,
        basis="exponential law, some losses not seen",
    )


class _OnLap(NamedTuple):
    """A pusher at the beginning of a leg: place and heading, what it remembers, and the surfaces from there on."""

    start: FloatArray
    memory: IntArray
    notes: FloatArray
    surfaces: IntArray


@dataclass(frozen=True)
class LapFollower:
    """Pushers on one lap of one scenario, to be followed with errors of any size.

    Random numbers have addresses: each pusher draws the same ones whatever the size of the errors and the number of
    laps. keys: (n, purposes), one row per pusher.
    """

    scenario: Scenario
    lap: Lap
    boundary: Boundary
    program: Program
    on_lap: _OnLap
    keys: NDArray[np.uint64]

    @classmethod
    def of(cls, s: Scenario, lap: Lap, *, n: int = N_PUSHERS, seed: int = 0) -> LapFollower | None:
        """n pushers on a lap of the scenario; None if the lap is not found again."""
        boundary, names = boundary_of(s), surface_names(s)
        program = compile_routine(s.routine, names)
        on_lap = _find_start(s, lap, boundary, names, program)
        return None if on_lap is None else cls(s, lap, boundary, program, on_lap, stream_keys(seed, n))

    def legs_kept(self, e: Errors, n_laps: int) -> IntArray:
        """(n,) legs that each pusher runs before a bump is not the lap's; at most those of `n_laps` laps."""
        senses = senses_on(e, self.lap)
        legs = np.zeros(len(self.keys), dtype=np.int64)
        workers = os.cpu_count() or 1

        def follow(part: slice) -> None:
            _follow(
                self.boundary, self.program, senses, e.heading_diffusion, self.scenario.pushers.free_speed,
                self.keys[part], *self.on_lap, n_laps, legs[part],
            )  # fmt: skip

        ends = np.linspace(0, len(legs), workers + 1).astype(int).tolist()
        with ThreadPoolExecutor(workers) as pool:
            list(pool.map(follow, [slice(a, b) for a, b in pairwise(ends)]))
        return legs


@compiled
def _follow(
    boundary: Boundary,
    program: Program,
    senses: Senses,
    diffusion: float,
    speed: float,
    keys: NDArray[np.uint64],
    start: FloatArray,
    memory: IntArray,
    notes: FloatArray,
    lap: IntArray,
    n_laps: int,
    legs: IntArray,
) -> None:
    """Fill `legs` for each row of `keys`; see `LapFollower`."""
    most = n_laps * len(lap)
    hits, surfaces = np.zeros((most, 6)), np.zeros(most, dtype=np.int64)
    for i in range(len(keys)):
        length = min(_FIRST_LAPS * len(lap), most)
        while True:
            done = trace(
                boundary, program, senses, diffusion, speed, keys[i], start, 0.0,
                hits[:length], surfaces[:length], memory.copy(), notes.copy(),
            )  # fmt: skip
            kept = 0
            while kept < done and surfaces[kept] == lap[kept % len(lap)]:
                kept += 1
            if kept < length or length == most:
                break
            length = min(4 * length, most)
        legs[i] = kept


def _find_start(s: Scenario, lap: Lap, boundary: Boundary, names: tuple[str, ...], program: Program) -> _OnLap | None:
    """A pusher on the lap with the memory it has there: new ones are set on each leg until one settles into the lap."""
    steady, keys, rear = program.copy(), stream_keys(0, 1)[0], boundary.segments[boundary.rear]
    steady["spread"][program["op"] == Op.DEPART] = 0.0
    numbers = [names.index(name) if name != IN_THE_OPEN else -1 for name in lap.surfaces]
    n, speed = len(numbers), s.pushers.free_speed
    turned = [numbers[k:] + numbers[:k] for k in range(n)]

    def go_on(end: Settled, memory: IntArray, notes: FloatArray, n_legs: int) -> tuple[FloatArray, IntArray]:
        """Ends of so many legs from an arrival at the rear face, and their surfaces; memory and notes are changed."""
        hits, surfaces = np.zeros((n_legs, 4)), np.zeros(n_legs, dtype=np.int64)
        trace_lap(
            boundary, steady, EXACT, keys, speed, end.along, end.heading, memory, notes, lap.n_rear, hits, surfaces
        )  # fmt: skip
        return hits, surfaces

    for x, y, _, heading in lap.hits.tolist():
        memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
        end = settle(
            boundary, steady, EXACT, keys, speed, x, y, heading, memory, notes, int(Contact.NONE), 0.0, 2 * BUDGET
        )  # fmt: skip
        if end.fate != Fate.LOCKED:
            continue
        hits, surfaces = go_on(end, memory.copy(), notes.copy(), n)
        if surfaces.tolist() not in turned:
            continue
        places = np.vstack([rear[:2] + end.along * rear[2:4], hits[:-1, :2]])
        for k in range(n):
            then, jotted = memory.copy(), notes.copy()
            go_on(end, then, jotted, k + 1)
            then[PC] -= 1  # the leg is still to be run; a slide cannot be taken up in its middle
            if steady["op"][then[PC]] != Op.SLIDE:
                return _OnLap(np.array([*places[k], hits[k, 2]]), then, jotted, np.roll(surfaces, -k))
    return None
