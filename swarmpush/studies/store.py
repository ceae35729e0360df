"""The folder of a study: what has been run, safe against an end at any moment.

`journal.sqlite` is the journal: what the study is, a row per point with its counts, a row per failure, and a row per
part. The parts in `parts/` are tables of finished runs. A part is written under a temporary name, brought to the disk
and renamed before the journal names it, and it counts only if the journal names it and its bytes are the ones written.
So a run is there once or not at all, whenever the work ends. `runs.parquet` is written when all runs have ended.
"""

from __future__ import annotations

import hashlib
import io
import json
import os
import shutil
import sqlite3
import sys
import time
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from swarmpush.output import OutputError, versions
from swarmpush.studies.study import Study
from swarmpush.studies.work import WHOLE_POINT, Failure, Row

JOURNAL, PARTS, RUNS, LOCK = "journal.sqlite", "parts", "runs.parquet", "lock"
FORMAT = 1  # of the journal
MOST_ROWS = 5_000  # that wait in memory to be written; some 10 MB
SHORTEST_WAIT, LONGEST_WAIT = 2.0, 60.0  # s between two parts
WAIT_SHARE = 0.01  # of the time since the start: what a sudden end may cost, and so there are never many parts
BLOCK_ROWS = 50_000  # of the final table that are put in order at a time

_SCHEMA = """
create table subject (name text primary key, value text not null);
create table point (point integer primary key, wanted integer not null, done integer not null, failed integer not null);
create table part (
    name text primary key, n_runs integer not null, first_point integer not null, last_point integer not null,
    bytes integer not null, digest text not null, written_at real not null
);
create table failure (
    point integer not null, replicate integer not null, seed integer not null, error text not null,
    message text not null, primary key (point, replicate)
) without rowid;
create table failed_scenario (point integer primary key, tables text not null);
"""


@dataclass(frozen=True)
class Summary:
    """How far a study has come.

    n_points: of the study; n_points_done: with all their runs ended; n_points_failed: that make no scenario.
    n_runs_planned: so far, which stop rules may add to; n_runs_done: finished; n_failures: runs and points that failed.
    runs_per_s: finished ones since the work was last taken up, NaN before the first part.
    """

    n_points: int
    n_points_done: int
    n_points_failed: int
    n_runs_planned: int
    n_runs_done: int
    n_failures: int
    runs_per_s: float

    @property
    def is_finished(self) -> bool:
        """Whether every run has ended, with a row or with a failure."""
        return self.n_points_done == self.n_points


