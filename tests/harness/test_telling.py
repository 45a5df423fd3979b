"""What a plan tells of the truth: how much, which part of it, and how much of that is wrong."""

from __future__ import annotations

import itertools
from collections import Counter
from fractions import Fraction
from typing import Any

import networkx as nx
import numpy as np
import pytest
from scipy import stats

from generators.graph import Graph
from generators.streams import digest
from harness.knowledge import Knowledge
from harness.plan.telling import rounded, sentence, short_text, told

RARE = 1e-6  # the chance at which a statistical test may fail though all is well


def key(number: int) -> bytes:
    return digest("dataset", number)


def random_dag(number: int, p: int = 8, density: float = 0.35) -> Graph:
    rng = np.random.default_rng(number)
    order = rng.permutation(p)
    arrow = np.triu(rng.random((p, p)) < density, 1)
    return Graph(tuple("abcdefghijklmnopqrst"[:p]), arrow[np.ix_(order, order)])


def tell(graph: Graph, number: int = 0, **level: Any) -> Knowledge:
    known = told(graph, {"knowledge": level}, key(number))
    assert known is not None
    return known


def excluded(known: Knowledge) -> np.ndarray:
    """Give what is excluded, without the diagonal."""
    return known.excluded & ~np.eye(len(known.names), dtype=bool)


def stages_of(known: Knowledge) -> list[int]:
    """Give the stage of each variable, counted from 1, of knowledge that consists of stages."""
    ranks = excluded(known).sum(axis=1)  # how many variables stand in earlier stages
    return [sorted(set(ranks.tolist())).index(rank) + 1 for rank in ranks.tolist()]


def as_many(share: float, count: int) -> int:
    """Round half up, exactly, by fractions of what was written."""
    exact = Fraction(str(share)) * count
    return int(exact + Fraction(1, 2))  # int cuts off


# How much, and which part


def test_a_share_is_rounded_half_up_as_it_is_written() -> None:
    """Binary fractions play no part: 0.29 of 50 is 14.5 (by exact fractions)."""
    shares = [0.0, 0.05, 0.1, 0.29, 0.35, 0.5, 0.7, 0.95, 1.0, 1e-7]

    for share, count in itertools.product(shares, range(0, 300, 7)):
        assert as_many(share, count) == rounded(share, count)


def test_nothing_is_told_where_the_plan_says_nothing() -> None:
    """Without the key there is no knowledge."""
    assert told(random_dag(1), {}, key(1)) is None


@pytest.mark.parametrize("share", [0.0, 0.2, 0.5, 1.0])
def test_a_share_of_the_true_arcs_is_told(share: float) -> None:
    """As many as the rounded share says, and each a true one."""
    for number in range(30):
        graph = random_dag(number)

        arcs = tell(graph, number, arcs=share).arcs

        assert not (arcs & ~graph.arrow).any()
        assert arcs.sum() == as_many(share, graph.n_edges)


@pytest.mark.parametrize("share", [0.1, 0.5, 1.0])
def test_a_share_of_the_pairs_without_an_arc_is_excluded(share: float) -> None:
    """Ordered pairs, so the reversal of a true arc is one; all of them leave the truth alone possible."""
    for number in range(30):
        graph = random_dag(number)

        known = tell(graph, number, excluded=share)

        assert not (excluded(known) & graph.arrow).any()
        assert excluded(known).sum() == as_many(share, 8 * 7 - graph.n_edges)


@pytest.mark.parametrize("kind", ["arcs", "excluded"])
def test_a_higher_share_contains_a_lower_one(kind: str) -> None:
    """Statements come in a random order of which a share is the beginning."""
    for number in range(20):
        graph = random_dag(number)
        marks = [excluded(tell(graph, number, **{kind: share})) for share in (0.1, 0.4, 0.8, 1.0)]

        for less, more in itertools.pairwise(marks):
            assert not (less & ~more).any()


def test_kinds_are_drawn_apart_and_datasets_are_too() -> None:
    """Exclusions and stages leave the arcs told as they are; another dataset has arcs of its own."""
    graph = random_dag(3)
    alone = tell(graph, 3, arcs=0.5).arcs

    assert np.array_equal(alone, tell(graph, 3, arcs=0.5, excluded=0.5, stages=True).arcs)
    assert np.array_equal(alone, tell(graph, 3, arcs=0.5).arcs)
    assert any(not np.array_equal(alone, tell(graph, other, arcs=0.5).arcs) for other in range(4, 9))


