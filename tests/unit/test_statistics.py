"""Intervals at the ends of what can be measured, and what a verdict makes of them."""

from __future__ import annotations

import math

import pytest

from swarmpush.auditing.statistics import Estimate, Verdict, judge, mean_interval, share_interval


def test_mean_of_nothing() -> None:
    """Without a value all is undefined."""
    for values in ([], [math.nan, math.nan]):
        found = mean_interval(values, 0.95)
        assert found.n == 0
        assert all(map(math.isnan, (found.mean, found.low, found.high)))


def test_mean_of_one_value_has_no_limits() -> None:
    """One value alone says nothing about the spread."""
    assert mean_interval([3.0], 0.95) == Estimate(3.0, -math.inf, math.inf, 1)


def test_undefined_values_are_left_out() -> None:
    """NaN and infinite values do not count."""
    assert mean_interval([1.0, math.nan, 2.0, 3.0, math.inf], 0.9) == mean_interval([1.0, 2.0, 3.0], 0.9)


def test_equal_values_have_no_spread() -> None:
    """Runs that all give the same have an interval of no width."""
    found = mean_interval([0.25, 0.25, 0.25], 0.95)
    assert (found.mean, found.low, found.high, found.n) == (0.25, 0.25, 0.25, 3)


def test_mean_interval_by_hand() -> None:
    """For 1, 2, 3 the half-width is t(0.975; 2) s/sqrt(3) = 4.302653/sqrt(3)."""
    found = mean_interval([1.0, 2.0, 3.0], 0.95)
    assert found.mean == 2.0
    assert found.high - 2.0 == pytest.approx(4.302653 / math.sqrt(3), abs=1e-6)  # digits of the table
    assert 2.0 - found.low == pytest.approx(found.high - 2.0)


def test_share_of_nothing() -> None:
    """Without a trial the share is unknown and can be anything."""
    found = share_interval(0, 0, 0.95)
    assert math.isnan(found.mean)
    assert (found.low, found.high, found.n) == (0.0, 1.0, 0)


@pytest.mark.parametrize("n", [1, 2, 12, 1000])
def test_share_at_the_ends(n: int) -> None:
    """None and all give intervals that touch 0 and 1 exactly, and mirror each other."""
    none, all_of_them = share_interval(0, n, 0.95), share_interval(n, n, 0.95)
    assert none.low == 0.0
    assert all_of_them.high == 1.0
    assert 1.0 - all_of_them.low == pytest.approx(none.high)
    assert none.high == pytest.approx(1.959964**2 / (n + 1.959964**2), abs=1e-6)  # Wilson's bound there


def test_more_confidence_is_wider() -> None:
    """Intervals widen with the confidence asked for, and narrow with more runs."""
    widths = [share_interval(3, 12, c) for c in (0.6, 0.9, 0.99)]
    assert [e.high - e.low for e in widths] == sorted(e.high - e.low for e in widths)
    assert share_interval(30, 120, 0.95).high < share_interval(3, 12, 0.95).high


BAND = (0.9, 1.1)


@pytest.mark.parametrize(
    ("low", "high", "verdict"),
    [
        (0.95, 1.05, Verdict.HOLDS),
        (0.9, 1.1, Verdict.HOLDS),  # the whole band
        (0.2, 0.6, Verdict.FAILS),
        (1.11, 3.0, Verdict.FAILS),
        (0.85, 0.95, Verdict.STRAINED),  # over an edge, and narrow enough to tell
        (1.05, 1.25, Verdict.STRAINED),
        (0.5, 1.0, Verdict.UNDECIDED),  # over an edge, and wider than the band
        (0.5, 2.0, Verdict.UNDECIDED),
        (-math.inf, math.inf, Verdict.UNDECIDED),
    ],
)
def test_judge(low: float, high: float, verdict: Verdict) -> None:
    """A claim holds inside the band, fails outside, and across an edge is strained or undecided by width."""
    middle = (low + high) / 2 if math.isfinite(low + high) else 1.0
    assert judge(Estimate(middle, low, high, 5), BAND) is verdict


def test_judge_without_a_measurement() -> None:
    """What could not be measured, or promised, is undecided."""
    assert judge(Estimate(math.nan, math.nan, math.nan, 0), BAND) is Verdict.UNDECIDED
    assert judge(mean_interval([1.0], 0.95), BAND) is Verdict.UNDECIDED
    nothing_promised = (math.nan, math.nan)
    assert judge(Estimate(1.0, 0.9, 1.1, 5), nothing_promised) is Verdict.UNDECIDED


def test_judge_a_claim_of_nothing() -> None:
    """A promise of exactly 0 holds only for exactly 0."""
    assert judge(Estimate(0.0, 0.0, 0.0, 5), (0.0, 0.0)) is Verdict.HOLDS
    assert judge(Estimate(1e-6, 1e-6, 1e-6, 5), (0.0, 0.0)) is Verdict.FAILS
