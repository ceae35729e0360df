"""What a [[vary]] table of a study file means: an axis, or what is wrong with it."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Any, Literal, get_args, get_origin

from swarmpush.auditing.claims import MEASURES
from swarmpush.demos import DEMOS, demo
from swarmpush.loading import load, shown
from swarmpush.problems import Problem, ScenarioError
from swarmpush.quantities import to_si
from swarmpush.scenario import Scenario
from swarmpush.studies.setting import Setter
from swarmpush.studies.study import Axis, Value
from swarmpush.studies.study_tables import Vary
from swarmpush.vary import field_at, unit_at

# keys that change no run: a study has its own name, seed, replicates and confidence
WITHOUT_EFFECT = (
    "format",
    "about",
    "trial.replicates",
    "trial.seed",
    "trial.confidence",
    "trial.tolerance",
    "forecast",
)
RESERVED = ("point", "replicate", "seed", *MEASURES, *(column for column, _ in MEASURES.values()))
CHECKED_ONE_BY_ONE = 100  # values; of more, the ends are checked and the rest when points are tried


class Wrong(Exception):
    """Something is wrong with a part of a study file."""

    def __init__(self, *problems: Problem) -> None:
        self.problems = problems


def read_axis(v: Vary, place: str, setter: Setter, folder: Path) -> Axis:
    """The axis of a [[vary]] table.

    Arguments:
        v: the table. place: where it stands, for messages. setter: of the base. folder: from which files are seen.

    Raises:
        Wrong: with all that is wrong with it.
    """
    if v.key is not None and v.name is None:
        return _key_axis(v, v.key, place, setter)
    if v.name is not None and v.key is None:
        return _option_axis(v, v.name, place, setter, folder)
    raise Wrong(Problem(place, "give either a key of the scenario, or a name with options"))


def keys_set(axis: Axis) -> list[str]:
    """All keys that an axis sets."""
    if axis.options is None:
        return [axis.name]
    return list(dict.fromkeys(key for changes in axis.options.values() for key in changes))


def load_base(text: str, folder: Path) -> Scenario:
    """The scenario that a study file names: a demo, or a file seen from the study file's folder.

    Raises:
        ScenarioError: when there is none, or it is wrong.
    """
    if text in DEMOS:
        return load(demo(text))
    if not text.endswith(".toml"):
        close = difflib.get_close_matches(text, DEMOS, n=1, cutoff=0.6)
        meant = f"; did you mean '{close[0]}'?" if close else ""
        sentence = f"neither a demo ({', '.join(DEMOS)}) nor a scenario file (.toml){meant}"
        raise ScenarioError(text, [Problem("", sentence)])
    return load(folder / text)


def _key_axis(v: Vary, key: str, place: str, setter: Setter) -> Axis:
    problems = [*_wrong_key(key, f"{place}.key", setter)]
    if v.options is not None:
        problems.append(Problem(f"{place}.options", "options go with a name, a key with values or a range"))
    if v.values is not None and any(end is not None for end in (v.low, v.high, v.n)):
        problems.append(Problem(place, "give either values, or low and high with n"))
    elif v.values is None and (v.low is None or v.high is None):
        problems.append(Problem(place, "give values, or low and high"))
    if problems:
        raise Wrong(*problems)
    kind, unit = _kind(setter.base, key), unit_at(setter.base, key)
    if v.values is not None:
        if v.scale != "linear":
            raise Wrong(Problem(f"{place}.scale", "a scale goes with low and high"))
        values = _values(v.values, key, kind, unit, place, setter)
        return Axis(key, unit, values=values, is_whole=kind == "count")
    if kind not in ("count", "number"):
        raise Wrong(Problem(place, f"{key} holds no number, so it has no range; give values"))
    low, high = _values((v.low, v.high), key, kind, unit, place, setter, ("low", "high"))
    low, high = float(low), float(high)
    if not math.isfinite(low) or not math.isfinite(high):
        raise Wrong(Problem(place, "the ends of a range must be finite"))
    if low >= high:
        raise Wrong(Problem(f"{place}.high", f"{shown(v.high)} given; must be more than low = {shown(v.low)}"))
    is_log = v.scale == "log"
    if is_log and low <= 0.0:
        raise Wrong(Problem(f"{place}.low", f'{shown(v.low)} given; must be more than 0 with scale = "log"'))
    return Axis(key, unit, low, high, is_log, kind == "count", v.n)


def _option_axis(v: Vary, name: str, place: str, setter: Setter, folder: Path) -> Axis:
    problems = []
    if name in RESERVED or setter.is_known(name):
        problems.append(Problem(f"{place}.name", f'"{name}" is taken already; choose another name'))
    problems += [
        Problem(f"{place}.{other}", "goes with a key of the scenario, not with a name")
        for other in ("values", "low", "high", "n")
        if getattr(v, other) is not None
    ]
    if v.scale != "linear":
        problems.append(Problem(f"{place}.scale", "a scale goes with low and high"))
    if v.options is None:
        raise Wrong(*problems, Problem(f"{place}.options", "missing (option -> the keys that it sets)"))
    options = {}
    for option, tables in v.options.items():
        try:
            options[option] = _option(tables, f"{place}.options.{option}", setter, folder)
        except Wrong as wrong:
            problems += wrong.problems
    if problems:
        raise Wrong(*problems)
    return Axis(name, values=tuple(options), options=options)


def _option(tables: dict[str, Any], place: str, setter: Setter, folder: Path) -> dict[str, Any]:
    """The keys that an option sets, with their values."""
    references = {key: value["from"] for key, value in tables.items() if _is_reference(value)}
    changes = setter.flat({key: value for key, value in tables.items() if key not in references})
    changes |= _fetched(references, place, folder)
    if problems := [problem for key in changes for problem in _wrong_setting(key, place, setter)]:
        raise Wrong(*problems)
    if pairs := setter.overlapping(changes):
        raise Wrong(*(Problem(place, f"sets {other} and {key}, of which one holds the other") for key, other in pairs))
    if misread := setter.misread(changes):
        raise Wrong(*(Problem(place, f"{problem.key}: {problem.sentence}") for problem in misread))
    return changes


def _is_reference(value: Any) -> bool:
    """Whether a value says from which scenario it is to be taken: `{ from = "file.toml" }`."""
    return isinstance(value, dict) and value.keys() == {"from"}


def _fetched(references: dict[str, Any], place: str, folder: Path) -> dict[str, Any]:
    """Keys with their values in other scenarios; a table replaces that of the base as a whole."""
    values, problems = {}, []
    for key, name in references.items():
        try:
            values[key] = Setter(load_base(str(name), folder)).plain_at(key)
        except ScenarioError as error:
            problems += [Problem(place, f"{key} from {error.source}: {problem}") for problem in error.problems]
            continue
        if values[key] is None:
            problems.append(Problem(place, f"{name} has no {key}"))
    if problems:
        raise Wrong(*problems)
    return values


def _wrong_key(key: str, place: str, setter: Setter) -> Iterator[Problem]:
    if setter.is_single(key) and _kind(setter.base, key) in ("table", "list"):
        yield Problem(place, f"{key} holds a table or a list; set it with options")
    elif setter.is_single(key):
        yield from _without_effect(key, place)
    elif setter.is_known(key):
        yield Problem(place, f"{key} holds a table or a list; vary a key in it, or set it with options")
    else:
        yield setter.unknown(key, place)


def _wrong_setting(key: str, place: str, setter: Setter) -> Iterator[Problem]:
    if setter.is_known(key):
        yield from _without_effect(key, place)
    else:
        yield setter.unknown(key, place)


def _without_effect(key: str, place: str) -> Iterator[Problem]:
    if any(key == name or key.startswith(f"{name}.") for name in WITHOUT_EFFECT):
        yield Problem(place, f"{key} changes no run, so there is nothing to study")


def _values(
    given: tuple[Any, ...],
    key: str,
    kind: str,
    unit: str,
    place: str,
    setter: Setter,
    names: tuple[str, ...] = (),
) -> tuple[Value, ...]:
    """Values of a key in SI units, each fit to stand in the scenario.

    Arguments:
        given: as in the file. key, kind, unit: of the scenario. place: of the table. setter: of the base.
        names: keys of the table under which the values stand; left out: values[1], values[2] ...
    """
    places = names or [f"values[{k}]" for k in range(1, len(given) + 1)]
    values: list[Value] = []
    problems = []
    for name, value in zip(places, given, strict=True):
        try:
            values.append(_value(value, kind, unit))
        except ValueError as error:
            problems.append(Problem(f"{place}.{name}", f"{shown(value)} given; {error}"))
    if problems:
        raise Wrong(*problems)
    for k in _to_check(values):
        for problem in setter.misread({key: values[k]}):
            reason = problem.sentence.partition(" given; ")[2] or problem.sentence
            problems.append(Problem(f"{place}.{places[k]}", f"{shown(given[k])} given; {reason}"))
    if problems:
        raise Wrong(*problems)
    return tuple(values)


def _to_check(values: list[Value]) -> list[int]:
    """Which values to check by themselves: all, or of many numbers the least and the largest."""
    numbers = [value for value in values if not isinstance(value, str)]
    if len(values) <= CHECKED_ONE_BY_ONE or len(numbers) < len(values):
        return list(range(len(values)))
    return sorted({numbers.index(min(numbers)), numbers.index(max(numbers))})


def _value(value: Any, kind: str, unit: str) -> Value:
    """A value as its key holds it. Raises ValueError with a sentence."""
    if kind == "text":
        if not isinstance(value, str):
            raise ValueError("must be text")
        return value
    if kind == "yes or no":
        if not isinstance(value, bool):
            raise ValueError("must be true or false")
        return value
    number = to_si(value, unit)
    if kind == "number":
        return number
    if not number.is_integer():  # also without end
        raise ValueError("must be a whole number")
    return int(number)


def _kind(s: Scenario, key: str) -> Literal["text", "yes or no", "count", "number", "table", "list"]:
    """What a key holds."""
    annotation = field_at(s, key).annotation
    kinds = _kinds(annotation, is_item=key.endswith("]"))
    for atom, kind in _ATOMS.items():
        if atom in kinds:
            return kind
    return "table"


_ATOMS: dict[Any, Literal["text", "yes or no", "count", "number", "list"]] = {
    bool: "yes or no", int: "count", float: "number", str: "text", tuple: "list"
}  # fmt: skip


def _kinds(annotation: Any, *, is_item: bool) -> set[Any]:
    """The plain types within an annotation such as `Annotated[float, Quantity("m")] | None`."""
    origin = get_origin(annotation)
    if origin is Annotated:
        return _kinds(get_args(annotation)[0], is_item=is_item)
    if origin is Literal:
        return {type(value) for value in get_args(annotation)}
    if origin is tuple and not is_item:
        return {tuple}
    if origin is None:
        return {annotation}
    return {kind for part in get_args(annotation) for kind in _kinds(part, is_item=is_item)}
