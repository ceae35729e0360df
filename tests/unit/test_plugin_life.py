"""What may happen to a space with a crew in it: bodies that come and go, threads, attaching and detaching."""

from __future__ import annotations

import math
import subprocess
import sys
from typing import Any

import numpy as np
import pymunk
import pytest
from plugin_spaces import (
    CART,
    DT,
    HALT,
    LEFT,
    PROJECT,
    ROUNDING,
    add_box,
    add_disc,
    add_ring,
    add_round_tank,
    add_walls,
    busy_space,
    momentum,
    new_space,
    same,
    tank_crew,
    totals,
)

from swarmpush import Drive, Units, attach
from swarmpush.dynamics.attached import Crew
from swarmpush.dynamics.host import list_pairs
from swarmpush.dynamics.ledger import _sort_pairs
from swarmpush.problems import RoutineError
from swarmpush.scenario import Errors

# ---- what else may happen in a space --------------------------------------------------------------------------------


def test_callbacks_may_take_bodies_out_and_put_bodies_in() -> None:
    """Callbacks may remove and add bodies while the crew is attached: the new ones are felt, and contacts logged."""
    space = new_space()
    add_round_tank(space)
    (pusher,) = add_ring(space, 1)
    pusher.position, pusher.angle = (-0.5, 0.0), 0.0
    next(iter(pusher.shapes)).collision_type = 1
    first = add_box(space, 0.0, 0.0, (0.1, 0.1))
    next(iter(first.shapes)).collision_type = 2
    states: list[str] = []

    def swap(space: pymunk.Space, key: object) -> None:
        space.remove(first, *first.shapes)
        add_box(space, 0.5, 0.0, (0.1, 0.1), mass=50.0)

    def touch(arbiter: pymunk.Arbiter, space: pymunk.Space, data: Any) -> None:
        states.append("begin")
        space.add_post_step_callback(swap, "swap")

    space.on_collision(1, 2, begin=touch)
    crew = attach(space, dt=DT, pushers=[pusher], routine=HALT, drive=CART, watch={"first": first})
    crew.step(6000)
    assert states == ["begin"]
    # the engine forgets a contact with the shapes in it, before it can be logged; its impulse shows in the books
    assert set(crew.visits["surface"]) == {"body 1"}
    assert list(crew.pushers["mode"]) == ["stop"]
    assert crew.books["else_x_Ns"].iloc[0] == pytest.approx(first.mass * first.velocity.x)
    assert first.velocity.x > 0.0


def test_a_body_that_comes_later_is_felt() -> None:
    """A pusher stops at a box, at a static post and at a kinematic wall that were not there when it was attached."""
    for kind in (pymunk.Body.DYNAMIC, pymunk.Body.STATIC, pymunk.Body.KINEMATIC):
        space = new_space()
        pusher = add_disc(space, 0.0, 0.0)
        crew = attach(space, dt=DT, pushers=[pusher], routine=HALT, drive=CART)
        crew.step(10)
        body = pymunk.Body(50.0, 1.0, body_type=kind)
        body.position = 0.5, 0.0
        space.add(body, pymunk.Poly.create_box(body, (0.1, 0.1)))
        crew.step(3000)
        assert list(crew.pushers["mode"]) == ["stop"]
        assert set(crew.visits["surface"]) == {"wall" if kind == pymunk.Body.STATIC else "body 1"}


def test_a_pusher_that_is_taken_out_is_left_alone() -> None:
    """A removed pusher gets no forces, can come back, and gets its mass back although it is not in the space."""
    space = new_space()
    add_round_tank(space)
    pushers = add_ring(space, 2)
    crew = attach(space, dt=DT, pushers=pushers, routine=LEFT, drive=CART)
    crew.step(100)
    shapes = list(pushers[0].shapes)
    space.remove(pushers[0], *shapes)
    crew.step(500)
    assert pushers[0].force == (0.0, 0.0)
    space.add(pushers[0], *shapes)
    crew.step(100)
    assert pushers[0].velocity.length <= 0.3 * (1 + 1e-9)
    space.remove(pushers[0], *shapes)
    crew.detach()
    assert pushers[0].mass == 0.2


