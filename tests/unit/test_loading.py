"""Reading scenario files: what is accepted, and what is said about what is wrong."""

from __future__ import annotations

import copy
import json
import math
import pickle
import tomllib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from swarmpush.demos import demo
from swarmpush.loading import MAX_FILE_BYTES, from_tables, load, loads
from swarmpush.problems import ScenarioError
from swarmpush.scenario import Scenario

DEMO = demo("service_passage")
TEXT = DEMO.read_text(encoding="utf-8")
Tables = dict[str, Any]


@pytest.fixture
def tables() -> Tables:
    return tomllib.loads(TEXT)


def problems(tables: Tables) -> dict[str, str]:
    """The problems of a scenario that must have some, by key."""
    with pytest.raises(ScenarioError) as caught:
        from_tables(tables)
    found = {problem.key: problem.sentence for problem in caught.value.problems}
    assert len(found) == len(caught.value.problems)
    return found


def refusal(path: Path) -> str:
    with pytest.raises(ScenarioError) as caught:
        load(path)
    assert len(caught.value.problems) == 1
    assert str(path) in str(caught.value)
    return caught.value.problems[0].sentence


# ---- what is accepted ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("path", sorted(DEMO.parent.glob("*.toml")), ids=lambda path: path.stem)
def test_demos_load(path: Path) -> None:
    """Every demo scenario is valid."""
    assert load(path).format == 1


def test_quantities_become_si() -> None:
    """Values come out in SI units, and defaults fill what the file leaves out."""
    s = loads(TEXT)
    assert (s.pushers.radius, s.pushers.bump_threshold, s.pushers.latency) == (0.04, 0.002, 0.04)
    assert s.pushers.bumper_arc == pytest.approx(math.pi)
    assert s.errors.missed_bumps == pytest.approx(0.02)
    assert s.errors.false_bumps == 0.0
    assert s.fluid is None


def test_units_do_not_matter(tables: Tables) -> None:
    """The same scenario in other units has the same values and the same hash."""
    other = copy.deepcopy(tables)
    other["pushers"]["radius"] = "4 cm"
    other["channel"]["length"] = 3
    other["errors"]["missed_bumps"] = 0.02
    assert from_tables(other) == from_tables(tables)
    assert from_tables(other).digest() == from_tables(tables).digest()


def test_the_hash_tells_scenarios_apart() -> None:
    """A change of any one value changes the hash."""
    s = loads(TEXT)
    changed = [s.replace(pushers={"count": 5}), s.replace(trial={"seed": 2}), s.replace(channel={"length": 2.9})]
    assert len({s.digest(), *(c.digest() for c in changed)}) == 4


def test_line_ends_and_byte_order_marks_do_not_matter(tmp_path: Path) -> None:
    """A file saved by another system's editor is the same scenario."""
    path = tmp_path / "rig.toml"
    path.write_bytes(b"\xef\xbb\xbf" + TEXT.replace("\n", "\r\n").encode())
    assert load(path) == loads(TEXT)


def test_a_scenario_is_frozen() -> None:
    """No value of a scenario can be changed in place."""
    with pytest.raises(ValueError, match="frozen"):
        loads(TEXT).pushers.count = 3


def test_only_a_turn_rate_may_be_infinite(tables: Tables) -> None:
    """Turning at once is a choice; anything else infinite is an error."""
    tables["pushers"]["turn_rate"] = math.inf
    assert from_tables(tables).pushers.turn_rate == math.inf
    tables["pushers"]["bump_threshold"] = math.inf
    tables["block"]["offset"] = -math.inf
    assert problems(tables) == {
        "pushers.bump_threshold": "inf given; must be finite",
        "block.offset": "-inf given; must be finite",
    }


# ---- files ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "complaint"),
    [
        (b"", "empty"),
        (b" \n\t\n", "empty"),
        (b"\x7fELF\x02\x01\x00\x80\xff\xfe", "byte 7 is not UTF-8"),
        (b"format = 1\x00", "not valid TOML"),
        (b"#" * (MAX_FILE_BYTES + 1), "larger than 1000 kB"),
        (TEXT[: TEXT.index('"0.32 m"') + 4].encode(), "not valid TOML"),
        (b"format = 1\nformat = 1\n", "not valid TOML"),
        (b"x = " + b"[" * 50_000, "nested too deeply"),
        (b"x = " + b"9" * 5000, "number too long"),
    ],
    ids=["empty", "blank", "binary", "null", "huge", "truncated", "twice", "deep", "long number"],
)
def test_refuses_files(tmp_path: Path, content: bytes, complaint: str) -> None:
    """A file that is no TOML text is one clear error that names the file."""
    path = tmp_path / "rig.toml"
    path.write_bytes(content)
    assert complaint in refusal(path)


