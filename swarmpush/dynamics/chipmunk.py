"""Chipmunk's functions and memory, lent to compiled code.

Contacts are read from the engine's own records, whose layout pymunk's C interface declares. The record of a body is
not declared; where its fields lie is found by giving a body of our own distinct values through the public interface
and looking for them. `host.host_disagreement` checks the outcome against plain pymunk before anything relies on it.
"""

from __future__ import annotations

import struct
from typing import Any, NamedTuple

import numpy as np
import pymunk
from llvmlite import ir
from numba import carray, cfunc, types
from numba.extending import intrinsic
from numpy.typing import NDArray
from pymunk._chipmunk_cffi import ffi, lib

from swarmpush.compiled import inlined, own_cache

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_SCANNED = 23  # doubles of a body's record that are looked through; it is longer than that


class _BodyLayout(NamedTuple):
    """Places of a body's fields in its record, in doubles."""

    mass: int
    inverse_mass: int
    moment: int
    inverse_moment: int
    x: int
    vx: int
    force: int
    angle: int
    spin: int
    torque: int
    shown_at: int  # where shapes look for the position: the end of the transform


def _find_layout() -> _BodyLayout | None:
    """The layout of this engine's bodies; None if the values are not where bodies could have them."""
    body = pymunk.Body(1.25, 2.5)
    body.position, body.velocity, body.angle, body.angular_velocity = (11.5, 12.5), (13.5, 14.5), 15.5, 16.5
    body.force, body.torque = (17.5, 18.5), 19.5
    raw = ffi.buffer(ffi.cast("char *", body._body), 8 * _SCANNED)[:]
    values = struct.unpack(f"{_SCANNED}d", raw)
    found = {value: [k for k, v in enumerate(values) if v == value] for value in values}

    def place(first: float, second: float | None = None, which: int = 0) -> int:
        at = found.get(first, [])
        if len(at) <= which or (second is not None and values[at[which] + 1 : at[which] + 2] != (second,)):
            raise LookupError
        return at[which]

    try:
        return _BodyLayout(
            mass=place(1.25),
            inverse_mass=place(0.8),
            moment=place(2.5),
            inverse_moment=place(0.4),
            x=place(11.5, 12.5),
            vx=place(13.5, 14.5),
            force=place(17.5, 18.5),
            angle=place(15.5),
            spin=place(16.5),
            torque=place(19.5),
            shown_at=place(11.5, 12.5, which=1),
        )
    except LookupError:
        return None


_LAYOUT = _find_layout()
LAYOUT_IS_KNOWN = _LAYOUT is not None
_MASS, _INVERSE_MASS, _MOMENT, _INVERSE_MOMENT, _X, _VX, _FORCE, _ANGLE, _SPIN, _TORQUE, _SHOWN_AT = (
    _LAYOUT or _BodyLayout(*[0] * 11)
)
_V_BIAS = _SHOWN_AT + 3  # after the transform comes the user's pointer, then the speeds that push bodies apart
_SPIN_BIAS = _V_BIAS + 2

MOTION = 6  # numbers per body when reading: x, y, angle, vx, vy, angular velocity
ORDERS = 4  # numbers per body when writing: angular velocity, force x, force y, torque


def _place(record: str, field: str) -> int:
    return int(ffi.offsetof(record, field)) // 8


_NORMAL, _BODY_A, _BODY_B = _place("cpArbiter", "n"), _place("cpArbiter", "body_a"), _place("cpArbiter", "body_b")
_COUNT, _CONTACTS = _place("cpArbiter", "count"), _place("cpArbiter", "contacts")
_RESTITUTION, _FRICTION = _place("cpArbiter", "e"), _place("cpArbiter", "u")
_STATE, _IS_CACHED = (
    _place("cpArbiter", "state"),
    ffi.typeof("enum cpArbiterState").relements["CP_ARBITER_STATE_CACHED"],
)
_R1, _R2 = _place("cpContact", "r1"), _place("cpContact", "r2")
_JN, _JT = _place("cpContact", "jnAcc"), _place("cpContact", "jtAcc")
_CONTACT_SIZE = ffi.sizeof("cpContact") // 8
_LOW_HALF = 0xFFFFFFFF  # of a word that holds an int and something after it


