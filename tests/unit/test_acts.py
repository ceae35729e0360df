"""The acts that move by measure and the ones that look: advance, slide, gauge, sight, declare, and their branches."""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
import pytest
from numpy.typing import NDArray
from pydantic import ValidationError

from swarmpush.draws import stream_keys
from swarmpush.kinematics.bounce import Fate, settle, trace
from swarmpush.kinematics.boundary import boundary_of, surface_names
from swarmpush.kinematics.laps import IN_THE_OPEN, find_laps
from swarmpush.kinematics.legs import leg_from
from swarmpush.loading import from_tables
from swarmpush.program import (
    DECLARED,
    EXACT,
    FIRST_COUNTER,
    MEMORY,
    NOTES,
    RANGE,
    RESOLUTION,
    SEEN,
    STAGE_SINCE,
    Command,
    Contact,
    compile_routine,
    decide,
)
from swarmpush.routine import Device, Routine
from swarmpush.scenario import Scenario

ROUNDING = 1e-12  # m, s and rad; a few operations on numbers of about 1
EDGE = 1e-6  # rad; edges of bands are found to 1e-7
FLAT_LEG = 1e-9  # relative; what is left of 16 digits where a cosine of 1e-7 is taken of an angle

R = 0.1  # m, of the pusher
SPEED = 0.5  # m/s
ANY_PAIR = {"restitution": 0.0, "friction": 0.0}
RUN: dict[str, Any] = {"act": "run"}
HALT: dict[str, Any] = {"act": "halt"}
POST = [[1.0, 0.9], [1.2, 0.9], [1.2, 1.1], [1.0, 1.1]]


def stage(name: str, *acts: dict[str, Any], then: str | None = None) -> dict[str, Any]:
    return {"name": name, "acts": list(acts)} | ({"then": then} if then else {})


def hall(*stages: dict[str, Any], posts: list[Any] | None = None, block: dict[str, Any] | None = None) -> Scenario:
    """A hall of 4 x 2 m with a block of 0.4 x 0.4 m in the middle of its width, from x = 2.5 m."""
    return from_tables(
        {
            "format": 1,
            "about": {"name": "hall"},
            "channel": {"length": 4.0, "width": 2.0} | ({"posts": posts} if posts else {}),
            "block": {"length": 0.4, "width": 0.4, "mass": 1.0, "rear_at": 2.5} | (block or {}),
            "pushers": {"count": 1, "radius": R, "mass": 0.1, "free_speed": SPEED, "stall_force": 1.0},
            "fluid": {"block_drag": 1.0, "block_yaw_drag": 1.0},
            "contacts": dict.fromkeys(("pusher_wall", "pusher_block", "pusher_pusher", "block_wall"), ANY_PAIR),
            "routine": {"stages": list(stages)},
            "goal": {"travel": 0.1, "time_limit": 1.0},
        }
    )


class Path(NamedTuple):
    """What `trace` wrote down, surfaces by name ("" where a leg ended without a bump), and what was remembered."""

    hits: NDArray[np.float64]
    names: list[str]
    memory: NDArray[np.int64]
    notes: NDArray[np.float64]


def follow(s: Scenario, x: float, y: float, degrees: float, n_legs: int = 20) -> Path:
    hits, surfaces = np.zeros((n_legs, 6)), np.zeros(n_legs, dtype=np.int64)
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    names = surface_names(s)
    n = trace(
        boundary_of(s), compile_routine(s.routine, names), EXACT, 0.0, SPEED, stream_keys(0, 1)[0],
        np.array([x, y, math.radians(degrees)]), 0.0, hits, surfaces, memory, notes,
    )  # fmt: skip
    return Path(hits[:n], [names[k] if k >= 0 else "" for k in surfaces[:n]], memory, notes)


def near(*values: float) -> Any:
    return pytest.approx(list(values), abs=ROUNDING)


# ---- the interpreter ----------------------------------------------------------------------------------------------


def decisions(*stages: dict[str, Any], contact: Contact = Contact.WALL, n: int = 1) -> list[tuple[Any, ...]]:
    """The first n decisions, and notes and memory after them."""
    program = compile_routine(Routine.model_validate({"stages": list(stages)}), ("bottom", "rear"))
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    found = []
    for _ in range(n):
        command, value, number = decide(
            program, EXACT, stream_keys(0, 1)[0], memory, notes, 0.0, 0.0, int(contact), math.pi
        )
        found.append((Command(command), value, number))
    return [*found, (notes, memory)]


