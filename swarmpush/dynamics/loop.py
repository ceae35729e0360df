"""The step loop: one compiled function that drives the engine from sample to sample.

The same rooms (crew, blocks, ledger) are also driven by `advance_plainly`, which talks to pymunk through its public
interface. It is slow, serves as the oracle of the compiled loop, and takes over if the two ever disagree.
"""

from __future__ import annotations

import math
from enum import IntEnum
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import borrowed, compiled, inlined
from swarmpush.dynamics.blocks import Ground, balance_blocks, order_blocks
from swarmpush.dynamics.crew import Crew, Rig, act
from swarmpush.dynamics.host import Host, HostSpace, read_state, take_step
from swarmpush.dynamics.ledger import SERIES, SLOTS, Ledger, close_visits, enter_contacts, settle_crew
from swarmpush.dynamics.ranging import Surroundings
from swarmpush.program import Program, Senses

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MAX_OVERLAP = 0.5  # radii; a pusher this deep in something is no longer a rigid body in contact
MAX_JUMP = 1.0  # radii; a pusher that moves farther in one step could pass through something


class Ending(IntEnum):
    """Why the loop came back."""

    NOT_YET = 0
    GOAL = 1
    TIME = 2
    ESCAPED = 3
    OVERLAP = 4
    NOT_A_NUMBER = 5
    JUMPED = 6
    ASKED = 7  # some pusher waits for an answer from outside


_NOT_YET, _GOAL, _TIME, _ESCAPED, _OVERLAP, _NOT_A_NUMBER, _JUMPED, _ASKED = (int(ending) for ending in Ending)


class Path(NamedTuple):
    """Samples at fixed intervals, and one more at the end of the run; engine units.

    steps: (n,) number of the step. block: (n, 4) x, y, yaw, speed along the channel. train: (n, n_more, 3) x, y, yaw of
    further blocks. pushers: (n, n_pushers, 4) x, y, heading, mode. series: (n, len(SERIES) + 1) sums over the steps
    since the last sample, and the most pushers that leaned at once in it. n_rows[0]: samples taken so far.
    """

    steps: IntArray
    block: FloatArray
    train: FloatArray
    pushers: FloatArray
    series: FloatArray
    n_rows: IntArray


class Limits(NamedTuple):
    """Where a run ends. outline: (m, 4) x, y of the fixed sides' ends. goal_x: of the block."""

    outline: FloatArray
    length: float
    width: float
    goal_x: float
    final_step: int
    sample_steps: int


class Task(NamedTuple):
    """Everything the loop works on."""

    rig: Rig
    crew: Crew
    program: Program
    senses: Senses
    around: Surroundings
    keys: NDArray[np.uint64]
    ground: Ground
    ledger: Ledger
    path: Path
    limits: Limits


_N_SERIES = len(SERIES)


@inlined
def _sample(host: Host, task: Task, step: int) -> None:
    """Write a row of the path."""
    path, motion, pushers = task.path, host.motion, task.crew.pushers
    totals, row = task.ledger.totals[0], path.n_rows[0]
    path.n_rows[0] = row + 1
    path.steps[row] = step
    for c in range(4):
        path.block[row, c] = motion[0, c]
    for k in range(path.train.shape[1]):
        for c in range(3):
            path.train[row, k, c] = motion[len(pushers) + 1 + k, c]
    for i in range(len(pushers)):
        path.pushers[row, i, 0] = motion[i + 1, 0]
        path.pushers[row, i, 1] = motion[i + 1, 1]
        path.pushers[row, i, 2] = motion[i + 1, 2] if task.rig.heading_is_free else pushers[i].heading
        path.pushers[row, i, 3] = pushers[i].mode
    series = path.series[row]
    series[0], series[1] = totals.n_leaning, totals.leaning_share
    series[2], series[3] = totals.strong_share, totals.jammed_share
    series[4], series[5], series[6] = totals.n_ahead, totals.n_at_wall, totals.n_at_pusher
    series[7], series[8], series[9] = totals.n_turning, totals.n_halted, totals.n_failed
    series[_N_SERIES] = totals.leaning_most
    totals.n_leaning = totals.leaning_share = totals.strong_share = totals.jammed_share = 0.0
    totals.n_ahead = totals.n_at_wall = totals.n_at_pusher = 0.0
    totals.n_turning = totals.n_halted = totals.n_failed = totals.leaning_most = 0.0


@inlined
def _is_inside(outline: FloatArray, x: float, y: float) -> bool:
    """Whether a point lies in the channel and in no post: a line from it crosses their sides an odd number of times."""
    inside = False
    for k in range(len(outline)):
        ax, ay, bx, by = outline[k, 0], outline[k, 1], outline[k, 2], outline[k, 3]
        if (ay > y) != (by > y) and x < ax + (y - ay) / (by - ay) * (bx - ax):
            inside = not inside
    return inside


