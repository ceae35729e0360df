"""What three step sizes say about the limit of a smooth quantity: order, extrapolated value, grid convergence index.

Only arithmetic; whether a quantity is smooth in the step at all is for others to say.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

from scipy.optimize import brentq

SAFETY = 1.25  # Celik's factor for three grids
ROUNDING = 1e-12  # relative: what 1e5 to 1e6 additions in double precision leave uncertain, with room to spare
STEEPEST = 60.0  # halving with an order above it goes from a difference of 1 to one below the rounding of doubles


class Behaviour(StrEnum):
    """How three values follow one another as the step shrinks."""

    MONOTONE = "monotone"
    OSCILLATING = "oscillating"
    GROWING = "growing"
    SETTLED = "settled"


@dataclass(frozen=True)
class GridIndex:
    """What three values tell; all but `uncertainty` are NaN where there is nothing to tell.

    behaviour: monotone or oscillating when the differences shrink; growing when they do not; settled when the finer
        two agree to rounding, so that there is no order to tell.
    order: observed order of accuracy; 1 is expected of a first-order method, and at or below 0 nothing converges.
    limit: Richardson's extrapolated value, in the quantity's unit.
    error_rel: |fine - middle| over |fine|. limit_error_rel: |limit - fine| over |limit|. Lower is better for both.
    uncertainty: the index in the quantity's unit, about the finest value; infinite when the differences grow; lower
        is better.
    index_rel: the same over |fine|.
    """

    behaviour: Behaviour
    order: float
    limit: float
    error_rel: float
    limit_error_rel: float
    uncertainty: float
    index_rel: float


def grid_index(fine: float, middle: float, coarse: float, *, r21: float = 2.0, r32: float = 2.0) -> GridIndex:
    """Observed order, extrapolated value and grid convergence index from three step sizes.

    With e21 = middle - fine, e32 = coarse - middle and s = sign(e32/e21) the order p solves
    p ln r21 = ln|e32/e21| + ln((r21^p - s)/(r32^p - s)); the limit is (r21^p fine - middle)/(r21^p - 1) and the index
    1.25 |e21|/(r21^p - 1). For r21 = r32 = 2 this is p = log2|e32/e21|. Celik takes the absolute value of the right
    side; here p keeps its sign, so that differences that grow are not taken for an order.

    Arguments:
        fine, middle, coarse: the quantity, in any unit, from the smallest step to the largest.
        r21, r32: ratios of the steps, middle over fine and coarse over middle; above 1.

    Returns:
        A `GridIndex`. When the finer two agree to rounding, the limit is their value and the uncertainty 1.25 times
        the largest difference: two equal values prove no order.

    Raises:
        ValueError: when a value is not finite or a ratio is not above 1.

    Source: I. B. Celik et al., J. Fluids Eng. 130 (2008) 078001, equations 3 to 7.

    >>> found = grid_index(1.01, 1.02, 1.04)
    >>> round(found.order, 9), round(found.limit, 9), round(found.uncertainty, 9)
    (1.0, 1.0, 0.0125)
    """
    if not all(map(math.isfinite, (fine, middle, coarse))):
        raise ValueError(f"values {fine}, {middle}, {coarse} given; all must be finite")
    if not (1.0 < r21 < math.inf and 1.0 < r32 < math.inf):
        raise ValueError(f"step ratios {r21} and {r32} given; both must be above 1")
    e21, e32 = middle - fine, coarse - middle
    rounding = ROUNDING * max(abs(fine), abs(middle), abs(coarse))
    error_rel = _over(abs(e21), abs(fine))
    if abs(e21) <= rounding:
        spread = SAFETY * max(abs(e21), abs(e32))
        return GridIndex(Behaviour.SETTLED, math.nan, fine, error_rel, 0.0, spread, _over(spread, abs(fine)))
    order = _order(e32 / e21, math.log(r21), math.log(r32)) if abs(e32) > rounding else -math.inf
    if order <= 0.0:
        return GridIndex(Behaviour.GROWING, order, math.nan, error_rel, math.nan, math.inf, math.inf)
    gain = math.expm1(order * math.log(r21))
    limit, uncertainty = fine - e21 / gain, SAFETY * abs(e21) / gain
    behaviour = Behaviour.MONOTONE if e32 / e21 > 0.0 else Behaviour.OSCILLATING
    limit_error_rel = _over(abs(limit - fine), abs(limit))
    return GridIndex(behaviour, order, limit, error_rel, limit_error_rel, uncertainty, _over(uncertainty, abs(fine)))


def _order(ratio: float, log_r21: float, log_r32: float) -> float:
    """The one root of the equation for the order: both sides' difference grows with p for either sign of the ratio."""

    def excess(p: float) -> float:
        a, b = p * log_r21, p * log_r32
        if ratio < 0.0:
            return a + math.log((math.exp(b) + 1.0) / (math.exp(a) + 1.0)) - math.log(-ratio)
        quotient = math.expm1(b) / math.expm1(a) if p else log_r32 / log_r21  # its limit for p -> 0
        return a + math.log(quotient) - math.log(ratio)

    if excess(-STEEPEST) > 0.0:
        return -STEEPEST
    if excess(STEEPEST) < 0.0:
        return STEEPEST
    return float(brentq(excess, -STEEPEST, STEEPEST, xtol=1e-12))


def _over(part: float, whole: float) -> float:
    return part / whole if whole > 0.0 else math.nan
