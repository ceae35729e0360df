"""The pictures of an audit, each function one figure from its records."""

from __future__ import annotations

import math

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from swarmpush.auditing.audit import MOSTLY, Audit
from swarmpush.auditing.statistics import Estimate
from swarmpush.auditing.survival import SurvivalCurve
from swarmpush.quantities import prefix_for
from swarmpush.reporting.palette import AXIS, BAD, GOOD, INK, MEASURED, PLANNED, QUIET
from swarmpush.reporting.wording import interval, number, signed

MOST_BEYOND = 2.0  # lengths of the bars by which the ladder's picture is made longer to show the speed needed


def ladder(audit: Audit) -> Figure:
    """A waterfall of block speed from geometry down to the scenario as given.

    Every bar begins at the speed of the rung that it is compared with, mostly the one above it. Whiskers are the paired
    cost's interval; on the last bar, that of the speed itself. They run out of the picture where they are much longer
    than the bars; the numbers stand above the bars anyway. So do names, so that the picture is narrow enough for a
    telephone.
    """
    first, *rungs = audit.ladder
    last = audit.ladder[-1]
    needed = audit.scenario.goal.travel / audit.scenario.goal.time_limit
    speeds = [rung.block_speed_m_s.mean for rung in audit.ladder]
    scale, prefix = prefix_for(max(abs(speed) for speed in (needed, *speeds) if math.isfinite(speed)))
    figure, axes = plt.subplots(figsize=(5.8, 0.5 + 0.37 * (len(rungs) + 2)))
    promise = first.block_speed_m_s.mean
    rows: list[tuple[str, float, float, str, Estimate | None]]
    rows = [(f"geometry alone: {number(promise, 'm/s')}", 0.0, promise, PLANNED, None)]
    places = {rung.rung: k for k, rung in enumerate(audit.ladder)}
    bases = [0]
    for k, rung in enumerate(rungs):
        cost = rung.cost_m_s
        assert cost is not None
        bases.append(places.get(rung.against, k))
        before = speeds[bases[-1]]
        is_loss = cost.mean < 0.0
        label = f"+ {rung.adds}: {signed(cost.mean, 'm/s')} ({interval(cost, 'm/s')})"
        rows.append((label, before, cost.mean, BAD if is_loss else GOOD, cost))
    label = f"the scenario as given: {number(last.block_speed_m_s.mean, 'm/s')}"
    rows.append((label, 0.0, last.block_speed_m_s.mean, MEASURED, last.block_speed_m_s))
    for k, (label, start, change, colour, spread) in enumerate(rows):
        axes.annotate(
            label,
            (0.0, k - 0.22),
            (2, 0),
            xycoords=axes.get_yaxis_transform(),
            textcoords="offset points",
            va="bottom",
            color=INK,
            fontsize=8.5,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.5},
        )
        if not math.isfinite(start + change):
            continue
        hatch = "////" if colour is GOOD and spread is not None else None  # a gain differs from a loss without colour
        axes.barh(
            k, change / scale, left=start / scale, height=0.36, color=colour, hatch=hatch, edgecolor="white", lw=0
        )
        if spread is not None and math.isfinite(spread.high - spread.low):
            reach = [[(spread.mean - spread.low) / scale], [(spread.high - spread.mean) / scale]]
            axes.errorbar((start + change) / scale, k, xerr=reach, color=INK, capsize=3, lw=1.2)
        if 0 < k < len(rows) - 1:
            axes.plot([start / scale] * 2, [bases[k] + 0.18, k - 0.18], color=AXIS, lw=0.8, ls=":", zorder=0.5)
    axes.axvline(0.0, color=AXIS, lw=0.8)
    low, high = _shown_speeds(rows, needed)
    axes.set_xlim(low / scale, high / scale)
    if needed <= high:
        axes.axvline(needed / scale, color=INK, ls="--", lw=1)
        axes.text(needed / scale, -0.62, "needed", ha="center", va="bottom", color=INK, fontsize=8)
    else:
        words = f"needed: {number(needed, 'm/s')}, beyond this edge \N{RIGHTWARDS ARROW}"
        axes.text(high / scale, -0.62, words, ha="right", va="bottom", color=INK, fontsize=8)
    axes.set_ylim(len(rows) - 0.6, -0.62)
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    axes.set_xlabel(f"block speed, {prefix}m/s")
    return figure