def test_refuses_a_missing_file(tmp_path: Path) -> None:
    """A path that leads nowhere is named."""
    assert refusal(tmp_path / "rig.toml") == "no such file"


def test_refuses_a_folder(tmp_path: Path) -> None:
    """A folder is called one, and nothing else is said."""
    assert refusal(tmp_path) == "this is a folder; name a scenario file (.toml)"


@pytest.mark.parametrize("name", ["a\x00b", "a" * 5000], ids=["null", "long"])
def test_refuses_impossible_names(name: str) -> None:
    """A name that no file can have is refused like a file that cannot be read."""
    assert "cannot be read" in refusal(Path(name))


def test_a_file_cut_between_two_tables_misses_the_rest() -> None:
    """Valid TOML that ends too early is refused with every missing table named."""
    with pytest.raises(ScenarioError) as caught:
        loads(TEXT[: TEXT.index("[pushers]")])
    assert [p.key for p in caught.value.problems if p.sentence == "missing"] == [
        "pushers",
        "contacts",
        "routine",
        "goal",
    ]


@pytest.mark.parametrize("dotted", ["a", "channel.length", "routine.stages", "start.placed", "about.name"])
def test_deep_tables_are_an_error_like_others(dotted: str) -> None:
    """Tables nested deeper than Python's stack are refused by name."""
    deep = dotted + ".a" * 5000 + " = 1\n"
    with pytest.raises(ScenarioError, match=dotted):
        loads(deep + "format = 1\n")


# ---- values --------------------------------------------------------------------------------------------------


def test_everything_wrong_is_said_at_once(tables: Tables) -> None:
    """Wrong units, ranges, words, keys, and what does not fit together are all reported from one reading."""
    tables["pushers"] |= {"radius": "200 mm", "mass": "3 m", "raduis": 1}
    tables["contacts"]["pusher_wall"]["restitution"] = 1.5
    tables["block"] |= {"width": "0.4 m"}
    tables["start"]["region"] = "inside"
    tables["trial"]["replicates"] = 1
    del tables["goal"]["time_limit"]
    assert set(problems(tables)) == {
        "pushers.radius",
        "pushers.mass",
        "pushers.raduis",
        "contacts.pusher_wall.restitution",
        "block.width",
        "start.region",
        "trial.replicates",
        "goal.time_limit",
    }


def test_the_message_names_the_file_and_counts(tables: Tables) -> None:
    """The error's text begins with the file and lists one problem a line."""
    tables["pushers"]["count"] = 0
    tables["block"]["rear_at"] = "-1 m"
    with pytest.raises(ScenarioError) as caught:
        from_tables(tables, "rig.toml")
    first, *rest = str(caught.value).splitlines()
    assert first == "rig.toml: 2 problems"
    assert rest == [
        '  block.rear_at: "-1 m" given; must be at least 0 m',
        "  pushers.count: 0 given; must be at least 1 and at most 5000",
    ]


def test_the_error_crosses_processes(tables: Tables) -> None:
    """A worker's error arrives with its problems."""
    tables["pushers"]["count"] = 0
    with pytest.raises(ScenarioError) as caught:
        from_tables(tables)
    again = pickle.loads(pickle.dumps(caught.value))
    assert (str(again), again.problems) == (str(caught.value), caught.value.problems)


