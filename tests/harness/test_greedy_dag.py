"""Hill climbing against a plain search that scores every legal move afresh, and against exact power."""

from __future__ import annotations

import functools
import itertools
import math
from collections.abc import Iterable, Iterator, Sequence

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.special import gammaln, xlogy
from scipy.stats import binomtest

from generators.dataset import Dataset, code_dtype
from generators.errors import InputError
from generators.graph import Graph
from generators.topologies.random_order import draw_along_random_order
from harness.counts import prepare
from harness.family_scores import Score, family_score, network_score
from harness.knowledge import Knowledge
from harness.learners import greedy_dag
from harness.learners.greedy_dag import hill_climbing, megabytes
from harness.learners.greedy_search import climb, tie_width
from harness.learners.specification import call, specification_of
from harness.records import Declined

SCORES: tuple[Score, ...] = ("bic", "aic", "bdeu", "k2")
Arrow = NDArray[np.bool_]


def as_data(codes: NDArray[np.integer], cardinalities: Sequence[int]) -> Dataset:
    """Wrap codes, shape (n, p), with states named by their numbers."""
    names = tuple(f"x{j + 1}" for j in range(len(cardinalities)))
    states = tuple(tuple(map(str, range(r))) for r in cardinalities)
    return Dataset(names, states, codes.astype(code_dtype(max(cardinalities, default=1))))


def draw_data(
    cardinalities: Sequence[int], n: int, rng: np.random.Generator, *, mean: float = 1.5
) -> Dataset:
    """Draw rows from a random network: arcs along the order of the variables, Dirichlet CPTs."""
    p = len(cardinalities)
    codes = np.zeros((n, p), dtype=np.int64)
    for j, r in enumerate(cardinalities):
        parents = np.flatnonzero(rng.random(j) < 2 * mean / max(p - 1, 1))[:3]
        _, joint = (
            np.unique(codes[:, parents], axis=0, return_inverse=True)
            if len(parents)
            else (0, np.zeros(n, int))
        )
        rows = rng.dirichlet(np.full(r, 0.5), size=max(n, 1))[joint.reshape(-1)]
        codes[:, j] = (rng.random(n)[:, None] > rows.cumsum(axis=1)[:, :-1]).sum(axis=1)
    order = rng.permutation(p)
    return as_data(codes[:, order], [cardinalities[j] for j in order])


class PlainSearch:
    """Hill climbing without any cleverness: every legal move is listed, scored and compared."""

    def __init__(
        self,
        data: Dataset,
        score: Score,
        ess: float,
        max_parents: int,
        permitted: Arrow | None = None,
        required: Arrow | None = None,
    ) -> None:
        self.data, self.max_parents = data, max_parents
        self.permitted = ~no_arcs(data) if permitted is None else permitted
        self.required = no_arcs(data) if required is None else required
        self.score = functools.cache(
            lambda y, parents: family_score(
                data, data.names[y], [data.names[x] for x in parents], score=score, ess=ess
            )
        )

    def moves(self, arrow: Arrow) -> Iterator[tuple[float, Arrow]]:
        """List the legal moves in order: the gain of each, and the graph it leads to."""
        p = len(arrow)
        for x, y in itertools.permutations(range(p), 2):
            if arrow[x, y]:
                candidates = [{(x, y): False}, {(x, y): False, (y, x): True}]
            elif not arrow[y, x]:
                candidates = [{(x, y): True}]
            else:
                continue
            for changes in candidates:
                new = arrow.copy()
                for arc, present in changes.items():
                    new[arc] = present
                if (new & ~arrow & ~self.permitted).any() or (self.required & ~new).any():
                    continue
                if new.sum(axis=0).max() <= self.max_parents and is_acyclic(new):
                    yield self.total(new, {x, y}) - self.total(arrow, {x, y}), new

    def total(self, arrow: Arrow, variables: set[int]) -> float:
        """Add up the scores of some variables' families."""
        return sum(self.score(y, tuple(np.flatnonzero(arrow[:, y]).tolist())) for y in sorted(variables))

    def climb(self, arrow: Arrow) -> Arrow:
        """Make the first of the best moves, until none gains."""
        width = tie_width(self.data.n_rows)
        while True:
            moves = list(self.moves(arrow))
            greatest = max((gain for gain, _ in moves), default=0.0)
            if greatest <= width:
                return arrow
            arrow = next(new for gain, new in moves if gain >= greatest - width)


