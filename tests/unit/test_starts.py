"""Where pushers start."""

from __future__ import annotations

import math
from itertools import combinations

import numpy as np
import pytest

from swarmpush.demos import demo
from swarmpush.loading import load
from swarmpush.misfits import MAX_PACKING
from swarmpush.problems import ScenarioError
from swarmpush.scenario import FixedStart, Scenario
from swarmpush.starts import draw_starts, room_for_starts

TOUCH = 1e-12  # m; rounding of positions of some metres
SEEDS = range(5)


@pytest.fixture(scope="module")
def rig() -> Scenario:
    return load(demo("service_passage"))


def dense(s: Scenario, region_radii: float, width_radii: float) -> Scenario:
    """The rig with a start region of this size, in pusher radii, filled as densely as the loader admits."""
    r = s.pushers.radius
    s = s.replace(channel={"width": width_radii * r}, block={"rear_at": region_radii * r})
    return s.replace(pushers={"count": int(MAX_PACKING * room_for_starts(s) / (math.pi * r**2))})


@pytest.mark.parametrize("region", ["behind", "ahead", "anywhere"])
@pytest.mark.parametrize("seed", SEEDS)
def test_starts_are_in_the_region(rig: Scenario, region: str, seed: int) -> None:
    """Every pusher starts clear of walls and block, on the side of the block that was asked for."""
    s = rig.replace(start={"region": region}, pushers={"count": 20})
    r = s.pushers.radius
    x, y, _ = draw_starts(s, seed).T
    is_behind = x <= s.block.rear_at - r + TOUCH
    is_ahead = x >= s.block_front_at + r - TOUCH
    assert (is_behind | is_ahead).all()
    assert region == "anywhere" or {"behind": is_behind, "ahead": is_ahead}[region].all()
    assert ((x >= r - TOUCH) & (x <= s.channel.length - r + TOUCH)).all()
    assert ((y >= r - TOUCH) & (y <= s.channel.width - r + TOUCH)).all()


def test_anywhere_uses_both_sides(rig: Scenario) -> None:
    """Starts anywhere fall behind and ahead of the block about as the lengths of the two stretches do."""
    s = rig.replace(start={"region": "anywhere"})
    r = s.pushers.radius
    x = np.concatenate([draw_starts(s, seed, apart=False)[:, 0] for seed in range(200)])
    behind, ahead = s.block.rear_at - 2 * r, s.channel.length - s.block_front_at - 2 * r
    share = behind / (behind + ahead)
    four_sigma = 4 * math.sqrt(share * (1 - share) / len(x))
    assert abs((x < s.block.rear_at).mean() - share) < four_sigma


@pytest.mark.parametrize("region_radii", [5, 30])
@pytest.mark.parametrize("width_radii", [2.1, 3.0, 3.5, 4.5, 8.0])
def test_a_crew_as_dense_as_admitted_stays_apart(rig: Scenario, region_radii: float, width_radii: float) -> None:
    """No two pushers overlap in the fullest region admitted, where random placement gets stuck at times."""
    s = dense(rig, region_radii, width_radii)
    assert s.pushers.count >= 1
    for seed in SEEDS:
        centres = draw_starts(s, seed)[:, :2]
        gaps = [math.dist(one, other) for one, other in combinations(centres, 2)]
        assert min(gaps, default=math.inf) >= 2 * s.pushers.radius


def test_says_when_there_is_no_room(rig: Scenario) -> None:
    """A crew that cannot be placed is refused and never left overlapping."""
    s = rig.replace(channel={"width": 2.5 * rig.pushers.radius}, block={"rear_at": 3 * rig.pushers.radius})
    with pytest.raises(ScenarioError, match="find no room"):
        draw_starts(s, 1)


def test_same_seed_same_starts(rig: Scenario) -> None:
    """Starts are a function of scenario and seed."""
    assert (draw_starts(rig, 3) == draw_starts(rig, 3)).all()
    assert (draw_starts(rig, 3) != draw_starts(rig, 4)).all()


@pytest.mark.parametrize("apart", [True, False])
def test_one_more_pusher_leaves_the_others_in_place(rig: Scenario, apart: bool) -> None:
    """A larger crew starts as the smaller one did, with more added."""
    few, many = (draw_starts(rig.replace(pushers={"count": n}), 2, apart=apart) for n in (6, 7))
    assert (few == many[:6]).all()


def test_headings(rig: Scenario) -> None:
    """Headings cover the circle unless a mean is given, and then spread about it as asked."""
    many = rig.replace(pushers={"count": 400})
    anywhere = draw_starts(many, 1, apart=False)[:, 2]
    assert np.histogram(anywhere, bins=4, range=(0, 2 * math.pi))[0].min() > 400 / 4 - 4 * math.sqrt(400 * 3 / 16)
    aimed = draw_starts(many.replace(start={"heading": 1.0, "heading_spread": 0.1}), 1, apart=False)[:, 2]
    assert abs(aimed.mean() - 1.0) < 4 * 0.1 / math.sqrt(400)
    assert abs(aimed.std() - 0.1) < 4 * 0.1 / math.sqrt(800)
    exact = draw_starts(many.replace(start={"heading": 1.0}), 1, apart=False)[:, 2]
    assert (exact == 1.0).all()


def test_placed_pushers_start_where_they_are_placed(rig: Scenario) -> None:
    """A fixed list is taken as it stands, whatever the seed."""
    placed = (FixedStart(x=0.1, y=0.2, heading=1.0), FixedStart(x=0.4, y=0.1, heading=-1.0))
    s = rig.replace(start={"placed": placed}, pushers={"count": 2})
    for seed in SEEDS:
        assert draw_starts(s, seed).tolist() == [[0.1, 0.2, 1.0], [0.4, 0.1, -1.0]]
