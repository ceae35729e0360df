"""A progress bar on the error stream, so that results can be piped."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

Advance = Callable[[float, float, str], None]
Count = Callable[[int, int, int], None]

LINE_EVERY_S = 60.0  # where there is no terminal to draw a bar on


@contextmanager
def progress_bar(*, is_quiet: bool = False) -> Iterator[Advance]:
    """Show that work goes on; the value is called with what is done, what there is in all, and a word.

    The first start says that it compiles, because nothing can be counted meanwhile.
    """
    from swarmpush.compiled import is_first_start

    console = Console(stderr=True)
    text = "preparing"
    if is_first_start():
        text = "compiling, only at the first start"
        if not console.is_terminal and not is_quiet:
            console.print("compiling; only the first start does this")
    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=console, transient=True, disable=is_quiet or not console.is_terminal) as bar:
        task = bar.add_task(text, total=None)
        yield lambda done, total, what: bar.update(task, completed=done, total=total, description=what)


@contextmanager
def study_bar(*, is_quiet: bool = False) -> Iterator[Count]:
    """The same for a study: the value is called with runs done, runs planned and failures so far.

    Shows the rate and the time left; where there is no terminal, a line now and then.
    """
    from swarmpush.reporting.study_words import duration

    console = Console(stderr=True)
    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    is_drawn = console.is_terminal and not is_quiet
    start = last_line = time.monotonic()
    done_before = -1
    with Progress(*columns, console=console, transient=True, disable=not is_drawn) as bar:
        task = bar.add_task("starting", total=None)

        def count(done: int, planned: int, failures: int) -> None:
            nonlocal done_before, last_line
            now = time.monotonic()
            done_before = done if done_before < 0 else done_before  # an interrupted study has done some already
            rate = (done - done_before) / max(now - start, 1e-9)
            left = duration((planned - done) / rate) if rate > 0.0 else "some time"
            text = f"{rate:.3g} runs/s, {left} left, {failures} failed"
            bar.update(task, completed=done, total=planned, description=text)
            if not is_drawn and not is_quiet and now - last_line >= LINE_EVERY_S:
                last_line = now
                console.print(f"{done} of {planned} runs, {text}")

        yield count
