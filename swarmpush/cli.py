"""The command line. It only calls the public interface, words the results, and maps errors to exit codes.

Exit codes: 0 done, 2 bad input, 3 a demand is not met, 130 interrupted. Heavy packages are imported inside
the commands, so that help comes at once.
"""

from __future__ import annotations

import io
import os
import shutil
import sys
import textwrap
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from swarmpush.auditing.claims import CLAIMS, MEASURES, VERDICTS

if TYPE_CHECKING:
    import pandas as pd

    from swarmpush.kinematics.declarations import Declarations
    from swarmpush.kinematics.planning import Plan
    from swarmpush.scenario import Scenario
    from swarmpush.studies.study import Study
    from swarmpush.viewing.film import Film

BAD_INPUT, NOT_MET, INTERRUPTED = 2, 3, 130
RESULTS = Path("results")  # where results of many runs go when no folder is named
JOURNAL = "unfinished.jsonl"
_REQUIRE_HELP = (
    "exit with 3 unless this is met; may be repeated. NAME>=NUMBER or NAME<=NUMBER, in SI units or with a unit, judged "
    'by the doubtful end of the interval, the low end for >=: "arrival>=0.9", "block_speed>=100 um/s"; names: '
    f'{", ".join(MEASURES)}. CLAIM=VERDICT, or a CLAIM alone that must hold: "lock=holds", "arrival"; claims: '
    f"{', '.join(CLAIMS)}; verdicts: {', '.join(VERDICTS)}"
)

