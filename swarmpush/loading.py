"""Reading a scenario file, and saying everything that is wrong with it at once.

The order of work: read bytes, parse TOML, check every key against the model, then check how the values fit
together. Each problem names the file, the key, the value and what is allowed.
"""

from __future__ import annotations

import difflib
import math
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from swarmpush.quantities import for_people
from swarmpush.scenario import Scenario

MAX_FILE_BYTES = 1_000_000  # a scenario is a few kilobytes; a larger file is something else
MAX_PACKING = 0.5  # share of the start region that discs can fill by random placement without getting stuck


@dataclass(frozen=True)
class Problem:
    """One thing wrong: the key's path ("" for the whole file) and a sentence with the remedy."""

    key: str
    sentence: str

    def __str__(self) -> str:
        return f"{self.key}: {self.sentence}" if self.key else self.sentence


class ScenarioError(ValueError):
    """A scenario cannot be used. `problems` lists every reason; the message is readable as it stands."""

    def __init__(self, source: str, problems: list[Problem]) -> None:
        self.source = source
        self.problems = tuple(problems)
        count = "1 problem" if len(problems) == 1 else f"{len(problems)} problems"
        lines = [f"{source}: {count}", *(f"  {problem}" for problem in problems)]
        super().__init__("\n".join(lines))


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
    return _parse(_read(path), str(path))


def loads(text: str, source: str = "scenario") -> Scenario:
    """The same for text in memory; `source` is the name used in errors."""
    return _parse(text, source)


def from_tables(tables: dict[str, Any], source: str = "scenario") -> Scenario:
    """The same for a nested dictionary such as `tomllib` returns.

    Raises:
        ScenarioError: listing every problem found.
    """
    try:
        scenario = Scenario.model_validate(tables)
    except ValidationError as error:
        problems = [_problem(tables, details) for details in error.errors(include_url=False) if not _is_echo(details)]
        raise ScenarioError(source, problems + list(_problems_of_the_rest(tables, error))) from None
    if problems := list(_misfits(scenario)):
        raise ScenarioError(source, problems)
    return scenario


def _read(path: Path) -> str:
    def refuse(sentence: str) -> ScenarioError:
        return ScenarioError(str(path), [Problem("", sentence)])

    try:
        if path.is_dir():
            raise refuse("this is a folder; name a scenario file (.toml)")
        with path.open("rb") as file:
            raw = file.read(MAX_FILE_BYTES + 1)
    except FileNotFoundError:
        raise refuse("no such file") from None
    except (OSError, ValueError) as error:  # ValueError: a name with a null character
        raise refuse(f"cannot be read ({getattr(error, 'strerror', None) or error})") from None
    if len(raw) > MAX_FILE_BYTES:
        raise refuse(f"larger than {MAX_FILE_BYTES // 1000} kB, so it is no scenario")
    try:
        return raw.decode("utf-8-sig").replace("\r\n", "\n")
    except UnicodeDecodeError as error:
        raise refuse(f"not a text file (byte {error.start} is not UTF-8)") from None


def _parse(text: str, source: str) -> Scenario:
    if not text.strip():
        raise ScenarioError(source, [Problem("", "empty; start from a copy of one of the demo scenarios")])
    try:
        tables = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ScenarioError(source, [Problem("", f"not valid TOML: {error}")]) from None
    except (RecursionError, ValueError):  # nested too deeply; a number of thousands of digits
        raise ScenarioError(source, [Problem("", "not valid TOML: nested too deeply or a number too long")]) from None
    return from_tables(tables, source)


# ---- wording of model errors ---------------------------------------------------------------------------------


def _is_echo(details: Any) -> bool:
    """A list that is too short only because its items were found wrong, which is said already."""
    return details["type"] == "too_short" and len(details["input"]) > details["ctx"]["actual_length"]


def _problem(tables: dict[str, Any], details: Any) -> Problem:
    location = [part for part in details["loc"] if _is_in_file(part)]
    key = _written(location)
    context = details.get("ctx", {})
    given = f"{_shown(details['input'])} given"
    match details["type"]:
        case "extra_forbidden":
            return Problem(key, "unknown key" + _nearest(location, details["loc"]))
        case "missing":
            return Problem(key, "missing" + _meaning(details["loc"]))
        case "greater_than":
            return Problem(key, f"{given}; must be more than {_limit(context['gt'])}")
        case "greater_than_equal":
            return Problem(key, f"{given}; must be at least {_limit(context['ge'])}")
        case "less_than":
            return Problem(key, f"{given}; must be less than {_limit(context['lt'])}")
        case "less_than_equal":
            return Problem(key, f"{given}; must be at most {_limit(context['le'])}")
        case "literal_error":
            return Problem(key, f"{given}; allowed: {context['expected'].replace(chr(39), chr(34))}")
        case "union_tag_invalid":
            tag = details["ctx"]["discriminator"].strip("'")
            return Problem(
                f"{key}.{tag}",
                f"{_shown(context['tag'])} given; allowed: {context['expected_tags'].replace(chr(39), chr(34))}",
            )
        case "union_tag_not_found":
            return Problem(key, f"the key {context['discriminator'].strip(chr(39))} is missing")
        case "value_error":
            return Problem(key, str(context["error"]))
        case "model_type" | "dict_type" | "model_attributes_type":
            return Problem(key, f"{given}; expected a table [{key}]")
        case _:
            return Problem(key, f"{given}; {details['msg'][0].lower()}{details['msg'][1:]}")


