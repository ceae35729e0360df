"""The point world: exact bumps, the fates of starts, and the laws of the forecast."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from swarmpush.demos import demo
from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import trace, trace_lap
from swarmpush.kinematics.boundary import SURFACES, Boundary, boundary_of
from swarmpush.kinematics.forecast import push_force
from swarmpush.kinematics.legs import Hit, next_hit
from swarmpush.kinematics.nudge import Strike, impact_nudge, lean_speed, strike_nudge
from swarmpush.kinematics.planning import plan
from swarmpush.kinematics.strikes import count_strikes
from swarmpush.loading import load
from swarmpush.program import EXACT, MEMORY, NOTES, Contact, compile_routine
from swarmpush.routine import Routine
from swarmpush.scenario import Floor, Fluid, Scenario, Start

ROUNDING = 1e-12  # m; a few operations on coordinates of 1 m


def routine(*acts: dict[str, Any]) -> Routine:
    return Routine.model_validate({"stages": [{"name": "only", "acts": [{"act": "run"}, *acts]}]})


def hall(acts: Routine | None = None, *starts: tuple[float, float, float], **tables: Any) -> Scenario:
    """A hall of 3 x 1 m with a block of 0.4 x 0.4 m in the middle of its width, from x = 1.2 m, and discs of 40 mm."""
    s = load(demo("service_passage")).replace(
        channel={"width": 1.0}, block={"length": 0.4, "width": 0.4}, pushers={"count": max(len(starts), 1)}
    )
    changes: dict[str, Any] = {"errors": type(s.errors)()}
    if acts:
        changes["routine"] = acts
    if starts:
        changes["start"] = Start.model_validate({"placed": [{"x": x, "y": y, "heading": h} for x, y, h in starts]})
    return s.model_copy(update=changes).replace(**tables)


def hit(s: Scenario, x: float, y: float, degrees: float, shift: float = 0.0) -> tuple[str | None, float, float]:
    """Surface, run length and normal (deg) of the next bump."""
    a = math.radians(degrees)
    found: Hit = next_hit(boundary_of(s), shift, x, y, math.cos(a), math.sin(a))
    return (SURFACES[found.surface] if found.surface >= 0 else None), found.run, math.degrees(found.normal_angle)


# ---- bumps --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("place", "degrees", "surface", "run", "normal"),
    [
        ((0.5, 0.5), 0, "rear", 0.66, 180),
        ((2.5, 0.5), 180, "front", 0.86, 0),
        ((0.5, 0.5), 90, "top", 0.46, -90),
        ((0.5, 0.5), -90, "bottom", 0.46, 90),
        ((0.5, 0.5), 180, "near end", 0.46, 0),
        ((2.5, 0.5), 0, "far end", 0.46, 180),
        ((1.4, 0.1), 90, "block bottom", 0.16, -90),
        ((1.4, 0.9), -90, "block top", 0.16, 90),
        ((0.5, 0.2), 0, "far end", 2.46, 180),  # passes under the block
        ((0.5, 0.5), 45, "top", 0.46 * math.sqrt(2), -90),
    ],
)
def test_flat_surfaces(place: tuple[float, float], degrees: float, surface: str, run: float, normal: float) -> None:
    """A disc touches a flat surface when its centre is a radius away, and knows the normal."""
    assert hit(hall(), *place, degrees) == (surface, pytest.approx(run, abs=ROUNDING), pytest.approx(normal))


@pytest.mark.parametrize("below", [0.001, 0.02, 0.039])
def test_corner(below: float) -> None:
    """A disc that passes a corner of the block by less than its radius touches it where Pythagoras has it."""
    surface, run, normal = hit(hall(), 0.5, 0.3 - below, 0)
    depth = math.sqrt(0.04**2 - below**2)
    assert surface == "lower rear corner"
    assert run == pytest.approx(0.7 - depth, abs=ROUNDING)
    assert normal == pytest.approx(-math.degrees(math.pi - math.asin(below / 0.04)))
    assert hit(hall(), 0.5, 0.7 + below, 0)[0] == "upper rear corner"
    assert hit(hall(), 2.5, 0.7 + below, 180)[0] == "upper front corner"
    assert hit(hall(), 2.5, 0.3 - below, 180)[0] == "lower front corner"


def test_corner_and_face_meet_without_a_seam() -> None:
    """Across the edge between face and corner the run and the normal are continuous."""
    on_face, on_corner = hit(hall(), 0.5, 0.3 + 1e-9, 0), hit(hall(), 0.5, 0.3 - 1e-9, 0)
    assert (on_face[0], on_corner[0]) == ("rear", "lower rear corner")
    assert on_face[1] == pytest.approx(on_corner[1], abs=ROUNDING)
    assert abs(math.remainder(on_face[2] - on_corner[2], 360.0)) < 1e-5  # 1e-9 m over the radius, in degrees


def test_grazing_goes_on() -> None:
    """A path along a surface in touch with it is not stopped by it, and one that just misses a corner goes past."""
    assert hit(hall(), 0.5, 0.04, 0)[0] == "far end"
    assert hit(hall(), 0.5, 0.26 - 1e-9, 0)[0] == "far end"
    assert hit(hall(), 0.5, 0.26 + 1e-9, 0)[0] == "lower rear corner"


def test_surface_just_left_does_not_stop() -> None:
    """From a surface a pusher gets to the next one, and towards it it bumps again at once."""
    assert hit(hall(), 1.16, 0.5, 170)[0] == "near end"
    assert hit(hall(), 1.16, 0.5, 10)[:2] == ("rear", 0.0)
    assert hit(hall(), 0.04, 0.04, -135)[:2] == ("bottom", 0.0)


def test_moved_block() -> None:
    """A shift moves the block's faces and corners and leaves the walls."""
    assert hit(hall(), 0.5, 0.5, 0, shift=0.3)[:2] == ("rear", pytest.approx(0.96, abs=ROUNDING))
    assert hit(hall(), 0.5, 0.28, 0, shift=0.3)[0] == "lower rear corner"
    assert hit(hall(), 0.5, 0.28, 0, shift=0.3)[1] == pytest.approx(hit(hall(), 0.5, 0.28, 0)[1] + 0.3, abs=ROUNDING)
    assert hit(hall(), 0.5, 0.5, 90, shift=0.3) == hit(hall(), 0.5, 0.5, 90)


