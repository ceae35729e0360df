"""What the step size does to one quantity, from the same runs at three steps: small, large, or not to be told."""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import ArrayLike, NDArray

from swarmpush.auditing.differences import paired_interval, paired_share_interval
from swarmpush.auditing.grid_index import Behaviour, GridIndex, grid_index
from swarmpush.auditing.statistics import Estimate
from swarmpush.quantities import for_people

SHARE = "share of runs"
DIVISORS = (1, 2, 4)  # of the step
FORMAL_ORDER = 1.0  # of the engine, which moves positions with the velocity of the step before
LEAST_ORDER = 0.5  # an order below half the formal one is not taken for convergence
NO_ORDER_SAFETY = 3.0  # P. J. Roache, J. Fluids Eng. 116 (1994) 405: the factor when no order is observed
AIM = 0.5  # of the tolerance: what a suggested step should leave
FINEST_SUGGESTION = 16.0  # a first-order guess is not trusted further than this many times finer


class Effect(StrEnum):
    """What the runs say about the step's effect on a quantity."""

    SMALL = "small"
    LARGE = "large"
    UNTOLD = "untold"


EFFECT_WORDS = {
    Effect.LARGE: "resolved and large",
    Effect.SMALL: "resolved and small",
    Effect.UNTOLD: "smaller than these runs can tell",
}


@dataclass(frozen=True)
class StepMean:
    """A quantity at one step: mean and standard error over runs, runs counted, runs left out as undefined."""

    mean: float
    standard_error: float
    n: int
    n_left_out: int


@dataclass(frozen=True)
class StepEffect:
    """One quantity at the step, at half and at a quarter of it.

    quantity, unit: its name and SI unit. at_steps: coarsest first. difference: paired, at the step minus at a quarter
    of it, with its interval. grid: order, limit and index of the means over runs that are defined at all three steps;
    None if there are none. judged: the number behind the verdict; the paired difference, or for a single run that
    tells the same story at all three steps what the step is off the limit. allowed: size up to which an effect is
    small, in the unit. effect: the verdict. is_shrinking: whether the second halving changes the mean clearly less than
    the first. suggested_step_s: step to use when the effect is large and shrinks with the step; NaN otherwise.
    """

    quantity: str
    unit: str
    at_steps: tuple[StepMean, ...]
    difference: Estimate
    grid: GridIndex | None
    judged: Estimate
    allowed: float
    effect: Effect
    is_shrinking: bool
    suggested_step_s: float

    @property
    def bound(self) -> float:
        """Largest size of the effect that the interval leaves possible, in the quantity's unit."""
        return max(abs(self.judged.low), abs(self.judged.high))

    @property
    def is_measured(self) -> bool:
        """Whether any run could be compared."""
        return self.judged.n > 0

    @property
    def replicates_to_tell(self) -> float:
        """Seeds with which the interval would fit what is allowed if the step did nothing; NaN where none is known.

        The interval narrows with the root of the number of runs; an estimate, as its width is one itself.
        """
        half, n = (self.judged.high - self.judged.low) / 2.0, self.judged.n
        if self.effect is not Effect.UNTOLD or n < 2 or not self.allowed > 0.0:
            return math.nan
        return float(f"{n * (half / self.allowed) ** 2:.2g}")

    def words(self) -> str:
        """The verdict in words, with its numbers."""
        if not self.is_measured:
            return f"{self.quantity}: no run has a value at all steps"
        head = f"{self.quantity}: {EFFECT_WORDS[self.effect]}"
        if not math.isfinite(self.bound):
            return f"{head}, one run sets no bound"
        at_most = f"at most {self._sized(self.bound)}"
        if self.effect is Effect.UNTOLD:
            least = min(abs(self.judged.low), abs(self.judged.high))
            is_seen = self.judged.low * self.judged.high > 0.0
            return f"{head}, {at_most}" + (f" and at least {self._sized(least)}" if is_seen else "")
        size = self._sized(self.judged.mean)
        return f"{head}, {size} and {at_most}" if self.bound > 0.0 else f"{head}, nothing changes"

    def _sized(self, value: float) -> str:
        """A change in its unit and as a share of the value at the finest step."""
        if self.unit == SHARE:
            return f"{two_digits(100.0 * value)} points"
        text = f"{value:.3g} {self.unit}" if self.unit.startswith("1") else for_people(value, self.unit)
        reference = abs(self.at_steps[-1].mean)
        return f"{text} ({two_digits(100.0 * value / reference)} %)" if reference > 0.0 else text


def two_digits(value: float) -> str:
    """A number with two digits, or all those before the point.

    >>> two_digits(0.0123), two_digits(148.2)
    ('0.012', '148')
    """
    return f"{value:.2g}" if abs(value) < 99.5 else f"{value:.0f}"


