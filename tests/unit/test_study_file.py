"""Study files: what they say, what is refused and how, and what a study is told to cost."""

from __future__ import annotations

import math
import pickle
import time
import tomllib
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import jsonschema
import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import DEMOS, STUDY_DEMOS, demo, study_demo
from swarmpush.loading import from_tables, load
from swarmpush.problems import ScenarioError
from swarmpush.routine import Depart, Wander
from swarmpush.studies.advice import measure_first, what_remains
from swarmpush.studies.estimate import Cost, estimate, size
from swarmpush.studies.responses import mean_product, mean_variance, responses
from swarmpush.studies.screening import elementary_effects, find_effects
from swarmpush.studies.sensitivity import find_sensitivity, variance_shares
from swarmpush.studies.study import Axis, Stop, Study
from swarmpush.studies.study_file import MAX_POINTS, load_study, loads_study, study_schema
from swarmpush.studies.trying import MAX_TRIED, try_points, warnings
from swarmpush.vary import with_value

ROUNDING = 1e-12  # relative

GOOD = """
format = 1
base = "vibration_duct"
replicates = 4
[about]
name = "Trial"
[design]
kind = "grid"
[[vary]]
key = "pushers.count"
values = [2, 4]
[[vary]]
key = "errors.turn_sd"
low = "0 deg"
high = "20 deg"
n = 3
[[vary]]
name = "departure"
[vary.options]
"as given" = {}
"tight" = { errors.missed_bumps = "1 %", "routine.stages[1].acts[2].spread" = "1 deg" }
"wander" = { "routine.stages[1].acts[2]" = { act = "wander", law = "uniform" } }
[stop]
output = "block speed"
relative_width = 0.2
most = 8
"""


def changed(*changes: tuple[str, str]) -> str:
    text = GOOD
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    return text


def problems(text: str, folder: Path = Path()) -> dict[str, str]:
    """What is wrong with a study file: key -> sentences."""
    with pytest.raises(ScenarioError) as caught:
        loads_study(text, folder)
    found: dict[str, str] = {}
    for problem in caught.value.problems:
        found[problem.key] = f"{found[problem.key]}; {problem.sentence}" if problem.key in found else problem.sentence
    return found


def test_what_a_file_says() -> None:
    """A study holds the file's values in SI units, and the scenario's where the file leaves them out."""
    study = loads_study(GOOD)
    assert (study.name, study.note, study.replicates, study.seed) == ("Trial", "", 4, study.base.trial.seed)
    assert study.outputs == ("arrival", "block speed")
    assert study.stop == Stop("block speed", 0.2, 8)
    assert study.counts == (4, 8)
    assert study.base == load(demo("vibration_duct"))
    assert list(study.points.columns) == ["pushers.count", "errors.turn_sd", "departure"]
    assert study.points.index.name == "point"
    assert len(study.points) == 2 * 3 * 3
    assert study.points.dtypes.iloc[0] == np.int64
    assert sorted(set(study.points["errors.turn_sd"])) == pytest.approx([0, *np.radians([10, 20])], rel=ROUNDING)
    assert [axis.unit for axis in study.axes] == ["1", "rad", "1"]


def test_scenario_of_a_point() -> None:
    """A point's scenario is what setting its keys one by one gives, and options set theirs and nothing else."""
    study = loads_study(GOOD)
    base = study.base
    for point in range(len(study.points)):
        row = study.points.iloc[point]
        s = with_value(with_value(base, "pushers.count", int(row.iloc[0])), "errors.turn_sd", float(row.iloc[1]))
        made = study.scenario(point)
        act = made.routine.stages[0].acts[1]
        if row["departure"] == "as given":
            assert made == s
        elif row["departure"] == "tight":
            s = with_value(with_value(s, "errors.missed_bumps", 0.01), "routine.stages[1].acts[2].spread", "1 deg")
            assert made == s
            assert isinstance(act, Depart)
        else:
            assert act == Wander(act="wander", law="uniform")
            assert made.errors == s.errors
    with pytest.raises(IndexError, match="18 asked for"):
        study.scenario(18)
    assert study.values_at(1) == "pushers.count = 2, errors.turn_sd = 0 deg, departure = tight"