def is_acyclic(arrow: Arrow) -> bool:
    """Whether repeatedly taking away the variables without parents leaves none."""
    left = np.ones(len(arrow), dtype=np.bool_)
    while left.any():
        sources = left & ~arrow[left].any(axis=0)
        if not sources.any():
            return False
        left &= ~sources
    return True


def no_arcs(data: Dataset) -> Arrow:
    """Return the empty graph."""
    return np.zeros((data.n_variables,) * 2, dtype=np.bool_)


def unused_rng() -> np.random.Generator:
    """Give a generator to a search that draws nothing."""
    return np.random.default_rng(0)


# The same search, done plainly ------------------------------------------------------------------------


@pytest.mark.parametrize("score", SCORES)
@settings(max_examples=25)
@given(
    st.lists(st.integers(1, 5), min_size=1, max_size=6),
    st.sampled_from([0, 1, 2, 5, 30, 200, 1000]),
    st.integers(1, 4),
    st.booleans(),
    st.integers(0, 2**32),
)
def test_the_search_ends_where_a_plain_one_does(
    score: Score, cardinalities: list[int], n: int, max_parents: int, has_copy: bool, seed: int
) -> None:
    """For every score, with exact ties or without, the graph is that of the plain search."""
    rng = np.random.default_rng(seed)
    data = draw_data(cardinalities, n, rng)
    if has_copy:  # a column and its copy tie in every move
        codes = np.concatenate([data.codes, data.codes[:, :1]], axis=1)
        data = as_data(codes, [*data.cardinalities.tolist(), int(data.cardinalities[0])])
    plain = PlainSearch(data, score, 2.0, max_parents)

    graph = hill_climbing(data, score=score, ess=2.0, max_parents=max_parents, rng=unused_rng())

    assert np.array_equal(plain.climb(no_arcs(data)), graph.arrow)


@pytest.mark.parametrize("score", SCORES)
@pytest.mark.parametrize("seed", range(3))
def test_larger_searches_end_where_a_plain_one_does(score: Score, seed: int) -> None:
    """With 18 variables of 2 to 6 states, where searches delete and reverse too, the graphs are the same."""
    rng = np.random.default_rng([10, seed])
    data = draw_data(rng.integers(2, 7, 18).tolist(), 1500, rng, mean=2.5)
    plain = PlainSearch(data, score, 1.0, 3)

    graph = hill_climbing(data, score=score, max_parents=3, rng=unused_rng())

    assert np.array_equal(plain.climb(no_arcs(data)), graph.arrow)


@pytest.mark.parametrize(
    ("seed", "score", "max_parents"), [(15, "k2", 3), (37, "aic", 3), (153, "bdeu", 3), (352, "aic", 2)]
)
def test_additions_that_a_deletion_makes_legal_are_seen(seed: int, score: Score, max_parents: int) -> None:
    """Where a path goes, arcs against it become legal; here the best next move is one of them."""
    # Found by comparing with a search that forgets to look again: it differs in 71 of 9,000 such cases.
    rng = np.random.default_rng(seed)
    p = int(rng.integers(8, 16))
    data = draw_data(rng.integers(2, 4, p).tolist(), int(rng.choice([50, 150, 400])), rng, mean=2.5)
    plain = PlainSearch(data, score, 1.0, max_parents)

    graph = hill_climbing(data, score=score, max_parents=max_parents, rng=unused_rng())

    assert np.array_equal(plain.climb(no_arcs(data)), graph.arrow)


@pytest.mark.parametrize("score", SCORES)
@pytest.mark.parametrize("cardinalities", [(2, 60, 2, 60, 3, 60), (17, 2, 3, 17, 4, 2), (255, 2, 255, 3)])
def test_many_states_do_not_change_the_search(score: Score, cardinalities: tuple[int, ...]) -> None:
    """Variables without planes, and tables too large to keep, lead to the graph of the plain search."""
    rng = np.random.default_rng(11)
    data = draw_data(cardinalities, 300, rng)
    plain = PlainSearch(data, score, 1.0, 4)

    graph = hill_climbing(data, score=score, rng=unused_rng())

    assert np.array_equal(plain.climb(no_arcs(data)), graph.arrow)


