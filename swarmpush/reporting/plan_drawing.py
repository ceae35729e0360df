"""The pictures of a plan: its laps, laps along one key of the scenario, and what becomes of starts."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any, NamedTuple

import matplotlib.pyplot as plt
import numpy as np
import pandas as pd
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from swarmpush.kinematics.basins import CAUGHT, UNDECIDED
from swarmpush.kinematics.bounce import FATE_WORDS, Fate
from swarmpush.kinematics.laps import BUDGET
from swarmpush.kinematics.planning import Plan
from swarmpush.kinematics.settling import ATTRACTING, NEUTRAL, REPELLING, short_name
from swarmpush.quantities import prefix_for
from swarmpush.reporting.drawing import draw_rig
from swarmpush.reporting.palette import AXIS, GOOD, INK, MEASURED, ORANGE, PALE, PLANNED, PURPLE, QUIET
from swarmpush.vary import column_of, unit_at, value_at

CREAM = "#fff8e6"
LAP_COLOURS = (PLANNED, MEASURED, GOOD, PURPLE)
OTHER_LAPS = ORANGE
FATE_COLOURS = {
    FATE_WORDS[Fate.NEVER_REACHES_REAR]: PALE,
    FATE_WORDS[Fate.LEAVES_REAR_FOR_GOOD]: QUIET,
    FATE_WORDS[Fate.STUCK]: AXIS,
    FATE_WORDS[Fate.AHEAD_OF_BLOCK]: INK,
    FATE_WORDS[Fate.HALTED]: "black",
    UNDECIDED: CREAM,
}
MARKERS = {ATTRACTING: "o", NEUTRAL: "D", REPELLING: "x"}
_MEANINGS = {
    ATTRACTING: "attracts: an error shrinks",
    NEUTRAL: "neutral: an error stays",
    REPELLING: "repels: an error grows",
}


def plan_picture(plan: Plan) -> Figure:
    """The planned laps in the channel with the first one's bands of heading, over the path of one exact point."""
    s = plan.scenario
    scale, prefix = prefix_for(s.channel.width)
    figure, axes = plt.subplots(figsize=(8.4, 3.2))
    reach = draw_rig(axes, plan, scale, has_ends=True)
    axes.plot(*(plan.path_m / scale).T, color=QUIET, lw=0.6, label=f"first {len(plan.path_m) - 1} runs of one pusher")
    for k, lap in enumerate(plan.laps[:3]):
        corners = np.vstack([lap.hits[:, :2], lap.hits[:1, :2]]) / scale
        label = f"{short_name(lap.surfaces)}, {lap.share:.0%} of starts"
        axes.plot(*corners.T, color=LAP_COLOURS[k], lw=2.0 if k == 0 else 1.2, zorder=5, label=label)
        if k == 0:
            _draw_bands(axes, lap.hits, lap.leg_bands_rad, corners, scale)
    axes.set_xlim(*reach)
    axes.set_aspect("equal")
    axes.set_xlabel(f"along the channel, {prefix}m")
    axes.set_ylabel(f"across, {prefix}m")
    axes.legend(loc="lower center", bbox_to_anchor=(0.5, 1.0), frameon=False, fontsize=8)
    return figure


def _draw_bands(axes: Axes, hits: Any, bands: Any, corners: Any, scale: float) -> None:
    """From each corner of the lap, the wedge of headings that keep it."""
    for (x, y, _, heading), (low, high), end, start in zip(hits, bands, corners[1:], corners[:-1], strict=True):
        if high - low <= 0.0 or high - low > math.pi:
            continue
        length = 0.35 * float(np.hypot(*(end - start)))
        angles = heading + np.linspace(low, high, 24)
        xs = np.concatenate([[x / scale], x / scale + length * np.cos(angles)])
        ys = np.concatenate([[y / scale], y / scale + length * np.sin(angles)])
        axes.fill(xs, ys, color=PLANNED, alpha=0.12, lw=0, zorder=3)


# ---- laps along a key ------------------------------------------------------------------------------------------------


