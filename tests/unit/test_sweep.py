"""What a study's result says: the tidy table, groups, demands, the study in its folder."""

from __future__ import annotations

import json
import math
import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from swarmpush.auditing.statistics import mean_interval, share_interval
from swarmpush.auditing.survival import survival_curve
from swarmpush.output import OutputError
from swarmpush.reporting.page import page
from swarmpush.reporting.study_drawing import group_axis, is_map
from swarmpush.reporting.study_words import cost_words, point_rows, summary_words, weight_rows
from swarmpush.studies.estimate import Cost, Size
from swarmpush.studies.saved import DEFINITION, read_study, save_study
from swarmpush.studies.store import Summary
from swarmpush.studies.study import Study
from swarmpush.studies.study_file import loads_study
from swarmpush.studies.sweep import StudyResult

N_RUNS = 4

GRID = """
format = 1
base = "service_passage"
replicates = 4
outputs = ["arrival", "block speed", "lap time"]
demand = "arrival>=0.4"
[about]
name = "A <b>grid</b>"
[design]
kind = "grid"
[[vary]]
key = "pushers.count"
values = [2, 4, 8]
[[vary]]
name = "departure"
[vary.options]
"exact" = {}
"<i>loose</i>" = { "errors.turn_sd" = "20 deg" }
[vary.options."from elsewhere"]
routine = { from = "vibration_duct" }
"""
TWO_NUMBERS = GRID[: GRID.index("[[vary]]\nname")] + '[[vary]]\nkey = "errors.turn_sd"\nlow = 0\nhigh = 0.2\nn = 3\n'
SAMPLED = TWO_NUMBERS.replace('kind = "grid"', 'kind = "{kind}"\npoints = 8').replace("n = 3\n", "")


def made_up(study: Study, *, missing: int | None = None) -> StudyResult:
    """A result with runs that follow a simple law: speed and arrivals grow with the point."""
    rows = []
    for point in range(len(study.points)):
        for k in range(N_RUNS if point != missing else 0):
            share = point / max(1, len(study.points) - 1)
            arrives = (k + 0.5) / N_RUNS < share
            rows.append(
                {
                    "point": point, "replicate": k, "seed": k, "block_speed_m_s": 1e-4 * (1 + point + 0.1 * k),
                    "has_arrived": float(arrives), "duration_s": 100.0 + 10 * k if arrives else 300.0,
                    "lap_time_s": math.nan if k == 0 else 5.0 + k,
                }
            )  # fmt: skip
    n = len(study.points)
    failures = pd.DataFrame(columns=["point", "replicate", "seed", "error", "message", "tables"])
    return StudyResult(study, Summary(n, n, 0, len(rows), len(rows), 0, math.nan), pd.DataFrame(rows), failures)


@pytest.fixture(scope="module")
def grid() -> StudyResult:
    return made_up(loads_study(GRID), missing=3)


def test_the_table_holds_means_and_intervals(grid: StudyResult) -> None:
    """Each point has the intervals that its runs give; what a run lacks is left out."""
    table = grid.table
    assert table["departure"].tolist() == ["exact", "<i>loose</i>", "from elsewhere"] * 3
    assert table["n_runs"].tolist() == [4, 4, 4, 0, 4, 4, 4, 4, 4]
    for point in (1, 7):
        runs = grid.runs[grid.runs["point"] == point]
        arrived = share_interval(int(runs["has_arrived"].sum()), N_RUNS, 0.95)
        speed, lap = (mean_interval(runs[name], 0.95) for name in ("block_speed_m_s", "lap_time_s"))
        row = table.iloc[point]
        for column, found in (("arrived_share", arrived), ("block_speed_m_s", speed), ("lap_time_s", lap)):
            assert tuple(row[[column, f"{column}_low", f"{column}_high"]]) == (found.mean, found.low, found.high)
    empty = table.iloc[3]
    assert math.isnan(empty["block_speed_m_s"])
    assert (empty["arrived_share_low"], empty["arrived_share_high"]) == (0.0, 1.0)


def test_runs_by_the_value_of_an_axis(grid: StudyResult) -> None:
    """Groups hold the runs of their points, in the order of the values."""
    count, departure = grid.study.varied
    assert list(grid.groups(count)) == ["2", "4", "8"]
    groups = grid.groups(departure)
    assert list(groups) == ["exact", "<i>loose</i>", "from elsewhere"]
    assert groups["exact"]["point"].unique().tolist() == [0, 6]
    assert sum(map(len, groups.values())) == len(grid.runs)
    assert group_axis(grid) == departure


def test_the_demand_is_met_at_the_doubtful_end(grid: StudyResult) -> None:
    """A point meets the demand if the low end of its interval does; without runs nobody knows."""
    met = grid.meets_demand()
    assert met[3] is None
    low = grid.table["arrived_share_low"]
    assert [bool(x) for x in met] == [bool(x >= 0.4) and point != 3 for point, x in enumerate(low)]
    assert any(met)
    assert not all(met)
    assert made_up(loads_study(GRID.replace('demand = "arrival>=0.4"', ""))).meets_demand() == []


