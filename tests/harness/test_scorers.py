"""Measures of a learned graph against enumeration, published cases and their definitions."""

from __future__ import annotations

import functools
import itertools
from collections import Counter, defaultdict

import networkx as nx
import numpy as np
import pytest

from generators.classes import consistent_extension, cpdag
from generators.errors import InputError
from generators.graph import Graph
from generators.network import Cpt, Network
from harness.knowledge import Knowledge
from harness.scorers.registry import GRAPH_MEASURES, MEASURES
from harness.scorers.structure import Scores, score, score_answer
from harness.scorers.truth import Truth

SKELETON = {"skeleton_precision", "skeleton_recall", "skeleton_f1"}
CHAIN = Graph.from_edges("abc", [("a", "b"), ("b", "c")])
FORK = Graph.from_edges("abc", [("b", "a"), ("b", "c")])
COLLIDER = Graph.from_edges("abc", [("a", "b"), ("c", "b")])
EMPTY = Graph.from_edges("abc")
COMPLETE = Graph.from_edges("abc", [("a", "b"), ("a", "c"), ("b", "c")])
CYCLE = Graph.from_edges("abc", [("a", "b"), ("b", "c"), ("c", "a")])

# Lauritzen and Spiegelhalter (1988), the eight arcs of the chest clinic.
CHEST_ARCS = [
    ("a", "t"),
    ("s", "l"),
    ("s", "b"),
    ("t", "e"),
    ("l", "e"),
    ("e", "x"),
    ("e", "d"),
    ("b", "d"),
]
CHEST_CLINIC = Graph.from_edges("atslbexd", CHEST_ARCS)


def answer(truth: Graph, learned: Graph, **declared: str) -> Scores:
    """Score one graph against a true DAG."""
    return score_answer(Truth.of(truth), learned, **declared)


@functools.cache
def all_dags(n: int) -> tuple[Graph, ...]:
    """Enumerate the labelled DAGs on n nodes: a directed graph is acyclic iff its n-th power is zero."""
    pairs = list(itertools.combinations(range(n), 2))
    graphs = []
    for marks in itertools.product(range(3), repeat=len(pairs)):
        arrow = np.zeros((n, n), dtype=bool)
        for (i, j), mark in zip(pairs, marks):
            arrow[i, j] = mark == 1
            arrow[j, i] = mark == 2
        if not np.linalg.matrix_power(arrow.astype(np.int64), n).any():
            graphs.append(Graph(tuple("abcde"[:n]), arrow))
    return tuple(graphs)


@functools.cache
def statements(dag: Graph) -> frozenset[tuple[str, str, tuple[str, ...]]]:
    """All d-separations of a DAG: pairs and conditioning sets, decided by networkx."""
    oracle = dag.to_networkx()
    found = set()
    for x, y in itertools.combinations(dag.names, 2):
        others = [name for name in dag.names if name not in (x, y)]
        for size in range(len(others) + 1):
            for given in itertools.combinations(others, size):
                if nx.is_d_separator(oracle, {x}, {y}, set(given)):
                    found.add((x, y, given))
    return frozenset(found)


@functools.cache
def class_by_statements() -> dict[Graph, Graph]:
    """Give the CPDAG of each DAG on four nodes by definition: the union of those with its statements."""
    groups = defaultdict(list)
    for dag in all_dags(4):
        groups[statements(dag)].append(dag)
    return {
        dag: Graph(dag.names, np.any([member.arrow for member in group], axis=0))
        for group in groups.values()
        for dag in group
    }


def without_arc(dag: Graph, i: int, j: int) -> Graph:
    """Drop one arc."""
    arrow = dag.arrow.copy()
    arrow[i, j] = False
    return Graph(dag.names, arrow)


def marks(graph: Graph) -> dict[frozenset[str], tuple[str, ...]]:
    """Describe each adjacent pair by its mark: (source, target) or, undirected, the sorted pair and "-"."""
    return {
        frozenset((source, target)): (
            (source, target) if kind == "directed" else (*sorted((source, target)), "-")
        )
        for source, target, kind in graph.edges()
    }