def test_a_ray_never_leaves_the_region() -> None:
    """From anywhere in the open region, in any direction, the next bump lies on the region's edge."""
    s, rng = hall(), np.random.default_rng(1)
    r = s.pushers.radius
    for _ in range(500):
        x, y, a = rng.uniform(r, 3 - r), rng.uniform(r, 1 - r), rng.uniform(0, 360)
        if math.hypot(max(1.2 - x, x - 1.6, 0), max(0.3 - y, y - 0.7, 0)) < r:
            continue
        surface, run, _ = hit(s, x, y, a)
        assert surface is not None
        ex, ey = x + run * math.cos(math.radians(a)), y + run * math.sin(math.radians(a))
        to_block = math.hypot(max(1.2 - ex, ex - 1.6, 0), max(0.3 - ey, ey - 0.7, 0)) - r
        to_wall = min(ex, 3 - ex, ey, 1 - ey) - r
        assert min(to_block, to_wall) == pytest.approx(0.0, abs=1e-9)  # square roots near grazing lose digits


# ---- whole paths --------------------------------------------------------------------------------------------------


def follow(s: Scenario, n: int, *, diffusion: float = 0.0, seed: int = 0) -> tuple[NDArray[np.float64], list[str]]:
    assert s.start.placed is not None
    start = s.start.placed[0]
    hits, surfaces = np.zeros((n, 6)), np.zeros(n, dtype=np.int64)
    done = trace(
        boundary_of(s), compile_routine(s.routine), EXACT, diffusion, s.pushers.free_speed, stream_keys(seed, 1)[0],
        np.array([start.x, start.y, start.heading]), 0.0, hits, surfaces,
        np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES),
    )  # fmt: skip
    return hits[:done], [SURFACES[k] for k in surfaces[:done]]


