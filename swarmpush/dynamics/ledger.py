"""The ledger: every contact of every step, gathered into visits; and the books. Compiled, engine units.

A visit is one unbroken contact of a pusher with one partner (a block, a wall, another pusher), or of a block with a
wall or another block. Its normal impulse is split into impact and lean. In a step that begins with the partners
approaching, what exceeds the drive's own push has stopped the masses that the engine steps with, which contain the
drag of one step (`effective_mass`); the share that the bare masses have in it is impact. All else is lean.

An impulse J on a body does the work J u, u being the mean of the point's velocities before and after; what a contact
takes from both partners that way is the energy lost in it.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import inlined
from swarmpush.dynamics.blocks import Ground
from swarmpush.dynamics.chipmunk import pair_bodies, pair_normal, pair_point
from swarmpush.dynamics.crew import GAP_STEPS, TOUCHES_BLOCK, TOUCHES_PUSHER, TOUCHES_WALL, Crew, Mode, Rig, feel
from swarmpush.dynamics.host import Host

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SLOTS = 12  # open visits per body: six equal discs can touch one, two walls, the block, and some just parted; a space
# of unknown contents may need more


# A visit. owner, partner: 0 block, then pushers from 1, then further blocks, then walls; partner -1: a free slot.
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
        ("energy", "f8"),  # lost in the contact
        ("approach", "f8"),  # normal speed, speed, heading and places at the first touch
        ("speed", "f8"),
        ("heading", "f8"),
        ("x", "f8"),
        ("y", "f8"),
        ("block_x_on", "f8"),
        ("block_x_off", "f8"),
        ("overlap", "f8"),  # deepest
    ]
)


REAR = 1  # a visit's `face` is 0 unless it is on a block, and then the number of the side plus one

# What happens how much, step by step: summed up since the last sample of the path.
SERIES = (
    "n_leaning",  # pushers leaning on the rear face
    "leaning_share",  # whether there are any
    "strong_share",  # whether the block moves then, or the push exceeds what the floor holds
    "jammed_share",  # and whether it stands against such a push, held by two walls
    "n_ahead",  # pushers ahead of the block, touching a wall, touching another pusher, turning, halted, failed
    "n_at_wall",
    "n_at_pusher",
    "n_turning",
    "n_halted",
    "n_failed",
)

ENERGY = (
    # work of the thrust, of the drives that turn and hold headings, of gravity; then what is lost
    "drive", "heading", "gravity", "drag", "floor",
    "pusher_block", "pusher_wall", "pusher_pusher", "block_wall", "block_block",
)  # fmt: skip

TOTALS = np.dtype([(name, "f8") for name in (*SERIES, *ENERGY, "leaning_most", "yaw_max", "overlap_max", "kinetic_0")])

_SLIDE, _TURN, _STOP, _FAILED = int(Mode.SLIDE), int(Mode.TURN), int(Mode.STOP), int(Mode.FAILED)
_SAME_SURFACE = math.cos(math.radians(20.0))  # normals closer than this belong to one surface, or a gentle bend of it


class Ledger(NamedTuple):
    """Open visits, finished visits, totals.

    known, entities: hash table from bodies' addresses to what they are (see `VISIT`). first, following: lists of a
    step's pairs by owner; partners: of each pair; senses: 1 where the engine's first body is the owner, else -1.
    slots: (n_moving, n_slots) open visits. n_open: how many. log: finished visits; n_log[0]: how many. totals: one
    record.
    """

    known: IntArray
    entities: IntArray
    first: IntArray
    following: IntArray
    partners: IntArray
    senses: FloatArray
    n_open: IntArray
    slots: NDArray[np.void]
    log: NDArray[np.void]
    n_log: IntArray
    totals: NDArray[np.void]


_MIX = np.uint64(0x9E3779B97F4A7C15)  # odd, 2^64 over the golden ratio: spreads addresses evenly (Knuth, TAOCP 3, 6.4)


def new_ledger(addresses: IntArray, n_moving: int, n_pairs: int, capacity: int) -> Ledger:
    """An empty ledger.

    Arguments:
        addresses: of all bodies in the order of `VISIT`, the moving ones first; 0 for a body still to come.
        n_moving: how many of them move.
        n_pairs: most pairs that a step can have.
        capacity: rows of finished visits that are kept before they must be fetched.
    """
    size = 1 << max(4, int(4 * len(addresses)).bit_length())
    known, entities = np.zeros(size, dtype=np.int64), np.full(size, -1, dtype=np.int64)
    for entity, address in enumerate(addresses.tolist()):
        if address:
            enter_body(known, entities, address, entity)
    slots = np.zeros((n_moving, SLOTS), dtype=VISIT)
    slots["partner"] = -1
    return Ledger(
        known=known,
        entities=entities,
        first=np.full(n_moving, -1, dtype=np.int64),
        following=np.zeros(n_pairs, dtype=np.int64),
        partners=np.zeros(n_pairs, dtype=np.int64),
        senses=np.zeros(n_pairs),
        n_open=np.zeros(n_moving, dtype=np.int64),
        slots=slots,
        log=np.zeros(capacity, dtype=VISIT),
        n_log=np.zeros(1, dtype=np.int64),
        totals=np.zeros(1, dtype=TOTALS),
    )


def enter_body(known: IntArray, entities: IntArray, address: int, entity: int) -> None:
    """Let the ledger know a body by its address."""
    at = _home(address, len(known))
    while known[at] != 0:
        at = (at + 1) & (len(known) - 1)
    known[at], entities[at] = address, entity


def _home(address: int, size: int) -> int:
    return ((address * int(_MIX)) & 0xFFFFFFFFFFFFFFFF) >> (65 - size.bit_length())


@inlined
def _shift(known: IntArray) -> int:
    """By how many bits a mixed address is shifted to give its home in the table."""
    shift, size = 65, len(known)
    while size > 0:
        size >>= 1
        shift -= 1
    return shift


@inlined
def most_visits(host: Host, ledger: Ledger, n_pairs: int) -> int:
    """Most visits that any body can have open after this step: no fewer than it will have, and seldom more."""
    most = 0
    for owner in range(len(ledger.n_open)):
        most = max(most, ledger.n_open[owner])
    if n_pairs + most <= ledger.slots.shape[1]:
        return n_pairs + most
    shift, fresh = _shift(ledger.known), ledger.n_open.copy()
    for pair in range(n_pairs):
        for body in pair_bodies(host.pairs[2 + pair]):
            entity = _entity(ledger.known, ledger.entities, shift, body)
            if 0 <= entity < len(fresh):
                fresh[entity] += 1
                most = max(most, fresh[entity])
    return most


@inlined
def _entity(known: IntArray, entities: IntArray, shift: int, address: int) -> int:
    """What a body is; -1 for one that is not watched."""
    at = np.int64((np.uint64(address) * _MIX) >> np.uint64(shift))
    while known[at] != address:
        if known[at] == 0:
            return -1
        at = (at + 1) & (len(known) - 1)
    return int(entities[at])


@inlined
def _slot(slots: NDArray[np.void], n_open: IntArray, owner: int, partner: int) -> int:
    """The open visit of owner and partner, or a fresh slot; -1 if the table is full."""
    free = -1
    for k in range(slots.shape[1]):
        found = slots[owner, k].partner
        if found == partner:
            return k
        if found < 0 and free < 0:
            free = k
    if free >= 0:
        visit = slots[owner, free]
        visit.owner, visit.partner, visit.first_step, visit.last_step = owner, partner, -1, -1
        visit.impact = visit.lean = visit.tangential = visit.energy = visit.overlap = 0.0
        n_open[owner] += 1
    return free


@inlined
def close_visits(ledger: Ledger, step: int) -> None:
    """Move visits that have ended before `step` to the log."""
    slots, n_open, log, n_log = ledger.slots, ledger.n_open, ledger.log, ledger.n_log
    for owner in range(len(n_open)):
        to_see, k = n_open[owner], 0
        while to_see > 0:
            visit = slots[owner, k]
            k += 1
            if visit.partner < 0:
                continue
            to_see -= 1
            if visit.last_step < step - GAP_STEPS:
                log[n_log[0]] = visit
                n_log[0] += 1
                n_open[owner] -= 1
                visit.partner = -1


@inlined
def _feel(
    rig: Rig, pushers: NDArray[np.void], i: int, kind: int, nx: float, ny: float, impulse: float, step: int
) -> None:
    """Let pusher i's bumper take note of a contact whose normal out of the pusher is (nx, ny)."""
    p = pushers[i]
    if rig.half_arc < math.pi and nx * p.ux + ny * p.uy < math.cos(rig.half_arc):
        return
    p.touched_at = step
    if p.has_reacted == 1 and nx * p.ux + ny * p.uy <= 0.0:
        return  # it has turned away already, and is about to leave
    if p.mode == _SLIDE and -(nx * math.cos(p.percept_normal) + ny * math.sin(p.percept_normal)) > _SAME_SURFACE:
        return  # what it slides along is no bump
    if impulse > p.hardest:
        p.hardest, p.step_kind, p.step_nx, p.step_ny = impulse, kind, -nx, -ny


