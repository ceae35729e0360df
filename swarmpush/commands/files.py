"""Commands on files: schemas, and reports made again."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from swarmpush.commands.common import AsJson, Refusal, preparing, print_place, refuse_existing


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
    refuse_existing(out, force)
    write_text(out, text)
    print_place("schema", out, as_json)


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
    refuse_existing(path, force)
    try:
        with preparing(as_json):
            result = load_result(folder)
    except ValueError as error:
        raise Refusal(str(error)) from None
    swarmpush.report(result, path)
    print_place("report", path, as_json)
