"""What holds in the point world for any room: symmetry, scale, reversal, derivatives, laps that stay, no way out."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any, NamedTuple

import numpy as np
import pytest
import shapely
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from shapely import LineString, Point, Polygon

from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import LapTrace, trace, trace_lap
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.kinematics.laps import BUDGET, IN_THE_OPEN, find_laps
from swarmpush.loading import from_tables
from swarmpush.problems import ScenarioError
from swarmpush.program import EXACT, MEMORY, NOTES, PC, compile_routine
from swarmpush.routine import Routine
from swarmpush.scenario import Scenario

Points = NDArray[np.float64]
Act = dict[str, Any]
Rng = np.random.Generator

seeds = st.integers(0, 2**32 - 1)


def steady(examples: int) -> settings:
    """The examples are the same at every run, so that a failure is due to a change in the code."""
    return settings(
        derandomize=True, deadline=None, max_examples=examples, suppress_health_check=[HealthCheck.too_slow]
    )


# ---- random rooms ---------------------------------------------------------------------------------------------------


class Room(NamedTuple):
    """Walls, posts and block as drawn on one sheet, with the pusher's radius; m."""

    walls: Points
    posts: list[Points]
    block: Points
    radius: float

    def moved(self, change: Callable[[Points], Points], scale: float = 1.0) -> Room:
        return Room(change(self.walls), [change(post) for post in self.posts], change(self.block), scale * self.radius)

    def floor(self) -> Any:
        obstacles = [Polygon(corners) for corners in (*self.posts, self.block)]
        return Polygon(self.walls).difference(shapely.union_all(obstacles))


def star(rng: Rng, n: int, spread: float) -> Points:
    """Corners in order round a centre, some nearer than others."""
    return convex(rng, n) * rng.uniform(spread, 1.0, (n, 1))


def convex(rng: Rng, n: int) -> Points:
    """Corners on a circle."""
    angle = (np.arange(n) + rng.uniform(0.1, 0.9, n)) * math.tau / n
    return np.column_stack([np.cos(angle), np.sin(angle)])


def fitted(points: Points, length: float, width: float) -> Points:
    low = points.min(axis=0)
    return (points - low) / (points.max(axis=0) - low) * [length, width]


BEND = np.array([(0, 0), (2, 0), (2, 1), (1, 1), (1, 2), (0, 2)], dtype=np.float64)
SQUARE = np.array([(0, 0), (1, 0), (1, 1), (0, 1)], dtype=np.float64)


def any_room(rng: Rng) -> Room:
    """Any shape of room with up to three posts and any convex block; it may turn out impossible."""
    length, width = rng.uniform(2.0, 5.0), rng.uniform(1.0, 3.0)
    walls = [SQUARE, BEND, star(rng, int(rng.integers(4, 12)), 0.5), convex(rng, int(rng.integers(3, 9)))][
        rng.integers(4)
    ]
    block = [SQUARE, convex(rng, int(rng.integers(3, 8)))][rng.integers(2)]
    block = fitted(block, *rng.uniform(0.1, 0.35, 2) * [length, width])
    posts = [
        star(rng, int(rng.integers(3, 7)), 0.4) * rng.uniform(0.05, 0.3) + rng.uniform(0, 1, 2) * [length, width]
        for _ in range(rng.integers(4))
    ]
    at = rng.uniform(0.0, 0.8, 2) * [length, width]
    return Room(fitted(walls, length, width), posts, block + at, float(rng.choice([0.01, 0.05, 0.1])))


