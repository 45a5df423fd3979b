"""From an input on which a fact does not hold to a small one."""

from __future__ import annotations

import re
import time
from collections.abc import Callable, Iterable, Iterator

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
    candidates = _smaller(data, least_rows)
    while (candidate := next(candidates, None)) is not None:
        n_trials += 1
        if n_trials > MAX_TRIALS or time.monotonic() > end:
            break
        found = _failure_on(candidate, fact)
        if found is not None and _kind(found) == _kind(failure):
            failure = found
            candidates = _smaller(candidate, least_rows)
    return failure


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


def _smaller(data: Dataset, least_rows: int) -> Iterator[Dataset]:
    # The halves of the rows, then without a half of the columns, a quarter, ..., one.
    n, p = data.n_rows, data.n_variables
    rows, columns = np.arange(n), np.arange(p)
    if n // 2 >= least_rows:
        yield _part(data, rows[: n // 2], columns)
        yield _part(data, rows[n // 2 :], columns)
    chunk = p // 2
    while chunk:
        for start in range(0, p, chunk):
            left = np.delete(columns, slice(start, start + chunk))
            if len(left):
                yield _part(data, rows, left)
        chunk //= 2


def _part(data: Dataset, rows: NDArray[np.int64], columns: NDArray[np.int64]) -> Dataset:
    places = columns.tolist()
    return Dataset.trusted(
        tuple(data.names[j] for j in places),
        tuple(data.states[j] for j in places),
        np.asfortranarray(data.codes[np.ix_(rows, columns)]),
    )
