"""Two designs on the same random draws: paired differences of what their runs measured."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike

from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval

COMPARED = {
    "block speed": ("block_speed_m_s", "m/s"),
    "arrival": ("has_arrived", "share of runs"),
    "strike rate": ("strike_rate_1_s", "1/s"),
}


def compare_runs(these: pd.DataFrame, others: pd.DataFrame, confidence: float) -> pd.DataFrame:
    """Differences between two sets of runs, pair by pair.

    Arguments:
        these, others: (n rows) summaries of runs with replicate and seed; pairs are those of the same replicate.
        confidence: of the intervals.

    Returns:
        One row each for block speed, arrival and strike rate (per pusher): quantity, unit, this, other (means),
        difference (other minus this), low, high (of the difference), n (pairs with both values).

    Raises:
        ValueError: when replicates or seeds differ.
    """
    these, others = these.set_index("replicate"), others.set_index("replicate")
    if len(these) != len(others):
        raise ValueError(f"the audits have {len(these)} and {len(others)} replicates; pairs need the same number")
    if not these["seed"].equals(others["seed"]):
        raise ValueError("the audits were drawn from different seeds; pairs need the same draws")
    rows = []
    for quantity, (column, unit) in COMPARED.items():
        this, other = these[column], others[column]
        if column == "has_arrived":
            change = share_difference(this, other, confidence)
        else:
            change = mean_interval(other - this, confidence)
        means = this.mean(), other.mean()
        rows.append((quantity, unit, *means, change.mean, change.low, change.high, change.n))
    return pd.DataFrame(rows, columns=["quantity", "unit", "this", "other", "difference", "low", "high", "n"])


def share_difference(these: ArrayLike, others: ArrayLike, confidence: float) -> Estimate:
    """Difference of two shares of the same trials, second minus first, and its interval.

    Source: R. G. Newcombe, Stat. Med. 17 (1998) 2635, method 10: the score intervals of both shares, squared and added
    with the pairs' correlation, of which he takes a continuity correction off when it is positive. Student's interval
    of the differences would have no width where all pairs are alike.

    Arguments:
        these, others: (n,) 0 or 1 per trial. confidence: e.g. 0.95.

    >>> share_difference([1, 1, 0, 1], [1, 1, 0, 1], 0.95).low < -0.2
    True
    """
    first, second = np.asarray(these, dtype=bool), np.asarray(others, dtype=bool)
    n = len(first)
    if n == 0:
        return Estimate(math.nan, -1.0, 1.0, 0)
    p, q = (share_interval(int(hits.sum()), n, confidence) for hits in (second, first))
    both, neither = int((first & second).sum()), int((~first & ~second).sum())
    product = float(both * neither - int((first & ~second).sum()) * int((~first & second).sum()))
    if product > 0.0:
        product = max(0.0, product - n / 2.0)
    spread = math.sqrt(float(first.sum() * (~first).sum() * second.sum() * (~second).sum()))
    phi = product / spread if spread > 0.0 else 0.0

    def reach(a: float, b: float) -> float:
        return math.sqrt(max(0.0, a * a - 2.0 * phi * a * b + b * b))

    difference = p.mean - q.mean
    low = difference - reach(p.mean - p.low, q.high - q.mean)
    return Estimate(difference, low, difference + reach(p.high - p.mean, q.mean - q.low), n)