@pytest.mark.slow
def test_more_than_255_states_do_not_change_the_search() -> None:
    """Sixteen-bit codes lead to the graph of the plain search."""
    rng = np.random.default_rng(12)
    data = draw_data((300, 2, 3, 700, 2), 2000, rng)

    for score in SCORES:
        plain = PlainSearch(data, score, 1.0, 4)
        graph = hill_climbing(data, score=score, rng=unused_rng())

        assert np.array_equal(plain.climb(no_arcs(data)), graph.arrow)


@pytest.mark.parametrize("score", SCORES)
@settings(max_examples=15)
@given(st.integers(1, 9), st.integers(2, 5), st.integers(0, 2**32))
def test_restarts_keep_the_best_of_plain_searches(score: Score, p: int, restarts: int, seed: int) -> None:
    """With restarts the answer is the best of the searches from no arcs and from the drawn sparse graphs."""
    rng = np.random.default_rng(seed)
    data = draw_data(rng.integers(2, 4, p).tolist(), 300, rng, mean=2.5)
    plain = PlainSearch(data, score, 1.0, 2)
    starts = [no_arcs(data)]
    draws = np.random.default_rng(seed)
    for _ in range(restarts):
        mean = min(1.0, (p - 1) / 2)
        starts.append(draw_along_random_order(p, mean_parents=mean, max_parents=2, rng=draws))
    ends = [plain.climb(start) for start in starts]
    totals = [plain.total(end, set(range(p))) for end in ends]
    best, best_total = ends[0], totals[0]
    for end, total in zip(ends, totals, strict=True):
        if total > best_total + tie_width(300):
            best, best_total = end, total

    graph = hill_climbing(
        data, score=score, max_parents=2, restarts=restarts, rng=np.random.default_rng(seed)
    )

    assert np.array_equal(best, graph.arrow)


@pytest.mark.parametrize("score", SCORES)
def test_the_answer_is_a_local_optimum_of_network_score(score: Score) -> None:
    """No legal move raises `network_score`, and no search from random starts ends lower than without them."""
    rng = np.random.default_rng(15)
    data = draw_data(rng.integers(2, 4, 15).tolist(), 800, rng)
    plain = PlainSearch(data, score, 1.0, 4)

    graph = hill_climbing(data, score=score, rng=unused_rng())
    restarted = hill_climbing(data, score=score, restarts=5, rng=np.random.default_rng(16))

    assert max(gain for gain, _ in plain.moves(graph.arrow)) <= tie_width(800)
    reached = network_score(data, graph, score=score)
    assert reached == pytest.approx(plain.total(graph.arrow, set(range(15))), rel=1e-12)
    assert network_score(data, restarted, score=score) >= reached - tie_width(800)


# Knowledge, and arcs that are permitted -----------------------------------------------------------------


def draw_arcs(p: int, share: float, max_parents: int, rng: np.random.Generator) -> Arrow:
    """Draw a DAG: each arc along a random order with a probability, unless its target is full."""
    order = rng.permutation(p)
    arrow = np.zeros((p, p), dtype=np.bool_)
    for i, j in itertools.combinations(range(p), 2):
        if rng.random() < share and arrow[:, order[j]].sum() < max_parents:
            arrow[order[i], order[j]] = True
    return arrow


def draw_knowledge(
    names: tuple[str, ...], shares: tuple[float, float], max_parents: int, rng: np.random.Generator
) -> Knowledge:
    """Draw arcs that are known, and some of the others that are excluded."""
    arcs = draw_arcs(len(names), shares[0], max_parents, rng)
    excluded = (rng.random(arcs.shape) < shares[1]) & ~arcs & ~np.eye(len(names), dtype=np.bool_)
    as_pairs = [[(names[x], names[y]) for x, y in np.argwhere(matrix)] for matrix in (arcs, excluded)]
    return Knowledge.of(names, arcs=as_pairs[0], excluded=as_pairs[1])


def admitted(drawn: Arrow, known: Knowledge, max_parents: int) -> Arrow:
    """Take the known arcs, then those of a drawn DAG that may join them, in order of source and target."""
    graph = nx.from_numpy_array(known.arcs, create_using=nx.DiGraph)
    for x, y in itertools.product(range(len(drawn)), repeat=2):
        is_new = drawn[x, y] and not known.excluded[x, y] and not graph.has_edge(x, y)
        if is_new and graph.in_degree(y) < max_parents and not nx.has_path(graph, y, x):
            graph.add_edge(x, y)
    return np.asarray(nx.to_numpy_array(graph, nodelist=range(len(drawn))), dtype=np.bool_)


