"""The ledger: every contact of every step, gathered into visits; and the block's books. Compiled, engine units.

A visit is one unbroken contact of a pusher with one partner (the block, a wall, another pusher), or of the block
with a wall. Its normal impulse is split into impact and lean. In a step that begins with the partners approaching,
what exceeds the drive's own push has stopped the masses that the engine steps with, which contain the drag of one
step (`effective_mass`); the share that the bare masses have in it is impact. All else is lean.
"""

from __future__ import annotations

import math
from enum import IntEnum
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import inlined
from swarmpush.dynamics.crew import Crew, Rig
from swarmpush.dynamics.host import CONTACT_FLOATS, CONTACT_INTS, MOTION, Host

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SLOTS = 12  # open visits per body: six equal discs can touch one, two walls, the block, and some just parted
GAP_STEPS = 2  # a contact that is missing for more steps than this has ended
APPROACH = 0.005  # of the free speed; slower than this nothing arrives, it only presses


class Column(IntEnum):
    """Columns of a visit, engine units. PARTNER: 0 block, then pushers from 1, then walls."""

    OWNER = 0
    PARTNER = 1
    FACE = 2
    FIRST_STEP = 3
    LAST_STEP = 4
    IMPACT = 5
    LEAN = 6
    TANGENTIAL = 7
    APPROACH = 8
    HEADING = 9
    X = 10
    Y = 11
    BLOCK_X_ON = 12
    BLOCK_X_OFF = 13
    OVERLAP = 14
    CONTACT_STEPS = 15


N_COLUMNS = len(Column)
_OWNER, _PARTNER, _FACE, _FIRST, _LAST, _IMPACT, _LEAN, _TANGENT, _SPEED, _HEAD, _X, _Y, _ON, _OFF, _OVERLAP, _STEPS = (
    int(column) for column in Column
)


class Face(IntEnum):
    """Side of the block that a visit is on; NONE for other partners."""

    NONE = 0
    REAR = 1
    LOWER = 2
    FRONT = 3
    UPPER = 4


_REAR, _LOWER, _FRONT, _UPPER = 1, 2, 3, 4


class Total(IntEnum):
    """Running totals of a run, engine units."""

    PUSHERS_X = 0  # impulse on the block by pushers
    PUSHERS_Y = 1
    WALLS_X = 2
    WALLS_Y = 3
    FLOOR_X = 4  # what momentum balance leaves for the floor
    FLOOR_Y = 5
    DRAG_X = 6
    DRAG_Y = 7
    GROSS = 8  # sum of the sizes of all contact impulses on the block
    RESIDUAL = 9  # sum over steps of the size of what does not balance
    PHANTOM_X = 10  # block displacement that no velocity explains, along the channel
    PHANTOM_GROSS = 11
    YAW_MAX = 12
    OVERLAP_MAX = 13
    LEANING = 14  # sum over steps of pushers leaning on the rear face
    LEANING_STEPS = 15  # steps with at least one
    STRONG_STEPS = 16  # steps in which those leaning exceed the static floor friction
    AHEAD = 17  # pusher-steps ahead of the block
    AT_WALL = 18  # pusher-steps in touch with a wall
    AT_PUSHER = 19  # pusher-steps in touch with another pusher
    TURNING = 20
    STOPPED = 21
    JAMMED_STEPS = 22  # steps in which enough push leans on a block that both side walls hold
    OLD_X = 23  # block state at the end of the last step, for the balance
    OLD_Y = 24
    OLD_VX = 25
    OLD_VY = 26
    STEP_X = 27  # contact impulse of the last step
    STEP_Y = 28
    WALL_BOTTOM = 29  # whether the block was touched by that wall in the last step
    WALL_TOP = 30
    STEP_LEANING = 31
    SAMPLE_LEANING = 32


N_TOTALS = len(Total)
_TOUCHES_WALL, _TOUCHES_PUSHER = 1, 2  # bits


class Ledger(NamedTuple):
    """Open visits, finished visits, totals.

    ids, entities: sorted body ids and what they are (0 block, 1..n pushers, then walls). slot_partner, slot_data:
    open visits per owner (0 block, 1..n pushers). n_open: how many. log: finished visits; n_log[0]: how many.
    on_block: (n_entities, 2) impulse of each on the block in the last step; summed up in this order, because the
    engine lists contacts in an order that depends on addresses. touching: what each owner touched in the last step.
    """

    ids: IntArray
    entities: IntArray
    n_open: IntArray
    slot_partner: IntArray
    slot_data: FloatArray
    log: FloatArray
    n_log: IntArray
    on_block: FloatArray
    touching: IntArray
    totals: FloatArray


