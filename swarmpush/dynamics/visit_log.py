"""The finished visits of a run: in memory while they are few, in a temporary file when they become many."""

from __future__ import annotations

import tempfile
import weakref
from typing import IO

import numpy as np
from numpy.typing import NDArray

from swarmpush.dynamics.ledger import VISIT, Ledger

KEPT = 200_000  # visits held in memory, some 27 MB


class VisitLog:
    """Visits fetched from a ledger, whose own log holds only a few thousand."""

    def __init__(self, kept: int = KEPT) -> None:
        self._kept = kept
        self._parts: list[NDArray[np.void]] = []
        self._n_held = 0
        self._file: IO[bytes] | None = None

    def fetch(self, ledger: Ledger) -> None:
        """Take over what has been finished since the last time.

        Raises:
            OSError: when the temporary file cannot be written.
        """
        n = int(ledger.n_log[0])
        ledger.n_log[0] = 0
        if n == 0:
            return
        self._parts.append(ledger.log[:n].copy())
        self._n_held += n
        if self._n_held > self._kept:
            if self._file is None:
                self._file = tempfile.TemporaryFile()  # noqa: SIM115 - it lives as long as the log
                weakref.finalize(self, self._file.close)
            for part in self._parts:
                self._file.write(part.tobytes())
            self._parts, self._n_held = [], 0

    def rows(self, ledger: Ledger) -> NDArray[np.void]:
        """All visits fetched so far, and those that have not ended."""
        self.fetch(ledger)
        spilled = np.zeros(0, dtype=VISIT)
        if self._file:
            self._file.seek(0)
            spilled = np.frombuffer(self._file.read(), dtype=VISIT)
        return np.concatenate([spilled, *self._parts, ledger.slots[ledger.slots["partner"] >= 0]])
