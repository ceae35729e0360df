"""What pushers are about and what keeps a crew from pushing: each state and each cause, with its times."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.states import HELD_TURNS, STATES
from swarmpush.dynamics.world import simulate
from swarmpush.loading import load
from swarmpush.routine import Routine
from swarmpush.scenario import Scenario, Start

ROW = 0.01  # s: between two rows of the path
RUN: dict[str, Any] = {"act": "run"}


def cart(
    *starts: tuple[float, float, float], acts: list[dict[str, Any]], seconds: float = 4.0, **tables: Any
) -> Scenario:
    """Carts of the service passage without errors, placed one by one, quick in their turns and reactions."""
    s = load(demo("service_passage"))
    s = s.model_copy(
        update={
            "routine": Routine.model_validate({"stages": [{"name": "only", "acts": [RUN, *acts]}]}),
            "errors": type(s.errors)(),
            "start": Start.model_validate({"placed": [{"x": x, "y": y, "heading": h} for x, y, h in starts]}),
        }
    )
    quick = {"count": len(starts), "bumper_arc": 2 * math.pi, "bump_threshold": 0.0, "latency": 0.0}
    quick |= {"turn_rate": math.inf} | tables.pop("pushers", {})
    return s.replace(pushers=quick, goal={"time_limit": seconds}, trial={"sample_every": ROW}).replace(**tables)


HALT = [{"act": "halt"}]
PRESS_ON = [{"act": "slide", "time": 100.0}]
SPEED, R = 0.15, 0.04  # m/s, m: of a cart
WIDTH, REAR_AT, FRONT_AT = 0.32, 1.2, 1.45  # m
NEAR = 3 * ROW + 0.03  # s: rows, and what it takes to gain speed


def cause(run: Run, name: str) -> Any:
    return run.failures.set_index("cause").loc[name]


def never(run: Run, *names: str) -> bool:
    """Whether causes never happened, and have no times."""
    rows = run.failures.set_index("cause").loc[list(names)]
    return bool((rows["share"] == 0.0).all() and rows[["t_first_s", "t_last_s"]].isna().all(axis=None))


# ---- states -------------------------------------------------------------------------------------------------------


@cache
def quiet() -> Run:
    """Two carts that run on towards the block for two seconds, and meet nothing."""
    return simulate(cart((0.3, 0.1, 0.0), (0.3, 0.22, 0.0), acts=HALT, seconds=2.0), cycles=())


def made(**tables: pd.DataFrame) -> Run:
    """The quiet run with some tables put in its own ones' place."""
    return replace(quiet(), **tables)  # type: ignore[arg-type]


def times_of(run: Run, pusher: int, state: str) -> tuple[float, float]:
    """When a pusher's state is first and last seen."""
    rows = (run.pushers["pusher"] == pusher) & (run.states == state)
    t = run.pushers.loc[rows, "t_s"]
    return float(t.min()), float(t.max())


def bump(pusher: int, surface: str, t_on: float, t_off: float) -> pd.DataFrame:
    return pd.DataFrame(
        [{"pusher": pusher, "surface": surface, "t_on_s": t_on, "t_off_s": t_off, "impact_Ns": 0.0, "lean_Ns": 0.0}]
    )


def test_lost() -> None:
    """A pusher that is about nothing else is lost."""
    assert set(quiet().states) == {"lost"}
    assert cause(quiet(), "in_no_lap")["share"] == pytest.approx(1.0)
    assert len(quiet().states) == len(quiet().pushers)


@pytest.mark.parametrize("mode", ["stop", "failed"])
def test_idle(mode: str) -> None:
    """A pusher is idle from the row on in which it is halted or has failed."""
    table = quiet().pushers.copy()
    table.loc[(table["pusher"] == 1) & (table["t_s"] >= 1.2), "mode"] = mode
    run = made(pushers=table)
    first, last = times_of(run, 1, "idle")
    assert first == pytest.approx(1.2, abs=ROW)
    assert last == pytest.approx(2.0, abs=ROW)
    assert math.isnan(times_of(run, 0, "idle")[0])


