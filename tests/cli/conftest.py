"""Results that several tests look at, made once by the command line itself."""

from __future__ import annotations

from pathlib import Path

import pytest
from commands import DONE, Saved, call, edited


@pytest.fixture(scope="session")
def short(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A scenario file that takes a moment."""
    path = tmp_path_factory.mktemp("scenario") / "short.toml"
    path.write_text(edited(), encoding="utf-8")
    return path


def _save(command: str, scenario: Path, factory: pytest.TempPathFactory) -> Saved:
    folder = factory.mktemp("results") / command
    outcome = call(command, scenario, "--json", "--out", folder)
    assert outcome.code == DONE, outcome.err
    return Saved(outcome, folder)


@pytest.fixture(scope="session")
def planned(short: Path, tmp_path_factory: pytest.TempPathFactory) -> Saved:
    """A plan with --json and --out."""
    return _save("plan", short, tmp_path_factory)


@pytest.fixture(scope="session")
def ran(short: Path, tmp_path_factory: pytest.TempPathFactory) -> Saved:
    """A run with --json and --out."""
    return _save("run", short, tmp_path_factory)


@pytest.fixture(scope="session")
def audited(short: Path, tmp_path_factory: pytest.TempPathFactory) -> Saved:
    """An audit with --json and --out."""
    return _save("audit", short, tmp_path_factory)
