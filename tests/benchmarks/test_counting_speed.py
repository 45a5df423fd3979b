"""How long counting takes, beside numpy's bincount of one column of as many rows."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from generators.compiled import kernel
from generators.dataset import Dataset
from harness import counts
from harness.counts import Columns, Workspace, count, count_plain, prepare, workspace

pytestmark = pytest.mark.benchmark


def seconds(function: Callable[[], Any], rounds: int = 30) -> float:
    """Return the shortest time of some calls: the one that was disturbed least."""
    times = []
    for _ in range(rounds):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return min(times)


def draw_columns(cardinalities: tuple[int, ...], n: int) -> tuple[Dataset, Columns]:
    """Draw independent uniform columns."""
    codes = np.random.default_rng(1).integers(0, cardinalities, (n, len(cardinalities))).astype(np.uint8)
    names = tuple(f"v{j}" for j in range(len(cardinalities)))
    data = Dataset(names, tuple(tuple(map(str, range(r))) for r in cardinalities), codes)
    return data, prepare(data)


@kernel
def count_children(columns: Columns, n_parents: int, space: Workspace) -> int:
    """Count every later variable within the base of the first ones, as learners do."""
    parents = np.arange(n_parents)
    r = columns.cardinalities[n_parents]
    n_parts = counts.split_planes(columns, parents, n_parents, space)
    total = 0
    for x in range(n_parents + 1, columns.codes.shape[0]):
        counts.tabulate_planes(columns, x, n_parts * r, space)
        total += space.table[0]
    return total


@pytest.mark.parametrize("n", [1_000, 10_000, 100_000, 1_000_000])
@pytest.mark.parametrize(
    "cardinalities",
    [
        (4,),
        (4, 2),
        (4, 2, 3),
        (4, 2, 3, 2),
        (4, 2, 3, 2, 4),
        (4, 4, 3, 4, 2),
        *[(2,) * k for k in range(2, 6)],
    ],
    ids=lambda cardinalities: f"k={len(cardinalities) - 1},cells={math.prod(cardinalities)}",
)
def test_one_family(cardinalities: tuple[int, ...], n: int, benchmark: Any) -> None:
    """A child with k parents, from Python; owed at 1e5 rows: .03 at k = 1, .15 at k = 3, at most .25."""
    data, columns = draw_columns(cardinalities, n)
    family = list(range(len(cardinalities)))
    column = np.ascontiguousarray(data.codes[:, 0])
    count(columns, family)

    benchmark(count, columns, family)

    fastest = benchmark.stats.stats.min
    benchmark.extra_info["ns_per_row"] = 1e9 * fastest / n
    benchmark.extra_info["ratio_to_bincount"] = fastest / seconds(lambda: np.bincount(column))
    benchmark.extra_info["ratio_to_numpy_alone"] = fastest / seconds(lambda: count_plain(columns, family))


@pytest.mark.parametrize("n", [1_000, 10_000, 100_000])
@pytest.mark.parametrize("n_parents", [0, 1, 2])
def test_families_that_share_their_parents(n_parents: int, n: int, benchmark: Any) -> None:
    """All tables of one base with 100 more variables of 2 to 4 states, per table."""
    cardinalities = (3, 3, 3, *[2, 3, 4] * 33, 2)
    data, columns = draw_columns(cardinalities[3 - n_parents - 1 :], n)
    space = workspace(columns)
    column = np.ascontiguousarray(data.codes[:, 0])
    count_children(columns, n_parents, space)

    benchmark(count_children, columns, n_parents, space)

    per_table = benchmark.stats.stats.min / 100
    benchmark.extra_info["ns_per_row_and_table"] = 1e9 * per_table / n
    benchmark.extra_info["ratio_to_bincount"] = per_table / seconds(lambda: np.bincount(column))


@pytest.mark.parametrize("n", [1_000, 100_000])
def test_laying_out(n: int, benchmark: Any) -> None:
    """Making the bit planes of 100 variables of 2 to 4 states, per variable."""
    data, _ = draw_columns((*[2, 3, 4] * 33, 2), n)
    column = np.ascontiguousarray(data.codes[:, 0])

    benchmark(prepare, data)

    per_variable = benchmark.stats.stats.min / 100
    benchmark.extra_info["ratio_to_bincount"] = per_variable / seconds(lambda: np.bincount(column))
