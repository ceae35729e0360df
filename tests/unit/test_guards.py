"""What watches over a run: the comparison of the two ways to the engine, and the guards that end a run."""

from __future__ import annotations

import math
import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from swarmpush.demos import demo
from swarmpush.dynamics import host, simulation, world
from swarmpush.dynamics.chipmunk import MOTION, ORDERS
from swarmpush.dynamics.host import Host, HostSpace, host_disagreement
from swarmpush.dynamics.loop import Task, advance, advance_plainly
from swarmpush.dynamics.run import Run
from swarmpush.dynamics.steps import choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.loading import load
from swarmpush.scenario import Scenario

# ---- the compiled way to the engine -------------------------------------------------------------------------------

Step = Callable[[Host, float], int]
_STEP: Step = host._step_fast


def wrong_order(at: int) -> Step:
    """A step that hands over one order of the bar with the wrong sign."""

    def step(given: Host, dt: float) -> int:
        given.orders[3, at] *= -1.0
        return _STEP(given, dt)

    return step


def wrong_reading(at: int) -> Step:
    """A step that reads one number of the second pusher's state a billionth too large."""

    def step(given: Host, dt: float) -> int:
        n = _STEP(given, dt)
        given.motion[2, at] += 1e-9
        return n

    return step


def weak_floor(given: Host, dt: float) -> int:
    given.floor_cap[0, 0] *= 0.5
    return _STEP(given, dt)


def swapped_loads(given: Host, dt: float) -> int:
    n = _STEP(given, dt)
    given.floor_load[:] = given.floor_load[:, ::-1].copy()
    return n


def lost_pair(given: Host, dt: float) -> int:
    return max(_STEP(given, dt) - 1, 0)


MUTANTS: dict[str, tuple[Step, str]] = {
    **{f"order {k} with the wrong sign": (wrong_order(k), "motion") for k in range(ORDERS)},
    **{f"number {k} of the state misread": (wrong_reading(k), "motion") for k in range(MOTION)},
    "floor too weak": (weak_floor, "motion"),
    "floor's loads swapped": (swapped_loads, "floor"),
    "contact overlooked": (lost_pair, "contacts"),
    "longer step": (lambda given, dt: _STEP(given, dt * (1 + 1e-12)), "motion"),
}