_TAGS = {
    "run", "turn", "depart", "mirror", "wander", "tally", "branch", "halt", "contact", "counter", "time",
}  # fmt: skip


def _is_in_file(part: object) -> bool:
    """Whether a part of a model error's location is something the user wrote, not a tag of a union."""
    return not (isinstance(part, str) and part in _TAGS)


def _written(location: list[Any]) -> str:
    text = ""
    for part in location:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text


def _shown(value: object) -> str:
    text = f'"{value}"' if isinstance(value, str) else repr(value)
    if isinstance(value, dict):
        text = "a table"
    elif isinstance(value, list | tuple):
        text = "a list"
    elif isinstance(value, bool):
        text = str(value).lower()
    return text if len(text) <= 60 else text[:57] + "..."


def _limit(value: object) -> str:
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def _keys_at(location: tuple[Any, ...]) -> list[str]:
    """The keys that the model knows at a place given by an error's location."""
    model: Any = Scenario
    for part in location:
        if isinstance(part, int) or model is None:
            continue
        model = _model_below(model, part)
    return list(model.model_fields) if model is not None else []


def _model_below(model: type[BaseModel], part: str) -> type[BaseModel] | None:
    if part in _TAGS and part not in model.model_fields:
        return _tagged_model(model, part)
    field = model.model_fields.get(part)
    return _first_model(field.annotation) if field else None


def _tagged_model(model: type[BaseModel], tag: str) -> type[BaseModel] | None:
    from swarmpush import routine

    by_tag: dict[str, type[BaseModel]] = {
        "run": routine.Run, "turn": routine.Turn, "depart": routine.Depart, "mirror": routine.Mirror,
        "wander": routine.Wander, "tally": routine.Tally, "halt": routine.Halt,
        "contact": routine.BranchContact, "counter": routine.BranchCounter, "time": routine.BranchTime,
        "branch": routine.BranchContact,
    }  # fmt: skip
    return by_tag.get(tag)


