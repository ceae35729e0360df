"""The three ways of running one crowded corridor that `bench.py` compares: ours, bare, by hand."""

from __future__ import annotations

import math
import random
import statistics
import time
import tomllib
from typing import Any

SPARE = 64  # numbers: the engine reallocates a buffer that is nearly used up, which would free NumPy's memory
RESET = 10  # steps after which the bare space is put back on the compiled loop's course


def wide_corridor(n_pushers: int) -> Any:
    """A wide service passage with as much floor per cart, whatever their number, and a goal out of reach.

    With 64 carts it is four times as wide as the demo; length and width grow with the root of the number.
    """
    from swarmpush.demos import demo
    from swarmpush.loading import from_tables

    tables = tomllib.loads(demo("service_passage").read_text(encoding="utf-8"))
    k = math.sqrt(n_pushers / 64)
    tables["channel"] = {"length": 10.0 * k, "width": 1.28 * k}
    tables["block"] = {
        "length": 0.25,
        "width": 1.28 * k - 0.02,
        "mass": 2.1 * k,
        "rear_at": 4.0 * k,
    }  # as heavy per area
    tables["pushers"]["count"] = n_pushers
    tables["goal"]["travel"] = 5.0 * k
    return from_tables(tables)


class Ours:
    """The compiled loop."""

    def __init__(self, s: Any) -> None:
        from swarmpush.dynamics.build import build
        from swarmpush.dynamics.steps import choose_step

        self.space, self._task = build(s, 1, choose_step(s))
        self._step = 0

    def advance(self, n: int) -> None:
        from swarmpush.dynamics.loop import advance

        end = self._step + n
        while self._step < end:
            self._step, ending = advance(self.space.host, self._task, self._step, end - self._step, False)
            if ending != 0:
                raise SystemExit(f"the run ended early ({ending}); the case needs another corridor")
            self._task.ledger.n_log[0] = 0  # as if the log had been fetched

    def state(self) -> Any:
        """(n, 6) positions, angles and velocities of all bodies."""
        self.space.read_plainly()
        return self.space.host.motion.copy()

    def state_with_walls(self) -> Any:
        """The same as one row of numbers, with those of the walls, which all stand at the origin, and room to spare."""
        import numpy as np

        return np.append(self.state().ravel(), np.zeros(6 * len(self.space.walls) + SPARE))

    def n_touches(self) -> int:
        """Pairs of bodies in touch in the last step, by pymunk's own account."""
        import numpy as np
        from pymunk import batch

        buffer = batch.Buffer()
        batch.get_space_arbiters(self.space.space, batch.ArbiterFields.CONTACT_COUNT, buffer)
        return int(np.count_nonzero(np.frombuffer(buffer.int_buf(), dtype=np.int64)))


WALL, BLOCK, CART = 1, 2, 3
FLOOR_ARM = 0.28  # of the width: mean distance of the floor under the crate from its centre


def plain_space(like: Ours, s: Any) -> tuple[Any, Any, list[Any], Any]:
    """A plain pymunk space with the bodies of `like`: space, block, carts, and the floor's two joints."""
    import pymunk

    from swarmpush.dynamics.steps import engine_units

    model = like.space
    space = pymunk.Space()
    space.iterations = model.space.iterations
    space.collision_slop = model.space.collision_slop
    space.collision_persistence = model.space.collision_persistence
    originals = [(model.block, BLOCK), *((body, CART) for body in model.pushers), *((b, WALL) for b in model.walls)]
    bodies = []
    for original, kind in originals:
        body = pymunk.Body(body_type=original.body_type)
        if original.body_type == pymunk.Body.DYNAMIC:
            body.mass, body.moment = original.mass, original.moment
        body.position, body.angle = original.position, original.angle
        (shape,) = original.shapes
        if isinstance(shape, pymunk.Circle):
            copy = pymunk.Circle(body, shape.radius)
        elif isinstance(shape, pymunk.Segment):
            copy = pymunk.Segment(body, shape.a, shape.b, shape.radius)
        else:
            copy = pymunk.Poly(body, shape.get_vertices())
        copy.collision_type = kind
        copy.elasticity, copy.friction = math.sqrt(0.2), math.sqrt(0.4)  # the product is the pair's value
        space.add(body, copy)
        bodies.append(body)
    block = bodies[0]
    pivot = pymunk.PivotJoint(space.static_body, block, block.position)
    gear = pymunk.GearJoint(space.static_body, block, block.angle, 1.0)
    for joint in (pivot, gear):
        joint.max_bias = 0.0
        space.add(joint)
    pivot.max_force = s.block.mass * s.floor.gravity * s.floor.kinetic_friction / engine_units(s).force
    gear.max_force = pivot.max_force * FLOOR_ARM * s.block.width / engine_units(s).length
    return space, block, bodies[1 : 1 + len(model.pushers)], (pivot, gear)


