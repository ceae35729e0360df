"""Crews in spaces of the user's own: what they do there, what is logged, and what is left behind."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pandas as pd
import pymunk
import pytest
from plugin_spaces import (
    CART,
    DT,
    HALT,
    PARTS,
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

import swarmpush
from swarmpush import Drive, Units, attach
from swarmpush.dynamics.attached import Crew
from swarmpush.dynamics.steps import choose_step
from swarmpush.routine import Routine
from swarmpush.scenario import Errors, Pair, Scenario, Start

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
