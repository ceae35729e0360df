"""Commands on studies: sweep, and a look into one."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from swarmpush.commands.common import (
    INTERRUPTED,
    RESULTS,
    AsJson,
    Cluster,
    Refusal,
    Workers,
    preparing,
    print_json,
    stem_of,
)

if TYPE_CHECKING:
    from swarmpush.studies.study import Study


StudyArgument = Annotated[
    str, typer.Argument(metavar="STUDY", help="a study file (.toml), or the name of a demo study")
]
StudyFolder = Annotated[Path, typer.Argument(metavar="FOLDER", help="results of a study")]


def sweep(
    study: StudyArgument,
    workers: Workers = None,
    cluster: Cluster = None,
    dry_run: Annotated[
        bool, typer.Option("--dry-run", help="only say what the study is and what it will take")
    ] = False,
    as_json: AsJson = False,
    out: Annotated[
        Path | None,
        typer.Option(
            metavar="FOLDER", help="folder for the results, in which a study goes on; default: results/NAME-study"
        ),
    ] = None,
    force: Annotated[
        bool, typer.Option("--force", help="throw away what the folder holds of another study, and start anew")
    ] = False,
) -> None:
    """Run a scenario at many points, several runs each. The same command goes on with what was interrupted."""
    from swarmpush.reporting import study_console
    from swarmpush.studies.estimate import estimate
    from swarmpush.studies.saved import DEFINITION
    from swarmpush.studies.trying import warnings

    s = _load_study(study)
    folder = out or RESULTS / f"{stem_of(study)}-study"
    is_new = force or not (folder / DEFINITION).exists()
    if dry_run or (is_new and not as_json):
        told = warnings(s)
        with preparing(as_json):
            cost = estimate(s, workers)
        if not as_json:
            study_console.show_cost(s, cost, told)
        else:
            print_json({"study": s.name, "design": s.design, "cost": cost, "warnings": told})
        if dry_run:
            return
    _run_study(s, folder, workers, cluster, as_json, force)


def study_show(folder: StudyFolder, as_json: AsJson = False) -> None:
    """Show how far a study has come: runs done and planned, failures, rate, time left. It may be running meanwhile."""
    from swarmpush.reporting.study_words import summary_words
    from swarmpush.studies.store import read_summary

    summary = read_summary(folder)
    if as_json:
        print_json({"folder": folder, "summary": summary})
        return
    print(summary_words(summary))


def study_failures(folder: StudyFolder, as_json: AsJson = False) -> None:
    """List the runs and points that failed, at which values, and why."""
    from swarmpush.reporting import study_console
    from swarmpush.studies.saved import read_study
    from swarmpush.studies.store import read_failures

    failures, s = read_failures(folder), read_study(folder)
    if as_json:
        print_json({"folder": folder, "failures": failures.drop(columns="tables").to_dict("records")})
        return
    study_console.show_failures(failures, s, folder)


def study_rerun_failed(
    folder: StudyFolder, workers: Workers = None, cluster: Cluster = None, as_json: AsJson = False
) -> None:
    """Forget the failures of a study and make these runs again; then go on with it if it was not finished."""
    from swarmpush.studies.saved import read_study
    from swarmpush.studies.store import forget_failures

    s = read_study(folder)
    n = forget_failures(folder)
    if not as_json:
        print(f"{n} failures forgotten")
    _run_study(s, folder, workers, cluster, as_json, force=False)


def _load_study(name: str) -> Study:
    """The study of a file, or the demo study of that name if there is no such file."""
    import swarmpush
    from swarmpush.demos import STUDY_DEMOS

    path = Path(name)
    if not path.suffix and not path.exists():
        if path.name.replace("-", "_") not in STUDY_DEMOS:
            raise Refusal(f"{name}: no such file; the demo studies are {', '.join(STUDY_DEMOS)}")
        path = swarmpush.study_demo(path.name.replace("-", "_"))
    return swarmpush.load_study(path)


def _run_study(s: Study, folder: Path, workers: int | None, cluster: str | None, as_json: bool, force: bool) -> None:
    """Run a study, write up what came out, and show it."""
    import swarmpush
    from swarmpush.reporting import console, study_console
    from swarmpush.reporting.progress import study_bar
    from swarmpush.studies.pools import PoolError

    try:
        with study_bar(is_quiet=as_json) as bar:
            result = swarmpush.sweep(s, folder, workers=workers, cluster=cluster, progress=bar, is_forced=force)
    except KeyboardInterrupt:
        print(f"interrupted; what is done is kept, and the same command goes on (folder {folder})", file=sys.stderr)
        raise typer.Exit(INTERRUPTED) from None
    except PoolError as error:
        raise Refusal(str(error)) from None
    files = result.save(folder) | {"folder": str(folder), "report": "report.html"}
    swarmpush.report(result, folder / "report.html")
    if as_json:
        print_json(result.to_dict(files))
        return
    study_console.show_study(result, folder)
    console.say_where(folder / "report.html", folder / "table.csv")
