"""Markov equivalence classes against enumeration, published counts and the definitions."""

from __future__ import annotations

import functools
import itertools
from collections import Counter, defaultdict

import networkx as nx
import numpy as np
import pytest
from numpy.typing import NDArray

from generators.classes import (
    NO_TRIPLES,
    class_of,
    consistent_extension,
    cpdag,
    is_equivalent,
    maximally_oriented,
    meek_rules,
    unshielded_colliders,
)
from generators.errors import InputError
from generators.graph import Graph

NAMES = "abcdefghijklmnopqrstuvwxyz"

# Lauritzen and Spiegelhalter (1988), the eight arcs of the chest clinic.
CHEST_CLINIC = Graph.from_edges(
    "atslbexd",
    directed=[
        ("a", "t"),
        ("s", "l"),
        ("s", "b"),
        ("t", "e"),
        ("l", "e"),
        ("e", "x"),
        ("e", "d"),
        ("b", "d"),
    ],
)
SPRINKLER = Graph.from_edges("csrw", directed=[("c", "s"), ("c", "r"), ("s", "w"), ("r", "w")])
BURGLARY = Graph.from_edges("beajm", directed=[("b", "a"), ("e", "a"), ("a", "j"), ("a", "m")])


@functools.cache
def all_dags(n: int) -> tuple[Graph, ...]:
    """Enumerate the labelled DAGs on n nodes: a directed graph is acyclic iff its n-th power is zero."""
    pairs = list(itertools.combinations(range(n), 2))
    arrows = np.zeros((3 ** len(pairs), n, n), dtype=np.int64)
    for code, marks in enumerate(itertools.product(range(3), repeat=len(pairs))):
        for (i, j), mark in zip(pairs, marks):
            arrows[code, i, j] = mark == 1
            arrows[code, j, i] = mark == 2
    is_acyclic = ~np.linalg.matrix_power(arrows, n).any(axis=(1, 2))
    return tuple(Graph(tuple(NAMES[:n]), arrow.astype(bool)) for arrow in arrows[is_acyclic])


def skeleton_and_colliders(graph: Graph) -> tuple[bytes, frozenset[tuple[int, int, int]]]:
    """Return what decides equivalence (Verma and Pearl 1990), colliders listed by their definition."""
    directed, skeleton = graph.directed, graph.skeleton
    colliders = frozenset(
        (a, c, b)
        for c in range(graph.n_variables)
        for a, b in itertools.combinations(np.flatnonzero(directed[:, c]).tolist(), 2)
        if not skeleton[a, b]
    )
    return skeleton.tobytes(), colliders


def separations(graph: Graph) -> frozenset[tuple[str, str, tuple[str, ...]]]:
    """All pairs and sets for which networkx finds a d-separation."""
    oracle = graph.to_networkx()
    found = set()
    for x, y in itertools.combinations(graph.names, 2):
        others = [name for name in graph.names if name not in (x, y)]
        for size in range(len(others) + 1):
            for given in itertools.combinations(others, size):
                if nx.is_d_separator(oracle, {x}, {y}, set(given)):
                    found.add((x, y, given))
    return frozenset(found)


@functools.cache
def classes_by_separation(n: int) -> tuple[tuple[Graph, ...], ...]:
    """Group the DAGs on n nodes that have the same d-separations."""
    groups = defaultdict(list)
    for dag in all_dags(n):
        groups[separations(dag)].append(dag)
    return tuple(map(tuple, groups.values()))


def union(members: tuple[Graph, ...]) -> Graph:
    """Draw an edge in every direction that some member has: the CPDAG by definition."""
    return Graph(members[0].names, np.any([dag.arrow for dag in members], axis=0))


def with_colliders_only(dag: Graph) -> Graph:
    """Draw the skeleton with the unshielded colliders directed: what Meek's rules start from."""
    arrow = dag.skeleton.copy()
    for a, c, b in skeleton_and_colliders(dag)[1]:
        arrow[c, a] = arrow[c, b] = False
    return Graph(dag.names, arrow)


def random_dag(rng: np.random.Generator, p: int, density: float) -> Graph:
    """Draw a DAG with a random order of its variables."""
    order = rng.permutation(p)
    arrow = np.triu(rng.random((p, p)) < density, 1)
    return Graph(tuple(f"v{i}" for i in range(p)), arrow[np.ix_(order, order)])


