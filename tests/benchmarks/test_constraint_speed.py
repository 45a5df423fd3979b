"""How long the learners of independence tests take, beside counting columns with numpy.

The yardstick is np.bincount of one column of codes, once for each pair of variables: less than numpy needs
for the marginal tests alone, while `pc` also makes all the conditional ones.
"""

from __future__ import annotations

import functools
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from generators.cpts import generate_network
from generators.dataset import Dataset
from generators.topologies import generate_graph
from harness.learners.blankets import grow_shrink, iamb, inter_iamb
from harness.learners.constraint import pc
from harness.learners.marginal import chow_liu, pairwise
from harness.learners.max_min import mmhc

pytestmark = pytest.mark.benchmark


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


def record(benchmark: Any, data: Dataset) -> None:
    """Note the ratio to one np.bincount per pair of variables."""
    column = np.ascontiguousarray(data.codes[:, 0])
    n_pairs = data.n_variables * (data.n_variables - 1) // 2
    yardstick = seconds(lambda: [np.bincount(column) for _ in range(100)]) / 100
    benchmark.extra_info["ratio_to_bincount_per_pair"] = benchmark.stats.stats.min / (n_pairs * yardstick)


@pytest.mark.parametrize("mean_parents", [1.0, 1.5])
@pytest.mark.parametrize(
    ("p", "n"),
    [(20, 1_000), (200, 1_000), (1000, 1_000), (20, 10_000), (200, 10_000), (1000, 10_000), (50, 100_000)],
)
def test_pc(p: int, n: int, mean_parents: float, benchmark: Any) -> None:
    """`pc` at the level 1 % on sparse random networks; owed: 0.1 s at 200 x 1e4, 1 s at 1,000 x 1e4."""
    data = draw_dataset(p, n, mean_parents=mean_parents)
    pc(data.first(100))  # compiled before the clock starts

    graph = benchmark.pedantic(pc, (data,), rounds=5)

    record(benchmark, data)
    benchmark.extra_info["edges"] = graph.n_edges


OTHERS = {
    "pc conservative": functools.partial(pc, colliders="conservative"),
    "pc majority": functools.partial(pc, colliders="majority"),
    "pc at once": functools.partial(pc, updates="at-once"),
    "grow-shrink": grow_shrink,
    "iamb": iamb,
    "inter-iamb": inter_iamb,
    "mmhc": mmhc,
}


@pytest.mark.parametrize("method", OTHERS)
@pytest.mark.parametrize("mean_parents", [1.0, 1.5])
@pytest.mark.parametrize(
    ("p", "n"), [(20, 1_000), (200, 1_000), (1000, 1_000), (200, 10_000), (1000, 10_000), (50, 100_000)]
)
def test_beside_pc(method: str, p: int, n: int, mean_parents: float, benchmark: Any) -> None:
    """Other methods beside `pc` on the same data, all with their default settings; owed: 5 times at most."""
    data = draw_dataset(p, n, mean_parents=mean_parents)
    OTHERS[method](data.first(100))  # compiled before the clock starts
    pc(data.first(100))

    benchmark.pedantic(OTHERS[method], (data,), rounds=5)

    benchmark.extra_info["ratio_to_pc"] = benchmark.stats.stats.min / seconds(lambda: pc(data))


def test_permutations(benchmark: Any) -> None:
    """`pc` with permutation tests on the data of 20 variables and 500 rows."""
    data = draw_dataset(20, 500)
    rng = np.random.default_rng(1)
    permuting = functools.partial(pc, test="permutation", rng=rng)
    permuting(data.first(20))

    benchmark.pedantic(permuting, (data,), rounds=5)

    benchmark.extra_info["ratio_to_pc"] = benchmark.stats.stats.min / seconds(lambda: pc(data))


@pytest.mark.parametrize("method", ["pc", "iamb", "mmhc"])
@pytest.mark.parametrize(
    ("p", "n", "factor"),
    [(100, 1_000, (2, 1)), (400, 1_000, (2, 1)), (100, 1_000, (1, 4)), (100, 8_000, (1, 4))],
)
def test_growth(method: str, p: int, n: int, factor: tuple[int, int], benchmark: Any) -> None:
    """How the time grows from p x n: its exponent in the variables, or in the rows."""
    learn = {"pc": pc, **OTHERS}[method]
    small = draw_dataset(p, n)
    large = draw_dataset(factor[0] * p, factor[1] * n)
    learn(small)

    benchmark.pedantic(learn, (large,), rounds=5)

    growth = benchmark.stats.stats.min / seconds(lambda: learn(small))
    benchmark.extra_info["exponent"] = float(np.log(growth) / np.log(max(factor)))


@pytest.mark.parametrize("learn", [pairwise, chow_liu])
@pytest.mark.parametrize(("p", "n"), [(200, 10_000), (1000, 1_000)])
def test_pairs(learn: Callable[[Dataset], Any], p: int, n: int, benchmark: Any) -> None:
    """The learners that look at pairs only."""
    data = draw_dataset(p, n)
    learn(data.first(100))

    benchmark.pedantic(learn, (data,), rounds=5)

    record(benchmark, data)