def grid_room(rng: Rng) -> Room:
    """A room on a grid, where paths graze, run along walls, and meet corners exactly."""
    nx, ny = (int(n) for n in rng.integers((4, 3), (9, 6)))
    cuts = [(rng.integers(1, nx), rng.integers(1, ny)), (nx, ny)]
    (a, b), _ = cuts
    walls = [SQUARE * [nx, ny], np.array([(0, 0), (nx, 0), (nx, b), (a, b), (a, ny), (0, ny)], dtype=np.float64)][
        rng.integers(2)
    ]
    size = rng.integers(1, 3, 2)
    block = [SQUARE, np.array([(0.0, 0.5), (0.5, 0.0), (1.0, 0.5), (0.5, 1.0)])][rng.integers(2)] * size
    posts = [
        [SQUARE * 0.5, np.array([(0, 0), (0.5, 0.5), (0, 1), (-0.5, 0.5)])][rng.integers(2)]
        + rng.integers((0, 0), (nx, ny))
        for _ in range(rng.integers(3))
    ]
    return Room(walls, posts, block + rng.integers((0, 0), (nx, ny)), float(rng.choice([0.05, 0.125, 0.25])))


def build(room: Room, stages: list[Any], start: tuple[float, float, float], speed: float = 1.0) -> Scenario:
    """The scenario of a room; it begins at the axes, so it lies where the sheet's room does less `origin`."""
    pair = {"restitution": 0.0, "friction": 0.0}
    origin = room.walls.min(axis=0)
    length, width = np.ptp(room.walls, axis=0)
    (left, bottom), (right, top) = room.block.min(axis=0) - origin, room.block.max(axis=0) - origin
    middle = (bottom + top) / 2
    tables = {
        "format": 1,
        "about": {"name": "any room"},
        "channel": {
            "length": float(length), "width": float(width), "outline": (room.walls - origin).tolist(),
            "posts": [(post - origin).tolist() for post in room.posts],
        },
        "block": {
            "length": float(right - left), "width": float(top - bottom), "mass": 1.0, "rear_at": max(float(left), 0.0),
            "offset": float(middle - width / 2), "outline": (room.block - origin - [left, middle]).tolist(),
        },
        "pushers": {"count": 1, "radius": room.radius, "mass": 1.0, "free_speed": speed, "stall_force": 1.0},
        "fluid": {"block_drag": 1.0, "block_yaw_drag": 1.0},
        "contacts": dict.fromkeys(("pusher_wall", "pusher_block", "pusher_pusher", "block_wall"), pair),
        "routine": {"stages": stages},
        "start": {"placed": [{"x": start[0] - origin[0], "y": start[1] - origin[1], "heading": start[2]}]},
        "goal": {"travel": 1e-9, "time_limit": 1.0},
    }  # fmt: skip
    return from_tables(tables)


def somewhere(rng: Rng, room: Room, on_grid: bool = False) -> tuple[float, float, float] | None:
    """A place that is open to the centre, and a heading; None if none is found soon."""
    floor = room.floor()
    edge, low, high = floor.boundary, room.walls.min(axis=0), room.walls.max(axis=0)
    for _ in range(60):
        x, y = low + rng.uniform(0, 1, 2) * (high - low)
        heading = float(rng.uniform(-math.pi, math.pi))
        if on_grid:
            x, y = np.round(2 * np.array([x, y])) / 2 + room.radius * rng.integers(-1, 2, 2)
            heading = math.pi / 12 * int(rng.integers(24))
        point = Point(x, y)
        if floor.contains(point) and edge.distance(point) >= room.radius * (1 - 1e-9):
            return float(x), float(y), heading
    return None


def one_stage(acts: list[Act]) -> list[Any]:
    return [{"name": "only", "acts": acts}]


def valid(rng: Rng, stages: list[Any], draw: Callable[[Rng], Room] = any_room) -> tuple[Room, Any, Scenario]:
    """Draw rooms and starts until one is a scenario."""
    for _ in range(200):
        room = draw(rng)
        start = somewhere(rng, room) if Polygon(room.walls).is_valid else None
        if start is not None:
            try:
                return room, start, build(room, stages, start)
            except ScenarioError:
                continue
    raise AssertionError("no room in 200 that can be")


RUN: Act = {"act": "run"}


