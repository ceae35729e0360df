"""The space of a scenario in pymunk, and the buffers through which compiled code drives it.

Facts about the host (pymunk 7.3, Chipmunk inside) that shape this module:
- A step moves positions with the old velocities, finds contacts, applies forces, then solves for velocities. The
  drive is therefore given as a force: positions then only ever move with velocities that respect the contacts.
- The engine multiplies the restitutions and frictions of two shapes. A pair's own values are set just before
  solving, by a compiled function installed as the collision handler's pre-solve callback.
- A pair that parts and meets again within `collision_persistence` steps starts from the impulse of its last touch
  without that impulse being applied, so that the contact can pull and reports what never acted. Persistence 1
  forgets pairs at once.
- The order in which the engine lists pairs depends on addresses, so nothing may be summed up in that order.
- Negative or NaN masses and moments abort the process: a `Scenario` cannot hold them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
import pymunk
from numpy.typing import NDArray
from pymunk import batch
from pymunk._chipmunk_cffi import ffi, lib

from swarmpush.compiled import compiled, inlined
from swarmpush.dynamics import chipmunk
from swarmpush.dynamics.chipmunk import MOTION, ORDERS

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

WALL, BLOCK, PUSHER = 1, 2, 3  # collision types


class Host(NamedTuple):
    """Addresses and buffers with which compiled code drives one space.

    bodies: addresses of the moving bodies in order: block, pushers, further blocks. before, motion: (n, MOTION) their
    states before and after the last step. orders: (n, ORDERS) for the next one. pairs: see `note_pairs`. pivots,
    gears: addresses of the floor's joints under each block, none without a floor. floor_cap: (n_blocks, 2) force and
    torque they can hold in the next step; floor_load: sizes of the impulses they gave in the last one.
    """

    step: int
    each_pair: int
    visitor: int
    set_max_force: int
    get_impulse: int
    space: int
    bodies: IntArray
    before: FloatArray
    motion: FloatArray
    orders: FloatArray
    pairs: IntArray
    pivots: IntArray
    gears: IntArray
    floor_cap: FloatArray
    floor_load: FloatArray


@inlined
def read_state(host: Host) -> None:
    """Fill `host.motion`, and `host.floor_load` with the impulses that the floor gave in the last step."""
    bodies, motion, load = host.bodies, host.motion, host.floor_load
    pivots, gears = host.pivots, host.gears
    for k in range(len(bodies)):
        chipmunk.read_body(bodies[k], motion, k)
    for k in range(len(pivots)):
        load[k, 0] = chipmunk.ask_float(host.get_impulse, pivots[k])
        load[k, 1] = chipmunk.ask_float(host.get_impulse, gears[k])


@inlined
def keep_state(host: Host, k: int) -> None:
    """Copy row k of `host.motion`, with the spin that is ordered, to `host.before`."""
    for c in range(MOTION - 1):
        host.before[k, c] = host.motion[k, c]
    host.before[k, MOTION - 1] = host.orders[k, 0]


@inlined
def take_step(host: Host, dt: float) -> int:
    """Hand `host.orders` and `host.floor_cap` over, step, read the new state; returns the number of pairs in touch."""
    bodies, orders, cap = host.bodies, host.orders, host.floor_cap
    pivots, gears = host.pivots, host.gears
    for k in range(len(bodies)):
        chipmunk.order_body(bodies[k], orders, k)
        keep_state(host, k)
    for k in range(len(pivots)):
        chipmunk.call_with_float(host.set_max_force, pivots[k], cap[k, 0])
        chipmunk.call_with_float(host.set_max_force, gears[k], cap[k, 1])
    chipmunk.call_with_float(host.step, host.space, dt)
    read_state(host)
    return chipmunk.note_pairs(host.each_pair, host.space, host.visitor, host.pairs)


@compiled
def _keep_all(host: Host) -> None:
    for k in range(len(host.motion)):
        keep_state(host, k)


@compiled
def list_pairs(host: Host) -> int:
    """`note_pairs` for a space that something else has stepped."""
    return chipmunk.note_pairs(host.each_pair, host.space, host.visitor, host.pairs)


class Hull(NamedTuple):
    """A moving body for the engine, in engine units.

    corners: of its outline as seen from its centre of mass, rounded off with `radius`: one for a disc, two for a bar.
    moment: infinite for a body that contacts cannot turn.
    """

    x: float
    y: float
    angle: float
    corners: Sequence[tuple[float, float]]
    radius: float
    mass: float
    moment: float


class Footing(NamedTuple):
    """Where the dry floor acts under a block: its centre of friction as seen from its centre of mass."""

    x: float
    y: float


def lend(
    space: pymunk.Space, bodies: Sequence[pymunk.Body], joints: Sequence[tuple[pymunk.Constraint, pymunk.Constraint]]
) -> Host:
    """Addresses of a space, and buffers for these bodies.

    The host keeps nothing alive: the space, its bodies and its joints must outlive it.
    """
    n = len(bodies)
    n_pairs = 64 + 24 * n  # a disc can touch at most six equal discs, two walls and a block
    pairs = np.zeros(2 + n_pairs, dtype=np.int64)
    pairs[1] = n_pairs
    return Host(
        step=chipmunk.symbol("cpSpaceStep"),
        each_pair=chipmunk.symbol("cpSpaceEachCachedArbiter"),
        visitor=chipmunk.NOTE_PAIR_AT,
        set_max_force=chipmunk.symbol("cpConstraintSetMaxForce"),
        get_impulse=chipmunk.symbol("cpConstraintGetImpulse"),
        space=chipmunk.address(space._space),
        bodies=np.array([chipmunk.address(body._body) for body in bodies], dtype=np.int64),
        before=np.zeros((n, MOTION)),
        motion=np.zeros((n, MOTION)),
        orders=np.zeros((n, ORDERS)),
        pairs=pairs,
        pivots=np.array([chipmunk.address(pivot._constraint) for pivot, _ in joints], dtype=np.int64),
        gears=np.array([chipmunk.address(gear._constraint) for _, gear in joints], dtype=np.int64),
        floor_cap=np.zeros((max(len(joints), 1), 2)),
        floor_load=np.zeros((max(len(joints), 1), 2)),
    )


class HostSpace:
    """A pymunk space with blocks, pushers and walls, and the buffers through which it is driven."""

    def __init__(
        self,
        blocks: Sequence[Hull],
        pushers: Sequence[Hull],
        walls: Sequence[tuple[tuple[float, float], tuple[float, float]]],
        pairs: dict[tuple[int, int], tuple[float, float]],
        *,
        slop: float,
        iterations: int,
        footings: Sequence[Footing] = (),
        pass_through: bool = False,
    ) -> None:
        space = pymunk.Space()
        space.gravity = (0, 0)
        space.iterations = iterations
        space.collision_slop = slop
        space.collision_persistence = 1
        self.space = space
        first = self._add(blocks[0], BLOCK)
        self.pushers = [self._add(hull, PUSHER, pass_through) for hull in pushers]
        self.blocks = [first, *(self._add(hull, BLOCK) for hull in blocks[1:])]
        self.walls = [self._add_wall(start, end) for start, end in walls]
        self._floor = [self._add_floor(block, at) for block, at in zip(self.blocks, footings, strict=False)]
        self._keep_alive: list[Any] = []
        for (a, b), values in pairs.items():
            self._set_pair_values(a, b, values)
        self.moving = [first, *self.pushers, *self.blocks[1:]]
        self.host = lend(space, self.moving, self._floor)

    @property
    def block(self) -> pymunk.Body:
        """The block that is struck."""
        return self.blocks[0]

    def _add(self, hull: Hull, kind: int, pass_through: bool = False) -> pymunk.Body:
        body = pymunk.Body(hull.mass, hull.moment)
        body.position, body.angle = (hull.x, hull.y), hull.angle
        corners = list(hull.corners)
        shape: pymunk.Shape
        if len(corners) == 1:
            shape = pymunk.Circle(body, hull.radius)
            lib.cpBodySetPositionUpdateFunc(body._body, ffi.cast("cpBodyPositionFunc", chipmunk.MOVE_DISC.address))
        elif len(corners) == 2:
            shape = pymunk.Segment(body, corners[0], corners[1], hull.radius)
        else:
            shape = pymunk.Poly(body, corners, radius=hull.radius)
        shape.collision_type = kind
        if pass_through:
            shape.filter = pymunk.ShapeFilter(group=1)
        self.space.add(body, shape)
        return body

    def _add_wall(self, start: tuple[float, float], end: tuple[float, float]) -> pymunk.Body:
        """A side of the channel or of a post, on a static body of its own, which tells walls apart in the contact list.

        A line has no thickness, and needs none: no body moves more than a hundredth of a radius in a step.
        """
        body = pymunk.Body(body_type=pymunk.Body.STATIC)
        shape = pymunk.Segment(body, start, end, 0.0)
        shape.collision_type = WALL
        self.space.add(body, shape)
        return body

    def _add_floor(self, block: pymunk.Body, at: Footing) -> tuple[pymunk.Constraint, pymunk.Constraint]:
        """Dry friction of the floor as two joints that give way at a cap and never pull back (max_bias 0)."""
        static = self.space.static_body
        pivot = pymunk.PivotJoint(static, block, block.local_to_world((at.x, at.y)), (at.x, at.y))
        gear = pymunk.GearJoint(static, block, block.angle, 1.0)
        for joint in (pivot, gear):
            joint.max_bias = 0.0
            joint.collide_bodies = True
            joint.max_force = 0.0
            self.space.add(joint)
        return pivot, gear

    def _set_pair_values(self, first: int, second: int, values: tuple[float, float]) -> None:
        handler = lib.cpSpaceAddCollisionHandler(self.space._space, first, second)
        numbers = np.array(values, dtype=np.float64)
        handler.preSolveFunc = ffi.cast("cpCollisionPreSolveFunc", chipmunk.SET_PAIR.address)
        handler.userData = ffi.cast("cpDataPointer", numbers.ctypes.data)
        self._keep_alive.append(numbers)

    def read_plainly(self) -> None:
        """`read_state` by way of pymunk's public interface."""
        for k, body in enumerate(self.moving):
            self.host.motion[k] = *body.position, body.angle, *body.velocity, body.angular_velocity
        for k, joints in enumerate(self._floor):
            self.host.floor_load[k] = [joint.impulse for joint in joints]

    def step_plainly(self, dt: float) -> int:
        """`take_step` by way of pymunk's public interface, but for the list of contacts."""
        for k, body in enumerate(self.moving):
            spin, force_x, force_y, torque = self.host.orders[k].tolist()
            body.angular_velocity, body.force, body.torque = spin, (force_x, force_y), torque
        for k, joints in enumerate(self._floor):
            for joint, cap in zip(joints, self.host.floor_cap[k].tolist(), strict=True):
                joint.max_force = cap
        _keep_all(self.host)
        self.space.step(dt)
        self.read_plainly()
        return int(list_pairs(self.host))


