"""How often the point world strikes the rear face, and how squarely: a pusher followed for the length of the trial."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.program import EXACT, MEMORY, NOTES, compile_routine
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts

N_FOLLOWED = 300  # pushers; with tens of strikes each, the rate's standard error is about one percent or less
AT_ONCE = 1e-9  # of the pusher's radius: a run shorter than this is rounding
MAX_BUMPS = 4000  # per pusher; a longer trial is represented by its first part


class Strikes(NamedTuple):
    """Strikes of one pusher on a block that stands still: on the rear face, and backwards on the front.

    rate_1_s, back_rate_1_s: strikes per second. cosines, back_cosines: of the angle between heading and normal at each
    strike seen.
    """

    rate_1_s: float
    cosines: NDArray[np.float64]
    back_rate_1_s: float
    back_cosines: NDArray[np.float64]


def count_strikes(s: Scenario, *, seed: int = 0) -> Strikes:
    """Follow pushers without any error from the scenario's starts, and count what they do to the block's ends.

    Randomness that belongs to the routine itself (a spread, a wander) is kept.
    """
    boundary, program = boundary_of(s), compile_routine(s.routine, surface_names(s))
    starts = _starts(s, N_FOLLOWED, seed)
    speed, limit = s.pushers.free_speed, s.goal.time_limit
    mean_run = math.pi * s.channel.width * s.channel.length / (2 * (s.channel.width + s.channel.length))
    n_bumps = int(min(MAX_BUMPS, 100 + 10 * limit * speed / mean_run))
    hits, surfaces = np.zeros((n_bumps, 6)), np.zeros(n_bumps, dtype=np.int64)
    time = 0.0
    cosines: dict[int, list[NDArray[np.float64]]] = {boundary.rear: [], boundary.front: []}
    for start, keys in zip(starts, stream_keys(seed, len(starts)), strict=True):
        memory = np.zeros(MEMORY, dtype=np.int64)
        n = trace(boundary, program, EXACT, 0.0, speed, keys, start, 0.0, hits, surfaces, memory, np.zeros(NOTES))
        times = np.cumsum(hits[:n, 5])
        on_the_spot = hits[:n, 4] < AT_ONCE * boundary.scale
        # a pusher that turns and still points into the face bumps again at once, which is no strike of its own
        again = on_the_spot & (surfaces[:n] == np.roll(surfaces[:n], 1))
        again[:1] = False
        for surface, found in cosines.items():
            is_strike = (surfaces[:n] == surface) & ~again & (times <= limit)
            found.append(np.abs(np.cos(hits[:n][is_strike, 2] - boundary.segments[surface, 7])))
        # a pusher that has halted or got stuck spends the rest of the trial without a strike
        is_over = n < n_bumps or on_the_spot[n // 2 :].all()
        time += limit if is_over else min(limit, float(times[-1]))
    rear, front = (np.concatenate(found) for found in cosines.values())
    return Strikes(len(rear) / time, rear, len(front) / time, front)


def point_path(s: Scenario, *, n_bumps: int = 40, seed: int = 0) -> NDArray[np.float64]:
    """The path of the first pusher as an exact point: (n + 1, 2) x and y in m of its start and its bumps."""
    hits, surfaces = np.zeros((n_bumps, 6)), np.zeros(n_bumps, dtype=np.int64)
    start, keys = _starts(s, 1, seed)[0], stream_keys(seed, 1)[0]
    program, memory = compile_routine(s.routine, surface_names(s)), np.zeros(MEMORY, dtype=np.int64)
    n = trace(
        boundary_of(s),
        program,
        EXACT,
        0.0,
        s.pushers.free_speed,
        keys,
        start,
        0.0,
        hits,
        surfaces,
        memory,
        np.zeros(NOTES),
    )
    return np.vstack([start[:2], hits[:n, :2]])


def _starts(s: Scenario, count: int, seed: int) -> NDArray[np.float64]:
    many = s if s.start.placed is not None else s.replace(pushers={"count": count})
    return draw_starts(many, seed, apart=False)
