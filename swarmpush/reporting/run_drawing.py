"""The pictures of a run, each function one figure from its records."""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from swarmpush.dynamics.run import Run
from swarmpush.geometry import channel_corners
from swarmpush.kinematics.forecast import push_force
from swarmpush.kinematics.planning import Plan
from swarmpush.quantities import prefix_for
from swarmpush.reporting.drawing import draw_rig
from swarmpush.reporting.palette import BAD, GOOD, INK, MEASURED, PLANNED, QUIET, STATE_COLOURS
from swarmpush.reporting.run_words import energy_parts, state_shares
from swarmpush.reporting.wording import STATE_WORDS
from swarmpush.viewing.film import film_of_path
from swarmpush.viewing.still import figure_of

BINS = 80  # of a run's time in which shares of states are averaged for the picture
END_SIZE, END_HEIGHT = (840, 130), 260  # px: of the picture of a run's end without its channel, and of that at most
END_EDGE, END_LOWER, END_TYPE = 20, 14, 14.0  # px: beside the channel, lower than the middle, size of type
MAX_LEGS = 150  # runs from bump to bump drawn behind the lap


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


def bump_legs(run: Run) -> list[tuple[str, np.ndarray]]:
    """Straight lines from bump to bump, shifted by how far the block has come: other runs, and completed laps.

    Returns:
        name and an (n, 2, 2) array of first and last points, m, for each of the two.
    """
    bumps = run.bumps
    shift = np.interp(bumps["t_on_s"], run.block["t_s"], run.block["x_m"] - run.block["x_m"].iloc[0])
    places = np.column_stack([bumps["x_m"].to_numpy() - shift, bumps["y_m"].to_numpy()])
    t, pusher = bumps["t_on_s"].to_numpy(), bumps["pusher"].to_numpy()
    x = places[:, 0]
    same = np.flatnonzero((pusher[1:] == pusher[:-1]) & np.isfinite(x[1:]) & np.isfinite(x[:-1]))
    in_lap = np.zeros(len(same), dtype=bool)
    for lap in run.laps.itertuples():
        in_lap |= (pusher[same] == lap.pusher) & (t[same] >= lap.t_start_s) & (t[same + 1] <= lap.t_end_s)
    return [
        (name, np.stack([places[chosen], places[chosen + 1]], axis=1))
        for name, chosen in (
            ("other runs from bump to bump", same[~in_lap][-MAX_LEGS:]),
            ("completed laps", same[in_lap][-MAX_LEGS:]),
        )
    ]


def _draw_legs(axes: Axes, run: Run, scale: float) -> None:
    for k, (name, legs) in enumerate(bump_legs(run)):
        if len(legs):
            gaps = np.full((len(legs), 1, 2), np.nan)
            points = np.concatenate([legs / scale, gaps], axis=1).reshape(-1, 2)
            axes.plot(*points.T, color=(QUIET, MEASURED)[k], lw=(0.5, 0.7)[k], alpha=0.8, zorder=1 + k, label=name)


def end_of_run(run: Run, plan: Plan) -> Figure:
    """Where blocks and pushers were when the run ended, and what they were about, drawn as in the window.

    Of a long channel only the stretch from the hindmost body to the foremost is shown, and some way beyond.
    """
    film, channel = film_of_path(run, plan), np.array(channel_corners(run.scenario))
    end = film.frame(film.duration_s)
    places = np.vstack([end.blocks, end.pushers])[:, 0]
    around = run.scenario.channel.width + max(block.length for block in run.scenario.blocks)
    (low, bottom), (high, top) = channel.min(axis=0), channel.max(axis=0)
    low, high = max(low, places.min() - around), min(high, places.max() + around)
    width = END_SIZE[0] - 2 * END_EDGE
    scale = min(width / (high - low), END_HEIGHT / (top - bottom))
    size = (END_SIZE[0], round(END_SIZE[1] + scale * (top - bottom)))
    # the key below the rig is higher than the strip above it
    middle = 0.5 * (bottom + top) - END_LOWER / scale
    look = {"centre": (0.5 * (low + high), middle), "px_per_m": scale, "has_lap": False, "type_px": END_TYPE}
    return figure_of(film, film.duration_s, size, has_charts=False, **look)


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
    shown = run.duration_s if ends is None else max(run.duration_s, float(ends["duration_s"].max()))
    if planned_speed_m_s:
        last = min(s.goal.time_limit, s.goal.travel / planned_speed_m_s) if planned_speed_m_s > 0.0 else shown
        shown = max(shown, last)
        axes.plot([0.0, last], [0.0, planned_speed_m_s * last / scale], color=PLANNED, lw=1.8, label="planned")
    axes.plot(run.block["t_s"], travel, color=MEASURED, lw=1.4, label=f"run with seed {run.seed}")
    for k in range(2, len(s.blocks) + 1):
        x = run.block[f"x_{k}_m"]
        axes.plot(run.block["t_s"], (x - x.iloc[0]) / scale, color=QUIET, lw=1.0, ls="--", label=f"block {k}")
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
    shown = max(shown * 1.05, 1e-12)
    axes.text(shown, s.goal.travel / scale, "goal ", ha="right", va="bottom", color=INK, fontsize=8)
    axes.set_xlim(0.0, shown)
    axes.set_xlabel("time, s")
    axes.set_ylabel(f"block travel, {prefix}m")
    axes.legend(frameon=False, fontsize=8, loc="best")
    return figure


