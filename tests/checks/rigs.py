"""Small rigs for the checks: one frictionless pusher and a block in a wide channel, to be varied table by table."""

from __future__ import annotations

import copy
import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import SURFACES, boundary_of
from swarmpush.loading import from_tables
from swarmpush.program import EXACT, MEMORY, NOTES, Senses, compile_routine
from swarmpush.scenario import GRAVITY, Scenario

G = GRAVITY
SLIPPERY = {"restitution": 0.0, "friction": 0.0}
FAINT = {"block_drag": 1e-9, "block_yaw_drag": 1e-12}  # a fluid that takes nothing away within a run
STOP_AT_A_BUMP = [{"name": "one bump", "acts": [{"act": "run"}, {"act": "halt"}]}]
PUSH_ON = 1e4  # s: a latency longer than any run, so that a pusher that has felt the block leans on it for good

BASE: dict[str, Any] = {
    "format": 1,
    "about": {"name": "check"},
    "channel": {"length": 8.0, "width": 1.0},
    "block": {"length": 0.2, "width": 0.1, "mass": 1.0, "rear_at": 4.0},
    "pushers": {"count": 1, "radius": 0.02, "mass": 0.1, "free_speed": 1.0, "stall_force": 0.1},
    "contacts": {
        "pusher_wall": SLIPPERY, "pusher_block": SLIPPERY, "pusher_pusher": SLIPPERY, "block_wall": SLIPPERY,
    },
    "routine": {"stages": STOP_AT_A_BUMP},
    "goal": {"travel": 1.0, "time_limit": 4.0},
}  # fmt: skip


def rig(**tables: dict[str, Any]) -> Scenario:
    """The base rig with the given keys changed or added, checked as a file would be."""
    merged = copy.deepcopy(BASE)
    for name, keys in tables.items():
        merged[name] = merged.get(name, {}) | keys
    if "floor" not in merged and "fluid" not in merged:
        merged["fluid"] = FAINT
    return from_tables(merged)


def placed(*starts: tuple[float, float, float]) -> dict[str, Any]:
    """The start table for pushers at these x, y (m) and headings (rad)."""
    return {"placed": [{"x": x, "y": y, "heading": heading} for x, y, heading in starts]}


def plate_moment(s: Scenario) -> float:
    """Moment of inertia of the rectangular block as a uniform plate, kg m2: m (l^2 + b^2)/12 (textbook)."""
    return s.block.mass * (s.block.length**2 + s.block.width**2) / 12


def dry(friction: float) -> dict[str, Any]:
    """A dry floor whose static and kinetic friction are the same."""
    return {"static_friction": friction, "kinetic_friction": friction}


def pair(restitution: float, friction: float = 0.0) -> dict[str, float]:
    """A pair of surfaces."""
    return {"restitution": restitution, "friction": friction}


def one_stage(*acts: dict[str, Any]) -> dict[str, Any]:
    """A routine of one stage that runs to the next bump and then does these acts."""
    return {"stages": [{"name": "lap", "acts": [{"act": "run"}, *acts]}]}


def turning(degrees: float) -> dict[str, Any]:
    """The routine that turns by the same angle at every bump."""
    return one_stage({"act": "turn", "angle": math.radians(degrees)})


# ---- the point world in a corridor whose face closes it from wall to wall ----------------------------------------

RADIUS = 0.02  # m, of the pusher; its centre has a corridor of width 1 m, and distances are counted from there
FACE_AT = 50.0  # m: where the pusher's centre meets the face


def closed_corridor(routine: dict[str, Any], *, face_at: float = FACE_AT, **tables: dict[str, Any]) -> Scenario:
    """A corridor 1 m wide for the pusher's centre, which meets the face at x = `face_at`."""
    width = 1.0 + 2 * RADIUS
    return rig(
        channel={"length": 999.0, "width": width},
        block={"width": width, "rear_at": face_at + RADIUS},
        routine=routine,
        **tables,
    )


def follow(
    s: Scenario,
    start: tuple[float, float, float],
    n_bumps: int,
    *,
    seed: int = 0,
    senses: Senses = EXACT,
    nudge: float = 0.0,
) -> tuple[NDArray[np.float64], list[str]]:
    """One pusher from bump to bump; `start` is x from the face (negative), y from the lower wall, heading.

    Returns:
        hits: (n, 6) x from where the face was at the start, y from the lower wall, arriving and departing heading,
            run length and time. names: of the surfaces.
    """
    boundary = boundary_of(s)
    rear = SURFACES.index("rear")
    origin = np.array([boundary.segments[rear, 0], s.pushers.radius])
    hits, surfaces = np.zeros((n_bumps, 6)), np.zeros(n_bumps, dtype=np.int64)
    n = trace(
        boundary, compile_routine(s.routine), senses, 0.0, s.pushers.free_speed, stream_keys(seed, 1)[0],
        np.array([origin[0] + start[0], origin[1] + start[1], start[2]]), nudge, hits, surfaces,
        np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES),
    )  # fmt: skip
    hits[:n, :2] -= origin
    return hits[:n], [SURFACES[k] for k in surfaces[:n]]