def new_ledger(moving_ids: IntArray, wall_ids: IntArray, capacity: int) -> Ledger:
    """An empty ledger; `capacity` rows of finished visits are kept before they must be fetched."""
    ids = np.concatenate([moving_ids, wall_ids])
    order = np.argsort(ids)
    n = len(moving_ids)
    return Ledger(
        ids=ids[order],
        entities=order.astype(np.int64),
        n_open=np.zeros(n, dtype=np.int64),
        slot_partner=np.full((n, SLOTS), -1, dtype=np.int64),
        slot_data=np.zeros((n, SLOTS, N_COLUMNS)),
        log=np.zeros((capacity, N_COLUMNS)),
        n_log=np.zeros(1, dtype=np.int64),
        on_block=np.zeros((len(ids), 2)),
        touching=np.zeros(n, dtype=np.int64),
        totals=np.zeros(N_TOTALS),
    )


@inlined
def _entity(ledger: Ledger, body_id: int) -> int:
    low, high = 0, len(ledger.ids) - 1
    while low < high:
        middle = (low + high) >> 1
        if ledger.ids[middle] < body_id:
            low = middle + 1
        else:
            high = middle
    return ledger.entities[low] if ledger.ids[low] == body_id else -1


@inlined
def _slot(ledger: Ledger, owner: int, partner: int) -> int:
    """The open visit of owner and partner, or a fresh slot; -1 if the table is full."""
    free = -1
    for k in range(SLOTS):
        found = ledger.slot_partner[owner, k]
        if found == partner:
            return k
        if found < 0 and free < 0:
            free = k
    if free >= 0:
        ledger.slot_partner[owner, free] = partner
        ledger.n_open[owner] += 1
        for c in range(N_COLUMNS):
            ledger.slot_data[owner, free, c] = 0.0
        ledger.slot_data[owner, free, _FIRST] = -1.0
    return free


@inlined
def close_visits(ledger: Ledger, step: int) -> None:
    """Move visits that have ended before `step` to the log."""
    for owner in range(len(ledger.n_open)):
        if ledger.n_open[owner] == 0:
            continue
        for k in range(SLOTS):
            if ledger.slot_partner[owner, k] >= 0 and ledger.slot_data[owner, k, _LAST] < step - GAP_STEPS:
                row = ledger.n_log[0]
                for c in range(N_COLUMNS):
                    ledger.log[row, c] = ledger.slot_data[owner, k, c]
                ledger.log[row, _OWNER] = owner
                ledger.log[row, _PARTNER] = ledger.slot_partner[owner, k]
                ledger.n_log[0] = row + 1
                ledger.slot_partner[owner, k] = -1
                ledger.n_open[owner] -= 1


@inlined
def _face(host: Host, nx: float, ny: float) -> int:
    """Side of the block that a pusher touches whose normal into the block is (nx, ny)."""
    c, s = math.cos(host.motion[2]), math.sin(host.motion[2])
    bx, by = c * nx + s * ny, c * ny - s * nx
    if abs(bx) >= abs(by):
        return _REAR if bx > 0.0 else _FRONT
    return _LOWER if by > 0.0 else _UPPER


@inlined
def _feel(rig: Rig, crew: Crew, i: int, kind: int, nx: float, ny: float, impulse: float, step: int) -> None:
    """Let pusher i's bumper take note of a contact whose normal out of the pusher is (nx, ny)."""
    facing = nx * crew.ux[i] + ny * crew.uy[i]
    if rig.half_arc < math.pi and facing < math.cos(rig.half_arc):
        return
    crew.touched_at[i] = step
    if impulse > crew.hardest[i]:
        crew.hardest[i] = impulse
        crew.step_kind[i] = kind
        crew.step_normal[i] = math.atan2(-ny, -nx)


