"""The ledger: every contact of every step, gathered into visits; and the block's books. Compiled, engine units.

A visit is one unbroken contact of a pusher with one partner (the block, a wall, another pusher), or of the block
with a wall. Its normal impulse is split into impact and lean. In a step that begins with the partners approaching,
what exceeds the drive's own push has stopped the masses that the engine steps with, which contain the drag of one
step (`effective_mass`); the share that the bare masses have in it is impact. All else is lean.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import borrowed, inlined
from swarmpush.dynamics.crew import Crew, Mode, Rig
from swarmpush.dynamics.host import CONTACT_FLOATS, CONTACT_INTS, MOTION, Host

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SLOTS = 12  # open visits per body: six equal discs can touch one, two walls, the block, and some just parted
GAP_STEPS = 2  # a contact that is missing for more steps than this has ended
APPROACH = 0.005  # of the free speed; slower than this nothing arrives, it only presses


# A visit. owner, partner: 0 block, then pushers from 1, then walls; partner -1 marks a free slot.
VISIT = np.dtype(
    [
        ("owner", "i8"),
        ("partner", "i8"),
        ("face", "i8"),  # see `REAR`
        ("first_step", "i8"),
        ("last_step", "i8"),
        ("impact", "f8"),  # normal impulse in either part, and
        ("lean", "f8"),
        ("tangential", "f8"),
        ("approach", "f8"),  # normal speed, heading and places at the first touch
        ("heading", "f8"),
        ("x", "f8"),
        ("y", "f8"),
        ("block_x_on", "f8"),
        ("block_x_off", "f8"),
        ("overlap", "f8"),  # deepest
    ]
)


REAR = 1  # a visit's `face` is 0 unless it is on the block, and then the number of the side plus one

TOTALS = np.dtype(
    [
        (name, "f8")
        for name in (
            # impulse on the block by each, and what momentum balance leaves for the floor
            "pushers_x", "pushers_y", "walls_x", "walls_y", "floor_x", "floor_y", "drag_x", "drag_y",
            "gross",  # sum of the sizes of all contact impulses on the block
            "residual",  # sum over steps of the size of what does not balance
            "phantom",  # sum of the sizes of block displacements that no velocity explains
            "yaw_max", "overlap_max",
            # steps with a pusher leaning on the rear face, of these with enough push for the floor, and of these with
            # a block at rest between both walls
            "leaning_steps", "strong_steps", "jammed_steps",
            # pusher-steps ahead of the block, touching a wall, touching another pusher, turning, halted
            "ahead", "at_wall", "at_pusher", "turning", "stopped",
            # the block at the end of the last step; the contact impulse of the step; who leaned on it, who held it
            "old_x", "old_y", "old_vx", "old_vy", "step_x", "step_y", "step_leaning", "wall_bottom", "wall_top",
            "sample_leaning",  # sum of pushers leaning since the last sample
        )
    ]
)  # fmt: skip
_TOUCHES_WALL, _TOUCHES_PUSHER = 1, 2  # bits
_SLIDE = int(Mode.SLIDE)
_SAME_SURFACE = math.cos(math.radians(20.0))  # normals closer than this belong to one surface, or a gentle bend of it


class Ledger(NamedTuple):
    """Open visits, finished visits, totals.

    ids, entities: sorted body ids and what they are (0 block, 1..n pushers, then walls). slots: (n + 1, SLOTS) open
    visits of block and pushers. n_open: how many. log: finished visits; n_log[0]: how many. on_block: (n_entities, 2)
    impulse of each on the block in the last step; summed up in this order, because the engine lists contacts in an
    order that depends on addresses. touching: what each owner touched in the last step. totals: one record.
    """

    ids: IntArray
    entities: IntArray
    n_open: IntArray
    slots: NDArray[np.void]
    log: NDArray[np.void]
    n_log: IntArray
    on_block: FloatArray
    touching: IntArray
    totals: NDArray[np.void]


def new_ledger(moving_ids: IntArray, wall_ids: IntArray, capacity: int) -> Ledger:
    """An empty ledger; `capacity` rows of finished visits are kept before they must be fetched."""
    ids = np.concatenate([moving_ids, wall_ids])
    order = np.argsort(ids)
    n = len(moving_ids)
    slots = np.zeros((n, SLOTS), dtype=VISIT)
    slots["partner"] = -1
    return Ledger(
        ids=ids[order],
        entities=order.astype(np.int64),
        n_open=np.zeros(n, dtype=np.int64),
        slots=slots,
        log=np.zeros(capacity, dtype=VISIT),
        n_log=np.zeros(1, dtype=np.int64),
        on_block=np.zeros((len(ids), 2)),
        touching=np.zeros(n, dtype=np.int64),
        totals=np.zeros(1, dtype=TOTALS),
    )


@inlined
def _entity(ids: IntArray, entities: IntArray, body_id: int) -> int:
    low, high = 0, len(ids) - 1
    while low < high:
        middle = (low + high) >> 1
        if ids[middle] < body_id:
            low = middle + 1
        else:
            high = middle
    return entities[low] if ids[low] == body_id else -1


@inlined
def _slot(slots: NDArray[np.void], n_open: IntArray, owner: int, partner: int) -> int:
    """The open visit of owner and partner, or a fresh slot; -1 if the table is full."""
    free = -1
    for k in range(SLOTS):
        found = slots[owner, k].partner
        if found == partner:
            return k
        if found < 0 and free < 0:
            free = k
    if free >= 0:
        visit = slots[owner, free]
        visit.owner, visit.partner, visit.first_step = owner, partner, -1
        visit.impact = visit.lean = visit.tangential = visit.overlap = 0.0
        n_open[owner] += 1
    return free


@inlined
def close_visits(ledger: Ledger, step: int) -> None:
    """Move visits that have ended before `step` to the log."""
    slots, n_open, log, n_log = (
        borrowed(ledger.slots),
        borrowed(ledger.n_open),
        borrowed(ledger.log),
        borrowed(ledger.n_log),
    )
    for owner in range(len(n_open)):
        if n_open[owner] == 0:
            continue
        for k in range(SLOTS):
            visit = slots[owner, k]
            if visit.partner >= 0 and visit.last_step < step - GAP_STEPS:
                log[n_log[0]] = visit
                n_log[0] += 1
                n_open[owner] -= 1
                visit.partner = -1


@inlined
def _face(sides: FloatArray, nx: float, ny: float) -> int:
    """Side of the block that is touched where the normal into the block, in its own frame, is (nx, ny)."""
    best, face = -2.0, 0
    for k in range(len(sides)):
        squarely = -(sides[k, 0] * nx + sides[k, 1] * ny)
        if squarely > best:
            best, face = squarely, k + 1
    return face


@inlined
def _feel(
    rig: Rig, pushers: NDArray[np.void], i: int, kind: int, nx: float, ny: float, impulse: float, step: int
) -> None:
    """Let pusher i's bumper take note of a contact whose normal out of the pusher is (nx, ny)."""
    p = pushers[i]
    if rig.half_arc < math.pi and nx * p.ux + ny * p.uy < math.cos(rig.half_arc):
        return
    p.touched_at = step
    if p.mode == _SLIDE and -(nx * math.cos(p.percept_normal) + ny * math.sin(p.percept_normal)) > _SAME_SURFACE:
        return  # what it slides along is no bump
    if impulse > p.hardest:
        p.hardest, p.step_kind, p.step_normal = impulse, kind, math.atan2(-ny, -nx)


