"""Ancestors, d-separation and blankets against networkx and their definitions."""

from __future__ import annotations

import itertools

import networkx as nx
import numpy as np
import pytest

from generators.adjacency import neighbour_lists
from generators.errors import InputError
from generators.graph import Graph
from generators.separation import ancestors, descendants, is_connected, is_separated, markov_blanket


def random_dag(rng: np.random.Generator, p: int, density: float) -> Graph:
    """Draw a DAG with a random order of its variables."""
    order = rng.permutation(p)
    arrow = np.triu(rng.random((p, p)) < density, 1)
    return Graph(tuple(f"v{i}" for i in range(p)), arrow[np.ix_(order, order)])


def every_dag_on_four() -> list[Graph]:
    """Enumerate the 543 labelled DAGs on four nodes."""
    pairs = list(itertools.combinations(range(4), 2))
    graphs = []
    for marks in itertools.product(range(3), repeat=len(pairs)):
        arrow = np.zeros((4, 4), dtype=bool)
        for (i, j), mark in zip(pairs, marks):
            arrow[i, j] = mark == 1
            arrow[j, i] = mark == 2
        if not np.linalg.matrix_power(arrow.astype(np.int64), 4).any():
            graphs.append(Graph(tuple("abcd"), arrow))
    return graphs


def test_every_statement_on_four_nodes_is_that_of_networkx() -> None:
    """For all DAGs on four nodes, all pairs and all conditioning sets, networkx says the same."""
    graphs = every_dag_on_four()
    n_dags = 543  # Robinson (1973), OEIS A003024

    assert n_dags == len(graphs)
    for graph in graphs:
        oracle = graph.to_networkx()
        for x, y in itertools.combinations("abcd", 2):
            rest = [name for name in "abcd" if name not in (x, y)]
            for given in ([], rest[:1], rest[1:], rest):
                expected = nx.is_d_separator(oracle, {x}, {y}, set(given))
                assert expected == is_separated(graph, x, y, given)
                assert expected == is_separated(graph, y, x, given)


@pytest.mark.parametrize(("p", "density"), [(8, 0.3), (20, 0.12), (70, 0.03)])
def test_separation_of_sets_is_that_of_networkx(rng: np.random.Generator, p: int, density: float) -> None:
    """Sets of variables are separated if and only if networkx says so."""
    answers = []
    for _ in range(150):
        graph = random_dag(rng, p, density)
        shuffled = rng.permutation(graph.names).tolist()
        n_x, n_y, n_given = (int(n) for n in rng.integers((1, 1, 0), (3, 3, 5)))
        x, y, given = shuffled[:n_x], shuffled[n_x : n_x + n_y], shuffled[n_x + n_y : n_x + n_y + n_given]

        expected = nx.is_d_separator(graph.to_networkx(), set(x), set(y), set(given))
        assert expected == is_separated(graph, x, y, given)
        answers.append(expected)

    assert len(set(answers)) == 2


def test_collider_opens_when_a_descendant_is_given() -> None:
    """In a -> c <- b with c -> d, giving c or d connects a and b (Pearl 1988)."""
    graph = Graph.from_edges("abcd", [("a", "c"), ("b", "c"), ("c", "d")])

    assert is_separated(graph, "a", "b")
    assert not is_separated(graph, "a", "b", "c")
    assert not is_separated(graph, "a", "b", "d")
    assert is_separated(graph, "a", "d", ["c", "b"])


def test_targets_that_are_given_do_not_count(rng: np.random.Generator) -> None:
    """The kernel leaves given variables out of its targets."""
    graph = Graph.from_edges("abc", [("a", "b"), ("b", "c")])
    at, nodes = neighbour_lists(graph.arrow)
    source = np.array([0], dtype=np.uint32)
    given = np.array([1], dtype=np.uint32)

    assert not is_connected(at, nodes, source, np.array([False, True, True]), given)
    assert is_connected(at, nodes, source, np.array([False, True, True]), given[:0])


def test_nothing_is_connected_with_an_empty_set() -> None:
    """An empty set is separated from everything."""
    graph = Graph.from_edges("ab", [("a", "b")])

    assert is_separated(graph, [], "b")
    assert is_separated(graph, "a", [])


def test_a_text_is_one_name() -> None:
    """A name of several letters is one variable, not one per letter."""
    graph = Graph.from_edges(["a", "b", "ab"], [("ab", "a")])
    above = ("ab",)

    assert not is_separated(graph, "ab", "a")
    assert above == ancestors(graph, "a")


@pytest.mark.parametrize(
    ("x", "y", "given", "found"),
    [
        ("a", "z", (), "'z' is not a variable"),
        ("a", "a", (), "'a' stands in two"),
        ("a", "b", "b", "'b' stands in two"),
    ],
)
def test_impossible_questions_are_refused(x: str, y: str, given: str, found: str) -> None:
    """An unknown name, or one in two sets, is named."""
    graph = Graph.from_edges("abc", [("a", "b")])

    with pytest.raises(InputError, match=found):
        is_separated(graph, x, y, given)


def test_separation_needs_a_dag() -> None:
    """Undirected edges and cycles are refused."""
    with pytest.raises(InputError, match="undirected"):
        is_separated(Graph.from_edges("abc", undirected=[("a", "b")]), "a", "b")
    with pytest.raises(InputError, match="cycle"):
        is_separated(Graph.from_edges("abc", [("a", "b"), ("b", "c"), ("c", "a")]), "a", "b")


def test_ancestors_and_descendants_are_those_of_networkx(rng: np.random.Generator) -> None:
    """For one name or several, in the graph's order, a name itself only if another leads to it."""
    for p, density in [(5, 0.4), (30, 0.1), (100, 0.02)]:
        graph = random_dag(rng, p, density)
        oracle = graph.to_networkx()
        for names in ([graph.names[0]], list(graph.names[1:4])):
            above = set().union(*(nx.ancestors(oracle, name) for name in names))
            below = set().union(*(nx.descendants(oracle, name) for name in names))

            assert tuple(name for name in graph.names if name in above) == ancestors(graph, names)
            assert tuple(name for name in graph.names if name in below) == descendants(graph, names)


def test_undirected_edges_make_no_ancestors() -> None:
    """Only directed paths count."""
    graph = Graph.from_edges("abc", [("a", "b")], [("b", "c")])
    above = ("a",)

    assert above == ancestors(graph, "b")
    assert not ancestors(graph, "c")


def test_blanket_is_the_smallest_set_that_separates_a_variable_from_the_rest() -> None:
    """On four nodes, the blanket separates its variable from all others, and no smaller set does.

    The definition of a Markov boundary (Pearl 1988), decided by networkx.
    """
    for graph in every_dag_on_four()[::5]:
        oracle = graph.to_networkx()
        for name in "abcd":
            others = set("abcd") - {name}
            separating = [
                set(given)
                for size in range(4)
                for given in itertools.combinations(sorted(others), size)
                if set(given) == others or nx.is_d_separator(oracle, {name}, others - set(given), set(given))
            ]

            assert separating[0] == set(markov_blanket(graph, name))


def test_blanket_of_an_isolated_variable_is_empty() -> None:
    """A variable without arcs has no blanket; one of an unknown name is refused."""
    graph = Graph.from_edges("abc", [("a", "b")])

    assert not markov_blanket(graph, "c")
    with pytest.raises(InputError, match="'z' is not a variable"):
        markov_blanket(graph, "z")
