"""Outlines, posts and blocks of any shape: their surfaces, awkward cases of touching, starts, and what is refused."""

from __future__ import annotations

import copy
import math
import re
from collections.abc import Iterator
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from shapely import Point, Polygon

from swarmpush.geometry import block_corners, channel_corners, open_floor, post_corners, signed_area, turning
from swarmpush.kinematics.boundary import Boundary, boundary_of, surface_names
from swarmpush.kinematics.legs import next_hit
from swarmpush.loading import from_tables
from swarmpush.problems import ScenarioError
from swarmpush.program import Contact
from swarmpush.scenario import Scenario
from swarmpush.starts import draw_starts

ROUNDING = 1e-12  # m and rad; a few operations on coordinates of 4 m
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds; a sound world would fail one such check in 16 000

R = 0.1  # m, of the pusher
ANY_PAIR = {"restitution": 0.0, "friction": 0.0}
BASE: dict[str, Any] = {
    "format": 1,
    "about": {"name": "yard"},
    "channel": {"length": 4.0, "width": 2.0},
    "block": {"length": 0.4, "width": 0.5, "mass": 1.0, "rear_at": 3.0, "offset": -0.6},
    "pushers": {"count": 1, "radius": R, "mass": 0.1, "free_speed": 1.0, "stall_force": 1.0},
    "fluid": {"block_drag": 1.0, "block_yaw_drag": 1.0},
    "contacts": dict.fromkeys(("pusher_wall", "pusher_block", "pusher_pusher", "block_wall"), ANY_PAIR),
    "routine": {"stages": [{"name": "only", "acts": [{"act": "run"}, {"act": "mirror"}]}]},
    "goal": {"travel": 0.1, "time_limit": 1.0},
}

Points = list[list[float]]
RECTANGLE: Points = [[0, 0], [4, 0], [4, 2], [0, 2]]
BEND: Points = [[0, 0], [4, 0], [4, 2], [2, 2], [2, 1], [0, 1]]  # an L with its inner corner at (2, 1)
POST: Points = [[1.0, 0.4], [1.2, 0.4], [1.1, 0.6]]
WEDGE: Points = [[0.45, 0.3], [0.0, -0.3], [0.8, -0.3], [0.8, 0.3]]  # its rear face leans by 3 : 4
WEDGE_SIZE = {"length": 0.8, "width": 0.6, "outline": WEDGE}


def tables(**changes: dict[str, Any]) -> dict[str, Any]:
    merged = copy.deepcopy(BASE)
    for name, keys in changes.items():
        merged[name] = merged.get(name, {}) | keys
    return merged


def yard(**changes: dict[str, Any]) -> Scenario:
    return from_tables(tables(**changes))


def hit(s: Scenario, x: float, y: float, degrees: float) -> tuple[str, float, float]:
    """Surface, run length and normal (deg) of the next bump."""
    a = math.radians(degrees)
    found = next_hit(boundary_of(s), 0.0, x, y, math.cos(a), math.sin(a))
    return surface_names(s)[found.surface], found.run, math.degrees(found.normal_angle)


def sides(boundary: Boundary) -> NDArray[np.float64]:
    """Start, tangent, length and normal of every segment."""
    return boundary.segments[:, :7]


def turned(points: Points, degrees: float) -> tuple[Points, float, float, NDArray[np.float64]]:
    """An outline turned and moved to the axes again, its extents, and where a point of the plane goes: (2, 3)."""
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    spun = np.array(points, dtype=np.float64) @ np.array([[c, s], [-s, c]])
    low = spun.min(axis=0)
    length, width = spun.max(axis=0) - low
    return (spun - low).tolist(), float(length), float(width), np.array([[c, -s, -low[0]], [s, c, -low[1]]])


# ---- outlines -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("first", range(6))
@pytest.mark.parametrize("step", [1, -1], ids=["counter-clockwise", "clockwise"])
def test_the_order_of_corners_does_not_matter(first: int, step: int) -> None:
    """An outline may begin at any corner and go either way round: the walls are the same, counted from that corner."""
    order = [(first + step * k) % 6 for k in range(6)]
    corners = channel_corners(yard(channel={"outline": [BEND[k] for k in order]}))
    assert corners[0] == tuple(BEND[first])
    assert signed_area(corners) == pytest.approx(6.0)
    assert set(corners) == {tuple(map(float, corner)) for corner in BEND}


def test_corners_on_a_straight_side_are_left_out() -> None:
    """Corners along a straight side change nothing, neither of the channel nor of a post nor of the block."""
    plain = yard(channel={"outline": BEND, "posts": [POST]}, block=WEDGE_SIZE)
    halved = yard(
        channel={"outline": _halved(BEND), "posts": [_halved(POST)]}, block=WEDGE_SIZE | {"outline": _halved(WEDGE)}
    )
    assert surface_names(halved) == surface_names(plain)
    for here, there in zip(boundary_of(halved), boundary_of(plain), strict=True):
        assert here == pytest.approx(there, abs=ROUNDING)


