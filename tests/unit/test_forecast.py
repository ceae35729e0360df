"""The forecast: visits at the pace of bodies, one strike's nudge, and pushers that lean together."""

from __future__ import annotations

import io
import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from rich.console import Console
from scipy.integrate import solve_ivp

import swarmpush
from swarmpush.demos import demo
from swarmpush.kinematics.forecast import push_force
from swarmpush.kinematics.nudge import Strike, impact_nudge, lean_speed, slide_out, strike_nudge
from swarmpush.kinematics.planning import plan
from swarmpush.kinematics.regimes import Regime
from swarmpush.kinematics.teams import binomial, kept_by_walls
from swarmpush.kinematics.visits import Visits, follow_visits
from swarmpush.loading import load
from swarmpush.reporting import console
from swarmpush.routine import Routine
from swarmpush.scenario import Errors, Floor, Fluid, Pair, Scenario, Start

INTEGRATED = 1e-6  # relative: what the integrator leaves
IN_BODIES = 0.015  # relative: what the body world's step of 0.2 ms takes from a slide, and the mean accelerations
A_VISIT = 0.02  # relative: one visit more or less in fifty


def routine(*acts: dict[str, Any]) -> Routine:
    return Routine.model_validate({"stages": [{"name": "only", "acts": [{"act": "run"}, *acts]}]})


AWAY = {"act": "turn", "angle": math.pi}


def hall(*acts: dict[str, Any], start: tuple[float, float, float] = (0.5, 0.5, 0.0), **tables: Any) -> Scenario:
    """A hall 1 m wide with a block of 0.4 x 0.4 m from x = 1.2 m, one disc of 40 mm, frictionless contacts."""
    s = load(demo("service_passage")).replace(
        channel={"width": 1.0}, block={"length": 0.4, "width": 0.4}, pushers={"count": 1}
    )
    x, y, heading = start
    slippery = Pair(restitution=0.2, friction=0.0)
    changes = {
        "errors": Errors(),
        "routine": routine(*acts),
        "start": Start.model_validate({"placed": [{"x": x, "y": y, "heading": heading}]}),
        "contacts": s.contacts.model_copy(update={"pusher_block": slippery, "block_wall": slippery}),
    }
    return s.model_copy(update=changes).replace(**tables)


# ---- visits -------------------------------------------------------------------------------------------------------


def test_pace_of_a_known_lap() -> None:
    """To and fro between face and end, a lap takes its way, two latencies, two half turns and two run-ups of m/g."""
    s = hall(AWAY, start=(0.5, 0.45, 0.0), goal={"time_limit": 1500.0})
    rear, front = follow_visits(s)
    lap = 2 * 1.12 / 0.15 + 2 * 0.04 + 2 * math.pi / 3.0 + 2 * 0.2 * 0.15 / 1.0
    assert rear.strike_rate_1_s == pytest.approx(1 / lap, rel=A_VISIT)
    assert rear.leaning_share == pytest.approx(0.04 / lap, rel=A_VISIT)
    assert front.strike_rate_1_s == 0.0
    assert not len(front.incidence_rad)


@pytest.mark.parametrize(("turn", "leans_until"), [(1.0, 1.0), (-1.0, -1.0)])
def test_a_turn_leans_until_it_is_parallel_to_the_face(turn: float, leans_until: float) -> None:
    """From 30 deg off the normal a turn away drives for 60 deg more, the other way round for 120 deg."""
    s = hall(
        {"act": "turn", "angle": turn * math.radians(150)},
        start=(1.0, 0.45, math.radians(30)),
        pushers={"drive_while_turning": 0.5},
        goal={"time_limit": 5.0},
    )
    rear, _ = follow_visits(s)
    a = math.radians(30)
    angle = math.pi / 2 - leans_until * a
    assert rear.incidence_rad[0] == pytest.approx(a)
    assert rear.turning_s[0] == pytest.approx(angle / 3.0)
    assert rear.turning_cosine[0] * angle == pytest.approx(1.0 - leans_until * math.sin(a))  # integral of the cosine
    assert rear.leaning_s[0] == pytest.approx(0.04 + angle / 3.0)
    without = follow_visits(s.replace(pushers={"drive_while_turning": 0.0}))[0]
    assert (without.turning_s[0], without.leaning_s[0]) == (0.0, pytest.approx(0.04))


