"""What share of the variance of an output is due to which key: Sobol' indices of noisy runs.

If all keys of a study are drawn from their ranges, an output varies. The first-order index of a key is the share of
that variance which would go if this key alone were known; its total index is the share that would be left if all other
keys were known. A share that belongs to several keys together counts in the total index of each.

The outputs are means over few runs, which vary by chance too. Products of means are therefore taken over different
replicates (`responses.mean_product`), so that chance adds nothing to the indices, and gets a share of its own:

    sum of the first-order indices + share of several keys together + share of chance = 1

Estimators: the first-order one is that of A. Saltelli et al., Comput. Phys. Commun. 181 (2010) 259, table 2 (b), the
total one that of M. J. W. Jansen, Comput. Phys. Commun. 117 (1999) 35, there (f). With one replicate they are as
published, and as in scipy.stats.sobol_indices; that function takes neither rows with gaps nor replicates.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pandas as pd

from swarmpush.auditing.statistics import Estimate
from swarmpush.studies.responses import FloatArray, mean_product, mean_value, mean_variance, responses
from swarmpush.studies.study import Study

N_RESAMPLES = 2000  # of the bootstrap: the ends of a 95 % interval then rest on 50 resamples each
CHUNK = 4_000_000  # weights of resamples held at a time
ROUNDING = 1e-12  # relative to the output; what varies less does not vary


@dataclass(frozen=True)
class Sensitivity:
    """Shares of an output's variance over the points of a study.

    output: name of the measure.
    table: one row per key in the study's order: key, first, first_low, first_high, total, total_low, total_high. An
    index below 0 is 0 within its error; all are NaN where the output does not vary.
    chance: share of the variance that comes from the runs' randomness; NaN if there is but one replicate, for then it
    is hidden in the indices.
    together: share that belongs to several keys together; with one replicate chance is in it.
    n_rows: rows of the design used. n_left_out: rows left out, because a point of theirs has too few runs with a
    value; the indices then belong to that part of the ranges in which the output exists.
    confidence: of the intervals.
    """

    output: str
    table: pd.DataFrame
    chance: Estimate
    together: float
    n_rows: int
    n_left_out: int
    confidence: float


def find_sensitivity(
    study: Study, runs: pd.DataFrame, output: str, *, confidence: float = 0.95, seed: int = 0
) -> Sensitivity:
    """Sobol' indices from the runs of a study whose design is "sensitivity".

    Arguments:
        study: the study. runs: one row per run, see `responses`. output: name of a measure in `claims.MEASURES`.
        confidence: of the bootstrap intervals. seed: of the bootstrap.

    Raises:
        ValueError: when the study has another design. KeyError: when there is no such measure.
    """
    if study.design != "sensitivity":
        raise ValueError(f"the design of this study is {study.design!r}; indices need one of kind 'sensitivity'")
    values = responses(runs, output, len(study.points))
    return variance_shares(values, list(study.points.columns), output, confidence=confidence, seed=seed)


def variance_shares(
    values: FloatArray, keys: list[str], output: str, *, confidence: float = 0.95, seed: int = 0
) -> Sensitivity:
    """The same from an array.

    Arguments:
        values: (n_rows (n_keys + 2), n_replicates) outputs in the order of the design's points; NaN: there is none.
        keys: what was varied. output: what the values are. confidence: of the intervals. seed: of the bootstrap.

    Raises:
        ValueError: when the number of points does not fit the keys, or the confidence is not between 0 and 1.
    """
    if len(values) % (len(keys) + 2) or not 0.0 < confidence < 1.0:
        raise ValueError(
            f"{len(values)} points, {len(keys)} keys and confidence {confidence} given; a row has {len(keys) + 2} "
            "points, and the confidence lies between 0 and 1"
        )
    rows = values.reshape(-1, len(keys) + 2, values.shape[1])
    parts = _row_parts(rows)
    is_whole = np.isfinite(parts).all(axis=1)
    n = int(is_whole.sum())
    shared = _shared_chance(rows[is_whole, :2]) if n else math.nan
    whole = parts[is_whole]
    found = _shares(whole.mean(axis=0, keepdims=True), shared)[0] if n else np.full(parts.shape[1] - 2, math.nan)
    tail = 50.0 * (1.0 - confidence)
    if n > 1 and np.isfinite(found).any():
        low, high = np.percentile(_resampled(whole, shared, seed), [tail, 100.0 - tail], axis=0)
    else:
        low, high = np.full_like(found, math.nan), np.full_like(found, math.nan)
    k = len(keys)
    table = pd.DataFrame({"key": keys})
    for name, at in (("first", 0), ("total", k)):
        for suffix, numbers in (("", found), ("_low", low), ("_high", high)):
            table[name + suffix] = numbers[at : at + k]
    has_chance = values.shape[1] > 1
    mean, least, most = (float(x[-1]) if has_chance else math.nan for x in (found, low, high))
    chance = Estimate(mean, least, most, n)
    together = 1.0 - float(found[:k].sum()) - (chance.mean if has_chance else 0.0)
    return Sensitivity(output, table, chance, together, n, len(rows) - n, confidence)


def _row_parts(rows: FloatArray) -> FloatArray:
    """What each row adds to the estimators.

    Arguments:
        rows: (n_rows, n_keys + 2, n_replicates).

    Returns:
        (n_rows, 2 n_keys + 3): numerators of the first-order and total indices, chance in a mean, first and second
        moment of the means about their overall mean.
    """
    a, b, mixed = rows[:, 0], rows[:, 1], rows[:, 2:]
    ends = mean_value(rows[:, :2])
    is_known = np.isfinite(ends)
    middle = float(ends[is_known].mean()) if is_known.any() else 0.0
    change = mixed - a[:, None]
    first = mean_product(np.broadcast_to(b[:, None] - middle, change.shape), change)
    total = mean_product(change, change) / 2.0
    chance = mean_variance(rows[:, :2]).mean(axis=1) if rows.shape[2] > 1 else np.zeros(len(rows))
    ends = ends - middle
    # the second moment must not be lost to rounding where nothing varies
    ends[np.abs(ends) <= ROUNDING * abs(middle)] = 0.0
    moments = np.stack([chance, ends.mean(axis=1), (ends**2).mean(axis=1)], axis=1)
    return np.concatenate([first, total, moments], axis=1)


def _shared_chance(ends: FloatArray) -> float:
    """The part of the chance in a mean that all points share because their replicates have the same seeds.

    It shifts all points alike, so it adds nothing to the variance between them.

    Arguments:
        ends: (n_rows, 2, n_replicates).
    """
    points = ends.reshape(-1, ends.shape[2])
    is_known = np.isfinite(points)
    everywhere = is_known.all(axis=0)
    if everywhere.sum() < 2:
        return 0.0
    of_replicates = points[:, everywhere].mean(axis=0)
    return float(of_replicates.var(ddof=1) * (1.0 / is_known.sum(axis=1)).mean())


def _shares(parts: FloatArray, shared: float) -> FloatArray:
    """First-order indices, total indices and share of chance, (n, 2 n_keys + 1), from means of the rows' parts."""
    variance = parts[:, -1] - parts[:, -2] ** 2
    variance = np.where(variance > 0.0, variance, math.nan)[:, None]
    shares: FloatArray = parts[:, :-2] / variance
    shares[:, -1] = np.maximum(parts[:, -3] - shared, 0.0) / variance[:, 0]
    return shares


def _resampled(parts: FloatArray, shared: float, seed: int) -> FloatArray:
    """The shares of resamples of the rows with replacement, (N_RESAMPLES, 2 n_keys + 1)."""
    rng = np.random.default_rng(seed)
    n = len(parts)
    at_a_time = max(1, CHUNK // n)
    results = []
    for start in range(0, N_RESAMPLES, at_a_time):
        size = min(at_a_time, N_RESAMPLES - start)
        drawn = rng.integers(n, size=(size, n)) + n * np.arange(size)[:, None]
        weights = np.bincount(drawn.ravel(), minlength=size * n).reshape(size, n) / n
        results.append(_shares(weights @ parts, shared))
    together = np.concatenate(results)
    # a resample in which nothing varies says nothing
    return together[np.isfinite(together).all(axis=1)]
