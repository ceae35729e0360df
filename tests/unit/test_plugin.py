"""Crews in spaces of the user's own: what they do there, what is logged, and what is left behind."""

from __future__ import annotations

import math
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pymunk
import pytest

import swarmpush
from swarmpush import Drive, Units, attach
from swarmpush.dynamics.asking import Situation
from swarmpush.dynamics.attached import Crew
from swarmpush.dynamics.host import list_pairs
from swarmpush.dynamics.ledger import _sort_pairs
from swarmpush.dynamics.steps import choose_step
from swarmpush.problems import RoutineError
from swarmpush.routine import Routine
from swarmpush.scenario import Errors, Pair, Scenario, Start

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


# ---- against the body world of scenarios ----------------------------------------------------------------------------

PUSHER, WALL, BLOCK = (0.5, 0.8), (0.6, 0.5), (0.8, 0.25)  # elasticity and friction, which the engine multiplies


def passage(**tables: Any) -> Scenario:
    """Three carts and a crate on a floor without friction, in a closed corridor."""
    s = swarmpush.load(swarmpush.demo("service_passage"))

    def pair(one: tuple[float, float], other: tuple[float, float]) -> Pair:
        return Pair(restitution=one[0] * other[0], friction=one[1] * other[1])

    starts = ((0.3, 0.1, 0.4), (0.6, 0.2, -2.0), (0.9, 0.12, 1.0))
    placed = [{"x": x, "y": y, "heading": heading} for x, y, heading in starts]
    routine = Routine.model_validate(
        {"stages": [{"name": "only", "acts": [{"act": "run"}, {"act": "depart", "angle": 0.9, "side": "left"}]}]}
    )
    s = s.model_copy(
        update={
            "routine": routine,
            "errors": Errors(),
            "start": Start.model_validate({"placed": placed}),
        }
    )
    s = s.replace(
        pushers={"count": 3},
        floor={"static_friction": 0.0, "kinetic_friction": 0.0},
        contacts={
            "pusher_wall": pair(PUSHER, WALL),
            "pusher_block": pair(PUSHER, BLOCK),
            "pusher_pusher": pair(PUSHER, PUSHER),
            "block_wall": pair(BLOCK, WALL),
        },
        goal={"time_limit": 8.0, "travel": 10.0},
    )
    return s.replace(**tables)


def by_hand(s: Scenario) -> tuple[Crew, pymunk.Body]:
    """The same rig as a user would build it, in SI units."""
    p, steps = s.pushers, choose_step(s)
    space = new_space(steps.slop_m)
    space.iterations = steps.iterations

    def add(body: pymunk.Body, shape: pymunk.Shape, surface: tuple[float, float]) -> pymunk.Body:
        shape.elasticity, shape.friction = surface
        space.add(body, shape)
        return body

    corners = [(0.0, 0.0), (s.channel.length, 0.0), (s.channel.length, s.channel.width), (0.0, s.channel.width)]
    for start, end in zip(corners, (*corners[1:], corners[0]), strict=True):
        wall = pymunk.Segment(space.static_body, start, end, 0.0)
        wall.elasticity, wall.friction = WALL
        space.add(wall)
    pushers = []
    for start in s.start.placed or ():
        body = pymunk.Body(p.mass, p.mass * p.radius**2 / 2)
        body.position, body.angle = (start.x, start.y), start.heading
        pushers.append(add(body, pymunk.Circle(body, p.radius), PUSHER))
    crate = pymunk.Body(s.block.mass, s.block.yaw_inertia or 0.0)
    crate.position = s.block.rear_at + s.block.length / 2, s.channel.width / 2
    add(crate, pymunk.Poly.create_box(crate, (s.block.length, s.block.width)), BLOCK)
    drive = Drive(
        p.stall_force, p.free_speed, sideways_drag=p.sideways_drag, heading=p.heading,
        turn_drag=p.turning_drag if p.heading == "free" else 0.0, contact_arm=p.contact_arm, turn_rate=p.turn_rate,
        drive_while_turning=p.drive_while_turning, bump_threshold=p.bump_threshold, bumper_arc=p.bumper_arc,
        latency=p.latency,
    )  # fmt: skip
    crew = attach(
        space, dt=steps.dt_s, pushers=pushers, routine=s.routine, drive=drive, watch={"crate": crate}, errors=s.errors,
        seed=s.trial.seed,
    )  # fmt: skip
    return crew, crate