def any_act(rng: Rng) -> Act:
    side = str(rng.choice(["left", "right", "onward"]))
    acts: list[Act] = [
        RUN,
        {"act": "turn", "angle": float(rng.uniform(-3.0, 3.0))},
        {"act": "mirror"},
        {"act": "depart", "angle": float(rng.uniform(0.0, 1.4)), "side": side},
        {"act": "advance", "distance": float(rng.uniform(0.05, 1.5))},
        {"act": "slide", "length": float(rng.uniform(0.05, 1.0))},
        {"act": "slide", "time": float(rng.uniform(0.05, 2.0))},
    ]
    return acts[rng.integers(len(acts))]


def any_acts(rng: Rng) -> list[Act]:
    """Up to four acts, in any order, with a run among them; none is left to chance."""
    acts = [any_act(rng) for _ in range(rng.integers(1, 5))]
    acts.insert(int(rng.integers(len(acts) + 1)), RUN)
    return acts


def follow(s: Scenario, start: Any, n_legs: int) -> tuple[Points, NDArray[np.int64]]:
    hits, surfaces = np.zeros((n_legs, 6)), np.zeros(n_legs, dtype=np.int64)
    program = compile_routine(s.routine, surface_names(s))
    n = trace(
        boundary_of(s), program, EXACT, 0.0, s.pushers.free_speed, stream_keys(0, 1)[0], np.array(start), 0.0,
        hits, surfaces, np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES),
    )  # fmt: skip
    return hits[:n], surfaces[:n]


def placed(s: Scenario) -> Points:
    assert s.start.placed is not None
    return np.array([(p.x, p.y, p.heading) for p in s.start.placed])[0]


# ---- the same room seen otherwise -----------------------------------------------------------------------------------

N_LEGS = 12
NUDGE = 1e-8  # m or rad: a start so far beside shows how much a path spreads
# Of the spread: rounding is 1e-15 m at the start, 1e-7 of NUDGE, and every leg adds as much to what was passed on.
ROUNDING = 1e-5


def spread(s: Scenario, surfaces: NDArray[np.int64]) -> Points:
    """How far paths that start NUDGE beside are from the path, leg by leg, until they meet other surfaces.

    It ends in a corner as well, where two walls are met at the same time and their numbers decide which of them counts.
    """
    here, _ = follow(s, placed(s), len(surfaces))
    found = np.full((3, len(surfaces)), np.inf)
    for k in range(3):
        start = placed(s)
        start[k] += NUDGE
        hits, others = follow(s, start, len(surfaces))
        alike = int(np.argmin(np.append(others[: len(surfaces)] == surfaces[: len(others)], False)))
        found[k, :alike] = np.abs(hits[:alike, :2] - here[:alike, :2]).max(axis=1)
    at_once = (here[1:, 4] == 0.0) & (surfaces[1:] >= 0) & (surfaces[1:] != surfaces[:-1])
    found[:, 1:][:, np.maximum.accumulate(at_once)] = np.inf
    return NUDGE + np.maximum.accumulate(found.max(axis=0))


def agrees(paths: tuple[Points, Points], wide: Points) -> int:
    """Check that x, y, arriving heading, length and time agree where a difference means anything; returns legs."""
    n = int(np.argmin(np.append(wide < 1e-3, False)))
    assert len(paths[0]) >= n
    assert len(paths[1]) >= n
    one, other = paths[0][:n, [0, 1, 2, 4, 5]], paths[1][:n, [0, 1, 2, 4, 5]]
    off = one - other
    off[:, 2] = np.remainder(off[:, 2] + math.pi, math.tau) - math.pi
    off[:, 4] /= 1.0 + one[:, 4]  # a slide that presses nearly straight on takes long, and is as uncertain as slow
    assert (np.abs(off).max(axis=1, initial=0.0) <= ROUNDING * wide[:n]).all()
    return n


def mirrored(acts: list[Act]) -> list[Act]:
    """The routine that does in the mirror what this one does."""
    other = {"left": "right", "right": "left", "onward": "onward"}
    return [
        act | {"angle": -act["angle"]} if act["act"] == "turn"
        else act | {"side": other[act["side"]]} if act["act"] == "depart"
        else act
        for act in acts
    ]  # fmt: skip


