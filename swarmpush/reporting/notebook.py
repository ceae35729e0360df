"""Plans, runs and audits as small HTML for notebooks: the answer and the main table, all text escaped."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from html import escape

from swarmpush.auditing.audit import Audit
from swarmpush.dynamics.run import Run
from swarmpush.kinematics.planning import Plan
from swarmpush.quantities import for_people
from swarmpush.reporting.audit_rows import ladder_rows
from swarmpush.reporting.plan_words import plan_answer
from swarmpush.reporting.run_words import cause_rows, run_answer
from swarmpush.reporting.study_words import point_rows
from swarmpush.studies.sweep import StudyResult

MOST_POINTS = 30


def plan_html(plan: Plan) -> str:
    """The plan's promise and its numbers without dimension, those that put the plan at risk marked."""
    rows = [
        (regime.name, f"{regime.value:.3g}", "at risk" if regime.is_at_risk else "fair", regime.meaning)
        for regime in plan.regime
    ]
    columns = ("number", "value", "plan", "meaning")
    return _small(plan.scenario.about.name, plan_answer(plan), "Numbers without dimension", columns, rows)


def run_html(run: Run) -> str:
    """The run's answer and what kept the crew from pushing."""
    columns = ("share", "first", "last", "longest", "spells")
    rows = [(row["name"], *(row[column] for column in columns)) for row in cause_rows(run)]
    caption = f"What kept the crew from pushing in {for_people(run.duration_s, 's')}, seed {run.seed}"
    return _small(run.scenario.about.name, run_answer(run), caption, ("cause", *columns), rows)


def audit_html(audit: Audit) -> str:
    """The audit's answer and its ladder."""
    rows = [(row["name"], row["speed"], row["cost"], row["interval"], row["arrived"]) for row in ladder_rows(audit)]
    columns = ("rung", "block speed", "difference", f"{audit.percent} interval", "arrived")
    return _small(audit.scenario.about.name, audit.answer, "What each assumption costs", columns, rows)


def study_html(result: StudyResult) -> str:
    """The study's answer and its points, as many as fit."""
    rows = point_rows(result, MOST_POINTS)
    columns = list(rows[0]) if rows else ["point"]
    cells = [[row[column] for column in columns] for row in rows]
    caption = f"{len(rows)} of {len(result.study.points)} points"
    return _small(result.study.name, result.answer, caption, columns, cells)


def _small(name: str, answer: str, caption: str, columns: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """Name, answer and one table.

    >>> _small("a <b>", "Yes.", "Numbers", ("x", "y"), [("1", "2")])[:44]
    '<div><p><strong>a &lt;b&gt;</strong><br>Yes.'
    """
    head = "".join(f'<th scope="col">{escape(column)}</th>' for column in columns)
    body = "".join(
        f'<tr><th scope="row" style="text-align: left; font-weight: normal">{escape(first)}</th>'
        + "".join(f"<td>{escape(value)}</td>" for value in rest)
        + "</tr>"
        for first, *rest in rows
    )
    return (
        f"<div><p><strong>{escape(name)}</strong><br>{escape(answer)}</p><table><caption>{escape(caption)}</caption>"
        f"<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table></div>"
    )
