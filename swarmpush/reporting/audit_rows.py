"""An audit in rows of text, shared by the console, the page and notebooks."""

from __future__ import annotations

import math

from swarmpush.auditing.audit import Audit
from swarmpush.auditing.statistics import Estimate, mean_interval
from swarmpush.quantities import for_people
from swarmpush.reporting.audit_words import step_words
from swarmpush.reporting.run_words import cause_rows
from swarmpush.reporting.wording import CAUSES, arrived, interval, number, rung_row, share_of, signed, until
from swarmpush.vary import unit_at


def arrival_rows(audit: Audit) -> list[dict[str, str]]:
    """What the plan promises and what the runs gave: arrival, speed and time to the goal."""
    s, travel = audit.scenario, audit.plan.travel
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
    median, mean = audit.median_time_s, audit.mean_time_s
    by_half = number(median.mean, "s") if math.isfinite(median.mean) else "fewer than half arrive"
    rows += [
        ("time until half of the runs arrive", planned, by_half, until(median)),
        ("mean time, counted up to the limit", planned, number(mean.mean, "s"), interval(mean, "s")),
    ]
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


def ladder_rows(audit: Audit) -> list[dict[str, str]]:
    """The rungs as text, those below geometry with a signed cost."""
    return [
        rung_row(rung) | {"cost": "" if rung.cost_m_s is None else signed(rung.cost_m_s.mean, "m/s")}
        for rung in audit.ladder
    ]


def restored_rows(audit: Audit) -> list[dict[str, str]]:
    """The scenario as given but for one assumption, which holds again, the largest gain first."""
    ordered = sorted(audit.restored, key=lambda one: -one.gain_m_s.mean)
    return [compared_row(one.statement, one.block_speed_m_s, one.gain_m_s, one.arrival) for one in ordered]


def baseline_rows(audit: Audit) -> list[dict[str, str]]:
    """The same crew bouncing at random, and the lead of the scenario as given."""
    b = audit.baseline
    return [compared_row("the same crew bouncing at random", b.block_speed_m_s, b.lead_m_s, b.arrival)]


def crew_rows(audit: Audit) -> list[dict[str, str]]:
    """Crews of all sizes tried, smallest first."""
    return [
        compared_row(
            f"{size.count} pushers" + (" (as given)" if size.count == audit.scenario.pushers.count else ""),
            size.block_speed_m_s,
            size.gain_m_s,
            size.arrival,
        )
        | {
            "strikes": number(size.strikes_1_s, "1/s"),
            "too_weak": share_of(size.too_weak),
            "in_touch": share_of(size.in_touch),
        }
        for size in audit.crews
    ]


def influence_rows(audit: Audit) -> list[dict[str, str]]:
    """What each measured value does, the one that must be known best first."""
    s = audit.scenario
    return [
        {
            "name": one.key,
            "value": number(one.value, unit_at(s, one.key)),
            "reach": share_of(one.reach),
            "change": signed(0.1 * one.change_m_s.mean, "m/s"),
            "interval": interval(_times(one.change_m_s, 0.1), "m/s"),
            "precision": share_of(one.precision) if one.is_seen else "-",
            "at_worst": share_of(one.at_worst) if math.isfinite(one.at_worst) else "any",
        }
        for one in audit.influences
    ]


def compared_row(name: str, speed: Estimate, change: Estimate | None, arrival: Estimate) -> dict[str, str]:
    """A crew's block speed, its difference to another one where there is one, and arrivals."""
    return {
        "name": name,
        "speed": number(speed.mean, "m/s"),
        "cost": "" if change is None else signed(change.mean, "m/s"),
        "interval": "" if change is None else interval(change, "m/s"),
        "arrived": arrived(arrival),
    }


def demand_rows(audit: Audit) -> list[tuple[str, str]]:
    """What was demanded, and whether it is met."""
    return [(demand.demand, "met" if demand.is_met else f"not met: {demand.reason}") for demand in audit.demands]


def _times(estimate: Estimate, factor: float) -> Estimate:
    return Estimate(factor * estimate.mean, factor * estimate.low, factor * estimate.high, estimate.n)
