"""How the values of a scenario fit together: each check yields what does not, with the key and the remedy."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING

from swarmpush.geometry import (
    ARC_SIDES,
    Corners,
    block_corners,
    channel_corners,
    free_region,
    is_plain,
    post_corners,
    pusher_corners,
    tidy,
    turning,
)
from swarmpush.problems import Problem
from swarmpush.quantities import for_people
from swarmpush.scenario import FixedStart, Scenario

if TYPE_CHECKING:
    from shapely.geometry.base import BaseGeometry

ROUNDING = 1e-9  # relative; by this much lengths may miss each other and still fit
MAX_TRAVEL = 0.25  # radii that a pusher may run in one step: the slop that goes with it is the largest overlap
MAX_PACKING = 0.4  # share of the start region that discs can fill by random placement without getting stuck


def _metre(value: float) -> str:
    return for_people(value, "m", 4)


def _outline_misfits(s: Scenario) -> Iterator[Problem]:
    """Outlines that are no polygons, do not fit one another, or shut pushers in."""
    if is_plain(s) and not s.train:
        return
    if alone := [problem for key, outline in _outlines(s).items() for problem in _polygon_misfits(s, key, outline)]:
        yield from alone
        return
    if _has_block_inside(s):
        yield from _overlaps(s)


def _has_block_inside(s: Scenario) -> bool:
    """Whether the block lies within the channel's length and width, which other checks see to."""
    return s.block_front_at <= s.channel.length * (1 + ROUNDING) and not any(_block_width_misfits(s))


def _outlines(s: Scenario) -> dict[str, Corners]:
    """The outlines that stand in the file, by key."""
    given = {"channel.outline": s.channel.outline, "block.outline": s.block.outline}
    given |= {f"train[{k + 1}].outline": block.outline for k, block in enumerate(s.train)}
    posts = {f"channel.posts[{k + 1}]": post for k, post in enumerate(s.channel.posts)}
    return {key: outline for key, outline in (given | posts).items() if outline is not None}


def _polygon_misfits(s: Scenario, key: str, outline: Corners) -> Iterator[Problem]:
    """What is wrong with an outline by itself; what comes later is only looked at when nothing was found before."""
    span = max(max(values) - min(values) for values in zip(*outline, strict=True))
    near = ROUNDING * min(span, s.channel.length + s.channel.width)
    for k in range(len(outline)):
        if math.dist(outline[k], outline[k - 1]) <= near:
            which = f"corner {k + 1} repeats the one before it" if k else "the last corner repeats the first"
            yield Problem(key, f"{which}; write every corner once")
            return
    if extent := list(_extent_misfits(s, key, outline)):
        yield from extent
        return
    from shapely import MultiPoint, Polygon
    from shapely.validation import explain_validity

    hull, polygon = MultiPoint(outline).convex_hull, Polygon(outline)
    if hull.area <= ROUNDING * hull.length**2:
        yield Problem(key, "encloses no area: its corners lie on one line")
    elif not polygon.is_valid:
        x, y = map(float, explain_validity(polygon).partition("[")[2].rstrip("]").split())
        yield Problem(key, f"its sides cross or touch near ({x:.3g}, {y:.3g}) m; list the corners in order, once round")
    elif not key.startswith("channel"):
        corners = tidy(outline)
        for x, y in [corner for k, corner in enumerate(corners) if turning(corners, k) < 0.0][:1]:
            yield Problem(key, f"the block must be convex; at ({x:g}, {y:g}) m its outline bends inwards")