def cycle_map_picture(plan: Plan, key: str, table: pd.DataFrame) -> Figure:
    """Where laps strike the rear face, at which heading and with which band, and their multipliers, against a key."""
    s = plan.scenario
    column = column_of(s, key)
    factor, unit = _axis_unit(unit_at(s, key), float(table[column].abs().max()))
    label = key if unit == "1" else f"{key}, {unit}"
    if (table["lap"] < 0).all():
        return _no_laps(table[column].to_numpy() / factor, label)
    scale, prefix = prefix_for(s.channel.width)
    figure, panels = plt.subplots(3, 1, figsize=(8.4, 7.6), sharex=True, layout="constrained")
    place, heading, pull = panels
    for lap in _tracks(table):
        x = lap.rows[column].to_numpy() / factor
        _draw_track(place, x, lap.rows["rear_y_m"].to_numpy() / scale, lap)
        degrees = np.degrees(lap.rows[["rear_heading_rad", "band_low_rad", "band_high_rad"]].to_numpy())
        _draw_track(heading, x, degrees[:, 0], lap)
        if lap.is_one_lap:
            spans = np.flatnonzero(np.isfinite(degrees[:, 1]))
            for part in np.split(spans, np.flatnonzero(np.diff(lap.places[spans]) > 1) + 1):
                _draw_band(heading, x[part], degrees[part], lap.colour)
        for name, alpha in (("multiplier_2", 0.5), ("multiplier_1", 1.0)):
            _draw_track(pull, x, lap.rows[name].to_numpy(), lap, alpha)
    own = value_at(s, key)
    for axes in panels if own is not None else ():
        axes.axvline(float(own) / factor, color=INK, lw=0.8, ls=":")
    _mark_gaps(place, table[table["reason"] != ""][column].to_numpy() / factor)
    place.set_ylabel(f"strike on the rear face,\nacross the channel, {prefix}m")
    heading.set_ylabel("heading of the strike\nand its band, deg")
    pull.set_ylabel("multipliers of the lap\n(pale: the smaller one)")
    pull.axhspan(-1.0, 1.0, color=GOOD, alpha=0.08, lw=0)
    most = float(np.nanmax(np.abs(table["multiplier_1"].to_numpy()), initial=1.0))
    pull.set_ylim(-1.1 * min(most, 3.0), 1.1 * min(most, 3.0))
    pull.set_xlabel(label)
    figure.legend(handles=_cycle_legend(table), loc="outside upper left", frameon=False, fontsize=8, ncols=2)
    return figure


def _no_laps(values: Any, label: str) -> Figure:
    figure, axes = plt.subplots(figsize=(8.4, 1.4), layout="constrained")
    _mark_gaps(axes, values)
    axes.set_yticks([])
    axes.text(0.5, 0.5, "no lap at any of these values", transform=axes.transAxes, ha="center", color=INK)
    axes.set_xlabel(label)
    return figure


class _Track(NamedTuple):
    """One lap along the key, or all that have no colour of their own: rows, the numbers of their values, colour."""

    rows: pd.DataFrame
    places: Any
    colour: str
    is_one_lap: bool


def _tracks(table: pd.DataFrame) -> Iterator[_Track]:
    """Laps by their surfaces, the most frequent last, so that they are drawn on top."""
    laps = table[table["lap"] >= 0]
    places = pd.Series(pd.factorize(table[table.columns[0]])[0], table.index)
    named = _most_frequent(table)
    others = laps[~laps["surfaces"].isin(named)]
    yield _Track(others, places[others.index].to_numpy(), OTHER_LAPS, False)
    for name, colour in reversed(list(zip(named, LAP_COLOURS, strict=False))):
        rows = laps[laps["surfaces"] == name]
        yield _Track(rows, places[rows.index].to_numpy(), colour, True)


def _most_frequent(table: pd.DataFrame) -> list[str]:
    shares = table[table["lap"] >= 0].groupby("surfaces")["share"].sum().sort_values(ascending=False, kind="stable")
    return [str(name) for name in shares.index[: len(LAP_COLOURS)]]


def _draw_track(axes: Axes, x: Any, y: Any, lap: _Track, alpha: float = 1.0) -> None:
    """Marks for stability, joined where one lap goes on from a value to the next."""
    if lap.is_one_lap:
        gaps = np.flatnonzero(np.diff(lap.places) != 1) + 1
        axes.plot(np.insert(x, gaps, np.nan), np.insert(y, gaps, np.nan), color=lap.colour, lw=1.0, alpha=0.6 * alpha)
    for kind, marker in MARKERS.items():
        here = lap.rows["stability"].to_numpy() == kind
        face = "white" if kind == NEUTRAL else lap.colour
        axes.plot(x[here], y[here], ls="", marker=marker, ms=4, color=lap.colour, mfc=face, alpha=alpha)


def _draw_band(axes: Axes, x: Any, degrees: Any, colour: str) -> None:
    if len(x) == 1:
        axes.plot([x[0], x[0]], degrees[0, 1:], color=colour, alpha=0.25, lw=4, solid_capstyle="butt")
    else:
        axes.fill_between(x, degrees[:, 1], degrees[:, 2], color=colour, alpha=0.15, lw=0)


def _mark_gaps(axes: Axes, values: Any) -> None:
    """A tick at the bottom where there is no lap, or no valid scenario."""
    if len(values):  # nothing drawn at no place would upset the layout
        at_bottom = axes.get_xaxis_transform()
        axes.plot(values, 0 * values, ls="", marker="|", ms=8, color=AXIS, transform=at_bottom, clip_on=False)


