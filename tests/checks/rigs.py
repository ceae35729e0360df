"""Small rigs for the checks: one frictionless pusher and a block in a wide channel, to be varied table by table."""

from __future__ import annotations

import copy
import math
from typing import Any

from swarmpush.loading import from_tables
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


def at_face(s: Scenario, offset: float = 0.0) -> tuple[float, float, float]:
    """A start in touch with the rear face, `offset` from the middle of the channel, heading along it."""
    return s.block.rear_at - s.pushers.radius, s.channel.width / 2 + offset, 0.0


def turning(degrees: float) -> dict[str, Any]:
    """The routine that turns by the same angle at every bump."""
    return {"stages": [{"name": "turn", "acts": [{"act": "run"}, {"act": "turn", "angle": math.radians(degrees)}]}]}