@pytest.mark.parametrize(
    ("act", "expected"),
    [
        ({"act": "advance", "distance": "30 cm"}, (Command.ADVANCE, 0.3, 0)),
        ({"act": "slide", "length": "30 cm"}, (Command.SLIDE, 0.3, 0)),
        ({"act": "slide", "time": "2 s"}, (Command.SLIDE, -2.0, 0)),  # a negative value is a time
        ({"act": "gauge", "maximum": 2.0, "resolution": 0.1}, (Command.GAUGE, 2.0, 0)),
        ({"act": "sight", "face": "rear", "half_angle": "30 deg"}, (Command.SIGHT, math.radians(30), 1)),
        ({"act": "sight", "face": "bottom"}, (Command.SIGHT, 0.0, 0)),
    ],
)
def test_what_the_world_is_asked_for(act: dict[str, Any], expected: tuple[Any, ...]) -> None:
    """Each act asks the world for the one thing it needs, in SI units, and goes on with the act after it."""
    first, second, _ = decisions(stage("a", act, RUN), n=2)
    assert first == expected
    assert second == (Command.RUN, 0.0, 0)


def test_the_steps_of_a_reading_are_noted() -> None:
    """Whoever reads the range for a gauge finds the steps of the reading in the notes."""
    *_, (notes, _) = decisions(stage("a", {"act": "gauge", "maximum": 2.0, "resolution": 0.1}, RUN))
    assert notes[RESOLUTION] == 0.1


def test_declare_is_remembered_and_takes_no_time() -> None:
    """A pusher that declares itself lost goes on with its routine, and the flag stays."""
    first, second, (_, memory) = decisions(stage("a", {"act": "declare"}, RUN, then="b"), stage("b", RUN), n=2)
    assert first[0] == second[0] == Command.RUN
    assert memory[DECLARED] == 1
    *_, (_, memory) = decisions(stage("a", RUN))
    assert memory[DECLARED] == 0


@pytest.mark.parametrize("contact", list(Contact))
@pytest.mark.parametrize("kind", ["none", "wall", "block", "pusher"])
def test_branch_on_contact(kind: str, contact: Contact) -> None:
    """A branch on a kind of contact is taken at that kind and at no other, "none" being the open."""
    branch = {"act": "branch", "on": "contact", "kind": kind, "go": "b"}
    first, _ = decisions(stage("a", branch, RUN), stage("b", HALT), contact=contact)
    assert (first[0] == Command.STOP) == (kind == contact.name.lower())


@pytest.mark.parametrize(("reading", "is_taken"), [(0.0, True), (0.299, True), (0.3, False), (1.0, False)])
def test_branch_on_range(reading: float, is_taken: bool) -> None:
    """A branch on the range is taken if the last reading was shorter, and not if it was as long."""
    branch = {"act": "branch", "on": "range", "below": "30 cm", "go": "b"}
    program = compile_routine(Routine.model_validate({"stages": [stage("a", branch, RUN), stage("b", HALT)]}))
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    notes[RANGE] = reading
    command, _, _ = decide(program, EXACT, stream_keys(0, 1)[0], memory, notes, 7.0, 0.0, 0, 0.0)
    assert (command == Command.STOP) == is_taken
    assert notes[STAGE_SINCE] == (7.0 if is_taken else 0.0)  # another stage begins


@pytest.mark.parametrize("was_seen", [True, False])
@pytest.mark.parametrize("seen", [True, False, None])
def test_branch_on_sight(seen: bool | None, was_seen: bool) -> None:
    """A branch on sight is taken if the last look saw its face, or did not, as asked; by default if it did."""
    branch = {"act": "branch", "on": "sight", "go": "b"} | ({} if seen is None else {"seen": seen})
    program = compile_routine(Routine.model_validate({"stages": [stage("a", branch, RUN), stage("b", HALT)]}))
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    memory[SEEN] = int(was_seen)
    command, _, _ = decide(program, EXACT, stream_keys(0, 1)[0], memory, notes, 0.0, 0.0, 0, 0.0)
    assert (command == Command.STOP) == (was_seen == (seen is not False))


DRIVE, BUMP, STEERING = Device.DRIVE, Device.BUMP, Device.STEERING