@pytest.mark.parametrize(
    ("key", "value", "sentence"),
    [
        ("pushers.radius", "-40 mm", '"-40 mm" given; must be at least 1 nm and at most 100 m'),
        ("pushers.radius", "40 kg", "\"40 kg\" given; the unit 'kg' does not measure what is asked for here (m)"),
        ("pushers.radius", "40", '"40" given; not a number with a unit; write for example "40 mm"'),
        ("pushers.radius", True, "true given; expected a number or a string with a unit (m), not true or false"),
        ("pushers.radius", math.nan, "nan given; not a number (nan)"),
        ("pushers.turn_rate", math.nan, "nan given; not a number (nan)"),
        ("pushers.turn_rate", "2 Hz", "\"2 Hz\" given; the unit 'Hz' does not measure what is asked for here (rad/s)"),
        ("pushers.bumper_arc", "400 deg", '"400 deg" given; must be more than 0 deg and at most 360 deg'),
        ("pushers.count", 2.5, "2.5 given; must be a whole number"),
        ("pushers.count", True, "true given; must be a whole number"),
        ("pushers.pass_through", "yes", '"yes" given; must be true or false'),
        ("contacts.pusher_wall.restitution", 1.2, "1.2 given; must be at least 0 and at most 1"),
        ("errors.missed_bumps", "100 %", '"100 %" given; must be at least 0 and less than 1'),
        ("block.yaw", "loose", '"loose" given; allowed: "free" or "held"'),
        ("about.name", 5, "5 given; must be text"),
        ("channel", 3, "3 given; must be a table"),
        ("start.placed", 3, "3 given; must be a list"),
        ("format", 2, "2 given; allowed: 1"),
    ],
)
def test_says_what_is_allowed(tables: Tables, key: str, value: object, sentence: str) -> None:
    """An error names the key, the value as written, and what is allowed."""
    *way, last = key.split(".")
    table = tables
    for part in way:
        table = table[part]
    table[last] = value
    assert problems(tables)[key] == sentence


def test_survives_numbers_that_python_will_not_write(tables: Tables) -> None:
    """A hexadecimal number of thousands of digits is refused like any other that is too large."""
    tables["pushers"]["count"] = 16**5000
    assert problems(tables)["pushers.count"] == "a huge number given; must be at least 1 and at most 5000"


def test_placed_bars_keep_clear_with_their_corners(tables: Tables) -> None:
    """A bar that only turned the other way would be clear of wall, block and neighbour is refused."""
    tables["channel"] |= {"length": 3.0, "width": 0.6}
    tables["block"] |= {"length": 0.2, "width": 0.2, "rear_at": 1.0}
    tables["goal"]["travel"] = 0.1
    tables["pushers"] |= {"count": 4, "radius": 0.02, "nose": 0.2, "trunk": 0.0, "turn_rate": 1.0}
    places = [(0.2, 0.05), (0.95, 0.3), (0.5, 0.4), (0.6, 0.4)]
    across = [math.pi / 2, 0.0, 0.0, 0.0]  # heading at which each is clear
    starts = [{"x": x, "y": y, "heading": heading} for (x, y), heading in zip(places, across, strict=True)]
    tables["start"] = {"placed": starts}
    assert from_tables(tables).pushers.count == 4
    for start in starts:
        start["heading"] += math.pi / 2
    assert problems(tables) == {
        "start.placed[1]": "(0.2, 0.05) m puts the pusher into a wall; its outline before rounding must keep 20 mm "
        "from every wall",
        "start.placed[2]": "(0.95, 0.3) m puts the pusher into the block",
        "start.placed[4]": "overlaps start.placed[3]",
    }


BAR = {"nose": "6 cm", "trunk": "4 cm"}
IN_TURN = 'only a free heading has it; give heading = "free" as well'
AT_ONCE = 'a free heading cannot turn at once; give a rate, or heading = "held"'


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({"pushers": {"heading": "free"}}, {"pushers.turn_rate": AT_ONCE}),
        ({"pushers": BAR}, {"pushers.turn_rate": "a bar cannot turn at once, it would stand in a wall; give a rate"}),
        ({"pushers": {"turn_drag": 1.0}}, {"pushers.turn_drag": IN_TURN}),
        ({"pushers": {"contact_arm": "-1 cm"}}, {"pushers.contact_arm": IN_TURN}),
        (
            {"pushers": {"nose": 0.3, "trunk": 0.4, "turn_rate": 1.0}},
            {"pushers.nose": "a bar (580 mm from corner to corner) cannot turn in the channel"},
        ),
        (
            {"pushers": {"trunk": 0.5, "turn_rate": 1.0}},
            {"pushers.trunk": "a bar (580 mm from corner to corner) cannot turn in the channel"},
        ),
        (
            {"block": {"centre_of_mass": [0.25, 0.0]}},
            {
                "block.centre_of_mass": "(0.25, 0) m is not under the block; x runs from 0 to 0.2 m, "
                "y from -0.1 to 0.1 m"
            },
        ),
        (
            {"block": {"centre_of_friction": ["10 cm", "-12 cm"]}},
            {
                "block.centre_of_friction": "(0.1, -0.12) m is not under the block; x runs from 0 to 0.2 m, "
                "y from -0.1 to 0.1 m"
            },
        ),
    ],
)
def test_refuses_bodies_that_cannot_be(tables: Tables, changes: Tables, expected: dict[str, str]) -> None:
    """Free headings, bars and centres that do not fit the rest are refused, each with a way out."""
    plain = {
        "channel": {"width": 0.55},
        "block": {"length": 0.2, "width": 0.2},
        "pushers": {"count": 2, "radius": 0.04},
    }
    for table in (plain, {"pushers": {"turn_rate": math.inf}}, changes):
        for name, keys in table.items():
            tables[name] |= keys
    assert problems(tables) == expected


