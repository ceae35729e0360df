"""What is wrong with a scenario, in words."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Problem:
    """One thing wrong: the key's path ("" for the whole file) and a sentence with the remedy."""

    key: str
    sentence: str

    def __str__(self) -> str:
        return f"{self.key}: {self.sentence}" if self.key else self.sentence


class RoutineError(ValueError):
    """A routine written as a Python function gave an answer that cannot be carried out."""


class ScenarioError(ValueError):
    """A scenario cannot be used. `problems` lists every reason; the message is readable as it stands."""

    def __init__(self, source: str, problems: list[Problem]) -> None:
        self.source = source
        self.problems = tuple(problems)
        count = "1 problem" if len(problems) == 1 else f"{len(problems)} problems"
        lines = [f"{source}: {count}", *(f"  {problem}" for problem in problems)]
        super().__init__("\n".join(lines))

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.source, list(self.problems))  # so that it comes back whole from another process