def members(graph: Graph) -> int:
    """Count the DAGs of a class by trying all orientations of its skeleton."""
    target = skeleton_and_colliders(graph)
    pairs = np.argwhere(np.triu(graph.skeleton)).tolist()
    n = 0
    for flips in itertools.product((False, True), repeat=len(pairs)):
        arrow = np.zeros_like(graph.arrow)
        for (i, j), flip in zip(pairs, flips):
            arrow[(j, i) if flip else (i, j)] = True
        is_acyclic = not np.linalg.matrix_power(arrow.astype(np.int64), len(arrow)).any()
        n += is_acyclic and skeleton_and_colliders(Graph(graph.names, arrow)) == target
    return n


# --- CPDAGs


# Gillispie and Perlman (2002), Artificial Intelligence 141; OEIS A007984.
@pytest.mark.parametrize(("n", "classes"), [(1, 1), (2, 2), (3, 11), (4, 185)])
def test_number_of_classes_is_the_published_one(n: int, classes: int) -> None:
    """The DAGs on n nodes have as many different CPDAGs as published."""
    found = {cpdag(dag) for dag in all_dags(n)}

    assert classes == len(found)


@pytest.mark.slow
def test_classes_on_five_nodes_are_the_published_ones() -> None:
    """The 29,281 DAGs on five nodes fall into 8,782 classes, 2,616 of them of size one."""
    # Robinson (1973), OEIS A003024; Gillispie and Perlman (2002), OEIS A007984.
    dags, classes = 29281, 8782
    # Steinsky's (2003) recurrence, from memory; the largest class is the complete graph's 5! orders.
    of_size_one, largest = 2616, 120

    sizes = Counter(cpdag(dag) for dag in all_dags(5))

    assert dags == sizes.total()
    assert classes == len(sizes)
    assert of_size_one == list(sizes.values()).count(1)
    assert largest == max(sizes.values())


@pytest.mark.slow
def test_cpdag_is_the_union_of_the_class_on_five_nodes() -> None:
    """On five nodes the CPDAG, and Meek's rules, give the union of the DAGs with the same key."""
    groups = defaultdict(list)
    for dag in all_dags(5):
        groups[skeleton_and_colliders(dag)].append(dag)

    for group in groups.values():
        expected = union(tuple(group))
        assert all(expected == cpdag(dag) for dag in group)
        assert expected == maximally_oriented(with_colliders_only(group[0]))


# e(n) = sum_s (-1)^(s+1) C(n,s) (2^(n-s) - (n-s))^s e(n-s) gives 4 and 59 for size one (Steinsky 2003, from
# memory); the largest class is that of the complete graph, n!. The whole histogram: full enumeration.
@pytest.mark.parametrize(
    ("n", "histogram"),
    [(3, {1: 4, 2: 3, 3: 3, 6: 1}), (4, {1: 59, 2: 48, 3: 36, 4: 19, 6: 4, 8: 12, 10: 6, 24: 1})],
)
def test_class_sizes_are_those_of_the_enumeration(n: int, histogram: dict[int, int]) -> None:
    """Classes of each size are as many as full enumeration gives."""
    sizes = Counter(cpdag(dag) for dag in all_dags(n))

    assert histogram == Counter(sizes.values())


def test_class_edges_are_those_of_the_enumeration() -> None:
    """The 185 classes on four nodes have 0 to 6 edges as often as full enumeration gives."""
    expected = {0: 1, 1: 6, 2: 27, 3: 60, 4: 66, 5: 24, 6: 1}

    found = Counter(graph.n_edges for graph in {cpdag(dag) for dag in all_dags(4)})

    assert expected == found


@pytest.mark.parametrize("n", [2, 3, 4])
def test_cpdag_is_the_union_of_the_dags_with_the_same_separations(n: int) -> None:
    """An edge is directed if and only if it has that direction in all DAGs with the same d-separations."""
    for group in classes_by_separation(n):
        expected = union(group)

        assert all(expected == cpdag(dag) for dag in group)


def test_equal_cpdags_mean_equal_skeleton_and_colliders() -> None:
    """CPDAGs differ if and only if the skeleton or the unshielded colliders do (Verma and Pearl 1990)."""
    keys = {dag: skeleton_and_colliders(dag) for dag in all_dags(4)}
    cpdags = {dag: cpdag(dag) for dag in all_dags(4)}

    assert len(set(keys.values())) == len(set(cpdags.values()))
    assert len(set(zip(keys.values(), cpdags.values()))) == len(set(cpdags.values()))


