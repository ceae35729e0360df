"""Results as text and tables in a terminal."""

from __future__ import annotations

import math
from pathlib import Path

from rich.console import Console
from rich.table import Table

from swarmpush.auditing.audit import Audit
from swarmpush.cautions import CAUTIONS
from swarmpush.dynamics.run import Run
from swarmpush.kinematics.planning import Plan
from swarmpush.quantities import for_people
from swarmpush.reporting.wording import CAUSES, finding_row, interval, number, rung_row

_COLOURS = {"holds": "green", "strained": "yellow", "fails": "red", "undecided": "bright_black"}
_console = Console(highlight=False)


def _table(*columns: str, right: tuple[str, ...] = ()) -> Table:
    table = Table(box=None, padding=(0, 2, 0, 0), header_style="bold")
    for name in columns:
        table.add_column(name, justify="right" if name in right else "left", no_wrap=name in right)
    return table


def _head(name: str, answer: str) -> None:
    _console.print(f"\n[bold]{_plain(name)}[/bold]")
    _console.print(_plain(answer) + "\n")


def _plain(text: str) -> str:
    """Text with its square brackets kept, which otherwise would be styles, and without control characters."""
    return "".join(c for c in text if c.isprintable()).replace("[", "\\[")


def show_plan(plan: Plan) -> None:
    """The point world's answer."""
    s, travel, capture = plan.scenario, plan.travel, plan.capture
    if math.isfinite(travel.time_to_goal_s):
        text = (
            f"Geometry promises {for_people(travel.block_speed_m_s, 'm/s')}: {for_people(s.goal.travel, 'm')} in "
            f"{for_people(travel.time_to_goal_s, 's')} (limit {for_people(s.goal.time_limit, 's')}), by "
            f"{travel.strikes_to_goal:.0f} strikes of {for_people(travel.nudge_m, 'm')}."
        )
    elif travel.block_speed_m_s < 0.0:
        back = for_people(-travel.block_speed_m_s, "m/s")
        text = f"Geometry promises no arrival: strikes on the front drive the block back at {back}."
    else:
        text = "Geometry promises no arrival: no strike moves the block."
    _head(s.about.name, text)
    if plan.laps:
        table = _table("lap", "starts", "time", "multipliers", "heading band", "kept for", right=("starts", "time"))
        for lap, drift in zip(plan.laps, plan.laps_to_drift_out, strict=True):
            low, high = (round(end, 6) for end in lap.band_rad)  # the search for the ends stops at 1e-7 rad
            multipliers = ", ".join(f"{m.real:.3f}" if abs(m.imag) < 1e-12 else f"{m:.3f}" for m in lap.multipliers)
            table.add_row(
                " - ".join(lap.surfaces),
                f"{lap.share:.0%}",
                for_people(lap.time_s, "s"),
                multipliers,
                f"{for_people(low, 'rad')} to {for_people(high, 'rad')}",
                "ever" if math.isinf(drift) else f"{drift:.3g} laps",
            )
        _console.print(table)
    shares = {"caught by a lap": capture.captured, **capture.lost, "no closed lap within the budget": capture.undecided}
    _console.print("\nstarts: " + ", ".join(f"{share:.0%} {what}" for what, share in shares.items() if share >= 0.005))
    force = plan.force
    if force.floor_friction_N > 0:
        _console.print(
            f"force: one pusher {for_people(force.stall_N, 'N')}, floor holds "
            f"{for_people(force.floor_friction_N, 'N')}: {force.pushers_to_move:.2f} pushers to move the block"
        )
    _console.print("kit: " + ", ".join(plan.kit) + "\n")
    table = _table("number", "value", "meaning", right=("value",))
    for regime in plan.regime:
        risk = "[yellow]at risk:[/yellow] " if regime.is_at_risk else ""
        table.add_row(regime.name, f"{regime.value:.3g}", risk + _plain(regime.meaning))
    _console.print(table)
    _caution()


def show_run(run: Run) -> None:
    """One run."""
    s, strikes, books = run.scenario, run.strikes, run.books
    _head(
        s.about.name,
        f"The block covered {for_people(run.travel_m, 'm')} of {for_people(s.goal.travel, 'm')} in "
        f"{for_people(run.duration_s, 's')} ({for_people(run.speed_m_s, 'm/s')}); ended with: {run.ended}.",
    )
    table = _table("measure", "value", right=("value",))
    table.add_row("visits", str(len(run.visits)))
    table.add_row("strikes on the rear face", str(len(strikes)))
    table.add_row("impact impulse per strike", number(strikes["impact_Ns"].mean(), "N s"))
    table.add_row("lean impulse per strike", number(strikes["lean_Ns"].mean(), "N s"))
    table.add_row("completed laps", f"{len(run.laps)} ({run.lock_share:.0%} of the pushers' time)")
    table.add_row("largest yaw of the block", for_people(run.yaw_max_rad, "rad"))
    table.add_row("books: residual", f"{books.residual_rel:.1e} of all contact impulse")
    table.add_row("books: displacement without velocity", f"{books.phantom_share:.1e} of the block's way")
    for name, share in run.causes.items():
        if share > 0.0:
            table.add_row(CAUSES[name], f"{share:.1%}")
    _console.print(table)
    _caution()


def show_audit(audit: Audit) -> None:
    """The audit's answer, ladder and verdicts."""
    _head(audit.scenario.about.name, audit.answer)
    costs = ("block speed", "difference", "its interval", "arrived")
    table = _table("rung", *costs, right=costs)
    for row in map(rung_row, audit.ladder):
        table.add_row(row["name"], row["speed"], row["cost"], row["interval"], row["arrived"])
    _console.print(table)
    _console.print()
    columns = ("planned", "measured", "interval")
    table = _table("claim of the plan", *columns, "verdict", right=columns)
    for row in map(finding_row, audit.verdicts):
        verdict = f"[{_COLOURS[row['verdict']]}]{row['verdict']}[/]"
        table.add_row(
            f"{row['name']}: {_plain(row['statement'])}", row["planned"], row["measured"], row["interval"], verdict
        )
    _console.print(table)
    numerics = audit.numerics
    change = numerics.change_m_s
    _console.print(
        f"\nbooks balanced to {numerics.residual_rel:.0e} of all contact impulse; step "
        f"{for_people(numerics.steps.dt_s, 's')}, half of it changes the speed by {number(change.mean, 'm/s')} "
        f"({interval(change, 'm/s')}, chance included)"
    )
    _caution()


def say_where(*paths: Path) -> None:
    """Where results lie, each on a line of its own that no wrapping breaks."""
    for path in paths:
        print(f"{path.stem}: {path}")


def _caution() -> None:
    _console.print()
    for caution in CAUTIONS:
        _console.print(f"[bright_black]{caution}[/]")