class Bare:
    """`space.step` alone, kept on the course of a twin of the compiled loop."""

    def __init__(self, s: Any) -> None:
        from pymunk import batch

        self._twin = Ours(s)
        self._space, *_ = plain_space(self._twin, s)
        self._dt = _engine_step(s)
        fields = batch.BodyFields
        self._fields = fields.POSITION | fields.ANGLE | fields.VELOCITY | fields.ANGULAR_VELOCITY
        self.seconds = 0.0  # that the last `advance` spent in `space.step`
        self._touches: list[int] = []

    def advance(self, n: int) -> None:
        from pymunk import batch

        self.seconds = 0.0
        step, dt = self._space.step, self._dt
        buffer = batch.Buffer()
        for _ in range(n // RESET):
            buffer.set_float_buf(self._twin.state_with_walls())
            batch.set_space_bodies(self._space, self._fields, buffer)
            start = time.perf_counter()
            for _ in range(RESET):
                step(dt)
            self.seconds += time.perf_counter() - start
            self._twin.advance(RESET)
            self._touches.append(self._twin.n_touches())

    def touches_per_step(self) -> float:
        """On the common course of the compiled loop and of this space."""
        return statistics.mean(self._touches)


def _engine_step(s: Any) -> float:
    from swarmpush.dynamics.steps import choose_step, engine_units

    return float(choose_step(s).dt_s / engine_units(s).time)


RUNNING, REACTING, TURNING = 0, 1, 2


class Cart:
    """One pusher of the hand-written script."""

    __slots__ = (
        "body", "drag", "heading", "kind", "mode", "normal", "pressed", "side_drag", "to_turn",
        "touched", "until", "ux", "uy", "walls",
    )  # fmt: skip

    def __init__(self, body: Any, heading: float, drag: float, side_drag: float) -> None:
        self.body, self.heading = body, heading
        self.ux, self.uy = math.cos(heading), math.sin(heading)
        self.drag, self.side_drag = drag, side_drag
        self.mode, self.until, self.to_turn, self.pressed = RUNNING, 0.0, 0.0, 0.0
        self.kind, self.normal, self.walls, self.touched = WALL, 0.0, 0, -9


class ByHand:
    """The world as a hand-written pymunk script."""

    def __init__(self, s: Any) -> None:
        from swarmpush.dynamics.steps import choose_step, engine_units
        from swarmpush.starts import draw_starts

        self._space, self._block, bodies, self._floor = plain_space(Ours(s), s)
        p, e, u = s.pushers, s.errors, engine_units(s)
        self._random = random.Random(1)
        self._dt = _engine_step(s)
        self._stall, self._turn_rate = p.stall_force / u.force, p.turn_rate * u.time
        self._threshold, self._latency = p.bump_threshold / u.impulse, p.latency / u.time
        self._facing, self._drive_while_turning = math.cos(p.bumper_arc / 2), p.drive_while_turning
        self._noise_steps = choose_step(s).noise_steps
        self._wander = e.heading_diffusion * math.sqrt(u.time) * math.sqrt(self._noise_steps * self._dt)
        self._bearing_step, self._turn_sd, self._missed = e.bearing_step, e.turn_sd, e.missed_bumps
        self._retry = 1.0 / u.time
        self._kinetic = self._floor[0].max_force
        self._static = self._kinetic * s.floor.static_friction / s.floor.kinetic_friction
        self._arm = self._floor[1].max_force / self._kinetic
        self._carts = []
        for body, (_, _, heading) in zip(bodies, draw_starts(s, 1).tolist(), strict=True):
            drag = self._stall / self._random.gauss(1.0, e.speed_spread)
            cart = Cart(body, heading, drag, drag * p.sideways_drag)
            body.mass = p.mass / u.mass
            next(iter(body.shapes)).cart = cart
            self._carts.append(cart)
        self._step, self._now, self._is_held, self._n_touches = 0, 0.0, False, 0
        self._open: dict[Any, list[float]] = {}
        self._log: list[tuple[Any, list[float]]] = []
        self._space.on_collision(CART, WALL, post_solve=self._touch_wall)
        self._space.on_collision(CART, BLOCK, post_solve=self._touch_block)
        self._space.on_collision(CART, CART, post_solve=self._touch_cart)
        self._space.on_collision(BLOCK, WALL, post_solve=self._touch_block_wall)

    def advance(self, n: int) -> None:
        step, dt = self._space.step, self._dt
        for _ in range(n):
            self._drive()
            step(dt)
            self._step += 1
            self._now = self._step * dt

    def touches_per_step(self) -> float:
        return self._n_touches / self._step

    def _drive(self) -> None:
        now, noise, wander = self._now, self._random.gauss, self._wander
        is_noisy = self._step % self._noise_steps == 0
        most = self._turn_rate * self._dt
        for cart in self._carts:
            body, thrust, mode = cart.body, self._stall, cart.mode
            if mode == REACTING and now >= cart.until:
                cart.to_turn, cart.mode = self._choose_turn(cart), TURNING
                body.angular_velocity = math.copysign(self._turn_rate, cart.to_turn)
                mode = TURNING
            if mode == TURNING:
                angle = min(max(cart.to_turn, -most), most)
                cart.to_turn -= angle
                cart.heading += angle
                cart.ux, cart.uy = math.cos(cart.heading), math.sin(cart.heading)
                thrust *= self._drive_while_turning
                if cart.to_turn == 0.0:
                    cart.mode, cart.pressed, cart.until = RUNNING, 0.0, 0.0
                    body.angular_velocity = 0.0
            elif is_noisy:
                cart.heading += noise(0.0, wander)
                cart.ux, cart.uy = math.cos(cart.heading), math.sin(cart.heading)
            vx, vy = body.velocity
            ux, uy = cart.ux, cart.uy
            along = thrust - cart.drag * (vx * ux + vy * uy)
            across = -cart.side_drag * (vy * ux - vx * uy)
            body.force = along * ux - across * uy, along * uy + across * ux
        vx, vy = self._block.velocity
        is_held = vx * vx + vy * vy < 1e-18
        if is_held != self._is_held:
            self._is_held = is_held
            pivot, gear = self._floor
            pivot.max_force = self._static if is_held else self._kinetic
            gear.max_force = pivot.max_force * self._arm

    def _choose_turn(self, cart: Cart) -> float:
        """After the crate 45 deg to the right of its normal, then 15 deg, then 75 deg."""
        if cart.kind == BLOCK:
            cart.walls, angle = 0, 45.0
        elif cart.walls == 0:
            cart.walls, angle = 1, 15.0
        else:
            cart.walls, angle = 0, 75.0
        step = self._bearing_step
        bearing = step * round(math.remainder(cart.normal - cart.heading, 2 * math.pi) / step)
        return math.remainder(bearing - math.radians(angle), 2 * math.pi) + self._random.gauss(0.0, self._turn_sd)

    def _touch_wall(self, arbiter: Any, space: Any, data: Any) -> None:
        first, wall = arbiter.shapes
        jx, jy = arbiter.total_impulse
        nx, ny = arbiter.normal
        push = -(jx * nx + jy * ny)
        self._log_visit((first, wall), push, jy * nx - jx * ny, first.cart)
        self._feel(first.cart, WALL, nx, ny, push)

    def _touch_block(self, arbiter: Any, space: Any, data: Any) -> None:
        first, block = arbiter.shapes
        jx, jy = arbiter.total_impulse
        nx, ny = arbiter.normal
        push = -(jx * nx + jy * ny)
        self._log_visit((first, block), push, jy * nx - jx * ny, first.cart)
        self._feel(first.cart, BLOCK, nx, ny, push)

    def _touch_cart(self, arbiter: Any, space: Any, data: Any) -> None:
        first, second = arbiter.shapes
        jx, jy = arbiter.total_impulse
        nx, ny = arbiter.normal
        push = -(jx * nx + jy * ny)
        self._log_visit((first, second), push, jy * nx - jx * ny, first.cart)
        self._feel(first.cart, CART, nx, ny, push)
        self._feel(second.cart, CART, -nx, -ny, push)

    def _touch_block_wall(self, arbiter: Any, space: Any, data: Any) -> None:
        jx, jy = arbiter.total_impulse
        nx, ny = arbiter.normal
        self._log_visit(arbiter.shapes, -(jx * nx + jy * ny), jy * nx - jx * ny, None)

    def _log_visit(self, pair: Any, push: float, tangential: float, cart: Cart | None) -> None:
        self._n_touches += 1
        visit = self._open.get(pair)
        if visit is not None and visit[1] >= self._step - 2:
            visit[1] = self._step
            visit[2] += push
            visit[3] += tangential
            return
        if visit is not None:
            self._log.append((pair, visit))
        x, y = cart.body.position if cart else self._block.position
        self._open[pair] = [self._step, self._step, push, tangential, x, y, cart.heading if cart else 0.0]

    def _feel(self, cart: Cart, kind: int, nx: float, ny: float, push: float) -> None:
        if cart.mode != RUNNING or nx * cart.ux + ny * cart.uy < self._facing:
            return
        if cart.touched < self._step - 1:
            cart.pressed = 0.0
        cart.touched = self._step
        cart.pressed += push
        if cart.pressed < self._threshold or self._now < cart.until:
            return
        if self._random.random() < self._missed:
            cart.until = self._now + self._retry
            return
        cart.mode, cart.until = REACTING, self._now + self._latency
        cart.kind, cart.normal = kind, math.atan2(-ny, -nx)
