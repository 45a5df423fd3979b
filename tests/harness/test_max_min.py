"""Max-min hill climbing: its candidates against a plain Python version, and what the search makes of them."""

from __future__ import annotations

import math
from itertools import combinations

import numpy as np
import pytest
from scipy.stats import chi2

from generators.cpts import generate_network
from generators.dataset import Dataset
from generators.topologies import generate_graph
from harness.counts import count_plain, prepare
from harness.independence.evidence import data_tests
from harness.independence.tables import independence_test
from harness.knowledge import Knowledge
from harness.learners.greedy_dag import hill_climbing
from harness.learners.max_min import find_candidates, mmhc


def random_dataset(seed: int) -> Dataset:
    """Draw rows of a random network of 5 to 8 variables with 2 or 3 states."""
    rng = np.random.default_rng(seed)
    graph = generate_graph("random-order", variables=int(rng.integers(5, 9)), mean_parents=1.5, rng=rng)
    return generate_network(graph, states="2-3", rng=rng).sample(int(rng.choice([50, 300, 2000])), rng=rng)


class PlainCandidates:
    """MMPC in plain Python, with numpy tables and scipy quantiles."""

    def __init__(
        self, data: Dataset, alpha: float, most: int, max_cells: float, knowledge: Knowledge
    ) -> None:
        self.columns, self.alpha, self.most, self.max_cells = prepare(data), alpha, most, max_cells
        self.told = knowledge.arcs | knowledge.arcs.T
        self.absent = knowledge.excluded & knowledge.excluded.T

    def association(self, x: int, y: int, given: tuple[int, ...]) -> float:
        table = count_plain(self.columns, [*given, x, y])
        result = independence_test(table.reshape(-1, *table.shape[-2:]))
        df, limit = result.df, chi2.isf(self.alpha, result.df) if result.df else math.inf
        if result.statistic <= limit + 1e-6:
            return 0.0
        return math.sqrt(4.5 * df) * ((result.statistic / df) ** (1 / 3) - (limit / df) ** (1 / 3))

    def least(self, x: int, y: int, others: list[int]) -> float:
        sets = [s for k in range(min(len(others), self.most) + 1) for s in combinations(others, k)]
        sizes = self.columns.cardinalities
        return min(
            self.association(x, y, s) for s in sets if not s or sizes[[x, y, *s]].prod() <= self.max_cells
        )

    def of(self, x: int) -> set[int]:
        p = len(self.columns.cardinalities)
        near = np.flatnonzero(self.told[x]).tolist()
        open_ = [y for y in range(p) if y != x and y not in near and not self.absent[x, y]]
        while open_:
            values = {y: round(self.least(x, y, near), 6) for y in open_}
            open_ = [y for y in open_ if values[y] > 0]
            if open_:
                best = max(open_, key=lambda y: (values[y], -y))
                near.append(best)
                open_.remove(best)
        for y in reversed(near.copy()):
            rest = [v for v in near if v != y]
            if not self.told[x, y] and self.least(x, y, rest) == 0:
                near.remove(y)
        return set(near)


@pytest.mark.parametrize(
    ("alpha", "most", "min_per_cell"), [(0.05, 9, 0), (0.3, 9, 0), (0.2, 1, 0), (0.2, 9, 10)]
)
@pytest.mark.parametrize("is_told", [False, True])
def test_candidates_are_the_plain_ones(alpha: float, most: int, min_per_cell: float, is_told: bool) -> None:
    """The compiled candidates are those of the stated rules."""
    n_one_sided = 0
    for seed in range(40):
        data = random_dataset(seed)
        names = data.names
        knowledge = Knowledge.of(
            names,
            arcs=[(names[0], names[1])] if is_told else [],
            excluded=[(names[2], names[3]), (names[3], names[2]), (names[4], names[0])] if is_told else [],
        )
        max_cells = data.n_rows / min_per_cell if min_per_cell else math.inf
        plain = PlainCandidates(data, alpha, most, max_cells, knowledge)
        sides = [plain.of(x) for x in range(data.n_variables)]

        found = find_candidates(
            data_tests(data, alpha=alpha),
            knowledge=knowledge if is_told else None,
            max_conditioning=None if most == 9 else most,
            max_cells=max_cells,
        )

        expected = [[y in side and x in sides[y] for y in range(len(sides))] for x, side in enumerate(sides)]
        assert np.array_equal(expected, found)
        n_one_sided += sum(y in side and x not in sides[y] for x, side in enumerate(sides) for y in side)
    assert n_one_sided > 0 or alpha < 0.1


def candidates_at_defaults(data: Dataset, knowledge: Knowledge | None = None) -> np.ndarray:
    """Find the candidates with the default settings of mmhc."""
    return find_candidates(data_tests(data, alpha=0.05), knowledge=knowledge, max_cells=data.n_rows / 5)


def test_search_keeps_to_candidates() -> None:
    """All arcs join candidates, told arcs are there, and excluded ones are not."""
    for seed in range(20):
        data = random_dataset(seed)
        names = data.names
        known = Knowledge.of(names, arcs=[(names[1], names[0])], stages=[names[:3], names[3:]])

        free, bound = mmhc(data), mmhc(data, knowledge=known)

        candidates = candidates_at_defaults(data, known)
        assert not (free.skeleton & ~candidates_at_defaults(data)).any()
        assert not (bound.skeleton & ~candidates).any()
        assert bound.arrow[1, 0]
        assert not (bound.arrow & known.excluded).any()
        assert bound.is_dag


def test_dense_candidates_leave_plain_search() -> None:
    """Where every pair is a candidate, the search is hill climbing's."""
    rng = np.random.default_rng(3)
    hidden = rng.integers(0, 2, (4000, 1))
    codes = np.where(rng.random((4000, 5)) < 0.4, rng.integers(0, 2, (4000, 5)), hidden).astype(np.uint8)
    data = Dataset(tuple("abcde"), (("0", "1"),) * 5, codes)
    assert candidates_at_defaults(data).sum() == 20

    assert hill_climbing(data, rng=rng) == mmhc(data)


def test_many_candidates_and_few_rows_come_to_an_end() -> None:
    """40 variables that no testable set explains are all candidates: sets beyond those are not gone through.

    There are 2^39 of them.
    """
    rng = np.random.default_rng(8)
    hidden = rng.integers(0, 2, (100, 1))
    codes = np.where(rng.random((100, 40)) < 0.05, rng.integers(0, 2, (100, 40)), hidden).astype(np.uint8)
    data = Dataset(tuple(f"v{j}" for j in range(40)), (("0", "1"),) * 40, codes)

    found = find_candidates(data_tests(data, alpha=0.05), max_cells=100 / 13)

    assert found.sum() == 40 * 39
