"""One run of a study by itself, to be looked at."""

from __future__ import annotations

from pathlib import Path

from swarmpush.auditing.replicates import replicate_seed
from swarmpush.scenario import Scenario
from swarmpush.studies.saved import read_study


def run_of_study(folder: Path, point: int, replicate: int = 0) -> tuple[Scenario, int]:
    """The scenario and the seed of a run; `simulate(scenario, seed=seed)` makes it again, bit for bit.

    Arguments:
        folder: results of a study. point, replicate: which run, both from 0; it need not have been made.

    Raises:
        OutputError: when the folder holds no study. IndexError: when there is no such point. ScenarioError: when the
        point makes no valid scenario.
    """
    study = read_study(folder)
    return study.scenario(point), replicate_seed(study.seed, replicate)