QUANTITIES = (
    "t_on_s",
    "dwell_s",
    "x_m",
    "y_m",
    "approach_m_s",
    "impact_Ns",
    "lean_Ns",
    "tangential_Ns",
    "energy_lost_J",
)
AS_IN_A_SCENARIO = (
    1e-6  # of the largest value; units differ, so rounding does, and each bump makes it some times larger
)


@pytest.mark.parametrize(
    "tables",
    [
        {},
        {"pushers": {"count": 3, "heading": "free", "contact_arm": 0.01, "free_speed": 0.25}},
        {
            "errors": {
                "heading_diffusion": 0.05, "heading_drift": 0.02, "turn_sd": 0.1, "missed_bumps": 0.3,
                "speed_spread": 0.1, "stall_spread": 0.1, "false_bumps": 0.2, "bearing_sd": 0.1, "fade_time": 20.0,
            }
        },
    ],
    ids=["held", "free", "errors"],
)  # fmt: skip
def test_a_rig_built_by_hand_does_what_its_scenario_does(tables: dict[str, Any]) -> None:
    """The same corridor, crate and carts give the same visits and the same motion as `simulate`."""
    s = passage(**tables)
    run = swarmpush.simulate(s, cycles=())
    crew, crate = by_hand(s)
    crew.step(round(run.duration_s / run.steps.dt_s))
    ours, theirs = crew.visits, run.visits
    assert len(theirs) > 12
    assert (theirs["partner"] == "block").any()
    assert (theirs["partner"] == "pusher").any() or "errors" in tables
    assert list(ours["partner"]) == list(theirs["partner"])
    assert list(ours["pusher"]) == list(theirs["pusher"])
    for name in QUANTITIES:
        tolerance = AS_IN_A_SCENARIO * theirs[name].abs().max()
        np.testing.assert_allclose(ours[name], theirs[name], rtol=0.0, atol=tolerance, err_msg=name)
    end = run.block.iloc[-1]
    assert (crate.position.x - s.block.length / 2 - s.block.rear_at) == pytest.approx(run.travel_m, abs=1e-6)
    assert crate.angle == pytest.approx(end["yaw_rad"], abs=1e-6)
    books = crew.books.iloc[0]
    for part in ("pushers", "walls"):
        theirs_of_it = getattr(run.books, part)
        assert [books[f"{part}_x_Ns"], books[f"{part}_y_Ns"]] == pytest.approx(theirs_of_it, abs=1e-6)


@pytest.mark.parametrize("heading", ["held", "free"])
def test_other_units_give_the_same_tables(heading: Any) -> None:
    """A tank in centimetres, grams and milliseconds gives the SI tables of the tank in SI units."""
    tables = []
    for units in (Units(1.0, 1.0, 1.0), Units(1e-2, 1e-3, 1e-3)):
        space = new_space(1e-3 / units.length)
        add_round_tank(space, unit=1.0 / units.length)
        pushers = add_ring(space, 5, 1.0 / units.length, 0.2 / units.mass)
        crate = add_box(space, 0.0, 0.0, (0.3 / units.length, 0.2 / units.length), 1.0 / units.mass)
        drive = Drive(
            1.0,
            0.3,
            heading=heading,
            turn_drag=0.02,
            contact_arm=0.01,
            turn_rate=5.0,
            latency=0.02,
            bump_threshold=0.005,
        )
        acts = [{"act": "run"}, {"act": "turn", "angle": 2.0}, {"act": "advance", "distance": 0.1}]
        errors = Errors(heading_diffusion=0.1, false_bumps=0.2, range_sd=0.01, heading_drift=0.1)
        crew = attach(
            space, dt=DT / units.time, pushers=pushers, routine=[{"name": "only", "acts": acts}], drive=drive,
            watch={"crate": crate}, units=units, errors=errors,
        )  # fmt: skip
        crew.step(12_000)
        assert crew.time_s == pytest.approx(12.0)
        tables.append((crew.visits, crew.books, crew.pushers))
    assert len(tables[0][0]) > 12
    for si, other in zip(*tables, strict=True):
        pd.testing.assert_frame_equal(si, other, rtol=1e-6, atol=1e-8)


# ---- books and visits -----------------------------------------------------------------------------------------------


