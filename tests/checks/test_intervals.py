"""Confidence intervals against published and tabulated ones."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from swarmpush.auditing.statistics import mean_interval, share_interval

# 95 % score intervals by Wilson's method as printed by Newcombe, "Two-sided confidence intervals for the single
# proportion", Statistics in Medicine 17 (1998) 857, table I (digits from memory, reproduced here by hand)
WILSON = (
    (81, 263, 0.2553, 0.3662),
    (15, 148, 0.0624, 0.1605),
    (0, 20, 0.0, 0.1611),
    (1, 29, 0.0061, 0.1718),
    (9, 10, 0.5958, 0.9821),
    (50, 100, 0.4038, 0.5962),
)
FOUR_DIGITS = 5e-5  # as printed


@pytest.mark.parametrize(("successes", "n", "low", "high"), WILSON)
def test_share_interval(successes: int, n: int, low: float, high: float) -> None:
    """The interval of a share is Wilson's, as Newcombe prints it."""
    found = share_interval(successes, n, 0.95)
    assert found.mean == successes / n
    assert (found.low, found.high) == (pytest.approx(low, abs=FOUR_DIGITS), pytest.approx(high, abs=FOUR_DIGITS))
    other = stats.binomtest(successes, n).proportion_ci(0.95, method="wilson")
    assert (found.low, found.high) == (pytest.approx(other.low, abs=1e-12), pytest.approx(other.high, abs=1e-12))


# Student's own data: extra hours of sleep with two drugs, ten patients, as paired differences ("The probable error of a
# mean", Biometrika 6 (1908) 1); the interval is the one that textbooks and manuals print for them (value from memory)
SLEEP = (1.2, 2.4, 1.3, 1.3, 0.0, 1.0, 1.8, 0.8, 4.6, 1.4)


def test_mean_interval_of_students_sleep_data() -> None:
    """The interval of a mean is Student's t: 1.58 (0.7001, 2.4599) for his sleep data."""
    found = mean_interval(SLEEP, 0.95)
    assert (found.mean, found.n) == (pytest.approx(1.58, abs=1e-12), 10)
    assert (found.low, found.high) == (pytest.approx(0.7001142, abs=1e-6), pytest.approx(2.4598858, abs=1e-6))


@pytest.mark.parametrize("confidence", [0.8, 0.95, 0.99])
@pytest.mark.parametrize(("n", "t_95"), [(2, 12.7062), (3, 4.3027), (5, 2.7764), (12, 2.2010), (31, 2.0423)])
def test_mean_interval(confidence: float, n: int, t_95: float) -> None:
    """The half-width is t s/sqrt(n), with the t of the printed tables and of SciPy's own interval."""
    values = np.linspace(-1.0, 2.0, n) ** 3
    found = mean_interval(values, confidence)
    sem = values.std(ddof=1) / math.sqrt(n)
    low, high = stats.t.interval(confidence, n - 1, loc=values.mean(), scale=sem)
    assert (found.low, found.high) == (pytest.approx(low, abs=1e-12), pytest.approx(high, abs=1e-12))
    if confidence == 0.95:
        assert (found.high - found.low) / (2 * sem) == pytest.approx(t_95, abs=FOUR_DIGITS)


def test_intervals_cover() -> None:
    """Of 2000 intervals at 90 %, about 1800 hold the true mean, and at least as many the true share."""
    rng = np.random.default_rng(3)
    n = 2000
    error = 4 * math.sqrt(0.9 * 0.1 / n)  # four standard errors; the draws are fixed
    means = [mean_interval(rng.normal(5.0, 2.0, 6), 0.9) for _ in range(n)]
    assert sum(e.low <= 5.0 <= e.high for e in means) / n == pytest.approx(0.9, abs=error)
    shares = [share_interval(int(rng.binomial(40, 0.3)), 40, 0.9) for _ in range(n)]
    # exact coverage of the score interval for 40 trials at 0.3, from the binomial law
    counts = np.arange(41)
    inside = [e.low <= 0.3 <= e.high for e in (share_interval(int(k), 40, 0.9) for k in counts)]
    exact = float(stats.binom.pmf(counts, 40, 0.3)[inside].sum())
    assert abs(exact - 0.9) < 0.03
    assert sum(e.low <= 0.3 <= e.high for e in shares) / n == pytest.approx(exact, abs=error)
