"""The models of a study file: what may stand in it."""

from __future__ import annotations

import difflib
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field

from swarmpush.auditing.claims import ARRIVAL, BLOCK_SPEED, MEASURES
from swarmpush.auditing.demands import read_demand
from swarmpush.auditing.statistics import Verdict
from swarmpush.scenario import About, Ratio, Whole

MAX_POINTS = 1_000_000  # a study of seconds per run would take weeks; beyond this the table of points itself gets heavy
MAX_SEED = 2**62


def _scalar(value: object) -> object:
    if not isinstance(value, str | int | float | bool):
        raise ValueError("must be a number, text, true or false")
    return value


def _measure(name: str) -> str:
    if name not in MEASURES:
        close = difflib.get_close_matches(name, MEASURES, n=1, cutoff=0.6)
        raise ValueError(f"did you mean '{close[0]}'?" if close else f"allowed: {', '.join(MEASURES)}")
    return name


def _demand(text: str) -> str:
    if isinstance(read_demand(text).bound, Verdict):
        raise ValueError("a study has no verdicts; write NAME>=NUMBER or NAME<=NUMBER")
    return text


Scalar = Annotated[float | int | str | bool, BeforeValidator(_scalar)]
Measure = Annotated[str, AfterValidator(_measure), Field(json_schema_extra={"enum": list(MEASURES)})]
Kind = Literal["grid", "list", "latin hypercube", "sobol", "screening", "sensitivity"]


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class Design(_Table):
    """How points are chosen."""

    kind: Kind = Field(
        description="grid: every combination; list: all values gone through together; latin hypercube, sobol: points "
        "spread evenly; screening: which keys matter at all; sensitivity: what share of the variance is due to each"
    )
    points: Whole | None = Field(
        default=None,
        ge=2,
        description="of a sampled design; trajectories of a screening, each of one point more than things varied; rows "
        "of a sensitivity design, each of two points more. A power of two for sobol and sensitivity",
        json_schema_extra={"maximum": MAX_POINTS},
    )


class Vary(_Table):
    """One thing varied: a key with values or a range, or a name with options."""

    key: str | None = Field(
        default=None, max_length=200, description="of the scenario, e.g. routine.stages[1].acts[2].angle"
    )
    values: tuple[Scalar, ...] | None = Field(
        default=None, min_length=1, max_length=100_000, description="SI numbers, text with units, choices"
    )
    low: Scalar | None = Field(default=None, description="least value of a range")
    high: Scalar | None = Field(default=None, description="largest value of a range")
    n: Whole | None = Field(default=None, ge=2, le=100_000, description="values of the range that a grid takes")
    scale: Literal["linear", "log"] = Field(default="linear", description="even steps, or even ratios")
    name: str | None = Field(default=None, min_length=1, max_length=80, description="of a choice between options")
    options: dict[str, dict[str, Any]] | None = Field(
        default=None,
        min_length=1,
        max_length=1000,
        description="option -> keys and values that it sets; a table is taken from elsewhere with { from = FILE }",
    )


class StopTable(_Table):
    """When a point has been run often enough."""

    output: Measure = Field(description="measure whose interval is to be narrow")
    relative_width: Ratio = Field(
        gt=0, le=10, description="of the interval over the mean; over 1 for a share such as arrival"
    )
    most: Whole = Field(ge=2, le=100_000, description="runs of a point at most")


class StudyFile(_Table):
    """What may stand in a study file."""

    format: Literal[1] = Field(description="version of this file format")
    about: About
    base: str = Field(
        min_length=1, max_length=1000, description="a demo, or a scenario file seen from the study file's folder"
    )
    replicates: Whole | None = Field(
        default=None, ge=1, le=100_000, description="runs of each point; left out: the scenario's own number"
    )
    seed: Whole | None = Field(default=None, ge=0, le=MAX_SEED, description="left out: the scenario's own")
    outputs: tuple[Measure, ...] = Field(default=(ARRIVAL, BLOCK_SPEED), min_length=1, description="what is looked at")
    demand: Annotated[str, AfterValidator(_demand)] | None = Field(
        default=None, max_length=200, description='on one of the outputs, e.g. "arrival>=0.9"; shown, changes no run'
    )
    design: Design
    vary: tuple[Vary, ...] = Field(min_length=1, max_length=200)
    stop: StopTable | None = None