def test_too_many_new_bodies_are_refused() -> None:
    """There is room for so many new bodies, and one sentence says so when it is full."""
    space = new_space()
    crew = attach(space, dt=DT)
    for k in range(200):
        add_disc(space, 3.0 * k, 0.0)
    with pytest.raises(RuntimeError, match="bodies were added"):
        crew.step()


def test_threads_sleepers_damping_and_own_functions() -> None:
    """A threaded space, bodies that sleep, damping and a user's own velocity and position functions do not disturb."""
    space = pymunk.Space(threaded=True)
    space.threads = 2
    space.collision_slop = 1e-3
    space.sleep_time_threshold, space.damping = 0.05, 0.9
    add_round_tank(space)
    pushers = add_ring(space, 3)
    pushers[1].angle = -math.pi / 3  # towards the crate
    crate = add_box(space, 0.0, 0.0, (0.3, 0.2))
    calls = []

    def velocity(body: pymunk.Body, gravity: tuple[float, float], damping: float, dt: float) -> None:
        calls.append("velocity")
        pymunk.Body.update_velocity(body, gravity, damping, dt)

    def position(body: pymunk.Body, dt: float) -> None:
        calls.append("position")
        pymunk.Body.update_position(body, dt)

    pushers[0].velocity_func, pushers[0].position_func = velocity, position
    for _ in range(200):
        space.step(DT)
    assert crate.is_sleeping
    crew = attach(space, dt=DT, pushers=pushers, routine=LEFT, drive=CART, watch={"crate": crate})
    calls.clear()
    crew.step(5000)
    assert calls.count("velocity") == calls.count("position") == 5000
    assert not crate.is_sleeping
    assert "crate" in set(crew.visits["surface"])
    assert totals(crew, "crate") == pytest.approx(momentum(crate), abs=ROUNDING)


def test_contacts_that_a_callback_calls_off_are_none() -> None:
    """What a pre_solve callback lets pass is neither logged nor felt, and what it changes in a contact is what acts."""
    space = new_space()
    pusher = add_disc(space, 0.0, 0.0)
    ghost, post = (pymunk.Circle(space.static_body, 0.1, (x, 0.0)) for x in (0.5, 1.2))
    ghost.collision_type, post.collision_type = 1, 2
    space.add(ghost, post)

    def let_pass(arbiter: pymunk.Arbiter, space: pymunk.Space, data: Any) -> None:
        arbiter.process_collision = False

    def bounce(arbiter: pymunk.Arbiter, space: pymunk.Space, data: Any) -> None:
        arbiter.restitution = 1.0

    space.on_collision(1, None, pre_solve=let_pass)
    space.on_collision(2, None, pre_solve=bounce)
    crew = attach(space, dt=DT, pushers=[pusher], routine=HALT, drive=CART)
    crew.step(6000)
    visit = crew.visits.iloc[0]
    assert visit["x_m"] == pytest.approx(1.2 - 0.14, abs=1e-3)
    assert visit["impact_Ns"] == pytest.approx(2 * 0.2 * 0.3, rel=1e-2)


def test_attaching_in_the_middle_of_a_contact() -> None:
    """A crew attached to bodies that touch, and to a space in motion, logs from there on and keeps its books."""
    space, watched = busy_space()
    for _ in range(1000):
        space.step(DT)
    start = {name: np.array(momentum(body)) for name, body in watched.items()}
    crew = attach(space, dt=DT, watch=watched)
    crew.step(500)
    for name, body in watched.items():
        assert totals(crew, name) == pytest.approx(np.array(momentum(body)) - start[name], abs=1e-9)
    assert crew.visits["t_on_s"].min() == 0.0


# ---- the same again -------------------------------------------------------------------------------------------------


def compound_crew(seed: int) -> Crew:
    """Pushers of several shapes, which touch one partner in several places at once."""
    space = new_space()
    add_walls(space, (-0.6, -0.5), (0.6, -0.5), (0.6, 0.5), (-0.6, 0.5))
    pushers = []
    for k in range(6):
        body = pymunk.Body(0.2, 1e-4)
        body.position, body.angle = (-0.4 + 0.16 * k, 0.1 * (-1) ** k), 1.3 * k
        space.add(body, *(pymunk.Circle(body, 0.02, (x, y)) for x in (-0.03, 0.03) for y in (-0.03, 0.0, 0.03)))
        pushers.append(body)
    crate = add_box(space, 0.0, 0.35, (0.5, 0.1))
    drive = Drive(1.0, 0.3, turn_rate=6.0, heading="free", turn_drag=1e-3)
    errors = Errors(heading_diffusion=0.1, turn_sd=0.1)
    return attach(
        space, dt=DT, pushers=pushers, routine=LEFT, drive=drive, watch={"crate": crate}, errors=errors, seed=seed
    )