def _halved(points: Points) -> Points:
    """The same outline with a corner in the middle of every side."""
    middles = [[(a + c) / 2, (b + d) / 2] for (a, b), (c, d) in zip(points, points[1:] + points[:1], strict=True)]
    return [corner for pair in zip(points, middles, strict=True) for corner in pair]


def test_a_small_outline_far_away_keeps_its_sense() -> None:
    """The sense of a post of 1 mm is told right at 1 km, where products of coordinates lose its area."""
    small = ((999.0, 999.0), (999.0, 999.001), (999.001, 999.0))
    assert signed_area(small) == pytest.approx(-0.5e-6, rel=1e-6)  # what coordinates of 1 km leave of 1 mm
    assert signed_area(small[::-1]) == pytest.approx(0.5e-6, rel=1e-6)


def test_a_rectangle_written_as_an_outline_is_the_same_room() -> None:
    """A corridor and a block whose rectangles are written out as outlines have the surfaces of the plain ones."""
    written = yard(
        channel={"outline": RECTANGLE}, block={"outline": [[0, 0.25], [0, -0.25], [0.4, -0.25], [0.4, 0.25]]}
    )
    assert all(np.array_equal(a, b) for a, b in zip(boundary_of(written), boundary_of(yard()), strict=True))


# ---- surfaces -----------------------------------------------------------------------------------------------------


def test_walls_and_faces_move_inward_by_the_radius() -> None:
    """Every side of an L, a post and a leaning block is moved by the radius to its open side, as drawn by hand."""
    s = yard(channel={"outline": BEND, "posts": [POST]}, block=WEDGE_SIZE)
    steep = math.hypot(0.1, 0.2)
    p, q = 0.2 / steep, 0.1 / steep  # the post's slanted sides go 1 : 2
    walls = [
        [0, R, 1, 0, 4, 0, 1],
        [4 - R, 0, 0, 1, 2, -1, 0],
        [4, 2 - R, -1, 0, 2, 0, -1],
        [2 + R, 2, 0, -1, 1, 1, 0],
        [2, 1 - R, -1, 0, 2, 0, -1],
        [R, 1, 0, -1, 1, 1, 0],
    ]
    post = [
        [1.2, 0.4 - R, -1, 0, 0.2, 0, -1],
        [1.1 + R * p, 0.6 + R * q, q, -p, steep, p, q],
        [1.0 - R * p, 0.4 + R * q, q, p, steep, -p, q],
    ]
    x, y = 3.0, 0.4  # of the wedge's own origin
    block = [
        [x - R * 0.8, y - 0.3 + R * 0.6, 0.6, 0.8, 0.75, -0.8, 0.6],
        [x + 0.8, y - 0.3 - R, -1, 0, 0.8, 0, -1],
        [x + 0.8 + R, y + 0.3, 0, -1, 0.6, 1, 0],
        [x + 0.45, y + 0.3 + R, 1, 0, 0.35, 0, 1],
    ]
    boundary = boundary_of(s)
    assert sides(boundary) == pytest.approx(np.array(walls + post + block), abs=ROUNDING)
    assert np.cos(boundary.segments[:, 7]) == pytest.approx(boundary.segments[:, 5], abs=ROUNDING)
    assert np.sin(boundary.segments[:, 7]) == pytest.approx(boundary.segments[:, 6], abs=ROUNDING)


def test_corners_that_stick_out_are_round() -> None:
    """Only the L's inner corner and the corners of post and block become circles of the pusher's radius."""
    s = yard(channel={"outline": BEND, "posts": [POST]}, block=WEDGE_SIZE)
    found = boundary_of(s).arcs
    wedge = [(3.0 + a, 0.4 + b) for a, b in WEDGE]
    assert set(map(tuple, found[:, :2])) == {(2.0, 1.0), *map(tuple, POST), *wedge}
    assert (found[:, 2] == R).all()


