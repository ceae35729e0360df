"""Paired differences of shares: limits, symmetry, coverage."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from swarmpush.auditing.comparing import compare_runs, share_difference
from swarmpush.auditing.statistics import Estimate

Outcomes = tuple[list[int], list[int]]


def pairs(both: int, first: int, second: int, neither: int) -> Outcomes:
    """Two columns with so many pairs of each kind."""
    counts = (both, first, second, neither)
    return np.repeat([1, 1, 0, 0], counts).tolist(), np.repeat([1, 0, 1, 0], counts).tolist()


def test_a_published_interval() -> None:
    """Airway hyper-responsiveness before and after transplantation, 1, 1, 7 and 12 of 21: 0.026 to 0.507.

    Source: Fagerland, Lydersen and Laake, Stat. Med. 33 (2014) 2850, their worked example; the numbers from memory.
    """
    found = share_difference(*pairs(1, 1, 7, 12), 0.95)
    assert found.mean == pytest.approx(6 / 21)
    assert (found.low, found.high) == pytest.approx((0.026, 0.507), abs=5e-4)


def test_pairs_that_agree_still_leave_doubt() -> None:
    """Where all pairs are alike the difference is 0, and its interval has a width that shrinks with their number."""
    few, many = (share_difference(*pairs(n, 0, 0, 0), 0.95) for n in (4, 400))
    for found in (few, many):
        assert found.mean == 0.0
        assert found.low < 0.0 < found.high
    assert many.high - many.low < 0.1 * (few.high - few.low)


def test_pairs_that_go_together_tell_more() -> None:
    """With the same shares, 65 and 75 of 161, a difference is known better when most pairs agree, worse when few do.

    Source: the correlation of method 10 by hand: (59 x 80 - 6 x 16 - 161/2)/sqrt(65 x 96 x 75 x 86) = 0.7162.
    """
    agree, mixed, differ = (
        share_difference(*pairs(both, 65 - both, 75 - both, 21 + both), 0.95) for both in (59, 30, 5)
    )
    width, free, wide = (found.high - found.low for found in (agree, mixed, differ))
    assert width < 0.6 * free < 0.6 * wide
    # both reaches are nearly alike, so that correlation takes the root of 1 - phi off the width
    assert width / free == pytest.approx(math.sqrt(1 - 0.7162), rel=0.01)


def test_no_pairs() -> None:
    """Without pairs nothing is known."""
    found = share_difference([], [], 0.95)
    assert (found.low, found.high, found.n) == (-1.0, 1.0, 0)


COUNTS = st.tuples(*[st.integers(0, 30)] * 4).filter(any)


@given(COUNTS)
def test_swapping_changes_the_sign(counts: tuple[int, int, int, int]) -> None:
    """The other way round the interval is mirrored; it holds the difference and stays within -1 to 1."""
    first, second = pairs(*counts)
    found, back = share_difference(first, second, 0.9), share_difference(second, first, 0.9)
    assert (found.mean, found.low, found.high) == pytest.approx((-back.mean, -back.high, -back.low))
    assert -1.0 <= found.low <= found.mean <= found.high <= 1.0


def test_coverage() -> None:
    """Of 95 % intervals of 20 pairs with a true difference of 0.2, at least 93 % and less than all hold it."""
    rng = np.random.default_rng(1)
    n_tries, is_held = 2000, 0
    for _ in range(n_tries):
        counts = rng.multinomial(20, (0.4, 0.1, 0.3, 0.2))
        found = share_difference(*pairs(*counts.tolist()), 0.95)
        is_held += found.low <= 0.2 <= found.high
    assert 0.93 < is_held / n_tries < 0.99  # Newcombe finds 0.95 to 0.98 for such tables; the error here is 0.005


def test_tables_are_paired_by_replicate() -> None:
    """Pairs are those of the same replicate, in whatever order the rows stand, and undefined values are left out."""
    these = pd.DataFrame(
        {"replicate": [0, 1], "seed": [5, 6], "block_speed_m_s": [1.0, 2.0], "has_arrived": [0.0, 1.0]}
    ).assign(strike_rate_1_s=[0.1, np.nan])
    others = these.assign(block_speed_m_s=[1.5, 2.5], strike_rate_1_s=0.3).iloc[::-1]
    with pytest.raises(ValueError, match="seeds"):
        compare_runs(these, others.assign(seed=7), 0.95)
    found = compare_runs(these, others.sort_index(), 0.95).set_index("quantity")
    assert found.loc["block speed", "difference"] == 0.5
    assert Estimate(*found.loc["strike rate", ["difference", "low", "high", "n"]]).n == 1
