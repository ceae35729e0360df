"""Which starts end in which lap, why the others are lost, and what it is worth when a pusher declares itself lost."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.kinematics.basins import CAUGHT, UNDECIDED, basin_map, random_starts
from swarmpush.kinematics.declarations import Declarations, declarations, declares, without_declaring
from swarmpush.kinematics.laps import find_laps
from swarmpush.kinematics.settling import CHUNK, cycle_of
from swarmpush.loading import load
from swarmpush.problems import ScenarioError
from swarmpush.routine import Routine
from swarmpush.scenario import Scenario, Start

Placed = tuple[tuple[float, float, float], ...]
RUN = {"act": "run"}
ABOUT = {"act": "turn", "angle": "180 deg"}
RESTS = {"act": "halt"}


def stage(name: str, *acts: dict[str, Any], then: str | None = None) -> dict[str, Any]:
    return {"name": name, "acts": list(acts)} | ({"then": then} if then else {})


def placed(s: Scenario, starts: Any) -> Scenario:
    """The scenario with these starts, one pusher each."""
    places = [{"x": x, "y": y, "heading": h} for x, y, h in np.asarray(starts).tolist()]
    return s.model_copy(update={"start": Start.model_validate({"placed": places})})


def hall(*stages: dict[str, Any], starts: Placed = ()) -> Scenario:
    """A hall of 3 x 1 m with a block of 0.4 x 0.4 m in the middle of its width, from x = 1.2 m, and discs of 40 mm."""
    s = load(demo("service_passage")).replace(channel={"width": 1.0}, block={"length": 0.4, "width": 0.4})
    s = s.model_copy(update={"routine": Routine.model_validate({"stages": list(stages)})})
    return placed(s, starts) if starts else s


def turning_bay() -> Scenario:
    """The loading bay, tapered and with a post, with turns by 120 deg: many laps, and many ways to be lost."""
    acts = [RUN, {"act": "turn", "angle": "120 deg"}]
    return load(demo("loading_bay")).model_copy(
        update={"routine": Routine.model_validate({"stages": [stage("only", *acts)]})}
    )


# ---- shares -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("s", [load(demo("gel_channel")), turning_bay()], ids=["gel channel", "turning bay"])
def test_shares_are_those_of_find_laps(s: Scenario) -> None:
    """For the same starts the table has exactly the laps, losses and shares of `find_laps`."""
    s = placed(s, random_starts(s, 400, seed=3))
    laps, capture = find_laps(s)
    table = basin_map(s, n_starts=400)
    assert len(table) == capture.n_starts == 400
    assert [(table["lap"] == k).mean() for k in range(len(laps))] == [lap.share for lap in laps]
    for k, lap in enumerate(laps):
        assert set(table["surfaces"][table["lap"] == k]) == {" - ".join(cycle_of(lap.surfaces))}
    fates = table["fate"].value_counts(normalize=True)
    assert fates[CAUGHT] == pytest.approx(capture.captured)
    assert fates[UNDECIDED] == pytest.approx(capture.undecided)
    assert fates[fates > 0].drop([CAUGHT, UNDECIDED], errors="ignore").to_dict() == pytest.approx(capture.lost)
    assert len(laps) > 1


def test_the_bay_loses_starts_in_several_ways() -> None:
    """The bay with turns, on which the shares are compared, has laps, lost and undecided starts."""
    fates = basin_map(turning_bay(), n_starts=400, laps=())["fate"].value_counts()
    assert (fates > 0).sum() >= 5


@pytest.mark.parametrize(
    ("acts", "start", "fate"),
    [
        ((RUN, RESTS), (0.5, 0.5, 0.0), "its routine halts"),
        ((RUN, {"act": "depart", "angle": 0}), (0.5, 0.5, math.pi / 2), "never reaches the rear face"),
        (
            (RUN, {"act": "depart", "angle": 0.5, "side": "left"}),
            (1.0, 0.5, 0.1),
            "loses the rear face and bounces between walls",
        ),
        ((RUN, {"act": "depart", "angle": 0}), (2.5, 0.5, 0.0), "ends ahead of the block"),
        ((RUN, {"act": "turn", "angle": 0}), (0.1, 0.1, -2.4), "stuck in a corner or against a surface"),
        ((RUN, {"act": "depart", "angle": 0, "side": "either"}), (0.5, 0.5, 0.0), UNDECIDED),  # what goes by chance
        ((RUN, {"act": "depart", "angle": 0}), (0.5, 0.5, 0.0), CAUGHT),
    ],
)
def test_each_fate(acts: tuple[dict[str, Any], ...], start: tuple[float, float, float], fate: str) -> None:
    """Every start is told what becomes of it, and has a lap if it is caught by one and none otherwise."""
    (row,) = basin_map(hall(stage("only", *acts), starts=(start,)), n_starts=1).to_dict("records")
    assert (row["x_m"], row["y_m"], row["heading_rad"]) == start
    assert row["fate"] == fate
    assert row["lap"] == (0 if fate == CAUGHT else -1)
    assert (row["surfaces"] == "rear - near end") == (fate == CAUGHT)


def test_laps_that_the_plan_did_not_see_are_numbered_after_its_own() -> None:
    """A lap that is not among those given takes the next number, by how many starts it catches."""
    s = load(demo("gel_channel"))
    laps, _ = find_laps(s)
    table, alone = basin_map(s, laps=laps), basin_map(s, laps=laps[1:])
    assert alone["lap"].tolist() == (1 - table["lap"]).tolist()
    assert (alone["surfaces"] == table["surfaces"]).all()


# ---- starts -------------------------------------------------------------------------------------------------------


def test_the_grid_is_regular() -> None:
    """The grid has every pair of evenly spaced places and headings, at the distance asked for."""
    s = load(demo("service_passage"))
    table = basin_map(s, n_across=4, n_headings=6, behind_m=0.3)
    assert set(table["x_m"]) == {1.2 - 0.3}
    assert sorted(set(table["y_m"])) == pytest.approx([0.07, 0.13, 0.19, 0.25])  # middles of quarters of 40 to 280 mm
    assert np.degrees(sorted(set(table["heading_rad"]))) == pytest.approx([-150, -90, -30, 30, 90, 150])
    assert len(table.drop_duplicates(["y_m", "heading_rad"])) == len(table) == 24


def test_the_grid_leaves_out_what_a_post_takes() -> None:
    """Behind the post of the bay, no start of the grid is closer to it than a radius, and those beside it are there."""
    s = turning_bay()
    table = basin_map(s, n_across=80, n_headings=2, behind_m=1.0 - 0.46, laps=())
    to_post = np.maximum(0.36 - table["y_m"], table["y_m"] - 0.44)  # the post stands from 0.36 to 0.44 m
    assert to_post.min() >= s.pushers.radius
    assert to_post.min() < s.pushers.radius + 0.8 / 80
    assert {"below", "above"} == {"below" if y < 0.4 else "above" for y in table["y_m"]}


@pytest.mark.parametrize("behind_m", [0.03, 1.17, -1.0])
def test_no_room_for_the_grid(behind_m: float) -> None:
    """A distance at which a pusher would stand in the block or the near end is refused."""
    with pytest.raises(ValueError, match="no pusher has room"):
        basin_map(load(demo("service_passage")), behind_m=behind_m)


def test_random_starts_are_spread_over_the_region() -> None:
    """Starts anywhere are behind and ahead of the block in the ratio of the open lengths, with any heading alike."""
    s = load(demo("service_passage")).replace(start={"region": "anywhere"})
    n = 20_000
    x, y, heading = random_starts(s, n, seed=1).T
    behind, ahead = 1.2 - 0.08, 3.0 - 1.45 - 0.08
    four_sigma = 4 / math.sqrt(4 * n)
    assert ((x < 1.2 - 0.04 + 1e-12) | (x > 1.45 + 0.04 - 1e-12)).all()
    assert (x < 1.2).mean() == pytest.approx(behind / (behind + ahead), abs=four_sigma)
    assert (y < 0.16).mean() == pytest.approx(0.5, abs=four_sigma)
    assert 0.04 <= y.min() < y.max() <= 0.28
    assert (np.cos(heading) > 0).mean() == pytest.approx(0.5, abs=four_sigma)


def test_random_starts_keep_their_heading_and_off_the_post() -> None:
    """Starts with a mean heading scatter about it, and in a bay with a post they keep a radius from it."""
    s = turning_bay().replace(start={"heading": 0.5, "heading_spread": 0.1})
    x, y, heading = random_starts(s, 4000, seed=1).T
    assert heading.mean() == pytest.approx(0.5, abs=4 * 0.1 / math.sqrt(4000))
    assert heading.std() == pytest.approx(0.1, rel=4 / math.sqrt(8000))  # four sigma
    gap = np.hypot(np.maximum(abs(x - 0.46) - 0.04, 0), np.maximum(abs(y - 0.40) - 0.04, 0))
    polygon = 1e-3  # the circles round corners are 64-sided polygons, so much within the radius
    assert gap.min() > s.pushers.radius * (1 - polygon)


@pytest.mark.parametrize("workers", [1, 2, 5])
def test_any_number_of_workers(workers: int) -> None:
    """The table is the same with any number of threads, bit by bit, and all progress is told."""
    s = load(demo("gel_channel"))
    n = 2 * CHUNK + 100
    told: list[Any] = []
    table = basin_map(s, n_starts=n, workers=workers, progress=lambda *at: told.append(at))
    pd.testing.assert_frame_equal(table, basin_map(s, n_starts=n), check_exact=True)
    assert [(done, whole) for done, whole, _ in told] == [(CHUNK, n), (2 * CHUNK, n), (n, n)]


def test_rows_are_small() -> None:
    """A row takes no more than three numbers, a lap's number and a byte for each word."""
    table = basin_map(load(demo("gel_channel")), n_starts=20_000)
    assert table.memory_usage(index=False).sum() <= 20_000 * (3 * 8 + 4 + 2) + 2000  # the words themselves, once


