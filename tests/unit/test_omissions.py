"""What a plan says about slopes, trains, drag near walls, bars, fading and failures."""

from __future__ import annotations

import math
from functools import cache
from typing import Any

import pytest

from swarmpush.demos import DEMOS, demo
from swarmpush.kinematics.forecast import TravelForecast, forecast, push_force
from swarmpush.kinematics.nudge import impact_nudge, lean_speed, strike_nudge
from swarmpush.kinematics.omissions import climb_share, fade_left, failures_expected, left_out
from swarmpush.kinematics.regimes import Regime, regimes
from swarmpush.kinematics.strikes import count_strikes
from swarmpush.kinematics.teams import strikes_of
from swarmpush.kinematics.visits import follow_visits
from swarmpush.loading import from_tables, load
from swarmpush.scenario import Fluid, Scenario

FOUR_DIGITS = 1e-4  # relative: what is written down here is rounded
EXACTLY = 1e-12
CRATE = {"length": 0.2, "width": 0.3, "mass": 0.3, "rear_at": 1.6}


def passage(**tables: Any) -> Scenario:
    """The service passage with keys changed and checked; a list stands for itself."""
    given = load(demo("service_passage")).to_tables()
    for name, keys in tables.items():
        given[name] = (given.get(name, {}) | keys) if isinstance(keys, dict) else keys
    return from_tables(given, "changed")


@cache
def travel() -> TravelForecast:
    return forecast(passage(), (), count_strikes(passage()))


def numbers(s: Scenario) -> dict[str, Regime]:
    """The regime numbers of a scenario without its laps; the nudge is that of the passage as it is."""
    return {regime.name: regime for regime in regimes(s, (), travel())}


# ---- forces -------------------------------------------------------------------------------------------------------


def test_force_of_a_train_on_a_slope() -> None:
    """0.8 kg in two blocks, 0.1 rad: (0.35 cos + sin) 0.8 g = 2.7331 + 0.7835 N against 1 - 0.1959 N a pusher."""
    force = push_force(passage(channel={"slope": 0.1}, train=[CRATE]))
    assert force.floor_friction_N == pytest.approx(2.7331, rel=FOUR_DIGITS)
    assert force.slope_N == pytest.approx(0.78349, rel=FOUR_DIGITS)
    assert force.climb_N == pytest.approx(0.19587, rel=FOUR_DIGITS)
    assert force.pushers_to_move == pytest.approx(3.51657 / 0.80413, rel=FOUR_DIGITS)
    assert force.pushers_to_move_low == pytest.approx((2.7331 / 2 + 0.78349) / 0.80413, rel=FOUR_DIGITS)
    assert force.pushers_to_move_high == pytest.approx((2 * 2.7331 + 0.78349) / 0.80413, rel=FOUR_DIGITS)


def test_force_on_a_cross_slope() -> None:
    """Across the channel only the weight on the floor changes, by the cosine."""
    level, tilted = push_force(passage()), push_force(passage(channel={"cross_slope": 0.3}))
    assert tilted.pushers_to_move == pytest.approx(level.pushers_to_move * math.cos(0.3), rel=EXACTLY)
    assert tilted.slope_N == 0.0
    both = push_force(passage(channel={"slope": 0.3, "cross_slope": 0.3}))
    weight = 0.5 * 9.81 * math.sqrt(1 - 2 * 0.2955202**2)  # gravity's other two parts are sin(0.3) each
    assert both.floor_friction_N == pytest.approx(0.35 * weight, rel=FOUR_DIGITS)


def test_too_steep_to_climb_and_steep_enough_to_slide() -> None:
    """Where m g sin exceeds the stall force no number of pushers does; downhill beyond tan = mu none is needed."""
    weak = {"stall_force": 0.19, "mass": 0.2}  # 0.2 g sin(0.1) = 0.196 N
    assert push_force(passage(channel={"slope": 0.1}, pushers=weak)).pushers_to_move == math.inf
    assert push_force(passage(channel={"slope": -0.4})).pushers_to_move == 0.0  # tan(0.4) = 0.42 > 0.35
    assert push_force(passage(channel={"slope": -0.3})).pushers_to_move > 0.0


def test_slide_after_an_impact_on_a_slope() -> None:
    """V^2/(2 g (mu cos + sin)) uphill, V = 1.2 0.15 0.2/0.7 m/s."""
    speed = 1.2 * 0.15 * 0.2 / 0.7
    for slope in (0.1, 0.0, -0.1):
        brake = 9.81 * (0.30 * math.cos(slope) + math.sin(slope))
        s = passage(channel={"slope": slope})
        assert impact_nudge(s, 0.15) == pytest.approx(speed**2 / (2 * brake), rel=EXACTLY)
    assert impact_nudge(passage(channel={"slope": -0.4}), 0.15) == math.inf


def test_leaning_on_a_slope() -> None:
    """Three carts of 1 N on 0.05 rad: (3 (1 - 0.2 g sin) - 0.5 g (0.30 cos + sin))/(3 x 6.667) m/s, or not at all."""
    net = 3 * (1 - 0.2 * 9.81 * math.sin(0.05)) - 0.5 * 9.81 * (0.30 * math.cos(0.05) + math.sin(0.05))
    assert lean_speed(passage(channel={"slope": 0.05}), 1.0, 3) == pytest.approx(net * 0.15 / 3, rel=EXACTLY)
    assert lean_speed(passage(channel={"slope": 0.2}), 1.0, 3) == 0.0  # 3 x 0.61 N < 1.68 + 0.97 N


