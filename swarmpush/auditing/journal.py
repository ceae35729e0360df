"""Finished runs of an audit, written down as they come, so that an interrupted audit goes on where it stopped."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from swarmpush.output import OutputError, write_text

Row = dict[str, Any]

_MEASURE = "block_speed_m_s"  # every row has it


class Journal:
    """A file with one JSON object per line: first what was audited, then a row per finished run.

    Arguments:
        path: the file; made if it is missing.
        subject: what the rows belong to (scenario hash, versions); a file with another subject is refused.

    Raises:
        OutputError: when the file belongs to something else, or cannot be read or written.
    """

    def __init__(self, path: Path, subject: Row) -> None:
        self._path = path
        self.rows: dict[tuple[str, int], Row] = {}
        try:
            text = path.read_text(encoding="utf-8") if path.exists() else ""
            whole, _, _ = text.rpartition("\n")  # the last line may be cut off
            entries = [json.loads(line) for line in whole.splitlines()]
            self.rows = {(row["rung"], row["replicate"]): row for row in entries[1:] if row[_MEASURE] is not None}
        except OSError as error:
            raise OutputError(f"{path} cannot be used ({error.strerror})") from None
        except (ValueError, KeyError, TypeError):
            raise OutputError(f"{path} is damaged; delete it and start again") from None
        header = json.dumps(subject)
        if entries[:1] != [subject] and not header.startswith(text):
            raise OutputError(
                f"{path} is left from an interrupted audit of another scenario or with other versions; delete it, or "
                "name another folder with --out"
            )
        write_text(path, "\n".join([whole if entries else header, ""]))

    def add(self, row: Row) -> None:
        """Write a finished run down."""
        self.rows[row["rung"], row["replicate"]] = row
        try:
            with self._path.open("a", encoding="utf-8") as file:
                file.write(json.dumps(row) + "\n")
        except OSError as error:
            raise OutputError(f"{self._path} cannot be written ({error.strerror})") from None