def test_mirror_walls_unfold() -> None:
    """Between mirrors the path is a straight line when the room is unfolded, so its sum of |dx| is length times cos."""
    s = hall(routine({"act": "mirror"}), (0.5, 0.5, 0.3), block={"width": 1.0})
    hits, names = follow(s, 60)
    length = hits[:, 4].sum()
    dx, dy = (np.abs(np.diff(np.concatenate([[0.5], hits[:, k]]))).sum() for k in (0, 1))
    assert dy == pytest.approx(length * math.sin(0.3), rel=1e-9)
    assert dx == pytest.approx(length * math.cos(0.3), rel=1e-9)
    assert {"top", "bottom", "near end"} <= set(names)


def test_a_halting_routine_stops_the_path() -> None:
    """A path ends at the bump after which its routine halts."""
    hits, names = follow(hall(routine({"act": "halt"}), (0.5, 0.5, 0.0)), 10)
    assert names == ["rear"]
    assert hits[0, 4] == pytest.approx(0.66)


def test_heading_noise_grows_with_the_run() -> None:
    """Along a run of t seconds the heading turns by a normal deviate of diffusion sqrt(t)."""
    s = hall(routine({"act": "turn", "angle": math.pi}), (0.5, 0.5, 0.0))
    turned, expected = [], []
    for seed in range(300):
        hits, _ = follow(s, 1, diffusion=0.02, seed=seed)
        turned.append(hits[0, 2])
        expected.append(0.02 * math.sqrt(hits[0, 4] / 0.15))
    assert np.ptp(expected) == 0.0  # noise is added at the end of each run
    assert np.std(turned) == pytest.approx(expected[0], rel=4 / math.sqrt(600))  # four sigma


# ---- laps and fates -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("acts", "start", "fate"),
    [
        (({"act": "halt"},), (0.5, 0.5, 0.0), "its routine halts"),
        (({"act": "depart", "angle": 0.0},), (0.5, 0.5, math.pi / 2), "never reaches the rear face"),
        (({"act": "depart", "angle": 0.5, "side": "left"},), (1.0, 0.5, 0.1), "loses the rear face"),
        (({"act": "depart", "angle": 0.0},), (2.5, 0.5, 0.0), "ends ahead of the block"),
        (({"act": "turn", "angle": 0.01},), (0.1, 0.1, -math.pi * 0.75), "stuck in a corner or against a surface"),
    ],
)
def test_fates(acts: tuple[dict[str, Any], ...], start: tuple[float, float, float], fate: str) -> None:
    """What becomes of a start is named."""
    capture = plan(hall(routine(*acts), start)).capture
    assert capture.captured == 0.0
    assert [share for word, share in capture.lost.items() if word.startswith(fate)] == [1.0]
    assert sum(capture.lost.values()) + capture.undecided == 1.0


def test_chance_makes_no_laps() -> None:
    """A routine that draws sides or directions has no laps, though it repeats some by chance."""
    for act in ({"act": "depart", "angle": 0.8, "side": "either"}, {"act": "wander", "law": "uniform"}):
        p = plan(hall(routine(act), block={"width": 1.0}), n_starts=200)
        assert p.laps == ()
        assert p.capture.captured == 0.0
        assert math.isnan(p.travel.strikes_per_lap)
        assert p.travel.strike_rate_1_s > 0.0


def test_pressing_on_the_face_is_no_lap() -> None:
    """A pusher that bumps into the face again and again on the spot has no lap, and has struck once."""
    s = hall(routine({"act": "turn", "angle": 0.0}), (0.5, 0.5, 0.2), goal={"time_limit": 40.0})
    p = plan(s)
    assert p.laps == ()
    assert p.capture.lost == {"stuck in a corner or against a surface": 1.0}
    assert p.travel.strike_rate_1_s == pytest.approx(1 / 40.0)


def test_bumping_again_at_once_is_one_strike() -> None:
    """Turns that still point into the face make it bump again at once, which counts as a single strike."""
    s = hall(routine({"act": "turn", "angle": math.radians(60)}), (0.6, 0.5, 0.2), block={"width": 1.0})
    hits, names = follow(s, 3)
    assert names[:2] == ["rear", "rear"]
    assert hits[1, 4] == 0.0
    s = s.replace(goal={"time_limit": 1.01 * hits[0, 4] / 0.15})
    assert len(count_strikes(s).cosines) == 1


