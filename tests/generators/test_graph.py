"""Graphs: what they accept, and that they agree with networkx."""

from __future__ import annotations

from itertools import pairwise

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from generators.errors import InputError
from generators.graph import Graph

MIXED = Graph.from_edges("abcd", directed=[("b", "a"), ("c", "d")], undirected=[("d", "a")])


@st.composite
def graphs(draw: st.DrawFn) -> Graph:
    """Draw any graph with up to six variables, cycles and undirected edges included."""
    p = draw(st.integers(0, 6))
    arrow = draw(arrays(np.bool_, (p, p)))
    np.fill_diagonal(arrow, False)
    return Graph(tuple(f"v{i}" for i in range(p)), arrow)


def test_marks_are_told_apart() -> None:
    """One direction is directed, both directions are undirected, and a pair counts once."""
    assert MIXED.edges() == (("a", "d", "undirected"), ("b", "a", "directed"), ("c", "d", "directed"))
    assert MIXED.n_edges == 3
    assert MIXED.parents("a") == ("b",)
    assert MIXED.parents("d") == ("c",)
    assert not MIXED.is_directed
    assert MIXED.is_acyclic
    assert not MIXED.is_dag
    assert repr(MIXED) == "Graph(4 variables: a - d, b -> a, c -> d)"


@given(graphs())
def test_matrices_partition_the_skeleton(graph: Graph) -> None:
    """Each adjacent pair is directed one way or undirected, never both."""
    one_way, both_ways = graph.directed, graph.undirected

    assert not (one_way & one_way.T).any()
    assert not ((one_way | one_way.T) & both_ways).any()
    assert np.array_equal(graph.skeleton, one_way | one_way.T | both_ways)
    assert graph.n_edges == len(graph.edges())


@given(graphs())
def test_acyclicity_and_order_agree_with_networkx(graph: Graph) -> None:
    """A graph is acyclic if networkx says so of its directed edges, and the orders are the same."""
    directed = nx.DiGraph()
    directed.add_nodes_from(range(graph.n_variables))
    directed.add_edges_from(np.argwhere(graph.directed).tolist())

    assert nx.is_directed_acyclic_graph(directed) == graph.is_acyclic
    if graph.is_acyclic:
        assert tuple(nx.lexicographical_topological_sort(directed)) == graph.order()
    else:
        with pytest.raises(InputError, match="directed cycle") as caught:
            graph.order()
        cycle = str(caught.value).split(": ")[1].split(" -> ")
        assert cycle[0] == cycle[-1]
        assert len(set(cycle)) == len(cycle) - 1
        position = {name: i for i, name in enumerate(graph.names)}
        assert all(graph.directed[position[a], position[b]] for a, b in pairwise(cycle))


@given(graphs())
def test_parents_are_networkx_predecessors(graph: Graph) -> None:
    """The parents of a variable are its predecessors among the directed edges."""
    directed = nx.DiGraph()
    directed.add_nodes_from(graph.names)
    directed.add_edges_from((source, target) for source, target, kind in graph.edges() if kind == "directed")

    for name in graph.names:
        assert set(directed.predecessors(name)) == set(graph.parents(name))


@given(graphs())
def test_networkx_and_edges_lead_back(graph: Graph) -> None:
    """A graph is unchanged by a trip through networkx or through its list of edges."""
    pairs = {
        kind: [(source, target) for source, target, own in graph.edges() if own == kind]
        for kind in ("directed", "undirected")
    }

    assert graph == Graph.from_networkx(graph.to_networkx(), graph.names)
    assert graph == Graph.from_edges(graph.names, pairs["directed"], pairs["undirected"])


@given(graphs(), st.randoms(use_true_random=False))
def test_reordering_keeps_the_edges(graph: Graph, random: object) -> None:
    """Another order of the variables is the same graph: the same marks between the same names."""
    names = list(graph.names)
    random.shuffle(names)  # type: ignore[attr-defined]

    other = graph.reordered(names)

    assert other.names == tuple(names)
    assert {(i, j) for i, j in other.to_networkx().edges} == {(i, j) for i, j in graph.to_networkx().edges}
    assert other.reordered(graph.names) == graph


def test_renaming_keeps_the_positions() -> None:
    """New names stand where the old ones stood."""
    renamed = MIXED.renamed("wxyz")

    assert renamed.edges() == (("w", "z", "undirected"), ("x", "w", "directed"), ("y", "z", "directed"))


def test_equality_means_names_order_and_marks() -> None:
    """Graphs are equal, and hash alike, only with the same names in the same order and the same marks."""
    twin = Graph.from_edges("abcd", [("c", "d"), ("b", "a")], [("a", "d")])

    assert twin == MIXED
    assert hash(twin) == hash(MIXED)
    assert MIXED.reordered("dcba") != MIXED
    assert MIXED != "MIXED"


def test_arrays_cannot_be_changed_from_outside() -> None:
    """A graph copies what it is given and lets nobody write to its array."""
    given_array = np.zeros((2, 2), dtype=np.bool_)
    graph = Graph(("a", "b"), given_array)
    given_array[0, 1] = True

    assert graph.n_edges == 0
    with pytest.raises(ValueError, match="read-only"):
        graph.arrow[0, 1] = True


@pytest.mark.parametrize(
    ("names", "arrow", "message"),
    [
        (("a", "b"), np.zeros((2, 3)), "needs a square"),
        (("a", "a"), np.zeros((2, 2)), "'a' stands more than once"),
        (("a", ""), np.zeros((2, 2)), "non-empty"),
        (("a", "b"), np.eye(2), "'a' -> 'a'"),
    ],
)
def test_what_is_no_graph_is_refused(names: tuple[str, ...], arrow: np.ndarray, message: str) -> None:
    """Wrong shapes, repeated or empty names, and edges to oneself are said to be wrong."""
    with pytest.raises(InputError, match=message):
        Graph(names, arrow)


@pytest.mark.parametrize(
    ("directed", "undirected", "message"),
    [
        ([("a", "c")], [], "'c', which is not a variable"),
        ([("a", "b"), ("b", "a")], [], "more than one edge"),
        ([("a", "b")], [("b", "a")], "more than one edge"),
    ],
)
def test_edges_must_fit_the_names(
    directed: list[tuple[str, str]], undirected: list[tuple[str, str]], message: str
) -> None:
    """An edge names two variables, and a pair has one edge."""
    with pytest.raises(InputError, match=message):
        Graph.from_edges("ab", directed, undirected)


def test_a_stranger_in_a_networkx_graph_is_named() -> None:
    """A node that is not among the given names is refused by name; a missing one is an isolated variable."""
    with pytest.raises(InputError, match="node 'z'"):
        Graph.from_networkx(nx.DiGraph([("a", "z")]), ["a", "b"])

    assert Graph.from_networkx(nx.DiGraph([("b", "a")]), ["a", "b", "c"]).parents("a") == ("b",)


def test_a_new_order_must_hold_the_same_names() -> None:
    """A reordering that leaves a variable out is refused."""
    with pytest.raises(InputError, match="each once"):
        MIXED.reordered("abc")
