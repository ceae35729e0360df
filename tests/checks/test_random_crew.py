"""How often a crew that bounces at random strikes the rear face: the baseline of every audit, against theory."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from rigs import RADIUS, closed_corridor, one_stage, rig, turning

from swarmpush.auditing.ladder import bounce_at_random
from swarmpush.kinematics.strikes import count_strikes
from swarmpush.kinematics.visits import follow_visits
from swarmpush.routine import Routine
from swarmpush.scenario import Scenario

FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000
N_SEEDS = 12  # crews of 300; the standard error comes from their spread
SHARP = 0.005  # least relative standard error that would still show a corner left out of the area
TIME = 200.0  # s, at 1 m/s
POST = 0.2  # m, side of a square post


def planned(**channel: Any) -> Scenario:
    """A room 2 m long and 1 m wide for the centre, closed by the face, with a crew that follows a plan."""
    s = closed_corridor(turning(120), face_at=2.0 + RADIUS, goal={"time_limit": TIME})
    return s.replace(channel=channel) if channel else s


def square(x: float, y: float) -> tuple[tuple[float, float], ...]:
    return ((x, y), (x + POST, y), (x + POST, y + POST), (x, y + POST))


def crooked() -> Scenario:
    """An L: the closed corridor with a side arm 1 m deep and 1 m wide for the centre, 0.5 m behind the face."""
    r, width = RADIUS, 1.0 + 2 * RADIUS
    low, high = 0.5, 1.5 + 2 * r
    outline = (
        (0.0, 0.0), (9.0, 0.0), (9.0, width), (high, width), (high, 2 * width), (low, 2 * width), (low, width),
        (0.0, width),
    )  # fmt: skip
    return rig(
        channel={"length": 9.0, "width": 2 * width, "outline": outline},
        block={"width": width, "rear_at": 2.0 + 2 * r, "offset": -width / 2},
        routine=turning(120),
        goal={"time_limit": TIME},
    )


def round_corners(n: int) -> float:
    """Area that n corners sticking out at right angles take from the centre's room beyond straight sides, m2."""
    return n * math.pi * RADIUS**2 / 4


# free area in which the centre moves, m2, worked out by hand; the face is 1 m long for the centre
ROOMS = {
    "closed corridor": (planned(), 2.0),
    "two posts": (
        planned(posts=(square(0.5, 0.3), square(1.2, 0.6))),
        2.0 - 2 * (POST**2 + 4 * POST * RADIUS) - 2 * round_corners(4),
    ),
    # the arm reaches the corridor through the walls' margin, whose two corners stick out
    "side arm": (crooked(), 2.0 + 1.0 * (1.0 + 2 * RADIUS) + 2 * (RADIUS**2 - round_corners(1))),
}


@pytest.mark.parametrize("room", ROOMS)
def test_strike_rate_of_a_crew_at_random(room: str) -> None:
    """With starts and headings spread evenly each pusher strikes the face at v q/(pi A), to four standard errors.

    Source: mean free path pi A/P (chord theorem) and bumps spread evenly over the perimeter P under the cosine law:
    Comets, Popov, Schuetz and Vachkovskaia, "Billiards in a general domain with random reflections", Arch. Rational
    Mech. Anal. 191 (2009) 497. A bump comes every pi A/(P v), and of these q/P fall on the face of the length q.
    """
    s, area = ROOMS[room]
    expected = s.pushers.free_speed * 1.0 / (math.pi * area)
    random = bounce_at_random(s)
    light = random.replace(pushers={"mass": 1e-9})  # has its speed at once, as the forecast's pace counts with the mass
    for rates in (
        [count_strikes(random, seed=seed).rate_1_s for seed in range(N_SEEDS)],
        [follow_visits(light, seed=seed)[0].strike_rate_1_s for seed in range(N_SEEDS)],
    ):
        error = float(np.std(rates, ddof=1)) / math.sqrt(N_SEEDS)
        assert error < SHARP * expected, "the check must be sharp"
        assert np.mean(rates) == pytest.approx(expected, abs=FOUR_SIGMA * error)
    uniform = Routine.model_validate(one_stage({"act": "wander", "law": "uniform"}))
    other = count_strikes(random.model_copy(update={"routine": uniform})).rate_1_s
    assert abs(other - expected) > 10 * SHARP * expected, "another law must be told apart"