def test_a_slide_along_the_face_leans() -> None:
    """A pusher told to slide along what it touched leans for that time as well."""
    s = hall({"act": "slide", "time": 0.5}, AWAY, start=(1.0, 0.45, 0.1), goal={"time_limit": 4.0})
    assert follow_visits(s)[0].leaning_s[0] == pytest.approx(0.04 + 0.5)


def test_pressing_on_leans_to_the_end() -> None:
    """A pusher that turns by nothing after its bump leans for the rest of the trial, and has struck once."""
    s = hall({"act": "turn", "angle": 0.0}, start=(1.0, 0.45, 0.0), goal={"time_limit": 60.0})
    rear, _ = follow_visits(s)
    arrival = 0.16 / 0.15 + 0.03
    assert rear.leaning_share == pytest.approx(1 - arrival / 60.0, rel=1e-6)
    assert rear.is_strike.sum() == 1


# ---- one strike ---------------------------------------------------------------------------------------------------


def resisted(static: float, kinetic: float, drag: float, restitution: float) -> Scenario:
    s = load(demo("service_passage"))
    pair = Pair(restitution=restitution, friction=0.0)
    return s.model_copy(
        update={
            "floor": Floor(static_friction=static, kinetic_friction=kinetic) if static else None,
            "fluid": Fluid(block_drag=drag, block_yaw_drag=1.0) if drag else None,
            "contacts": s.contacts.model_copy(update={"pusher_block": pair}),
        }
    )


def integrated(s: Scenario, push: float, time: float, start: float) -> float:
    """Way of block and pusher in touch under a push, and then of the block alone, by SciPy's integrator."""
    m, big = s.pushers.mass, s.block.mass
    friction = s.floor.kinetic_friction * big * 9.81 if s.floor else 0.0
    drag = s.fluid.block_drag if s.fluid else 0.0

    def stops(t: float, z: NDArray[np.float64]) -> float:
        return float(z[1]) - 1e-9

    stops.terminal = True  # type: ignore[attr-defined]
    stops.direction = -1.0  # type: ignore[attr-defined]
    exact: dict[str, Any] = {"rtol": 1e-11, "atol": 1e-15}
    touching = solve_ivp(
        lambda t, z: [z[1], (push - friction - (drag + s.pushers.drag) * z[1]) / (m + big)],
        (0.0, time), [0.0, start], events=stops, **exact,
    )  # fmt: skip
    way, speed = touching.y[:, -1]
    if speed < 1e-8:
        return float(way)
    alone = solve_ivp(
        lambda t, z: [z[1], (-friction - drag * z[1]) / big], (0.0, 60.0), [way, speed], events=stops, **exact
    )
    return float(alone.y[0, -1])


@pytest.mark.parametrize("time", [0.02, 0.4])
@pytest.mark.parametrize(("static", "kinetic", "drag"), [(0.35, 0.30, 0.0), (0.1, 0.05, 0.0), (0.1, 0.05, 2.0)])
def test_pushing_on_after_a_plastic_impact(static: float, kinetic: float, drag: float, time: float) -> None:
    """Without rebound the nudge solves the motion of two bodies in touch, then of the block alone (SciPy)."""
    s = resisted(static, kinetic, drag, 0.0)
    start = 0.15 * 0.2 / 0.7  # momentum shared by 0.2 and 0.5 kg
    way = strike_nudge(s, Strike(0.15, 1.0, time))
    assert way == pytest.approx(integrated(s, 1.0, time, start), rel=INTEGRATED)
    assert way > impact_nudge(s, 0.15)


def test_who_catches_up_too_late_adds_nothing() -> None:
    """A pusher whose latency ends before it has caught up with the block leaves it to slide alone."""
    s = resisted(0.35, 0.30, 0.0, 0.4)
    assert strike_nudge(s, Strike(0.15, 1.0, 0.01)) == pytest.approx(impact_nudge(s, 0.15))
    assert strike_nudge(s, Strike(0.15, 1.0, 0.03)) > impact_nudge(s, 0.15)


