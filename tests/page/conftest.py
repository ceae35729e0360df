"""One small audit with its report, and a browser without a window to look at it."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import swarmpush
from swarmpush import Audit, Run
from swarmpush.studies.store import Summary

REQUIRED = "SWARMPUSH_BROWSER"  # set to "required": without a browser the tests fail instead of being skipped
HOSTILE = """<script>document.title="taken"</script> & <img src="https://example.org/a.png" onerror="1">'"""


@pytest.fixture(scope="session")
def result() -> Audit:
    """An audit of three runs of three seconds, whose name and note try to get into the page as markup."""
    scenario = swarmpush.load(swarmpush.demo("service_passage"))
    about = {"name": HOSTILE[:120], "note": HOSTILE}
    short = scenario.replace(about=about, goal={"time_limit": 3.0}, trial={"replicates": 3})
    return swarmpush.audit(short)


@pytest.fixture(scope="session")
def run(result: Audit) -> Run:
    """One run of the same scenario."""
    return result.sample


@pytest.fixture(scope="session")
def audit_page(result: Audit, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The audit's report."""
    return swarmpush.report(result, tmp_path_factory.mktemp("audit") / "report.html")


@pytest.fixture(scope="session")
def run_page(run: Run, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The run's report."""
    return swarmpush.report(run, tmp_path_factory.mktemp("run") / "report.html")


@pytest.fixture(scope="session")
def study_page(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The report of a study over two axes of numbers, with a failure and a hostile name."""
    base = swarmpush.load(swarmpush.demo("service_passage")).replace(goal={"time_limit": 2.0})
    counts, speeds = np.meshgrid([1, 2, 3], [0.1, 0.15, 0.2])
    points = pd.DataFrame({"pushers.count": counts.ravel(), "pushers.free_speed": speeds.ravel()}).rename_axis("point")
    outputs = ("block speed", "arrival", "strike rate", "nudge")
    study = swarmpush.Study(
        HOSTILE[:120], HOSTILE, base, points, 2, None, 1, outputs, "grid", demand="block_speed>=0.2 mm/s"
    )
    rows = [
        {"point": point, "replicate": k, "seed": k, **swarmpush.simulate(study.scenario(point), seed=k).summary()}
        for point in range(len(points))
        for k in range(2)
    ]
    failures = pd.DataFrame(
        [{"point": 0, "replicate": 1, "seed": 1, "error": "Error", "message": HOSTILE, "tables": ""}]
    )
    summary = Summary(len(points), len(points), 0, len(rows) + 1, len(rows), 1, 2.0)
    result = swarmpush.StudyResult(study, summary, pd.DataFrame(rows), failures)
    return swarmpush.report(result, tmp_path_factory.mktemp("study") / "report.html")


@pytest.fixture(scope="session")
def browser() -> Iterator[Any]:
    """Chromium as the system has it."""
    program = next((found for name in ("chromium", "chromium-browser") if (found := shutil.which(name))), None)
    try:
        from playwright.sync_api import sync_playwright
    except ImportError:
        _do_without("Playwright is not installed")
    if program is None:
        _do_without("there is no Chromium on this machine")
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=program, args=["--no-sandbox"])
        yield browser
        browser.close()


def _do_without(reason: str) -> None:
    if os.environ.get(REQUIRED) == "required":
        pytest.fail(f"{reason}, and {REQUIRED} says that one is required")
    pytest.skip(f"{reason}, so nobody can look at the page")
