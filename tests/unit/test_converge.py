"""Step halving: what is run, what is read from it, and that nothing but the scenario matters."""

from __future__ import annotations

import json
import math
from pathlib import Path

import pandas as pd
import pytest

import swarmpush
from swarmpush.auditing.converge import KEYS, Convergence, converge, count_replicates, draws_something, find_convergence
from swarmpush.auditing.replicates import replicate_seeds
from swarmpush.auditing.step_effect import Effect
from swarmpush.demos import demo
from swarmpush.dynamics.steps import choose_step
from swarmpush.loading import load
from swarmpush.output import OutputError
from swarmpush.scenario import Errors, FixedStart, Scenario


@pytest.fixture(scope="module")
def crowd() -> Scenario:
    """Six carts for half a minute: long enough for their runs to part ways."""
    return load(demo("service_passage")).replace(goal={"time_limit": 30.0})


@pytest.fixture(scope="module")
def halved(crowd: Scenario) -> Convergence:
    """Step halving of the crowd with three seeds."""
    return converge(crowd, replicates=3, workers=2)


def lone(s: Scenario, *, errors: Errors | None = None) -> Scenario:
    """One cart without chance, placed behind the crate."""
    placed = (FixedStart(x=0.9, y=0.16, heading=0.3),)
    alone = s.replace(pushers={"count": 1}, start={"placed": placed})
    return alone.model_copy(update={"errors": errors or Errors()})


def test_the_same_seeds_at_three_steps(crowd: Scenario, halved: Convergence) -> None:
    """The runs at the step are those of `simulate`; half and a quarter of the step have the same seeds."""
    seeds = replicate_seeds(crowd.trial.seed, 3)
    dt = choose_step(crowd).dt_s
    assert halved.runs["step"].tolist() == [key for key in KEYS for _ in range(3)]
    assert halved.runs["seed"].tolist() == 3 * seeds
    assert halved.runs["dt_s"].tolist() == [dt / d for d in (1, 2, 4) for _ in range(3)]
    run = swarmpush.simulate(crowd, seed=seeds[1]).summary()
    row = halved.runs.iloc[1]
    assert {key: row[key] for key in run} == pytest.approx(run, abs=0, rel=0, nan_ok=True)


def test_workers_do_not_matter(crowd: Scenario, halved: Convergence) -> None:
    """One worker and three give the same table, bit by bit, and the same words."""
    other = converge(crowd, replicates=3, workers=1)
    pd.testing.assert_frame_equal(other.runs, halved.runs, check_exact=True)
    assert other.to_dict() == halved.to_dict()


def test_a_crowd_takes_another_course(halved: Convergence) -> None:
    """A crowd's bumps differ at another step, so that it is not called smooth, and no verdict rests on an order."""
    assert not halved.is_smooth
    assert not halved.has_limit
    assert all(effect.judged == effect.difference or not effect.is_measured for effect in halved.effects)
    assert "3 seeds" in halved.answer


def test_one_run_of_a_crowd_is_told_apart(crowd: Scenario) -> None:
    """A single run of a crowd cannot tell, and the answer says why."""
    found = converge(crowd, replicates=1)
    assert {effect.effect for effect in found.effects} == {Effect.UNTOLD}
    assert "only a mean over seeds can converge" in found.answer


def test_a_run_without_chance(crowd: Scenario) -> None:
    """A cart alone, placed and without errors, is run once at each step and judged against the limit."""
    found = converge(lone(crowd))
    assert [step.n for step in found.steps] == [1, 1, 1]
    assert found.has_limit
    assert "against the limit of shorter ones, one run, as nothing is left to chance." in found.answer
    assert found.effects[0].effect is Effect.SMALL


def test_numbers_that_follow_the_steps(halved: Convergence) -> None:
    """Means are those of the table, and the worst books are reported for each step."""
    speed = halved.effects[0]
    for mean, step, (_, rows) in zip(
        speed.at_steps, halved.steps, halved.runs.groupby("step", sort=False), strict=True
    ):
        assert mean.mean == pytest.approx(rows["block_speed_m_s"].mean())
        assert (step.residual_rel, step.phantom_share) == (rows["residual_rel"].max(), rows["phantom_share"].max())
        assert (step.n, step.n_broken_off) == (3, 0)


def test_undefined_lap_times_are_counted(crowd: Scenario) -> None:
    """Where no lap is completed, the lap time is left out, counted and named."""
    found = converge(crowd.replace(goal={"time_limit": 1.0}), replicates=2)
    lap_time = next(effect for effect in found.effects if effect.quantity == "lap time")
    assert [mean.n_left_out for mean in lap_time.at_steps] == [2, 2, 2]
    assert not lap_time.is_measured
    assert "Without a value: " in found.answer
    assert "lap time" in found.answer


def test_runs_that_broke_off_are_named(crowd: Scenario, halved: Convergence) -> None:
    """Runs that ended with neither goal nor time limit are counted in the answer."""
    runs = halved.runs.assign(ended=["time", "the motion ran away", *["time"] * 7])
    found = find_convergence(crowd, runs)
    assert [step.n_broken_off for step in found.steps] == [1, 0, 0]
    assert "1 of 9 runs broke off." in found.answer


