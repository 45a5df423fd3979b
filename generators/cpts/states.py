"""How many states a generated variable has."""

from __future__ import annotations

import re
from typing import Any

from generators.dataset import MAX_STATES

LEAST_STATES = 2
_RANGE = re.compile(r"([0-9]{1,9})(?:-([0-9]{1,9}))?")


def parse_states(value: Any) -> tuple[int, int]:
    """Read the number of states of a generated variable, or its range.

    Parameters
    ----------
    value : int or str
        A whole number (also as text), or a range "LOW-HIGH" from which each variable draws uniformly.

    Returns
    -------
    tuple of int
        The least and the greatest number of states.

    Raises
    ------
    ValueError
        "must be ..., got ...".

    Examples
    --------
    >>> parse_states("2-3"), parse_states(4)
    ((2, 3), (4, 4))
    >>> parse_states("3-2")
    Traceback (most recent call last):
        ...
    ValueError: must be a whole number from 2 to 65535 or a range such as '2-3', got '3-2'
    """
    match = _RANGE.fullmatch(str(value))  # the text of what is neither text nor a whole number has no match
    if match:
        low = int(match[1])
        high = int(match[2] or low)
        if LEAST_STATES <= low <= high <= MAX_STATES:
            return low, high
    raise ValueError(
        f"must be a whole number from {LEAST_STATES} to {MAX_STATES} or a range such as '2-3', got {value!r}"
    )