_PAIR_FIELDS = batch.ArbiterFields.CONTACT_COUNT | batch.ArbiterFields.TOTAL_IMPULSE | batch.ArbiterFields.NORMAL
_PAIR_FIELDS |= batch.ArbiterFields.POINT_A_1 | batch.ArbiterFields.POINT_B_1
_PAIR_FIELDS |= batch.ArbiterFields.POINT_A_2 | batch.ArbiterFields.POINT_B_2


@compiled
def _contact_rows(host: Host, n_pairs: int) -> FloatArray:
    """(n, 9) of each pair in touch: impulse on the first body, the normal out of it, the places on the first body and
    on the second, summed over the contact points, and how many points there are."""
    rows, bodies = np.zeros((n_pairs, 9)), np.zeros((2, MOTION))
    for pair in range(n_pairs):
        at = host.pairs[2 + pair]
        first, second = chipmunk.pair_bodies(at)
        chipmunk.read_body(first, bodies, 0)
        chipmunk.read_body(second, bodies, 1)
        nx, ny, count = chipmunk.pair_normal(at)
        rows[pair, 2], rows[pair, 3], rows[pair, 8] = nx, ny, count
        for k in range(count):
            ax, ay, bx, by, jn, jt = chipmunk.pair_point(at, k)
            rows[pair, 0] -= jn * nx - jt * ny
            rows[pair, 1] -= jn * ny + jt * nx
            rows[pair, 4] += bodies[0, 0] + ax
            rows[pair, 5] += bodies[0, 1] + ay
            rows[pair, 6] += bodies[1, 0] + bx
            rows[pair, 7] += bodies[1, 1] + by
    return rows