@pytest.mark.parametrize("name", ["slope", "cross_slope"])
def test_a_slope_needs_a_floor(tables: Tables, name: str) -> None:
    """In a liquid alone the weight that pulls down a slope is not known."""
    tables["channel"][name] = "2 deg"
    del tables["floor"]
    tables["fluid"] = {"block_drag": 1.0, "block_yaw_drag": 1.0}
    assert problems(tables) == {f"channel.{name}": "needs a [floor]; a liquid carries an unknown part of the weight"}


@pytest.mark.parametrize(
    ("rear_at", "offset", "sentence"),
    [
        (1.1, 0.0, "stands in another block or in a post; change its rear_at or offset"),
        (2.9, 0.0, "does not lie within the channel at its start; change its rear_at or offset"),
        (1.3, 0.3, "does not lie within the channel at its start; change its rear_at or offset"),
    ],
)
def test_refuses_a_train_that_does_not_fit(tables: Tables, rear_at: float, offset: float, sentence: str) -> None:
    """Further blocks stand in the channel, clear of each other."""
    block = {"length": 0.2, "width": 0.2, "mass": 1.0, "rear_at": 1.0}
    tables["channel"] |= {"length": 3.0, "width": 0.6}
    tables["block"] |= block
    tables["pushers"]["count"] = 2
    tables["goal"]["travel"] = 0.1
    tables["train"] = [block | {"rear_at": rear_at, "offset": offset}]
    assert problems(tables) == {"train[1]": sentence}
    tables["train"] = [block | {"rear_at": 1.2, "centre_of_mass": [0.1, 0.2]}]
    assert list(problems(tables)) == ["train[1].centre_of_mass"]
    tables["train"] = [block | {"rear_at": 1.2}]
    assert len(from_tables(tables).blocks) == 2


def test_refuses_a_start_in_a_further_block(tables: Tables) -> None:
    """A pusher placed in a block of the train is refused as one in the first block is."""
    block = {"length": 0.2, "width": 0.2, "mass": 1.0, "rear_at": 1.0}
    tables["channel"] |= {"length": 3.0, "width": 0.6}
    tables["block"] |= block
    tables["goal"]["travel"] = 0.1
    tables["train"] = [block | {"rear_at": 1.5}]
    tables["pushers"]["count"] = 1
    tables["start"] = {"placed": [{"x": 1.6, "y": 0.3, "heading": 0.0}]}
    assert problems(tables) == {"start.placed[1]": "(1.6, 0.3) m puts the pusher into train[1]"}


@pytest.mark.parametrize(
    ("key", "nearest"),
    [
        ("chanel", "channel"),
        ("pushers.radious", "radius"),
        ("contacts.pusher_block.restitutions", "restitution"),
        ("errors.turn_std", "turn_sd"),
    ],
)
def test_names_the_nearest_key(tables: Tables, key: str, nearest: str) -> None:
    """An unknown key is answered with the known key most like it."""
    *way, last = key.split(".")
    table = tables
    for part in way:
        table = table[part]
    table[last] = 1
    assert problems(tables)[key] == f"unknown key; did you mean '{nearest}'?"


@pytest.mark.parametrize("key", ["time", "halt"])
def test_lists_the_known_keys_where_none_is_near(tables: Tables, key: str) -> None:
    """Where no key is near, all known ones are listed, also for a key that is an act's name elsewhere."""
    tables[key] = 1
    assert problems(tables)[key].startswith("unknown key; known here: format, about, channel, block,")


