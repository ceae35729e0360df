"""The pictures of a study, each function one figure from its result."""

from __future__ import annotations

import math

import matplotlib.pyplot as plt
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from swarmpush.auditing.claims import ARRIVAL, MEASURES
from swarmpush.auditing.demands import read_demand
from swarmpush.auditing.statistics import Verdict
from swarmpush.quantities import prefix_for
from swarmpush.reporting.palette import AXIS, BLUE, GREEN, INK, ORANGE, PURPLE, SKY, VERMILION
from swarmpush.studies.screening import Screening
from swarmpush.studies.study import Axis, Value
from swarmpush.studies.sweep import StudyResult

FloatArray = NDArray[np.float64]

# lines differ in colour, mark and dash
LINES = (
    (BLUE, "o", "-"),
    (VERMILION, "s", "--"),
    (GREEN, "^", "-."),
    (ORANGE, "D", ":"),
    (PURPLE, "v", "-"),
    (SKY, "P", "--"),
)
MOST_LINES = len(LINES)
MOST_TICKS = 8
MOST_DOTS = 2000  # that are drawn one by one; more would make a page too heavy to open
BESIDE = 0.012  # of the axis, from line to line
CELL = 0.55  # inches of a heat map's cell


def is_map(result: StudyResult) -> bool:
    """Whether a study has a heat map: a grid over two axes of numbers, with at least three values on each."""
    axes = result.study.varied
    columns = [result.study.points[axis.name].nunique() for axis in axes]
    return result.study.design == "grid" and len(axes) == 2 and all(a.is_ordered for a in axes) and min(columns) > 2


def response(result: StudyResult, output: str) -> Figure:
    """An output over what was varied, with intervals.

    A grid or list over one or two axes gives lines over the axis of numbers with most values, one for each value of the
    other axis; any other design a panel per axis, on which each point is a dot and all other axes vary as well.
    """
    axes = result.study.varied
    across, along = _line_axes(result)
    if along is None:
        return _panels(result, output, axes)
    figure, panel = plt.subplots(figsize=(8.4, 3.4))
    points = result.study.points
    scale, label = _scaled(result, output)
    place = _places(result, along)
    groups = list(dict.fromkeys(points[across.name])) if across else [None]
    for k, value in enumerate(groups):
        colour, mark, dash = LINES[k % MOST_LINES]
        rows = np.arange(len(points)) if across is None else np.flatnonzero(points[across.name] == value)
        rows = rows[np.argsort(place[rows], kind="stable")]
        mean, spread = _spread(result, output, rows, scale)
        # lines stand a little beside one another, so that their whiskers do not hide each other
        shift = (k - (len(groups) - 1) / 2) * BESIDE
        beside = (
            place[rows] * (place.max() / place.min()) ** shift if along.is_log else place[rows] + shift * np.ptp(place)
        )
        name = across.written(value) if across else None
        panel.errorbar(beside, mean, yerr=spread, color=colour, marker=mark, ls=dash, ms=4.5, capsize=3,
                       lw=1.3, label=name)  # fmt: skip
    _mark_demand(panel, result, output, scale)
    _name_axis(panel, result, along)
    panel.set_ylabel(label)
    if across:
        _legend(panel, across.name)
    return figure


