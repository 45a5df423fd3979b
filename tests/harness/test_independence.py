"""Tests of independence: published tables, scipy, and compiled against plain."""

from __future__ import annotations

import math
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import chi2, chi2_contingency, norm

from generators.dataset import Dataset
from generators.errors import InputError
from harness.counts import count_plain, prepare
from harness.independence.critical import (
    attainable_critical_values,
    critical_values,
    deviates_beyond,
)
from harness.independence.statistics import (
    conditional_statistics,
    dependent_pairs,
    pair_statistics,
    statistic_ceilings,
)
from harness.independence.tables import independence_test

# Berkeley admissions 1973 (Bickel, Hammel and O'Connell, Science 187, 1975, 398-404; counts by department
# as listed in a University of Toronto course handout, which also prints the marginal statistics). Axes:
# department A to F; men, women; admitted, rejected. The other statistics below were recomputed from these
# counts with scipy, those given department also by a Poisson log-linear fit.
BERKELEY = np.array(
    [
        [[512, 313], [89, 19]],
        [[353, 207], [17, 8]],
        [[120, 205], [202, 391]],
        [[138, 279], [131, 244]],
        [[53, 138], [94, 299]],
        [[22, 351], [24, 317]],
    ]
)


def dataset_of(codes: np.ndarray, cardinalities: list[int]) -> Dataset:
    """Wrap codes, variables named v0, v1, ..."""
    dtype = np.uint8 if max(cardinalities, default=1) < 256 else np.uint16
    names = tuple(f"v{j}" for j in range(len(cardinalities)))
    states = tuple(tuple(str(s) for s in range(r)) for r in cardinalities)
    return Dataset(names, states, np.asarray(codes, dtype=dtype).reshape(-1, len(cardinalities)))


def dataset_from_table(table: np.ndarray) -> Dataset:
    """Make the dataset that has exactly these counts, one variable per axis."""
    cells = np.argwhere(table >= 0)
    return dataset_of(np.repeat(cells, table.ravel(), axis=0), list(table.shape))


