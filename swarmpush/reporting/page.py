"""The report: one HTML file that needs nothing else."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined

from swarmpush.auditing.audit import Audit, load_audit
from swarmpush.cautions import CAUTIONS
from swarmpush.dynamics.run import Run, load_run
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.output import provenance, write_text
from swarmpush.quantities import for_people
from swarmpush.reporting import drawing
from swarmpush.reporting.drawing import as_svg
from swarmpush.reporting.run_words import book_rows, cause_rows, energy_rows, run_answer, state_rows
from swarmpush.reporting.wording import finding_row, interval, number, rung_row


def report(result: Audit | Run, path: str | Path) -> Path:
    """Write a report of an audit or of a single run.

    Arguments:
        result: what to report. path: the HTML file to write; replaced if it is there.

    Returns:
        The path.

    Raises:
        OutputError: when it cannot be written.
    """
    path = Path(path)
    write_text(path, page(result))
    return path


def page(result: Audit | Run) -> str:
    """The report as HTML text."""
    content = _audit_content(result) if isinstance(result, Audit) else _run_content(result, plan(result.scenario))
    environment = Environment(
        loader=PackageLoader("swarmpush.reporting", "."), autoescape=True, undefined=StrictUndefined
    )
    return environment.get_template("page.html.jinja").render(content)


def load_result(folder: Path) -> Audit | Run:
    """Read a saved audit or run.

    Raises:
        ValueError: when the folder holds neither.
    """
    if not (folder / "audit.json").exists() and (folder / "run.json").exists():
        try:
            cycles = tuple(lap.surfaces for lap in plan(load_run(folder).scenario).laps)
            return load_run(folder, cycles)
        except (OSError, KeyError, ValueError, TypeError):
            raise ValueError(f"{folder} does not hold a whole run; make one with 'swarmpush run'") from None
    return load_audit(folder)


def _run_content(run: Run, planned: Plan, ends: Any = None) -> dict[str, Any]:
    s = run.scenario
    travel = planned.travel
    return {
        "name": s.about.name,
        "kind": "run",
        "note": s.about.note,
        "answer": run_answer(run),
        "lap_words": _lap_words(planned, run),
        "left_out": "; ".join(planned.left_out),
        "has_needed": drawing.is_floor_shown(run),
        "ladder": [],
        "verdicts": [],
        "pictures": {
            "lap": as_svg(drawing.lap_over_runs, planned, run),
            "end": as_svg(drawing.end_of_run, run),
            "path": as_svg(drawing.block_path, run, travel.block_speed_m_s, ends),
            "impulses": as_svg(drawing.impulses, run, travel.strike_impulse_Ns),
            "books": as_svg(drawing.books, run),
            "energy": as_svg(drawing.energy, run),
            "leaning": as_svg(drawing.leaning, run),
            "states": as_svg(drawing.states, run),
        },
        "books": book_rows(run),
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
        "cautions": CAUTIONS,
    }


def _audit_content(audit: Audit) -> dict[str, Any]:
    s = audit.scenario
    change = audit.numerics.change_m_s
    content = _run_content(audit.sample, audit.plan, audit.as_given)
    content["pictures"]["ladder"] = as_svg(drawing.ladder, audit)
    content["books"][0] = ("largest residual of all runs", f"{audit.numerics.residual_rel:.1e} of all contact impulse")
    content["provenance"].insert(
        1,
        (
            "half the step changes the speed by",
            f"{number(change.mean, 'm/s')} ({interval(change, 'm/s')}, {change.n} pairs; chance included)",
        ),
    )
    return content | {
        "kind": "audit",
        "answer": audit.answer,
        "ladder": [rung_row(r) for r in audit.ladder],
        "verdicts": [finding_row(f) for f in audit.verdicts],
        "n_runs": audit.arrival.n,
        "confidence": f"{s.trial.confidence:.0%}",
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
    steps = run.steps
    return [
        ("time step", f"{for_people(steps.dt_s, 's')}, set by {steps.because}; {steps.iterations} solver iterations"),
        ("contact laws", "Newton's restitution and Coulomb's friction for each pair of surfaces"),
        ("seed of the run shown", str(origin["seed"])),
        ("scenario hash", origin["scenario_hash"]),
        ("versions", ", ".join(f"{name} {number}" for name, number in origin["versions"].items())),
    ]