def colliders(graph: Graph) -> set[tuple[str, str, str]]:
    """List the unshielded colliders by their definition."""
    adjacent = set(marks(graph))
    return {
        (a, c, b)
        for c in graph.names
        for a, b in itertools.combinations(sorted(graph.parents(c)), 2)
        if frozenset((a, b)) not in adjacent
    }


def by_definition(
    true_class: Graph, learned_class: Graph, settled: frozenset[tuple[str, str]] = frozenset()
) -> dict[str, float | None]:
    """Compute the measures of two classes from sets of edges, arcs and colliders.

    Arcs that are settled by knowledge count in no measure of directions.
    """
    true_marks, learned_marks = marks(true_class), marks(learned_class)
    pairs = set(true_marks) | set(learned_marks)
    shd = sum(true_marks.get(pair) != learned_marks.get(pair) for pair in pairs)
    arcs, learned_arcs = (
        {mark for mark in both.values() if "-" not in mark and mark not in settled}
        for both in (true_marks, learned_marks)
    )
    bends, learned_bends = colliders(true_class), colliders(learned_class)

    def share(part: int, whole: int) -> float | None:
        return part / whole if whole else None

    hits = len(set(true_marks) & set(learned_marks))
    return {
        "class_shd": shd,
        "shd_per_arc": share(shd, len(true_marks)),
        "skeleton_precision": share(hits, len(learned_marks)),
        "skeleton_recall": share(hits, len(true_marks)),
        "skeleton_f1": share(2 * hits, len(true_marks) + len(learned_marks)),
        "direction_precision": share(len(arcs & learned_arcs), len(learned_arcs)),
        "direction_recall": share(len(arcs & learned_arcs), len(arcs)),
        "collider_precision": share(len(bends & learned_bends), len(learned_bends)),
        "collider_recall": share(len(bends & learned_bends), len(bends)),
    }


def random_dag(rng: np.random.Generator, p: int, density: float) -> Graph:
    """Draw a DAG with a random order of its variables."""
    order = rng.permutation(p)
    arrow = np.triu(rng.random((p, p)) < density, 1)
    return Graph(tuple(f"v{i}" for i in range(p)), arrow[np.ix_(order, order)])


def random_partly_directed(rng: np.random.Generator, p: int, density: float) -> Graph:
    """Draw a graph whose edges are directed either way or undirected, often without an extension."""
    arrow = rng.random((p, p)) < density
    np.fill_diagonal(arrow, False)
    return Graph(tuple(f"v{i}" for i in range(p)), arrow)


# --- Structural Hamming distances


# Tsamardinos, Brown and Aliferis (2006), section 9.1.4: each pair with another mark counts one, DAGs are
# converted to their classes first. The cases follow from the definition.
@pytest.mark.parametrize(
    ("truth", "learned", "dag_shd", "class_shd"),
    [
        (CHAIN, FORK, 1, 0),
        (CHAIN, COLLIDER, 1, 2),
        (FORK, COLLIDER, 2, 2),
        (CHEST_CLINIC, Graph.from_edges("atslbexd", [("t", "a"), *CHEST_ARCS[1:]]), 1, 0),
        (CHEST_CLINIC, Graph.from_edges("atslbexd", [arc for arc in CHEST_ARCS if arc != ("t", "e")]), 1, 3),
        (CHAIN, EMPTY, 2, 2),
        (EMPTY, COMPLETE, 3, 3),
    ],
    ids=["chain, fork", "chain, collider", "fork, collider", "a->t reversed", "no t->e", "empty", "complete"],
)
def test_distances_of_small_cases(truth: Graph, learned: Graph, dag_shd: float, class_shd: float) -> None:
    """Small cases have the distances that counting pairs by hand gives."""
    measures = score(truth, learned)

    assert dag_shd == measures["dag_shd"]
    assert class_shd == measures["class_shd"]


def test_distances_of_all_pairs_on_three_nodes() -> None:
    """The 625 ordered pairs of DAGs on three nodes have DAG distances 0 to 3 this often (enumeration)."""
    histogram = {0: 25, 1: 138, 2: 276, 3: 186}

    found = Counter(score(truth, learned)["dag_shd"] for truth in all_dags(3) for learned in all_dags(3))

    assert histogram == found