def test_tables_from_another_scenario(tmp_path: Path) -> None:
    """An option takes a whole table from a demo or a file beside the study, and nothing of the base's stays in it."""
    (tmp_path / "other.toml").write_text(demo("gel_channel").read_text(encoding="utf-8"), encoding="utf-8")
    text = changed(
        ("[stop]", '"gel" = { routine = { from = "other.toml" }, start = { from = "bristle_tray" } }\n[stop]')
    )
    study = loads_study(text, tmp_path)
    k = int(np.flatnonzero(study.points["departure"] == "gel")[0])
    assert study.scenario(k).routine == load(demo("gel_channel")).routine
    assert study.scenario(k).start == load(demo("bristle_tray")).start
    assert "no such file" in problems(text)["vary[3].options.gel"]


def test_base_beside_the_study(tmp_path: Path) -> None:
    """The base is looked for from the study file's folder; what is wrong with it is said as for a scenario."""
    (tmp_path / "rig.toml").write_text(demo("gel_channel").read_text(encoding="utf-8"), encoding="utf-8")
    path = tmp_path / "study.toml"
    path.write_text(changed(('"vibration_duct"', '"rig.toml"'), ("[2, 4]", "[2, 3]")), encoding="utf-8")
    assert load_study(path).base == load(demo("gel_channel"))
    (tmp_path / "rig.toml").write_text("format = 1", encoding="utf-8")
    with pytest.raises(ScenarioError, match=r"base: .*rig.toml: channel: missing") as caught:
        load_study(path)
    assert caught.value.source == str(path)


