"""Writing results."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from swarmpush.demos import demo
from swarmpush.loading import load
from swarmpush.output import (
    OutputError,
    claim_folder,
    free_folder,
    plain,
    provenance,
    to_json,
    write_table,
    write_text,
)


class Colour(StrEnum):
    RED = "red"


@dataclass(frozen=True)
class Record:
    share: float
    rows: tuple[int, ...]


def test_plain_values() -> None:
    """Records, arrays, enumerations and NumPy numbers become plain values of JSON."""
    value = {
        "record": Record(0.5, (1, 2)),
        "array": np.array([[1.0, np.inf]]),
        "count": np.int64(3),
        "flag": np.bool_(True),
        "colour": Colour.RED,
        "path": Path("a") / "b.json",
        7: None,
    }
    assert plain(value) == {
        "record": {"share": 0.5, "rows": [1, 2]},
        "array": [[1.0, None]],
        "count": 3,
        "flag": True,
        "colour": "red",
        "path": str(Path("a") / "b.json"),
        "7": None,
    }


@pytest.mark.parametrize("number", [math.nan, math.inf, -math.inf, np.float64("nan")])
def test_json_has_no_infinite_numbers(number: float) -> None:
    """What is infinite or undefined is written as null, so that every JSON reader takes the file."""
    assert json.loads(to_json({"x": number}), parse_constant=pytest.fail) == {"x": None}


def test_json_is_read_back() -> None:
    """Numbers come back from JSON with all their digits."""
    values = [0.1, 1 / 3, 1e-300, -2.5e17]
    assert json.loads(to_json(values)) == values


def test_provenance_names_scenario_seed_and_versions() -> None:
    """Provenance holds the scenario's hash, the seed and the versions that the numbers depend on."""
    s = load(demo("service_passage"))
    found = provenance(s, seed=5)
    assert (found["scenario_hash"], found["seed"], provenance(s)["seed"]) == (s.digest(), 5, s.trial.seed)
    assert {"swarmpush", "pymunk", "numpy", "numba", "python"} <= found["versions"].keys()


def test_claims_a_new_or_empty_folder(tmp_path: Path) -> None:
    """A folder that does not exist is made, with its parents; an empty one is taken."""
    folder = tmp_path / "a" / "b"
    assert claim_folder(folder, force=False).is_dir()
    assert claim_folder(folder, force=False) == folder


def test_refuses_a_folder_with_results(tmp_path: Path) -> None:
    """A folder that holds something is taken only by force, and even then nothing in it is touched."""
    (tmp_path / "run.json").write_text("{}")
    with pytest.raises(OutputError, match=r"already holds results.*--force"):
        claim_folder(tmp_path, force=False)
    claim_folder(tmp_path, force=True)
    assert (tmp_path / "run.json").read_text() == "{}"


@pytest.mark.parametrize("force", [True, False])
def test_refuses_a_file_in_place_of_a_folder(tmp_path: Path, force: bool) -> None:
    """A file is never taken for the output folder, nor can a folder be made below it."""
    file = tmp_path / "results"
    file.write_text("mine")
    with pytest.raises(OutputError, match="is a file"):
        claim_folder(file, force=force)
    with pytest.raises(OutputError, match="cannot be made"):
        claim_folder(file / "below", force=force)
    assert file.read_text() == "mine"


def test_finds_a_free_folder(tmp_path: Path) -> None:
    """Names are numbered on from those that exist."""
    names = []
    for _ in range(3):
        folder = free_folder(tmp_path, "audit")
        folder.mkdir()
        names.append(folder.name)
    assert names == ["audit", "audit-2", "audit-3"]


def test_replaces_a_file_whole(tmp_path: Path) -> None:
    """A text takes the place of an older one, and no temporary file stays behind."""
    path = tmp_path / "run.json"
    path.write_text("a longer text that was there before")
    write_text(path, "µ\n")
    assert path.read_text(encoding="utf-8") == "µ\n"
    assert list(tmp_path.iterdir()) == [path]


def test_a_failed_write_leaves_the_old_file(tmp_path: Path) -> None:
    """When writing breaks off, the old file is whole and no temporary file stays behind."""
    path = tmp_path / "run.json"
    path.write_text("old")
    with pytest.raises(UnicodeEncodeError):
        write_text(path, "new \ud800")  # a character that cannot be written, after some that can
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


def test_says_where_it_cannot_write(tmp_path: Path) -> None:
    """A missing folder, or a folder in the file's place, is an error that names the path."""
    with pytest.raises(OutputError, match=r"nowhere.*cannot be written"):
        write_text(tmp_path / "nowhere" / "run.json", "{}")
    (tmp_path / "taken").mkdir()
    with pytest.raises(OutputError, match=r"taken cannot be written"):
        write_text(tmp_path / "taken", "{}")
    assert [path.name for path in tmp_path.iterdir()] == ["taken"]


def test_tables_are_read_back(tmp_path: Path) -> None:
    """A table comes back from its file with the same columns, types and numbers."""
    table = pd.DataFrame(
        {"t_s": [0.1, 1 / 3], "pusher": np.array([0, 1], dtype=np.int64), "partner": ["wall", "block"]}
    )
    write_table(tmp_path / "visits.parquet", table)
    pd.testing.assert_frame_equal(pd.read_parquet(tmp_path / "visits.parquet"), table, check_exact=True)
