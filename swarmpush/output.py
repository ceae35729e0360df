"""Writing results: plain values for JSON, provenance, files that are never overwritten by accident."""

from __future__ import annotations

import json
import math
import os
import platform
import tempfile
from dataclasses import fields, is_dataclass
from enum import Enum
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

from swarmpush.scenario import Scenario


class OutputError(Exception):
    """A result cannot be written; the message says where and what to do."""


def plain(value: Any) -> Any:
    """Dataclasses, tuples, arrays and NumPy numbers as plain values; infinite or undefined numbers become None."""
    if is_dataclass(value) and not isinstance(value, type):
        return {f.name: plain(getattr(value, f.name)) for f in fields(value)}
    if isinstance(value, dict):
        return {str(k): plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, Path):
        return str(value)
    return value


def to_json(value: Any) -> str:
    """JSON text of a result, readable and the same for the same values."""
    return json.dumps(plain(value), indent=2, ensure_ascii=False, allow_nan=False)


def provenance(s: Scenario, *, seed: int | None = None) -> dict[str, Any]:
    """What is needed to get the same numbers again."""
    packages = ("swarmpush", "pymunk", "numpy", "numba", "scipy", "pandas")
    return {
        "scenario": s.about.name,
        "scenario_hash": s.digest(),
        "seed": s.trial.seed if seed is None else seed,
        "versions": {name: version(name) for name in packages} | {"python": platform.python_version()},
        "platform": f"{platform.system()} {platform.machine()}",
    }


def claim_folder(folder: Path, *, force: bool) -> Path:
    """Make an output folder, refusing one that holds something unless `force`.

    Raises:
        OutputError: when it exists and is not empty, or cannot be made.
    """
    try:
        if folder.exists() and not folder.is_dir():
            raise OutputError(f"{folder} is a file; name a folder with --out")
        if folder.is_dir() and any(folder.iterdir()) and not force:
            raise OutputError(f"{folder} already holds results; name another folder with --out, or add --force")
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise OutputError(f"{folder} cannot be made ({error.strerror}); name another folder with --out") from None
    return folder


def free_folder(parent: Path, stem: str) -> Path:
    """The first of stem, stem-2, stem-3 ... that does not exist yet in `parent`."""
    folder, k = parent / stem, 1
    while folder.exists():
        k += 1
        folder = parent / f"{stem}-{k}"
    return folder


def write_text(path: Path, text: str) -> None:
    """Write a file whole or not at all: under a temporary name first, then renamed.

    Raises:
        OutputError: when the place cannot be written.
    """
    try:
        with tempfile.NamedTemporaryFile("w", encoding="utf-8", dir=path.parent, delete=False, suffix=".part") as file:
            file.write(text)
        os.chmod(file.name, 0o644)
        os.replace(file.name, path)
    except OSError as error:
        raise OutputError(f"{path} cannot be written ({error.strerror})") from None