def test_distance_is_divided_by_the_arcs_of_the_truth() -> None:
    """Two wrong pairs of two arcs are one per arc."""
    measures = answer(CHAIN, COLLIDER).values

    assert measures["class_shd"] / 2 == measures["shd_per_arc"]


# --- All structural measures by their definition


def test_structural_measures_of_dags_on_four_nodes_are_those_of_the_definition(
    rng: np.random.Generator,
) -> None:
    """Against sets of pairs, arcs and colliders of classes drawn by d-separation, 1,500 pairs of DAGs."""
    dags, true_class = all_dags(4), class_by_statements()

    for i, j in rng.integers(len(dags), size=(1500, 2)).tolist():
        found = score(dags[i], dags[j])
        expected = by_definition(true_class[dags[i]], true_class[dags[j]])

        assert expected == {name: found[name] for name in expected}


@pytest.mark.parametrize(("p", "density"), [(9, 0.15), (9, 0.5), (40, 0.03), (40, 0.2)])
def test_structural_measures_of_larger_graphs_are_those_of_the_definition(
    rng: np.random.Generator, p: int, density: float
) -> None:
    """The same for larger graphs, partly directed ones and ones without an extension among them.

    Class and extension are the package's own here; their tests stand elsewhere.
    """
    n_without = 0
    for _ in range(60):
        truth = random_dag(rng, p, density)
        learned = random_partly_directed(rng, p, density / 2)
        extension = consistent_extension(learned)
        learned_class = learned if extension is None else cpdag(extension)

        scores = answer(truth, learned)
        expected = by_definition(cpdag(truth), learned_class)

        assert expected == {name: scores.values.get(name) for name in expected}
        assert (extension is not None) == scores.extendable
        n_without += extension is None

    assert n_without > 0


def test_lone_arrow_is_compared_as_the_class_it_stands_for() -> None:
    """A learned a -> b - c is the class a - b - c: right for a chain."""
    scores = answer(CHAIN, Graph.from_edges("abc", [("a", "b")], [("b", "c")]))

    assert scores.values["class_shd"] == 0
    assert scores.values["perfect_map"] == 1
    assert scores.extendable


def test_graph_without_extension_is_compared_as_it_stands() -> None:
    """A directed cycle is no class: its arrows are compared, and its maps are undefined."""
    scores = answer(COLLIDER, CYCLE)
    no_extension = "answer: no consistent extension"

    assert not scores.extendable
    assert scores.values["class_shd"] == 2  # b -> c for c -> b, and a - c on one side only
    assert scores.values["direction_precision"] == 1 / 3
    assert scores.values["direction_recall"] == 1 / 2
    assert no_extension == scores.undefined["imap"]
    assert no_extension == scores.undefined["perfect_map"]


# --- Knowledge


def right_knowledge(rng: np.random.Generator, dag: Graph) -> Knowledge:
    """Draw statements that hold in a DAG: some of its arcs, some that are not there, perhaps its stages."""
    names, arrow = dag.names, dag.arrow
    arcs = np.argwhere(arrow & (rng.random(arrow.shape) < rng.choice([0, 0.3, 1])))
    absent = np.argwhere(~arrow & ~np.eye(len(names), dtype=bool) & (rng.random(arrow.shape) < 0.3))
    order = [names[i] for i in dag.order()]
    return Knowledge.of(
        names,
        arcs=[(names[x], names[y]) for x, y in arcs.tolist()],
        excluded=[(names[x], names[y]) for x, y in absent.tolist()],
        stages=[order[:2], order[2:]] if rng.random() < 0.3 else [],
    )


def any_knowledge(rng: np.random.Generator, names: tuple[str, ...]) -> Knowledge:
    """Draw statements that do not contradict each other, whatever the truth."""
    arrow = random_dag(rng, len(names), 0.5).arrow
    told = Graph(names, arrow & (rng.random(arrow.shape) < 0.5))
    excluded = [pair for pair in itertools.permutations(names, 2) if rng.random() < 0.2]
    arcs = [(source, target) for source, target, _ in told.edges() if (source, target) not in excluded]
    return Knowledge.of(names, arcs=arcs, excluded=excluded)