@pytest.mark.parametrize("score", SCORES)
@settings(max_examples=40)
@given(
    st.lists(st.integers(1, 5), min_size=1, max_size=7),
    st.sampled_from([0, 2, 30, 200, 1000]),
    st.integers(1, 4),
    st.sampled_from([0.0, 0.2, 0.5, 0.8]),
    st.sampled_from([0.0, 0.15, 0.5]),
    st.integers(0, 2**32),
)
def test_with_some_arcs_permitted_and_some_required_the_search_ends_where_a_plain_one_does(
    score: Score, cardinalities: list[int], n: int, max_parents: int, left_out: float, told: float, seed: int
) -> None:
    """Whatever arcs are permitted or required, in one direction or both, the graph is the plain search's."""
    rng = np.random.default_rng(seed)
    data = draw_data(cardinalities, n, rng, mean=2.0)
    permitted = rng.random((data.n_variables,) * 2) >= left_out
    required = draw_arcs(data.n_variables, told, max_parents, rng)
    plain = PlainSearch(data, score, 2.0, max_parents, permitted | required, required)

    arrow = climb(
        prepare(data),
        score=score,
        ess=2.0,
        max_parents=max_parents,
        permitted=permitted,
        required=required,
    )

    assert np.array_equal(plain.climb(required), arrow)


@pytest.mark.parametrize("score", SCORES)
@pytest.mark.parametrize("seed", range(3))
def test_larger_searches_among_permitted_arcs_end_where_a_plain_one_does(score: Score, seed: int) -> None:
    """With 20 variables and a third of the arcs permitted, some told against the data, the graphs agree."""
    rng = np.random.default_rng([30, seed])
    data = draw_data(rng.integers(2, 6, 20).tolist(), 1200, rng, mean=2.5)
    permitted = rng.random((20, 20)) < 1 / 3
    required = draw_arcs(20, 0.05, 3, rng)
    plain = PlainSearch(data, score, 1.0, 3, permitted | required, required)

    arrow = climb(prepare(data), score=score, ess=1.0, max_parents=3, permitted=permitted, required=required)

    assert np.array_equal(plain.climb(required), arrow)


@pytest.mark.parametrize("score", SCORES)
@settings(max_examples=25)
@given(
    st.integers(1, 9),
    st.integers(0, 4),
    st.integers(1, 3),
    st.tuples(st.sampled_from([0.0, 0.1, 0.4]), st.sampled_from([0.0, 0.2, 0.6])),
    st.integers(0, 2**32),
)
def test_knowledge_is_in_every_search(
    score: Score, p: int, restarts: int, max_parents: int, shares: tuple[float, float], seed: int
) -> None:
    """Told arcs are there and excluded ones not; with restarts the answer is the best of plain searches."""
    rng = np.random.default_rng(seed)
    data = draw_data(rng.integers(2, 4, p).tolist(), 300, rng, mean=2.5)
    known = draw_knowledge(data.names, shares, max_parents, rng)
    plain = PlainSearch(data, score, 1.0, max_parents, ~known.excluded, known.arcs)
    starts = [known.arcs]
    draws = np.random.default_rng(seed)
    for _ in range(restarts):
        drawn = draw_along_random_order(
            p,
            mean_parents=min(1.0, (p - 1) / 2),
            max_parents=max(1, min(max_parents, p - 1)),
            rng=draws,
        )
        starts.append(admitted(drawn, known, max_parents))
    ends = [plain.climb(start) for start in starts]
    totals = [plain.total(end, set(range(p))) for end in ends]
    best, best_total = ends[0], totals[0]
    for end, total in zip(ends, totals, strict=True):
        if total > best_total + tie_width(300):
            best, best_total = end, total

    graph = hill_climbing(
        data,
        score=score,
        max_parents=max_parents,
        restarts=restarts,
        knowledge=known,
        rng=np.random.default_rng(seed),
    )

    assert (known.arcs <= graph.arrow).all()
    assert not (known.excluded & graph.arrow).any()
    assert np.array_equal(best, graph.arrow)


