"""What the scorers need of a true network, computed once for all runs on it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import Nodes, Offsets, arrow_from_lists
from generators.classes import dag_class_lists, unshielded_colliders
from generators.graph import Graph
from generators.network import Network


@dataclass(frozen=True, slots=True, eq=False)
class Truth:
    """A true DAG with what every comparison with it needs.

    Parameters
    ----------
    graph : Graph
        The true DAG.
    cpdag : Graph
        Its Markov equivalence class.
    colliders : int64 array, shape (m, 3)
        Its unshielded colliders, as positions (a, c, b).
    n_edges : int
        Its arcs.
    n_compelled : int
        Directed edges of the class.
    at, nodes : int64 array, shape (3 p + 1,), and uint32 array, shape (2 n_edges,)
        The DAG's neighbour lists (see `generators.adjacency`).

    Examples
    --------
    >>> truth = Truth.of(Graph.from_edges("abc", directed=[("a", "c"), ("b", "c")]))
    >>> truth.n_edges, truth.n_compelled, truth.n_colliders
    (2, 2, 1)
    """

    graph: Graph
    cpdag: Graph
    colliders: NDArray[np.int64]
    n_edges: int
    n_compelled: int
    at: Offsets
    nodes: Nodes

    @classmethod
    def of(cls, truth: Network | Graph) -> Truth:
        """Compute what is needed of a network, or of a DAG alone.

        Raises
        ------
        InputError
            If the graph is not a DAG.
        """
        graph = truth.graph if isinstance(truth, Network) else truth
        lists = dag_class_lists(graph)
        cpdag = Graph(graph.names, arrow_from_lists(lists.at, lists.nodes))
        colliders = unshielded_colliders(graph)
        n_edges = lists.dag_nodes.size // 2
        n_compelled = int(np.count_nonzero(cpdag.directed))
        for array in (colliders, lists.dag_at, lists.dag_nodes):
            array.flags.writeable = False
        return cls(graph, cpdag, colliders, n_edges, n_compelled, lists.dag_at, lists.dag_nodes)

    @property
    def n_colliders(self) -> int:
        """The number of unshielded colliders."""
        return len(self.colliders)
