"""Survival curves against a published trial, SciPy, and the intervals for runs without censoring."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from swarmpush.auditing.statistics import mean_interval, share_interval
from swarmpush.auditing.survival import (
    log_rank,
    median_time,
    restricted_mean,
    share_at,
    survival_curve,
)

# E. J. Freireich et al., Blood 21 (1963) 699: weeks in remission of leukaemia, with 6-MP (censored ones negative) and
# placebo; the table is the one that textbooks and the manuals of statistics programs print for it
MP = (6, 6, 6, -6, 7, -9, 10, -10, -11, 13, 16, -17, -19, -20, 22, 23, -25, -32, -32, -34, -35)
PLACEBO = (1, 1, 2, 2, 3, 4, 4, 5, 5, 8, 8, 8, 8, 11, 11, 12, 12, 15, 17, 22, 23)
TABLE = (  # week, at risk, relapses, share in remission, its standard error
    (6, 21, 3, 0.8571, 0.0764),
    (7, 17, 1, 0.8067, 0.0869),
    (10, 15, 1, 0.7529, 0.0963),
    (13, 12, 1, 0.6902, 0.1068),
    (16, 11, 1, 0.6275, 0.1141),
    (22, 7, 1, 0.5378, 0.1282),
    (23, 6, 1, 0.4482, 0.1346),
)
FOUR_DIGITS = 5e-5  # as printed
ROUNDING = 1e-12

MP_WEEKS, MP_CENSORED = np.abs(MP).astype(float), np.asarray(MP) < 0
PLACEBO_WEEKS, NONE_CENSORED = np.asarray(PLACEBO, dtype=float), np.zeros(21, dtype=bool)


def test_the_curve_of_the_trial() -> None:
    """Share in remission and Greenwood's error are the printed ones; a patient censored in week 6 is at risk then."""
    curve = survival_curve(MP_WEEKS, MP_CENSORED, 0.95)
    rows = curve.events > 0
    table = np.asarray(TABLE).T
    assert curve.times_s[rows].tolist() == table[0].tolist()
    assert curve.at_risk[rows].tolist() == table[1].tolist()
    assert curve.events[rows].tolist() == table[2].tolist()
    assert curve.share[rows] == pytest.approx(table[3], abs=FOUR_DIGITS)
    assert curve.standard_error[rows] == pytest.approx(table[4], abs=FOUR_DIGITS)
    assert (curve.events.sum(), curve.n, curve.times_s[-1]) == (9, 21, 35)


def test_the_curve_is_scipys() -> None:
    """With ties and censoring in random data the share is the one by SciPy."""
    rng = np.random.default_rng(11)
    for n in (1, 2, 7, 60):
        times, censored = rng.integers(1, 12, n).astype(float), rng.random(n) < 0.4
        other = stats.ecdf(stats.CensoredData(uncensored=times[~censored], right=times[censored])).sf
        curve = survival_curve(times, censored, 0.95)
        assert curve.share == pytest.approx(other.evaluate(curve.times_s), abs=ROUNDING)


def test_log_rank_of_the_trial() -> None:
    """Chi squared is 16.793 with p 4.17e-5, as statistics programs print; placebo relapses sooner."""
    found = log_rank(MP_WEEKS, MP_CENSORED, PLACEBO_WEEKS, NONE_CENSORED)
    # 9 relapses observed with 6-MP and 19.25050 expected, variance 6.256961 (the sums of the test done by hand)
    assert found.chi2 == pytest.approx((9 - 19.25050) ** 2 / 6.256961, rel=1e-5)
    assert found.chi2 == pytest.approx(16.79294, abs=FOUR_DIGITS)
    assert found.p_value == pytest.approx(4.1688e-5, rel=1e-4)
    assert found.z == pytest.approx(-math.sqrt(found.chi2))
    assert log_rank(PLACEBO_WEEKS, NONE_CENSORED, MP_WEEKS, MP_CENSORED).z == pytest.approx(-found.z)


def test_medians_of_the_trial() -> None:
    """Half relapse by week 23 with 6-MP and week 8 with placebo; the former has no upper limit yet."""
    treated = median_time(survival_curve(MP_WEEKS, MP_CENSORED, 0.95))
    untreated = median_time(survival_curve(PLACEBO_WEEKS, NONE_CENSORED, 0.95))
    assert (treated.mean, treated.high) == (23.0, math.inf)
    assert untreated.mean == 8.0
    assert untreated.low < 8.0 < untreated.high < treated.mean


def test_restricted_mean_of_the_trial() -> None:
    """Up to week 35 the mean is the area under the printed steps, and its error that of the printed sum."""
    found = restricted_mean(MP_WEEKS, MP_CENSORED, 35.0, 0.95)
    weeks = [0.0, *(row[0] for row in TABLE), 35.0]
    shares = [1.0, *(row[3] for row in TABLE)]
    areas = np.diff(weeks) * shares
    assert found.mean == pytest.approx(areas.sum(), abs=35 * FOUR_DIGITS)
    later = [areas[k + 1 :].sum() for k in range(len(TABLE))]
    variance = sum(a * a * d / (r * (r - d)) for a, (_, r, d, _, _) in zip(later, TABLE, strict=True))
    assert math.sqrt(variance) == pytest.approx(2.83, abs=5e-3)  # as R's survfit prints it (from memory)
    n = 9 + 1  # relapses, and the patient seen for 35 weeks
    half = stats.t.ppf(0.975, n - 1) * math.sqrt(variance * n / (n - 1))
    assert (found.high - found.low) / 2 == pytest.approx(half, rel=1e-3)
    assert found.n == n