# ---- declarations ---------------------------------------------------------------------------------------------------


def patient(n: int, *, gives_up: bool = True) -> Scenario:
    """To and fro between rear face and near end, or for ever between the walls; lost after n walls in a row."""
    return hall(
        stage(
            "go",
            RUN,
            {"act": "branch", "on": "contact", "kind": "block", "go": "struck"},
            {"act": "tally", "counter": "walls", "add": 1},
            {"act": "branch", "on": "counter", "counter": "walls", "at_least": n, "go": "lost"},
            ABOUT,
        ),
        stage("struck", {"act": "tally", "counter": "walls", "set": 0}, ABOUT, then="go"),
        stage("lost", {"act": "declare"}, RESTS) if gives_up else stage("lost", {"act": "declare"}, ABOUT, then="go"),
        starts=((0.5, 0.5, 0.0), (0.5, 0.5, math.pi), (0.5, 0.5, math.pi / 2), (0.7, 0.5, -math.pi / 2)),
    )


def counts(d: Declarations) -> tuple[int, int, int, int]:
    return d.lost_declared, d.lost_silent, d.alive_declared, d.alive_silent


@pytest.mark.parametrize(
    ("n", "table"),
    [
        (1, (2, 0, 2, 0)),  # the near end is a wall: those on the lap declare themselves lost, wrongly
        (2, (2, 0, 0, 2)),  # never two walls in a row on the lap
        (1000, (0, 2, 0, 2)),  # more than the budget
    ],
)
@pytest.mark.parametrize("gives_up", [True, False])
def test_declarations_by_hand(n: int, table: tuple[int, ...], gives_up: bool) -> None:
    """Two pushers on a lap and two between the walls: who declares, who is lost, whatever is done after declaring."""
    d = declarations(patient(n, gives_up=gives_up))
    assert counts(d) == table
    assert d.n_starts == 4


