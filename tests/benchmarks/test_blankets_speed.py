"""How long the blanket methods take, beside `pc` on the same data; owed: at most 5 times as long."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from generators.cpts import generate_network
from generators.dataset import Dataset
from generators.graph import Graph
from generators.topologies import generate_graph
from harness.learners.blankets import grow_shrink, iamb, inter_iamb
from harness.learners.constraint import pc

pytestmark = pytest.mark.benchmark

learners = pytest.mark.parametrize("learn", [grow_shrink, iamb, inter_iamb])


def draw_dataset(p: int, n: int, *, mean_parents: float = 1.25) -> Dataset:
    """Draw rows of a random network with 2 to 4 states, up to 3 parents and Dirichlet(0.5) tables."""
    rng = np.random.default_rng(p)
    graph = generate_graph("random-order", variables=p, mean_parents=mean_parents, max_parents=3, rng=rng)
    return generate_network(graph, states="2-4", concentration=0.5, rng=rng).sample(n, rng=rng)


def seconds(function: Callable[[], Any], rounds: int = 5) -> float:
    """Return the shortest time of some calls: the one that was disturbed least."""
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return min(times)


@learners
@pytest.mark.parametrize("mean_parents", [1.0, 1.5])
@pytest.mark.parametrize(
    ("p", "n"),
    [(20, 1_000), (200, 1_000), (1000, 1_000), (20, 10_000), (200, 10_000), (1000, 10_000), (50, 100_000)],
)
def test_ratio_to_pc(
    p: int, n: int, mean_parents: float, learn: Callable[[Dataset], Graph], benchmark: Any
) -> None:
    """A blanket method at the level 1 % on sparse random networks."""
    data = draw_dataset(p, n, mean_parents=mean_parents)
    learn(data.first(100))  # compiled before the clock starts

    graph = benchmark.pedantic(learn, (data,), rounds=5)

    benchmark.extra_info["ratio_to_pc"] = benchmark.stats.stats.min / seconds(lambda: pc(data))
    benchmark.extra_info["edges"] = graph.n_edges


@learners
@pytest.mark.parametrize(
    ("p", "n", "factor"),
    [(100, 1_000, (2, 1)), (400, 1_000, (2, 1)), (100, 1_000, (1, 4)), (100, 8_000, (1, 4))],
)
def test_growth(
    p: int, n: int, factor: tuple[int, int], learn: Callable[[Dataset], Graph], benchmark: Any
) -> None:
    """How the time grows from p x n: its exponent in the variables, or in the rows."""
    small = draw_dataset(p, n)
    large = draw_dataset(factor[0] * p, factor[1] * n)
    learn(small)

    benchmark.pedantic(learn, (large,), rounds=5)

    growth = benchmark.stats.stats.min / seconds(lambda: learn(small))
    benchmark.extra_info["exponent"] = float(np.log(growth) / np.log(max(factor)))
