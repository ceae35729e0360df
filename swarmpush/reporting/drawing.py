"""The pictures of runs and audits, each function one figure from records, and the style that all pictures share."""

from __future__ import annotations

import io
from collections.abc import Callable
from itertools import pairwise
from typing import Any

import matplotlib

matplotlib.use("Agg")

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patches import Circle, Polygon

from swarmpush.auditing.audit import Audit
from swarmpush.dynamics.run import Run
from swarmpush.geometry import block_corners, channel_corners, post_corners
from swarmpush.kinematics.planning import Plan
from swarmpush.quantities import prefix_for

PLANNED, MEASURED, QUIET, GOOD, BAD = "#b3261e", "#1f4e79", "#9aa5b1", "#2e7d32", "#b3261e"
INK, AXIS, PALE = "#22303c", "#5f6b76", "#e3e7eb"
STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": AXIS,
    "axes.labelcolor": INK,
    "xtick.color": AXIS,
    "ytick.color": AXIS,
    "svg.fonttype": "none",
    "svg.hashsalt": "swarmpush",  # the same figure gives the same file
}
MAX_LEGS = 150  # runs from bump to bump drawn behind the lap


def as_svg(draw: Callable[..., Figure], *records: Any) -> str:
    """A figure as SVG text that can stand in a page."""
    text = io.StringIO()
    with plt.rc_context(STYLE):
        figure = draw(*records)
        figure.savefig(text, format="svg", bbox_inches="tight", metadata={"Date": None})
        plt.close(figure)
    svg = text.getvalue()
    return svg[svg.index("<svg") :]


def as_png(draw: Callable[..., Figure], *records: Any, dpi: int = 150) -> bytes:
    """A figure as PNG bytes."""
    data = io.BytesIO()
    with plt.rc_context(STYLE):
        figure = draw(*records)
        figure.savefig(data, format="png", dpi=dpi, bbox_inches="tight", facecolor="white")
        plt.close(figure)
    return data.getvalue()


def lap_over_runs(plan: Plan, run: Run) -> Figure:
    """The planned lap drawn over what a run's pushers did, seen from the block."""
    s = plan.scenario
    scale, prefix = prefix_for(s.channel.width)
    figure, axes = plt.subplots(figsize=(8.4, 3.4))
    reach = draw_rig(axes, plan, scale, has_ends=False)
    _draw_legs(axes, run, scale)
    if (lap := plan.main_lap) is not None:
        corners = np.vstack([lap.hits[:, :2], lap.hits[:1, :2]]) / scale
        axes.plot(*corners.T, color=PLANNED, lw=2.2, zorder=5, label="planned lap")
        for start, end in pairwise(corners):
            middle = 0.5 * (start + end)
            axes.annotate(
                "",
                middle + 0.02 * (end - start),
                middle,
                arrowprops={"arrowstyle": "-|>", "color": PLANNED, "lw": 2.2},
                zorder=6,
            )
    axes.set_xlim(*reach)
    axes.set_aspect("equal")
    axes.set_xlabel(f"along the channel, seen from the block, {prefix}m")
    axes.set_ylabel(f"across, {prefix}m")
    axes.legend(loc="lower center", bbox_to_anchor=(0.5, 1.0), ncols=3, frameon=False)
    return figure