def address(pointer: Any) -> int:
    """A C pointer as a number."""
    return int(ffi.cast("intptr_t", pointer))


def symbol(name: str) -> int:
    """The address of one of the engine's functions."""
    return address(ffi.addressof(lib, name))


@intrinsic
def _floats_at(typingctx: Any, place: Any) -> Any:
    """The memory at an address as numbers."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.inttoptr(args[0], ir.DoubleType().as_pointer())

    return types.CPointer(types.float64)(types.intp), codegen


@intrinsic
def _words_at(typingctx: Any, place: Any) -> Any:
    """The memory at an address as 64-bit words."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.inttoptr(args[0], ir.IntType(64).as_pointer())

    return types.CPointer(types.int64)(types.intp), codegen


@intrinsic
def call_with_float(typingctx: Any, function: Any, pointer: Any, number: Any) -> Any:
    """function(pointer, number) for a C function at an address: cpSpaceStep, cpConstraintSetMaxForce."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kind = ir.FunctionType(ir.VoidType(), [ir.IntType(64), ir.DoubleType()])
        builder.call(builder.inttoptr(args[0], kind.as_pointer()), args[1:])
        return context.get_dummy_value()

    return types.void(types.intp, types.intp, types.float64), codegen


@intrinsic
def _call_each(typingctx: Any, function: Any, space: Any, visitor: Any, data: Any) -> Any:
    """function(space, visitor, data) for a C function at an address: cpSpaceEachCachedArbiter."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kind = ir.FunctionType(ir.VoidType(), [ir.IntType(64)] * 3)
        builder.call(builder.inttoptr(args[0], kind.as_pointer()), args[1:])
        return context.get_dummy_value()

    return types.void(types.intp, types.intp, types.intp, types.intp), codegen


@intrinsic
def ask_float(typingctx: Any, function: Any, pointer: Any) -> Any:
    """function(pointer) -> number for a C function at an address: cpConstraintGetImpulse."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        kind = ir.FunctionType(ir.DoubleType(), [ir.IntType(64)])
        return builder.call(builder.inttoptr(args[0], kind.as_pointer()), args[1:])

    return types.float64(types.intp, types.intp), codegen


def _set_pair(arbiter: Any, space: Any, values: Any) -> None:
    """Pre-solve callback: give the contact its pair's restitution and friction."""
    contact = carray(arbiter, (_FRICTION + 1,))
    pair = carray(values, (2,))
    contact[_RESTITUTION] = pair[0]
    contact[_FRICTION] = pair[1]


def _move_disc(body: Any, dt: float) -> None:
    """Position function of a disc: the engine's own, less the sine and cosine of an angle at which no disc looks
    different."""
    b = carray(body, (_SPIN_BIAS + 1,))
    b[_X] += (b[_VX] + b[_V_BIAS]) * dt
    b[_X + 1] += (b[_VX + 1] + b[_V_BIAS + 1]) * dt
    b[_ANGLE] += (b[_SPIN] + b[_SPIN_BIAS]) * dt
    b[_SHOWN_AT] = b[_X]
    b[_SHOWN_AT + 1] = b[_X + 1]
    b[_V_BIAS] = b[_V_BIAS + 1] = b[_SPIN_BIAS] = 0.0


def _note_pair(arbiter: Any, pairs: Any) -> None:
    """Visitor of pairs: note those in touch. pairs: how many, how many there is room for, then their addresses."""
    record = carray(arbiter, (_STATE + 1,))
    count, state = record[_COUNT] & _LOW_HALF, record[_STATE] & _LOW_HALF
    head = carray(pairs, (2,))
    n = head[0]
    if count > 0 and state != _IS_CACHED:
        if n < head[1]:
            carray(pairs, (3 + n,))[2 + n] = address_of(arbiter)
        head[0] = n + 1


