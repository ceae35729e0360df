"""The body world: repeatable, balanced, and doing what a scenario says."""

from __future__ import annotations

import hashlib
import math
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.dynamics import simulation
from swarmpush.dynamics.host import host_disagreement
from swarmpush.dynamics.loop import advance_plainly
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step, effective_mass
from swarmpush.dynamics.world import simulate
from swarmpush.loading import load
from swarmpush.routine import Routine
from swarmpush.scenario import Fluid, Scenario, Start

DEMOS = ("service_passage", "vibration_duct", "gel_channel")
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000


def demo_run(name: str, seconds: float, *, seed: int = 5, **pushers: Any) -> Run:
    """A short run of a demo, its laps left unsought."""
    s = load(demo(name)).replace(goal={"time_limit": seconds}, pushers=pushers)
    return simulate(s, seed=seed, cycles=())


def routine(*acts: dict[str, Any]) -> Routine:
    """One stage that runs to the next bump and then does these acts."""
    return Routine.model_validate({"stages": [{"name": "only", "acts": [{"act": "run"}, *acts]}]})


HALT = routine({"act": "halt"})
LEFT = routine({"act": "turn", "angle": 2.0})


def cart(*starts: tuple[float, float, float], acts: Routine = HALT, seconds: float = 5.0, **tables: Any) -> Scenario:
    """The service passage without errors, its carts placed one by one; unlike there they feel all round and at once."""
    s = load(demo("service_passage"))
    s = s.model_copy(
        update={
            "routine": acts,
            "errors": type(s.errors)(),
            "start": Start.model_validate({"placed": [{"x": x, "y": y, "heading": h} for x, y, h in starts]}),
        }
    )
    ideal = {"bumper_arc": 2 * math.pi, "bump_threshold": 0.0, "latency": 0.0, "turn_rate": math.inf}
    s = s.replace(pushers={"count": len(starts), **ideal}, goal={"time_limit": seconds}, trial={"sample_every": 0.01})
    return s.replace(**tables)


def path_of(run: Run, pusher: int = 0) -> pd.DataFrame:
    return run.pushers[run.pushers["pusher"] == pusher].reset_index(drop=True)


# ---- books --------------------------------------------------------------------------------------------------------

BALANCED = 1e-9  # relative to the sum of all impulses; rounding leaves some 1e-15
PHANTOM = 1e-6  # of the block's way: what the engine shifts without momentum


@pytest.mark.parametrize("name", DEMOS)
def test_books_balance(name: str) -> None:
    """The impulses of pushers, walls, floor and drag add up to the block's change of momentum, step by step."""
    run = demo_run(name, 20.0)
    books = run.books
    assert books.gross > 0.0
    assert books.residual_rel < BALANCED
    assert books.residual_turn_rel < BALANCED
    assert run.energy.residual_rel < BALANCED
    total = np.array([books.pushers, books.walls, books.floor, books.drag]).sum(axis=0)
    assert total == pytest.approx(books.change, abs=BALANCED * books.gross)
    assert books.phantom_share < PHANTOM


@pytest.mark.parametrize("name", DEMOS)
def test_bodies_hardly_overlap(name: str) -> None:
    """No two bodies ever overlap by more than a tenth of a radius, nor by much more than the slop."""
    run = demo_run(name, 20.0)
    assert run.overlap_max_m < 0.1 * run.scenario.pushers.radius
    assert run.overlap_max_m < 3 * run.steps.slop_m
    assert run.overlap_max_m == pytest.approx(run.visits["overlap_m"].max())


def test_books_of_a_push_into_a_corner() -> None:
    """A block that pushers and walls hold at once has their impulses entered apart, and they balance."""
    s = load(demo("vibration_duct")).replace(block={"offset": 0.0024}, goal={"time_limit": 20.0})
    books = simulate(s, seed=3, cycles=()).books
    assert books.walls != (0.0, 0.0)
    assert books.residual_rel < BALANCED


# ---- the same again -------------------------------------------------------------------------------------------------


def digest(run: Run) -> str:
    """A hash of all that a run has recorded, bit by bit."""
    found = hashlib.sha256()
    for table in (run.visits, run.block, run.pushers, run.bumps):
        for name in table:
            column = table[name].to_numpy()
            found.update("|".join(column).encode() if column.dtype == object else column.tobytes())
    found.update(repr((run.books, run.travel_m, run.causes)).encode())
    return found.hexdigest()