@pytest.mark.parametrize(
    ("acts", "kit"),
    [
        ([{"act": "advance", "distance": 1}], (DRIVE, BUMP, Device.DISTANCE)),
        ([RUN, {"act": "slide", "length": 1}], (DRIVE, BUMP, Device.DISTANCE)),
        ([RUN, {"act": "slide", "time": 1}], (DRIVE, BUMP, Device.CLOCK)),
        ([RUN, {"act": "gauge", "maximum": 1}], (DRIVE, BUMP, Device.RANGE)),
        ([RUN, {"act": "branch", "on": "range", "below": 1, "go": "a"}], (DRIVE, BUMP, Device.RANGE)),
        ([RUN, {"act": "sight", "face": "rear"}], (DRIVE, BUMP, Device.SIGHT)),
        ([RUN, {"act": "branch", "on": "sight", "go": "a"}], (DRIVE, BUMP, Device.SIGHT)),
        ([RUN, {"act": "declare"}], (DRIVE, BUMP)),
    ],
)
def test_kit(acts: list[dict[str, Any]], kit: tuple[Device, ...]) -> None:
    """Measured ways need an odometer or a clock, ranges and sights their sensors, a declaration nothing."""
    assert Routine.model_validate({"stages": [stage("a", *acts)]}).kit() == kit


@pytest.mark.parametrize("move", [{"act": "advance", "distance": 1}, {"act": "slide", "time": 1}])
def test_a_loop_may_move_by_measure_alone(move: dict[str, Any]) -> None:
    """A loop that advances or slides lets time pass, so it needs no run; looking about takes no time."""
    assert len(Routine.model_validate({"stages": [stage("a", move)]}).stages) == 1
    looks = [{"act": "gauge", "maximum": 1}, {"act": "sight", "face": "rear"}, {"act": "declare"}]
    with pytest.raises(ValidationError, match="without a run, advance or slide"):
        Routine.model_validate({"stages": [stage("a", *looks)]})


@pytest.mark.parametrize(
    ("act", "complaint"),
    [
        ({"act": "slide"}, "give either length or time"),
        ({"act": "slide", "length": 1, "time": 1}, "give either length or time"),
        ({"act": "slide", "time": 0}, "greater than 0"),
        ({"act": "advance", "distance": 0}, "greater than 0"),
        ({"act": "gauge", "maximum": 0}, "greater than 0"),
        ({"act": "gauge", "maximum": 1, "resolution": -1}, "greater than or equal to 0"),
        ({"act": "sight", "face": "rear", "half_angle": "181 deg"}, "less than or equal to"),
        ({"act": "branch", "on": "range", "below": 0, "go": "a"}, "greater than 0"),
        ({"act": "branch", "on": "sight", "seen": 1, "go": "a"}, "valid boolean"),
    ],
)
def test_refuses_measures_that_are_none(act: dict[str, Any], complaint: str) -> None:
    """Measures of no length, two measures at once, and cones of more than all round are refused."""
    with pytest.raises(ValidationError, match=complaint):
        Routine.model_validate({"stages": [stage("a", RUN, act)]})


# ---- advance ------------------------------------------------------------------------------------------------------


def test_advance_ends_in_the_open_or_at_a_bump() -> None:
    """A pusher advances by its distance, again and again, until a bump comes sooner; each takes its time."""
    path = follow(hall(stage("a", {"act": "advance", "distance": 0.6}, {"act": "branch", "on": "contact",
                                  "kind": "wall", "go": "b"}), stage("b", HALT)), 0.5, 1.0, 90)  # fmt: skip
    assert path.names == ["", "top"]
    assert path.hits[:, 1] == near(1.6, 1.9)
    assert path.hits[:, 4] == near(0.6, 0.3)
    assert path.hits[:, 5] == near(0.6 / SPEED, 0.3 / SPEED)


@pytest.mark.parametrize("start", np.linspace(0.3, 1.1, 9))
def test_advance_that_just_reaches_a_wall_bumps_into_it(start: float) -> None:
    """An advance exactly as long as the way to a wall ends in touch with it, however its length is rounded."""
    path = follow(hall(stage("a", {"act": "advance", "distance": 1.9 - start}, HALT)), 0.5, float(start), 90)
    assert path.names == ["top"]
    assert path.hits[0, 1] == pytest.approx(1.9, abs=ROUNDING)


