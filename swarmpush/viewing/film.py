"""A run with everything that moves in it, close enough in time to be looked at: recorded, or growing while it runs.

A film is made beside a run and never changes it: the body world is advanced from one place of the film to the next, and
its run is that of `simulate`, bit by bit.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from time import perf_counter
from typing import NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from swarmpush.draws import stream_keys
from swarmpush.dynamics.run import Run, load_run
from swarmpush.dynamics.simulation import Simulation
from swarmpush.dynamics.states import STATES
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import REAR, boundary_of, surface_names
from swarmpush.kinematics.planning import Plan, plan
from swarmpush.program import EXACT, MEMORY, NOTES, compile_routine
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MOST_FRAMES = 20_000  # of a film; between them places are interpolated
LOOK_EVERY_S = 0.2  # of wall time, while a run is under way
LOOK_REST = 20.0  # times as long as it took to look
MOST_LEGS = 200_000  # of one pusher in the point world
STRIKE_COLUMNS = ["t_on_s", "t_off_s", "pusher", "x_m", "y_m", "impact_Ns", "lean_Ns"]
SPELL_COLUMNS = ["cause", "t_first_s", "t_last_s"]
UNKNOWN = -1  # state of a pusher in a run that is not over: whether it completes its lap lies ahead


class Frame(NamedTuple):
    """Where everything is at one time.

    blocks: (n_blocks, 3) x, y of the centre of mass in m and yaw in rad, the struck block first. pushers: (n, 3) x, y,
    heading. states: (n,) index into `STATES`, or `UNKNOWN`.
    """

    t_s: float
    blocks: FloatArray
    pushers: FloatArray
    states: IntArray


class Series(NamedTuple):
    """What is drawn over time, one item per frame, (k,) each.

    travel_m: of the block. n_leaning: pushers on the rear face. impulse_Ns: along the channel, of all pushers so far.
    """

    t_s: FloatArray
    travel_m: FloatArray
    n_leaning: FloatArray
    impulse_Ns: FloatArray


@dataclass
class Film:
    """A film. The arrays hold as many frames as there are so far.

    scenario, seed, plan: what is shown. times_s: (k,) increasing. blocks: (k, n_blocks, 3). pushers: (k, n, 3), with
    headings unwrapped. impulses_Ns: (k,). run: once it is over; None before, and in the point world.
    """

    scenario: Scenario
    seed: int
    plan: Plan
    times_s: FloatArray = field(default_factory=lambda: np.zeros(0))
    blocks: FloatArray = field(default_factory=lambda: np.zeros((0, 1, 3)))
    pushers: FloatArray = field(default_factory=lambda: np.zeros((0, 1, 3)))
    impulses_Ns: FloatArray = field(default_factory=lambda: np.zeros(0))
    run: Run | None = None
    is_point_world: bool = False

    @property
    def duration_s(self) -> float:
        """How far the film goes."""
        return float(self.times_s[-1])

    @property
    def is_complete(self) -> bool:
        """Whether nothing will be added."""
        return self.is_point_world or self.run is not None

    def frame(self, t_s: float) -> Frame:
        """Where everything is at a time, which is brought into the film's span; between frames in a straight line."""
        t = min(max(t_s, 0.0), self.duration_s)
        row = min(int(np.searchsorted(self.times_s, t, side="right")) - 1, len(self.times_s) - 1)
        after = min(row + 1, len(self.times_s) - 1)
        span = self.times_s[after] - self.times_s[row]
        share = (t - self.times_s[row]) / span if span > 0.0 else 0.0
        blocks, pushers = (a[row] + share * (a[after] - a[row]) for a in (self.blocks, self.pushers))
        return Frame(t, blocks, pushers, self._states(t))

    def trail(self, t_s: float, seconds: float) -> FloatArray:
        """Places of the pushers over the last seconds before a time, (k, n, 2) m, oldest first."""
        first, last = np.searchsorted(self.times_s, [t_s - seconds, t_s], side="right")
        return self.pushers[max(0, first - 1) : max(last, 1), :, :2]

    def strikes(self, begin_s: float, end_s: float) -> pd.DataFrame:
        """Strikes on the rear face that begin after the first time and not after the second, by time.

        Columns: t_on_s, t_off_s, pusher, x_m, y_m (of the pusher at the first touch), impact_Ns, lean_Ns.
        """
        found = self._all_strikes
        first, last = np.searchsorted(found["t_on_s"], [begin_s, end_s], side="right")
        return found.iloc[first:last]

    def series(self) -> Series:
        """What is drawn over time."""
        travel = self.blocks[:, 0, 0] - self.blocks[0, 0, 0]
        path = self._path
        leaning = np.interp(self.times_s, path["t_s"], path["n_leaning"]) if len(path) else np.zeros(len(self.times_s))
        return Series(self.times_s, travel, leaning, self.impulses_Ns)

    def spells(self) -> pd.DataFrame:
        """What kept the crew from pushing, by first time: cause, t_first_s, t_last_s; empty until the run is over."""
        if self.run is None:
            return pd.DataFrame(columns=SPELL_COLUMNS)
        found = self.run.failures
        return found[found["share"] > 0.0].sort_values("t_first_s", kind="stable")[SPELL_COLUMNS].reset_index(drop=True)

    @property
    def state_shares(self) -> FloatArray | None:
        """(k, n_states) share of the crew in each state at the times of `series`; None until the run is over."""
        return self._final_shares if self.run is not None else None

    @cached_property
    def _final_shares(self) -> FloatArray:
        times, states = self._state_rows
        rows = states[np.minimum(np.searchsorted(times, self.times_s, side="left"), len(times) - 1)]
        return np.stack([(rows == k).mean(axis=1) for k in range(len(STATES))], axis=1)

    @property
    def _path(self) -> pd.DataFrame:
        return self.run.block if self.run is not None else pd.DataFrame(columns=["t_s", "n_leaning"])

    @property
    def _all_strikes(self) -> pd.DataFrame:
        return self._final_strikes if self.run is not None else pd.DataFrame(columns=STRIKE_COLUMNS, dtype=np.float64)

    @cached_property
    def _final_strikes(self) -> pd.DataFrame:
        assert self.run is not None
        return self.run.strikes.sort_values("t_on_s", kind="stable")[STRIKE_COLUMNS].reset_index(drop=True)

    @cached_property
    def _state_rows(self) -> tuple[FloatArray, IntArray]:
        """Times of the run's path, and the state of each pusher there."""
        assert self.run is not None
        numbers = {name: k for k, name in enumerate(STATES)}
        states = np.array([numbers[name] for name in self.run.states], dtype=np.int64)
        return self.run.block["t_s"].to_numpy(), states.reshape(-1, self.scenario.pushers.count)

    def _states(self, t_s: float) -> IntArray:
        if self.run is None:
            return np.full(self.pushers.shape[1], UNKNOWN, dtype=np.int64)
        times, states = self._state_rows
        row = min(int(np.searchsorted(times, t_s, side="left")), len(times) - 1)  # a row tells of what came before it
        found: IntArray = states[row]
        return found