@inlined
def _precedes(pair: int, other: int) -> bool:
    """Which of two pairs of the same two bodies comes first: by normal, then by point. Bodies of several shapes have
    several pairs, and the engine lists them in order of addresses."""
    nx, ny, _ = pair_normal(pair)
    mx, my, _ = pair_normal(other)
    if nx != mx:
        return bool(nx < mx)
    if ny != my:
        return bool(ny < my)
    px, py = pair_point(pair, 0)[:2]
    qx, qy = pair_point(other, 0)[:2]
    return bool(px < qx if px != qx else py < qy)


@inlined
def _sort_pairs(host: Host, ledger: Ledger, n_pushers: int, n_pairs: int) -> None:
    """Lay the step's pairs into lists by owner, in the order of their partners.

    A pusher owns its visits, of two pushers the first; a block those with walls, of two blocks the first.
    """
    known, entities, first = ledger.known, ledger.entities, ledger.first
    following, partners, senses = ledger.following, ledger.partners, ledger.senses
    pairs = host.pairs
    shift = _shift(known)
    for pair in range(min(n_pairs, len(partners))):
        body_a, body_b = pair_bodies(pairs[2 + pair])
        a = _entity(known, entities, shift, body_a)
        b = _entity(known, entities, shift, body_b)
        if a < 0 or b < 0:
            continue
        a_pushes, b_pushes = 0 < a <= n_pushers, 0 < b <= n_pushers
        owner, partner, sense = a, b, 1.0
        if (b_pushes and not a_pushes) or (a_pushes == b_pushes and b < a):
            owner, partner, sense = b, a, -1.0
        if owner >= len(first):
            continue
        partners[pair], senses[pair] = partner, sense
        before, at = -1, first[owner]
        while at >= 0 and (
            partners[at] < partner or (partners[at] == partner and not _precedes(pairs[2 + pair], pairs[2 + at]))
        ):
            before, at = at, following[at]
        following[pair] = at
        if before < 0:
            first[owner] = pair
        else:
            following[before] = pair