def _extent_misfits(s: Scenario, key: str, outline: Corners) -> Iterator[Problem]:
    """An outline must fill the length and width that stand beside it; a post must stay within the channel's."""
    table, is_post = key.partition(".")[0], key.startswith("channel.posts")
    block = {"block": s.block, **{f"train[{k + 1}]": other for k, other in enumerate(s.train)}}.get(table)
    sizes = (block.length, block.width) if block else (s.channel.length, s.channel.width)
    lowest = (0.0, -block.width / 2 if block else 0.0)
    for axis, (low, size) in enumerate(zip(lowest, sizes, strict=True)):
        values = [corner[axis] for corner in outline]
        below, above = min(values) - low, max(values) - (low + size)
        if is_post and max(-below, above) > ROUNDING * size:
            yield Problem(key, _OUTSIDE)
            return
        if not is_post and max(abs(below), abs(above)) > ROUNDING * size:
            yield Problem(
                key,
                f"reaches in {'xy'[axis]} from {min(values):g} to {max(values):g} m; with {table}."
                f"{('length', 'width')[axis]} as given it must reach from {low:g} to {low + size:g} m",
            )


_OUTSIDE = "reaches out of the channel; move it inside or cut it off at the wall"


def _overlaps(s: Scenario) -> Iterator[Problem]:
    """Posts and block must stand in the channel and clear of each other, and no pusher must be shut in."""
    from shapely import Polygon

    channel, block = Polygon(channel_corners(s)), Polygon(block_corners(s))
    posts = {f"channel.posts[{k + 1}]": Polygon(corners) for k, corners in enumerate(post_corners(s))}
    within = channel.buffer(ROUNDING * max(s.channel.length, s.channel.width))
    fits = True
    for key, post in posts.items():
        if not within.covers(post):
            yield Problem(key, _OUTSIDE)
        if post.intersection(block).area > ROUNDING * min(post.area, block.area):
            yield Problem(key, "stands in the block; move it or change block.rear_at or block.offset")
            fits = False
    if not within.covers(block):
        yield Problem("block", "does not lie within the channel at its start; change block.rear_at or block.offset")
        fits = False
    standing = [*posts.values(), block]
    for k, other in enumerate(s.train):
        key, body = f"train[{k + 1}]", Polygon(block_corners(s, other))
        if not within.covers(body):
            yield Problem(key, "does not lie within the channel at its start; change its rear_at or offset")
            fits = False
        if any(body.intersection(thing).area > ROUNDING * min(body.area, thing.area) for thing in standing):
            yield Problem(key, "stands in another block or in a post; change its rear_at or offset")
            fits = False
        standing.append(body)
    if fits and 2 * s.pushers.radius < s.channel.width:
        yield from _region_misfits(s)