def test_drag_near_walls_counts() -> None:
    """In a fluid an impact's slide is M V/(factor x drag), and leaning pushes against factor x drag as well."""
    fluid = Fluid(block_drag=2.0, block_yaw_drag=1.0, near_wall_factor=3.0)
    s = passage().model_copy(update={"floor": None, "fluid": fluid})
    assert impact_nudge(s, 0.15) == pytest.approx(1.2 * 0.15 * 0.2 * 0.5 / 0.7 / 6.0, rel=EXACTLY)
    assert lean_speed(s, 1.0) == pytest.approx(1.0 / (1.0 / 0.15 + 6.0), rel=EXACTLY)


def test_strikes_carry_the_slope() -> None:
    """The thrust of a strike is less by m g sin, and its nudge smaller than on the level."""
    level, steep = passage(), passage(channel={"slope": 0.05})
    visits, _ = follow_visits(level)
    ahead, uphill = strikes_of(level, visits)[0], strikes_of(steep, visits)[0]
    assert ahead.push_N - uphill.push_N == pytest.approx(0.2 * 9.81 * math.sin(0.05), rel=1e-9)
    assert strike_nudge(steep, uphill) < strike_nudge(level, ahead)


def test_strikes_on_the_front_go_down_the_slope() -> None:
    """A crew ahead of the block on a table that rises does what one behind does on a table that falls, mirrored."""
    turn_back = {"stages": [{"name": "only", "acts": [{"act": "run"}, {"act": "turn", "angle": "180 deg"}]}]}

    def speed(slope: float, x: float, heading: float) -> float:
        s = passage(
            channel={"slope": slope, "length": 2.65},  # 1.2 m to either side of the block
            pushers={"count": 1},
            routine=turn_back,
            start={"placed": [{"x": x, "y": 0.16, "heading": heading}]},
        )
        return forecast(s, (), count_strikes(s)).block_speed_m_s

    assert speed(0.05, 2.0, math.pi) == pytest.approx(-speed(-0.05, 0.65, 0.0), rel=1e-9)
    assert speed(0.05, 2.0, math.pi) != pytest.approx(-speed(0.05, 0.65, 0.0), rel=0.1)


# ---- what is left out ---------------------------------------------------------------------------------------------


def test_numbers_of_wear() -> None:
    """12 pushers at 0.03 failures a minute for 180 s: 12 (1 - exp(-0.09)) = 1.0328; thrust exp(-180/300) = 0.5488."""
    s = load(demo("bristle_tray"))
    assert failures_expected(s) == pytest.approx(1.0328, rel=FOUR_DIGITS)
    assert fade_left(s) == pytest.approx(0.54881, rel=FOUR_DIGITS)
    assert climb_share(s) == pytest.approx(7e-3 * 9.81 * math.sin(math.radians(0.5)) / 20e-3, rel=EXACTLY)
    assert fade_left(passage()) == 1.0
    assert failures_expected(passage()) == 0.0


@pytest.mark.parametrize(
    ("tables", "word", "number", "value"),
    [
        ({"pushers": {"nose": 0.03, "trunk": 0.04}}, "bars", "bar", 1.625),  # 25 mm + 40 mm over 40 mm
        ({"pushers": {"heading": "free"}}, "contacts turn", "free heading", 2.0),  # of drag spread over a disc
        ({"train": [CRATE]}, "first block alone", "train", 1.6),  # 0.8 kg over 0.5 kg
        ({"errors": {"fade_time": 600.0}}, "61% of it is left", "fading", 0.5),  # exp(-0.5)
        ({"errors": {"dropout": 0.001}}, "1.6 of 6 fail", "failures", 1.5551),  # 6 (1 - exp(-0.3))
        ({"channel": {"slope": 0.1}}, "up the slope", "slope", 0.19587),  # 0.2 g sin(0.1) over 1 N
        ({"channel": {"slope": 0.1}}, "up the slope", "slide down", 0.28667),  # tan(0.1)/0.35
        ({"channel": {"cross_slope": 0.1}}, "bottom wall", "cross slope", 0.19587),
    ],
)
def test_what_is_left_out_is_said(tables: dict[str, Any], word: str, number: str, value: float) -> None:
    """Each thing that the point world cannot see has its sentence and its number, and neither without it."""
    assert any(word in sentence for sentence in left_out(passage(**tables)))
    assert not any(word in sentence for sentence in left_out(passage()))
    assert numbers(passage(**tables))[number].value == pytest.approx(value, rel=FOUR_DIGITS)
    assert number not in numbers(passage())


def test_bars_take_more_room_than_discs() -> None:
    """44 mm x 15 mm in 120 mm: 120/44.18 from corner to corner; twelve of 629 mm2 on 400 mm x 120 mm."""
    s = load(demo("bristle_tray"))
    found = {regime.name: regime.value for regime in regimes(s, (), travel())}
    assert found["width"] == pytest.approx(120 / (12 + math.hypot(32, 3)), rel=EXACTLY)
    area = math.pi * 6**2 + 12 * 35 + 3 * 32
    assert found["crowding"] == pytest.approx(12 * area / (400 * 120), rel=EXACTLY)


def test_a_centre_off_the_middle_is_said() -> None:
    """A centre of mass or of friction that is given gets a sentence."""
    assert any("off the middle" in sentence for sentence in left_out(passage(block={"centre_of_mass": [0.1, 0.05]})))


def test_when_a_fading_crew_gives_up() -> None:
    """Six carts of which 1.717 are needed move the crate for 100 s x ln(6/1.717) = 125 s."""
    s = passage(errors={"fade_time": 100.0})
    assert "after 125 s the whole crew" in numbers(s)["fading"].meaning
    assert "whole crew" not in numbers(passage(errors={"fade_time": 1000.0}))["fading"].meaning


def test_plain_demos_leave_nothing_out() -> None:
    """Discs on course with one block on a level floor need no such sentence."""
    for name in set(DEMOS) - {"bristle_tray"}:
        assert left_out(load(demo(name))) == ()
