"""How long drawing takes: rows beside as many random numbers, and large graphs."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from generators.cpts import generate_network
from generators.sampling import sample
from generators.topologies import generate_graph

pytestmark = pytest.mark.benchmark


def seconds(function: Callable[[], Any], rounds: int = 9) -> float:
    """Return the shortest time of some calls: the one that was disturbed least."""
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return min(times)


@pytest.mark.parametrize(
    ("p", "n"), [(20, 1_000), (20, 100_000), (100, 1_000), (100, 100_000), (1000, 1_000), (1000, 10_000)]
)
def test_sampling_beside_random_numbers(p: int, n: int, benchmark: Any) -> None:
    """Rows of a random network, beside one uniform number for each cell."""
    rng = np.random.default_rng(1)
    graph = generate_graph("random-order", variables=p, mean_parents=1.2, rng=rng)
    network = generate_network(graph, rng=rng)
    numbers = np.empty(1 << 14)  # stays in the cache: the yardstick is drawing, not writing to memory

    def yardstick() -> None:
        for _ in range(0, n * p, len(numbers)):
            rng.random(out=numbers)

    sample(network, 1, bytes(16))

    benchmark(sample, network, n, bytes(16))

    benchmark.extra_info["ns_per_cell"] = 1e9 * benchmark.stats.stats.min / (n * p)
    benchmark.extra_info["ratio_to_rng_random"] = benchmark.stats.stats.min / seconds(yardstick)


def test_a_thousand_variables_beside_random_numbers(benchmark: Any) -> None:
    """A random-order graph of 1,000 variables, beside one uniform number for each pair."""
    rng = np.random.default_rng(1)

    benchmark(generate_graph, "random-order", variables=1000, mean_parents=1.2, rng=rng)

    pairs = 1000 * 999 // 2
    benchmark.extra_info["ratio_to_rng_random"] = benchmark.stats.stats.min / seconds(
        lambda: rng.random(pairs)
    )
