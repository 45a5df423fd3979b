"""Counts of runs, and the time that is left: means worked out by hand."""

from __future__ import annotations

import pytest

from harness.execution.messages import Ended, Request, Work
from harness.execution.progress import Progress, time_span
from harness.records import Outcome, Status


def make_work(condition: int = 0, rows: tuple[int, ...] = (100, 200), n_learners: int = 2) -> Work:
    requests = tuple(Request(learner, n, {}) for n in rows for learner in range(n_learners))
    return Work(condition, condition, {}, {}, b"network", 0, b"dataset", 0, requests)


def ended(
    work: Work, place: int, seconds: float | None, *, overhead: float = 0.0, status: Status = Status.DONE
) -> Ended:
    return Ended(work, work.requests[place], Outcome(status, wall_seconds=seconds), "", overhead)


def test_runs_are_counted_as_they_end() -> None:
    """Done and failed grow, what is left shrinks, the total stays."""
    work = make_work()
    progress = Progress.of([work], 1)

    progress.note(ended(work, 0, 1.0))
    progress.note(ended(work, 1, 2.0, status=Status.TIMEOUT))

    assert (progress.total, progress.done, progress.n_failed, progress.n_measured) == (4, 2, 1, 2)
    assert progress.left.total() == 2
    assert progress.statuses == {Status.DONE: 1, Status.TIMEOUT: 1}


def test_nothing_is_foretold_before_a_run_has_ended() -> None:
    """Without any measurement there is no time left to tell."""
    assert Progress.of([make_work()], 1).seconds_left() is None


def test_a_measured_cell_costs_its_mean_with_what_surrounds_the_call() -> None:
    """Two runs of one cell at 1 s + 1 s and 3 s + 1 s leave two more at 3 s each, over two workers."""
    work = make_work(rows=(100,), n_learners=1)
    progress = Progress.of([work] * 4, 2)

    progress.note(ended(work, 0, 1.0, overhead=1.0))
    progress.note(ended(work, 0, 3.0, overhead=1.0))

    assert progress.seconds_left() == pytest.approx(2 * 3.0 / 2)


def test_an_unmeasured_row_count_costs_in_proportion_to_the_nearest_one() -> None:
    """At 100 rows 2 s and at 400 rows 5 s: 300 rows cost as 400 (no less), 1,600 rows four times as much."""
    work = make_work(rows=(100, 300, 400, 1600), n_learners=1)
    progress = Progress.of([work], 1)

    progress.note(ended(work, 0, 2.0))
    progress.note(ended(work, 2, 5.0))

    assert progress.seconds_left() == pytest.approx(5.0 + 5.0 * 4)


def test_an_unmeasured_condition_costs_what_the_learner_cost_elsewhere() -> None:
    """In another condition the same learner at the same rows is taken; its mean over conditions."""
    first, second, third = (make_work(condition, rows=(100,), n_learners=1) for condition in range(3))
    progress = Progress.of([first, second, third], 1)

    progress.note(ended(first, 0, 1.0))
    progress.note(ended(second, 0, 3.0))

    assert progress.seconds_left() == pytest.approx(2.0)


def test_an_unmeasured_learner_costs_the_mean_of_all() -> None:
    """Nothing else is known of it."""
    work = make_work(rows=(100, 200), n_learners=2)
    progress = Progress.of([work], 1)

    progress.note(ended(work, 0, 1.0))
    progress.note(ended(work, 2, 5.0))

    assert progress.seconds_left() == pytest.approx(3.0 * 2)


def test_a_run_without_a_time_costs_what_surrounds_it() -> None:
    """A learner that raised has no time of its own; the clock of the harness never runs backwards."""
    work = make_work(rows=(100,), n_learners=2)
    progress = Progress.of([work, work], 1)

    progress.note(ended(work, 0, None, overhead=0.5, status=Status.ERROR))
    progress.note(ended(work, 1, 1.0, overhead=-0.25))

    assert progress.seconds_left() == pytest.approx(0.5 + 1.0)


def test_all_runs_of_a_plan_can_be_costed_after_a_probe() -> None:
    """`seconds_for` counts what it is given, also runs that have ended already."""
    work = make_work(rows=(100,), n_learners=1)
    progress = Progress.of([work], 1)
    progress.note(ended(work, 0, 2.0))

    assert progress.seconds_left() == 0.0
    assert progress.seconds_for({(0, 100, 0): 10}) == pytest.approx(20.0)


@pytest.mark.parametrize(
    ("seconds", "expected"),
    [
        (0.99, "under 1 s"),
        (1, "1 s"),
        (59.4, "59 s"),
        (59.6, "1 min 0 s"),
        (3599, "59 min 59 s"),
        (7380, "2 h 3 min"),
    ],
)
def test_time_spans_are_said_as_a_person_says_them(seconds: float, expected: str) -> None:
    """Two units at most, rounded to the smaller one."""
    assert time_span(seconds) == expected
