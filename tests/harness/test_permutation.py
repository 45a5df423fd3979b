"""The permutation test: against all permutations, scipy's, and its own level on sparse tables."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.stats import binomtest, permutation_test

from generators.dataset import Dataset
from generators.errors import InputError
from harness.counts import count_plain, prepare
from harness.independence.evidence import data_tests
from harness.independence.permutation import permutation_p_value, permutations_at
from harness.independence.tables import independence_test
from harness.learners.constraint import pc
from harness.learners.skeleton import find_skeleton


def dataset_of(codes: np.ndarray, cardinalities: list[int]) -> Dataset:
    """Wrap codes, variables named v0, v1, ..."""
    names = tuple(f"v{j}" for j in range(len(cardinalities)))
    states = tuple(tuple(str(s) for s in range(r)) for r in cardinalities)
    return Dataset(names, states, np.asarray(codes, dtype=np.uint8))


def g2_given(z: np.ndarray, x: np.ndarray, y: np.ndarray) -> float:
    """Compute G2 of x and y given z from their table."""
    table = np.zeros((z.max() + 1, x.max() + 1, y.max() + 1), dtype=int)
    np.add.at(table, (z, x, y), 1)
    return independence_test(table).statistic


def exact_p_value(z: np.ndarray, x: np.ndarray, y: np.ndarray) -> float:
    """Return the share of all permutations of y within the strata of z with G2 as large as the data's."""
    seen = g2_given(z, x, y)
    strata = [np.flatnonzero(z == level) for level in np.unique(z)]
    n_as_large = n = 0
    for dealt in itertools.product(*(itertools.permutations(rows) for rows in strata)):
        other = np.empty_like(y)
        for rows, order in zip(strata, dealt, strict=True):
            other[rows] = y[list(order)]
        n_as_large += g2_given(z, x, other) >= seen - 1e-9
        n += 1
    return n_as_large / n


class TestPValue:
    """The p-value."""

    @pytest.mark.parametrize("seed", range(6))
    def test_is_that_of_all_permutations(self, seed: int) -> None:
        """The share of 20,000 deals agrees with enumeration; false-alarm rate 1e-6 a case."""
        rng = np.random.default_rng(seed)
        z = np.array([0] * 5 + [1] * 4)
        x, y = rng.integers(0, 2 + seed % 2, 9), rng.integers(0, 2, 9)
        data = dataset_of(np.stack([z, x, y], axis=1), [2, 3, 2])

        found = permutation_p_value(prepare(data), 1, 2, [0], n=20_000, rng=rng)

        n_as_large = round(found * 20_001) - 1
        assert binomtest(n_as_large, 20_000, exact_p_value(z, x, y)).pvalue > 1e-6

    def test_is_that_of_scipy(self) -> None:
        """Without strata it is that of scipy's exact permutation test of pairings."""
        x = np.array([0, 0, 0, 1, 1, 2, 2, 2])
        y = np.array([0, 0, 1, 1, 1, 2, 2, 0])
        nothing = np.zeros(8, dtype=int)
        exact = permutation_test(
            (x,),
            lambda dealt: g2_given(nothing, dealt, y),
            permutation_type="pairings",
            alternative="greater",
            n_resamples=np.inf,
        ).pvalue
        columns = prepare(dataset_of(np.stack([x, y], axis=1), [3, 3]))

        found = permutation_p_value(columns, 0, 1, n=20_000, rng=np.random.default_rng(1))

        assert binomtest(round(found * 20_001) - 1, 20_000, exact).pvalue > 1e-6

    def test_depends_on_the_question_alone(self) -> None:
        """The pair in either order and the strata's variables in any order give the same deals."""
        codes = np.random.default_rng(1).integers(0, 2, (60, 4))
        columns = prepare(dataset_of(codes, [2] * 4))

        values = {
            permutation_p_value(columns, *pair, given, n=500, rng=np.random.default_rng(2))
            for pair in [(0, 3), (3, 0)]
            for given in [(1, 2), (2, 1)]
        }

        assert len(values) == 1

    def test_nothing_varies(self) -> None:
        """A variable that is constant within every stratum, or no rows, give 1."""
        codes = np.array([[0, 0, 0], [0, 0, 1], [1, 1, 0], [1, 1, 1]])
        full, empty = dataset_of(codes, [2] * 3), dataset_of(np.empty((0, 3)), [2] * 3)

        values = [
            permutation_p_value(prepare(data), 1, 2, [0], n=99, rng=np.random.default_rng(1))
            for data in (full, empty)
        ]

        assert values == [1.0, 1.0]