class Store:
    """A study's folder, opened to add runs to it; by one process at a time. Close it after use.

    Arguments:
        folder: made if it is missing. study: what is run.
        is_forced: throw away the runs that the folder holds, of whatever study, and start anew.

    Raises:
        OutputError: when the folder belongs to another study or to other versions, holds something else, is in use by
            another process, is damaged, or cannot be written. The methods raise it, too.
    """

    def __init__(self, folder: Path, study: Study, *, is_forced: bool = False) -> None:
        self._folder, self._rows, self._failures = folder, list[Row](), list[Failure]()
        with _worded(folder):
            folder.mkdir(parents=True, exist_ok=True)
            if not is_forced:
                _refuse_strangers(folder)
            self._lock = _lock(folder)
            try:
                if is_forced:
                    _clear(folder)
                (folder / PARTS).mkdir(exist_ok=True)
                self._journal = _begin(folder, study)
                self._keep_whole_parts()
                self._next_part = 1 + self._ask("select coalesce(max(cast(name as integer)), 0) from part")[0][0]
                with self._journal:
                    self._journal.execute("insert or replace into subject values ('taken_up_at', ?)", (time.time(),))
            except BaseException:
                self.close()
                raise
        self._begun = self._written = time.monotonic()

    def __enter__(self) -> Store:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Let the folder go; rows that were not flushed are lost."""
        if hasattr(self, "_journal"):
            self._journal.close()
        self._lock.close()

    def known(self, column: str | None) -> pd.DataFrame:
        """What has ended: columns point, replicate and value, which is that of a column of the runs.

        The value is NaN without a column, and for failures, which are among the rows.
        """
        with _worded(self._folder):
            columns = ["point", "replicate", *([column] if column else [])]
            tables = [pd.read_parquet(path, columns=columns) for path in _named_parts(self._folder, self._journal)]
            failed = np.array(self._ask("select point, replicate from failure"), dtype=np.int64).reshape(-1, 2)
        keys = np.concatenate([*(table[columns[:2]].to_numpy() for table in tables), failed])
        values = np.full(len(keys), np.nan)
        if column and tables:
            values[: len(keys) - len(failed)] = np.concatenate([table[column] for table in tables])
        return pd.DataFrame({"point": keys[:, 0], "replicate": keys[:, 1], "value": values})

    def add(self, rows: Sequence[Row], failures: Sequence[Failure]) -> None:
        """Take finished runs; they are written by one of the next calls of `flush_if_due`."""
        self._rows += rows
        self._failures += failures

    def flush_if_due(self, wanted: dict[int, int]) -> None:
        """Write what has been added if it is much or waits for long; see `flush`."""
        now = time.monotonic()
        wait = min(max(SHORTEST_WAIT, WAIT_SHARE * (now - self._begun)), LONGEST_WAIT)
        if len(self._rows) >= MOST_ROWS or ((self._rows or self._failures) and now - self._written >= wait):
            self.flush(wanted)

    def flush(self, wanted: dict[int, int]) -> None:
        """Write what has been added, with the numbers of runs wanted of points where they changed; emptied by this."""
        with _worded(self._folder):
            part = self._write_part() if self._rows else None
            with self._journal as journal:
                if part:
                    journal.execute("insert into part values (?, ?, ?, ?, ?, ?, ?)", part)
                journal.executemany(
                    "insert or replace into failure values (?, ?, ?, ?, ?)",
                    [(f.point, f.replicate, f.seed, f.error, f.message) for f in self._failures],
                )
                journal.executemany(
                    "insert or ignore into failed_scenario values (?, ?)",
                    [(f.point, f.tables) for f in self._failures if f.tables],
                )
                _count(journal, "done", Counter(row["point"] for row in self._rows))
                _count(journal, "failed", Counter(f.point for f in self._failures))
                journal.executemany("update point set wanted = ? where point = ?", [(n, k) for k, n in wanted.items()])
        self._rows, self._failures, self._written = [], [], time.monotonic()
        wanted.clear()

    def finish(self) -> None:
        """Write all runs, in order of points and replicates, as `runs.parquet`."""
        with _worded(self._folder):
            temporary = self._folder / f"{RUNS}.new"
            paths = _parts(self._journal)
            writer: pq.ParquetWriter | None = None
            try:
                for first, last in _blocks(self._ask("select point, done from point where done > 0 order by point")):
                    table = pa.Table.from_pandas(_read_runs(self._folder, paths, first, last), preserve_index=False)
                    writer = writer or pq.ParquetWriter(temporary, table.schema)
                    writer.write_table(table)
            finally:
                if writer:
                    writer.close()
            if writer:
                _put_in_place(temporary, self._folder / RUNS)

    def runs(self) -> pd.DataFrame:
        """See `read_runs`."""
        return read_runs(self._folder)

    def summary(self) -> Summary:
        """See `read_summary`."""
        with _worded(self._folder):
            return _summary(self._journal)

    def _ask(self, question: str) -> list[Any]:
        return self._journal.execute(question).fetchall()

    def _write_part(self) -> tuple[Any, ...]:
        name, buffer = f"{self._next_part:08d}.parquet", io.BytesIO()
        pd.DataFrame(self._rows).to_parquet(buffer, index=False)
        data = buffer.getvalue()
        path = self._folder / PARTS / name
        temporary = path.with_suffix(".new")
        temporary.write_bytes(data)
        _put_in_place(temporary, path)
        self._next_part += 1
        points = [row["point"] for row in self._rows]
        return name, len(points), min(points), max(points), len(data), _digest(data), time.time()

    def _keep_whole_parts(self) -> None:
        """Remove what the journal does not name, and forget what it names in vain."""
        digests = dict(self._ask("select name, digest from part"))
        for path in (self._folder / PARTS).iterdir():
            if path.name not in digests:
                path.unlink()
        lost = [name for name, digest in digests.items() if not _is_whole(self._folder / PARTS / name, digest)]
        if not lost:
            return
        with self._journal as journal:
            journal.executemany("delete from part where name = ?", [(name,) for name in lost])
            journal.execute("update point set done = 0")
            for path in _named_parts(self._folder, journal):
                _count(journal, "done", Counter(pd.read_parquet(path, columns=["point"])["point"].tolist()))


def read_summary(folder: Path) -> Summary:
    """How far a study has come, also while it runs.

    Raises:
        OutputError: when the folder holds no study, or cannot be read. The other functions below raise it, too.
    """
    with _reading(folder) as journal:
        return _summary(journal)


def read_runs(folder: Path) -> pd.DataFrame:
    """All finished runs: point, replicate, seed and the measures of `Run.summary`, in order of point and replicate."""
    with _reading(folder) as journal:
        return _read_runs(folder, _parts(journal), 0, sys.maxsize)


def read_failures(folder: Path) -> pd.DataFrame:
    """All failures, in order: point, replicate (-1: the point makes no scenario), seed, error, message, tables.

    tables: the scenario as JSON, "" where there is none; `from_tables(json.loads(tables))` and the seed replay the run.
    """
    with _reading(folder) as journal:
        return pd.read_sql_query(
            "select point, replicate, seed, error, message, coalesce(tables, '') as tables "
            "from failure left join failed_scenario using (point) order by point, replicate",
            journal,
        )


def forget_failures(folder: Path) -> int:
    """Forget all failures, so that the next call makes these runs again; returns how many there were."""
    with _reading(folder), closing(_lock(folder)), closing(_connect(folder)) as journal, journal:
        n = journal.execute("delete from failure").rowcount
        journal.execute("delete from failed_scenario")
        first = json.loads(_subject(journal)["counts"])[0]
        journal.execute("update point set wanted = ? where wanted = 0", (first,))
        journal.execute("update point set failed = 0")
        return int(n)


# ---- the journal -------------------------------------------------------------------------------------------------


def _begin(folder: Path, study: Study) -> sqlite3.Connection:
    """The journal of the study in the folder, made if there is none."""
    journal = _connect(folder)
    try:
        subject = {
            "format": json.dumps(FORMAT),
            "study": json.dumps(study.name),
            "digest": json.dumps(study.digest()),
            "counts": json.dumps(study.counts),
            "seed": json.dumps(study.seed),
            "versions": json.dumps(dict(versions())),
        }
        known = _subject(journal)
        if not known:
            with journal:
                journal.execute("begin")
                for statement in _SCHEMA.split(";\n"):
                    journal.execute(statement)
                journal.executemany("insert into subject values (?, ?)", subject.items())
                points = ((k, study.counts[0]) for k in range(len(study.points)))
                journal.executemany("insert into point values (?, ?, 0, 0)", points)
        elif change := _change(known, subject):
            raise OutputError(f"{folder} {change}; name another folder, or start anew in this one with --force")
    except BaseException:
        journal.close()
        raise
    return journal


def _connect(folder: Path) -> sqlite3.Connection:
    journal = sqlite3.connect(folder / JOURNAL, timeout=30.0)
    try:
        journal.execute("pragma journal_mode = wal")
        journal.execute("pragma synchronous = full")
    except BaseException:
        journal.close()
        raise
    return journal


def _subject(journal: sqlite3.Connection) -> dict[str, str]:
    """What the journal is of; empty when it is new."""
    if not journal.execute("select 1 from sqlite_master where name = 'subject'").fetchone():
        return {}
    return dict(journal.execute("select name, value from subject"))


def _change(known: Mapping[str, str], subject: Mapping[str, str]) -> str:
    """In what the study differs from the journal's; "" when it is the same."""
    if known["format"] != subject["format"]:
        return "was written by another version of swarmpush"
    if known["digest"] != subject["digest"]:
        return f"holds another study, or this one before it was changed ({json.loads(known['study'])})"
    then, now = json.loads(known["versions"]), json.loads(subject["versions"])
    changed = [f"{name} {then.get(name)} (now {now.get(name)})" for name in now if then.get(name) != now.get(name)]
    return f"was begun with {', '.join(changed)}, and results of different versions do not mix" if changed else ""


