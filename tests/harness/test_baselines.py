"""The learners that do not look at the data."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom, chisquare

from generators.dataset import Dataset
from harness.learners.baselines import chance, no_arcs
from harness.learners.specification import call, specification_of


def empty_dataset(p: int) -> Dataset:
    """Make a dataset of p binary variables and no rows."""
    names = tuple(f"v{j}" for j in range(p))
    return Dataset(names, (("0", "1"),) * p, np.empty((0, p), dtype=np.uint8))


class TestNoArcs:
    """`no-arcs`."""

    @pytest.mark.parametrize("p", [1, 2, 200])
    def test_no_edges(self, p: int) -> None:
        """The graph has the data's variables and no edge."""
        data = empty_dataset(p)

        graph = no_arcs(data)

        assert (data.names, 0) == (graph.names, graph.n_edges)

    def test_specification(self) -> None:
        """It declares a DAG, is a baseline, and has no settings."""
        specification = specification_of(no_arcs)

        assert (
            specification.name,
            specification.returns,
            specification.baseline,
            len(specification.settings),
        ) == ("no-arcs", "dag", True, 0)


class TestChance:
    """`chance`."""

    @pytest.mark.parametrize("p", [1, 2, 3, 50])
    @pytest.mark.parametrize("mean_parents", [0.0, 0.3, 1.5, 100.0])
    def test_dag(self, p: int, mean_parents: float, rng: np.random.Generator) -> None:
        """Every answer is a DAG over the data's variables."""
        data = empty_dataset(p)

        answer = call(specification_of(chance), data, {"mean_parents": mean_parents}, rng)

        assert data.names == answer.graph.names
        assert answer.graph.is_dag

    def test_extremes(self, rng: np.random.Generator) -> None:
        """No parents give no arcs; more than can be give all."""
        data = empty_dataset(6)

        assert chance(data, mean_parents=0, rng=rng).n_edges == 0
        assert chance(data, mean_parents=2.5, rng=rng).n_edges == 15
        assert chance(data, mean_parents=50, rng=rng).n_edges == 15

    def test_number_of_arcs(self, rng: np.random.Generator) -> None:
        """Arcs are binomial over the p (p - 1) / 2 pairs, 1.5 per variable on average.

        Chi-square test over 4,000 draws, false-alarm rate 1e-7.
        """
        data = empty_dataset(6)

        counts = np.bincount(
            [chance(data, mean_parents=1.5, rng=rng).n_edges for _ in range(4000)], minlength=16
        )

        expected = 4000 * binom.pmf(np.arange(16), 15, 1.5 * 6 / 15)
        tails = (expected[:5].sum(), *expected[5:13], expected[13:].sum())
        observed = (counts[:5].sum(), *counts[5:13], counts[13:].sum())
        assert chisquare(observed, tails).pvalue > 1e-7

    def test_all_orders(self, rng: np.random.Generator) -> None:
        """With all pairs arcs, each of the 6 orders of 3 variables is as likely; false-alarm rate 1e-7."""
        data = empty_dataset(3)

        graphs = [chance(data, mean_parents=1, rng=rng) for _ in range(3000)]

        counts = np.unique([graph.order() for graph in graphs], axis=0, return_counts=True)[1]
        assert len(counts) == 6
        assert chisquare(counts).pvalue > 1e-7

    def test_same_stream_same_graph(self) -> None:
        """The graph is a function of the stream, and differs between streams."""
        data = empty_dataset(20)
        draws = [chance(data, rng=np.random.default_rng(seed)) for seed in (1, 1, 2)]

        assert draws[0] == draws[1]
        assert draws[0] != draws[2]

    def test_specification(self) -> None:
        """It declares a DAG, is a baseline, and takes a number of parents that is not negative."""
        specification = specification_of(chance)

        assert (specification.name, specification.returns, specification.baseline) == ("chance", "dag", True)
        assert specification.settings["mean_parents"].accepted == "a number at least 0"
