"""The rig of a scenario built a second and a third time, in MuJoCo and in Box2D, with each engine's own means.

Both builders know the block, the pushers with their linear drive, the four walls of a corridor, the dry floor or the
fluid, and one routine: run, and after a bump and the latency mirror or halt. They are checks, not simulators: a dry
floor only carries straight pushes, and nothing is random.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import combinations, product
from typing import Any, NamedTuple

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import plate_moment
from scipy.optimize import brentq

from swarmpush.scenario import Pair, Scenario

FloatArray = NDArray[np.float64]


class Path(NamedTuple):
    """What moved where: t (n,) in s; block (n, 3) with x, y and yaw and its rates (n, 3); pushers (n, k, 2) x, y."""

    t: FloatArray
    block: FloatArray
    rates: FloatArray
    pushers: FloatArray


Engine = Callable[..., Path]


class Pilot:
    """One pusher's routine: it drives ahead, feels a bump, drives on for the latency, and then mirrors or halts."""

    def __init__(self, s: Scenario, heading: float) -> None:
        self.halts = any(act.act == "halt" for act in s.routine.stages[0].acts)
        self.force, self.latency, self.reacts_at = s.pushers.stall_force, s.pushers.latency, math.inf
        self.ahead = np.array([math.cos(heading), math.sin(heading)])
        self.normal, self.touched_at = -self.ahead, -9

    def push(self, now: float) -> FloatArray:
        """The drive in this step; the drag is up to the engine."""
        if now >= self.reacts_at - 1e-9:
            if self.halts:
                self.force = 0.0
            self.ahead = self.ahead - 2 * (self.ahead @ self.normal) * self.normal
            self.reacts_at = math.inf
        return self.force * self.ahead

    def feel(self, step: int, dt: float, normal: FloatArray) -> None:
        """A surface is touched in this step, its normal pointing to the pusher; what stays in touch is felt once."""
        is_new, self.touched_at = step > self.touched_at + 1, step
        if is_new and self.reacts_at == math.inf:
            self.reacts_at, self.normal = (step + 1) * dt + self.latency, normal


def pilots(s: Scenario) -> list[Pilot]:
    """The crew at its start."""
    assert s.start.placed is not None
    return [Pilot(s, start.heading) for start in s.start.placed]


WALL, BLOCK, PUSHER = "wall", "block", "pusher"


def pair_of(s: Scenario, one: str, other: str) -> Pair:
    """The values of the surfaces of two kinds of bodies."""
    for name in (f"{one}_{other}", f"{other}_{one}"):
        if hasattr(s.contacts, name):
            return getattr(s.contacts, name)
    raise AssertionError(f"{one} and {other} cannot meet")


def start_of_block(s: Scenario) -> tuple[float, float]:
    """The block's centre at the start."""
    return s.block.rear_at + s.block.length / 2, s.channel.width / 2 + s.block.offset


# ---- MuJoCo ---------------------------------------------------------------------------------------------------------

RINGING = 0.05  # the contact spring's frequency times the step: an impact takes some sixty steps
DAMPED = 0.4  # a damper's rate times the step where nothing shall rebound, or slide
GRIP = 2.0  # the rate at which friction stops a slip, over the spring's frequency: it grips well within an impact


def spring(restitution: float, dt: float) -> tuple[float, float]:
    """Stiffness and damping, both per mass, of a contact that rebounds with this restitution.

    A damped spring that never pulls lets go with e = exp(-2 z acos(z)/sqrt(1 - z^2)), z its damping ratio (Schwager and
    Poeschel, "Coefficient of restitution and linear-dashpot model revisited", Granular Matter 9 (2007) 465; their
    angle is pi - 2 asin(z), here written as 2 acos(z)). For e = 0 it is a damper that hardly springs.
    """
    if restitution == 0.0:
        return (DAMPED / dt / 20.0) ** 2, DAMPED / dt
    rate, ratio = RINGING / dt, 0.0
    if restitution < 1.0:
        ratio = brentq(lambda z: 2 * z * math.acos(z) / math.sqrt(1 - z * z) + math.log(restitution), 0.0, 0.9)
    return rate**2, 2 * ratio * rate


