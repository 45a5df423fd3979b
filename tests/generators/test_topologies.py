"""Random DAGs: their distributions, against enumeration and exact counts."""

from __future__ import annotations

from collections import Counter
from fractions import Fraction
from itertools import combinations, permutations, product
from math import comb

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binom, chisquare

from generators.errors import InputError
from generators.graph import Graph
from generators.topologies import TOPOLOGIES, expected_arcs, generate_graph, outpoint_counts

# The number of labelled DAGs on 1, 2, ... nodes: Robinson (1973), in New Directions in the Theory of
# Graphs, 239-273; OEIS A003024.
LABELLED_DAGS = [
    1,
    3,
    25,
    543,
    29281,
    3781503,
    1138779265,
    783702329343,
    1213442454842881,
    4175098976430598143,
    31603459396418917607425,
    521939651343829405020504063,
    18676600744432035186664816926721,
]
Arcs = frozenset[tuple[int, int]]


def arcs(graph: Graph) -> Arcs:
    """Return a graph's arcs by position."""
    return frozenset((i, j) for i, j in np.argwhere(graph.arrow).tolist())


def all_dags(p: int) -> list[Arcs]:
    """List every labelled DAG: all ways to leave out or direct each pair, the cyclic ones dropped."""
    pairs = list(combinations(range(p), 2))
    dags = []
    for marks in product((None, False, True), repeat=len(pairs)):
        chosen = [(j, i) if mark else (i, j) for (i, j), mark in zip(pairs, marks) if mark is not None]
        if nx.is_directed_acyclic_graph(nx.DiGraph(chosen)):
            dags.append(frozenset(chosen))
    return dags


def draw_many(topology: str, n: int, rng: np.random.Generator, **settings: float) -> list[Graph]:
    """Draw `n` graphs from one stream."""
    return [generate_graph(topology, rng=rng, **settings) for _ in range(n)]  # type: ignore[arg-type]


# --- any topology ---------------------------------------------------------------------------------


@given(st.sampled_from(sorted(TOPOLOGIES)), st.integers(4, 15), st.integers(0, 2**32))
def test_every_topology_gives_a_dag(topology: str, p: int, seed: int) -> None:
    """Whatever is drawn is directed and acyclic, over v1 .. vp, and the same for the same stream."""
    graph = generate_graph(topology, variables=p, rng=np.random.default_rng(seed))

    assert graph.is_directed
    assert nx.is_directed_acyclic_graph(graph.to_networkx())
    assert graph.names == tuple(f"v{i + 1}" for i in range(p))
    assert graph == generate_graph(topology, variables=p, rng=np.random.default_rng(seed))


@pytest.mark.parametrize("topology", sorted(TOPOLOGIES))
def test_names_do_not_change_the_graph(topology: str) -> None:
    """Given names stand for the positions and for nothing else."""
    plain = generate_graph(topology, variables=4, rng=np.random.default_rng(5))
    named = generate_graph(topology, variables=4, names="wxyz", rng=np.random.default_rng(5))

    assert named == plain.renamed("wxyz")


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"topology": "random-ordr"}, "unknown topology 'random-ordr'; .* Did you mean 'random-order'?"),
        ({"variables": 0}, "variables: must be a whole number at least 1, got 0"),
        ({"variables": 2.5}, "variables: must be a whole number at least 1, got 2.5"),
        ({"variables": True}, "variables: must be a whole number at least 1, got True"),
        ({"names": ["a", "b"]}, "names: 5 variables need as many names, got 2"),
        ({"names": ["a"] * 5}, "'a' stands more than once"),
        ({"mean_parent": 1}, "unknown setting 'mean_parent'; accepted: .* Did you mean 'mean_parents'?"),
        ({"mean_parents": -1}, "mean_parents: must be a number at least 0, got -1"),
        ({"max_parents": 0}, "max_parents: must be a whole number at least 1, got 0"),
        ({"max_parents": 2.0}, "max_parents: must be a whole number at least 1, got 2.0"),
        ({"mean_parents": 2.1}, "5 variables has at most 2 parents on average, got 2.1"),
        ({"variables": 1, "mean_parents": 0.5}, "1 variables has at most 0 parents"),
        ({"topology": "uniform", "mean_parents": 1.0}, "unknown setting 'mean_parents'; accepted: none"),
        ({"topology": "uniform", "variables": 101}, "draws at most 100, got 101; the exact counts"),
    ],
)
def test_what_cannot_be_drawn_is_refused(
    arguments: dict[str, object], message: str, rng: np.random.Generator
) -> None:
    """Each wrong argument is answered with what was found and what is accepted."""
    chosen: dict[str, object] = {"topology": "random-order", "variables": 5, **arguments}

    with pytest.raises(InputError, match=message):
        generate_graph(rng=rng, **chosen)  # type: ignore[arg-type]


