"""The command that looks at runs."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from swarmpush.commands.common import (
    AsJson,
    FromStudy,
    Point,
    Refusal,
    Replicate,
    Seed,
    load_scenario,
    preparing,
    print_place,
    refuse_existing,
    scenario_of_study,
)

if TYPE_CHECKING:
    from swarmpush.scenario import Scenario
    from swarmpush.viewing.film import Film


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
        raise Refusal("--json, --at and --span go with --export")
    if export is not None:
        refuse_existing(export, force)
    shown, seed = _to_watch(source, from_study, point, replicate, seed)
    if export is None:
        from swarmpush.viewing.app import watch as open_window

        open_window(shown, seed=seed, size=picture or (1280, 720), speed=speed)
        return
    from swarmpush.viewing.to_file import export_film

    with preparing(as_json) as bar:
        export_film(
            shown, export, seed=seed, size=picture, at_s=at, span_s=times, fps=fps, speed=speed,
            progress=lambda done, total: bar(done, total, "drawing"),
        )  # fmt: skip
    print_place("film" if export.suffix.lower() in (".gif", ".mp4") else "picture", export, as_json)


def _to_watch(
    source: str | None, from_study: Path | None, point: int | None, replicate: int | None, seed: int | None
) -> tuple[Scenario | Film, int | None]:
    """What is to be watched, and its seed."""
    if (source is None) == (from_study is None):
        raise Refusal("name a scenario or a folder with a run, or a study's folder with --from-study and --point")
    if from_study is not None:
        from swarmpush.viewing.film import record

        return record(*scenario_of_study(from_study, point, replicate, seed)), None
    if point is not None or replicate is not None:
        raise Refusal("--point and --replicate go with --from-study")
    assert source is not None
    if not (Path(source) / "run.json").is_file():
        return load_scenario(source), seed
    if seed is not None:
        raise Refusal("a saved run has its seed; --seed goes with a scenario")
    from swarmpush.viewing.film import film_of

    try:
        return film_of(Path(source)), None
    except ValueError as error:
        raise Refusal(str(error)) from None


def _size(text: str | None) -> tuple[int, int] | None:
    """Width and height from text such as 1280x720."""
    if text is None:
        return None
    width, _, height = text.lower().partition("x")
    if not (width.isdecimal() and height.isdecimal() and len(width) < 6 and len(height) < 6):
        raise Refusal(f"--size {text}: write width and height in pixels, for example 1280x720")
    return int(width), int(height)


def _span(text: str | None) -> tuple[float, float] | None:
    """Begin and end from text such as 10:25."""
    if text is None:
        return None
    try:
        begin, end = (float(part) for part in text.split(":"))
    except ValueError:
        raise Refusal(f"--span {text}: write begin and end in seconds of model time, for example 10:25") from None
    return begin, end