def mujoco_model(s: Scenario, dt: float) -> str:
    """The rig as a MuJoCo model: sliding joints along x and y, a hinge for the yaw, pairs for what may touch."""
    p, b, floor, fluid = s.pushers, s.block, s.floor, s.fluid
    x, y = start_of_block(s)
    loss = floor.kinetic_friction * b.mass * floor.gravity if floor else 0.0
    rubs = f'frictionloss="{loss}" solreffriction="0 {-DAMPED / dt}" solimpfriction="0.9999 0.9999 0.001"'
    drag, yaw_drag = (fluid.block_drag, fluid.block_yaw_drag) if fluid else (0.0, 0.0)
    yaw = "" if b.yaw == "held" else f'<joint type="hinge" axis="0 0 1" damping="{yaw_drag}"/>'

    def touch(one: str, other: str) -> str:
        pair = pair_of(s, one.split()[0], other.split()[0])
        k, c = spring(pair.restitution, dt)
        return (
            f'<pair geom1="{one}" geom2="{other}" condim="{3 if pair.friction else 1}" '
            f'friction="{pair.friction} {pair.friction}" solref="{-k} {-c}" solreffriction="0 {-GRIP * RINGING / dt}" '
            'solimp="0.9999 0.9999 0.001"/>'
        )

    walls = {
        "wall 1": 'pos="0 0 0" zaxis="1 0 0"',
        "wall 2": f'pos="{s.channel.length} 0 0" zaxis="-1 0 0"',
        "wall 3": 'pos="0 0 0" zaxis="0 1 0"',
        "wall 4": f'pos="0 {s.channel.width} 0" zaxis="0 -1 0"',
    }
    alone = 'contype="0" conaffinity="0"'
    crew = ""
    for i, start in enumerate(s.start.placed or ()):
        crew += f"""
          <body pos="{start.x} {start.y} 0">
            <joint type="slide" axis="1 0 0" damping="{p.drag}"/><joint type="slide" axis="0 1 0" damping="{p.drag}"/>
            <geom name="pusher {i}" type="sphere" size="{p.radius}" mass="{p.mass}" {alone}/>
          </body>"""
    movers = ["block", *(f"pusher {i}" for i in range(p.count))]
    pairs = "".join(touch(*two) for two in [*product(walls, movers), *combinations(movers, 2)])
    return f"""
      <mujoco>
        <option timestep="{dt}" gravity="0 0 0" integrator="implicitfast" cone="elliptic" tolerance="1e-12"/>
        <worldbody>
          {"".join(f'<geom name="{name}" type="plane" size="1 1 1" {where} {alone}/>' for name, where in walls.items())}
          <body pos="{x} {y} 0">
            <inertial pos="0 0 0" mass="{b.mass}" diaginertia="{plate_moment(s)} {plate_moment(s)} {plate_moment(s)}"/>
            <joint type="slide" axis="1 0 0" damping="{drag}" {rubs}/>
            <joint type="slide" axis="0 1 0" damping="{drag}" {rubs}/>
            {yaw}
            <geom name="block" type="box" size="{b.length / 2} {b.width / 2} {p.radius}" {alone}/>
          </body>
          {crew}
        </worldbody>
        <contact>{pairs}</contact>
      </mujoco>"""


def play_mujoco(s: Scenario, end: float, dt: float) -> Path:
    """The rig in MuJoCo for the time `end`, in steps of `dt`."""
    mujoco = pytest.importorskip("mujoco")
    model = mujoco.MjModel.from_xml_string(mujoco_model(s, dt))
    data = mujoco.MjData(model)
    crew = pilots(s)
    k, n = len(crew), round(end / dt)
    first = model.nv - 2 * k  # the block's coordinates come first
    of_geom = {model.geom(f"pusher {i}").id: i for i in range(k)}
    at, going, push = np.zeros((n, model.nv)), np.zeros((n, model.nv)), data.qfrc_applied[first:]
    for step in range(n):
        for i, pilot in enumerate(crew):
            push[2 * i : 2 * i + 2] = pilot.push(step * dt)
        mujoco.mj_step(model, data)
        at[step], going[step] = data.qpos, data.qvel
        for j in range(data.ncon):
            contact = data.contact[j]
            for geom, sense in zip(contact.geom, (-1.0, 1.0), strict=True):  # the normal points to the second
                if geom in of_geom and contact.dist < 0.0:
                    crew[of_geom[geom]].feel(step, dt, sense * contact.frame[:2])
    home = np.array([*start_of_block(s), 0.0])
    block, rates = np.zeros((n, 3)), np.zeros((n, 3))
    block[:, :first], rates[:, :first] = at[:, :first], going[:, :first]
    starts = np.array([[start.x, start.y] for start in s.start.placed or ()])
    return Path(dt * np.arange(1, n + 1), home + block, rates, starts + at[:, first:].reshape(n, k, 2))


# ---- Box2D ----------------------------------------------------------------------------------------------------------

UNITS = 100.0  # per m. Box2D's rebounds need a closing speed of 1 unit/s, and its contacts keep 0.005 units of overlap
SKIN = 0.01  # units: every polygon of Box2D's is that much thicker than its corners say


class Box2DRig(NamedTuple):
    """The world and its bodies; the listener is kept because the world itself only points to it."""

    world: Any
    block: Any
    pushers: list[Any]
    listener: Any