@inlined
def enter_contacts(host: Host, rig: Rig, crew: Crew, ledger: Ledger, n_pairs: int, step: int) -> None:
    """Enter the contacts of this step: visits, bumpers, and the impulses on the block."""
    n = len(crew.pushers)
    motion, totals, dt = borrowed(host.motion), borrowed(ledger.totals)[0], rig.dt
    numbers, whole, pushers = borrowed(host.contact_floats), borrowed(host.contact_ints), borrowed(crew.pushers)
    ids, entities, slots = borrowed(ledger.ids), borrowed(ledger.entities), borrowed(ledger.slots)
    n_open, on_block, touching = borrowed(ledger.n_open), borrowed(ledger.on_block), borrowed(ledger.touching)
    inverse_mass, inverse_step_mass = borrowed(rig.inverse_mass), borrowed(rig.inverse_step_mass)
    corners, sides = borrowed(rig.corners), borrowed(rig.sides)
    totals.wall_bottom = totals.wall_top = 0.0
    leaning = 0.0
    for pair in range(n_pairs):
        if whole[CONTACT_INTS * pair + 2] == 0:
            continue
        owner = _entity(ids, entities, whole[CONTACT_INTS * pair])
        partner = _entity(ids, entities, whole[CONTACT_INTS * pair + 1])
        if owner < 0 or partner < 0:
            continue
        at = CONTACT_FLOATS * pair
        jx, jy = numbers[at], numbers[at + 1]
        nx, ny = numbers[at + 2], numbers[at + 3]
        # a pusher owns its visits; of two pushers the first; the block owns those with walls
        if owner > n or (owner == 0 and partner <= n) or (0 < partner < owner):
            owner, partner, jx, jy, nx, ny = partner, owner, -jx, -jy, -nx, -ny
        push = max(-(jx * nx + jy * ny), 0.0)  # size of the normal impulse; n points from owner to partner
        k = _slot(slots, n_open, owner, partner)
        if k < 0:
            continue
        visit = slots[owner, k]
        base = MOTION * owner
        x, y = motion[base] + motion[base + 3] * dt, motion[base + 1] + motion[base + 4] * dt
        rvx, rvy = motion[base + 3], motion[base + 4]
        overlap, drive, face = 0.0, 0.0, 0
        if owner > 0:
            p = pushers[owner - 1]
            drive = (p.force_x * nx + p.force_y * ny) * dt
        if 0 < partner <= n:
            other = MOTION * partner
            rvx, rvy = rvx - motion[other + 3], rvy - motion[other + 4]
            p = pushers[partner - 1]
            drive -= (p.force_x * nx + p.force_y * ny) * dt
            ox, oy = motion[other] + motion[other + 3] * dt, motion[other + 1] + motion[other + 4] * dt
            overlap = 2.0 - math.hypot(ox - x, oy - y)
            _feel(rig, pushers, owner - 1, 3, nx, ny, push, step)
            _feel(rig, pushers, partner - 1, 3, -nx, -ny, push, step)
            touching[owner] |= _TOUCHES_PUSHER
            touching[partner] |= _TOUCHES_PUSHER
        elif partner == 0:
            cx, cy = x + nx - motion[0], y + ny - motion[1]
            rvx, rvy = rvx - motion[3] + motion[5] * cy, rvy - motion[4] - motion[5] * cx
            c, s = math.cos(motion[2]), math.sin(motion[2])
            bnx, bny = c * nx + s * ny, c * ny - s * nx
            # the block's nearest reach towards the disc, along the normal, from the disc's centre
            reach = np.inf
            for corner in range(len(corners)):
                reach = min(reach, bnx * corners[corner, 0] + bny * corners[corner, 1])
            overlap = 1.0 - reach - (nx * (motion[0] - x) + ny * (motion[1] - y))
            face = _face(sides, bnx, bny)
            _feel(rig, pushers, owner - 1, 2, nx, ny, push, step)
            on_block[owner, 0] -= jx
            on_block[owner, 1] -= jy
        elif owner > 0:
            _feel(rig, pushers, owner - 1, 1, nx, ny, push, step)
            touching[owner] |= _TOUCHES_WALL
        else:
            on_block[partner, 0] += jx
            on_block[partner, 1] += jy
            if ny > 0.5:
                totals.wall_top = 1.0
            elif ny < -0.5:
                totals.wall_bottom = 1.0
        approach = rvx * nx + rvy * ny
        if visit.first_step < 0:
            visit.first_step = step
            visit.approach = approach
            visit.x, visit.y = x, y
            visit.block_x_on = motion[0]
            visit.face = face
            visit.heading = pushers[owner - 1].heading if owner > 0 else motion[2]
        lean = push
        if approach > APPROACH:
            mass = (inverse_step_mass[owner] + inverse_step_mass[partner]) / (
                inverse_mass[owner] + inverse_mass[partner]
            )
            lean -= max(push - max(drive, 0.0), 0.0) * mass
        visit.impact += push - lean
        visit.lean += lean
        visit.tangential += jy * nx - jx * ny
        visit.last_step = step
        visit.block_x_off = motion[0]
        visit.overlap = max(visit.overlap, overlap)
        totals.overlap_max = max(totals.overlap_max, overlap)
        if partner == 0 and visit.face == REAR and lean > rig.lean_force * dt:
            leaning += 1.0
    totals.step_leaning = leaning
    _add_up(ledger, n)