def accords(dag: Graph, knowledge: Knowledge) -> bool:
    """Say whether every single statement holds in a DAG."""
    return not (knowledge.arcs & ~dag.arrow).any() and not (knowledge.excluded & dag.arrow).any()


@functools.cache
def members() -> dict[Graph, list[Graph]]:
    """Give the class of each DAG on three and four nodes, by its d-separations."""
    groups = defaultdict(list)
    for dag in (*all_dags(3), *all_dags(4)):
        groups[dag.names, statements(dag)].append(dag)
    return {dag: group for group in groups.values() for dag in group}


def union_of(dags: list[Graph]) -> Graph:
    """Draw an edge in every direction that some DAG has."""
    return Graph(dags[0].names, np.any([dag.arrow for dag in dags], axis=0))


def narrowed(group: list[Graph], directions: list[tuple[str, str]]) -> Graph:
    """Keep the DAGs that accord with one statement after the other, while any are left; draw their union."""
    position = {name: i for i, name in enumerate(group[0].names)}
    for x, y in directions:
        group = [dag for dag in group if not dag.arrow[position[y], position[x]]] or group
    return union_of(group)


def named(names: tuple[str, ...], matrix: np.ndarray) -> list[tuple[str, str]]:
    """List the pairs of a square, in its order."""
    return [(names[x], names[y]) for x, y in np.argwhere(matrix).tolist()]


def test_right_knowledge_narrows_a_class_to_the_dags_that_accord_with_it(rng: np.random.Generator) -> None:
    """C(T) directs exactly the edges on which all DAGs of the class that accord agree (Meek 1995).

    Every DAG on three and four nodes, with statements that hold in it.
    """
    n_narrowed = 0
    for dag, group in members().items():
        knowledge = right_knowledge(rng, dag)
        expected = union_of([own for own in group if accords(own, knowledge)])

        truth = Truth.of(dag, knowledge)

        assert expected == truth.narrowed
        assert union_of(group) == truth.cpdag
        n_narrowed += truth.narrowed != truth.cpdag

    assert n_narrowed > 100


@pytest.mark.parametrize("kind", ["right", "any"])
def test_measures_under_knowledge_are_those_of_the_definition(rng: np.random.Generator, kind: str) -> None:
    """Truth and answer narrowed by enumeration, settled directions left out; 1,500 pairs of DAGs.

    "any" knowledge is wrong of the truth as often as not: the truth is narrowed by what of it holds.
    """
    n_wrong = n_directed = 0
    for i, j in rng.integers(len(all_dags(4)), size=(1500, 2)).tolist():
        dag, learned = all_dags(4)[i], all_dags(4)[j]
        knowledge = right_knowledge(rng, dag) if kind == "right" else any_knowledge(rng, dag.names)
        # An arc can only be x -> y where that is said to be there, or y -> x alone to be excluded.
        told = named(dag.names, knowledge.arcs | (knowledge.excluded.T & ~knowledge.excluded))
        holds = named(
            dag.names,
            (knowledge.arcs & dag.arrow) | ((knowledge.excluded & ~dag.arrow).T & dag.arrow),
        )
        true_class, learned_class = narrowed(members()[dag], holds), narrowed(members()[learned], told)

        found = score_answer(Truth.of(dag, knowledge), learned)
        expected = by_definition(true_class, learned_class, frozenset([*told, *holds]))

        assert expected == {name: found.values.get(name) for name in expected}
        assert found.values["perfect_map"] == (members()[dag] is members()[learned])
        n_wrong += not accords(dag, knowledge)
        n_directed += found.values.get("direction_recall", 0) > 0

    assert n_wrong == 0 if kind == "right" else n_wrong > 500
    assert n_directed > 50


def test_what_follows_from_knowledge_and_data_together_is_counted() -> None:
    """A chain with its first arc told: the second follows by Meek's rule 1, and it alone is compelled."""
    knowledge = Knowledge.of("abc", arcs=[("a", "b")])
    truth = Truth.of(CHAIN, knowledge)

    scores = score_answer(truth, FORK)

    assert truth.narrowed == CHAIN
    assert truth.n_compelled == 1
    assert scores.values["class_shd"] == 0
    assert (scores.values["direction_precision"], scores.values["direction_recall"]) == (1, 1)