def test_ahead() -> None:
    """A pusher beyond the block's front is ahead, and the front moves along with the block."""
    table, block = quiet().pushers.copy(), quiet().block.copy()
    rows = table["pusher"] == 0
    table.loc[rows, "x_m"] = FRONT_AT + 0.02  # beyond the front, until that has moved as far
    block["x_m"] += 0.04 * block["t_s"]
    run = made(pushers=table, block=block)
    first, last = times_of(run, 0, "ahead")
    assert first == 0.0
    assert last == pytest.approx(0.5, abs=1.5 * ROW)


def test_locked() -> None:
    """A pusher is locked during a lap that it completed, and in no other time."""
    laps = pd.DataFrame({"pusher": [1, 1], "t_start_s": [0.5, 0.8], "t_end_s": [0.8, 1.1], "n_strikes": [1, 1]})
    run = made(laps=laps)
    first, last = times_of(run, 1, "locked")
    assert first == pytest.approx(0.5, abs=ROW)
    assert last == pytest.approx(1.1, abs=1.5 * ROW)
    assert math.isnan(times_of(run, 0, "locked")[0])
    assert cause(run, "in_no_lap")["share"] == pytest.approx((2.0 + 1.4) / 4.0, abs=ROW)
    assert cause(run, "in_no_lap")["spells"] == 1  # the other one goes on all the time


def test_held_at_a_wall() -> None:
    """Touching a wall for longer than its patience, a pusher is held there, unless it slides on purpose."""
    patience = HELD_TURNS * R / SPEED  # it turns at once and has no latency
    run = made(bumps=bump(0, "bottom", 0.3, 1.6))
    first, last = times_of(run, 0, "held at a wall")
    assert first == pytest.approx(0.3 + patience, abs=1.5 * ROW)
    assert last == pytest.approx(1.6, abs=1.5 * ROW)
    held = cause(run, "held_at_wall")
    assert held["share"] == pytest.approx((1.3 - patience) / 2 / 2.0, abs=ROW)
    assert (held["spells"], held["longest_s"]) == (1, pytest.approx(1.3 - patience, abs=2 * ROW))
    slides = quiet().pushers.assign(mode="slide")
    for other in (
        made(bumps=bump(0, "bottom", 0.3, 0.3 + 0.9 * patience)),
        made(bumps=bump(0, "pusher", 0.3, 1.9)),
        made(bumps=bump(0, "bottom", 0.3, 1.9), pushers=slides),
    ):
        assert "held at a wall" not in set(other.states)


def test_leaning_on_the_block_is_not_held_at_a_wall() -> None:
    """A long visit to a side of the block holds nobody at a wall."""
    visits = pd.DataFrame([dict.fromkeys(quiet().visits, 0.0) | {"partner": "block", "surface": "rear"}])
    run = made(bumps=bump(0, "rear", 0.1, 1.9), visits=visits)
    assert "held at a wall" not in set(run.states)


def test_states_in_their_order() -> None:
    """Where several hold, the first of the list is told: an idle one ahead, in a lap and at a wall is idle."""
    laps = pd.DataFrame({"pusher": [0], "t_start_s": [0.0], "t_end_s": [3.0], "n_strikes": [1]})
    bumps, far = bump(0, "bottom", -3.0, 3.0), quiet().pushers.assign(x_m=2.0)
    assert set(made(laps=laps, bumps=bumps, pushers=far.assign(mode="stop")).states) == {STATES[0]}
    one = quiet().pushers["pusher"] == 0
    assert set(made(laps=laps, bumps=bumps, pushers=far).states[one]) == {STATES[1]}
    assert set(made(laps=laps, bumps=bumps).states[one]) == {STATES[2]}
    assert set(made(bumps=bumps).states[one]) == {STATES[3]}


# ---- causes -------------------------------------------------------------------------------------------------------


