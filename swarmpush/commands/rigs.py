"""Commands on one scenario: plan, run, audit."""

from __future__ import annotations

import shutil
import sys
import textwrap
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from swarmpush.auditing.claims import CLAIMS, MEASURES, VERDICTS
from swarmpush.commands.common import (
    NOT_MET,
    RESULTS,
    AsJson,
    Force,
    FromStudy,
    OutFolder,
    Point,
    Refusal,
    Replicate,
    ScenarioArgument,
    Seed,
    load_scenario,
    preparing,
    print_json,
    resumable,
    resuming,
    scenario_of_study,
    stem_of,
)

if TYPE_CHECKING:
    import pandas as pd

    from swarmpush.kinematics.declarations import Declarations
    from swarmpush.kinematics.planning import Plan
    from swarmpush.scenario import Scenario


_REQUIRE_HELP = (
    "exit with 3 unless this is met; may be repeated. NAME>=NUMBER or NAME<=NUMBER, in SI units or with a unit, judged "
    'by the doubtful end of the interval, the low end for >=: "arrival>=0.9", "block_speed>=100 um/s"; names: '
    f'{", ".join(MEASURES)}. CLAIM=VERDICT, or a CLAIM alone that must hold: "lock=holds", "arrival"; claims: '
    f"{', '.join(CLAIMS)}; verdicts: {', '.join(VERDICTS)}"
)


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

    s = load_scenario(scenario)
    key, values = _range(s, vary, figure)
    folder = out or (free_folder(RESULTS, f"{stem_of(scenario)}-plan") if figure else None)
    if folder:
        claim_folder(folder, force=force)
    with preparing(as_json) as bar:
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
        print_json(answer)
        return
    from swarmpush.reporting import console

    console.show_plan(planned)
    for sentence in results.sentences():
        print(textwrap.fill(sentence, shutil.get_terminal_size().columns, subsequent_indent="    "))
    if folder:
        drawn = ["cycle_map.png"] * figure + ["basin_map.png"] * (results.basin_map is not None)
        console.say_where(*(folder / name for name in ("plan.json", "plan.png", *drawn)))


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
        raise Refusal("--replicates goes with --converge; a run is one run, and 'swarmpush audit' makes many")
    stem = stem_of(scenario or str(from_study))
    if from_study is None and scenario is not None:
        if point is not None or replicate is not None:
            raise Refusal("--point and --replicate go with --from-study")
        s = load_scenario(scenario)
    elif from_study is not None and scenario is None:
        s, seed = scenario_of_study(from_study, point, replicate, seed)
    else:
        raise Refusal("name a scenario, or a study's folder with --from-study and one of its points with --point")
    if converging:
        _converge(s if seed is None else s.replace(trial={"seed": seed}), stem, replicates, as_json, out, force)
        return
    folder = claim_folder(out, force=force) if out else None
    with preparing(as_json) as bar:
        result = swarmpush.simulate(s, seed=seed, progress=lambda share: bar(share, 1.0, "running"))
    files = result.save(folder) if folder else None
    if folder:
        swarmpush.report(result, folder / "report.html")
    if as_json:
        print_json(result.to_dict(files))
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
        raise Refusal(f"--replicates: {error}") from None
    folder, journal = resumable(out, f"{stem}-converge", force)
    with resuming(folder), preparing(as_json) as bar:
        result = swarmpush.converge(s, replicates=n, journal=journal, progress=bar)
    files = result.save(folder) | {"folder": str(folder)}
    journal.unlink(missing_ok=True)
    if as_json:
        print_json(result.to_dict(files))
        return
    from swarmpush.reporting import console

    console.show_convergence(result)
    console.say_where(folder / "convergence.json")


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
    s = load_scenario(scenario)
    if seed is not None:
        s = s.replace(trial={"seed": seed})
    first = s.trial.replicates if replicates is None else replicates
    if budget is not None and budget < first:
        raise Refusal(f"--budget: {budget} runs are fewer than the {first} of the first look")
    folder, journal = resumable(out, f"{stem_of(scenario)}-audit", force)
    with resuming(folder), preparing(as_json) as bar:
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
        print_json(result.to_dict(files))
    else:
        from swarmpush.reporting import console

        console.show_audit(result)
        console.say_where(folder / "report.html")
    unmet = [demand for demand in result.demands if not demand.is_met]
    for demand in unmet:
        print(f"required: {demand.demand}, but {demand.reason}", file=sys.stderr)
    if unmet:
        raise typer.Exit(NOT_MET)


def _range(s: Scenario, text: str | None, has_default: bool) -> tuple[str, Any]:
    """Key and values of the cycle map that is asked for; no key for none."""
    from swarmpush.vary import first_angle_range, parse_range

    if text is None:
        return first_angle_range(s) if has_default else ("", ())
    try:
        return parse_range(s, text)
    except ValueError as error:
        raise Refusal(f"--vary {text}: {error}") from None


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


def _demands(texts: list[str]) -> list[str]:
    """The demands, once all of them can be read."""
    from swarmpush.auditing.demands import read_demand

    for text in texts:
        try:
            read_demand(text)
        except ValueError as error:
            raise Refusal(f"--require {text}: {error}") from None
    return texts