class TestPlain:
    """The public test on a table."""

    def test_berkeley_marginal(self) -> None:
        """Sex and admission: G2 93.4494 and X2 92.2053 on 1 df, as printed in a course handout."""
        table = BERKELEY.sum(axis=0)[np.newaxis]

        g2 = independence_test(table)
        x2 = independence_test(table, test="pearson")

        assert (round(g2.statistic, 4), g2.df) == (93.4494, 1)
        assert (round(x2.statistic, 4), x2.df) == (92.2053, 1)

    @pytest.mark.parametrize(
        ("department", "x2", "g2"),
        [
            (0, 17.2480, 19.0540),
            (1, 0.2537, 0.2586),
            (2, 0.7535, 0.7510),
            (3, 0.2980, 0.2979),
            (4, 1.0011, 0.9904),
            (5, 0.3841, 0.3836),
        ],
    )
    def test_berkeley_by_department(self, department: int, x2: float, g2: float) -> None:
        """Each department has its known statistics (recomputed from the published counts)."""
        table = BERKELEY[department : department + 1]

        statistics = [independence_test(table, test=test).statistic for test in ("pearson", "g2")]

        assert [x2, g2] == [round(statistic, 4) for statistic in statistics]

    @pytest.mark.parametrize(
        ("axes", "g2", "x2", "df"),
        [
            # The axes conditioned on, then the two tested.
            (((0,), 1, 2), 21.7355, 19.9384, 6),  # admission and sex given department
            (((1,), 0, 2), 783.6070, 715.2958, 10),  # admission and department given sex
            (((2,), 0, 1), 1148.9009, 1015.7067, 10),  # sex and department given admission
            (((), 0, 1), 1220.6148, 1068.3717, 5),
            (((), 0, 2), 855.3209, 778.9065, 5),
        ],
    )
    def test_berkeley_log_linear(
        self, axes: tuple[tuple[int, ...], int, int], g2: float, x2: float, df: int
    ) -> None:
        """Conditional and marginal tests equal the deviances of the log-linear models."""
        conditioned, x, y = axes
        summed = tuple({0, 1, 2} - {*conditioned, x, y})
        table = BERKELEY.transpose(*summed, *conditioned, x, y)
        table = table.sum(axis=0)[np.newaxis] if summed else table

        results = [independence_test(table, test=test) for test in ("g2", "pearson")]

        assert [(g2, df), (x2, df)] == [(round(result.statistic, 4), result.df) for result in results]

    def test_given_department_p_value(self) -> None:
        """Admission and sex given department: p = .00135 (G2) and .00284 (X2) on 6 df."""
        p_values = [independence_test(BERKELEY, test=test).p_value for test in ("g2", "pearson")]

        assert [round(p, 5) for p in p_values] == [0.00135, 0.00284]

    def test_equals_scipy(self, rng: np.random.Generator) -> None:
        """One stratum without empty margins has scipy's statistic, df and p-value."""
        for _ in range(50):
            table = rng.integers(0, 9, rng.integers(2, 6, 2)) + 1

            g2 = independence_test(table[np.newaxis])
            x2 = independence_test(table[np.newaxis], test="pearson")

            for result, how in ((g2, "log-likelihood"), (x2, "pearson")):
                oracle = chi2_contingency(table, lambda_=how, correction=False)
                assert oracle.dof == result.df
                assert result.statistic == pytest.approx(oracle.statistic, abs=1e-9)
                assert result.p_value == pytest.approx(oracle.pvalue, rel=1e-9)

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    def test_strata_add_up(self, test: str, rng: np.random.Generator) -> None:
        """The statistic of several strata is the sum over them, and so are the degrees of freedom."""
        table = rng.integers(0, 20, (7, 3, 4))

        whole = independence_test(table, test=test)
        parts = [independence_test(table[c : c + 1], test=test) for c in range(7)]

        assert whole.statistic == pytest.approx(sum(part.statistic for part in parts))
        assert whole.df == 7 * 2 * 3

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    @pytest.mark.parametrize(
        "table",
        [
            np.zeros((1, 2, 2), dtype=int),
            np.array([[[7, 5], [0, 0]]]),
            np.array([[[7, 0], [3, 0]]]),
            np.array([[[7, 5], [0, 0]], [[0, 4], [0, 2]]]),
        ],
    )
    def test_zero_margin(self, test: str, table: np.ndarray) -> None:
        """A margin with one state seen gives the statistic 0 and p = 1, on nominal degrees of freedom."""
        result = independence_test(table, test=test)

        assert (0.0, len(table), 1.0) == (result.statistic, result.df, result.p_value)

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    def test_one_state(self, test: str) -> None:
        """A variable of one declared state has 0 degrees of freedom and p = 1."""
        result = independence_test(np.array([[[3, 4, 5]]]), test=test)

        assert (result.statistic, result.df, result.p_value) == (0.0, 0, 1.0)

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    def test_unseen_states_count_in_df_only(self, test: str) -> None:
        """States and strata that no row shows raise the degrees of freedom, not the statistic."""
        seen = np.array([[[10, 3], [2, 9]]])
        padded = np.zeros((3, 3, 4), dtype=int)
        padded[1, :2, 1:3] = seen[0]

        plain, result = independence_test(seen, test=test), independence_test(padded, test=test)

        assert result.statistic == pytest.approx(plain.statistic)
        assert result.df == 3 * 2 * 3

    @pytest.mark.parametrize(
        "table",
        [
            np.zeros((2, 2), dtype=int),
            np.zeros((0, 2, 2), dtype=int),
            np.full((1, 2, 2), -1),
            np.ones((1, 2, 2)),
        ],
    )
    def test_bad_table(self, table: np.ndarray) -> None:
        """Tables of another shape, and what is no count, are refused."""
        with pytest.raises(InputError, match="a table must hold counts on three axes"):
            independence_test(table)

    def test_bad_test(self) -> None:
        """An unknown test is refused with the accepted ones."""
        with pytest.raises(InputError, match="test must be one of g2, pearson, got 'g'"):
            independence_test(np.ones((1, 2, 2), dtype=int), test="g")  # type: ignore[arg-type]
        with pytest.raises(InputError, match="test must be one of g2, pearson, got 'g'"):
            pair_statistics(prepare(dataset_of(np.zeros((2, 2)), [2, 2])), "g")  # type: ignore[arg-type]


