"""Two designs on the same random draws: paired differences of what their runs measured."""

from __future__ import annotations

import pandas as pd

from swarmpush.auditing.differences import paired_interval, paired_share_interval

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
        compare = paired_share_interval if column == "has_arrived" else paired_interval
        change = compare(other, this, confidence)
        means = this.mean(), other.mean()
        rows.append((quantity, unit, *means, change.mean, change.low, change.high, change.n))
    return pd.DataFrame(rows, columns=["quantity", "unit", "this", "other", "difference", "low", "high", "n"])
