"""Random DAGs: one file per topology, one registry, one function that draws.

A new topology is a file beside these that enters its function in `TOPOLOGIES`, and a line below.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from generators.errors import InputError
from generators.graph import Graph
from generators.settings import Between, Setting
from generators.topologies.random_order import expected_arcs
from generators.topologies.registry import TOPOLOGIES
from generators.topologies.uniform import outpoint_counts

__all__ = ["TOPOLOGIES", "VARIABLES", "expected_arcs", "generate_graph", "outpoint_counts"]

VARIABLES = Setting("variables", int, bounds=Between(1))


def generate_graph(
    topology: str,
    *,
    variables: int,
    rng: np.random.Generator,
    names: Sequence[str] | None = None,
    **settings: Any,
) -> Graph:
    """Draw a random DAG.

    Parameters
    ----------
    topology : str
        A name in `TOPOLOGIES`.
    variables : int
        The number of variables p, at least 1.
    rng : numpy.random.Generator
    names : sequence of str, optional
        The names of the variables; by default v1, ..., vp.
    **settings
        Those of the topology.

    Returns
    -------
    Graph
        Directed and acyclic.

    Raises
    ------
    InputError
        If the topology or a setting is unknown, or a value is not accepted.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> graph = generate_graph("random-order", variables=20, mean_parents=1.5, max_parents=4, rng=rng)
    >>> graph.is_dag, graph.names[:3]
    (True, ('v1', 'v2', 'v3'))
    >>> generate_graph("random-order", variables=20, mean_parent=1.5, rng=rng)
    Traceback (most recent call last):
        ...
    generators.errors.InputError: topology 'random-order': unknown setting 'mean_parent'; accepted: \
max_parents, mean_parents. Did you mean 'mean_parents'?
    """
    values = TOPOLOGIES.parse(topology, settings)
    try:
        p = VARIABLES.parse(variables)
    except ValueError as error:
        raise InputError(f"variables: {error}") from None
    own = tuple(f"v{i + 1}" for i in range(p)) if names is None else tuple(names)
    if len(own) != p:
        raise InputError(f"names: {p} variables need as many names, got {len(own)}")
    return Graph(own, TOPOLOGIES[topology].function(p, rng=rng, **values))
