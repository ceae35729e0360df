"""When to look, and how sure to be at each look."""

from __future__ import annotations

import math
from itertools import pairwise

import pytest

from swarmpush.auditing.looks import confidence_at, looks


@pytest.mark.parametrize(
    ("first", "budget", "sizes"),
    [
        (12, 12, (12,)),
        (12, 48, (12, 24, 48)),
        (12, 96, (12, 24, 48, 96)),
        (12, 60, (12, 24, 60)),
        (12, 47, (12, 24, 47)),
        (12, 14, (14,)),  # a second look so soon would cost more than it tells
        (12, 5, (5,)),
        (2, 3, (2, 3)),
    ],
)
def test_looks_by_hand(first: int, budget: int, sizes: tuple[int, ...]) -> None:
    """Looks double and end at the budget."""
    assert looks(first, budget) == sizes


def test_any_budget_is_spent_in_doublings() -> None:
    """Whatever the budget, looks rise, begin with the first, double, and end at the budget by 1.4 to 2.9 times."""
    for budget in range(10, 700):
        sizes = looks(10, budget)
        assert sizes[-1] == budget
        if len(sizes) > 1:
            assert sizes[0] == 10
            assert all(b == 2 * a for a, b in pairwise(sizes[:-1]))
            assert math.sqrt(2) <= sizes[-1] / sizes[-2] <= 2 * math.sqrt(2)


def test_the_error_is_split_evenly() -> None:
    """All looks, and all claims that are to be right together, share the error allowed."""
    assert confidence_at(0, 1, 0.95) == pytest.approx(0.95)
    assert sum(1 - confidence_at(k, 4, 0.9) for k in range(4)) == pytest.approx(0.1)
    assert 1 - confidence_at(2, 3, 0.95, n_claims=5) == pytest.approx(0.05 / 15)


def test_what_is_refused() -> None:
    """Looks with too few runs or none, and confidences that are none, are refused."""
    for first, budget in ((1, 10), (2, 1), (0, 0)):
        with pytest.raises(ValueError, match="at least 2"):
            looks(first, budget)
    for look, n_looks, confidence, n_claims in ((3, 3, 0.95, 1), (-1, 3, 0.95, 1), (0, 1, 1.0, 1), (0, 1, 0.9, 0)):
        with pytest.raises(ValueError, match="looks count from 0"):
            confidence_at(look, n_looks, confidence, n_claims=n_claims)