@compiled
def _step_fast(host: Host, dt: float) -> int:
    return take_step(host, dt)


@compiled
def _weigh(host: Host, k: int, mass: float, moment: float) -> None:
    chipmunk.weigh_body(host.bodies[k], mass, moment)


def host_disagreement(n_steps: int = 60) -> str:
    """What the compiled way to the engine does otherwise than pymunk's public interface; "" if nothing.

    Two equal little spaces, in which discs and a bar press a plate over a floor, are stepped in the two ways;
    half-way the plate becomes heavier.
    """
    if not chipmunk.LAYOUT_IS_KNOWN:
        return "layout of a body"
    fast, plain = _little_space(), _little_space()
    for body in plain.pushers:
        lib.cpBodySetPositionUpdateFunc(body._body, ffi.addressof(lib, "cpBodyUpdatePosition"))
    for step in range(n_steps):
        for space in (fast, plain):
            space.host.orders[:] = 0.0
            space.host.orders[:4] = (
                (0.0, 0.1, 0.2, 0.3), (0.3, 1.0, 0.1, 0.0), (0.0, 2.0, -0.1, 0.4), (0.1, 1.0, 0.3, -0.2)
            )  # fmt: skip
            space.host.floor_cap[:] = 1.5, 0.5
        if step == n_steps // 2:
            _weigh(fast.host, 0, 2.5, 3.5)
            plain.block.mass, plain.block.moment = 2.5, 3.5
        if step == 0:
            plain.read_plainly()
            fast.host.motion[:] = plain.host.motion
        n_fast, n_plain = int(_step_fast(fast.host, 0.05)), plain.step_plainly(0.05)
        if not np.array_equal(fast.host.motion, plain.host.motion):
            return f"motion in step {step}"
        if not np.array_equal(fast.host.floor_load, plain.host.floor_load):
            return f"floor in step {step}"
        # the order of the contacts differs from space to space
        rows = _sorted(_contact_rows(fast.host, n_fast))
        if not np.array_equal(rows, _sorted(_contact_rows(plain.host, n_plain))):
            return f"contacts in step {step}"
        if not np.allclose(rows, _sorted(_public_rows(plain)), rtol=1e-12, atol=1e-15):
            return f"meaning of contacts in step {step}"
    return ""