@pytest.mark.parametrize(
    ("graph", "size", "undirected"),
    [
        (CHEST_CLINIC, 6, {("a", "t"), ("s", "l"), ("s", "b")}),
        (SPRINKLER, 3, {("c", "s"), ("c", "r")}),
        (BURGLARY, 1, set()),
        (Graph.from_edges("abc", [("a", "b"), ("b", "c")]), 3, {("a", "b"), ("b", "c")}),
        (Graph.from_edges("abc", [("a", "b"), ("c", "b")]), 1, set()),
    ],
    ids=["chest clinic", "sprinkler", "burglary", "chain", "collider"],
)
def test_cpdag_of_textbook_dags(graph: Graph, size: int, undirected: set[tuple[str, str]]) -> None:
    """Textbook DAGs have the class size that enumeration of orientations gives, and these free edges."""
    found = {(source, target) for source, target, kind in cpdag(graph).edges() if kind == "undirected"}

    assert size == members(graph)
    assert undirected == found


@pytest.mark.parametrize(("p", "density"), [(9, 0.5), (40, 0.1), (65, 0.04), (130, 0.02)])
def test_cpdag_does_not_depend_on_the_order_of_variables(
    rng: np.random.Generator, p: int, density: float
) -> None:
    """Reordering the variables reorders the CPDAG and changes nothing else."""
    graph = random_dag(rng, p, density)
    names = tuple(rng.permutation(graph.names).tolist())

    assert cpdag(graph).reordered(names) == cpdag(graph.reordered(names))


def test_cpdag_refuses_what_is_no_dag() -> None:
    """A cycle and an undirected edge are refused, and named."""
    cycle = Graph.from_edges("abc", [("a", "b"), ("b", "c"), ("c", "a")])
    partly = Graph.from_edges("abc", [("a", "b")], [("b", "c")])

    with pytest.raises(InputError, match="cycle: a -> b -> c -> a"):
        cpdag(cycle)
    with pytest.raises(InputError, match="'b' - 'c' is undirected"):
        cpdag(partly)


@pytest.mark.parametrize("p", [0, 1, 2, 70])
def test_graphs_without_edges_and_complete_ones_have_the_obvious_class(p: int) -> None:
    """No edge stays no edge; in a complete DAG every edge is free."""
    names = tuple(f"v{i}" for i in range(p))
    empty = Graph.from_edges(names)
    complete = Graph(names, np.triu(np.ones((p, p), dtype=bool), 1))

    assert empty == cpdag(empty)
    assert Graph(names, ~np.eye(p, dtype=bool)) == cpdag(complete)


# --- Equivalence


def test_equivalence_is_having_the_same_separations() -> None:
    """On three nodes, two DAGs are equivalent if and only if networkx finds the same d-separations."""
    stated = {dag: separations(dag) for dag in all_dags(3)}

    for a, b in itertools.product(stated, repeat=2):
        assert (stated[a] == stated[b]) == is_equivalent(a, b)


def test_equivalence_ignores_the_order_of_names_but_not_the_names() -> None:
    """Variables are matched by name; other names are refused."""
    chain = Graph.from_edges("abc", [("a", "b"), ("b", "c")])
    backwards = Graph.from_edges("cab", [("c", "b"), ("b", "a")])

    assert is_equivalent(chain, backwards)
    with pytest.raises(InputError):
        is_equivalent(chain, Graph.from_edges("abd", [("a", "b")]))


# --- Meek's rules


@pytest.mark.parametrize("n", [3, 4])
def test_meek_rules_complete_the_colliders_to_the_cpdag(n: int) -> None:
    """From skeleton and unshielded colliders the rules reach the union of the class (Meek 1995)."""
    for group in classes_by_separation(n):
        assert union(group) == maximally_oriented(with_colliders_only(group[0]))


