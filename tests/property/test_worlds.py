"""What holds in both worlds for any scenario: mirror images and other units; and that any one can be planned."""

from __future__ import annotations

import math
from typing import Any, get_args

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from pydantic import BaseModel

from swarmpush.demos import demo
from swarmpush.dynamics.steps import choose_step
from swarmpush.dynamics.world import simulate
from swarmpush.kinematics.laps import find_laps
from swarmpush.kinematics.planning import plan
from swarmpush.loading import from_tables, load
from swarmpush.quantities import Quantity
from swarmpush.scenario import Scenario


def steady(examples: int) -> settings:
    """The examples are the same at every run, so that a failure is due to a change in the code."""
    return settings(
        derandomize=True, deadline=None, max_examples=examples, suppress_health_check=[HealthCheck.too_slow]
    )


# ---- mirror images ------------------------------------------------------------------------------------------------

WIDTH = 1.0
FACE = 4.0
OTHER = {"top": "bottom", "bottom": "top", "upper rear corner": "lower rear corner"}
# onward is left out: a pusher that comes along the normal has no side to go on to, and rounding decides
OTHER_SIDE = {"left": "right", "right": "left"}

angles = st.floats(-math.pi, math.pi)
turns = st.builds(lambda a: {"act": "turn", "angle": a}, angles)
departures = st.builds(
    lambda a, side: {"act": "depart", "angle": a, "side": side}, st.floats(0.0, 1.4), st.sampled_from([*OTHER_SIDE])
)
acts = st.lists(st.one_of(turns, departures, st.just({"act": "mirror"})), min_size=1, max_size=2)
starts = st.tuples(st.floats(0.1, 3.9), st.floats(0.05, 0.95), angles)

Start = tuple[float, float, float]


def closed(routine: list[dict[str, Any]], start: Start, *, clearance: float = 0.0) -> Scenario:
    """A corridor 1 m wide that a block closes but for a clearance, and one disc of 40 mm."""
    x, y, heading = start
    pair = {"restitution": 0.0, "friction": 0.2}
    return from_tables(
        {
            "format": 1,
            "about": {"name": "property"},
            "channel": {"length": 8.0, "width": WIDTH},
            "block": {"length": 1.0, "width": WIDTH - clearance, "mass": 1.0, "rear_at": FACE + 0.04},
            "pushers": {"count": 1, "radius": 0.04, "mass": 0.1, "free_speed": 1.0, "stall_force": 1.0},
            "floor": {"static_friction": 0.3, "kinetic_friction": 0.2},
            "contacts": dict.fromkeys(("pusher_wall", "pusher_block", "pusher_pusher", "block_wall"), pair),
            "routine": {"stages": [{"name": "only", "acts": [{"act": "run"}, *routine]}]},
            "start": {"placed": [{"x": x, "y": y, "heading": heading}]},
            "goal": {"travel": 1.0, "time_limit": 3.0},
        }
    )


