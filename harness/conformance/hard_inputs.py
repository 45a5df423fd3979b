"""Checks that odd data get a sound answer or are declined, never an exception.

Sound is an answer that `specification.call` takes: of the declared sort, over the data's variables. What
is in it is not judged: whether a constant column may have an edge is a matter of the method.
"""

from __future__ import annotations

from collections.abc import Iterable

from generators.dataset import Dataset
from harness.conformance import inputs
from harness.conformance.isolation import observe
from harness.conformance.results import Failed, Skipped
from harness.conformance.shrinking import holds_on
from harness.conformance.subject import Subject, answer_to, learn
from harness.records import Declined, Limits, Status

MANY_ROWS = 500


def check_one_variable(subject: Subject) -> None:
    """A single variable gets an answer."""
    _is_answered(subject, inputs.one_variable())


def check_two_variables(subject: Subject) -> None:
    """Two variables get an answer."""
    _is_answered(subject, inputs.two_variables())


def check_constant_columns(subject: Subject) -> None:
    """Columns that hold one state only get an answer."""
    _is_answered(subject, inputs.constant_columns())


def check_identical_columns(subject: Subject) -> None:
    """Columns that are copies of each other get an answer."""
    _is_answered(subject, inputs.identical_columns())


def check_unseen_states(subject: Subject) -> None:
    """Declared states that no row has get an answer."""
    _is_answered(subject, inputs.unseen_states())


def check_ten_rows(subject: Subject) -> None:
    """Ten rows get an answer."""
    _is_answered(subject, inputs.ten_rows())


def check_missing_cells(subject: Subject) -> None:
    """Missing cells get an answer from a learner that declares to take them."""
    if not subject.specification.missing:
        raise Skipped("it does not declare that it takes missing cells")
    _is_answered(subject, inputs.missing_cells())


def check_many_variables(subject: Subject) -> None:
    """Two hundred variables get an answer within the default limits."""

    def fact(data: Dataset) -> None:
        asked = subject.asked(data)
        seen = observe(lambda: answer_to(subject, asked), limits=Limits())
        if seen.status is Status.DECLINED:
            raise Declined(seen.cause)
        if seen.status is Status.TIMEOUT:  # slow is not unsound
            raise Skipped(seen.cause)
        if seen.status is not Status.DONE:
            raise Failed(seen.cause, asked)

    holds_on([inputs.many_variables(MANY_ROWS)], fact)


def _is_answered(subject: Subject, given: Iterable[Dataset]) -> None:
    def fact(data: Dataset) -> None:
        learn(subject, data)

    holds_on(given, fact)
