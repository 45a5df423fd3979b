"""Trivial methods that never look at the data: what every learner has to beat."""

from __future__ import annotations

from typing import Annotated

import numpy as np

from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from harness.learners.specification import learner


@learner("no-arcs", returns="dag", reference="common practice: the answer of doing nothing", baseline=True)
def no_arcs(data: Dataset) -> Graph:
    """Return the graph without arcs."""
    return Graph.from_edges(data.names)


@learner("chance", returns="dag", reference="common practice: the answer of guessing", baseline=True)
def chance(
    data: Dataset, *, mean_parents: Annotated[float, Between(0)] = 1.5, rng: np.random.Generator
) -> Graph:
    """Return random arcs: each pair, on a random order, with the probability that gives the density.

    Parameters
    ----------
    data : Dataset
        Only its names are used.
    mean_parents : float
        Arcs per variable, on average. In a plan it is that of the condition's networks unless it is given.
    rng : numpy.random.Generator

    Returns
    -------
    Graph
        A DAG.
    """
    p = data.n_variables
    order = rng.permutation(p)
    share = min(1.0, 2 * mean_parents / max(1, p - 1))
    upper = np.triu(rng.random((p, p)) < share, k=1)
    arrow = np.zeros((p, p), dtype=np.bool_)
    arrow[np.ix_(order, order)] = upper
    return Graph(data.names, arrow)
