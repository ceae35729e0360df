"""The folder of a study: what counts as run, whatever happened to it."""

from __future__ import annotations

import errno
import json
import math
import os
import sqlite3
import subprocess
import sys
import time
from pathlib import Path
from unittest.mock import patch

import pandas as pd
import pytest
from small_studies import quick_base, small_study

from swarmpush.loading import from_tables
from swarmpush.output import OutputError
from swarmpush.studies import store
from swarmpush.studies.store import Store, forget_failures, read_failures, read_runs, read_summary
from swarmpush.studies.work import WHOLE_POINT, Failure, Row

MANY_POINTS = 100_000


def row(point: int, replicate: int, speed: float = 0.5) -> Row:
    return {"point": point, "replicate": replicate, "seed": 100 + replicate, "block_speed_m_s": speed}


def failed(point: int, replicate: int, tables: str = "") -> Failure:
    return Failure(point, replicate, 100 + replicate, "ValueError", "broken", tables)


def filled(folder: Path) -> None:
    """A folder with two parts of two runs each."""
    with Store(folder, small_study()) as opened:
        for point in (1, 0):
            opened.add([row(point, 1), row(point, 0)], [])
            opened.flush({})


def keys(folder: Path) -> list[tuple[int, int]]:
    return [(int(point), int(replicate)) for point, replicate in read_runs(folder)[["point", "replicate"]].to_numpy()]


def test_runs_come_back_in_order(tmp_path: Path) -> None:
    """Runs are there with all their digits, in order of point and replicate, whatever parts they lie in."""
    with Store(tmp_path, small_study()) as opened:
        opened.add([row(2, 1, 1 / 3), row(0, 1, math.nan)], [])
        opened.flush({})
        opened.add([row(0, 0)], [])
        opened.flush({})
        expected = pd.DataFrame([row(0, 0), row(0, 1, math.nan), row(2, 1, 1 / 3)])
        pd.testing.assert_frame_equal(opened.runs(), expected, check_exact=True)
        assert opened.known("block_speed_m_s").sort_values(["point", "replicate"])["value"].tolist()[::2] == [
            0.5,
            1 / 3,
        ]


def test_the_final_table_does_not_show_its_parts(tmp_path: Path) -> None:
    """The same runs in other parts, other order and other blocks of memory give the same bytes."""
    rows = [row(point, k, math.sin(point + k)) for point in range(3) for k in range(2)]
    for name, order, size in (("a", rows, 6), ("b", rows[::-1], 1), ("c", [*rows[3:], *rows[:3]], 4)):
        with Store(tmp_path / name, small_study()) as opened, patch.object(store, "BLOCK_ROWS", 4):
            for k in range(0, len(order), size):
                opened.add(order[k : k + size], [])
                opened.flush({})
            opened.finish()
    tables = [(tmp_path / name / "runs.parquet").read_bytes() for name in "abc"]
    assert tables[0] == tables[1] == tables[2]
    pd.testing.assert_frame_equal(pd.read_parquet(tmp_path / "a" / "runs.parquet"), pd.DataFrame(rows))


def test_a_part_without_a_row_is_removed(tmp_path: Path) -> None:
    """What was written before the journal could name it does not count and does not stay."""
    filled(tmp_path)
    stranger = tmp_path / "parts" / "00000003.parquet"
    stranger.write_bytes((tmp_path / "parts" / "00000001.parquet").read_bytes())
    half = tmp_path / "parts" / "00000004.new"
    half.write_bytes(b"PAR1")
    with Store(tmp_path, small_study()) as opened:
        assert not stranger.exists()
        assert not half.exists()
        opened.add([row(2, 0)], [])
        opened.flush({})
    assert keys(tmp_path) == [(0, 0), (0, 1), (1, 0), (1, 1), (2, 0)]