def test_none_is_the_open_again_after_every_advance() -> None:
    """The contact of a bump is forgotten by an advance that ends in the open, and not by a slide or a turn."""
    branch = {"act": "branch", "on": "contact", "kind": "none", "go": "open"}
    turn = {"act": "turn", "angle": math.pi / 2}
    for moves, is_open in (
        ([{"act": "mirror"}, turn], False),
        ([{"act": "slide", "length": 0.2}], False),
        ([{"act": "mirror"}, {"act": "advance", "distance": 0.2}], True),
    ):
        s = hall(stage("a", RUN, *moves, branch, HALT), stage("open", {"act": "declare"}, HALT))
        assert follow(s, 0.5, 1.0, 80).memory[DECLARED] == is_open


def test_a_departure_in_the_open_refers_to_the_last_surface() -> None:
    """Out in the open a pusher departs by the normal of the surface it touched last."""
    s = hall(
        stage("a", RUN, {"act": "turn", "angle": math.pi}, {"act": "advance", "distance": 0.5},
              {"act": "depart", "angle": math.radians(30), "side": "left"}, RUN, HALT)
    )  # fmt: skip
    path = follow(s, 1.0, 1.0, 90)
    assert path.names == ["top", "", "bottom"]
    assert path.hits[2, 2] == pytest.approx(math.radians(-90 + 30), abs=ROUNDING)


# ---- slide --------------------------------------------------------------------------------------------------------

# heading in degrees, wall, direction of the slide along it
SLIDES = (
    (-60, "bottom", (1, 0)),
    (-120, "bottom", (-1, 0)),
    (70, "top", (1, 0)),
    (110, "top", (-1, 0)),
    (160, "near end", (0, 1)),
    (200, "near end", (0, -1)),
    (10, "rear", (0, 1)),
    (-10, "rear", (0, -1)),
)


@pytest.mark.parametrize(("degrees", "wall", "direction"), SLIDES)
@pytest.mark.parametrize("measure", ["length", "time"])
def test_slide_onward(degrees: float, wall: str, direction: tuple[int, int], measure: str) -> None:
    """A pusher slides along the wall it has met, onward, at the part of its speed along it, and keeps its heading."""
    amount = 0.05 if measure == "length" else 0.2
    path = follow(hall(stage("a", RUN, {"act": "slide", measure: amount}, HALT)), 1.5, 1.0, degrees)
    assert path.names == [wall, ""]
    a = math.radians(degrees)
    pace = SPEED * (math.cos(a) * direction[0] + math.sin(a) * direction[1])
    assert pace > 0.0
    length, time = (amount, amount / pace) if measure == "length" else (amount * pace, amount)
    assert path.hits[1, :2] - path.hits[0, :2] == near(length * direction[0], length * direction[1])
    assert path.hits[1, 4:] == near(length, time)
    assert math.remainder(path.hits[1, 2] - a, math.tau) == pytest.approx(0.0, abs=ROUNDING)


def test_slide_into_a_corner() -> None:
    """A slide that is longer than the wall ends at the next wall, which is then the one in touch."""
    for measure in ({"length": 5.0}, {"time": 100.0}):
        s = hall(stage("a", RUN, {"act": "slide", **measure}, {"act": "depart", "angle": 0.0}, RUN, HALT))
        path = follow(s, 1.0, 1.0, -135)
        assert path.names == ["bottom", "near end", "far end"]
        assert path.hits[1, :2] == near(R, R)
        assert path.hits[1, 5] == pytest.approx(path.hits[1, 4] / (SPEED * math.sqrt(0.5)), abs=ROUNDING)
        assert path.hits[2, 1] == pytest.approx(R, abs=ROUNDING)  # straight away from the near end


def test_slide_from_a_corner_into_the_next_wall_is_a_bump_at_once() -> None:
    """In a corner a slide towards the other wall has no way to go and ends with a bump into it."""
    s = hall(stage("a", RUN, {"act": "slide", "length": 5.0}, {"act": "slide", "length": 1.0}, HALT))
    path = follow(s, 1.0, 1.0, -135)
    assert path.names == ["bottom", "near end", "bottom"]  # then along the near end, downward
    assert path.hits[2, 4] == 0.0


def test_slide_goes_straight_on_past_the_end_of_its_surface() -> None:
    """A slide along a face goes on in its direction beyond the face's end, not stopped by the corner there."""
    path = follow(hall(stage("a", RUN, {"act": "slide", "length": 0.7}, HALT)), 1.5, 1.0, 10)
    at_face = 1.0 + 0.9 * math.tan(math.radians(10))
    assert path.names == ["rear", ""]
    assert path.hits[1, :2] == near(2.5 - R, at_face + 0.7)  # the face ends at y = 1.2