def test_books_in_a_round_tank_balance() -> None:
    """What pushers, walls and others gave the crate is its momentum, in a place that is no corridor."""
    crew, crate = tank_crew(8)
    crew.step(15_000)
    row = crew.books.iloc[0]
    assert abs(row["pushers_x_Ns"]) + abs(row["walls_x_Ns"]) > 0.01
    assert totals(crew, "crate") == pytest.approx(momentum(crate), abs=ROUNDING)
    assert [row[f"else_{c}"] for c in ("x_Ns", "y_Ns", "turn_Nms")] == pytest.approx([0.0] * 3, abs=ROUNDING)
    on_crate = crew.visits.query("surface == 'crate'")
    assert on_crate["owner"].eq("pusher").all()
    assert on_crate["impact_Ns"].sum() + on_crate["lean_Ns"].sum() > abs(row["pushers_x_Ns"])


def test_free_fall() -> None:
    """In free fall all that a body gets is "else", and it is its weight times the time."""
    space = new_space()
    space.gravity = 0.5, -9.81
    box = add_box(space, 0.0, 100.0, (0.3, 0.2), 2.0)
    crew = attach(space, dt=DT, watch={"box": box})
    crew.step(1000)
    row = crew.books.iloc[0]
    assert row["else_x_Ns"] == pytest.approx(2.0 * 0.5 * 1.0, rel=1e-12)
    assert row["else_y_Ns"] == pytest.approx(-2.0 * 9.81 * 1.0, rel=1e-12)
    assert crew.visits.empty


def test_kicks_between_steps_are_in_the_books() -> None:
    """A velocity given from outside, also in a callback, and an impulse applied count among all else."""
    space = new_space()
    box = add_box(space, 0.0, 0.0, (0.3, 0.2), 2.0)
    box.velocity = 1.0, 0.0  # before the crew is attached: not its business
    crew = attach(space, dt=DT, watch={"box": box})
    crew.step(10)
    box.velocity = 3.0, 0.0
    crew.step(10)
    box.apply_impulse_at_world_point((0.0, 0.5), box.position + pymunk.Vec2d(0.1, 0.0))
    crew.step(10)
    assert totals(crew, "box") == pytest.approx([4.0, 0.5, 0.05], rel=1e-3)  # it turns a little before it is kicked


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


def test_the_ledger_sums_up_to_what_pymunk_reports() -> None:
    """Ledger alone: impulses on bodies, and of each pair of kinds, are those of pymunk's own post_solve callback."""
    space, watched = busy_space()
    start = {name: np.array(momentum(body)) for name, body in watched.items()}
    seen: dict[str, float] = {}
    given = {name: np.zeros(2) for name in watched}

    def note(arbiter: pymunk.Arbiter, space: pymunk.Space, data: Any) -> None:
        impulse, normal = arbiter.total_impulse, arbiter.normal
        kinds = "wall" if any(b.body_type == pymunk.Body.STATIC for b in arbiter.bodies) else "block"
        seen[kinds] = seen.get(kinds, 0.0) + abs(impulse.dot(normal))
        for name, body in watched.items():
            if body in arbiter.bodies:
                given[name] += np.array(impulse) * (1.0 if arbiter.bodies[1] is body else -1.0)

    space.on_collision(None, None, post_solve=note)
    crew = attach(space, dt=DT, watch=watched)
    crew.step(2500)
    visits, books = crew.visits, crew.books.set_index("name")
    for kind, total in seen.items():
        of_kind = visits[visits["partner"] == kind]
        assert of_kind["impact_Ns"].sum() + of_kind["lean_Ns"].sum() == pytest.approx(total, rel=ROUNDING)
    for name, impulse in given.items():
        row = books.loc[name]
        assert np.abs(impulse).max() > 0.1
        sums = [sum(row[f"{part}_{c}_Ns"] for part in PARTS[:3]) for c in "xy"]
        assert np.abs(sums) == pytest.approx(np.abs(impulse), rel=ROUNDING)
        change = np.array(momentum(watched[name])) - start[name]
        assert totals(crew, name) == pytest.approx(change, abs=1e-9)
    weight = books.loc["tee", "else_y_Ns"]
    assert weight == pytest.approx(-9.81 * 1.0 * 2.5, rel=1e-9)


