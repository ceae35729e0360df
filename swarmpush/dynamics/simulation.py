"""A run of the body world under way: advanced in parts, looked at in between, and told as a `Run`."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from functools import cache
from typing import NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.dynamics import tables
from swarmpush.dynamics.asking import Asker, Decide
from swarmpush.dynamics.build import build
from swarmpush.dynamics.bumps import find_bumps, find_completed_laps
from swarmpush.dynamics.host import HostSpace, host_disagreement
from swarmpush.dynamics.ledger import kinetic_energy
from swarmpush.dynamics.loop import Ending, Task, advance, advance_plainly
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import StepSettings, choose_step, engine_units
from swarmpush.dynamics.visit_log import VisitLog
from swarmpush.kinematics.boundary import surface_names
from swarmpush.kinematics.laps import find_laps
from swarmpush.program import PC
from swarmpush.scenario import Scenario

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


class Bodies(NamedTuple):
    """Where everything is at one time.

    blocks: (n_blocks, 3) x, y of the centre of mass in m and yaw in rad, the struck block first. pushers: (n, 3) x, y,
    heading. impulse_Ns: along the channel, of the pushers on the struck block so far.
    """

    blocks: NDArray[np.float64]
    pushers: NDArray[np.float64]
    impulse_Ns: float


class Simulation:
    """A run under way, for those who want to look at it meanwhile.

    In however many parts it is advanced, its run is that of `simulate` with the same arguments, bit by bit.

    Arguments:
        s, seed, steps, cycles, decide: see `simulate`.
    """

    def __init__(
        self,
        s: Scenario,
        *,
        seed: int | None = None,
        steps: StepSettings | None = None,
        cycles: tuple[tuple[str, ...], ...] | None = None,
        decide: Decide | None = None,
    ) -> None:
        self.scenario = s
        self.seed = s.trial.seed if seed is None else seed
        self.steps = steps or choose_step(s)
        self._cycles = tuple(lap.surfaces for lap in find_laps(s)[0]) if cycles is None else cycles
        self._space, self._task = build(s, self.seed, self.steps)
        self._asker = _let_decide(decide, s, self._task)
        if self._asker:
            self._task = self._task._replace(program=self._asker.program)
        self._space.read_plainly()  # for those who look before the first step
        self._start_x = float(self._space.block.position.x)
        self._advance_some, self._log = _stepper(), VisitLog()
        self._step, self._ending = 0, Ending.NOT_YET

    @property
    def is_over(self) -> bool:
        """Whether the run has ended; then `run` has it."""
        return self._ending not in (Ending.NOT_YET, Ending.ASKED)

    @property
    def share(self) -> float:
        """Share of the time limit that is done, 0 to 1."""
        return self._step / self._task.limits.final_step

    @property
    def time_s(self) -> float:
        """Model time."""
        return self._step * self.steps.dt_s

    def advance(self, n_steps: int) -> None:
        """Make steps, fewer if the run ends.

        Raises:
            RoutineError: when the Python routine gives an answer that cannot be carried out.
        """
        goal = self._step + n_steps
        while self._step < goal and not self.is_over:
            is_answered = self._ending == Ending.ASKED
            self._step, code = self._advance_some(self._space, self._task, self._step, goal - self._step, is_answered)
            self._ending = Ending(code)
            if self._asker and self._ending == Ending.ASKED:
                self._asker.answer_all(self._task, self._step)
                continue
            self._log.fetch(self._task.ledger)

    def bodies(self) -> Bodies:
        """Where everything is now."""
        u, motion, n = engine_units(self.scenario), self._space.host.motion, self.scenario.pushers.count
        placed = motion[:, :3] * np.array([u.length, u.length, 1.0])
        blocks, pushers = placed[[0, *range(n + 1, n + len(self.scenario.blocks))]], placed[1 : n + 1]
        if not self._task.rig.heading_is_free:
            pushers[:, 2] = self._task.crew.pushers["heading"]
        impulse = float(self._task.ground.blocks[0]["pushers_x"]) * u.impulse
        return Bodies(blocks, pushers, impulse)

    def path(self) -> pd.DataFrame:
        """The block's path so far; see `Run.block`."""
        return tables.block_table(self._task.path, self.steps.dt_s, engine_units(self.scenario))

    def visits(self) -> pd.DataFrame:
        """The visits so far, those under way as if they ended now; see `Run.visits`."""
        u, n = engine_units(self.scenario), self.scenario.pushers.count
        motion, names = self._space.host.motion, surface_names(self.scenario)
        n_walls, n_sides = len(self._task.ground.wall_x), int(self._task.ground.blocks[0]["n_sides"])
        walls, sides = names[:n_walls], names[n_walls : n_walls + n_sides]
        further = enumerate(self._task.ground.blocks[1:])
        of_train = [f"block {k + 2}" for k, block in further for _ in range(block["n_sides"])]
        visited = tables.in_order(self._log.rows(self._task.ledger))
        on = tables.surfaces(visited, walls, [*sides, *of_train], len(motion))
        return tables.visit_table(visited, on, n, len(motion), float(motion[0, 0]), self.steps.dt_s, u)

    def run(self) -> Run:
        """All that happened. A run that is not over yet is told as if it had been stopped here."""
        s, u, task, motion = self.scenario, engine_units(self.scenario), self._task, self._space.host.motion
        totals, visits, block = task.ledger.totals[0], self.visits(), self.path()
        covered = np.hypot(np.diff(block["x_m"]), np.diff(block["y_m"])).sum() / u.length
        bumps = find_bumps(visits, s.pushers.comeback_time)
        return Run(
            scenario=s,
            seed=self.seed,
            steps=self.steps,
            ended=ENDINGS[self._ending] if self.is_over else "stopped",
            duration_s=self.time_s,
            travel_m=float(motion[0, 0] - self._start_x) * u.length,
            yaw_max_rad=float(totals["yaw_max"]),
            overlap_max_m=float(totals["overlap_max"]) * u.length,
            books=tables.books(task, motion, float(covered), u),
            energy=tables.energy(task, float(kinetic_energy(self._space.host, task.crew, task.ground)), u),
            visits=visits,
            block=block,
            pushers=tables.pusher_table(task.path, self.steps.dt_s, u),
            bumps=bumps,
            laps=find_completed_laps(bumps, self._cycles),
        )


def _let_decide(decide: Decide | None, s: Scenario, task: Task) -> Asker | None:
    if decide is None:
        return None
    u = engine_units(s)
    asker = Asker(decide, s.pushers.count, surface_names(s), u.length, u.time)
    task.crew.memory[:, PC] = asker.begins
    return asker
