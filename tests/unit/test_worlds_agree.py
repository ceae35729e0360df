"""One routine, two worlds: where bodies have next to no inertia and no friction, they go where points go."""

from __future__ import annotations

import math
import tomllib
from typing import Any

import numpy as np
import pytest

import swarmpush
from swarmpush.draws import stream_keys
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.loading import from_tables
from swarmpush.program import EXACT, MEMORY, NOTES, compile_routine
from swarmpush.scenario import Scenario

N_LEGS = 14
HEADING = 0.3  # rad
R = 0.02  # m
# A bump is felt up to one step late and one step more passes before the turn; 0.8 % of a radius is run per step, and
# each lap of errors is carried on by the next legs, which turn flat angles into longer ones.
NEAR = 0.25 * R

RUN: dict[str, Any] = {"act": "run"}
GO_ON: dict[str, Any] = {"act": "depart", "angle": "35 deg", "side": "onward"}
ROUTINES: dict[str, list[dict[str, Any]]] = {
    "turn": [RUN, {"act": "turn", "angle": "115 deg"}],
    "depart": [RUN, GO_ON],
    "mirror": [RUN, {"act": "mirror"}],
    "advance": [RUN, GO_ON, {"act": "advance", "distance": "9 cm"}, {"act": "turn", "angle": "50 deg"}],
    "slide for a length": [RUN, {"act": "slide", "length": "3 cm"}, GO_ON],
    "slide for a time": [RUN, {"act": "slide", "time": "0.25 s"}, GO_ON],
    "gauge": [
        RUN,
        GO_ON,
        {"act": "gauge", "maximum": "30 cm"},
        {"act": "branch", "on": "range", "below": "12 cm", "go": "short"},
    ],
    "sight": [
        RUN,
        GO_ON,
        {"act": "sight", "face": "rear", "half_angle": "25 deg"},
        {"act": "branch", "on": "sight", "go": "short"},
    ],
}
SHORT = {"name": "short", "acts": [{"act": "turn", "angle": "-20 deg"}], "then": "go"}

CORRIDOR = {"length": 0.8, "width": 0.3}
YARD = {
    "length": 0.8,
    "width": 0.3,
    "outline": [[0.0, 0.02], [0.5, 0.0], [0.8, 0.0], [0.8, 0.3], [0.45, 0.3], [0.3, 0.26], [0.0, 0.3]],
    "posts": [[[0.16, 0.12], [0.2, 0.12], [0.19, 0.16]]],
}


def rig(channel: dict[str, Any], acts: list[dict[str, Any]]) -> Scenario:
    """One quick light pusher before a block that nothing can move."""
    tables = tomllib.loads(swarmpush.demo("service_passage").read_text(encoding="utf-8"))
    smooth = {"restitution": 0.0, "friction": 0.0}
    tables |= {
        "channel": channel,
        "block": {"length": 0.1, "width": 0.2, "mass": 50.0, "rear_at": 0.5, "yaw": "held"},
        "pushers": {"count": 1, "radius": R, "mass": 1e-5, "free_speed": 0.2, "stall_force": 0.5},
        "floor": {"static_friction": 0.9, "kinetic_friction": 0.9},
        "contacts": dict.fromkeys(("pusher_wall", "pusher_block", "pusher_pusher", "block_wall"), smooth),
        "routine": {"stages": [{"name": "go", "acts": acts}, SHORT]},
        "errors": {},
        "start": {"placed": [{"x": 0.3, "y": 0.1, "heading": HEADING}]},
        "goal": {"travel": 0.1, "time_limit": 30.0},
    }
    return from_tables(tables)


@pytest.mark.parametrize("channel", [CORRIDOR, YARD], ids=["corridor", "yard"])
@pytest.mark.parametrize("name", ROUTINES)
def test_bodies_go_where_points_go(name: str, channel: dict[str, Any]) -> None:
    """Every act, in a corridor and among slanted walls and a post, leads a light body along the point's path."""
    s = rig(channel, ROUTINES[name])
    hits, surfaces = np.zeros((N_LEGS, 6)), np.zeros(N_LEGS, dtype=np.int64)
    n = trace(
        boundary_of(s), compile_routine(s.routine, surface_names(s)), EXACT, 0.0, s.pushers.free_speed,
        stream_keys(1, 1)[0], np.array([0.3, 0.1, HEADING]), 0.0, hits, surfaces, np.zeros(MEMORY, dtype=np.int64),
        np.zeros(NOTES),
    )  # fmt: skip
    assert n == N_LEGS
    names = [surface_names(s)[k] if k >= 0 else "" for k in surfaces]
    # at a corner a hair's breadth decides where a pusher is sent
    known = next((k for k, surface in enumerate(names) if "corner" in surface), n)
    bumps = hits[:known][surfaces[:known] >= 0]
    assert len(bumps) >= 3
    run = simulate(s.replace(goal={"time_limit": float(hits[:, 5].sum()) + 0.1}), seed=1, cycles=())
    starts = run.visits[["x_m", "y_m"]].to_numpy()
    for x, y in bumps[:, :2]:
        assert math.sqrt(((starts - (x, y)) ** 2).sum(axis=1).min()) < NEAR