@inlined
def enter_contacts(host: Host, rig: Rig, crew: Crew, ledger: Ledger, n_pairs: int, step: int) -> None:
    """Enter the contacts of this step: visits, bumpers, and the impulses on the block."""
    n = len(crew.heading)
    motion, totals, dt = host.motion, ledger.totals, rig.dt
    ledger.on_block[:] = 0.0
    ledger.touching[:] = 0
    totals[Total.WALL_BOTTOM] = totals[Total.WALL_TOP] = 0.0
    leaning = 0.0
    for p in range(n_pairs):
        if host.contact_ints[CONTACT_INTS * p + 2] == 0:
            continue
        owner = _entity(ledger, host.contact_ints[CONTACT_INTS * p])
        partner = _entity(ledger, host.contact_ints[CONTACT_INTS * p + 1])
        if owner < 0 or partner < 0:
            continue
        at = CONTACT_FLOATS * p
        jx, jy = host.contact_floats[at], host.contact_floats[at + 1]
        nx, ny = host.contact_floats[at + 2], host.contact_floats[at + 3]
        # a pusher owns its visits; of two pushers the first; the block owns those with walls
        if owner > n or (owner == 0 and partner <= n) or (0 < partner < owner):
            owner, partner, jx, jy, nx, ny = partner, owner, -jx, -jy, -nx, -ny
        push = max(-(jx * nx + jy * ny), 0.0)  # size of the normal impulse; n points from owner to partner
        k = _slot(ledger, owner, partner)
        if k < 0:
            continue
        visit = ledger.slot_data[owner, k]
        base = MOTION * owner
        x, y = motion[base] + motion[base + 3] * dt, motion[base + 1] + motion[base + 4] * dt
        rvx, rvy = motion[base + 3], motion[base + 4]
        overlap, drive = 0.0, 0.0
        if owner > 0:
            drive = (crew.force_x[owner - 1] * nx + crew.force_y[owner - 1] * ny) * dt
        if 0 < partner <= n:
            other = MOTION * partner
            rvx, rvy = rvx - motion[other + 3], rvy - motion[other + 4]
            drive -= (crew.force_x[partner - 1] * nx + crew.force_y[partner - 1] * ny) * dt
            ox, oy = motion[other] + motion[other + 3] * dt, motion[other + 1] + motion[other + 4] * dt
            overlap = 2.0 - math.hypot(ox - x, oy - y)
            _feel(rig, crew, owner - 1, 3, nx, ny, push, step)
            _feel(rig, crew, partner - 1, 3, -nx, -ny, push, step)
            ledger.touching[owner] |= _TOUCHES_PUSHER
            ledger.touching[partner] |= _TOUCHES_PUSHER
        elif partner == 0:
            cx, cy = x + nx - motion[0], y + ny - motion[1]
            rvx, rvy = rvx - motion[3] + motion[5] * cy, rvy - motion[4] - motion[5] * cx
            c, s = math.cos(motion[2]), math.sin(motion[2])
            # depth of the disc in the plate, in the plate's frame
            bx, by = abs(c * (x - motion[0]) + s * (y - motion[1])), abs(c * (y - motion[1]) - s * (x - motion[0]))
            gap_x, gap_y = bx - rig.half_length, by - rig.half_width
            outside = math.hypot(max(gap_x, 0.0), max(gap_y, 0.0))
            overlap = 1.0 - outside if outside > 0.0 else 1.0 - max(gap_x, gap_y)
            _feel(rig, crew, owner - 1, 2, nx, ny, push, step)
            ledger.on_block[owner, 0] -= jx
            ledger.on_block[owner, 1] -= jy
        elif owner > 0:
            _feel(rig, crew, owner - 1, 1, nx, ny, push, step)
            ledger.touching[owner] |= _TOUCHES_WALL
        else:
            ledger.on_block[partner, 0] += jx
            ledger.on_block[partner, 1] += jy
            if ny > 0.5:
                totals[Total.WALL_TOP] = 1.0
            elif ny < -0.5:
                totals[Total.WALL_BOTTOM] = 1.0
        approach = rvx * nx + rvy * ny
        if visit[_FIRST] < 0.0:
            visit[_FIRST] = step
            visit[_SPEED] = approach
            visit[_X], visit[_Y] = x, y
            visit[_ON] = motion[0]
            visit[_FACE] = _face(host, nx, ny) if partner == 0 else 0
            visit[_HEAD] = crew.heading[owner - 1] if owner > 0 else motion[2]
        lean = push
        if approach > APPROACH:
            mass = (rig.inverse_step_mass[owner] + rig.inverse_step_mass[partner]) / (
                rig.inverse_mass[owner] + rig.inverse_mass[partner]
            )
            lean -= max(push - max(drive, 0.0), 0.0) * mass
        visit[_IMPACT] += push - lean
        visit[_LEAN] += lean
        visit[_TANGENT] += jy * nx - jx * ny
        visit[_LAST] = step
        visit[_STEPS] += 1.0
        visit[_OFF] = motion[0]
        visit[_OVERLAP] = max(visit[_OVERLAP], overlap)
        totals[Total.OVERLAP_MAX] = max(totals[Total.OVERLAP_MAX], overlap)
        if partner == 0 and visit[_FACE] == _REAR and lean > rig.lean_force * dt:
            leaning += 1.0
    totals[Total.STEP_LEANING] = leaning
    _add_up(ledger, n)