def test_slide_past_a_corner_in_the_way_stops_there() -> None:
    """What sticks out beside the wall stops a slide as it stops a run."""
    post = [[1.8, 0.0], [2.0, 0.0], [2.0, 0.3], [1.8, 0.3]]
    path = follow(hall(stage("a", RUN, {"act": "slide", "length": 2.0}, HALT), posts=[post]), 0.5, 0.6, -45)
    assert path.names == ["wall 1", "post 1 side 4"]
    assert path.hits[1, :2] == near(1.8 - R, R)


@pytest.mark.parametrize("degrees", [0.0, 90.0, -90.0, 180.0])
@pytest.mark.parametrize("off", [0.0, 1e-15, -1e-15, 1e-11])
def test_pressing_straight_on_does_not_slide(degrees: float, off: float) -> None:
    """Squarely against a surface there is no way onward: a length ends at once, a time is waited for."""
    for measure, waits in (({"length": 0.3}, 0.0), ({"time": 3.0}, 3.0)):
        s = hall(stage("a", RUN, {"act": "slide", **measure}, HALT))
        path = follow(s, 1.0, 1.0, degrees + math.degrees(off))
        assert path.names[1] == ""
        assert path.hits[1, 4:].tolist() == [0.0, waits]


def test_a_flat_slide_is_slow() -> None:
    """A hair's breadth off the normal a pusher slides, as slowly as the part of its speed along the surface."""
    off = 1e-7
    path = follow(hall(stage("a", RUN, {"act": "slide", "length": 0.3}, HALT)), 1.0, 1.0, 90 - math.degrees(off))
    assert path.hits[1, 4] == pytest.approx(0.3, abs=ROUNDING)
    assert path.hits[1, 5] == pytest.approx(0.3 / (SPEED * math.sin(off)), rel=FLAT_LEG)


def test_nothing_to_slide_along() -> None:
    """In the open a slide goes nowhere: a length ends at once, a time is waited for."""
    for measure, waits in (({"length": 0.3}, 0.0), ({"time": 3.0}, 3.0)):
        s = hall(stage("a", {"act": "advance", "distance": 0.2}, {"act": "slide", **measure}, HALT))
        path = follow(s, 1.0, 1.0, 30)
        assert path.names == ["", ""]
        assert path.hits[1, 4:].tolist() == [0.0, waits]


def test_slide_along_a_corner_starts_along_its_tangent() -> None:
    """In touch with a corner the surface is the circle there, and a slide leaves along the tangent."""
    s = hall(stage("a", RUN, {"act": "slide", "length": 0.2}, HALT))
    path = follow(s, 1.5, 0.75, 0)  # meets the lower rear corner at (2.5, 0.8) half a radius below it
    assert path.names == ["lower rear corner", ""]
    sine = 0.5  # of the angle between tangent and heading: the normal points 30 deg below backwards
    assert path.hits[1, :2] - path.hits[0, :2] == near(0.2 * sine, -0.2 * math.sqrt(1 - sine**2))
    assert path.hits[1, 5] == pytest.approx(0.2 / (SPEED * sine), abs=ROUNDING)


# ---- gauge and sight ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("maximum", "resolution", "reading"),
    [(5.0, 0.0, 1.17), (1.0, 0.0, 1.0), (5.0, 0.1, 1.2), (5.0, 0.25, 1.25), (5.0, 0.4, 1.2), (5.0, 3.0, 0.0),
     (1.0, 0.3, 0.9), (5.0, 2.0, 2.0)],
)  # fmt: skip
def test_gauge(maximum: float, resolution: float, reading: float) -> None:
    """A gauge reads the clear run ahead of the pusher, at most its maximum, to the nearest step."""
    act = {"act": "gauge", "maximum": maximum, "resolution": resolution}
    path = follow(hall(stage("a", act, HALT)), 2.4 - 1.17, 1.0, 0)
    assert len(path.hits) == 0  # it takes no time and no way
    assert path.notes[RANGE] == pytest.approx(reading, abs=ROUNDING)


