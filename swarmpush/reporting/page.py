"""The report: one HTML file that needs nothing else, with the data of its figures beside it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined

from swarmpush.auditing.audit import Audit, load_audit
from swarmpush.cautions import CAUTIONS
from swarmpush.dynamics.run import Run, load_run
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.output import OutputError, provenance, write_text
from swarmpush.quantities import for_people
from swarmpush.reporting.audit_rows import (
    arrival_rows,
    audited_cause_rows,
    baseline_rows,
    crew_rows,
    demand_rows,
    influence_rows,
    ladder_rows,
    numeric_rows,
    restored_rows,
)
from swarmpush.reporting.audit_words import (
    arrival_words,
    bench_words,
    command_of,
    compared_words,
    cost_sentences,
    crew_words,
    influence_words,
    step_words,
)
from swarmpush.reporting.figure_data import as_csv
from swarmpush.reporting.figures import audit_exhibits, run_exhibits
from swarmpush.reporting.plan_words import force_words, noise_words, plan_answer
from swarmpush.reporting.run_drawing import is_floor_shown
from swarmpush.reporting.run_words import book_rows, cause_rows, energy_rows, main_reason, run_answer, state_rows
from swarmpush.reporting.study_page import study_content
from swarmpush.reporting.wording import finding_row
from swarmpush.studies.saved import DEFINITION
from swarmpush.studies.sweep import StudyResult, load_sweep

Reported = Audit | Run | StudyResult


def report(result: Reported, path: str | Path) -> Path:
    """Write a report of an audit, a study or a single run, and beside it the data of its figures.

    Arguments:
        result: what to report. path: the HTML file to write; replaced if it is there. A folder beside it is made if
            need be, and gets a CSV file for each figure: `figures` for a `report.html`, else `NAME-figures`.

    Returns:
        The path.

    Raises:
        OutputError: when something cannot be written.
    """
    path = Path(path)
    folder = path.parent / ("figures" if path.stem == "report" else f"{path.stem}-figures")
    content = _content(result) | {"data_folder": folder.name}
    text = _render(content)
    try:
        folder.mkdir(exist_ok=True)
    except OSError as error:
        raise OutputError(f"{folder} cannot be made ({error.strerror}); write the report to another folder") from None
    for exhibit in content["figures"].values():
        write_text(folder / f"{exhibit.key}.csv", as_csv(exhibit.data))
    write_text(path, text)
    return path


def page(result: Reported) -> str:
    """The report as HTML text; its links to the figures' data lead to files that only `report` writes."""
    return _render(_content(result) | {"data_folder": "figures"})


def load_result(folder: Path) -> Reported:
    """Read a saved audit, study or run.

    Raises:
        ValueError: when the folder holds none of these. OutputError: when a study in it cannot be read.
    """
    if (folder / DEFINITION).exists():
        return load_sweep(folder)
    if not (folder / "audit.json").exists() and (folder / "run.json").exists():
        try:
            cycles = tuple(lap.surfaces for lap in plan(load_run(folder).scenario).laps)
            return load_run(folder, cycles)
        except (OSError, KeyError, ValueError, TypeError):
            raise ValueError(f"{folder} does not hold a whole run; make one with 'swarmpush run'") from None
    return load_audit(folder)


def _render(content: dict[str, Any]) -> str:
    environment = Environment(
        loader=PackageLoader("swarmpush.reporting", "."),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    name = "study.html.jinja" if content["kind"] == "study" else "page.html.jinja"
    return environment.get_template(name).render(content)


def _content(result: Reported) -> dict[str, Any]:
    if isinstance(result, StudyResult):
        return study_content(result)
    if isinstance(result, Audit):
        return _audit_content(result)
    planned = plan(result.scenario)
    return _run_content(result, planned) | {"figures": run_exhibits(result, planned)}


def _run_content(run: Run, planned: Plan) -> dict[str, Any]:
    s = run.scenario
    budget = planned.noise_budget
    return {
        "name": s.about.name,
        "kind": "run",
        "note": s.about.note,
        "answer": run_answer(run),
        "lap_words": _lap_words(planned, run),
        "force_words": force_words(planned) if planned.force.floor_friction_N > 0.0 else "",
        "noise_words": noise_words(budget) if budget else "",
        "left_out": planned.left_out,
        "has_needed": is_floor_shown(run),
        "plan_answer": plan_answer(planned),
        "basis": planned.travel.basis,
        "is_audit": False,
        "reason": "" if run.has_arrived else main_reason(run),
        "books": [("time step", step_words(run)), *book_rows(run)],
        "energy": energy_rows(run),
        "causes": cause_rows(run),
        "states": state_rows(run),
        "regimes": [
            {
                "name": r.name,
                "formula": r.formula,
                "value": f"{r.value:.3g}",
                "meaning": r.meaning,
                "is_at_risk": r.is_at_risk,
            }
            for r in planned.regime
        ],
        "provenance": _provenance(run),
        "command": command_of(run),
        "cautions": CAUTIONS,
    }


def _audit_content(audit: Audit) -> dict[str, Any]:
    s, run = audit.scenario, audit.sample
    content = _run_content(run, audit.plan)
    seeds = ", ".join(str(seed) for seed in audit.as_given["seed"])
    of_seeds = [("seed of the audit", str(s.trial.seed)), ("seeds of its runs", seeds)]
    return content | {
        "kind": "audit",
        "is_audit": True,
        "figures": audit_exhibits(audit),
        "answer": audit.answer,
        "costs": cost_sentences(audit),
        "ladder": ladder_rows(audit),
        "compared": compared_words(audit),
        "restored": restored_rows(audit),
        "baseline": baseline_rows(audit),
        "demands": demand_rows(audit),
        "verdicts": [finding_row(f) for f in audit.verdicts],
        "arrival": arrival_rows(audit),
        "bench": [arrival_words(audit), bench_words(audit)],
        "crews": crew_rows(audit),
        "crew_words": crew_words(audit),
        "influences": influence_rows(audit),
        "influence_words": influence_words(audit),
        "causes": audited_cause_rows(audit),
        "numerics": numeric_rows(audit),
        "books": book_rows(run),
        "provenance": of_seeds + content["provenance"],
        "command": command_of(audit),
        "n_runs": audit.arrival.n,
        "confidence": audit.percent,
        "trial_confidence": f"{100 * s.trial.confidence:.3g}%",
        "tolerance": f"{s.trial.tolerance:.0%}",
    }


def _lap_words(planned: Plan, run: Run) -> str:
    lap = planned.main_lap
    laps = f"{len(run.laps)} laps were completed, {run.lock_share:.0%} of the pushers' time."
    if lap is None:
        return "Geometry gives no closed lap here. The thin lines are the ways from bump to bump, seen from the block."
    size = max(abs(m) for m in lap.multipliers)
    pull = "it attracts" if size < 1.0 - 1e-9 else "it is neutral: errors add up lap by lap"
    return (
        f"Planned: {' - '.join(lap.surfaces)}, {for_people(lap.time_s, 's')} a lap, largest multiplier {size:.3g} "
        f"({pull}), reached by {lap.share:.0%} of the starts. In the run shown {laps}"
    )


def _provenance(run: Run) -> list[tuple[str, str]]:
    origin = provenance(run.scenario, seed=run.seed)
    return [
        ("scenario hash", origin["scenario_hash"]),
        ("seed of the run shown", str(origin["seed"])),
        ("contact laws", "Newton's restitution and Coulomb's friction for each pair of surfaces"),
        ("versions", ", ".join(f"{name} {number}" for name, number in origin["versions"].items())),
        ("platform", origin["platform"]),
    ]
