"""What `plan` adds on demand: laps along a key, pictures, and what a declaration is worth."""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import Any

import pandas as pd
import pytest
from commands import DONE, Outcome, assert_refused, call, contents, edited
from matplotlib.colors import to_rgb
from matplotlib.image import imread

from swarmpush.reporting.palette import PLANNED

NAMES = ("plan", "cycle_map", "basin_map")
WIDTHS = "channel.width=28 cm:40 cm:4"  # the first is narrower than the block


@pytest.fixture(scope="module")
def drawn(short: Path, tmp_path_factory: pytest.TempPathFactory) -> tuple[Outcome, Path]:
    """A plan with all that can be asked for, in a folder of its own choice."""
    home = tmp_path_factory.mktemp("drawn")
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(home)
        outcome = call("plan", short, "--vary", WIDTHS, "--figure", "--json")
    assert outcome.code == DONE, outcome.err
    return outcome, home / "results" / "short-plan"


def test_figures_are_written(drawn: tuple[Outcome, Path]) -> None:
    """All three figures are there as PNG and SVG, none of them empty, beside the tables and the JSON."""
    outcome, folder = drawn
    files = contents(folder)
    pictures = {f"{name}.{kind}" for name in NAMES for kind in ("png", "svg")}
    assert files.keys() == {"plan.json", "cycle_map.parquet", "basin_map.parquet"} | pictures
    for name in NAMES:
        assert files[f"{name}.png"].startswith(b"\x89PNG\r\n")
        pixels = imread(io.BytesIO(files[f"{name}.png"]))[..., :3]
        assert (abs(pixels - to_rgb(PLANNED)).max(axis=-1) < 0.01).sum() > 500  # the lap's colour, not a mere page
        svg = files[f"{name}.svg"].decode()
        assert svg.startswith("<svg")
        assert svg.rstrip().endswith("</svg>")
        assert "rear - top - bottom" in svg
    assert json.loads(files["plan.json"]) == outcome.json()
    named = outcome.json()["files"]
    assert named.pop("folder") == str(Path("results", "short-plan"))
    assert set(named.values()) == files.keys() - {"plan.json"}


def test_the_figures_name_units(drawn: tuple[Outcome, Path]) -> None:
    """The axes say what is drawn and in which unit."""
    _, folder = drawn
    cycle, basin = ((folder / f"{name}.svg").read_text(encoding="utf-8") for name in ("cycle_map", "basin_map"))
    for words in ("channel.width, mm", "across the channel, mm", "its band, deg", "attracts: an error shrinks"):
        assert words in cycle
    for words in ("start across the channel, mm", "heading at the start, deg", "320 mm behind the rear face"):
        assert words in basin


def test_cycle_map_in_json_and_in_a_table(drawn: tuple[Outcome, Path]) -> None:
    """The rows of the cycle map stand in the JSON as in the Parquet table, with the reason where there is no lap."""
    outcome, folder = drawn
    cycle = outcome.json()["cycle_map"]
    assert (cycle["key"], cycle["unit"]) == ("channel.width", "m")
    table = pd.read_parquet(folder / "cycle_map.parquet")
    assert table["channel.width_m"].tolist() == pytest.approx([0.28, 0.32, 0.36, 0.40])
    assert [row["channel.width_m"] for row in cycle["rows"]] == table["channel.width_m"].tolist()
    assert [row["multiplier_1"] for row in cycle["rows"][1:]] == table["multiplier_1"].tolist()[1:]
    assert cycle["rows"][0]["multiplier_1"] is None
    assert "wider than the channel" in cycle["rows"][0]["reason"]


def test_basin_map_in_json_and_in_a_table(drawn: tuple[Outcome, Path]) -> None:
    """The shares in the JSON are those of the table's rows, and add up to all."""
    outcome, folder = drawn
    basin = outcome.json()["basin_map"]
    table = pd.read_parquet(folder / "basin_map.parquet")
    assert basin["starts"] == len(table) > 10_000
    assert basin["fates"] == pytest.approx(
        table["fate"].value_counts(normalize=True).loc[list(basin["fates"])].to_dict()
    )
    assert sum(basin["fates"].values()) == pytest.approx(1.0)
    assert [lap["share"] for lap in basin["laps"]] == [(table["lap"] == 0).mean()]


def test_the_plan_itself_is_as_without(drawn: tuple[Outcome, Path], short: Path) -> None:
    """What is asked for besides changes nothing in the plan."""
    plan = call("plan", short, "--json").json()
    full = drawn[0].json()
    assert {key: full[key] for key in plan} == plan
    assert full.keys() - plan.keys() == {"cycle_map", "basin_map", "files"}


