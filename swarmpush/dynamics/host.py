"""The only module that knows pymunk: it builds the space and lends its C functions to compiled code.

Facts about the host (pymunk 7.3, Chipmunk inside) that shape this module:
- A step moves positions with the old velocities, finds contacts, applies forces, then solves for velocities. The
  drive is therefore given as a force: positions then only ever move with velocities that respect the contacts.
- The engine multiplies the restitutions and frictions of two shapes. A pair's own values are set just before
  solving, by a compiled function installed as the collision handler's pre-solve callback.
- A pair that parts and meets again within `collision_persistence` steps starts from the impulse of its last touch
  without that impulse being applied, so that the contact can pull and reports what never acted. Persistence 1
  forgets pairs at once. (The batch reader would also list parted pairs meanwhile, with contact count 0.)
- The batch reader's buffers may be reallocated by C when nearly full, hence the spare room. Body ids are pointers.
- The total impulse of a pair acts on its first body; the normal points from the first to the second.
- Negative or NaN masses and moments abort the process: a `Scenario` cannot hold them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
import pymunk
from llvmlite import ir
from numba import carray, cfunc, types
from numba.extending import intrinsic
from numpy.typing import NDArray
from pymunk import batch
from pymunk._chipmunk_cffi import ffi, lib

from swarmpush.compiled import inlined, own_cache

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SPARE = 64  # the C side reallocates a nearly full buffer, which would free NumPy's memory
MOTION = 6  # numbers per body when reading: x, y, angle, vx, vy, angular velocity
ORDERS = 4  # numbers per body when writing: angular velocity, force x, force y, torque
CONTACT_INTS, CONTACT_FLOATS = 3, 4  # per pair: two body ids and a count; impulse x, y and normal x, y

WALL, BLOCK, PUSHER = 1, 2, 3  # collision types

_PAIR_FIELDS = (
    batch.ArbiterFields.BODY_A_ID
    | batch.ArbiterFields.BODY_B_ID
    | batch.ArbiterFields.CONTACT_COUNT
    | batch.ArbiterFields.TOTAL_IMPULSE
    | batch.ArbiterFields.NORMAL
)


@intrinsic
def _call_with_float(typingctx: Any, function: Any, pointer: Any, number: Any) -> Any:
    """function(pointer, number) for a C function at an address: cpSpaceStep, cpConstraintSetMaxForce."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kind = ir.FunctionType(ir.VoidType(), [ir.IntType(64), ir.DoubleType()])
        builder.call(builder.inttoptr(args[0], kind.as_pointer()), args[1:])
        return context.get_dummy_value()

    return types.void(types.intp, types.intp, types.float64), codegen


@intrinsic
def _call_each(typingctx: Any, function: Any, space: Any, visitor: Any, data: Any) -> Any:
    """function(space, visitor, data) for a C function at an address: cpSpaceEachBody, cpSpaceEachCachedArbiter."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kind = ir.FunctionType(ir.VoidType(), [ir.IntType(64)] * 3)
        builder.call(builder.inttoptr(args[0], kind.as_pointer()), args[1:])
        return context.get_dummy_value()

    return types.void(types.intp, types.intp, types.intp, types.intp), codegen


@intrinsic
def _ask_float(typingctx: Any, function: Any, pointer: Any) -> Any:
    """function(pointer) -> number for a C function at an address: cpConstraintGetImpulse."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kind = ir.FunctionType(ir.DoubleType(), [ir.IntType(64)])
        return builder.call(builder.inttoptr(args[0], kind.as_pointer()), args[1:])

    return types.float64(types.intp, types.intp), codegen


_RESTITUTION_AT = ffi.offsetof("cpArbiter", "e") // 8
_FRICTION_AT = ffi.offsetof("cpArbiter", "u") // 8


def _set_pair(arbiter: Any, space: Any, values: Any) -> None:
    """Pre-solve callback: give the contact its pair's restitution and friction."""
    contact = carray(arbiter, (_FRICTION_AT + 1,))
    pair = carray(values, (2,))
    contact[_RESTITUTION_AT] = pair[0]
    contact[_FRICTION_AT] = pair[1]


with own_cache():
    _set_pair_callback = cfunc(
        types.void(types.CPointer(types.float64), types.voidptr, types.CPointer(types.float64)), cache=True
    )(_set_pair)


