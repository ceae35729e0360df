"""A study from its definition to its results: `sweep` runs it, `StudyResult` is what came out."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from swarmpush.auditing.claims import ARRIVAL, MEASURES
from swarmpush.auditing.demands import check_demands, read_demand
from swarmpush.auditing.looks import confidence_at
from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval
from swarmpush.auditing.survival import SurvivalCurve, survival_curve
from swarmpush.output import provenance, write_table, write_text
from swarmpush.studies.advice import Advice, measure_first, what_remains
from swarmpush.studies.runner import Progress, run_study
from swarmpush.studies.saved import read_study
from swarmpush.studies.screening import Screening, find_effects
from swarmpush.studies.sensitivity import Sensitivity, find_sensitivity
from swarmpush.studies.store import Summary, read_failures, read_runs, read_summary
from swarmpush.studies.study import Axis, Study
from swarmpush.vary import column_of

TABLE = "table"  # its name, as CSV and Parquet


@dataclass(frozen=True)
class StudyResult:
    """What a study gave, as far as it has come.

    study: what was run. summary: how far. runs: one row per finished run: point, replicate, seed and the measures of
    `Run.summary`. failures: one row per run, or point, that failed; see `store.read_failures`.
    """

    study: Study
    summary: Summary
    runs: pd.DataFrame
    failures: pd.DataFrame

    @property
    def confidence(self) -> float:
        """Confidence of each interval: that of the base's trial, or more where a stop rule looks several times."""
        return confidence_at(0, len(self.study.counts), self.study.base.trial.confidence)

    @cached_property
    def table(self) -> pd.DataFrame:
        """One row per point: point, what was varied, n_runs, and for each output its mean and interval.

        Columns end in units: a key's are its name and unit, an output's its column in `claims.MEASURES`, with _low and
        _high before the unit's place, e.g. block_speed_m_s, block_speed_m_s_low, block_speed_m_s_high.
        """
        study = self.study
        names = {axis.name: axis_column(study, axis) for axis in study.varied}
        table = study.points.rename(columns=names).rename_axis("point").reset_index()
        by_point = dict(iter(self.runs.groupby("point")))
        nothing = self.runs.iloc[:0]
        rows = []
        for point in range(len(study.points)):
            runs = by_point.get(point, nothing)
            row: dict[str, Any] = {"n_runs": len(runs)}
            for output in study.outputs:
                found, column = estimate_of(output, runs, self.confidence), output_column(output)
                row |= {column: found.mean, f"{column}_low": found.low, f"{column}_high": found.high}
            rows.append(row)
        return pd.concat([table, pd.DataFrame(rows)], axis=1)

    def estimates(self, output: str) -> list[Estimate]:
        """Mean and interval of one of the study's outputs at each point."""
        column = output_column(output)
        columns = (column, f"{column}_low", f"{column}_high", "n_runs")
        return [Estimate(*row) for row in zip(*(self.table[name] for name in columns), strict=True)]

    def under_way(self, runs: pd.DataFrame) -> SurvivalCurve:
        """Share of some of the runs whose block has not arrived yet, over time."""
        return survival_curve(runs["duration_s"], ~runs["has_arrived"].astype(bool), self.confidence)

    def groups(self, axis: Axis) -> dict[str, pd.DataFrame]:
        """The runs by the value of one axis, in the order of its values."""
        column = self.study.points[axis.name]
        values = pd.unique(column)
        ordered = sorted(values) if axis.is_ordered else [value for value in axis.values if value in set(values)]
        points = {axis.written(value): column.index[column == value] for value in ordered}
        return {name: self.runs[self.runs["point"].isin(of_value)] for name, of_value in points.items()}

    def weights(self, output: str) -> Sensitivity | Screening | None:
        """What each key does to an output, where the design was made for that."""
        if self.runs.empty:
            return None
        if self.study.design == "sensitivity":
            return find_sensitivity(self.study, self.runs, output, confidence=self.confidence)
        if self.study.design == "screening":
            return find_effects(self.study, self.runs, output, confidence=self.confidence)
        return None

    def measure_first(self, output: str) -> tuple[Advice, ...]:
        """What to measure first, the most important key at the head; empty for other designs."""
        found = self.weights(output)
        return measure_first(found) if found else ()

    @property
    def answer(self) -> str:
        """How far the study has come and where the first output is best, in sentences."""
        done = self.summary
        text = f"{done.n_runs_done} of {done.n_runs_planned} runs at {done.n_points} points"
        if done.n_failures:
            text += f", {done.n_failures} failed"
        output = self.study.outputs[0]
        means = self.table[output_column(output)].to_numpy(dtype=np.float64)
        if np.isfinite(means).any():
            highest = np.flatnonzero(means == np.nanmax(means))
            others = f", and at {len(highest) - 1} more" if len(highest) > 1 else ""
            text += f". {output[:1].upper()}{output[1:]} is highest at {self.study.values_at(int(highest[0]))}{others}"
        if met := self.meets_demand():
            n_met = sum(map(bool, met))
            text += f". The demand {self.study.demand} is met at the doubtful end of the interval at {n_met} points"
        return f"{text}."

    def _repr_html_(self) -> str:
        from swarmpush.reporting.notebook import study_html

        return study_html(self)

    def meets_demand(self) -> list[bool | None]:
        """Whether each point meets the study's demand at the doubtful end of the interval; None without runs there.

        Empty for a study without a demand.
        """
        if not self.study.demand:
            return []
        demand = read_demand(self.study.demand)
        by_point = dict(iter(self.runs.groupby("point")))
        return [
            check_demands([demand], (), by_point[point], self.confidence)[0].is_met if point in by_point else None
            for point in range(len(self.study.points))
        ]

    def to_dict(self, files: dict[str, str] | None = None) -> dict[str, Any]:
        """The result as plain values for JSON, without the table's rows, which have files of their own."""
        return {
            "answer": self.answer,
            "study": self.study.name,
            "design": self.study.design,
            "varied": [axis.name for axis in self.study.varied],
            "outputs": list(self.study.outputs),
            "summary": self.summary,
            "measure_first": {output: self.measure_first(output) for output in self.study.outputs},
            "remains": {
                output: what_remains(found) for output in self.study.outputs if (found := self.weights(output))
            },
            "files": files or {},
            "provenance": provenance(self.study.base, seed=self.study.seed) | {"study_hash": self.study.digest()},
        }

    def save(self, folder: Path) -> dict[str, str]:
        """Write the table of points; returns the files' names.

        Raises:
            OutputError: when something cannot be written.
        """
        files = {"runs": "runs.parquet", "table": f"{TABLE}.parquet", "csv": f"{TABLE}.csv"}
        write_table(folder / files["table"], self.table)
        write_text(folder / files["csv"], str(self.table.to_csv(index=False, lineterminator="\n")))
        return files