@pytest.mark.parametrize("restitution", [0.0, 0.2, 0.4])
@pytest.mark.parametrize("latency", [0.01, 0.04, 0.2])
def test_nudge_of_bodies(restitution: float, latency: float) -> None:
    """One head-on strike moves the block as far in the body world as the plan says."""
    s = hall(AWAY, {"act": "run"}, {"act": "halt"}, start=(0.8, 0.5, 0.0), goal={"time_limit": 4.0})
    pair = Pair(restitution=restitution, friction=0.0)
    s = s.model_copy(update={"contacts": s.contacts.model_copy(update={"pusher_block": pair})})
    s = s.replace(pushers={"latency": latency, "turn_rate": math.inf}, numerics={"step": 2e-4})
    run = swarmpush.simulate(s, cycles=())
    travel = plan(s, n_starts=1).travel
    assert len(run.strikes) == 1
    assert run.travel_m == pytest.approx(travel.nudge_m, rel=IN_BODIES)


@pytest.mark.parametrize("heavy", ["pusher", "block"])
@pytest.mark.parametrize("drag", [1e-12, 1e-3, 1e3])
@pytest.mark.parametrize("restitution", [0.0, 0.5, 1.0])
def test_nudge_of_any_masses_is_finite(restitution: float, drag: float, heavy: str) -> None:
    """However bouncy, light or heavy the two are, a strike moves the block, by half its bare slide or more."""
    s = resisted(0.0, 0.0, drag, restitution)
    s = s.replace(**{"pushers" if heavy == "pusher" else "block": {"mass": 50.0}})
    for time in (0.0, 0.01, 1.0, 1e4):
        way = strike_nudge(s, Strike(0.15, 1.0, time))
        assert math.isfinite(way)
        assert way >= 0.5 * impact_nudge(s, 0.15)


def test_slide_out_limits() -> None:
    """A body slides M V^2/(2 f) without drag and M V/g without friction, and for ever without either."""
    assert slide_out(2.0, 3.0, 4.0, 0.0) == 2.25
    assert slide_out(2.0, 3.0, 0.0, 4.0) == 1.5
    assert slide_out(2.0, 3.0, 0.0, 0.0) == math.inf
    assert slide_out(2.0, 0.0, 0.0, 0.0) == 0.0
    assert slide_out(2.0, 3.0, 4.0, 1e-6) == pytest.approx(2.25, rel=1e-6)


# ---- together -----------------------------------------------------------------------------------------------------


def test_binomial() -> None:
    """Of three that lean half their time none, one, two, three lean with 1/8, 3/8, 3/8, 1/8; of one, all or nothing."""
    assert binomial(3, 0.5) == pytest.approx([0.125, 0.375, 0.375, 0.125])
    assert binomial(1, 0.0) == pytest.approx([1.0])
    assert binomial(2, 1.0) == pytest.approx([0.0, 0.0, 1.0])
    assert binomial(5000, 0.1).sum() == pytest.approx(1.0, abs=1e-6)  # what is rarer than 1e-9 is left out


def crowd(count: int, share: float, law: str = "lean", **tables: Any) -> Any:
    """Forecast of head-on pushers that lean for a share of their time, in pairs of a 1 s and a rest."""
    wait = 1.0 / share - 1.0
    way = 0.15 * (wait - 2 * 0.03) / 2  # to the end of the hall and back, run-ups counted
    s = hall(
        AWAY,
        start=(1.16, 0.5, 0.0),
        channel={"length": 3.0},
        block={"rear_at": way + 0.08},
        pushers={"count": count, "turn_rate": math.inf, "latency": 1.0},
        forecast={"law": law},
        goal={"time_limit": 4000.0},
        **tables,
    )
    # the latency is also spent at the end of the hall: leaving it out of the rest keeps the share
    start = {"x": way + 0.04, "y": 0.5, "heading": 0.0}
    return plan(s.model_copy(update={"start": Start.model_validate({"placed": [start] * count})}), n_starts=1).travel