def draw_rig(axes: Axes, plan: Plan, scale: float, *, has_ends: bool) -> tuple[float, float]:
    """Walls, posts, block and one pusher, to scale; returns the stretch of the channel worth showing.

    Without ends a straight corridor goes on for ever, as it looks from a block that moves; any other channel moves past
    such a block, so that its outline at the start is only hinted at.
    """
    s = plan.scenario
    width, rear, front = s.channel.width / scale, s.block.rear_at / scale, s.block_front_at / scale
    length = s.channel.length / scale
    walls, posts, block = (
        [np.array(corners) / scale for corners in outlines]
        for outlines in ((channel_corners(s),), post_corners(s), (block_corners(s),))
    )
    if has_ends or s.channel.outline or posts:
        outline = Polygon(walls[0], fill=False, edgecolor=INK, lw=2.5)
        if not has_ends:
            outline.set(ls="--", lw=1.0, label="channel at the start")
        axes.add_patch(outline)
    else:
        for y in (0.0, width):
            axes.axhline(y, color=INK, lw=2.5)
    for post in posts:
        axes.add_patch(Polygon(post, facecolor=QUIET, edgecolor=INK, lw=1.2, ls="-" if has_ends else "--", zorder=2))
    axes.add_patch(Polygon(block[0], facecolor=PALE, edgecolor=INK, lw=1.2, zorder=2))
    x, y = (0.5 * (block[0].min(axis=0) + block[0].max(axis=0))).tolist()
    axes.text(x, y, "block", ha="center", va="center", color=INK, zorder=3)
    lap = plan.main_lap
    back = float(lap.hits[:, 0].min()) / scale if lap is not None else rear - 3 * width
    radius = s.pushers.radius / scale
    middle = block[0][:2].mean(axis=0)  # of the rear face
    x, y = (lap.hits[0, :2] / scale).tolist() if lap is not None else (middle[0] - radius, middle[1])
    axes.add_patch(Circle((x, y), radius, facecolor="white", edgecolor=MEASURED, lw=1.2, zorder=4))
    axes.set_ylim(-0.06 * width, 1.06 * width)
    reach = max(min(back - 2 * radius, rear - 2 * width), rear - 6 * width, -0.1 * width if has_ends else -0.5 * width)
    return reach, min(front + 0.5 * width, length + 0.1 * width)


def _draw_legs(axes: Axes, run: Run, scale: float) -> None:
    """Straight lines from bump to bump, shifted by how far the block has come: completed laps and all else."""
    bumps = run.bumps
    shift = np.interp(bumps["t_on_s"], run.block["t_s"], run.block["x_m"] - run.block["x_m"].iloc[0])
    x, y = (bumps["x_m"].to_numpy() - shift) / scale, bumps["y_m"].to_numpy() / scale
    t, pusher = bumps["t_on_s"].to_numpy(), bumps["pusher"].to_numpy()
    same = np.flatnonzero((pusher[1:] == pusher[:-1]) & np.isfinite(x[1:]) & np.isfinite(x[:-1]))
    in_lap = np.zeros(len(same), dtype=bool)
    for lap in run.laps.itertuples():
        in_lap |= (pusher[same] == lap.pusher) & (t[same] >= lap.t_start_s) & (t[same + 1] <= lap.t_end_s)
    for chosen, colour, width, label in (
        (same[~in_lap][-MAX_LEGS:], QUIET, 0.5, "other runs from bump to bump"),
        (same[in_lap][-MAX_LEGS:], MEASURED, 0.7, "completed laps"),
    ):
        if len(chosen):
            gap = np.full(len(chosen), np.nan)
            xs = np.column_stack([x[chosen], x[chosen + 1], gap]).ravel()
            ys = np.column_stack([y[chosen], y[chosen + 1], gap]).ravel()
            axes.plot(xs, ys, color=colour, lw=width, alpha=0.8, zorder=1 + (label == "completed laps"), label=label)


def ladder(audit: Audit) -> Figure:
    """Block speed on each rung, with intervals, against the speed that the goal demands."""
    rungs = audit.ladder
    needed = audit.scenario.goal.travel / audit.scenario.goal.time_limit
    scale, prefix = prefix_for(max(needed, *(r.block_speed_m_s.mean for r in rungs)))
    figure, axes = plt.subplots(figsize=(8.4, 0.55 + 0.42 * len(rungs)))
    for k, rung in enumerate(rungs):
        speed = rung.block_speed_m_s
        colour = PLANNED if k == 0 else MEASURED
        axes.barh(k, speed.mean / scale, height=0.55, color=colour, alpha=0.85)
        if k:
            reach = [[(speed.mean - speed.low) / scale], [(speed.high - speed.mean) / scale]]
            axes.errorbar(speed.mean / scale, k, xerr=reach, color=INK, capsize=3, lw=1.2)
    axes.axvline(needed / scale, color=INK, ls="--", lw=1)
    axes.text(needed / scale, -0.62, "needed", ha="center", va="bottom", color=INK, fontsize=8)
    names = ["geometry alone", *(f"+ {rung.adds}" for rung in rungs[1:])]
    axes.set_yticks(range(len(rungs)), names)
    axes.invert_yaxis()
    axes.set_xlabel(f"block speed, {prefix}m/s")
    return figure