def test_mirror_images_turns_and_scales() -> None:
    """A room in the mirror, turned by any angle, or drawn to another scale has paths that are so as well."""
    compared = {"mirror": 0, "turn": 0, "scale": 0}

    @steady(150)
    @given(seeds)
    def check(seed: int) -> None:
        rng = np.random.default_rng(seed)
        acts = [RUN, *any_acts(rng)]  # before the first bump there is no sense of travel along a surface
        room, (x, y, heading), s = valid(rng, one_stage(acts))
        hits, surfaces = follow(s, placed(s), N_LEGS)
        wide, origin = spread(s, surfaces), room.walls.min(axis=0)

        angle, factor = float(rng.uniform(-math.pi, math.pi)), float(10 ** rng.uniform(-3, 1.5))
        c, sine = math.cos(angle), math.sin(angle)
        turn = np.array([[c, -sine], [sine, c]])
        flip = np.array([1.0, -1.0])
        lengths = [
            act | {key: act[key] * factor for key in ("distance", "length") if act.get(key) is not None} for act in acts
        ]
        for name, change, changed_acts, start, scale in (
            ("mirror", lambda p: (p * flip)[::-1], mirrored(acts), (x, -y, -heading), 1.0),
            ("turn", lambda p: p @ turn.T, acts, (*(turn @ (x, y)), heading + angle), 1.0),
            ("scale", lambda p: p * factor, lengths, (factor * x, factor * y, heading), factor),
        ):
            other_room = room.moved(change, scale)
            other = build(other_room, one_stage(changed_acts), start, speed=scale)
            found, _ = follow(other, placed(other), N_LEGS)
            back = found.copy()
            sheet = found[:, :2] + other_room.walls.min(axis=0)
            if name == "mirror":
                back[:, :2], back[:, 2] = sheet * flip, -found[:, 2]
            elif name == "turn":
                back[:, :2], back[:, 2] = sheet @ turn, found[:, 2] - angle
            else:
                back[:, :2], back[:, 4] = sheet / factor, found[:, 4] / factor
            back[:, :2] -= origin
            compared[name] += agrees((hits, back), wide)

    check()
    assert min(compared.values()) > 300


@steady(60)
@given(seeds)
def test_among_mirrors_a_path_runs_back(seed: int) -> None:
    """Where every departure is a mirror's, a pusher that turns round retraces its path from bump to bump."""
    rng = np.random.default_rng(seed)
    _, _, s = valid(rng, one_stage([RUN, {"act": "mirror"}]))
    hits, surfaces = follow(s, placed(s), N_LEGS)
    wide = spread(s, surfaces)
    n = int(np.argmin(np.append(wide < 1e-3, False)))
    if n < 3:
        return  # it spreads too much
    x, y, heading = hits[n - 1, :3]
    half = 0.5 * hits[n - 1, 4]
    turned = (x - half * math.cos(heading), y - half * math.sin(heading), heading + math.pi)
    back, back_surfaces = follow(s, turned, n - 1)
    assert back_surfaces.tolist() == surfaces[: n - 1][::-1].tolist()
    # what the way out spread is gathered in again, from rounding that was spread as well
    assert np.abs(back[:, :2] - hits[: n - 1, :2][::-1]).max() <= ROUNDING * wide[n - 1] * wide[n - 1] / NUDGE


# ---- derivatives ----------------------------------------------------------------------------------------------------

DIFFERENCE = 1e-6  # relative to the largest derivative, or to 1
MOST_SPREAD = 1e3  # a map that spreads more leaves too few digits for a difference
MAX_LEGS = 60


