"""Blanket methods: d-separation in random DAGs, a plain Python version, knowledge, orders, edge cases."""

from __future__ import annotations

from collections.abc import Callable
from itertools import combinations

import numpy as np
import pytest
from scipy.special import chdtrc, chdtri

from generators.classes import NO_TRIPLES, cpdag, meek_rules
from generators.cpts import generate_network
from generators.dataset import Dataset, View
from generators.errors import InputError
from generators.graph import Graph
from generators.separation import markov_blanket
from generators.topologies import generate_graph
from harness.counts import count_plain, prepare
from harness.independence.critical import CriticalValues
from harness.independence.evidence import data_tests, separations_in
from harness.independence.permutation import permutation_p_value
from harness.independence.tables import independence_test
from harness.knowledge import Knowledge
from harness.learners.blankets import (
    METHODS,
    Method,
    blankets_on,
    find_blankets,
    find_neighbours,
    grow_shrink,
    iamb,
    inter_iamb,
)
from harness.learners.orientation import find_colliders

LEARNERS: dict[Method, Callable[..., Graph]] = {
    "grow-shrink": grow_shrink,
    "iamb": iamb,
    "inter-iamb": inter_iamb,
}
methods = pytest.mark.parametrize("method", LEARNERS)


def dataset_of(codes: np.ndarray, cardinalities: list[int]) -> Dataset:
    """Wrap codes, variables named v0, v1, ..."""
    dtype = np.uint8 if max(cardinalities, default=1) < 256 else np.uint16
    names = tuple(f"v{j}" for j in range(len(cardinalities)))
    states = tuple(tuple(str(s) for s in range(r)) for r in cardinalities)
    return Dataset(names, states, np.asarray(codes, dtype=dtype).reshape(-1, len(cardinalities)))


def random_dataset(seed: int) -> Dataset:
    """Draw a dataset of 5 to 9 variables: from networks, with copies and constants, or far from faithful."""
    rng = np.random.default_rng(seed)
    n, p = int(rng.choice([10, 60, 200, 1000, 4000])), int(rng.integers(5, 10))
    if seed % 2 == 1:
        codes = rng.integers(0, 2, (n, p))
        for j in range(2, p):
            a, b, c = codes[:, rng.integers(0, j, 3)].T
            codes[:, j] = np.where(rng.random(n) < 0.3, codes[:, j], (a ^ b) & c | (seed % 4 == 1) & a)
        return dataset_of(codes, [2] * p)
    mean_parents = float(rng.choice([1.0, 1.5]))
    graph = generate_graph("random-order", variables=p, mean_parents=mean_parents, max_parents=3, rng=rng)
    data = generate_network(graph, states="2-3", concentration=0.5, rng=rng).sample(n, rng=rng)
    if seed % 4 == 0:
        codes = np.array(data.codes)
        codes[:, 0] = 0
        codes[:, 1] = np.minimum(codes[:, 2], len(data.states[1]) - 1)
        data = Dataset(data.names, data.states, codes)
    return data


def random_dag(rng: np.random.Generator) -> Graph:
    """Draw a DAG of 3 to 12 variables over a random order; pairs are arcs with probability .1 to .7."""
    p = int(rng.integers(3, 13))
    arcs = np.triu(rng.random((p, p)) < rng.choice([0.1, 0.2, 0.3, 0.5, 0.7]), 1)
    order = rng.permutation(p)
    return Graph(tuple(f"v{j}" for j in range(p)), np.ascontiguousarray(arcs[np.ix_(order, order)]))


def random_strengths(p: int, rng: np.random.Generator) -> np.ndarray:
    """Draw the order in which variables are taken; a third of the strengths agree."""
    upper = np.triu(rng.integers(0, 3, (p, p)) * rng.random((p, p)), 1)
    return upper + upper.T


def true_knowledge(dag: Graph, rng: np.random.Generator) -> Knowledge:
    """Tell a random share of the arcs, of the arcs that are not there, and up to three stages in time."""
    names, p = dag.names, dag.n_variables
    told = dag.arrow & (rng.random((p, p)) < rng.choice([0, 0.2, 0.5]))
    gone = ~dag.arrow & (rng.random((p, p)) < rng.choice([0, 0.2, 0.6])) & ~np.eye(p, dtype=bool)
    order = [v for v in dag.order() if rng.random() < 0.8]
    cuts = np.sort(rng.integers(0, len(order) + 1, int(rng.integers(0, 3))))
    stages = [[names[v] for v in part] for part in np.split(np.array(order, dtype=int), cuts)]
    return Knowledge.of(
        names,
        arcs=[(names[x], names[y]) for x, y in np.argwhere(told)],
        excluded=[(names[x], names[y]) for x, y in np.argwhere(gone)],
        stages=stages,
    )