app = typer.Typer(
    help="Does a crowd of blind pushers really move the block along the channel? Say so before parts are made.",
    epilog="Predictions of a model, no safety proof. Local rules and qualified staff decide what may be run.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)

studies = typer.Typer(
    no_args_is_help=True, rich_markup_mode=None, help="Look into a study, and make its failed runs again."
)
app.add_typer(studies, name="study", short_help="look into a study; make its failed runs again")

StudyArgument = Annotated[
    str, typer.Argument(metavar="STUDY", help="a study file (.toml), or the name of a demo study")
]
StudyFolder = Annotated[Path, typer.Argument(metavar="FOLDER", help="results of a study")]
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


class _Refusal(Exception):
    """Bad input that no library function has refused yet."""


def _show_version(is_asked: bool) -> None:
    if is_asked:
        import swarmpush

        print(f"swarmpush {swarmpush.__version__}")
        raise typer.Exit


@app.callback()
def _common(
    version: Annotated[
        bool, typer.Option("--version", callback=_show_version, is_eager=True, help="print the version and end")
    ] = False,
) -> None:
    pass


@app.command(short_help="laps and block speed from geometry alone")
def plan(
    scenario: ScenarioArgument,
    vary: Annotated[
        str | None,
        typer.Option(metavar="KEY=LOW:HIGH:N", help="laps along a key of the scenario: channel.width=25cm:40cm:16"),
    ] = None,
    figure: Annotated[
        bool,
        typer.Option(
            "--figure",
            help="draw the laps, the laps along --vary (default: the routine's first angle, half to one and a half of "
            "it), and what becomes of starts, as PNG and SVG; without --out into a new folder, results/NAME-plan",
        ),
    ] = False,
    as_json: AsJson = False,
    out: OutFolder = None,
    force: Force = False,
) -> None:
    """Predict laps, their stability and the block's speed from geometry alone."""
    import swarmpush
    from swarmpush.output import claim_folder, free_folder
    from swarmpush.reporting.plan_results import PlanResults

    s = _load(scenario)
    key, values = _range(s, vary, figure)
    folder = out or (free_folder(RESULTS, f"{_stem(scenario)}-plan") if figure else None)
    if folder:
        claim_folder(folder, force=force)
    with _preparing(as_json) as bar:
        planned = swarmpush.plan(s)
        results = PlanResults(
            planned,
            key=key,
            cycle_map=swarmpush.cycle_map(s, key, values, progress=bar) if key else None,
            basin_map=_basin_map(planned, bar) if figure else None,
            declarations=_declarations(s),
        )
    answer = results.save(folder, is_drawn=figure) if folder else results.to_dict()
    if as_json:
        _print_json(answer)
        return
    from swarmpush.reporting import console

    console.show_plan(planned)
    for sentence in results.sentences():
        print(textwrap.fill(sentence, shutil.get_terminal_size().columns, subsequent_indent="    "))
    if folder:
        drawn = ["cycle_map.png"] * figure + ["basin_map.png"] * (results.basin_map is not None)
        console.say_where(*(folder / name for name in ("plan.json", "plan.png", *drawn)))


@app.command(short_help="one run with rigid bodies, books balanced")
def run(
    scenario: Annotated[
        str | None,
        typer.Argument(metavar="SCENARIO", help="a scenario file (.toml), or the name of a demo; or --from-study"),
    ] = None,
    from_study: FromStudy = None,
    point: Point = None,
    replicate: Replicate = None,
    seed: Seed = None,
    converging: Annotated[
        bool,
        typer.Option(
            "--converge",
            help="instead run the same seeds at the time step, half and a quarter of it, and say what the step costs; "
            "without --out into a new folder, results/NAME-converge",
        ),
    ] = False,
    replicates: Annotated[
        int | None,
        typer.Option(
            min=1,
            max=100_000,
            help="with --converge: seeds; default: the scenario's trial.replicates up to 8, or 1 if nothing is drawn",
        ),
    ] = None,
    as_json: AsJson = False,
    out: OutFolder = None,
    force: Force = False,
) -> None:
    """Run the scenario once with rigid bodies, and balance the books; or with --converge see what the step costs."""
    import swarmpush
    from swarmpush.output import claim_folder

    if replicates is not None and not converging:
        raise _Refusal("--replicates goes with --converge; a run is one run, and 'swarmpush audit' makes many")
    stem = _stem(scenario or str(from_study))
    if from_study is None and scenario is not None:
        if point is not None or replicate is not None:
            raise _Refusal("--point and --replicate go with --from-study")
        s = _load(scenario)
    elif from_study is not None and scenario is None:
        s, seed = _of_study(from_study, point, replicate, seed)
    else:
        raise _Refusal("name a scenario, or a study's folder with --from-study and one of its points with --point")
    if converging:
        _converge(s if seed is None else s.replace(trial={"seed": seed}), stem, replicates, as_json, out, force)
        return
    folder = claim_folder(out, force=force) if out else None
    with _preparing(as_json) as bar:
        result = swarmpush.simulate(s, seed=seed, progress=lambda share: bar(share, 1.0, "running"))
    files = result.save(folder) if folder else None
    if folder:
        swarmpush.report(result, folder / "report.html")
    if as_json:
        _print_json(result.to_dict(files))
        return
    from swarmpush.reporting import console

    console.show_run(result)
    if folder:
        console.say_where(folder / "run.json", folder / "report.html")


def _converge(s: Scenario, stem: str, replicates: int | None, as_json: bool, out: Path | None, force: bool) -> None:
    import swarmpush
    from swarmpush.auditing.converge import count_replicates

    try:
        n = count_replicates(s, replicates)
    except ValueError as error:
        raise _Refusal(f"--replicates: {error}") from None
    folder, journal = _resumable(out, f"{stem}-converge", force)
    with _resuming(folder), _preparing(as_json) as bar:
        result = swarmpush.converge(s, replicates=n, journal=journal, progress=bar)
    files = result.save(folder) | {"folder": str(folder)}
    journal.unlink(missing_ok=True)
    if as_json:
        _print_json(result.to_dict(files))
        return
    from swarmpush.reporting import console

    console.show_convergence(result)
    console.say_where(folder / "convergence.json")


@app.command(short_help="the plan against rigid bodies: what holds, what it costs")
def audit(
    scenario: ScenarioArgument,
    replicates: Annotated[
        int | None, typer.Option(min=2, max=100_000, help="independent runs per rung; default: the scenario's")
    ] = None,
    budget: Annotated[
        int | None,
        typer.Option(
            min=2,
            max=100_000,
            help="most runs per rung: doubled up to this while a verdict is undecided; default: no more than the first",
        ),
    ] = None,
    around: Annotated[
        bool,
        typer.Option(
            "--around",
            help="also run crews of other sizes, and each measured value a quarter lower and higher: which crew sizes "
            "are of use, and what to measure first; takes several times as long",
        ),
    ] = False,
    workers: Annotated[int | None, typer.Option(min=1, max=1024, help="threads; default: one per processor")] = None,
    seed: Seed = None,
    require: Annotated[
        list[str] | None,
        typer.Option(
            metavar="DEMAND",
            help=_REQUIRE_HELP,
        ),
    ] = None,
    as_json: AsJson = False,
    out: Annotated[
        Path | None,
        typer.Option(metavar="FOLDER", help="folder for the results; default: a new one, results/NAME-audit"),
    ] = None,
    force: Force = False,
) -> None:
    """Hold the plan against rigid bodies: does the block arrive, which assumptions fail, what does each cost?"""
    import swarmpush

    demanded = _demands(require or [])
    s = _load(scenario)
    if seed is not None:
        s = s.replace(trial={"seed": seed})
    first = s.trial.replicates if replicates is None else replicates
    if budget is not None and budget < first:
        raise _Refusal(f"--budget: {budget} runs are fewer than the {first} of the first look")
    folder, journal = _resumable(out, f"{_stem(scenario)}-audit", force)
    with _resuming(folder), _preparing(as_json) as bar:
        result = swarmpush.audit(
            s,
            replicates=replicates,
            budget=budget,
            around=around,
            require=demanded,
            workers=workers,
            journal=journal,
            progress=bar,
        )
    files = result.save(folder) | {"folder": str(folder), "report": "report.html"}
    swarmpush.report(result, folder / "report.html")
    journal.unlink(missing_ok=True)
    if as_json:
        _print_json(result.to_dict(files))
    else:
        from swarmpush.reporting import console

        console.show_audit(result)
        console.say_where(folder / "report.html")
    unmet = [demand for demand in result.demands if not demand.is_met]
    for demand in unmet:
        print(f"required: {demand.demand}, but {demand.reason}", file=sys.stderr)
    if unmet:
        raise typer.Exit(NOT_MET)


@app.command(short_help="one scenario at many points: thousands of runs, resumable")
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
    folder = out or RESULTS / f"{_stem(study)}-study"
    if dry_run or force or not (folder / DEFINITION).exists():
        told = warnings(s)
        with _preparing(as_json):
            cost = estimate(s, workers)
        if not as_json:
            study_console.show_cost(s, cost, told)
        elif dry_run:
            _print_json({"study": s.name, "design": s.design, "cost": cost, "warnings": told})
        if dry_run:
            return
    _run_study(s, folder, workers, cluster, as_json, force)


@studies.command("show", short_help="how far a study has come, also while it runs")
def study_show(folder: StudyFolder, as_json: AsJson = False) -> None:
    """Show how far a study has come: runs done and planned, failures, rate, time left. It may be running meanwhile."""
    from swarmpush.reporting.study_words import summary_words
    from swarmpush.studies.store import read_summary

    summary = read_summary(folder)
    if as_json:
        _print_json({"folder": folder, "summary": summary})
        return
    print(summary_words(summary))


@studies.command("failures", short_help="which runs failed, and why")
def study_failures(folder: StudyFolder, as_json: AsJson = False) -> None:
    """List the runs and points that failed, at which values, and why."""
    from swarmpush.reporting import study_console
    from swarmpush.studies.saved import read_study
    from swarmpush.studies.store import read_failures

    failures, s = read_failures(folder), read_study(folder)
    if as_json:
        _print_json({"folder": folder, "failures": failures.drop(columns="tables").to_dict("records")})
        return
    study_console.show_failures(failures, s, folder)


@studies.command("rerun-failed", short_help="make the failed runs of a study again")
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


@app.command(short_help="look at a run: in a window, or as a picture or film")
def watch(
    source: Annotated[
        str | None,
        typer.Argument(metavar="SOURCE", help="a scenario file or demo, or a folder with a saved run; or --from-study"),
    ] = None,
    from_study: FromStudy = None,
    point: Point = None,
    replicate: Replicate = None,
    seed: Seed = None,
    export: Annotated[
        Path | None,
        typer.Option(
            "--export",
            metavar="FILE",
            help="open no window, but write a picture (.png, .svg) or a film (.gif, .mp4) of the run",
        ),
    ] = None,
    size: Annotated[
        str | None,
        typer.Option("--size", metavar="WxH", help="of window, picture or film; default: 1280x720, of a GIF 800x300"),
    ] = None,
    at: Annotated[float | None, typer.Option(min=0.0, help="model time of a picture, s; default: the end")] = None,
    span: Annotated[
        str | None, typer.Option("--span", metavar="A:B", help="model times of a film, s; default: the whole run")
    ] = None,
    fps: Annotated[int, typer.Option("--fps", min=1, max=120, help="frames per second of a film")] = 25,
    speed: Annotated[
        float | None,
        typer.Option(
            "--speed",
            min=1e-3,
            max=1e4,
            help="model time over time on the clock; default: a run passes in a minute, a film is of 10 s",
        ),
    ] = None,
    as_json: AsJson = False,
    force: Annotated[bool, typer.Option("--force", help="replace the file if it is there")] = False,
) -> None:
    """Look at a run in a window, live or replayed, in which F1 lists the keys; or write a picture or a film of it."""
    picture, times = _size(size), _span(span)
    if export is None and (as_json or at is not None or span is not None):
        raise _Refusal("--json, --at and --span go with --export")
    shown, seed = _to_watch(source, from_study, point, replicate, seed)
    if export is None:
        from swarmpush.viewing.app import watch as open_window

        open_window(shown, seed=seed, size=picture or (1280, 720), speed=speed)
        return
    from swarmpush.viewing.to_file import export_film

    _refuse_existing(export, force)
    with _preparing(as_json) as bar:
        export_film(
            shown, export, seed=seed, size=picture, at_s=at, span_s=times, fps=fps, speed=speed,
            progress=lambda done, total: bar(done, total, "drawing"),
        )  # fmt: skip
    _print_place("film" if export.suffix.lower() in (".gif", ".mp4") else "picture", export, as_json)


@app.command(short_help="JSON Schema of scenario files, for editors")
def schema(
    of_studies: Annotated[bool, typer.Option("--study", help="that of study files instead")] = False,
    as_json: AsJson = False,
    out: Annotated[Path | None, typer.Option(metavar="FILE", help="write to this file instead of the screen")] = None,
    force: Annotated[bool, typer.Option("--force", help="replace the file if it is there")] = False,
) -> None:
    """Print the JSON Schema of scenario or study files, with which editors complete and check them."""
    from swarmpush.output import to_json, write_text
    from swarmpush.scenario import Scenario

    tables = {"$schema": "https://json-schema.org/draft/2020-12/schema"} | Scenario.model_json_schema()
    if of_studies:
        from swarmpush.studies.study_file import study_schema

        tables = study_schema()
    text = to_json(tables, is_ascii=True)
    if out is None:
        print(text)
        return
    _refuse_existing(out, force)
    write_text(out, text)
    _print_place("schema", out, as_json)


@app.command(short_help="make the HTML report of saved results again")
def report(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="results of an audit or a run")],
    as_json: AsJson = False,
    out: Annotated[
        Path | None, typer.Option(metavar="FILE", help="HTML file to write; default: report.html in the folder")
    ] = None,
    force: Annotated[bool, typer.Option("--force", help="replace the file if it is there")] = False,
) -> None:
    """Make the HTML report of saved results again."""
    import swarmpush
    from swarmpush.reporting.page import load_result

    path = out or folder / "report.html"
    _refuse_existing(path, force)
    try:
        with _preparing(as_json):
            result = load_result(folder)
    except ValueError as error:
        raise _Refusal(str(error)) from None
    swarmpush.report(result, path)
    _print_place("report", path, as_json)