def test_truth_that_knowledge_settles_leaves_the_population_of_directions() -> None:
    """With both arcs told nothing is left to be found, for every learner alike."""
    knowledge = Knowledge.of("abc", arcs=[("a", "b"), ("c", "b")])

    for learned in (EMPTY, CHAIN, COLLIDER, CYCLE):
        reasons = score_answer(Truth.of(COLLIDER, knowledge), learned).undefined

        assert reasons["direction_recall"] == "truth: no compelled arc beyond what was told"


def test_answers_are_narrowed_whether_or_not_they_used_the_knowledge() -> None:
    """An exclusion that holds makes a chain, returned as its class, the chain that is true."""
    knowledge = Knowledge.of("abc", stages=["a", "b", "c"])
    truth = Truth.of(CHAIN, knowledge)

    assert score_answer(truth, cpdag(CHAIN)).values["class_shd"] == 0
    assert score_answer(Truth.of(CHAIN), CHAIN).values["class_shd"] == 0
    assert truth.narrowed == CHAIN


def test_wrong_arc_turns_the_answer_but_not_the_truth() -> None:
    """Told b -> a of a true a -> b - c: the right class is one mark off, and still a perfect map."""
    truth = Truth.of(CHAIN, Knowledge.of("abc", arcs=[("b", "a")]))

    scores = score_answer(truth, CHAIN)

    assert truth.narrowed == cpdag(CHAIN)
    assert scores.values["class_shd"] == 1
    assert scores.values["perfect_map"] == 1
    assert scores.undefined["direction_precision"] == "answer: no directed edge beyond what was told"
    assert scores.undefined["direction_recall"] == "truth: no compelled arc beyond what was told"


def test_wrong_exclusion_cannot_turn_what_the_answer_found() -> None:
    """Told that a -> b is not there: a learned collider at b contradicts it and stands; it is right."""
    truth = Truth.of(COLLIDER, Knowledge.of("abc", excluded=[("a", "b")]))

    scores = score_answer(truth, COLLIDER)

    assert scores.values["class_shd"] == 0
    assert (scores.values["direction_precision"], scores.values["direction_recall"]) == (1, 1)


def test_pair_told_wrongly_to_be_apart_counts_in_no_direction() -> None:
    """Of a true a -> b both arcs are excluded: what holds of that settles its direction."""
    truth = Truth.of(CHAIN, Knowledge.of("abc", excluded=[("a", "b"), ("b", "a")]))

    assert truth.narrowed == CHAIN  # b -> a is not there, so a -> b, and then b -> c
    assert truth.n_compelled == 1
    assert score_answer(truth, CHAIN).values["direction_recall"] == 0


def test_answer_without_extension_is_not_narrowed() -> None:
    """A directed cycle is compared as it stands, knowledge or not."""
    truth = Truth.of(COLLIDER, Knowledge.of("abc", excluded=[("c", "a")]))

    scores = score_answer(truth, CYCLE)

    assert not scores.extendable
    assert scores.values["class_shd"] == 2


def test_saying_nothing_changes_no_measure(rng: np.random.Generator) -> None:
    """Knowledge without a statement gives every value that no knowledge gives."""
    for _ in range(50):
        dag, learned = random_dag(rng, 9, 0.3), random_partly_directed(rng, 9, 0.15)

        assert (
            score_answer(Truth.of(dag), learned).values
            == score_answer(Truth.of(dag, Knowledge.of(dag.names)), learned).values
        )


def test_knowledge_is_matched_by_names() -> None:
    """`score` takes knowledge over the same names in any order, and refuses other names."""
    told = score(CHAIN, FORK, knowledge=Knowledge.of("cab", arcs=[("a", "b")]))

    assert told["class_shd"] == 0
    assert told["direction_recall"] == 1
    with pytest.raises(InputError, match="'z' is on one side only"):
        score(CHAIN, FORK, knowledge=Knowledge.of("abcz"))


# --- I-maps


def test_imap_is_having_only_true_statements() -> None:
    """A learned DAG is an I-map if and only if networkx finds each of its d-separations in the truth.

    Every 15th of the DAGs on four nodes as the truth, against all 543.
    """
    n_imaps = 0
    for true_dag in all_dags(4)[::15]:
        truth = Truth.of(true_dag)
        for dag in all_dags(4):
            expected = statements(dag) <= statements(true_dag)

            assert expected == score_answer(truth, dag).values["imap"]
            n_imaps += expected

    assert n_imaps > 1000


