"""Python routines, ranges and sights in a space of the user's own."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import pymunk
import pytest
from plugin_spaces import (
    CART,
    DT,
    add_disc,
    add_walls,
    new_space,
    same,
    tank_crew,
)

from swarmpush import Drive, attach
from swarmpush.dynamics.asking import Situation

# ---- Python routines ------------------------------------------------------------------------------------------------


L_SHAPE = ((0.0, 0.0), (3.0, 0.0), (3.0, 1.0), (1.0, 1.0), (1.0, 2.0), (0.0, 2.0))


def look_once(heading: float, place: tuple[float, float] = (0.5, 0.5), **options: Any) -> float:
    """The range that a pusher in the L-shaped room gauges."""
    space = new_space()
    add_walls(space, *L_SHAPE)
    pusher = add_disc(space, *place, heading)
    ranges: list[float] = []

    def decide(now: Situation) -> dict[str, Any]:
        if "looked" in now.notebook:
            ranges.append(now.range_m)
            return {"act": "halt"}
        now.notebook["looked"] = True
        return {"act": "gauge", "maximum": 5.0}

    prepare: Callable[[pymunk.Space, pymunk.Body], None] = options.pop("prepare", lambda space, body: None)
    prepare(space, pusher)
    attach(space, dt=DT, pushers=[pusher], routine=decide, drive=CART).step()
    return ranges[0]


def test_ranges_in_an_l_shaped_room() -> None:
    """A gauge gives the way until the disc touches a wall: into the long arm, into the short one, into a corner."""
    assert look_once(0.0) == pytest.approx(3.0 - 0.5 - 0.04)
    assert look_once(math.pi / 2) == pytest.approx(2.0 - 0.5 - 0.04)
    corner = pymunk.Vec2d(0.5, 0.5)  # the inner corner, seen from the pusher, which passes beside it or hits its tip
    assert look_once(math.pi / 4) == pytest.approx(corner.length - 0.04)


def test_a_range_ends_at_what_only_the_flank_would_touch() -> None:
    """A post and a pusher beside the line ahead are met by the disc's side; those beyond its side are not."""
    for aside, is_met in ((0.05, True), (-0.05, True), (0.091, False)):

        def post(space: pymunk.Space, body: pymunk.Body, aside: float = aside) -> None:
            space.add(pymunk.Circle(space.static_body, 0.05, (1.5, 0.5 + aside)))

        def neighbour(space: pymunk.Space, body: pymunk.Body, aside: float = aside) -> None:
            late = add_disc(space, 9.0, 9.0, radius=0.05)
            late.position = 1.5, 0.5 + aside  # put there after its shape was added

        free = 3.0 - 0.5 - 0.04
        expected = 1.0 - math.sqrt(0.09**2 - aside**2) if is_met else free
        assert look_once(0.0, prepare=post) == pytest.approx(expected)
        assert look_once(0.0, prepare=neighbour) == pytest.approx(expected)


def test_a_range_ahead_of_something_touched_is_none() -> None:
    """A pusher that touches a wall has no way into it, and all the way along it and off it."""
    at_wall = (0.039, 0.5)  # a millimetre too deep, as after a bump
    assert look_once(math.pi, at_wall) == 0.0
    assert look_once(math.pi - 0.5, at_wall) == 0.0
    space_beside = pymunk.Vec2d(1.0, 0.0).rotated(math.pi / 2 - 1e-9)
    assert look_once(space_beside.angle, at_wall) > 1.0
    assert look_once(0.0, at_wall) == pytest.approx(3.0 - 0.039 - 0.04)
    assert look_once(math.pi / 2, at_wall) == pytest.approx(2.0 - 0.5 - 0.04)


def test_a_range_passes_through_what_a_pusher_passes_through() -> None:
    """Sensors, the pusher's own further shapes and what its filter lets through are not in the way; a bar's nose is."""

    def clutter(space: pymunk.Space, body: pymunk.Body) -> None:
        sensor = pymunk.Circle(space.static_body, 0.1, (1.0, 0.5))
        sensor.sensor = True
        ghost = pymunk.Circle(space.static_body, 0.1, (1.5, 0.5))
        ghost.filter = pymunk.ShapeFilter(group=7)
        for shape in body.shapes:
            shape.filter = pymunk.ShapeFilter(group=7)
        space.add(sensor, ghost)

    assert look_once(0.0, prepare=clutter) == pytest.approx(3.0 - 0.5 - 0.04)

    drive = Drive(1.0, 0.3, turn_rate=3.0)
    space = new_space()
    add_walls(space, *L_SHAPE)
    bar = add_disc(space, 0.5, 0.5, 0.0)
    space.add(pymunk.Circle(bar, 0.04, (0.2, 0.0)))
    found: list[float] = []

    def decide(now: Situation) -> list[dict[str, Any]] | dict[str, Any]:
        found.append(now.range_m)
        return {"act": "halt"} if len(found) > 1 else {"act": "gauge", "maximum": 5.0}

    attach(space, dt=DT, pushers=[bar], routine=decide, drive=drive).step()
    assert found[1] == pytest.approx(3.0 - 0.5 - 0.24)


def test_a_python_routine_finds_the_other_arm() -> None:
    """A function that gauges and turns away from what is near goes round the corner of the room and stops there."""
    space = new_space()
    add_walls(space, *L_SHAPE)
    pusher = add_disc(space, 2.7, 0.4, math.pi)

    def decide(now: Situation) -> list[dict[str, Any]] | dict[str, Any]:
        n = now.notebook["n"] = now.notebook.get("n", 0) + 1
        return [
            {"act": "run"},
            [{"act": "turn", "angle": -math.pi / 2}, {"act": "gauge", "maximum": 5.0}],
            {"act": "advance", "distance": max(now.range_m - 0.3, 0.01)},
            {"act": "halt"},
        ][min(n, 4) - 1]

    crew = attach(space, dt=DT, pushers=[pusher], routine=decide, drive=CART)
    crew.step(16_000)
    assert crew.pushers["mode"].iloc[0] == "stop"
    assert pusher.position.x == pytest.approx(0.04, abs=0.1)
    assert pusher.position.y == pytest.approx(2.0 - 0.04 - 0.3, abs=0.07)  # it coasts for 60 ms


def test_an_exception_in_a_routine_may_be_mended() -> None:
    """An exception of the function comes out before the step; when the function works again, all goes on as if nothing
    had happened."""
    is_broken = True

    def decide(now: Situation) -> Any:
        if now.pusher == 1 and is_broken:
            raise KeyError("oh")
        return [{"act": "run"}, {"act": "turn", "angle": 2.0}]

    def sound(now: Situation) -> Any:
        return [{"act": "run"}, {"act": "turn", "angle": 2.0}]

    crew, _ = tank_crew(3, routine=decide)
    for _ in range(2):
        with pytest.raises(KeyError, match="oh"):
            crew.step()
    assert crew.time_s == 0.0
    is_broken = False
    crew.step(3000)
    expected, _ = tank_crew(3, routine=sound)
    expected.step(3000)
    assert same(crew, expected)