def _first_model(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for inner in get_args(annotation):
        if found := _first_model(inner):
            return found
    return None


def _nearest(location: list[Any], full_location: tuple[Any, ...]) -> str:
    known = _keys_at(full_location[:-1])
    close = difflib.get_close_matches(str(location[-1]), known, n=1, cutoff=0.6)
    if close:
        return f"; did you mean '{close[0]}'?"
    return f"; known here: {', '.join(known)}" if known else ""


def _meaning(full_location: tuple[Any, ...]) -> str:
    parent: Any = Scenario
    for part in full_location[:-1]:
        parent = _model_below(parent, part) if isinstance(part, str) and parent is not None else parent
    field = parent.model_fields.get(full_location[-1]) if parent is not None else None
    return f" ({field.description})" if field is not None and field.description else ""


def _problems_of_the_rest(tables: dict[str, Any], error: ValidationError) -> Iterator[Problem]:
    """Problems of fit that can be seen although some keys are wrong: judge the file without those keys."""
    import copy

    pruned = copy.deepcopy(tables)
    for details in error.errors(include_url=False):
        if not _remove(pruned, [part for part in details["loc"] if _is_in_file(part)]):
            return
    try:
        yield from _misfits(Scenario.model_validate(pruned))
    except ValidationError:
        return


def _remove(tables: Any, location: list[Any]) -> bool:
    try:
        for part in location[:-1]:
            tables = tables[part]
        del tables[location[-1]]
    except (KeyError, IndexError, TypeError):
        return False
    return True


# ---- how the values fit together -----------------------------------------------------------------------------


def _metre(value: float) -> str:
    return for_people(value, "m", 4)


def _misfits(s: Scenario) -> Iterator[Problem]:
    """Values that are fine alone and impossible together."""
    yield from _infinite_values(s)
    diameter = 2 * s.pushers.radius
    if diameter >= s.channel.width:
        yield Problem(
            "pushers.radius",
            f"a pusher ({_metre(diameter)} across) does not fit the channel ({_metre(s.channel.width)} wide)",
        )
    if s.block.width > s.channel.width:
        yield Problem(
            "block.width",
            f"the block ({_metre(s.block.width)}) is wider than the channel ({_metre(s.channel.width)})",
        )
    elif abs(s.block.offset) + s.block.width / 2 > s.channel.width / 2 * (1 + 1e-12):
        yield Problem(
            "block.offset",
            f"{_metre(s.block.offset)} puts the block into a wall; at most {_metre((s.channel.width - s.block.width) / 2)} to either side",
        )
    if s.block_front_at > s.channel.length:
        yield Problem(
            "block.rear_at",
            f"the block's front would stand at {_metre(s.block_front_at)}, beyond the channel's end at {_metre(s.channel.length)}",
        )
    elif s.block_front_at + s.goal.travel > s.channel.length:
        room = s.channel.length - s.block_front_at
        yield Problem(
            "goal.travel",
            f"{_metre(s.goal.travel)} is more than the {_metre(room)} between the block and the channel's end",
        )
    if s.floor is None and s.fluid is None:
        yield Problem("", "neither [floor] nor [fluid] given; say what resists the block")
    if s.floor is not None and s.floor.kinetic_friction > s.floor.static_friction:
        yield Problem(
            "floor.kinetic_friction",
            f"{s.floor.kinetic_friction:g} is more than static_friction ({s.floor.static_friction:g})",
        )
    if (s.forecast.law == "given") != (s.forecast.nudge is not None):
        yield Problem("forecast.nudge", 'needed with law = "given", and only then')
    if s.numerics.step is not None and s.numerics.step * s.pushers.free_speed > 0.5 * s.pushers.radius:
        limit = 0.5 * s.pushers.radius / s.pushers.free_speed
        yield Problem(
            "numerics.step",
            f"in {for_people(s.numerics.step, 's')} a pusher runs more than half its radius; at most {for_people(limit, 's')}",
        )
    if diameter < s.channel.width:
        yield from _start_misfits(s)


def _infinite_values(s: Scenario) -> Iterator[Problem]:
    """Only a turn rate may be infinite (it means: at once)."""

    def walk(value: Any, key: str) -> Iterator[Problem]:
        if isinstance(value, float) and not math.isfinite(value) and key != "pushers.turn_rate":
            yield Problem(key, "must be finite")
        elif isinstance(value, BaseModel):
            for name in type(value).model_fields:
                yield from walk(getattr(value, name), f"{key}.{name}" if key else name)
        elif isinstance(value, tuple):
            for k, item in enumerate(value):
                yield from walk(item, f"{key}[{k + 1}]")

    yield from walk(s, "")


def _start_misfits(s: Scenario) -> Iterator[Problem]:
    from swarmpush.starts import room_for_starts

    if s.start.placed is not None:
        yield from _placed_misfits(s)
        return
    room = room_for_starts(s)
    needed = s.pushers.count * math.pi * s.pushers.radius**2
    if room <= 0:
        yield Problem(
            "start.region",
            f'no room for a pusher "{s.start.region}"; move block.rear_at or lengthen the channel',
        )
    elif needed > MAX_PACKING * room:
        most = int(MAX_PACKING * room / (math.pi * s.pushers.radius**2))
        yield Problem(
            "pushers.count",
            f'{s.pushers.count} pushers do not fit the start region "{s.start.region}"; at most {most}',
        )


def _placed_misfits(s: Scenario) -> Iterator[Problem]:
    placed = s.start.placed or ()
    if len(placed) != s.pushers.count:
        yield Problem("start.placed", f"{len(placed)} pushers placed, but pushers.count = {s.pushers.count}")
    r, half_width = s.pushers.radius, s.block.width / 2
    middle = s.channel.width / 2 + s.block.offset
    for k, p in enumerate(placed):
        key = f"start.placed[{k + 1}]"
        if not (r <= p.x <= s.channel.length - r and r <= p.y <= s.channel.width - r):
            yield Problem(
                key,
                f"({p.x:g}, {p.y:g}) m puts the pusher into a wall; its centre must keep {for_people(r, 'm')} from every wall",
            )
            continue
        gap_x = max(s.block.rear_at - p.x, p.x - s.block_front_at, 0.0)
        gap_y = max(abs(p.y - middle) - half_width, 0.0)
        if math.hypot(gap_x, gap_y) < r * (1 - 1e-9):
            yield Problem(key, f"({p.x:g}, {p.y:g}) m puts the pusher into the block")
        for j, q in enumerate(placed[:k]):
            if not s.pushers.pass_through and math.hypot(p.x - q.x, p.y - q.y) < 2 * r * (1 - 1e-9):
                yield Problem(key, f"overlaps start.placed[{j + 1}]")
