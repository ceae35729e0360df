"""Visits of undisturbed pushers to the block's two ends, at the pace of pushers that take time to react and turn.

The block stands still, and a pusher stays where it touched for its latency and its turning time. What a visit does to
the block is the business of `nudge.py`.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.kinematics.strikes import AT_ONCE, MAX_BUMPS, N_FOLLOWED
from swarmpush.program import EXACT, MEMORY, NOTES, Senses, compile_routine
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts

FloatArray = NDArray[np.float64]

_INTO = 1e-9  # cosine to the normal above which a heading points into a face


class Visits(NamedTuple):
    """Visits to one end of the block, one item per visit in arrays (n,).

    incidence_rad: from the direction into the block to the heading. turning_s: how long the turn away still drives into
    the face. turning_cosine: mean cosine of the heading to the normal in that time. leaning_s: how long the pusher
    leans within the trial: latency, a slide along the face, and the turn. is_strike: whether it came from elsewhere and
    not from a turn that ended pointing into the face. time_s: of all pushers followed, added up.
    """

    incidence_rad: FloatArray
    turning_s: FloatArray
    turning_cosine: FloatArray
    leaning_s: FloatArray
    is_strike: NDArray[np.bool_]
    time_s: float

    @property
    def strike_rate_1_s(self) -> float:
        """Strikes per second of one pusher."""
        return float(np.count_nonzero(self.is_strike)) / self.time_s

    @property
    def leaning_share(self) -> float:
        """Share of its time in which a pusher leans on this end, from 0 to 1."""
        return min(1.0, float(self.leaning_s.sum()) / self.time_s)


def follow_visits(
    s: Scenario, *, seed: int = 0, senses: Senses = EXACT, diffusion: float = 0.0
) -> tuple[Visits, Visits]:
    """Follow pushers from the scenario's starts for the length of the trial, without errors unless some are given.

    Randomness that belongs to the routine itself is kept.

    Arguments:
        s: the scenario. seed: of starts, of the routine's own chance, and of errors. senses, diffusion: the pushers'
            faults; see `trace`.

    Returns:
        The visits to the rear face, and those to the front face.
    """
    boundary = boundary_of(s)
    program, limit = compile_routine(s.routine, surface_names(s)), s.goal.time_limit
    many = s if s.start.placed is not None else s.replace(pushers={"count": N_FOLLOWED})
    starts = draw_starts(many, seed, apart=False)
    mean_run = math.pi * s.channel.width * s.channel.length / (2 * (s.channel.width + s.channel.length))
    n_legs = int(min(MAX_BUMPS, 100 + 10 * limit * s.pushers.free_speed / mean_run))
    hits, surfaces = np.zeros((n_legs, 6)), np.zeros(n_legs, dtype=np.int64)
    time_s, found = 0.0, [np.zeros((0, 7))]
    for start, keys in zip(starts, stream_keys(seed, len(starts)), strict=True):
        memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
        n = trace(
            boundary, program, senses, diffusion, s.pushers.free_speed, keys, start, 0.0, hits, surfaces, memory, notes
        )  # fmt: skip
        table, time = _at_pace(s, hits[:n], surfaces[:n], n == n_legs, AT_ONCE * boundary.scale)
        found.append(table)
        time_s += time
    legs = np.vstack(found)
    rear, front = (
        _visits(s, legs, face, boundary.segments[face, 7], time_s) for face in (boundary.rear, boundary.front)
    )
    return rear, front


def _at_pace(
    s: Scenario, hits: FloatArray, surfaces: NDArray[np.int64], goes_on: bool, at_once: float
) -> tuple[FloatArray, float]:
    """One pusher's legs within the trial, and the time it was followed.

    Arguments:
        hits, surfaces: from `trace`. goes_on: whether it would have gone on. at_once: runs below it are rounding, m.

    Returns:
        (n, 7): surface, arriving heading, turn after it, time of the next leg, whether it bumped again at once, time
        left in the trial, and whether it stays for all of that; and the time.
    """
    n, limit = len(hits), s.goal.time_limit
    if n == 0:
        return np.zeros((0, 7)), limit
    heading, run, turn = hits[:, 2], hits[:, 4], hits[:, 3] - hits[:, 2]
    bumps = surfaces >= 0
    pause = np.where(bumps, s.pushers.latency, 0.0) + np.abs(turn) / s.pushers.turn_rate
    # a run from rest takes m/g longer than at the free speed, once it is long against v m/g
    from_rest = np.append(True, bumps[:-1]) & (run >= at_once)
    leg = hits[:, 5] + np.where(from_rest, s.pushers.relaxation_time, 0.0)
    when = np.cumsum(leg) + np.append(0.0, np.cumsum(pause[:-1]))
    is_again = (run < at_once) & (surfaces == np.roll(surfaces, 1))
    is_again[0] = False
    is_stuck = bool((run[n // 2 :] < at_once).all())
    # a pusher that has halted or got stuck spends the rest of the trial where it is
    end = limit if is_stuck or not goes_on else min(limit, float(when[-1]))
    stays = is_stuck & goes_on & (np.arange(n) == n - 1)
    table = np.column_stack([surfaces, heading, turn, np.append(hits[1:, 5], 0.0), is_again, end - when, stays])
    return table[when <= end], end


def _visits(s: Scenario, legs: FloatArray, face: int, normal_angle: float, time_s: float) -> Visits:
    """The visits to one face among the legs of all pushers."""
    _, heading, turn, next_s, is_again, left, stays = legs[legs[:, 0] == face].T
    incidence = np.remainder(heading - normal_angle, 2 * math.pi) - math.pi
    turning, cosine = _turning_away(s, incidence, turn)
    # whoever moves on while it still heads into the face slides along it
    sliding = np.where(np.cos(incidence + turn) > _INTO, next_s, 0.0)
    leaning = np.where(stays > 0.0, left, np.minimum(s.pushers.latency + sliding + turning, left))
    return Visits(incidence, turning, cosine, leaning, is_again == 0.0, time_s)


def _turning_away(s: Scenario, incidence: FloatArray, turn: FloatArray) -> tuple[FloatArray, FloatArray]:
    """How long a turn still drives into the face, in s, and the mean cosine to its normal meanwhile."""
    if s.pushers.drive_while_turning == 0.0:
        return np.zeros(len(turn)), np.zeros(len(turn))
    first = np.where(turn >= 0.0, incidence, -incidence)
    angle = np.minimum(np.abs(turn), math.pi / 2 - first)
    is_turning = angle > 0.0
    cosine = np.divide(np.sin(first + angle) - np.sin(first), angle, out=np.cos(first), where=is_turning)
    return np.where(is_turning, angle, 0.0) / s.pushers.turn_rate, cosine