class Returns(NamedTuple):
    """The way from one arrival at the rear face to the next or next but one."""

    s: Scenario
    pc: int  # the act that comes first
    n_rear: int

    def follow(self, state: Points) -> tuple[LapTrace, list[int], Points]:
        """Arrival and derivatives, surfaces, and places of the legs' ends."""
        hits, surfaces = np.zeros((MAX_LEGS, 4)), np.zeros(MAX_LEGS, dtype=np.int64)
        memory = np.zeros(MEMORY, dtype=np.int64)
        memory[PC] = self.pc
        lap = trace_lap(
            boundary_of(self.s), compile_routine(self.s.routine, surface_names(self.s)), EXACT, stream_keys(0, 1)[0],
            1.0, state[0], state[1], memory, np.zeros(NOTES), self.n_rear, hits, surfaces,
        )  # fmt: skip
        return lap, surfaces[: lap.n_bumps].tolist(), hits[: lap.n_bumps, :2]

    def differences(self, state: Points, step: float) -> Points | None:
        """The derivatives from four arrivals nearby; None on an edge of the map."""
        middle, way, _ = self.follow(state)
        columns = []
        for direction in np.eye(2):
            sides = [self.follow(state + k * step * direction) for k in (-2, -1, 1, 2)]
            if any(side[1] != way for side in sides):
                return None
            a, b, c, d = (
                np.array([lap.along, middle.heading + math.remainder(lap.heading - middle.heading, math.tau)])
                for lap, _, _ in sides
            )
            columns.append((a - 8 * b + 8 * c - d) / (12 * step))
        return np.column_stack(columns)


def test_multipliers_are_derivatives() -> None:
    """The return map's Jacobian agrees with differences in any room, over corners, slides and measured legs."""
    counts = {"corner": 0, "open": 0, "slide length": 0, "slide time": 0, "advance": 0, "mirror": 0}

    @steady(250)
    @given(seeds)
    def check(seed: int) -> None:
        rng = np.random.default_rng(seed)
        acts = any_acts(rng)
        _, _, s = valid(rng, one_stage(acts))
        boundary = boundary_of(s)
        rear = boundary.segments[boundary.rear]
        moves = [k for k, act in enumerate(acts) if act["act"] in ("run", "advance", "slide")]
        for _ in range(8):
            returns = Returns(s, int(rng.choice(moves)) + 1, int(rng.integers(1, 3)))
            state = np.array([rng.uniform(0.0, rear[4]), rear[7] + math.pi + rng.uniform(-1.4, 1.4)])
            lap, way, points = returns.follow(state)
            exact = np.array([[lap.aa, lap.ah], [lap.ha, lap.hh]])
            size = max(1.0, float(np.abs(exact).max()))
            if lap.n_bumps == 0 or size > MOST_SPREAD or _is_in_a_corner(way, points):
                continue  # it does not return; the map is too steep; it has a kink
            found = [returns.differences(state, step / size) for step in (1e-4, 1e-5, 1e-6)]
            errors = [np.abs(difference - exact).max() / size for difference in found if difference is not None]
            if not errors:
                continue
            assert min(errors) < DIFFERENCE  # the longest step is too long for some maps, the shortest for none
            counts["corner"] += any(k >= len(boundary.segments) for k in way)
            counts["open"] += -1 in way
            for act in acts if len(way) > len(acts) else ():
                kind = act["act"] + (" length" if "length" in act else " time" if "time" in act else "")
                if kind in counts:
                    counts[kind] += 1

    check()
    assert min(counts.values()) >= 15


def _is_in_a_corner(way: list[int], points: Points) -> bool:
    """Whether two walls are met at the same time, so that beside there the one or the other comes first."""
    on_the_spot = np.hypot(*np.diff(points, axis=0).T) < 1e-9
    return any(is_there and a != b for is_there, a, b in zip(on_the_spot, way[:-1], way[1:], strict=True))


# ---- laps -----------------------------------------------------------------------------------------------------------

N_ROUTINES, N_STARTS = 200, 4
N_MORE = 1000  # laps
CLOSED = 1e-6  # m and rad: what a lap leaves open when it is found, of the room's width of up to 3 m
ATTRACTS = 1.0 - 1e-3  # a multiplier that leaves nothing of it after the laps followed
SETTLED = 1e-9  # m and rad: rounding, when all else has been contracted away


