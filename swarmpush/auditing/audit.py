"""The audit: the point world's plan against the body world, over independent replicates."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, NamedTuple

import pandas as pd

from swarmpush.auditing.comparing import compare_runs
from swarmpush.auditing.demands import DemandResult, check_demands, read_demand
from swarmpush.auditing.journal import Journal, Row
from swarmpush.auditing.ladder import BASELINE, bounce_at_random, climb, restore
from swarmpush.auditing.looks import confidence_at, looks
from swarmpush.auditing.neighbours import CrewSize, Influence, crew_sizes, influences, neighbours
from swarmpush.auditing.replicates import Progress, Task, replicate_seeds, run_tasks
from swarmpush.auditing.rungs import (
    HEADINGS,
    N_HEADINGS,
    Baseline,
    RestoredResult,
    RungResult,
    baseline,
    has_headings,
    ladder,
    restored,
    speed_off_course,
)
from swarmpush.auditing.statistics import Estimate, Verdict, mean_interval, runs_to_decide, share_interval
from swarmpush.auditing.survival import LogRank, SurvivalCurve, log_rank, median_time, restricted_mean, survival_curve
from swarmpush.auditing.verdicts import Finding, find_verdicts, most_failed
from swarmpush.dynamics.run import Run, load_run
from swarmpush.dynamics.steps import StepSettings, choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.output import claim_folder, plain, provenance, to_json, write_table, write_text
from swarmpush.quantities import for_people
from swarmpush.scenario import Scenario

MOSTLY = 0.5  # of the runs: a block arrives if more of them do
HALVED = "halved step"  # the level that repeats the scenario as given with half the step
N_HALVED = 4  # replicates that are repeated with half the step


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


class Look(NamedTuple):
    """Which look at the runs an audit was concluded at, from 0, and the numbers of runs at all planned ones."""

    number: int
    planned: tuple[int, ...]

    def confidence(self, s: Scenario) -> float:
        """Confidence of each interval, so that all looks together have the scenario's."""
        return confidence_at(self.number, len(self.planned), s.trial.confidence)


