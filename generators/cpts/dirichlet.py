"""Tables whose rows are independent draws from a symmetric Dirichlet distribution."""

from __future__ import annotations

import math
from typing import Annotated

import numpy as np
from numpy.typing import NDArray

from generators.cpts.registry import CPT_FAMILIES
from generators.graph import Graph
from generators.network import Cpt
from generators.settings import Between


@CPT_FAMILIES.register("dirichlet", reference="Cooper and Herskovits 1992")
def draw_dirichlet(
    graph: Graph,
    cardinalities: NDArray[np.int64],
    *,
    rng: np.random.Generator,
    concentration: Annotated[float, Between(0, inside=True)] = 1.0,
) -> dict[str, Cpt]:
    """Draw each row of each table from a symmetric Dirichlet distribution.

    Parameters
    ----------
    graph : Graph
        A DAG.
    cardinalities : int64 array, shape (p,)
        The number of states of each variable, in the graph's order.
    rng : numpy.random.Generator
    concentration : float
        The parameter of each state: 1 makes all distributions equally likely, less makes rows nearly
        deterministic, more makes them nearly uniform.

    Returns
    -------
    dict of str to Cpt

    Notes
    -----
    A Dirichlet row is usually a row of gamma variates divided by its sum; at a concentration of .001
    about half of all variates are below the smallest double, and whole rows would be 0. Below .1,
    ``Generator.dirichlet`` breaks a stick by beta variates instead, which it draws by their logarithms:
    a row then tends to a single 1 among exact zeros, and always sums to 1.

    Examples
    --------
    >>> graph = Graph.from_edges(["a", "b"], directed=[("a", "b")])
    >>> cpts = draw_dirichlet(graph, np.array([2, 3]), rng=np.random.default_rng(1))
    >>> cpts["b"].p.shape, cpts["b"].p.sum(axis=-1).round(12).tolist()
    ((2, 3), [1.0, 1.0])
    """
    n_states = dict(zip(graph.names, cardinalities.tolist(), strict=True))
    parents = {name: graph.parents(name) for name in graph.names}
    shapes = {name: [n_states[parent] for parent in own] for name, own in parents.items()}
    cpts = {}
    # One call for all variables with as many states: calls cost more than the rows of small tables.
    for r in sorted(set(n_states.values())):
        alike = [name for name in graph.names if n_states[name] == r]
        ends = np.cumsum([math.prod(shapes[name]) for name in alike])
        rows = rng.dirichlet(np.full(r, concentration), size=int(ends[-1]))
        for name, table in zip(alike, np.split(rows, ends[:-1]), strict=True):
            cpts[name] = Cpt(name, parents[name], table.reshape(*shapes[name], r))
    return cpts
