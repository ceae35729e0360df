"""Reading a scenario file, and saying everything that is wrong with it at once.

The order of work: read bytes, parse TOML, check every key against the model, then check how the values fit
together. Each problem names the file, the key, the value and what is allowed.
"""

from __future__ import annotations

import difflib
import json
import tomllib
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NamedTuple, get_args

from pydantic import BaseModel, TypeAdapter, ValidationError
from pydantic.fields import FieldInfo

from swarmpush.misfits import CHECKS
from swarmpush.problems import Problem, ScenarioError
from swarmpush.quantities import Quantity, for_people
from swarmpush.scenario import Scenario

if TYPE_CHECKING:
    pass

MAX_FILE_BYTES = 1_000_000  # a scenario is a few kilobytes; a larger file is something else


def load(path: str | Path) -> Scenario:
    """Read and check a scenario file.

    Arguments:
        path: a TOML file.

    Returns:
        The scenario, in SI units.

    Raises:
        ScenarioError: for every way in which the file can be missing, unreadable or wrong.
    """
    path = Path(path)
    return loads(read_text(path), str(path))


def loads(text: str, source: str = "scenario") -> Scenario:
    """The same for text in memory; `source` is the name used in errors."""
    return from_tables(parse_toml(text, source), source)


def from_tables(tables: dict[str, Any], source: str = "scenario") -> Scenario:
    """The same for a nested dictionary such as `tomllib` returns.

    Raises:
        ScenarioError: listing every problem found.
    """
    try:
        scenario = Scenario.model_validate(tables)
    except ValidationError as error:
        raise ScenarioError(source, reword(error, tables, Scenario) + list(_misfits_of_the_rest(tables))) from None
    if problems := [problem for check in CHECKS for problem in check(scenario)]:
        raise ScenarioError(source, problems)
    return scenario


def read_text(path: Path) -> str:
    """The text of a file that should hold TOML.

    Raises:
        ScenarioError: when it is missing, too large or no text.
    """

    def refuse(sentence: str) -> ScenarioError:
        return ScenarioError(str(path), [Problem("", sentence)])

    try:
        with path.open("rb") as file:
            raw = file.read(MAX_FILE_BYTES + 1)
    except FileNotFoundError:
        raise refuse("no such file") from None
    except IsADirectoryError:
        raise refuse("this is a folder; name a scenario file (.toml)") from None
    except (OSError, ValueError) as error:  # ValueError: a name with a null character
        raise refuse(f"cannot be read ({getattr(error, 'strerror', None) or error})") from None
    if len(raw) > MAX_FILE_BYTES:
        raise refuse(f"larger than {MAX_FILE_BYTES // 1000} kB, so it is no scenario")
    try:
        return raw.decode("utf-8-sig").replace("\r\n", "\n")
    except UnicodeDecodeError as error:
        raise refuse(f"not a text file (byte {error.start} is not UTF-8)") from None


def parse_toml(text: str, source: str) -> dict[str, Any]:
    """The nested tables of a TOML text.

    Raises:
        ScenarioError: when it is empty or no TOML.
    """
    if not text.strip():
        raise ScenarioError(source, [Problem("", "empty; start from a copy of one of the demo scenarios")])
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ScenarioError(source, [Problem("", f"not valid TOML: {error}")]) from None
    except (RecursionError, ValueError):  # ValueError: a number of thousands of digits
        raise ScenarioError(source, [Problem("", "nested too deeply, or a number too long")]) from None


# ---- wording of model errors ---------------------------------------------------------------------------------


def reword(error: ValidationError, tables: dict[str, Any], model: type[BaseModel]) -> list[Problem]:
    """What a model found wrong with the tables of a file, in words; one problem each."""
    return [_problem(tables, details, model) for details in error.errors(include_url=False) if not _is_echo(details)]


def _is_echo(details: Any) -> bool:
    """A list that is too short only because its items were found wrong, which is said already."""
    return bool(details["type"] == "too_short" and len(details["input"]) > details["ctx"]["actual_length"])


def _problem(tables: dict[str, Any], details: Any, model: type[BaseModel]) -> Problem:
    place = _find(details["loc"], model)
    key = _written(place.keys)
    context = details.get("ctx", {})
    match details["type"]:
        case "extra_forbidden":
            return Problem(key, "unknown key" + _nearest(place))
        case "missing":
            meaning = place.field.description if place.field else None
            return Problem(key, f"missing ({meaning})" if meaning else "missing")
        case "union_tag_invalid":
            allowed = context["expected_tags"].replace("'", '"')
            tag = context["discriminator"].strip("'")
            return Problem(f"{key}.{tag}", f"{shown(context['tag'])} given; allowed: {allowed}")
        case "union_tag_not_found":
            return Problem(key, f"the key {context['discriminator']} is missing")
        case "value_error" if isinstance(details["input"], dict):
            return Problem(key, str(context["error"]))
    given = f"{shown(_value_at(tables, place.keys))} given"
    match details["type"]:
        case "too_short":
            return Problem(key, f"{given}; must have at least {context['min_length']} items")
        case "too_long":
            return Problem(key, f"{given}; must have at most {context['max_length']} items")
        case "greater_than" | "greater_than_equal" | "less_than" | "less_than_equal" if place.field:
            return Problem(key, f"{given}; must be {_bounds(place.field)}")
        case "literal_error":
            allowed = context["expected"].replace("'", '"')
            return Problem(key, f"{given}; allowed: {allowed}")
        case "value_error":
            return Problem(key, f"{given}; {context['error']}")
        case kind if kind in _KINDS:
            return Problem(key, f"{given}; must be {_KINDS[kind]}")
        case _:
            return Problem(key, f"{given}; {details['msg'][0].lower()}{details['msg'][1:]}")