def main() -> None:
    """Run the command line; every foreseeable error is one message and an exit code."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")  # a terminal that knows no Greek letters still gets its tables
    try:
        try:
            app(prog_name="swarmpush")
        finally:
            sys.stdout.flush()
    except BrokenPipeError:  # the reader, such as head, has seen enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(1)
    except OSError as error:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        _fail(f"cannot write the output ({error.strerror})")
    except Exception as error:
        from swarmpush.output import OutputError
        from swarmpush.problems import ScenarioError

        if not isinstance(error, _Refusal | ScenarioError | OutputError):
            raise
        _fail(str(error))


def _fail(message: str) -> None:
    print(message, file=sys.stderr)
    sys.exit(BAD_INPUT)


def _print_json(value: Any) -> None:
    from swarmpush.output import to_json

    print(to_json(value, is_ascii=True))


def _print_place(what: str, path: Path, as_json: bool) -> None:
    if as_json:
        _print_json({what: path})
    else:
        print(f"{what}: {path}")


def _load(name: str) -> Scenario:
    """The scenario of a file, or the demo of that name if there is no such file."""
    import swarmpush
    from swarmpush.demos import DEMOS

    path = Path(name)
    if not path.suffix and not path.exists():
        if path.name.replace("-", "_") not in DEMOS:
            raise _Refusal(f"{name}: no such file; the demo scenarios are {', '.join(DEMOS)}")
        path = swarmpush.demo(path.name.replace("-", "_"))
    return swarmpush.load(path)


def _of_study(folder: Path, point: int | None, replicate: int | None, seed: int | None) -> tuple[Scenario, int]:
    """Scenario and seed of a run of a study."""
    from swarmpush.studies.replay import run_of_study

    if point is None or seed is not None:
        raise _Refusal("--from-study needs --point, and has a seed for each --replicate instead of --seed")
    try:
        return run_of_study(folder, point, replicate or 0)
    except IndexError as error:
        raise _Refusal(f"--point: {error}") from None


def _to_watch(
    source: str | None, from_study: Path | None, point: int | None, replicate: int | None, seed: int | None
) -> tuple[Scenario | Film, int | None]:
    """What is to be watched, and its seed."""
    if (source is None) == (from_study is None):
        raise _Refusal("name a scenario or a folder with a run, or a study's folder with --from-study and --point")
    if from_study is not None:
        return _of_study(from_study, point, replicate, seed)
    if point is not None or replicate is not None:
        raise _Refusal("--point and --replicate go with --from-study")
    assert source is not None
    if not (Path(source) / "run.json").is_file():
        return _load(source), seed
    if seed is not None:
        raise _Refusal("a saved run has its seed; --seed goes with a scenario")
    from swarmpush.viewing.film import film_of

    try:
        return film_of(Path(source)), None
    except ValueError as error:
        raise _Refusal(str(error)) from None


def _size(text: str | None) -> tuple[int, int] | None:
    """Width and height from text such as 1280x720."""
    if text is None:
        return None
    width, _, height = text.lower().partition("x")
    if not (width.isdecimal() and height.isdecimal() and len(width) < 6 and len(height) < 6):
        raise _Refusal(f"--size {text}: write width and height in pixels, for example 1280x720")
    return int(width), int(height)


def _span(text: str | None) -> tuple[float, float] | None:
    """Begin and end from text such as 10:25."""
    if text is None:
        return None
    try:
        begin, end = (float(part) for part in text.split(":"))
    except ValueError:
        raise _Refusal(f"--span {text}: write begin and end in seconds of model time, for example 10:25") from None
    return begin, end


def _load_study(name: str) -> Study:
    """The study of a file, or the demo study of that name if there is no such file."""
    import swarmpush
    from swarmpush.demos import STUDY_DEMOS

    path = Path(name)
    if not path.suffix and not path.exists():
        if path.name.replace("-", "_") not in STUDY_DEMOS:
            raise _Refusal(f"{name}: no such file; the demo studies are {', '.join(STUDY_DEMOS)}")
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
        raise _Refusal(str(error)) from None
    files = result.save(folder) | {"folder": str(folder), "report": "report.html"}
    swarmpush.report(result, folder / "report.html")
    if as_json:
        _print_json(result.to_dict(files))
        return
    study_console.show_study(result, folder)
    console.say_where(folder / "report.html", folder / "table.csv")


def _range(s: Scenario, text: str | None, has_default: bool) -> tuple[str, Any]:
    """Key and values of the cycle map that is asked for; no key for none."""
    from swarmpush.vary import first_angle_range, parse_range

    if text is None:
        return first_angle_range(s) if has_default else ("", ())
    try:
        return parse_range(s, text)
    except ValueError as error:
        raise _Refusal(f"--vary {text}: {error}") from None


def _basin_map(planned: Plan, progress: Any) -> pd.DataFrame | None:
    """The basin map of a plan; None, with a word on the error stream, where nothing fits behind the block."""
    import swarmpush

    try:
        return swarmpush.basin_map(planned.scenario, laps=planned.laps, progress=progress)
    except ValueError as error:
        print(f"no basin map: {error}", file=sys.stderr)
        return None


def _declarations(s: Scenario) -> Declarations | None:
    """What declaring is worth, where the routine declares."""
    from swarmpush.kinematics.declarations import declarations, declares

    return declarations(s) if declares(s.routine) else None


def _resumable(out: Path | None, stem: str, force: bool) -> tuple[Path, Path]:
    """The folder of a command that makes many runs, and the journal of finished ones in it; one left there is used."""
    from swarmpush.output import claim_folder, free_folder

    folder = out or free_folder(RESULTS, stem)
    claim_folder(folder, force=force or (folder / JOURNAL).exists())
    return folder, folder / JOURNAL


@contextmanager
def _resuming(folder: Path) -> Iterator[None]:
    """Turn an interruption into a word on how to go on, and the exit code for it."""
    try:
        yield
    except KeyboardInterrupt:
        print(f"interrupted; go on with --out {folder}", file=sys.stderr)
        raise typer.Exit(INTERRUPTED) from None


def _stem(name: str) -> str:
    return Path(name).stem or "scenario"


def _refuse_existing(path: Path, force: bool) -> None:
    if path.exists() and not force:
        raise _Refusal(f"{path} is there already; name another file with --out, or add --force")


def _demands(texts: list[str]) -> list[str]:
    """The demands, once all of them can be read."""
    from swarmpush.auditing.demands import read_demand

    for text in texts:
        try:
            read_demand(text)
        except ValueError as error:
            raise _Refusal(f"--require {text}: {error}") from None
    return texts


def _preparing(is_quiet: bool) -> Any:
    from swarmpush.reporting.progress import progress_bar

    return progress_bar(is_quiet=is_quiet)