def any_stages(rng: Rng) -> list[Any]:
    """A routine of one or two stages with a lap in it now and then: counters, clocks, ranges, kinds of contact."""

    def turn() -> Act:
        acts: list[Act] = [
            {"act": "turn", "angle": float(rng.choice([math.tau / 3, math.pi / 2, rng.uniform(-3.0, 3.0)]))},
            {"act": "mirror"},
            {
                "act": "depart",
                "angle": float(rng.uniform(0, 1.3)),
                "side": str(rng.choice(["left", "right", "onward"])),
            },
            {"act": "depart", "angle": 0.0},
        ]
        return acts[rng.integers(4)]

    def move() -> Act:
        return [RUN, RUN, RUN, {"act": "advance", "distance": float(rng.uniform(0.2, 2.0))},
                {"act": "slide", "length": float(rng.uniform(0.05, 0.5))},
                {"act": "slide", "time": float(rng.uniform(0.05, 0.5))}][rng.integers(6)]  # fmt: skip

    then = str(rng.choice(["a", "b"]))
    count = {"act": "tally", "counter": "n", "add": 1}
    match int(rng.integers(5)):
        case 0:
            return one_stage([RUN, turn(), *([move(), turn()] if rng.random() < 0.5 else [])])
        case 1:
            enough = {"act": "branch", "on": "counter", "counter": "n", "at_least": int(rng.integers(2, 9)), "go": "b"}
            return [
                {"name": "a", "acts": [move(), turn(), count, enough, RUN, turn()]},
                {"name": "b", "acts": [count | {"add": 0, "set": 0}, turn(), RUN, turn()], "then": then},
            ]
        case 2:
            late = {"act": "branch", "on": "time", "after": float(rng.uniform(1.0, 30.0)), "go": "b"}
            return [
                {"name": "a", "acts": [RUN, turn(), late]},
                {"name": "b", "acts": [move(), turn(), RUN, turn()], "then": then},
            ]
        case 3:
            at_block = {"act": "branch", "on": "contact", "kind": "block", "go": "b"}
            return [
                {"name": "a", "acts": [RUN, at_block, turn()]},
                {"name": "b", "acts": [turn(), move(), turn()], "then": "a"},
            ]
        case _:
            gauge = {"act": "gauge", "maximum": 5.0}
            short = {"act": "branch", "on": "range", "below": float(rng.uniform(0.2, 2.0)), "go": "b"}
            return [
                {"name": "a", "acts": [RUN, turn(), gauge, short, move(), turn()]},
                {"name": "b", "acts": [turn(), RUN, turn()], "then": "a"},
            ]


def test_laps_are_kept() -> None:
    """A lap that is found is run a thousand times more by a pusher that nobody looks after.

    One that attracts is then at its fixed point to rounding; at a neutral one what was left open at first stays so.
    """
    rng = np.random.default_rng(12)
    n_attracting, n_neutral, n_open = 0, 0, 0
    for _ in range(N_ROUTINES):
        stages = any_stages(rng)
        room, start, s = valid(rng, stages)
        for _ in range(N_STARTS):
            laps, capture = find_laps(s)
            assert capture.captured == float(len(laps))
            if laps:
                break
            start = somewhere(rng, room) or start
            s = build(room, stages, start)
        else:
            continue
        [lap] = laps
        names, n = (*surface_names(s), IN_THE_OPEN), len(lap.surfaces)
        hits, surfaces = follow(s, placed(s), BUDGET + (N_MORE + 1) * n)
        assert len(hits) == BUDGET + (N_MORE + 1) * n
        way = [names[k] for k in surfaces[BUDGET:]]
        first = next((k for k in range(n) if tuple(way[k : k + n]) == lap.surfaces), None)
        assert first is not None, "it is on its way"
        assert way[first : first + N_MORE * n] == list(lap.surfaces) * N_MORE
        rows = hits[BUDGET + first : BUDGET + first + N_MORE * n].reshape(N_MORE, n, 6)
        n_open += IN_THE_OPEN in lap.surfaces
        if max(map(abs, lap.multipliers)) < ATTRACTS:
            n_attracting += 1
            assert _off(rows[-1], lap.hits) < SETTLED
            assert rows[-1, :, 5].sum() == pytest.approx(lap.time_s, rel=SETTLED)
            assert rows[-1, :, 4].sum() == pytest.approx(lap.length_m, rel=SETTLED)
        else:
            n_neutral += 1
            assert _off(rows, rows[0]) < CLOSED * s.channel.width
    assert min(n_attracting, n_neutral, n_open) >= 8