def _refuse_strangers(folder: Path) -> None:
    has_journal = (folder / JOURNAL).exists()
    if not has_journal and any(path.name not in (PARTS, LOCK) for path in folder.iterdir()):
        raise OutputError(f"{folder} holds something else; name another folder, or add --force")


def _count(journal: sqlite3.Connection, column: str, counts: Mapping[int, int]) -> None:
    journal.executemany(
        f"update point set {column} = {column} + ? where point = ?", [(n, point) for point, n in counts.items()]
    )


def _summary(journal: sqlite3.Connection) -> Summary:
    ask = journal.execute
    points = ask("select count(*), sum(done + failed >= wanted), sum(wanted), sum(done), sum(failed) from point")
    n_points, n_points_done, n_planned, n_done, n_failures = points.fetchone()
    n_points_failed = ask(f"select count(*) from failure where replicate = {WHOLE_POINT}").fetchone()[0]
    since = float(_subject(journal)["taken_up_at"])
    n_lately, last = ask("select sum(n_runs), max(written_at) from part where written_at >= ?", (since,)).fetchone()
    rate = n_lately / (last - since) if n_lately and last > since else float("nan")
    return Summary(n_points, n_points_done, n_points_failed, n_planned, n_done, n_failures, rate)


@contextmanager
def _reading(folder: Path) -> Iterator[sqlite3.Connection]:
    if not (folder / JOURNAL).is_file():
        raise OutputError(f"{folder} holds no study; name the folder that one was written to")
    with _worded(folder), closing(_connect(folder)) as journal:
        if "taken_up_at" not in _subject(journal):
            raise OutputError(f"{folder} holds a study that has not begun; run it first")
        yield journal