def test_gauge_looks_along_the_present_heading_from_where_the_pusher_is() -> None:
    """A range is that of the pusher's own disc after the turns before it, and 0 against the wall it leans on."""
    s = hall(stage("a", RUN, {"act": "gauge", "maximum": 9}, {"act": "branch", "on": "range", "below": 0.01, "go": "b"},
                   HALT),
             stage("b", {"act": "turn", "angle": math.pi}, {"act": "gauge", "maximum": 9}, HALT))  # fmt: skip
    path = follow(s, 0.5, 0.3, 90)
    assert path.notes[RANGE] == pytest.approx(2 - 2 * R, abs=ROUNDING)
    beside = hall(stage("a", {"act": "gauge", "maximum": 9}, HALT))
    depth = math.sqrt(R**2 - 0.05**2)  # along the lower edge of the block the disc meets the corner
    assert follow(beside, 0.5, 0.75, 0).notes[RANGE] == pytest.approx(2.0 - depth, abs=ROUNDING)
    assert follow(beside, 0.5, 0.69, 0).notes[RANGE] == pytest.approx(3.4, abs=ROUNDING)


# where a pusher stands, its heading, half of the cone, the face, whether it is seen
LOOKS: list[tuple[float, float, float, float, str, bool]] = [
    (1.5, 1.0, 0, 0, "rear", True),
    (1.5, 1.0, 0, 0, "front", False),
    (3.4, 1.0, 180, 0, "front", True),
    (3.4, 1.0, 180, 90, "rear", False),  # behind the block
    (1.5, 1.0, 90, 0, "rear", False),
    (1.5, 1.0, 90, 80, "rear", True),
    (1.5, 1.0, 90, 60, "rear", False),
    (1.5, 1.0, -90, 80, "rear", True),
    (1.5, 1.0, 180, 170, "rear", True),  # nearly all round
    (1.5, 1.0, 180, 160, "rear", False),
    (1.5, 1.5, 0, 0, "rear", False),
    (1.5, 1.5, 0, 30, "rear", True),
    (1.5, 1.5, 0, 10, "rear", False),
    (1.5, 0.75, 0, 0, "rear", False),  # the disc would meet the corner
    (1.5, 1.0, 0, 0, "far end", False),  # the block stands before it
    (1.5, 0.5, 0, 0, "far end", True),
]


@pytest.mark.parametrize(("x", "y", "heading", "half_angle", "face", "is_seen"), LOOKS)
def test_sight(x: float, y: float, heading: float, half_angle: float, face: str, is_seen: bool) -> None:
    """A face is seen if a ray within the cone meets it first."""
    look = {"act": "sight", "face": face, "half_angle": math.radians(half_angle)}
    path = follow(hall(stage("a", look, HALT)), x, y, heading)
    assert len(path.hits) == 0
    assert path.memory[SEEN] == is_seen


@pytest.mark.parametrize(
    ("y", "straight", "aside"), [(1.0, False, False), (1.15, False, True), (1.19, False, True), (0.79, True, True)]
)
def test_something_between_hides_a_face(y: float, straight: bool, aside: bool) -> None:
    """A post before the rear face hides it where a pusher would bump into the post, unless it looks past the post."""
    look = {"act": "sight", "face": "rear"}
    wide_look = look | {"half_angle": math.radians(20)}
    wide = {"width": 1.0}
    for act, is_seen in ((look, straight), (wide_look, aside)):
        assert follow(hall(stage("a", act, HALT), block=wide), 0.5, y, 0).memory[SEEN] == 1
        assert follow(hall(stage("a", act, HALT), block=wide, posts=[POST]), 0.5, y, 0).memory[SEEN] == is_seen


def test_a_look_forgets_the_one_before() -> None:
    """The last look counts, whatever was seen before."""
    look = {"act": "sight", "face": "rear"}
    turn = {"act": "turn", "angle": math.pi / 2}
    assert follow(hall(stage("a", look, turn, look, HALT)), 1.5, 1.0, 0).memory[SEEN] == 0
    assert follow(hall(stage("a", look, turn, look, HALT)), 1.5, 1.0, -90).memory[SEEN] == 1


# ---- whole routines -----------------------------------------------------------------------------------------------


