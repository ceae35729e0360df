"""The books of energy, momentum and visits, over rigs in which everything happens at once."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from rigs import FAINT, PUSH_ON, dry, pair, placed, rig, turning

import swarmpush
from swarmpush.dynamics.run import Run
from swarmpush.loading import from_tables
from swarmpush.scenario import Scenario

ROUNDING = 1e-9  # relative: sums over some 30 000 steps
CREW = {"count": 8, "turn_rate": 6.0, "latency": 0.02}
BLOCK = {"length": 0.2, "width": 0.3, "mass": 0.5, "rear_at": 1.2}
BAR = {"nose": 0.04, "trunk": 0.03}
SHARP = {name: pair(0.3, 0.25) for name in ("pusher_wall", "pusher_block", "pusher_pusher", "block_wall")}
AHEAD = {"length": 0.15, "width": 0.2, "mass": 0.3, "rear_at": 1.5, "offset": 0.05, "centre_of_mass": (0.05, 0.02)}
CASES: dict[str, dict[str, Any]] = {
    "discs": {},
    "held bars": {"pushers": CREW | BAR},
    "free discs": {
        "pushers": CREW | {"heading": "free", "contact_arm": 0.01},
        "errors": {"turn_sd": 0.3, "heading_diffusion": 0.3, "heading_drift": 0.2},
    },
    "free bars": {"pushers": CREW | BAR | {"heading": "free", "contact_arm": -0.005, "drive_while_turning": 0.5}},
    "tilted": {"channel": {"slope": 0.01, "cross_slope": -0.02}, "pushers": CREW | {"stall_force": 0.5}},
    "faulty": {"errors": {"fade_time": 2.0, "dropout": 0.2, "stall_spread": 0.1, "drift_spread": 0.3}},
    "liquid": {
        "fluid": {"block_drag": 0.3, "block_drag_across": 0.8, "block_yaw_drag": 0.01, "near_wall_factor": 1.5},
        "pushers": CREW | {"sideways_drag": 2.5},
    },
    "off centre": {"block": BLOCK | {"centre_of_mass": (0.08, 0.05), "centre_of_friction": (0.12, -0.03)}},
    "train": {"train": [AHEAD], "pushers": CREW | {"stall_force": 0.3}},
}


def crowded(**tables: Any) -> Scenario:
    """A crew that turns by 130 degrees at every bump, behind a block in a corridor."""
    train = tables.pop("train", [])
    s = rig(
        **{
            "channel": {"length": 3.0, "width": 0.6} | tables.pop("channel", {}),
            "block": BLOCK, "pushers": CREW, "contacts": SHARP, "routine": turning(130.0), "floor": dry(0.1),
            "start": {"region": "behind"}, "goal": {"travel": 0.9, "time_limit": 4.0}, "errors": {"turn_sd": 0.3},
        }
        | tables,
    )  # fmt: skip
    return from_tables(s.to_tables() | {"train": train}) if train else s


@pytest.fixture(scope="module", params=list(CASES))
def run(request: pytest.FixtureRequest) -> Run:
    return swarmpush.simulate(crowded(**CASES[request.param]), cycles=())


def test_energy_balances(run: Run) -> None:
    """Work of drives and gravity = what drag, floor and contacts took + change of kinetic energy (energy theorem)."""
    e = run.energy
    given, taken = e.drive + e.heading + e.slope, e.drag + e.floor + sum(e.contacts.values())
    assert given == pytest.approx(taken + e.change, rel=ROUNDING)
    assert e.residual_rel < ROUNDING
    assert min(e.drive, e.drag) > 0.0
    assert len(run.visits) > 5
    assert sum(e.contacts.values()) == pytest.approx(run.visits["energy_lost_J"].sum(), rel=ROUNDING)
    for name, partner in (("pusher_wall", "wall"), ("pusher_block", "block"), ("pusher_pusher", "pusher")):
        rows = run.visits[(run.visits["partner"] == partner) & (run.visits["pusher"] >= 0)]
        assert e.contacts[name] == pytest.approx(rows["energy_lost_J"].sum(), rel=ROUNDING, abs=1e-15)
    assert (e.slope != 0.0) == (run.scenario.channel.slope != 0.0)


def test_momentum_balances(run: Run) -> None:
    """Impulses on the block add up to its momentum, and their moments to its angular momentum about its centre."""
    books = run.books
    for axis in (0, 1):
        parts = [getattr(books, name)[axis] for name in ("pushers", "blocks", "walls", "floor", "drag", "slope")]
        assert sum(parts) == pytest.approx(books.change[axis], abs=ROUNDING * books.gross)
    about = dict(books.about_centre)
    change = about.pop("change")
    size = sum(map(abs, about.values()))
    assert sum(about.values()) == pytest.approx(change, abs=ROUNDING * size)
    assert max(books.residual_rel, books.residual_turn_rel) < ROUNDING


def test_visits_tell_times_right(run: Run) -> None:
    """A visit's dwell is the time from first to last touch; nothing touches faster than it could move."""
    visits = run.visits
    assert visits["dwell_s"].to_numpy() == pytest.approx((visits["t_off_s"] - visits["t_on_s"]).to_numpy(), abs=1e-12)
    assert (visits["dwell_s"] > 0.0).all()
    assert (visits["speed_m_s"] >= 0.0).all()
    per_pusher = visits[visits["pusher"] >= 0].groupby(["pusher", "surface", "other_pusher"])
    for _, rows in per_pusher:
        assert (rows["t_on_s"].to_numpy()[1:] >= rows["t_off_s"].to_numpy()[:-1] - 1e-12).all()