# ---- files -------------------------------------------------------------------------------------------------------


def _parts(journal: sqlite3.Connection) -> list[tuple[str, int, int]]:
    """Names of the parts, and the first and last point of each."""
    return journal.execute("select name, first_point, last_point from part order by name").fetchall()


def _named_parts(folder: Path, journal: sqlite3.Connection) -> list[Path]:
    return [folder / PARTS / name for name, _, _ in _parts(journal)]


def _read_runs(folder: Path, parts: Sequence[tuple[str, int, int]], first: int, last: int) -> pd.DataFrame:
    """The runs of the points from first to last, in order; which parts they lie in must not show."""
    tables = [pd.read_parquet(folder / PARTS / name) for name, low, high in parts if low <= last and first <= high]
    if not tables:
        return pd.DataFrame({name: pd.Series(dtype=np.int64) for name in ("point", "replicate", "seed")})
    wanted = [table[table["point"].between(first, last)] for table in tables]
    return pd.concat(wanted).sort_values(["point", "replicate"], ignore_index=True)


def _blocks(done: Sequence[tuple[int, int]]) -> Iterator[tuple[int, int]]:
    """First and last points of blocks that have some `BLOCK_ROWS` runs each."""
    first, n = None, 0
    for point, n_runs in done:
        first, n = point if first is None else first, n + n_runs
        if n >= BLOCK_ROWS:
            yield first, point
            first, n = None, 0
    if first is not None:
        yield first, done[-1][0]


def _put_in_place(temporary: Path, path: Path) -> None:
    """Bring a file to the disk and give it its name, so that there is a whole file of that name or none."""
    with temporary.open("rb+") as file:
        os.fsync(file.fileno())
    temporary.replace(path)
    if sys.platform != "win32":  # where folders cannot be opened
        handle = os.open(path.parent, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def _digest(data: bytes) -> str:
    return hashlib.blake2b(data, digest_size=16).hexdigest()


def _is_whole(path: Path, digest: str) -> bool:
    try:
        return _digest(path.read_bytes()) == digest
    except OSError:
        return False


def _clear(folder: Path) -> None:
    shutil.rmtree(folder / PARTS, ignore_errors=True)
    for path in folder.iterdir():
        if path.name.startswith((JOURNAL, RUNS)):
            path.unlink()


def _lock(folder: Path) -> io.IOBase:
    """A lock on the folder, held until it is closed or the process ends, however it ends."""
    file = (folder / LOCK).open("ab")
    try:
        if sys.platform == "win32":
            import msvcrt

            msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)
        else:
            import fcntl

            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        file.close()
        raise OutputError(f"{folder} is in use by another process; wait for its end, or name another folder") from None
    return file


@contextmanager
def _worded(folder: Path) -> Iterator[None]:
    """What can go wrong with the folder, in words."""
    again = "what has been written is kept, and the same command goes on from there"
    try:
        yield
    except OSError as error:
        raise OutputError(
            f"{folder} cannot be used ({error.strerror or error}); make room or get leave to write there, or name "
            f"another folder; {again}"
        ) from None
    except sqlite3.OperationalError as error:
        raise OutputError(
            f"{folder / JOURNAL} cannot be used ({error}); make room or get leave to write there, or name another "
            f"folder; {again}"
        ) from None
    except sqlite3.DatabaseError as error:
        raise OutputError(f"{folder / JOURNAL} is damaged ({error}); start anew with --force") from None
