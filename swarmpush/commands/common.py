"""What several commands share: options, reading what is named, folders, and results on the screen.

Heavy packages are imported inside functions, so that help comes at once.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

if TYPE_CHECKING:
    from swarmpush.scenario import Scenario

BAD_INPUT, NOT_MET, INTERRUPTED = 2, 3, 130  # exit codes
RESULTS = Path("results")  # where results of many runs go when no folder is named
JOURNAL = "unfinished.jsonl"

Workers = Annotated[
    int | None, typer.Option("--workers", min=1, max=1024, help="processes; default: one per processor")
]
Cluster = Annotated[
    str | None,
    typer.Option("--cluster", metavar="ADDRESS", help="a Dask scheduler, e.g. tcp://10.0.0.1:8786, whose workers run"),
]
FromStudy = Annotated[
    Path | None, typer.Option("--from-study", metavar="FOLDER", help="a run of a study again, bit for bit")
]
Point = Annotated[int | None, typer.Option(min=0, help="with --from-study: its point, from 0")]
Replicate = Annotated[
    int | None, typer.Option(min=0, help="with --from-study: its number at that point, from 0; default: 0")
]
ScenarioArgument = Annotated[
    str, typer.Argument(metavar="SCENARIO", help="a scenario file (.toml), or the name of a demo scenario")
]
AsJson = Annotated[bool, typer.Option("--json", help="print the result as JSON and nothing else")]
OutFolder = Annotated[Path | None, typer.Option("--out", metavar="FOLDER", help="folder for the results")]
Force = Annotated[bool, typer.Option("--force", help="write into a folder that already holds results")]
Seed = Annotated[int | None, typer.Option("--seed", min=0, max=2**62, help="another seed than the scenario's")]


class Refusal(Exception):
    """Bad input that no library function has refused yet."""


def load_scenario(name: str) -> Scenario:
    """The scenario of a file, or the demo of that name if there is no such file."""
    import swarmpush
    from swarmpush.demos import DEMOS

    path = Path(name)
    if not path.suffix and not path.exists():
        if path.name.replace("-", "_") not in DEMOS:
            raise Refusal(f"{name}: no such file; the demo scenarios are {', '.join(DEMOS)}")
        path = swarmpush.demo(path.name.replace("-", "_"))
    return swarmpush.load(path)


def scenario_of_study(folder: Path, point: int | None, replicate: int | None, seed: int | None) -> tuple[Scenario, int]:
    """Scenario and seed of a run of a study."""
    from swarmpush.studies.replay import run_of_study

    if point is None or seed is not None:
        raise Refusal("--from-study needs --point, and has a seed for each --replicate instead of --seed")
    try:
        return run_of_study(folder, point, replicate or 0)
    except IndexError as error:
        raise Refusal(f"--point: {error}") from None


def resumable(out: Path | None, stem: str, force: bool) -> tuple[Path, Path]:
    """The folder of a command that makes many runs, and the journal of finished ones in it; one left there is used."""
    from swarmpush.output import claim_folder, free_folder

    folder = out or free_folder(RESULTS, stem)
    claim_folder(folder, force=force or (folder / JOURNAL).exists())
    return folder, folder / JOURNAL


@contextmanager
def resuming(folder: Path) -> Iterator[None]:
    """Turn an interruption into a word on how to go on, and the exit code for it."""
    try:
        yield
    except KeyboardInterrupt:
        print(f"interrupted; go on with --out {folder}", file=sys.stderr)
        raise typer.Exit(INTERRUPTED) from None


def stem_of(name: str) -> str:
    """What results of a file are named by."""
    return Path(name).stem or "scenario"


def refuse_existing(path: Path, force: bool) -> None:
    """Refuse to write over a file unless that is asked for."""
    if path.exists() and not force:
        raise Refusal(f"{path} is there already; name another file, or add --force")


def preparing(is_quiet: bool) -> Any:
    """A progress bar, or none for a quiet command."""
    from swarmpush.reporting.progress import progress_bar

    return progress_bar(is_quiet=is_quiet)


def print_json(value: Any) -> None:
    """Print a result as JSON."""
    from swarmpush.output import to_json

    print(to_json(value, is_ascii=True))


def print_place(what: str, path: Path, as_json: bool) -> None:
    """Print where a file is."""
    if as_json:
        print_json({what: path})
    else:
        print(f"{what}: {path}")
