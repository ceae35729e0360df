"""An audit that adds runs while verdicts are undecided."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest

import swarmpush
from swarmpush.auditing.audit import Audit, Look, load_audit
from swarmpush.auditing.statistics import Verdict, share_interval
from swarmpush.demos import demo
from swarmpush.reporting.audit_words import bench_words
from swarmpush.scenario import Scenario

FIRST, BUDGET = 2, 8  # arrival cannot be decided with so few, so that all looks are taken


@pytest.fixture(scope="module")
def short() -> Scenario:
    return swarmpush.load(demo("service_passage")).replace(goal={"time_limit": 5.0}, pushers={"count": 2})


@pytest.fixture(scope="module")
def looked(short: Scenario) -> Audit:
    return swarmpush.audit(short, replicates=FIRST, budget=BUDGET)


def test_runs_are_added_up_to_the_budget(short: Scenario, looked: Audit) -> None:
    """Undecided verdicts call for more runs, which are those that would have been made at once."""
    assert any(finding.verdict is Verdict.UNDECIDED for finding in looked.verdicts)
    assert looked.look == Look(2, (2, 4, 8))
    at_once = swarmpush.audit(short, replicates=BUDGET)
    pd.testing.assert_frame_equal(looked.replicates, at_once.replicates, check_exact=True)
    assert at_once.look == Look(0, (8,))


def test_each_look_is_surer(looked: Audit) -> None:
    """All looks together have the scenario's confidence, so each interval has more (Bonferroni)."""
    confidence = looked.look.confidence(looked.scenario)
    assert confidence == pytest.approx(1 - 0.05 / 3, rel=1e-12)
    assert all(finding.confidence == confidence for finding in looked.verdicts)
    assert looked.to_dict()["looks"] == {"planned": [2, 4, 8], "number": 2, "confidence": confidence}
    assert "98.3%" in looked.answer
    assert looked.scenario.trial.confidence == 0.95


def test_a_saved_audit_remembers_its_looks(looked: Audit, tmp_path: Path) -> None:
    """An audit that is read again says the same."""
    looked.save(tmp_path)
    again = load_audit(tmp_path)
    assert again.look == looked.look
    assert again.answer == looked.answer


def test_a_budget_below_the_first_look_is_refused(short: Scenario) -> None:
    """There is nothing to add then."""
    with pytest.raises(ValueError, match="a budget of 3 runs given; it is below the 4 of the first look"):
        swarmpush.audit(short, replicates=4, budget=3)


def test_how_many_bench_runs_would_tell(looked: Audit) -> None:
    """With no arrival at all a few bench runs show that less than half arrive: n/(n + z^2) above one half, n = 4."""
    assert looked.arrival.mean == 0.0
    assert looked.bench_runs == 4
    assert looked.to_dict()["bench_runs"] == 4
    likely = replace(looked, arrival=share_interval(6, 12, 0.95))
    assert likely.bench_runs is None
    assert "as likely as not" in bench_words(likely)
    assert "some 4 runs there" in bench_words(looked)