def blankets_of(dag: Graph) -> np.ndarray:
    """Return the true blankets, [x, y] for y in the blanket of x."""
    members = [markov_blanket(dag, name) for name in dag.names]
    return np.array([[name in own for name in dag.names] for own in members])


class TestSeparations:
    """With d-separation in the true DAG in place of tests, nothing is missed and nothing is added."""

    @pytest.mark.parametrize("seeds", [range(200), pytest.param(range(200, 4000), marks=pytest.mark.slow)])
    def test_blankets_and_class(self, seeds: range) -> None:
        """Every blanket is the true one and every graph the CPDAG, for each method and random orders.

        In theory they must be: a variable outside of a blanket that is not independent given what is in
        is never missing (composition), one inside is removed exactly if it is not needed (Margaritis and
        Thrun 1999; Tsamardinos, Aliferis and Statnikov 2003, from memory).
        """
        n_spouses = 0
        for seed in seeds:
            rng = np.random.default_rng(seed)
            dag = random_dag(rng)
            evidence = separations_in(dag, random_strengths(dag.n_variables, rng))
            blankets, target = blankets_of(dag), cpdag(dag)
            n_spouses += int((blankets & ~dag.arrow & ~dag.arrow.T).sum())

            for method in LEARNERS:
                assert np.array_equal(blankets, find_blankets(evidence, method))
                assert target == blankets_on(evidence, dag.names, method)
        assert n_spouses > len(seeds)

    @pytest.mark.parametrize("seeds", [range(200), pytest.param(range(200, 4000), marks=pytest.mark.slow)])
    def test_with_true_knowledge(self, seeds: range) -> None:
        """With arcs, exclusions and stages of the true DAG, blankets stay the true ones.

        The graph is the CPDAG with what is known directed in it, and all that follows (Meek 1995).
        """
        n_more_directed = n_spouses_excluded = 0
        for seed in seeds:
            rng = np.random.default_rng(seed)
            dag = random_dag(rng)
            evidence = separations_in(dag, random_strengths(dag.n_variables, rng))
            knowledge, blankets = true_knowledge(dag, rng), blankets_of(dag)
            arrow = cpdag(dag).arrow & ~knowledge.excluded
            meek_rules(arrow, NO_TRIPLES)
            n_more_directed += Graph(dag.names, arrow) != cpdag(dag)
            n_spouses_excluded += (blankets & knowledge.excluded & knowledge.excluded.T).any()

            for method in LEARNERS:
                assert np.array_equal(blankets, find_blankets(evidence, method, knowledge=knowledge))
                assert np.array_equal(
                    arrow, blankets_on(evidence, dag.names, method, knowledge=knowledge).arrow
                )
        assert n_more_directed > len(seeds) / 4
        assert n_spouses_excluded > len(seeds) / 10

    @methods
    def test_excluded_pair_of_a_chain(self, method: Method) -> None:
        """That a and c of a - b - c are not adjacent is no evidence of a collider in b."""
        evidence = separations_in(Graph.from_edges("abc", directed=[("a", "b"), ("b", "c")]))
        knowledge = Knowledge.of("abc", excluded=[("a", "c"), ("c", "a")])

        graph = blankets_on(evidence, tuple("abc"), method, knowledge=knowledge)

        assert graph.edges() == (("a", "b", "undirected"), ("b", "c", "undirected"))

    @methods
    def test_never_separated(self, method: Method) -> None:
        """An excluded pair that no set within the limit separates makes no collider of a common neighbour.

        In a -> c, a -> d, c -> b, d -> b only {c, d} separates a and b.
        """
        arcs = [("a", "c"), ("a", "d"), ("c", "b"), ("d", "b")]
        evidence = separations_in(Graph.from_edges("abcd", directed=arcs))
        knowledge = Knowledge.of("abcd", excluded=[("a", "b"), ("b", "a")])

        blankets = find_blankets(evidence, method, knowledge=knowledge)
        blankets[0, 1] = blankets[1, 0] = True  # a and b are no spouses; say that they seem to be
        skeleton = find_neighbours(evidence, blankets, knowledge=knowledge, max_conditioning=1)

        assert not skeleton.adjacent[0, 1]
        assert skeleton.separator(0, 1) == (2, 3)


