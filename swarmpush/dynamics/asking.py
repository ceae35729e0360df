"""Routines written as Python functions, which are asked at decision moments and answer with acts."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import cache
from typing import Any, NamedTuple

import numpy as np
from pydantic import TypeAdapter, ValidationError

from swarmpush.dynamics.loop import Task
from swarmpush.problems import RoutineError
from swarmpush.program import (
    DECLARED,
    N_ROTATIONS,
    PC,
    RANGE,
    SEEN,
    Command,
    Contact,
    Program,
    asking_program,
    compile_acts,
    in_units,
    sensed_normal,
    wrap_angle,
)
from swarmpush.routine import BRANCHES, Act, Tally

MAX_ACTS = 16  # in one answer
MAX_KNOWN = 1000  # answers remembered, so that they are checked once; most routines give a few again and again
MAX_ANSWERS = 100  # to one pusher at one moment: by then the function is going round in circles


class Situation(NamedTuple):
    """What a pusher knows at a decision moment, with its sensors' errors.

    pusher: number from 0. time_s. heading_rad: its own heading. contact: what it has bumped into last: "none",
    "wall", "block" or "pusher"; in a space of the user's own a wall is a static body, and a block any other that is no
    pusher. bearing_rad: direction of the touched surface's inward normal from its heading on.
    range_m: last range gauged, 0 before the first. seen: whether the last look saw its face. declared: whether it holds
    itself for lost. notebook: a dictionary of its own, kept from one moment to the next.
    """

    pusher: int
    time_s: float
    heading_rad: float
    contact: str
    bearing_rad: float
    range_m: float
    seen: bool
    declared: bool
    notebook: dict[str, Any]


Answer = Act | Mapping[str, Any] | Sequence[Act | Mapping[str, Any]]
Decide = Callable[[Situation], Answer]

_CONTACTS = {int(contact): contact.name.lower() for contact in Contact}


class Asker:
    """Puts a function's answers into the program that the compiled loop executes.

    decide: called for each pusher at its start and whenever its last answer's acts are done, at an instant of the
        model: a bump has been felt and the latency is over, a turn is complete, a leg has ended. It answers with one
        act or a sequence of up to `MAX_ACTS`, each as in a scenario file ({"act": "turn", "angle": "120 deg"}; numbers
        are SI) or as a model of `swarmpush.routine`. Branches and tallies are left out: it has Python for that. It must
        not touch the run's space, and the same situations must give the same answers if runs are to repeat.
    surfaces: names of the faces it may look for. length, time: engine units in m and s.
    """

    def __init__(self, decide: Decide, n_pushers: int, surfaces: Sequence[str], length: float, time: float) -> None:
        self._decide, self._surfaces, self._length, self._time = decide, tuple(surfaces), length, time
        self.program, self.begins = asking_program(n_pushers, MAX_ACTS)
        self._notebooks: list[dict[str, Any]] = [{} for _ in range(n_pushers)]
        self._asked_at = [(-1, 0)] * n_pushers
        self._known: dict[tuple[Any, ...], Program] = {}  # answers that have been checked

    def answer_all(self, task: Task, step: int) -> None:
        """Ask the function about all pushers that wait, in order of their numbers."""
        for i in np.flatnonzero(task.crew.pushers["asks"] == int(Command.ASK)):
            self.answer(task, int(i), step)

    def answer(self, task: Task, i: int, step: int) -> None:
        """Ask the function about pusher i and write its answer down.

        Raises:
            RoutineError: when the answer is no act, or time never goes on.
        """
        before, n = self._asked_at[i]
        self._asked_at[i] = step, n + 1 if before == step else 1
        situation = self._situation(task, i, step)
        if self._asked_at[i][1] > MAX_ANSWERS:
            raise RoutineError(
                f"pusher {i} was given {MAX_ANSWERS} answers at {situation.time_s:.6g} s that take no time; "
                "an answer must end with run, advance, slide or halt sooner or later"
            )
        try:
            rows = self._compiled(self._decide(situation))
        except Exception as error:
            error.add_note(f"pusher {i} was asking its routine at {situation.time_s:.6g} s")
            raise
        begin = int(self.begins[i])
        self.program[begin + 1 : begin + 1 + len(rows)] = rows
        self.program["go"][begin + len(rows)] = begin  # back to asking
        task.crew.memory[i, PC] = begin + 1

    def _situation(self, task: Task, i: int, step: int) -> Situation:
        p, memory, notes = task.crew.pushers[i], task.crew.memory[i], task.crew.notes[i]
        normal = sensed_normal(task.senses, task.keys[i], memory[N_ROTATIONS], p["heading"], p["percept_normal"])
        return Situation(
            pusher=i,
            time_s=step * task.rig.dt * self._time,
            heading_rad=float(wrap_angle(p["heading"])),
            contact=_CONTACTS[int(p["percept_kind"])],
            bearing_rad=float(wrap_angle(normal - p["heading"])),
            range_m=float(notes[RANGE]) * self._length,
            seen=bool(memory[SEEN]),
            declared=bool(memory[DECLARED]),
            notebook=self._notebooks[i],
        )

    def _compiled(self, answer: Answer) -> Program:
        is_list = isinstance(answer, Sequence) and not isinstance(answer, str)
        listed = tuple(answer) if is_list else (answer,)
        if not 0 < len(listed) <= MAX_ACTS:
            raise RoutineError(f"the routine gave {len(listed)} acts; an answer has 1 to {MAX_ACTS}")
        try:
            key = tuple(frozenset(act.items()) if isinstance(act, Mapping) else act for act in listed)
            known = self._known.get(key)
        except TypeError:  # some value is not hashable, so it is none that an act can have
            return self._instructions(listed)
        if known is None:
            if len(self._known) >= MAX_KNOWN:
                self._known.clear()
            known = self._known[key] = self._instructions(listed)
        return known

    def _instructions(self, listed: Sequence[Any]) -> Program:
        checked = [self._checked(act) for act in listed]
        return in_units(compile_acts(checked, self._surfaces, 0), self._length, self._time)

    def _checked(self, act: Any) -> Act:
        try:
            checked = _acts().validate_python(act)
        except ValidationError as error:
            first = error.errors(include_url=False)[0]
            raise RoutineError(f"the routine gave {act!r}, which is no act: {first['msg']}") from None
        if isinstance(checked, (Tally, *BRANCHES)):
            raise RoutineError(f"the routine gave {act!r}; a function branches and counts by itself")
        face = getattr(checked, "face", None)
        if face is not None and face not in self._surfaces:
            raise RoutineError(
                f"the routine looks for the face {face!r}; there are {', '.join(self._surfaces) or 'none'}"
            )
        return checked


@cache
def _acts() -> TypeAdapter[Act]:
    return TypeAdapter(Act)
