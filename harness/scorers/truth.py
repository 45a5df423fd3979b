"""What the scorers need of a true network and of what is known of it, computed once for all runs on it.

Knowledge narrows a Markov equivalence class down to the DAGs that accord with it. The true class is
narrowed by that part of the knowledge which holds in the truth, an answer's class by all that was told;
where nothing was told wrong, that is the same. Each is drawn as its maximally oriented graph (Meek 1995).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from generators.adjacency import Nodes, Offsets, arrow_from_lists
from generators.classes import dag_class_lists, maximally_oriented, unshielded_colliders
from generators.graph import Graph
from generators.network import Network
from harness.knowledge import Knowledge


@dataclass(frozen=True, slots=True, eq=False)
class Truth:
    """A true DAG with what every comparison with it needs.

    Parameters
    ----------
    graph : Graph
        The true DAG.
    cpdag : Graph
        Its Markov equivalence class.
    narrowed : Graph
        C(T): the class, narrowed by the knowledge that holds in the truth; without any, the CPDAG.
    known : bool array, shape (p, p), or None
        ``[x, y]``: by what was told, an edge between x and y can only be x -> y. None if nothing was told.
    is_settled : bool array, shape (p, p)
        ``[x, y]``: that an edge between x and y is x -> y follows from knowledge alone, so that such an
        arrowhead counts in no measure of directions.
    colliders : int64 array, shape (m, 3)
        Its unshielded colliders, as positions (a, c, b).
    n_edges : int
        Its arcs.
    n_compelled : int
        Directed edges of C(T) that are not settled.
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
    narrowed: Graph
    known: NDArray[np.bool_] | None
    is_settled: NDArray[np.bool_]
    colliders: NDArray[np.int64]
    n_edges: int
    n_compelled: int
    at: Offsets
    nodes: Nodes

    @classmethod
    def of(cls, truth: Network | Graph, knowledge: Knowledge | None = None) -> Truth:
        """Compute what is needed of a network, or of a DAG alone.

        Parameters
        ----------
        truth : Network or Graph
        knowledge : Knowledge, optional
            What was told, right or wrong, over the truth's names in their order.

        Raises
        ------
        InputError
            If the graph is not a DAG.
        """
        graph = truth.graph if isinstance(truth, Network) else truth
        lists = dag_class_lists(graph)
        cpdag = Graph(graph.names, arrow_from_lists(lists.at, lists.nodes))
        colliders = unshielded_colliders(graph)
        narrowed, known, is_settled = cpdag, None, np.zeros(graph.arrow.shape, np.bool_)
        if knowledge is not None:
            assert knowledge.names == graph.names
            known = knowledge.directions
            holds = graph.arrow & knowledge.excluded.T  # a true arc is there, and its reversal is not
            narrowed = maximally_oriented(cpdag, holds)
            is_settled = known | holds
        for array in (is_settled, colliders, lists.dag_at, lists.dag_nodes):
            array.flags.writeable = False
        return cls(
            graph=graph,
            cpdag=cpdag,
            narrowed=narrowed,
            known=known,
            is_settled=is_settled,
            colliders=colliders,
            n_edges=lists.dag_nodes.size // 2,
            n_compelled=int(np.count_nonzero(narrowed.directed & ~is_settled)),
            at=lists.dag_at,
            nodes=lists.dag_nodes,
        )

    @property
    def n_colliders(self) -> int:
        """The number of unshielded colliders."""
        return len(self.colliders)
