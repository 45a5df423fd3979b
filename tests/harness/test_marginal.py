"""Learners of pairs: Chow and Liu's own example, networkx and scipy."""

from __future__ import annotations

from itertools import combinations

import networkx as nx
import numpy as np
import pytest
from scipy.stats import chi2_contingency

from generators.dataset import Dataset
from harness.learners.marginal import chow_liu, pairwise
from harness.learners.specification import specification_of


def dataset_of(codes: np.ndarray, cardinalities: list[int]) -> Dataset:
    """Wrap codes, variables named v0, v1, ..."""
    dtype = np.uint8 if max(cardinalities, default=1) < 256 else np.uint16
    names = tuple(f"v{j}" for j in range(len(cardinalities)))
    states = tuple(tuple(str(s) for s in range(r)) for r in cardinalities)
    return Dataset(names, states, np.asarray(codes, dtype=dtype).reshape(-1, len(cardinalities)))


def mutual_information(first: np.ndarray, second: np.ndarray) -> float:
    """Compute the mutual information of two columns in nats, from their joint frequencies."""
    joint = np.zeros((first.max() + 1, second.max() + 1))
    np.add.at(joint, (first, second), 1 / len(first))
    independent = joint.sum(axis=1, keepdims=True) * joint.sum(axis=0, keepdims=True)
    seen = joint > 0
    return float((joint[seen] * np.log(joint[seen] / independent[seen])).sum())


def pairs_of(graph: object) -> list[tuple[str, str]]:
    """List the undirected edges as pairs of digits."""
    return [(source[1:], target[1:]) for source, target, kind in graph.edges() if kind == "undirected"]  # type: ignore[attr-defined]


# Chow and Liu, IEEE Trans. Information Theory 14(3), 1968, 462-467: example of four binary variables, the
# probabilities of 0000 to 1111 in twentieths (values from memory).
TWENTIETHS = np.array([2, 2, 1, 1, 0, 0, 2, 1, 1, 2, 0, 0, 1, 1, 3, 3])


def published_example(columns: list[int]) -> Dataset:
    """Make 20 rows with exactly the published frequencies, the variables in some order."""
    cells = np.array([[c >> 3 & 1, c >> 2 & 1, c >> 1 & 1, c & 1] for c in range(16)])
    return dataset_of(np.repeat(cells, TWENTIETHS, axis=0)[:, columns], [2] * 4)