def test_same_seed_same_tables() -> None:
    """The same space and seed give the same tables bit by bit, whatever addresses bodies have; another seed others."""
    first, ballast, second, other = compound_crew(3), busy_space(), compound_crew(3), compound_crew(4)
    for crew in (first, second, other):
        crew.step(4000)
    assert len(ballast[0].bodies) > 10
    assert len(first.visits) > 20
    assert same(first, second)
    assert not same(first, other)


def test_pairs_of_one_partner_are_entered_in_an_order_of_their_own() -> None:
    """A comb stands on its five teeth: however the engine lists these pairs, they are summed up in the same order."""
    space = new_space()
    space.gravity = 0.0, -9.81
    add_walls(space, (-1.0, 0.0), (1.0, 0.0), (1.0, 1.0), (-1.0, 1.0))
    comb = pymunk.Body(1.0, math.inf)
    comb.position = 0.0, 0.02
    space.add(comb, *(pymunk.Circle(comb, 0.02, (0.1 * k, 0.0)) for k in (2, 0, 4, 1, 3)))
    crew = attach(space, dt=DT)
    crew.step(100)
    host, ledger = crew._host, crew._task.ledger
    n, orders = int(list_pairs(host)), []
    for _ in range(2):
        _sort_pairs(host, ledger, 0, n)
        at, listed = int(ledger.first[0]), []
        while at >= 0:
            listed.append(int(host.pairs[2 + at]))
            at = int(ledger.following[at])
        orders.append(listed)
        ledger.first[:] = -1
        host.pairs[2 : 2 + n] = host.pairs[2 : 2 + n][::-1].copy()
    assert len(orders[0]) == n == 5
    assert orders[0] == orders[1]


# ---- attaching and detaching ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("heading", ["held", "free"])
def test_detaching_leaves_the_space_as_it_was(heading: Any) -> None:
    """Masses, moments, settings: bit for bit, also when something went wrong on the way."""
    space = new_space()
    add_round_tank(space)
    pushers = add_ring(space, 5)
    pushers[0].mass, pushers[1].moment = 0.1 + 0.2, math.inf if heading == "held" else 1e-4 / 3
    space.collision_persistence, space.sleep_time_threshold = 7, 0.3
    before = [(b.mass, b.moment) for b in pushers]
    drive = Drive(1.0, 0.3, heading=heading, turn_drag=1e-3, turn_rate=5.0)

    def run() -> None:
        with attach(space, dt=DT, pushers=pushers, routine=LEFT, drive=drive) as crew:
            assert (space.collision_persistence, space.sleep_time_threshold) == (1, math.inf)
            crew.step(3000)
            assert not crew.visits.empty
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        run()
    assert [(b.mass, b.moment) for b in pushers] == before
    assert (space.collision_persistence, space.sleep_time_threshold) == (7, 0.3)


def test_one_crew_at_a_time() -> None:
    """A space has one crew: a second is refused, after `detach` it is not; a crew that has gone does not step."""
    crew, crate = tank_crew(2)
    with pytest.raises(RuntimeError, match="has a crew already"):
        attach(crew.space, dt=DT, watch={"crate": crate})
    crew.detach()
    crew.detach()
    with pytest.raises(RuntimeError, match="has been detached"):
        crew.step()
    attach(crew.space, dt=DT, watch={"crate": crate}).step(10)


