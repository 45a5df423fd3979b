"""Learners that do not look at the data: what any method must beat."""

from __future__ import annotations

from typing import Annotated

import numpy as np

from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from harness.learners.specification import learner


@learner(
    "no-arcs",
    returns="dag",
    reference="baseline: nothing is related",
    baseline=True,
    exempt={
        "strong-pair": "A baseline that says of all variables that they are unrelated.",
        "v-structure": "A baseline that says of all variables that they are unrelated.",
    },
)
def no_arcs(data: Dataset) -> Graph:
    """Return the graph without arcs.

    Parameters
    ----------
    data : Dataset
        Only its names are read.

    Returns
    -------
    Graph

    Examples
    --------
    >>> no_arcs(Dataset(("a", "b"), (("0", "1"),) * 2, np.zeros((1, 2), dtype=np.uint8)))
    Graph(2 variables: no edges)
    """
    return Graph.from_edges(data.names)


@learner(
    "chance",
    returns="dag",
    reference="baseline: random arcs",
    baseline=True,
    exempt={
        "permuted-columns": "A baseline that draws arcs between places, whatever column stands there.",
        "independent-columns": "A baseline that draws arcs without looking at the data.",
        "strong-pair": "A baseline that draws arcs without looking at the data.",
        "v-structure": "A baseline that draws arcs without looking at the data.",
    },
)
def chance(
    data: Dataset, *, mean_parents: Annotated[float, Between(0)] = 1.5, rng: np.random.Generator
) -> Graph:
    """Draw arcs by chance: a random order, then each pair with the same probability.

    Parameters
    ----------
    data : Dataset
        Only its names are read.
    mean_parents : float
        Arcs expected per variable; each pair is an arc with the probability
        2 mean_parents / (p - 1), at most 1.
    rng : numpy.random.Generator

    Returns
    -------
    Graph
        A DAG.

    Examples
    --------
    >>> data = Dataset(tuple("abcd"), (("0", "1"),) * 4, np.zeros((1, 4), dtype=np.uint8))
    >>> chance(data, mean_parents=1.5, rng=np.random.default_rng(1)).n_edges
    6
    """
    p = data.n_variables
    order = rng.permutation(p)
    drawn = np.triu(rng.random((p, p)) * (p - 1) < 2 * mean_parents, 1)
    arrow = np.zeros((p, p), dtype=np.bool_)
    arrow[np.ix_(order, order)] = drawn
    return Graph(data.names, arrow)