def test_surfaces_have_names_and_owners() -> None:
    """Surfaces are called by what they belong to, in the order of their numbers, and only the block's move."""
    s = yard(channel={"outline": BEND, "posts": [POST, [[0.5, 0.4], [0.6, 0.4], [0.6, 0.6]]]}, block=WEDGE_SIZE)
    names, boundary = surface_names(s), boundary_of(s)
    assert names == (
        "wall 1", "wall 2", "wall 3", "wall 4", "wall 5", "wall 6",
        "post 1 side 1", "post 1 side 2", "post 1 side 3", "post 2 side 1", "post 2 side 2", "post 2 side 3",
        "rear", "block side 2", "front", "block side 4",
        "wall corner 1",
        "post 1 corner 1", "post 1 corner 2", "post 1 corner 3",
        "post 2 corner 1", "post 2 corner 2", "post 2 corner 3",
        "block corner 1", "block corner 2", "block corner 3", "block corner 4",
    )  # fmt: skip
    is_block = [name in ("rear", "front") or name.startswith("block") for name in names]
    assert (names[boundary.rear], names[boundary.front]) == ("rear", "front")
    assert boundary.moving.tolist() == is_block
    assert boundary.kinds.tolist() == [Contact.BLOCK if it else Contact.WALL for it in is_block]
    assert boundary.ahead_x == pytest.approx(3.8 + R)


@pytest.mark.parametrize("first", range(4))
@pytest.mark.parametrize("step", [1, -1], ids=["counter-clockwise", "clockwise"])
def test_rear_and_front_are_told_by_where_they_look(first: int, step: int) -> None:
    """However the block's outline is written, its rear is the side that looks most squarely back, its front ahead."""
    outline = [WEDGE[(first + step * k) % 4] for k in range(4)]
    s = yard(block=WEDGE_SIZE | {"outline": outline})
    boundary = boundary_of(s)
    assert boundary.segments[boundary.rear, 5:7] == pytest.approx([-0.8, 0.6], abs=ROUNDING)
    assert boundary.segments[boundary.front, 5:7] == pytest.approx([1.0, 0.0], abs=ROUNDING)
    assert block_corners(s)[0] == pytest.approx((3.45, 0.7), abs=ROUNDING)


@pytest.mark.parametrize(("first", "upward"), [(0, 1.0), (1, -1.0), (2, 1.0), (3, 1.0)])
def test_of_two_faces_that_look_back_alike_the_first_is_the_rear(first: int, upward: float) -> None:
    """Where two sides look back alike, rounding does not choose: it is the one that begins first in the outline."""
    diamond: Points = [[0.2, 0.25], [0.0, 0.0], [0.2, -0.25], [0.4, 0.0]]
    for at in np.linspace(0.2, 3.4, 33):  # places where the coordinates are rounded one way or the other
        s = yard(
            start={"region": "anywhere"}, block={"rear_at": float(at), "outline": diamond[first:] + diamond[:first]}
        )
        boundary = boundary_of(s)
        assert np.sign(boundary.segments[boundary.rear, 6]) == upward
        assert len(set(surface_names(s))) == len(boundary.kinds)


# ---- awkward cases ------------------------------------------------------------------------------------------------


def test_a_leaning_face_is_met_where_trigonometry_has_it() -> None:
    """A disc that runs along x meets the rear face of a wedge, which leans by 3 : 4, where 0.8 of the way is left."""
    s = yard(block=WEDGE_SIZE)
    for above in (0.1, 0.3, 0.6):  # of the face's lower corner; it is met between 0.06 and 0.66 m
        to_line = 0.8 * 2.5 + 0.6 * above - R  # from x = 0.5, along the face's normal
        expected = ("rear", pytest.approx(to_line / 0.8, abs=ROUNDING), pytest.approx(math.degrees(math.atan2(3, -4))))
        assert hit(s, 0.5, 0.1 + above, 0) == expected


def test_into_a_corner() -> None:
    """Of two walls reached at the same time the lower number is hit, and the other one after a run of length zero."""
    s = yard(channel={"outline": BEND})
    assert hit(s, 0.5, 0.5, -135)[:2] == ("wall 1", pytest.approx(0.4 * math.sqrt(2), abs=ROUNDING))
    assert hit(s, R, R, -135)[:2] == ("wall 1", 0.0)
    assert hit(s, R, R, 135)[:2] == ("wall 6", 0.0)
    assert hit(s, R, R, 45)[0] != "wall 1"


@pytest.mark.parametrize("degrees", range(0, 360, 15))
def test_rounding_does_not_choose_in_a_corner(degrees: float) -> None:
    """Pressed into a corner whose walls lie askew, a pusher bumps into the wall with the lower number."""
    outline, length, width, move = turned([[0, 0], [4, 0], [4, 2], [0, 2]], degrees)
    s = yard(
        channel={"outline": outline, "length": length, "width": width},
        block={"length": 0.1, "width": 0.1, "rear_at": length / 2, "offset": 0.0},
        goal={"travel": 0.01},
    )
    corners = [(R, R), (4 - R, R), (4 - R, 2 - R), (R, 2 - R)]
    for k, (x, y) in enumerate(corners):
        x, y = move @ (x, y, 1.0)
        lower = min(k, (k - 1) % 4) + 1
        for askew in (-30, 0, 30):
            outward = degrees + 225 + 90 * k + askew
            assert hit(s, float(x), float(y), outward)[:2] == (f"wall {lower}", 0.0)


