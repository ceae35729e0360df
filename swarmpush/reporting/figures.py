"""The figures of a report: each a picture with its name for those who cannot see it, and its data."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import pandas as pd
from markupsafe import Markup, escape
from matplotlib.figure import Figure

from swarmpush.auditing.audit import Audit
from swarmpush.dynamics.run import Run
from swarmpush.kinematics.planning import Plan
from swarmpush.quantities import for_people
from swarmpush.reporting import audit_drawing, figure_data, run_drawing
from swarmpush.reporting.drawing import as_svg
from swarmpush.reporting.run_words import energy_parts, state_rows
from swarmpush.reporting.wording import interval, number, signed


@dataclass(frozen=True)
class Exhibit:
    """A figure of the page.

    key: its name in the page. alt: what it shows, in words. svg: the picture, safe to stand in a page. data: its
    numbers, which are written to a file of that name beside the page.
    """

    key: str
    alt: str
    svg: Markup
    data: pd.DataFrame


def run_exhibits(run: Run, plan: Plan, ends: pd.DataFrame | None = None) -> dict[str, Exhibit]:
    """The figures of one run by key; `ends` is a table of other runs' duration_s and travel_m."""
    speed = plan.travel.block_speed_m_s
    impact = plan.travel.strike_impulse_Ns
    draw, data = run_drawing, figure_data
    found = (
        exhibit("lap", _lap_alt(plan, run), data.lap_data(plan, run), draw.lap_over_runs, plan, run),
        exhibit("end", _end_alt(run), data.end_data(run), draw.end_of_run, run, plan),
        exhibit("path", _path_alt(run, ends), data.path_data(run, speed, ends), draw.block_path, run, speed, ends),
        exhibit("impulses", _impulse_alt(run), data.impulse_data(run), draw.impulses, run, impact),
        exhibit("books", _account_alt("impulse on the block", draw.book_entries(run), "N s"), data.book_data(run),
                 draw.books, run),
        exhibit("energy", _account_alt("energy", energy_parts(run), "J"), data.energy_data(run), draw.energy, run),
        exhibit("leaning", _leaning_alt(run), data.leaning_data(run), draw.leaning, run),
        exhibit("states", _state_alt(run), data.state_data(run), draw.states, run),
    )  # fmt: skip
    return {exhibit.key: exhibit for exhibit in found}


def audit_exhibits(audit: Audit) -> dict[str, Exhibit]:
    """The figures of an audit by key: ladder, arrivals, crews of other sizes if tried, and those of the run shown."""
    draw, data = audit_drawing, figure_data
    found = [
        exhibit("ladder", _ladder_alt(audit), data.ladder_data(audit), draw.ladder, audit),
        exhibit("arrivals", _arrivals_alt(audit), data.arrival_data(audit), draw.arrivals, audit),
    ]
    if audit.crews:
        found.append(exhibit("crews", _crews_alt(audit), data.crew_data(audit), draw.crews, audit))
    return {exhibit.key: exhibit for exhibit in found} | run_exhibits(audit.sample, audit.plan, audit.as_given)


def exhibit(key: str, alt: str, data: pd.DataFrame, draw: Callable[..., Figure], *records: Any) -> Exhibit:
    """A figure drawn from records, with its name in words and its data."""
    return Exhibit(key, alt, named_svg(as_svg(draw, *records), key, alt), data)


def named_svg(svg: str, key: str, alt: str) -> Markup:
    """An SVG picture that a screen reader calls by its name, with identifiers that no other picture of the page has.

    >>> print(named_svg('<svg width="1"><g id="a"/><use href="#a"/></svg>', "lap", "a <lap>"))
    <svg role="img" aria-label="a &lt;lap&gt;" width="1"><g id="lap-a"/><use href="#lap-a"/></svg>
    """
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r'(\sid="|href="#|url\(#)', rf"\g<1>{key}-", svg)
    return Markup(svg.replace("<svg", f'<svg role="img" aria-label="{escape(alt)}"', 1))


def _ladder_alt(audit: Audit) -> str:
    first, *rungs = audit.ladder
    steps = [
        f"{rung.adds} {signed(rung.cost_m_s.mean, 'm/s')} ({interval(rung.cost_m_s, 'm/s')})"
        for rung in rungs
        if rung.cost_m_s is not None
    ]
    return (
        f"Waterfall of the block's speed: geometry alone {number(first.block_speed_m_s.mean, 'm/s')}; "
        f"{'; '.join(steps)}; the scenario as given {number(audit.ladder[-1].block_speed_m_s.mean, 'm/s')}."
    )


def _arrivals_alt(audit: Audit) -> str:
    given, random = audit.arrival, audit.baseline.arrival
    return (
        f"Share of runs that have arrived over time: in the end {number(given.mean, 'share')} as given, "
        f"{number(random.mean, 'share')} when the same crew bounces at random."
    )


def _crews_alt(audit: Audit) -> str:
    sizes = [
        f"{size.count} pushers {number(size.block_speed_m_s.mean, 'm/s')}, {number(size.arrival.mean, 'share')} arrive"
        for size in audit.crews
    ]
    return f"Block speed and arrivals over the size of the crew: {'; '.join(sizes)}."


def _lap_alt(plan: Plan, run: Run) -> str:
    lap = plan.main_lap
    planned = f"The planned lap {' - '.join(lap.surfaces)}" if lap else "No planned lap"
    return f"{planned} in the channel, over {len(run.laps)} completed laps and other ways from bump to bump of one run."


def _end_alt(run: Run) -> str:
    return (
        f"The channel seen from above after {for_people(run.duration_s, 's')}: the block has moved "
        f"{for_people(run.travel_m, 'm')}; {run.scenario.pushers.count} pushers with their headings."
    )


def _path_alt(run: Run, ends: pd.DataFrame | None) -> str:
    others = "" if ends is None else f"; ends of {len(ends)} runs"
    return (
        f"Travel of the block over time: {for_people(run.travel_m, 'm')} after {for_people(run.duration_s, 's')} in "
        f"the run shown, against the goal of {for_people(run.scenario.goal.travel, 'm')} and the plan{others}."
    )


def _impulse_alt(run: Run) -> str:
    strikes = run.strikes
    if not len(strikes):
        return "Histograms of the strikes' impulses: there were no strikes."
    return (
        f"Histograms of the impulses of {len(strikes)} strikes: {number(strikes['impact_Ns'].mean(), 'N s')} by impact "
        f"and {number(strikes['lean_Ns'].mean(), 'N s')} by leaning on average."
    )


def _leaning_alt(run: Run) -> str:
    block = run.block
    return (
        f"Pushers leaning on the rear face at once over time: {block['n_leaning'].mean():.2g} on average, "
        f"{block['n_leaning_most'].max():.0f} at most."
    )


def _state_alt(run: Run) -> str:
    return "Shares of the crew over time: " + "; ".join(f"{share} {name}" for name, share in state_rows(run)) + "."


def _account_alt(what: str, entries: list[tuple[str, float]], unit: str) -> str:
    most = max((abs(value) for _, value in entries if math.isfinite(value)), default=0.0)
    parts = [f"{name} {signed(value, unit)}" for name, value in entries]
    return f"Bars of {what}: {'; '.join(parts)}." if most > 0.0 else f"Bars of {what}: all are nought."
