"""Step halving: the same scenario and seeds at the step, half and a quarter of it, and what the step size costs."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from swarmpush.auditing.journal import Journal
from swarmpush.auditing.replicates import Progress, Task, replicate_seeds, run_tasks
from swarmpush.auditing.step_effect import DIVISORS, EFFECT_WORDS, SHARE, Effect, StepEffect, step_effect
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import StepSettings, choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.laps import find_laps
from swarmpush.output import plain, provenance, to_json, write_table, write_text
from swarmpush.quantities import for_people
from swarmpush.routine import Depart, Device
from swarmpush.scenario import Scenario

MOST_BY_DEFAULT = 8  # replicates; a run at a quarter of the step takes four times as long
STEADY_ERRORS = {"turn_bias", "heading_drift", "bearing_step", "fade_time"}  # the same in every run; all others draw
KEYS = ("step", "step/2", "step/4")
QUANTITIES = {
    "block_speed_m_s": ("block speed", "m/s"),
    "strike_rate_1_s": ("strike rate", "1/s"),
    "nudge_m": ("nudge", "m"),
    "lap_time_s": ("lap time", "s"),
    "has_arrived": ("arrival", SHARE),
}


@dataclass(frozen=True)
class StepQuality:
    """The runs at one step.

    key: "step", "step/2" or "step/4". dt_s: the step. n: runs. n_broken_off: runs that ended with neither the goal
    nor the time limit. residual_rel, phantom_share: worst of all runs, see `Books`; lower is better.
    """

    key: str
    dt_s: float
    n: int
    n_broken_off: int
    residual_rel: float
    phantom_share: float


@dataclass(frozen=True)
class Convergence:
    """What the step size costs.

    scenario: what was run. runs: one row per run, coarsest step first: step ("step", "step/2", "step/4"), replicate,
    seed, dt_s, ended, story (runs with the same text bumped into the same surfaces in the same order, pusher by
    pusher) and the measures of `Run.summary`. The rest is derived from these two. settings: solver settings at the
    step. is_smooth: every replicate has the same story at all three steps, so that its numbers may follow the step
    smoothly. is_drawn: whether seeds make a difference. steps: quality of the runs at each step. effects: see
    `StepEffect`.
    """

    scenario: Scenario
    runs: pd.DataFrame
    settings: StepSettings
    is_smooth: bool
    is_drawn: bool
    steps: tuple[StepQuality, ...]
    effects: tuple[StepEffect, ...]

    @property
    def has_limit(self) -> bool:
        """Whether effects are judged against the extrapolated limit of one smooth run, not by pairs of seeds."""
        return self.is_smooth and self.steps[0].n == 1

    @property
    def suggested_step_s(self) -> float | None:
        """The step that would make every large effect small, s.

        None where no effect is large, and where one does not shrink with the step: the quantities hang together (crew
        size x strike rate x nudge is the block's speed), so that no step would then settle them all.
        """
        large = [e for e in self.effects if e.effect is Effect.LARGE]
        if not large or not all(e.is_shrinking for e in large):
            return None
        return min(e.suggested_step_s for e in large)

    @property
    def answer(self) -> str:
        """What the step does, in words: what is resolved and large, resolved and small, or not to be told."""
        n = self.steps[0].n
        dt, finest = (for_people(self.steps[k].dt_s, "s") for k in (0, -1))
        runs = f"{n} seeds" if n > 1 else "one run" if self.is_drawn else "one run, as nothing is left to chance"
        told = [f"Step {dt} against {'the limit of shorter ones' if self.has_limit else finest}, {runs}."]
        for effect, words in EFFECT_WORDS.items():
            those = [e for e in self.effects if e.effect is effect and e.is_measured]
            if those:
                listed = "; ".join(e.words().replace(f"{words}, ", "", 1) for e in those)
                told.append(f"The step's effect is {words} for {listed}.")
        if self.suggested_step_s is not None:
            step = for_people(self.suggested_step_s, "s").replace("µ", "u")
            told.append(f'Set step = "{step}" under [numerics] and look again.')
        stuck = [e.quantity for e in self.effects if e.effect is Effect.LARGE and not e.is_shrinking]
        if stuck:
            told.append(
                f"The second halving changes {', '.join(stuck)} as much as the first, or nearly so, and therefore no "
                "finer step is suggested: what is counted there may itself depend on the step."
            )
        speed = self.effects[0]
        if speed.replicates_to_tell > n:
            told.append(
                f"About {speed.replicates_to_tell:.0f} replicates would tell whether it changes the block speed by "
                f"less than {self.scenario.trial.tolerance:.0%}."
            )
        left = [e.quantity for e in self.effects if not e.is_measured]
        if left:
            told.append(f"Without a value: {', '.join(left)}.")
        if n == 1 and not self.is_smooth:
            told.append("The run takes another course at another step, so that only a mean over seeds can converge.")
        broken = sum(step.n_broken_off for step in self.steps)
        if broken:
            told.append(f"{broken} of {len(self.runs)} runs broke off.")
        return " ".join(told)

    def to_dict(self, files: dict[str, str] | None = None) -> dict[str, Any]:
        """The result as plain values for JSON; undefined and infinite values are None."""
        result: dict[str, Any] = plain(
            {
                "answer": self.answer,
                "is_smooth": self.is_smooth,
                "is_drawn": self.is_drawn,
                "confidence": self.scenario.trial.confidence,
                "tolerance": self.scenario.trial.tolerance,
                "suggested_step_s": self.suggested_step_s,
                "quantities": [plain(e) | {"words": e.words()} for e in self.effects],
                "steps": self.steps,
                "numerics": self.settings,
                "files": files or {},
                "provenance": provenance(self.scenario),
            }
        )
        return result

    def save(self, folder: Path) -> dict[str, str]:
        """Write the runs as Parquet and, last, convergence.json; returns the files' names.

        Raises:
            OutputError: when something cannot be written.
        """
        files = {"runs": "runs.parquet", "convergence": "convergence.json"}
        write_table(folder / files["runs"], self.runs)
        write_text(folder / files["convergence"], to_json(self.to_dict(files)))
        return files


def converge(
    s: Scenario,
    *,
    replicates: int | None = None,
    seed: int | None = None,
    workers: int | None = None,
    journal: Path | None = None,
    progress: Progress | None = None,
) -> Convergence:
    """Run a scenario with the same seeds at its step, half and a quarter of it, and say what the step size costs.

    A lone pusher's run follows the step smoothly as long as its bumps keep their order; then the observed order, the
    extrapolated value and the grid convergence index mean something. A crowd is chaotic: single runs part ways at
    another step and only their mean converges, so there the paired differences over seeds count.

    Arguments:
        s: the scenario; its `numerics.step`, if given, is the step that is halved.
        replicates: seeds, at least 1; unless given the scenario's number, at most 8, and 1 if nothing is drawn.
        seed: of the trial, from which the runs' seeds are derived; the scenario's own unless given.
        workers: threads; one per processor unless given. The result does not depend on it.
        journal: file for finished runs; if it is left from an interrupted call for the same scenario, the runs in it
            are not made again. Delete it when the result is safe.
        progress: called after each run with runs done, runs in all, and what was run.

    Returns:
        A `Convergence`.

    Raises:
        ValueError: for no replicates, or for more than one of a scenario that draws nothing.
        OutputError: when the journal belongs to something else or cannot be written.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage")).replace(goal={"time_limit": 2.0})
    >>> [step.n for step in swarmpush.converge(s, replicates=2).steps]
    [2, 2, 2]
    """
    if seed is not None:
        s = s.replace(trial={"seed": seed})
    seeds = replicate_seeds(s.trial.seed, count_replicates(s, replicates))
    step = choose_step(s)
    settings = dict(zip(KEYS, (step, step.halved(), step.halved().halved()), strict=True))
    cycles = tuple(lap.surfaces for lap in find_laps(s)[0])

    def run_one(task: Task, look_up: Callable[[float], None]) -> dict[str, Any]:
        key, k = task
        run = simulate(s, seed=seeds[k], steps=settings[key], cycles=cycles, progress=look_up)
        row = {"step": key, "replicate": k, "seed": seeds[k], "dt_s": run.steps.dt_s, "ended": run.ended}
        return row | {"story": _story(run)} | run.summary()

    def tell(done: int, total: int, key: str) -> None:
        if progress:
            progress(done, total, f"at {for_people(settings[key].dt_s, 's')}")

    kept = Journal(journal, provenance(s) | {"work": "converge"}, level="step") if journal else None
    tasks = [Task(key, k) for key in KEYS for k in range(len(seeds))]
    rows = run_tasks(tasks, run_one, journal=kept, workers=workers, progress=tell)
    return find_convergence(s, pd.DataFrame(list(rows.values())))


def find_convergence(s: Scenario, runs: pd.DataFrame) -> Convergence:
    """Verdicts and step quality from the rows of the runs; a pure function.

    Arguments:
        s: the scenario. runs: see `Convergence`.
    """
    by_step = {key: runs[runs["step"] == key].set_index("replicate") for key in KEYS}
    stories = pd.DataFrame({key: rows["story"] for key, rows in by_step.items()})
    is_smooth = bool(stories.eq(stories[KEYS[0]], axis=0).all(axis=None))
    is_drawn = draws_something(s)
    settings = choose_step(s)

    def effect_on(column: str) -> StepEffect:
        name, unit = QUANTITIES[column]
        return step_effect(
            name,
            unit,
            pd.DataFrame({key: rows[column] for key, rows in by_step.items()}).to_numpy(),
            dt_s=settings.dt_s,
            is_smooth=is_smooth,
            confidence=s.trial.confidence,
            tolerance=s.trial.tolerance,
        )

    return Convergence(
        scenario=s,
        runs=runs,
        settings=settings,
        is_smooth=is_smooth,
        is_drawn=is_drawn,
        steps=tuple(
            StepQuality(
                key=key,
                dt_s=settings.dt_s / divisor,
                n=len(rows),
                n_broken_off=int((~rows["ended"].isin(("goal", "time"))).sum()),
                residual_rel=float(rows["residual_rel"].max()),
                phantom_share=float(rows["phantom_share"].max()),
            )
            for (key, rows), divisor in zip(by_step.items(), DIVISORS, strict=True)
        ),
        effects=tuple(map(effect_on, QUANTITIES)),
    )


def count_replicates(s: Scenario, replicates: int | None) -> int:
    """How many seeds to run: those asked for, or a few by default, or one where seeds make no difference.

    Raises:
        ValueError: for no replicates, or for more than one of a scenario that draws nothing.
    """
    is_drawn = draws_something(s)
    if replicates is None:
        return min(s.trial.replicates, MOST_BY_DEFAULT) if is_drawn else 1
    if replicates < 1:
        raise ValueError(f"{replicates} replicates given; at least 1 is needed")
    if replicates > 1 and not is_drawn:
        raise ValueError(
            f"{replicates} replicates given, but this scenario draws no random number: starts are placed, and neither "
            "errors nor the routine leave anything to chance, so all its runs are the same; leave replicates out"
        )
    return replicates


def draws_something(s: Scenario) -> bool:
    """Whether a run depends on its seed: by starts, errors, unit spreads, or chance in the routine."""
    by_error = any(value for name, value in s.errors if name not in STEADY_ERRORS)
    acts = [act for stage in s.routine.stages for act in stage.acts]
    is_spread = any(isinstance(act, Depart) and act.spread > 0.0 for act in acts)
    return s.start.placed is None or by_error or is_spread or Device.RANDOM in s.routine.kit()


def _story(run: Run) -> str:
    """A digest of which pusher bumped into what, in order; the same for runs that took the same course."""
    bumps = run.bumps
    text = "\n".join(f"{pusher} {surface}" for pusher, surface in zip(bumps["pusher"], bumps["surface"], strict=True))
    return hashlib.sha256(text.encode()).hexdigest()[:16]