class Host(NamedTuple):
    """Addresses and buffers with which compiled code drives one space.

    motion, orders: see MOTION and ORDERS, one group per moving body in order. motion_head, orders_head,
    ints_head, floats_head: [used, capacity] of the C arrays. contact_ints, contact_floats: one group per pair.
    floor, floor_yaw: addresses of the floor's joints, 0 if there is none. floor_cap: force and torque it can hold in
    the next step; floor_load: sizes of the impulses it gave in the last one.
    """

    step: int
    each_body: int
    each_pair: int
    get_body: int
    set_body: int
    get_pair: int
    set_max_force: int
    get_impulse: int
    space: int
    get_data: int
    set_data: int
    pair_data: int
    floor: int
    floor_yaw: int
    floor_cap: FloatArray
    floor_load: FloatArray
    motion: FloatArray
    orders: FloatArray
    contact_ints: IntArray
    contact_floats: FloatArray
    motion_head: NDArray[np.int32]
    orders_head: NDArray[np.int32]
    ints_head: NDArray[np.int32]
    floats_head: NDArray[np.int32]


@inlined
def read_state(host: Host) -> None:
    """Fill `host.motion`, and `host.floor_load` with the impulses that the floor gave in the last step."""
    host.motion_head[0] = 0
    _call_each(host.each_body, host.space, host.get_body, host.get_data)
    if host.floor != 0:
        host.floor_load[0] = _ask_float(host.get_impulse, host.floor)
        host.floor_load[1] = _ask_float(host.get_impulse, host.floor_yaw)


@inlined
def take_step(host: Host, dt: float) -> int:
    """Hand `host.orders` and `host.floor_cap` over, step, and fill the contact buffers; returns the number of pairs."""
    host.orders_head[0] = 0
    _call_each(host.each_body, host.space, host.set_body, host.set_data)
    if host.floor != 0:
        _call_with_float(host.set_max_force, host.floor, host.floor_cap[0])
        _call_with_float(host.set_max_force, host.floor_yaw, host.floor_cap[1])
    _call_with_float(host.step, host.space, dt)
    host.ints_head[0] = 0
    host.floats_head[0] = 0
    _call_each(host.each_pair, host.space, host.get_pair, host.pair_data)
    return int(host.ints_head[0]) // CONTACT_INTS


class Disc(NamedTuple):
    """A pusher for the engine, in engine units."""

    x: float
    y: float
    radius: float
    mass: float


class Plate(NamedTuple):
    """The block for the engine: centre, corners as seen from it, mass, moment (infinite: no yaw)."""

    x: float
    y: float
    corners: Sequence[tuple[float, float]]
    mass: float
    moment: float