class PlainBlankets:
    """The three methods in plain Python, with numpy tables and scipy quantiles, as the rules are stated."""

    def __init__(
        self,
        data: Dataset,
        method: Method,
        *,
        alpha: float,
        test: str = "g2",
        max_conditioning: int | None = None,
        knowledge: Knowledge | None = None,
        limits: dict[float, float] | None = None,
    ) -> None:
        p = data.n_variables
        self.limits = limits or {}
        self.columns, self.alpha, self.test, self.method = prepare(data), alpha, test, method
        self.most = p if max_conditioning is None else max_conditioning
        known = knowledge or Knowledge.of(data.names)
        self.told = known.arcs | known.arcs.T
        self.excluded = known.excluded & ~np.eye(p, dtype=bool)
        self.p = p
        self.strength = np.zeros((p, p))
        self.related = np.zeros((p, p), dtype=bool)
        for x, y in combinations(range(p), 2):
            self.strength[x, y] = self.strength[y, x] = self.statistic_of(x, y, ())[0]
            self.related[x, y] = self.related[y, x] = self.association(x, y, ()) > 0
        self.n_circles = self.n_removed = 0
        self.blankets = [self.blanket(x) for x in range(p)]
        self.separators: dict[tuple[int, int], tuple[int, ...]] = {}
        self.adjacent = np.zeros((p, p), dtype=bool)
        self.join_neighbours()

    def statistic_of(self, x: int, y: int, given: tuple[int, ...]) -> tuple[float, int]:
        table = count_plain(self.columns, [*given, x, y])
        result = independence_test(table.reshape(-1, *table.shape[-2:]), test=self.test)
        return round(result.statistic, 6), result.df

    def association(self, x: int, y: int, given: tuple[int, ...]) -> float:
        """Return how far the statistic is beyond its critical value, as of Wilson and Hilferty (1931)."""
        statistic, df = self.statistic_of(x, y, given)
        critical = self.limits.get(df, chdtri(df, self.alpha) if df > 0 else np.inf)
        if statistic <= critical:
            return 0.0
        return max(1e-6, np.sqrt(9 * df / 2) * ((statistic / df) ** (1 / 3) - (critical / df) ** (1 / 3)))

    def in_order(self, x: int, variables: list[int]) -> list[int]:
        """Return variables in descending order of their statistic with x."""
        return sorted(variables, key=lambda y: (-self.strength[x, y], y))

    def shrunk(self, x: int, members: list[int]) -> list[int]:
        for y in self.in_order(x, members)[::-1]:
            rest = [v for v in members if v != y]
            if not self.told[x, y] and self.association(x, y, tuple(rest)) == 0:
                members = rest
                self.n_removed += 1
        return members

    def around(self, x: int, y: int) -> set[int]:
        """Return what is dependent on y, marginally and given x."""
        related = np.flatnonzero(self.related[y]).tolist()
        return {v for v in related if v != x and self.association(v, y, (x,)) > 0}

    def blanket(self, x: int) -> list[int]:
        members = np.flatnonzero(self.told[x]).tolist()
        looked_at = set(np.flatnonzero(self.related[x])).union(*(self.around(x, y) for y in members))
        last, kept, n_added = -1, None, 0
        while True:
            others = sorted(looked_at - {x, *members})
            joining = -1
            if self.method == "grow-shrink":
                order = self.in_order(x, [*others, *([last] if last >= 0 else [])])
                at = order.index(last) if last >= 0 else -1
                order = [y for y in order[at + 1 :] + order[: at + 1] if y != last]
                joining = next((y for y in order if self.association(x, y, tuple(members)) > 0), -1)
            elif others:
                associations = [round(self.association(x, y, tuple(members)), 6) for y in others]
                if max(associations) > 0:
                    joining = others[int(np.argmax(associations))]
            if joining < 0:
                break
            members, last, n_added = [*members, joining], joining, n_added + 1
            looked_at |= self.around(x, joining)
            if self.method == "inter-iamb":
                members = self.shrunk(x, members)
                if set(members) == kept:
                    self.n_circles += 1
                    break
                if n_added in (1, 2, 4, 8, 16, 32, 64):
                    kept = set(members)
        return members if self.method == "inter-iamb" else self.shrunk(x, members)

    def join_neighbours(self) -> None:
        total = np.round(self.strength.sum(axis=1), 6)
        for x, y in combinations(range(self.p), 2):
            if y not in self.blankets[x] or x not in self.blankets[y]:
                continue
            owner = min((x, y), key=lambda v: (len(self.blankets[v]), total[v], v))
            other = x + y - owner
            members = [v for v in self.in_order(owner, self.blankets[owner]) if v != other]
            sets = [s for k in range(min(len(members), self.most) + 1) for s in combinations(members, k)]
            found = None if self.told[x, y] else next((s for s in sets if self.separates(x, y, s)), None)
            if found is not None:
                self.separators[x, y] = found
            elif not (self.excluded[x, y] and self.excluded[y, x]):
                self.adjacent[x, y] = self.adjacent[y, x] = True
        for x, y in combinations(range(self.p), 2):
            if not self.adjacent[x, y] and (x, y) not in self.separators:
                common = np.flatnonzero(self.adjacent[x] & self.adjacent[y]).tolist()
                self.separators[x, y] = tuple(common)

    def separates(self, x: int, y: int, given: tuple[int, ...]) -> bool:
        return self.association(x, y, given) == 0

    def arrow(self) -> np.ndarray:
        """Direct the skeleton by knowledge, colliders in order of their evidence, and Meek's rules."""
        colliders = [
            (x, z, y)
            for z in range(self.p)
            for x, y in combinations(np.flatnonzero(self.adjacent[z]).tolist(), 2)
            if not self.adjacent[x, y] and z not in self.separators[x, y]
        ]
        arrows = {arrow for x, z, y in colliders for arrow in ((x, z), (y, z))}

        def priority(collider: tuple[int, int, int]) -> tuple[float, ...]:
            x, z, y = collider
            if (z, x) not in arrows and (z, y) not in arrows:
                return (-1.0,)
            statistic, df = self.statistic_of(x, y, (*self.separators[x, y], z))
            return (chdtrc(df, statistic), -statistic)

        arrow = self.adjacent & ~self.excluded
        for x, z, y in sorted(colliders, key=priority):
            if arrow[x, z] and arrow[y, z]:
                arrow[z, x] = arrow[z, y] = False
        meek_rules(arrow, NO_TRIPLES)
        return arrow


