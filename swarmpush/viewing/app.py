"""Watching a run in a window. It needs pygame and a display, which are asked for only then."""

from __future__ import annotations

from pathlib import Path

from swarmpush.output import OutputError
from swarmpush.scenario import Scenario
from swarmpush.viewing.extras import require
from swarmpush.viewing.film import Film, LiveFilm


class ViewingError(OutputError):
    """The window cannot be opened; the message says what to do."""


def watch(
    source: Scenario | Film,
    *,
    seed: int | None = None,
    size: tuple[int, int] = (1280, 720),
    speed: float | None = None,
    folder: Path | None = None,
) -> None:
    """Open a window on a run, until it is closed.

    Nothing done in the window changes what a seed gives: a run watched to its end is that of `simulate`, bit by bit.

    Arguments:
        source: a scenario, which is run while it is watched, or a film.
        seed: of the run, for a scenario; its own unless given.
        size: of the window, px; it can be changed later.
        speed: model time over time on the clock at the start; left out: a whole run passes in about a minute.
        folder: where pictures are saved; left out: the current one.

    Raises:
        ViewingError: when there is no display, or the size makes no window. OutputError: when pygame is missing.
    """
    require("pygame")
    from swarmpush.viewing.window import Window, close_display, open_display

    open_display(size)
    try:
        film = source if isinstance(source, Film) else LiveFilm(source, seed)
        Window(film, speed=speed, folder=folder).run()
    finally:
        close_display()
