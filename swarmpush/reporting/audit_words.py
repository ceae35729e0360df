"""An audit in words and rows of text, shared by the page and notebooks."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from typing import Any

from swarmpush.auditing.audit import Audit
from swarmpush.auditing.statistics import Estimate, mean_interval
from swarmpush.demos import DEMOS, demo
from swarmpush.dynamics.run import Run
from swarmpush.output import plain
from swarmpush.quantities import for_people
from swarmpush.reporting.run_words import cause_rows, share_of
from swarmpush.reporting.wording import CAUSES, finding_row, interval, number, rung_row, signed
from swarmpush.scenario import Scenario

N_COSTS = 3  # told in words


def cost_sentences(audit: Audit) -> list[str]:
    """The largest costs in block speed, a sentence each, the largest first."""
    promise = audit.plan.travel.block_speed_m_s
    costs = [(rung.adds, rung.cost_m_s) for rung in audit.ladder if rung.cost_m_s and rung.cost_m_s.mean < 0.0]
    told = []
    for adds, cost in sorted(costs, key=lambda entry: entry[1].mean)[:N_COSTS]:
        span = interval(Estimate(-cost.mean, -cost.high, -cost.low, cost.n), "m/s")
        share = _of_promise(-cost.mean / promise) if 0.0 < promise < math.inf else ""
        chance = "; chance alone could explain it" if cost.high >= 0.0 else ""
        name = adds[:1].upper() + adds[1:]
        told.append(f"{name}: {number(-cost.mean, 'm/s')} slower ({span}){share}{chance}.")
    return told


def _of_promise(share: float) -> str:
    return f", {share:.0f} times the planned speed" if share >= 10.0 else f", {share_of(share)} of the planned speed"


def arrival_rows(audit: Audit) -> list[dict[str, str]]:
    """What the plan promises and what the runs gave: arrival, speed and time to the goal."""
    s, travel, runs = audit.scenario, audit.plan.travel, audit.as_given
    share, n = audit.arrival, audit.arrival.n
    n_arrived = round(share.mean * n)
    speed = audit.ladder[-1].block_speed_m_s
    rows = [
        (
            f"within {for_people(s.goal.time_limit, 's')}",
            "arrives" if travel.time_to_goal_s <= s.goal.time_limit else "does not arrive",
            f"{n_arrived} of {n} runs",
            interval(share, "share of runs"),
        ),
        (
            "block speed",
            number(travel.block_speed_m_s, "m/s"),
            number(speed.mean, "m/s"),
            interval(speed, "m/s"),
        ),
    ]
    planned = for_people(travel.time_to_goal_s, "s") if math.isfinite(travel.time_to_goal_s) else "never"
    if n_arrived == n:
        time = mean_interval(runs["duration_s"], audit.confidence)
        rows.append(("time to the goal", planned, number(time.mean, "s"), interval(time, "s")))
    else:  # a mean over those that arrived would leave out the slow ones
        rows.append(("time to the goal", planned, f"longer than its run in {n - n_arrived} of {n}", "-"))
    names = ("name", "planned", "measured", "interval")
    return [dict(zip(names, row, strict=True)) for row in rows]


def audited_cause_rows(audit: Audit) -> list[dict[str, str]]:
    """The causes of any run, with their mean share over all runs of the scenario as given, largest first."""
    runs = audit.as_given
    shown = {row["name"]: row for row in cause_rows(audit.sample)}
    blank = dict.fromkeys(("share", "first", "last", "longest"), "-") | {"spells": "0"}
    rows = []
    for key, name in CAUSES.items():
        column = f"cause_{key}"
        if column not in runs:
            continue
        estimate = mean_interval(runs[column], audit.confidence)
        if estimate.mean > 0.0:
            low = max(0.0, estimate.low)
            span = f"{share_of(low)} to {share_of(min(1.0, estimate.high))}" if math.isfinite(estimate.high) else "-"
            n_runs = int((runs[column] > 0.0).sum())
            row = {"mean": share_of(estimate.mean), "interval": span, "n_runs": f"{n_runs} of {len(runs)}"}
            rows.append((estimate.mean, {"name": name} | blank | shown.get(name, {}) | row))
    return [row for _, row in sorted(rows, key=lambda entry: -entry[0])]


def numeric_rows(audit: Audit) -> list[tuple[str, str]]:
    """What chance and what the time step leave uncertain in the block's speed, and how well the books balance."""
    speed, numerics = audit.ladder[-1].block_speed_m_s, audit.numerics
    change, percent = numerics.change_m_s, audit.percent
    rows = [
        ("block speed", f"{number(speed.mean, 'm/s')}, mean of {speed.n} runs"),
        ("chance", f"{interval(speed, 'm/s')} ({percent} interval)"),
        (
            "half the step changes it by",
            f"{signed(change.mean, 'm/s')} ({interval(change, 'm/s')}, {change.n} pairs; chance included)",
        ),
    ]
    step, chance = max(abs(change.low), abs(change.high)), (speed.high - speed.low) / 2.0
    if math.isfinite(step + chance):
        verb = "no more" if step <= chance else "more"
        rows.append(
            (
                "which counts more",
                f"the step changes the speed by {number(step, 'm/s')} at most, {verb} than the "
                f"{number(chance, 'm/s')} to which chance leaves it open",
            )
        )
    return [
        *rows,
        ("time step", step_words(audit.sample)),
        ("largest residual of all runs", f"{numerics.residual_rel:.1e} of all impulse on the blocks"),
        ("largest displacement without velocity", f"{numerics.phantom_share:.1e} of the block's way"),
    ]


