"""A crew in a space: how its pushers stand there, what is done before and after each step, what comes out."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from types import TracebackType
from typing import Any, NamedTuple, Self
from weakref import WeakSet

import numpy as np
import pandas as pd
import pymunk
from numpy.typing import NDArray
from pydantic import ValidationError

from swarmpush.compiled import borrowed, compiled, inlined
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
    rig_of,
    unit_deviates,
)
from swarmpush.dynamics.chipmunk import address, face_body, note_pairs, order_body, read_place
from swarmpush.dynamics.crew import TOUCHES_BLOCK, Mode, act, new_crew
from swarmpush.dynamics.drive import Drive
from swarmpush.dynamics.host import Host, keep_state, lend, read_state
from swarmpush.dynamics.ledger import (
    SLOTS,
    close_visits,
    enter_body,
    enter_contacts,
    most_visits,
    new_ledger,
    settle_crew,
)
from swarmpush.dynamics.loop import Limits, Task
from swarmpush.dynamics.ranging import Surroundings
from swarmpush.dynamics.steps import NOISE_INTERVAL, Units
from swarmpush.dynamics.visit_log import VisitLog
from swarmpush.problems import RoutineError
from swarmpush.program import PC, Command, Senses, compile_routine, in_units, note_range
from swarmpush.routine import Routine, Sight
from swarmpush.scenario import Errors

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SPARE = 128  # bodies, and static bodies, that may be added to a space while a crew is attached
TOUCHING = 1e-6  # cosine to the surface's normal below which a pusher runs along what it touches, not into it


ATTACHED: WeakSet[pymunk.Space] = WeakSet()


def solid_shapes(body: pymunk.Body) -> list[pymunk.Shape]:
    return [shape for shape in body.shapes if not shape.sensor]


def is_disc(body: pymunk.Body) -> bool:
    return all(isinstance(s, pymunk.Circle) and s.offset == body.center_of_gravity for s in solid_shapes(body))


class _Outline(NamedTuple):
    """A pusher's outline in its own frame, x ahead: half its width, and where a disc so wide just reaches its nose."""

    half_width: float
    x: float
    y: float


def _outline(body: pymunk.Body) -> _Outline:
    left, right, nose = -math.inf, math.inf, -math.inf
    for shape in solid_shapes(body):
        corners: Sequence[tuple[float, float]]
        if isinstance(shape, pymunk.Circle):
            corners = [shape.offset]
        elif isinstance(shape, pymunk.Segment):
            corners = [shape.a, shape.b]
        else:
            assert isinstance(shape, pymunk.Poly)
            corners = shape.get_vertices()
        radius = shape.radius
        right, left = min(right, *(y - radius for _, y in corners)), max(left, *(y + radius for _, y in corners))
        nose = max(nose, *(x + radius for x, _ in corners))
    half = 0.5 * (left - right)
    return _Outline(half, nose - half, 0.5 * (left + right))


_FREE, _TIED, _GONE = 0, 1, 2  # how a pusher stands in its space: by itself, on a joint, or no longer


_DONE, _FETCH, _FULL = 0, 1, 2  # what comes next: another step, a fetch of the log, or the same again with more room


@compiled
def _before(host: Host, task: Task, standing: IntArray, step: int, is_answered: bool, faces: bool) -> int:
    """Decisions and orders before a step; returns how many pushers wait for an answer.

    faces: whether the bodies' angles are only set, as discs turn without rubbing on what they touch; not on a joint.
    """
    host, task = borrowed(host), borrowed(task)
    rig, pushers, orders = task.rig, task.crew.pushers, host.orders
    if not is_answered:
        _enter_kicks(host, task)
        for i in range(len(pushers)):
            if standing[i] == _TIED:
                pushers[i].touches |= TOUCHES_BLOCK  # what it tows meets the whole thrust, as what it touches does
    n_asking = act(
        host,
        rig,
        task.crew,
        task.program,
        task.senses,
        task.keys,
        task.around,
        task.ground.inertia,
        step,
        is_answered,
    )
    if n_asking > 0:
        return n_asking
    for k in range(len(host.bodies)):
        if 0 < k <= len(pushers):
            # the engine lets gravity act on the mass with which it steps; the weight is among the orders already
            orders[k, 1] -= pushers[k - 1].step_mass * rig.pull_x
            orders[k, 2] -= pushers[k - 1].step_mass * rig.pull_y
            if faces and standing[k - 1] == _TIED:
                orders[k, 0] = (pushers[k - 1].heading - host.motion[k, 2]) / rig.dt  # its joints must feel it turn
            elif faces and standing[k - 1] == _FREE:
                face_body(host.bodies[k], pushers[k - 1].heading)
            if standing[k - 1] != _GONE:
                order_body(host.bodies[k], orders, k)
        else:
            orders[k, 0] = host.motion[k, 5]
        keep_state(host, k)
    return 0