def random_knowledge(data: Dataset, seed: int) -> Knowledge:
    """Tell some arcs along the order of the columns, right or not, exclude others, in two stages."""
    rng = np.random.default_rng(seed)
    pairs = list(combinations(data.names, 2))
    told = [pairs[i] for i in rng.choice(len(pairs), 2, replace=False)]
    gone = [pair for pair in pairs if pair not in told and rng.random() < 0.3]
    back = [(y, x) for x, y in pairs if rng.random() < 0.4]
    half = data.n_variables // 2
    return Knowledge.of(
        data.names, arcs=told, excluded=gone + back, stages=[data.names[:half], data.names[half:]]
    )


class TestAgainstPlain:
    """The compiled methods do what the stated rules say."""

    @pytest.mark.parametrize(
        ("settings", "n_datasets"),
        [
            ({"alpha": 0.01}, 40),
            ({"alpha": 0.05, "test": "pearson"}, 40),
            ({"alpha": 0.3}, 40),
            ({"alpha": 0.1, "max_conditioning": 1}, 20),
        ],
        ids=str,
    )
    @pytest.mark.parametrize("is_told", [False, True], ids=["nothing told", "told"])
    @methods
    def test_same_at_every_step(
        self, method: Method, settings: dict[str, float | str | int], n_datasets: int, is_told: bool
    ) -> None:
        """Blankets, skeleton, separating sets and directions are the plain version's."""
        n_edges = n_one_sided = n_separated = n_removed = 0
        for seed in range(n_datasets):
            data = random_dataset(seed)
            knowledge = random_knowledge(data, seed) if is_told else None
            plain = PlainBlankets(data, method, **settings, knowledge=knowledge)
            evidence = data_tests(data, alpha=settings["alpha"], test=settings.get("test", "g2"))

            blankets = find_blankets(evidence, method, knowledge=knowledge)
            skeleton = find_neighbours(
                evidence,
                blankets,
                knowledge=knowledge,
                max_conditioning=settings.get("max_conditioning"),
            )
            graph = LEARNERS[method](data, **settings, knowledge=knowledge)

            p = data.n_variables
            assert [set(own) for own in plain.blankets] == [set(np.flatnonzero(row)) for row in blankets]
            assert np.array_equal(plain.adjacent, skeleton.adjacent)
            assert plain.separators == {
                (x, y): skeleton.separator(x, y)
                for x, y in combinations(range(p), 2)
                if not skeleton.adjacent[x, y]
            }
            assert np.array_equal(plain.arrow(), graph.arrow)
            n_edges += graph.n_edges
            n_one_sided += int((blankets & ~blankets.T).sum())
            n_separated += int((blankets & blankets.T & ~skeleton.adjacent).sum())
            n_removed += plain.n_removed
        assert n_edges > n_datasets
        assert min(n_removed, n_one_sided, n_separated) > 3

    def test_circles_end(self) -> None:
        """Where inter-iamb goes round in circles it ends with the plain version's blankets.

        Circles are too rare to be met: so critical values are made up that rise and fall with the degrees
        of freedom, but for those of tests that condition on nothing.
        """
        n_circles = 0
        for seed in range(60):
            rng = np.random.default_rng(seed)
            sizes = [2, 2, 3, 3, 4, 4]
            data = dataset_of(rng.integers(0, sizes, (50, 6)), sizes)
            tests = data_tests(data, alpha=0.7)
            df, value = tests.critical
            made_up = np.where(df > 9, df * rng.uniform(0.2, 1.2, len(df)), value)
            made_up.flags.writeable = False
            tests = tests._replace(critical=CriticalValues(df, made_up))
            limits = dict(zip(df.tolist(), made_up.tolist(), strict=True))
            plain = PlainBlankets(data, "inter-iamb", alpha=0.7, limits=limits)

            blankets = find_blankets(tests, "inter-iamb")

            assert [set(own) for own in plain.blankets] == [set(np.flatnonzero(row)) for row in blankets]
            n_circles += plain.n_circles
        assert n_circles > 10