def test_worth_of_a_declaration() -> None:
    """No false alarm among n is a guarantee for the starts sampled, with 3/n to 4/n wrong at most; else it is not."""
    s = patient(2).model_copy(update={"start": Start()})
    d = declarations(s, 300)
    n = d.lost_declared
    assert d.is_guarantee
    assert 3 / n < d.wrong.high < 4 / n  # the rule of three is one-sided; two-sided it is z^2/n, z^2 = 3.84
    assert d.sentence.startswith(f"A declaration is a guarantee over the sampled starts: none of {n} was wrong")
    hasty = declarations(patient(1))
    assert not hasty.is_guarantee
    assert (hasty.wrong.mean, hasty.found.mean, hasty.alarmed.mean) == (0.5, 1.0, 1.0)
    assert hasty.sentence.startswith("A declaration is only likely to be right: 2 of 4 were wrong, 50%")
    silent = declarations(patient(1000))
    assert not silent.is_guarantee
    assert silent.sentence == "None of 4 starts declared itself lost; 2 of them were."


def test_the_budget_runs_from_the_declaration() -> None:
    """A pusher that strikes again within the budget after its declaration is not lost; just beyond the budget it is."""
    # both declare at the near end; one comes to the rear face with its next leg, the other bumps into the end once more
    s = placed(patient(1), [(0.5, 0.5, math.pi)])
    assert counts(declarations(s, budget=1)) == (0, 0, 1, 0)
    slow = stage("go", RUN, {"act": "declare"}, {"act": "advance", "distance": "1 mm"}, ABOUT)
    s = hall(slow, starts=((0.5, 0.5, math.pi),))
    assert [counts(declarations(s, budget=k)) for k in (1, 2)] == [(1, 0, 0, 0), (0, 0, 1, 0)]