class _Touch(NamedTuple):
    """One pair in touch in one step, as the owner of the visit has it.

    nx, ny: unit normal from owner to partner. jx, jy: impulse on the partner. owner_turn, partner_turn: its moments on
    either about the centre of mass, and owner_gross, partner_gross: the sizes of their parts. owner_arm, partner_arm:
    of the normal about either centre. approach: normal speed before the step. lost: energy. overlap: deepest.
    """

    nx: float
    ny: float
    jx: float
    jy: float
    owner_turn: float
    partner_turn: float
    owner_gross: float
    partner_gross: float
    owner_arm: float
    partner_arm: float
    approach: float
    lost: float
    overlap: float


@inlined
def _measure(host: Host, ground: Ground, at: int, sense: float, owner: int, partner: int) -> _Touch:
    """The pair that the engine keeps at an address."""
    before, motion = host.before, host.motion
    moves = partner < len(motion)
    nx, ny, n_points = pair_normal(at)
    nx, ny = sense * nx, sense * ny
    jx, jy, owner_turn, partner_turn, owner_gross, partner_gross = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    lost, overlap, rx, ry, qx, qy = 0.0, -np.inf, 0.0, 0.0, 0.0, 0.0
    for point in range(n_points):
        ax, ay, bx, by, jn, jt = pair_point(at, point)
        if sense > 0.0:  # rx, ry and qx, qy lead to the point from the owner's centre and from the partner's
            rx, ry, qx, qy = ax, ay, bx, by
        else:
            rx, ry, qx, qy = bx, by, ax, ay
        # turned round, the impulse on the other one has the same parts along normal and tangent
        px, py = nx * jn - ny * jt, ny * jn + nx * jt
        jx, jy = jx + px, jy + py
        owner_turn -= rx * py - ry * px
        owner_gross += abs(rx * py) + abs(ry * px)
        ux = before[owner, 3] + motion[owner, 3] - (before[owner, 5] + motion[owner, 5]) * ry
        uy = before[owner, 4] + motion[owner, 4] + (before[owner, 5] + motion[owner, 5]) * rx
        gap = -(rx * nx + ry * ny) - motion[owner, 0] * nx - motion[owner, 1] * ny
        if moves:
            partner_turn += qx * py - qy * px
            partner_gross += abs(qx * py) + abs(qy * px)
            ux -= before[partner, 3] + motion[partner, 3] - (before[partner, 5] + motion[partner, 5]) * qy
            uy -= before[partner, 4] + motion[partner, 4] + (before[partner, 5] + motion[partner, 5]) * qx
            gap += (motion[partner, 0] + qx) * nx + (motion[partner, 1] + qy) * ny
        else:
            wall = partner - len(motion)
            gap += (ground.wall_x[wall] + qx) * nx + (ground.wall_y[wall] + qy) * ny
        lost += 0.5 * (px * ux + py * uy)
        overlap = max(overlap, -gap)
    owner_arm, partner_arm = rx * ny - ry * nx, qx * ny - qy * nx
    approach = before[owner, 3] * nx + before[owner, 4] * ny + before[owner, 5] * owner_arm
    if moves:
        approach -= before[partner, 3] * nx + before[partner, 4] * ny + before[partner, 5] * partner_arm
    return _Touch(
        nx, ny, jx, jy, owner_turn, partner_turn, owner_gross, partner_gross, owner_arm, partner_arm, approach, lost,
        overlap,
    )  # fmt: skip


