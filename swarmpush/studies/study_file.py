"""Reading a study file, and saying everything that is wrong with it at once.

format = 1
base = "vibration_duct"             # a demo, or a scenario file, seen from the study file's folder
replicates = 12                     # runs of each point; left out: the scenario's own number, and so is the seed
outputs = ["arrival", "block speed"]
demand = "arrival>=0.9"             # shown on the outputs; left out: none

[about]
name = "Crew size against departure"

[design]
kind = "grid"                       # points = 64 with a sampled design

[[vary]]                            # a key of the scenario, its values listed
key = "pushers.count"
values = [4, 8, 12]

[[vary]]                            # or between two ends
key = "errors.turn_sd"
low = "0 deg"
high = "20 deg"
n = 5                               # values that a grid takes; scale = "log" for even ratios

[[vary]]                            # or a choice between options that each set any number of keys
name = "departure"
[vary.options]
"as given" = {}
"wide" = { "routine.stages[1].acts[2].spread" = "60 deg" }
"as in my rig" = { routine = { from = "my_rig.toml" } }   # taken from another scenario

[stop]                              # add runs to a point until the interval of its mean is narrow
output = "block speed"
relative_width = 0.2
most = 48
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from typing import Annotated, Any

from pydantic import TypeAdapter, ValidationError

from swarmpush.auditing.claims import ARRIVAL, BLOCK_SPEED
from swarmpush.auditing.demands import read_demand
from swarmpush.loading import parse_toml, read_text, reword, shown
from swarmpush.problems import Problem, ScenarioError
from swarmpush.studies.designs import EVEN, SAMPLED, grid_values, make_points, n_points
from swarmpush.studies.setting import Setter
from swarmpush.studies.study import Axis, Stop, Study
from swarmpush.studies.study_tables import MAX_POINTS, Design, Kind, StudyFile, Vary
from swarmpush.studies.trying import try_points
from swarmpush.studies.varied import Wrong, keys_set, load_base, read_axis


def load_study(path: str | Path) -> Study:
    """Read and check a study file.

    Arguments:
        path: a TOML file.

    Raises:
        ScenarioError: for every way in which the file, or the scenario it starts from, can be missing or wrong.
    """
    path = Path(path)
    return loads_study(read_text(path), path.parent, str(path))


def loads_study(text: str, folder: Path = Path(), source: str = "study") -> Study:
    """The same for text in memory.

    Arguments:
        text: what would stand in the file. folder: from which other files are seen. source: the name used in errors.
    """
    return study_from_tables(parse_toml(text, source), folder, source)


def study_from_tables(tables: dict[str, Any], folder: Path = Path(), source: str = "study") -> Study:
    """The same for a nested dictionary such as `tomllib` returns."""
    problems: list[Problem] = []
    try:
        StudyFile.model_validate(tables)
    except ValidationError as error:
        problems = reword(error, tables, StudyFile)
    reading = _Reading(tables, folder)
    if problems := problems + reading.problems:
        raise ScenarioError(source, problems)
    study = reading.study()
    tried = try_points(study)
    if tried.n_invalid == len(tried.reasons):
        reasons = [Problem(f"point {point}", reason) for point, reason in list(tried.invalid.items())[:3]]
        lead = Problem("", f"none of the {len(tried.reasons)} points tried makes a valid scenario; for example")
        raise ScenarioError(source, [lead, *reasons])
    return study


def study_schema() -> dict[str, Any]:
    """The JSON Schema of study files."""
    return {"$schema": "https://json-schema.org/draft/2020-12/schema"} | StudyFile.model_json_schema()


class _Reading:
    """The parts of a file that are fine by themselves, and what does not fit among them and with the base.

    Parts with errors are left out, so that one error hides as few others as possible.
    """

    def __init__(self, tables: dict[str, Any], folder: Path) -> None:
        self._parts = _sound_parts(tables)
        self.problems: list[Problem] = []
        self._axes: list[Axis] = []
        self._places: list[str] = []
        self._n_vary = len(tables["vary"]) if isinstance(tables.get("vary"), list) else 0
        self._setter: Setter | None = None
        self._read_base(folder)
        self._read_axes(tables, folder)
        if "design" in self._parts:
            self.problems += self._design_misfits(self._parts["design"])
        self.problems += self._misfits()

    def study(self) -> Study:
        """The study, if there are no problems."""
        assert self._setter is not None
        parts, base = self._parts, self._setter.base
        design, seed = parts["design"], parts.get("seed")
        seed = base.trial.seed if seed is None else seed
        stop = parts.get("stop")
        return Study(
            name=parts["about"].name,
            note=parts["about"].note,
            base=base,
            points=make_points(design.kind, self._axes, design.points, seed),
            replicates=parts.get("replicates") or base.trial.replicates,
            stop=Stop(stop.output, stop.relative_width, stop.most) if stop else None,
            seed=seed,
            outputs=parts.get("outputs") or (ARRIVAL, BLOCK_SPEED),
            design=design.kind,
            axes=tuple(self._axes),
            demand=parts.get("demand") or "",
        )

    def _read_base(self, folder: Path) -> None:
        if "base" not in self._parts:
            return
        try:
            self._setter = Setter(load_base(self._parts["base"], folder))
        except ScenarioError as error:
            self.problems += [Problem("base", f"{error.source}: {problem}") for problem in error.problems]

    def _read_axes(self, tables: dict[str, Any], folder: Path) -> None:
        if self._setter is None or not isinstance(tables.get("vary"), list):
            return
        for k, table in enumerate(tables["vary"], 1):
            with suppress(ValidationError):  # told already
                try:
                    axis = read_axis(Vary.model_validate(table), f"vary[{k}]", self._setter, folder)
                except Wrong as wrong:
                    self.problems += wrong.problems
                else:
                    self._axes.append(axis)
                    self._places.append(f"vary[{k}]")
        self.problems += self._overlaps(self._setter)

    def _overlaps(self, setter: Setter) -> Iterator[Problem]:
        """Axes that set the same key, or have the same name."""
        names = Counter(axis.name for axis in self._axes)
        for k, axis in enumerate(self._axes):
            before = self._axes[:k]
            if names[axis.name] > 1 and any(other.name == axis.name for other in before):
                yield Problem(self._places[k], f'"{axis.name}" is varied above already')
                continue
            for other, place in zip(before, self._places, strict=False):
                pairs = [
                    (mine, theirs)
                    for mine in keys_set(axis)
                    for theirs in keys_set(other)
                    if setter.overlapping([mine, theirs])
                ]
                for mine, theirs in pairs[:1]:
                    yield Problem(self._places[k], f"sets {mine}, and {place} sets {theirs}; only one of them can")

    def _design_misfits(self, design: Design) -> Iterator[Problem]:
        """What does not fit between the design and the axes."""
        if design.kind in SAMPLED and design.points is None:
            yield Problem("design.points", f"missing (how many points a {design.kind} design has)")
        if design.kind not in SAMPLED and design.points is not None:
            yield Problem("design.points", f"a {design.kind} has as many points as its values give; leave it out")
        points = design.points or 0
        if design.kind in EVEN and points <= MAX_POINTS and points & (points - 1):
            lower = 2 ** (points.bit_length() - 1)
            yield Problem("design.points", f"{points} given; must be a power of two, e.g. {lower} or {2 * lower}")
        for axis, place in zip(self._axes, self._places, strict=True):
            yield from _axis_misfits(design.kind, axis, place)
        if design.kind == "list" and len({len(axis.values) for axis in self._axes if axis.values}) > 1:
            lengths = ", ".join(
                f"{place}: {len(axis.values)}"
                for axis, place in zip(self._axes, self._places, strict=True)
                if axis.values
            )
            yield Problem(
                "design.kind", f"a list goes through all values together, but their numbers differ ({lengths})"
            )
        is_known = len(self._axes) == self._n_vary > 0
        number = n_points(design.kind, self._axes, design.points) if is_known else points
        if number > MAX_POINTS:
            yield Problem("design", f"{shown(number)} points; there can be at most {MAX_POINTS}")

    def _misfits(self) -> Iterator[Problem]:
        stop, given = self._parts.get("stop"), self._parts.get("replicates")
        own = self._setter.base.trial.replicates if self._setter else None
        replicates = given or own
        if stop and replicates == 1:
            yield Problem("replicates", "1 given; an interval, which [stop] asks for, needs at least 2")
        elif stop and replicates and stop.most < replicates:
            yield Problem("stop.most", f"{stop.most} given; must be at least the {replicates} replicates at first")
        outputs = self._parts.get("outputs") or (ARRIVAL, BLOCK_SPEED)
        demand = self._parts.get("demand")
        if demand and (name := read_demand(demand).name) not in outputs:
            yield Problem("demand", f"{name} is not among the outputs ({', '.join(outputs)}); add it there")
        if len(set(outputs)) < len(outputs):
            yield Problem("outputs", "one of them is named twice")


def _axis_misfits(kind: Kind, axis: Axis, place: str) -> Iterator[Problem]:
    """What does not fit between a design and one axis."""
    is_range = not axis.values
    if kind == "grid" and is_range and axis.n is None:
        yield Problem(f"{place}.n", "missing (how many values of the range a grid takes)")
    if kind == "list" and is_range:
        yield Problem(place, "a list needs values, not a range")
    if kind != "grid" and axis.n is not None:
        yield Problem(f"{place}.n", f"only a grid takes a number of values of a range; a {kind} design has points")
    if kind == "grid" and is_range and axis.is_whole and axis.n is not None:
        low, high = axis.ends
        if axis.n > high - low + 1 or len(set(grid_values(axis).tolist())) < axis.n:
            yield Problem(f"{place}.n", f"{axis.n} given; the range does not hold so many different whole numbers")
    if kind != "list" and axis.values:
        twice = [axis.written(value) for value, count in Counter(axis.values).items() if count > 1]
        if twice:
            yield Problem(f"{place}.values", f"{twice[0]} is given twice")
    if kind in ("screening", "sensitivity") and len(axis.values) == 1:
        yield Problem(place, f"a {kind} design needs at least two values of everything that is varied")


def _sound_parts(tables: dict[str, Any]) -> dict[str, Any]:
    """The parts of a file, but [[vary]], that are fine by themselves."""
    parts = {}
    for name, field in StudyFile.model_fields.items():
        if name in tables and name != "vary":
            part: Any = Annotated[field.annotation, field]
            with suppress(ValidationError):
                parts[name] = TypeAdapter(part).validate_python(tables[name])
    return parts
