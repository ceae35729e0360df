"""Several keys of a scenario set at once, and checked once: a study does this for every point."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from functools import cached_property
from itertools import combinations
from typing import Any

from pydantic import ValidationError

from swarmpush.loading import from_tables, reword
from swarmpush.problems import Problem, ScenarioError
from swarmpush.scenario import Scenario
from swarmpush.vary import Way, known_keys, nearest_keys, written


class Setter:
    """Makes scenarios from one scenario by setting keys; keys are written as in `vary.py`.

    Besides keys with a single value, whole tables and lists can be set, e.g. `routine` or `start`.
    """

    def __init__(self, base: Scenario) -> None:
        self.base = base

    def set(self, changes: Mapping[str, Any], source: str) -> Scenario:
        """The scenario with some keys set, checked like a file.

        Arguments:
            changes: key -> SI number, text as in a file, or plain tables and lists. source: the name used in errors.

        Raises:
            ScenarioError: when a key does not exist, or the values make no valid scenario.
        """
        if unknown := [self.unknown(key) for key in changes if not self.is_known(key)]:
            raise ScenarioError(source, unknown)
        return from_tables(self._changed(changes), source)

    def misread(self, changes: Mapping[str, Any]) -> list[Problem]:
        """What is wrong with values of known keys by themselves: units, ranges, choices, not how they fit together."""
        tables = self._changed(changes)
        try:
            Scenario.model_validate(tables)
        except ValidationError as error:
            return reword(error, tables, Scenario)
        return []

    def _changed(self, changes: Mapping[str, Any]) -> dict[str, Any]:
        tables = dict(self._tables)
        for key, value in changes.items():
            _put(tables, self._ways[key], value)
        return tables

    def is_single(self, key: str) -> bool:
        """Whether there is such a key, and it holds a single value."""
        return key in self._single

    def is_known(self, key: str) -> bool:
        """Whether there is such a key, of a single value or of a table or list."""
        return key in self._ways

    def unknown(self, key: str, where: str | None = None) -> Problem:
        """The problem of a key that does not exist, with the nearest ones; `where` it was found, if not at itself."""
        sentence = f"no key of this scenario; {nearest_keys(key, self._single)}"
        return Problem(key, sentence) if where is None else Problem(where, f'"{key}" is {sentence}')

    def flat(self, tables: Mapping[str, Any], within: str = "") -> dict[str, Any]:
        """Changes written as nested tables, as changes of single keys: a table changes the keys that it names.

        A table stays whole where the scenario has none, and where it is an item of a list, such as an act.
        """
        changes: dict[str, Any] = {}
        for name, value in tables.items():
            key = f"{within}.{name}" if within else name
            if isinstance(value, dict) and isinstance(self.plain_at(key), dict) and not key.endswith("]"):
                changes |= self.flat(value, key)
            else:
                changes[key] = value
        return changes

    def overlapping(self, keys: Iterable[str]) -> list[tuple[str, str]]:
        """Pairs of keys of which one is the other or lies within it."""
        ways = [(key, self._ways[key]) for key in keys]
        return [
            (key, other)
            for (key, way), (other, way_of_other) in combinations(ways, 2)
            if all(a == b for a, b in zip(way, way_of_other, strict=False))
        ]

    def plain_at(self, key: str) -> Any:
        """The value of a key as plain tables, lists, SI numbers and text; None where there is none."""
        value: Any = self._tables
        for part in self._ways.get(key, ()):
            value = value[part] if isinstance(part, int) else value.get(part)
        return value if key in self._ways else None

    @cached_property
    def _tables(self) -> dict[str, Any]:
        return self.base.to_tables()

    @cached_property
    def _single(self) -> dict[str, Way]:
        return known_keys(self.base)

    @cached_property
    def _ways(self) -> dict[str, Way]:
        return {written(way): way for way in _all_ways(self.base.model_dump(mode="json"))}


def _all_ways(value: Any, way: Way = ()) -> Iterator[Way]:
    if way:
        yield way
    if isinstance(value, dict | list):
        for part, inner in value.items() if isinstance(value, dict) else enumerate(value):
            yield from _all_ways(inner, (*way, part))


def _put(tables: dict[str, Any], way: Way, value: Any) -> None:
    """Set a value in nested tables, of which those on the way are copied, since other scenarios share them."""
    place: Any = tables
    for part in way[:-1]:
        inner = place[part]
        place[part] = list(inner) if isinstance(inner, list) else dict(inner)
        place = place[part]
    place[way[-1]] = value
