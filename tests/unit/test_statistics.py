"""Intervals at the ends of what can be measured, and what a verdict makes of them."""

from __future__ import annotations

import math

import numpy as np
import pytest

from swarmpush.auditing.statistics import (
    Estimate,
    Verdict,
    judge,
    mean_interval,
    runs_to_decide,
    runs_to_show,
    score_limits,
    share_interval,
    unseen_share,
)


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


def test_equal_values_are_known_as_well_as_a_float() -> None:
    """Runs that all give the same have an interval as narrow as rounding, with the value itself in it."""
    for value in (0.25, -0.1, 1e9, 1e-12):
        found = mean_interval([value] * 3, 0.95)
        assert (found.mean, found.n) == (value, 3)
        assert found.low < value < found.high
        assert found.high - found.low <= 4 * math.ulp(value)
    assert mean_interval([0.0] * 3, 0.95) == Estimate(0.0, 0.0, 0.0, 3)  # nothing happened, and nothing was rounded


def test_no_interval_is_narrower_than_the_resolution() -> None:
    """Readings in steps of 0.1 s are known to half of that, whether they are equal or nearly so."""
    for times in ([2.0] * 12, [2.0] * 10000 + [2.1]):
        found = mean_interval(times, 0.95, resolution=0.1)
        assert (found.high - found.mean, found.mean - found.low) == pytest.approx((0.05, 0.05))
    wide = [1.0, 2.0, 3.0]
    assert mean_interval(wide, 0.95, resolution=0.1) == mean_interval(wide, 0.95)


def test_equal_values_between_limits_leave_room_for_rarer_ones() -> None:
    """If twelve pushers of twelve kept their lap all the time, up to 22 % of others might keep it not at all."""
    found = mean_interval([1.0] * 12, 0.95, limits=(0.0, 1.0))
    assert (found.low, found.mean, found.high) == (pytest.approx(0.05 ** (1 / 12)), 1.0, 1.0)
    middle = mean_interval([0.5] * 12, 0.95, limits=(0.0, 1.0))
    assert middle.high - 0.5 == pytest.approx(0.5 - middle.low) == pytest.approx(0.5 * unseen_share(12, 0.95))
    assert mean_interval([1.0], 0.95, limits=(0.0, 1.0)) == Estimate(1.0, 0.0, 1.0, 1)
    nearly = [0.5, 0.5001, 0.5]
    assert mean_interval(nearly, 0.95, limits=(0.0, 1.0)) == mean_interval(nearly, 0.95)  # their spread tells
    clipped = mean_interval([0.2, 0.9, 1.0], 0.95, limits=(0.0, 1.0))
    assert (clipped.low, clipped.high) == (0.0, 1.0)
    with pytest.raises(ValueError, match="must be in 0 to 1"):
        mean_interval([0.5, 1.5], 0.95, limits=(0.0, 1.0))


def test_unseen_share() -> None:
    """With that share of other runs, none is among n with the probability left; without runs all may be other."""
    for n in (1, 12, 300):
        assert (1 - unseen_share(n, 0.9)) ** n == pytest.approx(0.1)
    assert unseen_share(0, 0.95) == 1.0
    assert 300 * unseen_share(300, 0.95) == pytest.approx(3.0, abs=0.03)  # the rule of three
    with pytest.raises(ValueError, match="-1 runs"):
        unseen_share(-1, 0.95)


@pytest.mark.parametrize("confidence", [0.0, 1.0, 95.0, math.nan])
def test_confidence_out_of_range(confidence: float) -> None:
    """A confidence that is none, such as a percentage, is refused by all intervals."""
    for interval in (
        lambda: mean_interval([1.0, 2.0], confidence),
        lambda: share_interval(1, 2, confidence),
        lambda: score_limits(0.5, 2, confidence),
        lambda: unseen_share(2, confidence),
        lambda: runs_to_decide(0.9, 0, 0.8, confidence),
    ):
        with pytest.raises(ValueError, match="confidence"):
            interval()


def test_resolution_out_of_range() -> None:
    """A negative or undefined resolution is refused."""
    for resolution in (-0.1, math.nan):
        with pytest.raises(ValueError, match="resolution"):
            mean_interval([1.0, 2.0], 0.95, resolution=resolution)


def test_more_successes_than_trials() -> None:
    """A share above 1 or below 0 is refused, also of no trials."""
    for successes, n in ((3, 2), (-1, 2), (1, 0), (0, -1)):
        with pytest.raises(ValueError, match="successes"):
            share_interval(successes, n, 0.95)


def test_score_limits_are_those_of_shares() -> None:
    """For whole numbers of trials they are those of `share_interval`, for arrays as well as one by one."""
    n = np.array([1, 4, 12, 12])
    low, high = score_limits(np.array([0, 3, 12, 5]) / n, n, 0.9)
    for k, (successes, trials) in enumerate(zip((0, 3, 12, 5), n, strict=True)):
        found = share_interval(successes, int(trials), 0.9)
        assert (low[k], high[k]) == (found.low, found.high)


def test_runs_to_decide_by_hand() -> None:
    """The textbook's number without runs made; the number of unbroken successes for a share of 1; none to no avail."""
    root = 1.959964 * math.sqrt(0.8 * 0.2) + 0.841621 * math.sqrt(0.95 * 0.05)
    assert runs_to_decide(0.95, 0, 0.8, 0.95) == math.ceil((root / 0.15) ** 2)
    for demanded in (0.5, 0.9, 0.99):
        assert runs_to_decide(1.0, 0, demanded, 0.95) == runs_to_show(demanded, 0.95)
    assert runs_to_decide(0.8, 10, 0.8, 0.95) is None
    assert runs_to_decide(0.3, 0, 0.2, 0.9) == runs_to_decide(0.7, 0, 0.8, 0.9)  # failures are successes mirrored
    assert runs_to_decide(0.85, 0, 0.8, 0.95, power=0.9) > runs_to_decide(0.85, 0, 0.8, 0.95)  # type: ignore[operator]


def test_runs_made_count() -> None:
    """Runs that decide need no more; others save some, and the more of them the fewer are left."""
    assert runs_to_decide(1.0, runs_to_show(0.9, 0.95), 0.9, 0.95) == 0
    assert runs_to_decide(1.0, runs_to_show(0.9, 0.95) - 1, 0.9, 0.95) == 1
    left = [runs_to_decide(0.9, n, 0.8, 0.95) for n in (0, 20, 40, 60, 80)]
    assert left == sorted(left, reverse=True)  # type: ignore[type-var]
    assert left[0] > left[1] > 0 == left[-1]  # type: ignore[operator]


@pytest.mark.parametrize(
    "given",
    [
        {"share_now": 1.1},
        {"share_now": math.nan},
        {"n_now": -1},
        {"demanded": 0.0},
        {"demanded": 1.0},
        {"power": 1.0},
        {"power": 0.4},
    ],
)
def test_runs_to_decide_out_of_range(given: dict[str, float]) -> None:
    """Shares that are none, demands that no number of runs can show, and powers below a toss-up are refused."""
    arguments = {"share_now": 0.9, "n_now": 0, "demanded": 0.8, "confidence": 0.95} | given
    with pytest.raises(ValueError, match="demanded share"):
        runs_to_decide(**arguments)  # type: ignore[arg-type]


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
