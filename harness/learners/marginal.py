"""Learners that look at pairs of variables only, conditioned on nothing."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from numpy.typing import NDArray

from generators.compiled import inlined, kernel, warm_up
from generators.dataset import Dataset
from generators.graph import Graph
from generators.settings import Between
from harness.counts import prepare
from harness.independence.statistics import dependent_pairs, pair_statistics
from harness.independence.tables import Statistic
from harness.learners.specification import learner

TIE = 1e-10  # nats; rounding errors of a mutual information are far smaller, real differences far larger


@learner("pairwise", returns="skeleton", reference="baseline: marginal dependence", baseline=True)
def pairwise(
    data: Dataset, *, alpha: Annotated[float, Between(0, 1, inside=True)] = 0.01, test: Statistic = "g2"
) -> Graph:
    """Join every pair of variables that a test finds dependent.

    A baseline: what conditioning is worth shows against it. With more rows it joins ever more of the
    variables that are only indirectly related.

    Parameters
    ----------
    data : Dataset
        Without missing cells.
    alpha : float
        Level of each test; strictly between 0 and 1.
    test : {"g2", "pearson"}
        With nominal degrees of freedom; see `harness.independence`.

    Returns
    -------
    Graph
        Undirected.

    Examples
    --------
    >>> codes = np.array([[0, 0, 0], [1, 1, 0], [0, 0, 1], [1, 1, 1]] * 5, dtype=np.uint8)
    >>> pairwise(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes)).edges()
    (('a', 'b', 'undirected'),)
    """
    columns = prepare(data)
    return Graph(data.names, dependent_pairs(pair_statistics(columns, test), columns.cardinalities, alpha))


@learner(
    "chow-liu",
    returns="pdag",
    reference="Chow and Liu 1968",
    exempt={
        "independent-columns": "The published tree spans all variables, also where there is no information.",
        "v-structure": "The edges of a tree are undirected: no variable has two parents.",
    },
)
def chow_liu(data: Dataset) -> Graph:
    """Return the tree with the greatest sum of mutual informations.

    Among the distributions of all trees, that of this one, fitted to the data, is the likeliest. All its
    edges are undirected: every choice of a root states the same independencies.

    Pairs are taken from the strongest on, skipping those that would close a cycle (Kruskal 1956). Mutual
    informations within 1e-10 nats of the strongest one not yet looked at are ties and are taken in the
    order of the columns, the first variable's first. As published, the tree spans all variables: also
    edges without any information are drawn.

    Parameters
    ----------
    data : Dataset
        Without missing cells.

    Returns
    -------
    Graph
        With one edge less than variables.

    Examples
    --------
    >>> codes = np.array([[0, 0, 0], [1, 1, 0], [0, 0, 1], [1, 1, 1]] * 5, dtype=np.uint8)
    >>> chow_liu(Dataset(("a", "b", "c"), (("0", "1"),) * 3, codes)).edges()
    (('a', 'b', 'undirected'), ('a', 'c', 'undirected'))
    """
    information = pair_statistics(prepare(data), "g2") / (2 * max(data.n_rows, 1))
    first, second = np.triu_indices(data.n_variables, 1)
    values = information[first, second]
    order = np.argsort(-values, kind="stable")
    return Graph(data.names, _spanning_tree(data.n_variables, first[order], second[order], values[order]))


@kernel
def _spanning_tree(
    p: int, first: NDArray[np.int64], second: NDArray[np.int64], values: NDArray[np.float64]
) -> NDArray[np.bool_]:
    # The pairs come in descending order of their values.
    tree = np.zeros((p, p), dtype=np.bool_)
    root = np.arange(p)
    n_pairs = values.shape[0]
    start = 0
    while start < n_pairs:
        end = start + 1
        while end < n_pairs and values[start] - values[end] <= TIE:
            end += 1
        for k in np.sort(first[start:end] * p + second[start:end]):
            i, j = k // p, k % p
            root_i, root_j = _find_root(root, i), _find_root(root, j)
            if root_i != root_j:
                root[root_j] = root_i
                tree[i, j] = tree[j, i] = True
        start = end
    return tree


@inlined
def _find_root(root: NDArray[np.int64], v: int) -> int:
    while root[v] != v:
        root[v] = root[root[v]]
        v = root[v]
    return v


@warm_up
def _compile() -> None:
    chow_liu(Dataset(("a", "b"), (("0", "1"),) * 2, np.zeros((2, 2), dtype=np.uint8)))