def test_bumping_on_the_spot_is_no_new_strike() -> None:
    """A pusher that stays at the rear face and bumps again and again does not strike it again, so it is lost."""
    s = hall(stage("go", RUN, {"act": "declare"}, {"act": "turn", "angle": 0}), starts=((0.5, 0.5, 0.0),))
    assert counts(declarations(s)) == (1, 0, 0, 0)


def test_routine_without_declaring() -> None:
    """Declarations go, and stages that begin with one, with every way there; a stage that went on to one repeats."""
    before = Routine.model_validate(
        {
            "stages": [
                stage("a", RUN, {"act": "branch", "on": "contact", "kind": "wall", "go": "lost"}, ABOUT, then="b"),
                stage("b", RUN, {"act": "declare"}, ABOUT, then="lost"),
                stage("lost", {"act": "declare"}, RESTS),
            ]
        }
    )
    after = Routine.model_validate({"stages": [stage("a", RUN, ABOUT, then="b"), stage("b", RUN, ABOUT)]})
    assert without_declaring(before) == after
    assert declares(before)
    assert not declares(after)


def test_routines_that_cannot_be_judged() -> None:
    """A routine that never declares, or does nothing else, is refused with the reason."""
    with pytest.raises(ScenarioError, match="no act declare"):
        declarations(load(demo("service_passage")))
    only = hall(stage("a", {"act": "tally", "counter": "n", "add": 1}, then="b"), stage("b", {"act": "declare"}, RESTS))
    with pytest.raises(ScenarioError, match=r"routine: without its declarations: .* without a run"):
        declarations(only)


@pytest.mark.parametrize("workers", [1, 2, 5])
def test_declarations_with_any_number_of_workers(workers: int) -> None:
    """The table is the same with any number of threads."""
    s = patient(2).model_copy(update={"start": Start()})
    assert declarations(s, 1500, workers=workers) == declarations(s, 1500)