def test_shares_add_up() -> None:
    """Captured, lost and undecided starts are all the starts, and laps share the captured ones."""
    for name in ("service_passage", "vibration_duct", "gel_channel"):
        p = plan(load(demo(name)), n_starts=300)
        assert p.capture.captured + sum(p.capture.lost.values()) + p.capture.undecided == pytest.approx(1.0)
        assert sum(lap.share for lap in p.laps) == pytest.approx(p.capture.captured)
        assert p.capture.n_starts == 300


def test_to_and_fro_between_face_and_end() -> None:
    """Departing along the normal gives the lap face - end of twice the free length, neutral in position."""
    lap = plan(hall(routine({"act": "depart", "angle": 0.0}), (0.5, 0.45, 0.0))).main_lap
    assert lap is not None
    assert lap.surfaces == ("rear", "near end")
    assert lap.length_m == pytest.approx(2 * 1.12, abs=1e-9)
    assert lap.time_s == pytest.approx(2 * 1.12 / 0.15)
    assert sorted(abs(m) for m in lap.multipliers) == pytest.approx([0.0, 1.0])
    assert lap.rear_y_m == pytest.approx(0.45)
    assert lap.strike_cosines == pytest.approx([1.0])


def test_lap_closes() -> None:
    """Following a lap's own departures leads from each of its bumps to the next, and back to the first."""
    for name in ("service_passage", "gel_channel"):
        s = load(demo(name))
        for lap in plan(s, n_starts=200).laps:
            n = len(lap.surfaces)
            total = 0.0
            for k in range(n):
                x, y, _, heading = lap.hits[k]
                found = next_hit(boundary_of(s), 0.0, x, y, math.cos(heading), math.sin(heading))
                after = lap.hits[(k + 1) % n]
                assert SURFACES[found.surface] == lap.surfaces[(k + 1) % n]
                size = s.channel.width
                assert x + found.run * math.cos(heading) == pytest.approx(after[0], abs=1e-9 * size)
                assert y + found.run * math.sin(heading) == pytest.approx(after[1], abs=1e-9 * size)
                total += found.run
            assert total == pytest.approx(lap.length_m)


def test_band_edges() -> None:
    """Within the band on the last leg of the service passage's lap the next bump is the rear face, beyond it is not."""
    s = load(demo("service_passage"))
    lap = plan(s, n_starts=100).main_lap
    assert lap is not None
    x, y = lap.hits[-1, :2]
    low, high = lap.band_rad
    assert low < lap.rear_heading_rad < high
    for heading, stays in ((low + 1e-5, True), (high - 1e-5, True), (low - 1e-5, False), (high + 1e-5, False)):
        found = next_hit(boundary_of(s), 0.0, x, y, math.cos(heading), math.sin(heading))
        assert (SURFACES[found.surface] == "rear") == stays


AWAY = 1e-5  # m and rad: how far the end is moved for a difference; a corner's radius is 4000 times that
# Relative to the largest derivative. The curvature of a corner met flatly leaves some 1e-6, and a path that spreads by
# 1e4 blows its rounding up to as much; one that spreads further has no difference to compare with.
DIFFERENCE = 1e-5
MOST_SPREAD = 1e4

ROUTINES = {
    "turn": ({"act": "turn", "angle": 2.0},),
    "depart": ({"act": "depart", "angle": 0.6, "side": "left"},),
    "onward": ({"act": "depart", "angle": 0.3, "side": "onward"},),
    "mirror": ({"act": "mirror"},),
    "mirror and turn": ({"act": "mirror"}, {"act": "turn", "angle": 0.3}),
    "depart and turn": ({"act": "depart", "angle": 0.2, "side": "right"}, {"act": "turn", "angle": -0.3}),
}


