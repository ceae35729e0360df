"""Spaces, bodies and crews for the tests of crews in spaces of their own."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pymunk

from swarmpush import Drive, attach
from swarmpush.dynamics.attached import Crew

PROJECT = Path(__file__).resolve().parents[2]
DT = 1e-3
ROUNDING = 1e-9  # relative to the sum of the sizes; sums of some thousand steps keep twelve digits
LEFT = [{"name": "only", "acts": [{"act": "run"}, {"act": "turn", "angle": 2.0}]}]
HALT = [{"name": "only", "acts": [{"act": "run"}, {"act": "halt"}]}]
CART = Drive(1.0, 0.3)
PARTS = ("pushers", "bodies", "walls", "else")


def new_space(slop: float = 1e-3) -> pymunk.Space:
    space = pymunk.Space()
    space.collision_slop = slop
    return space


def add_walls(space: pymunk.Space, *corners: tuple[float, float], elasticity: float = 0.5) -> None:
    """A closed line of walls on the space's static body."""
    for start, end in zip(corners, (*corners[1:], corners[0]), strict=True):
        wall = pymunk.Segment(space.static_body, start, end, 0.0)
        wall.elasticity, wall.friction = elasticity, 0.3
        space.add(wall)


def add_round_tank(space: pymunk.Space, radius: float = 1.0, unit: float = 1.0) -> None:
    angles = np.linspace(0.0, 2 * math.pi, 48, endpoint=False)
    add_walls(space, *((radius * unit * math.cos(a), radius * unit * math.sin(a)) for a in angles.tolist()))


def add_disc(
    space: pymunk.Space, x: float, y: float, heading: float = 0.0, radius: float = 0.04, mass: float = 0.2
) -> pymunk.Body:
    body = pymunk.Body(mass, 0.5 * mass * radius**2)
    body.position, body.angle = (x, y), heading
    shape = pymunk.Circle(body, radius)
    shape.elasticity, shape.friction = 0.5, 0.3
    space.add(body, shape)
    return body


def add_box(space: pymunk.Space, x: float, y: float, size: tuple[float, float], mass: float = 1.0) -> pymunk.Body:
    body = pymunk.Body(mass, pymunk.moment_for_box(mass, size))
    body.position = x, y
    shape = pymunk.Poly.create_box(body, size)
    shape.elasticity, shape.friction = 0.5, 0.3
    space.add(body, shape)
    return body


def add_ring(space: pymunk.Space, n: int, unit: float = 1.0, mass: float = 0.2) -> list[pymunk.Body]:
    """Discs on a circle, which look about."""
    places = [
        (0.6 * unit * math.cos(2 * math.pi * k / n), 0.6 * unit * math.sin(2 * math.pi * k / n)) for k in range(n)
    ]
    return [add_disc(space, x, y, 1.7 * k, 0.04 * unit, mass) for k, (x, y) in enumerate(places)]


def tank_crew(n: int = 6, *, seed: int = 1, **options: Any) -> tuple[Crew, pymunk.Body]:
    """Discs and a crate in a round tank."""
    space = new_space()
    add_round_tank(space)
    pushers = add_ring(space, n)
    crate = add_box(space, 0.0, 0.0, (0.3, 0.2))
    options = {"routine": LEFT, "drive": CART} | options
    return attach(space, dt=DT, pushers=pushers, watch={"crate": crate}, seed=seed, **options), crate


def totals(crew: Crew, name: str) -> np.ndarray[Any, Any]:
    """Sum of a watched body's books in x, y and turning."""
    row = crew.books.set_index("name").loc[name]
    return np.array([sum(row[f"{part}_{c}"] for part in PARTS) for c in ("x_Ns", "y_Ns", "turn_Nms")], dtype=float)


def momentum(body: pymunk.Body) -> list[float]:
    spin = body.moment * body.angular_velocity if math.isfinite(body.moment) else 0.0
    return [*(body.mass * body.velocity), spin]


def same(one: Crew, other: Crew) -> bool:
    """Whether all tables are equal, bit by bit."""
    tables = ((getattr(one, name), getattr(other, name)) for name in ("visits", "books", "pushers"))
    return all(a.equals(b) for a, b in tables)


def busy_space(seed: int = 1) -> tuple[pymunk.Space, dict[str, pymunk.Body]]:
    """Gravity, a bin, a kinematic paddle, bodies of several shapes, a sensor, a motor, and a heap of balls."""
    space = new_space()
    space.gravity = 0.0, -9.81
    add_walls(space, (-1.0, 0.0), (1.0, 0.0), (1.0, 3.0), (-1.0, 3.0))
    ledge = pymunk.Body(body_type=pymunk.Body.STATIC)
    ledge.position, ledge.angle = (0.6, 0.8), 0.3
    space.add(ledge, pymunk.Segment(ledge, (-0.3, 0.0), (0.3, 0.0), 0.02))
    paddle = pymunk.Body(body_type=pymunk.Body.KINEMATIC)
    paddle.position, paddle.velocity, paddle.angular_velocity = (-0.9, 0.3), (0.2, 0.0), 0.4
    space.add(paddle, pymunk.Segment(paddle, (0.0, -0.25), (0.0, 0.25), 0.03))
    tee = pymunk.Body(1.0, 0.05)
    tee.position, tee.center_of_gravity = (0.0, 1.0), (0.02, 0.03)
    space.add(tee, pymunk.Poly.create_box(tee, (0.5, 0.1)), pymunk.Segment(tee, (0.0, 0.0), (0.0, 0.3), 0.03))
    sensor = pymunk.Circle(tee, 0.5)
    sensor.sensor = True
    space.add(sensor)
    wheel = add_disc(space, 0.4, 0.3, radius=0.1, mass=0.5)
    space.add(pymunk.SimpleMotor(space.static_body, wheel, 3.0))
    rng = np.random.default_rng(seed)
    for k in range(40):
        add_disc(space, float(rng.uniform(-0.8, 0.8)), 1.4 + 0.03 * k, radius=0.05, mass=0.1)
    for shape in space.shapes:
        shape.friction, shape.elasticity = 0.4, 0.3
    return space, {"tee": tee, "wheel": wheel}
