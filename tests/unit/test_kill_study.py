"""Studies that are killed: nothing is lost, nothing doubled, and nobody is left behind."""

from __future__ import annotations

import sys
from pathlib import Path
from unittest.mock import patch

import pytest

sys.path.insert(0, str(Path(__file__).parents[2] / "tools"))

import kill_study

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(sys.platform != "linux", reason="processes are found by their parents in /proc"),
]


def test_killed_studies_end_like_undisturbed_ones(tmp_path: Path) -> None:
    """However often leader or workers are killed, the final tables are the same to the last bit."""
    with patch.multiple(kill_study, LONGEST_S=0.5, MOST_WRITES=2):
        tally = kill_study.kill_often(3, 40, 2, tmp_path)
    assert (tally.lost, tally.doubled, tally.stray) == (0, 0, 0)
    assert tally.identical == tally.studies >= 1
    assert tally.kills.total() == 3
    assert all(tally.kills[kind] for kind in kill_study.KINDS)