def test_a_large_effect_brings_its_remedy(crowd: Scenario, halved: Convergence) -> None:
    """An effect that is resolved and large names the line that makes the scenario's step finer."""
    runs = halved.runs.copy()
    runs.loc[runs["step"] == "step", "block_speed_m_s"] = 1.0
    runs.loc[runs["step"] != "step", "block_speed_m_s"] = 0.5
    found = find_convergence(crowd, runs)
    assert found.effects[0].effect is Effect.LARGE
    assert found.suggested_step_s is not None
    assert found.suggested_step_s < found.settings.dt_s
    assert "resolved and large for block speed: 500 mm/s (100 %)" in found.answer
    assert f'Set step = "{found.suggested_step_s * 1e6:.3g} us" under [numerics]' in found.answer


def test_a_count_that_does_not_settle(crowd: Scenario, halved: Convergence) -> None:
    """One large effect that does not shrink takes the suggestion back, and is named."""
    runs = halved.runs.copy()
    for key, rate in zip(KEYS, (1.0, 2.0, 3.0), strict=True):
        runs.loc[runs["step"] == key, "strike_rate_1_s"] = rate
        runs.loc[runs["step"] == key, "nudge_m"] = 1.0 if key == "step" else 0.5
    found = find_convergence(crowd, runs)
    assert found.suggested_step_s is None
    assert "The second halving changes strike rate as much as the first" in found.answer
    assert "Set step" not in found.answer


def test_what_is_drawn(crowd: Scenario) -> None:
    """A placed start without errors draws nothing; a drawn start, an error or a chance in the routine does."""
    s = lone(crowd)
    assert not draws_something(s)
    assert draws_something(s.replace(start={"placed": None}))
    for key in ("turn_sd", "heading_diffusion", "missed_bumps", "false_bumps", "mass_spread"):
        assert draws_something(lone(crowd, errors=Errors(**{key: 0.1})))
    assert not draws_something(lone(crowd, errors=Errors(turn_bias=0.1, heading_drift=0.1)))
    gel = load(demo("gel_channel"))  # its departures have a spread
    assert draws_something(gel.replace(start={"placed": s.start.placed}).model_copy(update={"errors": Errors()}))


def test_how_many_replicates(crowd: Scenario) -> None:
    """By default as many as the scenario has, at most 8, and one where seeds make no difference."""
    assert count_replicates(crowd, None) == 8
    assert count_replicates(crowd.replace(trial={"replicates": 5}), None) == 5
    assert count_replicates(crowd, 20) == 20
    assert count_replicates(lone(crowd), None) == count_replicates(lone(crowd), 1) == 1
    with pytest.raises(ValueError, match="at least 1"):
        converge(crowd, replicates=0)
    with pytest.raises(ValueError, match="draws no random number"):
        converge(lone(crowd), replicates=2)


def test_another_seed(crowd: Scenario) -> None:
    """Another seed gives other runs, and the result says which it was."""
    short = crowd.replace(goal={"time_limit": 1.0})
    found = converge(short, replicates=2, seed=5)
    assert found.to_dict()["provenance"]["seed"] == 5
    assert found.runs["seed"].tolist() == 3 * replicate_seeds(5, 2)


def test_progress_and_journal(crowd: Scenario, tmp_path: Path) -> None:
    """Progress counts every run; runs in a journal are not made again, and give the same table."""
    short, journal = crowd.replace(goal={"time_limit": 1.0}), tmp_path / "runs.jsonl"
    told: list[tuple[int, int]] = []
    first = converge(short, replicates=2, journal=journal, progress=lambda done, n, what: told.append((done, n)))
    assert told == [(k, 6) for k in range(1, 7)]
    lines = journal.read_text(encoding="utf-8").splitlines(keepends=True)
    assert len(lines) == 7
    journal.write_text("".join(lines[:4]), encoding="utf-8")
    told.clear()
    again = converge(short, replicates=2, journal=journal, progress=lambda done, n, what: told.append((done, n)))
    assert told == [(k, 6) for k in range(4, 7)]
    pd.testing.assert_frame_equal(again.runs, first.runs, check_exact=True)
    with pytest.raises(OutputError, match="another scenario"):
        converge(crowd, replicates=2, journal=journal)
    with pytest.raises(OutputError, match="another kind"):
        swarmpush.audit(short, replicates=2, journal=journal)


def test_an_interruption_ends_runs_under_way(crowd: Scenario) -> None:
    """When the caller's progress raises, as an interruption does, the exception comes out and runs are given up."""

    def stop(done: int, n: int, what: str) -> None:
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        converge(crowd, replicates=2, progress=stop)


def test_saved_files(halved: Convergence, tmp_path: Path) -> None:
    """The table of runs and the JSON are written, and agree with the result."""
    files = halved.save(tmp_path)
    assert {path.name for path in tmp_path.iterdir()} == set(files.values()) == {"runs.parquet", "convergence.json"}
    saved = json.loads((tmp_path / "convergence.json").read_text(encoding="utf-8"))
    assert saved == halved.to_dict(files)
    runs = pd.read_parquet(tmp_path / "runs.parquet")
    pd.testing.assert_frame_equal(runs, halved.runs, check_exact=True)
    assert math.isfinite(saved["quantities"][0]["difference"]["mean"])
