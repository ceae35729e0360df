"""The point world in rooms of other shapes than a corridor, against known orbits and laws of billiards.

Polygons are meant for the pusher's centre: the room is larger by the pusher's radius all round, and the block stands in
one of the room's corners, where it only just touches the region open to the centre.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
import pytest
from numpy.typing import NDArray
from rigs import RADIUS, one_stage, rig, turning

import swarmpush
from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import trace
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.kinematics.laps import Lap
from swarmpush.program import EXACT, MEMORY, NOTES, compile_routine
from swarmpush.scenario import Scenario

EXACTLY = 1e-9  # m or relative: double precision over some tens of bumps
SEVEN_DIGITS = 1e-7  # numbers below are printed to seven decimals
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000
CORRELATED = 1.5  # bumps of one path are mildly correlated, which widens the error of a mean by less than this

Corners = Sequence[tuple[float, float]]
Vector = NDArray[np.float64]


class Arena(NamedTuple):
    """A room whose open region is a given convex polygon; `shift` leads from the polygon's place to the room's."""

    scenario: Scenario
    polygon: Vector
    shift: Vector


def arena(polygon: Corners, routine: dict[str, Any]) -> Arena:
    """The room for a convex polygon that is given counter-clockwise."""
    inner = np.array(polygon)
    along = np.roll(inner, -1, axis=0) - inner
    along /= np.hypot(*along.T)[:, None]
    outward = np.column_stack([along[:, 1], -along[:, 0]])  # of the side after each corner
    before = np.roll(outward, 1, axis=0)
    outer = inner + RADIUS * (outward + before) / (1.0 + (outward * before).sum(axis=1))[:, None]
    low = outer.min(axis=0)
    length, width = outer.max(axis=0) - low
    k = int(np.argmin(outer[:, 0]))
    away = outer[k] - inner[k]
    room = float(np.hypot(*away)) - RADIUS  # between the room's corner and what a pusher in the polygon's can touch
    away /= np.hypot(*away)
    tip = inner[k] + RADIUS * away
    back, aside = tip + 0.4 * room * away, 0.1 * room * np.array([-away[1], away[0]])
    block = np.array([tip, back + aside, back - aside]) - low
    (left, bottom), (right, top) = block.min(axis=0), block.max(axis=0)
    middle = (bottom + top) / 2
    s = rig(
        channel={"length": float(length), "width": float(width), "outline": (outer - low).tolist()},
        block={
            "length": float(right - left), "width": float(top - bottom), "rear_at": float(left),
            "offset": float(middle - width / 2), "outline": (block - [left, middle]).tolist(),
        },
        routine=routine,
        start={"region": "anywhere"},
        goal={"travel": 1e-6},
    )  # fmt: skip
    return Arena(s, inner, -low)


def follow(s: Scenario, start: tuple[float, float, float], n_legs: int) -> tuple[Vector, list[str]]:
    """One pusher from bump to bump: rows as in `trace`, and names of the surfaces."""
    hits, surfaces, names = np.zeros((n_legs, 6)), np.zeros(n_legs, dtype=np.int64), surface_names(s)
    n = trace(
        boundary_of(s), compile_routine(s.routine, names), EXACT, 0.0, s.pushers.free_speed, stream_keys(0, 1)[0],
        np.array(start), 0.0, hits, surfaces, np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES),
    )  # fmt: skip
    return hits[:n], [names[k] for k in surfaces[:n]]


def bounces(a: Arena, start: tuple[float, float, float], n: int) -> tuple[Vector, NDArray[np.int64], Vector]:
    """Where the pusher bumps: points of the polygon, numbers of its sides, and how far along them, from 0 to 1."""
    x, y, heading = start
    hits, names = follow(a.scenario, (x + a.shift[0], y + a.shift[1], heading), n)
    points = hits[:, :2] - a.shift
    side = np.array([int(name.removeprefix("wall ")) - 1 for name in names])
    ends = np.roll(a.polygon, -1, axis=0)
    along = ends[side] - a.polygon[side]
    return points, side, ((points - a.polygon[side]) * along).sum(axis=1) / (along**2).sum(axis=1)


def regular(n: int) -> list[tuple[float, float]]:
    """A regular polygon with sides of 1 m, the first of them at the bottom."""
    turn = 2 * math.pi / n
    corners = [(0.0, 0.0)]
    for k in range(n - 1):
        corners.append((corners[-1][0] + math.cos(k * turn), corners[-1][1] + math.sin(k * turn)))
    return corners


# ---- fixed departure angle ------------------------------------------------------------------------------------------

# corners, angle from the side to the next side in degrees, contraction, fixed point. Derived here; the setting is that
# of Spagnolie, Wahl, Lukasik and Thiffeault, "Microorganism billiards", Physica D 341 (2017) 33.
POLYGONS = (
    (3, 30.0, 0.5, 1 / 3),
    (4, 22.5, 0.4142136, 0.2928932),
    (5, 18.0, 0.3819660, 0.2763932),
    (6, 15.0, 0.3660254, 0.2679492),
)


def leave_at(degrees_from_side: float) -> dict[str, Any]:
    """The routine that leaves every side at this angle, towards the next side counter-clockwise."""
    return one_stage({"act": "depart", "angle": math.radians(90.0 - degrees_from_side), "side": "right"})


@pytest.mark.parametrize(("n", "degrees", "contraction", "fixed"), POLYGONS)
def test_fixed_departure_contracts_on_to_a_regular_orbit(
    n: int, degrees: float, contraction: float, fixed: float
) -> None:
    """Leaving a regular n-gon's sides at an angle p contracts by sin p/sin(2 pi/n - p) a bounce on to an n-gon."""
    p = math.radians(degrees)
    k = math.sin(p) / math.sin(2 * math.pi / n - p)
    assert (k, k / (1 + k)) == pytest.approx((contraction, fixed), abs=SEVEN_DIGITS)
    a = arena(regular(n), leave_at(degrees))
    _, side, at = bounces(a, (0.5, 0.1, -1.2), 40)
    assert (np.diff(side) % n == 1).all()
    off = at - k / (1 + k)
    assert off[1:8] / off[:7] == pytest.approx([-k] * 7, abs=SEVEN_DIGITS)  # at last 1e-4 off, to sixteen digits of 1
    assert abs(off[-1]) < EXACTLY


