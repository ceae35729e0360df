"""What the runs of a study gave, ordered by points, and products of means in which chance cancels."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.auditing.claims import MEASURES

FloatArray = NDArray[np.float64]


def responses(runs: pd.DataFrame, output: str, n_points: int) -> FloatArray:
    """One measure of all runs.

    Arguments:
        runs: one row per run with the columns point, replicate and those of `Run.summary`. output: name of a measure in
            `claims.MEASURES`. n_points: points of the study.

    Returns:
        (n_points, n_replicates) SI numbers; NaN where a run is missing or has no such value.

    Raises:
        KeyError: when there is no such measure.
    """
    points, replicates = runs["point"].to_numpy(dtype=np.int64), runs["replicate"].to_numpy(dtype=np.int64)
    table = np.full((n_points, int(replicates.max(initial=0)) + 1), math.nan)
    table[points, replicates] = runs[MEASURES[output][0]].to_numpy(dtype=np.float64)
    table[~np.isfinite(table)] = math.nan
    return table


def mean_product(p: FloatArray, q: FloatArray) -> FloatArray:
    """Product of the expected values of two quantities measured in the same runs, without bias.

    The product of their means over n runs is too large by their covariance over n; a squared mean, for one, grows by
    chance alone. That covariance is estimated from the runs and taken off, which is the same as to multiply only values
    of different runs (derived here). It holds whatever the seeds that points share do to p and q, as long as runs with
    different seeds are independent.

    Arguments:
        p, q: (..., n_replicates); NaN for a run without value, which is left out.

    Returns:
        (...) products; NaN with fewer than two runs. Where there is but one replicate, the plain product.

    >>> float(mean_product(np.array([1.0, 3.0]), np.array([2.0, 4.0])))  # (1 x 4 + 3 x 2) / 2
    5.0
    """
    if p.shape[-1] == 1:
        return p[..., 0] * q[..., 0]
    is_known = np.isfinite(p) & np.isfinite(q)
    n = is_known.sum(axis=-1)
    p, q = np.where(is_known, p, 0.0), np.where(is_known, q, 0.0)
    pairs = np.where(n > 1, n * (n - 1), math.nan)
    product: FloatArray = (p.sum(axis=-1) * q.sum(axis=-1) - (p * q).sum(axis=-1)) / pairs
    return product


def mean_variance(values: FloatArray) -> FloatArray:
    """Variance of a mean over replicates, by chance.

    Arguments:
        values: (..., n_replicates); NaN for a run without value.

    Returns:
        (...) sample variance over the number of runs; NaN with fewer than two runs.
    """
    is_known = np.isfinite(values)
    n = is_known.sum(axis=-1)
    many = np.where(n > 1, n, math.nan)
    mean = np.where(is_known, values, 0.0).sum(axis=-1) / many
    square = np.where(is_known, values - mean[..., None], 0.0) ** 2
    variance: FloatArray = square.sum(axis=-1) / (many - 1) / many
    return variance


def mean_value(values: FloatArray) -> FloatArray:
    """Mean over replicates, NaN where no run has a value.

    Arguments:
        values: (..., n_replicates).
    """
    is_known = np.isfinite(values)
    n = is_known.sum(axis=-1)
    mean: FloatArray = np.where(is_known, values, 0.0).sum(axis=-1) / np.where(n > 0, n, math.nan)
    return mean
