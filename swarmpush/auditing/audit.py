"""The audit: the point world's plan against the body world, over independent replicates."""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor, as_completed
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from swarmpush.auditing.journal import Journal
from swarmpush.auditing.ladder import Rung, climb
from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval
from swarmpush.auditing.verdicts import Finding, find_verdicts
from swarmpush.dynamics.run import Run, load_run
from swarmpush.dynamics.steps import StepSettings, choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.output import claim_folder, plain, provenance, to_json, write_table, write_text
from swarmpush.quantities import for_people
from swarmpush.scenario import Scenario

HALVED = "halved step"  # the rung that repeats the last one with half the step
N_HALVED = 4  # replicates that are repeated with half the step

Progress = Callable[[int, int, str], None]


@dataclass(frozen=True)
class RungResult:
    """What one rung of the ladder gave.

    rung, adds: its key and what it adds. block_speed_m_s: mean over replicates. cost_m_s: paired difference to the
    rung below, negative when the block gets slower; None for geometry. arrival: share of runs; None for geometry.
    """

    rung: str
    adds: str
    block_speed_m_s: Estimate
    cost_m_s: Estimate | None
    arrival: Estimate | None


@dataclass(frozen=True)
class Numerics:
    """Solver settings of the scenario as given, and what half the step changes.

    change_m_s: paired difference in block speed, half step minus whole. Where motion is chaotic the pairs part ways,
    so this contains chance as well. residual_rel, phantom_share: worst of all runs.
    """

    steps: StepSettings
    change_m_s: Estimate
    residual_rel: float
    phantom_share: float


@dataclass(frozen=True)
class Audit:
    """The plan's promise against what bodies did.

    scenario, plan: what was audited. replicates: one row per run: rung, replicate, seed and the measures of
    `Run.summary`. sample: one run of the scenario as given, in full. The rest is derived from these.
    """

    scenario: Scenario
    plan: Plan
    replicates: pd.DataFrame
    sample: Run
    ladder: tuple[RungResult, ...]
    verdicts: tuple[Finding, ...]
    arrival: Estimate
    numerics: Numerics

    @property
    def as_given(self) -> pd.DataFrame:
        """The runs of the scenario as given."""
        return self.replicates[self.replicates["rung"] == climb(self.scenario)[-1].key]

    @property
    def answer(self) -> str:
        """Whether the block arrives, in one sentence."""
        s, share = self.scenario, self.arrival
        percent = f"{s.trial.confidence:.0%}"
        n = round(share.mean * share.n)
        lead = "Yes" if share.low > 0.5 else "No" if share.high < 0.5 else "Open"
        speed = self.ladder[-1].block_speed_m_s.mean
        promise = self.plan.travel.block_speed_m_s
        text = (
            f"{lead}: the block covers {for_people(s.goal.travel, 'm')} within {for_people(s.goal.time_limit, 's')} in "
            f"{n} of {share.n} runs ({percent} interval {share.low:.0%} to {share.high:.0%}); it moves at "
            f"{for_people(speed, 'm/s')} where geometry promises {for_people(promise, 'm/s')}"
        )
        costs = [r for r in self.ladder if r.cost_m_s is not None and r.cost_m_s.high < 0.0]
        if costs:
            worst = min(costs, key=lambda r: r.cost_m_s.mean if r.cost_m_s else 0.0)
            cost = worst.cost_m_s
            assert cost is not None
            text += f", and what costs most is {worst.adds} ({for_people(cost.mean, 'm/s')})"
        return text + "."

    def to_dict(self, files: dict[str, str] | None = None) -> dict[str, Any]:
        """The audit as plain values for JSON; undefined values are None."""
        result: dict[str, Any] = plain(
            {
                "answer": self.answer,
                "arrival": {
                    "share": self.arrival.mean,
                    "low": self.arrival.low,
                    "high": self.arrival.high,
                    "n": self.arrival.n,
                },
                "ladder": [
                    {
                        "rung": r.rung,
                        "adds": r.adds,
                        "block_speed_m_s": r.block_speed_m_s,
                        "cost": r.cost_m_s,
                        "arrival": r.arrival,
                    }
                    for r in self.ladder
                ],
                "verdicts": self.verdicts,
                "numerics": self.numerics,
                "plan": self.plan.to_dict(),
                "files": files or {},
                "provenance": provenance(self.scenario),
            }
        )
        return result

    def save(self, folder: Path) -> dict[str, str]:
        """Write replicates, the sample run and, last, audit.json; returns the files' names.

        Raises:
            OutputError: when something cannot be written.
        """
        files = {"replicates": "replicates.parquet", "sample": "sample/run.json", "audit": "audit.json"}
        write_table(folder / files["replicates"], self.replicates)
        claim_folder(folder / "sample", force=True)
        self.sample.save(folder / "sample")
        write_text(folder / files["audit"], to_json(self.to_dict(files)))
        return files


def load_audit(folder: Path) -> Audit:
    """Read a saved audit; everything derived is derived again.

    Raises:
        ValueError: when the folder does not hold a whole audit.
    """
    try:
        json.loads((folder / "audit.json").read_text(encoding="utf-8"))["answer"]  # written last: a whole audit
        replicates = pd.read_parquet(folder / "replicates.parquet")
        planned = plan(load_run(folder / "sample").scenario)
        return conclude(planned, replicates, load_run(folder / "sample", _cycles(planned)))
    except OSError as error:
        reason = f"{Path(error.filename).name if error.filename else 'a file'}: {error.strerror or 'unreadable'}"
    except (KeyError, ValueError, TypeError):
        reason = "a file is damaged"
    raise ValueError(f"{folder} does not hold a whole audit ({reason}); make one with 'swarmpush audit'")