def test_random_starts_accord_with_knowledge(monkeypatch: pytest.MonkeyPatch) -> None:
    """Every start is a DAG with all told arcs, no excluded one and few enough parents, by the stated rule."""
    collected: list[Arrow] = []

    def collect(*_: object, starts: Iterable[Arrow], required: Arrow, **__: object) -> Arrow:
        collected.extend(starts)
        return required

    monkeypatch.setattr(greedy_dag, "climb", collect)
    rng = np.random.default_rng(39)
    n_cut = 0
    for seed in range(200):
        p, max_parents = int(rng.integers(2, 12)), int(rng.integers(1, 4))
        data = as_data(np.zeros((1, p), dtype=np.int64), (2,) * p)
        known = draw_knowledge(data.names, (0.15, 0.2), max_parents, rng)
        draws = np.random.default_rng(seed)
        mean, cap = min(1.0, (p - 1) / 2), min(max_parents, p - 1)
        drawn = [draw_along_random_order(p, mean_parents=mean, max_parents=cap, rng=draws) for _ in range(3)]
        collected.clear()

        hill_climbing(
            data,
            max_parents=max_parents,
            restarts=3,
            knowledge=known,
            rng=np.random.default_rng(seed),
        )

        for raw, start in zip(drawn, collected, strict=True):
            assert is_acyclic(start)
            assert start.sum(axis=0).max() <= max_parents
            assert (known.arcs <= start).all()
            assert not (known.excluded & start).any()
            assert np.array_equal(admitted(raw, known, max_parents), start)
            n_cut += not is_acyclic(known.arcs | (raw & ~known.excluded))
    assert n_cut > 20  # cycles that no exclusion prevents did come up


@functools.cache
def all_dags(p: int) -> tuple[Arrow, ...]:
    """List every DAG on p variables."""
    pairs = list(itertools.combinations(range(p), 2))
    dags = []
    for marks in itertools.product((0, 1, 2), repeat=len(pairs)):
        arrow = np.zeros((p, p), dtype=np.bool_)
        for (x, y), mark in zip(pairs, marks, strict=True):
            arrow[x, y], arrow[y, x] = mark == 1, mark == 2
        if is_acyclic(arrow):
            dags.append(arrow)
    return tuple(dags)


@pytest.mark.parametrize("score", ["bic", "bdeu"])
@pytest.mark.parametrize(("p", "n_dags"), [(3, 25), (4, 543)])
def test_no_neighbour_that_accords_with_knowledge_scores_higher(score: Score, p: int, n_dags: int) -> None:
    """Of all DAGs that accord, none that differs in one pair of variables beats the answer."""
    # The numbers of labelled DAGs: Robinson 1973.
    assert n_dags == len(all_dags(p))
    rng = np.random.default_rng([31, p])
    n_higher = 0
    for _ in range(20):
        data = draw_data(rng.integers(2, 4, p).tolist(), 200, rng, mean=2.0)
        known = draw_knowledge(data.names, (0.2, 0.2), p - 1, rng)

        graph = hill_climbing(data, score=score, knowledge=known, rng=unused_rng())

        reached = network_score(data, graph, score=score) + tie_width(200)
        accords = False
        for other in all_dags(p):
            differs = other != graph.arrow
            if (differs | differs.T).sum() <= 2:
                is_higher = network_score(data, Graph(data.names, other), score=score) > reached
                if (known.arcs <= other).all() and not (known.excluded & other).any():
                    accords |= np.array_equal(other, graph.arrow)
                    assert not is_higher
                else:
                    n_higher += is_higher
        assert accords
    assert n_higher > 0  # the knowledge did rule out better graphs


def test_what_is_all_known_is_the_answer() -> None:
    """Where every pair is told or excluded both ways, the graph is the told one, against all evidence."""
    column = np.random.default_rng(32).integers(0, 2, 200)
    data = as_data(np.stack([column] * 4, axis=1), (2,) * 4)
    arcs = [("x4", "x2"), ("x2", "x1")]
    others = [pair for pair in itertools.permutations(data.names, 2) if pair not in arcs]
    known = Knowledge.of(data.names, arcs=arcs, excluded=others)

    for restarts in (0, 5):
        graph = hill_climbing(data, restarts=restarts, knowledge=known, rng=np.random.default_rng(33))

        assert sorted(graph.edges()) == [("x2", "x1", "directed"), ("x4", "x2", "directed")]


