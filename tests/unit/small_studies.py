"""Studies that take a moment."""

from __future__ import annotations

import os
import signal
from dataclasses import dataclass
from typing import Any

import pandas as pd

from swarmpush.demos import demo
from swarmpush.loading import load
from swarmpush.problems import Problem, ScenarioError
from swarmpush.scenario import Scenario
from swarmpush.studies.study import Stop, Study


def quick_base(seconds: float = 1.0) -> Scenario:
    """The service passage, for so much model time."""
    return load(demo("service_passage")).replace(goal={"time_limit": seconds})


def small_study(
    n_points: int = 3,
    replicates: int = 2,
    *,
    stop: Stop | None = None,
    seed: int = 5,
    base: Scenario | None = None,
    counts: list[int] | None = None,
) -> Study:
    """Crews of 1, 2, ... pushers, or of given sizes."""
    points = pd.DataFrame({"pushers.count": counts or [k + 1 for k in range(n_points)]})
    points.index.name = "point"
    return Study(
        name="crew sizes",
        note="",
        base=base or quick_base(),
        points=points,
        replicates=replicates,
        stop=stop,
        seed=seed,
        outputs=("block speed",),
        design="grid",
    )


@dataclass(frozen=True, eq=False)
class HarmfulStudy(Study):
    """A study with points at which something goes wrong in the worker: "kill", "invalid" or "break"."""

    harm: tuple[tuple[int, str], ...] = ()

    def scenario(self, point: int) -> Scenario:
        s = super().scenario(point)
        match dict(self.harm).get(point):
            case "kill":
                os.kill(os.getpid(), signal.SIGKILL)
            case "invalid":
                raise ScenarioError("point", [Problem("pushers.count", "too many of them")])
            case "break":
                return s.replace(numerics={"step": 0.0})  # which no checked scenario has
        return s


def harmful(study: Study, **harm: str) -> HarmfulStudy:
    """A study with harm at points, e.g. `at_2="kill"`."""
    values = {name: getattr(study, name) for name in Study.__dataclass_fields__}
    return HarmfulStudy(**values, harm=tuple((int(name.removeprefix("at_")), what) for name, what in harm.items()))


@dataclass(frozen=True, eq=False)
class DeadlyStudy(Study):
    """A study that ends the process into which it is loaded."""

    def __setstate__(self, state: dict[str, Any]) -> None:
        os._exit(1)