@pytest.mark.parametrize("name", DEMOS)
def test_same_seed_same_run(name: str) -> None:
    """The same scenario and seed give the same tables bit by bit, and another seed gives others."""
    assert digest(demo_run(name, 5.0)) == digest(demo_run(name, 5.0))
    assert digest(demo_run(name, 5.0)) != digest(demo_run(name, 5.0, seed=6))


def test_same_run_in_another_process() -> None:
    """A fresh process gives the same tables bit by bit."""
    code = (
        "import sys; sys.path.insert(0, sys.argv[1]); from test_body_world import *; "
        "print(*(digest(demo_run(name, 5.0)) for name in DEMOS))"
    )
    folder = str(Path(__file__).parent)
    other = subprocess.run(
        [sys.executable, "-c", code, folder], capture_output=True, text=True, check=True, timeout=300
    )  # fmt: skip
    assert other.stdout.split() == [digest(demo_run(name, 5.0)) for name in DEMOS]


def test_same_run_in_threads() -> None:
    """Runs side by side in threads do not disturb each other."""
    with ThreadPoolExecutor(4) as pool:
        side_by_side = list(pool.map(lambda seed: digest(demo_run("vibration_duct", 3.0, seed=seed)), range(8)))
    assert side_by_side == [digest(demo_run("vibration_duct", 3.0, seed=seed)) for seed in range(8)]