def heat_map(result: StudyResult, output: str) -> Figure:
    """Means of an output over a grid of two axes; a thick line borders the points that meet the demand.

    Each cell holds its mean as a number, so that nothing hangs on colour. Dots: the demand is met at the doubtful end
    of the interval.
    """
    first, second = result.study.varied
    points = result.study.points
    rows, columns = (np.unique(points[axis.name]) for axis in (first, second))
    at = tuple(np.searchsorted(v, points[a.name]) for v, a in ((rows, first), (columns, second)))
    scale, label = _scaled(result, output)
    mean = np.full((len(rows), len(columns)), math.nan)
    mean[at] = [estimate.mean / scale for estimate in result.estimates(output)]
    figure, panel = plt.subplots(figsize=(1.6 + CELL * 1.5 * len(columns), 1.2 + CELL * len(rows)))
    image = panel.imshow(mean, origin="lower", aspect="auto", cmap="cividis", vmin=0.0 if output == ARRIVAL else None,
                         vmax=100.0 if output == ARRIVAL else None)  # fmt: skip
    low, high = image.get_clim()
    for (i, j), value in np.ndenumerate(mean):
        shade = "white" if value < (low + high) / 2 else "black"
        panel.text(
            j, i, "-" if math.isnan(value) else f"{value:.3g}", ha="center", va="center", color=shade, fontsize=8
        )
    if result.study.demand and (demand := read_demand(result.study.demand)).name == output:
        assert not isinstance(demand.bound, Verdict)
        bound = demand.bound * (100.0 if output == ARRIVAL else 1.0 / scale)
        is_good = mean >= bound if demand.relation == ">=" else mean <= bound
        _border(panel, is_good)
        met = np.full(mean.shape, False)
        met[at] = [bool(is_met) for is_met in result.meets_demand()]
        i, j = np.nonzero(met)
        panel.plot(j + 0.36, i + 0.36, ls="", marker="o", ms=4, color="white", mec="black", mew=0.8)
    for axis, values, ticks, name in (
        (first, rows, panel.set_yticks, panel.set_ylabel), (second, columns, panel.set_xticks, panel.set_xlabel)
    ):  # fmt: skip
        ticks(range(len(values)), [f"{value / _scale_of(result, axis)[0]:.3g}" for value in values])
        name(_axis_label(result, axis))
    figure.colorbar(image, ax=panel, label=label)
    return figure


def arrivals(result: StudyResult) -> Figure:
    """Share of runs that have arrived over time, by the values of one axis."""
    axis = group_axis(result)
    figure, panel = plt.subplots(figsize=(8.4, 2.8))
    end = result.study.base.goal.time_limit
    for k, (name, runs) in enumerate(result.groups(axis).items() if axis else [("all points", result.runs)]):
        if runs.empty:
            continue
        colour, _, dash = LINES[k % MOST_LINES]
        curve = result.under_way(runs)
        end = max(end, float(curve.times_s[-1]))
        arrived, is_heavy = 100.0 * (1.0 - curve.share), len(curve.times_s) > MOST_DOTS
        t = np.concatenate([[0.0], curve.times_s])
        (line,) = panel.step(
            t, np.concatenate([[0.0], arrived]), where="post", color=colour, ls=dash, lw=1.5, label=name
        )
        line.set_rasterized(is_heavy)
        low, high = (100.0 * (1.0 - column) for column in (curve.high, curve.low))
        panel.fill_between(curve.times_s, low, high, step="post", color=colour, alpha=0.12, lw=0,
                           rasterized=is_heavy)  # fmt: skip
    panel.set_xlim(0.0, end)
    panel.set_ylim(-3.0, 103.0)
    panel.set_xlabel("time, s")
    panel.set_ylabel("runs arrived, %")
    _legend(panel, axis.name if axis else None)
    return figure


