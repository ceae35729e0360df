"""The step loop: one compiled function that drives the engine from sample to sample.

The same rooms (crew, ledger) are also driven by `advance_plainly`, which talks to pymunk through its public
interface. It is slow, serves as the oracle of the compiled loop, and takes over if the two ever disagree.
"""

from __future__ import annotations

import math
from enum import IntEnum
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import borrowed, compiled, inlined
from swarmpush.dynamics.crew import Crew, Rig, drive, feel, set_floor
from swarmpush.dynamics.host import MOTION, Host, HostSpace, read_state, take_step
from swarmpush.dynamics.ledger import (
    SLOTS,
    Ledger,
    balance_block,
    close_visits,
    enter_contacts,
    remember_block,
)
from swarmpush.dynamics.ranging import Surroundings
from swarmpush.program import Program, Senses

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MAX_OVERLAP = 0.5  # radii; a pusher this deep in something is no longer a rigid body in contact


class Ending(IntEnum):
    """Why the loop came back."""

    NOT_YET = 0
    GOAL = 1
    TIME = 2
    ESCAPED = 3
    OVERLAP = 4
    NOT_A_NUMBER = 5


_NOT_YET, _GOAL, _TIME, _ESCAPED, _OVERLAP, _NOT_A_NUMBER = (int(ending) for ending in Ending)


class Path(NamedTuple):
    """Samples at fixed intervals, engine units.

    block: (n, 5) x, y, yaw, speed along the channel, pushers leaning on the rear face (mean since the last sample).
    pushers: (n, n_pushers, 4) x, y, heading, mode.
    """

    block: FloatArray
    pushers: FloatArray


class Task(NamedTuple):
    """Everything the loop works on."""

    rig: Rig
    crew: Crew
    program: Program
    senses: Senses
    around: Surroundings
    keys: NDArray[np.uint64]
    ledger: Ledger
    path: Path
    sample_steps: int


@inlined
def _before(host: Host, task: Task, step: int, final_step: int) -> int:
    """Books of the last step, sample, guards, then orders for this step; the state must have been read."""
    rig, crew, ledger = task.rig, task.crew, task.ledger
    motion, totals = borrowed(host.motion), borrowed(ledger.totals)[0]
    if step > 0:
        balance_block(host, rig, ledger)
    remember_block(host, ledger)
    pushers, n = borrowed(crew.pushers), len(crew.pushers)
    ahead_of = motion[0] + rig.front_reach
    ending = _NOT_YET
    for i in range(n):
        x, y = motion[MOTION * (i + 1)], motion[MOTION * (i + 1) + 1]
        if not (x > 0.0 and x < rig.channel_length and y > 0.0 and y < rig.channel_width):
            ending = _ESCAPED if math.isfinite(x + y) else _NOT_A_NUMBER
        if x > ahead_of:
            totals.ahead += 1.0
        if pushers[i].mode == 2:
            totals.turning += 1.0
        elif pushers[i].mode == 3:
            totals.stopped += 1.0
    if not math.isfinite(motion[0] + motion[1] + motion[2]):
        ending = _NOT_A_NUMBER
    elif totals.overlap_max > MAX_OVERLAP:
        ending = _OVERLAP
    elif ending == _NOT_YET and motion[0] >= rig.goal_x:
        ending = _GOAL
    elif ending == _NOT_YET and step >= final_step:
        ending = _TIME
    if step % task.sample_steps == 0:
        row, block_rows, pusher_rows = step // task.sample_steps, borrowed(task.path.block), borrowed(task.path.pushers)
        for c in range(4):
            block_rows[row, c] = motion[c]
        block_rows[row, 4] = totals.sample_leaning / task.sample_steps
        totals.sample_leaning = 0.0
        for i in range(n):
            pusher_rows[row, i, 0] = motion[MOTION * (i + 1)]
            pusher_rows[row, i, 1] = motion[MOTION * (i + 1) + 1]
            pusher_rows[row, i, 2] = pushers[i].heading
            pusher_rows[row, i, 3] = pushers[i].mode
    if ending == _NOT_YET:
        drive(host, rig, crew, task.program, task.senses, task.keys, task.around, step)
        if rig.has_floor:
            set_floor(host, rig)
    return ending


@inlined
def _after(host: Host, task: Task, n_pairs: int, step: int) -> bool:
    """Ledger and bumpers after the engine's step; True if the log must be fetched."""
    ledger = task.ledger
    enter_contacts(host, task.rig, task.crew, ledger, n_pairs, step)
    feel(task.rig, task.crew, task.keys, step)
    close_visits(ledger, step)
    return bool(ledger.n_log[0] + SLOTS * len(ledger.n_open) >= len(ledger.log))


@compiled
def advance(host: Host, task: Task, first_step: int, n_steps: int, final_step: int) -> tuple[int, int]:
    """Up to `n_steps` steps. Returns the next step's number and why it came back (an `Ending`)."""
    for step in range(first_step, first_step + n_steps):
        read_state(host)
        ending = _before(host, task, step, final_step)
        if ending != 0:
            return step, ending
        n_pairs = take_step(host, task.rig.dt)
        if _after(host, task, n_pairs, step):
            return step + 1, 0
    return first_step + n_steps, 0


def advance_plainly(space: HostSpace, task: Task, first_step: int, n_steps: int, final_step: int) -> tuple[int, int]:
    """The same as `advance`, with pymunk driven through its public interface."""
    for step in range(first_step, first_step + n_steps):
        space.read_plainly()
        ending = _before(space.host, task, step, final_step)
        if ending != 0:
            return step, ending
        n_pairs = space.step_plainly(task.rig.dt)
        if _after(space.host, task, n_pairs, step):
            return step + 1, 0
    return first_step + n_steps, 0