_KINDS = {
    "model_type": "a table",
    "model_attributes_type": "a table",
    "tuple_type": "a list",
    "dict_type": "a table",
    "string_type": "text",
    "int_type": "a whole number",
    "bool_type": "true or false",
}


class _Place(NamedTuple):
    """Where an error is.

    keys: the way to it as written in the file.
    table: the model of the table that holds the last key, None where the model knows nothing.
    field: the model's field of the last key, None for an unknown key.
    """

    keys: tuple[str | int, ...]
    table: type[BaseModel] | None
    field: FieldInfo | None


def _find(location: tuple[str | int, ...], model: type[BaseModel]) -> _Place:
    """Follow a model error's location; where several models can stand, it holds a tag that is not in the file."""
    keys: list[str | int] = []
    models: list[type[BaseModel]] = [model]
    table: type[BaseModel] | None = None
    field: FieldInfo | None = None
    for part in location:
        if isinstance(part, str) and len(models) > 1:
            models = [model for model in models if _is_tagged(model, part)]
            continue
        keys.append(part)
        if isinstance(part, str):
            table = models[0] if models else None
            field = table.model_fields.get(part) if table else None
            models = _models_in(field.annotation) if field else []
    return _Place(tuple(keys), table, field)


def _models_in(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for inner in get_args(annotation) for model in _models_in(inner)]


def _is_tagged(model: type[BaseModel], tag: str) -> bool:
    return any(get_args(field.annotation) == (tag,) for field in model.model_fields.values())


def _written(keys: tuple[str | int, ...]) -> str:
    text = ""
    for key in keys:
        if isinstance(key, int):
            text += f"[{key + 1}]"
        else:
            text += ("." if text else "") + (key if key.isprintable() else shown(key))
    return text


def _value_at(tables: Any, keys: tuple[str | int, ...]) -> Any:
    for key in keys:
        tables = tables[key]
    return tables


def shown(value: object) -> str:
    """A value as a person would write it in the file, shortened."""
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list | tuple):
        return "a list"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, int) and abs(value) > 10**50:
        return "a huge number"  # which Python may even refuse to write
    text = json.dumps(value, ensure_ascii=False) if isinstance(value, str) else str(value)
    return text if len(text) <= 60 else text[:57] + "..."


_BOUNDS = {"gt": "more than", "ge": "at least", "lt": "less than", "le": "at most"}


def _bounds(field: FieldInfo) -> str:
    """The range that a field allows, in words."""
    unit = _unit_of(field)
    return " and ".join(
        f"{words} {for_people(getattr(bound, name), unit, 6)}"
        for bound in field.metadata
        for name, words in _BOUNDS.items()
        if hasattr(bound, name)
    )


def _unit_of(field: FieldInfo) -> str:
    optional = [mark for option in get_args(field.annotation) for mark in getattr(option, "__metadata__", ())]
    return next((mark.si_unit for mark in [*field.metadata, *optional] if isinstance(mark, Quantity)), "1")


def _nearest(place: _Place) -> str:
    known = list(place.table.model_fields) if place.table else []
    close = difflib.get_close_matches(str(place.keys[-1]), known, n=1, cutoff=0.6)
    if close:
        return f"; did you mean '{close[0]}'?"
    return f"; known here: {', '.join(known)}" if known else ""


# ---- what fits together in a file with other errors ------------------------------------------------------------


def _misfits_of_the_rest(tables: dict[str, Any]) -> Iterator[Problem]:
    """What does not fit among those values that are fine alone, for a file in which others are wrong."""
    rest = _salvage(Scenario, tables)
    for check in CHECKS:
        with suppress(AttributeError):  # the check asks for a value that is not there
            yield from check(rest)


def _salvage(model: type[Any], table: dict[str, Any]) -> Any:
    """The model with those values that are fine; a wrong or missing one is no attribute of it."""
    values: dict[str, Any] = {}
    for name, field in model.model_fields.items():
        if name in table:
            value_type: Any = Annotated[field.annotation, field]
            try:
                values[name] = TypeAdapter(value_type).validate_python(table[name])
            except ValidationError:
                inner = _models_in(field.annotation)
                if inner and isinstance(table[name], dict):
                    values[name] = _salvage(inner[0], table[name])
        elif not field.is_required():
            values[name] = field.get_default()
    rest = model.model_construct()  # with a default also where the file has a wrong value
    rest.__dict__.clear()
    rest.__dict__.update(values)
    return rest