class TestCriticalValues:
    """Quantiles, and which of them a learner needs."""

    @pytest.mark.parametrize("alpha", [1e-12, 0.01, 0.05, 0.5, 0.999])
    def test_equal_scipy(self, alpha: float) -> None:
        """Critical values are scipy.stats.chi2's quantiles, for any degrees of freedom."""
        df = np.array([1, 2, 3, 6, 30, 1000, 10**6, 10**9])

        values = critical_values(alpha, df)

        np.testing.assert_allclose(values, chi2.isf(alpha, df), rtol=1e-9)

    def test_no_freedom(self) -> None:
        """Nothing is significant on 0 degrees of freedom."""
        assert [np.inf] == critical_values(0.05, np.array([0])).tolist()

    @pytest.mark.parametrize("alpha", [0.0, 1.0, -1.0, 2.0])
    def test_bad_alpha(self, alpha: float) -> None:
        """A level outside (0, 1) is refused."""
        with pytest.raises(InputError, match="strictly between 0 and 1"):
            critical_values(alpha, np.array([1]))

    def test_attainable_are_complete(self) -> None:
        """Every df of a test whose critical value is below the ceiling is listed with its exact value."""
        sizes, ceiling, alpha = [2, 3, 5, 7, 1], 150.0, 0.01
        expected = set()
        for a in sizes:
            for b in sizes:
                for c in sizes:
                    for d in sizes:
                        df = (a - 1) * (b - 1) * c * d
                        if df > 0 and chi2.isf(alpha, df) < ceiling:
                            expected.add(df)

        found = attainable_critical_values(alpha, np.array(sizes), ceiling)

        assert expected <= set(found.df.tolist())
        np.testing.assert_allclose(found.value, chi2.isf(alpha, found.df), rtol=1e-9)
        assert (np.diff(found.df) > 0).all()
        assert found.value[-1] < 2 * ceiling

    def test_many_states_stay_small(self) -> None:
        """The list is bounded by the ceiling, however many states and variables there are."""
        found = attainable_critical_values(0.01, np.arange(1, 256), 20_000.0)

        assert found.df[-1] < 33_000


class TestDeviates:
    """How far a statistic is beyond its critical value."""

    @pytest.mark.parametrize(("df", "error"), [(1, 0.13), (2, 0.1), (6, 0.06), (24, 0.02), (96, 0.01)])
    def test_close_to_exact(self, df: int, error: float) -> None:
        """The difference of the normal deviates of p-value and level, both from scipy, within the error."""
        for p_value in (0.03, 1e-2, 1e-4, 1e-8):
            found = deviates_beyond.py_func(chi2.isf(p_value, df), chi2.isf(0.05, df), df)

            assert found == pytest.approx(norm.isf(p_value) - norm.isf(0.05), rel=error)


def plain_statistic(data: Dataset, x: int, y: int, given: list[int], test: str) -> float:
    """Compute a statistic with numpy alone."""
    table = count_plain(prepare(data), [*given, x, y])
    return independence_test(table.reshape(-1, *table.shape[-2:]), test=test).statistic


@st.composite
def datasets(draw: st.DrawFn) -> Dataset:
    """Draw small datasets of 2 to 5 variables with unequal, partly unseen states."""
    cardinalities = draw(st.lists(st.integers(1, 5), min_size=2, max_size=5))
    cardinalities[:2] = draw(st.sampled_from([cardinalities[:2], [17, 3], [3, 40], [20, 30]]))
    n = draw(st.sampled_from([0, 1, 2, 10, 63, 64, 65, 200]))
    generator = np.random.default_rng(draw(st.integers(0, 2**32)))
    seen = [draw(st.integers(1, r)) for r in cardinalities]
    codes = np.stack([generator.integers(0, r, n) for r in seen], axis=1)
    if draw(st.booleans()):
        codes[:, 1] = codes[:, 0] % seen[1]
    return dataset_of(codes, cardinalities)


