"""Crew and ledger in a pymunk space of the user's own, whatever is in it."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import TracebackType
from typing import Any, Literal, Self

import numpy as np
import pandas as pd
import pymunk
from numpy.typing import NDArray
from pydantic import ValidationError

from swarmpush.compiled import borrowed, compiled
from swarmpush.draws import Purpose, stream_keys, uniform
from swarmpush.dynamics import tables
from swarmpush.dynamics.asking import Asker, Decide
from swarmpush.dynamics.blocks import BLOCK_STATE, Ground, balance_blocks
from swarmpush.dynamics.build import (
    APPROACH,
    MISSED_BUMP_RETRY,
    inverse_inertia,
    new_path,
    prepare_masses,
    unit_deviates,
)
from swarmpush.dynamics.chipmunk import LAYOUT_IS_KNOWN, address, order_body
from swarmpush.dynamics.crew import Mode, Rig, act, new_crew
from swarmpush.dynamics.host import Host, keep_state, lend, list_pairs, read_state
from swarmpush.dynamics.ledger import SLOTS, close_visits, enter_contacts, new_ledger, settle_crew
from swarmpush.dynamics.loop import Limits, Task
from swarmpush.dynamics.ranging import Surroundings
from swarmpush.dynamics.steps import NOISE_INTERVAL, Units
from swarmpush.dynamics.visit_log import VisitLog
from swarmpush.problems import RoutineError
from swarmpush.program import PC, Command, Senses, compile_routine, in_units, note_range
from swarmpush.routine import Routine, Sight
from swarmpush.scenario import Errors


@dataclass(frozen=True)
class Drive:
    """What drives a pusher, in SI units; the keys mean what they mean in a scenario's table `pushers`.

    stall_force: push at standstill, N. free_speed: at which it is used up, m/s. reach: from its centre to its nose, m;
    what is farther away than that and not touched yet is a range. turn_drag: needed with a free heading, N m s.
    """

    stall_force: float
    free_speed: float
    sideways_drag: float = 1.0
    heading: Literal["held", "free"] = "held"
    turn_drag: float = 0.0
    contact_arm: float = 0.0
    turn_rate: float = math.inf
    drive_while_turning: float = 0.0
    bump_threshold: float = 0.0
    bumper_arc: float = 2 * math.pi
    latency: float = 0.0


SI = Units(1.0, 1.0, 1.0)


def attach(
    space: pymunk.Space,
    *,
    dt: float,
    pushers: Sequence[pymunk.Body] = (),
    routine: Routine | Sequence[Mapping[str, Any]] | Decide | None = None,
    drive: Drive | None = None,
    watch: Mapping[str, pymunk.Body] | None = None,
    units: Units = SI,
    errors: Errors | None = None,
    seed: int = 1,
) -> Crew:
    """Let bodies of a space behave as pushers, and log every contact.

    Arguments:
        space: any space; its bodies, shapes, joints, callbacks, gravity and damping stay the user's own.
        dt: time step with which the space will be stepped, in its own unit of time.
        pushers: dynamic bodies of the space; their present angles are their headings. None: only the ledger works.
        routine: what they do: a `Routine`, a list of stages as in a scenario file, or a Python function
            (see `asking.Asker`). It cannot look for faces, which only a scenario has.
        drive: what drives them.
        watch: names of bodies to keep momentum books of. All other bodies are partners in visits as well.
        units: one of the space's units in m, s and kg.
        errors: of the pushers, in SI units; none unless given.
        seed: of all random draws.

    Returns:
        A `Crew`: call its `step` in place of `space.step`. Until `detach`, the mass of a pusher in touch (and the
        moment of a free heading) holds the drag of one step, a held heading has an infinite moment, no pair's impulse
        is carried over from an earlier touch (`collision_persistence` is 1), and nothing falls asleep.

    Raises:
        ValueError: when the arguments do not fit together.
        RuntimeError: when this build of the engine keeps its bodies in an unknown way.
    """
    if not LAYOUT_IS_KNOWN:
        raise RuntimeError(
            "this build of pymunk keeps its bodies in an unknown way; use one that pyproject.toml allows"
        )
    watched = dict(watch or {})
    _check(space, dt, pushers, routine, drive, watched)
    return Crew(space, dt, list(pushers), routine, drive or Drive(1.0, 1.0), watched, units, errors or Errors(), seed)


def _check(
    space: pymunk.Space,
    dt: float,
    pushers: Sequence[pymunk.Body],
    routine: object,
    drive: Drive | None,
    watched: Mapping[str, pymunk.Body],
) -> None:
    if not (math.isfinite(dt) and dt > 0.0):
        raise ValueError(f"dt = {dt}; it must be more than 0")
    if pushers and (routine is None or drive is None):
        raise ValueError("pushers need a routine and a drive")
    if len(set(pushers)) < len(pushers):
        raise ValueError("a body is listed twice among the pushers")
    for kind, body in [
        *(("pusher", body) for body in pushers),
        *((f"watched body {n!r}", b) for n, b in watched.items()),
    ]:
        if body.space is not space:
            raise ValueError(f"a {kind} is not in the space; add it first")
        if body.body_type != pymunk.Body.DYNAMIC:
            raise ValueError(f"a {kind} is not dynamic; only dynamic bodies have momentum")
    if set(pushers) & set(watched.values()):
        raise ValueError("a pusher cannot be watched as well; its visits are logged anyway")
    if drive is None:
        return
    if not (drive.stall_force > 0.0 and drive.free_speed > 0.0):
        raise ValueError("stall_force and free_speed must be more than 0")
    if drive.heading == "free" and not (drive.turn_drag > 0.0 and math.isfinite(drive.turn_rate)):
        raise ValueError("a free heading needs a turn_drag and a finite turn_rate")
    if math.isinf(drive.turn_rate) and any(not isinstance(s, pymunk.Circle) for b in pushers for s in b.shapes):
        raise ValueError("a pusher that is no disc needs a finite turn_rate: it cannot turn at once")


@compiled
def _before(host: Host, task: Task, step: int, is_answered: bool) -> int:
    """Decisions and orders before a step; returns how many pushers wait for an answer."""
    host, task = borrowed(host), borrowed(task)
    if not is_answered:
        read_state(host)
    n_asking = act(
        host,
        task.rig,
        task.crew,
        task.program,
        task.senses,
        task.keys,
        task.around,
        task.ground.inertia,
        step,
        is_answered,
    )
    if n_asking == 0:
        for k in range(len(host.bodies)):
            if 0 < k <= len(task.crew.pushers):
                order_body(host.bodies[k], host.orders, k)
            else:
                host.orders[k, 0] = host.motion[k, 5]
        keep_state(host)
    return n_asking


@compiled
def _after(host: Host, task: Task, n_pairs: int, step: int) -> bool:
    """Ledger, books and bumpers after a step; True if the log must be fetched."""
    host, task = borrowed(host), borrowed(task)
    read_state(host)
    enter_contacts(host, task.rig, task.crew, task.ground, task.ledger, n_pairs, step)
    balance_blocks(host, task.ground, task.rig.dt)
    settle_crew(host, task.rig, task.crew, task.ground, task.ledger, task.keys, step)
    close_visits(task.ledger, step)
    return bool(task.ledger.n_log[0] + SLOTS * len(task.ledger.n_open) >= len(task.ledger.log))


class Crew:
    """Pushers and ledger attached to a space; made by `attach`. A context manager that detaches at its end."""

    def __init__(
        self,
        space: pymunk.Space,
        dt: float,
        pushers: list[pymunk.Body],
        routine: Routine | Sequence[Mapping[str, Any]] | Decide | None,
        drive: Drive,
        watched: dict[str, pymunk.Body],
        units: Units,
        errors: Errors,
        seed: int,
    ) -> None:
        self.space, self.dt, self.units, self._bodies = space, dt, units, pushers
        self._watched = watched
        named = {body: name for name, body in watched.items()}
        others = [b for b in space.bodies if b.body_type != pymunk.Body.STATIC and b not in set(pushers)]
        others.sort(key=lambda body: body not in named)  # watched ones first
        self._stand_in = pymunk.Body(1.0, 1.0)  # takes the block's place in a world without one
        blocks = others or [self._stand_in]
        static = [space.static_body, *(b for b in space.bodies if b.body_type == pymunk.Body.STATIC)]
        self._partners = [blocks[0], *pushers, *blocks[1:], *static]
        named |= dict.fromkeys(pushers, "pusher")
        self._names = [_name(body, named, k) for k, body in enumerate(self._partners)]
        self._blocks, self._step, self._log, self._is_attached = blocks, 0, VisitLog(), True
        self._asker: Asker | None = None
        self._before_us = (space.collision_persistence, space.sleep_time_threshold)
        self._inertia_before = [(body.mass, body.moment) for body in pushers]
        self._task = self._build(routine, drive, errors, seed)
        space.collision_persistence, space.sleep_time_threshold = 1, math.inf
        for body in [*pushers, *others]:
            if body.body_type == pymunk.Body.DYNAMIC:
                body.activate()
        moving = self._partners[: len(blocks) + len(pushers)]
        self._host = lend(space, moving, ())

    def _build(
        self, routine: Routine | Sequence[Mapping[str, Any]] | Decide | None, drive: Drive, e: Errors, seed: int
    ) -> Task:
        u, dt, n = self.units, self.dt, len(self._bodies)
        keys = stream_keys(seed, n)
        crew = new_crew(np.array([body.angle for body in self._bodies]))
        units = crew.pushers
        units["mass"] = [body.mass for body in self._bodies]
        stall, drag = drive.stall_force / u.force, drive.stall_force / drive.free_speed / u.drag
        units["stall"] = stall * (1.0 + e.stall_spread * unit_deviates(keys, Purpose.UNIT_STALL))
        units["drag"] = drag / (1.0 + e.speed_spread * unit_deviates(keys, Purpose.UNIT_SPEED))
        units["side_drag"] = units["drag"] * drive.sideways_drag
        units["drift"] = (e.heading_drift + e.drift_spread * unit_deviates(keys, Purpose.UNIT_DRIFT)) * u.time
        if e.dropout > 0.0:
            units["fails_at"] = [-math.log(uniform(key, 0)) / (e.dropout * u.time) for key in keys[:, Purpose.DROPOUT]]
        is_free, turn_drag = drive.heading == "free", drive.turn_drag / u.turn_drag
        for k, body in enumerate(self._bodies):
            if is_free:
                units[k]["moment"] = body.moment
            else:
                body.moment = math.inf
        prepare_masses(units, turn_drag, dt)
        speed = drive.free_speed / u.speed
        crossing = _size(self._bodies) / speed
        rig = Rig(
            dt=dt,
            drive_while_turning=drive.drive_while_turning,
            turn_rate=drive.turn_rate * u.time,
            bump_threshold=drive.bump_threshold / u.impulse,
            half_arc=drive.bumper_arc / 2,
            latency=drive.latency / u.time,
            retry=MISSED_BUMP_RETRY * crossing,
            missed_bumps=e.missed_bumps,
            false_bumps=e.false_bumps * u.time,
            diffusion=e.heading_diffusion * math.sqrt(u.time),
            noise_steps=max(1, round(NOISE_INTERVAL * crossing / dt)),
            heading_is_free=is_free,
            follows=True,
            turn_drag=turn_drag,
            contact_arm=drive.contact_arm / u.length,
            fade_rate=u.time / e.fade_time if e.fade_time else 0.0,
            pull_x=0.0,
            pull_y=0.0,
        )
        n_blocks, n_moving = len(self._blocks), len(self._blocks) + n
        fixed = self._partners[n_moving:]
        blocks = np.zeros(n_blocks, dtype=BLOCK_STATE)
        for k, body in enumerate(self._blocks):
            block = blocks[k]
            block["entity"] = k and n + k
            if body.body_type == pymunk.Body.DYNAMIC:
                block["mass"] = block["step_mass"] = body.mass
                block["moment"] = block["step_moment"] = body.moment if math.isfinite(body.moment) else 0.0
        ground = Ground(
            blocks=blocks,
            sides=np.zeros((1, 2)),
            inertia=np.concatenate([inverse_inertia(rows) for rows in (blocks[:1], units, blocks[1:])]),
            wall_x=np.array([body.position.x for body in fixed]),
            wall_y=np.array([body.position.y for body in fixed]),
            has_floor=True,
            pull_x=0.0,
            pull_y=0.0,
            front_reach=math.inf,
            lean_force=math.inf,
            approach=APPROACH * speed,
        )
        program = self._program(routine, crew.memory)
        nothing = np.zeros((0, 8))
        return Task(
            rig=rig,
            crew=crew,
            program=program,
            senses=Senses(e.turn_bias, e.turn_sd, e.bearing_step, e.bearing_sd, e.range_sd / u.length, e.missed_sights),
            around=Surroundings(
                nothing,
                np.zeros((0, 3)),
                nothing,
                np.zeros((0, 3)),
                np.zeros(0, dtype=np.int64),
                1.0,
                0,
                is_unknown=True,
            ),
            keys=keys,
            ground=ground,
            ledger=new_ledger(
                np.array([address(body._body) for body in self._partners]),
                n_moving,
                64 + 24 * n_moving,
                4096 * (1 + n_moving),
            ),
            path=new_path(1, n, n_blocks - 1),
            limits=Limits(np.zeros((0, 4)), math.inf, math.inf, math.inf, 2**62, 1),
        )

    def _program(
        self, routine: Routine | Sequence[Mapping[str, Any]] | Decide | None, memory: NDArray[np.int64]
    ) -> NDArray[np.void]:
        u = self.units
        if routine is None:
            routine = [{"name": "none", "acts": [{"act": "halt"}]}]
        if not isinstance(routine, Routine):
            if callable(routine):
                self._asker = Asker(routine, len(self._bodies), (), u.length, u.time)
                memory[:, PC] = self._asker.begins
                return self._asker.program
            try:
                routine = Routine.model_validate({"stages": routine})
            except ValidationError as error:
                first = error.errors(include_url=False)[0]
                place = ".".join(str(part) for part in first["loc"])
                raise RoutineError(f"routine: {place}: {first['msg']}") from None
        if any(isinstance(act, Sight) for stage in routine.stages for act in stage.acts):
            raise RoutineError("the act sight looks for a face of a scenario, and this space has none")
        return in_units(compile_routine(routine), u.length, u.time)

    def step(self, n: int = 1) -> None:
        """Step the space `n` times.

        Raises:
            RuntimeError: after `detach`.
            RoutineError: when a Python routine gives an answer that cannot be carried out.
        """
        if not self._is_attached:
            raise RuntimeError("the crew has been detached; attach it again")
        for _ in range(n):
            n_asking = _before(self._host, self._task, self._step, False)
            while n_asking:
                self._answer()
                n_asking = _before(self._host, self._task, self._step, True)
            self.space.step(self.dt)
            if _after(self._host, self._task, list_pairs(self._host), self._step):
                self._log.fetch(self._task.ledger)
            self._step += 1

    def _answer(self) -> None:
        task = self._task
        if self._asker:
            self._asker.answer_all(task, self._step)
        for i in np.flatnonzero(task.crew.pushers["asks"] == int(Command.GAUGE)):
            memory, notes = task.crew.memory[i], task.crew.notes[i]
            most = float(task.program[memory[PC] - 1]["value"])
            run = self._clear_run(self._bodies[i], float(task.crew.pushers[i]["heading"]), most)
            note_range(task.senses, task.keys[i], memory, notes, run, most)

    def _clear_run(self, body: pymunk.Body, heading: float, most: float) -> float:
        """How far a disc as wide as the pusher could run before it touches something, in the space's unit."""
        ahead = pymunk.Vec2d(math.cos(heading), math.sin(heading))
        hits = self.space.segment_query(
            body.position, body.position + ahead * most, _size([body]), pymunk.ShapeFilter()
        )
        shares = [hit.alpha for hit in hits if hit.shape and hit.shape.body is not body and not hit.shape.sensor]
        return most * min(shares, default=1.0)

    @property
    def time_s(self) -> float:
        """Time since the crew was attached, s."""
        return self._step * self.dt * self.units.time

    @property
    def visits(self) -> pd.DataFrame:
        """Every contact so far, as in `Run.visits`; surface is the partner's name, and of the block's travel nothing is
        said. A name is the one given in `watch`, "pusher", "wall", or "body" with a number for all else."""
        task = self._task
        rows = tables.in_order(self._log.rows(task.ledger))
        names = np.array(self._names, dtype=object)[rows["partner"]]
        n = len(self._bodies)
        table = tables.visit_table(rows, names, n, len(self._host.motion), 0.0, self.dt * self.units.time, self.units)
        table.insert(1, "owner", np.array(self._names, dtype=object)[rows["owner"]])
        return table.drop(columns=["block_dx_m", "block_dx_next_m"])

    @property
    def books(self) -> pd.DataFrame:
        """Momentum account of each watched body since the crew was attached.

        One row per body: name, then impulses in N s by pushers, by other bodies, by walls and by all else (gravity,
        joints, damping, the user's own forces), each in x and y, and about the centre of mass in N m s ("turn").
        """
        u, rows = self.units, []
        by = {"pushers": "pushers", "bodies": "blocks", "walls": "walls", "else": "ground"}
        for name, body in self._watched.items():
            block = self._task.ground.blocks[self._blocks.index(body)]
            row: dict[str, Any] = {"name": name}
            for shown, column in by.items():
                row[f"{shown}_x_Ns"] = float(block[f"{column}_x"]) * u.impulse
                row[f"{shown}_y_Ns"] = float(block[f"{column}_y"]) * u.impulse
                row[f"{shown}_turn_Nms"] = float(block[f"{column}_turn"]) * u.turn_impulse
            rows.append(row)
        return pd.DataFrame(rows)

    @property
    def pushers(self) -> pd.DataFrame:
        """Where the pushers are: pusher, x_m, y_m, heading_rad, mode."""
        u, states = self.units, self._task.crew.pushers
        return pd.DataFrame(
            {
                "pusher": np.arange(len(states)),
                "x_m": [body.position.x * u.length for body in self._bodies],
                "y_m": [body.position.y * u.length for body in self._bodies],
                "heading_rad": np.remainder(states["heading"] + np.pi, 2 * np.pi) - np.pi,
                "mode": [Mode(mode).name.lower() for mode in states["mode"]],
            }
        )

    def detach(self) -> None:
        """Give the pushers their own mass and moment back, and the space its settings. What was logged stays."""
        if not self._is_attached:
            return
        self._is_attached = False
        self.space.collision_persistence, self.space.sleep_time_threshold = self._before_us
        for body, (mass, moment) in zip(self._bodies, self._inertia_before, strict=True):
            body.mass, body.moment = mass, moment

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.detach()


def _name(body: pymunk.Body, named: Mapping[pymunk.Body, str], number: int) -> str:
    if body in named:
        return named[body]
    if body.body_type == pymunk.Body.STATIC:
        return "wall"
    return f"body {number}"


def _size(bodies: Sequence[pymunk.Body]) -> float:
    """Radius of the smallest pusher: that of its disc, or half its width."""
    sizes = [
        shape.radius if isinstance(shape, pymunk.Circle) else 0.5 * min(_extent(shape))
        for b in bodies
        for shape in b.shapes
    ]
    return min(sizes, default=1.0)


def _extent(shape: pymunk.Shape) -> tuple[float, float]:
    box = shape.cache_bb()
    return box.right - box.left, box.top - box.bottom
