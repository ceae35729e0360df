"""A crew in a pymunk space of one's own: three carts nudge a crate about a round yard.

An invented world: no real yard, cart or crate is described. Seen from above, so there is no gravity; what slows
the crate is the damping that its own velocity function gives it.
Expected: after a minute the carts have struck the crate some dozen times, and what they and the fence gave it, with
what the ground took, adds up to its momentum.

    python scenarios/own_space.py
"""

from __future__ import annotations

import math
from itertools import pairwise
from typing import Any

import pymunk

import swarmpush

YARD = 2.0  # radius, m
CART = 0.12  # radius, m
DT = 2e-3  # s: a cart runs 0.8 mm in it, less than a hundredth of its radius
SECONDS = 60.0
SLIDE = 0.5  # s: time in which the ground takes 63 % of the crate's speed


def make_yard() -> tuple[pymunk.Space, list[pymunk.Body], pymunk.Body]:
    """The space as anyone would build it in pymunk, here in metres, seconds and kilograms."""
    space = pymunk.Space()
    space.collision_slop = 1.5e-3  # m: pymunk's own 0.1 is meant for pixels
    corners = [pymunk.Vec2d(YARD, 0.0).rotated(2 * math.pi * k / 60) for k in range(61)]
    for start, end in pairwise(corners):
        space.add(surface(pymunk.Segment(space.static_body, start, end, 0.02), 0.5))
    carts = []
    for k in range(3):
        cart = pymunk.Body(2.0, pymunk.moment_for_circle(2.0, 0.0, CART))
        cart.position = pymunk.Vec2d(1.2, 0.0).rotated_degrees(120 * k)
        cart.angle = math.radians(120 * k + 150)  # the way it looks: past the yard's centre
        space.add(cart, surface(pymunk.Circle(cart, CART), 0.5))
        carts.append(cart)
    size = (0.8, 0.5)
    crate = pymunk.Body(6.0, pymunk.moment_for_box(6.0, size))
    crate.velocity_func = slide
    space.add(crate, surface(pymunk.Poly.create_box(crate, size), 0.5))
    return space, carts, crate


def surface(shape: pymunk.Shape, elasticity: float) -> pymunk.Shape:
    """Give a shape its surface; pymunk multiplies those of the two shapes that meet."""
    shape.elasticity, shape.friction = elasticity, 0.5
    return shape


def slide(body: pymunk.Body, gravity: tuple[float, float], damping: float, dt: float) -> None:
    """The ground under the crate."""
    pymunk.Body.update_velocity(body, gravity, damping * math.exp(-dt / SLIDE), dt)


def wary(now: Any) -> list[dict[str, Any]] | dict[str, Any]:
    """What a cart does, asked when a bump has been felt or its last acts are done.

    From the crate it backs off and comes again; from all else it turns away to the left, by a little more each time.
    """
    if now.contact == "none":  # at the start, and after a leg in the open
        return {"act": "run"}
    if now.contact == "block":
        return [{"act": "turn", "angle": "170 deg"}, {"act": "advance", "distance": "0.6 m"},
                {"act": "turn", "angle": "-165 deg"}, {"act": "run"}]  # fmt: skip
    n = now.notebook["bumps"] = now.notebook.get("bumps", 0) + 1
    return [{"act": "turn", "angle": math.radians(115 + 7 * (n % 5))}, {"act": "run"}]


def main() -> None:
    """Run the yard for a minute and sum up what happened."""
    space, carts, crate = make_yard()
    drive = swarmpush.Drive(stall_force=8.0, free_speed=0.4, turn_rate=3.0, bump_threshold=0.05, latency=0.05)
    with swarmpush.attach(
        space, dt=DT, pushers=carts, routine=wary, drive=drive, watch={"crate": crate}, seed=1
    ) as crew:
        crew.step(round(SECONDS / DT))
    visits, books = crew.visits, crew.books.iloc[0]

    strikes = visits[visits["surface"] == "crate"]
    print(f"Three carts in a round yard, {crew.time_s:.0f} s (an invented world)")
    print(f"The crate went {crate.position.length:.2f} m and turned by {math.degrees(crate.angle):.0f} deg.")
    print(f"{len(visits)} visits, {len(strikes)} of them to the crate:")
    for cart, its in strikes.groupby("pusher"):
        print(f"  cart {cart}: {len(its):2} visits, impact {its['impact_Ns'].sum():5.2f} N s, "
              f"lean {its['lean_Ns'].sum():5.2f} N s")  # fmt: skip
    print("Momentum of the crate, N s        x        y")
    for part in ("pushers", "walls", "else"):
        print(f"  from {part:<20} {books[f'{part}_x_Ns']:8.3f} {books[f'{part}_y_Ns']:8.3f}")
    momentum = crate.mass * crate.velocity
    print(f"  now                       {momentum.x:8.3f} {momentum.y:8.3f}")


if __name__ == "__main__":
    main()