def test_missing_keys_are_explained(tables: Tables) -> None:
    """A missing key is named together with what it means."""
    del tables["block"]["rear_at"]
    assert problems(tables)["block.rear_at"] == "missing (x of the rear face at the start)"


def test_control_characters_are_not_passed_on(tables: Tables) -> None:
    """What a file says cannot steer the terminal that shows the error."""
    tables["\x1b[31m\n"] = 1
    tables["start"]["region"] = "\x1b[31m\n"
    tables["channel"]["length"] = "3 \x1b[31m\n"
    with pytest.raises(ScenarioError) as caught:
        from_tables(tables)
    assert all(line.isprintable() for line in str(caught.value).splitlines())
    assert len(str(caught.value).splitlines()) == 4


# ---- acts ----------------------------------------------------------------------------------------------------

ACTS = "routine.stages[1].acts"


@pytest.mark.parametrize(
    ("position", "act", "key", "sentence"),
    [
        (0, {"act": "runn"}, "[1].act", '"runn" given; allowed: "run", "advance", "slide", "turn", "depart", "mirror"'),
        (0, {}, "[1]", "the key 'act' is missing"),
        (0, {"act": "run", "fast": 1}, "[1].fast", "unknown key; known here: act"),
        (1, {"act": "branch", "on": "mood"}, "[2].on", '"mood" given; allowed: "contact", "counter", "time"'),
        (1, {"act": "branch", "on": "contact", "kind": "block"}, "[2].go", "missing"),
        (1, {"act": "branch", "on": "counter", "at_least": 1, "go": "cross"}, "[2].counter", "missing"),
        (2, {"act": "tally", "add": 1}, "[3].counter", "missing"),
        (2, {"act": "tally", "counter": 3, "add": 1}, "[3].counter", "3 given; must be text"),
        (2, {"act": "tally", "counter": "n"}, "[3]", "give either add (not zero) or set"),
        (4, {"act": "depart", "angle": "15 deg", "sid": "left"}, "[5].sid", "unknown key; did you mean 'side'?"),
        (4, {"act": "depart", "angle": "1 m"}, "[5].angle", "\"1 m\" given; the unit 'm' does not measure"),
        (4, {"act": "turn", "angle": "9 rad"}, "[5].angle", '"9 rad" given; must be at least -360 deg and at most 360'),
        (4, "halt", "[5]", '"halt" given; must be a table'),
    ],
)
def test_acts_are_named_as_written(tables: Tables, position: int, act: object, key: str, sentence: str) -> None:
    """A wrong act is found by stage, position and key as they stand in the file."""
    tables["routine"]["stages"][0]["acts"][position] = act
    found = problems(tables)
    assert list(found) == [ACTS + key]
    assert found[ACTS + key].startswith(sentence)


def test_refuses_a_loop_without_a_run(tables: Tables) -> None:
    """A routine that could go round without time passing is refused as a whole."""
    del tables["routine"]["stages"][0]["acts"][0]
    assert "can go round for ever without a run" in problems(tables)["routine"]


# ---- how the values fit together -----------------------------------------------------------------------------


def set_start(tables: Tables, *placed: tuple[float, float]) -> None:
    tables["pushers"]["count"] = len(placed)
    tables["start"] = {"placed": [{"x": x, "y": y, "heading": 0} for x, y in placed]}


def both_laws(tables: Tables) -> None:
    tables["forecast"] = {"law": "impact", "nudge": "1 mm"}


