"""Scenarios at random: everything that a file can say, in sizes from specks to lorries.

A `Source` hands out the numbers, so that hypothesis and a seeded generator draw from the same rigs.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Sequence
from random import Random
from typing import Any, TypeVar

from swarmpush.kinematics.boundary import surface_names
from swarmpush.loading import from_tables
from swarmpush.misfits import MAX_TRAVEL
from swarmpush.problems import ScenarioError
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts

Choice = TypeVar("Choice")
Tables = dict[str, Any]

LARGEST_CREW = 12


class Source(ABC):
    """Where the random choices come from."""

    @abstractmethod
    def number(self, low: float, high: float) -> float:
        """A number from low to high."""

    @abstractmethod
    def whole(self, low: int, high: int) -> int:
        """A whole number from low to high."""

    def pick(self, options: Sequence[Choice]) -> Choice:
        """One of some options."""
        return options[self.whole(0, len(options) - 1)]

    def power(self, low: float, high: float) -> float:
        """A number of any size: ten to a power from low to high."""
        return float(10.0 ** self.number(low, high))

    def maybe(self, low: float, high: float) -> float:
        """A number from low to high, or as likely 0; next to nothing counts as 0."""
        value = self.number(low, high) if self.whole(0, 1) else 0.0
        return value if abs(value) > 1e-9 else 0.0


class Seeded(Source):
    """Choices that follow from a seed."""

    def __init__(self, seed: int) -> None:
        self._random = Random(seed)

    def number(self, low: float, high: float) -> float:
        return self._random.uniform(low, high)

    def whole(self, low: int, high: int) -> int:
        return self._random.randint(low, high)


def seeded_scenario(seed: int) -> Scenario:
    """The scenario of a seed: the first valid one among those drawn from it."""
    source = Seeded(seed)
    while (found := any_scenario(source)) is None:
        pass
    return found


def any_scenario(source: Source) -> Scenario | None:
    """A scenario; None if what was drawn does not fit together."""
    tables = _rig(source)
    try:
        plain = from_tables(tables | {"routine": {"stages": [{"name": "a", "acts": [{"act": "run"}]}]}})
        draw_starts(plain, plain.trial.seed)
        tables["routine"] = _routine(source, plain)
        return from_tables(tables)
    except ScenarioError:
        return None


def _rig(source: Source) -> Tables:
    number, whole, pick, power, maybe = source.number, source.whole, source.pick, source.power, source.maybe
    radius = power(-5.0, 0.0)
    shape = pick(["disc", "disc", "bar"])
    nose, trunk = (maybe(0.05, 4.0) * radius, maybe(0.05, 4.0) * radius) if shape == "bar" else (0.0, 0.0)
    reach = radius + math.hypot(nose, trunk) / 2
    speed, mass = radius * power(-1.5, 1.5), power(-12.0, 2.0)
    crossing = radius / speed
    stall = mass * speed**2 / radius * power(-2.0, 4.0)
    width = reach * number(2.3, 14.0)
    blocks = _blocks(source, radius, reach, width, mass, stall * crossing * radius)
    block = blocks[0]
    ahead = max(other["rear_at"] + other["length"] for other in blocks)
    length = ahead + reach * number(2.5, 20.0)
    heading = pick(["held", "free"])
    rates = [0.3 / crossing, 5.0 / crossing]
    gravity = number(0.0, 3.0) * stall / block["mass"]
    tables: Tables = {
        "format": 1,
        "about": {"name": "any"},
        "channel": _channel(source, length, width, block, reach),
        "block": block,
        "train": blocks[1:],
        "pushers": {
            "count": pick([1, 2, 3, whole(4, LARGEST_CREW)]), "radius": radius, "nose": nose, "trunk": trunk,
            "mass": mass, "free_speed": speed, "stall_force": stall, "sideways_drag": power(-2.0, 2.0),
            "heading": heading,
            "turn_rate": pick(rates if heading == "free" or shape == "bar" else [*rates, math.inf]),
            "drive_while_turning": maybe(0.0, 1.0), "bump_threshold": maybe(0.0, 0.5) * mass * speed,
            "bumper_arc": pick([2 * math.pi, number(0.5, 6.0)]), "latency": maybe(0.01, 5.0) * crossing,
            "pass_through": pick([False, False, True]),
        },
        "contacts": {
            name: {"restitution": pick([0.0, 1.0, number(0.0, 1.0)]), "friction": pick([0.0, 10.0, number(0.0, 2.0)])}
            for name in ("pusher_wall", "pusher_block", "pusher_pusher", "block_wall", "block_block")
        },
        "errors": {
            "turn_bias": maybe(-3.0, 3.0), "turn_sd": maybe(0.0, 3.0), "bearing_step": maybe(0.0, 3.0),
            "heading_diffusion": min(maybe(0.0, 2.0) / math.sqrt(crossing), 10.0),
            "heading_drift": max(min(maybe(-1.0, 1.0) / crossing, 100.0), -100.0), "bearing_sd": maybe(0.0, 3.0),
            "range_sd": maybe(0.0, 2.0) * radius, "missed_sights": maybe(0.0, 0.9), "missed_bumps": maybe(0.0, 0.9),
            "false_bumps": min(maybe(0.0, 1.0) / crossing, 1000.0), "speed_spread": maybe(0.0, 0.3),
            "mass_spread": maybe(0.0, 0.3), "stall_spread": maybe(0.0, 0.3),
            "drift_spread": min(maybe(0.0, 1.0) / crossing, 100.0), "dropout": min(maybe(0.0, 0.05) / crossing, 1000.0),
        },
        "start": {"region": pick(["behind", "behind", "anywhere", "ahead"])},
        "goal": {"travel": (length - block["rear_at"] - block["length"]) * number(0.01, 1.0), "time_limit": 10.0},
        "numerics": {"iterations": pick([10, 10, whole(1, 40)])},
        "trial": {"seed": whole(0, 1000)},
    }  # fmt: skip
    if heading == "free":
        tables["pushers"]["contact_arm"] = maybe(-2.0, 2.0) * radius
        if whole(0, 1):
            tables["pushers"]["turn_drag"] = stall * crossing * radius * power(-2.0, 2.0)
    if whole(0, 1):
        tables["pushers"]["yaw_inertia"] = mass * reach**2 * power(-2.0, 1.0)
    if whole(0, 3) == 0:
        tables["errors"]["fade_time"] = crossing * power(0.0, 3.0)
    if whole(0, 9) == 0:
        tables["numerics"]["step"] = MAX_TRAVEL * crossing * power(-2.0, 0.0)
    tables |= _medium(source, tables, gravity, stall / speed, radius)
    return tables


def _blocks(source: Source, radius: float, reach: float, width: float, mass: float, unit: float) -> list[Tables]:
    """The block and its train, one ahead of the other, some of them touching."""
    number, whole, pick, power = source.number, source.whole, source.pick, source.power
    blocks: list[Tables] = []
    rear_at = reach * number(3.0, 25.0)
    for _ in range(pick([1, 1, 2, 3])):
        length, across = radius * power(-0.3, 1.3), width * pick([number(0.1, 0.999), number(0.5, 0.99)])
        block: Tables = {
            "length": length, "width": across, "mass": mass * power(-3.0, 4.0), "rear_at": rear_at,
            "offset": (width - across) / 2 * number(-0.99, 0.99), "yaw": pick(["free", "free", "held"]),
        }  # fmt: skip
        if whole(0, 2) == 0:
            block["outline"] = _convex(source, length, across)
        if whole(0, 2) == 0:
            block["yaw_inertia"] = block["mass"] * (length**2 + across**2) * power(-2.0, 0.5)
        for name in ("centre_of_mass", "centre_of_friction"):
            if whole(0, 2) == 0:
                block[name] = [length * number(0.1, 0.9), across * number(-0.45, 0.45)]
        blocks.append(block)
        rear_at += length + radius * pick([0.0, number(0.0, 6.0)])
    return blocks


def _convex(source: Source, length: float, width: float) -> list[list[float]]:
    """A convex outline: points on an oval, stretched to the length and width."""
    n = source.whole(3, 7)
    angles = [2 * math.pi * (k + source.number(0.0, 0.8)) / n for k in range(n)]
    x, y = [math.cos(a) for a in angles], [math.sin(a) for a in angles]
    return [
        [length * (a - min(x)) / (max(x) - min(x)), width * ((b - min(y)) / (max(y) - min(y)) - 0.5)]
        for a, b in zip(x, y, strict=True)
    ]


def _channel(source: Source, length: float, width: float, block: Tables, reach: float) -> Tables:
    """A corridor, level or sloping, perhaps with tapered walls, perhaps with a post or two."""
    number, whole = source.number, source.whole
    channel: Tables = {"length": length, "width": width}
    if whole(0, 2) == 0:
        spare = 0.9 * (width - max(block["width"], 2.2 * reach)) / 2
        near, far = length * number(0.1, 0.4), length * number(0.5, 0.9)
        a, b, c = spare * number(0.0, 1.0), spare * number(0.0, 1.0), spare * number(0.0, 1.0)
        channel["outline"] = [[0.0, a], [near, 0.0], [length, b], [length, width], [far, width], [0.0, width - c]]
    if whole(0, 3) == 0:
        channel["posts"] = [
            [[x + dx, y + dy] for dx, dy in ((0.0, 0.0), (size, 0.0), (0.6 * size, size))]
            for size, x, y in (
                (0.2 * reach * number(0.1, 8.0), length * number(0.05, 0.9), width * number(0.0, 0.9))
                for _ in range(whole(1, 2))
            )
        ]
    return channel


def _medium(source: Source, tables: Tables, gravity: float, drag: float, radius: float) -> Tables:
    """Floor, fluid or both; slopes only with a floor."""
    number, whole, power, maybe = source.number, source.whole, source.power, source.maybe
    static = source.pick([0.0, number(0.0, 1.0), 10.0])
    kinds = source.pick([("floor",), ("fluid",), ("floor", "fluid")])
    along = drag * power(-2.0, 2.0)
    fluid = {
        "block_drag": along, "block_yaw_drag": drag * radius**2 * power(-2.0, 3.0),
        "near_wall_factor": source.pick([1.0, power(0.0, 2.0)]),
    }  # fmt: skip
    if whole(0, 1):
        fluid["block_drag_across"] = along * power(-1.0, 1.0)
    floor = {
        "static_friction": static, "kinetic_friction": static * number(0.0, 1.0),
        "gravity": source.pick([0.0, min(gravity, 1e3)]),
    }  # fmt: skip
    if "floor" in kinds:
        tables["channel"] |= {"slope": maybe(-0.5, 0.5), "cross_slope": maybe(-0.5, 0.5)}
    return {kind: {"floor": floor, "fluid": fluid}[kind] for kind in kinds}


def _routine(source: Source, s: Scenario) -> Tables:
    """Up to three stages, each beginning with a move, of any acts."""
    names = [f"stage {k}" for k in range(source.whole(1, 3))]
    stages = []
    for name in names:
        acts = [_move(source, s)]
        acts += [_act(source, s, names) for _ in range(source.whole(0, 6))]
        stages.append({"name": name, "acts": acts, "then": source.pick([name, source.pick(names)])})
    return {"stages": stages}


def _move(source: Source, s: Scenario) -> Tables:
    crossing = s.pushers.radius / s.pushers.free_speed
    length, time = s.pushers.radius * source.power(-1.0, 1.0), crossing * source.power(-1.0, 1.0)
    return source.pick(
        [
            {"act": "run"},
            {"act": "run"},
            {"act": "advance", "distance": length},
            {"act": "slide", "length": length},
            {"act": "slide", "time": time},
        ]
    )


def _act(source: Source, s: Scenario, names: Sequence[str]) -> Tables:
    """Any act: a turn as likely as a look, a branch or a move."""
    number, pick = source.number, source.pick
    r, go = s.pushers.radius, pick(names)
    turns: list[Tables] = [
        {"act": "turn", "angle": number(-6.28, 6.28)},
        {"act": "depart", "angle": number(0.0, 1.5), "side": pick(["left", "right", "onward", "either"]),
         "spread": source.maybe(0.0, 1.5)},
        {"act": "mirror"},
        {"act": "wander", "law": pick(["uniform", "cosine"])},
    ]  # fmt: skip
    looks: list[Tables] = [
        {"act": "gauge", "maximum": r * source.power(0.0, 2.0), "resolution": source.maybe(0.0, 2.0) * r},
        {"act": "sight", "face": pick(surface_names(s)), "half_angle": source.maybe(0.0, 3.14)},
        {"act": "tally", "counter": "a", "add": source.whole(1, 5)},
        {"act": "tally", "counter": "b", "set": source.whole(0, 5)},
        {"act": "declare"},
    ]
    branches: list[Tables] = [
        {"on": "contact", "kind": pick(["wall", "block", "pusher", "none"])},
        {"on": "counter", "counter": pick(["a", "b"]), "at_least": source.whole(0, 6)},
        {"on": "time", "after": r / s.pushers.free_speed * source.power(-1.0, 2.0)},
        {"on": "range", "below": r * source.power(-1.0, 1.0)},
        {"on": "sight", "seen": pick([True, False])},
    ]
    kind = source.whole(0, 15)
    if kind == 0:
        return {"act": "halt"}
    if kind < 4:
        return _move(source, s)
    if kind < 8:
        return pick(looks)
    if kind < 11:
        return {"act": "branch", "go": go, **pick(branches)}
    return pick(turns)
