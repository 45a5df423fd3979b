"""How far a plan's runs are, and how long the rest takes at the cost measured so far."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass, field

from harness.execution.messages import Ended, Request, Work
from harness.records import Status

Cell = tuple[int, int, int]  # condition, rows, learner


@dataclass(slots=True)
class Progress:
    """Counts of what is done and left, per condition, row count and learner.

    Parameters
    ----------
    n_workers : int
    left : Counter of Cell
        Runs still to be done.
    """

    n_workers: int
    left: Counter[Cell]
    done: int = 0
    statuses: Counter[Status] = field(default_factory=Counter)
    _seconds: dict[Cell, float] = field(default_factory=dict)
    _counts: Counter[Cell] = field(default_factory=Counter)
    _began: float = field(default_factory=time.monotonic)

    @classmethod
    def of(cls, works: Iterable[Work], n_workers: int) -> Progress:
        """Count the runs of some work."""
        left = Counter(_cell(work, request) for work in works for request in work.requests)
        return cls(n_workers, left)

    @property
    def total(self) -> int:
        """All runs of this start, done or left."""
        return self.done + self.left.total()

    @property
    def measured(self) -> frozenset[Cell]:
        """The cells of which at least one run has ended."""
        return frozenset(self._counts)

    @property
    def elapsed_seconds(self) -> float:
        """Wall time since the start."""
        return time.monotonic() - self._began

    @property
    def n_failed(self) -> int:
        """Runs that ended other than `done`."""
        return self.done - self.statuses[Status.DONE]

    def note(self, event: Ended) -> None:
        """Count a run that has ended."""
        cell = _cell(event.work, event.request)
        self.left[cell] -= 1
        self.done += 1
        self.statuses[event.outcome.status] += 1
        self._counts[cell] += 1
        seconds = (event.outcome.wall_seconds or 0.0) + max(0.0, event.overhead_seconds)
        self._seconds[cell] = self._seconds.get(cell, 0.0) + seconds

    def seconds_left(self) -> float | None:
        """Return the wall time that the rest takes, or None while nothing has been measured.

        Each run left costs the mean of its cell so far; a cell not yet measured costs what the same
        learner cost at the nearest row count measured, in proportion to the rows, else the mean of all.
        """
        if not self._counts:
            return None
        overall = sum(self._seconds.values()) / self._counts.total()
        total = sum(n * self._cost(cell, overall) for cell, n in self.left.items() if n > 0)
        return total / self.n_workers

    def _cost(self, cell: Cell, overall: float) -> float:
        if self._counts[cell]:
            return self._seconds[cell] / self._counts[cell]
        condition, rows, learner = cell
        same = [c for c in self._counts if c[0] == condition and c[2] == learner] or [
            c for c in self._counts if c[2] == learner
        ]
        if not same:
            return overall
        nearest = min(same, key=lambda c: abs(c[1] - rows))
        return self._seconds[nearest] / self._counts[nearest] * max(1.0, rows / nearest[1])


def _cell(work: Work, request: Request) -> Cell:
    return (work.condition, request.rows, request.learner)


def time_span(seconds: float) -> str:
    """Return a time span as a person says it.

    Examples
    --------
    >>> time_span(0.4), time_span(75), time_span(7300)
    ('under 1 s', '1 min 15 s', '2 h 1 min')
    """
    if seconds < 1:
        return "under 1 s"
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    minutes, rest = divmod(whole, 60)
    if minutes < 60:
        return f"{minutes} min {rest} s"
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes} min"