def test_meek_rules_find_all_that_background_knowledge_implies() -> None:
    """With free edges directed as in one member, those are directed on which all such members agree.

    The four rules are complete with background knowledge (Meek 1995). Every class on four nodes, every
    set of up to three free edges, every way that members direct them.
    """
    n_cases = 0

    for group in classes_by_separation(4):
        cpdag_arrow = union(group).arrow
        free = np.argwhere(np.triu(cpdag_arrow & cpdag_arrow.T)).tolist()
        for size in (1, 2, 3):
            for chosen in itertools.combinations(free, size):
                agreeing = defaultdict(list)
                for dag in group:
                    agreeing[tuple(bool(dag.arrow[i, j]) for i, j in chosen)].append(dag)
                for directions, dags in agreeing.items():
                    arrow = cpdag_arrow.copy()
                    for (i, j), is_forward in zip(chosen, directions):
                        arrow[(j, i) if is_forward else (i, j)] = False

                    meek_rules(arrow, NO_TRIPLES)

                    assert np.array_equal(np.any([dag.arrow for dag in dags], axis=0), arrow)
                    n_cases += 1

    assert n_cases > 1000


def narrowed(group: tuple[Graph, ...], known: NDArray[np.bool_]) -> tuple[Graph, ...]:
    """Keep the DAGs that accord with what is known, statement by statement, while any are left."""
    for x, y in np.argwhere(known).tolist():
        group = tuple(dag for dag in group if not dag.arrow[y, x]) or group
    return group


def test_knowledge_directs_what_all_dags_that_accord_with_it_agree_on(rng: np.random.Generator) -> None:
    """Meek (1995), theorem 4: for every class on four nodes, against the union of the DAGs that are left.

    What is known is drawn, so that now and then it contradicts the class or itself: then the statements that
    come first by position, and still leave a DAG, decide.
    """
    n_directed = n_passed_over = 0

    for group in classes_by_separation(4):
        for share in (0.1, 0.3, 0.6):
            known = rng.random((4, 4)) < share
            np.fill_diagonal(known, False)
            left = narrowed(group, known)

            assert union(left) == maximally_oriented(union(group), known)
            n_directed += union(left) != union(group)
            n_passed_over += any(dag.arrow[y, x] for dag in left for x, y in np.argwhere(known).tolist())

    assert min(n_directed, n_passed_over) > 50


def test_knowledge_of_pairs_that_are_not_adjacent_or_directed_changes_nothing() -> None:
    """What is known speaks of edges that are there, and cannot turn one that the class directs."""
    collider = Graph.from_edges("abc", directed=[("a", "b"), ("c", "b")])
    known = np.zeros((3, 3), dtype=bool)
    known[1, 0] = known[0, 2] = True  # b -> a, a -> c

    assert collider == maximally_oriented(collider, known)


@pytest.mark.parametrize(
    ("directed", "undirected", "implied"),
    [
        ([("c", "a")], [("a", "b")], ("a", "b")),
        ([("a", "c"), ("c", "b")], [("a", "b")], ("a", "b")),
        ([("c", "b"), ("d", "b")], [("a", "b"), ("a", "c"), ("a", "d")], ("a", "b")),
        ([("c", "d"), ("d", "b")], [("a", "b"), ("a", "c"), ("a", "d")], ("a", "b")),
    ],
    ids=["rule 1", "rule 2", "rule 3", "rule 4"],
)
def test_each_meek_rule_directs_its_own_pattern(
    directed: list[tuple[str, str]], undirected: list[tuple[str, str]], implied: tuple[str, str]
) -> None:
    """The pattern of each rule (Meek 1995, figure 1) directs a -> b and nothing else."""
    names = sorted({name for edge in directed + undirected for name in edge})
    expected = Graph.from_edges(names, [*directed, implied], [edge for edge in undirected if edge != implied])

    assert expected == maximally_oriented(Graph.from_edges(names, directed, undirected))


def test_rule_4_needs_the_middle_variable_to_be_adjacent() -> None:
    """Without an edge a - d, the arrow d -> b directs b -> a, by rule 1."""
    graph = Graph.from_edges("abcd", [("c", "d"), ("d", "b")], [("a", "b"), ("a", "c")])

    assert maximally_oriented(graph).parents("a") == ("b",)