def _region_misfits(s: Scenario) -> Iterator[Problem]:
    """Every part of the region open to a pusher's centre must touch the surroundings of a block."""
    from shapely import Polygon, union_all

    region = free_region(s)
    blocks = union_all([Polygon(block_corners(s, block)) for block in s.blocks])
    reach = blocks.buffer(1.001 * s.pushers.radius, quad_segs=ARC_SIDES // 4)
    for part in getattr(region, "geoms", [region]):
        if part.is_empty:
            yield Problem("pushers.radius", "no pusher fits the channel anywhere; make it smaller")
        elif not part.intersects(reach):
            x, y = part.representative_point().coords[0]
            yield Problem(
                "channel",
                f"a pusher near ({x:.3g}, {y:.3g}) m cannot get to the block; widen the gap or close the pocket",
            )


def _width_misfits(s: Scenario) -> Iterator[Problem]:
    diameter = 2 * s.pushers.radius
    if diameter >= s.channel.width:
        yield Problem(
            "pushers.radius",
            f"a pusher ({_metre(diameter)} across) does not fit the channel ({_metre(s.channel.width)} wide)",
        )


def _block_width_misfits(s: Scenario) -> Iterator[Problem]:
    if s.block.width > s.channel.width:
        yield Problem(
            "block.width",
            f"the block ({_metre(s.block.width)}) is wider than the channel ({_metre(s.channel.width)})",
        )
    elif abs(s.block.offset) + s.block.width / 2 > s.channel.width / 2 * (1 + ROUNDING):
        most = (s.channel.width - s.block.width) / 2
        yield Problem(
            "block.offset",
            f"{_metre(s.block.offset)} puts the block into a wall; at most {_metre(most)} to either side",
        )


def _block_length_misfits(s: Scenario) -> Iterator[Problem]:
    front, end = s.block_front_at, s.channel.length
    if front > end * (1 + ROUNDING):
        yield Problem(
            "block.rear_at",
            f"the block's front would stand at {_metre(front)}, beyond the channel's end at {_metre(end)}",
        )
    elif front + s.goal.travel > end * (1 + ROUNDING):
        yield Problem(
            "goal.travel",
            f"{_metre(s.goal.travel)} is more than the {_metre(end - front)} between the block and the channel's end",
        )


def _resistance_misfits(s: Scenario) -> Iterator[Problem]:
    if s.floor is None and s.fluid is None:
        yield Problem("", "neither [floor] nor [fluid] given; say what resists the block")
    if s.floor is not None and s.floor.kinetic_friction > s.floor.static_friction:
        yield Problem(
            "floor.kinetic_friction",
            f"{s.floor.kinetic_friction:g} is more than static_friction ({s.floor.static_friction:g})",
        )


def _slope_misfits(s: Scenario) -> Iterator[Problem]:
    for name in ("slope", "cross_slope"):
        if getattr(s.channel, name) != 0.0 and s.floor is None:
            yield Problem(f"channel.{name}", "needs a [floor]; a liquid carries an unknown part of the weight")


def _heading_misfits(s: Scenario) -> Iterator[Problem]:
    p = s.pushers
    if p.heading == "free" and math.isinf(p.turn_rate):
        yield Problem("pushers.turn_rate", 'a free heading cannot turn at once; give a rate, or heading = "held"')
    elif not p.is_disc and math.isinf(p.turn_rate):
        yield Problem("pushers.turn_rate", "a bar cannot turn at once, it would stand in a wall; give a rate")
    for name in ("turn_drag", "contact_arm"):
        if p.heading == "held" and getattr(p, name):
            yield Problem(f"pushers.{name}", 'only a free heading has it; give heading = "free" as well')
    if 2 * p.reach >= s.channel.width and not p.is_disc:
        key = "pushers.nose" if p.nose > 0.0 else "pushers.trunk"
        yield Problem(key, f"a bar ({_metre(2 * p.reach)} from corner to corner) cannot turn in the channel")


def _centre_misfits(s: Scenario) -> Iterator[Problem]:
    for key, block in {"block": s.block, **{f"train[{k + 1}]": other for k, other in enumerate(s.train)}}.items():
        for name in ("centre_of_mass", "centre_of_friction"):
            point = getattr(block, name)
            if point and not (0.0 < point[0] < block.length and abs(point[1]) < block.width / 2):
                yield Problem(
                    f"{key}.{name}",
                    f"({point[0]:g}, {point[1]:g}) m is not under the block; x runs from 0 to {block.length:g} m, "
                    f"y from {-block.width / 2:g} to {block.width / 2:g} m",
                )


def _forecast_misfits(s: Scenario) -> Iterator[Problem]:
    if (s.forecast.law == "given") != (s.forecast.nudge is not None):
        yield Problem("forecast.nudge", 'needed with law = "given", and only then')


def _step_misfits(s: Scenario) -> Iterator[Problem]:
    step, most = s.numerics.step, MAX_TRAVEL * s.pushers.radius / s.pushers.free_speed
    if step is not None and step > most:
        yield Problem(
            "numerics.step",
            f"in {for_people(step, 's')} it runs more than a quarter of its radius; at most {for_people(most, 's')}",
        )


def _start_misfits(s: Scenario) -> Iterator[Problem]:
    from swarmpush.starts import room_for_starts

    if 2 * s.pushers.radius >= s.channel.width or not _has_block_inside(s) or any(_outline_misfits(s)):
        return  # a start has no place to be right or wrong in
    if s.start.placed is not None:
        yield from _placed_misfits(s)
        return
    room = room_for_starts(s)
    most = max(1, int(MAX_PACKING * room / (math.pi * s.pushers.radius**2)))  # one fits wherever its centre has a place
    if room <= 0:
        yield Problem(
            "start.region",
            f'no room for a pusher "{s.start.region}"; move block.rear_at or lengthen the channel',
        )
    elif s.pushers.count > most:
        yield Problem(
            "pushers.count",
            f'{s.pushers.count} pushers do not fit the start region "{s.start.region}"; at most {most}',
        )


def _placed_misfits(s: Scenario) -> Iterator[Problem]:
    placed, r = s.start.placed or (), s.pushers.radius
    if len(placed) != s.pushers.count:
        yield Problem("start.placed", f"{len(placed)} pushers placed, but pushers.count = {s.pushers.count}")
    in_the_way, cores = _obstacles(s), [_core(s, p) for p in placed]
    for k, (p, core) in enumerate(zip(placed, cores, strict=True)):
        key = f"start.placed[{k + 1}]"
        for thing, remedy, gap in in_the_way:
            if gap(core) < r * (1 - ROUNDING):
                yield Problem(key, f"({p.x:g}, {p.y:g}) m puts the pusher into {thing}{remedy}")
                break
        else:
            for j, other in enumerate(cores[:k]):
                if not s.pushers.pass_through and core.distance(other) < 2 * r * (1 - ROUNDING):
                    yield Problem(key, f"overlaps start.placed[{j + 1}]")


def _core(s: Scenario, start: FixedStart) -> BaseGeometry:
    """A placed pusher before it is rounded off with its radius: its centre, or a line or rectangle of a bar."""
    from shapely import MultiPoint

    c, q = math.cos(start.heading), math.sin(start.heading)
    corners = pusher_corners(s.pushers)
    return MultiPoint([(start.x + c * x - q * y, start.y + q * x + c * y) for x, y in corners]).convex_hull


def _obstacles(s: Scenario) -> list[tuple[str, str, Callable[[BaseGeometry], float]]]:
    """What a pusher can start in: its name, what to say besides, and how far it is from its core (negative: in it)."""
    from shapely import Polygon

    channel = Polygon(channel_corners(s))

    def to_wall(core: BaseGeometry) -> float:
        distance = float(channel.exterior.distance(core))
        return distance if channel.covers(core) else -distance

    part = "centre" if s.pushers.is_disc else "outline before rounding"
    keep = f"its {part} must keep {_metre(s.pushers.radius)} from every wall"
    posts = {f"channel.posts[{k + 1}]": Polygon(corners) for k, corners in enumerate(post_corners(s))}
    blocks = {"the block": s.block, **{f"train[{k + 1}]": other for k, other in enumerate(s.train)}}
    things = posts | {name: Polygon(block_corners(s, block)) for name, block in blocks.items()}
    return [
        ("a wall", f"; {keep}", to_wall),
        *((name, "", lambda core, thing=thing: thing.distance(core)) for name, thing in things.items()),
    ]


def _face_misfits(s: Scenario) -> Iterator[Problem]:
    from swarmpush.kinematics.boundary import surface_names

    if not s.routine.faces() or not _has_block_inside(s) or any(_outline_misfits(s)):
        return
    names = surface_names(s)
    for face in s.routine.faces():
        if face not in names:
            yield Problem("routine", f"looks for the face '{face}'; there are {', '.join(names)}")


CHECKS = (
    _outline_misfits,
    _face_misfits,
    _width_misfits,
    _block_width_misfits,
    _block_length_misfits,
    _resistance_misfits,
    _slope_misfits,
    _heading_misfits,
    _centre_misfits,
    _forecast_misfits,
    _step_misfits,
    _start_misfits,
)
