"""The point world against closed forms of bounce laws in a corridor that a face closes.

The formulas for turns of 120 deg and for fixed departure angles were derived here from the elementary rule that a leg
from one straight side to another changes a displacement along the sides by -cos(departure)/cos(arrival); the setting
is that of Spagnolie, Wahl, Lukasik and Thiffeault, "Microorganism billiards", Physica D 341 (2017) 33.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from rigs import closed_corridor, follow, one_stage, turning

import swarmpush
from swarmpush.kinematics.strikes import count_strikes
from swarmpush.scenario import Scenario

EXACTLY = 1e-9  # m or relative: double precision over some tens of bumps at coordinates of 50 m
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000
CORRELATED = 1.5  # bumps of one path are mildly correlated, which widens the error of a mean by less than this

# psi, multiplier M, d* and s over the width for turns of 120 deg (derived here)
TRIANGLES = (
    (5.0, -0.0612602, 1.0991792, 1.1033779),
    (10.0, -0.1479559, 1.0480105, 1.0641778),
    (15.0, -0.2679492, 1.0000000, 1.0352762),
    (20.0, -0.4337628, 0.9541889, 1.0154266),
    (25.0, -0.6659564, 0.9097697, 1.0038198),
)
SEVEN_DIGITS = 1e-7  # the table above is printed to seven decimals


def slope_of_120(psi_rad: float) -> float:
    """Position multiplier of the three-bump lap with turns of 120 deg: -tan(psi)/tan(60 deg - psi)."""
    return -math.tan(psi_rad) / math.tan(math.pi / 3 - psi_rad)


@pytest.mark.parametrize(("psi_deg", "slope", "d_fixed", "side"), TRIANGLES)
def test_turns_of_120_deg_contract_on_to_a_triangle(psi_deg: float, slope: float, d_fixed: float, side: float) -> None:
    """Turns of 120 deg lead bottom -> face -> top, and each lap multiplies the distance from the fixed point by M."""
    psi = math.radians(psi_deg)
    exact = math.cos(psi) / math.sin(psi + math.pi / 3)
    assert exact == pytest.approx(d_fixed, abs=SEVEN_DIGITS)
    hits, names = follow(closed_corridor(turning(120)), (-1.01 * exact, 0.0, psi), 9)
    assert names == ["rear", "top", "bottom"] * 3
    off = np.array([0.01 * exact, *(-hits[2::3, 0] - exact)])  # of each departure from the lower wall
    # the last distance is 2e-6 m or more, of which coordinates of 1 m leave nine digits
    assert off[1:] / off[:-1] == pytest.approx([slope] * 3, abs=SEVEN_DIGITS)
    on_it, _ = follow(closed_corridor(turning(120)), (-exact, 0.0, psi), 3)
    assert on_it[:, 4].sum() == pytest.approx(3 * side, abs=3 * SEVEN_DIGITS)


def test_plan_gives_the_slope_and_the_neutral_heading() -> None:
    """The plan for turns of 120 deg has the multipliers 1 for the heading and M for the position at its own psi."""
    plan = swarmpush.plan(closed_corridor(turning(120)), n_starts=400)
    lap = plan.main_lap
    assert lap is not None
    assert len(plan.laps) == 1
    assert lap.surfaces == ("rear", "top", "bottom")
    psi = lap.hits[2, 3]  # heading with which it leaves the lower wall
    heading, position = lap.multipliers
    assert heading == pytest.approx(1.0, abs=EXACTLY)
    assert position == pytest.approx(slope_of_120(psi), abs=EXACTLY)
    assert lap.length_m == pytest.approx(3 / math.sin(psi + math.pi / 3), rel=EXACTLY)
    assert lap.time_s == pytest.approx(lap.length_m / 1.0, rel=EXACTLY)


def test_band_of_turns_of_120_deg() -> None:
    """The lap of turns of 120 deg attracts for headings from 0 to 30 deg at the lower wall, and no others."""
    lap = swarmpush.plan(closed_corridor(turning(120)), n_starts=400).main_lap
    assert lap is not None
    for low, high in lap.leg_bands_rad:
        psi = lap.hits[2, 3]  # the other legs' headings differ from it by 120 and 240 deg
        edges = math.degrees(psi + low), math.degrees(psi + high)
        # towards 30 deg the lap closes ever more slowly: at 29.5 deg by a factor of 0.96 a lap
        assert edges == (pytest.approx(0.0, abs=0.05), pytest.approx(30.0, abs=0.5))


def test_departures_of_the_service_passage() -> None:
    """Departures at 45, 15 and 75 deg to the normal contract by tan 15/tan 45 = 0.268 a lap and renew the heading."""
    lap = swarmpush.plan(swarmpush.load(swarmpush.demo("service_passage")), n_starts=200).main_lap
    assert lap is not None
    assert lap.surfaces == ("rear", "top", "bottom")
    position, heading = lap.multipliers
    assert position == pytest.approx(-math.tan(math.radians(15)), abs=EXACTLY)
    assert heading == pytest.approx(0.0, abs=EXACTLY)
    assert np.degrees(lap.hits[:, 3]) == pytest.approx([135.0, -105.0, 15.0], abs=1e-6)


def test_a_quarter_of_all_headings_locks_and_half_of_them_get_there() -> None:
    """With turns of 120 deg and any heading alike, 1/4 lock on to the face, and 1/2 drift towards it."""
    n = 8000
    plan = swarmpush.plan(closed_corridor(turning(120), face_at=200.0), n_starts=n)
    four_sigma = FOUR_SIGMA * math.sqrt(0.25 * 0.75 / n)
    slow = 0.01  # headings within 1 deg of 30 contract by less than 0.07 a lap and are not seen to close
    assert abs(plan.capture.captured + slow / 2 - 0.25) < four_sigma + slow / 2
    near = 0.01  # of the starts less than 2 widths from the face, some bump into it before they drift away
    drift_away = plan.capture.lost["never reaches the rear face"]
    assert abs(drift_away + near / 2 - 0.5) < FOUR_SIGMA * math.sqrt(0.25 / n) + near / 2


@pytest.mark.parametrize("psi_deg", [10.0, 20.0, 40.0])
def test_speed_of_the_zigzag_towards_the_face(psi_deg: float) -> None:
    """Far from the face, turns of 120 deg approach it at v/(2 sin(psi + 30 deg)) (derived here)."""
    psi = math.radians(psi_deg)
    hits, names = follow(closed_corridor(turning(120)), (-40.0, 0.0, psi), 18)
    assert names == ["top", "top", "bottom"] * 6  # the first turn still points into the wall, so it bumps again at once
    advance = hits[17, 0] - hits[2, 0]
    assert advance / hits[3:, 4].sum() == pytest.approx(0.5 / math.sin(psi + math.pi / 6), rel=EXACTLY)
    per_pair = math.sin(math.pi / 3) / (math.sin(psi) * math.sin(psi + math.pi / 3))
    assert advance / 5 == pytest.approx(per_pair, rel=EXACTLY)


# from 15 deg, turns of 119 deg would come to run exactly along the wall
@pytest.mark.parametrize(("turn_deg", "first_deg", "n_laps"), [(119, 14, 5), (118, 15, 3), (121, 15, 13), (122, 15, 7)])
def test_other_turns_lose_the_lap_after_a_known_number(turn_deg: float, first_deg: float, n_laps: int) -> None:
    """A turn theta shifts the heading by 3 theta - 360 deg a lap, until the lap is lost (derived here)."""
    _, names = follow(closed_corridor(turning(turn_deg)), (-1.0, 0.0, math.radians(first_deg)), 60)
    clean = 0
    while names[3 * clean : 3 * clean + 3] == ["rear", "top", "bottom"]:
        clean += 1
    assert clean == n_laps


@pytest.mark.parametrize(
    ("psi_deg", "nudge", "d_steady", "path"),
    [(15.0, 0.2, 1.1577350, 3.2093562), (20.0, 0.5, 1.3029216, 3.2199280), (25.0, 0.1, 0.9697953, 3.0288907)],
)
def test_a_block_that_gives_way(psi_deg: float, nudge: float, d_steady: float, path: float) -> None:
    """When each bump moves the face by delta, the lap settles at d* + delta/(1 - M) from it (derived here)."""
    s = closed_corridor(turning(120))
    hits, names = follow(s, (-d_steady, 0.0, math.radians(psi_deg)), 183, nudge=nudge)
    at_bottom = [k for k, name in enumerate(names) if name == "bottom"][55]
    moved = nudge * names[: at_bottom + 1].count("rear")
    assert moved - hits[at_bottom, 0] == pytest.approx(d_steady, abs=2 * SEVEN_DIGITS)
    assert hits[at_bottom + 1 : at_bottom + 4, 4].sum() == pytest.approx(path, abs=2 * SEVEN_DIGITS)


def test_departures_always_to_one_side_never_make_a_lap() -> None:
    """A fixed departure angle, always to the same side of the normal, strikes the face once or never (derived here)."""
    a = math.radians(40)
    s = closed_corridor(one_stage({"act": "depart", "angle": a, "side": "right"}))
    hits, names = follow(s, (-0.3 * math.tan(a), 0.0, math.pi / 2 - a), 100)
    assert names[:3] == ["rear", "top", "bottom"]
    assert names.count("rear") == 1
    assert -hits[2, 0] == pytest.approx(0.7 / math.tan(a) + math.tan(a), abs=EXACTLY)
    assert np.ptp(hits[2::2, 0]) < EXACTLY  # from then on a neutral orbit between the walls
    _, names = follow(s, (-1.01 * math.tan(a), 0.0, math.pi / 2 - a), 100)
    assert "rear" not in names


def test_departures_onward_strike_once_and_run_away() -> None:
    """A fixed departure angle that keeps the sense of travel runs off by tan(a) widths per wall bump (derived here)."""
    a = math.radians(40)
    s = closed_corridor(one_stage({"act": "depart", "angle": a, "side": "onward"}))
    hits, names = follow(s, (-2.0, 0.5, 1.0), 40)
    assert names.count("rear") == 1
    after = names.index("rear") + 1
    assert np.diff(hits[after:, 0]) == pytest.approx([-math.tan(a)] * (len(names) - after - 1), abs=EXACTLY)


# ---- random departures --------------------------------------------------------------------------------------------

# mean free path in rectangles 1 x L: cosine law pi A/P; uniform departure angle, from a separate simulation
CHORDS = ((1.0, math.pi / 4, 0.69031), (2.0, math.pi / 3, 0.95654), (5.0, 5 * math.pi / 12, 1.38607))
N_CHORDS = 200_000


def wandering(law: str, length: float) -> Scenario:
    """A closed room of length x 1 m for the pusher's centre, left behind at every bump by `law`."""
    return closed_corridor(one_stage({"act": "wander", "law": law}), face_at=length + 0.02)