# ---- one impact ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("e", [0.0, 0.4, 0.9, 1.0])
def test_energy_lost_in_one_impact(e: float) -> None:
    """A frictionless impact takes (1 - e^2) m_red v^2/2 (textbook)."""
    s = rig(fluid=FAINT, contacts={"pusher_block": pair(e)}, start=placed((3.0, 0.5, 0.0)), goal={"time_limit": 3.0})
    run = swarmpush.simulate(s, cycles=())
    reduced = 1 / (1 / s.pushers.mass + 1 / s.block.mass)
    lost = run.visits["energy_lost_J"].iloc[0]
    expected = (1 - e**2) * reduced * run.visits["approach_m_s"].iloc[0] ** 2 / 2
    # at e = 0 the two stay in touch until the pusher has halted, and the drive presses in the step of the hit
    assert lost == pytest.approx(expected, rel=1e-3, abs=1e-9)
    assert run.energy.contacts["pusher_block"] == pytest.approx(run.visits["energy_lost_J"].sum(), rel=ROUNDING)


def test_energy_lost_to_sliding_friction() -> None:
    """A pusher that leans into a wall at an angle p and slides loses mu F sin p times its way to friction."""
    mu, p, force = 0.3, 0.6, 1.0
    s = rig(
        pushers={"mass": 1e-4, "stall_force": force, "free_speed": 0.1, "latency": PUSH_ON},
        contacts={"pusher_wall": pair(0.0, mu)}, start=placed((1.0, 0.98, p)), goal={"time_limit": 2.0},
    )  # fmt: skip
    run = swarmpush.simulate(s, cycles=())
    way = run.pushers["x_m"].iloc[-1] - 1.0
    assert way == pytest.approx(0.2 * (math.cos(p) - mu * math.sin(p)), rel=2e-3)  # two steps of a thousand to set in
    assert run.energy.contacts["pusher_wall"] == pytest.approx(mu * force * math.sin(p) * way, rel=2e-3)


# ---- what visits tell ------------------------------------------------------------------------------------------------


def test_travel_within_and_after_visits() -> None:
    """One pusher's visits to the block and the stretches between them add up to the block's travel."""
    s = crowded(pushers=CREW | {"count": 1, "mass": 1.0, "stall_force": 2.0}, errors={}, start=placed((0.6, 0.3, 0.0)),
                goal={"travel": 0.9, "time_limit": 6.0}, routine=turning(180.0))  # fmt: skip
    run = swarmpush.simulate(s, cycles=())
    touches = run.visits[run.visits["partner"] == "block"]
    assert len(touches) >= 2
    ways = touches["block_dx_m"].sum() + touches["block_dx_next_m"].sum()
    assert ways == pytest.approx(run.travel_m, rel=ROUNDING)
    assert run.visits.loc[run.visits["partner"] != "block", "block_dx_next_m"].isna().all()
    x, t = run.block["x_m"].to_numpy(), run.block["t_s"].to_numpy()
    ends = np.append(touches["t_on_s"].to_numpy()[1:], run.duration_s)
    told = touches["block_dx_m"] + touches["block_dx_next_m"]
    seen = np.interp(ends, t, x) - np.interp(touches["t_on_s"], t, x)
    assert told.to_numpy() == pytest.approx(seen, abs=2e-3)  # m: a sample is 6 ms long, and the block is hit in it


def test_travel_after_visits_that_overlap() -> None:
    """Where two pushers push at once, the travel after a visit begins at its end and never runs backwards."""
    s = rig(
        pushers={"count": 2, "mass": 1e-3, "latency": PUSH_ON}, block={"width": 0.3, "mass": 0.01},
        fluid={"block_drag": 0.1, "block_yaw_drag": 1.0}, start=placed((3.9, 0.45, 0.0), (3.5, 0.55, 0.0)),
        goal={"time_limit": 1.5},
    )  # fmt: skip
    run = swarmpush.simulate(s, cycles=())
    visits = run.visits
    assert (visits["t_on_s"].iloc[1:].to_numpy() < visits["t_off_s"].iloc[:-1].to_numpy()).any()
    assert (visits["block_dx_next_m"] >= 0.0).all()
    assert (visits["block_dx_m"] + visits["block_dx_next_m"] <= run.travel_m).all()
    last = visits["t_off_s"] > run.duration_s - 0.01
    assert (visits.loc[last, "block_dx_next_m"] < 1e-3).all()


def test_dwell_of_a_lean() -> None:
    """A pusher that leans for good dwells until the end, touched at its settled speed."""
    s = rig(
        pushers={"mass": 1e-3, "latency": PUSH_ON}, block={"mass": 1e-2},
        fluid={"block_drag": 0.1, "block_yaw_drag": 1.0}, start=placed((3.48, 0.5, 0.0)), goal={"time_limit": 2.0},
    )  # fmt: skip
    run = swarmpush.simulate(s, cycles=())
    last = run.visits.iloc[-1]
    assert last["t_off_s"] == pytest.approx(run.duration_s, abs=1e-9)
    first = run.visits.iloc[0]
    assert first["speed_m_s"] == pytest.approx(1.0, rel=1e-6)
    assert first["approach_m_s"] == pytest.approx(1.0, rel=1e-6)
    assert first["t_on_s"] == pytest.approx(0.5 + s.pushers.relaxation_time, abs=2 * run.steps.dt_s)