def test_a_team_needs_enough_pushers() -> None:
    """Where two must lean, the law of leaning gives nothing to one, and to three what the binomial law says."""
    assert crowd(1, 0.1).block_speed_m_s == 0.0
    travel = crowd(3, 0.1)
    q = travel.leaning_share
    s = load(demo("service_passage"))
    expected = 3 * q**2 * (1 - q) * lean_speed(s, 1.0, 2) + q**3 * lean_speed(s, 1.0, 3)
    assert travel.block_speed_m_s == pytest.approx(expected, rel=1e-9)
    assert travel.enough_share == pytest.approx(3 * q**2 * (1 - q) + q**3, rel=1e-9)
    assert travel.from_leaning_together_m_s == travel.block_speed_m_s
    assert travel.from_impact_m_s == 0.0


def test_a_larger_crew_is_worth_more_than_its_strikes() -> None:
    """On a dry floor pushers that lean together add to what each does alone; in a fluid they take from each other."""
    assert crowd(6, 0.1, "auto").from_leaning_together_m_s > 0.0
    wet = load(demo("gel_channel"))
    travel = plan(wet, n_starts=20).travel
    assert travel.from_leaning_together_m_s < 0.0
    alone = plan(wet.replace(pushers={"count": 1}), n_starts=20).travel
    assert alone.from_leaning_together_m_s == pytest.approx(0.0, abs=0.01 * alone.block_speed_m_s)


@pytest.mark.parametrize("name", ["service_passage", "vibration_duct", "gel_channel", "loading_bay"])
def test_parts_add_up(name: str) -> None:
    """What impacts, pushing on and leaning together give is the block's speed, and the basis says how much each is."""
    travel = plan(load(demo(name)), n_starts=20).travel
    parts = travel.from_impact_m_s + travel.from_pushing_on_m_s + travel.from_leaning_together_m_s
    assert parts == pytest.approx(travel.block_speed_m_s, rel=1e-12)
    assert f"{travel.from_pushing_on_m_s / parts:.0%} pushing on" in travel.basis


def test_laws_say_what_they_count() -> None:
    """A given nudge is taken as it is, and the law of impacts counts nothing but the slide."""
    s = load(demo("service_passage"))
    given = plan(s.replace(forecast={"law": "given", "nudge": 0.002}), n_starts=20).travel
    assert given.nudge_m == pytest.approx(0.002)
    assert "given" in given.basis
    impact = plan(s.replace(forecast={"law": "impact"}), n_starts=20).travel
    assert impact.from_impact_m_s == impact.block_speed_m_s
    assert impact.nudge_m == pytest.approx(
        impact_nudge(s, 0.15 * math.cos(math.radians(15))), rel=0.02
    )  # first strikes


def test_walls_take_their_part_of_one_sided_pushes() -> None:
    """Pushes from 15 deg drag the block against a wall, which takes 0.3 tan 15 deg; from both sides alike, nothing."""
    s = load(demo("service_passage"))
    a = math.radians(15)
    assert kept_by_walls(s, np.full(5, a)) == pytest.approx(1 - 0.3 * math.tan(a))
    assert kept_by_walls(s, np.full(5, math.radians(40))) == pytest.approx(1 - 0.3 * 0.4)  # friction slips
    assert kept_by_walls(s, np.array([a, -a])) == pytest.approx(1.0)
    assert kept_by_walls(s, np.zeros(0)) == 1.0


# ---- checks before anything is run --------------------------------------------------------------------------------


def regimes(s: Scenario) -> dict[str, Regime]:
    return {r.name: r for r in plan(s, n_starts=20).regime}


