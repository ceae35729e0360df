"""The noise budget: the largest errors that keep enough pushers on their lap."""

from __future__ import annotations

import math

import numpy as np
import pytest

from swarmpush.demos import demo
from swarmpush.kinematics.lap_loss import LapFollower
from swarmpush.kinematics.laps import Lap, find_laps
from swarmpush.kinematics.noise_budget import NoiseBudget, noise_budget
from swarmpush.kinematics.planning import plan
from swarmpush.loading import load
from swarmpush.scenario import Errors, Scenario

PRECISION = 1.02  # factor to which a limit is found


@pytest.fixture(scope="module")
def passage() -> tuple[Scenario, Lap]:
    s = load(demo("service_passage"))
    return s, find_laps(s, n_starts=100)[0][0]


def budget(passage: tuple[Scenario, Lap], **options: float) -> NoiseBudget:
    s, lap = passage
    found = noise_budget(s, lap=lap, **options)  # type: ignore[arg-type]
    assert found is not None
    return found


def test_limits_are_where_the_share_is_lost(passage: tuple[Scenario, Lap]) -> None:
    """At a limit enough pushers keep their lap, and a little beyond it too few do."""
    s, lap = passage
    found = budget(passage)
    pushers = LapFollower.of(s, lap, n=found.n)
    assert pushers is not None
    for error, limit in (
        ("turn_sd", found.turn_sd_rad),
        ("heading_diffusion", found.heading_diffusion_rad_per_sqrt_s),
    ):
        assert limit.low <= limit.value <= limit.high
        assert limit.given == getattr(s.errors, error)
        shares = [
            (pushers.legs_kept(s.errors.model_copy(update={error: size}), found.laps) == 3 * found.laps).mean()
            for size in (limit.value, PRECISION * limit.value)
        ]
        assert shares[0] >= found.share > shares[1]


def test_laps_are_those_of_the_trial(passage: tuple[Scenario, Lap]) -> None:
    """Unless asked otherwise, the laps to be kept are those that fit into the trial, and not more than 200."""
    s, lap = passage
    assert budget(passage).laps == int(300 / lap.time_s) == 60
    assert budget((s.replace(goal={"time_limit": 1e5}), lap), n=20).laps == 200


def test_more_asked_for_leaves_less(passage: tuple[Scenario, Lap]) -> None:
    """More laps, or a larger share, leave less room for errors."""
    sizes = [
        budget(passage, share=share, laps=laps).turn_sd_rad.value for share, laps in ((0.5, 10), (0.8, 10), (0.8, 40))
    ]
    assert sizes == sorted(sizes, reverse=True)
    assert sizes[0] > sizes[2]


def test_other_errors_use_the_budget_up(passage: tuple[Scenario, Lap]) -> None:
    """What the bearing errs is not left for the turn, and what errs too much alone leaves nothing."""
    s, lap = passage
    clean = s.model_copy(update={"errors": Errors()})
    some, all_of_it = (clean.replace(errors={"bearing_sd": sd}) for sd in (0.05, 1.0))
    free, less, none = (budget((x, lap)).turn_sd_rad for x in (clean, some, all_of_it))
    # independent errors add in squares
    assert less.value == pytest.approx(math.sqrt(free.value**2 - 0.05**2), rel=0.1)  # 0.1: other draws, 300 pushers
    assert (none.value, none.low, none.high) == (0.0, 0.0, 0.0)


def test_interval_narrows_with_pushers(passage: tuple[Scenario, Lap]) -> None:
    """With sixteen times the pushers the interval is narrower and lies about the same value."""
    few, many = (budget(passage, n=n, laps=20).turn_sd_rad for n in (60, 960))
    assert many.high - many.low < few.high - few.low
    assert few.low <= many.value <= few.high


def test_no_lap_no_budget() -> None:
    """A routine without a lap has no budget, and its plan says none."""
    s = load(demo("vibration_duct"))
    assert noise_budget(s) is None
    assert plan(s, n_starts=50).to_dict()["noise_budget"] is None


def test_budget_stands_in_the_plan(passage: tuple[Scenario, Lap]) -> None:
    """The plan holds the budget of its main lap, with units in the keys and infinite limits as null."""
    said = plan(passage[0], n_starts=100).to_dict()["noise_budget"]
    assert said["share"] == 0.8
    assert np.degrees(said["turn_sd_rad"]["given"]) == pytest.approx(4.0)
    assert said["turn_sd_rad"]["low"] <= said["turn_sd_rad"]["value"] <= said["turn_sd_rad"]["high"]
    assert set(said["heading_diffusion_rad_per_sqrt_s"]) == {"value", "low", "high", "given"}


@pytest.mark.parametrize(("options", "words"), [({"share": 1.0}, "between 0 and 1"), ({"laps": 0}, "1 or more")])
def test_senseless_demands_are_refused(options: dict[str, float], words: str) -> None:
    """A share that nothing can meet exactly, or no laps at all, is an error that says what is allowed."""
    with pytest.raises(ValueError, match=words):
        noise_budget(load(demo("service_passage")), **options)  # type: ignore[arg-type]
