"""Repeated looks: when to judge while replicates are added, and how sure each look must be.

Whoever judges after 12 runs, adds more where nothing is decided, and judges again, is wrong more often than after one
look: each has its own chance to mislead. Here the looks are planned, and the error allowed is split over them evenly.
By Bonferroni's inequality all intervals of a claim then hold together with the confidence asked for, whatever rule
stops the runs, however looks depend on each other, and whatever the intervals are made of. The boundaries of Pocock, of
O'Brien and Fleming, or of Lan and DeMets (Biometrika 70 (1983) 659) are narrower, Pocock's by 5 % for three looks, but
rest on a normal law with known variance, which is far from t intervals over a dozen runs and score intervals near 0
and 1.
"""

from __future__ import annotations

import math


def looks(first: int, budget: int) -> tuple[int, ...]:
    """Numbers of runs at which to judge: doubled from look to look, the last being the budget.

    Doubling makes looks few, and each worth having: it narrows an interval by a factor of 0.7. The last step is a
    factor of 1.4 to 2.8, whatever the budget.

    Arguments:
        first: runs at the first look, at least 2. budget: most runs, at least 2.

    Returns:
        Increasing numbers; the budget alone where it is less than 1.4 times the first.

    Raises:
        ValueError: for fewer than two runs, which have no interval.

    >>> looks(12, 48), looks(12, 60), looks(12, 12)
    ((12, 24, 48), (12, 24, 60), (12,))
    """
    if first < 2 or budget < 2:
        raise ValueError(f"{first} runs first and {budget} at most given; an interval needs at least 2")
    n_doublings = max(0, round(math.log2(budget / first)))
    return (*(first * 2**k for k in range(n_doublings)), budget)


def confidence_at(look: int, n_looks: int, confidence: float, *, n_claims: int = 1) -> float:
    """Confidence of the intervals at one look, so that those at all looks hold together with the confidence asked for.

    Arguments:
        look: which one, from 0. n_looks: how many are planned, also if the runs may stop before.
        confidence: for all looks together, e.g. 0.95.
        n_claims: claims that are to be right together; 1 when each is to be right by itself.

    Returns:
        1 - (1 - confidence)/(n_looks n_claims), the same at each look.

    Raises:
        ValueError: when the look is not among the planned ones, or another argument is out of its range.

    >>> round(confidence_at(0, 3, 0.95), 4)
    0.9833
    """
    if not 0 <= look < n_looks or n_claims < 1 or not 0.0 < confidence < 1.0:
        raise ValueError(
            f"look {look} of {n_looks}, {n_claims} claims and confidence {confidence} given; looks count from 0, there "
            "is at least one claim, and the confidence lies between 0 and 1"
        )
    return 1.0 - (1.0 - confidence) / (n_looks * n_claims)