def some_rule_applies(graph: Graph) -> bool:
    """Say whether one of Meek's rules, read off the paper, directs an undirected edge."""
    names = range(graph.n_variables)
    to, free, joined = graph.directed, graph.undirected, graph.skeleton
    return any(
        any((to[c, a] and not joined[c, b]) or (to[a, c] and to[c, b]) for c in names)
        or any(
            c != d
            and free[a, c]
            and to[d, b]
            and (
                (to[c, b] and free[a, d] and not joined[c, d])
                or (to[c, d] and joined[a, d] and not joined[c, b])
            )
            for c in names
            for d in names
        )
        for a, b in np.argwhere(free).tolist()
    )


def test_no_meek_rule_applies_afterwards(rng: np.random.Generator) -> None:
    """On any partly directed graph, contradictory ones too, the rules are worked off to the end."""
    n_directed = 0
    for _ in range(400):
        arrow = rng.random((7, 7)) < 0.6
        arrow |= arrow.T & (rng.random((7, 7)) < 0.3)
        np.fill_diagonal(arrow, False)
        graph = Graph(tuple(NAMES[:7]), arrow)

        found = maximally_oriented(graph)

        assert not some_rule_applies(found)
        assert np.array_equal(graph.skeleton, found.skeleton)
        assert not (graph.directed & ~found.directed).any()
        n_directed += int(found.directed.sum() - graph.directed.sum())

    assert n_directed > 400


def test_rule_4_is_tried_again_when_its_first_arrow_comes_last() -> None:
    """A contradictory graph, found by search, in which c -> d of rule 4 is directed after d -> b was used."""
    arrow = np.array(
        [
            [0, 1, 0, 1, 1, 1],
            [1, 0, 0, 0, 1, 0],
            [0, 0, 0, 1, 1, 0],
            [1, 1, 1, 0, 0, 1],
            [1, 0, 1, 1, 0, 1],
            [1, 0, 1, 1, 1, 0],
        ],
        dtype=bool,
    )

    found = maximally_oriented(Graph(tuple(NAMES[:6]), arrow))

    assert not some_rule_applies(found)


@pytest.mark.parametrize(("p", "density"), [(30, 0.1), (130, 0.02), (60, 0.3)])
def test_meek_rules_agree_with_edge_labelling_on_larger_graphs(
    rng: np.random.Generator, p: int, density: float
) -> None:
    """Two methods, edge labelling (Chickering 1995) and Meek's rules, give the same CPDAG."""
    for _ in range(20):
        dag = random_dag(rng, p, density)

        assert cpdag(dag) == maximally_oriented(with_colliders_only(dag))


def test_contradictory_arrows_are_settled_by_the_order_of_their_edges() -> None:
    """In a -> b - c <- d the edge is directed away from a, whose edge comes first by (source, target)."""
    graph = Graph.from_edges("abcd", [("a", "b"), ("d", "c")], [("b", "c")])
    expected = Graph.from_edges("abcd", [("a", "b"), ("d", "c"), ("b", "c")])

    assert expected == maximally_oriented(graph)


def test_maximal_orientation_leaves_its_input_alone() -> None:
    """The kernel works in place, the function on graphs does not."""
    graph = Graph.from_edges("abc", [("a", "b")], [("b", "c")])
    before = graph.arrow.copy()

    maximally_oriented(graph)

    assert np.array_equal(before, graph.arrow)


# --- Consistent extensions


@functools.cache
def dags_by_skeleton(n: int) -> dict[bytes, list[Graph]]:
    """Group the DAGs on n nodes by their skeleton."""
    groups: dict[bytes, list[Graph]] = defaultdict(list)
    for dag in all_dags(n):
        groups[dag.skeleton.tobytes()].append(dag)
    return groups


def all_partly_directed(n: int) -> list[Graph]:
    """Enumerate the graphs with at most one edge, directed or not, per pair of n nodes."""
    pairs = list(itertools.combinations(range(n), 2))
    graphs = []
    for marks in itertools.product(range(4), repeat=len(pairs)):
        arrow: NDArray[np.bool_] = np.zeros((n, n), dtype=bool)
        for (i, j), mark in zip(pairs, marks):
            arrow[i, j] = mark & 1
            arrow[j, i] = mark & 2
        graphs.append(Graph(tuple(NAMES[:n]), arrow))
    return graphs