def test_minimal_imap_loses_that_with_every_arc() -> None:
    """An I-map is minimal if and only if no graph with one arc less is an I-map, by enumeration."""
    found: Counter[bool] = Counter()
    for true_dag in all_dags(4)[::15]:
        truth = Truth.of(true_dag)
        for dag in all_dags(4):
            if statements(dag) <= statements(true_dag):
                smaller = [without_arc(dag, i, j) for i, j in np.argwhere(dag.arrow).tolist()]
                expected = not any(statements(less) <= statements(true_dag) for less in smaller)
            else:
                expected = False

            assert expected == score_answer(truth, dag).values["minimal_imap"]
            found[expected] += 1

    assert min(found.values()) > 100


def test_perfect_map_is_having_exactly_the_true_statements() -> None:
    """A learned DAG is a perfect map if and only if it has the same d-separations as the truth."""
    n_perfect = 0
    for true_dag in all_dags(4)[::15]:
        truth = Truth.of(true_dag)
        for dag in all_dags(4):
            expected = statements(dag) == statements(true_dag)

            assert expected == score_answer(truth, dag).values["perfect_map"]
            n_perfect += expected

    assert n_perfect > 37  # each truth itself, and others of its class


def test_maps_of_a_cpdag_are_those_of_its_dags(rng: np.random.Generator) -> None:
    """Whether a class is an I-map or a perfect map does not depend on the member that is looked at."""
    dags, true_class = all_dags(4), class_by_statements()

    for i, j in rng.integers(len(dags), size=(500, 2)).tolist():
        truth = Truth.of(dags[i])
        of_dag, of_class = (score_answer(truth, graph).values for graph in (dags[j], true_class[dags[j]]))

        assert of_dag["imap"] == of_class["imap"]
        assert of_dag["perfect_map"] == of_class["perfect_map"]


@pytest.mark.parametrize(("p", "density"), [(12, 0.2), (40, 0.05), (70, 0.03)])
def test_true_dag_and_its_supergraphs_are_imaps(rng: np.random.Generator, p: int, density: float) -> None:
    """Adding arcs along an order keeps an I-map, and makes it one that is not minimal (Pearl 1988)."""
    dag = random_dag(rng, p, density)
    order = list(dag.order())
    more = dag.arrow.copy()
    more[np.ix_(order, order)] |= np.triu(rng.random((p, p)) < 0.1, 1)
    larger = Graph(dag.names, more)

    own, of_larger = answer(dag, dag).values, answer(dag, larger).values

    assert (own["imap"], own["minimal_imap"], own["perfect_map"]) == (1, 1, 1)
    assert (of_larger["imap"], of_larger["minimal_imap"], of_larger["perfect_map"]) == (1, 0, 0)


def test_minimal_imap_differs_within_a_class() -> None:
    """For a -> b <- c as the truth, a complete DAG is a minimal I-map unless b is last in it.

    With b last the arc between a and c can go; with b before one of them it is needed (Pearl 1988), though
    all six complete DAGs are equivalent.
    """
    found = {}
    for order in itertools.permutations("abc"):
        complete = Graph.from_edges("abc", list(itertools.combinations(order, 2)))
        found[order] = answer(COLLIDER, complete).values["minimal_imap"]

    assert {order: float(order[2] != "b") for order in found} == found


def test_minimal_imap_is_for_dags_as_returned() -> None:
    """A partly directed answer has no arcs of its own to drop."""
    scores = answer(CHAIN, cpdag(CHAIN))
    reason = "answer: not a DAG"

    assert reason == scores.undefined["minimal_imap"]
    assert scores.values["imap"] == 1


# --- Undefined measures


