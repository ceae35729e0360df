"""Results as text and tables in a terminal."""

from __future__ import annotations

import math
from pathlib import Path

from rich.console import Console
from rich.table import Table

from swarmpush.auditing.audit import Audit
from swarmpush.auditing.converge import Convergence
from swarmpush.auditing.rungs import GEOMETRY
from swarmpush.cautions import CAUTIONS
from swarmpush.dynamics.run import Run
from swarmpush.kinematics.planning import Plan
from swarmpush.quantities import for_people
from swarmpush.reporting.audit_rows import restored_rows
from swarmpush.reporting.audit_words import arrival_words, baseline_words, bench_words, crew_words, influence_words
from swarmpush.reporting.plan_words import count, followed, plan_answer, plan_facts
from swarmpush.reporting.run_words import book_rows, cause_rows, energy_rows, run_answer, state_rows
from swarmpush.reporting.wording import finding_row, interval, mean_and_error, number, rung_row

_COLOURS = {"holds": "green", "strained": "yellow", "fails": "red", "undecided": "bright_black"}
_EFFECT_COLOURS = {"small": "green", "large": "red", "untold": "bright_black"}
console = Console(highlight=False)


def new_table(*columns: str, right: tuple[str, ...] = ()) -> Table:
    """A table without lines; numbers stand to the right and are not wrapped."""
    table = Table(box=None, padding=(0, 2, 0, 0), header_style="bold")
    for name in columns:
        table.add_column(name, justify="right" if name in right else "left", no_wrap=name in right)
    return table


def head(name: str, answer: str) -> None:
    """What a result is of, and its answer."""
    console.print(f"\n[bold]{without_styles(name)}[/bold]")
    console.print(without_styles(answer) + "\n")


def without_styles(text: str) -> str:
    """Text with its square brackets kept, which otherwise would be styles, and without control characters."""
    return "".join(c for c in text if c.isprintable()).replace("[", "\\[")


def show_plan(plan: Plan) -> None:
    """The point world's answer: laps and what they survive, starts, force, forecast, risks, hardware."""
    head(plan.scenario.about.name, plan_answer(plan))
    if plan.laps:
        _show_laps(plan)
    facts = Table(box=None, padding=(0, 2, 0, 0), show_header=False)
    facts.add_column(style="bold", no_wrap=True)
    facts.add_column()
    for name, text in plan_facts(plan).items():
        facts.add_row(name, without_styles(text))
    console.print(facts)
    console.print()
    table = new_table("number", "value", "meaning", right=("value",))
    for regime in plan.regime:
        risk = "[yellow]at risk:[/yellow] " if regime.is_at_risk else ""
        table.add_row(regime.name, f"{regime.value:.3g}", risk + without_styles(regime.meaning))
    console.print(table)
    caution()


def _show_laps(plan: Plan) -> None:
    table = new_table("lap", "starts", "time", "multipliers", "heading band", "laps kept", right=("lap",))
    for k, (lap, theory) in enumerate(zip(plan.laps, plan.laps_to_drift_out, strict=True)):
        low, high = (round(end, 6) + 0.0 for end in lap.band_rad)  # the search for the ends stops at 1e-7 rad
        table.add_row(
            str(k + 1),
            f"{lap.share:.0%}",
            for_people(lap.time_s, "s"),
            ", ".join(f"{m.real:.3f}" if abs(m.imag) < 1e-12 else f"{m:.3f}" for m in lap.multipliers),
            f"{for_people(low, 'rad')} to {for_people(high, 'rad')}",
            f"{count(theory)} by theory" + "".join(map(followed, plan.laps_to_drift_out_mc[k : k + 1])),
        )
    console.print(table)
    for k, lap in enumerate(plan.laps):
        console.print(f"lap {k + 1}: " + " - ".join(lap.surfaces))
    kept = plan.laps_to_drift_out_mc[0]
    if kept.n > 0:
        console.print(
            f"{kept.n} pushers were followed on lap 1, and {kept.n - kept.censored} left it; {kept.basis}; "
            f"{plan.scenario.trial.confidence:.0%} interval"
        )
    console.print()


def show_run(run: Run) -> None:
    """One run."""
    strikes = run.strikes
    head(run.scenario.about.name, run_answer(run))
    table = new_table("measure", "value", right=("value",))
    table.add_row("visits", str(len(run.visits)))
    table.add_row("strikes on the rear face", str(len(strikes)))
    table.add_row("impact impulse per strike", number(strikes["impact_Ns"].mean(), "N s"))
    table.add_row("lean impulse per strike", number(strikes["lean_Ns"].mean(), "N s"))
    table.add_row("completed laps", f"{len(run.laps)} ({run.lock_share:.0%} of the pushers' time)")
    table.add_row("largest yaw of the block", for_people(run.yaw_max_rad, "rad"))
    console.print(table)
    console.print()
    columns = ("share", "first", "last", "longest", "spells")
    table = new_table("what kept the crew from pushing", *columns, right=columns)
    for row in cause_rows(run):
        table.add_row(row["name"], *(row[column] for column in columns))
    console.print(table)
    for title, rows in (
        ("a pusher's time", state_rows(run)),
        ("energy", energy_rows(run)),
        ("books", book_rows(run)),
    ):
        console.print()
        table = new_table(title, "")
        for row_name, text in rows:
            table.add_row(row_name, text)
        console.print(table)
    caution()