def test_all_wrong_settings_are_told_at_once(rng: np.random.Generator) -> None:
    """Two wrong settings give two lines."""
    with pytest.raises(InputError) as caught:
        generate_graph("random-order", variables=5, rng=rng, mean_parents="1", max_parent=2)

    assert len(caught.value.faults) == 2


def test_numpy_numbers_are_numbers(rng: np.random.Generator) -> None:
    """Settings that come out of a numpy computation are taken like plain ones."""
    graph = generate_graph(
        "random-order", variables=np.int64(6), mean_parents=np.float32(1), max_parents=np.int32(2), rng=rng
    )

    assert graph.n_variables == 6


# --- random order ---------------------------------------------------------------------------------


@pytest.mark.parametrize("max_parents", [1, 2])
@pytest.mark.parametrize("mean_parents", [0.3, 0.6, 1.0])
def test_random_order_has_the_enumerated_distribution(mean_parents: float, max_parents: int) -> None:
    """On 3 variables each DAG is as frequent as the definition says.

    The definition is enumerated: 6 orders, 8 sets of arcs along each, and for a variable with more
    parents than the cap every choice among them. 6,000 draws; chi-square fails by chance at 1e-6.
    """
    p, n = 3, 6000
    p_arc = Fraction(mean_parents).limit_denominator(100) * 2 / (p - 1)
    exact: Counter[Arcs] = Counter()
    for order in permutations(range(p)):
        possible = list(combinations(order, 2))
        for marks in product((False, True), repeat=len(possible)):
            weight = Fraction(1, 6)
            for mark in marks:
                weight *= p_arc if mark else 1 - p_arc
            chosen = [arc for arc, mark in zip(possible, marks) if mark]
            own = [[arc for arc in chosen if arc[1] == j] for j in range(p)]
            kept = [list(combinations(each, min(len(each), max_parents))) for each in own]
            ways = list(product(*kept))
            for way in ways:
                exact[frozenset(arc for part in way for arc in part)] += weight / len(ways)
    rng = np.random.default_rng(20261201)

    seen = Counter(
        arcs(graph)
        for graph in draw_many(
            "random-order", n, rng, variables=p, mean_parents=mean_parents, max_parents=max_parents
        )
    )

    possible_dags = [dag for dag, weight in exact.items() if weight > 0]
    assert sum(exact.values()) == 1
    assert set(seen) <= set(possible_dags)
    observed = [seen[dag] for dag in possible_dags]
    assert chisquare(observed, [float(exact[dag]) * n for dag in possible_dags]).pvalue > 1e-6


def test_arcs_without_a_cap_are_binomial() -> None:
    """The number of arcs is binomial over all pairs when nothing is dropped.

    2,000 graphs of 12 variables: chi-square over the counts; fails by chance at 1e-6.
    """
    rng = np.random.default_rng(20261201)

    counts = [
        graph.n_edges
        for graph in draw_many("random-order", 2000, rng, variables=12, mean_parents=1.5, max_parents=11)
    ]

    law = binom(66, 3 / 11)
    edges = np.arange(12, 26)
    observed = np.bincount(np.clip(counts, 11, 26), minlength=27)[11:]
    expected = 2000 * np.array([law.cdf(11), *law.pmf(edges), law.sf(25)])
    assert chisquare(observed, expected).pvalue > 1e-6