def book_entries(run: Run) -> list[tuple[str, float]]:
    """Impulse on the block along the channel by giver, N s, and the change of its momentum."""
    account = run.books
    entries = [
        ("pushers", account.pushers[0]),
        ("further blocks", account.blocks[0]),
        ("channel walls", account.walls[0]),
        ("floor", account.floor[0]),
        ("fluid drag", account.drag[0]),
        ("slope", account.slope[0]),
        ("change of momentum", account.change[0]),
    ]
    # what the scenario does not have gets no line
    return [(name, value) for name, value in entries if value != 0.0 or name in ("pushers", "change of momentum")]


def books(run: Run) -> Figure:
    """Impulse on the block along the channel, by giver."""
    return _account(book_entries(run), "impulse on the block along the channel", "N s")


def energy(run: Run) -> Figure:
    """Where the work of a run came from and where it went."""
    return _account(energy_parts(run), "energy put in (right) and taken out (left)", "J")


def _account(entries: list[tuple[str, float]], what: str, unit: str) -> Figure:
    """Bars to either side of zero, one below the other."""
    scale, prefix = prefix_for(max(abs(value) for _, value in entries))
    figure, axes = plt.subplots(figsize=(8.4, 0.6 + 0.27 * len(entries)))
    for k, (_, value) in enumerate(entries):
        axes.barh(k, value / scale, height=0.55, color=GOOD if value >= 0 else BAD, alpha=0.8)
    axes.axvline(0.0, color=INK, lw=0.8)
    axes.set_yticks(range(len(entries)), [name for name, _ in entries])
    axes.invert_yaxis()
    axes.set_xlabel(f"{what}, {prefix}{unit}")
    return figure


def pushers_needed(run: Run, t_s: np.ndarray) -> np.ndarray:
    """How many at full thrust the blocks at rest need before they move, at each time; more as the thrust fades."""
    s, force = run.scenario, push_force(run.scenario)
    holds = force.pushers_to_move * (force.stall_N - force.climb_N) if force.stall_N > force.climb_N else math.inf
    thrust = (
        force.stall_N * np.exp(-t_s / s.errors.fade_time) if s.errors.fade_time else np.full(len(t_s), force.stall_N)
    )
    left = np.maximum(thrust - force.climb_N, 0.0)
    with np.errstate(divide="ignore"):
        return np.asarray(np.where(left > 0.0, holds / left, math.inf))


def is_floor_shown(run: Run) -> bool:
    """Whether the picture of leaning has a line for what the floor needs."""
    needed = push_force(run.scenario).pushers_to_move
    return 0.0 < needed <= 2.0 * run.scenario.pushers.count


def leaning(run: Run) -> Figure:
    """How many pushers lean on the rear face at once: mean and most between rows of the path, and how many it takes."""
    block = run.block
    t = block["t_s"].to_numpy()
    figure, axes = plt.subplots(figsize=(8.4, 2.2))
    most = block["n_leaning_most"].to_numpy()
    axes.fill_between(t, most, step="pre", color=MEASURED, alpha=0.2, lw=0, label="most at once")
    axes.plot(t, rolling(block["n_leaning"].to_numpy()), color=MEASURED, lw=1.2, label="mean")
    top = max(1.0, float(most.max()))
    if is_floor_shown(run):
        needed = pushers_needed(run, t)
        top = max(top, min(float(needed[np.isfinite(needed)].max(initial=0.0)), 1.5 * top, run.scenario.pushers.count))
        top = max(top, float(needed[0]))
        axes.plot(
            t, needed, color=PLANNED, lw=1.4, ls="--", label="needed to move the block" + "s" * bool(run.scenario.train)
        )
    axes.set_ylim(0.0, 1.1 * top)
    axes.set_xlim(0.0, max(float(t[-1]), 1e-12))
    axes.yaxis.set_major_locator(MaxNLocator(integer=True))
    axes.set_xlabel("time, s")
    axes.set_ylabel("pushers leaning")
    axes.legend(frameon=False, fontsize=8, loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=3)
    return figure


def rolling(values: np.ndarray) -> np.ndarray:
    """Mean over an eightieth of the run about each row."""
    width = max(1, len(values) // BINS)
    weights = np.ones(width)
    return np.asarray(
        np.convolve(values, weights, mode="same") / np.convolve(np.ones(len(values)), weights, mode="same")
    )


def states(run: Run) -> Figure:
    """What the crew is about over time, as stacked shares."""
    shares = state_shares(run)
    order = ("locked", "lost", "held at a wall", "ahead", "idle")  # what serves the purpose lies at the bottom
    found = [name for name in order if (shares[name] > 0.0).any()]
    figure, axes = plt.subplots(figsize=(8.4, 2.4))
    axes.stackplot(
        shares.index,
        *(100.0 * rolling(shares[name].to_numpy()) for name in found),
        colors=[STATE_COLOURS[name] for name in found],
        labels=[STATE_WORDS[name] for name in found],
        alpha=0.85,
        lw=0,
    )
    axes.set_xlim(0.0, max(float(shares.index[-1]), 1e-12))
    axes.set_ylim(0.0, 100.0)
    axes.set_xlabel("time, s")
    axes.set_ylabel("share of the crew, %")
    axes.legend(frameon=False, fontsize=8, loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=3)
    return figure