@intrinsic
def address_of(typingctx: Any, pointer: Any) -> Any:
    """The address that a pointer holds."""

    def codegen(context: Any, builder: Any, signature: Any, args: Any) -> Any:
        return builder.ptrtoint(args[0], ir.IntType(64))

    return types.int64(pointer), codegen


with own_cache():
    _FLOATS, _WORDS = types.CPointer(types.float64), types.CPointer(types.int64)
    SET_PAIR = cfunc(types.void(_FLOATS, types.voidptr, _FLOATS), cache=True)(_set_pair)
    MOVE_DISC = cfunc(types.void(_FLOATS, types.float64), cache=True)(_move_disc)
    _NOTE_PAIR = cfunc(types.void(_WORDS, _WORDS), cache=True)(_note_pair)

NOTE_PAIR_AT = int(_NOTE_PAIR.address)


@inlined
def read_body(body: int, motion: FloatArray, k: int) -> None:
    """Copy a body's state to row k."""
    b = _floats_at(body)
    motion[k, 0], motion[k, 1], motion[k, 2] = b[_X], b[_X + 1], b[_ANGLE]
    motion[k, 3], motion[k, 4], motion[k, 5] = b[_VX], b[_VX + 1], b[_SPIN]


@inlined
def read_place(body: int) -> tuple[float, float]:
    """Where a body's centre of mass is: the point from which contact points are measured."""
    b = _floats_at(body)
    return b[_X], b[_X + 1]


@inlined
def face_body(body: int, angle: float) -> None:
    """Give a body another angle, which its shapes take over when the next step moves them."""
    _floats_at(body)[_ANGLE] = angle


@inlined
def weigh_body(body: int, mass: float, moment: float) -> None:
    """Give a body another mass, and another moment of inertia unless it is 0."""
    b = _floats_at(body)
    b[_MASS], b[_INVERSE_MASS] = mass, 1.0 / mass
    if moment > 0.0:
        b[_MOMENT], b[_INVERSE_MOMENT] = moment, 1.0 / moment


@inlined
def order_body(body: int, orders: FloatArray, k: int) -> None:
    """Give a body the spin of row k and add to its force and torque."""
    b = _floats_at(body)
    b[_SPIN] = orders[k, 0]
    b[_FORCE] += orders[k, 1]
    b[_FORCE + 1] += orders[k, 2]
    b[_TORQUE] += orders[k, 3]


@inlined
def note_pairs(each_pair: int, space: int, visitor: int, pairs: IntArray) -> int:
    """Write the addresses of all pairs in touch to pairs[2:]; returns how many there are, room or not."""
    pairs[0] = 0
    _call_each(each_pair, space, visitor, pairs.ctypes.data)
    return int(pairs[0])


@inlined
def pair_bodies(pair: int) -> tuple[int, int]:
    """Addresses of the two bodies in touch."""
    record = _words_at(pair)
    return record[_BODY_A], record[_BODY_B]


@inlined
def pair_normal(pair: int) -> tuple[float, float, int]:
    """Unit normal from the first body to the second, and the number of contact points."""
    record = _floats_at(pair)
    return record[_NORMAL], record[_NORMAL + 1], _words_at(pair)[_COUNT] & _LOW_HALF


@inlined
def pair_point(pair: int, k: int) -> tuple[float, float, float, float, float, float]:
    """Contact point k as seen from the first body's centre and from the second's, then the impulses along the normal
    and 90 deg counter-clockwise from it that the second body got there."""
    c = _floats_at(_words_at(pair)[_CONTACTS] + 8 * _CONTACT_SIZE * k)
    return c[_R1], c[_R1 + 1], c[_R2], c[_R2 + 1], c[_JN], c[_JT]