class LiveFilm(Film):
    """A film that grows while its run is under way.

    Arguments:
        scenario, seed: what to run. planned: its plan, worked out unless given.
    """

    def __init__(self, scenario: Scenario, seed: int | None = None, planned: Plan | None = None) -> None:
        self._simulation = Simulation(scenario, seed=seed)
        steps = round(scenario.goal.time_limit / self._simulation.steps.dt_s)
        self._stride = max(1, -(-steps // MOST_FRAMES))
        super().__init__(scenario, self._simulation.seed, planned or plan(scenario))
        n_frames = steps // self._stride + 3
        self._room = (
            np.zeros(n_frames),
            np.zeros((n_frames, len(scenario.blocks), 3)),
            np.zeros((n_frames, scenario.pushers.count, 3)),
            np.zeros(n_frames),
        )
        self._n_frames = 0
        self._look_next_s = 0.0
        self._strikes_so_far = pd.DataFrame(columns=STRIKE_COLUMNS, dtype=np.float64)
        self._path_so_far = pd.DataFrame(columns=["t_s", "n_leaning"])
        self._note()

    def advance(self, to_s: float, budget_s: float | None = None) -> None:
        """Let the run go on up to a time, or as long as the budget of wall time lasts; does nothing once it is over.

        Raises:
            RoutineError: see `Simulation.advance`.
        """
        deadline = perf_counter() + budget_s if budget_s is not None else None
        while self.run is None and self.duration_s < to_s:
            self._simulation.advance(self._stride)
            self._note()
            if self._simulation.is_over:
                self.run = self._simulation.run()
            if deadline is not None and perf_counter() > deadline:
                break

    def finish(self) -> Run:
        """Let the run go on to its end."""
        self.advance(np.inf)
        assert self.run is not None
        return self.run

    def _note(self) -> None:
        """Write a frame down."""
        times, blocks, pushers, impulses = self._room
        k, bodies = self._n_frames, self._simulation.bodies()
        times[k], blocks[k], pushers[k], impulses[k] = self._simulation.time_s, *bodies
        if k > 0:  # a heading goes the short way round from frame to frame
            turned = pushers[k, :, 2] - pushers[k - 1, :, 2]
            pushers[k, :, 2] -= 2 * np.pi * np.round(turned / (2 * np.pi))
        self._n_frames = n = k + 1
        self.times_s, self.blocks, self.pushers, self.impulses_Ns = times[:n], blocks[:n], pushers[:n], impulses[:n]

    @property
    def _path(self) -> pd.DataFrame:
        self._look()
        return super()._path if self.run is not None else self._path_so_far

    @property
    def _all_strikes(self) -> pd.DataFrame:
        self._look()
        return super()._all_strikes if self.run is not None else self._strikes_so_far

    def _look(self) -> None:
        """Bring what is told of the run up to date, a few times a second of wall time at most."""
        now = perf_counter()
        if self.run is not None or now < self._look_next_s:
            return
        visits = self._simulation.visits()
        on_rear = visits[(visits["surface"] == REAR) & (visits["pusher"] >= 0)]
        self._strikes_so_far = on_rear.sort_values("t_on_s", kind="stable")[STRIKE_COLUMNS].reset_index(drop=True)
        self._path_so_far = self._simulation.path()[["t_s", "n_leaning"]]
        # looking takes the longer, the more has happened; it must not take the time that the run needs
        self._look_next_s = now + max(LOOK_EVERY_S, LOOK_REST * (perf_counter() - now))


def record(scenario: Scenario, seed: int | None = None, planned: Plan | None = None) -> Film:
    """A film of a whole run.

    Arguments:
        scenario, seed, planned: see `LiveFilm`.
    """
    film = LiveFilm(scenario, seed, planned)
    film.finish()
    return film


def film_of_path(run: Run, planned: Plan) -> Film:
    """A film of a run's own path, whose frames lie as far apart as the rows of that."""
    s, path = run.scenario, run.block
    columns = [[f"{name}{tail}_{unit}" for name, unit in (("x", "m"), ("y", "m"), ("yaw", "rad"))]
               for tail in ("", *(f"_{k}" for k in range(2, len(s.blocks) + 1)))]  # fmt: skip
    blocks = np.stack([path[names].to_numpy(dtype=np.float64) for names in columns], axis=1)
    crew = run.pushers[["x_m", "y_m", "heading_rad"]].to_numpy(dtype=np.float64, copy=True)
    pushers = crew.reshape(len(path), s.pushers.count, 3)
    pushers[:, :, 2] = np.unwrap(pushers[:, :, 2], axis=0)
    return Film(s, run.seed, planned, path["t_s"].to_numpy(), blocks, pushers, np.zeros(len(path)), run)


def film_of(folder: Path) -> Film:
    """A film of a saved run, which is made again for that.

    Raises:
        ValueError: when the folder holds no run, or its run comes out otherwise now, as with other versions.
    """
    try:
        saved = load_run(folder)
    except (OSError, KeyError, ValueError, TypeError):
        raise ValueError(f"{folder} does not hold a whole run; make one with 'swarmpush run'") from None
    film = record(saved.scenario, saved.seed)
    assert film.run is not None
    if (film.run.travel_m, film.run.duration_s) != (saved.travel_m, saved.duration_s):
        raise ValueError(
            f"{folder}: the run comes out otherwise than it was saved, as it can with other versions; run it again"
        )
    return film


def point_film(scenario: Scenario, seed: int | None = None, planned: Plan | None = None) -> Film:
    """The same starts in the point world, as long as the time limit.

    Its pushers have neither mass nor errors and pass through each other; its block stands where it is.
    """
    s = scenario
    seed = s.trial.seed if seed is None else seed
    boundary, program = boundary_of(s), compile_routine(s.routine, surface_names(s))
    starts = draw_starts(s, seed)
    n_legs = int(min(MOST_LEGS, 1000 + 20 * s.goal.time_limit * s.pushers.free_speed / s.channel.width))
    times = np.linspace(0.0, s.goal.time_limit, MOST_FRAMES // 4)
    pushers = np.zeros((len(times), len(starts), 3))
    for i, (start, keys) in enumerate(zip(starts, stream_keys(seed, len(starts)), strict=True)):
        hits, surfaces = np.zeros((n_legs, 6)), np.zeros(n_legs, dtype=np.int64)
        n = trace(boundary, program, EXACT, 0.0, s.pushers.free_speed, keys, start, 0.0, hits, surfaces,
                  np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES))  # fmt: skip
        ends = np.concatenate([[0.0], np.cumsum(hits[:n, 5])])
        for axis in range(2):
            pushers[:, i, axis] = np.interp(times, ends, np.concatenate([[start[axis]], hits[:n, axis]]))
        leg = np.clip(np.searchsorted(ends, times, side="right") - 1, 0, max(0, n - 1))
        pushers[:, i, 2] = hits[leg, 2] if n else start[2]
    blocks = np.zeros((len(times), len(s.blocks), 3))
    centres = _centres(s)
    blocks[:, :, :2] = centres
    return Film(s, seed, planned or plan(s), times, blocks, pushers, np.zeros(len(times)), is_point_world=True)


def _centres(s: Scenario) -> FloatArray:
    """Where the blocks' centres of mass are at the start, (n_blocks, 2) m."""
    return Simulation(s, seed=0).bodies().blocks[:, :2]
