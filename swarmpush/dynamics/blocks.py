"""The blocks' side of a step: drag, dry floor and slope before it, the books after it. Compiled, engine units."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import inlined
from swarmpush.dynamics.host import Host

FloatArray = NDArray[np.float64]

# One block. Impulses x, y and about its centre of mass ("turn") are those on the block.
BLOCK_STATE = np.dtype(
    [
        ("entity", "i8"),  # its row in the host's buffers
        ("first_side", "i8"),  # its outward normals in `Ground.sides`
        ("n_sides", "i8"),
        ("mass", "f8"),  # as it is, and
        ("step_mass", "f8"),  # as the engine has it, see `effective_mass`
        ("moment", "f8"),  # likewise; 0 for a block that cannot turn
        ("step_moment", "f8"),
        ("drag_along", "f8"),  # in its own frame
        ("drag_across", "f8"),
        ("yaw_drag", "f8"),
        ("floor_static", "f8"),  # largest friction force
        ("floor_kinetic", "f8"),
        ("floor_arm", "f8"),  # largest friction torque over largest force
        ("footing_x", "f8"),  # centre of friction in the block's own frame
        ("footing_y", "f8"),
        # forces of this step: drag, slope, and the sliding floor as far as it is no joint
        ("drag_x", "f8"), ("drag_y", "f8"), ("drag_turn", "f8"), ("slope_x", "f8"), ("slope_y", "f8"),
        ("floor_x", "f8"), ("floor_y", "f8"), ("floor_turn", "f8"),
        ("is_pushed", "i8"),  # whether pushers or other blocks touched it in the last step, and
        ("was_pushed", "i8"),  # in the step before
        ("is_held", "i8"),  # whether the floor could hold it in the last step
        ("passed_on", "f8"),  # of the floor's pull in the last step: share that a hit on the resting block made up
        ("relief", "f8"),  # by how much the floor's force is smaller in this step, see `balance_blocks`
        # contact impulse of this step
        ("step_x", "f8"), ("step_y", "f8"), ("step_turn", "f8"),
        # the books: impulses so far by pushers, other blocks, walls, floor, drag and slope
        ("pushers_x", "f8"), ("pushers_y", "f8"), ("pushers_turn", "f8"),
        ("blocks_x", "f8"), ("blocks_y", "f8"), ("blocks_turn", "f8"),
        ("walls_x", "f8"), ("walls_y", "f8"), ("walls_turn", "f8"),
        ("ground_x", "f8"), ("ground_y", "f8"), ("ground_turn", "f8"),
        ("liquid_x", "f8"), ("liquid_y", "f8"), ("liquid_turn", "f8"),
        ("weight_x", "f8"), ("weight_y", "f8"),
        ("gross", "f8"),  # sums of the sizes of all contact impulses, and of the two parts of each one's moment
        ("gross_turn", "f8"),
        ("steady", "f8"),  # sums of the sizes of what floor, drag and slope gave, and of its moments
        ("steady_turn", "f8"),
        ("residual", "f8"),  # sums over steps of the sizes of what does not balance
        ("residual_turn", "f8"),
        ("phantom", "f8"),  # sum of the sizes of displacements that no velocity explains
    ]
)  # fmt: skip


class Ground(NamedTuple):
    """The blocks, and what the ledger must know of all bodies; engine units.

    blocks: (n_blocks,) records of `BLOCK_STATE`. sides: (m, 2) outward normals of all blocks in their own frames, the
    struck one's rear face first. inertia: (n_moving, 4) inverse mass and moment, as they are and as the engine has
    them; 0 for what cannot move. wall_x, wall_y: where the bodies of the walls are. has_floor: whether there are joints
    to a floor. pull_x, pull_y: acceleration down the slope. front_reach: of the struck block ahead of its centre.
    lean_force: pressing harder than this is leaning. approach: normal speed below which nothing arrives, only presses.
    """

    blocks: NDArray[np.void]
    sides: FloatArray
    inertia: FloatArray
    wall_x: FloatArray
    wall_y: FloatArray
    has_floor: bool
    pull_x: float
    pull_y: float
    front_reach: float
    lean_force: float
    approach: float


_REST = 1e-9  # engine speed below which the floor's static friction holds; a held block has about 1e-17
# A held block lets go at this share of the speed that the floor can stop in a step. Where joints and contacts depend on
# one another, as in a row of blocks, the solver leaves more than `_REST` for some steps: each begins from the last one.
_LETS_GO = 0.02


@inlined
def order_blocks(host: Host, ground: Ground, dt: float) -> None:
    """The orders of this step for the blocks, and the caps of the floor's joints.

    Floor: force and torque about the centre of friction lie on the elliptic limit surface (F/F_max)^2 + (T/T_max)^2 = 1
    (Howe and Cutkosky, Int. J. Robotics Research 15 (1996) 557); by normality F : T c^-2 = v : w with c = T_max/F_max
    while it slides. A block that slides on through the step gets them as a force against its motion. The joints hold
    a block at rest and stop one that comes to rest. They would also stop a sliding one, but against a wall
    they can go on holding a lateral force that nothing calls for, which then is missing along the way.
    At rest the loads of the last step are brought back on to the ellipse if they left it. When the last pusher leaves a
    block that rests on level ground, the joints let go for a step: walls and floor would else go on pressing against
    each other through it.
    """
    motion, orders, blocks = host.motion, host.orders, ground.blocks
    cap, load = host.floor_cap, host.floor_load
    for k in range(len(blocks)):
        b = blocks[k]
        m = b.entity
        vx, vy, spin = motion[m, 3], motion[m, 4], motion[m, 5]
        c, s = math.cos(motion[m, 2]), math.sin(motion[m, 2])
        along, across = -b.drag_along * (c * vx + s * vy), -b.drag_across * (c * vy - s * vx)
        b.drag_x, b.drag_y, b.drag_turn = c * along - s * across, s * along + c * across, -b.yaw_drag * spin
        b.slope_x, b.slope_y = b.mass * ground.pull_x, b.mass * ground.pull_y
        if ground.has_floor:
            _order_floor(b, cap, load, k, vx, vy, spin, c, s, dt)
        b.was_pushed, b.is_pushed = b.is_pushed, 0
        orders[m, 0] = spin
        orders[m, 1] = b.drag_x + b.slope_x + b.floor_x
        orders[m, 2] = b.drag_y + b.slope_y + b.floor_y
        orders[m, 3] = b.drag_turn + b.floor_turn


@inlined
def _order_floor(
    b: Any,
    cap: FloatArray,
    load: FloatArray,
    k: int,
    vx: float,
    vy: float,
    spin: float,
    c: float,
    s: float,
    dt: float,
) -> None:
    """The floor under one block, see `order_blocks`."""
    fx, fy = c * b.footing_x - s * b.footing_y, s * b.footing_x + c * b.footing_y
    px, py = vx - spin * fy, vy + spin * fx
    arm = b.floor_arm if b.moment > 0.0 else 0.0
    swivel = arm * spin
    total = math.sqrt(px * px + py * py + swivel * swivel)
    b.floor_x = b.floor_y = b.floor_turn = 0.0
    kinetic = max(b.floor_kinetic - b.relief, 0.0)
    b.relief = 0.0
    stops = kinetic * dt / b.step_mass
    if b.moment > 0.0:
        stops = max(stops, kinetic * dt * arm * arm / b.step_moment)
    if total > max(stops, _REST):
        pull = kinetic / total
        b.floor_x, b.floor_y = -pull * px, -pull * py
        b.floor_turn = fx * b.floor_y - fy * b.floor_x - pull * arm * swivel
        b.is_held = 0
        cap[k, 0] = cap[k, 1] = 0.0
    elif total > (max(_LETS_GO * stops, _REST) if b.is_held == 1 else _REST):
        b.is_held = 0
        cap[k, 0] = kinetic * math.hypot(px, py) / total
        cap[k, 1] = kinetic * arm * abs(swivel) / total
    elif b.was_pushed == 1 and b.is_pushed == 0 and b.slope_x == 0.0 and b.slope_y == 0.0:
        cap[k, 0] = cap[k, 1] = 0.0
    else:
        b.is_held = 1
        force, torque = b.floor_static, b.floor_static * arm
        if force > 0.0:
            pull = load[k, 0]
            twist = load[k, 1] if arm > 0.0 else 0.0  # a joint on a body that cannot turn gives no number
            over = pull / (force * dt)
            if arm > 0.0:
                over = math.hypot(over, twist / (torque * dt))
            if over > 1.0 + _REST:
                b.is_held = 0
                force, torque = pull / (dt * over), twist / (dt * over)
        cap[k, 0], cap[k, 1] = force, torque


@inlined
def _size(x: float, y: float) -> float:
    """Length of a vector; quicker than the library's, which guards against numbers that a run never has."""
    return math.sqrt(x * x + y * y)


