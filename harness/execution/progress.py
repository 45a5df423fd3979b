"""How far a plan's runs are, and how long the rest takes at the cost measured so far."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from harness.execution.messages import Ended, Request, Work
from harness.records import Status

Cell = tuple[int, int, int]  # condition, rows, learner
Place = tuple[int, int]  # condition, learner
ANYWHERE = -1  # stands for all conditions together


@dataclass(slots=True)
class Progress:
    """Counts of what is done and left, per condition, row count and learner.

    Parameters
    ----------
    n_workers : int
    left : Counter of Cell
        Runs still to be done.
    total : int
        All runs of this start, done or left.
    """

    n_workers: int
    left: Counter[Cell]
    total: int
    done: int = 0
    statuses: Counter[Status] = field(default_factory=Counter)
    _seconds: dict[Cell, float] = field(default_factory=dict)
    _counts: Counter[Cell] = field(default_factory=Counter)
    _began: float = field(default_factory=time.monotonic)

    @classmethod
    def of(cls, works: Iterable[Work], n_workers: int) -> Progress:
        """Count the runs of some work."""
        left = Counter(_cell(work, request) for work in works for request in work.requests)
        return cls(n_workers, left, left.total())

    @property
    def n_measured(self) -> int:
        """The number of cells of which at least one run has ended."""
        return sum(condition != ANYWHERE for condition, _, _ in self._counts)

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
        seconds = (event.outcome.wall_seconds or 0.0) + max(0.0, event.overhead_seconds)
        for place in (cell, (ANYWHERE, *cell[1:])):
            self._counts[place] += 1
            self._seconds[place] = self._seconds.get(place, 0.0) + seconds

    def seconds_left(self) -> float | None:
        """Return the wall time that the rest takes, or None while nothing has been measured."""
        return self.seconds_for(self.left)

    def seconds_for(self, runs: Mapping[Cell, int]) -> float | None:
        """Return the wall time that some runs take, or None while nothing has been measured.

        Each run costs the mean of its cell so far. A cell not yet measured costs what the same learner
        cost in the same condition at the nearest row count measured, or in all conditions together if
        there is none, more in proportion to the rows; a learner not yet measured costs the mean of all.
        """
        if not self.done:
            return None
        measured: dict[Place, list[int]] = {}
        for condition, rows, learner in self._counts:
            measured.setdefault((condition, learner), []).append(rows)
        return sum(n * self._cost(cell, measured) for cell, n in runs.items() if n > 0) / self.n_workers

    def _cost(self, cell: Cell, measured: Mapping[Place, list[int]]) -> float:
        condition, rows, learner = cell
        for place in (condition, ANYWHERE):
            if own := measured.get((place, learner)):
                nearest = min(own, key=lambda other: (abs(other - rows), other))
                found = (place, nearest, learner)
                return self._seconds[found] / self._counts[found] * max(1.0, rows / nearest)
        return sum(self._seconds[found] for found in self._seconds if found[0] == ANYWHERE) / self.done


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