@inlined
def _ending(host: Host, task: Task, step: int, is_sample: bool) -> int:
    """Whether the run has come to an end, and why."""
    motion, limits = host.motion, task.limits
    n, most = len(task.crew.pushers), (MAX_JUMP / task.rig.dt) ** 2
    for i in range(1, n + 1):
        x, y, vx, vy = motion[i, 0], motion[i, 1], motion[i, 3], motion[i, 4]
        if not (x > 0.0 and x < limits.length and y > 0.0 and y < limits.width and vx * vx + vy * vy < most):
            if not math.isfinite(x + y + vx + vy):
                return _NOT_A_NUMBER
            return _JUMPED if vx * vx + vy * vy >= most else _ESCAPED
        if is_sample and not _is_inside(limits.outline, x, y):
            return _ESCAPED
    blocks = task.ground.blocks
    for k in range(len(blocks)):
        m = blocks[k].entity
        if not math.isfinite(motion[m, 0] + motion[m, 1] + motion[m, 2] + motion[m, 3] + motion[m, 4] + motion[m, 5]):
            return _NOT_A_NUMBER
    if task.ledger.totals[0].overlap_max > MAX_OVERLAP:
        return _OVERLAP
    if motion[0, 0] >= limits.goal_x:
        return _GOAL
    if step >= limits.final_step:
        return _TIME
    return _NOT_YET


@inlined
def _before(host: Host, task: Task, step: int, is_answered: bool) -> int:
    """Sample, guards, then orders for this step."""
    rig = task.rig
    if not is_answered:
        is_sample = step % task.limits.sample_steps == 0
        ending = _ending(host, task, step, is_sample)
        if is_sample or ending != _NOT_YET:
            _sample(host, task, step)
        if ending != _NOT_YET:
            return ending
    inertia = task.ground.inertia
    if act(host, rig, task.crew, task.program, task.senses, task.keys, task.around, inertia, step, is_answered) > 0:
        return _ASKED
    order_blocks(host, task.ground, rig.dt)
    return _NOT_YET


@inlined
def _after(host: Host, task: Task, n_pairs: int, step: int) -> bool:
    """Ledger, books and bumpers after the engine's step; True if the log must be fetched."""
    ledger, rig, crew = task.ledger, task.rig, task.crew
    enter_contacts(host, rig, crew, task.ground, ledger, n_pairs, step)
    gravity, drag, floor = balance_blocks(host, task.ground, rig.dt)
    totals = ledger.totals[0]
    totals.gravity += gravity
    totals.drag += drag
    totals.floor += floor
    settle_crew(host, rig, crew, task.ground, ledger, task.keys, step)
    close_visits(ledger, step)
    return bool(ledger.n_log[0] + SLOTS * len(ledger.n_open) >= len(ledger.log))


@compiled
def advance(host: Host, task: Task, first_step: int, n_steps: int, is_answered: bool) -> tuple[int, int]:
    """Up to `n_steps` steps. Returns the next step's number and why it came back (an `Ending`).

    After `ASKED` the answers must be written into the program, and the same step be taken again with `is_answered`.
    """
    host, task = borrowed(host), borrowed(task)
    read_state(host)
    for step in range(first_step, first_step + n_steps):
        ending = _before(host, task, step, is_answered)
        is_answered = False
        if ending != 0:
            return step, ending
        n_pairs = take_step(host, task.rig.dt)
        if _after(host, task, n_pairs, step):
            return step + 1, 0
    return first_step + n_steps, 0


def advance_plainly(
    space: HostSpace, task: Task, first_step: int, n_steps: int, is_answered: bool = False
) -> tuple[int, int]:
    """The same as `advance`, with pymunk driven through its public interface."""
    space.read_plainly()
    for step in range(first_step, first_step + n_steps):
        ending = before_step(space.host, task, step, is_answered)
        is_answered = False
        if ending != 0:
            return step, ending
        n_pairs = space.step_plainly(task.rig.dt)
        if after_step(space.host, task, n_pairs, step):
            return step + 1, 0
    return first_step + n_steps, 0


@compiled
def before_step(host: Host, task: Task, step: int, is_answered: bool) -> int:
    """What comes before a step that something else makes; returns an `Ending`."""
    return _before(borrowed(host), borrowed(task), step, is_answered)


@compiled
def after_step(host: Host, task: Task, n_pairs: int, step: int) -> bool:
    """What comes after it; True if the log must be fetched."""
    return _after(borrowed(host), borrowed(task), n_pairs, step)