@pytest.mark.parametrize("n", [3, 4, 5, 6])
def test_fixed_departure_repels_beyond_half_the_corner(n: int) -> None:
    """The orbit attracts up to p = pi/n, where it is that of a mirror; beyond, it repels by the same formula."""
    steep = math.degrees(math.pi / n) * 1.1
    k = math.sin(math.radians(steep)) / math.sin(2 * math.pi / n - math.radians(steep))
    assert k > 1.0
    fixed, start = k / (1 + k), 1e-6
    p = math.radians(steep)
    # to the bottom side's point that is 1e-6 off, along the line on which it arrives from the side before
    turn = 2 * math.pi / n
    x, heading = fixed + start, p - turn
    a = arena(regular(n), leave_at(steep))
    _, side, at = bounces(a, (x - 0.05 * math.cos(heading), -0.05 * math.sin(heading), heading), 12)
    assert side[0] == 0
    off = at - fixed
    assert off[1:] / off[:-1] == pytest.approx([-k] * 11, rel=1e-6)  # rounding of 1 is 1e-10 of an offset of 1e-6


def test_every_multiplier_is_the_product_over_the_legs() -> None:
    """Where departures do not depend on the place, a lap's multiplier is the product of -cos(departure)/cos(arrival).

    Derived here: over a leg from one straight side to another a displacement along the sides changes by this factor.
    """
    funnel = [[0.0, 0.3], [8.0, 0.0], [8.0, 1.6], [0.0, 1.1]]
    n_laps = 0
    for routine in (turning(120), turning(-110), *(_two_departures(a, b) for a in (10, 40, 65) for b in (5, 30, 55))):
        s = rig(channel={"outline": funnel, "width": 1.6}, block={"width": 0.9, "rear_at": 5.0}, routine=routine)
        normals = dict(zip(surface_names(s), boundary_of(s).segments[:, 7], strict=False))
        for lap in swarmpush.plan(s, n_starts=60).laps:
            if not all(name in normals for name in lap.surfaces):
                continue  # a corner turns the normal with the place
            n_laps += 1
            _, _, arriving, departing = lap.hits.T
            normal = np.array([normals[name] for name in lap.surfaces])
            product = np.prod(np.cos(departing - normal) / np.cos(arriving - normal))
            assert min(abs(m - product) for m in lap.multipliers) < EXACTLY
    assert n_laps >= 8


