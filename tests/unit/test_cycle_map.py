"""Laps along one key of a scenario: multipliers against closed forms, followed laps, bands and what bounds them."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.kinematics.band_edges import NO_PULL
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.kinematics.cycle_map import cycle_map
from swarmpush.kinematics.laps import find_laps
from swarmpush.kinematics.legs import next_hit
from swarmpush.kinematics.settling import ATTRACTING, NEUTRAL, REPELLING
from swarmpush.loading import load
from swarmpush.problems import ScenarioError
from swarmpush.routine import Routine
from swarmpush.scenario import Scenario
from swarmpush.vary import with_value

CLOSED_FORM = 1e-9  # a product of a few cosines of angles that Newton's method has to 1e-12
LAST_ANGLE = "routine.stages[3].acts[2].angle"  # with which the service passage leaves its second wall
TRIANGLE = "rear - top - bottom"
FEW = 60  # starts; each lap looked at here catches a good share of them


def passage() -> Scenario:
    return load(demo("service_passage"))


def leaving(psi: float) -> Scenario:
    """The service passage with its three departures such that the lap is an equilateral triangle.

    The headings are psi, psi + 120 and psi + 240 deg, those of a turn by 120 deg that leaves the bottom at psi.
    """
    s = with_value(passage(), LAST_ANGLE, f"{90 - psi} deg")
    s = with_value(s, "routine.stages[2].acts[2].angle", f"{60 - psi} deg")
    return with_value(s, "routine.stages[1].acts[5].angle", f"{30 - psi} deg")


def turning(degrees: float) -> Scenario:
    """The service passage with a turn by this angle at every bump."""
    acts = [{"act": "run"}, {"act": "turn", "angle": f"{degrees} deg"}]
    routine = Routine.model_validate({"stages": [{"name": "only", "acts": acts}]})
    return passage().model_copy(update={"routine": routine})


def multiplier(psi: float) -> float:
    """Of the triangle with headings psi, psi + 120 and psi + 240 (rad): the product of -cos a/cos b over its legs."""
    return -math.tan(psi) / math.tan(math.radians(60) - psi)


# ---- closed forms -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("psi", [5, 15, 25, 28])
def test_multiplier_of_the_triangle(psi: int) -> None:
    """With headings psi, psi + 120 and psi + 240 deg the lap's multiplier is -tan(psi)/tan(60 deg - psi)."""
    table = cycle_map(leaving(psi), LAST_ANGLE, [f"{90 - psi} deg"], n_starts=FEW)
    assert table["surfaces"].tolist() == [TRIANGLE]
    assert table["stability"][0] == ATTRACTING
    assert table["multiplier_1"][0] == pytest.approx(multiplier(math.radians(psi)), abs=CLOSED_FORM)
    assert table["multiplier_2"][0] == pytest.approx(0.0, abs=CLOSED_FORM)  # each departure renews the heading
    assert table["rear_heading_rad"][0] == pytest.approx(math.radians(psi), abs=CLOSED_FORM)


def test_the_turn_by_120_degrees() -> None:
    """Along the turn's angle the three-bump lap is there at 120 deg only, neutral in heading, of the known multiplier.

    Any other turn brings the heading back changed by three turns less a full one.
    """
    key = "routine.stages[1].acts[2].angle"
    table = cycle_map(turning(120), key, ["118 deg", "120 deg", "121 deg"], n_starts=FEW)
    row = table[table["surfaces"] == TRIANGLE]
    assert np.degrees(row[f"{key}_rad"]).tolist() == pytest.approx([120.0])
    assert row["stability"].tolist() == [NEUTRAL]
    assert row["multiplier_1"].tolist() == pytest.approx([1.0], abs=CLOSED_FORM)
    expected = multiplier(row["rear_heading_rad"].iloc[0])
    assert row["multiplier_2"].tolist() == pytest.approx([expected], abs=CLOSED_FORM)


def test_multiplier_along_the_channel_width() -> None:
    """The turn's multiplier follows the middle of its band, which moves as the block's corner gets in the way."""
    table = cycle_map(turning(120), "channel.width", [0.32, 0.40, 0.50], n_starts=200)
    rows = table[table["surfaces"] == TRIANGLE]
    headings = rows["rear_heading_rad"].tolist()
    assert np.ptp(headings) > 0.05
    assert rows["multiplier_2"].tolist() == pytest.approx([multiplier(psi) for psi in headings], abs=CLOSED_FORM)


