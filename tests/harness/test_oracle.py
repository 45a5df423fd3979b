"""What learners make of perfect evidence: d-separation in the true DAG answers in place of tests.

Under faithfulness and with an oracle for independence, PC returns the CPDAG of the truth (Spirtes, Glymour
and Scheines 2000, theorem 5.1; Meek 1995 for knowledge). The true CPDAG comes from the edge labelling of
Chickering (1995), which the learners do not use, and is itself checked against enumeration in test_classes.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest

from generators.classes import NO_TRIPLES, cpdag, meek_rules
from generators.graph import Graph
from generators.separation import is_separated
from harness.independence.evidence import Separations, marginally_dependent, separations_in
from harness.knowledge import Knowledge
from harness.learners.constraint import pc_on
from harness.learners.max_min import find_candidates

N_DAGS = 4000


def random_dags(n: int, seed: int) -> Iterator[tuple[Graph, Separations, np.random.Generator]]:
    """Draw DAGs of 2 to 12 variables, from sparse to dense, with evidence taken in a random order."""
    rng = np.random.default_rng(seed)
    for _ in range(n):
        p = int(rng.integers(2, 13))
        order = rng.permutation(p)
        density = rng.choice([0.1, 0.2, 0.3, 0.6 if p < 8 else 0.2])
        arrow = np.zeros((p, p), dtype=bool)
        arrow[np.ix_(order, order)] = np.triu(rng.random((p, p)) < density, 1)
        strengths = rng.random((p, p))
        dag = Graph(tuple(f"v{j}" for j in range(p)), arrow)
        yield dag, separations_in(dag, strengths + strengths.T), rng


def told_of(dag: Graph, rng: np.random.Generator) -> Knowledge:
    """Tell a random part of the truth: arcs, arcs that are not there, and sometimes two stages."""
    arcs = np.argwhere(dag.arrow & (rng.random(dag.arrow.shape) < rng.choice([0, 0.3])))
    absent = ~dag.arrow & ~np.eye(dag.n_variables, dtype=bool)
    gone = np.argwhere(absent & (rng.random(dag.arrow.shape) < rng.choice([0, 0.2])))
    named = [[(dag.names[x], dag.names[y]) for x, y in pairs.tolist()] for pairs in (arcs, gone)]
    cut = int(rng.integers(0, dag.n_variables))
    order = [dag.names[v] for v in dag.order()]
    stages = [order[:cut], order[cut:]] if rng.random() < 0.5 else []
    return Knowledge.of(dag.names, arcs=named[0], excluded=named[1], stages=stages)


def class_under(dag: Graph, knowledge: Knowledge) -> Graph:
    """Return the CPDAG with what is known of its undirected edges directed, and what follows (Meek 1995)."""
    arrow = cpdag(dag).arrow & ~knowledge.excluded
    meek_rules(arrow, NO_TRIPLES)
    return Graph(dag.names, arrow)


def test_evidence_is_separation() -> None:
    """Marginal dependence is d-connection given nothing."""
    for dag, evidence, _ in random_dags(200, seed=1):
        found = marginally_dependent(evidence)

        expected = [[x != y and not is_separated(dag, x, y) for y in dag.names] for x in dag.names]
        assert np.array_equal(expected, found)


@pytest.mark.parametrize("updates", ["after-level", "at-once"])
@pytest.mark.parametrize("colliders", ["plain", "conservative", "majority"])
def test_pc(updates: str, colliders: str) -> None:
    """Every variant of PC returns the CPDAG of every DAG."""
    for dag, evidence, _ in random_dags(N_DAGS, seed=2):
        assert cpdag(dag) == pc_on(evidence, dag.names, updates=updates, colliders=colliders)


@pytest.mark.parametrize("updates", ["after-level", "at-once"])
@pytest.mark.parametrize("colliders", ["plain", "conservative", "majority"])
def test_pc_with_knowledge(updates: str, colliders: str) -> None:
    """Told a part of the truth, PC returns the CPDAG narrowed by it."""
    n_narrowed = 0
    for dag, evidence, rng in random_dags(N_DAGS // 2, seed=3):
        knowledge = told_of(dag, rng)

        graph = pc_on(evidence, dag.names, updates=updates, colliders=colliders, knowledge=knowledge)

        assert class_under(dag, knowledge) == graph
        n_narrowed += graph != cpdag(dag)
    assert n_narrowed > N_DAGS // 20


def test_candidates() -> None:
    """The candidates of max-min hill climbing are the adjacent pairs of every DAG, told or not.

    Tsamardinos, Brown and Aliferis (2006), theorem 1 (from memory).
    """
    for dag, evidence, rng in random_dags(N_DAGS, seed=4):
        told = told_of(dag, rng)

        assert np.array_equal(dag.skeleton, find_candidates(evidence))
        assert np.array_equal(dag.skeleton, find_candidates(evidence, knowledge=told))
