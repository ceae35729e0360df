"""A study in the folder of its results, so that they can be read, shown and replayed without its file."""

from __future__ import annotations

import json
from dataclasses import asdict
from pathlib import Path

import pandas as pd

from swarmpush.loading import from_tables
from swarmpush.output import OutputError, write_table, write_text
from swarmpush.problems import ScenarioError
from swarmpush.studies.study import Axis, Stop, Study

DEFINITION, POINTS = "study.json", "points.parquet"


def save_study(study: Study, folder: Path) -> None:
    """Write a study's definition, the points first, so that a definition is a whole one.

    Raises:
        OutputError: when the folder cannot be written.
    """
    write_table(folder / POINTS, study.points)
    definition = {
        "name": study.name,
        "note": study.note,
        "base": study.base.to_tables(),
        "replicates": study.replicates,
        "stop": asdict(study.stop) if study.stop else None,
        "seed": study.seed,
        "outputs": study.outputs,
        "design": study.design,
        "axes": [asdict(axis) for axis in study.axes],
        "demand": study.demand,
    }
    write_text(folder / DEFINITION, json.dumps(definition, indent=1))


def read_study(folder: Path) -> Study:
    """The study that a folder holds.

    Raises:
        OutputError: when it holds none, or a damaged one.
    """
    try:
        read = json.loads((folder / DEFINITION).read_text(encoding="utf-8"))
        axes = tuple(Axis(**(axis | {"values": tuple(axis["values"])})) for axis in read["axes"])
        return Study(
            name=read["name"],
            note=read["note"],
            base=from_tables(read["base"]),
            points=pd.read_parquet(folder / POINTS).rename_axis("point"),
            replicates=read["replicates"],
            stop=Stop(**read["stop"]) if read["stop"] else None,
            seed=read["seed"],
            outputs=tuple(read["outputs"]),
            design=read["design"],
            axes=axes,
            demand=read["demand"],
        )
    except FileNotFoundError:
        raise OutputError(f"{folder} holds no study; make one with 'swarmpush sweep'") from None
    except (OSError, ValueError, KeyError, TypeError, ScenarioError) as error:
        reason = getattr(error, "strerror", None) or "damaged"
        raise OutputError(f"{folder}: {DEFINITION} or {POINTS} cannot be used ({reason})") from None