_BY_PUSHER, _BY_BLOCK, _BY_WALL = 0, 1, 2


@inlined
def _enter_on_block(block: Any, by: int, jx: float, jy: float, turn: float, gross_turn: float) -> None:
    """Enter an impulse and its moment on a block into its books."""
    block.step_x += jx
    block.step_y += jy
    block.step_turn += turn
    block.gross += math.sqrt(jx * jx + jy * jy)
    block.gross_turn += gross_turn
    if by == _BY_WALL:
        block.walls_x += jx
        block.walls_y += jy
        block.walls_turn += turn
        return
    block.is_pushed = 1
    if by == _BY_PUSHER:
        block.pushers_x += jx
        block.pushers_y += jy
        block.pushers_turn += turn
    else:
        block.blocks_x += jx
        block.blocks_y += jy
        block.blocks_turn += turn


@inlined
def _enter_on_pusher(p: Any, touches: int, jx: float, jy: float, turn: float) -> None:
    """Let a pusher take note of an impulse on its body, and of what it touches."""
    p.touches |= touches
    p.contact_x += jx
    p.contact_y += jy
    p.contact_turn += turn


@inlined
def _impact_share(
    ground: Ground, owner: int, partner: int, owner_arm: float, partner_arm: float
) -> tuple[float, float]:
    """Of the push that stops two approaching bodies: the share that the bare masses have in it; and of how much the
    bodies as stepped give way, the partner's share."""
    inertia = ground.inertia
    bare = inertia[owner, 0] + inertia[owner, 1] * owner_arm * owner_arm
    stepped = inertia[owner, 2] + inertia[owner, 3] * owner_arm * owner_arm
    yields = 0.0
    if partner < len(inertia):
        bare += inertia[partner, 0] + inertia[partner, 1] * partner_arm * partner_arm
        yields = inertia[partner, 2] + inertia[partner, 3] * partner_arm * partner_arm
        stepped += yields
    return stepped / bare, yields / stepped


