"""Where pushers start: positions and headings for a scenario and a seed."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from swarmpush.draws import Purpose, normal, stream_keys, uniform
from swarmpush.scenario import Scenario

MAX_TRIES = 100_000  # per pusher; at the densest packing the loader admits, some hundreds are needed


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
    return sum((high - low + 2 * r) * s.channel.width for low, high in _x_ranges(s))


def draw_starts(s: Scenario, seed: int, *, apart: bool = True) -> NDArray[np.float64]:
    """Starting positions and headings of the crew.

    Arguments:
        s: the scenario.
        seed: the run's seed.
        apart: whether pushers keep clear of each other; False places each as if it were alone.

    Returns:
        starts: (count, 3) x in m, y in m, heading in rad.

    A pusher's start depends on its own random stream and on the pushers before it, so that a larger crew starts
    as the smaller one did, with more added.
    """
    if s.start.placed is not None:
        return np.array([(p.x, p.y, p.heading) for p in s.start.placed])
    keys = stream_keys(seed, s.pushers.count)[:, Purpose.START]
    ranges = _x_ranges(s)
    lengths = np.array([high - low for low, high in ranges])
    bounds = np.concatenate([[0.0], np.cumsum(lengths)])
    starts = np.empty((s.pushers.count, 3))
    for i, key in enumerate(keys):
        for attempt in range(MAX_TRIES):
            along = uniform(key, 2 * attempt + 3) * bounds[-1]
            part = min(int(np.searchsorted(bounds, along, side="right")) - 1, len(ranges) - 1)
            x = ranges[part][0] + along - bounds[part]
            y = s.pushers.radius + uniform(key, 2 * attempt + 4) * (s.channel.width - 2 * s.pushers.radius)
            gaps = np.hypot(starts[:i, 0] - x, starts[:i, 1] - y)
            if not apart or not (gaps < 2 * s.pushers.radius).any():
                break
        if s.start.heading is None:
            heading = 2 * math.pi * uniform(key, 0)
        else:
            heading = s.start.heading + s.start.heading_spread * normal(key, 0)
        starts[i] = x, y, heading
    return starts