def test_feeling_along_a_wall() -> None:
    """Slide, look ahead and branch work together: along the wall in steps until the end is near, then straight off."""
    s = hall(
        stage("reach", RUN, then="creep"),
        stage("creep", {"act": "slide", "length": 0.5}, {"act": "tally", "counter": "steps", "add": 1},
              {"act": "turn", "angle": math.radians(30)}, {"act": "gauge", "maximum": 9},
              {"act": "turn", "angle": math.radians(-30)},
              {"act": "branch", "on": "range", "below": 0.6, "go": "leave"}),
        stage("leave", {"act": "depart", "angle": 0.0}, RUN, HALT),
    )  # fmt: skip
    path = follow(s, 0.5, 0.5, -30)
    first = 0.5 + (0.5 - R) / math.tan(math.radians(30))
    n_steps = math.ceil((3.9 - 0.6 - first) / 0.5)
    assert path.names == ["bottom", *[""] * n_steps, "top"]
    assert path.hits[-1, 0] == pytest.approx(first + 0.5 * n_steps, abs=ROUNDING)
    assert path.memory[FIRST_COUNTER] == n_steps


def test_a_lap_with_legs_that_end_in_the_open() -> None:
    """A lap of measured legs closes, is written down leg by leg, and keeps a band of headings on each of them."""
    s = hall(
        stage("a", RUN, {"act": "depart", "angle": 0.0}, {"act": "advance", "distance": 0.7},
              {"act": "turn", "angle": math.pi}),
    )  # fmt: skip
    [lap], capture = find_laps(
        s.model_copy(update={"start": type(s.start).model_validate({"placed": [{"x": 1.0, "y": 1.0, "heading": 0}]})})
    )
    assert capture.captured == 1.0
    assert lap.surfaces == ("rear", IN_THE_OPEN)
    assert lap.length_m == pytest.approx(1.4, abs=ROUNDING)
    assert lap.time_s == pytest.approx(1.4 / SPEED, abs=ROUNDING)
    assert lap.hits[:, 0] == near(2.4, 1.7)
    assert sorted(abs(m) for m in lap.multipliers) == near(0.0, 1.0)  # any height is as good
    out, back = lap.leg_bands_rad
    assert out == pytest.approx((-math.pi / 2, math.pi / 2), abs=EDGE)  # half a turn leads back whence it came
    assert back == pytest.approx((-math.atan(2 / 7), math.atan(2 / 7)), abs=EDGE)  # the face ends 0.2 m from its middle


def test_a_lap_with_a_slide_has_bands() -> None:
    """On the slide of a lap only an error that turns it round is lost; the length does not depend on the heading."""
    up, slide, across = math.radians(5), 0.1, 2.3  # arrival at the face, way along it, from the face to the end
    down = math.atan(math.tan(up) + slide / across)  # so that the lap closes
    s = hall(
        stage("a", RUN, {"act": "branch", "on": "contact", "kind": "block", "go": "b"},
              {"act": "depart", "angle": up, "side": "left"}),
        stage("b", {"act": "slide", "length": slide}, {"act": "depart", "angle": down, "side": "left"}, then="a"),
        block={"width": 1.0},
    )  # fmt: skip
    first = 0.6  # where it arrives at the face, which begins at 0.5 m: a slide down would lead off it
    start = {"x": 2.4 - 0.1, "y": first - 0.1 * math.tan(up), "heading": up}
    [lap], _ = find_laps(s.model_copy(update={"start": type(s.start).model_validate({"placed": [start]})}))
    assert lap.surfaces == ("rear", IN_THE_OPEN, "near end")
    assert lap.hits[:, 1] == near(first, first + slide, first - across * math.tan(up))
    assert lap.hits[0, 2:] == near(up, up)  # it slides with the heading of its arrival
    assert sorted(abs(m) for m in lap.multipliers) == near(0.0, 1.0)
    on_slide, *_ = lap.leg_bands_rad
    assert on_slide == pytest.approx((-up, math.pi - up), abs=EDGE)


# ---- what a pusher remembers, and laps ----------------------------------------------------------------------------


def fate(s: Scenario, x: float, y: float, degrees: float, budget: int = 600) -> tuple[Fate, NDArray[np.float64]]:
    """Where a start ends, and its notes then."""
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    end = settle(
        boundary_of(s), compile_routine(s.routine, surface_names(s)), EXACT, stream_keys(0, 1)[0], SPEED,
        x, y, math.radians(degrees), memory, notes, 0, math.radians(degrees) + math.pi, budget,
    )  # fmt: skip
    return Fate(end.fate), notes


BACK_AND_FORTH: list[dict[str, Any]] = [RUN, {"act": "depart", "angle": 0.0}]  # a lap of 2 x 2.3 m in 9.2 s


