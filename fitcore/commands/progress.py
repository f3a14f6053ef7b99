"""How a running chain shows itself: a line that changes on a terminal, a log line now and then otherwise."""

from __future__ import annotations

import sys
import time
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from types import TracebackType

    from fitcore.commands.output import Output
    from fitcore.sampling.sample_result import Progress

#: Seconds between log lines where there is no terminal.
INTERVAL = 30.0
#: Seconds between changes of the line on a terminal.
REFRESH = 0.2


class ChainProgress:
    """Callable for the sampler's `progress`; a context manager that ends the line.

    Writes to stderr: stdout belongs to tables and JSON.
    """

    def __init__(self, output: Output) -> None:
        self._quiet = output.quiet
        self._terminal = sys.stderr.isatty()
        self._last = time.monotonic() if not self._terminal else 0.0
        self._width = 0

    def __enter__(self) -> ChainProgress:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._width:
            sys.stderr.write("\n")
            sys.stderr.flush()

    def __call__(self, progress: Progress) -> None:
        """Show a state if it is time to."""
        now = time.monotonic()
        if self._quiet or now - self._last < (REFRESH if self._terminal else INTERVAL):
            return
        self._last = now
        line = describe(progress)
        if self._terminal:
            sys.stderr.write("\r" + line.ljust(self._width))
            self._width = len(line)
        else:
            sys.stderr.write(line + "\n")
        sys.stderr.flush()


def describe(progress: Progress) -> str:
    """Write a state of a run in one line."""
    if progress.phase == "pilot":
        return f"pilot run: {progress.steps} steps, acceptance {progress.acceptance:.2f}"
    parts = [
        f"{progress.steps} steps of {progress.walkers} walkers",
        f"{progress.rate:.0f} points/s",
        f"acceptance {progress.acceptance:.2f}",
    ]
    if progress.tau is not None:
        parts.append(f"autocorrelation time {progress.tau:.1f}")
    if progress.effective:
        parts.append(f"{progress.effective:.0f} effective")
    if progress.seconds_to_go is not None:
        parts.append(f"{duration(progress.seconds_to_go)} to go")
    return ", ".join(parts)


def duration(seconds: float) -> str:
    """Write a time span with the unit that suits it."""
    if seconds < 90:
        return f"{seconds:.0f} s"
    if seconds < 5400:
        return f"{seconds / 60:.0f} min"
    return f"{seconds / 3600:.1f} h"
