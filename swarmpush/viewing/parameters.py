"""Which keys of a scenario can be changed while it is watched, and in which steps."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from swarmpush.problems import ScenarioError
from swarmpush.quantities import for_people
from swarmpush.routine import Depart, Turn
from swarmpush.scenario import Scenario
from swarmpush.vary import unit_at, value_at, with_value

FACTOR = 1.05  # of values that are scaled; small enough to see a threshold pass, large enough to see a change
FIRST_STEP = 0.01  # from zero, which no factor leaves


@dataclass(frozen=True)
class Parameter:
    """A key and the value that follows its present one upward (+1) or downward (-1), in SI units."""

    key: str
    step: Callable[[float, int], float]

    def words(self, s: Scenario) -> str:
        """The key with its value, for people."""
        return f"{self.key} = {for_people(float(value_at(s, self.key)), unit_at(s, self.key))}"


def parameters(s: Scenario) -> tuple[Parameter, ...]:
    """The keys that can be changed: the routine's angles, the crew's size, friction or drag of the block, turn errors.

    Placed starts fix the size of the crew.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("gel_channel"))
    >>> [p.key for p in parameters(s)]
    ['routine.stages[1].acts[2].angle', 'pushers.count', 'fluid.block_drag', 'errors.turn_sd']
    """
    angles = [
        Parameter(f"routine.stages[{i}].acts[{j}].angle", _by_degree)
        for i, stage in enumerate(s.routine.stages, 1)
        for j, act in enumerate(stage.acts, 1)
        if isinstance(act, Turn | Depart)
    ]
    crew = [Parameter("pushers.count", _by_one)] if s.start.placed is None else []
    floor = [Parameter("floor.kinetic_friction", _by_share)] if s.floor else []
    fluid = [Parameter("fluid.block_drag", _by_share)] if s.fluid else []
    return (*angles, *crew, *floor, *fluid, Parameter("errors.turn_sd", _by_degree))


def stepped(s: Scenario, parameter: Parameter, direction: int) -> Scenario:
    """The scenario with one key a step higher (+1) or lower (-1).

    Kinetic friction takes static friction with it where it would come to lie above it.

    Raises:
        ValueError: with a sentence, when that is no valid scenario.
    """
    value = parameter.step(float(value_at(s, parameter.key)), direction)
    try:
        if parameter.key == "floor.kinetic_friction" and s.floor and value > s.floor.static_friction:
            s = with_value(s, "floor.static_friction", value)
        return with_value(s, parameter.key, value)
    except ScenarioError as error:
        raise ValueError(str(error.problems[0])) from None


def _by_degree(value: float, direction: int) -> float:
    # rounded so that three steps down from 3 deg give 0 and not a little less
    return math.radians(round(math.degrees(value) + direction, 9))


def _by_one(value: float, direction: int) -> float:
    return value + direction


def _by_share(value: float, direction: int) -> float:
    if value == 0.0:
        return FIRST_STEP if direction > 0 else 0.0
    return value * FACTOR**direction