def test_every_arc_is_as_likely_to_be_told() -> None:
    """One of a dozen arcs told to 1,500 datasets: equal shares (chi-square, false alarms below 1e-6)."""
    graph = Graph(tuple("abcdefg"), np.triu(np.ones((7, 7), dtype=bool), 1))  # 21 arcs
    counts = Counter(tuple(np.argwhere(tell(graph, n, arcs=0.04).arcs)[0].tolist()) for n in range(1500))

    assert len(counts) == 21
    assert stats.chisquare(list(counts.values())).pvalue > RARE


def test_stages_are_the_generations_of_the_truth() -> None:
    """As networkx finds them."""
    for number in range(30):
        graph = random_dag(number)
        generations = nx.topological_generations(graph.to_networkx())
        expected = {name: i for i, names in enumerate(generations, start=1) for name in names}

        assert [expected[name] for name in graph.names] == stages_of(tell(graph, number, stages=True))


@pytest.mark.parametrize(
    ("waves", "sizes"), [(2, [4, 4]), (3, [3, 3, 2]), (5, [2, 2, 2, 1, 1]), (9, [1] * 8)]
)
def test_waves_are_of_equal_size_and_in_the_order_of_the_arcs(waves: int, sizes: list[int]) -> None:
    """Eight variables in K waves; no arc of the truth leads back."""
    for number in range(30):
        graph = random_dag(number)

        stage = stages_of(tell(graph, number, stages=waves))

        assert [stage.count(wave) for wave in range(1, len(sizes) + 1)] == sizes
        assert all(stage[x] <= stage[y] for x, y in np.argwhere(graph.arrow).tolist())


def test_waves_of_variables_without_arcs_are_any_with_the_same_chance() -> None:
    """Three variables, three waves, 1,500 datasets: six orders (chi-square, false alarms below 1e-6)."""
    graph = Graph.from_edges("abc")
    counts = Counter(tuple(stages_of(tell(graph, n, stages=3))) for n in range(1500))

    assert len(counts) == 6
    assert stats.chisquare(list(counts.values())).pvalue > RARE


# How much of it is wrong


@pytest.mark.parametrize("wrong", [0.05, 0.2, 0.5, 1.0])
def test_a_share_of_the_arcs_told_is_wrong(wrong: float) -> None:
    """As many arcs as without, the share of them no arcs of the truth, the others among those told anyway."""
    for number in range(20):
        graph = random_dag(number)
        right = tell(graph, number, arcs=0.6).arcs

        arcs = tell(graph, number, arcs=0.6, wrong=wrong).arcs

        assert arcs.sum() == right.sum()
        assert (arcs & ~graph.arrow).sum() == as_many(wrong, int(right.sum()))
        assert not (arcs & graph.arrow & ~right).any()


def test_true_arcs_told_go_one_by_one_as_more_is_wrong() -> None:
    """What is still told right at a higher share was told at every lower one."""
    graph = random_dag(2)
    marks = [tell(graph, 2, arcs=0.8, wrong=wrong).arcs for wrong in (0.0, 0.1, 0.3, 0.6, 0.9)]

    for less, more in itertools.pairwise(marks):
        assert not (more & graph.arrow & ~less).any()
        assert not (less & ~graph.arrow & ~more).any()


def test_true_arcs_told_at_a_higher_share_contain_those_at_a_lower_one_whatever_is_wrong() -> None:
    """Replacing takes the last ones told."""
    graph = random_dag(4)
    marks = [tell(graph, 4, arcs=share, wrong=0.3).arcs for share in (0.2, 0.5, 0.8, 1.0)]

    for less, more in itertools.pairwise(marks):
        assert not (less & graph.arrow & ~more).any()


def test_a_share_of_the_exclusions_told_is_wrong() -> None:
    """They exclude true arcs, none of which is told to be there."""
    for number in range(20):
        graph = random_dag(number)
        n_told = as_many(0.3, 8 * 7 - graph.n_edges)

        known = tell(graph, number, excluded=0.3, wrong=0.2)

        assert excluded(known).sum() == n_told
        assert (excluded(known) & graph.arrow).sum() == min(as_many(0.2, n_told), graph.n_edges)


def test_true_exclusions_are_those_told_anyway() -> None:
    """Going from nothing wrong to something replaces, and moves nothing else."""
    graph = random_dag(5)
    right = excluded(tell(graph, 5, excluded=0.5))

    known = excluded(tell(graph, 5, excluded=0.5, wrong=0.2))

    assert not (known & ~graph.arrow & ~right).any()