@inlined
def _add_up(ledger: Ledger, n: int) -> None:
    """Sum up the impulses on the block, and who touches what."""
    totals = ledger.totals
    for owner in range(1, n + 1):
        if ledger.touching[owner] & _TOUCHES_WALL:
            totals[Total.AT_WALL] += 1.0
        if ledger.touching[owner] & _TOUCHES_PUSHER:
            totals[Total.AT_PUSHER] += 1.0
    totals[Total.STEP_X] = totals[Total.STEP_Y] = 0.0
    for entity in range(len(ledger.on_block)):
        jx, jy = ledger.on_block[entity, 0], ledger.on_block[entity, 1]
        if jx == 0.0 and jy == 0.0:
            continue
        totals[Total.STEP_X] += jx
        totals[Total.STEP_Y] += jy
        totals[Total.GROSS] += math.hypot(jx, jy)
        if entity <= n:
            totals[Total.PUSHERS_X] += jx
            totals[Total.PUSHERS_Y] += jy
        else:
            totals[Total.WALLS_X] += jx
            totals[Total.WALLS_Y] += jy


@inlined
def balance_block(host: Host, rig: Rig, ledger: Ledger) -> None:
    """Close the books of the last step, the block's new state having been read.

    The engine steps the block with the mass M' of `effective_mass` and the force -g v. The drag's impulse is
    -(M' - M) dv - g v dt, and what is then left of M dv after the contacts' impulses must come from the floor: zero
    without one, else as large as the floor's joint says by itself.
    """
    totals, motion, dt = ledger.totals, host.motion, rig.dt
    old_vx, old_vy = totals[Total.OLD_VX], totals[Total.OLD_VY]
    dvx, dvy = motion[3] - old_vx, motion[4] - old_vy
    extra = rig.block_step_mass - rig.block_mass
    drag_x = -extra * dvx - rig.block_drag * old_vx * dt
    drag_y = -extra * dvy - rig.block_drag * old_vy * dt
    left_x = rig.block_mass * dvx - drag_x - totals[Total.STEP_X]
    left_y = rig.block_mass * dvy - drag_y - totals[Total.STEP_Y]
    left = math.hypot(left_x, left_y)
    if rig.has_floor:
        totals[Total.RESIDUAL] += abs(left - host.floor_load[0])
        totals[Total.FLOOR_X] += left_x
        totals[Total.FLOOR_Y] += left_y
    else:
        totals[Total.RESIDUAL] += left
    totals[Total.DRAG_X] += drag_x
    totals[Total.DRAG_Y] += drag_y
    phantom_x = motion[0] - totals[Total.OLD_X] - old_vx * dt
    phantom_y = motion[1] - totals[Total.OLD_Y] - old_vy * dt
    totals[Total.PHANTOM_X] += phantom_x
    totals[Total.PHANTOM_GROSS] += math.hypot(phantom_x, phantom_y)
    totals[Total.YAW_MAX] = max(totals[Total.YAW_MAX], abs(motion[2]))
    leaning = totals[Total.STEP_LEANING]
    totals[Total.LEANING] += leaning
    totals[Total.SAMPLE_LEANING] += leaning
    if leaning > 0.0:
        totals[Total.LEANING_STEPS] += 1.0
        if leaning * rig.stall[0] > rig.floor_static:
            totals[Total.STRONG_STEPS] += 1.0
            held = totals[Total.WALL_BOTTOM] > 0.0 and totals[Total.WALL_TOP] > 0.0
            if held and abs(motion[3]) < APPROACH * 0.01:
                totals[Total.JAMMED_STEPS] += 1.0


@inlined
def remember_block(host: Host, ledger: Ledger) -> None:
    """Keep the block's state for the next balance."""
    ledger.totals[Total.OLD_X], ledger.totals[Total.OLD_Y] = host.motion[0], host.motion[1]
    ledger.totals[Total.OLD_VX], ledger.totals[Total.OLD_VY] = host.motion[3], host.motion[4]
