"""Finished runs, written down as they come, so that an audit or other work in many runs goes on where it stopped."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from swarmpush.output import OutputError, write_text

Row = dict[str, Any]

_MEASURE = "block_speed_m_s"  # every row has it


class Journal:
    """A file with one JSON object per line: first what the runs are of, then a row per finished run.

    Arguments:
        path: the file; made if it is missing.
        subject: what the rows belong to (scenario hash, versions); a file with another subject is refused.
        level: the column that tells a row from others of the same replicate.

    Raises:
        OutputError: when the file belongs to something else, or cannot be read or written.
    """

    def __init__(self, path: Path, subject: Row, *, level: str = "rung") -> None:
        self._path, self._level = path, level
        self.rows: dict[tuple[str, int], Row] = {}
        header = json.dumps(subject)
        try:
            text = path.read_text(encoding="utf-8") if path.exists() else ""
            whole, _, _ = text.rpartition("\n")  # the last line may be cut off
            entries = [json.loads(line) for line in whole.splitlines()]
            is_ours = entries[:1] == [subject] or header.startswith(text)
            if is_ours:
                self.rows = {(row[level], row["replicate"]): row for row in entries[1:] if row[_MEASURE] is not None}
        except OSError as error:
            raise OutputError(f"{path} cannot be used ({error.strerror})") from None
        except (ValueError, KeyError, TypeError):
            raise OutputError(f"{path} is damaged; delete it and start again") from None
        if not is_ours:
            raise OutputError(
                f"{path} is left from an interrupted command of another kind, of another scenario or with other "
                "versions; delete it, or name another folder with --out"
            )
        write_text(path, "\n".join([whole if entries else header, ""]))

    def add(self, row: Row) -> None:
        """Write a finished run down."""
        self.rows[row[self._level], row["replicate"]] = row
        try:
            with self._path.open("a", encoding="utf-8") as file:
                file.write(json.dumps(row) + "\n")
        except OSError as error:
            raise OutputError(f"{self._path} cannot be written ({error.strerror})") from None
