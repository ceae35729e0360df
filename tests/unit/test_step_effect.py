"""What three steps say about one quantity, by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest

from swarmpush.auditing.step_effect import SHARE, Effect, StepEffect, step_effect

T_2 = 4.302653  # Student's t for 0.975 and 2 degrees of freedom, from the table


def judged(values: object, *, unit: str = "m/s", is_smooth: bool = False, tolerance: float = 0.1) -> StepEffect:
    """The effect on a quantity with a step of 8 ms."""
    return step_effect("speed", unit, values, dt_s=8e-3, is_smooth=is_smooth, confidence=0.95, tolerance=tolerance)  # type: ignore[arg-type]


def runs(differences: list[float], *, base: float = 1.0) -> list[list[float]]:
    """Runs of first order with these differences between the step and a quarter of it."""
    return [[base + d, base + d / 3, base] for d in differences]


def test_means_and_errors_by_hand() -> None:
    """Mean, standard error and paired interval of three runs are those of the textbook."""
    found = judged([[1.1, 1.0, 1.0], [2.2, 2.0, 2.0], [3.3, 3.0, 3.0]])
    assert [mean.mean for mean in found.at_steps] == pytest.approx([2.2, 2.0, 2.0])
    assert found.at_steps[1].standard_error == pytest.approx(1 / math.sqrt(3))
    assert found.difference.mean == pytest.approx(0.2)
    assert found.difference.high - 0.2 == pytest.approx(T_2 * 0.1 / math.sqrt(3), rel=1e-6)


def test_small_large_and_untold() -> None:
    """The interval within what is allowed is small; off 0 with a mean beyond it large; anything else is not told."""
    assert judged(runs([0.010, 0.011, 0.012])).effect is Effect.SMALL
    assert judged(runs([-0.01, 0.0, 0.01])).effect is Effect.SMALL
    assert judged(runs([0.20, 0.21, 0.22])).effect is Effect.LARGE
    assert judged(runs([-0.22, -0.21, -0.20])).effect is Effect.LARGE
    assert judged(runs([-0.5, 0.1, 0.5])).effect is Effect.UNTOLD
    assert judged(runs([0.05, 0.08, 0.11])).effect is Effect.UNTOLD  # seen, but on both sides of what is allowed


def test_words_carry_the_numbers() -> None:
    """Each verdict is in words with its size and bound in the unit and relative to the finest step."""
    assert judged(runs([0.02, 0.02, 0.02])).words() == (
        "speed: resolved and small, 20 mm/s (2 %) and at most 20 mm/s (2 %)"
    )
    assert judged(runs([0.0, 0.0])).words() == "speed: resolved and small, nothing changes"
    assert judged(runs([0.3, 0.3])).words().startswith("speed: resolved and large, 300 mm/s (30 %)")
    untold = judged(runs([-0.5, 0.1, 0.5]))
    assert untold.words() == f"speed: smaller than these runs can tell, at most {untold.bound:.3g} m/s (128 %)"
    seen = judged(runs([0.05, 0.08, 0.11]))
    assert seen.words() == (
        "speed: smaller than these runs can tell, at most 155 mm/s (15 %) and at least 5.48 mm/s (0.55 %)"
    )
    assert judged(runs([0.3])).words() == "speed: smaller than these runs can tell, one run sets no bound"
    assert judged([[math.nan] * 3]).words() == "speed: no run has a value at all steps"


def test_the_remedy_of_a_large_effect() -> None:
    """The suggested step brings a first-order effect to half of what is allowed, in two digits, never coarser."""
    found = judged(runs([0.3, 0.3, 0.3]))
    assert found.suggested_step_s == pytest.approx(1.3e-3)  # 8 ms 0.05/0.3 = 1.33 ms
    assert judged(runs([1e3, 1e3])).suggested_step_s == pytest.approx(8e-3 / 16)
    assert math.isnan(judged(runs([0.01, 0.01])).suggested_step_s)


def test_an_effect_that_does_not_shrink_has_no_remedy() -> None:
    """Where the second halving changes as much as the first, the effect is large and no step is suggested."""
    found = judged([[0.4, 0.7, 1.0], [0.41, 0.7, 1.0]])
    assert (found.effect, found.is_shrinking) == (Effect.LARGE, False)
    assert math.isnan(found.suggested_step_s)
    assert judged(runs([0.3, 0.31])).is_shrinking


def test_undefined_values_are_left_out_and_counted() -> None:
    """A run without a value at one step is left out of the pairs, and counted at that step."""
    found = judged([[1.1, 1.0, 1.0], [math.nan, 1.0, 1.0], [1.1, math.nan, 1.0], [1.1, 1.0, math.nan]])
    assert [(mean.n, mean.n_left_out) for mean in found.at_steps] == [(3, 1)] * 3
    assert found.difference.n == 2
    nothing = judged(np.full((4, 3), math.nan))
    assert (nothing.difference.n, nothing.grid, nothing.effect) == (0, None, Effect.UNTOLD)
    assert not nothing.is_measured
    assert math.isnan(nothing.at_steps[0].mean)


def test_a_share_that_never_changes_keeps_an_interval() -> None:
    """Eight pairs of arrivals without a change leave changes of 32 of 100 possible (score interval of 0 of 8)."""
    found = judged([[1.0, 1.0, 1.0]] * 8, unit=SHARE)
    assert found.difference.mean == 0.0
    assert found.difference.high == pytest.approx(1.959964**2 / (8 + 1.959964**2), abs=1e-6)
    assert found.effect is Effect.UNTOLD
    assert judged([[1.0, 1.0, 1.0]] * 50, unit=SHARE).effect is Effect.SMALL
    assert judged([[0.0, 0.0, 1.0]] * 8, unit=SHARE).effect is Effect.LARGE


def test_more_replicates_to_tell() -> None:
    """The number of seeds that would tell grows with the square of interval over tolerance."""
    found = judged(runs([-0.5, 0.1, 0.5]))
    half = (found.difference.high - found.difference.low) / 2
    assert found.replicates_to_tell == pytest.approx(3 * (half / 0.1) ** 2, rel=0.05)  # two digits are kept
    assert math.isnan(judged(runs([0.01, 0.01])).replicates_to_tell)


def test_one_smooth_run_is_judged_by_its_limit() -> None:
    """One run of first order is off its limit by 4/3 of the difference, and the index stands about it."""
    found = judged([[1.04, 1.02, 1.01]], is_smooth=True)
    assert found.grid is not None
    assert found.grid.order == pytest.approx(1.0)
    assert found.judged.mean == pytest.approx(0.04)
    assert found.judged.high == pytest.approx(0.04 + 1.25 * 0.01)
    assert found.effect is Effect.SMALL
    assert judged([[1.4, 1.2, 1.1]], is_smooth=True).effect is Effect.LARGE


def test_one_smooth_run_without_an_order() -> None:
    """A lucky order, or none, does not make the interval small."""
    lucky = judged([[1.3, 1.0001, 1.0]], is_smooth=True)  # order 11.6: the index alone would be 4e-8
    assert lucky.judged.high - lucky.judged.mean == pytest.approx(1.25e-4, rel=1e-3)
    erratic = judged([[1.01, 1.03, 1.0]], is_smooth=True)
    assert erratic.judged.mean == pytest.approx(0.01)
    assert erratic.bound == pytest.approx(0.01 + 3 * 0.03)
    assert judged([[1.0, 1.0, 1.0]], is_smooth=True).bound == 0.0


def test_one_run_of_a_crowd_tells_nothing() -> None:
    """One run that takes another course at another step sets no bound, whatever order its numbers feign."""
    found = judged([[1.04, 1.02, 1.01]])
    assert found.effect is Effect.UNTOLD
    assert found.bound == math.inf