class TestPermutations:
    """The permutation test in place of chi-square distributions."""

    @methods
    def test_needs_random_numbers(self, method: Method) -> None:
        """Without rng it is refused."""
        data = dataset_of(np.zeros((5, 2)), [2, 2])

        with pytest.raises(InputError, match="rng is needed"):
            LEARNERS[method](data, test="permutation")

    @methods
    def test_two_variables(self, method: Method, rng: np.random.Generator) -> None:
        """Two variables are joined exactly if the permutation test of the same seed rejects."""
        n_joined = 0
        for seed in range(60):
            a = rng.integers(0, 3, 40)
            data = dataset_of(
                np.stack([a, np.where(rng.random(40) < 0.7, rng.integers(0, 3, 40), a)], 1), [3, 3]
            )
            p_value = permutation_p_value(prepare(data), 0, 1, n=199, rng=np.random.default_rng(seed))

            graph = LEARNERS[method](
                data, alpha=0.05, test="permutation", permutations=199, rng=np.random.default_rng(seed)
            )

            assert (p_value <= 0.05) == (graph.n_edges == 1)
            n_joined += graph.n_edges
        assert 5 < n_joined < 55

    @methods
    def test_collider(self, method: Method, rng: np.random.Generator) -> None:
        """The collider a -> c <- b is found, and found again with the same seed."""
        a, b = rng.integers(0, 2, (2, 300))
        c = np.where(rng.random(300) < 0.1, 1 - (a | b), a | b)
        data = dataset_of(np.stack([a, b, c], axis=1), [2] * 3)

        graphs = [
            LEARNERS[method](data, test="permutation", rng=np.random.default_rng(seed)) for seed in (1, 1)
        ]

        assert graphs[0] == graphs[1]
        assert graphs[0].edges() == (("v0", "v2", "directed"), ("v1", "v2", "directed"))


