"""The study: one scenario, the points at which it is run, and how often."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from functools import cached_property
from typing import Any

import numpy as np
import pandas as pd

from swarmpush.auditing.looks import looks
from swarmpush.quantities import for_people
from swarmpush.scenario import Scenario
from swarmpush.studies.setting import Setter
from swarmpush.vary import unit_at

Value = float | int | str | bool


@dataclass(frozen=True)
class Stop:
    """When a point has been run often enough.

    output: name of a measure in `claims.MEASURES`.
    relative_width: replicates are added to a point until the interval of its mean is no wider than this times the
    mean; for a share such as "arrival" than this, absolutely.
    most: replicates of a point at most.
    """

    output: str
    relative_width: float
    most: int


@dataclass(frozen=True)
class Axis:
    """One thing that a study varies: a column of its points.

    name: the scenario's key, or a name for options. unit: SI unit of its values, "1" for counts and text.
    low, high: ends of a range, None without one. is_log: whether values are spread evenly over the logarithm.
    is_whole: whether the values are whole numbers. n: values of a range that a grid takes.
    values: those that are gone through, or names of options; empty with a range.
    options: name -> key -> value; empty where the axis is a key.
    """

    name: str
    unit: str = "1"
    low: float | None = None
    high: float | None = None
    is_log: bool = False
    is_whole: bool = False
    n: int | None = None
    values: tuple[Value, ...] = ()
    options: Mapping[str, Mapping[str, Any]] | None = None

    @property
    def is_ordered(self) -> bool:
        """Whether its values are numbers, so that one can be more than another."""
        return not any(isinstance(value, str | bool) for value in self.values)

    @property
    def ends(self) -> tuple[float, float]:
        """Ends of its range."""
        assert self.low is not None
        assert self.high is not None
        return self.low, self.high

    def changes(self, value: Any) -> Mapping[str, Any]:
        """The keys that a value sets, and to what."""
        if self.options is not None:
            return self.options[str(value)]
        return {self.name: value.item() if isinstance(value, np.generic) else value}

    def written(self, value: Any) -> str:
        """A value for people."""
        if isinstance(value, str):
            return value
        if isinstance(value, bool | np.bool_):
            return "true" if value else "false"
        return for_people(float(value), self.unit, 6)


@dataclass(frozen=True, eq=False)
class Study:
    """One scenario at many points, several runs each.

    name, note: for people. base: the scenario. points: (n_points, n_axes) one row per point, index 0, 1, ... named
    "point"; SI numbers, counts as int, or text. replicates: runs of each point, at first if there is a `stop`.
    seed: of all runs; replicates have the same seeds at every point, so that points differ by less chance.
    outputs: names of measures in `claims.MEASURES`. design: how the points were chosen, see `designs.py`.
    axes: what the columns of the points are; left out: keys of the scenario. demand: of `auditing/demands.py`, on one
    of the outputs, which shows where the design is good enough; it changes no run.
    """

    name: str
    note: str
    base: Scenario
    points: pd.DataFrame
    replicates: int
    stop: Stop | None
    seed: int
    outputs: tuple[str, ...]
    design: str
    axes: tuple[Axis, ...] = ()
    demand: str = ""

    def scenario(self, point: int) -> Scenario:
        """The scenario of a point.

        Raises:
            ScenarioError: when the values make no valid scenario. IndexError: when there is no such point.
        """
        if not 0 <= point < len(self.points):
            raise IndexError(f"point {point} asked for; there are {len(self.points)}, counted from 0")
        changes: dict[str, Any] = {}
        for axis, column in zip(self.varied, self._columns, strict=True):
            changes |= axis.changes(column[point])
        return self._setter.set(changes, f"point {point} ({self.values_at(point)})")

    def values_at(self, point: int) -> str:
        """The values of a point for people, e.g. "pushers.count = 4, errors.turn_sd = 5 deg"."""
        return ", ".join(
            f"{axis.name} = {axis.written(column[point])}"
            for axis, column in zip(self.varied, self._columns, strict=True)
        )

    def digest(self) -> str:
        """A hash of all that decides what is run and what it is called, the same on every platform."""
        rest = {
            "name": self.name,
            "note": self.note,
            "base": self.base.to_tables(),
            "replicates": self.replicates,
            "stop": asdict(self.stop) if self.stop else None,
            "seed": self.seed,
            "outputs": self.outputs,
            "design": self.design,
            "axes": [asdict(axis) for axis in self.axes],
            "columns": list(self.points.columns),
        }
        digest = hashlib.sha256(json.dumps(rest, sort_keys=True).encode())
        for column in self._columns:
            if column.dtype.kind in "fiub":
                digest.update(column.astype(column.dtype.newbyteorder("<")).tobytes())
            else:
                digest.update(json.dumps(column.tolist()).encode())
        return digest.hexdigest()[:16]

    @property
    def counts(self) -> tuple[int, ...]:
        """Planned numbers of replicates of a point: one, or those after which it is asked whether they are enough."""
        return looks(self.replicates, self.stop.most) if self.stop else (self.replicates,)

    @cached_property
    def varied(self) -> tuple[Axis, ...]:
        """What the columns of the points are."""
        return self.axes or tuple(Axis(str(key), unit_at(self.base, str(key))) for key in self.points.columns)

    @cached_property
    def _columns(self) -> list[np.ndarray[Any, np.dtype[Any]]]:
        return [self.points[axis.name].to_numpy() for axis in self.varied]

    @cached_property
    def _setter(self) -> Setter:
        return Setter(self.base)