def test_knowledge_of_nothing_changes_nothing() -> None:
    """Told nothing, the search ends where it ends without knowledge, and draws the same starts."""
    data = draw_data([3] * 12, 300, np.random.default_rng(34), mean=2.5)

    for restarts in (0, 6):
        told, plain = np.random.default_rng(35), np.random.default_rng(35)
        expected = hill_climbing(data, restarts=restarts, max_parents=3, rng=plain)
        graph = hill_climbing(
            data, restarts=restarts, max_parents=3, knowledge=Knowledge.of(data.names), rng=told
        )

        assert expected == graph
        assert plain.random() == told.random()


def test_more_known_parents_than_are_allowed_are_declined() -> None:
    """Three known parents do not go with two at most; with three they do."""
    data = draw_data([2] * 5, 100, np.random.default_rng(36))
    known = Knowledge.of(data.names, arcs=[("x1", "x5"), ("x2", "x5"), ("x3", "x5"), ("x5", "x4")])

    with pytest.raises(Declined, match=r"^3 parents of one variable are known; at most 2 are allowed$"):
        hill_climbing(data, max_parents=2, knowledge=known, rng=unused_rng())
    graph = hill_climbing(data, max_parents=3, knowledge=known, rng=unused_rng())
    assert set(graph.parents("x5")) == {"x1", "x2", "x3"}


def test_a_search_leaves_what_it_is_given() -> None:
    """Neither the matrices of arcs nor a start are written to."""
    rng = np.random.default_rng(38)
    data = draw_data([2, 3, 2, 3], 200, rng)
    given_arcs = [rng.random((4, 4)) < 0.7, draw_arcs(4, 0.3, 2, rng), no_arcs(data)]
    given_arcs[2] |= given_arcs[1]
    copies = [matrix.copy() for matrix in given_arcs]

    climb(
        prepare(data),
        score="bic",
        ess=1.0,
        max_parents=3,
        permitted=given_arcs[0],
        required=given_arcs[1],
        starts=[given_arcs[2]],
    )

    assert all(np.array_equal(a, b) for a, b in zip(copies, given_arcs, strict=True))


# Exact answers ----------------------------------------------------------------------------------------


@functools.cache
def exact_power(n: int, w: float) -> float:
    """Return the exact probability that BIC joins two binary variables with P(agree) = (1 + w) / 2.

    By enumeration of all 2 x 2 tables of n rows: the edge raises BIC if and only if G2 > ln n.
    """
    a, b, c = (each.ravel() for each in np.meshgrid(*[np.arange(n + 1)] * 3, indexing="ij"))
    tables = np.stack([a, b, c, n - a - b - c])[:, a + b + c <= n]
    a, b, c, d = tables
    g2 = 2 * (xlogy(tables, tables).sum(axis=0) + xlogy(n, n))
    g2 -= 2 * sum(xlogy(margin, margin) for margin in (a + b, c + d, a + c, b + d))
    log_p = gammaln(n + 1) - gammaln(tables + 1).sum(axis=0)
    log_p += xlogy(a + d, (1 + w) / 4) + xlogy(b + c, (1 - w) / 4)
    return float(np.exp(log_p)[g2 > math.log(n)].sum())


@pytest.mark.parametrize(
    ("n", "w", "known", "within"),
    [
        # Exact powers, computed for this project by another program.
        (100, 0.3, 0.818960, 5e-7),
        (136, 0.3, 0.911752, 5e-7),
        (29, 0.5, 0.831984, 5e-7),
        # False edges: 400,000 Monte Carlo samples of another program, four standard errors. (The closed
        # form P(chi2_1 > ln n) is .0319.)
        (100, 0.0, 0.03437, 1.2e-3),
    ],
)
def test_the_share_of_datasets_in_which_bic_adds_an_edge_is_exact(
    n: int, w: float, known: float, within: float
) -> None:
    """Over 4,000 datasets the share with an edge agrees with the exact power (false alarms below 1e-6)."""
    power = exact_power(n, w)
    rng = np.random.default_rng([17, n])
    first = rng.integers(0, 2, (4000, n))
    second = np.where(rng.random((4000, n)) < (1 + w) / 2, first, 1 - first)

    n_edges = sum(
        hill_climbing(as_data(np.stack(pair, axis=1), (2, 2)), rng=unused_rng()).n_edges
        for pair in zip(first, second, strict=True)
    )

    assert power == pytest.approx(known, abs=within)
    assert binomtest(n_edges, 4000, power).pvalue > 1e-6