MISFITS: dict[str, tuple[Callable[[Tables], object], str, str]] = {
    "pusher wider than the channel": (
        lambda t: t["pushers"].update(radius="160 mm"),
        "pushers.radius",
        "a pusher (320 mm across) does not fit the channel (320 mm wide)",
    ),
    "block wider than the channel": (
        lambda t: t["block"].update(width="33 cm"),
        "block.width",
        "the block (330 mm) is wider than the channel (320 mm)",
    ),
    "block in a wall": (
        lambda t: t["block"].update(offset="-11 mm"),
        "block.offset",
        "-11 mm puts the block into a wall; at most 10 mm to either side",
    ),
    "block beyond the end": (
        lambda t: t["block"].update(rear_at="2.8 m"),
        "block.rear_at",
        "the block's front would stand at 3.05 m, beyond the channel's end at 3 m",
    ),
    "goal beyond the end": (
        lambda t: t["goal"].update(travel="1.6 m"),
        "goal.travel",
        "1.6 m is more than the 1.55 m between the block and the channel's end",
    ),
    "nothing resists": (lambda t: t.pop("floor"), "", "neither [floor] nor [fluid] given; say what resists the block"),
    "friction upside down": (
        lambda t: t["floor"].update(kinetic_friction=0.4),
        "floor.kinetic_friction",
        "0.4 is more than static_friction (0.35)",
    ),
    "nudge without its law": (both_laws, "forecast.nudge", 'needed with law = "given", and only then'),
    "law without its nudge": (
        lambda t: t["forecast"].update(law="given"),
        "forecast.nudge",
        'needed with law = "given", and only then',
    ),
    "step too long": (
        lambda t: t.update(numerics={"step": "200 ms"}),
        "numerics.step",
        "in 200 ms it runs more than a quarter of its radius; at most 66.7 ms",
    ),
    "crew too large": (
        lambda t: t["pushers"].update(count=31),
        "pushers.count",
        '31 pushers do not fit the start region "behind"; at most 30',  # 0.4 of 1.2 m x 0.32 m over pi (40 mm)^2
    ),
    "no room behind": (
        lambda t: t["block"].update(rear_at="80 mm"),
        "start.region",
        'no room for a pusher "behind"; move block.rear_at or lengthen the channel',
    ),
    "start in a wall": (
        lambda t: set_start(t, (0.1, 0.16), (0.3, 0.03)),
        "start.placed[2]",
        "(0.3, 0.03) m puts the pusher into a wall; its centre must keep 40 mm from every wall",
    ),
    "start outside": (
        lambda t: set_start(t, (-0.1, 0.16)),
        "start.placed[1]",
        "(-0.1, 0.16) m puts the pusher into a wall; its centre must keep 40 mm from every wall",
    ),
    "start in the block": (
        lambda t: set_start(t, (1.17, 0.16)),
        "start.placed[1]",
        "(1.17, 0.16) m puts the pusher into the block",
    ),
    "start in another pusher": (
        lambda t: set_start(t, (0.1, 0.16), (0.1, 0.10)),
        "start.placed[2]",
        "overlaps start.placed[1]",
    ),
    "starts for another crew": (
        lambda t: (set_start(t, (0.1, 0.16)), t["pushers"].update(count=6)),
        "start.placed",
        "1 pushers placed, but pushers.count = 6",
    ),
}


@pytest.mark.parametrize("name", MISFITS)
def test_refuses_what_does_not_fit(tables: Tables, name: str) -> None:
    """Values that are fine alone and impossible together are refused, with the numbers that clash."""
    change, key, sentence = MISFITS[name]
    change(tables)
    assert problems(tables) == {key: sentence}


@pytest.mark.parametrize("name", MISFITS)
def test_misfits_are_seen_beside_other_errors(tables: Tables, name: str) -> None:
    """What does not fit is reported also when other keys of the file are wrong, missing or unknown."""
    change, key, sentence = MISFITS[name]
    change(tables)
    tables["contacts"]["pusher_wall"]["restitution"] = 2
    tables["contacts"]["unknown"] = {}
    tables["about"] = {}
    others = {"contacts.pusher_wall.restitution", "contacts.unknown", "about.name"}
    found = problems(tables)
    assert found[key] == sentence
    assert found.keys() == {key} | others


def test_a_wrong_value_causes_no_second_complaint(tables: Tables) -> None:
    """Nothing is derived from a value that is wrong itself."""
    tables["channel"]["width"] = "0.1 kg"
    tables["start"]["region"] = "ahed"
    tables["block"]["rear_at"] = "60 mm"
    assert set(problems(tables)) == {"channel.width", "start.region"}


def test_touching_starts_are_admitted(tables: Tables) -> None:
    """Pushers may start in touch with walls, the block and each other."""
    set_start(tables, (1.16, 0.04), (1.16, 0.12), (0.04, 0.28))
    assert from_tables(tables).pushers.count == 3


