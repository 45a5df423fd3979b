"""Graphs over named variables: DAGs, partially directed graphs and skeletons in one value type."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from generators.errors import InputError

if TYPE_CHECKING:
    import networkx as nx

Edge = tuple[str, str, str]
DIRECTED = "directed"
UNDIRECTED = "undirected"


@dataclass(frozen=True, slots=True, eq=False)
class Graph:
    """A graph over named variables with at most one edge per pair, directed or undirected.

    Parameters
    ----------
    names : tuple of str
        The variables, in order; unique and not empty strings.
    arrow : bool array, shape (p, p)
        ``arrow[i, j]`` says i -> j; both ``arrow[i, j]`` and ``arrow[j, i]`` say that i and j are joined
        by an undirected edge. The diagonal is False. The array is copied and made read-only.

    Raises
    ------
    InputError
        If the shape does not fit the names, a name is empty or stands twice, or a variable has an edge
        to itself.

    Examples
    --------
    >>> graph = Graph.from_edges(["rain", "wet", "slip"], directed=[("rain", "wet"), ("wet", "slip")])
    >>> graph.n_edges, graph.is_acyclic
    (2, True)
    >>> graph.parents("wet")
    ('rain',)
    """

    names: tuple[str, ...]
    arrow: NDArray[np.bool_]

    def __post_init__(self) -> None:
        names = tuple(self.names)
        arrow = np.array(self.arrow, dtype=np.bool_, order="C")
        if arrow.shape != (len(names), len(names)):
            raise InputError(
                f"a graph over {len(names)} variables needs a square of that side, got {arrow.shape}"
            )
        if len(set(names)) != len(names):
            twice = sorted({name for name in names if names.count(name) > 1})
            raise InputError(
                f"variable names must differ; {', '.join(map(repr, twice))} stands more than once"
            )
        if not all(isinstance(name, str) and name for name in names):
            raise InputError("variable names must be non-empty text")
        if arrow.diagonal().any():
            loop = names[int(np.argmax(arrow.diagonal()))]
            raise InputError(f"an edge must join two different variables, got {loop!r} -> {loop!r}")
        arrow.flags.writeable = False
        object.__setattr__(self, "names", names)
        object.__setattr__(self, "arrow", arrow)

    @classmethod
    def from_edges(
        cls,
        names: Sequence[str],
        directed: Iterable[tuple[str, str]] = (),
        undirected: Iterable[tuple[str, str]] = (),
    ) -> Graph:
        """Build a graph from edges between named variables.

        Raises
        ------
        InputError
            If an edge names an unknown variable, or a pair is given twice.

        Examples
        --------
        >>> Graph.from_edges("ab", undirected=[("a", "b")]).edges()
        (('a', 'b', 'undirected'),)
        """
        position = {name: i for i, name in enumerate(names)}
        arrow = np.zeros((len(names), len(names)), dtype=np.bool_)
        kinds = [(edge, DIRECTED) for edge in directed] + [(edge, UNDIRECTED) for edge in undirected]
        for (source, target), kind in kinds:
            for name in (source, target):
                if name not in position:
                    raise InputError(
                        f"the edge {source!r} - {target!r} names {name!r}, which is not a variable"
                    )
            i, j = position[source], position[target]
            if arrow[i, j] or arrow[j, i]:
                raise InputError(f"the pair {source!r}, {target!r} has more than one edge")
            arrow[i, j] = True
            arrow[j, i] = kind == UNDIRECTED
        return cls(tuple(names), arrow)

    @classmethod
    def from_networkx(cls, graph: nx.DiGraph[Any], names: Sequence[str] | None = None) -> Graph:
        """Read a networkx directed graph; arcs in both directions make one undirected edge.

        Parameters
        ----------
        graph : networkx.DiGraph
        names : sequence of str, optional
            The order of the variables; by default that of the graph's nodes.

        Raises
        ------
        InputError
            If the nodes are not the given names.
        """
        order = [str(node) for node in graph.nodes] if names is None else list(names)
        position = {name: i for i, name in enumerate(order)}
        strange = sorted({str(node) for node in graph.nodes} - set(order))
        if strange:
            raise InputError(f"the graph has the node {strange[0]!r}, which is not a variable")
        arrow = np.zeros((len(order), len(order)), dtype=np.bool_)
        for source, target in graph.edges:
            arrow[position[str(source)], position[str(target)]] = True
        return cls(tuple(order), arrow)

    @property
    def n_variables(self) -> int:
        """The number of variables p."""
        return len(self.names)

    @property
    def n_edges(self) -> int:
        """The number of adjacent pairs."""
        return int(np.count_nonzero(np.triu(self.skeleton)))

    @property
    def skeleton(self) -> NDArray[np.bool_]:
        """Which pairs are adjacent: symmetric bool array, shape (p, p)."""
        return self.arrow | self.arrow.T

    @property
    def directed(self) -> NDArray[np.bool_]:
        """Which pairs are joined by a directed edge: bool array, shape (p, p), [i, j] for i -> j."""
        return self.arrow & ~self.arrow.T

    @property
    def undirected(self) -> NDArray[np.bool_]:
        """Which pairs are joined by an undirected edge: symmetric bool array, shape (p, p)."""
        return self.arrow & self.arrow.T

    @property
    def is_directed(self) -> bool:
        """Whether no edge is undirected."""
        return not bool(self.undirected.any())

    @property
    def is_acyclic(self) -> bool:
        """Whether the directed edges form no directed cycle (undirected ones are ignored)."""
        return len(self._order()) == self.n_variables

    @property
    def is_dag(self) -> bool:
        """Whether every edge is directed and no directed cycle exists."""
        return self.is_directed and self.is_acyclic

    def parents(self, name: str) -> tuple[str, ...]:
        """Return the variables with a directed edge into `name`, in the graph's order."""
        j = self.names.index(name)
        is_parent = self.arrow[:, j] & ~self.arrow[j]
        return tuple(self.names[i] for i in is_parent.nonzero()[0].tolist())

    def order(self) -> tuple[int, ...]:
        """Return a topological order of the variables' positions, the smallest position first among equals.

        Raises
        ------
        InputError
            If the directed edges contain a cycle; the message names one.
        """
        order = self._order()
        if len(order) < self.n_variables:
            raise InputError(f"the graph has a directed cycle: {' -> '.join(self._cycle(set(order)))}")
        return tuple(order)

    def _order(self) -> list[int]:
        import heapq

        directed = self.directed
        n_parents = directed.sum(axis=0).tolist()
        children = [np.flatnonzero(row).tolist() for row in directed]
        ready = [i for i, count in enumerate(n_parents) if count == 0]
        heapq.heapify(ready)
        order = []
        while ready:
            i = heapq.heappop(ready)
            order.append(i)
            for j in children[i]:
                n_parents[j] -= 1
                if n_parents[j] == 0:
                    heapq.heappush(ready, j)
        return order

    def _cycle(self, sorted_out: set[int]) -> list[str]:
        # Every variable that could not be ordered has a parent that could not be ordered either:
        # walking backwards from any of them must come round.
        directed = self.directed
        at = min(set(range(self.n_variables)) - sorted_out)
        walk: list[int] = []
        while at not in walk:
            walk.append(at)
            at = next(int(i) for i in np.flatnonzero(directed[:, at]) if int(i) not in sorted_out)
        loop = [at, *reversed(walk[walk.index(at) :])]
        return [self.names[i] for i in loop]

    def edges(self) -> tuple[Edge, ...]:
        """Return the edges as (source, target, kind), in the order of the variables' positions.

        An undirected edge stands once, with the earlier variable as its source.
        """
        both = self.undirected
        pairs = np.argwhere(self.arrow & ~np.tril(both))
        return tuple(
            (self.names[i], self.names[j], UNDIRECTED if both[i, j] else DIRECTED) for i, j in pairs.tolist()
        )

    def reordered(self, names: Sequence[str]) -> Graph:
        """Return the same graph with its variables in another order.

        Raises
        ------
        InputError
            If `names` are not the graph's own names.
        """
        if sorted(names) != sorted(self.names):
            raise InputError("the new order must hold the graph's own variables, each once")
        index = [self.names.index(name) for name in names]
        return Graph(tuple(names), self.arrow[np.ix_(index, index)])

    def renamed(self, names: Sequence[str]) -> Graph:
        """Return the same graph under other names, in the same order."""
        return Graph(tuple(names), self.arrow)

    def to_networkx(self) -> nx.DiGraph[str]:
        """Return a networkx directed graph; an undirected edge becomes arcs in both directions."""
        import networkx as nx

        graph: nx.DiGraph[str] = nx.DiGraph()
        graph.add_nodes_from(self.names)
        graph.add_edges_from((self.names[i], self.names[j]) for i, j in np.argwhere(self.arrow).tolist())
        return graph

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Graph):
            return NotImplemented
        return self.names == other.names and bool(np.array_equal(self.arrow, other.arrow))

    def __hash__(self) -> int:
        return hash((self.names, self.arrow.tobytes()))

    def __repr__(self) -> str:
        marks = {DIRECTED: "->", UNDIRECTED: "-"}
        edges = ", ".join(f"{source} {marks[kind]} {target}" for source, target, kind in self.edges())
        return f"Graph({self.n_variables} variables: {edges or 'no edges'})"