@dataclass(frozen=True)
class Audit:
    """The plan's promise against what bodies did.

    scenario, plan: what was audited. replicates: one row per run: rung, replicate, seed and the measures of
    `Run.summary`; besides the rungs of the ladder there are "restored: " and the key of an assumption, "baseline",
    "halved step", and neighbours where they were asked for. sample: one run of the scenario as given, in full. look:
    see `Look`. required: what was demanded, as written. The rest is derived from these.

    ladder: from geometry to the scenario as given. restored: what would come back with one assumption granted again,
    in the ladder's order. baseline: the same crew bouncing at random. verdicts: on the plan's claims. arrival: share of
    the runs as given. crews: crews of other sizes beside the one given, smallest first; influences: what each measured
    value does, the one to measure first at the head; both empty unless neighbours were asked for. numerics: what the
    step costs.
    """

    scenario: Scenario
    plan: Plan
    replicates: pd.DataFrame
    sample: Run
    ladder: tuple[RungResult, ...]
    restored: tuple[RestoredResult, ...]
    baseline: Baseline
    verdicts: tuple[Finding, ...]
    arrival: Estimate
    crews: tuple[CrewSize, ...]
    influences: tuple[Influence, ...]
    numerics: Numerics
    look: Look
    required: tuple[str, ...] = ()

    @property
    def confidence(self) -> float:
        """Confidence of each interval: the scenario's, or more after several looks."""
        return self.look.confidence(self.scenario)

    @property
    def percent(self) -> str:
        """The same for people."""
        return f"{100 * self.confidence:.3g}%"

    @property
    def failed(self) -> tuple[Finding, ...]:
        """The claims that fail, what most likely ended the plan first; see `most_failed`."""
        return most_failed(self.verdicts)

    @property
    def bench_runs(self) -> int | None:
        """Runs on a bench that would most likely show whether more than half arrive, if arrivals are as frequent there.

        None where they are as likely as not. See `runs_to_decide`.
        """
        return runs_to_decide(self.arrival.mean, 0, MOSTLY, self.scenario.trial.confidence)

    @property
    def as_given(self) -> pd.DataFrame:
        """The runs of the scenario as given."""
        return self.replicates[self.replicates["rung"] == climb(self.scenario)[-1].key]

    @property
    def at_random(self) -> pd.DataFrame:
        """The runs of the same crew bouncing at random."""
        return self.replicates[self.replicates["rung"] == BASELINE]

    def under_way(self, runs: pd.DataFrame) -> SurvivalCurve:
        """Share of runs, such as `as_given` or `at_random`, whose block has not arrived yet, over time."""
        return survival_curve(runs["duration_s"], ~runs["has_arrived"].astype(bool), self.confidence)

    @property
    def median_time_s(self) -> Estimate:
        """Time by which half of the runs as given have arrived; infinite where fewer do."""
        return median_time(self.under_way(self.as_given))

    @property
    def mean_time_s(self) -> Estimate:
        """Mean time to the goal, with the time limit for a run that has not arrived by then.

        Where every run that did not arrive broke off before, the last time known stands for the limit.
        """
        runs, curve = self.as_given, self.under_way(self.as_given)
        limit = self.scenario.goal.time_limit
        horizon = limit if curve.share[-1] == 0.0 else min(limit, float(curve.times_s[-1]))
        return restricted_mean(runs["duration_s"], ~runs["has_arrived"].astype(bool), horizon, self.confidence)

    @property
    def sooner_than_random(self) -> LogRank:
        """Whether the crew as given arrives sooner than the same crew bouncing at random."""
        sets = [(runs["duration_s"], ~runs["has_arrived"].astype(bool)) for runs in (self.as_given, self.at_random)]
        return log_rank(*sets[0], *sets[1])

    def _repr_html_(self) -> str:
        from swarmpush.reporting.notebook import audit_html

        return audit_html(self)

    @property
    def answer(self) -> str:
        """Whether the block arrives, in one sentence."""
        s, share = self.scenario, self.arrival
        n = round(share.mean * share.n)
        lead = "Yes" if share.low > MOSTLY else "No" if share.high < MOSTLY else "Open"
        speed = self.ladder[-1].block_speed_m_s.mean
        promise = self.plan.travel.block_speed_m_s
        text = (
            f"{lead}: the block covers {for_people(s.goal.travel, 'm')} within {for_people(s.goal.time_limit, 's')} in "
            f"{n} of {share.n} runs ({self.percent} interval {share.low:.0%} to {share.high:.0%}); it moves at "
            f"{for_people(speed, 'm/s')} where geometry promises {for_people(promise, 'm/s')}"
        )
        costs = [r for r in self.ladder if r.arrival is not None and r.cost_m_s is not None and r.cost_m_s.high < 0.0]
        if costs:
            worst = min(costs, key=lambda r: r.cost_m_s.mean if r.cost_m_s else 0.0)
            cost = worst.cost_m_s
            assert cost is not None
            text += f", and what costs most is {worst.adds} ({for_people(cost.mean, 'm/s')})"
        return text + "."

    def check(self, demands: Iterable[str]) -> tuple[DemandResult, ...]:
        """Whether demands such as "arrival>=0.9", "block_speed>=100 um/s" or "lock=holds" are met.

        The doubtful end of the interval counts: its low end for >=, its high end for <=; see `demands`.

        Raises:
            ValueError: when a text is no demand.
        """
        read = [read_demand(text) for text in demands]
        return check_demands(read, self.verdicts, self.as_given, self.confidence)

    @property
    def demands(self) -> tuple[DemandResult, ...]:
        """Whether what was demanded is met."""
        return self.check(self.required)

    def compare(self, other: Audit) -> pd.DataFrame:
        """Two designs side by side, run by run with the same random draws.

        Arguments:
            other: an audit with the same seed and number of replicates.

        Returns:
            One row each for block speed, arrival and strike rate (per pusher), with columns quantity, unit, this, other
            (means), difference (other minus this), low, high (its interval, at this audit's confidence) and n (pairs).
            Higher is better for all three.

        Raises:
            ValueError: when seeds or numbers of replicates differ.
        """
        return compare_runs(self.as_given, other.as_given, self.scenario.trial.confidence)

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
                "bench_runs": self.bench_runs,
                "median_time_s": self.median_time_s,
                "mean_time_s": self.mean_time_s,
                "sooner_than_random": self.sooner_than_random,
                "ladder": [
                    {
                        "rung": r.rung,
                        "adds": r.adds,
                        "block_speed_m_s": r.block_speed_m_s,
                        "cost": r.cost_m_s,
                        "arrival": r.arrival,
                        "against": r.against,
                    }
                    for r in self.ladder
                ],
                "restored": self.restored,
                "baseline": self.baseline,
                "crews": self.crews,
                "influences": self.influences,
                "demands": self.demands,
                "looks": {
                    "planned": self.look.planned,
                    "number": self.look.number,
                    "confidence": self.confidence,
                },
                "verdicts": self.verdicts,
                "failed": [finding.assumption for finding in self.failed],
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
        saved = json.loads((folder / "audit.json").read_text(encoding="utf-8"))  # written last: a whole audit
        look = Look(int(saved["looks"]["number"]), tuple(saved["looks"]["planned"]))
        replicates = pd.read_parquet(folder / "replicates.parquet")
        planned = plan(load_run(folder / "sample").scenario)
        required = tuple(str(demand["demand"]) for demand in saved["demands"])
        return conclude(planned, replicates, load_run(folder / "sample", _cycles(planned)), look, required)
    except OSError as error:
        reason = f"{Path(error.filename).name if error.filename else 'a file'}: {error.strerror or 'unreadable'}"
    except (KeyError, ValueError, TypeError):
        reason = "a file is damaged"
    raise ValueError(f"{folder} does not hold a whole audit ({reason}); make one with 'swarmpush audit'")