@pytest.mark.parametrize(
    ("changes", "key", "words"),
    [
        ([("errors.turn_sd", "errors.turn_ds")], "vary[2].key", "nearest: errors.turn_sd"),
        ([("errors.turn_sd", "errors")], "vary[2].key", "holds a table"),
        ([("errors.turn_sd", "trial.seed")], "vary[2].key", "changes no run"),
        ([('"errors.turn_sd"', '"pushers.count"'), ('"0 deg"', "1"), ('"20 deg"', "3")], "vary[2]", "above already"),
        ([("errors.turn_sd", "errors.missed_bumps"), ('"0 deg"', "0"), ('"20 deg"', "0.2")], "vary[3]", "vary[2] sets"),
        ([('"20 deg"', '"20 mm"')], "vary[2].high", '"20 mm" given; the unit'),
        ([('"20 deg"', '"-1 deg"')], "vary[2].high", '"-1 deg" given; must be at least 0 deg'),
        ([('"0 deg"', '"30 deg"')], "vary[2].high", 'must be more than low = "30 deg"'),
        ([("n = 3", 'n = 3\nscale = "log"')], "vary[2].low", "more than 0"),
        ([("n = 3", "")], "vary[2].n", "missing"),
        ([("n = 3", "n = 1")], "vary[2].n", "must be at least 2"),
        ([("n = 3", "n = 3\nsteps = 4")], "vary[2].steps", "unknown key"),
        ([('high = "20 deg"', "")], "vary[2]", "give values, or low and high"),
        ([("[2, 4]", "[2, 4]\nlow = 3")], "vary[1]", "either values, or low and high"),
        ([("[2, 4]", "[2, 4.5]")], "vary[1].values[2]", "4.5 given; must be a whole number"),
        ([("[2, 4]", "[2, 0]")], "vary[1].values[2]", "0 given; must be at least 1"),
        ([("[2, 4]", '[2, "two"]')], "vary[1].values[2]", "not a number"),
        ([("[2, 4]", "[2, {}]")], "vary[1].values[2]", "must be a number, text, true or false"),
        ([("[2, 4]", "[2, 2]")], "vary[1].values", "2 is given twice"),
        ([("values = [2, 4]", "low = 2\nhigh = 4\nn = 5")], "vary[1].n", "so many different whole numbers"),
        ([("acts[2].spread", "acts[2].spraed")], "vary[3].options.tight", "acts[2].spread"),
        ([('"1 %"', '"1 m"')], "vary[3].options.tight", "errors.missed_bumps: "),
        ([('"uniform"', '"even"')], "vary[3].options.wander", "allowed"),
        ([('"1 %"', '"1 %", "errors" = { from = "gel_channel" }')], "", "not valid TOML"),
        ([('name = "departure"', 'name = "travel"')], "vary[3].name", "taken already"),
        ([('name = "departure"', 'key = "pushers.radius"')], "vary[3].options", "options go with a name"),
        ([('name = "departure"', 'name = "d"\nvalues = [1]')], "vary[3].values", "goes with a key"),
        ([('"vibration_duct"', '"vibration_dukt"')], "base", "did you mean 'vibration_duct'"),
        ([('"vibration_duct"', '"rig.toml"')], "base", "no such file"),
        ([('"grid"', '"sobol"\npoints = 100')], "design.points", "e.g. 64 or 128"),
        ([('"grid"', '"sensitivity"')], "design.points", "missing"),
        ([('"grid"', '"grid"\npoints = 64')], "design.points", "leave it out"),
        ([('"grid"', '"latin hypercube"\npoints = 64')], "vary[2].n", "only a grid"),
        ([('"grid"', '"sobol"\npoints = 2097152'), ("n = 3", "")], "design", "2097152 points; there can be"),
        ([('"grid"', '"gird"')], "design.kind", 'allowed: "grid"'),
        ([('"grid"', '"list"')], "vary[2]", "a list needs values"),
        ([('"grid"', '"list"')], "design.kind", "(vary[1]: 2, vary[3]: 3)"),
        ([('"block speed"', '"block sped"')], "stop.output", "did you mean 'block speed'?"),
        ([("replicates = 4", 'replicates = 4\noutputs = ["speed of it"]')], "outputs[1]", "allowed: arrival"),
        ([("replicates = 4", 'replicates = 4\noutputs = ["travel", "travel"]')], "outputs", "twice"),
        ([("most = 8", "most = 3")], "stop.most", "at least the 4 replicates"),
        ([("replicates = 4", "replicates = 1")], "replicates", "at least 2"),
        ([("relative_width = 0.2", "relative_width = 0")], "stop.relative_width", "more than 0"),
        ([("replicates = 4", "replicats = 4")], "replicats", "did you mean 'replicates'?"),
    ],
)  # fmt: skip
def test_what_is_refused(changes: list[tuple[str, str]], key: str, words: str) -> None:
    """Each thing wrong is named by its key, with the value and the remedy."""
    found = problems(changed(*changes))
    assert words in found[key]


def test_everything_wrong_is_said_at_once() -> None:
    """One error does not hide others elsewhere, whether in the model, in a key or in a unit."""
    text = changed(
        ("[2, 4]", "[2, 0]"), ("turn_sd", "turn_ds"), ('"uniform"', '"even"'), ("most = 8", "most = 1"), ('"grid"', "3")
    )
    assert set(problems(text)) == {
        "design.kind", "stop.most", "vary[1].values[2]", "vary[2].key", "vary[3].options.wander"
    }  # fmt: skip


def test_too_many_points() -> None:
    """A grid of more points than can be held is refused before it is made."""
    text = changed(("n = 3", "n = 100000"), ("[2, 4]", "[2, 3, 4, 5]"))
    assert f"1200000 points; there can be at most {MAX_POINTS}" in problems(text)["design"]


def test_points_that_make_no_scenario() -> None:
    """Some invalid points are told of with reasons; if all tried are, the study is refused."""
    study = loads_study(changed(("[2, 4]", "[2, 400]")))
    (text,) = warnings(study)
    assert text.startswith("9 of 18 points make no valid scenario")
    assert "pushers.count = 400" in text
    assert "do not fit" in text
    assert try_points(study).n_invalid == 9
    with pytest.raises(ScenarioError, match=r"point 9 \(pushers.count = 400"):
        study.scenario(9)
    refused = problems(changed(("[2, 4]", "[300, 400]")))
    assert "none of the 18 points" in refused[""]
    assert "pushers.count = 300" in refused["point 0"]
    assert warnings(loads_study(GOOD)) == ()
    assert "With one run" in warnings(loads_study(changed(("replicates = 4", "replicates = 1"), ("[stop]", "[other]"))
                                                  .partition("[other]")[0]))[0]  # fmt: skip


