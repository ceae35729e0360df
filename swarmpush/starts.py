"""Where pushers start: positions and headings for a scenario and a seed."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import Purpose, normal, stream_keys, uniform
from swarmpush.geometry import free_region, is_plain
from swarmpush.scenario import Scenario, Start

MAX_TRIES = 1000  # per pusher; where the region is not full yet, some tens are needed
MAX_ROUNDS = 200  # in a narrow region the first pushers can leave no place for the last one; then all are drawn anew


def _x_ranges(s: Scenario) -> list[tuple[float, float]]:
    """Stretches of x open to a pusher's centre, clear of the block and the ends."""
    r = s.pushers.radius
    behind = (r, s.block.rear_at - r)
    ahead = (s.block_front_at + r, s.channel.length - r)
    wanted = {"behind": [behind], "ahead": [ahead], "anywhere": [behind, ahead]}[s.start.region]
    return [(low, high) for low, high in wanted if high > low]


def room_for_starts(s: Scenario) -> float:
    """Area open to the pushers' discs in the start region, m2."""
    r = s.pushers.radius
    if not is_plain(s):
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
    for tries in range(MAX_ROUNDS):
        centres = _draw_centres(s, keys, tries * MAX_TRIES, apart)
        if centres is not None:
            return np.column_stack([centres, [_draw_heading(s.start, key) for key in keys]])
    raise _no_room(s)


def _draw_centres(s: Scenario, keys: NDArray[np.uint64], first: int, apart: bool) -> NDArray[np.float64] | None:
    """Centres drawn one by one, or None when one found no place; `first` is where in the streams to begin."""
    ranges = _x_ranges(s)
    bounds = np.concatenate([[0.0], np.cumsum([high - low for low, high in ranges])])
    r, is_free = s.pushers.radius, _free_test(s)
    centres = np.empty((len(keys), 2))
    for i, key in enumerate(keys):
        for attempt in range(first, first + MAX_TRIES):
            along = uniform(key, 2 * attempt + 3) * bounds[-1]
            part = min(int(np.searchsorted(bounds, along, side="right")) - 1, len(ranges) - 1)
            x = ranges[part][0] + along - bounds[part]
            y = r + uniform(key, 2 * attempt + 4) * (s.channel.width - 2 * r)
            if is_free(x, y) and not (apart and (np.hypot(centres[:i, 0] - x, centres[:i, 1] - y) < 2 * r).any()):
                centres[i] = x, y
                break
        else:
            return None
    return centres


def _free_test(s: Scenario) -> Callable[[float, float], bool]:
    """Whether a centre is clear of walls, posts and block; in a plain corridor the ranges of x and y see to that."""
    if is_plain(s):
        return lambda x, y: True
    from shapely import contains_xy, prepare

    region = free_region(s)
    prepare(region)
    return lambda x, y: bool(contains_xy(region, x, y))


def _draw_heading(start: Start, key: np.uint64) -> float:
    if start.heading is None:
        return 2 * math.pi * uniform(key, 0)
    return start.heading + start.heading_spread * normal(key, 0)


def _no_room(s: Scenario) -> Exception:
    from swarmpush.problems import Problem, ScenarioError

    sentence = f'{s.pushers.count} pushers find no room in the start region "{s.start.region}"; start with fewer'
    return ScenarioError(s.about.name, [Problem("pushers.count", sentence)])
