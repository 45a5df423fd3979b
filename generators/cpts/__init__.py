"""Conditional probability tables for a DAG: one file per family, one registry, one function that draws.

A new family is a file beside these that enters its function in `CPT_FAMILIES`, and a line below.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from generators.cpts.dirichlet import draw_dirichlet
from generators.cpts.registry import CPT_FAMILIES
from generators.cpts.states import parse_states
from generators.errors import InputError
from generators.graph import Graph
from generators.network import MAX_CPT_CELLS, Network

__all__ = ["CPT_FAMILIES", "draw_dirichlet", "generate_network", "parse_states"]


def generate_network(
    graph: Graph,
    *,
    cpts: str = "dirichlet",
    states: int | str = "2-3",
    rng: np.random.Generator,
    **settings: Any,
) -> Network:
    """Draw the states and the tables of a network on a given DAG.

    Parameters
    ----------
    graph : Graph
        A DAG; it names the variables.
    cpts : str
        A name in `CPT_FAMILIES`.
    states : int or str
        The number of states of every variable, or a range ("2-3") from which each draws uniformly.
        The states are called s1, s2, ...
    rng : numpy.random.Generator
    **settings
        Those of the CPT family.

    Returns
    -------
    Network

    Raises
    ------
    InputError
        If the graph is no DAG, the family or a setting is unknown, a value is not accepted, or the
        tables would hold more than 2^26 probabilities.

    Examples
    --------
    >>> graph = Graph.from_edges(["a", "b"], directed=[("a", "b")])
    >>> network = generate_network(graph, states=3, concentration=1.0, rng=np.random.default_rng(1))
    >>> network.states[0], network.cpts["b"].p.shape
    (('s1', 's2', 's3'), (3, 3))
    >>> generate_network(graph, concentration=0, rng=np.random.default_rng(1))
    Traceback (most recent call last):
        ...
    generators.errors.InputError: CPT family 'dirichlet': concentration: must be a number above 0, got 0
    """
    values = CPT_FAMILIES.parse(cpts, settings)
    try:
        low, high = parse_states(states)
    except ValueError as error:
        raise InputError(f"states: {error}") from None
    cardinalities = rng.integers(low, high, size=graph.n_variables, endpoint=True)
    _refuse_large_tables(graph, cardinalities)
    tables = CPT_FAMILIES[cpts].function(graph, cardinalities, rng=rng, **values)
    own = tuple(tuple(f"s{k + 1}" for k in range(r)) for r in cardinalities.tolist())
    return Network(graph, own, tables)


def _refuse_large_tables(graph: Graph, cardinalities: NDArray[np.int64]) -> None:
    sides = cardinalities.astype(np.float64)
    with np.errstate(over="ignore"):
        cells = sides * np.where(graph.arrow, sides[:, np.newaxis], 1.0).prod(axis=0)
    if cells.sum() > MAX_CPT_CELLS:
        largest = int(cells.argmax())
        raise InputError(
            f"the tables of this network would hold {cells.sum():.4g} probabilities, at most {MAX_CPT_CELLS} "
            f"are accepted; fewer parents or states are needed ({graph.names[largest]!r} alone has "
            f"{int(graph.arrow[:, largest].sum())} parents)"
        )