def audit(
    s: Scenario,
    *,
    replicates: int | None = None,
    workers: int | None = None,
    journal: Path | None = None,
    progress: Progress | None = None,
) -> Audit:
    """Hold the plan against rigid bodies: what survives, what fails, and what each assumption costs.

    Every rung of the ladder is run with the same seeds, so that costs are paired differences.

    Arguments:
        s: the scenario.
        replicates: independent runs per rung, at least 2; the scenario's own number unless given.
        workers: threads; one per processor unless given. The result does not depend on it.
        journal: file for finished runs; if it is left from an interrupted audit of the same scenario, the runs in it
            are not made again. Delete it when the result is safe.
        progress: called after each run with runs done, runs in all, and the rung's name.

    Returns:
        An `Audit`.

    Raises:
        ValueError: for fewer than two replicates.
        OutputError: when the journal belongs to something else or cannot be written.
    """
    n = s.trial.replicates if replicates is None else replicates
    if n < 2:
        raise ValueError(f"{n} replicates given; an interval needs at least 2")
    planned = plan(s)
    rungs = climb(s)
    halved = Rung(HALVED, "half the time step", rungs[-1].scenario)
    seeds = replicate_seeds(s.trial.seed, n)
    tasks = [(rung, k) for rung in rungs for k in range(n)] + [(halved, k) for k in range(min(n, N_HALVED))]
    cycles = _cycles(planned)

    def run_one(rung: Rung, k: int) -> Run:
        steps = choose_step(rung.scenario)
        return simulate(rung.scenario, seed=seeds[k], steps=steps.halved() if rung is halved else steps, cycles=cycles)

    kept = Journal(journal, provenance(s)) if journal else None
    rows = dict(kept.rows) if kept else {}
    sample_task = (rungs[-1], 0)
    # one run is needed in full; the longest runs come last in the ladder, and starting with them keeps all workers busy
    waiting = [
        sample_task,
        *(task for task in reversed(tasks) if (task[0].key, task[1]) not in rows and task != sample_task),
    ]
    done = len(tasks) - len(waiting)
    sample: Run | None = None
    pool = ThreadPoolExecutor(workers or os.cpu_count())
    try:
        futures = {pool.submit(run_one, rung, k): (rung, k) for rung, k in waiting}
        for future in as_completed(list(futures)):
            rung, k = futures.pop(future)
            run = future.result()
            row = {"rung": rung.key, "replicate": k, "seed": seeds[k], **run.summary(planned.main_lap)}
            if (rung, k) == sample_task:
                sample = run
            if kept and (rung.key, k) not in rows:
                kept.add(row)
            rows[rung.key, k] = row
            done += 1
            if progress:
                progress(done, len(tasks), rung.adds)
    finally:
        pool.shutdown(cancel_futures=True)
    assert sample is not None
    table = pd.DataFrame([rows[rung.key, k] for rung, k in tasks])
    return conclude(planned, table, sample)


def conclude(planned: Plan, replicates: pd.DataFrame, sample: Run) -> Audit:
    """Ladder, verdicts and numerics from the runs' summaries; a pure function."""
    s = planned.scenario
    rungs = climb(s)
    by_rung = {key: rows.set_index("replicate") for key, rows in replicates.groupby("rung", sort=False)}
    as_given = by_rung[rungs[-1].key]
    n_arrived, n = int(as_given["has_arrived"].sum()), len(as_given)
    halved = by_rung[HALVED]["block_speed_m_s"]
    whole = as_given.loc[halved.index, "block_speed_m_s"]
    return Audit(
        scenario=s,
        plan=planned,
        replicates=replicates,
        sample=sample,
        ladder=_ladder(planned, rungs, by_rung),
        verdicts=find_verdicts(planned, as_given),
        arrival=share_interval(n_arrived, n, s.trial.confidence),
        numerics=Numerics(
            steps=choose_step(s),
            change_m_s=mean_interval(halved - whole, s.trial.confidence),
            residual_rel=float(replicates["residual_rel"].max()),
            phantom_share=float(replicates["phantom_share"].max()),
        ),
    )


def _ladder(planned: Plan, rungs: tuple[Rung, ...], by_rung: dict[Any, pd.DataFrame]) -> tuple[RungResult, ...]:
    confidence = planned.scenario.trial.confidence
    promise = planned.travel.block_speed_m_s
    results = [RungResult("geometry", "the plan's own promise", Estimate(promise, promise, promise, 0), None, None)]
    below: pd.Series[float] | float = promise
    for rung in rungs:
        speeds = by_rung[rung.key]["block_speed_m_s"]
        n_arrived = int(by_rung[rung.key]["has_arrived"].sum())
        results.append(
            RungResult(
                rung.key,
                rung.adds,
                mean_interval(speeds, confidence),
                mean_interval(speeds - below, confidence),
                share_interval(n_arrived, len(speeds), confidence),
            )
        )
        below = speeds
    return tuple(results)


def replicate_seeds(seed: int, n: int) -> list[int]:
    """Seeds of the replicates: the first ones stay the same when more are asked for."""
    return [int(np.random.SeedSequence(seed, spawn_key=(k,)).generate_state(1)[0]) for k in range(n)]


def _cycles(planned: Plan) -> tuple[tuple[str, ...], ...]:
    return tuple(lap.surfaces for lap in planned.laps)
