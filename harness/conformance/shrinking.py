"""From an input on which a fact does not hold to a small one."""

from __future__ import annotations

import re
import time
from collections.abc import Callable, Iterable

import numpy as np
from numpy.typing import NDArray

from generators.dataset import Dataset
from harness.conformance.results import Failed, Skipped
from harness.records import Declined

Fact = Callable[[Dataset], None]  # raises Failed where it does not hold, Declined where nothing can be said
MAX_TRIALS = 80
MAX_SECONDS = 3.0  # no trial begins later


def holds_on(inputs: Iterable[Dataset], fact: Fact, *, least_rows: int = 1) -> None:
    """Try a fact on inputs in their order, small ones first; shrink the first on which it does not hold.

    Parameters
    ----------
    inputs : iterable of Dataset
    fact : callable
        A fact about data of whatever size. Where it is to be expected of enough rows only, a shrunk input
        would accuse the innocent.
    least_rows : int
        Shrinking keeps so many.

    Raises
    ------
    Failed
        With the calls on the smallest input found.
    Skipped
        If the learner declined all inputs.
    """
    declined: list[str] = []
    n_inputs = 0
    for data in inputs:
        n_inputs += 1
        try:
            fact(data)
        except Declined as refusal:
            declined.append(str(refusal))
        except Failed as failure:
            raise _shrunk(data, failure, fact, least_rows) from failure
    if len(declined) == n_inputs:
        raise Skipped(f"it declined: {declined[0]}")


def _shrunk(data: Dataset, failure: Failed, fact: Fact, least_rows: int) -> Failed:
    """Return the failure of the same kind on the smallest input found, greedily."""
    end = time.monotonic() + MAX_SECONDS
    n_trials = 0

    def still_fails(candidate: Dataset) -> bool:
        nonlocal failure, n_trials
        if n_trials == MAX_TRIALS or time.monotonic() > end:
            return False
        n_trials += 1
        found = _failure_on(candidate, fact)
        if found is None or _kind(found) != _kind(failure):
            return False
        failure = found
        return True

    before = None
    while before is not data:
        before = data
        data = _with_fewer_columns(data, still_fails)
        data = _with_fewer_rows(data, least_rows, still_fails)
    return failure


def _with_fewer_columns(data: Dataset, still_fails: Callable[[Dataset], bool]) -> Dataset:
    # Without a half of them, without a quarter, ..., without one.
    chunk = data.n_variables // 2
    while chunk:
        start = 0
        while start < data.n_variables > chunk:
            left = np.delete(np.arange(data.n_variables), slice(start, start + chunk))
            candidate = _part(data, slice(None), left)
            if still_fails(candidate):
                data = candidate
            else:
                start += chunk
        chunk //= 2
    return data


def _with_fewer_rows(data: Dataset, least_rows: int, still_fails: Callable[[Dataset], bool]) -> Dataset:
    columns = np.arange(data.n_variables)
    while (half := data.n_rows // 2) >= least_rows:
        halves = (_part(data, rows, columns) for rows in (slice(half), slice(half, None)))
        smaller = next((candidate for candidate in halves if still_fails(candidate)), None)
        if smaller is None:
            break
        data = smaller
    return data


def _failure_on(data: Dataset, fact: Fact) -> Failed | None:
    try:
        fact(data)
    except (Declined, Skipped):
        return None
    except Failed as failure:
        return failure
    return None


def _kind(failure: Failed) -> str:
    return re.split("[:;]", str(failure))[0]


def _part(data: Dataset, rows: slice, columns: NDArray[np.int64]) -> Dataset:
    places = columns.tolist()
    return Dataset.trusted(
        tuple(data.names[j] for j in places),
        tuple(data.states[j] for j in places),
        np.array(data.codes[rows, columns], order="F"),
    )