# ---- laps that no start finds ---------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def through_the_loss() -> pd.DataFrame:
    """The service passage's lap through the departure at which it ceases to attract: 45 deg, where psi is 45 deg."""
    return cycle_map(passage(), LAST_ANGLE, np.radians([36.0, 40.0, 44.0, 45.0, 46.0, 50.0, 60.0, 75.0]), n_starts=200)


def test_a_repelling_lap_is_followed(through_the_loss: pd.DataFrame) -> None:
    """The lap is followed to where it repels; its multiplier is -tan(psi) throughout, psi being 90 deg less the angle.

    Derived here: of the cosines in the product only those at the second wall and at the rear face do not cancel.
    """
    rows = through_the_loss[through_the_loss["surfaces"] == TRIANGLE]
    angles = rows[f"{LAST_ANGLE}_rad"].to_numpy()
    assert np.degrees(angles) == pytest.approx([36, 40, 44, 45, 46, 50, 60, 75])
    assert rows["multiplier_1"].tolist() == pytest.approx((-1 / np.tan(angles)).tolist(), abs=CLOSED_FORM)
    assert rows["stability"].tolist() == [REPELLING] * 3 + [NEUTRAL] + [ATTRACTING] * 4


def test_a_followed_lap_has_no_band(through_the_loss: pd.DataFrame) -> None:
    """A lap that no start fell into has no share and no band; one that some fell into has both."""
    rows = through_the_loss[through_the_loss["surfaces"] == TRIANGLE]
    followed = rows["share"] == 0.0
    assert followed[rows["stability"] == REPELLING].all()
    assert rows["band_low_rad"].isna().tolist() == followed.tolist()
    assert (rows["bounded_low_by"] == "").tolist() == followed.tolist()


def test_a_lap_gone_round_twice_is_no_lap(through_the_loss: pd.DataFrame) -> None:
    """Where the multiplier is -1 every orbit closes after two rounds, and only there two rounds are a lap of their own.

    Followed from there, they become one lap gone round twice, which is left out.
    """
    twice = through_the_loss[through_the_loss["surfaces"] == f"{TRIANGLE} - {TRIANGLE}"]
    assert np.degrees(twice[f"{LAST_ANGLE}_rad"]).tolist() == pytest.approx([45.0])


def test_whole_numbers_have_no_neighbours() -> None:
    """Along a count laps are looked for and not followed: what the pushers do to one another does not matter here."""
    table = cycle_map(passage(), "pushers.count", [1, 2], n_starts=FEW)
    assert table["pushers.count"].tolist() == [1, 2]
    assert table.drop(columns="pushers.count").iloc[0].equals(table.drop(columns="pushers.count").iloc[1])


# ---- bands --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("s", "width", "low", "high"),
    [
        (passage(), "32 cm", "hits bottom", "hits top"),
        (passage(), "40 cm", "hits lower rear corner", "hits upper rear corner"),
        (turning(120), "32 cm", "hits bottom", NO_PULL),
        (turning(120), "40 cm", "hits lower rear corner", NO_PULL),
    ],
)
def test_what_bounds_the_band(s: Scenario, width: str, low: str, high: str) -> None:
    """A wall or the block's corner is met instead, or the lap ceases to attract, as the turn's does beyond psi = 30."""
    (row,) = [
        row
        for row in cycle_map(s, "channel.width", [width], n_starts=200).to_dict("records")
        if row["surfaces"] == TRIANGLE
    ]
    assert (row["bounded_low_by"], row["bounded_high_by"]) == (low, high)


