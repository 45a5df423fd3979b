"""Arcs drawn independently along a random order, with a cap on the parents."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.settings import Between
from generators.topologies.registry import TOPOLOGIES


@TOPOLOGIES.register("random-order", reference="Erdos and Renyi 1959, directed along a random order")
def draw_along_random_order(
    variables: int,
    *,
    rng: np.random.Generator,
    mean_parents: Annotated[float, Between(0)] = 1.5,
    max_parents: Annotated[int, Between(1)] = 3,
) -> NDArray[np.bool_]:
    """Draw each arc with one probability along a random order, and drop parents over a cap.

    Each of the p (p - 1) / 2 pairs is an arc with probability 2 `mean_parents` / (p - 1), from the
    earlier to the later variable of a uniformly random order. A variable with more than `max_parents`
    parents keeps that many of them, every choice equally likely: `expected_arcs` says what is left.

    Parameters
    ----------
    variables : int
        The number of variables p, at least 1.
    rng : numpy.random.Generator
    mean_parents : float
        Arcs per variable before the cap, at most (p - 1) / 2.
    max_parents : int
        The cap.

    Returns
    -------
    bool array, shape (p, p)
        [i, j] for i -> j.

    Raises
    ------
    InputError
        If a DAG on so few variables cannot have so many parents.

    Examples
    --------
    >>> draw_along_random_order(3, mean_parents=1.0, rng=np.random.default_rng(1)).sum()
    np.int64(3)
    """
    p_arc = _arc_probability(variables, mean_parents)
    order = rng.permutation(variables)
    keys = rng.random(variables * (variables - 1) // 2)
    # The pairs of places in the order, later place slowest: place i has the earlier places 0 .. i - 1.
    first_pair = np.arange(variables) * np.arange(-1, variables - 1) // 2
    arcs = np.flatnonzero(keys < p_arc)
    child = np.searchsorted(first_pair, arcs, side="right") - 1
    parent = arcs - first_pair[child]
    # Given that they are below p_arc, the keys of a child's arcs are independent and alike: the arcs with
    # the smallest keys are a uniformly random choice.
    ranked = np.lexsort((keys[arcs], child))
    rank = np.arange(len(arcs)) - np.searchsorted(child[ranked], child[ranked])
    kept = ranked[rank < max_parents]
    arrow = np.zeros((variables, variables), dtype=np.bool_)
    arrow[order[parent[kept]], order[child[kept]]] = True
    return arrow


def expected_arcs(variables: int, *, mean_parents: float = 1.5, max_parents: int = 3) -> float:
    """Return the exact expected number of arcs of a random-order graph, after the cap.

    Parameters
    ----------
    variables : int
        The number of variables p, at least 1.
    mean_parents, max_parents
        As in `draw_along_random_order`.

    Returns
    -------
    float
        The sum over the places i = 0 .. p - 1 of an order of E[min(X_i, `max_parents`)], where X_i is
        binomial with i trials.

    Raises
    ------
    InputError
        If a DAG on so few variables cannot have so many parents.

    Examples
    --------
    >>> round(expected_arcs(12, mean_parents=1.5, max_parents=11), 6)
    18.0
    >>> round(expected_arcs(12, mean_parents=1.5, max_parents=3), 1)
    16.3
    """
    p_arc = _arc_probability(variables, mean_parents)
    p_count = np.zeros(min(max_parents, variables))  # P(X_i = k) for k below the cap
    p_count[0] = 1.0
    at_place = total = 0.0
    for _ in range(variables):
        total += at_place
        # One more possible parent counts if it is one and the cap is not yet reached.
        at_place += p_arc * float(p_count.sum())
        gained = p_arc * p_count[:-1]
        p_count *= 1 - p_arc
        p_count[1:] += gained
    return total


def _arc_probability(variables: int, mean_parents: float) -> float:
    greatest = (variables - 1) / 2
    if mean_parents > greatest:
        raise InputError(
            f"mean_parents: a DAG on {variables} variables has at most {greatest:g} parents on average, "
            f"got {mean_parents:g}"
        )
    return min(1.0, mean_parents / greatest) if greatest else 0.0