@pytest.mark.parametrize("degrees", range(0, 360, 5))
def test_along_a_wall_past_its_corner(degrees: float) -> None:
    """A run along a wall, in touch with it, goes past the wall's end, and stops at the corner if it cuts deeper."""
    outline, length, width, move = turned(BEND, degrees)
    s = yard(
        channel={"outline": outline, "length": length, "width": width},
        block={"length": 0.1, "width": 0.1} | _inside(move @ (3.0, 0.3, 1.0), width),
        goal={"travel": 0.01},
    )
    x, y = move @ (0.5, 1 - R, 1.0)
    assert hit(s, float(x), float(y), degrees)[:2] == ("wall 2", pytest.approx(3.4, abs=ROUNDING))
    deeper = 1e-6 * R
    x, y = move @ (0.5, 1 - R + deeper, 1.0)
    surface, run, _ = hit(s, float(x), float(y), degrees)
    assert surface == "wall corner 1"
    # the root of a depth of 1e-6 R amplifies rounding by 1e3
    assert run == pytest.approx(1.5 - math.sqrt(2 * R * deeper - deeper**2), abs=1e4 * ROUNDING)


def _inside(centre: NDArray[np.float64], width: float) -> dict[str, float]:
    """Where a block of 0.1 x 0.1 m stands that has its centre there."""
    return {"rear_at": float(centre[0]) - 0.05, "offset": float(centre[1]) - width / 2}


def test_between_grazing_and_hitting_there_is_no_gap() -> None:
    """A path that grazes a corner and points ever so little into the side behind it is stopped by one of the two."""
    s = yard(block={"offset": 0.0})
    lower = 0.75 - R  # where a centre touches the block's lower side
    for tilt in np.geomspace(1e-10, 1e-3, 200):
        # aimed at the point of the corner's circle where the side begins; the side is 0.4 m long
        x, y = 2.5, lower - 0.5 * math.tan(tilt)
        surface, run, _ = hit(s, x, y, math.degrees(tilt))
        assert surface in ("lower rear corner", "block bottom", "lower front corner")
        assert y + run * math.sin(tilt) <= lower + 1e-9 * R  # never deeper than this


def test_overlapping_a_wall_is_being_in_touch_with_it() -> None:
    """A centre up to half a radius too near to a wall is stopped by it at once, and may leave."""
    s = yard(channel={"outline": BEND})
    for depth in (1e-15, 1e-9, 1e-3 * R, 0.4 * R):
        assert hit(s, 0.5, R - depth, -90)[:2] == ("wall 1", 0.0)
        assert hit(s, 0.5, R - depth, 90)[:2] == ("wall 5", pytest.approx(1 - 2 * R + depth))
        assert hit(s, 2.0 + 0.6 * (R - depth), 1.0 - 0.8 * (R - depth), 100)[:2] == ("wall corner 1", 0.0)


def test_a_thin_wall_has_two_sides() -> None:
    """A post thinner than the radius stops a pusher on either side of it, and only on its own side."""
    thin = 0.2 * R
    s = yard(channel={"posts": [[[1.0, 0.3], [1.0 + thin, 0.3], [1.0 + thin, 1.7], [1.0, 1.7]]]})
    assert hit(s, 0.5, 1.0, 0)[:2] == ("post 1 side 4", pytest.approx(0.5 - R))
    assert hit(s, 1.5, 1.0, 180)[:2] == ("post 1 side 2", pytest.approx(0.5 - thin - R))
    assert hit(s, 1.0 + thin + R, 1.0, 0)[0] == "wall 2"  # away from it, nothing in the way
    assert hit(s, 1.0 - R, 1.0, 180)[0] == "wall 4"


def test_a_gap_as_wide_as_the_pusher() -> None:
    """Through a gap exactly as wide as itself a pusher runs straight, and is stopped when it comes askew."""
    s = yard(channel={"posts": [[[1.0, 0.0], [1.5, 0.0], [1.5, 0.9], [1.0, 0.9]], [[1, 1.1], [1.5, 1.1], [1.2, 1.6]]]})
    assert hit(s, 0.5, 1.0, 0)[:2] == ("wall 2", pytest.approx(3.4))
    for askew in (-1e-4, 1e-4):
        surface, run, _ = hit(s, 0.5, 1.0, askew)
        assert surface.startswith("post")
        assert run < 1.0


# ---- starts -------------------------------------------------------------------------------------------------------