@pytest.mark.parametrize("name", ROUTINES)
def test_jacobian_of_the_return_map(name: str) -> None:
    """The analytic derivative of the return to the rear face agrees with finite differences, corners included."""
    s = hall(routine(*ROUTINES[name]))
    boundary, program = boundary_of(s), compile_routine(s.routine)
    rng = np.random.default_rng(2)
    n_checked, with_corner = 0, 0
    for _ in range(400):
        y, heading = rng.uniform(0.32, 0.68), rng.uniform(-1.4, 1.4)
        middle = _return(boundary, program, y, heading)
        if middle is None or np.abs(middle[2]).max() > MOST_SPREAD:
            continue
        _, surfaces, jacobian = middle
        size = max(1.0, float(np.abs(jacobian).max()))
        step = AWAY / size
        columns = []
        for dy, dh in ((step, 0.0), (0.0, step)):
            sides = [_return(boundary, program, y + k * dy, heading + k * dh) for k in (-1, 1)]
            if any(side is None or side[1] != surfaces for side in sides):
                break
            columns.append((sides[1][0] - sides[0][0]) / (2 * step))  # type: ignore[index]
        if len(columns) < 2:
            continue  # an edge of the map
        n_checked += 1
        with_corner += any("corner" in surface for surface in surfaces)
        assert np.column_stack(columns) == pytest.approx(jacobian, abs=DIFFERENCE * size)
    assert n_checked >= 20
    assert with_corner >= MIN_WITH_CORNER[name]


# paths that a wall or the face has set straight meet no corner on their way back
MIN_WITH_CORNER = {"turn": 3, "depart": 0, "onward": 3, "mirror": 3, "mirror and turn": 3, "depart and turn": 0}


def _return(
    boundary: Boundary, program: Any, y: float, heading: float
) -> tuple[NDArray[np.float64], tuple[str, ...], NDArray[np.float64]] | None:
    """The next arrival at the rear face after one at (y, heading), the surfaces on the way, and the derivative."""
    surfaces = np.zeros(60, dtype=np.int64)
    lap = trace_lap(
        boundary, program, EXACT, stream_keys(0, 1)[0], 1.0, y - boundary.segments[boundary.rear, 1], heading,
        np.array([1] + [0] * (MEMORY - 1)), np.zeros(NOTES), 1,
        np.zeros((60, 4)), surfaces,
    )  # fmt: skip
    if lap.n_bumps < 2:  # none, or at once again
        return None
    way = tuple(SURFACES[k] for k in surfaces[: lap.n_bumps])
    return np.array([lap.along, lap.heading]), way, np.array([[lap.aa, lap.ah], [lap.ha, lap.hh]])


def test_block_is_told_from_walls() -> None:
    """Faces and corners of the block count as the block, the ends and sides of the hall as walls."""
    kinds = boundary_of(hall()).kinds
    assert (kinds[:4] == Contact.WALL).all()
    assert (kinds[4:] == Contact.BLOCK).all()
    assert len(kinds) == len(SURFACES)


# ---- the laws of the forecast -------------------------------------------------------------------------------------


def resisted(floor: float | None, drag: float | None) -> Scenario:
    s = load(demo("service_passage"))
    return s.model_copy(
        update={
            "floor": Floor(static_friction=floor, kinetic_friction=floor) if floor is not None else None,
            "fluid": Fluid(block_drag=drag, block_yaw_drag=1.0) if drag is not None else None,
        }
    )


@pytest.mark.parametrize("floor", [0.05, 0.3, None])
@pytest.mark.parametrize("drag", [1e-5, 0.1, 5.0, None])
def test_nudge_of_an_impact(floor: float | None, drag: float | None) -> None:
    """The forecast slide solves M dv/dt = -mu M g - g_b v from the speed that the impact gives (SciPy's integrator)."""
    s = resisted(floor, drag)
    m, big, e, v = 0.2, 0.5, 0.2, 0.12
    speed = (1 + e) * v * m / (m + big)
    if floor is None and drag is None:
        assert impact_nudge(s, v) == math.inf
        return
    friction, linear = (floor or 0.0) * 9.81, (drag or 0.0) / big

    def stops(t: float, z: NDArray[np.float64]) -> float:
        return float(z[1]) - 1e-9 * speed

    stops.terminal = True  # type: ignore[attr-defined]
    long = 25 / linear if floor is None else speed / friction * 1.01
    motion = solve_ivp(
        lambda t, z: [z[1], -friction - linear * z[1]], (0, long), [0.0, speed], events=stops, rtol=1e-11, atol=1e-15
    )
    assert impact_nudge(s, v) == pytest.approx(motion.y[0, -1], rel=1e-7)  # what the last 1e-9 of the speed leaves