class HostSpace:
    """A pymunk space with block, pushers and walls, and the buffers through which it is driven."""

    def __init__(
        self,
        plate: Plate,
        discs: Sequence[Disc],
        walls: Sequence[tuple[tuple[float, float], tuple[float, float]]],
        pairs: dict[tuple[int, int], tuple[float, float]],
        *,
        slop: float,
        iterations: int,
        has_floor: bool,
        pass_through: bool,
    ) -> None:
        space = pymunk.Space()
        space.gravity = (0, 0)
        space.iterations = iterations
        space.collision_slop = slop
        space.collision_persistence = 1
        self.space = space
        self.block = self._add_plate(plate)
        self.pushers = [self._add_disc(disc, pass_through) for disc in discs]
        self.walls = [self._add_wall(start, end) for start, end in walls]
        self._floor = self._add_floor() if has_floor else None
        self._keep_alive: list[Any] = []
        for (first, second), values in pairs.items():
            self._set_pair_values(first, second, values)
        self.host = self._lend()

    def _add_plate(self, plate: Plate) -> pymunk.Body:
        body = pymunk.Body(plate.mass, plate.moment)
        body.position = plate.x, plate.y
        shape = pymunk.Poly(body, list(plate.corners))
        shape.collision_type = BLOCK
        self.space.add(body, shape)
        return body

    def _add_disc(self, disc: Disc, pass_through: bool) -> pymunk.Body:
        body = pymunk.Body(disc.mass, math.inf)
        body.position = disc.x, disc.y
        shape = pymunk.Circle(body, disc.radius)
        shape.collision_type = PUSHER
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

    def _add_floor(self) -> tuple[pymunk.Constraint, pymunk.Constraint]:
        """Dry friction of the floor as two joints that give way at a cap and never pull back (max_bias 0)."""
        pivot = pymunk.PivotJoint(self.space.static_body, self.block, self.block.position)
        gear = pymunk.GearJoint(self.space.static_body, self.block, self.block.angle, 1.0)
        for joint in (pivot, gear):
            joint.max_bias = 0.0
            joint.collide_bodies = True
            joint.max_force = 0.0
            self.space.add(joint)
        return pivot, gear

    def _set_pair_values(self, first: int, second: int, values: tuple[float, float]) -> None:
        handler = lib.cpSpaceAddCollisionHandler(self.space._space, first, second)
        numbers = np.array(values, dtype=np.float64)
        handler.preSolveFunc = ffi.cast("cpCollisionPreSolveFunc", _set_pair_callback.address)
        handler.userData = ffi.cast("cpDataPointer", numbers.ctypes.data)
        self._keep_alive.append(numbers)

    def moving_ids(self) -> IntArray:
        """Ids of block and pushers in the order of the buffers."""
        return np.array([body.id for body in (self.block, *self.pushers)], dtype=np.int64)

    def wall_ids(self) -> IntArray:
        """Ids of the walls."""
        return np.array([body.id for body in self.walls], dtype=np.int64)

    def read_plainly(self) -> None:
        """`read_state` by way of pymunk's public interface."""
        for k, body in enumerate((self.block, *self.pushers)):
            self.host.motion[MOTION * k : MOTION * (k + 1)] = (
                *body.position, body.angle, *body.velocity, body.angular_velocity,
            )  # fmt: skip
        if self._floor:
            self.host.floor_load[:] = [joint.impulse for joint in self._floor]

    def step_plainly(self, dt: float) -> int:
        """`take_step` by way of pymunk's public interface."""
        for k, body in enumerate((self.block, *self.pushers)):
            spin, force_x, force_y, torque = self.host.orders[ORDERS * k : ORDERS * (k + 1)].tolist()
            body.angular_velocity, body.force, body.torque = spin, (force_x, force_y), torque
        if self._floor:
            for joint, cap in zip(self._floor, self.host.floor_cap.tolist(), strict=True):
                joint.max_force = cap
        self.space.step(dt)
        buffer = batch.Buffer()
        batch.get_space_arbiters(self.space, _PAIR_FIELDS, buffer)
        ints = np.frombuffer(buffer.int_buf(), dtype=np.int64)
        floats = np.frombuffer(buffer.float_buf(), dtype=np.float64)
        self.host.contact_ints[: len(ints)] = ints
        self.host.contact_floats[: len(floats)] = floats
        return len(ints) // CONTACT_INTS

    def _lend(self) -> Host:
        fields = batch.BodyFields
        read = fields.POSITION | fields.ANGLE | fields.VELOCITY | fields.ANGULAR_VELOCITY
        write = fields.ANGULAR_VELOCITY | fields.FORCE | fields.TORQUE
        n = 1 + len(self.pushers)
        # each disc can touch at most six equal discs, two walls and the block; each pair may show up twice
        n_pairs = 64 + 24 * n
        n_visited = n + len(self.walls) + 1  # the engine visits the walls as well, and its own static body
        motion, orders = np.zeros(MOTION * n_visited + SPARE), np.zeros(ORDERS * n_visited + SPARE)
        ints = np.zeros(CONTACT_INTS * n_pairs + SPARE, dtype=np.int64)
        floats = np.zeros(CONTACT_FLOATS * n_pairs + SPARE)
        get, put, contacts = batch.Buffer(), batch.Buffer(), batch.Buffer()
        get.set_float_buf(motion)
        put.set_float_buf(orders)
        contacts.set_float_buf(floats)
        contacts.set_int_buf(ints)
        data = [_request(get, read), _request(put, write), _request(contacts, _PAIR_FIELDS)]
        joints = [_address(joint._constraint) for joint in self._floor] if self._floor else [0, 0]
        self._keep_alive += [get, put, contacts, *data]
        self._check_order()
        return Host(
            step=_symbol("cpSpaceStep"),
            each_body=_symbol("cpSpaceEachBody"),
            each_pair=_symbol("cpSpaceEachCachedArbiter"),
            get_body=_symbol("pmSpaceBodyGetIteratorFuncBatched"),
            set_body=_symbol("pmSpaceBodySetIteratorFuncBatched"),
            get_pair=_symbol("pmSpaceArbiterIteratorFuncBatched"),
            set_max_force=_symbol("cpConstraintSetMaxForce"),
            get_impulse=_symbol("cpConstraintGetImpulse"),
            space=_address(self.space._space),
            get_data=_address(data[0]),
            set_data=_address(data[1]),
            pair_data=_address(data[2]),
            floor=joints[0],
            floor_yaw=joints[1],
            floor_cap=np.zeros(2),
            floor_load=np.zeros(2),
            motion=motion,
            orders=orders,
            contact_ints=ints,
            contact_floats=floats,
            motion_head=_head(get._float_arr),
            orders_head=_head(put._float_arr),
            ints_head=_head(contacts._int_arr),
            floats_head=_head(contacts._float_arr),
        )

    def _check_order(self) -> None:
        """The buffers rely on the engine visiting bodies in the order in which they were added."""
        buffer = batch.Buffer()
        batch.get_space_bodies(self.space, batch.BodyFields.BODY_ID, buffer)
        visited = np.frombuffer(buffer.int_buf(), dtype=np.int64)
        expected = self.moving_ids()
        assert (visited[: len(expected)] == expected).all(), "pymunk visits bodies in another order than expected"


