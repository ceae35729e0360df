"""Intervals and verdicts: what independent runs allow us to say."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special


class Verdict(StrEnum):
    """What a measurement says about a claim."""

    HOLDS = "holds"
    STRAINED = "strained"
    FAILS = "fails"
    UNDECIDED = "undecided"


@dataclass(frozen=True)
class Estimate:
    """A measured number with its confidence interval. All are NaN when nothing could be measured."""

    mean: float
    low: float
    high: float
    n: int


def mean_interval(
    values: ArrayLike,
    confidence: float,
    *,
    resolution: float = 0.0,
    limits: tuple[float, float] = (-math.inf, math.inf),
) -> Estimate:
    """Mean of independent values and Student's t interval; undefined values (NaN, infinite) are left out.

    The spread of equal values is 0, which does not make their mean exact. Equal readings say that the mean lies
    within half a unit of their resolution, which is at least the rounding of a float; so no interval is narrower than
    that. Exact zeros are taken as they are: where nothing moves, nothing is rounded. Equal readings cannot tell what
    rarer runs would do. Where the values have limits these runs are allowed for: see `unseen_share`. That interval is
    much wider than one over values that nearly agree, and right where equal values mean that one of several things
    happened every time (a pusher kept its lap), not that a continuous quantity hardly varies.

    Arguments:
        values: (n,) one per run. confidence: e.g. 0.95.
        resolution: least difference that the measurement shows, in the unit of the values, e.g. the step for a time.
        limits: least and largest value that a run can have, in the same unit; the interval stays within them.

    Returns:
        The estimate; the interval is without limit, or reaches the given limits, when there is only one value.

    Raises:
        ValueError: when the confidence is not between 0 and 1, the resolution is negative, or a value is off limits.

    Source: Student's t; for the resolution JCGM 100:2008 (GUM), F.2.2.1.

    >>> mean_interval([1.0, 2.0, 3.0], 0.95)
    Estimate(mean=2.0, low=-0.484..., high=4.484..., n=3)
    >>> mean_interval([7.0, 7.0, 7.0], 0.95, resolution=0.5)
    Estimate(mean=7.0, low=6.75, high=7.25, n=3)
    """
    _check_confidence(confidence)
    if not resolution >= 0.0:
        raise ValueError(f"resolution {resolution} given; it must not be negative")
    known = np.asarray(values, dtype=np.float64)
    known = known[np.isfinite(known)]
    least, largest = map(float, limits)
    n = len(known)
    if n == 0:
        return Estimate(math.nan, math.nan, math.nan, 0)
    if known.min() < least or known.max() > largest:
        raise ValueError(
            f"values from {known.min():g} to {known.max():g} given; they must be in {least:g} to {largest:g}"
        )
    if n == 1:
        return Estimate(float(known[0]), least, largest, 1)
    is_equal = bool(known.min() == known.max())
    # the mean of equal values is that value, which a sum may miss by a rounding
    mean = float(known[0] if is_equal else known.mean())
    spread = 0.0 if is_equal else float(known.std(ddof=1))
    t = float(special.stdtrit(n - 1, 0.5 + confidence / 2.0))
    half = max(t * spread / math.sqrt(n), resolution / 2.0, float(np.finfo(np.float64).eps) * abs(mean))
    low, high = mean - half, mean + half
    if is_equal and math.isfinite(least):
        low = min(low, mean - unseen_share(n, confidence) * (mean - least))
    if is_equal and math.isfinite(largest):
        high = max(high, mean + unseen_share(n, confidence) * (largest - mean))
    return Estimate(mean, max(low, least), min(high, largest), n)


def unseen_share(n: int, confidence: float) -> float:
    """Largest share of runs that may be unlike all n runs made, which were alike.

    If a share p of runs is different, none of it shows in n runs with probability (1 - p)^n. This is the p for which
    that is 1 - confidence; about 3/n at 0.95 (derived here; known as the rule of three).

    Arguments:
        n: number of runs, at least 0. confidence: e.g. 0.95.

    Raises:
        ValueError: for a negative number of runs, or when the confidence is not between 0 and 1.

    >>> round(unseen_share(12, 0.95), 3)
    0.221
    """
    _check_confidence(confidence)
    if n < 0:
        raise ValueError(f"{n} runs given; it must not be negative")
    return 1.0 - float((1.0 - confidence) ** (1.0 / n)) if n else 1.0


def share_interval(n_successes: int, n: int, confidence: float) -> Estimate:
    """A share of independent trials and its score interval.

    Arguments:
        n_successes, n: successful trials and all trials. confidence: e.g. 0.95.

    Returns:
        The estimate; without a trial the share is NaN and the interval 0 to 1.

    Raises:
        ValueError: when there are more successes than trials, or fewer than none.

    Source: E. B. Wilson, J. Am. Stat. Assoc. 22 (1927) 209.

    >>> share_interval(0, 20, 0.95).high < 0.1612
    True
    """
    if not 0 <= n_successes <= n:
        raise ValueError(f"{n_successes} successes in {n} trials given; there can be 0 to {n}")
    if n == 0:
        return Estimate(math.nan, 0.0, 1.0, 0)
    share = n_successes / n
    low, high = score_limits(share, n, confidence)
    return Estimate(share, float(low), float(high), n)


def score_limits(share: ArrayLike, n: ArrayLike, confidence: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Limits of Wilson's score interval, where the number of trials need not be whole.

    Arguments:
        share: (...) share of successes, 0 to 1. n: (...) number of trials, above 0. confidence: e.g. 0.95.

    Returns:
        Lower and upper limit, (...) each.

    Raises:
        ValueError: when the confidence is not between 0 and 1.

    Source: E. B. Wilson, J. Am. Stat. Assoc. 22 (1927) 209.

    >>> [round(float(limit), 4) for limit in score_limits(0.9, 10, 0.95)]
    [0.5958, 0.9821]
    """
    _check_confidence(confidence)
    p, size = np.asarray(share, dtype=np.float64), np.asarray(n, dtype=np.float64)
    z2 = float(special.ndtri(0.5 + confidence / 2.0)) ** 2
    shrink = 1.0 / (1.0 + z2 / size)
    centre = (p + z2 / (2.0 * size)) * shrink
    half = shrink * np.sqrt(z2 * (p * (1.0 - p) / size + z2 / (4.0 * size * size)))
    # at the ends the limits are 0 and 1 but for rounding
    low = np.where(p == 0.0, 0.0, np.maximum(0.0, centre - half))
    high = np.where(p == 1.0, 1.0, np.minimum(1.0, centre + half))
    return low, high