def test_nothing_happens() -> None:
    """While carts only run, no cause but the missing lap is told."""
    others = [name for name in quiet().causes if name != "in_no_lap"]
    assert len(others) == 9
    assert never(quiet(), *others)


def test_halted() -> None:
    """A cart that halts at the first wall is halted from then on, and touches the wall."""
    run = simulate(cart((0.6, 0.1, -math.pi / 2), (0.3, 0.22, 0.0), acts=HALT), cycles=())
    arrives = (0.1 - R) / SPEED
    halted = cause(run, "halted")
    assert halted["t_first_s"] == pytest.approx(arrives, abs=NEAR + 0.03)
    assert halted["t_last_s"] == pytest.approx(4.0, abs=ROW)
    assert halted["share"] == pytest.approx((4.0 - arrives) / 2 / 4.0, abs=0.02)
    assert halted["spells"] == 1
    assert never(run, "dropped_out", "turning", "touching_pusher", "ahead_of_block")


def test_touching_a_wall() -> None:
    """A cart that presses on into a wall touches it from its arrival to the end, and is held there."""
    s = cart((0.6, 0.1, -math.pi / 2), acts=[{"act": "turn", "angle": 0.0}])
    run = simulate(s, cycles=())
    arrives = (0.1 - R) / SPEED
    touching = cause(run, "touching_wall")
    assert touching["t_first_s"] == pytest.approx(arrives, abs=NEAR + 0.03)
    assert touching["t_last_s"] == pytest.approx(4.0, abs=ROW)
    assert touching["share"] == pytest.approx((4.0 - arrives) / 4.0, abs=0.05)
    held = cause(run, "held_at_wall")
    assert held["t_first_s"] == pytest.approx(arrives + HELD_TURNS * R / SPEED, abs=0.3)
    assert never(run, "touching_pusher", "leaning_too_weak_for_floor", "ahead_of_block")


def test_touching_pushers() -> None:
    """Two carts head on meet half-way, and press against each other from then on."""
    gap = 0.4
    s = cart((0.3, 0.16, 0.0), (0.3 + gap, 0.16, math.pi), acts=PRESS_ON)
    run = simulate(s, cycles=())
    meet = (gap / 2 - R) / SPEED
    touching = cause(run, "touching_pusher")
    assert touching["t_first_s"] == pytest.approx(meet, abs=NEAR + 0.03)
    assert touching["share"] == pytest.approx((4.0 - meet) / 4.0, abs=0.1)
    assert never(run, "touching_wall", "halted", "held_at_wall")


def test_turning() -> None:
    """A cart that turns by half a turn at 2 rad/s after its bump is turning for that long."""
    s = cart((0.6, 0.1, -math.pi / 2), acts=[{"act": "turn", "angle": math.pi}, {"act": "advance", "distance": 10.0}],
             pushers={"turn_rate": 2.0}, seconds=3.0)  # fmt: skip
    run = simulate(s, cycles=())
    # in its first row as well, where it decides for the first time
    spell = run.block.loc[(run.block["n_turning"] > 0) & (run.block["t_s"] > 0.1), "t_s"]
    arrives = (0.1 - R) / SPEED
    assert spell.min() == pytest.approx(arrives, abs=NEAR + 0.03)
    assert spell.max() - spell.min() == pytest.approx(math.pi / 2.0, abs=2 * ROW)
    turning = cause(run, "turning")
    assert turning["longest_s"] == pytest.approx(math.pi / 2.0, abs=2 * ROW)
    assert turning["t_last_s"] == pytest.approx(arrives + math.pi / 2.0, abs=NEAR + 0.05)