@pytest.mark.parametrize("max_parents", [1, 3, 4])
def test_expected_arcs_is_the_mean_after_the_cap(max_parents: int) -> None:
    """Exact expectation by scipy's binomial law, and the mean of 1,500 draws within 5.5 standard errors.

    The variance of the count is that of independent capped binomials, one for each place in the order.
    The statement about the mean fails by chance with probability 4e-8.
    """
    p, mean_parents, n = 12, 1.5, 1500
    values = np.arange(p)
    laws = [binom.pmf(values, i, 2 * mean_parents / (p - 1)) for i in range(p)]
    capped = np.minimum(values, max_parents)
    means = [float(law @ capped) for law in laws]
    variance = sum(float(law @ capped**2) - mean**2 for law, mean in zip(laws, means))
    rng = np.random.default_rng(20261201)

    graphs = draw_many(
        "random-order", n, rng, variables=p, mean_parents=mean_parents, max_parents=max_parents
    )

    assert sum(means) == pytest.approx(
        expected_arcs(p, mean_parents=mean_parents, max_parents=max_parents), rel=1e-12
    )
    counts = np.array([graph.n_edges for graph in graphs])
    assert abs(counts.mean() - sum(means)) < 5.5 * np.sqrt(variance / n)
    assert max(int(graph.arrow.sum(axis=0).max()) for graph in graphs) == max_parents


@pytest.mark.parametrize(
    ("p", "mean_parents", "max_parents", "expected"),
    [
        (12, 1.5, 11, 18.0),  # without a cap: p times the mean
        (7, 3.0, 6, 21.0),  # the complete DAG
        (7, 3.0, 2, 11.0),  # complete, capped: 0 + 1 + 2 * 5
        (2, 0.25, 1, 0.5),  # one pair
        (1, 0.0, 3, 0.0),
        (1000, 1.2, 999, 1200.0),
    ],
)
def test_expected_arcs_in_closed_form(p: int, mean_parents: float, max_parents: int, expected: float) -> None:
    """Where the expectation has a closed form, the function gives it."""
    assert expected == pytest.approx(
        expected_arcs(p, mean_parents=mean_parents, max_parents=max_parents), rel=1e-12
    )


def test_too_many_expected_parents_are_refused() -> None:
    """The expectation is refused for the same settings as the graph."""
    with pytest.raises(InputError, match="at most 2 parents"):
        expected_arcs(5, mean_parents=3.0)


def test_every_order_is_equally_likely() -> None:
    """The complete DAG shows the order: all 24 on 4 variables, 4,800 draws, chance failure 1e-6."""
    rng = np.random.default_rng(20261201)

    orders = Counter(
        graph.order()
        for graph in draw_many("random-order", 4800, rng, variables=4, mean_parents=1.5, max_parents=3)
    )

    assert set(orders) == set(permutations(range(4)))
    assert chisquare(list(orders.values())).pvalue > 1e-6


def test_a_thousand_variables_keep_the_cap(rng: np.random.Generator) -> None:
    """A large graph is acyclic, obeys the cap, and has about the arcs it should have.

    One graph: the standard deviation is below the square root of the mean, so 6 of those fail by
    chance at less than 1e-8.
    """
    graph = generate_graph("random-order", variables=1000, mean_parents=3.0, max_parents=4, rng=rng)

    expected = expected_arcs(1000, mean_parents=3.0, max_parents=4)
    assert nx.is_directed_acyclic_graph(graph.to_networkx())
    assert int(graph.arrow.sum(axis=0).max()) == 4
    assert abs(graph.n_edges - expected) < 6 * np.sqrt(expected)


def test_no_arcs_can_be_asked_for(rng: np.random.Generator) -> None:
    """A mean of 0 gives the graph without arcs, on one variable too."""
    assert generate_graph("random-order", variables=6, mean_parents=0, rng=rng).n_edges == 0
    assert generate_graph("random-order", variables=1, mean_parents=0, rng=rng).n_edges == 0


# --- uniform --------------------------------------------------------------------------------------


def test_the_tables_count_all_labelled_dags() -> None:
    """The tables behind the uniform draw add up to Robinson's numbers."""
    assert [sum(outpoint_counts(n)) for n in range(1, 14)] == LABELLED_DAGS