def test_the_band_ends_where_it_says() -> None:
    """On the last leg a heading just outside the band meets the surface said to bound it, and one inside the face."""
    s = with_value(passage(), "channel.width", "40 cm")
    (row,) = cycle_map(passage(), "channel.width", ["40 cm"], n_starts=FEW).to_dict("records")
    (lap,), _ = find_laps(s, n_starts=FEW)
    x, y = lap.hits[-1, :2]

    def met(heading: float) -> str:
        return surface_names(s)[next_hit(boundary_of(s), 0.0, x, y, math.cos(heading), math.sin(heading)).surface]

    outward = 1e-5  # rad; the ends are known to 1e-7
    assert met(row["band_low_rad"] - outward) == row["bounded_low_by"].removeprefix("hits ")
    assert met(row["band_high_rad"] + outward) == row["bounded_high_by"].removeprefix("hits ")
    assert met(row["band_low_rad"] + outward) == met(row["band_high_rad"] - outward) == "rear"


# ---- the table ------------------------------------------------------------------------------------------------------


def test_rows_are_the_laps_that_are_found() -> None:
    """At a value the rows are the laps of `find_laps` there, in its order, with its shares, bands and multipliers."""
    s = load(demo("gel_channel"))
    table = cycle_map(s, "channel.width", ["640 um"], n_starts=300)
    laps, _ = find_laps(with_value(s, "channel.width", "640 um"), n_starts=300)
    assert len(laps) == 2
    assert table["lap"].tolist() == [0, 1]
    assert table["share"].tolist() == [lap.share for lap in laps]
    assert table["lap_length_m"].tolist() == [lap.length_m for lap in laps]
    assert table["multiplier_size"].tolist() == [abs(lap.multipliers[0]) for lap in laps]
    assert table["period"].tolist() == [len(lap.surfaces) for lap in laps]
    for row, lap in zip(table.to_dict("records"), laps, strict=True):
        at_rear = [k for k, name in enumerate(lap.surfaces) if name == "rear"]
        places = [(lap.hits[k, 1], lap.hits[k, 2]) for k in at_rear]
        bands = [tuple(lap.hits[k, 2] + np.array(lap.leg_bands_rad[k - 1])) for k in at_rear]
        assert bands[places.index((row["rear_y_m"], row["rear_heading_rad"]))] == pytest.approx(
            (row["band_low_rad"], row["band_high_rad"])
        )


@pytest.mark.parametrize("workers", [1, 2, 5])
def test_any_number_of_workers(workers: int) -> None:
    """The table is the same with any number of threads, bit by bit."""
    s = load(demo("gel_channel"))
    values = ["600 um", "630 um", "660 um", "690 um"]
    told: list[Any] = []
    table = cycle_map(s, "channel.width", values, n_starts=FEW, workers=workers, progress=lambda *at: told.append(at))
    pd.testing.assert_frame_equal(table, cycle_map(s, "channel.width", values, n_starts=FEW), check_exact=True)
    assert [done for done, _, _ in told] == [1, 2, 3, 4]


def test_values_that_make_no_scenario() -> None:
    """A value that is not allowed has a row with the reason, and the others are as they would be without it."""
    values = ["20 cm", "32 cm", "30 s", "35 cm"]
    table = cycle_map(passage(), "channel.width", values, n_starts=FEW)
    good = table["reason"] == ""
    assert good.tolist() == [False, True, False, True]
    assert "wider than the channel" in table["reason"][0]
    assert "does not measure" in table["reason"][2]
    assert table["channel.width_m"].tolist() == pytest.approx([0.20, 0.32, math.nan, 0.35], nan_ok=True)
    assert table["lap"].tolist() == [-1, 0, -1, 0]
    alone = cycle_map(passage(), "channel.width", ["32 cm", "35 cm"], n_starts=FEW)
    pd.testing.assert_frame_equal(table[good].reset_index(drop=True), alone, check_exact=True)


def test_a_value_without_a_lap_says_so() -> None:
    """Where no start falls into a lap there is one row that says so."""
    table = cycle_map(load(demo("vibration_duct")), "channel.width", ["100 mm"], n_starts=20)
    assert table["lap"].tolist() == [-1]
    assert table["reason"].tolist() == ["no lap caught any of 20 starts"]


@pytest.mark.parametrize(("key", "word"), [("channel.with", "channel.width"), ("forecast.law", "number")])
def test_keys_that_cannot_be_varied(key: str, word: str) -> None:
    """A key that does not exist, or holds text, is refused at once."""
    with pytest.raises(ScenarioError, match=word) as caught:
        cycle_map(passage(), key, [1.0])
    assert caught.value.problems[0].key == key