def _cycle_legend(table: pd.DataFrame) -> list[Artist]:
    named = _most_frequent(table)
    handles: list[Artist] = [
        Line2D([], [], color=colour, lw=2, label=short_name(name.split(" - ")))
        for name, colour in zip(named, LAP_COLOURS, strict=False)
    ]
    if table[table["lap"] >= 0]["surfaces"].nunique() > len(named):
        handles.append(Line2D([], [], color=OTHER_LAPS, lw=2, label="other laps"))
    for kind, marker in MARKERS.items():
        if (table["stability"] == kind).any():
            face = "white" if kind == NEUTRAL else INK
            handles.append(Line2D([], [], color=INK, ls="", marker=marker, mfc=face, ms=5, label=_MEANINGS[kind]))
    if (table["reason"] != "").any():
        handles.append(Line2D([], [], color=AXIS, ls="", marker="|", ms=8, label="no lap, or no valid scenario"))
    handles.append(Line2D([], [], color=INK, lw=0.8, ls=":", label="the scenario's own value"))
    handles.append(Patch(color=GOOD, alpha=0.08, lw=0, label="multipliers of a lap that attracts"))
    return handles


def _axis_unit(si_unit: str, size: float) -> tuple[float, str]:
    """Factor and unit in which values of this size are easy to read."""
    if "rad" in si_unit:
        return math.pi / 180.0, si_unit.replace("rad", "deg")
    if si_unit in ("m", "s", "N", "m/s", "N*s"):
        factor, prefix = prefix_for(size)
        return factor, f"{prefix}{si_unit}".replace("*", " ")
    return 1.0, si_unit.replace("*", " ")


# ---- what becomes of starts ------------------------------------------------------------------------------------------


def basin_picture(plan: Plan, table: pd.DataFrame) -> Figure:
    """Heading against position across the channel on a grid of starts, coloured by the lap or by why they are lost."""
    scale, prefix = prefix_for(plan.scenario.channel.width)
    kinds, colours, labels = _kinds(table)
    (column, left, right), (row, low, high) = _cells(table["y_m"] / scale), _cells(np.degrees(table["heading_rad"]))
    grid = np.full((row.max() + 1, column.max() + 1), -1)
    grid[row, column] = kinds
    figure, axes = plt.subplots(figsize=(8.4, 4.4), layout="constrained")
    axes.imshow(
        np.ma.masked_less(grid, 0), origin="lower", aspect="auto", extent=(left, right, low, high),
        cmap=ListedColormap(colours), vmin=-0.5, vmax=len(colours) - 0.5, interpolation="nearest",
    )  # fmt: skip
    behind = plan.scenario.block.rear_at - float(table["x_m"].iloc[0])
    distance, letter = prefix_for(behind)
    axes.set_xlabel(f"start across the channel, {prefix}m ({behind / distance:.3g} {letter}m behind the rear face)")
    axes.set_ylabel("heading at the start, deg (0: to the block)")
    axes.set_yticks(range(-180, 181, 60))
    handles = [
        Patch(facecolor=colour, edgecolor=AXIS, lw=0.5, label=label)
        for colour, label in zip(colours, labels, strict=True)
    ]
    if (grid < 0).any():
        handles.append(Patch(facecolor="white", edgecolor=AXIS, lw=0.5, label="no room for a pusher"))
    figure.legend(handles=handles, loc="outside upper left", frameon=False, fontsize=8, ncols=2)
    return figure


def _kinds(table: pd.DataFrame) -> tuple[Any, list[str], list[str]]:
    """Each start's kind by number: first the laps that catch most, then the other laps, then the fates."""
    counts = table["lap"][table["lap"] >= 0].value_counts()
    named = sorted(counts.index[: len(LAP_COLOURS)])
    kinds = np.full(len(table), -1)
    colours: list[str] = []
    labels: list[str] = []

    def add(chosen: Any, colour: str, label: str) -> None:
        if chosen.any():
            kinds[chosen] = len(colours)
            colours.append(colour)
            labels.append(f"{label}: {_percent(float(chosen.mean()))}")

    lap, fate = table["lap"].to_numpy(), table["fate"].to_numpy()
    for k, colour in zip(named, LAP_COLOURS, strict=False):
        name = str(table["surfaces"][lap == k].iloc[0])
        add(lap == k, colour, short_name(name.split(" - ")))
    add((fate == CAUGHT) & ~np.isin(lap, named), OTHER_LAPS, "other laps")
    for word, colour in FATE_COLOURS.items():
        add(fate == word, colour, f"{word} after {BUDGET} bumps" if word == UNDECIDED else word)
    return kinds, colours, labels


def _percent(share: float) -> str:
    return f"{share:.0%}" if share >= 0.0995 else f"{100 * share:.2g}%"


def _cells(centres: Any) -> tuple[Any, float, float]:
    """Numbers of the cells of an even grid in which these centres lie, and the grid's outer edges."""
    values = np.unique(centres)
    step = np.diff(values).min() if len(values) > 1 else 1.0
    numbers = np.rint((np.asarray(centres) - values[0]) / step).astype(np.int64)
    return numbers, float(values[0] - step / 2), float(values[-1] + step / 2)
