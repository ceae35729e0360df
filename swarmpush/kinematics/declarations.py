"""Whether pushers that hold themselves for lost are lost: what a routine declares against what would have come."""

from __future__ import annotations

import os
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from pydantic import ValidationError

from swarmpush.compiled import compiled
from swarmpush.draws import stream_keys
from swarmpush.kinematics.basins import random_starts
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import Boundary, boundary_of, surface_names
from swarmpush.kinematics.laps import BUDGET, N_STARTS
from swarmpush.kinematics.settling import FloatArray, Progress
from swarmpush.kinematics.strikes import AT_ONCE
from swarmpush.problems import Problem, ScenarioError
from swarmpush.program import DECLARED, EXACT, MEMORY, NOTES, Program, Senses, compile_routine
from swarmpush.routine import Act, Declare, Halt, Routine, Stage
from swarmpush.scenario import Scenario

if TYPE_CHECKING:
    from swarmpush.auditing.statistics import Estimate

CHUNK = 512  # starts


@dataclass(frozen=True)
class Declarations:
    """What starts declared, against the truth: counts that add up to n_starts.

    lost_declared, lost_silent: pushers that did not strike the rear face again, with and without the declaration.
    alive_declared: false alarms. alive_silent: the rest. wrong: share of the declarations that are false alarms. found:
    share of the lost that declared it. alarmed: share of those not lost that declared it. budget: bumps in which the
    rear face had to be struck.
    """

    n_starts: int
    lost_declared: int
    lost_silent: int
    alive_declared: int
    alive_silent: int
    wrong: Estimate
    found: Estimate
    alarmed: Estimate
    confidence: float
    budget: int

    @property
    def is_guarantee(self) -> bool:
        """Whether no declaration was wrong, and there were some."""
        return self.alive_declared == 0 and self.lost_declared > 0

    @property
    def sentence(self) -> str:
        """What a declaration is worth."""
        n = self.wrong.n
        if n == 0:
            return f"None of {self.n_starts} starts declared itself lost; {self.lost_silent} of them were."
        level = f"{self.confidence:.0%} confidence"
        if self.is_guarantee:
            worth = (
                f"A declaration is a guarantee over the sampled starts: none of {n} was wrong, so at most "
                f"{_percent(self.wrong.high)} of all are ({level})."
            )
        else:
            worth = (
                f"A declaration is only likely to be right: {self.alive_declared} of {n} were wrong, "
                f"{_percent(self.wrong.mean)} ({_percent(self.wrong.low)} to {_percent(self.wrong.high)}, {level})."
            )
        return f"{worth} Of {self.found.n} lost pushers {self.lost_declared} declared it."

    def to_dict(self) -> dict[str, Any]:
        """As plain values for JSON."""
        from swarmpush.output import plain

        answer: dict[str, Any] = plain(self)
        return answer | {"is_guarantee": self.is_guarantee, "sentence": self.sentence}


def declares(routine: Routine) -> bool:
    """Whether a routine has the act `declare`."""
    return any(isinstance(act, Declare) for stage in routine.stages for act in stage.acts)


def declarations(
    s: Scenario,
    n_starts: int = N_STARTS,
    *,
    budget: int = BUDGET,
    seed: int = 0,
    workers: int | None = None,
    progress: Progress | None = None,
) -> Declarations:
    """Hold what pushers declare against what would have become of them, without any error, the block standing still.

    The truth is what the same start, with the same draws, does with the routine of `without_declaring`: it is lost if
    it does not strike the rear face within `budget` legs after the moment of declaring. A pusher that does not declare
    itself lost within `budget` legs is judged by the `budget` legs after these. Randomness that belongs to the routine
    itself is kept.

    Arguments:
        s: the scenario. n_starts: starts from its start region; those that are placed are taken as they are.
        budget: legs. seed: of the starts and of the routine's draws.
        workers: threads; one per processor unless given. The result does not depend on it.
        progress: called now and then with starts done, starts in all, and a word.

    Raises:
        ScenarioError: when the routine has no act `declare`, or has no other way on than to declare.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage"))
    >>> lost = {"name": "lost", "acts": [{"act": "declare"}, {"act": "halt"}]}
    >>> first = {"name": "first", "acts": [{"act": "run"}], "then": "lost"}
    >>> hasty = Routine.model_validate({"stages": [first, lost]})
    >>> declarations(s.model_copy(update={"routine": hasty}), 100).found.mean
    1.0
    """
    if not declares(s.routine):
        raise ScenarioError(s.about.name, [Problem("routine", "has no act declare")])
    try:
        silent = without_declaring(s.routine)
    except ValidationError as error:
        reason = str(error.errors()[0]["msg"])
        raise ScenarioError(s.about.name, [Problem("routine", f"without its declarations: {reason}")]) from None
    names = surface_names(s)
    programs = compile_routine(_halting(s.routine), names), compile_routine(silent, names)
    starts = random_starts(s, n_starts, seed)
    n, boundary, speed = len(starts), boundary_of(s), s.pushers.free_speed
    declared, struck = np.zeros(n, dtype=np.bool_), np.zeros(n, dtype=np.bool_)
    keys = stream_keys(seed, n)

    def judge(first: int) -> None:
        part = slice(first, first + CHUNK)
        _judge(
            boundary, *programs, EXACT, keys[part], speed, starts[part], budget, AT_ONCE * s.channel.width,
            declared[part], struck[part],
        )  # fmt: skip

    pool = ThreadPoolExecutor(workers or os.cpu_count())
    try:
        for k, _ in enumerate(pool.map(judge, range(0, n, CHUNK))):
            if progress:
                progress(min((k + 1) * CHUNK, n), n, "declarations")
    finally:
        pool.shutdown(cancel_futures=True)
    return _table(declared, ~struck, s.trial.confidence, budget)


