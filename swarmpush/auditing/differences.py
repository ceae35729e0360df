"""Differences between two sets of runs, of means and of shares, and their intervals."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval


def paired_interval(values: ArrayLike, reference: ArrayLike, confidence: float, *, resolution: float = 0.0) -> Estimate:
    """Mean difference between pairs, values less reference, and its t interval.

    Pairs share what makes runs alike (a seed), which then drops out of the difference. A pair with an undefined value
    is left out.

    Arguments:
        values, reference: (n,) one per pair, in the same unit. confidence: e.g. 0.95.
        resolution: of a difference; see `mean_interval`.

    Raises:
        ValueError: when the two differ in shape, and as `mean_interval` does.

    >>> paired_interval([1.5, 2.5, 3.5], [1.0, 2.0, 3.0], 0.95).mean
    0.5
    """
    first, second = np.asarray(values, dtype=np.float64), np.asarray(reference, dtype=np.float64)
    if first.shape != second.shape:
        raise ValueError(f"pairs of shape {first.shape} and {second.shape} given; they must be alike")
    is_whole = np.isfinite(first) & np.isfinite(second)
    return mean_interval(first[is_whole] - second[is_whole], confidence, resolution=resolution)


def share_difference(n_successes: int, n: int, n_reference: int, n_in_reference: int, confidence: float) -> Estimate:
    """Difference of two shares from independent trials, first less reference, with an interval from score intervals.

    Arguments:
        n_successes, n: of the first set of trials. n_reference, n_in_reference: successes and trials of the reference.
        confidence: e.g. 0.95.

    Returns:
        The estimate, with n the trials of both; NaN with the interval -1 to 1 when either has no trial.

    Raises:
        ValueError: when there are more successes than trials, or fewer than none.

    Source: R. G. Newcombe, Stat. Med. 17 (1998) 873, method 10.

    >>> found = share_difference(56, 70, 48, 80, 0.95)
    >>> round(found.low, 4), round(found.high, 4)
    (0.0524, 0.3339)
    """
    first = share_interval(n_successes, n, confidence)
    second = share_interval(n_reference, n_in_reference, confidence)
    return _difference(first, second, 0.0, n + n_in_reference)


def paired_share_interval(is_success: ArrayLike, is_success_in_reference: ArrayLike, confidence: float) -> Estimate:
    """Difference of two shares over pairs of runs, first less reference, from the pairs that changed.

    Of n pairs some gain success and some lose it. Both shares have a score interval; their difference gets one by the
    variances recovered from these, with the correlation that two cells of a multinomial have.

    Arguments:
        is_success, is_success_in_reference: (n,) bool, or 0 and 1, with NaN for a run without a value; such a pair is
        left out. confidence: e.g. 0.95.

    Returns:
        The estimate; without a pair the difference is NaN and the interval -1 to 1.

    Raises:
        ValueError: when the two differ in shape, or hold anything else.

    Source: G. Y. Zou and A. Donner, Stat. Med. 27 (2008) 1693, for limits of a difference.

    >>> found = paired_share_interval([True] * 20, [True] * 20, 0.95)
    >>> found.mean, round(found.low, 4), round(found.high, 4)
    (0.0, -0.1611, 0.1611)
    """
    first, second = (np.asarray(x, dtype=np.float64) for x in (is_success, is_success_in_reference))
    if first.shape != second.shape:
        raise ValueError(f"pairs of shape {first.shape} and {second.shape} given; they must be alike")
    is_whole = np.isfinite(first) & np.isfinite(second)
    first, second = first[is_whole], second[is_whole]
    if not np.isin([first, second], (0.0, 1.0)).all():
        raise ValueError("success is 0 or 1; other values given")
    n = len(first)
    gained, lost = (share_interval(int(np.sum(a > b)), n, confidence) for a, b in ((first, second), (second, first)))
    if n == 0:
        return _difference(gained, lost, 0.0, 0)
    others = (1.0 - gained.mean) * (1.0 - lost.mean)
    # where all pairs changed in the same way nothing is left to correlate
    correlation = -math.sqrt(gained.mean * lost.mean / others) if others > 0.0 else 0.0
    return _difference(gained, lost, correlation, n)


def _difference(first: Estimate, second: Estimate, correlation: float, n: int) -> Estimate:
    """Difference of two estimates, whose distances to their limits are combined like standard errors."""
    difference = first.mean - second.mean
    if math.isnan(difference):
        return Estimate(math.nan, -1.0, 1.0, n)

    def combined(a: float, b: float) -> float:
        return math.sqrt(max(0.0, a * a + b * b - 2.0 * correlation * a * b))

    below = combined(first.mean - first.low, second.high - second.mean)
    above = combined(first.high - first.mean, second.mean - second.low)
    return Estimate(difference, max(-1.0, difference - below), min(1.0, difference + above), n)
