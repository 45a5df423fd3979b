"""Speed of classes, d-separation and the measures of one run, beside a yardstick in the same process."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import networkx as nx
import numpy as np
import pytest

from generators.adjacency import Nodes, Offsets, neighbour_lists
from generators.classes import NO_TRIPLES, class_lists, cpdag, meek_rules, unshielded_colliders
from generators.compiled import kernel
from generators.graph import Graph
from generators.separation import is_connected, is_separated
from harness.knowledge import Knowledge
from harness.scorers.structure import score_answer
from harness.scorers.truth import Truth

pytestmark = pytest.mark.benchmark

SIZES = (20, 200, 1000)
MEAN_PARENTS = 1.25
N_QUERIES = 2000


def random_dag(rng: np.random.Generator, p: int) -> Graph:
    """Draw a sparse DAG with a random order of its variables."""
    order = rng.permutation(p)
    arrow = np.triu(rng.random((p, p)) < min(1.0, 2 * MEAN_PARENTS / (p - 1)), 1)
    return Graph(tuple(f"v{i}" for i in range(p)), arrow[np.ix_(order, order)])


def median_seconds(work: Callable[[], Any], repeats: int) -> float:
    """Time a yardstick."""
    seconds = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        seconds.append(time.perf_counter() - start)
    return float(np.median(seconds))


@kernel
def count_connected(at: Offsets, nodes: Nodes, sources: Nodes, targets: Nodes, given: Nodes) -> int:
    """Ask many questions without going back to the interpreter."""
    n = 0
    is_target = np.zeros(at.size // 3, np.bool_)
    for q in range(sources.size):
        is_target[targets[q]] = True
        n += is_connected(at, nodes, sources[q : q + 1], is_target, given[q])
        is_target[targets[q]] = False
    return n


@pytest.mark.parametrize("p", SIZES)
def test_class_of_a_dag(benchmark: Any, rng: np.random.Generator, p: int) -> None:
    """The class as lists, from the square array on; beside np.nonzero of the same array."""
    graph = random_dag(rng, p)
    class_lists(graph.arrow)

    benchmark(class_lists, graph.arrow)

    yardstick = median_seconds(lambda: np.nonzero(graph.arrow), 200)
    benchmark.extra_info["ratio to np.nonzero"] = benchmark.stats["median"] / yardstick


@pytest.mark.parametrize("p", SIZES)
def test_meek_rules(benchmark: Any, rng: np.random.Generator, p: int) -> None:
    """Meek's rules on a skeleton with its colliders, the copy of the array included."""
    graph = random_dag(rng, p)
    arrow = graph.skeleton.copy()
    for a, c, b in unshielded_colliders(graph).tolist():
        arrow[c, a] = arrow[c, b] = False
    meek_rules(arrow.copy(), NO_TRIPLES)

    benchmark(lambda: meek_rules(arrow.copy(), NO_TRIPLES))

    yardstick = median_seconds(lambda: np.nonzero(arrow), 200)
    benchmark.extra_info["ratio to np.nonzero"] = benchmark.stats["median"] / yardstick


@pytest.mark.parametrize("answer", ["true class", "true DAG", "another DAG"])
@pytest.mark.parametrize("p", [12, *SIZES])
def test_all_measures_of_one_run(benchmark: Any, rng: np.random.Generator, p: int, answer: str) -> None:
    """All graph measures of one answer, called from Python; beside one dense comparison with numpy."""
    graph = random_dag(rng, p)
    truth = Truth.of(graph)
    learned = {"true class": cpdag(graph), "true DAG": graph, "another DAG": random_dag(rng, p)}[answer]
    score_answer(truth, learned)

    benchmark(score_answer, truth, learned, directions="causal")

    def dense_shd() -> int:
        differs = truth.cpdag.arrow != learned.arrow
        return int(np.count_nonzero(np.triu(differs | differs.T, 1)))

    benchmark.extra_info["ratio to one dense SHD"] = benchmark.stats["median"] / median_seconds(
        dense_shd, 100
    )


@pytest.mark.parametrize("p", [12, *SIZES])
def test_all_measures_under_knowledge(benchmark: Any, rng: np.random.Generator, p: int) -> None:
    """The same with three stages known, another DAG's class as the answer; beside scoring without them."""
    graph, learned = random_dag(rng, p), cpdag(random_dag(rng, p))
    order = [graph.names[x] for x in graph.order()]
    knowledge = Knowledge.of(graph.names, stages=[order[: p // 3], order[p // 3 : p // 2], order[p // 2 :]])
    without, truth = Truth.of(graph), Truth.of(graph, knowledge)
    score_answer(truth, learned)

    benchmark(score_answer, truth, learned)

    yardstick = median_seconds(lambda: score_answer(without, learned), 100)
    benchmark.extra_info["ratio to no knowledge"] = benchmark.stats["median"] / yardstick


@pytest.mark.parametrize("p", SIZES)
def test_separation_queries(benchmark: Any, rng: np.random.Generator, p: int) -> None:
    """Random questions with two given variables, asked in a kernel; beside networkx."""
    graph = random_dag(rng, p)
    oracle = graph.to_networkx()
    lists = neighbour_lists(graph.arrow)
    drawn = np.array([rng.choice(p, 4, replace=False) for _ in range(N_QUERIES)], dtype=np.uint32)
    questions = (*lists, drawn[:, 0].copy(), drawn[:, 1].copy(), drawn[:, 2:].copy())

    n_connected = count_connected(*questions)
    benchmark(count_connected, *questions)

    def ask_networkx(n: int) -> int:
        named = [[graph.names[v] for v in row] for row in drawn[:n].tolist()]
        return sum(not nx.is_d_separator(oracle, {x}, {y}, {z, w}) for x, y, z, w in named)

    n_asked = 100
    yardstick = median_seconds(lambda: ask_networkx(n_asked), 3) / n_asked
    assert count_connected(*lists, *(part[:n_asked] for part in questions[2:])) == ask_networkx(n_asked)
    benchmark.extra_info["microseconds a question"] = benchmark.stats["median"] / N_QUERIES * 1e6
    benchmark.extra_info["times faster than networkx"] = yardstick / (benchmark.stats["median"] / N_QUERIES)
    benchmark.extra_info["share connected"] = n_connected / N_QUERIES


@pytest.mark.parametrize("p", SIZES)
def test_one_separation_query_by_names(benchmark: Any, rng: np.random.Generator, p: int) -> None:
    """One question through the public function, which reads the square array each time; beside networkx."""
    graph = random_dag(rng, p)
    oracle = graph.to_networkx()
    is_separated(graph, "v0", "v1", ["v2", "v3"])

    benchmark(is_separated, graph, "v0", "v1", ["v2", "v3"])

    yardstick = median_seconds(lambda: nx.is_d_separator(oracle, {"v0"}, {"v1"}, {"v2", "v3"}), 50)
    benchmark.extra_info["times faster than networkx"] = yardstick / benchmark.stats["median"]