def test_a_strong_chain_is_recovered_up_to_equivalence() -> None:
    """From 20,000 rows of a chain of strong arcs the skeleton comes back without unshielded colliders."""
    rng = np.random.default_rng(18)
    codes = np.zeros((20_000, 8), dtype=np.int64)
    codes[:, 0] = rng.integers(0, 3, 20_000)
    for j in range(1, 8):
        codes[:, j] = np.where(rng.random(20_000) < 0.7, codes[:, j - 1], rng.integers(0, 3, 20_000))
    order = rng.permutation(8)
    data = as_data(codes[:, order], (3,) * 8)
    place = np.argsort(order)
    expected = np.zeros((8, 8), dtype=np.bool_)
    expected[place[:-1], place[1:]] = expected[place[1:], place[:-1]] = True

    for score in ("bic", "bdeu", "k2"):
        graph = hill_climbing(data, score=score, rng=unused_rng())

        assert np.array_equal(expected, graph.skeleton)
        if score != "k2":  # not score equivalent: it may prefer a direction
            assert graph.arrow.sum(axis=0).max() == 1


def test_rounding_stays_far_inside_the_width_of_a_tie() -> None:
    """At 300,000 rows the two directions of an arc differ by less than a tenth of `tie_width`."""
    n = 300_000
    data = as_data(np.random.default_rng(19).integers(0, (4, 4, 3), (n, 3)), (4, 4, 3))
    a, b, c = data.names

    for score in ("bic", "bdeu"):
        forth = family_score(data, b, [c, a], score=score) - family_score(data, b, [c], score=score)
        back = family_score(data, a, [c, b], score=score) - family_score(data, a, [c], score=score)

        assert abs(forth - back) < tie_width(n) / 10


# Ties, limits, input ----------------------------------------------------------------------------------


def test_ties_are_broken_by_the_order_of_the_columns() -> None:
    """Of four identical columns the first becomes the only parent of the others."""
    column = np.random.default_rng(20).integers(0, 2, 200)
    data = as_data(np.stack([column] * 4, axis=1), (2,) * 4)

    graph = hill_climbing(data, rng=unused_rng())

    assert graph.edges() == tuple((f"x{a}", f"x{b}", "directed") for a, b in ((1, 2), (1, 3), (1, 4)))


@given(st.integers(0, 2**32))
@settings(max_examples=15)
def test_names_of_states_do_not_matter(seed: int) -> None:
    """Relabelling the states of the variables leaves the graph as it is."""
    rng = np.random.default_rng(seed)
    data = draw_data([2, 3, 4, 2, 3, 5], 300, rng)
    relabelled = np.stack(
        [rng.permutation(r)[data.codes[:, j]] for j, r in enumerate(data.cardinalities.tolist())], axis=1
    )

    expected = hill_climbing(data, score="bdeu", rng=unused_rng())

    assert expected == hill_climbing(
        as_data(relabelled, data.cardinalities.tolist()), score="bdeu", rng=unused_rng()
    )


@pytest.mark.parametrize("score", SCORES)
def test_data_without_information_give_no_arcs(score: Score) -> None:
    """No rows, one row, one variable or constant columns: no arcs, with restarts or without."""
    rng = np.random.default_rng(21)
    constant = np.zeros((50, 4), dtype=np.int64)
    # BDeu can gain from arcs between constant columns that have unseen states: its formula says so.
    unseen = (1, 1, 1, 1) if score == "bdeu" else (1, 2, 3, 1)
    cases = [
        as_data(np.zeros((0, 3), dtype=np.int64), (2, 3, 2)),
        as_data(np.zeros((1, 3), dtype=np.int64), (2, 3, 2)),
        as_data(rng.integers(0, 2, (50, 1)), (2,)),
        as_data(constant, unseen),
    ]

    for data in cases:
        for restarts in (0, 3):
            graph = hill_climbing(data, score=score, restarts=restarts, rng=rng)

            assert graph.n_edges == 0