def _two_departures(from_block: float, from_wall: float) -> dict[str, Any]:
    """One departure angle from the block, another from walls, always to the left of the normal."""
    return {
        "stages": [
            {
                "name": "lap",
                "acts": [
                    {"act": "run"},
                    {"act": "branch", "on": "contact", "kind": "block", "go": "block"},
                    {"act": "depart", "angle": math.radians(from_wall), "side": "left"},
                ],
            },
            {
                "name": "block",
                "acts": [{"act": "depart", "angle": math.radians(from_block), "side": "left"}],
                "then": "lap",
            },
        ]
    }


# ---- slap maps ------------------------------------------------------------------------------------------------------

STRAIGHT_OFF = one_stage({"act": "depart", "angle": 0.0})

# corners, slope of the map. Slope -1/cos of the angle between the normals: Del Magno, Lopes Dias, Duarte and Gaivao,
# "Ergodicity of polygonal slap maps", Nonlinearity 27 (2014) 1969; its numbers were worked out here.
SLAPS = ((3, -2.0), (5, -1.2360680), (7, -1.1099163))


@pytest.mark.parametrize(("n", "slope"), SLAPS)
def test_slap_map_of_an_odd_polygon_expands(n: int, slope: float) -> None:
    """Leaving an odd regular polygon's sides along the normal stretches by 1/cos(pi/n) a bounce, and turns over."""
    assert slope == pytest.approx(-1 / math.cos(math.pi / n), abs=SEVEN_DIGITS)
    a, apart, n_bounces = arena(regular(n), STRAIGHT_OFF), 1e-7, 9
    for x in np.linspace(0.11, 0.87, 7):
        (_, side, at), (_, other_side, other) = (
            bounces(a, (float(x) + off, 0.1, -math.pi / 2), n_bounces) for off in (0.0, apart)
        )
        assert (side == other_side).all(), "no corner between the two"
        # rounding of 1 is 1e-9 of their distance
        assert (other - at)[1:] / (other - at)[:-1] == pytest.approx([slope] * (n_bounces - 1), abs=SEVEN_DIGITS)


def test_slap_map_of_a_triangle_has_an_orbit_of_three() -> None:
    """In the equilateral triangle the slap map repeats after three bounces at a third of each side, unstably."""
    a = arena(regular(3), STRAIGHT_OFF)
    _, side, at = bounces(a, (1 / 3, 0.1, -math.pi / 2), 9)
    assert side.tolist() == [0, 2, 1] * 3
    assert at == pytest.approx([1 / 3] * 9, abs=EXACTLY)  # what rounding puts off is doubled at every bounce


