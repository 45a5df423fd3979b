"""Every labelled DAG equally likely (Kuipers and Moffa, Statistics and Computing 25 (2015) 227-242).

An outpoint is a variable without parents. Take the outpoints of a DAG away and what is left is a DAG
again: so a DAG is a sequence of layers, in which every variable has at least one parent in the layer
before its own and any parents in the layers before that. Counting DAGs by the size of their first
layer, in exact integers, gives the probability of every sequence of layer sizes.
"""

from __future__ import annotations

import functools
from math import comb

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError
from generators.topologies.registry import TOPOLOGIES

# The tables hold p^2 / 2 counts of up to p^2 / 2 bits and cost about p^5: half a second for 100 variables.
MAX_VARIABLES = 100


@TOPOLOGIES.register("uniform", reference="Kuipers and Moffa 2015")
def draw_uniformly(variables: int, *, rng: np.random.Generator) -> NDArray[np.bool_]:
    """Draw a DAG from all labelled DAGs, each equally likely.

    Such graphs are dense: about a quarter of all ordered pairs are arcs.

    Parameters
    ----------
    variables : int
        The number of variables p, 1 to 100.
    rng : numpy.random.Generator

    Returns
    -------
    bool array, shape (p, p)
        [i, j] for i -> j.

    Raises
    ------
    InputError
        If there are more than 100 variables.

    Examples
    --------
    >>> draw_uniformly(5, rng=np.random.default_rng(1)).shape
    (5, 5)
    """
    if variables > MAX_VARIABLES:
        raise InputError(
            f"variables: topology 'uniform' draws at most {MAX_VARIABLES}, got {variables}; "
            "the exact counts of DAGs that it needs grow too large beyond"
        )
    sizes = _draw_layer_sizes(variables, rng)
    layer = np.repeat(np.arange(len(sizes)), sizes)
    is_earlier = layer[:, np.newaxis] < layer
    is_above = layer[:, np.newaxis] + 1 == layer
    is_arc = _draw_coins((variables, variables), rng) & is_earlier
    while (lacking := np.flatnonzero((layer > 0) & ~(is_arc & is_above).any(axis=0))).size:
        is_arc[:, lacking] |= _draw_coins((variables, lacking.size), rng) & is_above[:, lacking]
    # Which variables form which layer: all ways are equally likely.
    label = rng.permutation(variables)
    arrow = np.empty_like(is_arc)
    arrow[np.ix_(label, label)] = is_arc
    return arrow


@functools.cache
def outpoint_counts(variables: int) -> tuple[int, ...]:
    """Count the labelled DAGs by their number of outpoints.

    Parameters
    ----------
    variables : int
        The number of variables p, at least 1.

    Returns
    -------
    tuple of int
        The number of DAGs with 1, ..., p variables that have no parents. Their sum is the number of
        labelled DAGs (Robinson 1973).

    Examples
    --------
    >>> outpoint_counts(3), sum(outpoint_counts(4))
    ((15, 9, 1), 543)
    """
    below = [comb(variables, size) * _ways_below(size, variables - size) for size in range(1, variables)]
    return (*below, 1)


def _ways_below(size: int, left: int) -> int:
    """Count the ways to go on below a layer when so many variables are left."""
    counts = enumerate(outpoint_counts(left), start=1)
    return sum(count * _ways_to_join(size, following, left) for following, count in counts)


def _ways_to_join(size: int, following: int, left: int) -> int:
    """Count the sets of arcs from a layer to the variables that are left, given the size of the next layer.

    Each variable of the next layer has a non-empty set of parents here, each of the others any set.
    """
    with_parents: int = ((1 << size) - 1) ** following
    return with_parents << (size * (left - following))


def _draw_layer_sizes(variables: int, rng: np.random.Generator) -> list[int]:
    # One number below the count of all DAGs names the whole sequence: where it falls among the counts
    # says the first size, what remains of it is a number below the count of the ways to go on.
    number = _draw_below(sum(outpoint_counts(variables)), rng)
    sizes: list[int] = []
    left = variables
    while left:
        for size, count in enumerate(outpoint_counts(left), start=1):
            ways = _ways_to_join(sizes[-1], size, left) if sizes else 1
            if number < count * ways:
                number //= ways * comb(left, size)
                break
            number -= count * ways
        sizes.append(size)
        left -= size
    return sizes


def _draw_below(bound: int, rng: np.random.Generator) -> int:
    """Draw a whole number from 0 to bound - 1, exactly uniform however large the bound."""
    bits = (bound - 1).bit_length()
    n_bytes = -(-bits // 8)
    while True:
        value = int.from_bytes(rng.bytes(n_bytes), "little") >> (8 * n_bytes - bits)
        if value < bound:
            return value


def _draw_coins(shape: tuple[int, int], rng: np.random.Generator) -> NDArray[np.bool_]:
    return rng.integers(0, 2, shape, dtype=np.bool_)