def test_every_graph_measure_is_defined_or_has_a_reason(rng: np.random.Generator) -> None:
    """Each measure is in exactly one of the two mappings, and each reason names its cause."""
    graphs = [EMPTY, CHAIN, COLLIDER, COMPLETE, CYCLE, cpdag(CHAIN)]
    declared = [("pdag", "class"), ("dag", "causal"), ("skeleton", "class")]

    for truth, learned in itertools.product([EMPTY, CHAIN, COLLIDER, COMPLETE], graphs):
        for returns, directions in declared:
            scores = answer(truth, learned, returns=returns, directions=directions)

            assert set(GRAPH_MEASURES) == set(scores.values) | set(scores.undefined)
            assert not set(scores.values) & set(scores.undefined)
            assert all(
                reason.startswith(("truth: ", "answer: ", "learner: "))
                for reason in scores.undefined.values()
            )


@pytest.mark.parametrize(
    ("truth", "expected"),
    [
        (EMPTY, {"shd_per_arc", "skeleton_recall", "direction_recall", "collider_recall"}),
        (CHAIN, {"direction_recall", "collider_recall"}),
        (COMPLETE, {"direction_recall", "collider_recall"}),
        (COLLIDER, set()),
    ],
    ids=["empty", "chain", "complete", "collider"],
)
def test_truth_leaves_the_same_measures_undefined_for_every_learner(truth: Graph, expected: set[str]) -> None:
    """What the truth leaves undefined depends on nothing that was answered or declared."""
    for learned in [EMPTY, CHAIN, COLLIDER, COMPLETE, CYCLE, cpdag(CHAIN)]:
        for returns in ("dag", "pdag", "skeleton"):
            reasons = answer(truth, learned, returns=returns).undefined

            assert expected == {name for name, why in reasons.items() if why.startswith("truth: ")}


def test_answer_without_edges_has_no_precision() -> None:
    """An empty answer claims nothing: no precision, recall 0, an F1 of 0."""
    scores = answer(COLLIDER, EMPTY)
    silent = {"skeleton_precision", "direction_precision", "collider_precision"}

    assert silent == {name for name, why in scores.undefined.items() if why.startswith("answer: ")}
    for name in ("skeleton_recall", "skeleton_f1", "direction_recall", "collider_recall"):
        assert scores.values[name] == 0
    assert scores.values["imap"] == 0


def test_answer_without_arrows_has_no_precision_of_directions() -> None:
    """A chain's class directs nothing and has no collider."""
    undefined = answer(COLLIDER, CHAIN).undefined
    expected = {
        "direction_precision": "answer: no directed edge",
        "collider_precision": "answer: no unshielded collider",
    }

    assert expected == {name: undefined[name] for name in expected}


def test_precision_of_claims_about_an_empty_truth_is_zero() -> None:
    """Where nothing is true, every claim is false, and that is a defined precision."""
    values = answer(EMPTY, COLLIDER).values

    for name in ("skeleton_precision", "skeleton_f1", "direction_precision", "collider_precision"):
        assert values[name] == 0


def test_f1_is_undefined_only_when_both_graphs_are_empty() -> None:
    """F1 is null for nothing against nothing, 0 for something against nothing, either way round."""
    assert answer(EMPTY, EMPTY).undefined["skeleton_f1"].startswith("answer: no edge")
    assert answer(EMPTY, CHAIN).values["skeleton_f1"] == 0
    assert answer(CHAIN, EMPTY).values["skeleton_f1"] == 0


def test_learner_of_skeletons_has_skeleton_measures_only() -> None:
    """What a learner does not claim is not scored, though its graph may have an extension."""
    skeleton = Graph.from_edges("abc", undirected=[("a", "b"), ("a", "c")])
    reason = "learner: claims a skeleton only"

    scores = answer(COLLIDER, skeleton, returns="skeleton")

    assert set(scores.values) == SKELETON
    assert scores.values["skeleton_precision"] == 0.5
    assert {reason} == set(scores.undefined.values())
    assert scores.extendable is None


def test_dag_distance_needs_a_causal_claim_and_a_dag() -> None:
    """For class directions it is undefined by the learner's declaration; else the answer must be a DAG."""
    not_causal, not_a_dag = "learner: claims no causal directions", "answer: not a DAG"

    assert not_causal == answer(CHAIN, FORK).undefined["dag_shd"]
    assert not_a_dag == answer(CHAIN, cpdag(CHAIN), directions="causal").undefined["dag_shd"]
    assert not_a_dag == answer(CHAIN, CYCLE, directions="causal").undefined["dag_shd"]
    assert answer(CHAIN, FORK, directions="causal").values["dag_shd"] == 1