def _shown_speeds(rows: list[tuple[str, float, float, str, Estimate | None]], needed: float) -> tuple[float, float]:
    """The stretch of speeds worth showing: all bars; whiskers and the speed needed as far as bars remain legible."""
    ends = [end for _, start, change, *_ in rows for end in (start, start + change) if math.isfinite(end)]
    tips = [start + tip for _, start, _, _, spread in rows if spread for tip in (spread.low, spread.high)]
    tips = [tip for tip in tips if math.isfinite(tip)]
    low, high = min(0.0, *ends), max(0.0, *ends)
    length = high - low or needed
    wanted = [needed] if needed <= high + MOST_BEYOND * length else []
    left = max(min([low, *tips]), low - length)
    right = max([min(max([high, *tips]), high + length), *wanted])
    margin = 0.03 * (right - left)
    return left - margin if left < 0.0 else 0.0, right + margin


def arrivals(audit: Audit) -> Figure:
    """Share of runs that have arrived over time, as given and at random, with the planned time.

    Small upright strokes are runs that timed out or broke off.
    """
    figure, axes = plt.subplots(figsize=(8.4, 2.8))
    planned, limit = audit.plan.travel.time_to_goal_s, audit.scenario.goal.time_limit
    curve = audit.under_way(audit.as_given)
    end = max(limit, float(curve.times_s[-1]))
    low, high = (100 * (1.0 - np.append(column, column[-1])) for column in (curve.high, curve.low))
    t = np.append(curve.times_s, end)
    axes.fill_between(t, low, high, step="post", color=MEASURED, alpha=0.15, lw=0)
    _draw_arrivals(axes, curve, end, MEASURED, "-", "as given")
    _draw_arrivals(axes, audit.under_way(audit.at_random), end, AXIS, "--", "bouncing at random")
    if planned <= end:
        axes.axvline(planned, color=PLANNED, lw=1.8, label="planned")
    axes.axhline(100 * MOSTLY, color=QUIET, lw=0.8, ls=":")
    axes.set_xlim(0.0, 1.02 * end)
    axes.set_ylim(-3.0, 103.0)
    axes.set_xlabel("time, s")
    axes.set_ylabel("runs arrived, %")
    axes.legend(frameon=False, fontsize=8, loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=3)
    return figure


def _draw_arrivals(axes: Axes, curve: SurvivalCurve, end: float, colour: str, dashes: str, label: str) -> None:
    arrived = 100 * (1.0 - curve.share)
    axes.step(
        [0.0, *curve.times_s, end],
        [0.0, *arrived, arrived[-1]],
        where="post",
        color=colour,
        ls=dashes,
        lw=1.5,
        label=label,
    )
    left = curve.at_risk - curve.events - np.append(curve.at_risk[1:], 0.0)
    is_censored = left > 0.0
    axes.plot(curve.times_s[is_censored], arrived[is_censored], ls="", marker="|", ms=7, color=colour)


def crews(audit: Audit) -> Figure:
    """Block speed and arrivals over the size of the crew, with the one given and what the goal needs."""
    s = audit.scenario
    counts = [size.count for size in audit.crews]
    figure, panels = plt.subplots(2, 1, figsize=(8.4, 4.4), sharex=True, height_ratios=(3, 2))
    needed = s.goal.travel / s.goal.time_limit
    scale, prefix = prefix_for(max(needed, *(abs(size.block_speed_m_s.mean) for size in audit.crews)))
    for axes, estimates, factor in (
        (panels[0], [size.block_speed_m_s for size in audit.crews], 1.0 / scale),
        (panels[1], [size.arrival for size in audit.crews], 100.0),
    ):
        mean = np.array([estimate.mean for estimate in estimates]) * factor
        spread = np.array([[e.mean - e.low, e.high - e.mean] for e in estimates]).T * factor
        axes.errorbar(counts, mean, yerr=np.abs(spread), color=MEASURED, marker="o", ms=4, capsize=3, lw=1.2)
        axes.axvline(s.pushers.count, color=QUIET, lw=1.0, ls=":")
    panels[0].axhline(needed / scale, color=INK, lw=1.0, ls="--")
    panels[0].text(counts[-1], needed / scale, "needed", ha="right", va="bottom", color=INK, fontsize=8)
    panels[0].set_ylabel(f"block speed, {prefix}m/s")
    panels[1].axhline(100 * MOSTLY, color=INK, lw=1.0, ls="--")
    panels[1].set_ylim(-5.0, 105.0)
    panels[1].set_ylabel("runs arrived, %")
    panels[1].set_xscale("log", base=2)
    panels[1].set_xticks(counts, [str(count) for count in counts])
    panels[1].set_xlabel(f"pushers (dotted: the {s.pushers.count} of the scenario)")
    return figure
