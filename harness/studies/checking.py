"""What a plan expands to, and how long it takes: judged by a probe of a few seconds."""

from __future__ import annotations

import itertools
import time
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

from harness.execution.local import LocalEngine
from harness.execution.messages import Drawn, Work
from harness.execution.order import missing_work
from harness.execution.progress import Progress, time_span
from harness.plan.schema import Plan, expected_runs
from harness.studies.running import default_workers, network_keys

PROBE_SECONDS = 10.0


@dataclass(frozen=True, slots=True)
class Check:
    """A valid plan's size and cost.

    Parameters
    ----------
    plan : Plan
    n_workers : int
    n_runs : int
    seconds : float or None
        Wall time of all runs; None where the probe saw no run end.
    n_probed, n_cells : int
        How many of the combinations of condition, row count and learner the probe reached, and how many
        there are; the cost of the others is carried over in proportion to the rows.
    """

    plan: Plan
    n_workers: int
    n_runs: int
    seconds: float | None
    n_probed: int
    n_cells: int

    def lines(self) -> list[str]:
        """Return what a person reads."""
        plan = self.plan
        n_datasets = sum(condition.replicates * condition.datasets for condition in plan.conditions)
        lines = [
            f"{plan.path or 'The plan'} is valid.",
            f"{self.n_runs:,} runs: {_n(len(plan.conditions), 'condition')}, "
            f"{_n(n_datasets, 'dataset')} in all, "
            f"{_n(len(plan.rows), 'row count')}, {_n(len(plan.learners), 'learner')}.",
        ]
        lines += [f"Note: {note}" for note in plan.notes]
        if self.seconds is None:
            lines.append(f"No run ended within {PROBE_SECONDS:g} s: the time cannot be told.")
            return lines
        span = f"About {time_span(self.seconds)}" if self.seconds >= 1 else "Under 1 s"
        time_line = f"{span} with {_n(self.n_workers, 'worker')} on this machine"
        if self.n_probed < self.n_cells:
            time_line += (
                f"; {self.n_probed} of {self.n_cells} combinations of condition, rows and learner were "
                "tried, the others are taken in proportion to their rows"
            )
        return [*lines, time_line + "."]

    def document(self) -> dict[str, Any]:
        """Return what a program reads."""
        return {
            "runs": self.n_runs,
            "conditions": [dict(condition.factors) for condition in self.plan.conditions],
            "rows": list(self.plan.rows),
            "learners": [learner.label for learner in self.plan.learners],
            "notes": list(self.plan.notes),
            "workers": self.n_workers,
            "seconds": self.seconds,
            "probed": self.n_probed,
            "combinations": self.n_cells,
        }


def check_plan(plan: Plan, *, n_workers: int | None = None) -> Check:
    """Expand a valid plan, and time a few of its runs for at most ten seconds. Nothing is stored.

    Parameters
    ----------
    plan : Plan
    n_workers : int, optional
        As `run_plan`.
    """
    threads = max(learner.limits.threads for learner in plan.learners)
    workers = n_workers or default_workers(threads)
    works = list(missing_work(plan, network_keys(plan), {}))
    progress = Progress.of(works, workers)
    runs = Counter(progress.left)  # all of them: the probe stores nothing
    _probe(plan, works, progress, workers, threads)
    return Check(
        plan, workers, expected_runs(plan), progress.seconds_for(runs), progress.n_measured, len(runs)
    )


def _probe(plan: Plan, works: list[Work], progress: Progress, workers: int, threads: int) -> None:
    deadline = [float("inf")]

    def start_clock() -> None:
        deadline[0] = time.monotonic() + PROBE_SECONDS

    with LocalEngine(plan.learners, n_workers=workers, threads=threads) as engine:
        for batch in engine.batches(_first_of_each(works), start_clock):
            for event in batch:
                if not isinstance(event, Drawn):
                    progress.note(event)
            if time.monotonic() >= deadline[0]:
                return


def _first_of_each(works: list[Work]) -> Iterator[Work]:
    """Give every combination once: few rows first, so that much is seen before time is up."""
    firsts: dict[int, Work] = {}
    for work in works:
        firsts.setdefault(work.condition, work)
    numbers = itertools.count()
    for rows in sorted({request.rows for work in firsts.values() for request in work.requests}):
        for work in firsts.values():
            if own := tuple(request for request in work.requests if request.rows == rows):
                yield replace(work, number=next(numbers), requests=own)


def _n(count: int, word: str) -> str:
    return f"{count:,} {word}{'' if count == 1 else 's'}"
