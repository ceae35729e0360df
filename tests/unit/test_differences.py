"""Differences of means and shares, by hand and at the ends of what can be measured."""

from __future__ import annotations

import math

import numpy as np
import pytest

from swarmpush.auditing.differences import paired_interval, paired_share_interval, share_difference
from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval


def test_paired_interval_drops_what_pairs_share() -> None:
    """The interval is that of the differences; a pair with an undefined value is left out."""
    base = np.array([10.0, 20.0, 35.0, 50.0])
    found = paired_interval([11.0, 22.0, 38.0, math.nan], base, 0.95)
    assert found == mean_interval([1.0, 2.0, 3.0], 0.95)
    assert paired_interval(base, base, 0.95) == Estimate(0.0, 0.0, 0.0, 4)
    assert paired_interval([], [], 0.95).n == 0
    with pytest.raises(ValueError, match="alike"):
        paired_interval([1.0, 2.0], [1.0], 0.95)


def test_paired_shares_by_hand() -> None:
    """The limits come from the shares of pairs that gained and lost; swapping the two turns the interval round."""
    one, two = [1, 1, 1, 0, 0, 1, 0, 0, 0, 0], [0, 0, 0, 1, 0, 1, 0, 0, 0, 0]
    found, other = paired_share_interval(one, two, 0.95), paired_share_interval(two, one, 0.95)
    gained, lost = share_interval(3, 10, 0.95), share_interval(1, 10, 0.95)
    a, b = 0.3 - gained.low, lost.high - 0.1
    correlation = -math.sqrt(0.3 * 0.1 / (0.7 * 0.9))
    assert found.mean == pytest.approx(0.2)
    assert found.low == pytest.approx(0.2 - math.sqrt(a * a + b * b - 2 * correlation * a * b))
    assert (other.mean, other.low, other.high) == pytest.approx((-found.mean, -found.high, -found.low))
    assert gained.low - lost.high < found.low < 0.2 - max(a, b)  # inside of what any correlation could give


def test_paired_shares_at_the_ends() -> None:
    """No change leaves the score interval's room, all changing reaches 1, nothing known -1 to 1, NaN drops a pair."""
    none = paired_share_interval([False] * 12, [False] * 12, 0.95)
    assert (none.mean, none.high) == (0.0, pytest.approx(share_interval(0, 12, 0.95).high))
    every = paired_share_interval([1.0] * 12, [0.0] * 12, 0.95)
    assert (every.mean, every.high) == (1.0, 1.0)
    assert 0.0 < every.low < 1.0
    nothing = paired_share_interval([math.nan], [1.0], 0.95)
    assert math.isnan(nothing.mean)
    assert (nothing.low, nothing.high, nothing.n) == (-1.0, 1.0, 0)
    assert paired_share_interval([1.0, math.nan, 0.0], [1.0, 1.0, 0.0], 0.95).n == 2
    with pytest.raises(ValueError, match="0 or 1"):
        paired_share_interval([0.5], [1.0], 0.95)
    with pytest.raises(ValueError, match="alike"):
        paired_share_interval([1, 0], [1], 0.95)


def test_share_difference_at_the_ends() -> None:
    """Without trials on one side anything is possible; equal certain shares still leave room."""
    nothing = share_difference(0, 0, 3, 4, 0.95)
    assert math.isnan(nothing.mean)
    assert (nothing.low, nothing.high, nothing.n) == (-1.0, 1.0, 4)
    alike = share_difference(10, 10, 10, 10, 0.95)
    assert (alike.mean, alike.high) == (0.0, pytest.approx(share_interval(0, 10, 0.95).high))


# 95 % intervals by method 10 of Newcombe, "Interval estimation for the difference between independent proportions",
# Statistics in Medicine 17 (1998) 873, table II (digits from memory, reproduced here)
NEWCOMBE = ((56, 70, 48, 80, 0.0524, 0.3339), (9, 10, 3, 10, 0.1705, 0.8090), (5, 56, 0, 29, -0.0381, 0.1926))
FOUR_DIGITS = 5e-5  # as printed


@pytest.mark.parametrize(("a", "n", "b", "m", "low", "high"), NEWCOMBE)
def test_share_difference(a: int, n: int, b: int, m: int, low: float, high: float) -> None:
    """The interval is the one that Newcombe prints, and turns round when the two are swapped."""
    found, other = share_difference(a, n, b, m, 0.95), share_difference(b, m, a, n, 0.95)
    assert (found.low, found.high) == (pytest.approx(low, abs=FOUR_DIGITS), pytest.approx(high, abs=FOUR_DIGITS))
    assert (other.low, other.high) == pytest.approx((-found.high, -found.low))


def test_confidence_out_of_range() -> None:
    """A confidence that is none is refused."""
    for interval in (
        lambda: paired_interval([1.0, 2.0], [0.0, 0.0], 95.0),
        lambda: share_difference(1, 2, 1, 2, 95.0),
        lambda: paired_share_interval([1, 0], [0, 0], 95.0),
    ):
        with pytest.raises(ValueError, match="confidence"):
            interval()