def _request(buffer: batch.Buffer, fields: Any) -> Any:
    data = ffi.new("pmBatchedData *")
    data.fields = fields.value
    data.floatArray, data.intArray = buffer._float_arr, buffer._int_arr
    return data


def _head(array: Any) -> NDArray[np.int32]:
    return np.frombuffer(ffi.buffer(array, 8), dtype=np.int32)


def _address(pointer: Any) -> int:
    return int(ffi.cast("intptr_t", pointer))


def _symbol(name: str) -> int:
    return _address(ffi.addressof(lib, name))


def host_disagreement(n_steps: int = 60) -> str:
    """What the compiled way to the engine does otherwise than pymunk's public interface; "" if nothing.

    Two equal little spaces, in which two discs press a plate over a floor, are stepped in the two ways.
    """
    fast, plain = _little_space(), _little_space()
    for step in range(n_steps):
        read_state(fast.host)
        plain.read_plainly()
        if not np.array_equal(fast.host.motion, plain.host.motion):
            return f"motion in step {step}"
        if not np.array_equal(fast.host.floor_load, plain.host.floor_load):
            return f"floor in step {step}"
        for space in (fast, plain):
            space.host.orders[: 3 * ORDERS] = 0.0, 0.0, 0.0, 0.0, 0.3, 1.0, 0.1, 0.0, 0.0, 2.0, -0.1, 0.0
            space.host.floor_cap[:] = 1.5, 0.5
        n_fast, n_plain = take_step(fast.host, 0.05), plain.step_plainly(0.05)
        # body ids, and with them the order of the contacts, differ from space to space
        if not np.array_equal(_sorted_contacts(fast.host, n_fast), _sorted_contacts(plain.host, n_plain)):
            return f"contacts in step {step}"
    return ""


def _sorted_contacts(host: Host, n_pairs: int) -> FloatArray:
    rows = host.contact_floats[: CONTACT_FLOATS * n_pairs].reshape(-1, CONTACT_FLOATS)
    return rows[np.lexsort(rows.T)]


def _little_space() -> HostSpace:
    return HostSpace(
        Plate(4.0, 3.0, ((-1.0, -1.5), (1.0, -1.5), (1.0, 1.5), (-1.0, 1.5)), 2.0, 3.0),
        [Disc(1.5, 2.2, 1.0, 1.0), Disc(1.3, 4.3, 1.0, 1.0)],
        [((0.0, 0.0), (9.0, 0.0)), ((9.0, 6.0), (0.0, 6.0))],
        {
            (PUSHER, WALL): (0.3, 0.2),
            (PUSHER, BLOCK): (0.5, 0.4),
            (PUSHER, PUSHER): (0.1, 0.2),
            (BLOCK, WALL): (0.0, 0.3),
        },
        slop=0.01,
        iterations=10,
        has_floor=True,
        pass_through=False,
    )