SLANTED, SLANTED_LENGTH, SLANTED_WIDTH, SLANTED_MOVE = turned([[0, 0], [4, 0], [4, 0.3], [0, 0.3]], 45)
ROOMS: dict[str, dict[str, Any]] = {
    "L with a post": {"channel": {"outline": BEND, "posts": [POST]}, "block": WEDGE_SIZE | {"rear_at": 2.5}},
    "triangle": {"channel": {"outline": [[0, 0], [4, 1], [0, 2]]}, "block": {"rear_at": 1.5, "offset": 0.0}},
    "slanted corridor": {
        "channel": {"outline": SLANTED, "length": SLANTED_LENGTH, "width": SLANTED_WIDTH},
        "block": {"length": 0.1, "width": 0.1} | _inside(SLANTED_MOVE @ (3.0, 0.15, 1.0), SLANTED_WIDTH),
    },
}


@pytest.mark.parametrize("region", ["behind", "ahead", "anywhere"])
@pytest.mark.parametrize("name", ROOMS)
def test_starts_keep_clear_of_everything(name: str, region: str) -> None:
    """In a room of any shape every pusher starts a radius or more from all walls, on the side that was asked for."""
    s = yard(**ROOMS[name], start={"region": region}).replace(pushers={"count": 300})
    x, y, _ = draw_starts(s, 1, apart=False).T
    floor = open_floor(s)
    assert all(floor.contains(Point(*centre)) for centre in zip(x, y, strict=True))
    assert min(floor.boundary.distance(Point(*centre)) for centre in zip(x, y, strict=True)) >= R
    is_behind, is_ahead = x <= s.block.rear_at - R, x >= s.block_front_at + R
    assert {"behind": is_behind, "ahead": is_ahead, "anywhere": is_behind | is_ahead}[region].all()


@pytest.mark.parametrize("name", ROOMS)
def test_starts_are_spread_evenly(name: str) -> None:
    """The share of starts in any part of the room is that part's share of the area open to a centre."""
    n = 3000
    s = yard(**ROOMS[name], start={"region": "anywhere"}).replace(pushers={"count": n})
    x, y, _ = draw_starts(s, 2, apart=False).T
    floor = open_floor(s).buffer(-R, quad_segs=256)
    low, high = s.block.rear_at - R, s.block_front_at + R
    region = floor.difference(Polygon([(low, -1), (high, -1), (high, 9), (low, 9)]))
    for cut in np.linspace(0.1, 0.9, 9):
        for part, is_in in (
            (_half_plane(cut * s.channel.length, 0), x < cut * s.channel.length),
            (_half_plane(cut * s.channel.width, 1), y < cut * s.channel.width),
        ):
            share = region.intersection(part).area / region.area
            assert abs(is_in.mean() - share) <= FOUR_SIGMA * math.sqrt(share * (1 - share) / n) + ROUNDING


def _half_plane(limit: float, axis: int) -> Polygon:
    corners = [(-9.0, -9.0), (limit, -9.0), (limit, 9.0), (-9.0, 9.0)]
    return Polygon(corners if axis == 0 else [corner[::-1] for corner in corners])


def test_no_room_is_said_and_not_searched_for_ever() -> None:
    """A start region that slanted walls leave empty is refused in words, when it is loaded and when it is drawn."""
    sliver = tables(channel={"outline": [[0, 1], [4, 0], [4, 2]]}, block={"rear_at": 0.45, "offset": 0.0})
    sliver["block"] |= {"length": 0.2, "width": 0.1}
    assert problems(sliver) == {
        "start.region": 'no room for a pusher "behind"; move block.rear_at or lengthen the channel'
    }
    sliver["start"] = {"region": "ahead"}
    with pytest.raises(ScenarioError, match="find no room"):
        draw_starts(from_tables(sliver).replace(start={"region": "behind"}), 1)


# ---- what is refused ----------------------------------------------------------------------------------------------


def problems(given: dict[str, Any]) -> dict[str, str]:
    """The problems of a scenario that must have some, by key."""
    with pytest.raises(ScenarioError) as caught:
        from_tables(given)
    found = {problem.key: problem.sentence for problem in caught.value.problems}
    assert len(found) == len(caught.value.problems)
    return found


def start_at(x: float, y: float) -> dict[str, Any]:
    return {"placed": [{"x": x, "y": y, "heading": 0}]}


ONCE = "write every corner once"
CROSSING = "list the corners in order, once round"
OUTSIDE = "reaches out of the channel; move it inside or cut it off at the wall"
KEEP = "its centre must keep 100 mm from every wall"
DEAD_END = "widen the gap or close the pocket"

