"""Finished runs of an audit, written down as they come, so that an interrupted audit goes on where it stopped."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from swarmpush.output import OutputError

Row = dict[str, Any]


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
            lines = path.read_text(encoding="utf-8").splitlines() if path.exists() else []
            entries = [json.loads(line) for line in lines if line.endswith("}")]  # the last line may be cut off
            if entries and entries[0] != subject:
                raise OutputError(
                    f"{path} is left from an interrupted audit of another scenario or with other versions; delete it, "
                    "or name another folder with --out"
                )
            self.rows = {(row["rung"], row["replicate"]): row for row in entries[1:]}
            if not entries:
                path.write_text(json.dumps(subject) + "\n", encoding="utf-8")
            elif not path.read_bytes().endswith(b"\n"):
                self._append("\n")
        except OSError as error:
            raise OutputError(f"{path} cannot be used ({error.strerror})") from None
        except (ValueError, KeyError, TypeError):
            raise OutputError(f"{path} is damaged; delete it and start again") from None

    def add(self, row: Row) -> None:
        """Write a finished run down."""
        self.rows[row["rung"], row["replicate"]] = row
        self._append(json.dumps(row) + "\n")

    def _append(self, text: str) -> None:
        with self._path.open("a", encoding="utf-8") as file:
            file.write(text)
