"""Intervals and verdicts: what independent runs allow us to say."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import ArrayLike
from scipy import stats


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


def mean_interval(values: ArrayLike, confidence: float) -> Estimate:
    """Mean of independent values and Student's t interval; undefined values (NaN) are left out.

    Arguments:
        values: (n,) one per run. confidence: e.g. 0.95.

    Returns:
        The estimate; the interval is without limit when there is only one value.

    >>> mean_interval([1.0, 2.0, 3.0], 0.95)
    Estimate(mean=2.0, low=-0.484..., high=4.484..., n=3)
    """
    known = np.asarray(values, dtype=np.float64)
    known = known[np.isfinite(known)]
    n = len(known)
    if n == 0:
        return Estimate(math.nan, math.nan, math.nan, 0)
    mean = float(known.mean())
    if n == 1:
        return Estimate(mean, -math.inf, math.inf, 1)
    half = float(stats.t.ppf(0.5 + confidence / 2.0, n - 1) * known.std(ddof=1) / math.sqrt(n))
    return Estimate(mean, mean - half, mean + half, n)


def share_interval(n_successes: int, n: int, confidence: float) -> Estimate:
    """A share of independent trials and its score interval.

    Source: E. B. Wilson, J. Am. Stat. Assoc. 22 (1927) 209.

    >>> share_interval(0, 20, 0.95).high < 0.1612
    True
    """
    if n == 0:
        return Estimate(math.nan, 0.0, 1.0, 0)
    z = float(stats.norm.ppf(0.5 + confidence / 2.0))
    share = n_successes / n
    centre = (share + z * z / (2 * n)) / (1 + z * z / n)
    half = z / (1 + z * z / n) * math.sqrt(share * (1 - share) / n + z * z / (4 * n * n))
    # at the ends the bounds are 0 and 1 but for rounding
    low = 0.0 if n_successes == 0 else max(0.0, centre - half)
    high = 1.0 if n_successes == n else min(1.0, centre + half)
    return Estimate(share, low, high, n)


def runs_to_show(share: float, confidence: float) -> int:
    """Least number of runs, all of them successes, whose score interval lies above `share`: n/(n + z^2) >= share.

    >>> runs_to_show(0.9, 0.95)
    35
    """
    z = float(stats.norm.ppf(0.5 + confidence / 2.0))
    return math.ceil(z * z * share / (1.0 - share))


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