class TestChowLiu:
    """`chow-liu`."""

    def test_published_example(self) -> None:
        """The tree is x2 - x3, x1 - x2, and x4 with the first of three tied partners, x1.

        Mutual informations .189, .079 and, of x4 with each other variable, .0051 nats: an exact tie.
        """
        assert pairs_of(chow_liu(published_example([0, 1, 2, 3]))) == [("0", "1"), ("0", "3"), ("1", "2")]

    @pytest.mark.parametrize(
        ("columns", "expected"),
        [
            ([3, 2, 1, 0], [("0", "1"), ("1", "2"), ("2", "3")]),  # x4 - x3, the first in this order
            ([1, 3, 0, 2], [("0", "1"), ("0", "2"), ("0", "3")]),  # x4 - x2
        ],
    )
    def test_tie_goes_to_the_first_pair(self, columns: list[int], expected: list[tuple[str, str]]) -> None:
        """In another column order x4 joins the variable that comes first there."""
        assert expected == pairs_of(chow_liu(published_example(columns)))

    def test_published_informations(self) -> None:
        """The example has the published mutual informations: .079, .00005, .0051, .189 (from memory)."""
        data = published_example([0, 1, 2, 3])
        found = [mutual_information(data.codes[:, i], data.codes[:, j]) for i, j in combinations(range(4), 2)]

        assert [round(i, 6) for i in found] == [0.079433, 0.000051, 0.005059, 0.188994, 0.005059, 0.005059]

    def test_greatest_tree(self) -> None:
        """On random data the tree is networkx's maximum spanning tree."""
        for seed in range(30):
            rng = np.random.default_rng(seed)
            p = int(rng.integers(2, 15))
            sizes = rng.integers(2, 20, p)
            codes = rng.integers(0, sizes, (150, p))
            codes = np.where(rng.random((150, p)) < 0.5, codes, codes[:, :1] % sizes)
            complete = nx.Graph()
            for i, j in combinations(range(p), 2):
                complete.add_edge(f"v{i}", f"v{j}", weight=mutual_information(codes[:, i], codes[:, j]))

            graph = chow_liu(dataset_of(codes, sizes.tolist()))

            expected = {frozenset(edge) for edge in nx.maximum_spanning_tree(complete).edges}
            assert expected == {frozenset(edge[:2]) for edge in graph.edges()}
            assert not graph.directed.any()

    @pytest.mark.parametrize("n", [0, 1, 10])
    def test_without_information(self, n: int) -> None:
        """Where all informations are 0 the tree still spans: all are joined to the first variable."""
        data = dataset_of(np.zeros((n, 5)), [2, 1, 3, 255, 300])

        assert pairs_of(chow_liu(data)) == [("0", "1"), ("0", "2"), ("0", "3"), ("0", "4")]

    def test_copies(self) -> None:
        """Identical columns tie exactly and form a star around the first."""
        data = dataset_of(np.repeat(np.arange(60)[:, np.newaxis] % 3, 4, axis=1), [3] * 4)

        assert pairs_of(chow_liu(data)) == [("0", "1"), ("0", "2"), ("0", "3")]

    @pytest.mark.parametrize("p", [1, 2])
    def test_few_variables(self, p: int, rng: np.random.Generator) -> None:
        """One variable has no edge, two have one."""
        assert p - 1 == chow_liu(dataset_of(rng.integers(0, 2, (10, p)), [2] * p)).n_edges

    def test_many(self, rng: np.random.Generator) -> None:
        """200 variables, some of 255 or 60,000 states, give a tree."""
        sizes = [255 if j % 5 == 0 else 60_000 if j % 17 == 0 else 2 for j in range(200)]

        graph = chow_liu(dataset_of(rng.integers(0, 2, (300, 200)), sizes))

        assert nx.is_tree(graph.to_networkx().to_undirected())

    def test_specification(self) -> None:
        """It is no baseline and returns an undirected answer as a PDAG."""
        specification = specification_of(chow_liu)

        assert (specification.name, specification.returns, specification.baseline) == (
            "chow-liu",
            "pdag",
            False,
        )


class TestPairwise:
    """`pairwise`."""

    @pytest.mark.parametrize(("test", "how"), [("g2", "log-likelihood"), ("pearson", "pearson")])
    @pytest.mark.parametrize("alpha", [0.01, 0.2])
    def test_equals_scipy(self, test: str, how: str, alpha: float, rng: np.random.Generator) -> None:
        """A pair is joined exactly if scipy's test rejects."""
        sizes = [2, 3, 4, 2, 3, 4, 20]
        codes = rng.integers(0, sizes, (500, 7))
        codes = np.where(rng.random((500, 7)) < 0.35, codes[:, :1] % sizes, codes)

        graph = pairwise(dataset_of(codes, sizes), alpha=alpha, test=test)

        expected = []
        for i, j in combinations(range(7), 2):
            table = np.zeros((sizes[i], sizes[j]))
            np.add.at(table, (codes[:, i], codes[:, j]), 1)
            if chi2_contingency(table, lambda_=how, correction=False).pvalue < alpha:
                expected.append((str(i), str(j)))
        assert 0 < len(expected) < 21
        assert expected == pairs_of(graph)

    @pytest.mark.parametrize("n", [0, 1, 10])
    @pytest.mark.parametrize("p", [1, 2, 5])
    def test_nothing_to_see(self, n: int, p: int) -> None:
        """Constant columns and empty data have no edges."""
        assert pairwise(dataset_of(np.zeros((n, p)), [2] * p), alpha=0.999).n_edges == 0

    def test_declared_states_cost_power(self) -> None:
        """Degrees of freedom count declared states: 20 rows of copies are significant on 1, not on 254^2."""
        codes = np.repeat([[0, 0], [1, 1]], 10, axis=0)

        assert pairwise(dataset_of(codes, [2, 2])).n_edges == 1
        assert pairwise(dataset_of(codes, [255, 255])).n_edges == 0

    def test_specification(self) -> None:
        """It is a baseline that returns a skeleton."""
        specification = specification_of(pairwise)

        assert (
            specification.name,
            specification.returns,
            specification.baseline,
        ) == ("pairwise", "skeleton", True)
