"""A picture or a film of a run in a file, whose name says which."""

from __future__ import annotations

from pathlib import Path

from swarmpush.output import OutputError
from swarmpush.scenario import Scenario
from swarmpush.viewing.export import Progress, save_gif, save_mp4
from swarmpush.viewing.film import Film, record
from swarmpush.viewing.still import save_png, save_svg

STILLS = {".png": (save_png, (1280, 720)), ".svg": (save_svg, (1280, 720))}
FILMS = {".gif": (save_gif, (800, 300)), ".mp4": (save_mp4, (1280, 720))}
SHOWN_S = 10.0  # on the clock, for a film whose speed nobody chose


def export_film(
    source: Scenario | Film,
    path: Path,
    *,
    seed: int | None = None,
    size: tuple[int, int] | None = None,
    at_s: float | None = None,
    span_s: tuple[float, float] | None = None,
    fps: float = 25.0,
    speed: float | None = None,
    progress: Progress | None = None,
) -> None:
    """Write a picture or a film of a run, without a window.

    Arguments:
        source: a scenario, which is run for this, or a film. path: ends in .png, .svg, .gif or .mp4.
        seed: of the run, for a scenario; its own unless given. size: px; as fits the kind unless given.
        at_s: model time of a picture; the end unless given. span_s: model times of a film; the whole run unless given.
        fps, speed: of a film: frames per second, and model time over time on the clock, so that it takes 10 s unless
            given. progress: called with frames done and frames in all.

    Raises:
        OutputError: when the name says no kind, an option does not go with it, packages are missing, there is nothing
            to show, or the file cannot be written.
    """
    kind = path.suffix.lower()
    if kind not in (*STILLS, *FILMS):
        raise OutputError(f"{path}: end the name in {', '.join((*STILLS, *FILMS))}, which says what to write")
    if kind in STILLS and span_s is not None:
        raise OutputError(f"{path}: a picture is of one time, --at; --span goes with films")
    if kind in FILMS and at_s is not None:
        raise OutputError(f"{path}: a film is of a span of time, --span; --at goes with pictures")
    if not path.parent.is_dir():
        raise OutputError(f"{path} cannot be written; make its folder first")
    film = source if isinstance(source, Film) else record(source, seed)
    if kind in STILLS:
        save_still, usual = STILLS[kind]
        save_still(film, film.duration_s if at_s is None else at_s, path, size or usual)
        return
    save_film, usual = FILMS[kind]
    begin, end = span_s or (0.0, film.duration_s)
    pace = speed or (end - begin if end > begin else SHOWN_S) / SHOWN_S
    save_film(film, path, size=size or usual, fps=fps, begin_s=begin, end_s=end, speed=pace, progress=progress)