def test_a_counter_that_will_end_a_lap_is_waited_for() -> None:
    """While bumps are counted towards a branch, going round the same way is no lap; when it is past, it is one."""
    count = {"act": "tally", "counter": "bumps", "add": 1}
    for at_least, halts in ((50, True), (5, True)):
        branch = {"act": "branch", "on": "counter", "counter": "bumps", "at_least": at_least, "go": "end"}
        s = hall(stage("a", *BACK_AND_FORTH, count, branch), stage("end", HALT))
        assert (fate(s, 1.0, 1.0, 0)[0] == Fate.HALTED) == halts
    never = {"act": "branch", "on": "counter", "counter": "other", "at_least": 5, "go": "end"}
    s = hall(stage("a", *BACK_AND_FORTH, count, never), stage("end", HALT))
    assert fate(s, 1.0, 1.0, 0)[0] == Fate.LOCKED  # what nobody asks for does not matter
    onward = {"act": "branch", "on": "counter", "counter": "bumps", "at_least": 5, "go": "a"}
    s = hall(stage("a", *BACK_AND_FORTH, count, onward))
    assert fate(s, 1.0, 1.0, 0)[0] == Fate.LOCKED  # once counted far enough, it is always far enough
    down = {"act": "tally", "counter": "bumps", "add": -1}
    s = hall(stage("a", *BACK_AND_FORTH, down, onward))
    assert fate(s, 1.0, 1.0, 0)[0] == Fate.UNDECIDED  # it will never be the same again


def test_a_clock_that_will_end_a_lap_is_waited_for() -> None:
    """While a stage's clock runs towards a branch, going round is no lap; with a stage entered anew each lap it is."""
    late = {"act": "branch", "on": "time", "after": 100.0, "go": "end"}
    s = hall(stage("a", *BACK_AND_FORTH, late), stage("end", HALT))
    assert fate(s, 1.0, 1.0, 0)[0] == Fate.HALTED
    s = hall(stage("a", *BACK_AND_FORTH, late, then="b"), stage("b", *BACK_AND_FORTH, then="a"), stage("end", HALT))
    assert fate(s, 1.0, 1.0, 0)[0] == Fate.LOCKED


def test_the_clock_at_a_lock_counts_from_then() -> None:
    """At a lock the notes say how long ago the stage was entered, so that the lap can be followed from there."""
    late = {"act": "branch", "on": "time", "after": 100.0, "go": "end"}
    s = hall(stage("a", *BACK_AND_FORTH, late, then="b"), stage("b", *BACK_AND_FORTH, then="a"), stage("end", HALT))
    found, notes = fate(s, 1.0, 1.0, 0)
    assert found == Fate.LOCKED
    assert -notes[STAGE_SINCE] == pytest.approx(2.3 / SPEED, abs=ROUNDING)  # entered at the other end


def test_a_lap_whose_routine_looks_at_the_clock_is_followed_with_it() -> None:
    """A lap in which a clock branches is traced with the clock as it stands, so that it closes as it was found."""
    quick = {"act": "branch", "on": "time", "after": 3.0, "go": "b"}
    s = hall(
        stage("a", RUN, {"act": "depart", "angle": 0.0}, quick, {"act": "halt"}),
        stage("b", RUN, {"act": "depart", "angle": 0.0}, then="a"),
    )
    start = type(s.start).model_validate({"placed": [{"x": 0.2, "y": 1.0, "heading": 0}]})
    [lap], _ = find_laps(s.model_copy(update={"start": start}))
    assert lap.surfaces == ("rear", "near end")
    assert lap.time_s == pytest.approx(2 * 2.3 / SPEED, abs=ROUNDING)


def test_a_leg_by_itself() -> None:
    """A single leg says what the turns before it do to the heading: a mirror reverses it and adds the normal twice."""
    s = hall(stage("a", {"act": "mirror"}, {"act": "turn", "angle": 0.2}, RUN))
    memory, notes = np.zeros(MEMORY, dtype=np.int64), np.zeros(NOTES)
    leg = leg_from(
        boundary_of(s), compile_routine(s.routine), EXACT, stream_keys(0, 1)[0], SPEED, memory, notes,
        1.0, R, -0.7, int(Contact.WALL), math.pi / 2,
    )  # fmt: skip
    assert (leg.by_heading, leg.by_normal) == (-1.0, 2.0)
    assert math.remainder(leg.heading - 0.9, math.tau) == pytest.approx(0.0, abs=ROUNDING)
    assert leg.time == pytest.approx(leg.run / SPEED)
    assert surface_names(s)[leg.surface] == "top"
