"""A progress bar on the error stream, so that results can be piped."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

Advance = Callable[[float, float, str], None]


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
