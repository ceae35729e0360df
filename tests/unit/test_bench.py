"""The contenders of the bench run, so that its numbers can be had when they are wanted."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tools"))

import contenders

N_STEPS = 400


def test_the_compiled_loop_runs() -> None:
    """The package's own loop moves the bodies of the crowded corridor."""
    ours = contenders.Ours(contenders.wide_corridor(16))
    before = ours.state()
    ours.advance(N_STEPS)
    assert (ours.state() != before).any()


@pytest.mark.parametrize("contender", [contenders.Bare, contenders.ByHand])
def test_the_others_run(contender: type[contenders.Bare | contenders.ByHand]) -> None:
    """The bare engine and the hand-written script take their steps, and bodies touch meanwhile."""
    other = contender(contenders.wide_corridor(16))
    other.advance(N_STEPS)
    assert other.touches_per_step() > 0.0