@pytest.mark.parametrize("stages", [True, 3])
def test_a_share_of_the_variables_stands_in_a_wrong_stage(stages: Any) -> None:
    """Of eight variables two stand in another stage, all others in their own: such an order explains all.

    Found by trying every two variables in every two other stages.
    """
    for number in range(20):
        graph = random_dag(number, density=0.5)
        right = stages_of(tell(graph, number, stages=stages))

        told_backward = excluded(tell(graph, number, stages=stages, wrong=0.25))

        explanations = 0
        for x, y in itertools.combinations(range(8), 2):
            for at_x, at_y in itertools.product(range(1, max(right) + 1), repeat=2):
                moved = np.array(right)
                moved[[x, y]] = at_x, at_y
                if at_x != right[x] and at_y != right[y]:
                    explanations += np.array_equal(np.greater.outer(moved, moved), told_backward)
        assert explanations > 0


def test_everything_told_is_free_of_contradiction() -> None:
    """All kinds at once, much of it wrong: completing it raises nothing, and no told arc is excluded."""
    n_wrong = 0
    for number in range(60):
        graph = random_dag(number, density=0.2 + 0.01 * number)

        known = tell(graph, number, arcs=0.6, excluded=0.4, stages=(True, 2, 4)[number % 3], wrong=0.5)

        assert nx.is_directed_acyclic_graph(Graph(known.names, known.arcs).to_networkx())
        assert not (known.arcs & known.excluded).any()
        n_wrong += int((known.arcs & ~graph.arrow).sum())

    assert n_wrong > 60


def test_fewer_are_wrong_where_nothing_wrong_is_possible() -> None:
    """All that is no arc is excluded, so none of it can be told; all arcs are told, so none be excluded."""
    graph = random_dag(6)

    known = tell(graph, 6, arcs=1.0, excluded=1.0, wrong=0.5)

    assert np.array_equal(graph.arrow, known.arcs)
    assert np.array_equal(~graph.arrow, known.excluded)


def test_stages_of_a_graph_without_arcs_are_one_and_never_wrong() -> None:
    """There is no other stage to stand in."""
    assert not excluded(tell(Graph.from_edges("abc"), stages=True, wrong=1.0)).any()


def test_every_possible_wrong_arc_is_as_likely() -> None:
    """The one arc of three variables, told wrong, is any of five pairs (chi-square, as above)."""
    graph = Graph.from_edges("abc", [("a", "b")])
    counts = Counter(
        tuple(np.argwhere(tell(graph, n, arcs=1.0, wrong=1.0).arcs)[0].tolist()) for n in range(1200)
    )

    assert set(counts) == set(itertools.permutations(range(3), 2)) - {(0, 1)}
    assert stats.chisquare(list(counts.values())).pvalue > RARE


def test_every_arc_is_as_likely_to_be_excluded() -> None:
    """One of three arcs in each of 1,200 datasets (chi-square, false alarms below 1e-6)."""
    graph = Graph.from_edges("abcd", [("a", "b"), ("b", "c"), ("c", "d")])
    counts = Counter(
        tuple(np.argwhere(excluded(tell(graph, n, excluded=1 / 9, wrong=1.0)))[0].tolist())
        for n in range(1200)
    )

    assert set(counts) == {(0, 1), (1, 2), (2, 3)}
    assert stats.chisquare(list(counts.values())).pvalue > RARE


# Files, words


def test_what_a_file_says_is_told_as_it_stands() -> None:
    """Right or wrong, to every dataset."""
    graph = Graph.from_edges("abc", [("a", "b")])
    said = {"statements": {"arcs": [["b", "c"]], "stages": [["a"], ["b", "c"]]}}

    known, again = (told(graph, {"knowledge": said}, key(number)) for number in (1, 2))

    assert known is not None
    assert again is not None
    assert np.argwhere(known.arcs).tolist() == np.argwhere(again.arcs).tolist() == [[1, 2]]


def test_levels_have_a_short_text_and_a_sentence() -> None:
    """Tables show the keys, sentences say what they mean."""
    level = {"arcs": 0.2, "excluded": 0.1, "stages": 3, "wrong": 0.05}
    said = {"statements": {"arcs": [["b", "c"]], "stages": [["a"], ["b", "c"]]}}

    assert short_text(level) == "arcs 0.2, excluded 0.1, stages 3, wrong 0.05"
    assert sentence([{"knowledge": level}, {"knowledge": said}]) == (
        "Told to learners beforehand: 20 % of the true arcs, 10 % of the arcs that are not there, as "
        "excluded, stages in 3 waves, 5 % of each wrong; or arcs from a file (1), stages from a file (2)."
    )
    assert sentence([{}, {}]) is None
