"""Studies as text and tables in a terminal."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import pandas as pd

from swarmpush.reporting.console import caution, console, head, new_table, without_styles
from swarmpush.reporting.study_words import Row, advice_words, cost_words, failure_rows, point_rows, summary_words
from swarmpush.studies.estimate import Cost
from swarmpush.studies.study import Study
from swarmpush.studies.sweep import StudyResult

MOST_ROWS = 40  # of a table


def show_cost(study: Study, cost: Cost, warnings: Sequence[str]) -> None:
    """What a study will take, and what whoever starts it should know."""
    head(study.name, cost_words(cost))
    for warning in warnings:
        console.print(f"[yellow]note:[/yellow] {without_styles(warning)}")


def show_study(result: StudyResult, folder: Path) -> None:
    """The answer, what to measure first, and the points."""
    head(result.study.name, result.answer)
    for output in result.study.outputs:
        for sentence in advice_words(result, output):
            console.print(without_styles(sentence))
    rows = point_rows(result, MOST_ROWS) if result.study.design in ("grid", "list") else []
    if rows:
        _show_points(result, rows)
    console.print(f"\n{summary_words(result.summary)}")
    if len(result.failures):
        print(f"see which: swarmpush study failures {folder}")
    caution()


def _show_points(result: StudyResult, rows: Sequence[Row]) -> None:
    of_point = [column for column in rows[0] if column in ("point", *result.study.points, "demand")]
    table = new_table(*of_point, *result.study.outputs)
    for row in rows:
        table.add_row(*(without_styles(row[column]) for column in (*of_point, *result.study.outputs)))
    console.print(table)
    if len(result.study.points) > len(rows):
        console.print(f"... and {len(result.study.points) - len(rows)} more points, in the table")


def show_failures(failures: pd.DataFrame, study: Study, folder: Path) -> None:
    """The failures, and how to look at one."""
    if failures.empty:
        print("no failures")
        return
    table = new_table("point", "run", "values", "error", right=("point", "run"))
    for row in failure_rows(failures.head(MOST_ROWS), study):
        table.add_row(*(without_styles(text) for text in row.values()))
    console.print(table)
    if len(failures) > MOST_ROWS:
        console.print(f"... and {len(failures) - MOST_ROWS} more; --json lists all")
    print(f"make one again: swarmpush run --from-study {folder} --point N --replicate K")
    print(f"make all again: swarmpush study rerun-failed {folder}")