def audit(
    s: Scenario,
    *,
    replicates: int | None = None,
    budget: int | None = None,
    around: bool = False,
    require: Iterable[str] = (),
    workers: int | None = None,
    journal: Path | None = None,
    progress: Progress | None = None,
) -> Audit:
    """Hold the plan against rigid bodies: what survives, what fails, and what each assumption costs.

    Every rung of the ladder is run with the same seeds, so that costs are paired differences; and so are the scenario
    as given with one assumption restored, and the same crew bouncing at random.

    Arguments:
        s: the scenario.
        replicates: independent runs per rung, at least 2; the scenario's own number unless given.
        budget: most runs per rung: while a verdict is undecided, their number is doubled up to this, and every look has
            so much more confidence that all looks together have the scenario's (`looks`). None: no more than
            `replicates`, in one look.
        around: also run the neighbours: crews of other sizes, and each measured value lower and higher. They take
            several times as long as all else.
        require: demands on the result, such as "arrival>=0.9"; see `Audit.check`.
        workers: threads; one per processor unless given. The result does not depend on it.
        journal: file for finished runs; if it is left from an interrupted audit of the same scenario, the runs in it
            are not made again. Delete it when the result is safe.
        progress: called after each run with runs done, runs in all, and the rung's name.

    Returns:
        An `Audit`.

    Raises:
        ValueError: for fewer than two replicates, a budget below their number, or a text that is no demand.
        OutputError: when the journal belongs to something else or cannot be written.
    """
    n = s.trial.replicates if replicates is None else replicates
    if n < 2:
        raise ValueError(f"{n} replicates given; an interval needs at least 2")
    most = n if budget is None else budget
    if most < n:
        raise ValueError(f"a budget of {most} runs given; it is below the {n} of the first look")
    required = tuple(require)
    for text in required:
        read_demand(text)
    planned = plan(s)
    scenarios = scenarios_to_run(s, around=around)
    as_given = climb(s)[-1].key
    originals = _originals(scenarios)
    seeds = replicate_seeds(s.trial.seed, most)
    cycles = _cycles(planned)
    sample_task = Task(as_given, 0)
    samples: list[Run] = []  # one run is needed in full

    def run_one(task: Task, look_up: Callable[[float], None]) -> Row:
        k = task.replicate
        if task.level == HEADINGS:
            return {"rung": HEADINGS, "replicate": k, "seed": k, "block_speed_m_s": speed_off_course(planned, seed=k)}
        scenario = scenarios[task.level]
        steps = choose_step(scenario)
        steps = steps.halved() if task.level == HALVED else steps
        run = simulate(scenario, seed=seeds[k], steps=steps, cycles=cycles, progress=look_up)
        if task == sample_task:
            samples.append(run)
        return {"rung": task.level, "replicate": k, "seed": seeds[k], **run.summary(planned.main_lap)}

    n_headings = N_HEADINGS if has_headings(planned) else 0
    names = {rung.key: rung.adds for rung in climb(s)} | {HEADINGS: "errors of headings alone"}

    def tell(done: int, total: int, level: str) -> None:
        if progress:
            progress(done, total, names.get(level, level))

    kept = Journal(journal, provenance(s)) if journal else None
    sizes = looks(n, most)
    rows: dict[Task, Row] = {}
    for number, size in enumerate(sizes):
        tasks = [Task(HEADINGS, k) for k in range(n_headings)]
        tasks += [Task(level, k) for level in dict.fromkeys(originals.values()) for k in range(size)]
        tasks += [Task(HALVED, k) for k in range(min(size, N_HALVED))]
        again = () if samples else (sample_task,)
        rows |= run_tasks(tasks, run_one, journal=kept, known=rows, again=again, workers=workers, progress=tell)
        table = [rows[Task(HEADINGS, k)] for k in range(n_headings)]
        table += [
            rows[Task(originals.get(level, level), k)] | {"rung": level}
            for level in scenarios
            for k in range(min(size, N_HALVED) if level == HALVED else size)
        ]
        result = conclude(planned, pd.DataFrame(table), samples[0], Look(number, sizes), required)
        if all(finding.verdict is not Verdict.UNDECIDED for finding in result.verdicts):
            break
    return result


