"""Where pushers start: positions and headings for a scenario and a seed."""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import product
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import Purpose, normal, stream_keys, uniform
from swarmpush.geometry import free_region, is_plain, open_floor
from swarmpush.scenario import Scenario, Start

MAX_TRIES = 1000  # per pusher; where the region is not full yet, some tens are needed
MAX_ROUNDS = 200  # in a narrow region the first pushers can leave no place for the last one; then all are drawn anew
MAX_PATCHES = 4096  # enough to follow a slanted channel a thousand times as long as wide


def _x_ranges(s: Scenario) -> list[tuple[float, float]]:
    """Stretches of x open to a pusher's centre, clear of the block and the ends."""
    r = s.pushers.reach
    behind = (r, s.block.rear_at - r)
    ahead = (s.block_front_at + r, s.channel.length - r)
    wanted = {"behind": [behind], "ahead": [ahead], "anywhere": [behind, ahead]}[s.start.region]
    return [(low, high) for low, high in wanted if high > low]


class _Patch(NamedTuple):
    """A rectangle in which centres are drawn, m."""

    x: float
    y: float
    length: float
    height: float


def _patches(s: Scenario) -> list[_Patch]:
    """Rectangles that cover the start region's free part and, where it is crooked, little more than twice its area."""
    r = s.pushers.reach
    patches = [_Patch(low, r, high - low, s.channel.width - 2 * r) for low, high in _x_ranges(s)]
    if is_plain(s) and not s.train:
        return patches
    from shapely import box, intersects, prepare, union_all

    region = free_region(s)
    prepare(region)
    boxes = [box(p.x, p.y, p.x + p.length, p.y + p.height) for p in patches]
    free = region.intersection(union_all(boxes)).area
    while sum(p.length * p.height for p in patches) > 2 * free and len(patches) < MAX_PATCHES:
        quarters = [
            _Patch(p.x + i * p.length / 2, p.y + j * p.height / 2, p.length / 2, p.height / 2)
            for p, i, j in product(patches, (0, 1), (0, 1))
        ]
        x, y, length, height = np.array(quarters).T
        meets = intersects(region, box(x, y, x + length, y + height))
        patches = [patch for patch, is_met in zip(quarters, meets, strict=True) if is_met]
    return patches


def room_for_starts(s: Scenario) -> float:
    """Area open to the pushers' discs in the start region, m2."""
    r = s.pushers.reach
    if not is_plain(s) or s.train:
        from shapely import box, union_all

        stretches = union_all([box(low, 0.0, high, s.channel.width) for low, high in _x_ranges(s)])
        return float(free_region(s).intersection(stretches).buffer(r).area)
    return sum((high - low + 2 * r) * s.channel.width for low, high in _x_ranges(s))


def draw_starts(s: Scenario, seed: int, *, apart: bool = True) -> NDArray[np.float64]:
    """Starting positions and headings of the crew.

    Arguments:
        s: the scenario.
        seed: the run's seed.
        apart: whether pushers keep clear of each other; False places each as if it were alone.

    Returns:
        starts: (count, 3) x in m, y in m, heading in rad.

    Raises:
        ScenarioError: when the crew finds no room in the start region.

    A pusher's start depends on its own random stream and on the pushers before it, so that a larger crew starts
    as the smaller one did, with more added; only a crew that would get stuck is drawn anew as a whole.
    """
    if s.start.placed is not None:
        return np.array([(p.x, p.y, p.heading) for p in s.start.placed])
    keys = stream_keys(seed, s.pushers.count)[:, Purpose.START]
    patches, is_free = _patches(s), _free_test(s)
    for tries in range(MAX_ROUNDS if patches else 0):
        centres = _draw_centres(s, patches, is_free, keys, tries * MAX_TRIES, apart)
        if centres is not None:
            return np.column_stack([centres, [_draw_heading(s.start, key) for key in keys]])
    raise _no_room(s)


def _draw_centres(
    s: Scenario,
    patches: list[_Patch],
    is_free: Callable[[float, float], bool],
    keys: NDArray[np.uint64],
    first: int,
    apart: bool,
) -> NDArray[np.float64] | None:
    """Centres drawn one by one, or None when one found no place; `first` is where in the streams to begin."""
    r = s.pushers.reach
    shares = [patch.height / patches[0].height for patch in patches]
    bounds = np.cumsum([0.0, *(patch.length * share for patch, share in zip(patches, shares, strict=True))])
    centres = np.empty((len(keys), 2))
    for i, key in enumerate(keys):
        for attempt in range(first, first + MAX_TRIES):
            along = uniform(key, 2 * attempt + 3) * bounds[-1]
            part = min(int(np.searchsorted(bounds, along, side="right")) - 1, len(patches) - 1)
            patch = patches[part]
            x = patch.x + along / shares[part] - bounds[part] / shares[part]
            y = patch.y + uniform(key, 2 * attempt + 4) * patch.height
            if is_free(x, y) and not (apart and (np.hypot(centres[:i, 0] - x, centres[:i, 1] - y) < 2 * r).any()):
                centres[i] = x, y
                break
        else:
            return None
    return centres


def _free_test(s: Scenario) -> Callable[[float, float], bool]:
    """Whether a centre is clear of walls, posts and block; in a plain corridor the ranges of x and y see to that."""
    if is_plain(s) and not s.train:
        return lambda x, y: True
    from shapely import Point, contains_xy, prepare

    floor, r = open_floor(s), s.pushers.reach
    edge = floor.boundary
    prepare(floor)
    prepare(edge)
    return lambda x, y: bool(contains_xy(floor, x, y)) and edge.distance(Point(x, y)) >= r


def _draw_heading(start: Start, key: np.uint64) -> float:
    if start.heading is None:
        return 2 * math.pi * uniform(key, 0)
    return start.heading + start.heading_spread * normal(key, 0)


def _no_room(s: Scenario) -> Exception:
    from swarmpush.problems import Problem, ScenarioError

    sentence = f'{s.pushers.count} pushers find no room in the start region "{s.start.region}"; start with fewer'
    return ScenarioError(s.about.name, [Problem("pushers.count", sentence)])