def test_nudge_laws() -> None:
    """The law of the forecast decides what a strike is worth: impact, lean, both, or as given."""
    s = resisted(0.1, 3.0)
    strike = Strike(0.8 * 0.15, 0.8 * s.pushers.stall_force, s.pushers.latency)
    values = {
        law: strike_nudge(s.replace(forecast={"law": law, "nudge": 0.003}), strike)
        for law in ("impact", "lean", "auto", "given")
    }
    assert values["given"] == 0.003
    assert values["impact"] == impact_nudge(s, 0.8 * 0.15)
    assert values["lean"] == lean_speed(s, 0.8) * s.pushers.latency
    # no sum: the thrust waits until the pusher has caught up, and acts on a block that the impact has set going
    assert max(values["impact"], values["lean"]) < values["auto"] < 1.1 * (values["impact"] + values["lean"])
    assert lean_speed(s, 0.8) == pytest.approx((0.8 * 1.0 - 0.1 * 0.5 * 9.81) / (1.0 / 0.15 + 3.0))


def test_lean_below_the_threshold_is_worth_nothing() -> None:
    """A pusher that cannot overcome static friction by itself adds nothing by leaning."""
    s = load(demo("service_passage"))
    assert push_force(s).pushers_to_move == pytest.approx(0.35 * 0.5 * 9.81 / 1.0)
    assert lean_speed(s, 1.0) == 0.0
    assert lean_speed(s.replace(pushers={"stall_force": 1.72}), 1.0) > 0.0


def test_forecast_is_strikes_times_nudge() -> None:
    """Block speed is strike rate times nudge, and the goal takes its distance over them."""
    travel = plan(load(demo("service_passage")), n_starts=100).travel
    assert travel.block_speed_m_s == pytest.approx(travel.strike_rate_1_s * travel.nudge_m)
    assert travel.strikes_to_goal == pytest.approx(0.10 / travel.nudge_m)
    assert travel.time_to_goal_s == pytest.approx(0.10 / travel.block_speed_m_s)


def test_strikes_of_a_known_lap() -> None:
    """A pusher on its lap strikes once a lap, at the lap's angle."""
    s = hall(routine({"act": "depart", "angle": 0.0}), (0.5, 0.45, 0.0), goal={"time_limit": 1500.0})
    strikes = count_strikes(s)
    lap_time = 2 * 1.12 / 0.15
    assert strikes.rate_1_s == pytest.approx(1 / lap_time, abs=1 / 1500.0)  # one strike more or less in the trial
    assert strikes.cosines == pytest.approx(np.ones(len(strikes.cosines)))


def test_nothing_strikes() -> None:
    """A crew that never reaches the face promises nothing, in infinite time."""
    travel = plan(hall(routine({"act": "halt"}), (0.5, 0.5, math.pi / 2))).travel
    assert (travel.block_speed_m_s, travel.nudge_m, travel.strike_rate_1_s) == (0.0, 0.0, 0.0)
    assert travel.time_to_goal_s == travel.strikes_to_goal == math.inf


def test_plan_of_a_hopeless_crew_says_so() -> None:
    """The regimes name a crew too weak for the floor, a narrow channel and a block that can wedge."""
    s = load(demo("service_passage"))
    weak = {r.name: r for r in plan(s.replace(pushers={"count": 1}), n_starts=50).regime}
    assert "only impacts can" in weak["floor hold"].meaning
    wedge = {r.name: r for r in plan(s.replace(block={"length": 0.05}), n_starts=50).regime}
    assert wedge["wedging"].is_at_risk
    assert wedge["clearance"].is_at_risk
    assert not {r.name: r for r in plan(s, n_starts=50).regime}["wedging"].is_at_risk