def test_without_censoring_all_is_as_for_shares_and_means() -> None:
    """Share, interval and restricted mean are then the score interval and the t interval of the times themselves."""
    curve = survival_curve(PLACEBO_WEEKS, NONE_CENSORED, 0.9)
    for week in (0.0, 0.5, 1.0, 8.0, 22.5, 23.0, 99.0):
        found, other = share_at(curve, week), share_interval(int((week < PLACEBO_WEEKS).sum()), 21, 0.9)
        assert (found.mean, found.low, found.high) == pytest.approx((other.mean, other.low, other.high), abs=ROUNDING)
    for horizon in (5.0, 11.5, 40.0):
        found = restricted_mean(PLACEBO_WEEKS, NONE_CENSORED, horizon, 0.9)
        other = mean_interval(np.minimum(PLACEBO_WEEKS, horizon), 0.9)
        assert (found.mean, found.low, found.high) == pytest.approx((other.mean, other.low, other.high), abs=1e-9)


def test_timed_out_runs_are_neither_left_out_nor_arrivals() -> None:
    """Where half the runs time out, the mean of the rest and the share that takes them for arrivals are both wrong."""
    times, censored = np.array([1.0, 2.0, 3.0, 9.0, 9.0, 9.0]), np.array([False] * 3 + [True] * 3)
    curve = survival_curve(times, censored, 0.95)
    assert share_at(curve, 9.0).mean == 0.5
    assert math.isnan(share_at(curve, 9.1).mean)
    assert share_at(curve, 9.1).high == curve.high[-1]
    assert restricted_mean(times, censored, 9.0, 0.95).mean == times.mean()
    assert median_time(curve).mean == 3.0


def test_certain_only_as_far_as_runs_go() -> None:
    """Where all or none have arrived, or all at once, the intervals still have the width that so few runs leave."""
    late = survival_curve([5.0] * 4, [True] * 4, 0.95)
    assert (late.share[0], late.low[0]) == (1.0, pytest.approx(share_interval(4, 4, 0.95).low))
    fast = survival_curve([5.0] * 4, [False] * 4, 0.95)
    assert (fast.share[0], fast.high[0]) == (0.0, pytest.approx(share_interval(0, 4, 0.95).high))
    # one of three was lost before: what the last two did counts for less than three runs and more than two
    lost = survival_curve([1.0, 2.0, 4.0, 4.0], [False, True, False, False], 0.95)
    assert share_interval(0, 4, 0.95).high < lost.high[-1] < share_interval(0, 2, 0.95).high
    nobody = restricted_mean([5.0] * 4, [True] * 4, 5.0, 0.95)
    assert (nobody.mean, nobody.high, nobody.low) == (5.0, 5.0, pytest.approx(5.0 * 0.05**0.25))
    together = restricted_mean([2.0, 2.0, 2.0, 1.0], [False, False, False, True], 5.0, 0.95)
    assert together.low < together.mean == 2.0 < together.high
    assert (median_time(late).mean, median_time(late).low) == (math.inf, 5.0)
    assert median_time(survival_curve([5.0], [False], 0.95)).low == 0.0
    assert math.isnan(log_rank([5.0] * 4, [True] * 4, [5.0] * 4, [True] * 4).p_value)
    assert math.isnan(log_rank([5.0], [False], [5.0], [False]).chi2)


def test_curves_cannot_be_written_to() -> None:
    """The arrays of a curve are read-only."""
    curve = survival_curve(MP_WEEKS, MP_CENSORED, 0.95)
    with pytest.raises(ValueError, match="read-only"):
        curve.share[0] = 0.5


@pytest.mark.parametrize(
    ("times", "censored"),
    [
        ([], []),
        ([1.0, 2.0], [True]),
        ([math.nan], [False]),
        ([-1.0], [False]),
        ([math.inf], [True]),
        ([[1.0]], [[True]]),
    ],
)
def test_what_is_refused(times: list[float], censored: list[bool]) -> None:
    """No runs, odd shapes and times that are none are refused."""
    with pytest.raises(ValueError, match="times"):
        survival_curve(times, censored, 0.95)


def test_no_mean_beyond_what_was_seen() -> None:
    """A horizon after the last run, which was censored, is refused; after the last arrival it is not."""
    with pytest.raises(ValueError, match="censored at 35"):
        restricted_mean(MP_WEEKS, MP_CENSORED, 36.0, 0.95)
    assert restricted_mean(PLACEBO_WEEKS, NONE_CENSORED, 99.0, 0.95).mean == pytest.approx(182 / 21)
    for horizon in (0.0, math.inf, math.nan):
        with pytest.raises(ValueError, match="horizon"):
            restricted_mean(PLACEBO_WEEKS, NONE_CENSORED, horizon, 0.95)
    with pytest.raises(ValueError, match="negative"):
        share_at(survival_curve(MP_WEEKS, MP_CENSORED, 0.95), -1.0)