def test_exact_fits_survive_rounding(tables: Tables) -> None:
    """What fits exactly in decimals is admitted, although 1.1 + 0.3 + 1.5 exceeds 2.9 in binary."""
    tables["channel"] = {"length": 2.9, "width": 0.3}
    tables["pushers"] |= {"radius": 0.1, "count": 1}
    tables["start"] = {"placed": [{"x": 0.1, "y": 0.2, "heading": 0}]}
    tables["block"] |= {"rear_at": 1.1, "length": 0.3, "width": 0.3}
    tables["goal"]["travel"] = 1.5
    assert 1.1 + 0.3 + 1.5 > 2.9
    assert 0.3 - 0.1 < 0.2
    assert from_tables(tables).goal.travel == 1.5


def test_pushers_that_pass_through_may_start_together(tables: Tables) -> None:
    """Where pushers do not touch each other, overlapping starts are no error."""
    set_start(tables, (0.1, 0.16), (0.1, 0.16))
    tables["pushers"]["pass_through"] = True
    assert from_tables(tables).pushers.pass_through


@pytest.mark.parametrize("gap", [0.0, 0.15])
def test_a_train_may_close_the_channel(gap: float, tables: Tables) -> None:
    """Two blocks that no pusher can pass are admitted, although who starts ahead never gets to the first."""
    tables["train"] = [tables["block"] | {"rear_at": 1.45 + gap}]
    assert len(from_tables(tables).blocks) == 2


def test_nobody_starts_in_a_train(tables: Tables) -> None:
    """A pusher that is placed in a further block is refused as one in the first is."""
    tables["train"] = [tables["block"] | {"rear_at": 1.6}]
    set_start(tables, (1.7, 0.16), (0.1, 0.16))
    assert problems(tables) == {"start.placed[1]": "(1.7, 0.16) m puts the pusher into train[1]"}


# ---- the exported schema -------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def validator() -> jsonschema.Draft202012Validator:
    text = json.dumps(Scenario.model_json_schema(), allow_nan=False)  # an editor reads it as strict JSON
    schema = json.loads(text)
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema)


@pytest.mark.parametrize("path", sorted(DEMO.parent.glob("*.toml")), ids=lambda path: path.stem)
def test_the_schema_accepts_the_demos(validator: jsonschema.Draft202012Validator, path: Path) -> None:
    """The exported JSON Schema finds nothing wrong with the demo scenarios."""
    assert list(validator.iter_errors(tomllib.loads(path.read_text(encoding="utf-8")))) == []


def test_the_schema_rejects_what_the_loader_rejects(validator: jsonschema.Draft202012Validator, tables: Tables) -> None:
    """The exported JSON Schema rejects unknown and missing keys, unknown words and values of another type."""
    for change in (
        lambda t: t.update(chanel={}),
        lambda t: t["pushers"].update(raduis=1),
        lambda t: t["routine"]["stages"][0]["acts"][0].update(fast=1),
        lambda t: t["block"].pop("mass"),
        lambda t: t["block"].update(yaw="loose"),
        lambda t: t["pushers"].update(radius=[1]),
        lambda t: t["pushers"].update(count="6"),
    ):
        changed = copy.deepcopy(tables)
        change(changed)
        assert not validator.is_valid(changed)
        assert problems(changed)


def test_the_schema_knows_trains_and_points(validator: jsonschema.Draft202012Validator) -> None:
    """A train is a list of blocks, and a point has two lengths with or without a unit; nothing else passes."""
    tables = tomllib.loads(DEMO.with_name("bristle_tray.toml").read_text(encoding="utf-8"))
    assert validator.is_valid(tables)
    for change in (
        lambda t: t.update(train=t["train"][0]),
        lambda t: t["train"][0].pop("mass"),
        lambda t: t["block"].update(centre_of_mass=["30 mm"]),
        lambda t: t["block"].update(centre_of_mass=["30 mm", "4 mm", "0 mm"]),
        lambda t: t["pushers"].update(heading="loose"),
    ):
        changed = copy.deepcopy(tables)
        change(changed)
        assert not validator.is_valid(changed)
        assert problems(changed)


def test_the_schema_explains(validator: jsonschema.Draft202012Validator) -> None:
    """Quantities carry their unit and an example in the schema, and their own description."""
    radius = validator.schema["$defs"]["Pushers"]["properties"]["radius"]
    length = validator.schema["$defs"]["Block"]["properties"]["length"]
    assert [option["description"] for option in radius["anyOf"]] == ["in m", 'with a unit, e.g. "40 mm"']
    assert length["description"] == "along the channel"
