"""A study in words and rows of text, shared by the console, the page and notebooks."""

from __future__ import annotations

import math

import pandas as pd

from swarmpush.auditing.claims import ARRIVAL, MEASURES
from swarmpush.auditing.statistics import Estimate
from swarmpush.quantities import for_people
from swarmpush.reporting.wording import arrived, interval, number
from swarmpush.studies.advice import what_remains
from swarmpush.studies.estimate import Cost
from swarmpush.studies.screening import Screening
from swarmpush.studies.store import Summary
from swarmpush.studies.study import Study
from swarmpush.studies.sweep import StudyResult

Row = dict[str, str]

MANY_SECONDS = 120.0  # above this, minutes are told; above as many minutes, hours


def duration(seconds: float) -> str:
    """A time to wait, to two digits.

    >>> duration(8.3), duration(1500.0), duration(86400.0)
    ('8.3 s', '25 min', '24 h')
    """
    if not math.isfinite(seconds):
        return "an unknown time"
    for unit, size in (("s", 1.0), ("min", 60.0), ("h", 3600.0), ("days", 86400.0)):
        if seconds < MANY_SECONDS * size or unit == "days":
            value = max(1.0, seconds / size)
            return f"{value:.2g} {unit}" if value < 10.0 else f"{value:.0f} {unit}"
    raise AssertionError


def cost_words(cost: Cost) -> str:
    """Size of a study, and what it will take, in sentences."""
    size = cost.size
    runs = f"{size.least_runs}" if size.least_runs == size.most_runs else f"{size.least_runs} to {size.most_runs}"
    time, most = duration(cost.least_s), duration(cost.most_s)
    times = time if time == most else f"{time} to {most}"
    room = for_people(float(cost.most_bytes), "B")
    workers = "1 process" if cost.workers == 1 else f"{cost.workers} processes"
    return (
        f"{runs} runs at {size.n_points} points. About {times} on {workers} ({for_people(cost.run_s, 's')} a run "
        f"where timed, the slowest {for_people(cost.slowest_s, 's')}), and {room} on the disk."
    )


def summary_words(summary: Summary) -> str:
    """How far a study has come, in a sentence."""
    text = f"{summary.n_runs_done} of {summary.n_runs_planned} runs are done, {summary.n_failures} failed"
    if not summary.is_finished:
        left = summary.n_runs_planned - summary.n_runs_done - summary.n_failures
        if math.isfinite(summary.runs_per_s) and summary.runs_per_s > 0.0:
            text += f"; at {summary.runs_per_s:.3g} runs per second {duration(left / summary.runs_per_s)} are left"
        else:
            text += f"; {left} are left"
    return f"{text}."


def output_words(output: str, estimate: Estimate) -> tuple[str, str]:
    """Mean and interval of an output."""
    if estimate.n == 0:
        return "-", "-"
    if output == ARRIVAL:
        return arrived(estimate), interval(estimate, "share of runs")
    unit = MEASURES[output][1]
    return number(estimate.mean, unit), interval(estimate, unit)


def point_rows(result: StudyResult, most: int) -> list[Row]:
    """One row per point, at most so many: values, runs, each output with its interval, demand met or not."""
    study, rows = result.study, []
    estimates = {output: result.estimates(output) for output in study.outputs}
    met = result.meets_demand()
    for point, values in enumerate(study.points.head(most).itertuples(index=False)):
        row: Row = {"point": str(point)}
        for axis, value in zip(study.varied, values, strict=True):
            row[axis.name] = axis.written(value)
        row["runs"] = str(result.table["n_runs"].iloc[point])
        for output in study.outputs:
            mean, span = output_words(output, estimates[output][point])
            row[output] = mean if span == "-" else f"{mean} ({span})"
        if met:
            row["demand"] = {True: "met", False: "not met", None: "-"}[met[point]]
        rows.append(row)
    return rows


def weight_rows(result: StudyResult, output: str) -> list[Row]:
    """One row per key of a sensitivity or screening study, the most important first."""
    found = result.weights(output)
    if found is None:
        return []
    is_screening = isinstance(found, Screening)
    unit = MEASURES[output][1] if is_screening else "share"
    columns = ("mu_star", "mu", "sigma", "chance") if is_screening else ("total", "first")
    table = found.table.sort_values(columns[0], ascending=False, kind="stable")
    rows = []
    for record in table.to_dict("records"):
        row = {"key": str(record["key"])}
        for column in columns:
            row[column] = number(float(record[column]), unit)
            if f"{column}_low" in record:
                low, high = float(record[f"{column}_low"]), float(record[f"{column}_high"])
                row[f"{column} interval"] = interval(Estimate(float(record[column]), low, high, 1), unit)
        rows.append(row)
    return rows


def advice_words(result: StudyResult, output: str) -> list[str]:
    """What to measure first for an output, and what remains, in sentences; empty for other designs."""
    found = result.weights(output)
    if found is None:
        return []
    return [*(advice.sentence for advice in result.measure_first(output)), what_remains(found)]


def failure_rows(failures: pd.DataFrame, study: Study) -> list[Row]:
    """The failures as text: where, at which values, what."""
    columns = ("point", "replicate", "error", "message")
    return [
        {
            "point": str(point),
            "run": "all" if replicate < 0 else str(replicate),
            "values": study.values_at(point),
            "error": f"{error}: {message}",
        }
        for point, replicate, error, message in zip(*(failures[name].tolist() for name in columns), strict=True)
    ]
