"""Writing results: plain values for JSON, provenance, files that are never overwritten by accident."""

from __future__ import annotations

import json
import math
import os
import platform
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import fields, is_dataclass
from enum import Enum
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from swarmpush.scenario import Scenario

if TYPE_CHECKING:
    import pandas as pd


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


def to_json(value: Any, *, is_ascii: bool = False) -> str:
    """JSON text of a result, readable and the same for the same values; in ASCII for streams of unknown encoding."""
    return json.dumps(plain(value), indent=2, ensure_ascii=is_ascii, allow_nan=False)


@cache
def versions() -> Mapping[str, str]:
    """Versions of all that the numbers depend on."""
    packages = ("swarmpush", "pymunk", "numpy", "numba", "scipy", "pandas")
    return {name: version(name) for name in packages} | {"python": platform.python_version()}


def provenance(s: Scenario, *, seed: int | None = None) -> dict[str, Any]:
    """What is needed to get the same numbers again."""
    return {
        "scenario": s.about.name,
        "scenario_hash": s.digest(),
        "seed": s.trial.seed if seed is None else seed,
        "versions": dict(versions()),
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


@contextmanager
def written_whole(path: Path) -> Iterator[Path]:
    """A temporary file beside `path` that takes its place once it is written; nothing half-written is left.

    Raises:
        OutputError: when the place cannot be written.
    """
    part: Path | None = None
    try:
        handle, name = tempfile.mkstemp(dir=path.parent, suffix=".part")
        os.close(handle)
        part = Path(name)
        yield part
        part.chmod(0o644)
        part.replace(path)
    except OSError as error:
        remedy = "" if path.parent.is_dir() else "; make its folder first"
        raise OutputError(f"{path} cannot be written ({error.strerror}){remedy}") from None
    finally:
        if part is not None:
            part.unlink(missing_ok=True)


def write_text(path: Path, text: str) -> None:
    """Write a file whole or not at all.

    Raises:
        OutputError: when the place cannot be written.
    """
    with written_whole(path) as part:
        part.write_text(text, encoding="utf-8")


def write_bytes(path: Path, data: bytes) -> None:
    """Write a binary file whole or not at all.

    Raises:
        OutputError: when the place cannot be written.
    """
    with written_whole(path) as part:
        part.write_bytes(data)


def write_table(path: Path, table: pd.DataFrame) -> None:
    """Write a table as Parquet, whole or not at all.

    Raises:
        OutputError: when the place cannot be written.
    """
    with written_whole(path) as part:
        table.to_parquet(part, index=False)
