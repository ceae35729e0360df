"""Whether the points of a study make valid scenarios, tried before anything is run."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from swarmpush.problems import ScenarioError
from swarmpush.studies.study import Study

MAX_TRIED = 200  # points; a scenario is made and checked in 0.1 to 2 ms
SHOWN = 3  # reasons


@dataclass(frozen=True)
class Tried:
    """What trying some points gave. reasons: point -> why it makes no valid scenario, None where it does."""

    reasons: dict[int, str | None]

    @property
    def invalid(self) -> dict[int, str]:
        """The points that make no valid scenario, with the reasons."""
        return {point: reason for point, reason in self.reasons.items() if reason is not None}

    @property
    def n_invalid(self) -> int:
        """How many of the points tried make no valid scenario."""
        return len(self.invalid)


def try_points(study: Study, most: int = MAX_TRIED) -> Tried:
    """Make the scenarios of all points, or of some: at the ends of every axis, and others evenly spread."""
    reasons: dict[int, str | None] = {}
    for point in _chosen(study.points, most):
        try:
            study.scenario(point)
        except ScenarioError as error:
            values = error.source.partition("(")[2].removesuffix(")")
            reasons[point] = f"{values}: {'; '.join(map(str, error.problems))}"
        else:
            reasons[point] = None
    return Tried(reasons)


def warnings(study: Study) -> tuple[str, ...]:
    """What whoever starts a study should know of it, a sentence each."""
    tried = try_points(study)
    told = []
    if tried.n_invalid:
        points, total = len(tried.reasons), len(study.points)
        share = f"{tried.n_invalid} of {points} points" + ("" if points == total else f" tried (of {total})")
        first = "; ".join(f"point {p} ({reason})" for p, reason in list(tried.invalid.items())[:SHOWN])
        told.append(f"{share} make no valid scenario and will count as failed: {first}")
    if study.counts[-1] == 1:
        told.append("With one run per point nothing tells what is due to the values from what is due to chance.")
    return tuple(told)


def _chosen(points: pd.DataFrame, most: int) -> list[int]:
    """Points to try, in order."""
    n = len(points)
    if n <= most:
        return list(range(n))
    ends: set[int] = set()
    for name in points.columns:
        column = points[name]
        if pd.api.types.is_numeric_dtype(column):
            ends |= {int(np.argmin(column)), int(np.argmax(column))}
        else:
            ends |= {int(k) for k in np.flatnonzero(~column.duplicated())}
    corners = sorted(ends)[: most // 2]
    return sorted({*corners, *np.linspace(0, n - 1, most - len(corners)).astype(int).tolist()})