def test_intervals_after_several_looks_are_surer() -> None:
    """Where a stop rule looks several times, the intervals shown are the ones it judged by (Bonferroni)."""
    stop = '[stop]\noutput = "block speed"\nrelative_width = 0.2\nmost = 16\n'
    assert made_up(loads_study(GRID)).confidence == pytest.approx(0.95)
    result = made_up(loads_study(GRID + stop))
    assert len(result.study.counts) == 3
    assert result.confidence == pytest.approx(1.0 - 0.05 / 3)
    speed = mean_interval(result.runs[result.runs["point"] == 2]["block_speed_m_s"], result.confidence)
    assert result.table["block_speed_m_s_high"].iloc[2] == speed.high


def test_a_curve_of_arrivals_has_censored_runs(grid: StudyResult) -> None:
    """Runs that have not arrived count as under way until their end."""
    runs = grid.runs[grid.runs["point"] == 5]
    expected = survival_curve(runs["duration_s"], runs["has_arrived"] == 0.0, 0.95)
    np.testing.assert_array_equal(grid.under_way(runs).share, expected.share)


@pytest.mark.parametrize("text", [GRID, TWO_NUMBERS, *(SAMPLED.format(kind=kind) for kind in (
    "sobol", "latin hypercube", "sensitivity", "screening"))])  # fmt: skip
def test_a_study_in_its_folder(text: str, tmp_path: Path) -> None:
    """A study comes back from its folder the same: digest, axes, demand, and the scenario of each point."""
    study = loads_study(text)
    save_study(study, tmp_path)
    again = read_study(tmp_path)
    assert again.digest() == study.digest()
    assert (again.axes, again.demand, again.stop) == (study.axes, study.demand, study.stop)
    pd.testing.assert_frame_equal(again.points, study.points)
    for point in (0, len(study.points) - 1):
        assert again.scenario(point) == study.scenario(point)


def test_a_damaged_definition(tmp_path: Path) -> None:
    """Anything but a whole definition is refused with the name of the folder."""
    save_study(loads_study(GRID), tmp_path)
    whole = (tmp_path / DEFINITION).read_text()
    for text in (whole[:-20], "[]", "{}", json.dumps(json.loads(whole) | {"axes": [{"nme": "x"}]})):
        (tmp_path / DEFINITION).write_text(text)
        with pytest.raises(OutputError, match="damaged"):
            read_study(tmp_path)


@pytest.mark.parametrize(
    ("text", "figures"),
    [
        (GRID, {"response_arrival", "response_block_speed", "response_lap_time", "arrivals"}),
        (TWO_NUMBERS, {"response_arrival", "map_arrival", "map_block_speed", "arrivals"}),
        (SAMPLED.format(kind="sobol"), {"response_arrival", "response_lap_time"}),
        (SAMPLED.format(kind="sensitivity"), {"weights_arrival", "weights_block_speed", "response_arrival"}),
        (SAMPLED.format(kind="screening"), {"weights_arrival", "weights_lap_time", "response_arrival"}),
    ],
)
def test_the_page_of_every_design(text: str, figures: set[str]) -> None:
    """Every design has its figures and tables, nothing is taken for markup, and no number is missing its words."""
    result = made_up(loads_study(text))
    html = page(result)
    for key in figures:
        assert f"figures/{key}.csv" in html, key
    assert ("map_arrival" in html) == is_map(result)
    assert "A &lt;b&gt;grid&lt;/b&gt;" in html
    assert "<b>grid" not in html
    assert "<i>loose" not in html
    assert not re.search(r"\bnan\b", html)
    assert len(point_rows(result, 1000)) == len(result.study.points)
    assert len(point_rows(result, 2)) == 2
    for output in result.study.outputs:
        assert len(weight_rows(result, output)) in (0, len(result.study.varied))


def test_a_page_of_half_a_study() -> None:
    """A study of which nothing has been run yet has a page as well."""
    study = loads_study(GRID)
    whole = made_up(study)
    html = page(StudyResult(study, whole.summary, whole.runs.iloc[:0], whole.failures))
    assert "figures/response_arrival.csv" in html
    assert "figures/arrivals.csv" not in html


def test_costs_and_progress_in_words() -> None:
    """Time is told in units that fit, for the least and the most runs; and how much is left."""
    cost = Cost(Size(10, 100, 400), 0.25, 0.1, 0.5, 100.0, 9000.0, 30_000, 120_000, 2)
    assert cost_words(cost) == (
        "100 to 400 runs at 10 points. About 100 s to 2.5 h on 2 processes (250 ms a run where timed, the slowest "
        "500 ms), and 120 kB on the disk."
    )
    assert summary_words(Summary(10, 5, 0, 100, 40, 10, 0.5)) == (
        "40 of 100 runs are done, 10 failed; at 0.5 runs per second 100 s are left."
    )
    assert summary_words(Summary(10, 0, 0, 100, 0, 0, math.nan)) == "0 of 100 runs are done, 0 failed; 100 are left."
