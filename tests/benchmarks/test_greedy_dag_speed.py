"""How long greedy search takes: beside numpy's bincount for as many tables, and as p, n and arcs grow."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from generators.cpts import generate_network
from generators.dataset import Dataset
from generators.sampling import sample
from generators.topologies import generate_graph
from harness.counts import prepare
from harness.learners.greedy_dag import hill_climbing
from harness.learners.greedy_search import climb

pytestmark = pytest.mark.benchmark

# Seconds owed on the machine this was planned on.
OWED = {(100, 1_000): 0.006, (500, 10_000): 0.6, (1000, 1_000): 1.3, (1000, 100_000): 15.0}


def seconds(function: Callable[[], Any], rounds: int) -> float:
    """Return the shortest time of some calls: the one that was disturbed least."""
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return min(times)


def draw_data(p: int, n: int) -> Dataset:
    """Draw rows of a sparse random network with 2 to 4 states."""
    rng = np.random.default_rng(p)
    graph = generate_graph("random-order", variables=p, mean_parents=1.25, max_parents=3, rng=rng)
    network = generate_network(graph, states="2-4", concentration=0.5, rng=rng)
    return sample(network, n, bytes(16))


def learn(data: Dataset, score: str, restarts: int = 0) -> int:
    """Learn, and return the number of arcs."""
    rng = np.random.default_rng(1)
    return hill_climbing(data, score=score, restarts=restarts, rng=rng).n_edges  # type: ignore[arg-type]


@pytest.mark.parametrize("score", ["bic", "bdeu", "k2"])
@pytest.mark.parametrize(
    ("p", "n"),
    [(20, 1_000), (20, 100_000), (100, 1_000), (100, 10_000), (200, 1_000), (500, 10_000), (1000, 1_000)],
)
def test_a_search(score: str, p: int, n: int, benchmark: Any) -> None:
    """One search from no arcs, beside a bincount of one column for each family that it must score."""
    data = draw_data(p, n)
    column = np.ascontiguousarray(data.codes[:, 0])
    rounds = max(2, min(30, int(4e7 / (p * p * math.sqrt(n) * 30))))

    n_edges = benchmark.pedantic(learn, (data, score), rounds=rounds, warmup_rounds=1)

    fastest = benchmark.stats.stats.min
    n_families = p * (p - 1) / 2 + n_edges * p  # the first pass, and a column for each arc added
    per_family = seconds(lambda: np.bincount(column), 30)
    benchmark.extra_info["ratio_to_bincounts"] = fastest / (n_families * per_family)
    if score == "bic" and (p, n) in OWED:
        benchmark.extra_info["share_of_owed"] = fastest / OWED[p, n]


def test_ten_restarts(benchmark: Any) -> None:
    """Ten random starts on 100 variables, beside the search from no arcs."""
    data = draw_data(100, 1_000)

    benchmark.pedantic(learn, (data, "bic", 10), rounds=5, warmup_rounds=1)

    alone = seconds(lambda: learn(data, "bic"), 10)
    benchmark.extra_info["ratio_to_one_search"] = benchmark.stats.stats.min / alone


@pytest.mark.parametrize(
    ("small", "large"),
    [
        ((50, 1_000), (200, 1_000)),
        ((200, 1_000), (800, 1_000)),
        ((100, 1_000), (100, 10_000)),
        ((50, 10_000), (50, 100_000)),
    ],
    ids=lambda size: f"{size[0]}x{size[1]}",
)
def test_growth(small: tuple[int, int], large: tuple[int, int], benchmark: Any) -> None:
    """The exponent of the time in variables or rows, whichever differs."""
    few, many = draw_data(*small), draw_data(*large)

    benchmark.pedantic(learn, (many, "bic"), rounds=3, warmup_rounds=1)

    ratio = benchmark.stats.stats.min / seconds(lambda: learn(few, "bic"), 10)
    growth = large[0] / small[0] * large[1] / small[1]
    benchmark.extra_info["exponent"] = math.log(ratio) / math.log(growth)


def permit(p: int, n_candidates: int) -> NDArray[np.bool_]:
    """Permit the arcs from that many random candidates into each variable."""
    rng = np.random.default_rng(n_candidates)
    keys = rng.random((p, p)) + np.eye(p)
    return np.asarray(keys <= np.sort(keys, axis=0)[n_candidates - 1])


@pytest.mark.parametrize("n_candidates", [3, 12, 48])
def test_a_search_among_permitted_arcs(n_candidates: int, benchmark: Any) -> None:
    """A thousand variables with few candidate parents each, beside laying out the data; and per arc."""
    p = 1000
    data = draw_data(p, 10_000)
    columns = prepare(data)
    none = np.zeros((p, p), dtype=np.bool_)

    def search(permitted: NDArray[np.bool_]) -> int:
        arrow = climb(columns, score="bic", ess=1.0, max_parents=4, permitted=permitted, required=none)
        return int(arrow.sum())

    benchmark.pedantic(search, (permit(p, n_candidates),), rounds=5, warmup_rounds=1)

    fastest = benchmark.stats.stats.min
    benchmark.extra_info["ratio_to_prepare"] = fastest / seconds(lambda: prepare(data), 5)
    twice_as_many = permit(p, 2 * n_candidates)
    benchmark.extra_info["growth_with_arcs"] = seconds(lambda: search(twice_as_many), 5) / fastest