def test_force_over_a_friction_range() -> None:
    """The pushers needed are given for half and twice the friction, and twice is named where the crew cannot do it."""
    s = load(demo("service_passage"))
    force = push_force(s)
    assert force.pushers_to_move == pytest.approx(0.35 * 0.5 * 9.81)
    assert (force.pushers_to_move_low, force.pushers_to_move_high) == pytest.approx(
        (0.5 * force.pushers_to_move, 2 * force.pushers_to_move)
    )
    assert regimes(s)["force margin"].value == pytest.approx(6 / force.pushers_to_move)
    assert not regimes(s)["force margin"].is_at_risk
    three = regimes(s.replace(pushers={"count": 3}))["force margin"]
    assert three.is_at_risk
    assert "at twice the friction the crew cannot" in three.meaning


def test_block_that_can_turn_round() -> None:
    """A channel wider than the block's diagonal lets it turn round, unless a rail holds it."""
    s = load(demo("service_passage"))
    wide = s.replace(block={"length": 0.05})
    assert regimes(wide)["diagonal"].is_at_risk
    assert "turn right round" in regimes(wide)["diagonal"].meaning
    assert not regimes(wide.replace(block={"yaw": "held"}))["diagonal"].is_at_risk
    assert not regimes(s)["diagonal"].is_at_risk


def test_pushers_that_can_slip_past() -> None:
    """A clearance wider than a pusher is named, as pushers then get to the front."""
    s = load(demo("service_passage"))
    loose = regimes(s.replace(block={"width": 0.22}))["clearance"]
    assert "slip past" in loose.meaning
    assert loose.is_at_risk
    assert "slip past" not in regimes(s)["clearance"].meaning


def test_rules_of_plain_corridors_are_not_applied_elsewhere() -> None:
    """For a general outline the plan says which rules do not apply, and gives none of their numbers."""
    found = regimes(load(demo("loading_bay")))
    assert not {"wedging", "diagonal", "clearance"} & set(found)
    assert "do not apply" in found["outline"].meaning
    assert "outline" not in regimes(load(demo("service_passage")))


def test_visits_of_nobody() -> None:
    """A crew that halts at once visits nothing."""
    s = hall({"act": "halt"}, start=(0.5, 0.5, math.pi / 2))
    rear, front = follow_visits(s)
    assert isinstance(rear, Visits)
    assert (rear.strike_rate_1_s, rear.leaning_share, front.strike_rate_1_s) == (0.0, 0.0, 0.0)


# ---- the page -----------------------------------------------------------------------------------------------------


def shown(s: Scenario, width: int, monkeypatch: pytest.MonkeyPatch) -> str:
    paper = io.StringIO()
    monkeypatch.setattr(console, "console", Console(file=paper, width=width, highlight=False))
    console.show_plan(plan(s, n_starts=20))
    return paper.getvalue()


@pytest.mark.parametrize("width", [60, 80])
@pytest.mark.parametrize("name", ["service_passage", "vibration_duct", "gel_channel", "loading_bay"])
def test_page_fits(name: str, width: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """A plan fits the terminal's width with nothing cut off."""
    text = shown(load(demo(name)), width, monkeypatch)
    assert max(map(len, text.splitlines())) <= width
    assert "…" not in text


def test_page_says_it_all(monkeypatch: pytest.MonkeyPatch) -> None:
    """The page answers in a sentence and names laps, their keeping, starts, force, noise, basis, risks and kit."""
    text = " ".join(shown(load(demo("service_passage")), 80, monkeypatch).split())
    assert text.startswith("Service passage In time: the plan promises 100 mm in ")
    for words in (
        "lap 1: rear - top - bottom", "by theory", "followed", "caught by a lap", "1.72 pushers to move the block",
        "0.86 with half the friction", "80% of the pushers keep lap 1 for 60 laps with a turn error up to",
        "here 4 deg", "sliding after impacts", "pushing on", "leaning together", "at risk: pushers meet often",
        "bump sensor",
    ):  # fmt: skip
        assert words in text
    s = load(demo("service_passage"))
    assert "Too late: the plan promises" in shown(s.replace(goal={"time_limit": 60.0}), 80, monkeypatch)
    hopeless = hall({"act": "halt"}, start=(0.5, 0.5, math.pi / 2))
    assert "No arrival: no strike moves the block." in shown(hopeless, 80, monkeypatch)
