"""Which runs of a study are still to be made, and when a point has enough of them."""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np
import pandas as pd

from swarmpush.auditing.claims import ARRIVAL, MEASURES
from swarmpush.auditing.looks import confidence_at
from swarmpush.auditing.statistics import Estimate, mean_interval, share_interval
from swarmpush.studies.study import Study
from swarmpush.studies.work import WHOLE_POINT, RunKey

Values = list[float]


def stop_column(study: Study) -> str | None:
    """The column of the runs on which it depends whether a point has enough of them; None without a stop rule."""
    return MEASURES[study.stop.output][0] if study.stop else None


@dataclass
class _UnderWay:
    """A point of which runs are being made: the look at which it is judged next, and what is known until then.

    missing: replicates of the look that have not ended. values: of the stop rule's column, by replicate.
    """

    look: int
    missing: set[int]
    values: dict[int, float] = field(default_factory=dict)


class Agenda:
    """The runs to be made, in order of points; what a point's own runs say decides whether it gets more.

    The decision is made at planned looks, from all runs up to there and nothing else, so that it does not depend on the
    order in which runs end, nor on interruptions. Only points under way are kept in memory.

    Arguments:
        study: what is run.
        known: runs that have ended: columns point, replicate, and value (of `stop_column`, NaN for a failed run).
            A point that failed as a whole has the replicate `WHOLE_POINT`.

    planned: runs planned so far, grown by stop rules and shrunk by points that make no scenario.
    done: of these the ones that have ended, with a row or with a failure.
    wanted: point -> runs planned of it, where that has changed; emptied by whoever has noted it.
    """

    def __init__(self, study: Study, known: pd.DataFrame) -> None:
        self._study, self._counts = study, study.counts
        known = known.sort_values(["point", "replicate"], kind="stable")
        self._points = known["point"].to_numpy(dtype=np.int64)
        self._replicates = known["replicate"].to_numpy(dtype=np.int64)
        self._values = known["value"].to_numpy(dtype=np.float64)
        self._under_way: dict[int, _UnderWay] = {}
        self._more: deque[RunKey] = deque()
        self._first = self._first_ones()
        self.planned = len(study.points) * self._counts[0]
        self.done = 0
        self.wanted: dict[int, int] = {}
        self._resume()

    def take(self, n: int) -> list[RunKey]:
        """The next runs to make, n at most; fewer only when there are none for now."""
        keys: list[RunKey] = []
        while len(keys) < n:
            key = self._more.popleft() if self._more else next(self._first, None)
            if key is None:
                break
            if key.point in self._under_way:  # it may have failed as a whole meanwhile
                keys.append(key)
        return keys

    def settle(self, key: RunKey, value: float) -> bool:
        """Note that a run has ended, with its value of the stop rule's column, NaN where it has none.

        Returns:
            Whether the run was awaited; what nobody waits for must not be kept.
        """
        point = self._under_way.get(key.point)
        if point is None:
            return False
        if key.replicate == WHOLE_POINT:
            self._drop(key.point, point)
            return True
        if key.replicate not in point.missing:
            return False
        point.missing.remove(key.replicate)
        point.values[key.replicate] = value
        self.done += 1
        if not point.missing:
            self._judge(key.point, point)
        return True

    def _first_ones(self) -> Iterator[RunKey]:
        """The runs of the first look of each point that has not begun."""
        begun = np.unique(self._points)
        for point in range(len(self._study.points)):
            at = np.searchsorted(begun, point)
            if at < len(begun) and begun[at] == point:
                continue
            self._under_way[point] = _UnderWay(0, set(range(self._counts[0])))
            yield from (RunKey(point, k) for k in range(self._counts[0]))

    def _resume(self) -> None:
        """Go on with the points that have begun."""
        edges = np.flatnonzero(np.diff(self._points, prepend=-1, append=-1))
        for a, b in pairwise(edges):
            point, ended = int(self._points[a]), self._replicates[a:b].tolist()
            if ended[0] == WHOLE_POINT:
                self.planned -= self._counts[0]
                self.wanted[point] = 0
                continue
            values = dict(zip(ended, self._values[a:b].tolist(), strict=True))
            self._go_on(point, _UnderWay(0, set(), values))

    def _go_on(self, point: int, state: _UnderWay) -> None:
        """Follow a point's looks through what is known, up to the first run that is missing."""
        self._under_way[point] = state
        counted = 0
        while point in self._under_way:
            size = self._counts[state.look]
            known = sum(k in state.values for k in range(counted, size))
            self.done += known
            state.missing = {k for k in range(counted, size) if k not in state.values}
            if state.missing:
                self._more.extend(RunKey(point, k) for k in sorted(state.missing))
                return
            counted = size
            self._decide(point, state)

    def _judge(self, point: int, state: _UnderWay) -> None:
        """All runs of the look have ended: more, or enough."""
        before = self._counts[state.look]
        self._decide(point, state)
        if point in self._under_way:
            state.missing = set(range(before, self._counts[state.look]))
            self._more.extend(RunKey(point, k) for k in range(before, self._counts[state.look]))

    def _decide(self, point: int, state: _UnderWay) -> None:
        size = self._counts[state.look]
        is_last = state.look + 1 == len(self._counts)
        if is_last or is_enough(self._study, state.look, [state.values[k] for k in range(size)]):
            del self._under_way[point]
            return
        state.look += 1
        self.planned += self._counts[state.look] - size
        self.wanted[point] = self._counts[state.look]

    def _drop(self, point: int, state: _UnderWay) -> None:
        """A point that makes no scenario: none of its runs is made, and those taken will not be waited for."""
        size = self._counts[state.look]
        self.planned -= size
        self.done -= size - len(state.missing)
        self.wanted[point] = 0
        del self._under_way[point]


def is_enough(study: Study, look: int, values: Values) -> bool:
    """Whether the interval of a point's runs is narrow enough at one of the planned looks.

    Arguments:
        study: has the stop rule. look: which one, from 0. values: (n,) of its column, NaN for a run without one.
    """
    assert study.stop
    confidence = confidence_at(look, len(study.counts), study.base.trial.confidence)
    known = [value for value in values if math.isfinite(value)]
    if study.stop.output == ARRIVAL:
        share = share_interval(round(sum(known)), len(known), confidence)
        return _width(share) <= study.stop.relative_width
    mean = mean_interval(known, confidence)
    return _width(mean) <= study.stop.relative_width * abs(mean.mean)


def _width(estimate: Estimate) -> float:
    return estimate.high - estimate.low