def test_dropped_out() -> None:
    """A cart that fails drops out from then on, and is idle."""
    s = cart((0.3, 0.1, 0.0), (0.3, 0.22, 0.0), acts=HALT, errors={"dropout": 0.5})
    run = simulate(s, seed=3, cycles=())
    failed = run.pushers[run.pushers["mode"] == "failed"]
    assert len(failed)
    out = cause(run, "dropped_out")
    assert out["t_first_s"] == pytest.approx(failed["t_s"].min(), abs=1.5 * ROW)
    assert out["t_last_s"] == pytest.approx(4.0, abs=ROW)
    begins = failed.groupby("pusher")["t_s"].min()
    assert out["share"] == pytest.approx((4.0 - begins).sum() / 2 / 4.0, abs=0.01)
    assert set(run.states[failed.index]) == {"idle"}


def test_ahead_of_the_block() -> None:
    """A cart that starts ahead of the block is ahead all the time."""
    run = simulate(cart((2.5, 0.1, 0.0), (0.3, 0.22, 0.0), acts=HALT, seconds=2.0), cycles=())
    ahead = cause(run, "ahead_of_block")
    assert (ahead["share"], ahead["t_first_s"]) == (pytest.approx(0.5), 0.0)
    assert ahead["t_last_s"] == pytest.approx(2.0, abs=ROW)
    assert set(run.states[run.pushers["pusher"] == 0]) == {"ahead"}


@pytest.mark.parametrize(("stall", "is_weak"), [(1.0, True), (3.0, False)])
def test_leaning_too_weakly(stall: float, is_weak: bool) -> None:
    """A push below the floor's static friction (1.72 N) leans in vain from the arrival on, a stronger one does not."""
    s = cart((1.0, 0.16, 0.0), acts=PRESS_ON, pushers={"stall_force": stall})
    run = simulate(s, cycles=())
    arrives = (REAR_AT - 1.0 - R) / SPEED
    weak = cause(run, "leaning_too_weak_for_floor")
    if is_weak:
        assert weak["t_first_s"] == pytest.approx(arrives, abs=0.25)  # it rebounds a little first
        assert weak["share"] == pytest.approx((4.0 - arrives) / 4.0, abs=0.05)
        assert run.travel_m < 1e-3
    else:
        assert weak["share"] < 0.02
        assert run.travel_m > 0.01
    assert never(run, "block_jammed_between_walls")


def test_jammed_between_walls() -> None:
    """A narrowing channel stops a block for good: from then on it is jammed, under a push that the floor yields to."""
    narrow = ((0.0, 0.0), (1.46, 0.0), (1.66, 0.04), (3.0, 0.04), (3.0, 0.28), (1.66, 0.28), (1.46, 0.32), (0.0, 0.32))
    s = cart((1.0, 0.16, 0.0), acts=PRESS_ON, pushers={"stall_force": 4.0}, seconds=6.0, block={"offset": 0.0},
             channel={"outline": narrow})  # fmt: skip
    run = simulate(s, cycles=())
    jammed = cause(run, "block_jammed_between_walls")
    path = run.block
    stops = float(path.loc[path["x_m"] < path["x_m"].iloc[-1] - 1e-4, "t_s"].max())
    assert 0.0 < run.travel_m < 0.1
    assert stops < 4.0
    assert jammed["t_first_s"] == pytest.approx(stops, abs=0.5)
    assert jammed["t_last_s"] == pytest.approx(6.0, abs=ROW)
    assert jammed["share"] == pytest.approx((6.0 - stops) / 6.0, abs=0.1)


def test_spells() -> None:
    """Two spells are counted as two, with the longer one's length, and the times of the first and the last."""
    block = quiet().block.copy()
    t = block["t_s"]
    block["n_turning"] = np.where(t.between(0.5, 0.7) | t.between(1.2, 1.6), 1.0, 0.0)
    turning = cause(made(block=block), "turning")
    assert turning["spells"] == 2
    assert turning["t_first_s"] == pytest.approx(0.5, abs=1.5 * ROW)
    assert turning["t_last_s"] == pytest.approx(1.6, abs=1.5 * ROW)
    assert turning["longest_s"] == pytest.approx(0.4, abs=2 * ROW)
    assert turning["share"] == pytest.approx(0.6 / 2 / 2.0, abs=ROW)  # one of two carts