def step_effect(
    quantity: str,
    unit: str,
    values: ArrayLike,
    *,
    dt_s: float,
    is_smooth: bool,
    confidence: float,
    tolerance: float,
) -> StepEffect:
    """Judge what the step does to a quantity.

    The effect is small when the whole interval of the judged number lies within the allowed size; large when the
    interval excludes 0 and the number itself exceeds that size; otherwise these runs cannot tell. The step suggested
    for a large effect leaves half the allowed size if the effect falls in proportion to the step. None is suggested
    when the second halving changes about as much as the first, as with a count that itself depends on the step.

    For a share the interval comes from the pairs that changed, see `paired_share_interval`: a t interval would have no
    width where no pair changed.

    Arguments:
        quantity, unit: name and SI unit; "share of runs" for values of 0 and 1.
        values: (n, 3) a run per row, at the step, half and a quarter of it; NaN where a run has no value.
        dt_s: the step, s.
        is_smooth: every run tells the same story at all three steps.
        confidence: of the interval, e.g. 0.95.
        tolerance: allowed effect relative to the mean at the finest step; absolute for a share.

    Returns:
        A `StepEffect`.

    >>> rows = [[1.04, 1.02, 1.01], [2.04, 2.02, 2.01], [3.04, 3.02, 3.01]]
    >>> found = step_effect("speed", "m/s", rows, dt_s=0.1, is_smooth=True, confidence=0.95, tolerance=0.1)
    >>> found.effect.value, round(found.difference.mean, 9), round(found.grid.order, 6)
    ('small', 0.03, 1.0)
    """
    table = np.asarray(values, dtype=np.float64).reshape(-1, len(DIVISORS))
    whole = table[np.isfinite(table).all(axis=1)]
    compare = paired_share_interval if unit == SHARE else paired_interval
    difference = compare(table[:, 0], table[:, -1], confidence)
    coarse, middle, fine = whole.mean(axis=0) if len(whole) else (math.nan,) * 3
    grid = grid_index(fine, middle, coarse) if len(whole) else None
    judged = difference
    if grid and is_smooth and len(table) == 1:
        judged = _off_the_limit(grid, coarse, middle, fine)
    at_steps = tuple(_mean(column) for column in table.T)
    # a mean over no run stays NaN, and so does what is allowed
    allowed = tolerance * (1.0 if unit == SHARE else abs(at_steps[-1].mean))
    effect = _judge(judged, allowed)
    is_shrinking = grid is not None and (grid.behaviour is Behaviour.SETTLED or grid.order >= LEAST_ORDER)
    is_remedied = effect is Effect.LARGE and is_shrinking
    return StepEffect(
        quantity=quantity,
        unit=unit,
        at_steps=at_steps,
        difference=difference,
        grid=grid,
        judged=judged,
        allowed=allowed,
        effect=effect,
        is_shrinking=is_shrinking,
        suggested_step_s=_finer(dt_s, abs(judged.mean), allowed) if is_remedied else math.nan,
    )


def _mean(column: NDArray[np.float64]) -> StepMean:
    known = column[np.isfinite(column)]
    n = len(known)
    return StepMean(
        mean=float(known.mean()) if n else math.nan,
        standard_error=float(known.std(ddof=1) / math.sqrt(n)) if n > 1 else math.nan,
        n=n,
        n_left_out=len(column) - n,
    )


def _off_the_limit(grid: GridIndex, coarse: float, middle: float, fine: float) -> Estimate:
    """What the coarsest value is off the limit, with the index about it.

    The order that the index is taken with is no better than the formal one, so that a lucky order cannot make it
    small. Without an order the finest value stands for the limit, with the safety factor for that case.
    """
    has_order = grid.behaviour in (Behaviour.MONOTONE, Behaviour.OSCILLATING) and grid.order >= LEAST_ORDER
    if has_order:
        off = coarse - grid.limit
        half = grid.uncertainty * (2.0**grid.order - 1.0) / (2.0 ** min(grid.order, FORMAL_ORDER) - 1.0)
    else:
        off, half = coarse - fine, NO_ORDER_SAFETY * max(abs(coarse - middle), abs(middle - fine))
    return Estimate(off, off - half, off + half, 1)


def _judge(judged: Estimate, allowed: float) -> Effect:
    if max(abs(judged.low), abs(judged.high)) <= allowed:
        return Effect.SMALL
    excludes_zero = judged.low > 0.0 or judged.high < 0.0
    return Effect.LARGE if excludes_zero and abs(judged.mean) > allowed else Effect.UNTOLD


def _finer(dt_s: float, size: float, allowed: float) -> float:
    """The step at which an effect of first order falls to a part of what is allowed, rounded down to two digits."""
    wanted = max(dt_s * AIM * allowed / size, dt_s / FINEST_SUGGESTION)
    digit = 10.0 ** (math.floor(math.log10(wanted)) - 1)
    return float(f"{math.floor(wanted / digit * (1 + 1e-9)) * digit:.3g}")
