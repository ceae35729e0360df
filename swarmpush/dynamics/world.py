"""The body world's entrance: a scenario and a seed go in, the record of a run comes out."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from functools import cache

import numpy as np

from swarmpush.dynamics import tables
from swarmpush.dynamics.asking import Asker, Decide
from swarmpush.dynamics.build import build
from swarmpush.dynamics.bumps import find_bumps, find_completed_laps
from swarmpush.dynamics.host import Host, HostSpace, host_disagreement
from swarmpush.dynamics.ledger import kinetic_energy
from swarmpush.dynamics.loop import Ending, Task, advance, advance_plainly
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import StepSettings, choose_step, engine_units
from swarmpush.dynamics.visit_log import VisitLog
from swarmpush.kinematics.boundary import surface_names
from swarmpush.kinematics.laps import find_laps
from swarmpush.program import PC
from swarmpush.scenario import Scenario

Progress = Callable[[float], None]

CHUNK = 20_000  # steps between two reports of progress; some tenths of a second

ENDINGS = {
    Ending.GOAL: "goal",
    Ending.TIME: "time",
    Ending.ESCAPED: "a pusher left the channel",
    Ending.OVERLAP: "bodies were pressed into each other",
    Ending.NOT_A_NUMBER: "the motion ran away",
    Ending.JUMPED: "a pusher moved farther than its radius in one step",
}


@cache
def _stepper() -> Callable[[HostSpace, Task, int, int, bool], tuple[int, int]]:
    """The compiled loop, or the plain one if the compiled way to the engine does not do what pymunk itself does."""
    if disagreement := host_disagreement():
        warnings.warn(
            f"the fast way to the engine disagrees with pymunk ({disagreement}); taking the slow one",
            RuntimeWarning,
            stacklevel=2,
        )
        return advance_plainly
    return lambda space, task, first, n, is_answered: advance(space.host, task, first, n, is_answered)


def simulate(
    s: Scenario,
    *,
    seed: int | None = None,
    steps: StepSettings | None = None,
    cycles: tuple[tuple[str, ...], ...] | None = None,
    decide: Decide | None = None,
    progress: Progress | None = None,
) -> Run:
    """Run a scenario with rigid bodies, contact, friction and inertia until goal, time limit or break-off.

    Arguments:
        s: the scenario.
        seed: of starts, errors and unit spreads; the scenario's own unless given.
        steps: solver settings; chosen from the scenario unless given.
        cycles: surfaces of the laps to recognise; those of the plan unless given.
        decide: a Python function that stands in for the scenario's routine; see `asking.Asker` for what it is given and
            what it answers. It is called at decision moments only, some 40 microseconds each beside its own time.
        progress: called now and then with the share of the time limit that is done, 0 to 1.

    Returns:
        A `Run`; the same scenario, seed and versions give the same tables, bit by bit.

    Raises:
        RoutineError: when `decide` gives an answer that cannot be carried out.

    >>> import swarmpush
    >>> s = swarmpush.load(swarmpush.demo("service_passage")).replace(goal={"time_limit": 2.0})
    >>> swarmpush.simulate(s, seed=7).ended
    'time'
    """
    seed = s.trial.seed if seed is None else seed
    steps = steps or choose_step(s)
    if cycles is None:
        cycles = tuple(lap.surfaces for lap in find_laps(s)[0])
    space, task = build(s, seed, steps)
    asker = _let_decide(decide, s, task)
    if asker:
        task = task._replace(program=asker.program)
    start_x = float(space.block.position.x)
    advance_some, log = _stepper(), VisitLog()
    step, ending = 0, Ending.NOT_YET
    while ending in (Ending.NOT_YET, Ending.ASKED):
        step, code = advance_some(space, task, step, CHUNK, ending == Ending.ASKED)
        ending = Ending(code)
        if asker and ending == Ending.ASKED:
            asker.answer_all(task, step)
            continue
        log.fetch(task.ledger)
        if progress:
            progress(step / task.limits.final_step)
    return _record(s, seed, steps, cycles, task, space.host, log, step, ENDINGS[ending], start_x)


def _let_decide(decide: Decide | None, s: Scenario, task: Task) -> Asker | None:
    if decide is None:
        return None
    u = engine_units(s)
    asker = Asker(decide, s.pushers.count, surface_names(s), u.length, u.time)
    task.crew.memory[:, PC] = asker.begins
    return asker


def _record(
    s: Scenario,
    seed: int,
    steps: StepSettings,
    cycles: tuple[tuple[str, ...], ...],
    task: Task,
    host: Host,
    log: VisitLog,
    n_steps: int,
    ended: str,
    start_x: float,
) -> Run:
    u, totals, motion = engine_units(s), task.ledger.totals[0], host.motion
    n_walls, n_sides = len(task.ground.wall_x), int(task.ground.blocks[0]["n_sides"])
    names = surface_names(s)
    walls, sides = names[:n_walls], names[n_walls : n_walls + n_sides]
    of_train = [f"block {k + 2}" for k, block in enumerate(task.ground.blocks[1:]) for _ in range(block["n_sides"])]
    visited = tables.in_order(log.rows(task.ledger))
    on = tables.surfaces(visited, walls, [*sides, *of_train], len(motion))
    visits = tables.visit_table(visited, on, s.pushers.count, len(motion), float(motion[0, 0]), steps.dt_s, u)
    block = tables.block_table(task.path, steps.dt_s, u)
    covered = np.hypot(np.diff(block["x_m"]), np.diff(block["y_m"])).sum() / u.length
    bumps = find_bumps(visits, s.pushers.comeback_time)
    return Run(
        scenario=s,
        seed=seed,
        steps=steps,
        ended=ended,
        duration_s=n_steps * steps.dt_s,
        travel_m=float(motion[0, 0] - start_x) * u.length,
        yaw_max_rad=float(totals["yaw_max"]),
        overlap_max_m=float(totals["overlap_max"]) * u.length,
        books=tables.books(task, motion, float(covered), u),
        energy=tables.energy(task, float(kinetic_energy(host, task.crew, task.ground)), u),
        visits=visits,
        block=block,
        pushers=tables.pusher_table(task.path, steps.dt_s, u),
        bumps=bumps,
        laps=find_completed_laps(bumps, cycles),
    )