@pytest.mark.parametrize("harm", ["missing", "cut", "flipped"])
def test_a_row_without_its_part_does_not_count(tmp_path: Path, harm: str) -> None:
    """Runs whose part is gone or is not as it was written are to be made again; the other parts stay."""
    filled(tmp_path)
    part = tmp_path / "parts" / "00000001.parquet"
    data = bytearray(part.read_bytes())
    if harm == "missing":
        part.unlink()
    elif harm == "cut":
        part.write_bytes(data[: len(data) // 2])
    else:
        data[len(data) // 3] ^= 1
        part.write_bytes(data)
    with Store(tmp_path, small_study()) as opened:
        assert opened.known(None)["point"].tolist() == [0, 0]
        assert (opened.summary().n_runs_done, opened.summary().n_points_done) == (2, 1)
        opened.add([row(1, 0), row(1, 1)], [])
        opened.flush({})
    assert keys(tmp_path) == [(0, 0), (0, 1), (1, 0), (1, 1)]


def test_a_full_disk_is_told_and_costs_nothing(tmp_path: Path) -> None:
    """When a part cannot be written the error names the folder and the way on; after that all is as before."""
    filled(tmp_path)
    with Store(tmp_path, small_study()) as opened:
        opened.add([row(2, 0)], [])
        full = OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        with patch.object(os, "fsync", side_effect=full), pytest.raises(OutputError, match=r"No space.*make room"):
            opened.flush({})
        opened.flush({})  # what could not be written is still there
    assert keys(tmp_path) == [(0, 0), (0, 1), (1, 0), (1, 1), (2, 0)]


def test_a_full_disk_for_the_journal(tmp_path: Path) -> None:
    """When only the journal's row cannot be written, the part does not count."""
    filled(tmp_path)
    with Store(tmp_path, small_study()) as opened:
        pages = opened._journal.execute("pragma page_count").fetchone()[0]
        opened._journal.execute(f"pragma max_page_count = {pages}")
        opened.add([row(2, 0)], [failed(2, 1, "x" * 100_000)])
        with pytest.raises(OutputError, match=r"journal.*full.*make room"):
            opened.flush({})
    with Store(tmp_path, small_study()) as opened:
        assert opened.summary().n_failures == 0
    assert keys(tmp_path) == [(0, 0), (0, 1), (1, 0), (1, 1)]


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="nothing is read-only for this user")
def test_a_folder_that_cannot_be_written(tmp_path: Path) -> None:
    """A folder without leave to write is an error that says so."""
    tmp_path.chmod(0o500)
    try:
        with pytest.raises(OutputError, match=r"denied.*get leave to write"):
            Store(tmp_path / "study", small_study())
    finally:
        tmp_path.chmod(0o700)


def test_a_journal_that_cannot_be_written(tmp_path: Path) -> None:
    """A journal that has become read-only is told in words."""
    with Store(tmp_path, small_study()) as opened:
        opened._journal.execute("pragma query_only = on")
        opened.add([row(0, 0)], [])
        with pytest.raises(OutputError, match=r"readonly.*get leave to write"):
            opened.flush({})


def test_a_file_in_place_of_the_folder(tmp_path: Path) -> None:
    """A file where the folder should be is refused and left alone."""
    (tmp_path / "study").write_text("mine")
    with pytest.raises(OutputError, match=r"study cannot be used.*another folder"):
        Store(tmp_path / "study", small_study())
    assert (tmp_path / "study").read_text() == "mine"


def test_another_study_is_refused(tmp_path: Path) -> None:
    """A changed study does not go on in the folder of the old one, unless it is to start anew."""
    filled(tmp_path)
    with pytest.raises(OutputError, match=r"holds another study.*crew sizes.*--force"):
        Store(tmp_path, small_study(seed=6))
    assert len(keys(tmp_path)) == 4
    with Store(tmp_path, small_study(seed=6), is_forced=True) as opened:
        assert opened.summary().n_runs_done == 0
        assert list((tmp_path / "parts").iterdir()) == []


def test_other_versions_are_refused(tmp_path: Path) -> None:
    """Results of different versions do not mix; the message names what has changed."""
    filled(tmp_path)
    newer = dict(store.versions()) | {"numba": "99.1"}
    with (
        patch.object(store, "versions", lambda: newer),
        pytest.raises(OutputError, match=r"numba .* \(now 99.1\).*--for"),
    ):
        Store(tmp_path, small_study())


def test_a_damaged_journal_is_told(tmp_path: Path) -> None:
    """What is no database is an error with the way out, not a traceback."""
    filled(tmp_path)
    (tmp_path / "journal.sqlite").write_bytes(b"no database at all" * 100)
    with pytest.raises(OutputError, match=r"damaged.*--force"):
        Store(tmp_path, small_study())
    with pytest.raises(OutputError, match="damaged"):
        read_summary(tmp_path)


def test_a_folder_with_something_else_is_refused(tmp_path: Path) -> None:
    """A folder with other things in it is not taken by accident, and by force they stay."""
    (tmp_path / "thesis.txt").write_text("mine")
    with pytest.raises(OutputError, match=r"something else.*--force"):
        Store(tmp_path, small_study())
    assert [path.name for path in tmp_path.iterdir()] == ["thesis.txt"]
    Store(tmp_path, small_study(), is_forced=True).close()
    assert (tmp_path / "thesis.txt").read_text() == "mine"


def test_a_start_that_was_cut_off_is_gone_over(tmp_path: Path) -> None:
    """A folder in which the journal was only just made is as good as new."""
    (tmp_path / "parts").mkdir()
    sqlite3.connect(tmp_path / "journal.sqlite").close()
    with pytest.raises(OutputError, match="has not begun"):
        read_summary(tmp_path)
    filled(tmp_path)
    assert len(keys(tmp_path)) == 4


def test_a_second_process_is_refused(tmp_path: Path) -> None:
    """A folder is for one process at a time; a killed one does not keep it."""
    code = (
        "import sys, time; from pathlib import Path; from small_studies import small_study\n"
        "from swarmpush.studies.store import Store\n"
        f"opened = Store(Path({str(tmp_path)!r}), small_study()); print('open', flush=True); time.sleep(60)"
    )
    path = os.pathsep.join([str(Path(__file__).parent), *sys.path])
    other = subprocess.Popen(
        [sys.executable, "-c", code], stdout=subprocess.PIPE, env=os.environ | {"PYTHONPATH": path}
    )
    assert other.stdout
    try:
        assert other.stdout.readline().strip() == b"open"
        with pytest.raises(OutputError, match=r"in use by another process"):
            Store(tmp_path, small_study())
        assert read_summary(tmp_path).n_points == 3  # looking on is allowed
    finally:
        other.kill()
        other.wait()
        other.stdout.close()
    Store(tmp_path, small_study()).close()


def test_failures_can_be_replayed_and_forgotten(tmp_path: Path) -> None:
    """A failure comes back with seed, reason and scenario; once forgotten, its run is to be made again."""
    base = quick_base()
    with Store(tmp_path, small_study()) as opened:
        opened.add([row(0, 0)], [failed(0, 1, json.dumps(base.to_tables())), failed(1, WHOLE_POINT)])
        opened.flush({1: 0})
        found = read_failures(tmp_path)
        assert found[["point", "replicate", "seed", "error"]].to_numpy().tolist() == [
            [0, 1, 101, "ValueError"],
            [1, WHOLE_POINT, 99, "ValueError"],
        ]
        assert from_tables(json.loads(found["tables"][0])) == base
        summary = opened.summary()
        assert (summary.n_points_done, summary.n_points_failed, summary.n_failures) == (2, 1, 2)
        assert (summary.n_runs_planned, summary.n_runs_done) == (4, 1)
        with pytest.raises(OutputError, match="in use"):
            forget_failures(tmp_path)
    assert forget_failures(tmp_path) == 2
    summary = read_summary(tmp_path)
    assert (summary.n_points_done, summary.n_failures, summary.n_runs_planned, summary.is_finished) == (0, 0, 6, False)
    with Store(tmp_path, small_study()) as opened:
        assert opened.known(None)[["point", "replicate"]].to_numpy().tolist() == [[0, 0]]


def test_reading_needs_a_study(tmp_path: Path) -> None:
    """A folder without a journal is no study, and is not made one."""
    for read in (read_summary, read_runs, read_failures, forget_failures):
        with pytest.raises(OutputError, match="holds no study"):
            read(tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_much_is_written_at_once(tmp_path: Path) -> None:
    """Rows wait until they are many, or for long, so that neither memory nor the number of parts grows."""
    with Store(tmp_path, small_study()) as opened, patch.object(store, "MOST_ROWS", 3):
        parts = []
        for k in range(6):
            opened.add([row(k // 2, k % 2)], [])
            opened.flush_if_due({})
            parts.append(len(list((tmp_path / "parts").iterdir())))
        assert parts == [0, 0, 1, 1, 1, 2]
        opened.add([], [failed(9, 9)])
        opened.flush_if_due({})
        assert len(read_failures(tmp_path)) == 0
        opened._written -= store.LONGEST_WAIT
        opened.flush_if_due({})
        assert len(read_failures(tmp_path)) == 1


def test_the_summary_of_a_large_study_is_quick(tmp_path: Path) -> None:
    """With a hundred thousand points the counts come sooner than the points themselves could be listed."""
    study = small_study(counts=[1 + k % 9 for k in range(MANY_POINTS)], replicates=10)
    with Store(tmp_path, study) as opened:
        with opened._journal as journal:
            journal.execute("update point set done = 10, failed = 0 where point < ?", (MANY_POINTS // 2,))
            journal.executemany(
                "insert into failure values (?, 0, 1, 'ValueError', 'broken')", ((k,) for k in range(1000))
            )
            begin = time.perf_counter()
            listed = [tuple(row) for row in journal.execute("select * from point")]
            listing_s = time.perf_counter() - begin
        assert len(listed) == MANY_POINTS
        begin = time.perf_counter()
        summary = read_summary(tmp_path)
        assert time.perf_counter() - begin < listing_s
    assert (summary.n_points, summary.n_points_done, summary.n_runs_done) == (MANY_POINTS, 50_000, 500_000)
