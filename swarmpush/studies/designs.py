"""Points of a study: which combinations of values are run.

    grid             every combination, the last axis going fastest
    list             the values of all axes gone through together
    latin hypercube  n points; each axis is cut into n equal parts, and each part holds one point
    sobol            n points of a scrambled Sobol' sequence, which fill the ranges more evenly
    screening        trajectories on which one axis after the other takes a long step (`screening.py`)
    sensitivity      rows of points that differ in one axis, for indices of variance (`sensitivity.py`)

Sampled designs take all parts of a range alike, all whole numbers in it, and all options; with scale = "log" all parts
of its logarithm.

Source: M. D. McKay, R. J. Beckman and W. J. Conover, Technometrics 21 (1979) 239, for Latin hypercubes; A. B. Owen,
J. Complexity 14 (1998) 466, for scrambled Sobol' points; M. D. Morris, Technometrics 33 (1991) 161, for trajectories;
A. Saltelli et al., Comput. Phys. Commun. 181 (2010) 259, for the rows.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.stats import qmc

from swarmpush.studies.study import Axis

FloatArray = NDArray[np.float64]
Column = NDArray[Any]

SAMPLED = ("latin hypercube", "sobol", "screening", "sensitivity")  # designs that need a number of points
EVEN = ("sobol", "sensitivity")  # those of Sobol' points, which are balanced only in powers of two
N_LEVELS = 4  # of a range in a screening: steps then go over two thirds of it, and all levels are taken alike


def n_points(design: str, axes: Sequence[Axis], n: int | None) -> int:
    """How many points a design has.

    Arguments:
        design: its kind. axes: what is varied. n: points, trajectories or rows of a sampled design.
    """
    match design:
        case "grid":
            return math.prod(len(axis.values) or axis.n or 0 for axis in axes)
        case "list":
            return min(len(axis.values) for axis in axes)
        case "screening":
            return (n or 0) * (len(axes) + 1)
        case "sensitivity":
            return (n or 0) * (len(axes) + 2)
    return n or 0


def make_points(design: str, axes: Sequence[Axis], n: int | None, seed: int) -> pd.DataFrame:
    """The points of a design.

    Arguments:
        design, axes, n: as for `n_points`. seed: of the sampled designs; the same one gives the same points.

    Returns:
        A table with a row per point, index 0, 1, ... named "point", and a column per axis.

    >>> axes = [Axis("a", values=(1, 2)), Axis("b", low=0.0, high=1.0, n=3)]
    >>> make_points("grid", axes, None, seed=1).to_numpy().tolist()
    [[1.0, 0.0], [1.0, 0.5], [1.0, 1.0], [2.0, 0.0], [2.0, 0.5], [2.0, 1.0]]
    """
    rng = np.random.default_rng(seed)
    columns: list[Column]
    match design:
        case "grid":
            columns = _grid([grid_values(axis) for axis in axes])
        case "list":
            columns = [_column(axis.values) for axis in axes]
        case "latin hypercube":
            columns = _spread_all(axes, qmc.LatinHypercube(d=len(axes), seed=rng).random(n or 1))
        case "sobol":
            columns = _spread_all(axes, qmc.Sobol(d=len(axes), seed=rng).random(n or 1))
        case "screening":
            columns = _trajectories(axes, n or 1, rng)
        case "sensitivity":
            columns = _spread_all(axes, _rows(len(axes), n or 1, rng))
        case _:
            raise ValueError(f"no design {design!r}")
    points = pd.DataFrame({axis.name: column for axis, column in zip(axes, columns, strict=True)})
    return points.rename_axis("point")


def grid_values(axis: Axis) -> Column:
    """The values of an axis that a grid goes through: those given, or n in a range with even steps or ratios."""
    if axis.values:
        return _column(axis.values)
    even = np.geomspace if axis.is_log else np.linspace
    values = even(*axis.ends, axis.n or 2)
    return np.rint(values).astype(np.int64) if axis.is_whole else values


def spread(axis: Axis, share: FloatArray) -> Column:
    """Values of an axis at shares of it.

    Arguments:
        axis: the axis. share: (n,) from 0 to below 1.

    Returns:
        (n,) values; evenly spread shares give all of them alike often.

    >>> spread(Axis("crew", low=1.0, high=3.0, is_whole=True), np.array([0.0, 0.3, 0.34, 0.99])).tolist()
    [1, 1, 2, 3]
    """
    if axis.values:
        return _column(axis.values)[np.floor(share * len(axis.values)).astype(np.int64)]
    low, high = axis.ends
    if axis.is_whole:  # each stands for all that is rounded to it, so that those at the ends come as often as others
        low, high = low - 0.5, high + 0.5
    values = low * (high / low) ** share if axis.is_log else low + (high - low) * share
    if axis.is_whole:
        return np.clip(np.floor(values + 0.5), *axis.ends).astype(np.int64)
    return np.clip(values, *axis.ends)


def _spread_all(axes: Sequence[Axis], shares: FloatArray) -> list[Column]:
    return [spread(axis, shares[:, k]) for k, axis in enumerate(axes)]


def _column(values: Sequence[Any]) -> Column:
    """Values as an array of whole numbers, of numbers, of truth values, or of text."""
    kinds = {type(value) for value in values}
    if kinds <= {int, float} or kinds == {bool}:
        return np.array(values)
    column = np.empty(len(values), dtype=object)
    column[:] = values
    return column


def _grid(values: Sequence[Column]) -> list[Column]:
    sizes = [len(column) for column in values]
    places = np.unravel_index(np.arange(math.prod(sizes)), sizes)
    return [column[place] for column, place in zip(values, places, strict=True)]


def _rows(n_axes: int, n: int, rng: np.random.Generator) -> FloatArray:
    """Shares of the points of n rows: A, B, then A with one axis after the other from B."""
    both = qmc.Sobol(d=2 * n_axes, seed=rng).random(n)
    a, b = both[:, :n_axes], both[:, n_axes:]
    rows = np.repeat(a[:, None, :], n_axes + 2, axis=1)  # (row, point in it, axis)
    rows[:, 1] = b
    for k in range(n_axes):
        rows[:, k + 2, k] = b[:, k]
    return rows.reshape(-1, n_axes)


def _trajectories(axes: Sequence[Axis], n: int, rng: np.random.Generator) -> list[Column]:
    """n trajectories of one point more than there are axes; each changes them all, one by one in random order."""
    turn = rng.permuted(np.tile(np.arange(len(axes)), (n, 1)), axis=1).argsort(axis=1)  # when which axis changes
    point = np.arange(len(axes) + 1)
    columns = []
    for k, axis in enumerate(axes):
        ends = _long_steps(axis, n, rng)
        has_changed = point[None, :] > turn[:, k, None]
        columns.append(np.where(has_changed, ends[1][:, None], ends[0][:, None]).ravel())
    return columns


def _long_steps(axis: Axis, n: int, rng: np.random.Generator) -> tuple[Column, Column]:
    """n pairs of values: half of the levels apart, up or down; any two where values have no order."""
    if not axis.is_ordered:
        first = rng.integers(len(axis.values), size=n)
        second = (first + rng.integers(1, len(axis.values), size=n)) % len(axis.values)
        values = _column(axis.values)
        return values[first], values[second]
    half = N_LEVELS // 2
    lower = rng.integers(half, size=n)
    level = np.stack([lower, lower + half]) / (N_LEVELS - 1)
    pairs = np.where(rng.random(n) < 0.5, level, level[::-1])
    if axis.values:
        values = np.sort(_column(axis.values))
        values = values[np.rint(pairs * (len(values) - 1)).astype(np.int64)]
    else:
        low, high = axis.ends
        values = low * (high / low) ** pairs if axis.is_log else low + (high - low) * pairs
        values = np.rint(values).astype(np.int64) if axis.is_whole else np.clip(values, low, high)
    return values[0], values[1]