def sweep(
    study: Study,
    folder: Path,
    *,
    workers: int | None = None,
    cluster: str | None = None,
    progress: Progress | None = None,
    is_forced: bool = False,
) -> StudyResult:
    """Run a study, or go on with it where it stopped; see `runner.run_study`, whose arguments these are."""
    run_study(study, folder, workers=workers, cluster=cluster, progress=progress, is_forced=is_forced)
    return load_sweep(folder)


def load_sweep(folder: Path) -> StudyResult:
    """What a folder holds of a study, finished or not.

    Raises:
        OutputError: when it holds none.
    """
    return StudyResult(read_study(folder), read_summary(folder), read_runs(folder), read_failures(folder))


def axis_column(study: Study, axis: Axis) -> str:
    """Name of a table's column that holds the values of an axis."""
    return axis.name if axis.options is not None else column_of(study.base, axis.name)


def output_column(output: str) -> str:
    """Name of a table's column that holds the means of an output; a share is told apart from a run's yes or no."""
    return "arrived_share" if output == ARRIVAL else MEASURES[output][0]


def estimate_of(output: str, runs: pd.DataFrame, confidence: float) -> Estimate:
    """Mean and interval of an output over runs of one point."""
    column = MEASURES[output][0]
    values = runs[column].to_numpy(dtype=np.float64) if column in runs else np.zeros(0)
    if output == ARRIVAL:
        return share_interval(int(values.sum()), len(values), confidence)
    return mean_interval(values, confidence)