def test_figures_go_to_a_new_folder(short: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without --out figures go to numbered folders, the key being the routine's first angle; the text says where."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "results" / "short-plan").mkdir(parents=True)
    outcome = call("plan", short, "--figure")
    folder = Path("results", "short-plan-2")
    assert outcome.out.splitlines()[-4:] == [
        f"plan: {folder / 'plan.json'}",
        *(f"{name}: {folder / name}.png" for name in NAMES),
    ]
    assert (folder / "basin_map.svg").exists()
    assert "laps along routine.stages[1].acts[5].angle, 7.5 deg to 22.5 deg" in outcome.out
    assert contents(tmp_path / "results" / "short-plan") == {}


def test_a_block_with_nothing_behind_it_has_no_basin_map(tmp_path: Path) -> None:
    """Where no pusher fits behind the block, the other figures are drawn, and it is said that this one is not."""
    scenario = tmp_path / "rig.toml"
    ahead = (('rear_at = "1.2 m"', "rear_at = 0"), ('region = "behind"', 'region = "ahead"'))
    scenario.write_text(edited(*ahead), encoding="utf-8")
    outcome = call("plan", scenario, "--vary", WIDTHS, "--figure", "--out", tmp_path / "plan")
    assert outcome.code == DONE
    assert outcome.err.strip().startswith("no basin map: no pusher has room")
    assert "basin_map" not in outcome.out
    assert contents(tmp_path / "plan").keys() == {
        "plan.json", "cycle_map.parquet", *(f"{name}.{kind}" for name in NAMES[:2] for kind in ("png", "svg"))
    }  # fmt: skip


def test_results_are_not_overwritten(short: Path, tmp_path: Path) -> None:
    """Maps are written into a folder that holds something only by force."""
    (tmp_path / "cycle_map.parquet").write_text("mine")
    assert_refused(call("plan", short, "--vary", WIDTHS, "--out", tmp_path), str(tmp_path), "--force")
    assert contents(tmp_path) == {"cycle_map.parquet": b"mine"}
    assert call("plan", short, "--vary", WIDTHS, "--out", tmp_path, "--force").code == DONE
    assert contents(tmp_path).keys() == {"plan.json", "plan.png", "cycle_map.parquet"}
    assert len(pd.read_parquet(tmp_path / "cycle_map.parquet")) == 4


def test_the_page_tells_of_the_laps(short: Path) -> None:
    """Without --json a sentence tells where along the key a lap attracts, what bounds it, and where there is none."""
    outcome = call("plan", short, "--vary", WIDTHS)
    text = " ".join(outcome.out.split())
    assert "laps along channel.width, 280 mm to 400 mm (number of values, 4 in all)" in text
    assert "rear - top - bottom: attracting at 320 mm to 400 mm (3)" in text
    assert "none at 280 mm (1); at the first: block.width:" in text


@pytest.mark.parametrize(
    ("text", "word"),
    [
        ("channel.with=1:2:3", "channel.width"),
        ("channel.width=1 s:2 s:3", "does not measure"),
        ("channel.width", "KEY=LOW:HIGH:N"),
        ("channel.width=1:2:1", "from 2"),
        ("about.name=1:2:3", "number"),
    ],
)
def test_a_wrong_range_is_refused(text: str, word: str, short: Path, tmp_path: Path) -> None:
    """A range that cannot be read is bad input: one line that quotes it, and nothing is written."""
    outcome = call("plan", short, "--vary", text, "--out", tmp_path / "plan")
    assert_refused(outcome, f"--vary {text}: ", word)
    assert len(outcome.err.splitlines()) == 1
    assert list(tmp_path.iterdir()) == []


def declaring(path: Path) -> Path:
    """A scenario file in which a cart that has met a hundred walls in a row declares itself lost."""
    stages: list[tuple[str, str]] = [
        (
            '{ act = "branch", on = "counter", counter = "walls", at_least = 2, go = "from the second wall" },',
            '{ act = "tally", counter = "long", add = 1 },\n'
            '  { act = "branch", on = "counter", counter = "long", at_least = 100, go = "lost" },\n'
            '  { act = "branch", on = "counter", counter = "walls", at_least = 2, go = "from the second wall" },',
        ),
        (
            "[errors]\n",
            '[[routine.stages]]\nname = "lost"\nacts = [{ act = "declare" }, { act = "halt" }]\n\n[errors]\n',
        ),
    ]
    path.write_text(edited(*stages), encoding="utf-8")
    return path


def test_what_a_declaration_is_worth(tmp_path: Path) -> None:
    """Where the routine declares, the plan gives the table of declarations and a sentence on it; else it does not."""
    scenario = declaring(tmp_path / "rig.toml")
    table: dict[str, Any] = call("plan", scenario, "--json").json()["declarations"]
    # the counter is never set back, so that all declare, and all of them are on their lap
    assert (table["alive_declared"], table["n_starts"], table["is_guarantee"]) == (4000, 4000, False)
    assert table["wrong"]["mean"] == 1.0
    text = " ".join(call("plan", scenario).out.split())
    assert table["sentence"] in text