def runs_to_show(share: float, confidence: float) -> int:
    """Least number of runs, all of them successes, whose score interval lies above `share`: n/(n + z^2) >= share.

    >>> runs_to_show(0.9, 0.95)
    35
    """
    z = float(special.ndtri(0.5 + confidence / 2.0))
    return math.ceil(z * z * share / (1.0 - share))


def runs_to_decide(
    share_now: float, n_now: int, demanded: float, confidence: float, *, power: float = 0.8
) -> int | None:
    """Further runs after which the score interval of all runs lies above or below a demanded share, most likely.

    With N runs the interval excludes the demanded share q when the share found is off by z sqrt(q (1 - q)/N). The N
    runs are the n made and N - n to come, whose successes scatter with the variance (N - n) p (1 - p) where p is the
    share now, taken as the true one. So N |p - q| = z sqrt(N q (1 - q)) + y sqrt((N - n) p (1 - p)), y the quantile of
    the power. Without runs made this is the textbook's sample size; with p = 1 it is `runs_to_show`. A share from a few
    runs is a poor guess of the true one: give a cautious one, with no runs made, to see what depends on it.

    Arguments:
        share_now: share of successes, 0 to 1, found or assumed. n_now: runs that found it, 0 for an assumed one.
        demanded: the share in question, between 0 and 1. confidence: of the interval, e.g. 0.95.
        power: probability of a decision, 0.5 or above and below 1, if the true share is the one given.

    Returns:
        The number of runs; 0 when those made decide already; None when the share equals the demanded one, which no
        number of runs can tell apart.

    Raises:
        ValueError: when an argument is out of its range.

    Source: J. L. Fleiss, B. Levin and M. C. Paik, Statistical Methods for Rates and Proportions (2003), chapter 2,
    without runs made; the term for those is derived here.

    >>> runs_to_decide(0.95, 0, 0.8, 0.95), runs_to_decide(0.95, 20, 0.8, 0.95), runs_to_decide(1.0, 40, 0.8, 0.95)
    (42, 17, 0)
    """
    _check_confidence(confidence)
    if not (0.0 <= share_now <= 1.0 and n_now >= 0 and 0.0 < demanded < 1.0 and 0.5 <= power < 1.0):
        raise ValueError(
            f"share {share_now} of {n_now} runs, demanded share {demanded} and power {power} given; shares must be in "
            "0 to 1, the demanded one between them, runs at least 0, and the power at least 0.5 and below 1"
        )
    if share_now == demanded:
        return None
    z, y = (float(special.ndtri(p)) for p in (0.5 + confidence / 2.0, power))

    def is_enough(n: int) -> bool:
        chance = z * math.sqrt(n * demanded * (1.0 - demanded)) + y * math.sqrt(
            (n - n_now) * share_now * (1.0 - share_now)
        )
        return n > 0 and n * abs(share_now - demanded) >= chance

    # the excess over chance is convex in n, so that it is enough from one n on
    few, many = n_now, max(2 * n_now, 1)
    if is_enough(few):
        return 0
    while not is_enough(many):
        few, many = many, 2 * many
    while many - few > 1:
        middle = (few + many) // 2
        few, many = (few, middle) if is_enough(middle) else (middle, many)
    return many - n_now


def judge(measured: Estimate, band: Sequence[float]) -> Verdict:
    """Equivalence verdict: where the confidence interval lies against the band of acceptable values.

    Inside: holds. Outside: fails. Across an edge: undecided when the interval is wider than the band, since more runs
    would tell; else strained.
    """
    low, high = band
    if not math.isfinite(measured.mean) or not math.isfinite(measured.high - measured.low) or math.isnan(low + high):
        return Verdict.UNDECIDED
    if low <= measured.low and measured.high <= high:
        return Verdict.HOLDS
    if measured.high < low or measured.low > high:
        return Verdict.FAILS
    return Verdict.UNDECIDED if measured.high - measured.low > high - low else Verdict.STRAINED


def _check_confidence(confidence: float) -> None:
    if not 0.0 < confidence < 1.0:
        raise ValueError(f"confidence {confidence} given; it must lie between 0 and 1")
