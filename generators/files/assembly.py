"""What all readers of network files do alike: sizes, rows that sum to 1, and the whole network."""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Callable, Mapping, Sequence
from math import prod

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.files.text import listed
from generators.graph import Graph
from generators.network import MAX_CPT_CELLS, SUM_TOLERANCE, Cpt, Network

# Published tables are rounded to two or three decimals (0.33, 0.33, 0.33); common practice.
ROW_TOLERANCE = 1e-2
_FARTHEST = ROW_TOLERANCE + SUM_TOLERANCE  # 0.33 + 0.33 + 0.33 misses 1 by a rounding more than 0.01
MAX_AXES = 64  # of a numpy array


def is_probability(value: float) -> bool:
    """Say whether a number may stand in a row that sums to 1 within the tolerance; NaN may not."""
    return 0 <= value <= 1 + _FARTHEST


def row_label(variable: str, parents_states: Sequence[str]) -> str:
    """Return the words for one row of a table: the parents' states, or the variable if it has none.

    Examples
    --------
    >>> row_label("wet", ("yes", "no")), row_label("rain", ())
    ('(yes, no)', "'rain'")
    """
    if not parents_states:
        return repr(variable)
    return f"({listed(parents_states)})"


def size_fault(variable: str, shape: Sequence[int], taken: int) -> str | None:
    """Say why a table must not be allocated, or None.

    Parameters
    ----------
    variable : str
    shape : sequence of int
        The numbers of states: parents, then the variable.
    taken : int
        The cells of the file's tables before this one: a small file may not ask for much memory by
        way of many tables either.
    """
    if len(shape) > MAX_AXES:
        return f"{variable!r} has {len(shape) - 1} parents; at most {MAX_AXES - 1} are accepted."
    cells = taken + prod(shape)
    if cells > MAX_CPT_CELLS:
        limit = f"at most {MAX_CPT_CELLS} are accepted"
        return f"the tables up to that of {variable!r} would have {cells} cells; {limit}."
    return None


def normalised(
    variable: str,
    parents_states: Sequence[Sequence[str]],
    p: NDArray[np.float64],
    refuse: Callable[[int, str], InputError],
) -> tuple[NDArray[np.float64], str | None]:
    """Return a table whose rows sum to 1, and a note if that took more than rounding.

    Rows that sum to 1 within 1e-9 are left to the bit as they are.

    Parameters
    ----------
    variable : str
    parents_states : sequence of sequences of str
        The states of each parent, in the order of the table's axes.
    p : float64 array, shape (r1, ..., rk, r)
        Parents' axes first, then the variable's; each number passes `is_probability`.
    refuse : callable
        Gives the error for a row (its position, first parent slowest) and a message.

    Raises
    ------
    InputError
        From `refuse`, for the first row whose sum is off by more than 0.01.
    """
    sums = p.sum(axis=-1)
    off = np.abs(sums - 1)
    rough = off > SUM_TOLERANCE
    if not rough.any():
        return p, None

    def label(row: int) -> str:
        index = np.unravel_index(row, sums.shape)
        return row_label(variable, [own[int(i)] for own, i in zip(parents_states, index, strict=True)])

    beyond = (off > _FARTHEST).ravel()
    if beyond.any():
        row = int(beyond.argmax())
        total = float(sums.flat[row])
        raise refuse(row, f"the probabilities for {label(row)} sum to {total:.12g}, not 1.")
    first = int(rough.argmax())
    count = int(np.count_nonzero(rough))
    rows = "row was" if count == 1 else "rows were"
    note = (
        f"{count} {rows} renormalised in the table of {variable!r}; "
        f"the probabilities for {label(first)} summed to {float(sums.flat[first]):.12g}."
    )
    return np.where(rough[..., None], p / sums[..., None], p), note


def build_network(
    states: Mapping[str, tuple[str, ...]], cpts: Sequence[Cpt], refuse: Callable[[int, str], InputError]
) -> Network:
    """Put a network together, with a place for the fault if its arcs run in a circle.

    Parameters
    ----------
    states : mapping of str to tuple of str
        The variables in the network's order.
    cpts : sequence of Cpt
        One per variable, in the file's order, with axes that fit the states.
    refuse : callable
        Gives the error for the k-th table and a message.

    Raises
    ------
    InputError
        From `refuse`, for the first table whose parents close a directed cycle.
    """
    names = tuple(states)

    position = {name: i for i, name in enumerate(names)}

    def graph_of(n_tables: int) -> Graph:
        arrow = np.zeros((len(names), len(names)), dtype=np.bool_)
        for cpt in cpts[:n_tables]:
            arrow[[position[parent] for parent in cpt.parents], position[cpt.variable]] = True
        return Graph(names, arrow)

    def has_cycle(n_tables: int) -> bool:
        graph = graph_of(n_tables)
        return not (graph.is_directed and graph.is_acyclic)

    if has_cycle(len(cpts)):
        k = bisect_left(range(len(cpts)), True, key=lambda k: has_cycle(k + 1))
        raise refuse(k, f"the parents of {cpts[k].variable!r} close a directed cycle: {_cycle(cpts, k)}.")
    return Network(graph_of(len(cpts)), tuple(states.values()), {cpt.variable: cpt for cpt in cpts})


def _cycle(cpts: Sequence[Cpt], k: int) -> str:
    # The k-th table closed it, so one of its parents is reached from its variable through earlier tables.
    children: dict[str, list[str]] = {}
    for cpt in cpts[: k + 1]:
        for parent in cpt.parents:
            children.setdefault(parent, []).append(cpt.variable)
    start = cpts[k].variable
    came_from = dict.fromkeys(children[start], start)
    queue = list(came_from)
    while start not in came_from:
        at = queue.pop(0)
        for child in children.get(at, ()):
            if child not in came_from:
                came_from[child] = at
                queue.append(child)
    path = [start, came_from[start]]
    while path[-1] != start:
        path.append(came_from[path[-1]])
    return " -> ".join(map(repr, reversed(path)))