@inlined
def _add_up(ledger: Ledger, n: int) -> None:
    """Sum up the impulses on the block and who touches what, and clear them for the next step."""
    totals, on_block, touching = borrowed(ledger.totals)[0], borrowed(ledger.on_block), borrowed(ledger.touching)
    for owner in range(1, n + 1):
        if touching[owner] != 0:
            if touching[owner] & _TOUCHES_WALL:
                totals.at_wall += 1.0
            if touching[owner] & _TOUCHES_PUSHER:
                totals.at_pusher += 1.0
            touching[owner] = 0
    totals.step_x = totals.step_y = 0.0
    for entity in range(len(on_block)):
        jx, jy = on_block[entity, 0], on_block[entity, 1]
        if jx == 0.0 and jy == 0.0:
            continue
        on_block[entity, 0] = on_block[entity, 1] = 0.0
        totals.step_x += jx
        totals.step_y += jy
        totals.gross += math.hypot(jx, jy)
        if entity <= n:
            totals.pushers_x += jx
            totals.pushers_y += jy
        else:
            totals.walls_x += jx
            totals.walls_y += jy


@inlined
def balance_block(host: Host, rig: Rig, ledger: Ledger) -> None:
    """Close the books of the last step, the block's new state having been read.

    The engine steps the block with the mass M' of `effective_mass` and the force -g v. The drag's impulse is
    -(M' - M) dv - g v dt, and what is then left of M dv after the contacts' impulses must come from the floor: zero
    without one, else as large as the floor's joint says by itself.
    """
    totals, motion, dt = borrowed(ledger.totals)[0], borrowed(host.motion), rig.dt
    old_vx, old_vy = totals.old_vx, totals.old_vy
    dvx, dvy = motion[3] - old_vx, motion[4] - old_vy
    extra = rig.block_step_mass - rig.block_mass
    drag_x = -extra * dvx - rig.block_drag * old_vx * dt
    drag_y = -extra * dvy - rig.block_drag * old_vy * dt
    left_x = rig.block_mass * dvx - drag_x - totals.step_x
    left_y = rig.block_mass * dvy - drag_y - totals.step_y
    left = math.hypot(left_x, left_y)
    if rig.has_floor:
        totals.residual += abs(left - host.floor_load[0])
        totals.floor_x += left_x
        totals.floor_y += left_y
    else:
        totals.residual += left
    totals.drag_x += drag_x
    totals.drag_y += drag_y
    phantom_x = motion[0] - totals.old_x - old_vx * dt
    phantom_y = motion[1] - totals.old_y - old_vy * dt
    totals.phantom += math.hypot(phantom_x, phantom_y)
    totals.yaw_max = max(totals.yaw_max, abs(motion[2]))
    leaning = totals.step_leaning
    totals.sample_leaning += leaning
    if leaning > 0.0:
        totals.leaning_steps += 1.0
        if leaning * rig.stall > rig.floor_static:
            totals.strong_steps += 1.0
            held = totals.wall_bottom > 0.0 and totals.wall_top > 0.0
            if held and abs(motion[3]) < APPROACH * 0.01:
                totals.jammed_steps += 1.0


@inlined
def remember_block(host: Host, ledger: Ledger) -> None:
    """Keep the block's state for the next balance."""
    totals, motion = borrowed(ledger.totals)[0], borrowed(host.motion)
    totals.old_x, totals.old_y = motion[0], motion[1]
    totals.old_vx, totals.old_vy = motion[3], motion[4]