def impulses(run: Run, planned_Ns: float | None = None) -> Figure:
    """How much momentum strikes passed on, by impact and by leaning, and the planned impact."""
    strikes = run.strikes
    figure, panels = plt.subplots(1, 2, figsize=(8.4, 2.4), sharey=True)
    for axes, column, title in zip(panels, ("impact_Ns", "lean_Ns"), ("impact", "lean"), strict=True):
        values = strikes[column].to_numpy()
        top = max(float(values.max()) if len(values) else 0.0, planned_Ns or 0.0 if title == "impact" else 0.0)
        scale, prefix = prefix_for(top)
        axes.hist(values / scale, bins=24, range=(0.0, top / scale * 1.02 or 1.0), color=MEASURED, alpha=0.85)
        if title == "impact" and planned_Ns:
            axes.axvline(planned_Ns / scale, color=PLANNED, lw=1.8, label="planned mean")
            axes.legend(frameon=False, fontsize=8)
        axes.set_xlabel(f"{title} impulse of a strike, {prefix}N s")
    panels[0].set_ylabel("strikes")
    panels[0].yaxis.get_major_locator().set_params(integer=True)
    return figure


def block_path(run: Run, planned_speed_m_s: float | None = None, ends: Any = None) -> Figure:
    """Travel of the block over time; `ends` is a table of other runs' duration_s and travel_m."""
    s = run.scenario
    scale, prefix = prefix_for(s.goal.travel)
    figure, axes = plt.subplots(figsize=(8.4, 2.6))
    travel = (run.block["x_m"] - run.block["x_m"].iloc[0]) / scale
    axes.axhline(s.goal.travel / scale, color=INK, lw=1, ls="--")
    axes.text(0.0, s.goal.travel / scale, " goal", va="bottom", color=INK, fontsize=8)
    if planned_speed_m_s:
        last = min(s.goal.time_limit, s.goal.travel / planned_speed_m_s)
        axes.plot([0.0, last], [0.0, planned_speed_m_s * last / scale], color=PLANNED, lw=1.8, label="planned")
    axes.plot(run.block["t_s"], travel, color=MEASURED, lw=1.4, label=f"run with seed {run.seed}")
    if ends is not None:
        axes.plot(
            ends["duration_s"],
            ends["travel_m"] / scale,
            "o",
            ms=3.5,
            color=MEASURED,
            mfc="white",
            label="end of each run",
        )
    axes.set_xlim(0.0, s.goal.time_limit * 1.02)
    axes.set_xlabel("time, s")
    axes.set_ylabel(f"block travel, {prefix}m")
    axes.legend(frameon=False, fontsize=8, loc="best")
    return figure


def books(run: Run) -> Figure:
    """Impulse on the block along the channel, by giver."""
    account = run.books
    entries = [
        ("pushers", account.pushers[0]),
        ("channel walls", account.walls[0]),
        ("floor", account.floor[0]),
        ("fluid drag", account.drag[0]),
        ("change of momentum", account.change[0]),
    ]
    scale, prefix = prefix_for(max(abs(value) for _, value in entries))
    figure, axes = plt.subplots(figsize=(8.4, 1.9))
    for k, (_, value) in enumerate(entries):
        axes.barh(k, value / scale, height=0.55, color=GOOD if value >= 0 else BAD, alpha=0.8)
    axes.axvline(0.0, color=INK, lw=0.8)
    axes.set_yticks(range(len(entries)), [name for name, _ in entries])
    axes.invert_yaxis()
    axes.set_xlabel(f"impulse on the block along the channel, {prefix}N s")
    return figure