def test_a_body_may_touch_very_many_others() -> None:
    """Books balance and no visit is lost where one body touches sixty, each with several shapes."""
    space = new_space()
    space.gravity = 0.0, -1.0
    plate = pymunk.Body(5.0, math.inf)
    space.add(plate, pymunk.Poly.create_box(plate, (10.0, 0.1)))
    for k in range(60):
        body = pymunk.Body(0.1, math.inf)
        body.position = -4.8 + 0.16 * k, 0.1
        space.add(body, *(pymunk.Circle(body, 0.005, (dx, -0.045)) for dx in np.linspace(-0.05, 0.05, 40).tolist()))
    add_walls(space, (-5.5, -0.05), (5.5, -0.05), (5.5, 5.0), (-5.5, 5.0))
    crew = attach(space, dt=DT, watch={"plate": plate})
    crew.step(300)
    visits = crew.visits
    assert visits.query("surface.str.startswith('body') and owner == 'plate'")["surface"].nunique() == 60
    assert totals(crew, "plate") == pytest.approx(momentum(plate), abs=1e-9)
    assert crew.books["bodies_y_Ns"].iloc[0] == pytest.approx(-60 * 0.1 * 0.3, rel=0.02)  # it takes a step to settle


def test_visits_may_be_looked_at_in_the_middle() -> None:
    """Reading the tables on the way neither loses nor doubles rows."""
    once, _ = tank_crew(6)
    once.step(4000)
    often, _ = tank_crew(6)
    for _ in range(80):
        often.step(50)
        assert not often.visits.duplicated(["owner", "pusher", "surface", "other_pusher", "t_on_s"]).any()
    assert same(once, often)


def test_a_log_longer_than_its_buffer_is_whole(monkeypatch: pytest.MonkeyPatch) -> None:
    """Visits that are fetched in parts are all there."""
    crew, _ = tank_crew(6)
    ledger = crew._task.ledger
    crew._task = crew._task._replace(ledger=ledger._replace(log=ledger.log[: ledger.slots.size + 2]))
    crew.step(4000)
    expected, _ = tank_crew(6)
    expected.step(4000)
    assert same(crew, expected)


def test_visits_of_a_large_heap_may_all_end_at_once() -> None:
    """Six hundred pairs that part in one step all come into the log, more than one body's share of it each."""
    space = new_space()
    pairs = []
    for k in range(600):
        one, other = add_disc(space, 0.0, 1.0 * k), add_disc(space, 0.0799, 1.0 * k)
        one.velocity = 0.01, 0.0
        pairs.append((one, other))
    crew = attach(space, dt=DT)
    crew.step(2)
    for one, other in pairs:
        one.position, other.position = (-1.0, one.position.y), (1.0, other.position.y)
    crew.step(10)
    assert len(crew.visits) == 600
    ledger = crew._task.ledger
    assert len(ledger.log) > ledger.slots.size


def test_overlap_is_measured_where_a_static_body_is_now() -> None:
    """A static body that has been moved, or turned, is where it stands when it is touched."""
    space = new_space()
    post = pymunk.Body(body_type=pymunk.Body.STATIC)
    shape = pymunk.Poly.create_box(post, (0.2, 0.2))
    space.add(post, shape)
    pusher = add_disc(space, 1.0, 0.0)
    crew = attach(space, dt=DT, pushers=[pusher], routine=HALT, drive=CART)
    post.position = 2.0, 0.05
    space.reindex_static()
    crew.step(4000)
    (visit,) = crew.visits[crew.visits["dwell_s"] == crew.visits["dwell_s"].max()].itertuples()
    assert visit.x_m == pytest.approx(1.86, abs=1e-3)
    assert 0.0 <= visit.overlap_m < 1e-3


# ---- drives in strange surroundings ---------------------------------------------------------------------------------


def test_a_pusher_weighs_what_it_weighs() -> None:
    """Under gravity a pusher presses on the floor with its weight, and falls through its drag as the law says."""
    space = new_space()
    space.gravity = 0.0, -9.81
    add_walls(space, (-9.0, 0.0), (9.0, 0.0), (9.0, 9.0), (-9.0, 9.0), elasticity=0.0)
    resting, falling = add_disc(space, -3.0, 0.04), add_disc(space, 3.0, 8.0)
    drive = Drive(1.0, 0.01)  # the drag of one step is half the mass
    crew = attach(
        space, dt=DT, pushers=[resting, falling], routine=[{"name": "a", "acts": [{"act": "halt"}]}], drive=drive
    )
    crew.step(1000)
    (visit,) = crew.visits.itertuples()
    assert visit.lean_Ns + visit.impact_Ns == pytest.approx(0.2 * 9.81 * 1.0, rel=2e-3)
    assert falling.velocity.y == pytest.approx(-0.2 * 9.81 / 100.0, rel=1e-6)  # weight over drag