class TestLevel:
    """How often independence is rejected."""

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    @pytest.mark.parametrize("alpha", [0.05, 0.01])
    def test_many_rows_per_cell(self, test: str, alpha: float) -> None:
        """Given their common cause two variables are joined at the nominal rate; false alarm 1e-6."""
        rng = np.random.default_rng(5)
        n_joined = 0
        for _ in range(4000):
            z = rng.integers(0, 2, (1000, 1))
            codes = np.hstack([z, np.where(rng.random((1000, 2)) < 0.5, rng.integers(0, 2, (1000, 2)), z)])
            skeleton = find_skeleton(data_tests(dataset_of(codes, [2] * 3), alpha=alpha, test=test))
            n_joined += skeleton.adjacent[1, 2]

        assert binomtest(n_joined, 4000, alpha).pvalue > 1e-6

    def test_few_rows_per_cell(self) -> None:
        """40 rows in 4 x 3 x 3 cells: permutations keep the level of 5 %, chi-square quantiles lose it.

        False-alarm rate 1e-6. Permutations are a little conservative where deals tie.
        """
        rng = np.random.default_rng(6)
        n_joined = {"permutation": 0, "g2": 0}
        for _ in range(2000):
            z = rng.integers(0, 4, (40, 1))
            noise = rng.integers(0, 3, (40, 2))
            data = dataset_of(np.hstack([z, np.where(rng.random((40, 2)) < 0.5, noise, z % 3)]), [4, 3, 3])
            columns = prepare(data)
            table = count_plain(columns, [0, 1, 2])
            n_joined["g2"] += independence_test(table).p_value <= 0.05
            n_joined["permutation"] += permutation_p_value(columns, 1, 2, [0], n=199, rng=rng) <= 0.05

        assert binomtest(n_joined["permutation"], 2000, 0.05).pvalue > 1e-6
        assert binomtest(n_joined["g2"], 2000, 0.05).pvalue < 1e-6


class TestInLearners:
    """The test as a setting."""

    def test_finds_strong_edges(self, rng: np.random.Generator) -> None:
        """A collider with strong arcs is found from 300 rows."""
        a, b = rng.integers(0, 2, (2, 300))
        c = np.where(rng.random(300) < 0.1, 1 - (a | b), a | b)

        graph = pc(dataset_of(np.stack([a, b, c], axis=1), [2] * 3), test="permutation", rng=rng)

        assert graph.edges() == (("v0", "v2", "directed"), ("v1", "v2", "directed"))

    def test_stopping_early_changes_nothing(self) -> None:
        """A decision is that of the p-value from all deals."""
        rng = np.random.default_rng(3)
        n_joined = 0
        for seed in range(200):
            hidden = rng.integers(0, 2, (40, 1))
            codes = np.where(rng.random((40, 2)) < 0.5, rng.integers(0, 2, (40, 2)), hidden)
            data = dataset_of(codes, [2, 2])
            draw = np.random.default_rng
            value = permutation_p_value(prepare(data), 0, 1, n=99, rng=draw(seed))

            tests = data_tests(data, alpha=0.1, test="permutation", permutations=99, rng=draw(seed))
            is_joined = find_skeleton(tests).adjacent[0, 1]

            assert is_joined == (value <= 0.1)
            n_joined += is_joined
        assert 20 < n_joined < 180

    @pytest.mark.parametrize(("alpha", "least"), [(0.05, 19), (0.01, 99), (0.07, 14)])
    def test_too_few_permutations(self, alpha: float, least: int) -> None:
        """Fewer deals than could be significant are refused; as many as could are taken."""
        rng = np.random.default_rng(1)
        assert math.ceil(1 / alpha - 1e-9) - 1 == least

        assert permutations_at(alpha, least, rng).n_allowed == 0
        with pytest.raises(InputError, match=f"at least {least}"):
            permutations_at(alpha, least - 1, rng)

    def test_needs_a_stream(self) -> None:
        """Without rng there is one clear line."""
        with pytest.raises(InputError, match="rng is needed"):
            pc(dataset_of(np.zeros((4, 2)), [2, 2]), test="permutation")