@pytest.mark.parametrize("n", [2, 3, 4])
def test_extension_is_found_if_and_only_if_there_is_one(n: int) -> None:
    """An extension is found if there is one, and is one, for every partly directed graph on n nodes.

    One is a DAG with the same skeleton, directed edges and unshielded colliders (Dor and Tarsi 1992).
    """
    for graph in all_partly_directed(n):
        key = skeleton_and_colliders(graph)
        extensions = [
            dag
            for dag in dags_by_skeleton(n)[graph.skeleton.tobytes()]
            if not (graph.directed & ~dag.arrow).any() and skeleton_and_colliders(dag) == key
        ]

        found = consistent_extension(graph)

        assert found in extensions if extensions else found is None


def test_every_cpdag_has_an_extension_in_its_class() -> None:
    """The extension of a CPDAG is one of the DAGs that the CPDAG was drawn from."""
    for group in classes_by_separation(4):
        assert consistent_extension(union(group)) in group


@pytest.mark.parametrize(
    "graph",
    [
        Graph.from_edges("abc", [("a", "b"), ("b", "c"), ("c", "a")]),
        Graph.from_edges("abcd", undirected=[("a", "b"), ("b", "c"), ("c", "d"), ("d", "a")]),
        Graph.from_edges("abcd", [("a", "b"), ("d", "c")], [("b", "c")]),
    ],
    ids=["directed cycle", "chordless square", "contradictory arrows"],
)
def test_graphs_without_extension_are_their_own_class(graph: Graph) -> None:
    """A graph without a consistent extension is returned as it stands, and said to have none."""
    assert consistent_extension(graph) is None
    assert (graph, False) == class_of(graph)


def test_free_edges_point_from_earlier_to_later_variables() -> None:
    """Where several variables can be last, the last by position is: paths and cliques follow the order."""
    path = Graph.from_edges("abcd", undirected=[("a", "b"), ("b", "c"), ("c", "d")])
    clique = Graph(tuple("abcd"), ~np.eye(4, dtype=bool))

    assert Graph.from_edges("abcd", [("a", "b"), ("b", "c"), ("c", "d")]) == consistent_extension(path)
    assert Graph(tuple("abcd"), np.triu(np.ones((4, 4), dtype=bool), 1)) == consistent_extension(clique)


def test_dag_is_its_own_extension(rng: np.random.Generator) -> None:
    """A DAG is extended to itself."""
    dag = random_dag(rng, 70, 0.1)

    assert dag == consistent_extension(dag)


def test_class_of_a_dag_is_its_cpdag_and_a_lone_arrow_is_free() -> None:
    """The class of a DAG is its CPDAG; in a -> b - c nothing compels the arrow."""
    lone = Graph.from_edges("abc", [("a", "b")], [("b", "c")])

    assert (cpdag(CHEST_CLINIC), True) == class_of(CHEST_CLINIC)
    assert (Graph.from_edges("abc", undirected=[("a", "b"), ("b", "c")]), True) == class_of(lone)


def test_class_of_larger_cpdags_is_themselves(rng: np.random.Generator) -> None:
    """Extending a CPDAG and drawing the class of the extension comes back to the CPDAG."""
    for p, density in [(12, 0.3), (70, 0.05), (130, 0.02)]:
        graph = cpdag(random_dag(rng, p, density))

        assert (graph, True) == class_of(graph)


# --- Unshielded colliders


def test_colliders_are_listed_by_position() -> None:
    """Triples (a, c, b) come with a < b, sorted by c, then a, then b; shielded ones are left out."""
    graph = Graph.from_edges(
        "abcde", [("b", "a"), ("c", "a"), ("d", "a"), ("c", "b"), ("c", "e"), ("d", "e")]
    )
    expected = [[1, 0, 3], [2, 0, 3], [2, 4, 3]]

    assert expected == unshielded_colliders(graph).tolist()


def test_colliders_need_both_edges_directed() -> None:
    """In a -> b - c, b is no collider."""
    graph = Graph.from_edges("abc", [("a", "b")], [("b", "c")])

    none = np.empty((0, 3), dtype=np.int64)

    assert np.array_equal(none, unshielded_colliders(graph))


def test_colliders_are_those_of_the_definition(rng: np.random.Generator) -> None:
    """On larger graphs the list holds what the definition says, each once."""
    for p, density in [(1, 0.5), (12, 0.4), (70, 0.1)]:
        graph = random_dag(rng, p, density)
        found = [tuple(triple) for triple in unshielded_colliders(graph).tolist()]

        assert len(found) == len(set(found))
        assert skeleton_and_colliders(graph)[1] == set(found)