MISFITS: dict[str, tuple[dict[str, Any], str, str]] = {
    "two corners": (
        {"channel": {"outline": RECTANGLE[:2]}}, "channel.outline", "a list given; must have at least 3 items",
    ),
    "three coordinates": (
        {"channel": {"outline": [[0, 0, 0], *RECTANGLE[1:]]}}, "channel.outline[1]",
        "a list given; must have at most 2 items",
    ),
    "crossing sides": (
        {"channel": {"outline": [[0, 0], [4, 2], [4, 0], [0, 2]]}}, "channel.outline",
        f"its sides cross or touch near (2, 1) m; {CROSSING}",
    ),
    "a corner on a side": (
        {"channel": {"outline": [[0, 0], [4, 0], [4, 2], [2, 0], [0, 2]]}}, "channel.outline",
        f"its sides cross or touch near (2, 0) m; {CROSSING}",
    ),
    "a spike": (
        {"channel": {"outline": [*RECTANGLE[:3], [2, 2], [2, 1], [2, 2], [0, 2]]}}, "channel.outline",
        f"its sides cross or touch near (2, 2) m; {CROSSING}",
    ),
    "no area": (
        {"channel": {"outline": [[0, 0], [2, 1], [4, 2]]}}, "channel.outline",
        "encloses no area: its corners lie on one line",
    ),
    "a corner twice": (
        {"channel": {"outline": [*RECTANGLE[:2], *RECTANGLE[1:]]}}, "channel.outline",
        f"corner 3 repeats the one before it; {ONCE}",
    ),
    "a closed outline": (
        {"channel": {"posts": [[*POST, POST[0]]]}}, "channel.posts[1]", f"the last corner repeats the first; {ONCE}",
    ),
    "all corners the same": (
        {"block": {"outline": [[0.0, 0.0]] * 3}}, "block.outline", f"the last corner repeats the first; {ONCE}",
    ),
    "too narrow an outline": (
        {"channel": {"outline": [[0, 0], [4, 0], [4, 1.5]]}}, "channel.outline",
        "reaches in y from 0 to 1.5 m; with channel.width as given it must reach from 0 to 2 m",
    ),
    "an outline elsewhere": (
        {"channel": {"outline": [[1, 0], [5, 0], [5, 2], [1, 2]]}}, "channel.outline",
        "reaches in x from 1 to 5 m; with channel.length as given it must reach from 0 to 4 m",
    ),
    "a block's outline from its corner": (
        {"block": {"outline": [[0, 0], [0.4, 0], [0.4, 0.5], [0, 0.5]]}}, "block.outline",
        "reaches in y from 0 to 0.5 m; with block.width as given it must reach from -0.25 to 0.25 m",
    ),
    "a block with a dent": (
        {"block": {"outline": [[0, -0.25], [0.4, -0.25], [0.2, 0], [0.4, 0.25], [0, 0.25]]}}, "block.outline",
        "the block must be convex; at (0.2, 0) m its outline bends inwards",
    ),
    "a block in the L's missing part": (
        {"channel": {"outline": BEND}, "block": {"rear_at": 1.0, "offset": 0.6}}, "block",
        "does not lie within the channel at its start; change block.rear_at or block.offset",
    ),
    "a block over a post": (
        {"channel": {"posts": [[[2.9, 0.3], [3.1, 0.3], [3.1, 0.4]]]}}, "channel.posts[1]",
        "stands in the block; move it or change block.rear_at or block.offset",
    ),
    "a post in the block": (
        {"channel": {"posts": [[[3.1, 0.3], [3.2, 0.3], [3.2, 0.4]]]}}, "channel.posts[1]",
        "stands in the block; move it or change block.rear_at or block.offset",
    ),
    "a post beyond the end": (
        {"channel": {"posts": [POST, [[3.8, 1.0], [4.2, 1.0], [3.8, 1.2]]]}}, "channel.posts[2]", OUTSIDE,
    ),
    "a post far away": (
        {"channel": {"posts": [[[1e300, 0.0], [0.0, 1e300], [-1e300, 1.0]]]}}, "channel.posts[1]", OUTSIDE,
    ),
    "a post in the L's missing part": (
        {"channel": {"outline": BEND, "posts": [[[1.0, 0.9], [1.2, 0.9], [1.2, 1.2]]]}}, "channel.posts[1]", OUTSIDE,
    ),
    "a region in pieces": (
        {"channel": {"posts": [[[1.0, 0.0], [1.2, 0.0], [1.2, 1.85], [1.0, 1.85]]]}}, "channel",
        f"a pusher near (?) m cannot get to the block; {DEAD_END}",
    ),
    "a pocket": (
        {"channel": {"outline": [[0, 0], [4, 0], [4, 2], [1, 2], [1, 1.1], [0.9, 1.1], [0.9, 2], [0, 2]],
                     "posts": [[[0.2, 1.0], [0.75, 1.0], [0.75, 1.2], [0.2, 1.2]]]}}, "channel",
        f"a pusher near (?) m cannot get to the block; {DEAD_END}",
    ),
    "a neck narrower than the pusher": (
        {"channel": {"outline": [[0, 0], [1, 0], [1, 0.9], [1.2, 0.9], [1.2, 0], [4, 0],
                                 [4, 2], [1.2, 2], [1.2, 1.09], [1, 1.09], [1, 2], [0, 2]]}}, "channel",
        f"a pusher near (?) m cannot get to the block; {DEAD_END}",
    ),
    "no pusher fits": (
        {"channel": {"outline": [[0, 0], [4, 0], [2, 2]]}, "pushers": {"radius": 0.9}, "block": {"rear_at": 1.8}},
        "pushers.radius", "no pusher fits the channel anywhere; make it smaller",
    ),
    "a start in a post": (
        {"channel": {"posts": [POST]}, "start": start_at(1.1, 0.5)}, "start.placed[1]",
        "(1.1, 0.5) m puts the pusher into channel.posts[1]",
    ),
    "a start in touch with a post's corner, and deeper": (
        {"channel": {"posts": [POST]}, "start": start_at(1.1, 0.6 + 0.999 * R)}, "start.placed[1]",
        "(1.1, 0.6999) m puts the pusher into channel.posts[1]",
    ),
    "a start in the L's missing part": (
        {"channel": {"outline": BEND}, "start": start_at(1.0, 1.5)}, "start.placed[1]",
        f"(1, 1.5) m puts the pusher into a wall; {KEEP}",
    ),
    "a start at the L's inner corner": (
        {"channel": {"outline": BEND}, "start": start_at(2.05, 0.95)}, "start.placed[1]",
        f"(2.05, 0.95) m puts the pusher into a wall; {KEEP}",
    ),
    "a start in a slanted wall": (
        {"channel": {"outline": [[0, 0], [4, 0], [4, 2]]}, "start": start_at(2.0, 0.9)}, "start.placed[1]",
        f"(2, 0.9) m puts the pusher into a wall; {KEEP}",
    ),
    "a start in a leaning block": (
        {"block": WEDGE_SIZE, "start": start_at(3.15, 0.4)}, "start.placed[1]",
        "(3.15, 0.4) m puts the pusher into the block",
    ),
    "sight of an unknown face": (
        {"channel": {"outline": BEND}, "routine": {"stages": [{"name": "a", "acts": [
            {"act": "run"}, {"act": "sight", "face": "top"}]}]}}, "routine",
        "looks for the face 'top'; there are wall 1, wall 2, wall 3, wall 4, wall 5, wall 6, rear, block side 2, "
        "front, block side 4, wall corner 1, block corner 1, block corner 2, block corner 3, block corner 4",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", MISFITS)
def test_refuses_what_does_not_fit(name: str) -> None:
    """Geometry that cannot be is refused with the one key to change, what is wrong and what to do about it."""
    changes, key, sentence = MISFITS[name]
    found = problems(tables(**changes))
    assert {where: _somewhere(what) for where, what in found.items()} == {key: sentence}


def _somewhere(sentence: str) -> str:
    """The sentence without the place it names in a pocket, of which any will do."""
    return re.sub(r"a pusher near \(.*?\)", "a pusher near (?)", sentence)


def test_the_place_named_is_in_the_pocket() -> None:
    """Where the loader says that a pusher is shut in, there is room for one, on the far side of the wall."""
    changes, key, _ = MISFITS["a region in pieces"]
    x, y = map(float, re.findall(r"\((.*?), (.*?)\) m", problems(tables(**changes))[key])[0])
    assert R <= x <= 1.0 - R
    assert R <= y <= 2.0 - R


@pytest.mark.parametrize("name", [name for name in MISFITS if "list given" not in MISFITS[name][2]])
def test_misfits_are_seen_beside_other_errors(name: str) -> None:
    """What is wrong with the geometry is reported also when another table of the file is wrong."""
    changes, key, sentence = MISFITS[name]
    found = problems(tables(**changes, contacts={"pusher_wall": {"restitution": 2.0, "friction": 0.0}}))
    found = {where: _somewhere(what) for where, what in found.items()}
    assert found == {key: sentence, "contacts.pusher_wall.restitution": "2.0 given; must be at least 0 and at most 1"}


def test_what_touches_is_admitted() -> None:
    """Posts may stand flush at a wall or at the block, the block in a corner, and pushers may start in touch."""
    s = yard(
        channel={
            "outline": BEND,
            "posts": [[[1.0, 0.0], [1.2, 0.0], [1.1, 0.3]], [[2.9, 0.2], [3.0, 0.2], [3.0, 0.4]]],
        },
        block={"offset": -0.75},
        start=start_at(2.0 + R * 0.6, 1.0 - R * 0.8),
    )
    assert [name for name in surface_names(s) if name.startswith("post 2 side")] != []
    assert post_corners(s)[1][0] == (2.9, 0.2)


@pytest.mark.parametrize("degrees", range(0, 90, 7))
def test_what_touches_askew_is_admitted(degrees: float) -> None:
    """A post and a block that stand flush at slanted walls fit in spite of rounding."""
    outline, length, width, move = turned(RECTANGLE, degrees)

    def placed(points: Points) -> NDArray[np.float64]:
        return np.array([move @ (*point, 1.0) for point in points])

    block = placed([[3.0, 0.0], [3.5, 0.0], [3.5, 0.5], [3.0, 0.5]])
    low, high = block.min(axis=0), block.max(axis=0)
    own = block - [low[0], (low[1] + high[1]) / 2]
    s = yard(
        channel={
            "outline": outline, "length": length, "width": width,
            "posts": [placed([[1.0, 0.0], [1.2, 0.0], [1.2, 0.2]]).tolist()],
        },
        block={
            "length": float(high[0] - low[0]), "width": float(high[1] - low[1]), "outline": own.tolist(),
            "rear_at": float(low[0]), "offset": float((low[1] + high[1] - width) / 2),
        },
        goal={"travel": 1e-3},
        start=start_at(*map(float, move @ (2.0, R, 1.0))),
    )  # fmt: skip
    assert len(channel_corners(s)) == 4


@pytest.mark.parametrize("seed", range(8))
def test_any_corners_are_a_scenario_or_a_scenario_error(seed: int) -> None:
    """Random lists of corners, sensible or not, load or are refused in words, whatever else is in the file."""
    rng = np.random.default_rng(seed)
    n_loaded = 0
    for _ in range(150):
        given = tables(
            channel={"outline": next(_random_corners(rng, 4.0, 2.0))} if rng.random() < 0.7 else {},
            block={"rear_at": float(rng.choice([0.5, 2.0, 3.0, 1e200]))},
            pushers={"radius": float(10 ** rng.uniform(-9, 0.5))},
        )
        if rng.random() < 0.5:
            given["channel"]["posts"] = [next(_random_corners(rng, 4.0, 2.0)) for _ in range(2)]
        if rng.random() < 0.4:
            given["block"]["outline"] = [[x, y - 0.25] for x, y in next(_random_corners(rng, 0.4, 0.5))]
        if rng.random() < 0.3:
            given["start"] = start_at(*rng.uniform(0, 2, 2))
        if rng.random() < 0.1:
            del given["block"]["length"]
        try:
            s = from_tables(given)
        except ScenarioError:
            continue
        n_loaded += 1
        boundary = boundary_of(s)
        assert all(np.isfinite(part).all() for part in boundary)
        assert len(surface_names(s)) == len(boundary.kinds) == len(set(surface_names(s)))
    assert n_loaded >= 5


def _random_corners(rng: np.random.Generator, length: float, width: float) -> Iterator[Points]:
    n = int(rng.integers(3, 8))
    angle = np.sort(rng.uniform(0, math.tau, n))
    star = np.column_stack([np.cos(angle), np.sin(angle)]) * rng.uniform(0.4, 1.0, (n, 1))
    star = (star - star.min(axis=0)) / np.ptp(star, axis=0)
    yield [
        (star * [length, width]).tolist(),
        (star * [length, width]).tolist(),
        (star * [length / 4, width / 4] + rng.uniform(0, 0.7, 2) * [length, width]).tolist(),
        (rng.uniform(0, 1, (n, 2)) * [length, width]).tolist(),
        (rng.integers(0, 4, (n, 2)) * [length / 3, width / 3]).tolist(),
        (10.0 ** rng.uniform(-320, 308, (n, 2)) * rng.choice([-1, 1], (n, 2))).tolist(),
        np.linspace([0, 0], [length, width], n).tolist(),
        [[0.0, 0.0], [length, 0.0], [length, width], [0.0, width]],
    ][rng.integers(8)]


def test_one_pusher_fits_where_it_has_a_place() -> None:
    """A start region hardly larger than a pusher takes one pusher and refuses two."""
    snug = tables(channel={"outline": [[0, 1], [4, 0], [4, 2]]}, block={"rear_at": 0.6, "offset": 0.0})
    snug["block"] |= {"length": 0.2, "width": 0.1}
    x, y, _ = draw_starts(from_tables(snug), 1)[0]
    assert open_floor(from_tables(snug)).boundary.distance(Point(x, y)) >= R
    snug["pushers"]["count"] = 2
    assert problems(snug) == {"pushers.count": '2 pushers do not fit the start region "behind"; at most 1'}


def test_turning_is_signed() -> None:
    """An outline gone round counter-clockwise turns left at corners that bulge out and right at those that do not."""
    corners = channel_corners(yard(channel={"outline": BEND}))
    assert [turning(corners, k) for k in range(6)] == pytest.approx([math.pi / 2] * 4 + [-math.pi / 2, math.pi / 2])