def show_audit(audit: Audit) -> None:
    """The audit's answer, ladder, what would come back, the crew bouncing at random, and verdicts."""
    head(audit.scenario.about.name, audit.answer)
    costs = ("block speed", "difference", "its interval", "arrived")
    table = new_table("rung", *costs, right=costs)
    for row in map(rung_row, audit.ladder):
        table.add_row(row["name"], row["speed"], row["cost"], row["interval"], row["arrived"])
    console.print(table)
    if any(rung.against == GEOMETRY and rung.arrival is None for rung in audit.ladder):
        console.print("errors of headings and bodies are compared with geometry, the others with the rung above")
    _show_restored(audit)
    columns = ("planned", "measured", "interval")
    table = new_table("claim of the plan", *columns, "verdict", right=columns)
    for row in map(finding_row, audit.verdicts):
        verdict = f"[{_COLOURS[row['verdict']]}]{row['verdict']}[/]"
        table.add_row(
            f"{row['name']}: {without_styles(row['statement'])}",
            row["planned"],
            row["measured"],
            row["interval"],
            verdict,
        )
    console.print(table)
    numerics = audit.numerics
    change = numerics.change_m_s
    console.print(
        f"\nbooks balanced to {numerics.residual_rel:.0e} of all contact impulse; step "
        f"{for_people(numerics.steps.dt_s, 's')}, half of it changes the speed by {number(change.mean, 'm/s')} "
        f"({interval(change, 'm/s')}, chance included)"
    )
    caution()


def _show_restored(audit: Audit) -> None:
    """What would come back with one assumption granted again, most first; and the crew that bounces at random."""
    console.print()
    gains = ("block speed", "gain", "its interval", "arrived")
    if audit.restored:
        table = new_table("what would come back if", *gains, right=gains)
        for row in restored_rows(audit):
            table.add_row(without_styles(row["name"]), *(row[key] for key in ("speed", "cost", "interval", "arrived")))
        console.print(table)
        console.print()
    console.print(f"{baseline_words(audit)}\n")
    console.print(f"{arrival_words(audit)}\n")
    console.print(f"{bench_words(audit)}\n")
    for words in filter(None, (crew_words(audit), influence_words(audit))):
        console.print(f"{without_styles(words)}\n")
    if audit.failed:
        console.print(f"What fails first: {', '.join(f.assumption for f in audit.failed[:3])}.\n")


def show_convergence(result: Convergence) -> None:
    """What the step size costs: means and books at three steps, paired differences, order where runs are smooth."""
    head(result.scenario.about.name, result.answer)
    at = tuple(for_people(step.dt_s, "s") for step in result.steps)
    table = new_table("step", *at, right=at)
    for effect in result.effects:
        table.add_row(effect.quantity, *(mean_and_error(mean, effect.unit) for mean in effect.at_steps))
    table.add_row("residual of the books", *(f"{step.residual_rel:.0e}" for step in result.steps))
    table.add_row("motion without velocity", *(f"{step.phantom_share:.0e}" for step in result.steps))
    console.print(table)
    for effect in result.effects:
        left_out = [mean.n_left_out for mean in effect.at_steps]
        if any(left_out):
            console.print(f"{effect.quantity}: undefined in {', '.join(map(str, left_out))} runs, which are left out")
    console.print()
    columns = (f"{at[0]} less {'the limit' if result.has_limit else at[-1]}", "its interval", "allowed")
    table = new_table("what the step changes", *columns, "effect", right=columns)
    for effect in result.effects:
        unit, change = effect.unit, effect.judged
        word = f"[{_EFFECT_COLOURS[effect.effect]}]{effect.effect}[/]" if effect.is_measured else ""
        table.add_row(
            effect.quantity, number(change.mean, unit), interval(change, unit), number(effect.allowed, unit), word
        )
    console.print(table)
    if result.is_smooth:
        console.print()
        of_order = ("order", "extrapolated", "grid index")
        table = new_table("same bumps at all steps", *of_order, "differences", right=of_order)
        for effect in result.effects:
            if effect.grid:
                grid = effect.grid
                index = f"{grid.index_rel:.2%}" if math.isfinite(grid.index_rel) else "-"
                order = f"{grid.order:.2f}" if math.isfinite(grid.order) else "-"
                table.add_row(effect.quantity, order, number(grid.limit, effect.unit), index, str(grid.behaviour))
        console.print(table)
    caution()


def say_where(*paths: Path) -> None:
    """Where results lie, each on a line of its own that no wrapping breaks."""
    for path in paths:
        print(f"{path.stem}: {path}")


def caution() -> None:
    """The cautions that go with every result."""
    console.print()
    for caution in CAUTIONS:
        console.print(f"[bright_black]{caution}[/]")