def test_of_many_points_some_are_tried() -> None:
    """Of many points those at the ends of all axes are among those tried."""
    text = changed(("[2, 4]", "[2, 3, 4, 5, 6]"), ("n = 3", "n = 100"))
    study = loads_study(text)
    tried = try_points(study)
    assert len(tried.reasons) <= MAX_TRIED < len(study.points)
    chosen = study.points.loc[list(tried.reasons)]
    for name in study.points.columns:
        assert {study.points[name].min(), study.points[name].max()} <= set(chosen[name])


def test_a_list_goes_through_values_together() -> None:
    """A list has a point per value, options included."""
    text = changed(('"grid"', '"list"'), ("[2, 4]", "[2, 4, 4]"), ('low = "0 deg"', 'values = [0, 0.1, "6 deg"]'),
                   ('high = "20 deg"', ""), ("n = 3", ""))  # fmt: skip
    points = loads_study(text).points
    assert points["pushers.count"].tolist() == [2, 4, 4]
    assert points["errors.turn_sd"].to_numpy() == pytest.approx([0, 0.1, math.radians(6)], rel=ROUNDING)
    assert points["departure"].tolist() == ["as given", "tight", "wander"]


def test_text_and_truth_are_values() -> None:
    """Keys that hold a choice, true or false, or nothing yet can be varied."""
    text = changed(
        ('low = "0 deg"', 'values = ["left", "onward"]'), ('high = "20 deg"', ""), ("n = 3", ""),
        ("errors.turn_sd", "routine.stages[1].acts[2].side"), ("[2, 4]", "[true, false]"),
        ("pushers.count", "pushers.pass_through"),
    ).replace('name = "departure"', 'key = "errors.fade_time"\nvalues = ["1 min"]\n[[vary]]\nname = "d"')  # fmt: skip
    text = text.replace('"routine.stages[1].acts[2]" = { act = "wander", law = "uniform" }', "errors.turn_sd = 0")
    s = loads_study(text).scenario(0)
    assert s.pushers.pass_through
    assert s.errors.fade_time == 60.0
    act = s.routine.stages[0].acts[1]
    assert isinstance(act, Depart)
    assert act.side == "left"


def test_a_study_without_axes() -> None:
    """A study made from a table of points takes the columns for keys, survives pickling, and has a digest."""
    base = load(demo("service_passage"))
    points = pd.DataFrame({"pushers.count": [2, 3], "channel.width": [0.32, 0.33]}).rename_axis("point")
    study = Study("s", "", base, points, 2, None, 1, ("arrival",), "list")
    assert study.scenario(1).channel.width == 0.33
    assert study.counts == (2,)
    assert study.values_at(0) == "pushers.count = 2, channel.width = 320 mm"
    again = pickle.loads(pickle.dumps(study))
    assert again.digest() == study.digest()
    assert again.scenario(0) == study.scenario(0)


def test_scenarios_are_made_quickly() -> None:
    """A point of a study takes no longer than twice what reading its tables as a scenario takes by itself.

    A study may have a hundred thousand points, so that the keys of a point must be set in one go. The best of 5 counts
    on either side, because others may use the machine.
    """
    study = loads_study(GOOD)
    tables = [study.scenario(point).to_tables() for point in range(18)]

    def best(work: Callable[[int], object]) -> float:
        times = []
        for _ in range(5):
            start = time.perf_counter()
            for point in range(18):
                work(point)
            times.append(time.perf_counter() - start)
        return min(times)

    assert best(study.scenario) < 2.0 * best(lambda point: from_tables(tables[point]))