@pytest.mark.parametrize("name", MUTANTS)
def test_a_wrong_step_is_noticed(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever the compiled way to the engine does otherwise, the comparison says so, and names the kind."""
    step, kind = MUTANTS[name]
    monkeypatch.setattr(host, "_step_fast", step)
    assert kind in host_disagreement()
    monkeypatch.undo()
    assert host_disagreement() == ""


@pytest.mark.parametrize("column", range(9))
def test_misread_contacts_are_noticed(column: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """A contact of which the impulse, the normal, a place or the number of points has the wrong sign is noticed."""
    read = host._contact_rows

    def misread(given: Host, n_pairs: int) -> Any:
        rows = read(given, n_pairs)
        rows[:, column] *= -1.0
        return rows

    monkeypatch.setattr(host, "_contact_rows", misread)
    assert "meaning of contacts" in host_disagreement()


def test_a_wrong_mass_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    """A body that is made heavier by too much, or whose moment of inertia stays, is noticed."""
    weigh = host._weigh
    monkeypatch.setattr(host, "_weigh", lambda given, k, mass, moment: weigh(given, k, mass * 1.001, moment))
    assert "motion in step 30" in host_disagreement()
    monkeypatch.setattr(host, "_weigh", lambda given, k, mass, moment: weigh(given, k, mass, 0.0))
    assert "motion in step" in host_disagreement()


# where compiled code is told to look, one field after another; each line of output is what the comparison says
LAYOUTS = """
from swarmpush.dynamics import chipmunk
chipmunk.{change}
from swarmpush.dynamics.host import host_disagreement
print(host_disagreement() or "nothing")
"""


@pytest.mark.parametrize(
    ("change", "kind"),
    [
        ("_R1, chipmunk._R2 = chipmunk._R2, chipmunk._R1", "meaning of contacts"),
        ("_INVERSE_MASS = chipmunk._MASS", "motion in step 30"),
    ],
)
def test_a_wrong_layout_is_noticed(change: str, kind: str, tmp_path: Path) -> None:
    """Compiled code that looks for a field in a wrong place of the engine's records is found out."""
    done = subprocess.run(
        [sys.executable, "-c", LAYOUTS.format(change=change)], capture_output=True, text=True, check=True, timeout=300,
        env=os.environ | {"NUMBA_CACHE_DIR": str(tmp_path)},
    )  # fmt: skip
    assert kind in done.stdout


def test_an_unknown_layout_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    """An engine whose bodies' fields cannot be found is not driven by address."""
    monkeypatch.setattr(host.chipmunk, "LAYOUT_IS_KNOWN", False)
    assert host_disagreement() == "layout of a body"


# ---- guards -------------------------------------------------------------------------------------------------------

CHUNK = 400  # steps before something goes wrong
SLANTED = ((0.0, 0.1), (1.0, 0.0), (3.0, 0.0), (3.0, 0.32), (1.0, 0.32), (0.0, 0.22))


def lost_through_taper(space: HostSpace, task: Task) -> None:
    space.pushers[0].position = 1.0, 1.0  # in radii: within length and width, but below the slanted wall


def lost_through_end(space: HostSpace, task: Task) -> None:
    space.pushers[0].position = -0.01, 4.0


def jump(space: HostSpace, task: Task) -> None:
    space.pushers[0].velocity = 1.001 / task.rig.dt, 0.0


def overlap(space: HostSpace, task: Task) -> None:
    x, y = space.block.position
    space.pushers[0].position = x + task.ground.front_reach + 0.4, y


def not_a_number(space: HostSpace, task: Task) -> None:
    task.crew.pushers["stall"][0] = math.nan


def block_not_a_number(space: HostSpace, task: Task) -> None:
    task.ground.blocks["drag_along"][-1] = math.nan


def spinning_block(space: HostSpace, task: Task) -> None:
    task.ground.blocks["yaw_drag"][-1] = math.nan


GUARDS = {
    "taper": (lost_through_taper, "a pusher left the channel"),
    "end": (lost_through_end, "a pusher left the channel"),
    "jump": (jump, "a pusher moved farther than its radius in one step"),
    "overlap": (overlap, "bodies were pressed into each other"),
    "pusher without number": (not_a_number, "the motion ran away"),
    "block without number": (block_not_a_number, "the motion ran away"),
    "spin without number": (spinning_block, "the motion ran away"),
}


def passage(*, has_train: bool) -> Scenario:
    s = load(demo("service_passage"))
    s = s.replace(channel={"outline": SLANTED}, goal={"time_limit": 30.0}, start={"region": "behind"})
    if has_train:
        behind = s.block.model_copy(update={"rear_at": 1.6})
        s = s.model_copy(update={"train": (behind,)})
    return s


def meddled_run(meddle: Callable[[HostSpace, Task], None], s: Scenario, monkeypatch: pytest.MonkeyPatch) -> Run:
    """A run in which something goes wrong after `CHUNK` steps."""

    def step(space: HostSpace, task: Task, first: int, n: int, is_answered: bool) -> tuple[int, int]:
        if first == CHUNK:
            meddle(space, task)
        return advance(space.host, task, first, n, is_answered)

    monkeypatch.setattr(world, "CHUNK", CHUNK)
    monkeypatch.setattr(simulation, "_stepper", lambda: step)
    return simulate(s, seed=2, cycles=())


@pytest.mark.parametrize("has_train", [False, True])
@pytest.mark.parametrize("name", GUARDS)
def test_guards(name: str, has_train: bool, monkeypatch: pytest.MonkeyPatch) -> None:
    """What cannot be ends the run within a row of its path, with its reason, and keeps what had happened before."""
    meddle, reason = GUARDS[name]
    s = passage(has_train=has_train)
    usual = simulate(s, seed=2, cycles=())
    run = meddled_run(meddle, s, monkeypatch)
    assert usual.ended in ("time", "goal")
    assert run.ended == reason
    before = CHUNK * run.steps.dt_s
    assert before <= run.duration_s <= before + (run.steps.sample_steps + 2) * run.steps.dt_s
    early = usual.block["t_s"] < before
    assert early.sum() > 10
    assert run.block[: early.sum()].equals(usual.block[early])
    n = int(early.sum()) * s.pushers.count
    assert run.pushers[:n].equals(usual.pushers[:n])
    assert run.block["t_s"].iloc[-1] == pytest.approx(run.duration_s)
    ended = usual.visits["t_off_s"] < before - 3 * run.steps.dt_s
    assert run.visits["t_on_s"].isin(usual.visits.loc[ended, "t_on_s"]).sum() >= ended.sum()
    assert run.summary()["has_arrived"] == 0.0
    assert run.to_dict()["ended"] == reason


def test_guards_leave_sound_runs_alone(monkeypatch: pytest.MonkeyPatch) -> None:
    """With nothing meddled with, the same run goes on to its end."""
    assert meddled_run(lambda space, task: None, passage(has_train=True), monkeypatch).ended in ("time", "goal")


def test_guards_of_the_plain_loop(monkeypatch: pytest.MonkeyPatch) -> None:
    """The plain loop has the same guards."""

    def step(space: HostSpace, task: Task, first: int, n: int, is_answered: bool) -> tuple[int, int]:
        if first == 20:
            jump(space, task)
        return advance_plainly(space, task, first, n, is_answered)

    monkeypatch.setattr(world, "CHUNK", 20)
    monkeypatch.setattr(simulation, "_stepper", lambda: step)
    run = simulate(passage(has_train=False), seed=2, cycles=())
    assert run.ended == GUARDS["jump"][1]
    assert np.isfinite(run.pushers["x_m"]).all()


# ---- heading noise of bars ----------------------------------------------------------------------------------------


def test_heading_noise_of_a_bar_is_spread_over_time() -> None:
    """A held bar's heading wanders as far as stated, but in no step faster than its noise of one interval allows."""
    diffusion, n, seconds = 0.2, 40, 2.0
    s = load(demo("service_passage"))
    steps = choose_step(s)
    s = s.replace(
        pushers={"count": n, "radius": 0.01, "nose": 0.02, "pass_through": True},
        channel={"length": 50.0, "width": 40.0}, block={"rear_at": 40.0}, start={"heading": 0.0},
        errors={"heading_diffusion": diffusion, "speed_spread": 0.0, "turn_sd": 0.0, "missed_bumps": 0.0},
        goal={"time_limit": seconds}, trial={"sample_every": steps.dt_s},
    )  # fmt: skip
    run = simulate(s, seed=4, steps=replace(steps, sample_steps=1), cycles=())
    assert not len(run.visits)
    heading = run.pushers["heading_rad"].to_numpy().reshape(-1, n)
    fastest = np.abs(np.diff(heading, axis=0)).max() / steps.dt_s
    interval = steps.noise_steps * steps.dt_s
    assert fastest < 5.0 * diffusion / math.sqrt(interval)  # five standard deviations
    assert heading[-1].std() == pytest.approx(diffusion * math.sqrt(seconds), rel=4 / math.sqrt(2 * n))