def step_words(run: Run) -> str:
    """The solver's step and iterations."""
    steps = run.steps
    return f"{for_people(steps.dt_s, 's')}, set by {steps.because}; {steps.iterations} solver iterations"


def compared_words(audit: Audit) -> str:
    """With which rung each one is compared, in a sentence."""
    pairs = zip(audit.ladder[1:], audit.ladder, strict=False)
    others = [rung.adds for rung, above in pairs if getattr(rung, "against", "") not in ("", above.rung)]
    own = f"; for {' and '.join(others)} it is the one to geometry" if others else ""
    return (
        "Each rung makes one more thing real, with the same random numbers; its cost is the paired difference to the "
        f"rung above it{own}."
    )


def restored_rows(audit: Audit) -> list[dict[str, str]]:
    """The scenario as given but for one assumption, which holds again, the largest gain first; or nothing."""
    found = [(_change(one, "gain_m_s"), one) for one in _several(getattr(audit, "restored", None))]
    return [
        _compared(one, getattr(one, "statement", None) or f"without {one.adds}", gain)
        for gain, one in sorted(found, key=lambda entry: -entry[0].mean)
    ]


def baseline_rows(audit: Audit) -> list[dict[str, str]]:
    """What the crew is compared with, and the lead of the scenario as given; or nothing."""
    rows = []
    for one in _several(getattr(audit, "baseline", None)):
        lead = getattr(one, "lead_m_s", None)
        if lead is None:  # a difference to the scenario as given is a lead with the other sign
            cost = one.cost_m_s
            lead = Estimate(-cost.mean, -cost.high, -cost.low, cost.n)
        rows.append(_compared(one, getattr(one, "adds", "the same crew bouncing at random"), lead))
    return rows


def _change(one: Any, name: str) -> Estimate:
    change: Estimate = getattr(one, name, None) or one.cost_m_s
    return change


def _compared(one: Any, name: str, change: Estimate) -> dict[str, str]:
    arrival = one.arrival
    return {
        "name": name,
        "speed": number(one.block_speed_m_s.mean, "m/s"),
        "cost": signed(change.mean, "m/s"),
        "interval": interval(change, "m/s"),
        "arrived": f"{round(arrival.mean * arrival.n)} of {arrival.n}" if arrival else "",
    }


def demand_rows(audit: Audit) -> list[tuple[str, str]]:
    """What was demanded, a name and words each; nothing where the audit knows of no demands."""
    return [_told(demand) for demand in _several(getattr(audit, "demands", None))]


def _several(found: Any) -> tuple[Any, ...]:
    if found is None:
        return ()
    if isinstance(found, Mapping):
        return tuple(found.items())
    return tuple(found) if isinstance(found, tuple | list) else (found,)


def _told(demand: Any) -> tuple[str, str]:
    """A demand as name and words, whether it is a verdict, another record, a pair or a sentence."""
    if hasattr(demand, "verdict") and hasattr(demand, "statement") and hasattr(demand, "measured"):
        row = finding_row(demand)
        return row["name"], f"{row['statement']}: {row['verdict']} ({row['measured']}, {row['interval']})"
    if is_dataclass(demand) and not isinstance(demand, type):
        (name, first), *others = [(f.name, plain(getattr(demand, f.name))) for f in fields(demand)]
        words = "; ".join(f"{key.replace('_', ' ')}: {_flat(value)}" for key, value in others)
        return (str(first), words) if isinstance(first, str) else (name, f"{_flat(first)}; {words}")
    if isinstance(demand, tuple) and len(demand) == 2:
        return str(demand[0]), _flat(plain(demand[1]))
    return "demand", str(demand)


def _flat(value: Any) -> str:
    if isinstance(value, dict):
        return ", ".join(f"{key} {_flat(part)}" for key, part in value.items())
    if isinstance(value, list):
        return ", ".join(map(_flat, value))
    return "-" if value is None else f"{value:.3g}" if isinstance(value, float) else str(value)


def command_of(result: Audit | Run) -> str:
    """The command that makes the same numbers on any machine with the same versions."""
    if isinstance(result, Audit):
        s = result.scenario
        first, most = result.look.planned[0], result.look.planned[-1]
        budget = f" --budget {most}" if most > first else ""
        return f"swarmpush audit {scenario_word(s)} --replicates {first}{budget} --seed {s.trial.seed}"
    return f"swarmpush run {scenario_word(result.scenario)} --seed {result.seed}"


def scenario_word(s: Scenario) -> str:
    """The demo of which this is the scenario, apart from its seed; else a file's name to be put in."""
    from swarmpush.loading import load

    for name in DEMOS:
        path = demo(name)
        if s.about.name in path.read_text(encoding="utf-8"):
            shipped = load(path).replace(trial={"seed": s.trial.seed})
            if shipped.digest() == s.digest():
                return name
    return "SCENARIO.toml"


def ladder_rows(audit: Audit) -> list[dict[str, str]]:
    """The rungs as text, those below geometry with a signed cost."""
    return [
        rung_row(rung) | {"cost": "" if rung.cost_m_s is None else signed(rung.cost_m_s.mean, "m/s")}
        for rung in audit.ladder
    ]