def test_a_refusal_changes_nothing() -> None:
    """A routine that cannot be carried out leaves the space free, and the bodies as they are."""
    space = new_space()
    pusher = add_disc(space, 0.0, 0.0)
    before = pusher.mass, pusher.moment, space.collision_persistence
    for _ in range(2):
        with pytest.raises(RoutineError, match=r"^routine\.stages\.0\.acts"):
            attach(space, dt=DT, pushers=[pusher], routine=[{"name": "a", "acts": [{"act": "fly"}]}], drive=CART)
    assert (pusher.mass, pusher.moment, space.collision_persistence) == before


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"dt": 0.0}, "dt = 0.0; it must be more than 0"),
        ({"dt": math.nan}, "dt = nan"),
        ({"drive": None}, "pushers need a routine and a drive"),
        ({"routine": None}, "pushers need a routine and a drive"),
        ({"pushers": ()}, "no pusher to carry it out"),
        ({"pushers": "twice"}, "listed twice"),
        ({"pushers": "elsewhere"}, "not in the space; add it first"),
        ({"pushers": "kinematic"}, "not dynamic"),
        ({"pushers": "box"}, "no disc about its centre needs a finite turn_rate"),
        ({"pushers": "bare"}, "no shape that could touch"),
        ({"watch": "pusher"}, "cannot be watched as well"),
        ({"watch": "twins"}, "under two names"),
        ({"watch": "named wall"}, "no body can be called 'wall'"),
        ({"watch": "named body"}, "no body can be called 'body 2'"),
        ({"watch": "kinematic"}, "watched body 'k' is not dynamic"),
        ({"units": Units(0.0, 1.0, 1.0)}, "unit of length is 0.0"),
        (
            {"drive": Drive(1.0, 0.3, heading="free", turn_drag=1e-3, turn_rate=3.0), "pushers": "rigid"},
            "finite moment",
        ),
        ({"errors": Errors(mass_spread=0.1)}, "mass_spread"),
        (
            {
                "routine": [
                    {"name": "a", "acts": [{"act": "run"}, {"act": "sight", "face": "front", "half_angle": 0.1}]}
                ]
            },
            "act sight looks for a face",
        ),
    ],
)
def test_refusals(change: dict[str, Any], sentence: str) -> None:
    """What does not fit together is refused in one clear sentence."""
    space, other = new_space(), new_space()
    disc, box = add_disc(space, 0.0, 0.0), add_box(space, 1.0, 0.0, (0.1, 0.1))
    rigid = add_disc(space, 2.0, 0.0)
    rigid.moment = math.inf
    kinematic, bare = pymunk.Body(body_type=pymunk.Body.KINEMATIC), pymunk.Body(1.0, 1.0)
    space.add(kinematic, bare)
    chosen = {
        "twice": [disc, disc], "elsewhere": [add_disc(other, 0.0, 0.0)], "kinematic": [kinematic], "box": [box],
        "bare": [bare], "rigid": [rigid],
    }  # fmt: skip
    watched = {
        "pusher": {"p": disc}, "twins": {"a": box, "b": box}, "named wall": {"wall": box},
        "named body": {"body 2": box}, "kinematic": {"k": kinematic},
    }  # fmt: skip
    options: dict[str, Any] = {"dt": DT, "pushers": [disc], "routine": LEFT, "drive": CART} | change
    if isinstance(options["pushers"], str):
        options["pushers"] = chosen[options["pushers"]]
    if "watch" in options:
        options["watch"] = watched[options["watch"]]
    with pytest.raises(ValueError, match=sentence) as caught:
        attach(space, **options)
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(
    ("keys", "sentence"),
    [
        ({"stall_force": -1.0}, "stall_force = -1.0"),
        ({"free_speed": math.nan}, "free_speed = nan"),
        ({"sideways_drag": 0.0}, "sideways_drag = 0.0"),
        ({"latency": -0.1}, "latency = -0.1"),
        ({"turn_rate": 0.0}, "turn_rate = 0.0"),
        ({"drive_while_turning": 1.5}, "drive_while_turning = 1.5"),
        ({"bumper_arc": 7.0}, "bumper_arc = 7.0"),
        ({"heading": "loose"}, "heading = 'loose'"),
        ({"heading": "free"}, "needs a turn_drag and a finite turn_rate"),
        ({"contact_arm": math.inf}, "contact_arm = inf"),
    ],
)
def test_drives_out_of_range(keys: dict[str, Any], sentence: str) -> None:
    """A drive checks its values."""
    with pytest.raises(ValueError, match=sentence):
        Drive(**({"stall_force": 1.0, "free_speed": 0.3} | keys))


def test_the_example_runs() -> None:
    """The example program of a space of one's own prints its summary."""
    done = subprocess.run(
        [sys.executable, str(PROJECT / "scenarios" / "own_space.py")], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    assert "crate" in done.stdout
    assert not done.stderr