@pytest.mark.parametrize("n", [4, 6, 8])
def test_slap_map_of_an_even_polygon_has_orbits_of_two(n: int) -> None:
    """Between the parallel sides of an even regular polygon the slap map goes to and fro, wherever it began."""
    a = arena(regular(n), STRAIGHT_OFF)
    for x in (0.2, 0.5, 0.9):
        points, side, at = bounces(a, (x, 0.1, -math.pi / 2), 200)
        assert side.tolist() == [0, n // 2] * 100
        assert np.ptp(at[::2]) < EXACTLY
        assert np.ptp(at[1::2]) < EXACTLY
        width = 1 / math.tan(math.pi / n)  # of a regular polygon with sides of 1 m, across the flats
        assert points[1::2, 1] - points[::2, 1] == pytest.approx([width] * 100, abs=EXACTLY)


# ---- mirrors --------------------------------------------------------------------------------------------------------

MIRROR = one_stage({"act": "mirror"})
ACUTE = ((0.0, 0.0), (4.0, 0.0), (1.5, 3.0))
FEET = np.array([(1.5, 0.0), (2.3606557, 1.9672131), (0.8, 1.6)])  # of the altitudes (derived here)
PERIMETER = 5.4969440  # of the triangle of the feet: twice the area over the radius of the circle round the corners


def test_fagnano_orbit() -> None:
    """Among mirrors the shortest orbit of an acute triangle runs through the feet of its altitudes (Fagnano)."""
    area, sides = 6.0, [math.dist(ACUTE[k], ACUTE[k - 1]) for k in range(3)]
    assert 2 * area / (math.prod(sides) / (4 * area)) == pytest.approx(PERIMETER, abs=SEVEN_DIGITS)
    a = arena(ACUTE, MIRROR)
    heading = math.atan2(*(FEET[0] - FEET[2])[::-1])
    back = 0.1 * np.array([math.cos(heading), math.sin(heading)])
    for off, period in ((0.0, 3), (0.05, 6)):
        x, y = FEET[0] + [off, 0.0] - back
        points, side, _ = bounces(a, (x, y, heading), 61)
        assert side.tolist() == ([0, 1, 2] * 21)[:61]
        legs = np.hypot(*np.diff(points, axis=0).T)
        assert legs.reshape(-1, period).sum(axis=1) == pytest.approx(
            [PERIMETER * period / 3] * (60 // period), abs=period * SEVEN_DIGITS
        )
        # three mirrors turn the displacement over
        assert points[::3, 0] == pytest.approx([1.5 + off * (-1) ** k for k in range(21)], abs=20 * SEVEN_DIGITS)
        if off == 0.0:
            assert points[:3] == pytest.approx(FEET, abs=SEVEN_DIGITS)


def test_fagnano_lap_of_a_block() -> None:
    """A triangle with the block's face as one side has the orbit through its midpoints as a lap, neutral twice over."""
    side, slope = 1.2, 1 / math.sqrt(3)  # an equilateral triangle for the centre, between walls at +-30 deg
    face_at = 2 * RADIUS + side * math.sqrt(0.75) + RADIUS
    rear, front = face_at * slope, (face_at + 0.2) * slope  # half of the block's width, which fits between the walls
    middle = 3.0 * slope
    s = rig(
        channel={"length": 3.0, "width": 2 * middle, "outline": [[0.0, middle], [3.0, 0.0], [3.0, 2 * middle]]},
        block={
            "length": 0.2, "width": 2 * front, "rear_at": face_at,
            "outline": [[0.0, -rear], [0.2, -front], [0.2, front], [0.0, rear]],
        },
        routine=MIRROR,
        start={"placed": [{"x": face_at - RADIUS - 0.1, "y": middle - 0.1 * slope, "heading": math.pi / 6}]},
    )  # fmt: skip
    lap = swarmpush.plan(s).main_lap
    assert lap is not None
    assert lap.surfaces == ("rear", "wall 3", "wall 1")
    assert lap.length_m == pytest.approx(1.5 * side, abs=EXACTLY)
    assert np.abs(lap.multipliers) == pytest.approx([1.0, 1.0], abs=1e-6)  # a double root loses half the digits


# ---- corridors askew ------------------------------------------------------------------------------------------------


def askew(degrees: float, routine: dict[str, Any]) -> Scenario:
    """A corridor 1 m wide for the centre, closed by a block's face, all of it turned."""
    width = 1.0 + 2 * RADIUS
    turn = np.exp(1j * math.radians(degrees))

    def turned(corners: Corners) -> Vector:
        spun = np.array([complex(*corner) for corner in corners]) * turn
        return np.column_stack([spun.real, spun.imag])

    room = turned([(0.0, 0.0), (8.0, 0.0), (8.0, width), (0.0, width)])
    block = turned([(4.0, 0.0), (4.2, 0.0), (4.2, width), (4.0, width)]) - room.min(axis=0)
    room -= room.min(axis=0)
    (length, across), low, high = room.max(axis=0), block.min(axis=0), block.max(axis=0)
    middle = (low[1] + high[1]) / 2
    return rig(
        channel={"length": float(length), "width": float(across), "outline": room.tolist()},
        block={
            "length": float(high[0] - low[0]), "width": float(high[1] - low[1]), "rear_at": float(low[0]),
            "offset": float(middle - across / 2), "outline": (block - [low[0], middle]).tolist(),
        },
        routine=routine,
        goal={"travel": 1e-3},
    )  # fmt: skip


@pytest.mark.parametrize("degrees", [-40.0, -15.0, 10.0, 33.0])
def test_turns_of_120_deg_askew(degrees: float) -> None:
    """In a corridor askew, turns of 120 deg give the triangle, slope and band that they give in a straight one.

    Slope -tan(psi)/tan(60 deg - psi), perimeter 3/sin(psi + 60 deg) widths, attracting for 0 < psi < 30 deg, psi being
    the heading at the lower wall from the corridor's axis (derived here, see `test_bounce_laws.py`).
    """
    lap = swarmpush.plan(askew(degrees, turning(120)), n_starts=400).main_lap
    assert lap is not None
    assert lap.surfaces == ("rear", "wall 3", "wall 1")
    psi = lap.hits[2, 3] - math.radians(degrees)
    heading, position = lap.multipliers
    assert heading == pytest.approx(1.0, abs=EXACTLY)
    assert position == pytest.approx(-math.tan(psi) / math.tan(math.pi / 3 - psi), abs=EXACTLY)
    assert lap.length_m == pytest.approx(3 / math.sin(psi + math.pi / 3), rel=EXACTLY)
    low, high = lap.leg_bands_rad[-1]
    # towards 30 deg the lap closes ever more slowly: at 29.5 deg by a factor of 0.96 a lap
    edges = math.degrees(psi + low), math.degrees(psi + high)
    assert edges == (pytest.approx(0.0, abs=0.05), pytest.approx(30.0, abs=0.5))


@pytest.mark.parametrize("degrees", [-40.0, 25.0])
def test_departures_of_the_service_passage_askew(degrees: float) -> None:
    """Departures at 45, 15 and 75 deg to the normal contract by tan 15 deg a lap however the corridor lies."""
    stages = swarmpush.load(swarmpush.demo("service_passage")).routine.model_dump(mode="json", exclude_none=True)
    lap: Lap | None = swarmpush.plan(askew(degrees, stages), n_starts=200).main_lap
    assert lap is not None
    assert lap.surfaces == ("rear", "wall 3", "wall 1")
    assert np.abs(lap.multipliers) == pytest.approx([math.tan(math.radians(15)), 0.0], abs=EXACTLY)
    headings = np.degrees(lap.hits[:, 3]) - degrees
    assert np.remainder(headings + 180.0, 360.0) - 180.0 == pytest.approx([135.0, -105.0, 15.0], abs=1e-6)


# ---- random departures ----------------------------------------------------------------------------------------------

N_CHORDS = 150_000
WIDE = 0.05  # m, radius of the pushers that wander, large enough for round corners to matter

# outline, posts, place of the block's lower left corner; the block is 0.3 x 0.2 m
WANDERED: dict[str, tuple[Corners, list[Corners], tuple[float, float]]] = {
    "triangle": (((0.0, 0.0), (3.0, 0.0), (1.0, 2.0)), [], (1.0, 0.4)),
    "L": (((0.0, 0.0), (3.0, 0.0), (3.0, 2.0), (2.0, 2.0), (2.0, 0.9), (0.0, 0.9)), [], (1.5, 0.3)),
    "square with a post": (
        ((0.0, 0.0), (2.0, 0.0), (2.0, 2.0), (0.0, 2.0)), [((0.5, 0.6), (0.8, 0.5), (0.6, 1.1))], (1.3, 1.2),
    ),
}  # fmt: skip


def open_measures(room: Corners, obstacles: list[Corners]) -> tuple[float, dict[str, float]]:
    """Area of the region open to the centre, and length of each of its surfaces, by kind and number (derived here).

    A side shrinks by r/tan(a/2) at an end where the room's angle a is less than 180 deg; a corner that sticks out by b
    becomes an arc r b. The strip along a side takes r times its length of the area, the kite at a corner gives
    r^2/tan(a/2) of it back, and a sector takes r^2 b/2.
    """
    lengths: dict[str, float] = {}
    area = 0.0
    for kind, corners, sense in (("wall", room, 1.0), *(("obstacle", post, -1.0) for post in obstacles)):
        n, first = len(corners), sum(name.startswith(f"{kind} side") for name in lengths)
        arcs = sum(name.startswith(f"{kind} corner") for name in lengths)
        points = [complex(*corner) for corner in corners]
        sides = [points[(k + 1) % n] - points[k] for k in range(n)]
        bends = [sense * math.atan2(*_parts(sides[k] / sides[k - 1])) for k in range(n)]
        area += sense * sum((points[k].conjugate() * points[(k + 1) % n]).imag for k in range(n)) / 2
        trims = [WIDE * math.tan(max(bend, 0.0) / 2) for bend in bends]
        for k in range(n):
            lengths[f"{kind} side {first + k + 1}"] = abs(sides[k]) - trims[k] - trims[(k + 1) % n]
            area += WIDE * trims[k] - WIDE * abs(sides[k])
        for k in (*range(1, n), 0):
            if bends[k] < 0.0:
                arcs += 1
                lengths[f"{kind} corner {arcs}"] = WIDE * -bends[k]
                area -= WIDE**2 * -bends[k] / 2
    return area, lengths


def _parts(z: complex) -> tuple[float, float]:
    return z.imag, z.real


@pytest.mark.parametrize("name", WANDERED)
def test_mean_chord_in_any_room(name: str) -> None:
    """By the cosine law the mean free path is pi A/P and bumps fall evenly on all surfaces, round corners included.

    Source: the chord theorem; stationarity under the cosine law is proved by Comets, Popov, Schuetz and Vachkovskaia,
    "Billiards in a general domain with random reflections", Arch. Rational Mech. Anal. 191 (2009) 497. Area A and
    perimeter P are those of the region open to the pusher's centre.
    """
    room, posts, (x, y) = WANDERED[name]
    block = ((x, y + 0.2), (x, y), (x + 0.3, y), (x + 0.3, y + 0.2))
    area, lengths = open_measures(room, [*posts, block])
    perimeter = sum(lengths.values())
    length, width = (max(corner[axis] for corner in room) for axis in (0, 1))
    found = {}
    for law in ("cosine", "uniform"):
        s = rig(
            channel={"length": length, "width": width, "outline": room, "posts": posts},
            block={"length": 0.3, "width": 0.2, "rear_at": x, "offset": y + 0.1 - width / 2},
            pushers={"radius": WIDE},
            routine=one_stage({"act": "wander", "law": law}),
            goal={"travel": 0.1},
        )
        hits, names = follow(s, (x - 0.3, y, 0.3), N_CHORDS)
        runs = hits[50:, 4]
        error = CORRELATED * FOUR_SIGMA * runs.std() / math.sqrt(len(runs))
        # the lengths in the order of the surfaces: sides, then corners, of walls, posts and block
        by_kind = sorted(lengths, key=lambda key: ("corner" in key, key.startswith("obstacle")))
        share = np.array([lengths[key] for key in by_kind]) / perimeter
        count = np.array([names.count(surface) for surface in surface_names(s)]) / len(names)
        spread = CORRELATED * FOUR_SIGMA * np.sqrt(share * (1 - share) / len(names))
        found[law] = abs(runs.mean() - math.pi * area / perimeter) / error, np.abs(count - share) / spread
    assert found["cosine"][0] < 1.0
    assert found["cosine"][1].max() < 1.0
    assert found["uniform"][1].max() > 2.0, "the control must be told apart"