@pytest.mark.parametrize("max_parents", [1, 2, 3, 50])
def test_no_variable_has_more_parents_than_allowed(max_parents: int) -> None:
    """A variable that five others determine together gets as many parents as are allowed."""
    rng = np.random.default_rng(22)
    causes = rng.integers(0, 2, (5000, 5))
    effect = (causes.sum(axis=1) + (rng.random(5000) < 0.05)) % 7
    data = as_data(np.column_stack([causes, effect]), (2, 2, 2, 2, 2, 7))

    for restarts in (0, 4):
        graph = hill_climbing(data, score="aic", max_parents=max_parents, restarts=restarts, rng=rng)

        assert graph.is_dag
        assert graph.arrow.sum(axis=0).max() <= max_parents
    assert graph.arrow.sum(axis=0).max() == min(max_parents, 5)


def test_the_stream_decides_the_restarts_and_nothing_else() -> None:
    """The same stream gives the same graph; without restarts nothing is drawn from it."""
    data = draw_data([3] * 12, 400, np.random.default_rng(23), mean=2.0)
    rng = np.random.default_rng(24)
    before = rng.bit_generator.state

    hill_climbing(data, rng=rng)

    assert before == rng.bit_generator.state
    first, second = (hill_climbing(data, restarts=5, rng=np.random.default_rng(25)) for _ in range(2))
    assert first == second


def test_what_would_not_fit_is_declined_before_memory_is_taken() -> None:
    """Nine thousand variables would need more than a gibibyte; the refusal says how much."""
    p = 9000
    names = tuple(f"x{j}" for j in range(p))
    data = Dataset.trusted(names, (("0", "1"),) * p, np.zeros((1, p), dtype=np.uint8, order="F"))

    with pytest.raises(Declined, match="about 1,931 MB here; it takes at most 1024"):
        hill_climbing(data, rng=unused_rng())
    assert megabytes(data) == pytest.approx(25 * p * p / 2**20, rel=0.01)
    assert megabytes(data, restarts=1) == pytest.approx(30 * p * p / 2**20, rel=0.01)


def test_missing_cells_are_not_taken() -> None:
    """The harness lets the learner decline missing cells; called directly it refuses them as input."""
    data = Dataset(("a", "b"), (("0", "1"),) * 2, np.array([[0, 255], [1, 0]], dtype=np.uint8))
    specification = specification_of(hill_climbing)

    with pytest.raises(Declined, match="hill-climbing takes no missing cells"):
        call(specification, data, {}, unused_rng())
    with pytest.raises(InputError, match="'b' has missing cells"):
        hill_climbing(data, rng=unused_rng())


def test_the_specification_says_what_a_plan_may_set() -> None:
    """Settings, defaults and bounds are read from the signature."""
    specification = specification_of(hill_climbing)

    accepted = {name: (own.default, own.accepted) for name, own in specification.settings.items()}

    assert (specification.name, specification.returns, specification.directions) == (
        "hill-climbing",
        "dag",
        "class",
    )
    assert accepted == {
        "score": ("bic", "one of bic, aic, bdeu, k2"),
        "ess": (1.0, "a number above 0"),
        "max_parents": (4, "a whole number at least 1"),
        "restarts": (0, "a whole number at least 0"),
    }


@pytest.mark.parametrize(
    ("score", "arcs"),
    [
        ("bic", "12 23 24 35 36 43 45 47 48 56 67 78"),
        ("aic", "12 23 24 34 35 36 45 47 48 56 67 78"),
        ("bdeu", "12 24 35 36 43 45 47 48 56 67 78"),
        ("k2", "12 23 24 35 36 43 45 47 48 56 67 78"),
    ],
)
def test_answers_change_only_with_the_revision(score: Score, arcs: str) -> None:
    """On data that no version of numpy draws differently the graphs are those of revision 1."""
    # Not a claim about the right answer: whoever changes these graphs raises the revision.
    words = np.stack(
        [np.random.Philox(key=0, counter=[0, v, 0, 0]).random_raw(2000) for v in range(8)], axis=1
    )
    words >>= np.uint64(40)
    codes = (words % np.uint64(3)).astype(np.int64)
    choice = (words >> np.uint64(4)) & np.uint64(3)
    for j in range(1, 8):
        for k in (j - 1, j // 2):
            codes[:, j] = np.where(choice[:, j] == k % 4, codes[:, k], codes[:, j])
    data = as_data(codes, (3,) * 8)

    graph = hill_climbing(data, score=score, rng=unused_rng())

    assert specification_of(hill_climbing).revision == 1
    assert arcs == " ".join(f"{source[1]}{target[1]}" for source, target, _ in graph.edges())