def scenarios_to_run(s: Scenario, *, around: bool = False) -> dict[str, Scenario]:
    """All that an audit runs, by level: rungs, each assumption restored, baseline, halved step, and neighbours."""
    rungs = {rung.key: rung.scenario for rung in climb(s)}
    granted = {granted.level: granted.scenario for granted in restore(s)}
    others = neighbours(s) if around else {}
    return {**rungs, **granted, BASELINE: bounce_at_random(s), **others, HALVED: s}


def _originals(scenarios: dict[str, Scenario]) -> dict[str, str]:
    """For each level but the halved step the first one with the same scenario, whose runs are the same.

    Granting the last assumption again, for one, leads back to the rung below.
    """
    first: dict[str, str] = {}
    levels = {level: s.digest() for level, s in scenarios.items() if level != HALVED}
    return {level: first.setdefault(digest, level) for level, digest in levels.items()}


def conclude(planned: Plan, replicates: pd.DataFrame, sample: Run, look: Look, required: tuple[str, ...] = ()) -> Audit:
    """All that an audit says, from the plan and the runs' summaries, at one of several looks; a pure function."""
    given, confidence = planned, look.confidence(planned.scenario)
    planned = replace(planned, scenario=planned.scenario.replace(trial={"confidence": confidence}))
    s = planned.scenario
    by_rung = {str(key): rows.set_index("replicate") for key, rows in replicates.groupby("rung", sort=False)}
    as_given = by_rung[climb(s)[-1].key]
    n_arrived, n = int(as_given["has_arrived"].sum()), len(as_given)
    halved = by_rung[HALVED]["block_speed_m_s"]
    whole = as_given.loc[halved.index, "block_speed_m_s"]
    return Audit(
        scenario=given.scenario,
        plan=given,
        replicates=replicates,
        sample=sample,
        ladder=ladder(planned, by_rung),
        restored=restored(planned, by_rung),
        baseline=baseline(planned, by_rung),
        verdicts=find_verdicts(planned, as_given),
        arrival=share_interval(n_arrived, n, confidence),
        crews=crew_sizes(planned, by_rung),
        influences=influences(planned, by_rung),
        look=look,
        required=required,
        numerics=Numerics(
            steps=choose_step(s),
            change_m_s=mean_interval(halved - whole, confidence),
            residual_rel=float(replicates["residual_rel"].max()),
            phantom_share=float(replicates["phantom_share"].max()),
        ),
    )


def _cycles(planned: Plan) -> tuple[tuple[str, ...], ...]:
    return tuple(lap.surfaces for lap in planned.laps)
