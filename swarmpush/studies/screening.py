"""Which keys matter at all: elementary effects along trajectories.

On a trajectory one key after the other takes a long step while the others stay. The change of the output over the
step, in parts of the key's range, is an elementary effect: what going through the whole range would change, if the
output were a straight line. With options, which have no order, it is the change from one option to another.

    mu        mean effect: the sign says which way the key works
    mu*       mean size of the effects: how much the key matters
    sigma     scatter of the effects: 0 if the key always does the same; large if that depends on the other keys, if the
              output bends, or from chance

Source: M. D. Morris, Technometrics 33 (1991) 161; mu* from F. Campolongo, J. Cariboni and A. Saltelli, Environ. Model.
Softw. 22 (2007) 1509. What chance alone would give is derived here: the mean size of a normal deviate, sqrt(2/pi) times
its standard deviation.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pandas as pd

from swarmpush.studies.responses import FloatArray, mean_value, mean_variance, responses
from swarmpush.studies.study import Axis, Study

N_RESAMPLES = 2000  # as for the indices


@dataclass(frozen=True)
class Screening:
    """Elementary effects of the keys of a study.

    output: name of the measure. table: one row per key in the study's order: key, mu, mu_star, mu_star_low,
    mu_star_high, sigma, chance (the mu* that chance alone would give; NaN with one replicate) in SI units of the
    output, and n, the effects that could be measured. confidence: of the intervals.
    """

    output: str
    table: pd.DataFrame
    confidence: float


def find_effects(
    study: Study, runs: pd.DataFrame, output: str, *, confidence: float = 0.95, seed: int = 0
) -> Screening:
    """Elementary effects from the runs of a study whose design is "screening".

    Arguments:
        study: the study. runs: one row per run, see `responses`. output: name of a measure in `claims.MEASURES`.
        confidence: of the bootstrap intervals. seed: of the bootstrap.

    Raises:
        ValueError: when the study has another design. KeyError: when there is no such measure.
    """
    if study.design != "screening":
        raise ValueError(f"the design of this study is {study.design!r}; effects need one of kind 'screening'")
    values = responses(runs, output, len(study.points))
    return elementary_effects(values, study.points, study.axes, output, confidence=confidence, seed=seed)


def elementary_effects(
    values: FloatArray,
    points: pd.DataFrame,
    axes: tuple[Axis, ...],
    output: str,
    *,
    confidence: float = 0.95,
    seed: int = 0,
) -> Screening:
    """The same from an array.

    Arguments:
        values: (n_points, n_replicates) outputs, NaN where there is none. points, axes: of a screening design.
        output: what the values are. confidence: of the intervals. seed: of the bootstrap.

    Raises:
        ValueError: when the confidence is not between 0 and 1.
    """
    if not 0.0 < confidence < 1.0:
        raise ValueError(f"confidence {confidence} given; it must lie between 0 and 1")
    rng = np.random.default_rng(seed)
    path = values.reshape(-1, len(axes) + 1, values.shape[1])
    change = path[:, 1:] - path[:, :-1]  # (trajectory, step, replicate)
    rows = [
        {"key": axis.name, **_effects(change, places(axis, points).reshape(-1, len(axes) + 1), axis, confidence, rng)}
        for axis in axes
    ]
    return Screening(output, pd.DataFrame(rows), confidence)


def places(axis: Axis, points: pd.DataFrame) -> FloatArray:
    """Where the points lie on an axis, from 0 to 1; values without order are numbered.

    Arguments:
        axis: the axis. points: with a column of its name.

    Returns:
        (n_points,) places.
    """
    column = points[axis.name]
    if not axis.is_ordered:
        return np.array([axis.values.index(value) for value in column], dtype=np.float64)
    numbers = column.to_numpy(dtype=np.float64)
    low, high = (float(min(axis.values)), float(max(axis.values))) if axis.values else axis.ends
    if axis.is_log:
        share: FloatArray = np.log(numbers / low) / math.log(high / low)
    else:
        share = (numbers - low) / (high - low)
    return share


def _effects(
    change: FloatArray, place: FloatArray, axis: Axis, confidence: float, rng: np.random.Generator
) -> dict[str, float]:
    """Statistics of one key's effects, one per trajectory."""
    moved = np.diff(place, axis=1)
    step = np.argmax(np.abs(moved), axis=1)
    trajectory = np.arange(len(step))
    changes, length = change[trajectory, step], moved[trajectory, step]
    if not axis.is_ordered:
        length = np.ones_like(length)
    effects = mean_value(changes) / length
    is_known = np.isfinite(effects)
    noise = np.sqrt(mean_variance(changes)) / np.abs(length)
    effects, noise, n = effects[is_known], noise[is_known & np.isfinite(noise)], int(is_known.sum())
    low = high = math.nan
    if n > 1:
        tail = 50.0 * (1.0 - confidence)
        resampled = np.abs(effects)[rng.integers(n, size=(N_RESAMPLES, n))].mean(axis=1)
        low, high = np.percentile(resampled, [tail, 100.0 - tail])
    return {
        "mu": float(effects.mean()) if n else math.nan,
        "mu_star": float(np.abs(effects).mean()) if n else math.nan,
        "mu_star_low": float(low),
        "mu_star_high": float(high),
        "sigma": float(effects.std(ddof=1)) if n > 1 else math.nan,
        "chance": math.sqrt(2.0 / math.pi) * float(noise.mean()) if len(noise) else math.nan,
        "n": n,
    }
