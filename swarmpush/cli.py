"""The command line: its commands, and errors as messages and exit codes. It only calls the public interface.

Exit codes: 0 done, 2 bad input, 3 a demand is not met, 130 interrupted.
"""

from __future__ import annotations

import io
import os
import sys
from typing import Annotated

import typer

from swarmpush.commands import files, looking, rigs, studies
from swarmpush.commands.common import BAD_INPUT, Refusal

app = typer.Typer(
    help="Does a crowd of blind pushers really move the block along the channel? Say so before parts are made.",
    epilog="Predictions of a model, no safety proof. Local rules and qualified staff decide what may be run.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    context_settings={"help_option_names": ["-h", "--help"]},
)

study = typer.Typer(
    no_args_is_help=True, rich_markup_mode=None, help="Look into a study, and make its failed runs again."
)

app.command(short_help="laps and block speed from geometry alone")(rigs.plan)
app.command(short_help="one run with rigid bodies, books balanced")(rigs.run)
app.command(short_help="the plan against rigid bodies: what holds, what it costs")(rigs.audit)
app.command(short_help="one scenario at many points: thousands of runs, resumable")(studies.sweep)
app.command(short_help="look at a run: in a window, or as a picture or film")(looking.watch)
app.command(short_help="JSON Schema of scenario files, for editors")(files.schema)
app.command(short_help="make the HTML report of saved results again")(files.report)
study.command("show", short_help="how far a study has come, also while it runs")(studies.study_show)
study.command("failures", short_help="which runs failed, and why")(studies.study_failures)
study.command("rerun-failed", short_help="make the failed runs of a study again")(studies.study_rerun_failed)
app.add_typer(study, name="study", short_help="look into a study; make its failed runs again")


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

        if not isinstance(error, Refusal | ScenarioError | OutputError):
            raise
        _fail(str(error))


def _fail(message: str) -> None:
    print(message, file=sys.stderr)
    sys.exit(BAD_INPUT)