@pytest.mark.parametrize("name", STUDY_DEMOS)
def test_demo_studies(name: str) -> None:
    """The demo studies are found by name, read without a warning, and fit the schema."""
    path = study_demo(name)
    study = load_study(path)
    assert study.base == load(demo(next(d for d in DEMOS if f'base = "{d}"' in path.read_text(encoding="utf-8"))))
    assert warnings(study) == ()
    assert "invented" in path.read_text(encoding="utf-8").partition("format")[0]
    jsonschema.validate(tomllib.loads(path.read_text(encoding="utf-8")), study_schema())


def test_no_such_demo_study() -> None:
    """A wrong name is refused."""
    with pytest.raises(KeyError, match="no demo study 'x'"):
        study_demo("x")


def test_schema_refuses_what_the_reader_refuses() -> None:
    """The schema is a valid one, accepts a good file, and knows kinds, measures and keys."""
    schema = study_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    jsonschema.validate(tomllib.loads(GOOD), schema)
    for change in [('"grid"', '"gird"'), ('"block speed"', '"sped"'), ("n = 3", "m = 3"), ("[2, 4]", "[[2]]")]:
        with pytest.raises(jsonschema.ValidationError):
            jsonschema.validate(tomllib.loads(changed(change)), schema)


def test_size_and_cost() -> None:
    """Runs are counted from the plan of looks; time and bytes grow with them."""
    text = changed(("[2, 4]", "[1]"), ("n = 3", "n = 2"))
    study = loads_study(text)
    short = replace(study, base=study.base.replace(goal={"time_limit": 0.5}))
    assert (size(short).n_points, size(short).least_runs, size(short).most_runs) == (6, 24, 48)
    cost = estimate(short, workers=2)
    assert isinstance(cost, Cost)
    assert 0.0 < cost.run_s <= cost.slowest_s
    assert cost.least_s == pytest.approx(12 * cost.run_s + 3 * cost.plan_s, rel=ROUNDING)
    assert cost.most_s == pytest.approx(24 * cost.run_s + 3 * cost.plan_s, rel=ROUNDING)
    assert cost.most_bytes == 2 * cost.least_bytes
    assert 24 * 100 < cost.least_bytes < 24 * 1000  # a row has some tens of numbers


def test_cost_where_nothing_is_valid() -> None:
    """Without a valid point there is nothing to time, which is said."""
    study = loads_study(GOOD)
    points = study.points.assign(**{"pushers.count": 4000})
    with pytest.raises(ScenarioError, match="no point tried"):
        estimate(replace(study, points=points))


def runs(values: np.ndarray) -> pd.DataFrame:
    """A table of runs from (n_points, n_replicates) values; NaN: no such run."""
    rows = [
        {"point": p, "replicate": r, "seed": r, "travel_m": float(values[p, r])}
        for p, r in zip(*np.nonzero(np.isfinite(values)), strict=True)
    ]
    return pd.DataFrame(rows).sample(frac=1.0, random_state=1)


def test_responses_by_point() -> None:
    """Rows in any order, of any number of replicates, become a table with gaps."""
    values = np.array([[1.0, 2.0], [3.0, math.nan], [math.nan, math.nan]])
    assert np.array_equal(responses(runs(values), "travel", 3), values, equal_nan=True)


def test_products_of_means() -> None:
    """Products of means over different replicates have no bias: over many draws they average to the true product."""
    rng = np.random.default_rng(1)
    n = 100_000
    shared = rng.normal(size=(n, 3))
    p, q = 2.0 + shared, 1.0 + shared + rng.normal(size=(n, 3))
    # standard error of the mean: spread of one product, about 2.3, over sqrt(n); four of them
    assert mean_product(p, q).mean() == pytest.approx(2.0, abs=4 * 2.3 / math.sqrt(n))
    p[:, 2] = math.nan
    assert mean_product(p[:1], q[:1])[0] == pytest.approx((p[0, 0] * q[0, 1] + p[0, 1] * q[0, 0]) / 2, rel=ROUNDING)
    assert math.isnan(mean_product(np.array([1.0, math.nan]), np.array([1.0, 2.0])))
    assert mean_variance(np.array([[1.0, 3.0, math.nan]])) == pytest.approx([1.0], rel=ROUNDING)