class TestOrder:
    """What does not depend on the order of the columns."""

    @methods
    def test_blankets_skeleton_and_colliders(self, method: Method) -> None:
        """Permuting columns and relabelling states renames blankets, skeleton and colliders."""
        rng = np.random.default_rng(7)
        n_edges = 0
        for seed in range(40):
            own = np.random.default_rng(seed)
            graph = generate_graph("random-order", variables=12, mean_parents=1.5, max_parents=3, rng=own)
            data = generate_network(graph, states="2-3", concentration=1.0, rng=own).sample(500, rng=own)
            view = View.draw(data.cardinalities.tolist(), rng)
            results = []
            for table in (data, view.mask(data)):
                evidence = data_tests(table, alpha=0.05)
                blankets = find_blankets(evidence, method)
                skeleton = find_neighbours(evidence, blankets)
                results.append((blankets, skeleton.adjacent, find_colliders(evidence, skeleton)[0]))
            (blankets, adjacent, colliders), (other_blankets, other_adjacent, other_colliders) = results

            index = np.ix_(view.columns, view.columns)
            assert np.array_equal(blankets[index], other_blankets)
            assert np.array_equal(adjacent[index], other_adjacent)
            triples = [
                {(z, frozenset((x, y))) for x, z, y in rows.tolist()}
                for rows in (colliders, view.columns[other_colliders])
            ]
            assert triples[0] == triples[1]
            n_edges += int(adjacent.sum()) // 2
        assert n_edges > 40

    @methods
    def test_rows(self, method: Method, rng: np.random.Generator) -> None:
        """The order of the rows does not matter, and the data are left as they were."""
        data = random_dataset(3)
        before = data.codes.copy()
        shuffled = Dataset(data.names, data.states, data.codes[rng.permutation(data.n_rows)])

        assert LEARNERS[method](data) == LEARNERS[method](shuffled)
        assert np.array_equal(before, data.codes)


@methods
class TestEdgeCases:
    """Data of no help, or too large for any table."""

    @pytest.mark.parametrize("n", [0, 1, 10])
    @pytest.mark.parametrize("p", [1, 2, 5])
    def test_few_rows_and_columns(self, method: Method, n: int, p: int, rng: np.random.Generator) -> None:
        """Independent columns of at most ten rows give no edge at 1e-6, which no such table reaches."""
        data = dataset_of(rng.integers(0, 2, (n, p)), [2] * p)

        assert LEARNERS[method](data, alpha=1e-6).n_edges == 0

    def test_two_copies(self, method: Method) -> None:
        """Two identical columns are joined."""
        column = np.arange(100) % 3

        assert LEARNERS[method](dataset_of(np.stack([column, column], axis=1), [3, 3])).n_edges == 1

    def test_three_copies(self, method: Method) -> None:
        """Of three copies each explains the others: each blanket has one, and at most one edge is left."""
        column = np.arange(100) % 3
        data = dataset_of(np.stack([column] * 3, axis=1), [3] * 3)

        assert find_blankets(data_tests(data, alpha=0.01), method).sum(axis=1).tolist() == [1, 1, 1]
        assert LEARNERS[method](data).n_edges <= 1

    def test_constants_have_no_edge(self, method: Method, rng: np.random.Generator) -> None:
        """A variable that shows or has one state only has no edge."""
        codes = np.stack([np.zeros(50), rng.integers(0, 2, 50), np.zeros(50)], axis=1)

        assert LEARNERS[method](dataset_of(codes, [1, 2, 2]), alpha=0.5).n_edges == 0

    def test_limit_on_separating_sets(self, method: Method) -> None:
        """With nothing to condition on, those in each other's blanket stay joined if they are dependent."""
        data = next(data for seed in range(1, 99) if (data := random_dataset(seed)).n_rows == 4000)
        evidence = data_tests(data, alpha=0.01)
        blankets = find_blankets(evidence, method)

        graph = LEARNERS[method](data, max_conditioning=0)

        related = PlainBlankets(data, method, alpha=0.01).related
        assert np.array_equal(blankets & blankets.T & related, graph.arrow | graph.arrow.T)

    def test_states_without_number(self, method: Method, rng: np.random.Generator) -> None:
        """Columns in which every row has a state of its own need no table."""
        codes = np.stack([rng.permutation(500) * 100 for _ in range(5)], axis=1)

        assert LEARNERS[method](dataset_of(codes, [60_000] * 5)).n_edges == 0

    def test_many_variables(self, method: Method, rng: np.random.Generator) -> None:
        """200 variables, some of 255 states, constant, copied or with states never seen, get an answer."""
        codes = rng.integers(0, 2, (500, 200))
        codes[:, 1:10] = codes[:, :1]
        codes[:, 10:20] = 0
        sizes = [255 if j % 7 == 0 else 1 if 10 <= j < 15 else 2 + j % 3 for j in range(200)]
        codes[:, ::7] = rng.integers(0, 255, (500, 29))

        graph = LEARNERS[method](dataset_of(codes, sizes))

        assert graph.n_variables == 200


def test_every_method_has_a_learner() -> None:
    """The methods that find blankets are the learners of those names."""
    assert list(METHODS) == list(LEARNERS)