class TestCompiled:
    """The kernels that learners use give what the plain test gives."""

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    @given(data=datasets())
    def test_conditional(self, test: str, data: Dataset) -> None:
        """Given all other variables, the compiled statistic is the plain one."""
        columns = prepare(data)
        others = list(range(2, data.n_variables))

        [found], [df] = conditional_statistics(columns, [(0, 1)], [others], test)

        sizes = data.cardinalities.tolist()
        assert found == pytest.approx(plain_statistic(data, 0, 1, others, test), abs=1e-8)
        assert math.prod([sizes[0] - 1, sizes[1] - 1, *sizes[2:]]) == df

    def test_several_at_once(self, rng: np.random.Generator) -> None:
        """Each pair is answered given its own variables, none included."""
        data = dataset_of(rng.integers(0, 3, (100, 5)), [3, 4, 3, 5, 3])
        questions = [((0, 1), [2, 3]), ((4, 2), []), ((3, 1), [4])]

        statistics, _ = conditional_statistics(prepare(data), *zip(*questions))

        expected = [plain_statistic(data, x, y, given, "g2") for (x, y), given in questions]
        assert statistics.tolist() == pytest.approx(expected)

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    @given(data=datasets())
    def test_pairs(self, test: str, data: Dataset) -> None:
        """The statistics of all pairs are the plain ones, in a symmetric array with diagonal 0."""
        found = pair_statistics(prepare(data), test)

        p = data.n_variables
        expected = np.zeros((p, p))
        for i in range(p):
            for j in range(p):
                expected[i, j] = plain_statistic(data, i, j, [], test) if i != j else 0
        np.testing.assert_allclose(found, expected, rtol=0, atol=1e-8)

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    @given(data=datasets())
    def test_ceilings(self, test: str, data: Dataset) -> None:
        """No statistic, conditional or not, exceeds the smaller ceiling of its two variables."""
        columns = prepare(data)
        ceilings = statistic_ceilings(columns, test)

        for others in ([], list(range(2, data.n_variables))):
            assert plain_statistic(data, 0, 1, others, test) <= min(ceilings[:2]) + 1e-8

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    def test_ceilings_are_reached(self, test: str) -> None:
        """Two copies of a variable reach their ceiling: 2 n H for G2, n (r - 1) for X2."""
        codes = np.repeat([0, 1, 2], [30, 20, 10])
        data = dataset_of(np.stack([codes, codes], axis=1), [4, 4])

        ceilings = statistic_ceilings(prepare(data), test)

        expected = 2 * (30 * np.log(2) + 20 * np.log(3) + 10 * np.log(6)) if test == "g2" else 60 * 2
        assert ceilings.tolist() == pytest.approx([expected, expected])
        assert plain_statistic(data, 0, 1, [], test) == pytest.approx(expected)

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    def test_huge_tables(self, test: str, rng: np.random.Generator) -> None:
        """Tables that no memory would hold have the statistic of their occurring cells."""
        n, r = 300, 60_000
        few = rng.integers(0, 3, (n, 4))
        spread = rng.permutation(r)[:3]
        codes = few.copy()
        codes[:, [0, 1, 3]] = spread[few[:, [0, 1, 3]]]
        wide = dataset_of(codes, [r, r, 3, r])

        [found], _ = conditional_statistics(prepare(wide), [(0, 1)], [[2, 3]], test)
        pair = pair_statistics(prepare(wide), test)[0, 1]

        narrow = dataset_of(few, [3, 3, 3, 3])
        assert found == pytest.approx(plain_statistic(narrow, 0, 1, [2, 3], test), abs=1e-8)
        assert pair == pytest.approx(plain_statistic(narrow, 0, 1, [], test), abs=1e-8)

    @pytest.mark.parametrize("test", ["g2", "pearson"])
    def test_berkeley(self, test: str) -> None:
        """On rows with the published counts the kernels give the published statistics."""
        columns = prepare(dataset_from_table(BERKELEY))

        marginal = pair_statistics(columns, test)[1, 2]
        [conditional], _ = conditional_statistics(columns, [(1, 2)], [[0]], test)

        expected = (93.4494, 21.7355) if test == "g2" else (92.2053, 19.9384)
        assert expected == (round(marginal, 4), round(conditional, 4))

    def test_dependent_pairs(self, rng: np.random.Generator) -> None:
        """A pair is dependent exactly if scipy's p-value is below the level."""
        hidden = rng.integers(0, 2, 400)
        is_copy = rng.random((400, 9)) < 0.25
        sizes = [2 + j % 2 for j in range(9)]
        codes = np.where(is_copy, hidden[:, np.newaxis], rng.integers(0, sizes, (400, 9)))
        columns = prepare(dataset_of(codes, sizes))

        found = dependent_pairs(pair_statistics(columns), columns.cardinalities, 0.05)

        expected = np.zeros((9, 9), dtype=bool)
        for i, j in permutations(range(9), 2):
            table = count_plain(columns, [i, j])
            oracle = chi2_contingency(table, lambda_="log-likelihood", correction=False)
            expected[i, j] = oracle.pvalue < 0.05
        assert 0 < expected.sum() < 72
        assert np.array_equal(expected, found)

    def test_constants_and_no_rows(self) -> None:
        """Constants, and everything without rows, are independent."""
        constant = prepare(dataset_of(np.array([[0, 0], [0, 1]]), [1, 2]))
        empty = prepare(dataset_of(np.empty((0, 2)), [2, 2]))

        for columns in (constant, empty):
            assert not dependent_pairs(pair_statistics(columns), columns.cardinalities, 0.999).any()