@pytest.mark.parametrize("p", [1, 2, 3, 4])
def test_the_tables_count_dags_by_their_outpoints(p: int) -> None:
    """Enumeration finds as many DAGs with 1, 2, ... variables without parents as the tables say."""
    n_outpoints = Counter(p - len({child for _, child in dag}) for dag in all_dags(p))

    assert outpoint_counts(p) == tuple(n_outpoints[k] for k in range(1, p + 1))


@pytest.mark.parametrize(
    ("p", "draws"), [(2, 1000), (3, 4000), pytest.param(4, 54_300, marks=pytest.mark.slow)]
)
def test_every_dag_is_equally_likely(p: int, draws: int) -> None:
    """All 3, 25 or 543 DAGs are equally frequent; chi-square fails by chance at 1e-6."""
    rng = np.random.default_rng(20261201)

    seen = Counter(arcs(graph) for graph in draw_many("uniform", draws, rng, variables=p))

    dags = all_dags(p)
    assert len(dags) == LABELLED_DAGS[p - 1]
    assert set(seen) <= set(dags)
    assert chisquare([seen[dag] for dag in dags]).pvalue > 1e-6


def mean_and_variance_of_arcs(p: int) -> tuple[float, float]:
    """Return the exact mean and variance of the arcs of a uniform DAG.

    Robinson's recurrence with weight z for each arc, A_n(z) = sum_k (-1)^(k+1) C(n, k) (1 + z)^(k (n-k))
    A_(n-k)(z), carried with its first two derivatives at z = 1.
    """
    table = [(1, 0, 0)]
    for n in range(1, p + 1):
        value = first = second = 0
        for k in range(1, n + 1):
            a, b, c = table[n - k]
            m, sign = k * (n - k), (-1) ** (k + 1) * comb(n, k)
            w, dw, ddw = (Fraction(2) ** m, m * Fraction(2) ** (m - 1), m * (m - 1) * Fraction(2) ** (m - 2))
            value += sign * w * a
            first += sign * (w * b + dw * a)
            second += sign * (w * c + 2 * dw * b + ddw * a)
        table.append((value, first, second))
    value, first, second = table[p]
    mean = Fraction(first, 1) / value
    return float(mean), float(Fraction(second, 1) / value + mean - mean**2)


@pytest.mark.parametrize(
    ("p", "published", "draws"),
    [
        # Means by full enumeration of all DAGs on so many nodes.
        (3, 1.92, 2500),
        (4, 3.712707, 2500),
        (5, 6.021652, 2500),
        (6, 8.836867, 2500),
        (20, None, 1000),
        (60, None, 300),
    ],
)
def test_mean_arcs_of_a_uniform_dag(p: int, published: float | None, draws: int) -> None:
    """The mean number of arcs is the exact one, within 5.5 standard errors (chance failure 4e-8)."""
    mean, variance = mean_and_variance_of_arcs(p)
    rng = np.random.default_rng(20261201)

    counts = [graph.n_edges for graph in draw_many("uniform", draws, rng, variables=p)]

    assert published is None or mean == pytest.approx(published, abs=5e-7)
    assert abs(np.mean(counts) - mean) < 5.5 * np.sqrt(variance / draws)


def test_arcs_of_uniform_dags_on_five_nodes() -> None:
    """The number of arcs is distributed as in the enumeration of all 29,281 DAGs.

    2,500 draws; counts below 3 are taken together; chi-square fails by chance at 1e-6.
    """
    # DAGs on 5 nodes with 0, 1, ..., 10 arcs, by full enumeration.
    exact = np.array([1, 20, 180, 940, 3050, 6180, 7960, 6540, 3330, 960, 120])
    rng = np.random.default_rng(20261201)

    counts = [graph.n_edges for graph in draw_many("uniform", 2500, rng, variables=5)]

    observed = np.bincount(counts, minlength=11)
    together = [[each[:3].sum(), *each[3:]] for each in (observed, exact / LABELLED_DAGS[4] * 2500)]
    assert chisquare(*together).pvalue > 1e-6


def test_a_hundred_variables_can_be_drawn(rng: np.random.Generator) -> None:
    """The largest accepted number of variables gives a DAG."""
    graph = generate_graph("uniform", variables=100, rng=rng)

    assert nx.is_directed_acyclic_graph(graph.to_networkx())
