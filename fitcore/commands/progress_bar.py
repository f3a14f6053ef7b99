"""A progress bar that shows up only when a command takes longer than two seconds."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

#: Commands shorter than this (in seconds) show no bar.
PATIENCE = 2.0


@contextmanager
def progress_bar(what: str, *, quiet: bool = False) -> Iterator[Callable[[int, int], None]]:
    """Show progress on stderr, on a terminal only.

    Parameters
    ----------
    what : str
        What is being done.
    quiet : bool
        Show nothing.

    Yields
    ------
    callable
        To be called with (done, total) as the work goes on.
    """
    if quiet or not sys.stderr.isatty():
        yield _nothing
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description}"), BarColumn(), TextColumn("{task.completed}/{task.total}"))
    shown = Progress(*columns, TimeElapsedColumn(), console=Console(stderr=True), transient=True)
    task: Any = shown.add_task(what, total=None)
    # a timer, since one step alone may take longer
    timer = threading.Timer(PATIENCE, shown.start)
    timer.daemon = True
    timer.start()

    def report(done: int, total: int) -> None:
        shown.update(task, completed=done, total=total)

    try:
        yield report
    finally:
        timer.cancel()
        if shown.live.is_started:
            shown.stop()


def _nothing(done: int, total: int) -> None:
    """Report to nobody."""