@inlined
def enter_contacts(host: Host, rig: Rig, crew: Crew, ground: Ground, ledger: Ledger, n_pairs: int, step: int) -> None:
    """Enter the contacts of this step: visits, bumpers, and the impulses on blocks and pushers."""
    n, n_moving = len(crew.pushers), len(host.motion)
    before, motion, totals, dt = host.before, host.motion, ledger.totals[0], rig.dt
    pushers, blocks, following = crew.pushers, ground.blocks, ledger.following
    _sort_pairs(host, ledger, n, n_pairs)
    leaning, push_of_all, wall_below, wall_above = 0.0, 0.0, False, False
    for owner in range(n_moving):
        pair = ledger.first[owner]
        ledger.first[owner] = -1
        while pair >= 0:
            at, partner, sense = host.pairs[2 + pair], ledger.partners[pair], ledger.senses[pair]
            pair = following[pair]
            k = _slot(ledger.slots, ledger.n_open, owner, partner)
            if k < 0:
                continue
            visit = ledger.slots[owner, k]
            touch = _measure(host, ground, at, sense, owner, partner)
            nx, ny, jx, jy, lost = touch.nx, touch.ny, touch.jx, touch.jy, touch.lost
            push = max(jx * nx + jy * ny, 0.0)
            is_pusher, meets_pusher, meets_block = 0 < owner <= n, 0 < partner <= n, False
            drive = 0.0
            if meets_pusher:
                p = pushers[partner - 1]
                drive = -(p.force_x * nx + p.force_y * ny) * dt
                _enter_on_pusher(p, TOUCHES_PUSHER, jx, jy, touch.partner_turn)
                _feel(rig, pushers, partner - 1, 3, -nx, -ny, push, step)
                totals.pusher_pusher += lost
            elif partner < n_moving:
                meets_block = True
                block = blocks[partner if partner == 0 else partner - n]
                by = _BY_PUSHER if is_pusher else _BY_BLOCK
                _enter_on_block(block, by, jx, jy, touch.partner_turn, touch.partner_gross)
                if is_pusher:
                    totals.pusher_block += lost
                else:
                    totals.block_block += lost
            elif is_pusher:
                totals.pusher_wall += lost
            else:
                totals.block_wall += lost
                if owner == 0:
                    wall_above |= ny > 0.5
                    wall_below |= ny < -0.5
            if is_pusher:
                p = pushers[owner - 1]
                drive += (p.force_x * nx + p.force_y * ny) * dt
                touches, kind = (
                    (TOUCHES_PUSHER, 3) if meets_pusher else (TOUCHES_BLOCK, 2) if meets_block else (TOUCHES_WALL, 1)
                )
                _enter_on_pusher(p, touches, -jx, -jy, touch.owner_turn)
                _feel(rig, pushers, owner - 1, kind, nx, ny, push, step)
            else:
                block = blocks[owner if owner == 0 else owner - n]
                by = _BY_BLOCK if meets_block else _BY_WALL
                _enter_on_block(block, by, -jx, -jy, touch.owner_turn, touch.owner_gross)
            lean = push
            if touch.approach > ground.approach:
                share, passed_on = _impact_share(ground, owner, partner, touch.owner_arm, touch.partner_arm)
                lean -= max(push - max(drive, 0.0), 0.0) * share
                if visit.first_step < 0 and meets_block:
                    speed = abs(before[partner, 3]) + abs(before[partner, 4]) + abs(before[partner, 5])
                    if speed < ground.approach * 0.01:
                        block = blocks[partner if partner == 0 else partner - n]
                        block.passed_on = max(block.passed_on, passed_on)
            if visit.first_step < 0:
                visit.first_step = step
                visit.approach = touch.approach
                visit.speed = math.sqrt(before[owner, 3] * before[owner, 3] + before[owner, 4] * before[owner, 4])
                visit.x, visit.y = motion[owner, 0], motion[owner, 1]
                visit.block_x_on = before[0, 0]
                visit.face = 0
                if meets_block:
                    block = blocks[partner if partner == 0 else partner - n]
                    c, s = math.cos(motion[partner, 2]), math.sin(motion[partner, 2])
                    visit.face = _face(ground.sides, block.first_side, block.n_sides, c * nx + s * ny, c * ny - s * nx)
                visit.heading = pushers[owner - 1].heading if is_pusher else before[owner, 2]
            visit.impact += push - lean
            visit.lean += lean
            visit.tangential += jx * ny - jy * nx
            visit.energy += lost
            visit.last_step = step
            visit.block_x_off = before[0, 0]
            visit.overlap = max(visit.overlap, touch.overlap)
            totals.overlap_max = max(totals.overlap_max, touch.overlap)
            if partner == 0 and visit.face == REAR and lean > ground.lean_force * dt:
                leaning += 1.0
                push_of_all += lean
    _count(ground, ledger, motion, leaning, push_of_all / dt, wall_below and wall_above)


