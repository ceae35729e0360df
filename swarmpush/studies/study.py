"""The study: one scenario, the points at which it is run, and how often."""

from __future__ import annotations

import hashlib
import json
from dataclasses import asdict, dataclass

import pandas as pd

from swarmpush.auditing.looks import looks
from swarmpush.scenario import Scenario
from swarmpush.vary import with_value


@dataclass(frozen=True)
class Stop:
    """When a point has been run often enough."""

    output: str
    relative_width: float
    most: int


@dataclass(frozen=True, eq=False)
class Study:
    """One scenario at many points, several runs each."""

    name: str
    note: str
    base: Scenario
    points: pd.DataFrame
    replicates: int
    stop: Stop | None
    seed: int
    outputs: tuple[str, ...]
    design: str

    def scenario(self, point: int) -> Scenario:
        """The scenario of a point; raises ScenarioError when its values make no valid one."""
        s = self.base
        for key in self.points.columns:
            value = self.points[key].to_numpy()[point]
            s = with_value(s, str(key), value.item() if hasattr(value, "item") else value)
        return s

    def digest(self) -> str:
        """A hash of everything above."""
        rest = [
            self.name, self.note, self.base.to_tables(), self.replicates, asdict(self.stop) if self.stop else None,
            self.seed, self.outputs, self.design, self.points.to_csv(),
        ]  # fmt: skip
        return hashlib.sha256(json.dumps(rest).encode()).hexdigest()[:16]

    @property
    def counts(self) -> tuple[int, ...]:
        """Planned numbers of replicates of a point."""
        return looks(self.replicates, self.stop.most) if self.stop else (self.replicates,)