SAMPLED = changed(
    ('"grid"', '"sensitivity"\npoints = 64'), ("n = 3", ""), ("values = [2, 4]", "low = 2\nhigh = 12")
).partition("[stop]")[0]


def test_what_to_measure_first_by_shares() -> None:
    """Keys come in the order of their shares; one that does nothing is left out and named in the rest."""
    study = loads_study(SAMPLED)
    points = study.points
    noise = np.random.default_rng(2).normal(0.0, 0.1, (len(points), 3))
    signal = points["pushers.count"] * 0.2 + points["errors.turn_sd"] / points["errors.turn_sd"].std() * 2.0
    found = find_sensitivity(study, runs(signal.to_numpy()[:, None] + noise), "travel")
    advice = measure_first(found)
    assert [item.key for item in advice] == ["errors.turn_sd", "pushers.count"]
    assert advice[0].sentence.startswith("Measure errors.turn_sd first: ")
    assert advice[1].sentence.startswith("Then pushers.count: ")
    assert advice[0].low < advice[0].weight < advice[0].high
    rest = what_remains(found)
    assert rest.startswith("departure shows no effect on travel")
    assert "of the variance is chance" in rest
    assert found.table["key"].tolist() == list(points.columns)


def test_what_to_measure_first_by_effects() -> None:
    """The same for a screening; the sentence gives sizes with units and the direction."""
    study = loads_study(SAMPLED.replace("sensitivity", "screening").replace("points = 64", "points = 30"))
    points = study.points
    noise = np.random.default_rng(2).normal(0.0, 0.02, (len(points), 3))
    signal = (12.0 - points["pushers.count"]) * 0.1 + 0.0 * points["errors.turn_sd"]
    found = find_effects(study, runs(signal.to_numpy()[:, None] + noise), "travel")
    (item,) = measure_first(found)
    assert item.key == "pushers.count"
    assert item.weight == pytest.approx(1.0, abs=0.05)  # noise of a mean is 0.012, of an effect at most twice that
    assert item.sentence.startswith("Measure pushers.count first: going through its range changes travel by ")
    assert item.sentence.endswith("mostly down.")
    assert what_remains(found).startswith("errors.turn_sd, departure show no effect")


def test_what_is_said_of_little() -> None:
    """One run per point, outputs that do not vary, and rows without values are named as such."""
    once = variance_shares(np.random.default_rng(1).random((16 * 3, 1)), ["a"], "travel")
    assert "one run per point" in what_remains(once)
    assert "does not vary" in what_remains(variance_shares(np.ones((16 * 3, 2)), ["a"], "travel"))
    empty = variance_shares(np.full((16 * 3, 2), math.nan), ["a"], "travel")
    assert (empty.n_rows, empty.n_left_out) == (0, 16)
    assert "No row of points is complete" in what_remains(empty)
    assert measure_first(empty) == ()
    loud = np.random.default_rng(1).normal(size=(64 * 3, 2))
    loud[0, 0] = math.nan
    said = what_remains(variance_shares(loud, ["a"], "travel"))
    assert "More replicates" in said
    assert "1 of 64 rows are left out" in said
    points = pd.DataFrame({"a": [0.0, 1.0]})
    single = elementary_effects(np.array([[1.0], [2.0]]), points, (Axis("a", low=0.0, high=1.0),), "travel")
    assert "may be chance" in what_remains(single)


def test_wrong_designs_are_refused() -> None:
    """Indices and effects are refused for studies of another design, and for numbers that do not fit."""
    study = loads_study(GOOD)
    table = runs(np.ones((len(study.points), 1)))
    with pytest.raises(ValueError, match="'sensitivity'"):
        find_sensitivity(study, table, "travel")
    with pytest.raises(ValueError, match="'screening'"):
        find_effects(study, table, "travel")
    with pytest.raises(ValueError, match="a row has 3 points"):
        variance_shares(np.ones((4, 1)), ["a"], "travel")
    with pytest.raises(ValueError, match="between 0 and 1"):
        elementary_effects(np.ones((2, 1)), pd.DataFrame({"a": [0, 1]}), (Axis("a", low=0, high=1),), "t", confidence=1)