def box2d_rig(s: Scenario, home: FloatArray) -> Box2DRig:
    """The rig as a Box2D world, in hundredths of a metre from `home`, kg and s."""
    # Box2D's import warns of its wrapper's types, and crashes if that is an error; importorskip ignores warnings
    b2 = pytest.importorskip("Box2D", reason="there is no wheel of Box2D for this Python and platform")
    p, b, u = s.pushers, s.block, UNITS
    world = b2.b2World(gravity=(0, 0), doSleep=False)
    world.continuousPhysics = False  # it would stop a fast body at a wall until the next step

    class Pairs(b2.b2ContactListener):
        """Gives each contact the values of its pair; Box2D alone would mix those of the two bodies."""

        def PreSolve(self, contact: Any, _: Any) -> None:
            pair = pair_of(s, contact.fixtureA.body.userData, contact.fixtureB.body.userData)
            contact.restitution, contact.friction = pair.restitution, pair.friction

    world.contactListener = listener = Pairs()
    walls = world.CreateStaticBody(userData=WALL)
    (x0, y0), (x1, y1) = -u * home, u * (np.array([s.channel.length, s.channel.width]) - home)
    thick = 10.0
    for left, right, low, high in (
        (x0 - thick, x0, y0, y1),
        (x1, x1 + thick, y0, y1),
        (x0, x1, y0 - thick, y0),
        (x0, x1, y1, y1 + thick),
    ):
        half, middle = ((right - left) / 2 - SKIN, (high - low) / 2 - SKIN), ((left + right) / 2, (low + high) / 2)
        walls.CreatePolygonFixture(box=(*half, middle, 0.0))
    block = world.CreateDynamicBody(fixedRotation=b.yaw == "held", userData=BLOCK)
    block.CreatePolygonFixture(box=(u * b.length / 2 - SKIN, u * b.width / 2 - SKIN), density=1.0)
    block.massData = b2.b2MassData(mass=b.mass, I=plate_moment(s) * u**2)
    if s.floor:
        holds = s.floor.kinetic_friction * b.mass * s.floor.gravity * u
        middles = {"localAnchorA": (0, 0), "localAnchorB": (0, 0)}
        world.CreateFrictionJoint(bodyA=walls, bodyB=block, maxForce=holds, maxTorque=0.0, **middles)
    pushers = []
    for start in s.start.placed or ():
        x, y = u * (np.array([start.x, start.y]) - home)
        pusher = world.CreateDynamicBody(position=(x, y), fixedRotation=True, userData=PUSHER)
        pusher.CreateCircleFixture(radius=u * p.radius, density=1.0)
        pusher.massData = b2.b2MassData(mass=p.mass, I=1.0)
        pushers.append(pusher)
    return Box2DRig(world, block, pushers, listener)


def play_box2d(s: Scenario, end: float, dt: float) -> Path:
    """The rig in Box2D for the time `end`, in steps of `dt`.

    Box2D counts in single precision, so the origin is put where the block starts.
    """
    home, u, drag, fluid = np.array(start_of_block(s)), UNITS, s.pushers.drag, s.fluid
    rig, crew = box2d_rig(s, home), pilots(s)
    block, n = rig.block, round(end / dt)
    at, going, others = np.zeros((n, 3)), np.zeros((n, 3)), np.zeros((n, len(crew), 2))
    for step in range(n):
        for body, pilot in zip(rig.pushers, crew, strict=True):
            (fx, fy), (vx, vy) = pilot.push(step * dt), body.linearVelocity
            body.ApplyForceToCenter((float(u * fx - drag * vx), float(u * fy - drag * vy)), True)
        if fluid:
            vx, vy = block.linearVelocity
            block.ApplyForceToCenter((-fluid.block_drag * vx, -fluid.block_drag * vy), True)
            block.ApplyTorque(-fluid.block_yaw_drag * u**2 * block.angularVelocity, True)
        rig.world.Step(dt, 20, 3)  # rounds of its solver for velocities and for overlaps, more than it advises
        at[step] = (*block.position, block.angle)
        going[step] = (*block.linearVelocity, block.angularVelocity)
        for i, body in enumerate(rig.pushers):
            others[step, i] = body.position
            for edge in body.contacts:
                contact = edge.contact
                pressed, where = contact.manifold, contact.worldManifold  # named, as what is in them dies with them
                if contact.touching and any(point.normalImpulse > 0.0 for point in pressed.points):
                    normal = np.array([*where.normal])  # from the first body to the second
                    crew[i].feel(step, dt, normal if contact.fixtureB.body == body else -normal)
    at[:, :2] = home + at[:, :2] / u
    going[:, :2] /= u
    return Path(dt * np.arange(1, n + 1), at, going, home + others / u)