@inlined
def balance_blocks(host: Host, ground: Ground, dt: float) -> tuple[float, float, float]:
    """Close the books of the step that has just been made; returns the work of gravity, drag's loss and the floor's.

    The engine steps a block with the mass M' of `effective_mass` and the force -g v. The drag's impulse is
    -(M' - M) dv - g v dt, and what is then left of M dv after the contacts' impulses must come from the floor: zero
    without one, else its force while the block slides, plus an impulse as large as the floor's joints say by
    themselves. The same holds for turning, about the centre of mass.

    In the step in which a block at rest is hit, the joints act through the whole step and with static friction, and
    the contact, bent on its restitution, makes up for a part of that. An impact comes half-way through a step on
    average and meets kinetic friction: what was too much is let off in the next step.
    """
    before, motion, load = host.before, host.motion, host.floor_load
    blocks = ground.blocks
    gravity, drag, floor = 0.0, 0.0, 0.0
    for k in range(len(blocks)):
        b = blocks[k]
        m = b.entity
        vx, vy, spin = before[m, 3], before[m, 4], before[m, 5]
        dvx, dvy, dspin = motion[m, 3] - vx, motion[m, 4] - vy, motion[m, 5] - spin
        mx, my, mspin = vx + 0.5 * dvx, vy + 0.5 * dvy, spin + 0.5 * dspin
        extra = b.step_mass - b.mass
        drag_x, drag_y = b.drag_x * dt - extra * dvx, b.drag_y * dt - extra * dvy
        weight_x, weight_y = b.slope_x * dt, b.slope_y * dt
        left_x = b.mass * dvx - drag_x - weight_x - b.step_x
        left_y = b.mass * dvy - drag_y - weight_y - b.step_y
        joint_x, joint_y = left_x - b.floor_x * dt, left_y - b.floor_y * dt
        steady = _size(drag_x, drag_y) + _size(weight_x, weight_y) + _size(left_x, left_y)
        b.steady += steady
        joint = load[k, 0] if ground.has_floor else 0.0
        b.residual += abs(_size(joint_x, joint_y) - joint)
        drag_turn, left_turn, torque = 0.0, 0.0, 0.0
        if b.moment > 0.0:
            drag_turn = b.drag_turn * dt - (b.step_moment - b.moment) * dspin
            left_turn = b.moment * dspin - drag_turn - b.step_turn
            fx, fy = 0.0, 0.0
            if b.footing_x != 0.0 or b.footing_y != 0.0:
                c, s = math.cos(motion[m, 2]), math.sin(motion[m, 2])
                fx, fy = c * b.footing_x - s * b.footing_y, s * b.footing_x + c * b.footing_y
            twist = left_turn - b.floor_turn * dt - (fx * joint_y - fy * joint_x)
            torque = abs(twist)
            b.residual_turn += abs(abs(twist) - (load[k, 1] if ground.has_floor else 0.0))
            b.steady_turn += abs(drag_turn) + abs(left_turn) + (abs(fx) + abs(fy)) * steady
            drag -= drag_turn * mspin
            b.liquid_turn += drag_turn
        if b.passed_on > 0.0:
            if motion[m, 3] * motion[m, 3] + motion[m, 4] * motion[m, 4] > _REST * _REST:
                took = math.hypot(joint, torque / b.floor_arm) / dt
                b.relief = max((1.0 - b.passed_on) * took - 0.5 * b.floor_kinetic, 0.0)
            b.passed_on = 0.0
        if ground.has_floor:
            b.ground_x += left_x
            b.ground_y += left_y
            b.ground_turn += left_turn
            floor -= left_x * mx + left_y * my + left_turn * mspin
        b.liquid_x += drag_x
        b.liquid_y += drag_y
        b.weight_x += weight_x
        b.weight_y += weight_y
        gravity += weight_x * mx + weight_y * my
        drag -= drag_x * mx + drag_y * my
        b.step_x = b.step_y = b.step_turn = 0.0
        b.phantom += _size(motion[m, 0] - before[m, 0] - vx * dt, motion[m, 1] - before[m, 1] - vy * dt)
    return gravity, drag, floor