def mirrored(routine: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """The routine that does in the mirror what this one does."""
    return [
        {**act, "angle": -act["angle"]}
        if act["act"] == "turn"
        else {**act, "side": OTHER_SIDE[act["side"]]}
        if act["act"] == "depart"
        else act
        for act in routine
    ]


# m and rad: a lap is polished to 1e-9 of the width; where the heading is neutral it is the middle of a band, each edge
# of which is found to 1e-7
SAME_LAP = 1e-6


@steady(60)
@given(acts, starts)
def test_mirrored_scenario_has_mirrored_laps(routine: list[dict[str, Any]], start: Start) -> None:
    """Turning a scenario over, turns and sides with it, turns its laps over and changes nothing else."""
    x, y, heading = start
    (there, _), (here, _) = (
        find_laps(closed(routine, start)), find_laps(closed(mirrored(routine), (x, WIDTH - y, -heading))),
    )  # fmt: skip
    assert len(there) == len(here)
    for lap, other in zip(there, here, strict=True):
        assert [OTHER.get(name, name) for name in lap.surfaces] == list(other.surfaces)
        assert lap.length_m == pytest.approx(other.length_m, abs=10 * SAME_LAP)
        assert lap.hits[:, 0] == pytest.approx(other.hits[:, 0], abs=10 * SAME_LAP)
        assert lap.hits[:, 1] == pytest.approx(WIDTH - other.hits[:, 1], abs=10 * SAME_LAP)
        turned = np.remainder(lap.hits[:, 2:] + other.hits[:, 2:] + math.pi, math.tau) - math.pi
        assert turned == pytest.approx(np.zeros_like(turned), abs=SAME_LAP)
        assert np.abs(lap.multipliers) == pytest.approx(np.abs(other.multipliers), abs=1e-4)
        for (low, high), (other_low, other_high) in zip(lap.leg_bands_rad, other.leg_bands_rad, strict=True):
            assert (low, high) == (pytest.approx(-other_high, abs=SAME_LAP), pytest.approx(-other_low, abs=SAME_LAP))


@steady(12)
@given(acts, starts)
def test_mirrored_scenario_has_mirrored_motion(routine: list[dict[str, Any]], start: Start) -> None:
    """In the body world the mirror image of a scenario moves as the mirror image of its motion."""
    x, y, heading = start
    one, other = (
        simulate(closed(acts_of_one, place, clearance=0.02), cycles=())
        for acts_of_one, place in ((routine, start), (mirrored(routine), (x, WIDTH - y, -heading)))
    )
    # small differences grow from bump to bump; up to the third one the paths are the same
    until = min([math.inf, *one.bumps["t_on_s"][2:3], *other.bumps["t_on_s"][2:3]])
    early = one.pushers["t_s"] < until
    assert early.sum() > 1
    assert one.pushers["x_m"][early].to_numpy() == pytest.approx(other.pushers["x_m"][early].to_numpy(), abs=1e-6)
    assert one.pushers["y_m"][early].to_numpy() == pytest.approx(
        WIDTH - other.pushers["y_m"][early].to_numpy(), abs=1e-6
    )


# ---- other units --------------------------------------------------------------------------------------------------


def rescaled(model: Any, length: float, time: float, mass: float) -> Any:
    """The same rig where metre, second and kilogram are called otherwise; works on any part of a scenario."""
    if isinstance(model, tuple):
        return tuple(rescaled(part, length, time, mass) for part in model)
    if not isinstance(model, BaseModel):
        return model
    changes: dict[str, Any] = {}
    for name, field in type(model).model_fields.items():
        value = getattr(model, name)
        marks = [
            *field.metadata,
            *(m for kind in get_args(field.annotation) for m in getattr(kind, "__metadata__", ())),
        ]
        unit = next((mark.si_unit for mark in marks if isinstance(mark, Quantity)), None)
        if unit is None:
            changes[name] = rescaled(value, length, time, mass)
        elif value is not None:
            changes[name] = value * _factor(unit, length, time, mass)
    return model.model_copy(update=changes)


def _factor(unit: str, length: float, time: float, mass: float) -> float:
    force = mass * length / time**2
    return {
        "m": length, "s": time, "kg": mass, "kg*m^2": mass * length**2, "m/s": length / time, "rad/s": 1 / time,
        "N": force, "J": force * length, "N*s": force * time, "N*s/m": mass / time,
        "N*m*s": force * length * time, "rad": 1.0,
        "rad/sqrt(s)": time**-0.5, "1/s": 1 / time, "1": 1.0, "Pa*s": mass / length / time, "kg/m^3": mass / length**3,
        "m/s^2": length / time**2,
    }[unit]  # fmt: skip


TINY = 1e-290  # a dying motion runs out of the numbers' range, and loses its last digits at another time
UNIT_OF_COLUMN = {"_m": "m", "_s": "s", "_m_s": "m/s", "_Ns": "N*s", "_J": "J", "_rad": "rad"}


def in_units(table: pd.DataFrame, length: float, time: float, mass: float) -> pd.DataFrame:
    """A run's table with its numbers taken back to the original units."""
    found = table.copy()
    for name in table:
        ending = max((e for e in UNIT_OF_COLUMN if str(name).endswith(e)), key=len, default=None)
        if ending:
            found[name] = table[name] / _factor(UNIT_OF_COLUMN[ending], length, time, mass)
            found[name] = found[name].where(found[name].abs() > TINY, 0.0)
    return found


powers_of_two = st.integers(-12, 12).map(lambda k: 2.0**k)
powers_of_four = st.integers(-8, 8).map(lambda k: 4.0**k)  # the square root of the time's is taken


@steady(6)
@given(
    st.sampled_from(["service_passage", "vibration_duct", "gel_channel"]), powers_of_two, powers_of_four, powers_of_two
)
def test_units_do_not_matter(name: str, length: float, time: float, mass: float) -> None:
    """With lengths, times and masses in other units, powers of two apart, a run is the same bit by bit."""
    s = load(demo(name)).replace(errors={"missed_bumps": 0.0})  # a missed bump is felt after one second
    s = s.replace(goal={"time_limit": 2500 * choose_step(s).dt_s})
    original, other = simulate(s, cycles=()), simulate(rescaled(s, length, time, mass), cycles=())
    assert len(original.visits) > 0 or name == "gel_channel"
    for table in ("visits", "block", "pushers", "bumps"):
        pd.testing.assert_frame_equal(
            in_units(getattr(original, table), 1.0, 1.0, 1.0),
            in_units(getattr(other, table), length, time, mass),
            check_exact=True,
        )


@steady(6)
@given(st.floats(1e-3, 1e3), st.floats(1e-3, 1e3), st.floats(1e-3, 1e3))
def test_any_units_give_the_same_plan(length: float, time: float, mass: float) -> None:
    """With any other units the point world's laps, shares and forecast are the same ones in those units."""
    s = load(demo("service_passage"))
    original, other = plan(s, n_starts=50), plan(rescaled(s, length, time, mass), n_starts=50)
    assert original.capture == other.capture
    lap, same = original.main_lap, other.main_lap
    assert lap is not None
    assert same is not None
    assert lap.surfaces == same.surfaces
    rounding = 1e-9  # relative; a lap is polished to that
    assert same.length_m == pytest.approx(lap.length_m * length, rel=rounding)
    assert same.time_s == pytest.approx(lap.time_s * time, rel=rounding)
    assert np.real(same.multipliers) == pytest.approx(np.real(lap.multipliers), abs=rounding)
    assert same.band_rad == pytest.approx(lap.band_rad, abs=1e-6)  # edges are found to 1e-7
    assert other.travel.nudge_m == pytest.approx(original.travel.nudge_m * length, rel=1e-6)  # cosines have six digits
    assert other.travel.strike_rate_1_s == pytest.approx(original.travel.strike_rate_1_s / time, rel=0.01)
    for number, before in zip(other.regime, original.regime, strict=True):
        assert number.name == before.name
        assert number.value == pytest.approx(before.value, rel=1e-3)
        assert number.is_at_risk == before.is_at_risk


# ---- any scenario at all ------------------------------------------------------------------------------------------


def _sane(value: float) -> float:
    """The value itself, or 0 where it is so small that nobody would write it into a file."""
    return value if abs(value) > 1e-9 else 0.0


@st.composite
def small_scenarios(draw: st.DrawFn) -> Scenario:
    """A valid rig with a few pushers: any sizes that fit, any medium, contacts, errors and routine."""

    def number(low: float, high: float) -> float:
        return draw(st.floats(low, high).map(_sane))

    def maybe(low: float, high: float) -> float:
        return draw(st.one_of(st.just(0.0), st.floats(low, high).map(_sane)))

    radius = 10 ** number(-4, -1)
    width = radius * number(2.2, 12.0)
    block_width, block_length = width * number(0.2, 1.0), radius * number(1.0, 20.0)
    rear_at = radius * number(12.0, 30.0)
    speed, mass = radius * number(0.2, 5.0), 10 ** number(-6, 0)
    stall = mass * speed**2 / radius * 10 ** number(-1, 3)
    block_mass = mass * 10 ** number(-1, 2)
    static = number(0.0, 1.0)
    friction_like_gravity = number(0.0, 3.0) * stall / block_mass
    floor = {"static_friction": static, "kinetic_friction": static * number(0.0, 1.0), "gravity": friction_like_gravity}
    drag = stall / speed * 10 ** number(-2, 2)
    fluid = {"block_drag": drag, "block_yaw_drag": drag * radius**2 * 10 ** number(-1, 2)}
    medium = draw(st.sampled_from([{"floor": floor}, {"fluid": fluid}, {"floor": floor, "fluid": fluid}]))

    def pair() -> dict[str, float]:
        return {"restitution": number(0.0, 1.0), "friction": number(0.0, 1.5)}

    crossing = radius / speed
    tables: dict[str, Any] = {
        "format": 1,
        "about": {"name": "any"},
        "channel": {"length": rear_at + block_length + radius * number(2.5, 20.0), "width": width},
        "block": {
            "length": block_length, "width": block_width, "mass": block_mass, "rear_at": rear_at,
            "offset": (width - block_width) / 2 * number(-0.99, 0.99), "yaw": draw(st.sampled_from(["free", "held"])),
        },
        "pushers": {
            "count": draw(st.integers(1, 3)), "radius": radius, "mass": mass, "free_speed": speed, "stall_force": stall,
            "sideways_drag": number(0.1, 10.0), "drive_while_turning": number(0.0, 1.0),
            "turn_rate": draw(st.sampled_from([math.inf, 0.3 / crossing, 5.0 / crossing])),
            "bump_threshold": maybe(0.0, 0.5) * mass * speed, "bumper_arc": number(1.0, 2 * math.pi),
            "latency": maybe(0.01, 5.0) * crossing, "pass_through": draw(st.booleans()),
        },
        **medium,
        "contacts": {name: pair() for name in ("pusher_wall", "pusher_block", "pusher_pusher", "block_wall")},
        "routine": {"stages": [{"name": "only", "acts": [{"act": "run"}, *draw(any_acts)]}]},
        "errors": {
            "turn_bias": maybe(-0.5, 0.5), "turn_sd": maybe(0.0, 1.0),
            "heading_diffusion": maybe(0.0, 1.0) / math.sqrt(crossing), "heading_drift": maybe(-1.0, 1.0) / crossing,
            "bearing_step": maybe(0.0, 1.0), "bearing_sd": maybe(0.0, 1.0), "missed_bumps": maybe(0.0, 0.5),
            "false_bumps": maybe(0.0, 1.0) / crossing, "speed_spread": maybe(0.0, 0.3), "mass_spread": maybe(0.0, 0.3),
        },
        "start": {"region": draw(st.sampled_from(["behind", "anywhere"]))},
        "goal": {"travel": 2 * radius, "time_limit": 1.0},
        "trial": {"seed": draw(st.integers(0, 1000))},
    }  # fmt: skip
    for name, low in (("heading_diffusion", 10.0), ("heading_drift", 100.0), ("false_bumps", 1000.0)):
        assume(abs(tables["errors"][name]) <= low)
    return from_tables(tables)


any_acts = st.lists(
    st.one_of(
        turns,
        departures,
        st.builds(lambda a: {"act": "depart", "angle": a, "side": "onward"}, st.floats(0.0, 1.4)),
        st.just({"act": "mirror"}),
        st.sampled_from([{"act": "wander", "law": law} for law in ("uniform", "cosine")]),
        st.builds(lambda a: {"act": "depart", "angle": a, "side": "either", "spread": 0.5}, st.floats(0.0, 1.4)),
    ),
    min_size=1,
    max_size=3,
)


@steady(25)
@given(small_scenarios())
def test_any_scenario_can_be_planned(s: Scenario) -> None:
    """A valid scenario never crashes the point world, and its shares add up to 1."""
    found = plan(s.replace(goal={"time_limit": 100 * s.pushers.radius / s.pushers.free_speed}), n_starts=20)
    capture = found.capture
    assert capture.captured + sum(capture.lost.values()) + capture.undecided == pytest.approx(1.0)
    for lap in found.laps:
        assert lap.surfaces.count("rear") == lap.n_rear >= 1
        assert lap.length_m > 0.0
        assert all(low <= 0.0 <= high for low, high in lap.leg_bands_rad)
    travel = found.travel
    assert travel.block_speed_m_s >= 0.0 or s.start.region != "behind" or s.start.placed is not None
    assert travel.nudge_m >= 0.0
    assert found.to_dict()["capture"]["starts"] == 20
