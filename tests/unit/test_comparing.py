"""Two designs in pairs of runs: which runs make a pair, and which have none."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from swarmpush.auditing.comparing import compare_runs
from swarmpush.auditing.differences import paired_share_interval


def test_tables_are_paired_by_replicate() -> None:
    """Pairs are those of the same replicate and seed, and undefined values are left out."""
    these = pd.DataFrame(
        {"replicate": [0, 1], "seed": [5, 6], "block_speed_m_s": [1.0, 2.0], "has_arrived": [0.0, 1.0]}
    ).assign(strike_rate_1_s=[0.1, np.nan])
    others = these.assign(block_speed_m_s=[1.5, 2.5], strike_rate_1_s=0.3)
    with pytest.raises(ValueError, match="seeds"):
        compare_runs(these, others.assign(seed=7), 0.95)
    found = compare_runs(these, others, 0.95).set_index("quantity")
    assert found.loc["block speed", "difference"] == 0.5
    assert found["n"].tolist() == [2, 2, 1]
    arrival = paired_share_interval([0, 1], [0, 1], 0.95)
    assert found.loc["arrival", ["difference", "low", "high"]].tolist() == [0.0, arrival.low, arrival.high]
