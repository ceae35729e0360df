"""The noise budget: how large an error may be before too many pushers lose their lap."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy.special import ndtri

from swarmpush.kinematics.lap_loss import LapFollower
from swarmpush.kinematics.laps import Lap, find_laps
from swarmpush.scenario import Scenario

N_PUSHERS = 300  # the score interval of a share of 0.8 is then 0.09 wide
MOST_LAPS = 200  # unless asked for; errors that a lap survives that long are not what ends a plan
_FIRST_GUESS = math.radians(2.0)
_FINEST, _COARSEST = math.radians(0.01), math.radians(180.0)  # where the search ends: none is left, or any will do
_PRECISION = 1.02  # factor to which a limit is found


@dataclass(frozen=True)
class Limit:
    """Largest standard deviation of one error, and what the scenario has.

    value: with which the demanded share of the pushers followed still keep their lap. low, high: with which the share's
    score interval (Wilson) still lies above the demand, and no longer reaches it. 0 where even none of this error is
    too much, infinite where any is tolerated. given: the scenario's. All in rad (turns) or rad/sqrt(s) (diffusion).
    """

    value: float
    low: float
    high: float
    given: float


@dataclass(frozen=True)
class NoiseBudget:
    """What the main lap tolerates, one error at a time, all other errors as the scenario has them.

    share: of the pushers that must still keep their lap after `laps` laps. n: pushers followed. confidence: of the
    limits' intervals. turn_sd_rad, heading_diffusion_rad_per_sqrt_s: the limits.
    """

    share: float
    laps: int
    n: int
    confidence: float
    turn_sd_rad: Limit
    heading_diffusion_rad_per_sqrt_s: Limit


def noise_budget(
    s: Scenario,
    *,
    share: float = 0.8,
    laps: int | None = None,
    confidence: float = 0.95,
    lap: Lap | None = None,
    n: int = N_PUSHERS,
) -> NoiseBudget | None:
    """The largest errors with which enough pushers keep their lap for long enough.

    Found by bisection; pushers draw the same random numbers at every size of the error, so that the share falls
    steadily with it. The interval's ends are where a score test of the demanded share just passes and just fails, which
    is where Wilson's interval (J. Am. Stat. Assoc. 22 (1927) 209) touches it.

    Arguments:
        s: the scenario. share: demanded, between 0 and 1. laps: to be kept; by default those that fit into the trial,
            at most 200. confidence: of the interval. lap: the lap in question; the scenario's main one by default.
        n: pushers followed.

    Returns:
        The budget; None when there is no lap.

    Raises:
        ValueError: for a share outside (0, 1) or no laps.
    """
    if not 0.0 < share < 1.0:
        raise ValueError(f"share is {share}; it must lie between 0 and 1")
    if laps is not None and laps < 1:
        raise ValueError(f"laps is {laps}; it must be 1 or more")
    found = (lap,) if lap else find_laps(s)[0]
    if not found:
        return None
    main = found[0]
    n_laps = laps or min(MOST_LAPS, max(1, int(s.goal.time_limit / main.time_s)))
    follower = LapFollower.of(s, main, n=n)
    if follower is None:
        return None
    margin = float(ndtri(0.5 + confidence / 2.0)) * math.sqrt(n * share * (1.0 - share))

    def limit(error: str) -> Limit:
        @cache
        def n_kept(size: float) -> int:
            legs = follower.legs_kept(s.errors.model_copy(update={error: size}), n_laps)
            return int(np.count_nonzero(legs == n_laps * len(main.surfaces)))

        def up_to(needed: float) -> float:
            return _largest(lambda size: n_kept(size) >= needed)

        demand = n * share
        given = float(getattr(s.errors, error))
        return Limit(up_to(demand), up_to(demand + margin), up_to(demand - margin), given)

    return NoiseBudget(share, n_laps, n, confidence, limit("turn_sd"), limit("heading_diffusion"))


def _largest(holds: Callable[[float], bool]) -> float:
    """The largest size with which something holds that is lost as the size grows; 0 if it never holds."""
    if not holds(0.0):
        return 0.0
    low = high = _FIRST_GUESS
    while holds(high):
        if high > _COARSEST:
            return math.inf
        low, high = high, 2.0 * high
    while not holds(low):
        if low < _FINEST:
            return 0.0
        low, high = low / 2.0, low
    while high > _PRECISION * low:
        middle = math.sqrt(low * high)
        low, high = (middle, high) if holds(middle) else (low, middle)
    return low