def test_a_pusher_tows_with_its_whole_thrust() -> None:
    """A joint gets the thrust that a contact would get, however large the drag of one step is."""
    space = new_space()
    tug, barge = add_disc(space, 0.0, 0.0), add_disc(space, -0.2, 0.0, mass=1000.0)
    space.add(pymunk.PinJoint(tug, barge))
    crew = attach(
        space,
        dt=DT,
        pushers=[tug],
        routine=[{"name": "a", "acts": [{"act": "run"}]}],
        drive=Drive(2.0, 1e-3),
        watch={"barge": barge},
    )
    crew.step(100)
    assert barge.velocity.x == pytest.approx(2.0 * 0.1 / 1000.0, rel=0.2)  # the thrust falls as it gains speed
    assert crew.books["else_x_Ns"].iloc[0] == pytest.approx(1000.0 * barge.velocity.x, rel=1e-9)


def test_a_hitch_turns_with_its_pusher() -> None:
    """A joint at the rim of a disc that turns is swung round at the disc's turning rate, without coming apart."""
    space = new_space()
    tug, trailer = add_disc(space, 0.0, 0.0), add_disc(space, -0.12, 0.0)
    hitch = pymunk.PivotJoint(tug, trailer, (-0.06, 0.0), (0.06, 0.0))
    hitch.collide_bodies = False
    space.add(hitch)
    acts = [{"act": "turn", "angle": 1.5}, {"act": "run"}]
    drive = Drive(1.0, 0.3, turn_rate=2.0)
    crew = attach(space, dt=DT, pushers=[tug], routine=[{"name": "only", "acts": acts}], drive=drive)
    for _ in range(10):
        crew.step(60)
        assert tug.angular_velocity == pytest.approx(2.0)
        assert tug.angle == pytest.approx(crew.pushers["heading_rad"].iloc[0])
        apart = tug.local_to_world((-0.06, 0.0)) - trailer.local_to_world((0.06, 0.0))
        assert apart.length < 1e-4
    crew.step(400)
    assert tug.angle == pytest.approx(1.5)


def test_bars_push_with_their_noses() -> None:
    """A bar with a centre of mass off its origin does what the same bar drawn about its centre does."""
    tables = []
    for shift in (0.0, 0.03):
        space = new_space()
        add_walls(space, (-1.0, -1.0), (1.0, -1.0), (1.0, 1.0), (-1.0, 1.0))
        bar = pymunk.Body(0.3, 1e-3)
        bar.angle = 0.4
        bar.center_of_gravity = shift, 0.0
        bar.position = pymunk.Vec2d(-shift, 0.0).rotated(0.4)
        shape = pymunk.Poly(bar, [(x + shift, y) for x, y in ((-0.1, -0.03), (0.1, -0.03), (0.1, 0.03), (-0.1, 0.03))])
        shape.friction = 0.3
        space.add(bar, shape)
        acts = [{"act": "run"}, {"act": "turn", "angle": 2.0}]
        crew = attach(
            space, dt=DT, pushers=[bar], routine=[{"name": "a", "acts": acts}], drive=Drive(1.0, 0.3, turn_rate=4.0)
        )
        crew.step(20_000)
        tables.append((crew.visits, crew.pushers))
    assert len(tables[0][0]) > 3
    for plain, shifted in zip(*tables, strict=True):
        pd.testing.assert_frame_equal(plain, shifted, rtol=1e-6, atol=1e-9)


def test_a_held_disc_shows_its_heading() -> None:
    """A disc that turns at once has the angle of its heading, so that it can be drawn."""
    crew, _ = tank_crew(4)
    crew.step(3000)
    angles = [math.remainder(body.angle, math.tau) for body in crew.space.bodies if len(body.shapes) == 1][:4]
    assert angles == pytest.approx(list(crew.pushers["heading_rad"]), abs=1e-9)
    assert len(set(np.round(angles, 3))) == 4


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
