"""The body world on scenarios at random: no crash, balanced books, tables that hold together."""

from __future__ import annotations

import sys
from collections import Counter
from dataclasses import replace
from pathlib import Path
from typing import TypeVar

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

sys.path.insert(0, str(Path(__file__).parent))

from random_scenarios import Source, any_scenario, seeded_scenario
from sound_runs import faults_of

from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.loading import from_tables
from swarmpush.scenario import Scenario

Choice = TypeVar("Choice")

N_STEPS = 2500


class Drawn(Source):
    """Choices that hypothesis makes, and makes simpler when they fail."""

    def __init__(self, draw: st.DrawFn) -> None:
        self._draw = draw

    def number(self, low: float, high: float) -> float:
        # steps of a thousandth: a distance that differs from 0 only by rounding is no rig that anybody builds
        return low + (high - low) * self._draw(st.integers(0, 1000)) / 1000

    def whole(self, low: int, high: int) -> int:
        return self._draw(st.integers(low, high))


@st.composite
def scenarios(draw: st.DrawFn) -> Scenario:
    """Any scenario, as short as `N_STEPS` steps."""
    s = any_scenario(Drawn(draw))
    assume(s is not None)
    assert s is not None
    return short(s)


def short(s: Scenario, n_steps: int = N_STEPS) -> Scenario:
    return s.replace(goal={"time_limit": n_steps * choose_step(s).dt_s})


@settings(
    derandomize=True, deadline=None, max_examples=120,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much, HealthCheck.data_too_large],
)  # fmt: skip
@given(scenarios())
def test_any_scenario_runs_and_balances(s: Scenario) -> None:
    """A valid scenario never crashes the body world, its books balance, and its tables hold together."""
    assert faults_of(simulate(s, cycles=())) == []


SEEDS = range(80)


@pytest.fixture(scope="module")
def runs() -> dict[int, Run]:
    """Seeded scenarios, run."""
    return {seed: simulate(short(seeded_scenario(seed)), cycles=()) for seed in SEEDS}


@pytest.mark.parametrize("seed", SEEDS)
def test_seeded_scenario_runs_and_balances(seed: int, runs: dict[int, Run]) -> None:
    """The same for scenarios whose every number is drawn evenly."""
    assert faults_of(runs[seed]) == []


def test_random_scenarios_say_everything(runs: dict[int, Run]) -> None:
    """The scenarios at random, taken together, make use of all that a scenario can say."""
    found: Counter[str] = Counter()
    for seed in SEEDS:
        s = runs[seed].scenario
        tables = s.to_tables()
        found.update(f"block.{key}" for block in s.blocks for key, value in block if value is not None)
        found.update(f"channel.{key}" for key, value in s.channel if value)
        found.update(f"errors.{key}" for key, value in s.errors if value)
        found.update(f"pushers.{key}" for key, value in s.pushers if value)
        found.update(f"fluid.{key}" for key in tables.get("fluid", ()))
        found.update(f"floor.{key}" for key in tables.get("floor", ()))
        found.update(act["act"] + act.get("on", "") for stage in tables["routine"]["stages"] for act in stage["acts"])
        found.update(["train"] * bool(s.train) + ["free"] * (s.pushers.heading == "free"))
    wanted = {
        *(f"block.{key}" for key in ("outline", "yaw_inertia", "centre_of_mass", "centre_of_friction")),
        *(f"channel.{key}" for key in ("outline", "posts", "slope", "cross_slope")),
        *(f"errors.{key}" for key in type(s.errors).model_fields),
        *(f"pushers.{key}" for key in type(s.pushers).model_fields),
        *(f"fluid.{key}" for key in ("block_drag_across", "near_wall_factor")),
        *("train", "free", "floor.gravity", "halt", "run", "advance", "slide", "turn", "depart", "mirror", "wander"),
        *("gauge", "sight", "tally", "declare"),
        *(f"branch{on}" for on in ("contact", "counter", "time", "range", "sight")),
    }
    assert wanted - set(found) == set()
    assert {run.ended for run in runs.values()} >= {"time", "goal"}
    assert sum(len(run.visits) for run in runs.values()) > 1000


def test_a_fault_would_be_found(runs: dict[int, Run]) -> None:
    """Each check of a run objects to a run that was tampered with."""
    run = next(run for run in runs.values() if len(run.visits) > 20 and run.ended == "time")

    def faults(**changes: object) -> list[str]:
        return faults_of(replace(run, **changes))  # type: ignore[arg-type]

    assert faults() == []
    assert faults(books=replace(run.books, residual_rel=2e-9))
    assert faults(books=replace(run.books, residual_turn_rel=float("nan")))
    assert faults(books=replace(run.books, change=(1e3, 0.0)))
    assert faults(books=replace(run.books, phantom_m=float("inf")))
    assert faults(energy=replace(run.energy, residual_rel=2e-9))
    assert faults(ended="whim")
    assert faults(block=run.block.assign(x_m=np.nan))
    assert faults(block=run.block.assign(n_at_wall=1e3))
    assert faults(visits=run.visits.assign(t_off_s=run.visits["t_on_s"]))
    assert faults(visits=run.visits.assign(impact_Ns=-1.0))
    assert faults(visits=run.visits.assign(pusher=99))
    assert faults(pushers=run.pushers.assign(x_m=-1.0))


def test_scenarios_survive_their_tables() -> None:
    """A saved scenario is the same when it is read again, so that a fault can be replayed."""
    for seed in SEEDS[:10]:
        s = seeded_scenario(seed)
        assert from_tables(s.to_tables()) == s