def _public_rows(space: HostSpace) -> FloatArray:
    """The same as `_contact_rows`, as pymunk's own reader has it."""
    buffer = batch.Buffer()
    batch.get_space_arbiters(space.space, _PAIR_FIELDS, buffer)
    counts = np.frombuffer(buffer.int_buf(), dtype=np.int64)
    floats = np.frombuffer(buffer.float_buf(), dtype=np.float64).reshape(-1, 12)
    places = floats[:, 4:8] * (counts > 0)[:, None] + floats[:, 8:] * (counts > 1)[:, None]
    return np.column_stack([floats[:, :4], places, counts])[counts > 0]


def _sorted(rows: FloatArray) -> FloatArray:
    return np.asarray(rows[np.lexsort(rows.T)])


def _little_space() -> HostSpace:
    return HostSpace(
        [Hull(4.0, 3.0, 0.1, ((-1.0, -1.5), (1.0, -1.5), (1.0, 1.5), (-1.0, 1.5)), 0.0, 2.0, 3.0)],
        [
            Hull(1.5, 2.2, 0.0, ((0.0, 0.0),), 1.0, 1.0, math.inf),
            Hull(1.3, 4.1, 0.2, ((0.0, 0.0),), 1.0, 1.0, 0.5),  # in the wall's way, and pushed out
            Hull(0.6, 1.2, 0.3, ((0.0, -0.4), (0.0, 0.4)), 0.3, 1.0, 0.5),
        ],
        [((0.0, 0.0), (9.0, 0.0)), ((9.0, 5.0), (0.0, 5.0))],
        {
            (PUSHER, WALL): (0.3, 0.2),
            (PUSHER, BLOCK): (0.5, 0.4),
            (PUSHER, PUSHER): (0.1, 0.2),
            (BLOCK, WALL): (0.0, 0.3),
        },
        slop=0.01,
        iterations=10,
        footings=[Footing(0.2, 0.1)],
    )