def weights(result: StudyResult, output: str) -> Figure:
    """What each key does to an output: Sobol' indices, or elementary effects, with intervals, the largest on top."""
    found = result.weights(output)
    assert found is not None
    is_screening = isinstance(found, Screening)
    by = "mu_star" if is_screening else "total"
    table = found.table.sort_values(by, kind="stable", na_position="first").reset_index(drop=True)
    scale, unit = _scaled(result, output) if is_screening else (1.0, "share of the variance")
    figure, panel = plt.subplots(figsize=(8.4, 0.9 + 0.42 * len(table)))
    series = [(by, "mean size of the effects" if is_screening else "total", BLUE, "o", 0.12)]
    if not is_screening:
        series.append(("first", "first order", VERMILION, "s", -0.12))
    at = np.arange(len(table))
    for column, name, colour, mark, shift in series:
        mean, low, high = (table[f"{column}{end}"].to_numpy() / scale for end in ("", "_low", "_high"))
        spread = np.maximum(np.nan_to_num([mean - low, high - mean]), 0.0)
        panel.errorbar(mean, at + shift, xerr=spread, ls="", color=colour, marker=mark, ms=5, capsize=3, label=name)
    if is_screening:
        chance = table["chance"].to_numpy() / scale
        panel.plot(chance, at, ls="", marker="|", ms=11, color=INK, label="what chance alone would give")
    panel.axvline(0.0, color=AXIS, lw=0.8)
    panel.set_yticks(at, table["key"])
    panel.set_ylim(-0.6, len(table) - 0.4)
    panel.set_xlabel(f"change over the range: {unit}" if is_screening else unit)
    _legend(panel, None)
    return figure


def _legend(panel: Axes, title: str | None) -> None:
    panel.legend(
        frameon=False, fontsize=8, title=title, title_fontsize=8, loc="lower left", bbox_to_anchor=(0.0, 1.0), ncols=3
    )


def group_axis(result: StudyResult) -> Axis | None:
    """The axis by whose values runs are told apart: that with fewest, options before numbers; None if all have many."""
    counts = {axis.name: result.study.points[axis.name].nunique() for axis in result.study.varied}
    few = [axis for axis in result.study.varied if 1 < counts[axis.name] <= MOST_LINES]
    return min(few, key=lambda axis: (axis.is_ordered, counts[axis.name]), default=None)


def _line_axes(result: StudyResult) -> tuple[Axis | None, Axis | None]:
    """The axis told apart by lines, if any, and the one along which they run; None for designs without lines."""
    axes = sorted(result.study.varied, key=lambda a: (a.is_ordered, result.study.points[a.name].nunique()))
    if result.study.design not in ("grid", "list") or len(axes) > 2:
        return None, None
    if len(axes) == 1 or result.study.design == "list":
        return None, axes[-1]
    return (axes[0], axes[1]) if result.study.points[axes[0].name].nunique() <= MOST_LINES else (None, None)


def _panels(result: StudyResult, output: str, axes: tuple[Axis, ...]) -> Figure:
    n_columns = min(3, len(axes))
    n_rows = math.ceil(len(axes) / n_columns)
    figure, panels = plt.subplots(n_rows, n_columns, figsize=(8.4, 2.5 * n_rows), sharey=True, squeeze=False)
    scale, label = _scaled(result, output)
    mean, _ = _spread(result, output, np.arange(len(result.study.points)), scale)
    for panel, axis in zip(panels.flat, axes, strict=False):
        panel.plot(_places(result, axis), mean, ls="", marker="o", ms=3.5, color=BLUE, mfc="none", alpha=0.7,
                   rasterized=len(mean) > MOST_DOTS)  # fmt: skip
        _mark_demand(panel, result, output, scale)
        _name_axis(panel, result, axis)
    for panel in panels.flat[len(axes) :]:
        panel.set_visible(False)
    for row in panels:
        row[0].set_ylabel(label)
    figure.tight_layout()
    return figure


def _places(result: StudyResult, axis: Axis) -> FloatArray:
    """Where the points stand along an axis, in the picture's unit; values without order are numbered."""
    column = result.study.points[axis.name]
    if axis.is_ordered:
        return column.to_numpy(dtype=np.float64) / _scale_of(result, axis)[0]
    shown = _options_of(result, axis)
    return np.array([shown.index(value) for value in column], dtype=np.float64)


def _options_of(result: StudyResult, axis: Axis) -> list[Value]:
    """The values of an axis without order, as the study names them."""
    return [value for value in axis.values if (result.study.points[axis.name] == value).any()]


