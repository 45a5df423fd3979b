"""Progress while a plan runs: one live line in a terminal, plain lines elsewhere."""

from __future__ import annotations

import sys
import time

from harness.cli.output import say
from harness.execution.progress import Progress, time_span
from harness.studies.running import Watcher

LIVE_SECONDS = 0.25
PLAIN_SECONDS = 10.0


class LiveWatcher(Watcher):
    """Print how far the runs are.

    Parameters
    ----------
    quiet : bool
        Print nothing but what the user must know.
    """

    def __init__(self, quiet: bool = False) -> None:
        self._quiet = quiet
        self._is_terminal = sys.stderr.isatty()
        self._next = 0.0
        self._drawn = False
        self._is_told = False
        self._compiling_since: float | None = None

    def compiling(self) -> None:
        """Say that the first start takes longer, and why."""
        self._compiling_since = time.monotonic()
        say(
            "Compiling the numerical kernels, once for this version and machine (one to two minutes) ...",
            quiet=self._quiet,
        )

    def started(self, progress: Progress, n_kept: int) -> None:
        """Say what there is to do."""
        kept = f"; {n_kept:,} are in the ledger already" if n_kept else ""
        workers = (
            f" with {progress.n_workers} worker{'s' * (progress.n_workers > 1)}" if progress.total else ""
        )
        say(f"{progress.total:,} runs to do{workers}{kept}.", quiet=self._quiet)

    def advanced(self, progress: Progress) -> None:
        """Redraw the line, or print another one when it is time."""
        if self._compiling_since is not None and progress.done:
            say(f"Compiled in {time_span(time.monotonic() - self._compiling_since)}.", quiet=self._quiet)
            self._compiling_since = None
        now = time.monotonic()
        is_last = progress.done == progress.total
        if self._quiet or not progress.done or self._is_told or (now < self._next and not is_last):
            return
        self._is_told = is_last
        self._next = now + (LIVE_SECONDS if self._is_terminal else PLAIN_SECONDS)
        line = progress_line(progress)
        if self._is_terminal:
            sys.stderr.write("\r\x1b[K" + line + ("\n" if is_last else ""))
            sys.stderr.flush()
            self._drawn = not is_last
        else:
            say(line)

    def stopping(self) -> None:
        """Say what the first Ctrl-C does."""
        if self._drawn:
            sys.stderr.write("\n")
            self._drawn = False
        say("Stopping: what is running is finished first. Once more to stop now.")


def progress_line(progress: Progress) -> str:
    """Return how far the runs are, in one line."""
    parts = [f"{progress.done:,} of {progress.total:,} runs"]
    if progress.n_failed:
        parts.append(f"{progress.n_failed:,} failed")
    parts.append(f"{progress.done / max(progress.elapsed_seconds, 1e-9):.0f} a second")
    left = progress.seconds_left()
    if progress.done == progress.total:
        parts.append(f"done in {time_span(progress.elapsed_seconds)}")
    elif left is not None:
        parts.append(f"about {time_span(left)} left")
    return ", ".join(parts)