@pytest.mark.parametrize("name", DEMOS)
def test_compiled_loop_is_the_plain_loop(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """The compiled loop and the one through pymunk's public interface give the same run bit by bit."""
    s = load(demo(name))
    seconds = 1200 * choose_step(s).dt_s
    fast = digest(demo_run(name, seconds, count=3))
    monkeypatch.setattr(simulation, "_stepper", lambda: advance_plainly)
    assert digest(demo_run(name, seconds, count=3)) == fast


def test_host_is_the_one_that_the_loop_knows() -> None:
    """The compiled way to the engine does what pymunk's public interface does."""
    assert host_disagreement() == ""


def test_an_unknown_host_is_driven_plainly(monkeypatch: pytest.MonkeyPatch) -> None:
    """When the compiled way to the engine differs from pymunk's, the run says so and takes the slow way."""
    expected = digest(demo_run("service_passage", 0.5))
    monkeypatch.setattr(simulation, "host_disagreement", lambda: "motion in step 3")
    simulation._stepper.cache_clear()
    try:
        with pytest.warns(RuntimeWarning, match="motion in step 3"):
            slow = demo_run("service_passage", 0.5)
    finally:
        simulation._stepper.cache_clear()
    assert digest(slow) == expected


def test_one_more_pusher_leaves_the_others_as_they_were() -> None:
    """A pusher that nobody meets changes nothing for the others: not their starts, errors, units or noise."""
    s = load(demo("service_passage"))
    s = s.replace(
        pushers={"pass_through": True}, block={"rear_at": 2.5}, channel={"length": 3.0}, goal={"time_limit": 6.0}
    )
    s = s.replace(start={"heading": math.pi / 2}, errors={"false_bumps": 0.3})  # across the passage, far from the crate
    few, many = (simulate(s.replace(pushers={"count": n}), seed=4, cycles=()) for n in (3, 5))
    clear = few.visits["partner"].eq("wall").all() and many.visits["partner"].eq("wall").all()
    assert clear, "the example must keep away from the block"
    theirs = many.pushers[many.pushers["pusher"] < 3].reset_index(drop=True)
    pd.testing.assert_frame_equal(few.pushers, theirs, check_exact=True)


def test_turn_errors_belong_to_the_turn() -> None:
    """The k-th turn errs alike whether turns take time or not, so that rungs of the ladder can be compared in pairs."""
    s = cart((0.5, 0.16, 1.0), acts=LEFT, seconds=25.0, errors={"turn_sd": 0.1}, trial={"sample_every": 1e-3})
    headings = []
    for pushers in ({}, {"turn_rate": 2.0}, {"latency": 0.1, "turn_rate": 5.0}):
        path = path_of(simulate(s.replace(pushers=pushers), seed=2, cycles=()))
        done = path[path["mode"] != "turn"]["heading_rad"].round(9)
        headings.append(list(dict.fromkeys(done))[:8])
    assert len(headings[0]) == 8
    assert headings[1] == pytest.approx(headings[0], abs=1e-8)  # rounded to nine digits
    assert headings[2] == pytest.approx(headings[0], abs=1e-8)


def test_unit_spread_does_not_touch_the_starts() -> None:
    """Switching errors off leaves every pusher where and how it started."""
    s = load(demo("service_passage")).replace(goal={"time_limit": 0.1})
    with_errors = simulate(s, seed=9, cycles=()).pushers.head(6)
    without = simulate(s.model_copy(update={"errors": type(s.errors)()}), seed=9, cycles=()).pushers.head(6)
    pd.testing.assert_frame_equal(with_errors, without, check_exact=True)


# ---- what a pusher does -----------------------------------------------------------------------------------------

A_STEP = 1.01  # steps of tolerance for a moment, with a little for rounding


def test_latency_and_turning_take_their_time() -> None:
    """After a bump a pusher drives on for the latency, then turns at its rate, then runs."""
    s = cart((0.5, 0.16, math.pi / 2), acts=LEFT, pushers={"latency": 0.3, "turn_rate": 2.5})
    run = simulate(s, cycles=())
    bump = run.visits["t_on_s"].iloc[0]
    path = path_of(run)
    sample = path["t_s"][1]
    for mode, lasts in (("react", 0.3), ("turn", 2.0 / 2.5)):
        times = path["t_s"][path["mode"] == mode]
        times = times[times > 0.02]  # the start is a turn by nothing
        spell = times[times < bump + 0.3 + 0.8 + 0.05]
        assert len(spell) * sample == pytest.approx(lasts, abs=sample + A_STEP * run.steps.dt_s)
    turned = path["heading_rad"].iloc[-1] - path["heading_rad"].iloc[0]
    assert math.remainder(turned, math.tau) == pytest.approx(2.0, abs=1e-12)


@pytest.mark.parametrize("share", [0.0, 0.5, 1.0])
def test_drive_while_turning(share: float) -> None:
    """While it turns in the open, a pusher settles to its share of the free speed."""
    s = cart(
        (0.5, 0.16, 0.0),
        acts=routine({"act": "turn", "angle": 6.0}),
        pushers={"turn_rate": 0.5, "drive_while_turning": share},
        errors={"false_bumps": 1e3},  # it feels a bump at once
        channel={"width": 3.0},
        seconds=4.0,
    )
    run = simulate(s.replace(start={"placed": (s.start.placed[0].model_copy(update={"y": 1.5}),)}), cycles=())
    path = path_of(run)
    late = path[path["t_s"] > 2.0]
    assert (late["mode"] == "turn").all()
    steps = np.hypot(np.diff(late["x_m"]), np.diff(late["y_m"])) / np.diff(late["t_s"])
    # it curves, and with a sideways drag of 4 it drifts a little: tau w/4 = 4 mrad of the speed at most
    assert steps == pytest.approx([0.15 * share] * len(steps), rel=0.01, abs=1e-6)


@pytest.mark.parametrize(("arc", "feels"), [(math.radians(100), False), (math.radians(140), True)])
def test_bumper_arc(arc: float, feels: bool) -> None:
    """A wall met 60 deg off ahead is felt by a bumper of 140 deg and not by one of 100 deg."""
    s = cart((0.5, 0.2, math.pi / 2 - math.pi / 3), pushers={"bumper_arc": arc}, seconds=3.0)
    run = simulate(s, cycles=())
    assert len(run.visits) > 0
    assert (path_of(run)["mode"].iloc[-1] == "stop") == feels


def test_bump_threshold_adds_up() -> None:
    """A pusher that leans softly feels the bump when the impulse of the touch has added up to the threshold."""
    s = cart((0.5, 0.04, -math.pi / 2), pushers={"bump_threshold": 0.5}, seconds=1.0)
    path = path_of(simulate(s, cycles=()))
    stopped = path["t_s"][path["mode"] == "stop"].min()
    assert stopped == pytest.approx(0.5 / 1.0, abs=0.0101)  # threshold over stall force; a sample takes 10 ms


def test_missed_bumps() -> None:
    """The stated share of bumps is missed, and felt a second later by those that press on."""
    n, share = 120, 0.3
    starts = [(0.1 + 0.02 * k, 0.2, math.pi / 2) for k in range(n)]
    s = cart(
        *starts, pushers={"pass_through": True}, errors={"missed_bumps": share}, channel={"length": 6.0},
        block={"rear_at": 5.0}, seconds=4.0,
    )  # fmt: skip
    run = simulate(s, cycles=())
    bump = run.visits["t_on_s"].max()
    mode = run.pushers.pivot(index="t_s", columns="pusher", values="mode")
    felt = (mode[mode.index > bump + 0.1].iloc[0] == "stop").mean()
    assert felt == pytest.approx(1 - share, abs=FOUR_SIGMA * math.sqrt(share * (1 - share) / n))
    second = (mode[mode.index > bump + 1.1].iloc[0] == "stop").mean()
    assert second == pytest.approx(1 - share**2, abs=FOUR_SIGMA * math.sqrt(share**2 * (1 - share**2) / n))


def test_false_bumps() -> None:
    """Bumps out of nothing come at the stated rate: the share not yet fooled falls as exp(-rate t)."""
    n, rate = 200, 0.5
    s = load(demo("service_passage")).model_copy(update={"routine": HALT})
    s = s.replace(
        channel={"width": 50.0, "length": 60.0}, block={"rear_at": 58.0}, start={"heading": 0.0, "region": "behind"},
        pushers={"count": n, "pass_through": True, "latency": 0.0}, errors={"false_bumps": rate, "missed_bumps": 0.0},
        goal={"time_limit": 4.0},
    )  # fmt: skip
    run = simulate(s, cycles=())
    mode = run.pushers.pivot(index="t_s", columns="pusher", values="mode")
    for t in (1.0, 2.0, 4.0):
        runs, expected = (mode[mode.index <= t + 1e-6].iloc[-1] == "run").mean(), math.exp(-rate * t)
        assert runs == pytest.approx(expected, abs=FOUR_SIGMA * math.sqrt(expected * (1 - expected) / n))


def test_unit_spread() -> None:
    """Free speeds differ from unit to unit by the stated spread."""
    n, spread = 300, 0.1
    s = load(demo("service_passage")).replace(
        channel={"width": 50.0, "length": 60.0}, block={"rear_at": 58.0}, start={"heading": 0.0},
        pushers={"count": n, "pass_through": True}, errors={"speed_spread": spread, "heading_diffusion": 0.0},
        goal={"time_limit": 2.0},
    )  # fmt: skip
    run = simulate(s, cycles=())
    x = run.pushers.pivot(index="t_s", columns="pusher", values="x_m")
    late = x[x.index > 1.0]
    speed = (late.iloc[-1] - late.iloc[0]) / (late.index[-1] - late.index[0])
    assert speed.mean() == pytest.approx(0.15, rel=FOUR_SIGMA * spread / math.sqrt(n))
    # the deviates end at three s.d., which takes 1.3 % off the spread
    assert speed.std() / 0.15 == pytest.approx(spread, rel=0.013 + FOUR_SIGMA / math.sqrt(2 * n))


def test_heading_drift_makes_circles() -> None:
    """A steady drift of the heading makes the path a circle of radius v/drift."""
    s = cart((0.5, 1.5, 0.0), channel={"width": 3.0}, errors={"heading_drift": 0.5}, seconds=4 * math.pi)
    path = path_of(simulate(s, cycles=()))
    turn = path[path["t_s"] > 1.0]
    radius = np.ptp(turn["y_m"]) / 2
    # it starts from rest within 30 ms; sideways drag lets the path slip outwards by (tau w/4)^2/2
    assert radius == pytest.approx(0.15 / 0.5, rel=1e-3)


def test_pass_through() -> None:
    """Pushers that pass through each other never meet; the others bump."""
    s = cart((0.3, 0.16, 0.0), (0.7, 0.17, math.pi))
    met = simulate(s, cycles=())
    assert (met.visits["partner"] == "pusher").any()
    assert met.causes["touching_pusher"] > 0.0
    missed = simulate(s.replace(pushers={"pass_through": True}), cycles=())
    assert not (missed.visits["partner"] == "pusher").any()
    assert path_of(missed, 0)["x_m"].iloc[-1] > 0.7


def test_walls_and_faces_are_told_apart() -> None:
    """A visit names the surface: the four walls, and the four sides of the block."""
    middle = 1.2 + 0.125
    width = {"channel": {"width": 1.0}, "block": {"width": 0.3}}
    cases = {
        "bottom": (0.5, 0.2, -math.pi / 2), "top": (0.5, 0.8, math.pi / 2), "near end": (0.2, 0.5, math.pi),
        "far end": (2.8, 0.5, 0.0), "rear": (1.0, 0.5, 0.0), "front": (1.65, 0.5, math.pi),
        "block bottom": (middle, 0.2, math.pi / 2), "block top": (middle, 0.8, -math.pi / 2),
    }  # fmt: skip
    run = simulate(cart(*cases.values(), **width), cycles=())
    first = run.visits.drop_duplicates("pusher").set_index("pusher")["surface"]
    assert [first[k] for k in range(len(cases))] == list(cases)
    partner = run.visits.set_index("surface")["partner"]
    assert partner["rear"] == "block"
    assert partner["far end"] == "wall"


# ---- the block, and how runs end --------------------------------------------------------------------------------


def test_held_yaw() -> None:
    """A block on a rail does not turn under an off-centre push, and a free one does."""
    s = cart((1.1, 0.25, 0.0), pushers={"latency": 100.0, "stall_force": 3.0}, channel={"width": 0.5})
    free, held = simulate(s, cycles=()), simulate(s.replace(block={"yaw": "held"}), cycles=())
    assert free.yaw_max_rad < 1e-9, "in the middle it goes straight"
    s = s.replace(start={"placed": (s.start.placed[0].model_copy(update={"y": 0.33}),)})
    free, held = simulate(s, cycles=()), simulate(s.replace(block={"yaw": "held"}), cycles=())
    assert free.yaw_max_rad > 0.05
    assert held.yaw_max_rad == 0.0
    assert held.travel_m > 0.0


def test_ends_at_the_goal() -> None:
    """A run ends when the block has travelled as far as the goal asks, and tells how long it took."""
    s = cart(
        (1.1, 0.16, 0.0), pushers={"latency": 100.0, "stall_force": 3.0}, goal={"travel": 0.05, "time_limit": 60.0}
    )
    run = simulate(s, cycles=())
    assert run.ended == "goal"
    assert run.has_arrived
    per_step = 0.15 * run.steps.dt_s
    assert 0.05 <= run.travel_m <= 0.05 + per_step
    assert run.duration_s < 60.0
    assert run.speed_m_s == pytest.approx(run.travel_m / run.duration_s)


def test_ends_with_the_time() -> None:
    """A run that does not arrive ends with its time limit, to a step, and its path has evenly spaced rows."""
    run = demo_run("service_passage", 3.0)
    assert run.ended == "time"
    assert not run.has_arrived
    assert run.duration_s == pytest.approx(3.0, abs=run.steps.dt_s)
    interval = run.steps.sample_steps * run.steps.dt_s
    assert run.block["t_s"].to_numpy() == pytest.approx(np.arange(len(run.block)) * interval)
    assert run.duration_s - run.block["t_s"].iloc[-1] < interval
    assert len(run.pushers) == 6 * len(run.block)


def test_a_step_far_too_long_breaks_off() -> None:
    """Bodies pressed into each other or out of the channel end a run with a named reason, and its data are kept."""
    s = load(demo("service_passage")).replace(goal={"time_limit": 200.0})
    steps = replace(choose_step(s), dt_s=0.9 * s.pushers.radius / s.pushers.free_speed, sample_steps=1, noise_steps=1)
    run = simulate(s, seed=1, steps=steps, cycles=())
    assert run.ended in ("a pusher left the channel", "bodies were pressed into each other", "the motion ran away")
    assert 0.0 < run.duration_s < 200.0
    assert len(run.block) > 0
    assert run.to_dict()["ended"] == run.ended


def test_nobody_bumps_into_anything() -> None:
    """A run too short for any bump has empty tables and nothing to measure, and is a run all the same."""
    run = simulate(cart((0.5, 0.16, 0.0), seconds=0.5), cycles=(("rear",),))
    assert len(run.visits) == len(run.bumps) == len(run.laps) == len(run.strikes) == 0
    summary = run.summary()
    assert math.isnan(summary["nudge_m"])
    assert math.isnan(summary["lap_time_s"])
    assert summary["strike_rate_1_s"] == summary["block_speed_m_s"] == 0.0
    assert run.to_dict()["strike_impulse_Ns"] == {"impact": None, "lean": None}


def test_summary_adds_up() -> None:
    """Crew size times strike rate times nudge is the block's speed."""
    run = demo_run("service_passage", 60.0)
    m = run.summary()
    assert m["n_strikes"] > 10
    assert 6 * m["strike_rate_1_s"] * m["nudge_m"] == pytest.approx(run.speed_m_s, rel=1e-12)
    assert m["travel_m"] == pytest.approx(run.block["x_m"].iloc[-1] - run.block["x_m"][0], abs=1e-4)  # to a sample


def test_one_cart_keeps_its_lap() -> None:
    """A single faultless cart of the service passage locks on to its lap and strikes the crate once a lap."""
    s = load(demo("service_passage")).model_copy(update={"errors": type(load(demo("service_passage")).errors)()})
    run = simulate(s.replace(pushers={"count": 1}, goal={"time_limit": 100.0}), seed=2)
    assert run.lock_share > 0.75  # the way to the crate takes some of the time
    times = (run.laps["t_end_s"] - run.laps["t_start_s"]).tail(5)
    assert np.ptp(times) < 0.05 * times.mean()
    assert (run.laps["n_strikes"] == 1).all()


def test_progress_is_told() -> None:
    """The share of the time limit that is done grows to 1."""
    told: list[float] = []
    s = load(demo("service_passage")).replace(goal={"time_limit": 40.0})
    simulate(s, cycles=(), progress=told.append)
    assert len(told) > 1
    assert told == sorted(told)
    assert told[-1] == pytest.approx(1.0)


def test_a_fluid_beside_the_floor() -> None:
    """Floor and fluid can both resist the block, and share what the pushers give it."""
    s = cart((1.1, 0.16, 0.0), pushers={"latency": 100.0, "stall_force": 3.0})
    s = s.model_copy(update={"fluid": Fluid(block_drag=5.0, block_yaw_drag=0.1)})
    run = simulate(s, cycles=())
    expected = (3.0 - 0.3 * 0.5 * 9.81) / (3.0 / 0.15 + 5.0)
    assert run.block["vx_m_s"].iloc[-1] == pytest.approx(expected, rel=1e-6)
    assert run.books.floor[0] < 0.0
    assert run.books.drag[0] < 0.0
    assert run.books.residual_rel < BALANCED


# ---- the step -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("x", [1e-12, 1e-9, 1e-3, 0.05, 1.0, 50.0, 1e6])
def test_effective_mass(x: float) -> None:
    """One step with the effective mass relaxes the speed exactly as exp(-x), x being drag times step over mass."""
    mass, drag, dt = 2.0, 3.0, x * 2.0 / 3.0
    stepped = 1.0 - drag * dt / effective_mass(mass, drag, dt)  # of the speed, without a push
    assert stepped == pytest.approx(math.exp(-x), abs=1e-12)


def test_step_follows_from_what_must_be_resolved() -> None:
    """The step is set by the shortest of travel, relaxation, latency and turning, and says by which."""
    s = load(demo("service_passage"))
    p = s.pushers
    assert choose_step(s).because == "relaxation time"
    assert choose_step(s).dt_s == pytest.approx(p.relaxation_time / 20)
    crossing = p.radius / p.free_speed
    heavy = s.replace(pushers={"mass": 100.0})
    assert choose_step(heavy).because == "travel per step"
    assert choose_step(heavy).dt_s == pytest.approx(0.008 * crossing)
    assert choose_step(heavy.replace(pushers={"latency": 1e-3})).because == "latency"
    assert choose_step(heavy.replace(pushers={"turn_rate": 1e3})).because == "turn rate"
    assert choose_step(s.replace(numerics={"step": 1e-3})).dt_s == 1e-3
    light = s.replace(pushers={"mass": 1e-6})  # overdamped: nothing to resolve
    assert choose_step(light).because == "travel per step"


def test_halved_step() -> None:
    """Half the step keeps the times of samples and of the heading's noise, and starts the same."""
    s = load(demo("service_passage")).replace(goal={"time_limit": 2.0})
    whole = choose_step(s)
    half = whole.halved()
    assert half.dt_s * half.sample_steps == whole.dt_s * whole.sample_steps
    assert half.dt_s * half.noise_steps == whole.dt_s * whole.noise_steps
    assert half.slop_m == whole.slop_m / 2
    runs = [simulate(s, seed=1, steps=steps, cycles=()) for steps in (whole, half)]
    first = [run.pushers.head(6) for run in runs]
    pd.testing.assert_frame_equal(*first, check_exact=True)
    # before the first bump the noise is the same walk at the same times
    early = [run.pushers[run.pushers["t_s"] < 0.2]["heading_rad"].to_numpy() for run in runs]
    assert early[1] == pytest.approx(early[0], abs=1e-12)