def _name_axis(panel: Axes, result: StudyResult, axis: Axis) -> None:
    """Name and ticks below a panel: a tick per value while there are few."""
    panel.set_xlabel(_axis_label(result, axis))
    if not axis.is_ordered:
        shown = _options_of(result, axis)
        panel.set_xticks(range(len(shown)), [axis.written(value) for value in shown])
        return
    if axis.is_log:
        panel.set_xscale("log")
    values = np.unique(_places(result, axis))
    if len(values) <= MOST_TICKS:
        panel.set_xticks(values, [f"{value:.3g}" for value in values])
        panel.minorticks_off()


def _axis_label(result: StudyResult, axis: Axis) -> str:
    """Name of an axis with the unit of its ticks."""
    unit = _scale_of(result, axis)[1]
    return f"{axis.name}, {unit}" if unit else axis.name


def _scale_of(result: StudyResult, axis: Axis) -> tuple[float, str]:
    """By what the values of an axis are divided, and the unit that they then have."""
    if not axis.is_ordered or axis.unit == "1":
        return 1.0, ""
    if axis.unit in ("rad", "rad/sqrt(s)"):
        return math.pi / 180.0, f"deg{axis.unit.removeprefix('rad')}"
    if axis.unit.startswith(("kg", "rad")):
        return 1.0, axis.unit
    scale, prefix = prefix_for(float(result.study.points[axis.name].abs().max()))
    return scale, f"{prefix}{axis.unit.replace('*', ' ')}"


def _spread(result: StudyResult, output: str, rows: NDArray[np.int64], scale: float) -> tuple[FloatArray, FloatArray]:
    """Means of some points, and how far their intervals reach below and above, in the picture's unit."""
    estimates = result.estimates(output)
    found = [estimates[row] for row in rows]
    mean = np.array([estimate.mean for estimate in found]) / scale
    ends = np.array([(e.mean - e.low, e.high - e.mean) for e in found]).reshape(-1, 2).T / scale
    return mean, np.where(np.isfinite(ends), np.maximum(ends, 0.0), 0.0)


def _scaled(result: StudyResult, output: str) -> tuple[float, str]:
    """By what an output is divided for the picture, and what stands at its axis."""
    if output == ARRIVAL:
        return 0.01, "runs arrived, %"
    unit = MEASURES[output][1]
    if unit.startswith("1"):
        return 1.0, output if unit == "1" else f"{output}, {unit}"
    known = [abs(estimate.mean) for estimate in result.estimates(output) if math.isfinite(estimate.mean)]
    scale, prefix = prefix_for(max(known, default=0.0))
    return scale, f"{output}, {prefix}{unit.replace('*', ' ')}"


def _mark_demand(panel: Axes, result: StudyResult, output: str, scale: float) -> None:
    if not result.study.demand or (demand := read_demand(result.study.demand)).name != output:
        return
    assert not isinstance(demand.bound, Verdict)
    panel.axhline(demand.bound / scale, color=INK, ls="--", lw=1)
    panel.annotate(
        f"demanded {demand.relation}", (1.0, demand.bound / scale), xycoords=panel.get_yaxis_transform(), ha="right",
        va="bottom", fontsize=8, color=INK,
    )  # fmt: skip


def _border(panel: Axes, is_good: NDArray[np.bool_]) -> None:
    """A line between cells that are good and cells that are not."""
    n, m = is_good.shape
    for i in range(n):
        for j in range(m):
            if j + 1 < m and is_good[i, j] != is_good[i, j + 1]:
                panel.plot([j + 0.5] * 2, [i - 0.5, i + 0.5], color=VERMILION, lw=3.0, solid_capstyle="butt")
            if i + 1 < n and is_good[i, j] != is_good[i + 1, j]:
                panel.plot([j - 0.5, j + 0.5], [i + 0.5] * 2, color=VERMILION, lw=3.0, solid_capstyle="butt")