@inlined
def _face(sides: FloatArray, first: int, n: int, nx: float, ny: float) -> int:
    """Side of a block, plus one, that is touched where the normal into the block, in its own frame, is (nx, ny)."""
    best, face = -2.0, 0
    for k in range(first, first + n):
        squarely = -(sides[k, 0] * nx + sides[k, 1] * ny)
        if squarely > best:
            best, face = squarely, k + 1
    return face


@inlined
def _count(
    ground: Ground, ledger: Ledger, motion: FloatArray, leaning: float, push_of_all: float, is_held: bool
) -> None:
    """What happens to the block in this step."""
    totals = ledger.totals[0]
    totals.yaw_max = max(totals.yaw_max, abs(motion[0, 2]))
    if leaning > 0.0:
        totals.n_leaning += leaning
        totals.leaning_share += 1.0
        totals.leaning_most = max(totals.leaning_most, leaning)
        is_at_rest = abs(motion[0, 3]) < ground.approach * 0.01
        if push_of_all > ground.blocks[0].floor_static or not is_at_rest:
            totals.strong_share += 1.0
            if is_held and is_at_rest:
                totals.jammed_share += 1.0


@inlined
def settle_crew(
    host: Host, rig: Rig, crew: Crew, ground: Ground, ledger: Ledger, keys: NDArray[np.uint64], step: int
) -> None:
    """After a step: what each pusher is about, what its drive did and drag took, and whether it has felt a bump.

    The engine steps a body with some mass M' and force (see `crew.act`), of which thrust and slope are known; the
    rest of the force, and -(M' - M) dv, is the drag's impulse. Likewise for turning.
    """
    totals, dt, before, motion = ledger.totals[0], rig.dt, host.before, host.motion
    ahead_of = motion[0, 0] + ground.front_reach
    drive, heading, gravity, drag = 0.0, 0.0, 0.0, 0.0
    for i in range(len(crew.pushers)):
        p = crew.pushers[i]
        if p.touches != 0:
            if p.touches & TOUCHES_WALL:
                totals.n_at_wall += 1.0
            if p.touches & TOUCHES_PUSHER:
                totals.n_at_pusher += 1.0
        if motion[i + 1, 0] > ahead_of:
            totals.n_ahead += 1.0
        if p.mode >= _TURN:
            if p.mode == _TURN:
                totals.n_turning += 1.0
            elif p.mode == _STOP:
                totals.n_halted += 1.0
            elif p.mode == _FAILED:
                totals.n_failed += 1.0
        vx, vy, wx, wy = before[i + 1, 3], before[i + 1, 4], motion[i + 1, 3], motion[i + 1, 4]
        mx, my = 0.5 * (vx + wx), 0.5 * (vy + wy)
        extra = p.step_mass - p.mass
        tx, ty = p.thrust * p.ux, p.thrust * p.uy
        gx, gy = p.mass * rig.pull_x, p.mass * rig.pull_y
        drive += (tx * mx + ty * my) * dt
        gravity += (gx * mx + gy * my) * dt
        drag += (extra * (wx - vx) - (p.force_x - tx - gx) * dt) * mx
        drag += (extra * (wy - vy) - (p.force_y - ty - gy) * dt) * my
        if rig.heading_is_free:
            spin, after = before[i + 1, 5], motion[i + 1, 5]
            middle = 0.5 * (spin + after)
            heading += p.drive_torque * middle * dt
            drag += ((p.drive_torque - p.torque) * dt + (p.step_moment - p.moment) * (after - spin)) * middle
        elif p.contact_turn != 0.0:
            heading -= p.contact_turn * motion[i + 1, 5]
        feel(rig, p, keys, i, step)
    totals.drive += drive
    totals.heading += heading
    totals.gravity += gravity
    totals.drag += drag


@inlined
def kinetic_energy(host: Host, crew: Crew, ground: Ground) -> float:
    """Kinetic energy of all that moves, with the bare masses."""
    motion, pushers, blocks = host.motion, crew.pushers, ground.blocks
    total = 0.0
    for i in range(len(pushers)):
        p: Any = pushers[i]
        total += 0.5 * p.mass * (motion[i + 1, 3] ** 2 + motion[i + 1, 4] ** 2) + 0.5 * p.moment * motion[i + 1, 5] ** 2
    for k in range(len(blocks)):
        b: Any = blocks[k]
        m = b.entity
        total += 0.5 * b.mass * (motion[m, 3] ** 2 + motion[m, 4] ** 2) + 0.5 * b.moment * motion[m, 5] ** 2
    return total