@inlined
def _enter_kicks(host: Host, task: Task) -> None:
    """Read the bodies' state, and enter what has changed since the last step was over."""
    before, motion, blocks = host.before, host.motion, task.ground.blocks
    for k in range(len(motion)):
        for c in range(3, 6):
            before[k, c] = motion[k, c]
    read_state(host)
    for k in range(len(blocks)):
        b = blocks[k]
        m = b.entity
        b.ground_x += b.mass * (motion[m, 3] - before[m, 3])
        b.ground_y += b.mass * (motion[m, 4] - before[m, 4])
        b.ground_turn += b.moment * (motion[m, 5] - before[m, 5])


@compiled
def _after(host: Host, task: Task, walls: IntArray, step: int) -> int:
    """Ledger, books and bumpers after a step."""
    host, task = borrowed(host), borrowed(task)
    ledger, ground = task.ledger, task.ground
    n_pairs = note_pairs(host.each_pair, host.space, host.visitor, host.pairs)
    if n_pairs > len(ledger.partners) or most_visits(host, ledger, n_pairs) > ledger.slots.shape[1]:
        return _FULL
    for k in range(len(walls)):
        ground.wall_x[k], ground.wall_y[k] = read_place(walls[k])
    read_state(host)
    enter_contacts(host, task.rig, task.crew, ground, ledger, n_pairs, step)
    balance_blocks(host, ground, task.rig.dt)
    settle_crew(host, task.rig, task.crew, ground, ledger, task.keys, step)
    close_visits(ledger, step)
    return _FETCH if ledger.n_log[0] + ledger.slots.size >= len(ledger.log) else _DONE


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
        self.space, self.units = space, units
        self._bodies, self._watched = pushers, watched
        self._step, self._log, self._is_attached, self._is_asking = 0, VisitLog(), True, False
        self._asker: Asker | None = None
        self._outlines = [_outline(body) for body in pushers]
        self._faces = drive.heading == "held" and all(is_disc(body) for body in pushers)

        others = [b for b in space.bodies if b.body_type != pymunk.Body.STATIC and b not in set(pushers)]
        self._stand_in = pymunk.Body(1.0, 1.0)  # takes the place of bodies still to come, and of a missing first one
        first, *more = others or [self._stand_in]
        moving = [first, *pushers, *more]
        self._n_rows = len(moving) + SPARE
        self._moving = moving + [self._stand_in] * SPARE
        fixed = sum(body.body_type == pymunk.Body.STATIC for body in space.bodies) + 1
        self._walls = np.zeros(fixed + SPARE, dtype=np.int64)
        self._n_moving, self._n_walls, self._n_unnamed = 0, 0, 0
        self._names = [""] * (self._n_rows + len(self._walls))
        self._numbers: dict[pymunk.Body, int] = {}
        self._known_names = dict.fromkeys(pushers, "pusher") | {body: name for name, body in watched.items()}
        self._seen: tuple[dict[pymunk.Body, None], dict[pymunk.Constraint, None]] = {}, {}
        self._standing = np.zeros(len(pushers), dtype=np.int64)

        self._before_us = (space.collision_persistence, space.sleep_time_threshold)
        self._inertia_before = [(body.mass, body.moment) for body in pushers]
        self._task = self._build(dt, routine, drive, errors, seed)
        self._host = lend(space, self._moving, ())
        self._host = self._host._replace(floor_load=np.zeros((len(self._task.ground.blocks), 2)))
        for body in moving:
            self._take_in(body)
            if body.space:
                space.reindex_shapes_for_body(body)  # where it has been put since its shapes were added
        self._take_in(space.static_body)
        self._look_round()

        ATTACHED.add(space)
        if drive.heading == "held":
            for body in pushers:
                body.moment = math.inf
        space.collision_persistence, space.sleep_time_threshold = 1, math.inf
        for body in moving:
            if body.space and body.body_type == pymunk.Body.DYNAMIC:
                body.activate()

    def _build(
        self,
        dt: float,
        routine: Routine | Sequence[Mapping[str, Any]] | Decide | None,
        drive: Drive,
        e: Errors,
        seed: int,
    ) -> Task:
        u, n = self.units, len(self._bodies)
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
        if is_free:
            units["moment"] = [body.moment if math.isfinite(body.moment) else 0.0 for body in self._bodies]
        prepare_masses(units, turn_drag, dt)
        speed = drive.free_speed / u.speed
        crossing = min((outline.half_width for outline in self._outlines), default=1.0) / speed
        rig = rig_of(
            drive,
            e,
            u,
            dt,
            turn_drag=turn_drag,
            follows=not self._faces,
            retry=MISSED_BUMP_RETRY * crossing,
            noise_steps=max(1, round(NOISE_INTERVAL * crossing / dt)),
        )
        blocks = np.zeros(self._n_rows - n, dtype=BLOCK_STATE)
        blocks["entity"] = np.arange(len(blocks)) + n
        blocks["entity"][0] = 0
        ground = Ground(
            blocks=blocks,
            sides=np.zeros((1, 2)),
            inertia=np.concatenate([inverse_inertia(rows) for rows in (blocks[:1], units, blocks[1:])]),
            wall_x=np.zeros(len(self._walls)),
            wall_y=np.zeros(len(self._walls)),
            has_floor=True,  # so that what contacts do not explain is entered as the ground's
            pull_x=0.0,
            pull_y=0.0,
            front_reach=math.inf,
            lean_force=math.inf,
            approach=APPROACH * speed,
        )
        program = self._program(routine, crew.memory)
        nothing, no_arcs, none = np.zeros((0, 8)), np.zeros((0, 3)), np.zeros(0, dtype=np.int64)
        return Task(
            rig=rig,
            crew=crew,
            program=program,
            senses=Senses(e.turn_bias, e.turn_sd, e.bearing_step, e.bearing_sd, e.range_sd / u.length, e.missed_sights),
            around=Surroundings(nothing, no_arcs, nothing, no_arcs, none, 1.0, 0, is_unknown=True),
            keys=keys,
            ground=ground,
            ledger=new_ledger(
                np.zeros(self._n_rows + len(self._walls), dtype=np.int64),
                self._n_rows,
                64 + 24 * self._n_rows,
                max(4096, 4 * SLOTS * self._n_rows),  # all open visits may end in one step
            ),
            path=new_path(1, n, len(blocks) - 1),
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
                place = ".".join(("routine", *(str(part) for part in first["loc"])))
                raise RoutineError(f"{place}: {first['msg'].removeprefix('Value error, ')}") from None
        if any(isinstance(act, Sight) for stage in routine.stages for act in stage.acts):
            raise RoutineError("the act sight looks for a face of a scenario, and this space has none")
        return in_units(compile_routine(routine), u.length, u.time)

    # ---- bodies that come and go ----

    def _look_round(self) -> None:
        """Take note of bodies and joints that have been added or removed."""
        bodies, joints = self._seen
        if self.space.bodies == bodies.keys() and self.space.constraints == joints.keys():
            return
        self._seen = dict.fromkeys(self.space.bodies), dict.fromkeys(self.space.constraints)
        for body in self._seen[0]:
            if body not in self._numbers:
                self._take_in(body)
        for k, body in enumerate(self._bodies):
            is_tied = any(joint in self._seen[1] for joint in body.constraints)
            self._standing[k] = _GONE if body.space is not self.space else _TIED if is_tied else _FREE

    def _take_in(self, body: pymunk.Body) -> None:
        """Give a body its number and name. The number is its row in the buffers, or follows them for a static body."""
        ledger, is_wall = self._task.ledger, body.body_type == pymunk.Body.STATIC
        if (self._n_walls == len(self._walls)) if is_wall else (self._n_moving == self._n_rows):
            raise RuntimeError(f"more than {SPARE} bodies were added since the crew was attached; attach it anew")
        if is_wall:
            number = self._n_rows + self._n_walls
            self._walls[self._n_walls] = address(body._body)
            self._n_walls += 1
        else:
            number = self._n_moving
            self._n_moving += 1
            if not 0 < number <= len(self._bodies):
                self._set_block(body, number)
            self._moving[number] = body  # which keeps it alive, and so its address its own
            self._host.bodies[number] = address(body._body)
            self._host.motion[number] = *body.position, body.angle, *body.velocity, body.angular_velocity
        self._numbers[body] = number
        self._names[number] = self._name(body)
        enter_body(ledger.known, ledger.entities, address(body._body), number)

    def _set_block(self, body: pymunk.Body, number: int) -> None:
        """What the ledger must know of a body that moves and is no pusher; one that cannot be moved has no mass."""
        ground = self._task.ground
        block = ground.blocks[max(number - len(self._bodies), 0) : max(number - len(self._bodies), 0) + 1]
        if body.body_type == pymunk.Body.DYNAMIC:
            block["mass"] = block["step_mass"] = body.mass
            block["moment"] = block["step_moment"] = body.moment if math.isfinite(body.moment) else 0.0
        ground.inertia[number] = inverse_inertia(block)[0]

    def _name(self, body: pymunk.Body) -> str:
        if body in self._known_names:
            return self._known_names[body]
        if body.body_type == pymunk.Body.STATIC:
            return "wall"
        if body is self._stand_in:
            return ""
        self._n_unnamed += 1
        return f"body {self._n_unnamed}"

    def _make_room(self) -> None:
        """Room for as many pairs as there are in touch, and for more open visits of one body."""
        host, ledger = self._host, self._task.ledger
        n_pairs = int(host.pairs[0])
        if n_pairs > len(ledger.partners):
            pairs = np.zeros(2 + 2 * n_pairs, dtype=np.int64)
            pairs[1] = 2 * n_pairs
            self._host = host._replace(pairs=pairs)
            ledger = ledger._replace(
                following=np.zeros(2 * n_pairs, dtype=np.int64),
                partners=np.zeros(2 * n_pairs, dtype=np.int64),
                senses=np.zeros(2 * n_pairs),
            )
        else:
            self._log.fetch(ledger)
            fresh = np.zeros_like(ledger.slots)
            fresh["partner"] = -1
            slots = np.concatenate([ledger.slots, fresh], axis=1)
            ledger = ledger._replace(slots=slots, log=np.zeros(4 * slots.size, dtype=slots.dtype))
        self._task = self._task._replace(ledger=ledger)

    # ---- stepping ----

    def step(self, n: int = 1) -> None:
        """Step the space `n` times.

        Not logged is a contact in a step at whose end a callback takes one of its shapes out of the space; what it gave
        a watched body then counts among all else.

        Raises:
            RuntimeError: after `detach`, or when too many bodies have been added.
            RoutineError: when a Python routine gives an answer that cannot be carried out. The space has not been
                stepped then; the next call asks the pushers that waited once more. So it is with the function's own
                exceptions.
        """
        for _ in range(n):
            if not self._is_attached:
                raise RuntimeError("the crew has been detached; attach it again")
            self._look_round()
            pull = self.space.gravity
            if pull != (self._task.rig.pull_x, self._task.rig.pull_y):
                self._task = self._task._replace(rig=self._task.rig._replace(pull_x=pull[0], pull_y=pull[1]))
            if not self._is_asking:
                self._is_asking = self._order(False) > 0
            while self._is_asking:
                self._answer()
                self._is_asking = self._order(True) > 0
            self.space.step(self.dt)
            while (outcome := self._enter()) != _DONE:
                if outcome == _FETCH:
                    self._log.fetch(self._task.ledger)
                    break
                self._make_room()
            self._step += 1

    def _order(self, is_answered: bool) -> int:
        return _before(self._host, self._task, self._standing, self._step, is_answered, self._faces)

    def _enter(self) -> int:
        return _after(self._host, self._task, self._walls[: self._n_walls], self._step)

    def _answer(self) -> None:
        task = self._task
        if self._asker:
            self._asker.answer_all(task, self._step)
        for i in np.flatnonzero(task.crew.pushers["asks"] == int(Command.GAUGE)):
            memory, notes = task.crew.memory[i], task.crew.notes[i]
            most = float(task.program[memory[PC] - 1]["value"])
            run = self._clear_run(int(i), float(task.crew.pushers[i]["heading"]), most)
            note_range(task.senses, task.keys[i], memory, notes, run, most)

    def _clear_run(self, i: int, heading: float, most: float) -> float:
        """How far a disc as wide as pusher i, its front at the pusher's nose, could run before it touches something,
        in the space's unit of length."""
        body, outline = self._bodies[i], self._outlines[i]
        ahead = pymunk.Vec2d(math.cos(heading), math.sin(heading))
        start, filter_ = body.local_to_world((outline.x, outline.y)), solid_shapes(body)[0].filter

        end, width = start + ahead * most, outline.half_width
        # the space's own query along a line leaves out shapes whose boxes only the disc's side would meet
        swept = pymunk.BB(
            min(start.x, end.x) - width,
            min(start.y, end.y) - width,
            max(start.x, end.x) + width,
            max(start.y, end.y) + width,
        )
        run = most
        for shape in self.space.bb_query(swept, filter_):
            if shape.body is body or shape.sensor:
                continue
            hit = shape.segment_query(start, end, width)
            # what it touches already, and runs along or away from, is not in the way
            if hit and (hit.alpha > 0.0 or hit.normal.dot(ahead) < -TOUCHING):
                run = min(run, most * hit.alpha)
        return run

    # ---- what has been recorded ----

    @property
    def dt(self) -> float:
        """Time step, in the space's own unit of time."""
        return self._task.rig.dt

    @property
    def time_s(self) -> float:
        """Time since the crew was attached, s."""
        return self._step * self.dt * self.units.time

    @property
    def visits(self) -> pd.DataFrame:
        """Every contact so far, as in `Run.visits`; surface is the partner's name, and of the block's travel nothing is
        said. A name is the one given in `watch`, "pusher", "wall" for a static body, or "body" with a number for all
        else; the owner has a column of its own. x_m, y_m are the place of the owner's centre of mass."""
        rows = tables.in_order(self._log.rows(self._task.ledger))
        names = np.array(self._names, dtype=object)
        n, step_s = len(self._bodies), self.dt * self.units.time
        table = tables.visit_table(rows, names[rows["partner"]], n, self._n_rows, 0.0, step_s, self.units)
        table.insert(1, "owner", names[rows["owner"]])
        return table.drop(columns=["block_dx_m", "block_dx_next_m"])

    @property
    def books(self) -> pd.DataFrame:
        """Momentum account of each watched body since the crew was attached; the four add up to its change of momentum.

        One row per body: name, then impulses in N s by pushers, by other bodies, by walls and by all else (gravity,
        joints, damping, the user's own forces and changes of velocity), each in x and y, and about the centre of mass
        in N m s ("turn").
        """
        u, rows = self.units, []
        by = {"pushers": "pushers", "bodies": "blocks", "walls": "walls", "else": "ground"}
        for name, body in self._watched.items():
            block = self._task.ground.blocks[max(self._numbers[body] - len(self._bodies), 0)]
            row: dict[str, Any] = {"name": name}
            for shown, column in by.items():
                row[f"{shown}_x_Ns"] = float(block[f"{column}_x"]) * u.impulse
                row[f"{shown}_y_Ns"] = float(block[f"{column}_y"]) * u.impulse
                row[f"{shown}_turn_Nms"] = float(block[f"{column}_turn"]) * u.turn_impulse
            if block["moment"] == 0.0:  # what keeps it from turning gives the opposite of all else
                row["else_turn_Nms"] = 0.0 - sum(row[f"{shown}_turn_Nms"] for shown in list(by)[:3])
            rows.append(row)
        return pd.DataFrame(rows)

    @property
    def pushers(self) -> pd.DataFrame:
        """Where the pushers are: pusher, x_m, y_m of the centre of mass, heading_rad, mode."""
        u, states = self.units, self._task.crew.pushers
        places = [body.local_to_world(body.center_of_gravity) for body in self._bodies]
        return pd.DataFrame(
            {
                "pusher": np.arange(len(states)),
                "x_m": [place.x * u.length for place in places],
                "y_m": [place.y * u.length for place in places],
                "heading_rad": np.remainder(states["heading"] + np.pi, 2 * np.pi) - np.pi,
                "mode": [Mode(mode).name.lower() for mode in states["mode"]],
            }
        )

    def detach(self) -> None:
        """Give the pushers their own mass and moment back, and the space its settings. What was logged stays."""
        if not self._is_attached:
            return
        self._is_attached = False
        ATTACHED.discard(self.space)
        self.space.collision_persistence, self.space.sleep_time_threshold = self._before_us
        for body, (mass, moment) in zip(self._bodies, self._inertia_before, strict=True):
            if body.body_type == pymunk.Body.DYNAMIC:
                body.mass, body.moment = mass, moment

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.detach()