def _off(rows: Points, others: Points) -> float:
    """Largest difference in place or arriving heading."""
    off = rows[..., :3] - others[..., :3]
    off[..., 2] = np.remainder(off[..., 2] + math.pi, math.tau) - math.pi
    return float(np.abs(off).max())


# ---- no way out -----------------------------------------------------------------------------------------------------

N_ROOMS, N_EACH, SOME_LEGS = 400, 25, 80  # 10,000 scenarios in all
AT_THE_EDGE = 1e-9  # of the radius: a path that grazes a corner may cut into it by 1e-12, the rest is rounding


@pytest.mark.parametrize("part", range(4))
def test_nothing_gets_through_a_wall(part: int) -> None:
    """In any room by any routine every leg ends, with numbers that are some, and no path comes nearer than a radius.

    The paths are held against the room by a library for plane geometry, which knows nothing of surfaces and arcs. In
    one room out of two walls, paths and steps lie on a grid, so that all meets exactly.
    """
    rng = np.random.default_rng(part)
    n_followed = 0
    for k in range(N_ROOMS // 4):
        is_grid = k % 2 == 0
        room, _, s = valid(rng, one_stage([RUN]), grid_room if is_grid else any_room)
        boundary, names = boundary_of(s), surface_names(s)
        floor, r, origin = room.floor(), room.radius, room.walls.min(axis=0)
        edge = floor.boundary
        shapely.prepare(floor)
        for _ in range(N_EACH):
            start = somewhere(rng, room, on_grid=is_grid)
            if start is None:
                continue
            acts = (grid_acts if is_grid else any_acts)(rng)
            if rng.random() < 0.2:
                acts.append({"act": "wander", "law": str(rng.choice(["cosine", "uniform"]))})
            routine = Routine.model_validate({"stages": one_stage(acts)})
            hits, surfaces = np.full((SOME_LEGS, 6), np.nan), np.zeros(SOME_LEGS, dtype=np.int64)
            n = trace(
                boundary, compile_routine(routine, names), EXACT, 0.0, 1.0, stream_keys(k, 1)[0],
                np.array(start) - [*origin, 0.0], 0.0, hits, surfaces, np.zeros(MEMORY, dtype=np.int64),
                np.zeros(NOTES),
            )  # fmt: skip
            n_followed += 1
            assert n == SOME_LEGS
            assert np.isfinite(hits).all()
            assert (hits[:, 4:] >= 0.0).all()
            points = np.vstack([start[:2], hits[:, :2] + origin])
            assert LineString(points).distance(edge) > r * (1 - AT_THE_EDGE)
            assert floor.contains(Point(points[-1]))
            bumps = shapely.distance(shapely.points(points[1:][surfaces >= 0]), edge)
            assert np.abs(bumps - r).max(initial=0.0) < r * AT_THE_EDGE
    assert n_followed > 0.9 * N_ROOMS // 4 * N_EACH


def grid_acts(rng: Rng) -> list[Act]:
    """Up to four acts in steps of 15 deg and 1/8 m or s, with a run among them."""
    step = math.pi / 12
    acts: list[Act] = []
    for _ in range(rng.integers(1, 5)):
        k = int(rng.integers(7))
        angle, way = step * int(rng.integers(-12, 13)), 0.125 * int(rng.integers(1, 9))
        acts.append(
            [
                RUN,
                {"act": "turn", "angle": angle},
                {"act": "mirror"},
                {"act": "depart", "angle": abs(angle) / 3, "side": str(rng.choice(["left", "right", "onward"]))},
                {"act": "advance", "distance": way},
                {"act": "slide", "length": way},
                {"act": "slide", "time": way},
            ][k]
        )
    acts.insert(int(rng.integers(len(acts) + 1)), RUN)
    return acts