def without_declaring(routine: Routine) -> Routine:
    """The same routine with declaring a plain no-op, and no way into a stage that begins with `declare`.

    Those stages are left out, with the branches that go there; a stage that would go on to one repeats itself. In the
    first stage, where every pusher is anyway, only the declarations are left out.

    Raises:
        pydantic.ValidationError: when nothing is left of a stage, or it could go round without a run.
    """
    declaring = {stage.name for stage in routine.stages[1:] if isinstance(stage.acts[0], Declare)}
    stages = [
        {
            "name": stage.name,
            "acts": [a for a in stage.acts if not isinstance(a, Declare) and getattr(a, "go", None) not in declaring],
            "then": None if stage.then in declaring else stage.then,
        }
        for stage in routine.stages
        if stage.name not in declaring
    ]
    return Routine.model_validate({"stages": stages})


def _halting(routine: Routine) -> Routine:
    """The same routine, which halts once it has declared: the path then ends at that moment."""

    def acts(stage: Stage) -> Iterator[Act]:
        for act in stage.acts:
            yield act
            if isinstance(act, Declare):
                yield Halt(act="halt")

    stages = tuple(stage.model_copy(update={"acts": tuple(acts(stage))}) for stage in routine.stages)
    return routine.model_copy(update={"stages": stages})


@compiled
def _judge(
    boundary: Boundary,
    halting: Program,
    silent: Program,
    senses: Senses,
    keys: NDArray[np.uint64],
    speed: float,
    starts: FloatArray,
    budget: int,
    at_once: float,
    declared: NDArray[np.bool_],
    struck: NDArray[np.bool_],
) -> int:
    """For each start, whether it declares itself lost and whether it strikes the rear face afterwards.

    Arguments:
        halting, silent: the routine that halts on declaring, and the one that does not declare.
        keys: (n, n_purposes) streams of each start. starts: (n, 3) x, y in m, heading in rad.
        budget: legs. at_once: m; a run shorter than this is rounding.
        declared, struck: (n,) filled.

    Returns:
        Total number of legs followed.
    """
    hits, surfaces = np.zeros((2 * budget, 6)), np.zeros(2 * budget, dtype=np.int64)
    total = 0
    for i in range(len(starts)):
        memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
        moment = trace(
            boundary, halting, senses, 0.0, speed, keys[i], starts[i], 0.0,
            hits[: budget + 1], surfaces[: budget + 1], memory, notes,
        )  # fmt: skip
        declared[i] = memory[DECLARED] == 1
        if not declared[i]:
            moment = budget
        memory[:], notes[:] = 0, 0.0
        end = trace(
            boundary, silent, senses, 0.0, speed, keys[i], starts[i], 0.0,
            hits[: moment + budget], surfaces[: moment + budget], memory, notes,
        )  # fmt: skip
        struck[i] = False
        for k in range(moment, end):
            # who stays at the face and bumps again on the spot does not strike again
            is_new = k == 0 or surfaces[k - 1] != boundary.rear or hits[k, 4] > at_once
            if surfaces[k] == boundary.rear and is_new:
                struck[i] = True
                break
        total += end
    return total


def _percent(share: float) -> str:
    return f"{100 * share:.2g}%" if share < 0.995 else f"{share:.1%}"


def _table(declared: NDArray[np.bool_], lost: NDArray[np.bool_], confidence: float, budget: int) -> Declarations:
    from swarmpush.auditing.statistics import share_interval

    lost_declared, lost_silent = int((lost & declared).sum()), int((lost & ~declared).sum())
    alive_declared, alive_silent = int((~lost & declared).sum()), int((~lost & ~declared).sum())
    return Declarations(
        n_starts=len(lost),
        lost_declared=lost_declared,
        lost_silent=lost_silent,
        alive_declared=alive_declared,
        alive_silent=alive_silent,
        wrong=share_interval(alive_declared, alive_declared + lost_declared, confidence),
        found=share_interval(lost_declared, lost_declared + lost_silent, confidence),
        alarmed=share_interval(alive_declared, alive_declared + alive_silent, confidence),
        confidence=confidence,
        budget=budget,
    )