# --- Small graphs, names, entry points


@pytest.mark.parametrize("p", [0, 1, 2])
def test_tiny_graphs_without_arcs_are_equal(p: int) -> None:
    """With no variable, one or two, empty graphs differ nowhere and are perfect maps."""
    empty = Graph.from_edges("ab"[:p])
    expected = {"class_shd": 0, "dag_shd": 0, "imap": 1, "minimal_imap": 1, "perfect_map": 1}

    values = answer(empty, empty, directions="causal").values

    assert expected == values


def test_two_variables_with_an_arc_either_way_are_one_class() -> None:
    """Arcs a -> b and b -> a state the same: nothing."""
    measures = score(Graph.from_edges("ab", [("a", "b")]), Graph.from_edges("ab", [("b", "a")]))

    assert (measures["class_shd"], measures["dag_shd"], measures["perfect_map"]) == (0, 1, 1)


def test_names_are_matched_whatever_their_order(rng: np.random.Generator) -> None:
    """The learned graph's own order of variables does not matter."""
    truth, learned = random_dag(rng, 9, 0.3), random_dag(rng, 9, 0.3)
    shuffled = learned.reordered(rng.permutation(learned.names).tolist())

    assert score(truth, learned) == score(truth, shuffled)


def test_other_names_are_refused_and_one_is_named() -> None:
    """A variable that only one side has is in the message."""
    with pytest.raises(InputError, match="'c' is on one side only"):
        score(CHAIN, Graph.from_edges("abz", [("a", "b")]))


def test_truth_must_be_a_dag() -> None:
    """A cycle or an undirected edge in the truth is refused."""
    with pytest.raises(InputError, match="cycle"):
        score(CYCLE, CHAIN)
    with pytest.raises(InputError, match="undirected"):
        Truth.of(cpdag(CHAIN))


def test_networks_are_scored_by_their_graphs() -> None:
    """A network on either side gives what its graph gives."""
    cpts = {
        "a": Cpt("a", (), np.array([0.5, 0.5])),
        "b": Cpt("b", ("a",), np.array([[0.9, 0.1], [0.2, 0.8]])),
        "c": Cpt("c", ("b",), np.array([[0.7, 0.3], [0.4, 0.6]])),
    }
    network = Network(CHAIN, (("no", "yes"),) * 3, cpts)

    assert score(CHAIN, COLLIDER) == score(network, COLLIDER)
    assert score(COLLIDER, CHAIN) == score(COLLIDER, network)


def test_score_has_every_graph_measure_in_the_order_of_the_registry() -> None:
    """Undefined measures are there, as None."""
    measures = score(CHAIN, EMPTY)

    assert tuple(measures) == GRAPH_MEASURES
    assert measures["skeleton_precision"] is None


def test_truth_holds_class_colliders_and_counts() -> None:
    """The chest clinic has 8 arcs, 5 of them compelled, and the colliders t -> e <- l and e -> d <- b."""
    truth = Truth.of(CHEST_CLINIC)
    position = CHEST_CLINIC.names.index
    colliders_found = {tuple(triple) for triple in truth.colliders.tolist()}

    assert (truth.n_edges, truth.n_compelled, truth.n_colliders) == (8, 5, 2)
    assert {
        (position("t"), position("e"), position("l")),
        (position("b"), position("d"), position("e")),
    } == colliders_found
    assert not truth.colliders.flags.writeable


def test_registry_names_graph_measures_first_and_the_three_costs_last() -> None:
    """Every record stands under its own name, and less is better only for distances and costs."""
    costs = ("wall_seconds", "cpu_seconds", "peak_rss_mb")
    lower = {"class_shd", "dag_shd", "shd_per_arc", *costs}

    assert (*GRAPH_MEASURES, *costs) == tuple(MEASURES)
    assert all(name == measure.name for name, measure in MEASURES.items())
    assert lower == {name for name, measure in MEASURES.items() if measure.better == "lower"}
    assert {"lower", "higher"} == {measure.better for measure in MEASURES.values()}