@pytest.mark.parametrize(("length", "chord", "control"), CHORDS)
def test_mean_chord(length: float, chord: float, control: float) -> None:
    """Departures by the cosine law give the mean free path pi A/P and uniform hits; uniform angles do not.

    Source: the chord theorem; stationarity under the cosine law is proved by Comets, Popov, Schuetz and Vachkovskaia,
    "Billiards in a general domain with random reflections", Arch. Rational Mech. Anal. 191 (2009) 497. The values for
    uniform angles were simulated here with a separate program.
    """
    for law, expected in (("cosine", chord), ("uniform", control)):
        hits, names = follow(wandering(law, length), (-length / 2, 0.5, 0.3), N_CHORDS)
        runs = hits[50:, 4]
        error = CORRELATED * FOUR_SIGMA * runs.std() / math.sqrt(len(runs))
        assert abs(runs.mean() - expected) < error
        assert abs(chord - control) > 4 * error, "the control must be told apart"
        if law == "cosine":
            share = 1 / (2 + 2 * length)
            on_face = names.count("rear") / len(names)
            assert abs(on_face - share) < CORRELATED * FOUR_SIGMA * math.sqrt(share * (1 - share) / len(names))


@pytest.mark.parametrize("length", [1.0, 2.0])
def test_rate_of_diffuse_strikes(length: float) -> None:
    """A pusher that departs by the cosine law strikes a face of length q at the rate v q/(pi A)."""
    rates = {
        law: count_strikes(wandering(law, length).replace(goal={"time_limit": 500.0})) for law in ("cosine", "uniform")
    }
    expected = 1.0 / (math.pi * length)
    strikes = rates["cosine"]
    # strikes are fewer than Poisson's at random, not more, as a pusher cannot strike twice at once
    assert strikes.rate_1_s == pytest.approx(expected, rel=FOUR_SIGMA / math.sqrt(len(strikes.cosines)))
    # arrivals by the cosine law as well: their mean cosine is pi/4 with an s.d. of 0.2231 (integrals of cos^2, cos^3)
    assert abs(strikes.cosines.mean() - math.pi / 4) < FOUR_SIGMA * 0.2231 / math.sqrt(len(strikes.cosines))
    assert rates["uniform"].rate_1_s > 1.1 * expected, "the control must be told apart"
